"""A whole page, file to files, against Pillow alone and against plain scripts of the same steps.

    python -m tests.benchmarks.bench_clean
    python -m tests.benchmarks.bench_clean --check  # exit status 1 if a limit is missed

Prints processor seconds of all threads, best of several turns, and the ratios that count: machines
differ and are noisy, ratios of one run are comparable. Needs OpenCV (`scanclean[bench]`) for one of
them.
"""

from __future__ import annotations

import argparse
import platform
import resource
import subprocess
import sys
import tempfile
import time
from collections.abc import Callable, Iterator
from dataclasses import dataclass
from pathlib import Path
from typing import Any

import numpy as np
from PIL import Image

from fixtures.drawn import draw
from scanclean.batches.sources import SourceFile
from scanclean.batches.work import CleanWork, PageTask
from scanclean.ledger import PALETTE, Ledger
from scanclean.recipe import Recipe
from scanclean.scans.pageio import read_ledger
from tests.benchmarks import plain_scripts

A4 = (210.0, 297.0)
FORMATS: dict[str, dict[str, Any]] = {"png": {}, "tif": {"compression": "tiff_lzw"}}

PILLOW, SCIKIT_IMAGE, OPENCV = "times Pillow", "times scikit-image", "times OpenCV"
MEMORY, CLICK = "bytes a pixel", "times click"
WITHOUT_RULES = {PILLOW: 3.0, SCIKIT_IMAGE: 1 / 4, OPENCV: 1.0, MEMORY: 16.0}
START_UP = {CLICK: 4.0}


@dataclass(frozen=True)
class Page:
    """What is drawn, and what each ratio may be at most."""

    kind: str
    options: dict[str, Any]
    limits: dict[str, float]


PAGES = {
    "typed page": Page("typed", {}, WITHOUT_RULES),
    "printed page": Page("printed", {}, {MEMORY: 16.0}),
    # 29 rules across and 6 upright ones
    "ledger of 35 rules": Page("ledger", {"row": 9.3}, {PILLOW: 6.0, MEMORY: 16.0}),
}

# in an interpreter of its own, which has all libraries loaded before the page comes
_MEMORY_SCRIPT = """
import re, sys
from pathlib import Path
import scipy.ndimage, scipy.sparse.csgraph, scipy.spatial, scipy.linalg
from tests.benchmarks.bench_clean import clean_file
def peak():  # of this process alone; ru_maxrss also knows that of its parent
    return int(re.search(r"VmHWM:\\s+(\\d+) kB", Path("/proc/self/status").read_text())[1]) * 1024
base = peak()
clean_file(Path(sys.argv[1]), Path(sys.argv[2]))
print(base, peak())
"""


def clean_file(source: Path, folder: Path) -> None:
    """What `scanclean clean` does with one page, in this process."""
    task = PageTask(SourceFile(source, source.name), 1, 1, source.stem, "0" * 64)
    CleanWork(Recipe()).do(task, folder)


def best(job: Callable[[], object], turns: int) -> float:
    """Least processor seconds of several turns, after one that warms up."""
    job()
    seconds = []
    for _ in range(turns):
        begun = time.process_time()
        job()
        seconds.append(time.process_time() - begun)
    return min(seconds)


def measure(source: Path, folder: Path, turns: int) -> tuple[float, dict[str, float]]:
    """Processor seconds of a page, and its ratios by name."""
    ours = best(lambda: clean_file(source, folder), turns)
    classes, _ = read_ledger(next(folder.glob("*.ledger.png")), PALETTE)
    page = Ledger.from_array(classes).ink.to_mask()
    pillow = best(lambda: plain_scripts.pillow_alone(source, folder, page, classes), turns)
    plain = best(lambda: plain_scripts.scikit_image(source, folder), min(turns, 2))
    ratios = {PILLOW: ours / pillow, SCIKIT_IMAGE: ours / plain}
    try:
        ratios[OPENCV] = ours / best(lambda: plain_scripts.opencv(source, folder), turns)
    except ImportError:
        print("OpenCV is not installed: pip install '.[bench]'", file=sys.stderr)
    ratios[MEMORY] = extra_memory(source, folder) / classes.size
    return ours, ratios


def extra_memory(source: Path, folder: Path) -> int:
    """Bytes at the peak of cleaning a page, over an interpreter with the libraries loaded."""
    command = [sys.executable, "-c", _MEMORY_SCRIPT, str(source), str(folder)]
    printed = subprocess.run(command, capture_output=True, check=True).stdout
    base, peak = map(int, printed.split())
    return peak - base


def start_up(turns: int) -> tuple[float, dict[str, float]]:
    """Processor seconds of `scanclean --help`, and their ratio to a bare import of click."""

    def run(*command: str) -> float:
        begun = resource.getrusage(resource.RUSAGE_CHILDREN)
        subprocess.run([sys.executable, *command], capture_output=True, check=True)
        ended = resource.getrusage(resource.RUSAGE_CHILDREN)
        return ended.ru_utime + ended.ru_stime - begun.ru_utime - begun.ru_stime

    shown = min(run("-m", "scanclean", "--help") for _ in range(turns))
    click = min(run("-c", "import click") for _ in range(turns))
    return shown, {CLICK: shown / click}


def missed(ratios: dict[str, float], limits: dict[str, float]) -> list[str]:
    """The ratios that are over their limits."""
    return [name for name, limit in limits.items() if ratios.get(name, 0.0) > limit]


def row(title: str, seconds: float, ratios: dict[str, float], limits: dict[str, float]) -> str:
    """A line of the table; a ratio over its limit is marked."""
    over = missed(ratios, limits)
    cells = []
    for name, ratio in ratios.items():
        limit = f" (at most {limits[name]:.4g})" if name in limits else ""
        cells.append(f"{ratio:.2f} {name}{limit}{' MISSED' if name in over else ''}")
    return f"{title:24}{seconds:6.3f} s   " + ", ".join(cells)


def run(size: tuple[float, float], turns: int) -> Iterator[tuple[str, list[str]]]:
    """Each row of the table with what it missed."""
    seconds, ratios = start_up(turns)
    yield row("--help", seconds, ratios, START_UP), missed(ratios, START_UP)
    with tempfile.TemporaryDirectory() as name:
        for number, (title, page) in enumerate(PAGES.items()):
            drawn = draw(page.kind, size=size, seed=3, **page.options)
            for suffix, keywords in FORMATS.items():
                source = Path(name) / f"{number}.{suffix}"
                folder = Path(name) / f"{number}-{suffix}"
                folder.mkdir()
                Image.fromarray(drawn.scan).save(source, dpi=(300, 300), **keywords)
                seconds, ratios = measure(source, folder, turns)
                line = row(f"{title}, {suffix.upper()}", seconds, ratios, page.limits)
                yield line, missed(ratios, page.limits)


def main(arguments: list[str] | None = None) -> int:
    parser = argparse.ArgumentParser(description=(__doc__ or "").splitlines()[0])
    parser.add_argument("--turns", type=int, default=5)
    parser.add_argument("--size", type=float, nargs=2, default=A4, metavar="MM")
    parser.add_argument(
        "--check", action="store_true", help="exit status 1 if a ratio is over its limit"
    )
    options = parser.parse_args(arguments)
    print(f"Python {platform.python_version()}, numpy {np.__version__}, {platform.machine()}")
    over = 0
    for line, names in run(tuple(options.size), options.turns):
        print(line, flush=True)
        over += len(names)
    return 1 if options.check and over else 0


if __name__ == "__main__":
    sys.exit(main())

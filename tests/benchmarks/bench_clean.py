"""A whole page, file to files, against Pillow alone and against plain scripts of the same steps.

    python -m tests.benchmarks.bench_clean

Prints processor seconds, best of several turns, and the ratios that count: machines differ and are
noisy, ratios of one run are comparable. Needs OpenCV (`scanclean[bench]`) for the last column.
"""

from __future__ import annotations

import os

for threads in ("OMP_NUM_THREADS", "OPENBLAS_NUM_THREADS"):
    os.environ.setdefault(threads, "1")

import argparse
import platform
import resource
import subprocess
import sys
import tempfile
import time
from collections.abc import Callable
from pathlib import Path

import numpy as np
from PIL import Image

from fixtures.drawn import draw
from scanclean.ledger import PALETTE, Ledger
from scanclean.pageio import read_ledger
from scanclean.recipe import Recipe
from scanclean.sources import SourceFile
from scanclean.work import CleanWork, PageTask
from tests.benchmarks import plain_scripts

A4 = (210.0, 297.0)
PAGES = {"typed page": ("printed", {}), "ledger": ("ledger", {})}
MEMORY = """
import resource, sys
import numpy, scipy.ndimage, scipy.sparse.csgraph, scipy.spatial, scipy.linalg, PIL.Image
import scanclean.work
base = resource.getrusage(resource.RUSAGE_SELF).ru_maxrss
from tests.benchmarks.bench_clean import clean_file
from pathlib import Path
clean_file(Path(sys.argv[1]), Path(sys.argv[2]))
print(base * 1024, resource.getrusage(resource.RUSAGE_SELF).ru_maxrss * 1024)
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


def measure(name: str, source: Path, folder: Path, turns: int) -> None:
    clean_file(source, folder)
    with Image.open(source) as image:
        pixels = image.width * image.height
    classes, _ = read_ledger(next(folder.glob("*.ledger.png")), PALETTE)
    page = Ledger.from_array(classes).ink.to_mask()
    ours = best(lambda: clean_file(source, folder), turns)
    pillow = best(lambda: plain_scripts.pillow_alone(source, folder, page, classes), turns)
    plain = best(lambda: plain_scripts.scikit_image(source, folder), 1)
    row = f"{name:24} {ours:6.3f} s   Pillow x {ours / pillow:5.2f}   scikit-image / {plain / ours:5.2f}"
    try:
        other = best(lambda: plain_scripts.opencv(source, folder), turns)
        row += f"   OpenCV x {ours / other:5.2f}"
    except ImportError:
        row += "   OpenCV not installed"
    memory = [sys.executable, "-c", MEMORY, str(source), str(folder)]
    base, peak = map(int, subprocess.run(memory, capture_output=True, check=True).stdout.split())
    print(f"{row}   {(peak - base) / pixels:5.1f} bytes a pixel", flush=True)


def start_up(turns: int) -> None:
    def run(*command: str) -> float:
        begun = resource.getrusage(resource.RUSAGE_CHILDREN)
        subprocess.run([sys.executable, *command], capture_output=True, check=True)
        ended = resource.getrusage(resource.RUSAGE_CHILDREN)
        return ended.ru_utime + ended.ru_stime - begun.ru_utime - begun.ru_stime

    help_ = min(run("-m", "scanclean", "--help") for _ in range(turns))
    click = min(run("-c", "import click") for _ in range(turns))
    print(f"scanclean --help {help_:.3f} s, x {help_ / click:.2f} of a bare import of click")


def main() -> None:
    parser = argparse.ArgumentParser(description=__doc__.splitlines()[0])
    parser.add_argument("--turns", type=int, default=5)
    parser.add_argument("--size", type=float, nargs=2, default=A4, metavar="MM")
    arguments = parser.parse_args()
    print(f"Python {platform.python_version()}, numpy {np.__version__}, {platform.machine()}")
    start_up(arguments.turns)
    with tempfile.TemporaryDirectory() as name:
        for title, (kind, options) in PAGES.items():
            drawn = draw(kind, size=tuple(arguments.size), seed=3, **options)
            for suffix, keywords in ((".png", {}), (".tif", {"compression": "tiff_lzw"})):
                folder = Path(name) / f"{kind}{suffix}"
                folder.mkdir()
                source = Path(name) / f"page-{kind}{suffix}"
                Image.fromarray(drawn.scan).save(source, dpi=(300, 300), **keywords)
                measure(f"{title}, {suffix[1:].upper()}", source, folder, arguments.turns)


if __name__ == "__main__":
    main()

"""Thresholds against pages with a ground truth, and against the time that a PNG takes to decode.

    python -m tests.benchmarks.bench_threshold                        # drawn pages, and speed
    python -m tests.benchmarks.bench_threshold --pages FOLDER         # pages NAME.png, NAME_gt.png
    python -m tests.benchmarks.bench_threshold --pages FOLDER --vary  # each constant by a fifth

FOLDER holds such pairs, or folders of them, as the binarization contests gave them out; the ink of
a truth is black. Figures are the contests' measures of ink less shade; with several folders their
means are averaged. Processor seconds, best of several turns.
"""

from __future__ import annotations

import argparse
import importlib
import io
import platform
import time
from collections.abc import Callable, Iterator
from concurrent.futures import ProcessPoolExecutor
from functools import partial
from pathlib import Path
from typing import Any

import numpy as np
from numpy.typing import NDArray
from PIL import Image

from fixtures.drawn import VARIANTS, available, draw, draw_variant
from scanclean.ink.density import measure_tone
from scanclean.ink.threshold import METHODS, ThresholdSettings, is_clean, threshold
from scanclean.score import contest_measures
from scanclean.units import Length, Resolution

Mask = NDArray[np.bool_]
UNKNOWN = Resolution(300.0, 300.0)
CONTROLS = {
    "otsu": ThresholdSettings(method="otsu"),
    "sauvola 41 px": ThresholdSettings(method="sauvola", window=Length(41, "px"), k=0.2),
}
CONSTANTS = {  # every constant of the way through hard pages, by module
    "contrast": "_CLOSING_STROKES _LEAST_CLOSING _BELOW _SMOOTHING _FEW _GLARE _DARK_PAPER "
    "_INK_QUANTILE",
    "outlines": "_STRONG_SLOPE WEAK_SLOPE",
    "relaxation": "_PAPER _PAPER_PULL _DATA _SOLID _FEWEST _FULL_OUTLINE",
    "shade": "_REFERENCE _LARGER _EXTENT _NEEDED _SHADOW_THICKNESS _SHADOW_EXTENT",
    "threshold": "_BORDER _NOISY _DARK _CRISP _FAINT _SOFT",
}


def ink_of(
    grey: NDArray[np.uint8], settings: ThresholdSettings, resolution: Resolution = UNKNOWN
) -> Mask:
    """The page's ink less its shade."""
    tone = measure_tone(grey, resolution=resolution)
    found = threshold(grey, tone, settings, resolution)
    return (found.ink - found.shade).to_mask()


def folders(root: Path) -> dict[str, list[Path]]:
    """Truths by the folder they are in."""
    found: dict[str, list[Path]] = {}
    for truth in sorted(root.rglob("*_gt.png")):
        found.setdefault(truth.parent.name, []).append(truth)
    return found


def pair(truth: Path) -> tuple[NDArray[np.uint8], Mask]:
    with Image.open(truth) as image:
        ink = np.asarray(image.convert("L")) < 128
    with Image.open(truth.with_name(truth.name.replace("_gt", ""))) as image:
        return np.asarray(image.convert("L")), ink


def figures(truths: list[Path], settings: ThresholdSettings) -> NDArray[np.float64]:
    """F, PSNR and DRD of each page; shape (pages, 3)."""
    rows = []
    for truth in truths:
        grey, ink = pair(truth)
        measured = contest_measures(ink_of(grey, settings), ink)
        rows.append((measured.f_measure, measured.psnr, measured.drd))
    return np.array(rows)


def compare(root: Path) -> None:
    """A row a method, a column a folder; then the adaptive one's ten worst pages."""
    groups = folders(root)
    print(f"{'F / PSNR / DRD':16}" + "".join(f"{name:>22}" for name in groups) + f"{'mean F':>9}")
    worst: list[tuple[float, str]] = []
    for name, settings in {"adaptive": ThresholdSettings(), **CONTROLS}.items():
        table = {group: figures(truths, settings) for group, truths in groups.items()}
        means = [table[group].mean(axis=0) for group in groups]
        cells = "".join(f"{f:10.2f} /{p:6.2f} /{d:5.2f}"[-22:].rjust(22) for f, p, d in means)
        print(f"{name:16}{cells}{np.mean([f for f, _, _ in means]):9.2f}", flush=True)
        if name == "adaptive":
            worst = sorted(
                (row[0], f"{group}/{truth.name.removesuffix('_gt.png')}")
                for group, truths in groups.items()
                for row, truth in zip(table[group], truths, strict=True)
            )
    print("worst:", ", ".join(f"{page} {f:.1f}" for f, page in worst[:10]))


def scaled(value: Any, factor: float) -> Any:
    if isinstance(value, tuple):
        return tuple(factor * v for v in value)
    if isinstance(value, np.uint8):
        return np.uint8(round(factor * float(value)))
    return min(factor * value, 0.99) if 0 < value < 1 else factor * value


def mean_f(task: tuple[Path, str, str, float]) -> tuple[str, str, float, float]:
    """Mean F over the folders with one constant moved."""
    root, module, constant, factor = task
    home = importlib.import_module(f"scanclean.{module}")
    kept = getattr(home, constant)
    setattr(home, constant, scaled(kept, factor))
    try:
        means = [figures(t, ThresholdSettings())[:, 0].mean() for t in folders(root).values()]
    finally:
        setattr(home, constant, kept)
    return module, constant, factor, float(np.mean(means))


def vary(root: Path, jobs: int) -> None:
    tasks = [
        (root, module, constant, factor)
        for module, constants in CONSTANTS.items()
        for constant in constants.split()
        for factor in (0.8, 1.2)
    ]
    with ProcessPoolExecutor(jobs) as pool:
        _, _, _, base = mean_f((root, "shade", "_LARGER", 1.0))
        print(f"mean F {base:.2f}; with a constant moved:")
        for module, constant, factor, mean in pool.map(mean_f, tasks):
            print(f"{module + '.' + constant:34} x {factor}  {mean - base:+.2f}", flush=True)


def drawn() -> Iterator[tuple[str, NDArray[np.uint8], Mask, Mask, Resolution]]:
    """Grey drawn pages: name, scan, ink, where it counts, resolution."""
    for name in filter(available, VARIANTS):
        page = draw_variant(name, seed_set=2)
        if page.scan.dtype == bool:
            continue
        grey = np.asarray(Image.fromarray(page.scan).convert("L"))
        yield name, grey, page.ink, ~(page.rule | page.dirt | page.edge), page.dpi


def compare_drawn() -> None:
    """Exact F on drawn pages, rules and dirt left out, and which way each page went."""
    print(f"{'drawn page':32}{'way':>7}" + "".join(f"{m:>10}" for m in METHODS))
    rows = []
    for name, grey, ink, counts, dpi in drawn():
        way = "clean" if is_clean(measure_tone(grey, resolution=dpi)) else "hard"
        row = [
            contest_measures(
                ink_of(grey, settings_of(method), dpi) & counts, ink & counts
            ).f_measure
            for method in METHODS
        ]
        rows.append(row)
        print(f"{name:32}{way:>7}" + "".join(f"{f:10.2f}" for f in row), flush=True)
    print(f"{'mean':39}" + "".join(f"{f:10.2f}" for f in np.mean(rows, axis=0)))


def best(job: Callable[[], object], turns: int = 7) -> float:
    job()
    seconds = []
    for _ in range(turns):
        begun = time.process_time()
        job()
        seconds.append(time.process_time() - begun)
    return min(seconds)


def speed() -> None:
    """Tone and threshold of a clean and of a hard page, against decoding its PNG."""
    for name, options in (("clean", {}), ("hard", {"showing": 0.18, "stains": 3})):
        time_page(name, draw("printed", seed=5, size=(210.0, 297.0), **options).scan)


def time_page(name: str, grey: NDArray[np.uint8]) -> None:
    png = io.BytesIO()
    Image.fromarray(grey).save(png, "PNG")
    decode = best(lambda: np.asarray(Image.open(io.BytesIO(png.getvalue()))))
    tone = measure_tone(grey, resolution=UNKNOWN)
    tone_seconds = best(lambda: measure_tone(grey, resolution=UNKNOWN))
    print(
        f"{name} page of {grey.shape[1]} x {grey.shape[0]}: PNG decoded in {1e3 * decode:.0f} ms; "
        f"tone in {tone_seconds / decode:.2f} of that; tone and threshold in"
    )
    for method in METHODS:
        whole = tone_seconds + best(partial(threshold, grey, tone, settings_of(method), UNKNOWN))
        print(f"  {method:10}{whole / decode:6.2f}   {1e9 * whole / grey.size:5.1f} ms a megapixel")


def settings_of(method: str) -> ThresholdSettings:
    return ThresholdSettings(method=method)


def main() -> None:
    parser = argparse.ArgumentParser(description=__doc__.splitlines()[0])
    parser.add_argument("--pages", type=Path, help="folder of NAME.png with NAME_gt.png")
    parser.add_argument("--vary", action="store_true", help="move each constant by a fifth")
    parser.add_argument("--jobs", type=int, default=2)
    options = parser.parse_args()
    print(platform.platform(), platform.python_version(), "numpy", np.__version__)
    if options.pages and options.vary:
        vary(options.pages, options.jobs)
    elif options.pages:
        compare(options.pages)
    else:
        compare_drawn()
        speed()


if __name__ == "__main__":
    main()

"""Cleans scanned pages to bitonal ink, accounts for every pixel, finds glyphs and text lines.

The names below are the library's front door; each is loaded when it is first used, so that
importing the package costs nothing.
"""

from __future__ import annotations

from importlib import import_module
from typing import Any

__version__ = "0.1.0"

_HOME = {
    "CallError": "errors",
    "OutputError": "errors",
    "PageError": "errors",
    "RecipeError": "errors",
    "ScancleanError": "errors",
    "Length": "units",
    "Resolution": "units",
    "RunSet": "sets.runs",
    "complement": "sets.runs",
    "crop": "sets.runs",
    "difference": "sets.runs",
    "intersection": "sets.runs",
    "is_subset": "sets.runs",
    "pad": "sets.runs",
    "reflect": "sets.runs",
    "symmetric_difference": "sets.runs",
    "translate": "sets.runs",
    "transpose": "sets.runs",
    "union": "sets.runs",
    "Element": "sets.elements",
    "box": "sets.elements",
    "diamond": "sets.elements",
    "disk": "sets.elements",
    "from_text": "sets.elements",
    "line": "sets.elements",
    "Components": "sets.labels",
    "label": "sets.labels",
    "close_set": "sets.morphology",
    "dilate": "sets.morphology",
    "erode": "sets.morphology",
    "fill_holes": "sets.morphology",
    "hit_or_miss": "sets.morphology",
    "open_horizontal": "sets.morphology",
    "open_set": "sets.morphology",
    "reconstruct": "sets.morphology",
    "Scan": "scans.pageio",
    "count_pages": "scans.pageio",
    "read_page": "scans.pageio",
    "read_pages": "scans.pageio",
    "Tone": "ink.density",
    "measure_tone": "ink.density",
    "Ledger": "ledger",
    "Layout": "layout",
    "read_layout": "layout",
    "Recipe": "recipe",
    "parse_recipe": "recipe",
    "read_recipe": "recipe",
    "to_toml": "recipe",
    "CleanPage": "clean",
    "clean_page": "clean",
    "PageSelection": "batches.sources",
    "CleanWork": "batches.work",
    "RestoreWork": "batches.work",
    "Batch": "batches.batch",
    "Outcome": "batches.batch",
    "plan_batch": "batches.batch",
}

__all__ = ["__version__", *_HOME]


def __getattr__(name: str) -> Any:
    if name not in _HOME:
        raise AttributeError(f"module {__name__!r} has no attribute {name!r}")
    value = getattr(import_module(f"{__name__}.{_HOME[name]}"), name)
    globals()[name] = value
    return value


def __dir__() -> list[str]:
    return sorted([*globals(), *_HOME])

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
    "RunSet": "runs",
    "complement": "runs",
    "crop": "runs",
    "difference": "runs",
    "intersection": "runs",
    "is_subset": "runs",
    "pad": "runs",
    "reflect": "runs",
    "symmetric_difference": "runs",
    "translate": "runs",
    "transpose": "runs",
    "union": "runs",
    "Element": "elements",
    "box": "elements",
    "diamond": "elements",
    "disk": "elements",
    "from_text": "elements",
    "line": "elements",
    "Components": "labels",
    "label": "labels",
    "close_set": "morphology",
    "dilate": "morphology",
    "erode": "morphology",
    "fill_holes": "morphology",
    "hit_or_miss": "morphology",
    "open_horizontal": "morphology",
    "open_set": "morphology",
    "reconstruct": "morphology",
    "Scan": "pageio",
    "count_pages": "pageio",
    "read_page": "pageio",
    "read_pages": "pageio",
    "Tone": "density",
    "measure_tone": "density",
    "Ledger": "ledger",
    "Layout": "layout",
    "read_layout": "layout",
    "Recipe": "recipe",
    "parse_recipe": "recipe",
    "read_recipe": "recipe",
    "to_toml": "recipe",
    "CleanPage": "clean",
    "clean_page": "clean",
    "PageSelection": "sources",
    "CleanWork": "work",
    "RestoreWork": "work",
    "Batch": "batch",
    "Outcome": "batch",
    "plan_batch": "batch",
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

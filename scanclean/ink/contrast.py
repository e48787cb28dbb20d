"""How far a page stands out of its paper, where the paper itself is stained and worn.

`density` divides by paper that changes over millimetres. Here the paper is followed as closely as
the strokes allow, so that stains, folds and show-through wider than some strokes are paper too.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray
from PIL import Image

from scanclean.ink.blocks import Surface, sliding_max, sliding_min
from scanclean.ink.density import otsu_level

__all__ = ["INK", "Contrast", "close_paper", "measure_contrast"]

INK = 180.0
"""Contrast of the page's ink in the steps of `Contrast.values`; the darkest ink still fits."""

_CELL = 4  # pixels of a cell of the reduced page
_CLOSING_STROKES = 6.0  # what is narrower than this many strokes is closed over
_LEAST_CLOSING = 28.0  # pixels
_BELOW = 0.04  # a cell darker than the surface by more than this share is no paper
_SMOOTHING = 0.3  # standard deviation, share of the closing's width
_ROUNDS = 4  # of lifting the surface off what is no paper
_FEW = 0.05  # share of paper cells near by at which the closing has half the say
_GLARE = 4.0  # grey levels; keeps the contrast of nearly black paper finite
_DARK_PAPER = (0.25, 0.5)  # of the page's bright paper: what is darker does not count, or less
_INK_QUANTILE = 0.75  # of the darker class
_LEAST_INK = 0.08  # contrast under which nothing is called ink


@dataclass(frozen=True, eq=False)
class Contrast:
    """Contrast of every pixel with the paper near by.

    Attributes
    ----------
    values : uint8, shape (H, W)
        0 on paper, about `INK` on ink.
    stroke_px : float
        Width of the page's strokes.
    """

    values: NDArray[np.uint8]
    stroke_px: float


def measure_contrast(grey: NDArray[np.uint8], stroke_px: float) -> Contrast:
    """Measure the contrast ``1 - page / paper`` of a dark-on-light page, scaled by its ink's.

    Bindings, tables and burnt edges are much darker than the page; what lies on them does not
    count.

    Parameters
    ----------
    grey : uint8, shape (H, W)
    stroke_px : float

    Returns
    -------
    Contrast
    """
    paper = close_paper(grey, stroke_px)
    none, full = _DARK_PAPER
    bright = float(np.quantile(paper.grid, 0.8))
    counts = np.clip((paper.grid / bright - none) / (full - none), 0.0, 1.0)
    gain = counts / (paper.grid + _GLARE)
    scale = Surface(gain.astype(np.float32), paper.size, paper.shape)
    # one row of each row of blocks tells how dark the ink is
    sample = slice(min(paper.size // 2, len(grey) // 2), None, paper.size)
    ink = _ink_contrast((paper.rows(sample) - grey[sample]) * scale.rows(sample))
    scale = Surface((gain * (INK / ink)).astype(np.float32), paper.size, paper.shape)
    values = np.empty_like(grey)
    for (rows, level), (_, factor) in zip(paper.strips(), scale.strips(), strict=True):
        level -= grey[rows]
        level *= factor
        level += np.float32(0.5)
        np.clip(level, 0.0, 255.0, out=level)
        values[rows] = level
    return Contrast(values, stroke_px)


def close_paper(grey: NDArray[np.uint8], stroke_px: float) -> Surface:
    """Level of the paper, followed as closely as the strokes allow.

    1. Closing of the reduced page by a box some strokes wide.
    2. Some rounds of: mean of the cells that are no darker than the surface, weighted by a
       Gaussian. The closing clings to the brightest grain and sinks under broad strokes; the mean
       does neither. Where few cells are bright enough, the closing stays.

    Parameters
    ----------
    grey : uint8, shape (H, W)
        Dark on light.
    stroke_px : float

    Returns
    -------
    Surface
        In grey levels, at least 1.
    """
    cells = np.asarray(Image.fromarray(grey).reduce(_CELL))
    width = max(_LEAST_CLOSING, _CLOSING_STROKES * stroke_px) / _CELL
    side = 2 * round((width - 1) / 2) + 1
    closed = sliding_min(sliding_max(cells, side), side)
    # the surface is smooth: two cells each way share one of its points
    sigma = _SMOOTHING * side
    closing = _halved(closed.astype(np.float32))
    surface = closing
    level = closed.astype(np.float32)
    for _ in range(_ROUNDS):
        is_paper = cells > np.float32(1 - _BELOW) * level
        weight = _blurred(_halved(is_paper.astype(np.float32)), sigma)
        total = _blurred(_halved((is_paper * cells).astype(np.float32)), sigma)
        trust = weight / (weight + np.float32(_FEW))
        mean = total / np.maximum(weight, np.float32(1e-6))
        surface = (closing + trust * (mean - closing)).astype(np.float32, copy=False)
        level = Surface(surface, 2, cells.shape).rows(slice(None))
    return Surface(np.maximum(surface, 1.0), 2 * _CELL, grey.shape)


def _blurred(values: NDArray[np.float32], sigma: float) -> NDArray[np.float32]:
    from scipy.ndimage import gaussian_filter

    return np.asarray(gaussian_filter(values, sigma, truncate=2.5), np.float32)


def _halved(cells: NDArray[np.float32]) -> NDArray[np.float32]:
    return np.asarray(Image.fromarray(cells).reduce(2))


def _ink_contrast(contrast: NDArray[np.float32]) -> float:
    """Contrast of the ink: an upper quantile of what Otsu's threshold calls ink."""
    steps = np.clip(contrast * 255, 0, 255).astype(np.uint8)
    histogram = np.bincount(steps.ravel(), minlength=256)
    histogram[: otsu_level(histogram) + 1] = 0
    count = np.cumsum(histogram)
    return max(_LEAST_INK, float(np.searchsorted(count, _INK_QUANTILE * count[-1])) / 255)

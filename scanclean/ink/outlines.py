"""Outlines of strokes: thin lines where contrast changes fastest."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from scanclean.ink.contrast import INK, Contrast
from scanclean.sets.labels import label
from scanclean.sets.runs import RunSet

__all__ = ["WEAK_SLOPE", "Outlines", "find_outlines"]

WEAK_SLOPE = 0.075 * INK
"""Least slope of an outline, in steps of contrast a pixel; it must join a strong one."""

_STRONG_SLOPE = 0.175 * INK
_STRIP = 1 << 17  # pixels of a strip of rows: its arrays stay in the processor's cache
_TAN_22 = np.float32(0.41421356)


@dataclass(frozen=True, eq=False)
class Outlines:
    """Outline pixels of a page and the slope of its contrast.

    Glossary: E outline pixels.

    Attributes
    ----------
    position : int64, shape (E,)
        Flat positions ``y * W + x``, increasing.
    slope : float32, shape (E,)
        Steps of contrast a pixel.
    level : float32, shape (E,)
        Contrast on the outline, halfway between paper and ink.
    slopes : uint8, shape (H, W)
        Slope everywhere, in halves of a step of contrast a pixel.
    """

    position: NDArray[np.int64]
    slope: NDArray[np.float32]
    level: NDArray[np.float32]
    slopes: NDArray[np.uint8]


def find_outlines(contrast: Contrast) -> Outlines:
    """Outlines by the largest slope across them, weak ones only where they join strong ones.

    Notes
    -----
    Slopes are Sobel's. The outermost pixels of the page have none.

    References
    ----------
    J. Canny, "A computational approach to edge detection", IEEE Trans. Pattern Analysis and
    Machine Intelligence 8(6), 679-698, 1986; the smoothing before the slope is left out.
    """
    values = contrast.values
    height, width = values.shape
    slopes = np.zeros((height, width), np.uint8)
    if height < 3 or width < 3:
        nothing = np.empty(0, np.float32)
        return Outlines(np.empty(0, np.int64), nothing, nothing, slopes)
    weak, strong = ((8 * slope) ** 2 for slope in (WEAK_SLOPE, _STRONG_SLOPE))
    found = []
    step = max(8, _STRIP // width)
    for top in range(0, height, step):
        # two rows more on each side: for the slope, and for the slope of the neighbours
        above = min(top, 2)
        strip = values[top - above : top + step + 2]
        rows = slice(above, above + min(step, height - top))
        square, position, level = _ridges(strip, rows, weak)
        twice = np.sqrt(square[rows]) * np.float32(2 / 8) + np.float32(0.5)
        slopes[top : top + step] = np.minimum(twice, 255)
        found.append((position + (top - above) * width, square.ravel()[position], level))
    position = np.concatenate([strip[0] for strip in found])
    square = np.concatenate([strip[1] for strip in found])
    level = np.concatenate([strip[2] for strip in found])
    kept = _joined(position, square > strong, values.shape)
    slope = np.sqrt(square[kept]) * np.float32(1 / 8)
    return Outlines(position[kept], slope, level[kept], slopes)


def _ridges(
    values: NDArray[np.uint8], rows: slice, weak: float
) -> tuple[NDArray[np.float32], NDArray[np.int64], NDArray[np.float32]]:
    """Squared slopes of a strip, and where they are largest across the outline.

    Returns
    -------
    square : float32, shape (h, W)
        Eight times the slope, squared; 0 on the outermost pixels.
    position : int64, shape (E,)
        Flat positions in the strip, of the given rows only.
    level : float32, shape (E,)
        Contrast there, smoothed by 1-2-1 along both axes.
    """
    height, width = values.shape
    level = values.astype(np.int16)
    down = level[:-2] + level[2:]
    down += level[1:-1]
    down += level[1:-1]
    across = level[:, :-2] + level[:, 2:]
    across += level[:, 1:-1]
    across += level[:, 1:-1]
    slope_x = down[:, 2:] - down[:, :-2]  # (h - 2, W - 2)
    slope_y = across[2:] - across[:-2]
    square = np.zeros((height, width), np.float32)
    inner = square[1:-1, 1:-1]
    inner[:] = slope_x
    inner *= inner
    other = slope_y.astype(np.float32)
    other *= other
    inner += other

    at = np.flatnonzero(square[rows] > weak) + rows.start * width
    row, column = np.divmod(at, width)
    x = slope_x[row - 1, column - 1].astype(np.int32)
    y = slope_y[row - 1, column - 1].astype(np.int32)
    # the neighbour up the slope, to one of eight sides
    steep = np.abs(y) > _TAN_22 * np.abs(x)
    flat = np.abs(x) > _TAN_22 * np.abs(y)
    ahead = np.where(flat, np.sign(x), 0) + np.where(steep, np.sign(y), 0) * width
    here = square.ravel()[at]
    # towards the ink a tie is lost, towards the paper it is won: one of two equals remains
    ridge = (here > square.ravel()[at + ahead]) & (here >= square.ravel()[at - ahead])
    at, row, column = at[ridge], row[ridge] - 1, column[ridge]
    middle = (down[row, column - 1] + 2 * down[row, column] + down[row, column + 1]) / 16
    return square, at, middle.astype(np.float32)


def _joined(
    position: NDArray[np.int64], strong: NDArray[np.bool_], shape: tuple[int, int]
) -> NDArray[np.bool_]:
    """Which pixels are strong or joined to strong ones by others, corners included."""
    on_line = position + position // shape[1]  # rows of runs are one column longer
    breaks = np.flatnonzero(np.diff(on_line) > 1)
    first = np.concatenate(([0], breaks + 1))[: position.size]
    last = np.concatenate((breaks, [position.size - 1]))[: position.size]
    bounds = np.stack((on_line[first], on_line[last] + 1), axis=1).ravel()
    pieces = label(RunSet(shape, bounds))
    piece = np.repeat(pieces.run_label, last - first + 1)
    chosen = np.zeros(pieces.n, bool)
    chosen[piece[strong]] = True
    joined: NDArray[np.bool_] = chosen[piece]
    return joined

"""Slowly changing measures of a page: moments on square blocks, enlarged to every pixel.

Local mean and deviation, paper level and the thresholds made of them change little from pixel
to pixel. They are measured on a coarse grid and read back bilinearly, a strip of rows at a
time, so that no floating-point page is ever held in memory.
"""

from __future__ import annotations

from collections.abc import Iterator
from dataclasses import dataclass
from itertools import pairwise

import numpy as np
from numpy.typing import NDArray

__all__ = ["Surface", "block_moments", "sliding_max", "sliding_min"]


def block_moments(
    grey: NDArray[np.uint8], size: int, *, centre: float = 128.0
) -> tuple[NDArray[np.float32], NDArray[np.float32]]:
    """Mean and mean square of square blocks.

    Parameters
    ----------
    grey : uint8, shape (H, W)
    size : int
        Side of the blocks in pixels; the last row and column of blocks may be cut by the page.
    centre : float
        Level that is taken off before squaring. Single precision keeps the deviation of blocks
        near this level to about 0.01 grey levels.

    Returns
    -------
    mean, square : float32, shape (ceil(H / size), ceil(W / size))
        Mean of ``grey - centre`` and of ``(grey - centre) ** 2``.
    """
    height, width = grey.shape
    whole = height // size
    n_rows = -(-height // size)
    # sums down the columns of a few rows of blocks at a time, which stay in the processor's cache
    mean = np.empty((n_rows, width), np.float32)
    square = np.empty((n_rows, width), np.float32)
    step = max(1, 64 // size)
    for first in [*range(0, whole, step), *range(whole, n_rows)]:
        last = min(first + step, whole) if first < whole else n_rows
        strip = grey[first * size : last * size].astype(np.float32)
        strip -= np.float32(centre)
        strip = strip.reshape(last - first, -1, width)
        strip.sum(axis=1, out=mean[first:last])
        np.multiply(strip, strip, out=strip)
        strip.sum(axis=1, out=square[first:last])
    edges = np.arange(0, width, size)
    rows = np.diff(np.append(np.arange(0, height, size), height))
    share = (1.0 / np.outer(rows, np.diff(np.append(edges, width)))).astype(np.float32)
    mean = np.add.reduceat(mean, edges, axis=1)
    square = np.add.reduceat(square, edges, axis=1)
    mean *= share
    square *= share
    return mean, square


@dataclass(frozen=True, eq=False)
class Surface:
    """A smooth function of the page, known at the centres of square blocks.

    Parameters
    ----------
    grid : float32, shape (ceil(H / size), ceil(W / size))
        Value at the centre of each block.
    size : int
        Side of the blocks in pixels.
    shape : (H, W)
        Page in pixels.

    Notes
    -----
    Between centres the values are interpolated bilinearly; outside the outermost centres they
    stay constant.
    """

    grid: NDArray[np.float32]
    size: int
    shape: tuple[int, int]

    def __post_init__(self) -> None:
        expected = tuple(-(-side // self.size) for side in self.shape)
        if self.grid.shape != expected:
            raise ValueError(
                f"a page of {self.shape} in blocks of {self.size} px needs a grid of {expected}, "
                f"got {self.grid.shape}"
            )

    def rows(self, rows: slice) -> NDArray[np.float32]:
        """The surface at every pixel of some rows.

        Parameters
        ----------
        rows : slice
            Of the page, any step upwards.

        Returns
        -------
        float32, shape (rows, W)
        """
        wanted = np.arange(*rows.indices(self.shape[0]))
        above, weight = _between(wanted, self.size, len(self.grid))
        below = np.minimum(above + 1, len(self.grid) - 1)
        first = above[0] if above.size else 0
        wide = self._widened(self.grid[first : below[-1] + 1 if below.size else 0])
        upper = wide[above - first]
        values: NDArray[np.float32] = wide[below - first]
        values -= upper
        values *= weight[:, None]
        values += upper
        return values

    def strips(self) -> Iterator[tuple[slice, NDArray[np.float32]]]:
        """The surface at every pixel, a few rows at a time from the top.

        Yields
        ------
        rows : slice
        values : float32, shape (rows, W)
            Valid until the next strip is asked for; may be written to.
        """
        height, width = self.shape
        size, batch = self.size, 32
        buffer = np.empty((size, width), np.float32)
        wide, first = self._widened(self.grid[:batch]), 0
        # between two rows of centres the values are a straight line in y, at the same steps in all
        weights = ((np.arange(size) + size // 2 + 0.5) / size - 0.5).astype(np.float32)[:, None]
        edges = [0, *range(size // 2, height, size), height]
        for above, (top, bottom) in enumerate(pairwise(edges), start=-1):
            if top == bottom:
                continue
            upper, lower = max(above, 0), min(above + 1, len(self.grid) - 1)
            if lower - first >= len(wide):
                wide, first = self._widened(self.grid[upper : upper + batch]), upper
            values = buffer[: bottom - top]
            if upper == lower:
                values[:] = wide[upper - first]
            else:
                slope = wide[lower - first] - wide[upper - first]
                np.multiply(slope, weights[: bottom - top], out=values)
                values += wide[upper - first]
            yield slice(top, bottom), values

    def _widened(self, grid: NDArray[np.float32]) -> NDArray[np.float32]:
        """Rows of the grid at every column of the page."""
        columns = self.grid.shape[1]
        left, weight = _between(np.arange(self.shape[1]), self.size, columns)
        wide = grid[:, np.minimum(left + 1, columns - 1)]
        leftmost = grid[:, left]
        wide -= leftmost
        wide *= weight
        wide += leftmost
        return wide


def _between(
    pixels: NDArray[np.integer], size: int, n: int
) -> tuple[NDArray[np.intp], NDArray[np.float32]]:
    """Index of the block centre at or before each pixel, and the next one's weight."""
    at = (pixels + 0.5) / size - 0.5
    at = np.clip(at, 0, n - 1)
    before = at.astype(np.intp)
    return before, (at - before).astype(np.float32)


def sliding_max(values: NDArray[np.uint8], size: int) -> NDArray[np.uint8]:
    """Largest value in a square window: grey dilation by a box.

    Parameters
    ----------
    values : uint8, shape (H, W)
    size : int
        Odd side of the window; outside the page there is nothing.

    Returns
    -------
    uint8, shape (H, W)

    Notes
    -----
    The window is doubled until it is as long as asked, so the cost grows with its logarithm, and
    each step runs in vector instructions: 15 times faster than a filter that moves pixel by pixel.
    """
    return _sliding_rows(np.ascontiguousarray(_sliding_rows(values, size).T), size).T


def sliding_min(values: NDArray[np.uint8], size: int) -> NDArray[np.uint8]:
    """Smallest value in a square window: grey erosion by a box; see `sliding_max`."""
    return ~sliding_max(~values, size)


def _sliding_rows(values: NDArray[np.uint8], size: int) -> NDArray[np.uint8]:
    """Largest value of ``size`` rows, centred."""
    if size % 2 == 0:
        raise ValueError(f"the window must have an odd side, got {size}")
    reach = size // 2
    best = np.zeros((values.shape[0] + 2 * reach, values.shape[1]), np.uint8)
    best[reach : reach + values.shape[0]] = values
    covered = 1
    while covered < size:
        shift = min(covered, size - covered)
        best = np.maximum(best[:-shift], best[shift:])
        covered += shift
    return best

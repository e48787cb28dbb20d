"""White corridors between columns: which gaps of a row part columns, and which only cells or words.

A wide gap in a row can be a word space, a tab, the space between two cells of a table, or the
gutter between two columns of text. Only the last two run on through the rows above and below. A
table's rows run through its corridors level; columns of running text have no common rows, or are
long lines on both sides.

Glossary: N letters; S pieces of lines; K gaps, each between the right end of one piece and the left
end of another. Everything is in the upright frame (`upright`).
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from scanclean.text.baselines import Baselines
from scanclean.text.neighbours import best_of_both, chains, repeat_range

__all__ = ["Gaps", "Occupied", "Pieces", "corridors", "parting_columns", "stacks"]


Floats = NDArray[np.float64]
Ints = NDArray[np.int64]
Bools = NDArray[np.bool_]

_LONG_LINE = 14.0  # of the letters' height: cells of a table are shorter as a rule
_RUNNING_LINE = 20.0  # and these are surely no cells
_MANY_ROWS = 6
_CLEAR_GUTTER = 2.6  # what fewer rows must have between them
_REACH = 12.0  # how far above and below a gap its corridor is followed, in letters' heights
_LOOK = 24  # pieces further down the page that are tried as the next below


@dataclass(frozen=True, eq=False)
class Gaps:
    """White gaps in rows; columns of length K.

    Parameters
    ----------
    before, after : (K,) int array
        The piece that ends at the gap and the one that begins there.
    left, right : (K,) float array
        Ends of the gap; right may lie left of left where the pieces overlap.
    y : (K,) float array
        Baseline there.
    offset : (K,) float array
        How far the second piece's baseline is below the first's.
    height : (K,) float array
        Height of the larger letters.
    """

    before: Ints
    after: Ints
    left: Floats
    right: Floats
    y: Floats
    offset: Floats
    height: Floats

    @property
    def width(self) -> Floats:
        """(K,) negative where the pieces overlap."""
        return self.right - self.left

    def keep(self, chosen: Bools) -> Gaps:
        """The chosen gaps."""
        return Gaps(
            self.before[chosen],
            self.after[chosen],
            self.left[chosen],
            self.right[chosen],
            self.y[chosen],
            self.offset[chosen],
            self.height[chosen],
        )


class Occupied:
    """Where on the page letters stand, on a coarse grid.

    Parameters
    ----------
    left, right, top, bottom : (N,) float arrays
        Boxes of the letters, N > 0.
    cell : float
        Side of a grid cell.
    """

    def __init__(self, left: Floats, right: Floats, top: Floats, bottom: Floats, cell: float):
        self.cell = cell
        self.left, self.top = float(left.min()), float(top.min())
        first, start = self._cell_x(left), self._cell_y(top)
        last = np.maximum(np.ceil((right - self.left) / cell).astype(np.int64), first + 1)
        stop = np.maximum(np.ceil((bottom - self.top) / cell).astype(np.int64), start + 1)
        rows, columns = int(stop.max()), int(last.max())
        owner, row = repeat_range(start, stop)
        stride = columns + 1
        size = rows * stride
        depth = np.bincount(row * stride + first[owner], minlength=size)
        depth -= np.bincount(row * stride + last[owner], minlength=size)
        taken = np.cumsum(depth.reshape(rows, stride), axis=1) > 0
        self._before = np.zeros((rows, stride + 1), np.int64)  # taken cells left of a column
        np.cumsum(taken, axis=1, out=self._before[:, 1:])

    def free_stretch(
        self, left: Floats, right: Floats, top: Floats, bottom: Floats
    ) -> tuple[Floats, Floats]:
        """How far up and down from ``top..bottom`` the strips ``left..right`` stay free."""
        rows, stride = self._before.shape
        first = np.clip(np.ceil((left - self.left) / self.cell).astype(np.int64), 0, stride - 2)
        last = np.clip(self._cell_x(right), first + 1, stride - 1)
        taken = self._before[:, last] > self._before[:, first]
        row = np.arange(rows)[:, None]
        start = np.clip(self._cell_y(top), 0, rows - 1)
        stop = np.clip(self._cell_y(bottom), 0, rows - 1)
        above = np.where(taken & (row < start), row, -1).max(axis=0, initial=-1)
        below = np.where(taken & (row > stop), row, rows).min(axis=0, initial=rows)
        return self.top + (above + 1) * self.cell, self.top + below * self.cell

    def _cell_x(self, x: Floats) -> Ints:
        return np.floor((x - self.left) / self.cell).astype(np.int64)

    def _cell_y(self, y: Floats) -> Ints:
        return np.floor((y - self.top) / self.cell).astype(np.int64)


def corridors(gaps: Gaps, occupied: Occupied) -> Bools:
    """(K, K) which gaps lie in one free corridor; each with itself."""
    height = gaps.height
    slack = np.maximum(gaps.width - 1.4 * height, 0) / 2
    joined = np.eye(gaps.left.size, dtype=bool)
    shared = np.minimum(gaps.right[:, None], gaps.right) - np.maximum(gaps.left[:, None], gaps.left)
    fits = shared >= 0.6 * height[:, None]
    fits &= (gaps.width > 0.8 * height)[:, None]
    fits &= np.abs(gaps.y - gaps.y[:, None]) < _REACH * height[:, None]
    # what is free above and below may be the left end, the middle or the right end of a wide gap
    for place in (-1, 0, 1):
        middle = (gaps.left + gaps.right) / 2 + place * slack
        up, down = occupied.free_stretch(
            middle - 0.3 * height,
            middle + 0.3 * height,
            gaps.y - 0.9 * height,
            gaps.y - 0.1 * height,
        )
        joined |= fits & (gaps.y > up[:, None]) & (gaps.y - height < down[:, None])
    return joined


@dataclass(frozen=True, eq=False)
class Pieces:
    """Pieces of lines; columns of length S.

    Parameters
    ----------
    baselines : Baselines
    left, right : (S,) float array
        Ends of the letters.
    tabular : (S,) bool array
        Joined across a corridor, as the cells of a table's row.
    """

    baselines: Baselines
    left: Floats
    right: Floats
    tabular: Bools

    def are_long(self, chosen: Ints, length: float) -> bool:
        """Whether the chosen pieces are running text of so many heights of its letters."""
        if np.count_nonzero(self.tabular[chosen]) * 2 > chosen.size:
            return False
        usual = np.median((self.right - self.left)[chosen])
        return bool(usual >= length * np.median(self.baselines.height[chosen]))


def stacks(pieces: Pieces) -> Ints:
    """(S,) the stack that each piece stands in: pieces under one another, each the next below.

    A heading over two columns is stacked on one of them at most.
    """
    lines, left, right = pieces.baselines, pieces.left, pieces.right
    n = lines.n
    middle = (left + right) / 2
    order = np.argsort(lines.at(np.arange(n), middle), kind="stable")
    steps = range(1, min(n, _LOOK + 1))
    i = np.concatenate([order[: n - k] for k in steps] or [np.empty(0, np.int64)])
    j = np.concatenate([order[k:] for k in steps] or [np.empty(0, np.int64)])
    shared = np.minimum(right[i], right[j]) - np.maximum(left[i], left[j])
    x = (np.minimum(right[i], right[j]) + np.maximum(left[i], left[j])) / 2
    step = lines.at(j, x) - lines.at(i, x)
    high = np.maximum(lines.height[i], lines.height[j])
    alike = high < 1.7 * np.minimum(lines.height[i], lines.height[j])
    narrow = np.minimum(right[i] - left[i], right[j] - left[j])
    wide = np.maximum(right[i] - left[i], right[j] - left[j])
    fits = alike & (shared > 0.5 * narrow) & (step > 0.8 * high) & (step < 6 * high)
    i, j = i[fits], j[fits]
    cost = (step / high - 3 * shared / np.maximum(wide, 1))[fits]
    chosen = best_of_both(i, j, cost)
    return chains(i[chosen], j[chosen], n)[1]


def parting_columns(gaps: Gaps, corridor: Bools, stack: Ints, pieces: Pieces) -> Bools:
    """(K,) which gaps part two columns of text, so that no line runs across them.

    Two stacks are columns if there is a clear gutter between them and either both have long lines
    or their rows are not level. Gaps that no stacks decide follow the others of their corridor.

    Parameters
    ----------
    gaps : Gaps
    corridor : (K, K) bool array
        Of `corridors`.
    stack : (S,) int array
        Of `stacks`.
    pieces : Pieces
    """
    parted, decided = np.zeros((2, gaps.before.size), bool)
    before, after = stack[gaps.before], stack[gaps.after]
    goes_on = np.zeros((2, stack.size), bool)  # has a neighbour behind it, before it
    goes_on[0, gaps.before] = goes_on[1, gaps.after] = True
    for a, b in np.unique(np.stack((before, after), axis=1), axis=0):
        between = (before == a) & (after == b)
        verdict = None if a == b else _are_columns(gaps.keep(between), a, b, stack, goes_on, pieces)
        if verdict is not None:
            decided |= between
            parted |= between & verdict
    votes = corridor @ (parted.astype(np.int64) - (decided & ~parted))
    return parted | (~decided & (votes > 0))


def _are_columns(
    gaps: Gaps, a: int, b: int, stack: Ints, goes_on: Bools, pieces: Pieces
) -> bool | None:
    """Whether two stacks with these gaps between them are columns; None if too few rows tell."""
    lines, left, right = pieces.baselines, pieces.left, pieces.right
    whole = [np.flatnonzero(stack == s) for s in (a, b)]
    level = [lines.at(s, (left[s] + right[s]) / 2) for s in whole]
    height = float(np.median(lines.height[np.concatenate(whole)]))
    top = max(y.min() for y in level) - height
    bottom = min(y.max() for y in level) + height
    ours, theirs = (s[(y > top) & (y < bottom)] for s, y in zip(whole, level, strict=True))
    # two rows of a note tell, beside running text; two cells beside two cells do not
    running = any(s.size >= 5 and pieces.are_long(s, _RUNNING_LINE) for s in whole)
    rows = min(ours.size, theirs.size)
    if rows < (2 if running else 3):
        return None
    gutter = np.quantile(left[theirs], 0.1) - np.quantile(right[ours], 0.9)
    # a few rows have their word spaces under one another by chance
    many = rows >= 3 and max(s.size for s in whole) >= _MANY_ROWS
    sizes = [float(np.median(lines.height[s])) for s in whole]
    many |= running and max(sizes) > 1.2 * min(sizes)  # notes in small type
    if gutter <= (0.5 if many else _CLEAR_GUTTER) * height:
        return False
    if pieces.are_long(ours, _LONG_LINE) and pieces.are_long(theirs, _LONG_LINE):
        return True
    # rows that have no neighbour on the other side, though they could
    alone = min(np.count_nonzero(~goes_on[0, ours]), np.count_nonzero(~goes_on[1, theirs]))
    offset = gaps.offset / gaps.height
    drift = float(np.median(offset))  # on a curled page all rows are out of step alike
    in_step = np.count_nonzero(np.abs(offset - drift) <= 0.2)
    # a hand is uneven in the cells of a form; beside running text, that is the way of notes
    least = offset.size if running else 0.7 * offset.size
    in_rows = offset.size >= 0.7 * (offset.size + alone) and in_step >= 0.7 * least
    return bool(not in_rows or abs(drift) > 0.5)

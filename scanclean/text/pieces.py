"""Pieces of text lines: chains of neighbouring letters, and how they are joined to whole lines.

Glossary: C components, N letters among them, S pieces. Everything is in the upright frame
(`upright`); limits are in x-heights unless said otherwise.
"""

from __future__ import annotations

import numpy as np
from numpy.typing import NDArray

from scanclean.text.baselines import Baselines, Slices, fit_baselines, line_x_heights
from scanclean.text.columns import Gaps, Occupied, Pieces, corridors, parting_columns, stacks
from scanclean.text.lineset import LineSet
from scanclean.text.neighbours import beside, best_of_both, chains, keyed_best, weighted_median
from scanclean.text.upright import Shapes

__all__ = ["Joining", "first_pieces", "slope_of_pieces"]

Floats = NDArray[np.float64]
Ints = NDArray[np.int64]
Bools = NDArray[np.bool_]

_SMALLEST_BODY = 0.45
_BAND = 0.2
_UNLIKE = 2.0  # letters of one line differ less in height, capital and bracket from lower case
_UNLIKE_BESIDE = 2.7  # long f and swung capitals to the next letter
_WORD_SPACE = 1.6  # gaps up to this are never asked whether they part columns
_SURE_GAP = 2.0  # and up to this, if no corridor runs there
_LARGEST_GAP = 14.0  # that one row alone can bridge
_LARGEST_TAB = 40.0  # that the rows of a table can bridge


def first_pieces(shapes: Shapes, letters: Ints, x_height: float) -> tuple[int, Ints]:
    """Chains of letters that chose each other: how many, and the one of each letter."""
    y, core = shapes.y[letters], shapes.core[letters]
    top, bottom = y - core / 2, y + core / 2
    i, j = beside(shapes.x[letters], top, bottom, band=_BAND * x_height)
    shared = np.minimum(bottom[i], bottom[j]) - np.maximum(top[i], top[j])
    low, high = np.minimum(core[i], core[j]), np.maximum(core[i], core[j])
    gap = shapes.left[letters][j] - shapes.right[letters][i]
    fits = (shared >= 0.4 * low) & (gap <= _WORD_SPACE * high) & (high <= _UNLIKE * low)
    cost = np.maximum(gap, 0) / high + np.maximum(1 - shared / low, 0) + 0.3 * np.log(high / low)
    i, j = i[fits], j[fits]
    chosen = best_of_both(i, j, cost[fits])
    return chains(i[chosen], j[chosen], letters.size)


def slope_of_pieces(shapes: Shapes, letters: Ints, n: int, piece: Ints) -> float:
    """Median slope of the pieces of four letters and more, weighted by their lengths."""
    x, y = shapes.x[letters], shapes.y[letters]
    count = np.bincount(piece, minlength=n)
    dx = x - (np.bincount(piece, x, n) / count)[piece]
    dy = y - (np.bincount(piece, y, n) / count)[piece]
    xx, xy = np.bincount(piece, dx * dx, n), np.bincount(piece, dx * dy, n)
    some = (count >= 4) & (xx > 0)
    if not some.any():
        return 0.0
    return weighted_median(xy[some] / xx[some], np.sqrt(xx[some]))


class Joining:
    """Pieces of lines on their way to whole ones.

    Parameters
    ----------
    shapes : Shapes
    slices : Slices
        Of the letters.
    letters : (N,) int array
        Components.
    n : int
        S.
    piece : (N,) int array
        The piece of each letter.
    x_height : float
        About that of the page.
    plain : (C,) bool array
        Components with one stretch of ink in most rows, as the strokes of marks have.
    """

    def __init__(
        self,
        shapes: Shapes,
        slices: Slices,
        letters: Ints,
        n: int,
        piece: Ints,
        x_height: float,
        plain: Bools,
    ) -> None:
        self.shapes, self.slices, self.x_height = shapes, slices, x_height
        self.letters, self.n, self.piece = letters, n, piece
        self.tabular = np.zeros(n, bool)
        self.settled = False
        self.fit: tuple[Baselines, Slices, Ints] | None = None
        self.level, self.core = shapes.y[letters], shapes.core[letters]
        self.plain = plain[letters]
        self.occupied = Occupied(
            shapes.left[letters],
            shapes.right[letters],
            self.level - self.core / 2,
            self.level + self.core / 2,
            x_height / 2,
        )

    def to_lines(self, *, least: int = 1) -> LineSet:
        """Join what belongs together and drop what is no line of its own.

        Parameters
        ----------
        least : int
            Letters of a line; where it is more than one, they must also stand close, and half of
            them have some structure.
        """
        for _ in range(2):
            if not self._bridge(across_columns=False):
                break
        self._settle()
        for _ in range(5):
            # what was dropped may have stood between two pieces
            if self.n == 0 or not (self._bridge(across_columns=True) | self._settle()):
                break
        if least > 1 and self.n:
            plain = np.bincount(self.piece, self.plain, self.n)
            left, right = self._ends()
            inked = np.bincount(self.piece, self.shapes.width[self.letters], self.n)
            sparse = inked < 0.5 * (right - left)  # accents over capitals stand so
            self._drop((self._size < least) | (plain > 0.5 * self._size) | sparse)
        return self._lines(rough=False)

    def _settle(self) -> bool:
        """Give pieces that stand within a longer line to it; whether there was one."""
        if self.settled or not self.n:
            return False
        before = self.n
        self._absorb()
        self._drop(self._guests())
        self.settled = True
        return self.n < before

    @property
    def _size(self) -> Ints:
        return np.bincount(self.piece, minlength=self.n)

    def _drop(self, chosen: Bools) -> None:
        """Take pieces out; where their components belong is told by where they stand."""
        if not chosen.any():
            return
        self._changed()
        number = np.cumsum(~chosen) - 1
        kept = ~chosen[self.piece]
        self.letters, self.piece = self.letters[kept], number[self.piece[kept]]
        self.level, self.core = self.level[kept], self.core[kept]
        self.plain, self.tabular = self.plain[kept], self.tabular[~chosen]
        self.n = int(self.n - chosen.sum())

    def _changed(self) -> None:
        self.settled = False
        self.fit = None

    def _join(self, i: Ints, j: Ints) -> None:
        if i.size == 0:
            return
        self._changed()
        self.n, joined = chains(i, j, self.n)
        self.piece = joined[self.piece]
        self.tabular = np.bincount(joined, self.tabular, self.n) > 0

    def _baselines(self, *, rough: bool = True) -> tuple[Baselines, Slices, Ints]:
        """Baselines of the pieces, their slices and the piece of each; kept while they last."""
        if self.fit is None or not rough:
            number = np.full(self.shapes.x.size, -1, np.int64)
            number[self.letters] = self.piece
            group = number[self.slices.component]
            slices, group = self.slices.keep(group >= 0), group[group >= 0]
            lines = fit_baselines(slices, group, self.n, scale=self.x_height, rough=rough)
            self.fit = lines, slices, group
        return self.fit

    def _lines(self, *, rough: bool = True) -> LineSet:
        if self.n == 0:
            return LineSet.empty(self.shapes.frame)
        baselines, slices, group = self._baselines(rough=rough)
        x_height = line_x_heights(slices, group, baselines)
        return LineSet(self.shapes.frame, baselines, *self._ends(), x_height)

    def _ends(self) -> tuple[Floats, Floats]:
        """(S,), (S,) left and right ends of the pieces."""
        left, right = np.full(self.n, np.inf), np.full(self.n, -np.inf)
        np.minimum.at(left, self.piece, self.shapes.left[self.letters])
        np.maximum.at(right, self.piece, self.shapes.right[self.letters])
        return left, right

    def _bridge(self, *, across_columns: bool) -> bool:
        """Join pieces across gaps; whether there was one.

        At first only over gaps that the rows above and below do not share. Then columns of text
        are long enough to be told from cells of a table.
        """
        lines, _, _ = self._baselines()
        pieces = Pieces(lines, *self._ends(), self.tabular)
        gaps = self._gaps(pieces, across_columns=across_columns)
        corridor = corridors(gaps, self.occupied)
        rows = corridor.sum(axis=1)
        if across_columns:
            bridged = (gaps.width < _LARGEST_GAP * gaps.height) | (rows >= 3)
            bridged &= ~parting_columns(gaps, corridor, stacks(pieces), pieces)
            cells = bridged & (gaps.width >= _SURE_GAP * gaps.height)
            self.tabular[gaps.before[cells]] = self.tabular[gaps.after[cells]] = True
        else:
            bridged = (gaps.width < _SURE_GAP * gaps.height) & (rows < 3)
        self._join(gaps.before[bridged], gaps.after[bridged])
        return bool(bridged.any())

    def _gaps(self, pieces: Pieces, *, across_columns: bool) -> Gaps:
        """Gaps between pieces that would make one line of both."""
        n, lines = self.n, pieces.baselines
        # Pieces are ordered by the centres of their first and last letters, and a little within: in
        # slanted writing boxes overlap, and of a colon one dot may have gone to each of two pieces.
        first, last = np.full(n, np.inf), np.full(n, -np.inf)
        np.minimum.at(first, self.piece, self.shapes.x[self.letters])
        np.maximum.at(last, self.piece, self.shapes.x[self.letters])
        every = np.arange(n)
        bottom = np.concatenate((lines.at(every, first), lines.at(every, last)))
        top = bottom - np.tile(lines.height, 2)
        within = np.minimum(0.5 * lines.height, 0.4 * (last - first))
        ends = np.concatenate((first + within, last - within))
        # a piece of one letter has both ends in one place: the left one comes first
        order = np.empty(2 * n)
        order[np.lexsort((np.repeat((0, 1), n), ends))] = np.arange(2 * n)
        i, j = beside(order, top, bottom, band=_BAND * self.x_height)
        facing = (i >= n) & (j < n) & (i - n != j)
        i, j = i[facing] - n, j[facing]
        x = (last[i] + first[j]) / 2
        base_i, base_j = lines.at(i, x), lines.at(j, x)
        low = np.minimum(lines.height[i], lines.height[j])
        high = np.maximum(lines.height[i], lines.height[j])
        shared = np.minimum(base_i, base_j)
        shared = shared - np.maximum(base_i - lines.height[i], base_j - lines.height[j])
        width = pieces.left[j] - pieces.right[i]
        # over a wide gap the rows of a curled page come out of step
        least = np.where(across_columns & (width > 3 * high), 0.35, 0.6)
        # a tall letter close by is of the line; one at a distance is of another type
        unlike = np.where(width < _WORD_SPACE * low, _UNLIKE_BESIDE, _UNLIKE)
        fits = (shared >= least * low) & (high <= unlike * low) & (width <= _LARGEST_TAB * high)
        cost = np.maximum(width, 0) / high + 2 * np.maximum(1 - shared / low, 0)
        cost += 0.5 * np.log(high / low)
        base, offset = (base_i + base_j) / 2, base_j - base_i
        gaps = Gaps(i, j, pieces.right[i], pieces.left[j], base, offset, high).keep(fits)
        return gaps.keep(best_of_both(gaps.before, gaps.after, cost[fits]))

    def _absorb(self) -> None:
        """Join each piece to the longer line in whose x-height zone most of its letters stand."""
        lines, n, size = self._lines(), self.n, self._size
        x, core = self.shapes.middle[self.letters], self.core
        best, most = np.full(x.size, -1, np.int64), np.full(x.size, 0.5)
        for line in lines.near(x, self.level):
            some = np.flatnonzero((line >= 0) & (size[line] > size[self.piece]))
            host, high, level = line[some], core[some], self.level[some]
            x_height, base = lines.x_height[host], lines.baselines.at(host, x[some])
            shared = np.minimum(level + high / 2, base + 0.1 * x_height)
            shared = shared - np.maximum(level - high / 2, base - 1.1 * x_height)
            share = np.minimum(shared / np.minimum(high, x_height), 1.0)
            fits = (high < 2.5 * x_height) & (high > _SMALLEST_BODY * x_height)
            fits &= lines.reaches(host, x[some])
            better = fits & (share > most[some])
            best[some[better]], most[some[better]] = host[better], share[better]
        found = best >= 0
        pair, votes = np.unique(self.piece[found] * n + best[found], return_counts=True)
        guest, host = pair // n, pair % n
        enough = votes >= 0.6 * size[guest]
        guest, host, votes = guest[enough], host[enough], votes[enough]
        chosen = keyed_best(guest, -votes.astype(np.float64))
        self._join(guest[chosen], host[chosen])

    def _guests(self) -> Bools:
        """(S,) which pieces are marks of a longer line, or a few odd letters of it."""
        lines, size, mine = self._lines(), self._size, self.piece
        x, y, high = self.shapes.middle[self.letters], self.level, self.core
        begin, end = self.shapes.left[self.letters], self.shapes.right[self.letters]
        guest = np.zeros(x.size, bool)
        # three and more letters with some structure are writing, however small beside the host
        marks = ((size <= 2) | (np.bincount(mine, self.plain, self.n) > 0.5 * size))[mine]
        for line in lines.near(x, y):
            host = np.maximum(line, 0)
            x_height = lines.x_height[host]
            level, half = lines.levels(host, x, y), high / x_height / 2
            inside = (line >= 0) & (host != mine) & (size[host] >= np.maximum(4, 2 * size[mine]))
            # What is grown together from two lines by a hair or a tail is no line; an initial that
            # stands before lines and reaches down over the next is one of its own.
            across = (begin < lines.right[host]) & (end > lines.left[host])
            near = across | (lines.reaches(host, x) & (level - half > -0.9))
            inside &= np.where(half < 2.5, near, across & (half < 5))
            few = size[mine] <= 4
            crossing = few & (level + half > 0.1) & (level - half < 0.9)
            small = marks & (half < 0.4) & (level > -1.0) & (level < 2.8)
            tall = few & (half < 0.6) & (level > -0.9) & (level < 2.2)
            guest |= inside & (crossing | small | tall)
        guests: Bools = np.bincount(mine, guest, self.n) > 0.5 * size
        return guests

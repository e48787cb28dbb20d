"""The text lines of a page, found from its letters.

Plan. (1) Letters, the components of a letter's size, are linked to the letter beside them in their
row, where both choose each other: pieces of lines. (2) The pieces give the slope of the lines; if
the page stands more than a little out of true, the frame is turned and (1) done again. (3) Each
piece gets a robust baseline; pieces that continue each other are joined, first across gaps that
the rows above and below do not share, then across those that part cells of a table; gutters
between columns stay. (4) Pieces that stand within a longer line go to it. (5) What is left over
and has the structure of letters is taken as type of another size, and the whole is done with it.

Components then belong to lines by where they stand (`LineSet.assign`), not by how they were found.

Glossary: C components, L lines, S pieces of lines, P points. Everything but the arguments is in
the upright frame (`upright`).
"""

from __future__ import annotations

from dataclasses import dataclass
from functools import cached_property

import numpy as np
from numpy.typing import NDArray

from scanclean.baselines import Baselines, Slices, cut_slices, fit_baselines, line_x_heights
from scanclean.clutter import is_hair, is_lump
from scanclean.columns import Gaps, Occupied, Pieces, corridors, parting_columns, stacks
from scanclean.labels import Components
from scanclean.neighbours import (
    beside,
    best_of_both,
    chains,
    keyed_best,
    repeat_range,
    weighted_median,
)
from scanclean.textmeasure import Spread, TextMeasures, measure_spread, measure_text
from scanclean.units import Resolution
from scanclean.upright import Frame, Shapes, place

__all__ = ["LineSet", "find_lines"]

Floats = NDArray[np.float64]
Ints = NDArray[np.int64]
Bools = NDArray[np.bool_]

# all in x-heights unless said otherwise
_SMALLEST_BODY = 0.45
_LARGEST_BODY = 8.0
_RIGHT_SCALE = (0.75, 1.35)  # lines found with a measure further out are looked for again
_BAND = 0.2
_UNLIKE = 2.0  # letters of one line differ less in height, capital and bracket from lower case
_UNLIKE_BESIDE = 2.7  # long f and swung capitals to the next letter
_WORD_SPACE = 1.6  # gaps up to this are never asked whether they part columns
_SURE_GAP = 2.6  # and up to this, if no corridor runs there
_LARGEST_GAP = 14.0  # that one row alone can bridge
_LARGEST_TAB = 40.0  # that the rows of a table can bridge
_SLOPE_TO_TURN = 0.012  # 0.7 degrees: below it rows are found as they stand
_SIZES = 3  # sizes of type that are looked for one after the other
_LETTERS_OF_A_SIZE = 12  # fewer left over are no further size
_REACH = 2.0  # beyond its ends a line still claims marks


@dataclass(frozen=True, eq=False)
class LineSet:
    """Text lines as curves with a size, before anything is numbered; columns of length L.

    Parameters
    ----------
    frame : Frame
    baselines : Baselines
    left, right : (L,) float array
        Ends of the letters.
    x_height : (L,) float array
    """

    frame: Frame
    baselines: Baselines
    left: Floats
    right: Floats
    x_height: Floats

    @property
    def n(self) -> int:
        """L."""
        return self.left.size

    def levels(self, line: Ints, x: Floats, y: Floats) -> Floats:
        """(P,) height of points over the baselines of P lines, in the lines' x-heights."""
        return (self.baselines.at(line, x) - y) / self.x_height[line]

    def reaches(self, line: Ints, x: Floats) -> Bools:
        """(P,) whether places are between the ends of P lines or near enough for a mark."""
        reach = _REACH * self.x_height[line]
        return (x > self.left[line] - reach) & (x < self.right[line] + reach)

    def near(self, x: Floats, y: Floats) -> Ints:
        """(4, P) lines at each place: the two whose baselines are next below, the two above; or -1."""
        found = np.full((4, x.size), -1, np.int64)
        if self.n == 0 or x.size == 0:
            return found
        keys, line, strip, first, width = self._strips
        at = np.floor((x - first) / width).astype(np.int64)
        where = np.searchsorted(keys, at * _KEY + y)
        for k, step in enumerate((0, 1, -1, -2)):
            i = np.clip(where + step, 0, keys.size - 1)
            there = (where + step == i) & (strip[i] == at)
            found[k, there] = line[i[there]]
        return found

    def assign(self, shapes: Shapes) -> Ints:
        """(C,) the line in whose zone each component stands, or -1.

        The zone reaches from below the descenders to above the accents. Where two zones overlap,
        what stands over letters is likelier than what hangs under them.
        """
        best = np.full(shapes.x.size, -1, np.int64)
        least = np.full(shapes.x.size, np.inf)
        for line in self.near(shapes.x, shapes.y):
            some = np.flatnonzero(line >= 0)
            mine = line[some]
            x_height = self.x_height[mine]
            level = self.levels(mine, shapes.x[some], shapes.y[some])
            inside = (level > -1.2) & (level < 3.0) & (shapes.core[some] < 6 * x_height)
            inside &= shapes.right[some] > self.left[mine] - _REACH * x_height
            inside &= shapes.left[some] < self.right[mine] + _REACH * x_height
            cost = np.maximum(level - 1, 0) + 1.8 * np.maximum(-level, 0) + 0.1 * abs(level - 0.5)
            better = inside & (cost < least[some])
            best[some[better]] = mine[better]
            least[some[better]] = cost[better]
        return best

    def keep(self, chosen: Bools | Ints) -> LineSet:
        """The chosen lines, by a mask or in an order."""
        return LineSet(
            self.frame,
            self.baselines.keep(chosen),
            self.left[chosen],
            self.right[chosen],
            self.x_height[chosen],
        )

    @cached_property
    def _strips(self) -> tuple[Floats, Ints, Ints, float, float]:
        """Baselines where they cross upright strips of the page, sorted by strip and level."""
        width = 2 * float(np.median(self.x_height))
        start, stop = self.left - _REACH * self.x_height, self.right + _REACH * self.x_height
        first = float(start.min())
        line, strip = repeat_range(
            np.floor((start - first) / width).astype(np.int64),
            np.floor((stop - first) / width).astype(np.int64) + 1,
        )
        keys = strip * _KEY + self.baselines.at(line, first + (strip + 0.5) * width)
        order = np.argsort(keys, kind="stable")
        return keys[order], line[order], strip[order], first, width


_KEY = 1e7  # more than any page is high


def find_lines(
    components: Components,
    measures: TextMeasures,
    resolution: Resolution | None = None,
    *,
    skew_degrees: float = 0.0,
    spread: Spread | None = None,
) -> LineSet:
    """The text lines of a page.

    Parameters
    ----------
    components : Components
        Of the ink without edges and rules; dirt may still be there.
    measures : TextMeasures
        Of `textmeasure.measure_text`.
    resolution : Resolution, optional
        Matters where x and y differ.
    skew_degrees : float
        Of the text if it is known; found from the letters otherwise.
    spread : Spread, optional
        If it is known already.
    """
    spread = spread or measure_spread(components)
    slope = float(np.tan(np.radians(skew_degrees)))
    frame = Frame.at(slope, resolution)
    found = _no_lines(frame)
    shapes = place(components, spread, frame)
    free = ~(is_lump(components, shapes, measures) | is_hair(components, shapes, measures))
    for _ in range(_SIZES):
        if measures.letters < (_LETTERS_OF_A_SIZE if found.n else 1):
            break
        lines = _lines_of_one_size(components, spread, found, measures, free)
        found = _together(found, lines)
        free &= found.assign(place(components, spread, found.frame)) < 0
        measures = measure_text(components, resolution, spread=spread, among=free)
    return found


def _no_lines(frame: Frame) -> LineSet:
    none, count = np.empty(0), np.empty(0, np.int64)
    return LineSet(frame, Baselines(none, none, np.empty((0, 5)), none, count), none, none, none)


def _together(one: LineSet, other: LineSet) -> LineSet:
    """Lines of two sizes as one set, in the frame of the second."""
    if one.n == 0:
        return other
    a, b = one.baselines, other.baselines
    columns = ("left", "right", "coefficients", "height", "size")
    lines = Baselines(*(np.concatenate((getattr(a, c), getattr(b, c))) for c in columns))
    return LineSet(
        other.frame,
        lines,
        np.concatenate((one.left, other.left)),
        np.concatenate((one.right, other.right)),
        np.concatenate((one.x_height, other.x_height)),
    )


def _lines_of_one_size(
    components: Components, spread: Spread, known: LineSet, measures: TextMeasures, free: Bools
) -> LineSet:
    """Lines of the free components whose letters are about as large as measured."""
    frame, x_height = known.frame, measures.x_height_px
    plain = components.n_runs < 1.25 * (components.box[:, 3] - components.box[:, 1])
    for attempt in range(2):
        for _ in range(3):
            shapes = place(components, spread, frame)
            letters = np.flatnonzero(_bodies(shapes, x_height) & free)
            if letters.size == 0:
                return _no_lines(frame)
            n, piece = _first_pieces(shapes, letters, x_height)
            turn = _slope_of_pieces(shapes, letters, n, piece)
            if known.n or abs(turn) < _SLOPE_TO_TURN:
                break
            frame = Frame((frame.slope + turn) / (1 - frame.slope * turn), frame.aspect)
        chosen = np.zeros(components.n, bool)
        chosen[letters] = True
        slices = cut_slices(components, shapes, chosen, step=1.2 * x_height)
        pieces = _Joining(shapes, slices, letters, n, piece, x_height, plain)
        lines = pieces.to_lines()
        if lines.n == 0 or attempt:
            break
        on_lines = weighted_median(lines.x_height, lines.baselines.size)
        if _RIGHT_SCALE[0] < on_lines / x_height < _RIGHT_SCALE[1]:
            break
        x_height = on_lines
    return lines


def _bodies(shapes: Shapes, x_height: float) -> Bools:
    """(C,) which components have the size of letters, not of marks or pictures."""
    sized = (shapes.core >= _SMALLEST_BODY * x_height) & (shapes.core <= _LARGEST_BODY * x_height)
    like_mark = (shapes.width < _SMALLEST_BODY * x_height) & (shapes.core < 0.6 * x_height)
    return sized & ~like_mark


def _first_pieces(shapes: Shapes, letters: Ints, x_height: float) -> tuple[int, Ints]:
    """Chains of letters that chose each other: how many, and the one of each letter."""
    y, core = shapes.y[letters], shapes.core[letters]
    top, bottom = y - core / 2, y + core / 2
    i, j = beside(shapes.x[letters], top, bottom, band=_BAND * x_height)
    shared = np.minimum(bottom[i], bottom[j]) - np.maximum(top[i], top[j])
    low, high = np.minimum(core[i], core[j]), np.maximum(core[i], core[j])
    gap = shapes.left[letters][j] - shapes.right[letters][i]
    fits = (shared >= 0.4 * low) & (gap <= _WORD_SPACE * high) & (high <= _UNLIKE * low)
    i, j, shared, low, high, gap = (v[fits] for v in (i, j, shared, low, high, gap))
    cost = np.maximum(gap, 0) / high + np.maximum(1 - shared / low, 0) + 0.3 * np.log(high / low)
    chosen = best_of_both(i, j, cost)
    return chains(i[chosen], j[chosen], letters.size)


def _slope_of_pieces(shapes: Shapes, letters: Ints, n: int, piece: Ints) -> float:
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


class _Joining:
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
        self.level, self.core = shapes.y[letters], shapes.core[letters]
        self.plain = plain[letters]
        self.occupied = Occupied(
            shapes.left[letters],
            shapes.right[letters],
            self.level - self.core / 2,
            self.level + self.core / 2,
            x_height / 2,
        )

    def to_lines(self) -> LineSet:
        """Join what belongs together and drop what is no line of its own."""
        for _ in range(2):
            self._bridge(across_columns=False)
        if self.n:
            self._absorb()
            self._drop(self._guests())
        for _ in range(4):
            if self.n == 0 or not self._bridge(across_columns=True):
                break
        if self.n:
            self._absorb()
            self._drop(self._guests())
        return self._lines()

    @property
    def _size(self) -> Ints:
        return np.bincount(self.piece, minlength=self.n)

    def _drop(self, chosen: Bools) -> None:
        """Take pieces out; where their components belong is told by where they stand."""
        number = np.cumsum(~chosen) - 1
        kept = ~chosen[self.piece]
        self.letters, self.piece = self.letters[kept], number[self.piece[kept]]
        self.level, self.core = self.level[kept], self.core[kept]
        self.plain, self.tabular = self.plain[kept], self.tabular[~chosen]
        self.n = int(self.n - chosen.sum())

    def _join(self, i: Ints, j: Ints) -> None:
        self.n, joined = chains(i, j, self.n)
        self.piece = joined[self.piece]
        self.tabular = np.bincount(joined, self.tabular, self.n) > 0

    def _baselines(self) -> tuple[Baselines, Slices, Ints]:
        number = np.full(self.shapes.x.size, -1, np.int64)
        number[self.letters] = self.piece
        group = number[self.slices.component]
        slices, group = self.slices.keep(group >= 0), group[group >= 0]
        return fit_baselines(slices, group, self.n, scale=self.x_height), slices, group

    def _lines(self) -> LineSet:
        if self.n == 0:
            return _no_lines(self.shapes.frame)
        baselines, slices, group = self._baselines()
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
        # Pieces are ordered by the centres of their first and last letters: in slanted writing
        # the boxes of neighbours overlap.
        first, last = np.full(n, np.inf), np.full(n, -np.inf)
        np.minimum.at(first, self.piece, self.shapes.x[self.letters])
        np.maximum.at(last, self.piece, self.shapes.x[self.letters])
        every = np.arange(n)
        bottom = np.concatenate((lines.at(every, first), lines.at(every, last)))
        top = bottom - np.tile(lines.height, 2)
        # a piece of one letter has both ends in one place: the left one comes first
        order = np.empty(2 * n)
        order[np.lexsort((np.repeat((0, 1), n), np.concatenate((first, last))))] = np.arange(2 * n)
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
        """Join a piece of which most letters stand in the x-height zone of one longer line to it."""
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
        some = best >= 0
        pair, votes = np.unique(self.piece[some] * n + best[some], return_counts=True)
        guest, host = pair // n, pair % n
        enough = votes >= 0.6 * size[guest]
        guest, host, votes = guest[enough], host[enough], votes[enough]
        chosen = keyed_best(guest, -votes.astype(np.float64))
        self._join(guest[chosen], host[chosen])

    def _guests(self) -> Bools:
        """(S,) which pieces are marks of a longer line, or a few odd letters of it."""
        lines, size, mine = self._lines(), self._size, self.piece
        x, y, high = self.shapes.middle[self.letters], self.level, self.core
        guest = np.zeros(x.size, bool)
        # three and more letters with some structure are writing, however small beside the host
        marks = ((size <= 2) | (np.bincount(mine, self.plain, self.n) > 0.5 * size))[mine]
        for line in lines.near(x, y):
            host = np.maximum(line, 0)
            x_height = lines.x_height[host]
            level, half = lines.levels(host, x, y), high / x_height / 2
            inside = (line >= 0) & (host != mine) & (size[host] >= np.maximum(4, 2 * size[mine]))
            inside &= (half < 2.5) & lines.reaches(host, x)
            few = size[mine] <= 4
            crossing = few & (level + half > 0.1) & (level - half < 0.9)
            small = marks & (half < 0.4) & (level > -1.0) & (level < 2.8)
            tall = few & (half < 0.6) & (level > -0.9) & (level < 2.2)
            guest |= inside & (crossing | small | tall)
        return np.bincount(mine, guest, self.n) > 0.5 * size

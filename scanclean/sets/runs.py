"""A binary page as a set of points, held as horizontal runs, and the algebra of such sets.

Glossary: H, W page height and width; N runs. Arrays are [row, column], points (x, y), boxes
``[left, top, right, bottom]`` with right and bottom exclusive.

A page is the sorted array of the flat positions at which it changes colour: ``bounds[2 i]`` is
where run i begins and ``bounds[2 i + 1]`` where it ends. Position ``y (W + 1) + x`` gives each
row one column more than the page has; it never holds ink, so runs of two rows never meet and
the whole page is one set of disjoint intervals on a line. Every operation sorts bounds and counts,
and its cost follows the ink, not the pixels. Runs are maximal, so equal sets have equal bounds.
"""

from __future__ import annotations

from collections.abc import Iterable
from dataclasses import dataclass
from functools import cached_property

import numpy as np
from numpy.typing import ArrayLike, NDArray

__all__ = [
    "RunSet",
    "complement",
    "crop",
    "difference",
    "intersection",
    "is_subset",
    "pad",
    "reflect",
    "symmetric_difference",
    "translate",
    "transpose",
    "union",
]

Ints = NDArray[np.int64]


@dataclass(frozen=True, eq=False, repr=False)
class RunSet:
    """A set of points on a page of H x W pixels.

    Make one with `from_mask`, `from_runs`, `empty` or `full`; the constructor checks nothing.

    Parameters
    ----------
    shape : (int, int)
        H and W.
    bounds : (2 N,) int64 array
        Flat positions where rows turn to ink and back to paper, strictly increasing.

    Examples
    --------
    >>> page = RunSet.from_mask([[0, 1, 1], [1, 0, 1]])
    >>> page.area, page.n_runs
    (4, 3)
    >>> (~page).to_mask().astype(int).tolist()
    [[1, 0, 0], [0, 1, 0]]
    """

    shape: tuple[int, int]
    bounds: Ints

    def __post_init__(self) -> None:
        self.bounds.setflags(write=False)

    # ---- making one

    @classmethod
    def empty(cls, shape: tuple[int, int]) -> RunSet:
        """The page without ink."""
        return cls(_checked_shape(shape), np.empty(0, np.int64))

    @classmethod
    def full(cls, shape: tuple[int, int]) -> RunSet:
        """The page that is ink all over."""
        height, width = _checked_shape(shape)
        if width == 0:
            return cls.empty(shape)
        first = np.arange(height, dtype=np.int64) * (width + 1)
        return cls((height, width), np.stack((first, first + width), axis=1).ravel())

    @classmethod
    def from_mask(cls, mask: ArrayLike) -> RunSet:
        """The true points of a (H, W) array.

        Raises
        ------
        ValueError
            If the array has not two dimensions.
        """
        array = np.asarray(mask)
        if array.ndim != 2:
            raise ValueError(f"a page has two dimensions, got {array.ndim}")
        height, width = array.shape
        padded = np.zeros((height, width + 1), bool)
        padded[:, :width] = array
        flat = padded.ravel()
        bounds = np.flatnonzero(flat[1:] != flat[:-1])
        bounds += 1
        if flat.size and flat[0]:
            bounds = np.concatenate(([0], bounds))
        return cls((height, width), bounds.astype(np.int64, copy=False))

    @classmethod
    def from_runs(
        cls, shape: tuple[int, int], row: ArrayLike, start: ArrayLike, stop: ArrayLike
    ) -> RunSet:
        """The union of runs ``[start, stop)``, in any order; what lies off the page is cut.

        Parameters
        ----------
        shape : (int, int)
        row, start, stop : (N,) int arrays
            A run with ``stop <= start`` is empty.
        """
        height, width = _checked_shape(shape)
        y, x0, x1 = (np.asarray(a, np.int64).ravel() for a in (row, start, stop))
        if not y.size == x0.size == x1.size:
            raise ValueError("row, start and stop must have the same length")
        return cls((height, width), covered(*clipped((height, width), y, x0, x1), at_least=1))

    # ---- looking at it

    @cached_property
    def row(self) -> Ints:
        """(N,) int64: the row of each run."""
        return self.bounds[0::2] // (self.shape[1] + 1)

    @cached_property
    def start(self) -> Ints:
        """(N,) int64: the first column of each run."""
        return self.bounds[0::2] - self.row * (self.shape[1] + 1)

    @cached_property
    def stop(self) -> Ints:
        """(N,) int64: the column after the last one of each run."""
        return self.bounds[1::2] - self.row * (self.shape[1] + 1)

    @property
    def length(self) -> Ints:
        """(N,) int64: the pixels of each run."""
        return self.bounds[1::2] - self.bounds[0::2]

    @cached_property
    def row_ptr(self) -> Ints:
        """(H + 1,) int64: runs ``row_ptr[y]:row_ptr[y + 1]`` stand in row y."""
        lines = np.arange(self.shape[0] + 1, dtype=np.int64) * (self.shape[1] + 1)
        return np.searchsorted(self.bounds[0::2], lines)

    @property
    def n_runs(self) -> int:
        """N, the number of runs."""
        return self.bounds.size // 2

    @property
    def area(self) -> int:
        """The number of points."""
        return int(self.length.sum())

    @cached_property
    def box(self) -> tuple[int, int, int, int]:
        """The smallest box round all points; ``(0, 0, 0, 0)`` of an empty set."""
        if not self:
            return (0, 0, 0, 0)
        left, right = int(self.start.min()), int(self.stop.max())
        return (left, int(self.row[0]), right, int(self.row[-1]) + 1)

    def to_mask(self) -> NDArray[np.bool_]:
        """(H, W) bool array, True on the points."""
        height, width = self.shape
        end = height * (width + 1)
        colour = np.zeros(self.bounds.size + 1, bool)
        colour[1::2] = True
        lengths = np.diff(self.bounds, prepend=0, append=end)
        return np.repeat(colour, lengths).reshape(height, width + 1)[:, :width]

    def points(self) -> Ints:
        """(area, 2) int64: x, y of every point, row by row."""
        length = self.length
        first = np.repeat(self.bounds[0::2] - _before(length), length)
        flat = first + np.arange(first.size)
        y = flat // (self.shape[1] + 1)
        return np.stack((flat - y * (self.shape[1] + 1), y), axis=1)

    # ---- as a set

    def __bool__(self) -> bool:
        return self.bounds.size > 0

    def __eq__(self, other: object) -> bool:
        if not isinstance(other, RunSet):
            return NotImplemented
        return self.shape == other.shape and np.array_equal(self.bounds, other.bounds)

    def __hash__(self) -> int:
        return hash((self.shape, self.bounds.tobytes()))

    def __or__(self, other: RunSet) -> RunSet:
        return union(self, other)

    def __and__(self, other: RunSet) -> RunSet:
        return intersection(self, other)

    def __sub__(self, other: RunSet) -> RunSet:
        return difference(self, other)

    def __xor__(self, other: RunSet) -> RunSet:
        return symmetric_difference(self, other)

    def __invert__(self) -> RunSet:
        return complement(self)

    def __le__(self, other: RunSet) -> bool:
        return is_subset(self, other)

    def __repr__(self) -> str:
        height, width = self.shape
        return f"<RunSet {width} x {height}: {self.area} points in {self.n_runs} runs>"


def union(*sets: RunSet) -> RunSet:
    """The points that are in any of one or more pages of one shape.

    Raises
    ------
    ValueError
        If no page is given or the shapes differ.
    """
    shape = one_shape(sets)
    sets = tuple(s for s in sets if s) or sets[:1]
    return sets[0] if len(sets) == 1 else RunSet(shape, covered(*_all_bounds(sets), at_least=1))


def intersection(*sets: RunSet) -> RunSet:
    """The points that are in all of one or more pages of one shape; raises as `union`."""
    shape = one_shape(sets)
    if not all(sets):
        return RunSet.empty(shape)
    return RunSet(shape, covered(*_all_bounds(sets), at_least=len(sets)))


def difference(a: RunSet, b: RunSet) -> RunSet:
    """The points of `a` that are not in `b`; raises as `union`.

    >>> line = RunSet.from_mask([[1, 1, 1, 1]])
    >>> difference(line, RunSet.from_mask([[0, 1, 0, 0]])).to_mask().astype(int).tolist()
    [[1, 0, 1, 1]]
    """
    shape = one_shape((a, b))
    if not a or not b:
        return a
    # b read inside out: between two of its runs lies one interval of its complement, and the
    # first and last reach beyond the page on both sides
    height, width = shape
    starts = np.concatenate((a.bounds[0::2], [0], b.bounds[1::2]))
    stops = np.concatenate((a.bounds[1::2], b.bounds[0::2], [height * (width + 1)]))
    return RunSet(shape, covered(starts, stops, at_least=2))


def symmetric_difference(a: RunSet, b: RunSet) -> RunSet:
    """The points that are in one of two pages only; raises as `union`."""
    shape = one_shape((a, b))
    # colour changes of both pages add modulo 2: those at one place cancel
    bounds = np.sort(np.concatenate((a.bounds, b.bounds)), kind="stable")
    if bounds.size:
        twin = bounds[1:] == bounds[:-1]
        bounds = bounds[~(np.append(twin, False) | np.append(False, twin))]
    return RunSet(shape, bounds)


def complement(a: RunSet) -> RunSet:
    """The points of the page that are not in `a`."""
    return symmetric_difference(RunSet.full(a.shape), a)


def is_subset(a: RunSet, b: RunSet) -> bool:
    """Whether every point of `a` is in `b`; raises as `union`."""
    one_shape((a, b))
    # the run of b that begins last before each run of a must hold all of it
    i = np.searchsorted(b.bounds[0::2], a.bounds[0::2], side="right") - 1
    if (i < 0).any():
        return False
    return bool((b.bounds[1::2][i] >= a.bounds[1::2]).all())


def translate(a: RunSet, dx: int, dy: int) -> RunSet:
    """`a` moved by dx to the right and dy down; what leaves the page is cut."""
    starts, stops = clipped(a.shape, a.row + dy, a.start + dx, a.stop + dx)
    return RunSet(a.shape, np.stack((starts, stops), axis=1).ravel())


def reflect(a: RunSet, about: tuple[float, float] | None = None) -> RunSet:
    """`a` reflected in a point: (x, y) goes to ``2 about - (x, y)``.

    Parameters
    ----------
    a : RunSet
    about : (float, float), optional
        x and y of the centre, each a multiple of 0.5; by default the page's own centre, which turns
        the page by 180 degrees. What leaves the page is cut.

    Raises
    ------
    ValueError
        If the centre is not on the half-pixel grid.
    """
    height, width = a.shape
    x, y = ((width - 1) / 2, (height - 1) / 2) if about is None else about
    if (2 * x) % 1 or (2 * y) % 1:
        raise ValueError(f"the centre's coordinates must be multiples of 0.5, got {about}")
    sx, sy = int(2 * x), int(2 * y)
    starts, stops = clipped(a.shape, sy - a.row, sx + 1 - a.stop, sx + 1 - a.start)
    return RunSet(a.shape, np.stack((starts[::-1], stops[::-1]), axis=1).ravel())


def transpose(a: RunSet) -> RunSet:
    """`a` with rows and columns exchanged, a (W, H) page."""
    # a page of 8.7 megapixels is drawn, turned and read back in 8 ms
    return RunSet.from_mask(a.to_mask().T)


def pad(a: RunSet, left: int, top: int, right: int, bottom: int) -> RunSet:
    """`a` on a page with so many paper pixels more on each side.

    Raises
    ------
    ValueError
        If a side is negative.
    """
    if min(left, top, right, bottom) < 0:
        raise ValueError(f"a margin must not be negative, got {(left, top, right, bottom)}")
    height, width = a.shape
    return crop(a, (-left, -top, width + right, height + bottom))


def crop(a: RunSet, box: tuple[int, int, int, int]) -> RunSet:
    """The part of `a` in a box, as a page of the box's size; the box may reach off the page.

    Raises
    ------
    ValueError
        If right is left of left, or bottom above top.
    """
    left, top, right, bottom = box
    shape = (bottom - top, right - left)
    if min(shape) < 0:
        raise ValueError(f"a box needs left <= right and top <= bottom, got {box}")
    first = a.bounds[0::2]
    some = slice(*np.searchsorted(first, [max(y, 0) * (a.shape[1] + 1) for y in (top, bottom)]))
    starts, stops = clipped(shape, a.row[some] - top, a.start[some] - left, a.stop[some] - left)
    return RunSet(shape, np.stack((starts, stops), axis=1).ravel())


# ---- kernels: intervals on the line of flat positions


def covered(starts: Ints, stops: Ints, *, at_least: int) -> Ints:
    """Bounds of what lies in `at_least` or more of the intervals ``[starts, stops)``.

    Order and overlaps are free; starts and stops are counted apart, so they need not be paired.
    """
    position = np.concatenate((starts, stops))
    # timsort runs through sorted stretches in linear time
    order = np.argsort(position, kind="stable")
    position = position[order]
    depth = np.cumsum(np.where(order < starts.size, 1, -1))
    last = np.ones(position.size, bool)  # of the changes at one place only the sum counts
    np.not_equal(position[1:], position[:-1], out=last[:-1])
    position, inside = position[last], depth[last] >= at_least
    turns = np.diff(inside, prepend=False)
    return position[turns]


def clipped(shape: tuple[int, int], row: Ints, start: Ints, stop: Ints) -> tuple[Ints, Ints]:
    """Flat starts and stops of the runs' parts on the page, in the order given."""
    height, width = shape
    start, stop = np.maximum(start, 0), np.minimum(stop, width)
    there = (row >= 0) & (row < height) & (start < stop)
    first = row[there] * (width + 1)
    return first + start[there], first + stop[there]


def _all_bounds(sets: Iterable[RunSet]) -> tuple[Ints, Ints]:
    bounds = np.concatenate([s.bounds for s in sets])
    return bounds[0::2], bounds[1::2]


def _before(length: Ints) -> Ints:
    """The sum of all lengths before each one."""
    return np.cumsum(length) - length


def one_shape(sets: tuple[RunSet, ...]) -> tuple[int, int]:
    if not sets:
        raise ValueError("at least one page is needed")
    if any(s.shape != sets[0].shape for s in sets):
        raise ValueError(f"the pages differ in shape: {sorted({s.shape for s in sets})}")
    return sets[0].shape


def _checked_shape(shape: tuple[int, int]) -> tuple[int, int]:
    height, width = shape
    if height < 0 or width < 0:
        raise ValueError(f"a page's shape must not be negative, got {shape}")
    return int(height), int(width)

"""Dotted and dashed rules: chains of like marks at even steps along a straight line.

Rows of hyphens and of full stops are chains too, so the marks must be closer than a typewriter's
characters stand, or longer than a hyphen.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from scanclean.rules.smoothing import fit_lines
from scanclean.sets.labels import label
from scanclean.sets.runs import RunSet
from scanclean.units import Length, Resolution

__all__ = ["DashedRule", "find_dashes"]

Bools = NDArray[np.bool_]
Floats = NDArray[np.float64]
Ints = NDArray[np.int64]

_MARK_MM, _GAP_MM = 7.0, 3.2  # the longest mark and the longest gap
_THICK_MM = 0.8
_SOLID = 0.65  # of its box is ink
_MARKS = 6  # of a chain, before its line is known
_DOT_PITCH_MM = 1.5  # closer than characters of 15 to the inch
_DASH_MM = 2.3  # longer than a hyphen or the bars of an equals sign
_SLENDER = 3.0  # length over thickness of a dash
_LENGTH_MM, _DASHED_MM = 15.0, 30.0
_EVEN = 0.75  # of a chain's marks and steps are like the others
_FULL = 0.6  # of a chain's places hold a mark
_BEND_PX = 1.2
_LEAN = 0.06
_REACH_MM = 20.0  # beyond its ends a chain goes on where strokes interrupt it
_GAP_SHARE = 0.8  # of a dash
_MOST_MARKS = 20_000  # more are noise


@dataclass(frozen=True, eq=False)
class DashedRule:
    """A chain of marks.

    Parameters
    ----------
    vertical : bool
    box : (int, int, int, int)
    thickness_px : float
    dash : (float, float)
        Length of a mark and of a gap, in pixels.
    centre : (2, 2) float array
        Points x, y at both ends.
    """

    vertical: bool
    box: tuple[int, int, int, int]
    thickness_px: float
    dash: tuple[float, float]
    centre: Floats


def find_dashes(
    ink: RunSet, resolution: Resolution, *, directions: tuple[bool, ...], max_thickness: Length
) -> tuple[list[DashedRule], RunSet]:
    """Find dotted and dashed rules.

    Parameters
    ----------
    ink : RunSet
        The page, without its other rules.
    resolution : Resolution
    directions : tuple of bool
        False to look along x, True along y.
    max_thickness : Length

    Returns
    -------
    rules : list of DashedRule
    taken : RunSet
        The marks that stand free; those that strokes run into stay.
    """
    marks = label(ink)
    taken = np.zeros(marks.n, bool)
    found = []
    for vertical in directions:
        turned = resolution.transposed if vertical else resolution
        box = marks.box[:, [1, 0, 3, 2]] if vertical else marks.box
        length, height = box[:, 2] - box[:, 0], box[:, 3] - box[:, 1]
        thickness = min(max_thickness.px(turned.y), _THICK_MM * turned.y_mm) + 2
        fits = (height <= thickness) & (length <= _MARK_MM * turned.x_mm)
        fits &= (np.minimum(length, height) >= 2) & (length >= 0.6 * height)
        fits &= (marks.area >= _SOLID * length * height) & ~taken
        chosen = np.flatnonzero(fits)
        if not _MARKS <= chosen.size <= _MOST_MARKS:
            continue
        chosen = chosen[np.argsort(box[chosen, 0], kind="stable")]
        rules, members = _chained(_Marks(*box[chosen].T), turned.x_mm, vertical)
        found += rules
        taken[chosen[members]] = True
    return found, marks.keep(taken)


@dataclass(frozen=True, eq=False)
class _Marks:
    """Marks in the order of their left edges."""

    left: Ints
    top: Ints
    right: Ints
    bottom: Ints

    @property
    def length(self) -> Ints:
        return self.right - self.left

    @property
    def height(self) -> Ints:
        return self.bottom - self.top

    @property
    def x(self) -> Floats:
        return np.asarray((self.left + self.right - 1) / 2)

    @property
    def y(self) -> Floats:
        return np.asarray((self.top + self.bottom - 1) / 2)

    def select(self, chosen: Ints) -> _Marks:
        return _Marks(*(a[chosen] for a in (self.left, self.top, self.right, self.bottom)))

    def line(self) -> tuple[float, float]:
        """Offset and slope of the line along them."""
        offset, slope = fit_lines(self.x, self.y, np.zeros(self.x.size, np.int64), 1)
        return float(offset[0]), float(slope[0])


def _chained(marks: _Marks, mm: float, vertical: bool) -> tuple[list[DashedRule], Bools]:
    """The rules among chains of marks, and the marks that belong to them."""
    chain = _chains(marks, mm)
    found, members = [], np.zeros(chain.size, bool)
    for number in np.flatnonzero(np.bincount(chain) >= _MARKS):
        one = np.flatnonzero(chain == number)
        if members[one].any() or not _is_rule(marks.select(one), mm):
            continue
        size = 0
        while size != (size := one.size):
            one = np.flatnonzero(_on_line(marks, marks.select(one), mm))
        members[one] = True
        found.append(_record(marks.select(one), vertical))
    return found, members


def _chains(marks: _Marks, mm: float) -> Ints:
    """A number for each mark, shared by those that follow each other."""
    from scipy.sparse import csr_array
    from scipy.sparse.csgraph import connected_components

    n = marks.left.size
    lo = np.searchsorted(marks.left, marks.right, side="left")
    hi = np.searchsorted(marks.left, marks.right + _GAP_MM * mm, side="right")
    count = np.maximum(hi - lo, 0)
    i = np.repeat(np.arange(n), count)
    j = np.arange(i.size) - np.repeat(np.cumsum(count) - count - lo, count)
    like = np.abs(marks.y[j] - marks.y[i]) <= 1 + _LEAN * (marks.left[j] - marks.left[i])
    like &= np.abs(marks.height[j] - marks.height[i]) <= 2
    like &= np.abs(marks.length[j] - marks.length[i]) <= 0.3 * marks.length[i] + 2
    i, j = i[like], j[like]
    # each mark to the next one only; pairs stand in the order of their gaps
    first = np.diff(i, prepend=-1) != 0
    i, j = i[first], j[first]
    graph = csr_array((np.ones(i.size, np.int8), (i, j)), shape=(n, n))
    return connected_components(graph, directed=False)[1].astype(np.int64)


def _is_rule(marks: _Marks, mm: float) -> bool:
    """Whether a chain is even, straight and long enough, and no row of characters."""
    step = np.diff(marks.left).astype(float)
    mark, pitch = float(np.median(marks.length)), float(np.median(step))
    # where a mark is missing the step is twice as long
    steps = np.maximum(np.rint(step / max(pitch, 1.0)), 1)
    full = steps.size >= _FULL * steps.sum()
    step = step / steps
    even = (np.abs(marks.length - mark) <= 0.25 * mark + 1.5).mean() >= _EVEN
    even &= (np.abs(step - pitch) <= 0.12 * pitch + 1).mean() >= _EVEN
    offset, slope = marks.line()
    straight = np.median(np.abs(marks.y - offset - slope * marks.x)) <= _BEND_PX
    extent = (marks.right[-1] - marks.left[0]) / mm
    dotted = pitch <= _DOT_PITCH_MM * mm and extent >= _LENGTH_MM
    dashed = mark >= max(_DASH_MM * mm, _SLENDER * float(np.median(marks.height)))
    dashed &= pitch <= (1 + _GAP_SHARE) * mark  # ones below each other stand farther apart
    return bool(full and even and straight and (dotted or (dashed and extent >= _DASHED_MM)))


def _on_line(marks: _Marks, chain: _Marks, mm: float) -> Bools:
    """All like marks on a chain's line: it goes on beyond what strokes interrupt."""
    offset, slope = chain.line()
    near = np.abs(marks.y - offset - slope * marks.x) <= _BEND_PX + 0.3
    near &= np.abs(marks.height - np.median(chain.height)) <= 2
    around = _REACH_MM * mm
    near &= (marks.left > chain.left[0] - around) & (marks.right < chain.right[-1] + around)
    return np.asarray(near & (marks.length <= 1.3 * np.median(chain.length) + 2))


def _record(marks: _Marks, vertical: bool) -> DashedRule:
    mark, pitch = float(np.median(marks.length)), float(np.median(np.diff(marks.left)))
    box = (
        int(marks.left.min()),
        int(marks.top.min()),
        int(marks.right.max()),
        int(marks.bottom.max()),
    )
    offset, slope = marks.line()
    x = np.array([box[0], box[2]], float)
    points = np.stack((x, offset + slope * (x - 0.5) + 0.5), axis=1)
    return DashedRule(
        vertical,
        (box[1], box[0], box[3], box[2]) if vertical else box,
        float(np.median(marks.height)),
        (mark, pitch - mark),
        points[:, ::-1] if vertical else points,
    )

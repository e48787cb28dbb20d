"""Strokes across ruled lines told by their shape alone, where no tone helps.

On a bitonal scan, or where rule and ink are both as dark as the scanner sees, a stroke inside a
rule leaves no trace of its own. What comes out of the rule on one side or both tells its way
through: the rule is straightened, and along a fan of slopes the ink is followed outward from its
two edges.

Glossary: N columns of straightened lines; rows run from -half to half across the line.
"""

from __future__ import annotations

import numpy as np
from numpy.typing import NDArray

from scanclean.rules.lines import Lines
from scanclean.sets.runs import RunSet

__all__ = ["edges_of", "modal_stroke", "strokes_within"]

Bools = NDArray[np.bool_]
Floats = NDArray[np.float64]
Ints = NDArray[np.int64]

_SLOPES = np.array([0, 0.25, -0.25, 0.5, -0.5, 0.75, -0.75, 1, -1, 1.4, -1.4, 2, -2])  # dx / dy
_OPPOSITE = np.array([_SLOPES.tolist().index(-s) for s in _SLOPES.tolist()])
_STEEPNESS = 0.6  # pixels of length that a slope of 1 must gain over an upright way
_LEAST = 3  # pixels a stroke sticks out of the rule
_LONGEST = 0.7  # of the longest way from a point: nearly as long will do
_LEAN = 0.25  # slope from which two ends lean towards each other
_BOWL = 5  # strokes' widths between the ends of a bowl
_SHARE = 0.2  # of the free columns: the rows they fill belong to the line


def modal_stroke(ink: RunSet) -> int:
    """The most frequent width of strokes in pixels, from 2 to 24; 4 without ink."""
    count = np.bincount(np.minimum(ink.length, 25), minlength=27)[:26].astype(float)
    count[:2] = 0
    smooth = np.convolve(count, [0.25, 0.5, 0.25], mode="same")[:25]
    smooth[:2] = 0
    return int(smooth.argmax()) if smooth.any() else 4


def edges_of(lines: Lines, page: Bools) -> tuple[Floats, Floats]:
    """From where to where across its centre each line is ink.

    Parameters
    ----------
    lines : Lines
    page : (H, W) bool array
        Ink, turned so that the lines run along its rows.

    Returns
    -------
    low, high : (T,) float arrays
        In rows from the centre; rows that a fifth of the columns without strokes fill count.
    """
    n, samples = len(lines), lines.samples
    first_low, first_high = lines.profiles.extent
    some = np.flatnonzero(lines.free & lines.within)[::3]
    row = lines.top[some, None] + np.arange(samples)
    is_ink = _sampled(page, row, lines.column[some])
    half_rows = 2 * samples
    place = np.floor((row - lines.centre[some, None] + samples / 2) * 2).astype(np.int64)
    place = np.clip(place, 0, half_rows - 1) + half_rows * lines.track[some, None]
    total = np.bincount(place.ravel(), minlength=n * half_rows)
    filled = np.bincount(place.ravel(), is_ink.ravel(), n * half_rows) / np.maximum(total, 1)
    u = (np.arange(half_rows) + 0.5) / 2 - samples / 2
    near = (u >= first_low[:, None] - 1) & (u <= first_high[:, None] + 1)
    on = near & (filled.reshape(n, half_rows) > _SHARE)
    low = np.where(on, u, np.inf).min(axis=1) - 0.25
    high = np.where(on, u, -np.inf).max(axis=1) + 0.25
    found = on.any(axis=1)
    return np.where(found, low, first_low), np.where(found, high, first_high)


def strokes_within(
    page: Bools, row: Ints, column: Ints, half: int, stroke: int
) -> tuple[Bools, Bools]:
    """The pixels of a line that belong to strokes.

    1. A stroke that comes out on both sides goes straight through, in the direction that is nearly
       the longest on one of them.
    2. One that comes out on one side only goes on in its direction to the other edge: how deep it
       really reaches cannot be seen, and half a character lost is worse than a foot too long.
    3. Two ends that lean towards each other are a bowl that closes inside the line.
    4. What sticks out less than a stroke's width lies along the line; the rest of it is inside.

    Parameters
    ----------
    page : (H, W) bool array
        Ink, turned so that the line runs along its rows.
    row, column : (N,) int64 arrays
        The middle pixel of the line in each column; columns of one line stand in a row, and lines
        are at least some strokes' widths apart.
    half : int
        Rows of the line on both sides of the middle one.
    stroke : int
        Usual width of strokes in pixels.

    Returns
    -------
    inside : (2 half + 1, N) bool array
        Ink in the line.
    kept : (2 half + 1, N) bool array
        The part of it that is stroke.
    """
    far = max(8, 2 * stroke)
    reach = half + far + 1
    strip = np.ascontiguousarray(
        _sampled(page, row[:, None] + np.arange(-reach, reach + 1), column).T
    )
    # the two sides, each from the line's edge outward
    out = strip[reach - half - 1 :: -1][:far], strip[reach + half + 1 :][:far]
    length = np.stack([_lengths(side) for side in out])
    kept = np.zeros((2 * half + 1, row.size), bool)
    through = _through(length, kept)
    for d in (0, 1):
        # seen from this side the line is entered at row 0
        view = kept if d == 0 else kept[::-1]
        slope, longest = _best(length[d])
        _run_in(view, slope, longest, through[d])
        _close_bowls(view, slope, longest, stroke)
        _lie_along(view, out[d], stroke)
    inside = strip[reach - half : reach + half + 1]
    return inside, _without_slits(kept) & inside


def _sampled(page: Bools, row: Ints, column: Ints) -> Bools:
    """Ink at (n, k) rows and (n,) columns; none off the page."""
    high, wide = page.shape
    on_page = (row >= 0) & (row < high) & (column < wide)[:, None]
    ink = page[np.clip(row, 0, high - 1), np.minimum(column, wide - 1)[:, None]]
    return np.asarray(ink & on_page)


def _moved(a: Bools, by: int) -> Bools:
    """a[..., x + by], nothing where that is outside."""
    moved = np.zeros_like(a)
    n = a.shape[-1]
    if by >= 0:
        moved[..., : max(n - by, 0)] = a[..., by:]
    else:
        moved[..., -by:] = a[..., : max(n + by, 0)]
    return moved


def _lengths(out: Bools) -> NDArray[np.int8]:
    """(slopes, N) int8: how far ink runs on outward along each slope."""
    length = np.zeros((_SLOPES.size, out.shape[1]), np.int8)
    for i, slope in enumerate(_SLOPES):
        alive = np.ones(out.shape[1], bool)
        for k, line in enumerate(out):
            alive = alive & _moved(line, round(slope * k))
            length[i] += alive
    return length


def _best(length: NDArray[np.int8]) -> tuple[Floats, NDArray[np.int8]]:
    """Slope of the longest way out of each column, and its length; steep ways are preferred."""
    best = (length - _STEEPNESS * np.abs(_SLOPES)[:, None]).argmax(axis=0)
    return _SLOPES[best], np.take_along_axis(length, best[None], axis=0)[0]


def _through(length: NDArray[np.int8], kept: Bools) -> tuple[Bools, Bools]:
    """Keep what runs through; tells for each side the columns where it does."""
    rows, n = kept.shape
    long = length >= _LEAST
    longest = length >= _LONGEST * length.max(axis=1)[:, None]
    met = np.zeros((2, n), bool)
    for i, slope in enumerate(_SLOPES):
        # down along the slope, so out of the upper side against it
        j = _OPPOSITE[i]
        across = round(slope * (rows + 1))
        way = long[0, j] & _moved(long[1, i], across)
        way &= longest[0, j] | _moved(longest[1, i], across)
        met[0] |= way
        met[1] |= _moved(way, -across)
        for k in range(rows):
            kept[k] |= _moved(way, -round(slope * (k + 1)))
    return met[0], met[1]


def _run_in(view: Bools, slope: Floats, longest: NDArray[np.int8], through: Bools) -> None:
    """Let strokes go on into the line: half way where they are met, else to the other edge."""
    rows, n = view.shape
    source = np.flatnonzero(longest >= _LEAST)
    depth = np.where(through[source], (rows + 1) // 2, rows)
    for k in range(rows):
        at = source[k < depth]
        at = at - np.rint(slope[at] * (k + 1)).astype(np.int64)
        view[k, at[(at >= 0) & (at < n)]] = True


def _close_bowls(view: Bools, slope: Floats, longest: NDArray[np.int8], stroke: int) -> None:
    """Fill between neighbouring ends that lean towards each other."""
    n = view.shape[1]
    on = longest >= 2
    begin, end = _stretches(on)
    if begin.size < 2:
        return
    total = np.concatenate(([0.0], np.cumsum(np.where(on, slope, 0))))
    left = np.maximum(begin[:-1], end[:-1] - 4)
    right = np.minimum(end[1:], begin[1:] + 4)
    gap = begin[1:] - end[:-1]
    leaning = (total[end[:-1]] - total[left]) / (end[:-1] - left) <= -_LEAN
    leaning &= (total[right] - total[begin[1:]]) / (right - begin[1:]) >= _LEAN
    bowl = leaning & (gap >= 2) & (gap <= _BOWL * stroke)
    middle = (begin + end) // 2
    change = np.zeros(n + 1, np.int64)
    np.add.at(change, middle[:-1][bowl], 1)
    np.add.at(change, middle[1:][bowl], -1)
    view[: stroke + 2, np.cumsum(change[:-1]) > 0] = True


def _lie_along(view: Bools, out: Bools, stroke: int) -> None:
    """Keep of strokes that lie on the line's edge what must be inside of it."""
    sticks_out = np.logical_and.accumulate(out[: stroke + 1], axis=0).sum(axis=0)
    begin, end = _stretches(sticks_out >= 1)
    wide = end - begin >= max(4, stroke)
    lying = np.zeros(view.shape[1] + 1, np.int64)
    np.add.at(lying, begin[wide], 1)
    np.add.at(lying, end[wide], -1)
    inside = (np.cumsum(lying[:-1]) > 0) & (sticks_out <= stroke)
    depth = np.where(inside, stroke - sticks_out + 1, 0)
    view |= np.arange(view.shape[0])[:, None] < depth


def _without_slits(kept: Bools) -> Bools:
    """Gaps of one or two pixels filled: between the slanting edges of strokes is no paper."""
    left, right = _moved(kept, -1), _moved(kept, 1)
    left_two, right_two = left | _moved(kept, -2), right | _moved(kept, 2)
    return kept | (left & right_two) | (left_two & right)


def _stretches(mask: Bools) -> tuple[Ints, Ints]:
    """Begin and end (exclusive) of each stretch of trues."""
    change = np.flatnonzero(np.diff(np.concatenate(([False], mask, [False]))))
    return change[0::2], change[1::2]

"""Which short lines belong to ruled work: sides of boxes and ticks of combs.

A long straight line is a rule by itself. A short one could be the stroke of a letter; it is a rule
where other lines say so. Lines are given in millimetres here, each with its position ``along`` its
direction and ``across``; the other direction has the two exchanged.
"""

from __future__ import annotations

from dataclasses import dataclass, fields
from typing import TypeAlias

import numpy as np
from numpy.typing import NDArray

from scanclean.rules.smoothing import weighted_median

__all__ = ["Segments", "hatched", "short_rules", "worth_measuring"]

Bools = NDArray[np.bool_]
Floats = NDArray[np.float64]
Ints = NDArray[np.int64]

_JOINT_MM = 0.45  # between the end of a line and the line it stands on
_BOX_SIDES = 6  # like sides of boxes in a row that no rule joins: a row of three at least
_STEM_MM = 8.0  # letters that fill in forms are not as tall
_TICK_PITCH_MM = 3.2  # the closest ticks; characters of a typewriter stand closer
_CLEAR = 0.6  # isolated: what half of a row's ticks are at least
_ROW_MM = 40.0  # ticks of one row are compared within this
_HATCH_MM, _HATCH_LINES = 3.0, 5


@dataclass(frozen=True, eq=False)
class Segments:
    """Straight lines of one direction, as columns of length n, in millimetres.

    Parameters
    ----------
    start, stop : (n,) float arrays
        Ends, along.
    offset, slope : (n,) float arrays
        across = offset + slope * along.
    half : (n,) float array
        Half the thickness.
    peak : (n,) float array
        Density.
    isolated : (n,) float array
        Share of the length at which the line stands alone.
    """

    start: Floats
    stop: Floats
    offset: Floats
    slope: Floats
    half: Floats
    peak: Floats
    isolated: Floats

    def __len__(self) -> int:
        return self.start.size

    @property
    def length(self) -> Floats:
        """(n,) float."""
        return self.stop - self.start

    @property
    def middle(self) -> Floats:
        """(n,) float: across, at half length."""
        return np.asarray(self.offset + self.slope * (self.start + self.stop) / 2)

    def select(self, chosen: Bools | Ints) -> Segments:
        """Those that a (n,) bool array or their numbers choose."""
        return Segments(*(getattr(self, f.name)[chosen] for f in fields(self)))

    @classmethod
    def joined(cls, *parts: Segments) -> Segments:
        """All of them, one after another."""
        if not parts:
            return cls(*(np.empty(0) for _ in fields(cls)))
        return cls(*(np.concatenate([getattr(p, f.name) for p in parts]) for f in fields(cls)))


Pair: TypeAlias = tuple[Segments, Segments]


def worth_measuring(lines: Pair, rules: Pair) -> tuple[Bools, Bools]:
    """Short lines that their place alone does not rule out: the first sieve of `short_rules`."""
    closed, _ = close_frames(lines, rules)
    stand = [meets(lines[d], rules[1 - d]).any(axis=(1, 2)) for d in (0, 1)]
    return closed[0] | stand[0], closed[1] | stand[1]


def short_rules(lines: Pair, rules: Pair) -> tuple[Bools, Bools]:
    """Short lines that are rules because of the lines round them.

    Parameters
    ----------
    lines : pair of Segments
        Measured candidates, along x and along y.
    rules : pair of Segments
        Known rules, along x and along y.

    Returns
    -------
    pair of (n,) bool arrays
    """
    made = [_made_alike(lines[d], Segments.joined(*rules)) for d in (0, 1)]
    row = [alike(lines[d], _lean(rules[d], rules[1 - d])) for d in (0, 1)]
    likely = [made[d] & _side_like(lines[d], row[d]) for d in (0, 1)]
    found = close_frames((lines[0].select(likely[0]), lines[1].select(likely[1])), rules)
    closed, joined = ([np.zeros(len(side), bool) for side in lines] for _ in range(2))
    for d in (0, 1):
        closed[d][likely[d]], joined[d][likely[d]] = found[0][d], found[1][d]
    boxes = []
    for d in (0, 1):
        in_row = (row[d] & closed[d] & closed[d][:, None]).sum(axis=1) >= _BOX_SIDES
        boxes.append(joined[d] | in_row)
    frames = [Segments.joined(rules[d], lines[d].select(boxes[d])) for d in (0, 1)]
    ticks = [find_ticks(lines[d], frames[1 - d], row[d]) for d in (0, 1)]
    return boxes[0] | ticks[0], boxes[1] | ticks[1]


def meets(lines: Segments, others: Segments) -> Bools:
    """Which ends of lines stand on which lines of the other direction.

    Returns
    -------
    (n, 2, m) bool array
    """
    along = np.stack((lines.start, lines.stop), axis=1)[:, :, None]
    across = lines.offset[:, None, None] + lines.slope[:, None, None] * along
    beside = np.abs(others.offset + others.slope * across - along)
    return np.asarray(
        (across >= others.start - _JOINT_MM)
        & (across <= others.stop + _JOINT_MM)
        & (beside <= _JOINT_MM + others.half)
    )


def close_frames(lines: Pair, rules: Pair) -> tuple[tuple[Bools, Bools], tuple[Bools, Bools]]:
    """Lines that close boxes: both ends on rules or on lines that do so themselves.

    Parameters
    ----------
    lines : pair of Segments
        Candidates of both directions.
    rules : pair of Segments
        Known rules of both directions.

    Returns
    -------
    closed : pair of (n,) bool arrays
    joined : pair of (n,) bool arrays
        Closed, and connected to a known rule.
    """
    from scipy.sparse import coo_array
    from scipy.sparse.csgraph import connected_components

    on_rule = [np.any(meets(lines[d], rules[1 - d]), axis=2) for d in (0, 1)]
    on_line = [meets(lines[d], lines[1 - d]) for d in (0, 1)]
    alive = [np.ones(len(side), bool) for side in lines]
    left = -1
    while left != (left := int(alive[0].sum() + alive[1].sum())):
        for d in (0, 1):
            held = np.any(on_line[d] & alive[1 - d], axis=2) | on_rule[d]
            alive[d] &= np.all(held, axis=1)

    n = [len(side) for side in lines]
    known = n[0] + n[1]  # one node for all rules
    pairs = [
        np.argwhere(np.any(on_line[d], axis=1) & alive[d][:, None] & alive[1 - d]) for d in (0, 1)
    ]
    hung = [np.flatnonzero(np.any(on_rule[d], axis=1) & alive[d]) for d in (0, 1)]
    i = np.concatenate((pairs[0][:, 0], n[0] + pairs[1][:, 0], hung[0], n[0] + hung[1]))
    j = np.concatenate(
        (n[0] + pairs[0][:, 1], pairs[1][:, 1], np.full(hung[0].size + hung[1].size, known))
    )
    graph = coo_array((np.ones(i.size, np.int8), (i, j)), shape=(known + 1, known + 1))
    _, net = connected_components(graph, directed=False)
    with_rule = net[:-1] == net[-1]
    joined = (alive[0] & with_rule[: n[0]], alive[1] & with_rule[n[0] :])
    return (alive[0], alive[1]), joined


def _made_alike(lines: Segments, rules: Segments) -> Bools:
    """(n,) bool: lines as thick and as dark as some rule."""
    same = np.abs(rules.half - lines.half[:, None]) <= 0.05 + 0.25 * rules.half
    same &= np.abs(rules.peak - lines.peak[:, None]) <= 0.35 * rules.peak
    return np.asarray(np.any(same, axis=1))


def _side_like(lines: Segments, row: Bools) -> Bools:
    """(n,) bool: lines longer than stems of letters, or free of feet and bars as stems are not.

    A stroke may hide a side; then others in its row speak for it.
    """
    clear = (lines.isolated >= _CLEAR) | (lines.length >= _STEM_MM)
    spoken_for = (row & clear).sum(axis=1) >= np.maximum(2, row.sum(axis=1) / 2)
    return np.asarray(clear | spoken_for)


def _lean(rules: Segments, others: Segments) -> float:
    """Slope that most of the ruled length has; the other direction's has the opposite sign."""
    slope = np.concatenate((rules.slope, -others.slope))
    return weighted_median(slope, np.concatenate((rules.length, others.length)) ** 2)


def alike(lines: Segments, lean: float) -> Bools:
    """Lines of one make that stand in a row: ends level, thickness and density the same.

    Parameters
    ----------
    lines : Segments
    lean : float
        Slope of the page in this direction; what is level is at right angles to it.

    Returns
    -------
    (n, n) bool array
        True on the diagonal.
    """
    apart = np.abs(lines.middle[:, None] - lines.middle)
    level = 0.42 + 0.015 * apart
    same = apart < _ROW_MM
    for end in (lines.start, lines.stop):
        upright = end + lean * lines.middle
        same &= np.abs(upright[:, None] - upright) < level
    same &= np.abs(lines.half[:, None] - lines.half) < 0.04 + 0.1 * lines.half
    return np.asarray(same & (np.abs(lines.peak[:, None] - lines.peak) < 0.25 * lines.peak))


def find_ticks(lines: Segments, rules: Segments, row: Bools) -> Bools:
    """Ticks of combs: in even rows of four and more, each with an end on a rule of its make.

    Parameters
    ----------
    lines : Segments
    rules : Segments
        Of the other direction.
    row : (n, n) bool array
        As of `alike`.

    Returns
    -------
    (n,) bool array
    """
    stands = np.any(meets(lines, rules), axis=1)
    make = np.abs(rules.half - lines.half[:, None]) <= 0.05 + 0.25 * rules.half
    make &= np.abs(rules.peak - lines.peak[:, None]) <= 0.35 * rules.peak
    on_rule = np.any(stands & make, axis=1)
    rows = row & on_rule & on_rule[:, None]
    # stems of letters have feet and bars
    clear = (rows & (lines.isolated >= _CLEAR)).sum(axis=1)
    ticks = (rows.sum(axis=1) >= 4) & (2 * clear >= rows.sum(axis=1))
    place = lines.middle
    for i in np.flatnonzero(ticks):
        step = np.diff(np.sort(place[rows[i]]))
        step = step[step > 1.0]
        pitch = np.median(step) if step.size >= 3 else 0.0
        if pitch < _TICK_PITCH_MM:
            ticks[i] = False
            continue
        pitches = np.maximum(np.rint(step / pitch), 1)
        ticks[i] = (np.abs(step / pitches - pitch) <= 0.14).mean() >= 0.7
    return np.asarray(ticks)


def hatched(lines: Segments) -> Bools:
    """Lines in a thicket of their likes: bars of a barcode, hatching.

    Returns
    -------
    (n,) bool array
        Whether the line is one of five or more, each beside the next over the same length and no
        more than 3 mm away.
    """
    from scipy.sparse import csr_array
    from scipy.sparse.csgraph import connected_components

    # pairs of lines near each other, by their places across
    if len(lines) == 0:
        return np.zeros(0, bool)
    order = np.argsort(lines.middle, kind="stable")
    near = lines.select(order)
    place, n = near.middle, order.size
    count = np.searchsorted(place, place + _HATCH_MM, side="right") - np.arange(n) - 1
    i = np.repeat(np.arange(n), count)
    j = i + 1 + np.arange(i.size) - np.repeat(np.cumsum(count) - count, count)
    overlap = np.minimum(near.stop[i], near.stop[j]) - np.maximum(near.start[i], near.start[j])
    like = overlap > 0.8 * np.maximum(near.length[i], near.length[j])
    graph = csr_array((np.ones(int(like.sum()), np.int8), (i[like], j[like])), shape=(n, n))
    _, thicket = connected_components(graph, directed=False)
    found = np.zeros(n, bool)
    found[order] = np.bincount(thicket, minlength=1)[thicket] >= _HATCH_LINES
    return found

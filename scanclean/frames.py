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

__all__ = ["Segments", "hatched", "short_rules", "worth_measuring"]

Bools = NDArray[np.bool_]
Floats = NDArray[np.float64]

_JOINT_MM = 0.45  # between the end of a line and the line it stands on
_BOX_SIDES = 6  # like sides of boxes in a row that no rule joins: a row of three at least
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

    def select(self, chosen: Bools) -> Segments:
        """Those that a (n,) bool array chooses."""
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
    closed, joined = close_frames(lines, rules)
    boxes = []
    for d in (0, 1):
        in_row = (alike(lines[d]) & closed[d] & closed[d][:, None]).sum(axis=1) >= _BOX_SIDES
        boxes.append(joined[d] | in_row)
    frames = [Segments.joined(rules[d], lines[d].select(boxes[d])) for d in (0, 1)]
    found = [boxes[d] | find_ticks(lines[d], frames[1 - d]) for d in (0, 1)]
    return found[0], found[1]


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

    on_rule = [meets(lines[d], rules[1 - d]).any(axis=2) for d in (0, 1)]
    on_line = [meets(lines[d], lines[1 - d]) for d in (0, 1)]
    alive = [np.ones(len(side), bool) for side in lines]
    left = -1
    while left != (left := int(alive[0].sum() + alive[1].sum())):
        for d in (0, 1):
            held = on_rule[d] | (on_line[d] & alive[1 - d]).any(axis=2)
            alive[d] &= held.all(axis=1)

    n = [len(side) for side in lines]
    known = n[0] + n[1]  # one node for all rules
    pairs = [np.argwhere(on_line[d].any(axis=1) & alive[d][:, None] & alive[1 - d]) for d in (0, 1)]
    hung = [np.flatnonzero(on_rule[d].any(axis=1) & alive[d]) for d in (0, 1)]
    i = np.concatenate((pairs[0][:, 0], n[0] + pairs[1][:, 0], hung[0], n[0] + hung[1]))
    j = np.concatenate(
        (n[0] + pairs[0][:, 1], pairs[1][:, 1], np.full(hung[0].size + hung[1].size, known))
    )
    graph = coo_array((np.ones(i.size, np.int8), (i, j)), shape=(known + 1, known + 1))
    _, net = connected_components(graph, directed=False)
    with_rule = net[:-1] == net[-1]
    joined = (alive[0] & with_rule[: n[0]], alive[1] & with_rule[n[0] :])
    return (alive[0], alive[1]), joined


def alike(lines: Segments) -> Bools:
    """Lines of one make that stand in a row: ends level, thickness and density the same.

    Returns
    -------
    (n, n) bool array
        True on the diagonal.
    """
    apart = np.abs(lines.middle[:, None] - lines.middle)
    level = 0.42 + 0.015 * apart
    same = (apart < _ROW_MM) & (np.abs(lines.start[:, None] - lines.start) < level)
    same &= np.abs(lines.stop[:, None] - lines.stop) < level
    same &= np.abs(lines.half[:, None] - lines.half) < 0.04 + 0.1 * lines.half
    return np.asarray(same & (np.abs(lines.peak[:, None] - lines.peak) < 0.25 * lines.peak))


def find_ticks(lines: Segments, rules: Segments) -> Bools:
    """Ticks of combs: in even rows of four and more, each with an end on a rule of its make.

    Parameters
    ----------
    lines : Segments
    rules : Segments
        Of the other direction.

    Returns
    -------
    (n,) bool array
    """
    stands = meets(lines, rules).any(axis=1)
    make = np.abs(rules.half - lines.half[:, None]) <= 0.05 + 0.25 * rules.half
    make &= np.abs(rules.peak - lines.peak[:, None]) <= 0.35 * rules.peak
    stands = (stands & make).any(axis=1)
    rows = alike(lines) & stands & stands[:, None]
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

    overlap = np.minimum(lines.stop[:, None], lines.stop)
    overlap = overlap - np.maximum(lines.start[:, None], lines.start)
    along = (lines.start + lines.stop) / 2
    apart = np.abs(lines.offset[:, None] + lines.slope[:, None] * along - lines.middle)
    like = (overlap > 0.8 * lines.length[:, None]) & (overlap > 0.8 * lines.length)
    _, thicket = connected_components(csr_array(like & (apart < _HATCH_MM)), directed=False)
    return np.asarray(np.bincount(thicket)[thicket] >= _HATCH_LINES)

"""The slant of writing, line by line: how far italics and hands lean.

Strokes that lean are sheared by trial angles; at the right one they stand upright, and the ink of
a line gathers in fewer columns.

Glossary: C components, L lines, T trial slants, P sampled runs. A slant is x over y: 0 upright,
positive where the tops lean to the right.
"""

from __future__ import annotations

import numpy as np
from numpy.typing import NDArray

from scanclean.sets.labels import Components
from scanclean.text.lineset import LineSet

__all__ = ["line_slants"]

Floats = NDArray[np.float64]
Ints = NDArray[np.int64]

_TRIALS = np.arange(-0.35, 0.91, 0.07)
_SAMPLE = 12_000  # runs looked at
_RUNS_FOR_A_LINE = 150  # with fewer a line takes the page's slant
_GAIN = 1.06  # so much better than upright writing must slanted writing gather


def line_slants(components: Components, lines: LineSet, line: Ints) -> Floats:
    """(L,) slant of each line.

    Parameters
    ----------
    components : Components
    lines : LineSet
    line : (C,) int array
        The line of each component, or -1.

    References
    ----------
    The measure, the sum of the squared column counts, is a common one for slant and skew alike;
    for skew it goes back to W. Postl, "Detection of linear oblique structures and skew scan in
    digitized documents", ICPR 1986.
    """
    runs, label = components.runs, components.run_label
    on_line = np.flatnonzero(line[label] >= 0)
    if lines.n == 0 or on_line.size == 0:
        return np.zeros(lines.n)
    # long runs lie along the line and say nothing
    length = runs.length[on_line]
    usual = float(np.median(length))
    on_line = on_line[length <= 2 * usual]
    on_line = on_line[:: max(1, on_line.size // _SAMPLE)]
    mine = line[label[on_line]]
    middle = (runs.start[on_line] + runs.stop[on_line]) / 2
    x, y = lines.frame.upright(middle, runs.row[on_line].astype(np.float64) + 0.5)
    over = lines.baselines.at(mine, x) - y
    column = max(1.0, usual * lines.frame.aspect / 2)
    x = (x - x.min()) / column + 2 * abs(_TRIALS).max() * lines.x_height.max() * 4 / column
    stride = int(x.max() + 4 * abs(_TRIALS).max() * lines.x_height.max() / column) + 2
    gathered = np.empty((_TRIALS.size, lines.n))
    for k, slant in enumerate(_TRIALS):
        bins = mine * stride + np.clip((x - slant * over / column).astype(np.int64), 0, stride - 1)
        count = np.bincount(bins, minlength=lines.n * stride).reshape(lines.n, stride)
        gathered[k] = np.einsum("ls,ls->l", count, count)
    whole = _steepest(gathered.sum(axis=1, keepdims=True))[0]
    slants = _steepest(gathered)
    slants[np.bincount(mine, minlength=lines.n) < _RUNS_FOR_A_LINE] = whole
    return slants


def _steepest(gathered: Floats) -> Floats:
    """The slant at which each column of a (T, L) table is largest, or 0 if that gains little."""
    best = np.clip(np.argmax(gathered, axis=0), 1, _TRIALS.size - 2)
    column = np.arange(best.size)
    before, at, behind = (gathered[best + k, column] for k in (-1, 0, 1))
    bend = before - 2 * at + behind
    shift = np.where(bend < 0, (before - behind) / np.where(bend < 0, 2 * bend, 1.0), 0.0)
    step = _TRIALS[1] - _TRIALS[0]
    slants = _TRIALS[best] + np.clip(shift, -0.5, 0.5) * step
    upright = gathered[np.argmin(np.abs(_TRIALS))]
    return np.where(at > _GAIN * upright, slants, 0.0)

"""Words: which gaps of a line part them.

On lines of fixed pitch it is the empty cells. On others words are parted at the largest jump among
the line's own gaps near the usual limit between letter and word spaces, which is the valley
between the two among all lines of one size of type.

Glossary: G glyphs, L lines, K gaps between glyphs of one line. Gaps are in x-heights of their
line, everything else is in pixels along it.
"""

from __future__ import annotations

import numpy as np
from numpy.typing import NDArray

from scanclean.text.neighbours import grouped_median, keyed_best, weighted_median

__all__ = ["number_words"]

Floats = NDArray[np.float64]
Ints = NDArray[np.int64]
Bools = NDArray[np.bool_]

# gaps looked at for the limit between letter and word spaces, in x-heights: what is wider is a tab
_GAPS = (-0.2, 1.6)
_LIMITS = (0.2, 0.9)
_USUAL_LIMIT = 0.4
_CLOSE = 0.3  # a line with wider letter spaces is letterspaced
_ONE_SIZE = 1.12  # lines of x-heights so close, each to the next, are of one size of type
_GAPS_OF_A_SIZE = 40  # lines of a size with fewer take the page's limit
_GAPS_OF_A_LINE = 5
_LETTER = 1.6  # wider glyphs are whole words or letters grown together
_STEPS_FOR_PITCH = 15
_NEXT_CELL = 1.3  # pitches; columns of a table need not be whole pitches apart
_AGREED = 0.75  # mean cosine of the phases


def number_words(line: Ints, left: Floats, right: Floats, x_height: Floats) -> Ints:
    """(G,) the word of each glyph, from 0 over the page; -1 in no line.

    Parameters
    ----------
    line : (G,) int array
        Not falling; -1 for glyphs in no line, all last.
    left, right : (G,) float array
        In pixels along the line; rising within a line by their middles.
    x_height : (L,) float array
    """
    count = int((line >= 0).sum())
    word = np.full(line.size, -1, np.int64)
    if count == 0:
        return word
    line, left, right = line[:count], left[:count], right[:count]
    after = np.flatnonzero(line[1:] == line[:-1])  # the glyph before each gap
    # how far the line is inked before each gap: a running maximum that starts anew in each line
    span = float(right.max() - left.min()) + 1
    reached = np.maximum.accumulate(right + line * span) - line * span
    gap = (left[after + 1] - reached[after]) / x_height[line[after]]
    wide = (right - left) > _LETTER * x_height[line]
    letters = ~(wide[after] | wide[after + 1])
    parted = gap > _space_limits(gap, line[after], x_height, letters)
    pitch = _pitches(line, left, right, after, x_height.size)
    cells = pitch[line[after]]
    fixed = cells > 0
    parted[fixed] = (_step(left, right, after, cells)[fixed] / cells[fixed]) > _NEXT_CELL
    first = np.ones(count, bool)
    first[after + 1] = parted
    word[:count] = np.cumsum(first) - 1
    return word


def _space_limits(gap: Floats, line: Ints, x_height: Floats, letters: Bools) -> Floats:
    """For each gap the size from which it parts words; `letters` are gaps between single letters.

    The valley between letter and word spaces is looked for among all lines of one size of type;
    each line then takes its own largest jump near it.
    """
    n = x_height.size
    usual = grouped_median(line[letters], n, gap[letters], 0.0)
    usual[np.bincount(line[letters], minlength=n) < _GAPS_OF_A_LINE] = 0.0
    loose = np.maximum(1.0, usual / _CLOSE)[line]  # letterspaced and hand-printed lines
    scaled = gap / loose
    order = np.argsort(x_height, kind="stable")
    ranked = x_height[order]
    size = np.empty(n, np.int64)
    size[order] = np.cumsum(np.append(False, ranked[1:] > _ONE_SIZE * ranked[:-1]))
    limit = np.full(n, _valley(scaled))
    for k in range(int(size.max()) + 1):
        mine = size[line] == k
        if np.count_nonzero(mine) >= _GAPS_OF_A_SIZE:
            limit[size == k] = _valley(scaled[mine])
    order = np.lexsort((scaled, line))
    ranked, of = scaled[order], line[order]
    same, near = of[1:] == of[:-1], limit[of[1:]]
    low, high = np.maximum(ranked[:-1], 0.6 * near), np.minimum(ranked[1:], 1.6 * near)
    some = same & (high > low)
    of, low, high = of[1:][some], low[some], high[some]
    best = keyed_best(of, low - high)
    limit[of[best]] = (low + high)[best] / 2
    return limit[line] * loose


def _valley(gap: Floats) -> float:
    """The emptiest size near Otsu's limit between letter and word spaces.

    References
    ----------
    N. Otsu, "A threshold selection method from gray-level histograms", IEEE Trans. SMC 9(1), 1979.
    """
    count, edges = np.histogram(np.maximum(gap, _GAPS[0]), bins=64, range=_GAPS)
    middle = (edges[1:] + edges[:-1]) / 2
    below = np.cumsum(count)
    above = below[-1] - below
    total = np.cumsum(count * middle)
    mean_below = total / np.maximum(below, 1)
    mean_above = (total[-1] - total) / np.maximum(above, 1)
    between = below * above * (mean_above - mean_below) ** 2
    if not between.any():
        return _USUAL_LIMIT
    limit = max(float(edges[1 + int(np.argmax(between))]), _LIMITS[0])
    # where letter spaces are many they draw Otsu's limit into the valley's side
    off = np.log2(np.maximum(middle, edges[1] - edges[0]) / limit)
    crowd = np.convolve(count, [0.25, 0.5, 0.25], mode="same") + 0.02 * count.max()
    cost = np.where(np.abs(off) < 1, crowd * (1 + 2 * off * off), np.inf)
    return float(np.clip(middle[np.argmin(cost)], *_LIMITS))


def _step(left: Floats, right: Floats, after: Ints, pitch: Floats) -> Floats:
    """Distance of the cells before and behind each gap; glyphs that touch fill several cells."""
    middle, width = (left + right) / 2, right - left
    more_before = np.maximum(np.rint(width[after] / np.maximum(pitch, 1)), 1) - 1
    more_behind = np.maximum(np.rint(width[after + 1] / np.maximum(pitch, 1)), 1) - 1
    step: Floats = middle[after + 1] - middle[after] - (more_before + more_behind) / 2 * pitch
    return step


def _pitches(line: Ints, left: Floats, right: Floats, after: Ints, n: int) -> Floats:
    """(L,) pitch in pixels of lines whose glyphs stand in cells of one width, else 0.

    On such a line all steps from middle to middle are multiples of the pitch: their phases agree.
    """
    middle = (left + right) / 2
    step = middle[after + 1] - middle[after]
    of = line[after]
    pitch = np.zeros(n)
    usual = grouped_median(of, n, step, 0.0)
    some = (step > 0) & (step < 2.6 * usual[of])  # cells of a table are not in step
    if not some.any():
        return pitch
    step, of = step[some], of[some]
    count = np.bincount(of, minlength=n)
    trials = np.linspace(0.7, 1.4, 71)
    phase = np.cos(2 * np.pi * step[:, None] / (usual[of][:, None] * trials))
    agreed = np.empty((n, trials.size))
    for k in range(trials.size):
        agreed[:, k] = np.bincount(of, phase[:, k], n) / np.maximum(count, 1)
    best = np.argmax(agreed, axis=1)
    found = usual * trials[best]
    sure = (count >= _STEPS_FOR_PITCH) & (agreed.max(axis=1) >= _AGREED)
    pitch[sure] = found[sure]
    if not sure.any():
        return pitch
    # a short line is taken for one of the page's pitch if its steps agree with that
    page = weighted_median(found[sure], count[sure])
    with_page = np.bincount(of, np.cos(2 * np.pi * step / page), n) / np.maximum(count, 1)
    short = ~sure & (count < _STEPS_FOR_PITCH) & (with_page >= _AGREED)
    pitch[short] = page
    return pitch

"""Reading order, and the words of each line.

Lines are gathered to blocks, pieces of one column that follow each other without another column
beside a change of width. Blocks are read from top to bottom where they stand over one another and
from left to right where they stand side by side; within a block lines from top to bottom, within
a line glyphs from left to right.

Words are parted by the gaps of the line itself: on fixed-pitch lines by the empty cells, else at
the largest jump among the gaps near the page's usual limit between letter and word spaces.

Glossary: C components, G glyphs, L lines, B blocks.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from scanclean.columns import Pieces, stacks
from scanclean.glyphs import Parts
from scanclean.labels import Components
from scanclean.neighbours import grouped_median, keyed_best, weighted_median
from scanclean.textlines import LineSet

__all__ = ["Glyphs", "TextLines", "number_words", "put_in_order"]

Floats = NDArray[np.float64]
Ints = NDArray[np.int64]
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


@dataclass(frozen=True, eq=False)
class Glyphs:
    """Glyphs in reading order; columns of length G.

    What stands in no text line, such as drawings, comes last and has -1 for line and word.

    Parameters
    ----------
    box : (G, 4) int array
    area : (G,) int array
    parts : (G,) int array
        Components of each.
    holes : (G,) int array
        Holes of the background, of all parts.
    line, word : (G,) int array
        From 0, in reading order over the whole page.
    component_glyph : (C,) int array
        The glyph of each component.
    """

    box: Ints
    area: Ints
    parts: Ints
    holes: Ints
    line: Ints
    word: Ints
    component_glyph: Ints


@dataclass(frozen=True, eq=False)
class TextLines:
    """Text lines in reading order; columns of length L.

    Parameters
    ----------
    box : (L, 4) int array
        Of all glyphs.
    baseline : (L, 2, 2) float array
        Points (x, y) on the straight line nearest to the baseline, at the box's left and right.
    x_height : (L,) float array
        In pixels of y.
    """

    box: Ints
    baseline: Floats
    x_height: Floats


def put_in_order(
    components: Components, parts: Parts, lines: LineSet
) -> tuple[Glyphs, TextLines]:
    """Number glyphs, words and lines in reading order.

    Parameters
    ----------
    components : Components
        Of the cleaned page.
    parts : Parts
        Of the same components.
    lines : LineSet
        Lines that no component stands on are dropped.
    """
    n, glyph = parts.n, parts.glyph
    line = np.full(n, -1, np.int64)
    line[glyph] = parts.places.line
    used = np.flatnonzero(np.bincount(line[line >= 0], minlength=lines.n))
    used = used[_line_order(lines.keep(used))]
    lines = lines.keep(used)
    rank = np.full(int(line.max(initial=-1)) + 2, -1, np.int64)  # the last stands for no line
    rank[used] = np.arange(used.size)
    line = rank[line]
    box = _hulls(components.box, glyph, n)
    left, right = _extents(parts, line, lines)
    # along a line by x; what has no line by place, row by row
    along = np.where(line >= 0, left + right, box[:, 1])
    order = np.lexsort((box[:, 0], along, np.where(line >= 0, line, lines.n)))
    place = np.empty(n, np.int64)
    place[order] = np.arange(n)
    glyphs = Glyphs(
        box[order],
        np.bincount(place[glyph], components.area, n).astype(np.int64),
        np.bincount(place[glyph], minlength=n),
        np.bincount(place[glyph], components.holes, n).astype(np.int64),
        line[order],
        number_words(line[order], left[order], right[order], lines.x_height),
        place[glyph],
    )
    on_line = glyphs.line >= 0
    line_box = _hulls(glyphs.box[on_line], glyphs.line[on_line], lines.n)
    return glyphs, TextLines(line_box, _straight(lines, line_box), lines.x_height)


def _hulls(box: Ints, group: Ints, n: int) -> Ints:
    """(n, 4) box round all boxes of each group."""
    hull = np.empty((n, 4), np.int64)
    hull[:, :2], hull[:, 2:] = np.iinfo(np.int64).max, -1
    for k, extreme in enumerate((np.minimum, np.minimum, np.maximum, np.maximum)):
        extreme.at(hull[:, k], group, box[:, k])
    return hull


def _extents(parts: Parts, line: Ints, lines: LineSet) -> tuple[Floats, Floats]:
    """(G,) left and right of the glyphs along their lines in pixels, sheared upright."""
    left, right = np.full(parts.n, np.inf), np.full(parts.n, -np.inf)
    np.minimum.at(left, parts.glyph, parts.left)
    np.maximum.at(right, parts.glyph, parts.right)
    scale = np.append(lines.x_height, 0.0)[line]
    return left * scale, right * scale


# ---- lines


def _line_order(lines: LineSet) -> Ints:
    """(L,) the lines in reading order."""
    n = lines.n
    if n < 2:
        return np.arange(n)
    middle = (lines.left + lines.right) / 2
    base = lines.baselines.at(np.arange(n), middle)
    block = _blocks(lines, base)
    b = int(block.max()) + 1
    left, top = np.full((2, b), np.inf)
    right, bottom = np.full((2, b), -np.inf)
    np.minimum.at(left, block, lines.left)
    np.maximum.at(right, block, lines.right)
    np.minimum.at(top, block, base - lines.x_height)
    np.maximum.at(bottom, block, base)
    rank = np.empty(b, np.int64)
    rank[_block_order(left, top, right, bottom)] = np.arange(b)
    return np.lexsort((lines.left, base, rank[block]))


def _blocks(lines: LineSet, base: Floats) -> Ints:
    """(L,) the block of each line.

    A stack is cut where its width changes and another column stands beside the narrower side: a
    heading over two columns belongs to neither.
    """
    stack = stacks(Pieces(lines.baselines, lines.left, lines.right, np.zeros(lines.n, bool)))
    order = np.lexsort((base, stack))
    upper, lower = order[:-1], order[1:]
    chained = stack[upper] == stack[lower]
    upper, lower = upper[chained], lower[chained]
    cut = np.zeros(upper.size, bool)
    every = np.arange(lines.n)
    for wide, narrow in ((upper, lower), (lower, upper)):
        other = stack[every][None, :] != stack[wide][:, None]
        meets = np.minimum(lines.right[wide][:, None], lines.right) > np.maximum(
            lines.left[wide][:, None], lines.left
        )
        clear = np.minimum(lines.right[narrow][:, None], lines.right) <= np.maximum(
            lines.left[narrow][:, None], lines.left
        )
        beside = np.abs(base[narrow][:, None] - base) < 3 * lines.x_height[narrow][:, None]
        cut |= (other & meets & clear & beside).any(axis=1)
    first = np.ones(order.size, bool)
    first[1:][chained] = cut
    block = np.empty(lines.n, np.int64)
    block[order] = np.cumsum(first) - 1
    return block


def _block_order(left: Floats, top: Floats, right: Floats, bottom: Floats) -> Ints:
    """(B,) blocks in reading order.

    Of two blocks the upper goes first if they share a stretch of the line's direction or none of
    the page's height; else the left one. Where these wishes run in a circle, the uppermost block
    left goes first.

    References
    ----------
    After the partial order of T. M. Breuel, "High performance document layout analysis", Symposium
    on Document Image Understanding Technology, 2003, on blocks instead of lines.
    """
    n = left.size
    over = np.minimum(right[:, None], right) > np.maximum(left[:, None], left)
    level = np.minimum(bottom[:, None], bottom) > np.maximum(top[:, None], top)
    by_height = over | ~level
    upper = (top + bottom)[:, None] < (top + bottom)
    before = np.where(by_height, upper, left[:, None] < left)
    np.fill_diagonal(before, False)
    waiting = before.sum(axis=0)
    done = np.zeros(n, bool)
    order = np.empty(n, np.int64)
    for k in range(n):
        ready = np.flatnonzero(~done & (waiting == 0))
        if ready.size == 0:
            ready = np.flatnonzero(~done)
        chosen = ready[np.lexsort((left[ready], top[ready]))[0]]
        order[k] = chosen
        done[chosen] = True
        waiting -= before[chosen]
    return order


def _straight(lines: LineSet, box: Ints) -> Floats:
    """(L, 2, 2) the straight line nearest to each baseline, where it crosses its box's sides."""
    every = np.arange(lines.n)
    points = []
    for share in np.linspace(0, 1, 9):
        x = lines.left + share * (lines.right - lines.left)
        points.append(lines.frame.page(x, lines.baselines.at(every, x)))
    x, y = np.moveaxis(np.array(points), 1, 0)
    middle_x, middle_y = x.mean(axis=0), y.mean(axis=0)
    spread = ((x - middle_x) ** 2).sum(axis=0)
    slope = ((x - middle_x) * (y - middle_y)).sum(axis=0) / np.maximum(spread, 1e-9)
    ends = box[:, [0, 2]].astype(np.float64)
    level = middle_y[:, None] + slope[:, None] * (ends - middle_x[:, None])
    return np.stack((ends, level), axis=2)


# ---- words


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
    return middle[after + 1] - middle[after] - (more_before + more_behind) / 2 * pitch


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

"""Reading order of blocks, lines and glyphs.

Lines are gathered to blocks, pieces of one column that follow each other without another column
beside a change of width. Blocks are read from top to bottom where they stand over one another and
from left to right where they stand side by side; within a block lines from top to bottom, within
a line glyphs from left to right.

Glossary: C components, G glyphs, L lines, B blocks.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from scanclean.sets.labels import Components
from scanclean.text.columns import Pieces, stacks
from scanclean.text.glyphs import Parts
from scanclean.text.lineset import LineSet
from scanclean.text.neighbours import chains
from scanclean.text.words import number_words

__all__ = ["Glyphs", "TextLines", "put_in_order"]

Floats = NDArray[np.float64]
Ints = NDArray[np.int64]

_MESHED = 0.5  # of the narrower one's width and of the lower one's height


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


def put_in_order(components: Components, parts: Parts, lines: LineSet) -> tuple[Glyphs, TextLines]:
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
    block = _meshed(*_block_boxes(lines, base, block))[block]
    left, top, right, bottom = _block_boxes(lines, base, block)
    rank = np.empty(left.size, np.int64)
    rank[_block_order(left, top, right, bottom)] = np.arange(left.size)
    return np.lexsort((lines.left, base, rank[block]))


def _block_boxes(
    lines: LineSet, base: Floats, block: Ints
) -> tuple[Floats, Floats, Floats, Floats]:
    """(B,) left, top, right and bottom of each block."""
    b = int(block.max()) + 1
    left, top = np.full((2, b), np.inf)
    right, bottom = np.full((2, b), -np.inf)
    np.minimum.at(left, block, lines.left)
    np.maximum.at(right, block, lines.right)
    np.minimum.at(top, block, base - lines.x_height)
    np.maximum.at(bottom, block, base)
    return left, top, right, bottom


def _meshed(left: Floats, top: Floats, right: Floats, bottom: Floats) -> Ints:
    """(B,) one number for blocks that stand in each other's rows and columns.

    Captions in small type between the rows of a form stack up among themselves, but are read row
    by row with what they are captions of.
    """
    shared = np.minimum(right[:, None], right) - np.maximum(left[:, None], left)
    narrow = np.minimum((right - left)[:, None], right - left)
    level = np.minimum(bottom[:, None], bottom) - np.maximum(top[:, None], top)
    low = np.minimum((bottom - top)[:, None], bottom - top)
    i, j = np.nonzero((shared > _MESHED * narrow) & (level > _MESHED * low))
    return chains(i, j, left.size)[1]


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

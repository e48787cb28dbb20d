"""Glyphs: which components make one character together.

In a line of text characters stand side by side, so what stands over one another in it is one
character: dots, accents, colons, question marks, equals signs and letters broken across. Three
kinds stand side by side all the same: quotation marks, guillemets, and the parts of percent signs
and fractions. A mark goes to one letter only, the one it stands over best. Slanted type is sheared
upright first, from the slant of its tall letters.

Glossary: C components, G glyphs, L lines, K pairs of components. Levels and widths are in
x-heights of the line (`places`).
"""

from __future__ import annotations

from dataclasses import dataclass, replace

import numpy as np
from numpy.typing import NDArray

from scanclean.sets.labels import Components
from scanclean.text.lineset import LineSet
from scanclean.text.neighbours import chains, keyed_best, keyed_neighbours, repeat_range
from scanclean.text.places import Places, find_places
from scanclean.text.slant import line_slants
from scanclean.text.textmeasure import Spread, measure_spread
from scanclean.text.upright import place

__all__ = ["Parts", "join_parts"]

Floats = NDArray[np.float64]
Ints = NDArray[np.int64]
Bools = NDArray[np.bool_]

_BREAK_OF_STROKE = 0.3  # width of a break that wear makes, of the stroke's
_FOOT = -0.1  # in x-heights: what lies lower hangs below the line
_LOOK = 5  # components further along the line that may still overlap


@dataclass(frozen=True, eq=False)
class Parts:
    """Components as the parts of glyphs, before anything is in order.

    Parameters
    ----------
    places : Places
        Of the components, sheared upright.
    left, right : (C,) float array
        How far they reach along their line without what hangs below it, in x-heights.
    glyph : (C,) int array
        The glyph of each component, in no order.
    n : int
        G.
    """

    places: Places
    left: Floats
    right: Floats
    glyph: Ints
    n: int


def join_parts(components: Components, lines: LineSet, *, spread: Spread | None = None) -> Parts:
    """Join components to glyphs.

    Parameters
    ----------
    components : Components
        Of the cleaned page; each gets a glyph.
    lines : LineSet
    spread : Spread, optional
        If it is known already.
    """
    spread = spread or measure_spread(components)
    shapes = place(components, spread, lines.frame)
    places = find_places(lines, shapes)
    slants = line_slants(components, lines, places.line)
    leaning = (places.line >= 0) & (np.append(slants, 0.0)[places.line] != 0)
    begins, ends = upright_extents(components, lines, places, slants, leaning)
    hanging = (places.line >= 0) & (places.bottom < -0.2) & (places.top > 0.3)
    places = replace(places, left=begins, right=ends)
    reach = upright_extents(components, lines, places, slants, hanging, lowest=_FOOT)
    holes = components.holes
    marks, hosts = _marks_and_letters(places)
    hosted = np.zeros(components.n, bool)
    hosted[marks] = True
    i, j = _pairs(places)
    upper, lower = _stacked(places, i, j, components.area, hosted)
    single = ~hosted
    single[upper] = single[lower] = False
    left, right = _twins(places, np.flatnonzero(single & ~places.body), components.area)
    angles = np.flatnonzero(single & _angle_like(components, places))
    left, right = np.concatenate(((left, right), _guillemets(places, angles)), axis=1)
    slash, ring = _slashed(places, holes)
    for joined in (left, right, slash, ring):
        single[joined] = False
    piece, whole = _broken_off(components, places, np.flatnonzero(single & ~places.body))
    first = np.concatenate((marks, upper, left, slash, piece))
    second = np.concatenate((hosts, lower, right, ring, whole))
    n, glyph = chains(first, second, components.n)
    return Parts(places, *reach, glyph, n)


def upright_extents(
    components: Components,
    lines: LineSet,
    places: Places,
    slants: Floats,
    chosen: Bools,
    *,
    lowest: float = -np.inf,
) -> tuple[Floats, Floats]:
    """(C,), (C,) left and right of components whose slanted type is sheared upright.

    Parameters
    ----------
    components : Components
    lines : LineSet
    places : Places
        Of the components as they stand; gives those that are not chosen.
    slants : (L,) float array
        Of `slant.line_slants`.
    chosen : (C,) bool array
        Components on lines.
    lowest : float
        Level in x-heights; what lies below is left out, unless all of it does.
    """
    runs, label = components.runs, components.run_label
    mine = np.flatnonzero(chosen[label])
    if mine.size == 0:
        return places.left, places.right
    owner = label[mine]
    frame, line = lines.frame, places.line[owner]
    x_height = lines.x_height[line]
    y = runs.row[mine].astype(np.float64) + 0.5
    ends = [frame.upright(x[mine].astype(np.float64), y) for x in (runs.start, runs.stop)]
    # the baseline is level under one component
    box = components.box.astype(np.float64)
    _, top = frame.upright((box[:, 0] + box[:, 2]) / 2, box[:, 1])
    base = (top + places.top * np.append(lines.x_height, 0.0)[places.line])[owner]
    bounds = np.full((2, places.line.size), np.inf)
    for side, (sign, (x, across)) in enumerate(zip((1, -1), ends, strict=True)):
        seen = (base - across) > lowest * x_height
        place = sign * (x - slants[line] * (base - across)) / x_height
        np.minimum.at(bounds[side], owner[seen], place[seen])
    some = chosen & np.isfinite(bounds).all(axis=0)
    left, right = np.where(some, bounds[0], places.left), np.where(some, -bounds[1], places.right)
    return left, right


def _pairs(places: Places) -> tuple[Ints, Ints]:
    """Pairs of components of one line that may share a stretch of it."""
    some = np.flatnonzero(places.line >= 0)
    order = some[np.lexsort((places.left[some], places.line[some]))]
    i = np.concatenate([order[:-k] for k in range(1, _LOOK + 1)])
    j = np.concatenate([order[k:] for k in range(1, _LOOK + 1)])
    near = (places.line[i] == places.line[j]) & (places.left[j] < places.right[i] + 0.3)
    return i[near], j[near]


def _marks_and_letters(places: Places) -> tuple[Ints, Ints]:
    """Dots and accents, and the letter that each stands over."""
    asked = np.flatnonzero((places.line >= 0) & ~places.body & (places.bottom > 0.75))
    bodies = places.bodies_near(asked)
    mark = np.tile(asked, bodies.shape[0])
    body = bodies.ravel()
    mark, body = mark[body >= 0], body[body >= 0]
    outside = np.maximum(places.left[body] - places.middle[mark], 0)
    outside += np.maximum(places.middle[mark] - places.right[body], 0)
    off = np.abs(places.middle[mark] - places.middle[body])
    clear = places.bottom[mark] - places.top[body]
    word = places.width[body] > 2.0
    low = places.top[body] < 1.25
    narrow = places.width[body] < 0.5
    # an apostrophe is as high as an acute accent, but stands between letters
    steep = places.height[mark] > 1.4 * places.width[mark]
    fits = np.where(steep, outside <= 0.02, outside <= 0.05)
    fits |= narrow & low & np.where(steep, off < 0.3, outside < 0.4)
    fits &= np.where(word, places.bottom[mark] > 0.9, clear > -0.15)
    fits &= clear < np.where(low & ~word, 1.0, 0.5)
    fits &= places.width[mark] < places.width[body] + 0.8
    cost = 2 * outside + 0.3 * off / np.maximum(places.width[body], 0.3) + 0.2 * clear + 0.3 * ~low
    mark, body, cost = mark[fits], body[fits], cost[fits]
    best = keyed_best(mark, cost)
    return mark[best], body[best]


def _stacked(places: Places, i: Ints, j: Ints, area: Ints, hosted: Bools) -> tuple[Ints, Ints]:
    """Upper and lower components that make one character, marks over letters aside."""
    level = (places.top + places.bottom) / 2
    swap = level[i] < level[j]
    upper, lower = np.where(swap, j, i), np.where(swap, i, j)
    free = ~hosted[upper] & ~hosted[lower]
    upper, lower = upper[free], lower[free]
    left, right, top, bottom = places.left, places.right, places.top, places.bottom
    width, height, middle = places.width, places.height, places.middle
    shared = np.minimum(right[upper], right[lower]) - np.maximum(left[upper], left[lower])
    narrow = np.minimum(width[upper], width[lower])
    wide = np.maximum(width[upper], width[lower])
    off = np.abs(middle[upper] - middle[lower])
    gap = bottom[upper] - top[lower]
    small = ~places.body[lower] & (width[lower] < 0.6)
    point = small & (bottom[lower] > -0.4) & (top[lower] < 0.5)
    # ! and ?
    marked = point & (bottom[upper] > 0.15) & (bottom[upper] < 0.75) & (height[upper] > 0.6)
    marked &= (gap > 0.02) & (gap < 0.7) & (off < 0.35)
    # : and ;
    alike = np.maximum(area[upper], area[lower]) < 3.5 * np.minimum(area[upper], area[lower])
    colon = small & ~places.body[upper] & (width[upper] < 0.6) & alike
    colon &= (bottom[lower] > -0.8) & (bottom[lower] < 0.3) & (top[lower] < 0.65)
    colon &= (top[upper] < 1.4) & (bottom[upper] > 0.2) & (gap > 0.05) & (gap < 1.1)
    colon &= (shared > 0.5 * narrow) | (off < 0.25)
    # = and the like
    flat = (width[upper] > 1.5 * height[upper]) & (width[lower] > 1.5 * height[lower])
    equals = flat & (narrow > 0.35) & (shared > 0.8 * wide) & (gap < 0.7)
    # cedillas and dots below
    below = small & places.body[upper] & (top[lower] < 0.1) & (np.abs(bottom[upper]) < 0.3)
    below &= (off < 0.3 * width[upper]) & (gap > -0.08) & (gap < 0.3)
    # letters broken across
    broken = (shared > 0.6 * narrow) & (gap > -0.15) & (gap < 0.3) & (wide < 1.6)
    broken &= (bottom[upper] < 1.2) & ~(point & (bottom[upper] < 0.15))
    # a part inside the outline of a letter, unless it is a stop under an overhanging arm
    inner = np.where(narrow == width[lower], lower, upper)
    outer = np.where(inner == lower, upper, lower)
    inside = (left[inner] > left[outer] - 0.02) & (right[inner] < right[outer] + 0.02)
    inside &= (top[inner] < top[outer] + 0.05) & (bottom[inner] > bottom[outer] - 0.05)
    stop = (bottom[inner] < 0.15) & (top[inner] < 0.5) & (middle[inner] > middle[outer])
    inside &= ~stop & (width[outer] < 2.5)
    joined = marked | colon | equals | below | broken | inside
    return upper[joined], lower[joined]


def _twins(places: Places, marks: Ints, area: Ints) -> tuple[Ints, Ints]:
    """Pairs of single marks that are the two strokes of a quotation mark or guillemet."""
    some = marks[places.line[marks] >= 0]
    (right,) = keyed_neighbours(places.line, places.middle, some, some, 1)[1:]
    left, right = some[right >= 0], right[right >= 0]
    high = np.maximum(places.height[left], places.height[right])
    wide = np.maximum(places.width[left], places.width[right])
    level = np.abs(places.top[left] - places.top[right]) < 0.25
    level &= np.abs(places.bottom[left] - places.bottom[right]) < 0.25
    alike = np.maximum(area[left], area[right]) < 2 * np.minimum(area[left], area[right])
    gap = places.left[right] - places.right[left]
    near = (gap < 0.4) & (gap < 1.3 * wide + 0.1)
    raised = places.bottom[left] > 0.5
    hanging = (places.bottom[left] < 0.0) & (high > 1.3 * wide)
    fits = level & alike & near & (raised | hanging)
    return _closest(left[fits], right[fits], gap[fits])


def _angle_like(components: Components, places: Places) -> Bools:
    """(C,) what may be half of a guillemet: thin, low, level about its middle, a stroke a row."""
    height = components.box[:, 3] - components.box[:, 1]
    width = components.box[:, 2] - components.box[:, 0]
    off = np.abs(components.centroid[:, 1] - (components.box[:, 1] + components.box[:, 3]) / 2)
    thin = (components.n_runs <= 1.2 * height) & (components.area < 0.6 * width * height)
    low = (places.line >= 0) & (places.height > 0.3) & (places.height < 1.0)
    return thin & low & (off < 0.06 * height) & (places.bottom > 0.02) & (places.top < 1.0)


def _guillemets(places: Places, angles: Ints) -> tuple[Ints, Ints]:
    """Pairs of the components asked that stand close and are alike."""
    right = keyed_neighbours(places.line, places.middle, angles, angles, 1)[1]
    left, right = angles[right >= 0], right[right >= 0]
    fits = np.abs(places.top[left] - places.top[right]) < 0.12
    fits &= np.abs(places.bottom[left] - places.bottom[right]) < 0.12
    fits &= np.abs(places.width[left] - places.width[right]) < 0.12
    gap = places.left[right] - places.right[left]
    fits &= (gap < 0.2) & (gap > -0.3)
    return _closest(left[fits], right[fits], gap[fits])


def _closest(left: Ints, right: Ints, gap: Floats) -> tuple[Ints, Ints]:
    """Pairs of which no member is in another; of three in a row the closer two."""
    best = keyed_best(left, gap) & keyed_best(right, gap)
    left, right = left[best], right[best]
    free = ~np.isin(left, right)
    return left[free], right[free]


def _broken_off(components: Components, places: Places, asked: Ints) -> tuple[Ints, Ints]:
    """Pieces broken off letters, and the letter that each belongs to.

    A piece lies against its letter, as close as a worn stroke breaks, and does not make it wider
    by what a mark of its own would take.
    """
    runs, label = components.runs, components.run_label
    chosen = np.zeros(components.n, bool)
    chosen[asked] = True
    chosen &= places.line >= 0
    mine = np.flatnonzero(chosen[label])
    if mine.size == 0:
        return asked[:0], asked[:0]
    letters = places.body[label]
    stroke = float(np.median(runs.length[letters])) if letters.any() else 1.0
    reach = max(1, round(_BREAK_OF_STROKE * stroke)) + 1
    start, stop = runs.bounds[0::2], runs.bounds[1::2]
    pieces, wholes = [], []
    for step in range(-reach, reach + 1):
        row = step * (runs.shape[1] + 1)
        low = np.searchsorted(stop, start[mine] + row - reach, side="right")
        high = np.searchsorted(start, stop[mine] + row + reach, side="left")
        owner, other = repeat_range(low, np.maximum(high, low))
        pieces.append(label[mine[owner]])
        wholes.append(label[other])
    piece, whole = np.concatenate(pieces).astype(np.int64), np.concatenate(wholes).astype(np.int64)
    fits = (places.line[piece] == places.line[whole]) & places.body[whole]
    wider = np.maximum(places.right[piece], places.right[whole]) - np.minimum(
        places.left[piece], places.left[whole]
    )
    wider -= places.width[whole]
    fits &= (wider < 0.25) & (places.bottom[piece] > -0.8) & (places.width[whole] < 2.5)
    piece, whole, wider = piece[fits], whole[fits], wider[fits]
    best = keyed_best(piece, wider)
    return piece[best], whole[best]


def _slashed(places: Places, holes: Ints) -> tuple[Ints, Ints]:
    """Slashes with what stands before their upper and behind their lower half: % and 1/2."""
    slash = np.flatnonzero(places.body & (holes == 0) & (places.height > 1.1))
    near = keyed_neighbours(places.line, places.middle, np.flatnonzero(places.line >= 0), slash, 2)
    upper, lower = np.full((2, slash.size), -1, np.int64)
    for thing in near:
        part = np.maximum(thing, 0)
        size = (thing >= 0) & (places.height[part] > 0.35) & (places.height[part] < 0.95)
        before = places.middle[slash] - places.middle[part]
        overlap = np.minimum(places.right[slash], places.right[part]) - np.maximum(
            places.left[slash], places.left[part]
        )
        size &= overlap > -0.15
        first = size & (places.bottom[part] > 0.4) & (before > 0.1) & (before < 1.0)
        second = size & (places.top[part] < 1.0) & (before < -0.1) & (before > -1.0)
        upper[first], lower[second] = thing[first], thing[second]
    both = (upper >= 0) & (lower >= 0)
    return np.tile(slash[both], 2), np.concatenate((upper[both], lower[both]))

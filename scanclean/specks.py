"""Specks: which components are dirt, judged by their size and by where they stand.

Size alone takes commas, dots and accents with the dirt. So only what is smaller than any mark of
the page's type goes unseen; what could be a mark stays where a text line has a use for it, and
goes elsewhere. What is larger than marks goes only if it is plainly no writing: a solid lump of
less than two letters or a hair thinner than any stroke, away from the lines.

Glossary: C components, M small ones. Levels and gaps as in `places`.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from scanclean.clutter import is_hair, is_lump
from scanclean.labels import Components
from scanclean.neighbours import keyed_neighbours
from scanclean.places import Places, find_places
from scanclean.settings import setting
from scanclean.textlines import LineSet
from scanclean.textmeasure import Spread, TextMeasures, measure_spread
from scanclean.units import MM_PER_INCH, Length, Resolution
from scanclean.upright import Shapes, place

__all__ = ["SpeckSettings", "find_specks"]

Floats = NDArray[np.float64]
Ints = NDArray[np.int64]
Bools = NDArray[np.bool_]

_LEAST_OF_DOT = 0.4  # a mark has at least so much of the area of the page's usual dot
_DOT_OF_STROKE = 0.8  # area of a dot where none can be measured, of the squared stroke width
_DOTS_TO_MEASURE = 8
_MOST_OF_DOT = 4.0  # a solid lump of more dots' area is no dot
_MOST_OF_MARK = 8.0  # dots; what is larger is writing of some kind
_SMALLEST_LETTER = 0.8  # x-heights
_USUAL_DPI = 300.0
_MM_WITHOUT_TEXT = 0.2  # on a page without text what is smaller than this is dirt


@dataclass(frozen=True)
class SpeckSettings:
    """How dirt is told from marks."""

    enabled: bool = setting(True, "take specks out")
    size: Length | None = setting(
        None, "whatever is smaller goes, wherever it stands; auto: by the type's own dots", auto=True
    )
    place: bool = setting(True, "judge small pieces by where they stand in the text lines")


def find_specks(
    components: Components,
    lines: LineSet,
    measures: TextMeasures,
    resolution: Resolution | None = None,
    settings: SpeckSettings | None = None,
    *,
    spread: Spread | None = None,
) -> Bools:
    """(C,) which components are specks.

    Parameters
    ----------
    components : Components
    lines : LineSet
        The page's text lines.
    measures : TextMeasures
    resolution : Resolution, optional
        Gives the size of dirt on pages without text, and turns the settings into pixels.
    settings : SpeckSettings, optional
    spread : Spread, optional
        If it is known already.
    """
    settings = settings or SpeckSettings()
    speck = np.zeros(components.n, bool)
    if not settings.enabled or components.n == 0:
        return speck
    shapes = place(components, spread or measure_spread(components), lines.frame)
    side = np.maximum(shapes.width, shapes.height)
    if settings.size is not None:
        speck |= side <= settings.size.px(resolution.y if resolution else _USUAL_DPI)
    if lines.n == 0:
        if settings.size is None and resolution is not None:
            speck |= side <= _MM_WITHOUT_TEXT * resolution.y / MM_PER_INCH
        return speck
    places = find_places(lines, shapes)
    small = (places.line >= 0) & ~places.body
    x_height = lines.x_height[places.line]
    # areas in squared x-heights of the line; a lone component has no line to measure it by
    area = components.area * shapes.frame.aspect / x_height**2
    if settings.place:
        dot = _usual_dot(places, area, measures, lines)
        lump = is_lump(components, shapes, measures)
        lump &= np.maximum(shapes.width, shapes.height) < 2 * np.minimum(shapes.width, shapes.height)
        blot = small & lump & (area > _MOST_OF_DOT * dot)
        asked = np.flatnonzero(small & ~blot & (area < _MOST_OF_MARK * dot))
        speck[asked] |= ~_is_mark(places, asked, area, dot)
        lone = places.line < 0
        letter = _SMALLEST_LETTER * measures.x_height_px
        speck |= blot | (lone & (side < letter)) | (lone & lump & (side < 2.5 * letter))
        long = side > 2.2 * x_height
        speck |= is_hair(components, shapes, measures) & (~places.body | long)
    return speck


def _usual_dot(places: Places, area: Floats, measures: TextMeasures, lines: LineSet) -> float:
    """Area of the page's usual dot in squared x-heights, measured on what stands over i and j."""
    asked = np.flatnonzero(
        (places.line >= 0)
        & ~places.body
        & (places.bottom > 0.95)
        & (places.top < 2.0)
        & (places.width < 0.6)
        & (places.height < 0.6)
        & (area > 0.01)
    )
    over = np.zeros(asked.size, bool)
    for body in places.bodies_near(asked, count=1):
        under = np.maximum(body, 0)
        stands = (body >= 0) & (np.abs(places.middle[under] - places.middle[asked]) < 0.2)
        stands &= (places.width[under] < 0.75) & (np.abs(places.top[under] - 1) < 0.2)
        over |= stands & (places.bottom[asked] > places.top[under] + 0.05)
    if over.sum() >= _DOTS_TO_MEASURE:
        return float(np.median(area[asked[over]]))
    x_height = float(np.median(lines.x_height))
    return _DOT_OF_STROKE * (measures.stroke_px / x_height) ** 2


def _is_mark(places: Places, asked: Ints, area: Floats, dot: float) -> Bools:
    """(M,) which small components are of a mark's size and stand where a line can use one."""
    top, bottom = places.top[asked], places.bottom[asked]
    middle, level = places.middle[asked], (top + bottom) / 2
    width, height = places.width[asked], places.height[asked]
    dots = area[asked] / dot
    gap_before, gap_behind = np.full((2, asked.size), np.inf)
    over_i, over, under, within = np.zeros((4, asked.size), bool)
    for near in places.bodies_near(asked):
        there = near >= 0
        body = np.maximum(near, 0)
        left, right, head = places.left[body], places.right[body], places.top[body]
        before = there & (places.middle[body] <= middle)
        behind = there & ~before
        gap_before[before] = np.minimum(gap_before, places.left[asked] - right)[before]
        gap_behind[behind] = np.minimum(gap_behind, left - places.right[asked])[behind]
        beside = there & (middle > left - 0.35) & (middle < right + 0.35)
        # a whole word of a running hand is higher in places than where its dots are
        word, low = right - left > 2.0, head < 1.25
        lowest = np.where(word, 0.9, head - 0.12)
        clear = np.where(~word & low, 1.0, 0.5)
        stands = beside & (bottom >= lowest) & (bottom - head < clear)
        over |= stands
        over_i |= stands & (word | (low & (right - left < 0.7)))
        inside = there & (middle > left) & (middle < right)
        foot = places.bottom[body]
        under |= inside & (top < foot + 0.1) & (foot - top < 0.3)
        # under an overhanging arm there is room for a stop, in the middle of a letter there is not
        within |= inside & ~word & (middle > left + 0.15) & (middle < (left + right) / 2 + 0.15)
    gap = np.minimum(gap_before, gap_behind)
    on_baseline = (bottom > -0.85) & (bottom < 0.3) & (top > -0.15) & (top < 0.7) & ~within
    on_baseline &= (gap_before < 1.8) | (gap_behind < 1.2)
    raised = (top > 0.95) & (top < 2.3) & (bottom > 0.45) & (gap < 2.0) & (dots > 0.6)
    dash = (width > 1.5 * height) & (width > 0.25) & (gap < 2.0)
    dash &= (level > np.where(width > 0.5, -0.1, 0.15)) & (level < np.where(width > 0.5, 1.1, 0.85))
    centred = (level > 0.3) & (level < 1.05) & (gap < 1.2) & ~within & (dots > 0.8)
    # an accent is no smaller than a dot, unless it is one of two dots
    accent = over & (dots > 0.75)
    placed = on_baseline | raised | dash | centred | over_i | accent | under
    placed &= dots >= _LEAST_OF_DOT
    mates = dots >= _LEAST_OF_DOT
    beside = over & mates & _has_mate(places, asked, mates, area, over=False)
    return placed | beside | (mates & _has_mate(places, asked, placed, area, over=True))


def _has_mate(places: Places, asked: Ints, among: Bools, area: Floats, *, over: bool) -> Bools:
    """(M,) which small components have one like them over or under them, as in a colon, or beside."""
    near = keyed_neighbours(places.line, places.middle, asked[among], asked, 2)
    found = np.zeros(asked.size, bool)
    for mate in near:
        other = np.maximum(mate, 0)
        aside = np.abs(places.middle[other] - places.middle[asked])
        apart = np.maximum(places.bottom[other] - places.top[asked], 0)
        apart += np.maximum(places.bottom[asked] - places.top[other], 0)
        factor = 3 if over else 2
        alike = np.maximum(area[other], area[asked]) < factor * np.minimum(area[other], area[asked])
        if over:
            fits = (aside < 0.35) & (apart > 0.05) & (apart < 1.0)
        else:
            level = np.abs(places.bottom[other] - places.bottom[asked])
            fits = (aside > 0.15) & (aside < 0.9) & (level < 0.2)
        found |= (mate >= 0) & alike & fits
    if over:
        found &= (places.top[asked] < 1.4) & (places.bottom[asked] > -0.6)
    return found

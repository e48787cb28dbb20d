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

from scanclean.sets.labels import Components
from scanclean.settings import setting
from scanclean.text.clutter import is_hair, is_lump
from scanclean.text.company import are_in_rows, fill_counters
from scanclean.text.lineset import LineSet
from scanclean.text.marks import are_marks, measure_dots
from scanclean.text.places import find_places
from scanclean.text.textmeasure import Spread, TextMeasures, measure_spread
from scanclean.text.upright import Shapes, place
from scanclean.units import MM_PER_INCH, Length, Resolution

__all__ = ["SpeckSettings", "find_specks"]

Bools = NDArray[np.bool_]

_MOST_OF_DOT = 4.0  # a solid lump of more dots' area is no dot
_MOST_OF_MARK = 8.0  # dots; what is larger is writing of some kind
_LONGEST_MARK = 2.0  # x-heights of the page; dashes are longer, but so are strokes of drawings
_SMALLEST_LETTER = 0.8  # x-heights
_DOUBTFUL = (0.3, 8.0)  # dots' areas: what is as large as a mark but stands where none does
_SURPLUS = 3.0  # so much more of it in the lines than elsewhere is writing that is not understood
_ZONE = 4.2  # height of a line's zone in x-heights
_MOST_TEXT = 0.8  # of the page
_SURE_PIXELS = 12  # smaller components show no shape
_USUAL_DPI = 300.0
_MM_WITHOUT_TEXT = 0.2  # on a page without text what is smaller than this is dirt


@dataclass(frozen=True)
class SpeckSettings:
    """How dirt is told from marks."""

    enabled: bool = setting(True, "take specks out")
    size: Length | None = setting(
        None,
        "whatever is smaller goes, wherever it stands; auto: by the type's own dots",
        auto=True,
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
    # in squared x-heights of the line; what has none is not asked
    area = components.area * shapes.frame.aspect / lines.x_height[places.line] ** 2
    if settings.place:
        x_height = float(np.median(lines.x_height))
        dots = measure_dots(places, area, measures.stroke_px * shapes.frame.aspect / x_height)
        lump = is_lump(components, shapes, measures)
        stout = side < 2 * np.minimum(shapes.width, shapes.height)
        blot = small & lump & stout & (area > _MOST_OF_DOT * dots.area)
        blot &= (places.bottom > 0.5) | (places.top < -0.2)  # on the baseline it may be a bold stop
        small &= side < _LONGEST_MARK * measures.x_height_px
        asked = np.flatnonzero(small & ~blot & (area < _MOST_OF_MARK * dots.area))
        unfit = asked[~are_marks(places, asked, area, _is_round(components, shapes), dots)]
        lone = places.line < 0
        least, most = (k * dots.area * x_height**2 / shapes.frame.aspect for k in _DOUBTFUL)
        doubtful = unfit[(components.area[unfit] >= least) & (components.area[unfit] <= most)]
        elsewhere = lone & (components.area >= least) & (components.area <= most)
        if doubtful.size > _SURPLUS * _expected(lines, components, int(elsewhere.sum())):
            unfit = np.setdiff1d(unfit, doubtful)
        speck[unfit] = True
        letter = _SMALLEST_LETTER * measures.x_height_px
        speck |= blot | (lone & (side < letter)) | (lone & lump & (side < 2.5 * letter))
        long = side > 2.2 * lines.x_height[places.line]
        hair = is_hair(components, shapes, measures)
        speck |= hair & (~places.body | long)
        stroke = measures.stroke_px * shapes.frame.aspect
        speck &= ~are_in_rows(shapes, speck & ~hair & ~lump, ~hair & ~lump, stroke=stroke)
        speck &= ~fill_counters(shapes, speck, components.holes)
    return speck


def _expected(lines: LineSet, components: Components, elsewhere: int) -> float:
    """How many pieces of dirt stand in the text lines if it lies everywhere alike.

    One more than was seen elsewhere is counted, so that a page with next to no room elsewhere is
    taken for a dirty one.
    """
    height, width = components.runs.shape
    long = lines.right - lines.left + lines.x_height
    text = float((long * lines.x_height).sum()) * _ZONE / lines.frame.aspect
    text = min(text, _MOST_TEXT * height * width)
    return (elsewhere + 1) * text / (height * width - text)


def _is_round(components: Components, shapes: Shapes) -> Bools:
    """(C,) which components are solid and about as wide as high, and large enough to show it."""
    narrow = np.minimum(shapes.width, shapes.height)
    wide = np.maximum(shapes.width, shapes.height)
    filled = components.area * shapes.frame.aspect >= 0.6 * narrow * wide
    return filled & (wide < 1.35 * narrow) & (components.area >= _SURE_PIXELS)

"""What can be a mark: dots, accents and punctuation told by size, shape and place.

A mark of a text line stands where the line can use it, and is as large as the line's type makes
it. The page's own i-dots tell how large its dots are, how far above the letters they stand and
how regularly; printed dots are all of one size at one height, a hand's are not.

Glossary: C components, M of them asked about. Levels, widths and gaps are in x-heights of the
component's own line (`places`), areas in squared ones.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from scanclean.text.neighbours import keyed_neighbours
from scanclean.text.places import Places

__all__ = ["Dots", "Surroundings", "are_marks", "measure_dots"]

Floats = NDArray[np.float64]
Ints = NDArray[np.int64]
Bools = NDArray[np.bool_]

_DOT_OF_STROKE = 0.8  # area of a dot where none can be measured, of the squared stroke width
_DOTS_TO_MEASURE = 8
_LEAST_OF_DOT = 0.4  # worn or faint, a mark keeps so much of the usual dot's area
_PIECE = 4.0  # dots: what is larger, and low, is a piece of a letter
_WORD = 2.0  # wider bodies are words of a running hand, or letters grown together


@dataclass(frozen=True)
class Dots:
    """The dots of a page's i and j.

    Parameters
    ----------
    area : float
    clear, foot : float
        Usual height of their feet above the letter's head, and level of their feet; of use only if
        `measured`.
    astray : float
        How far from that they stray.
    measured : bool
        Whether the page had enough of them; else the area follows from the stroke width.
    """

    area: float
    clear: float
    foot: float
    astray: float
    measured: bool


def measure_dots(places: Places, area: Floats, stroke: float) -> Dots:
    """The usual dot of the page.

    Parameters
    ----------
    places : Places
    area : (C,) float array
    stroke : float
        Stroke width in x-heights, for pages with too few dots.
    """
    small = ~places.body & (places.width < 0.6) & (places.height < 0.6) & (area > 0.01)
    high = (places.line >= 0) & (places.bottom > 0.95) & (places.top < 2.0)
    asked = np.flatnonzero(small & high)
    clear = np.full(asked.size, np.nan)
    for body in places.bodies_near(asked, count=1):
        under = np.maximum(body, 0)
        stands = (body >= 0) & (np.abs(places.middle[under] - places.middle[asked]) < 0.2)
        stands &= (places.width[under] < 0.75) & (np.abs(places.top[under] - 1) < 0.2)
        gap = places.bottom[asked] - places.top[under]
        clear = np.where(stands & (gap > 0.05), gap, clear)
    found = np.isfinite(clear)
    if np.count_nonzero(found) < _DOTS_TO_MEASURE:
        return Dots(_DOT_OF_STROKE * stroke * stroke, 0.0, 0.0, 0.0, False)
    usual = float(np.median(clear[found]))
    astray = 1.4826 * float(np.median(np.abs(clear[found] - usual)))  # as a standard deviation
    foot = float(np.median(places.bottom[asked[found]]))
    return Dots(float(np.median(area[asked[found]])), usual, foot, astray, True)


@dataclass(frozen=True, eq=False)
class Surroundings:
    """The bodies about each small component asked; columns of length M.

    Parameters
    ----------
    before, behind : (M,) float array
        Gaps to the nearest bodies on both sides, negative where boxes overlap, else infinite.
    over : (M,) bool array
        Stands over a body as an accent does.
    over_i : (M,) bool array
        The body is narrow and low, or a word, which may have an i anywhere.
    over_word : (M,) bool array
    clear : (M,) float array
        Height over the head of the body that it stands over.
    under : (M,) bool array
        Hangs under a body as a cedilla does.
    within : (M,) bool array
        Stands in the middle of a letter, not under an overhanging arm of it.
    """

    before: Floats
    behind: Floats
    over: Bools
    over_i: Bools
    over_word: Bools
    clear: Floats
    under: Bools
    within: Bools

    @classmethod
    def of(cls, places: Places, asked: Ints, bodies: Bools) -> Surroundings:
        """Look at the four nearest bodies in the line of each component asked."""
        top, bottom, middle = places.top[asked], places.bottom[asked], places.middle[asked]
        before, behind, clear = np.full((3, asked.size), np.inf)
        over, over_i, over_word, under, within = np.zeros((5, asked.size), bool)
        for near in places.bodies_near(asked, among=bodies):
            there, body = near >= 0, np.maximum(near, 0)
            left, right = places.left[body], places.right[body]
            head, foot = places.top[body], places.bottom[body]
            first = there & (places.middle[body] <= middle)
            last = there & ~first
            before[first] = np.minimum(before, places.left[asked] - right)[first]
            behind[last] = np.minimum(behind, left - places.right[asked])[last]
            # a word is higher in places than where its dots are
            word, low = right - left > _WORD, head < 1.25
            lowest = np.where(word, 0.9, head - 0.12)
            most = np.where(~word & low, 1.0, 0.5)
            beside = there & (middle > left - 0.35) & (middle < right + 0.35)
            stands = beside & (bottom >= lowest) & (bottom - head < most)
            over |= stands
            over_word |= stands & word
            over_i |= stands & (word | (low & (right - left < 0.7)))
            clear[stands] = np.minimum(clear, bottom - head)[stands]
            inside = there & (middle > left) & (middle < right)
            under |= inside & (top < foot + 0.1) & (foot - top < 0.3)
            centre = (middle > left + 0.15) & (middle < (left + right) / 2 + 0.15)
            within |= inside & ~word & centre
        return cls(before, behind, over, over_i, over_word, clear, under, within)


def are_marks(places: Places, asked: Ints, area: Floats, lump: Bools, dots: Dots) -> Bools:
    """(M,) which small components can be marks.

    Parameters
    ----------
    places : Places
    asked : (M,) int array
        Components that are no letters.
    area : (C,) float array
    lump : (C,) bool array
        Round ones, solid and about as wide as high, large enough to show it.
    dots : Dots
    """
    top, bottom = places.top[asked], places.bottom[asked]
    width, height, level = places.width[asked], places.height[asked], (top + bottom) / 2
    size, is_round = area[asked] / dots.area, lump[asked]
    # half a worn letter carries its dot as well as a whole one
    broken = (places.line >= 0) & (area > _PIECE * dots.area) & (places.bottom < 0.6)
    here = Surroundings.of(places, asked, places.body | broken)
    gap = np.minimum(here.before, here.behind)
    enough = size >= _LEAST_OF_DOT
    # Round marks are dots: as large as dots are, and where dots are. How strictly, the page tells.
    sloppy = max(0.12, 3 * dots.astray)
    if dots.measured:
        dot_like = (size > 0.5) & (size < 3.0)
        # over an i that has grown together with an l only the level tells
        at_dots = np.minimum(np.abs(here.clear - dots.clear), np.abs(bottom - dots.foot)) < sloppy
    else:
        dot_like, at_dots = enough, np.ones(asked.size, bool)

    near = (here.before < 1.8) | (here.behind < 1.2) | _in_row(places, asked, enough, area)
    hangs = (bottom > -0.85) & (bottom < 0.3) & (top > -0.15) & (top < 0.7)
    stop = hangs & ~here.within & (~is_round | ((size > 0.5) & (size < 6) & (bottom > -0.4)))
    quote = (top > 0.95) & (top < 2.3) & (bottom > 0.45) & (gap < 2.0) & (size > 0.6)
    between = (here.before < 0.5) & (here.behind < 0.5) & (size > 0.9)
    quote &= ~is_round | (size > 1.5) | between
    reach = np.where(width > 0.5, 0.6, 0.35)  # the bars of an equals sign are wider than a hyphen
    dash = (width > 1.5 * height) & (width > 0.25) & (gap < 2.0) & (np.abs(level - 0.5) < reach)
    centred = (level > 0.3) & (level < 1.05) & (gap < 1.2) & ~here.within & (size > 0.8) & dot_like
    dot = here.over_i & (~is_round | here.over_word | (dot_like & at_dots))
    dot |= is_round & dot_like & at_dots & (here.over | (gap < 0.0)) & dots.measured
    # an accent is no smaller than a dot, unless it is one of two
    accent = here.over & (size > 0.75) & (~is_round | (dot_like & at_dots))
    placed = enough & ((stop & near) | quote | dash | centred | dot | accent | here.under)
    high = here.over | ((top > 0.95) & (top < 2.3) & (bottom > 0.45) & (gap < 2.0))
    placed |= enough & stop & _after_another(places, asked, placed)
    twin = high & enough & _have_mates(places, asked, enough & high, area, over=False)
    return placed | twin | (enough & _have_mates(places, asked, placed, area, over=True))


def _after_another(places: Places, asked: Ints, placed: Bools) -> Bools:
    """(M,) which small components follow a mark, as the comma in "Ibid.", does."""
    before = keyed_neighbours(places.line, places.middle, asked[placed], asked, 1)[0]
    gap = places.left[asked] - places.right[np.maximum(before, 0)]
    follows: Bools = (before >= 0) & (gap < 1.2)
    return follows


def _in_row(places: Places, asked: Ints, among: Bools, area: Floats) -> Bools:
    """(M,) which small components are one of three alike in a row, as of an ellipsis or leaders."""
    count = np.zeros(asked.size, np.int64)
    for mate in keyed_neighbours(places.line, places.middle, asked[among], asked, 2):
        other = np.maximum(mate, 0)
        most = 1.6 * np.minimum(area[other], area[asked])
        alike = (mate >= 0) & (np.maximum(area[other], area[asked]) < most)
        alike &= np.abs(places.bottom[other] - places.bottom[asked]) < 0.1
        count += alike & (np.abs(places.middle[other] - places.middle[asked]) < 2.5)
    row: Bools = count >= 2
    return row


def _have_mates(places: Places, asked: Ints, among: Bools, area: Floats, *, over: bool) -> Bools:
    """(M,) which small components have one like them over or under them (a colon), or beside."""
    found = np.zeros(asked.size, bool)
    for mate in keyed_neighbours(places.line, places.middle, asked[among], asked, 2):
        other = np.maximum(mate, 0)
        aside = np.abs(places.middle[other] - places.middle[asked])
        apart = np.maximum(places.bottom[other] - places.top[asked], 0)
        apart += np.maximum(places.bottom[asked] - places.top[other], 0)
        most = (3 if over else 2) * np.minimum(area[other], area[asked])
        alike = (mate >= 0) & (np.maximum(area[other], area[asked]) < most)
        if over:
            found |= alike & (aside < 0.35) & (apart > 0.05) & (apart < 1.0)
        else:
            level = np.abs(places.bottom[other] - places.bottom[asked])
            found |= alike & (aside > 0.15) & (aside < 0.9) & (level < 0.2)
    if over:
        found &= (places.top[asked] < 1.4) & (places.bottom[asked] > -1.2)
    return found

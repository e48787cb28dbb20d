"""Ruled lines: where they are, which of them are rules, and what to take out for them.

Tracks are found in each direction and measured; long straight ones that stand alone for enough of
their length are rules, short ones where other rules say so. What of the ink is theirs is left to
`removal`.
"""

from __future__ import annotations

from collections.abc import Iterator
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from scanclean.ink.density import DENSITY, Tone
from scanclean.rules.dashes import DashedRule, find_dashes
from scanclean.rules.frames import Segments, hatched, short_rules, worth_measuring
from scanclean.rules.lines import Lines, measure_lines
from scanclean.rules.removal import RuledLines, rule_pixels
from scanclean.rules.smoothing import weighted_median
from scanclean.rules.tracks import find_tracks
from scanclean.sets.runs import RunSet
from scanclean.settings import setting
from scanclean.units import Length, Resolution

__all__ = ["Rule", "RuleSettings", "Ruling", "find_rules"]

Bools = NDArray[np.bool_]
Floats = NDArray[np.float64]
Ints = NDArray[np.int64]
Bytes = NDArray[np.uint8]

# which lines are looked at, in millimetres
_SURE_MM = 30.0  # of line alone, without a gap
_SHORT_MM = 3.0  # the shortest
_DOUBTFUL_MM = 25.0  # up to here what is no rule by itself may still be a side or a tick
_LONG_MM = 60.0  # from here a rule need not run as the page's others do, nor be as thin
_REACH_MM, _SHORT_REACH_MM = 13.0, 3.0  # how far ends may run on
_FAINTEST = 0.92  # of the paper: what is darker may be a rule, faded ones included
_STEADY, _STEADY_SHORT = 0.15, 0.25  # roughness; letters in a row have 0.22 and more
_FAINT, _DARK = 0.03, 2.6  # density of a rule; more is a sum of things
_DASH_PITCH_MM = 3.0
_SKEW_MARGIN = 0.5  # degrees: rules are not all parallel
_MOST_NOISE = 0.06
_UPRIGHT, _PARALLEL, _COMPANY = 2.0, 0.02, 3  # degrees; slope; lines, itself counted
_MOST_SHORT = 1500  # lines
_BATCH = 1 << 21  # samples measured at a time

_STROKE = 0.1  # density in a line's flank from which on it is a stroke
_PER_RATIO = 0.434  # d log10(x) / dx at 1: noise of a ratio as noise of a density

_POINT_PX = 16  # between the points of a rule's centre
_LEAST_INK = 0.05  # of a rule's centre

# of a bitonal scan the share of ink along a line stands for tone
_BLACK = float(DENSITY[0])
_COVER_MM = 0.34  # over so much on both sides
_HALF = 0.63  # of the scale: more than a third of the pixels are ink


@dataclass(frozen=True)
class RuleSettings:
    """What counts as a ruled line."""

    enabled: bool = setting(True, "take out ruled lines")
    directions: str = setting(
        "both", "which lines are taken", choices=("both", "horizontal", "vertical")
    )
    min_length: Length = setting(
        Length(16, "mm"), "a straight line at least this long is a rule by itself"
    )
    max_thickness: Length = setting(Length(1.4, "mm"), "a thicker line is no rule")
    max_skew: float = setting(
        5.0, "degrees that rules may lean from the sides of the page", low=0, high=10
    )
    frames: bool = setting(
        True, "take shorter lines where they close a box or hang on a rule as ticks"
    )
    dashed: bool = setting(
        True, "take dotted and dashed lines; rows of hyphens and of typed full stops stay"
    )


@dataclass(frozen=True, eq=False)
class Rule:
    """A ruled line.

    Parameters
    ----------
    direction : {"horizontal", "vertical"}
    box : (int, int, int, int)
        Left, top, right, bottom; right and bottom exclusive.
    thickness_px : float
        Of an even line of the same darkness along its middle and the same ink in all.
    density : float
        Usual optical density along the middle; on a bitonal page that of black.
    evidence : {"density", "shape"}
        What told the rule from the strokes on it.
    centre : (P, 2) float array
        Points x, y along the middle, in page coordinates.
    dash : (float, float) or None
        Length of a mark and of a gap in pixels; None of a solid line.
    """

    direction: str
    box: tuple[int, int, int, int]
    thickness_px: float
    density: float
    evidence: str
    centre: Floats
    dash: tuple[float, float] | None = None


@dataclass(frozen=True, eq=False)
class Ruling:
    """The ruled lines of a page.

    Parameters
    ----------
    rules : tuple of Rule
        Horizontal ones from top to bottom, then vertical ones from left to right.
    taken : RunSet
        Pixels of the ink that are rule and nothing else.
    mended : RunSet
        Pixels that are not ink and must be, to close strokes that a rule cut.
    """

    rules: tuple[Rule, ...]
    taken: RunSet
    mended: RunSet


def find_rules(
    ink: RunSet, tone: Tone | None, resolution: Resolution, settings: RuleSettings
) -> Ruling:
    """Find the ruled lines of a page and the pixels to take out for them.

    Parameters
    ----------
    ink : RunSet
        The thresholded page.
    tone : Tone or None
        The page over its paper; None for a bitonal scan.
    resolution : Resolution
    settings : RuleSettings

    Returns
    -------
    Ruling
    """
    nothing = RunSet.empty(ink.shape)
    if not settings.enabled or not ink:
        return Ruling((), nothing, nothing)
    # where a pattern leaves no blank paper the measured noise is the pattern's
    noise = None if tone is None else min(tone.noise, _MOST_NOISE)
    pages = _covers(ink, resolution) if tone is None else (tone.ratio, tone.ratio.T)
    sides = tuple(
        _Side(page, vertical, noise, resolution, settings)
        for page, vertical in zip(pages, (False, True), strict=True)
    )
    _accept_long(sides)
    if settings.frames:
        _accept_short(sides)
    # a direction that is not wanted has borne witness for the other one, its lines stay
    wanted = tuple(
        side
        for side in sides
        if settings.directions in ("both", "vertical" if side.vertical else "horizontal")
    )
    ruled = [part for side in wanted for part in side.ruled()]
    taken = nothing
    records: list[Rule] = []
    if ruled:
        ratio = None if tone is None else tone.ratio
        taken, by_shape = rule_pixels(ink, ratio, noise or 0.0, ruled, resolution)
        for part, chosen in zip(ruled, by_shape, strict=True):
            records += _records(part, chosen, ink)
    if settings.dashed:
        dashed, marks = find_dashes(
            ink - taken,
            resolution,
            directions=tuple(side.vertical for side in wanted),
            max_thickness=settings.max_thickness,
        )
        taken = taken | marks
        records += [_record_of(rule) for rule in dashed]
    records.sort(key=_place)
    return Ruling(tuple(records), taken, nothing)


def _covers(ink: RunSet, resolution: Resolution) -> tuple[Bytes, Bytes]:
    """A bitonal page averaged along x and along y, the second one turned; 255 is paper."""
    from PIL import Image, ImageFilter

    page = Image.fromarray(np.where(ink.to_mask(), np.uint8(0), np.uint8(255)))
    along_x = ImageFilter.BoxBlur((max(1, round(_COVER_MM * resolution.x_mm)), 0))
    along_y = ImageFilter.BoxBlur((0, max(1, round(_COVER_MM * resolution.y_mm))))
    return np.asarray(page.filter(along_x)), np.asarray(page.filter(along_y)).T


def _place(rule: Rule) -> tuple[str, float, tuple[int, int, int, int]]:
    """Horizontal rules from top to bottom, then vertical ones from left to right."""
    across = rule.centre[:, 1 if rule.direction == "horizontal" else 0]
    return rule.direction, float(np.median(across)), rule.box


def _record_of(rule: DashedRule) -> Rule:
    direction = "vertical" if rule.vertical else "horizontal"
    return Rule(direction, rule.box, rule.thickness_px, _BLACK, "shape", rule.centre, rule.dash)


def _records(part: RuledLines, by_shape: Bools, ink: RunSet) -> Iterator[Rule]:
    """One record a rule; a fold or an edge of light that left no ink is none."""
    lines = part.lines
    thickness = lines.profiles.even_thickness(lines.level)
    low, high = lines.profiles.extent
    for i in np.flatnonzero(part.is_rule):
        place = lines.begin[i] + np.flatnonzero(part.live[lines.begin[i] : lines.begin[i + 1]])
        column, centre = lines.column[place], lines.centre[place]
        alone = place[lines.sure[place]]
        x, y = lines.column[alone], np.rint(lines.centre[alone]).astype(np.int64)
        if alone.size and _covered(ink, *((y, x) if part.vertical else (x, y))) < _LEAST_INK:
            continue
        left, right = int(column[0]), int(column[-1]) + 1
        top = max(0, int(np.floor(centre.min() + low[i] + 0.5)))
        bottom = min(ink.shape[part.vertical], int(np.ceil(centre.max() + high[i] + 0.5)))
        some = np.append(np.arange(0, place.size - 1, _POINT_PX), place.size - 1)
        points = np.stack((column[some], centre[some]), axis=1) + 0.5
        yield Rule(
            "vertical" if part.vertical else "horizontal",
            (top, left, bottom, right) if part.vertical else (left, top, right, bottom),
            float(thickness[i]),
            float(lines.peak[i]),
            "shape" if by_shape[i] else "density",
            points[:, ::-1] if part.vertical else points,
        )


def _covered(ink: RunSet, x: Ints, y: Ints) -> float:
    """Share of the points that are ink."""
    before = np.searchsorted(ink.bounds, y * (ink.shape[1] + 1) + x, side="right")
    return float((before % 2).mean())


# ---- which lines are rules


class _Side:
    """The lines of one direction; the page is turned so that they run along its rows."""

    def __init__(
        self,
        page: Bytes,
        vertical: bool,
        noise: float | None,
        resolution: Resolution,
        settings: RuleSettings,
    ) -> None:
        self.page, self.vertical = page, vertical
        turned = resolution.transposed if vertical else resolution
        self.mm, self.mm_across = turned.x_mm, turned.y_mm
        self.dashed = settings.dashed
        self.min_length = settings.min_length.px(turned.x) / self.mm
        self.max_thickness = settings.max_thickness.px(turned.y)
        self.stroke = max(_STROKE, 5 * _PER_RATIO * (noise or 0.0))
        tracks = find_tracks(
            page,
            mm_along=self.mm,
            mm_across=self.mm_across,
            level=255 * (_HALF if noise is None else min(_FAINTEST, 1 - 2.5 * noise)),
            max_thickness=self.max_thickness,
        )
        leaning = np.abs(tracks.slope) * self.mm / self.mm_across
        self.tracks = tracks.select(leaning <= np.tan(np.radians(settings.max_skew + _SKEW_MARGIN)))
        self.segments = Segments(
            self.tracks.start / self.mm,
            self.tracks.stop / self.mm,
            self.tracks.offset / self.mm_across,
            self.tracks.slope * self.mm / self.mm_across,
            self.tracks.thickness / 2 / self.mm_across,
            np.zeros(len(self.tracks)),
            np.zeros(len(self.tracks)),
        )
        looked_at = self.segments.length >= _SHORT_MM
        self.in_thicket = np.zeros(len(self.tracks), bool)
        self.in_thicket[looked_at] = hatched(self.segments.select(looked_at))
        self.in_thicket &= self.segments.length < _LONG_MM
        self.accepted = np.zeros(len(self.tracks), bool)
        # measured lines, and which of them are rules
        self.found: list[tuple[Lines, Bools]] = []

    def measure(self, chosen: Ints, reach_mm: float) -> Iterator[tuple[Ints, Lines]]:
        """Lines of some tracks, those of like thickness together, and not too many at a time."""
        thickness = self.tracks.thickness[chosen]
        order = np.argsort(thickness, kind="stable")
        chosen, thickness = chosen[order], thickness[order]
        cost = (self.tracks.length[chosen] + 2 * reach_mm * self.mm) * (thickness + 16)
        while chosen.size:
            fits = (np.cumsum(cost) <= _BATCH) & (thickness <= 1.5 * thickness[0] + 2)
            n = max(1, int(fits.sum()))
            batch = np.sort(chosen[:n])
            yield (
                batch,
                measure_lines(
                    self.page,
                    DENSITY,
                    self.tracks.select(batch),
                    mm=self.mm,
                    reach=round(reach_mm * self.mm),
                    stroke=self.stroke,
                ),
            )
            chosen, thickness, cost = chosen[n:], thickness[n:], cost[n:]

    def measured(self, lines: Lines) -> Segments:
        """Lines in millimetres, with the ends that they run on to."""
        start, stop = lines.tracks.start.copy(), lines.tracks.stop.copy()
        extent = lines.extent
        np.minimum.at(start, lines.track[extent], lines.column[extent])
        np.maximum.at(stop, lines.track[extent], lines.column[extent] + 1)
        offset, slope, _ = lines.straight
        return Segments(
            start / self.mm,
            stop / self.mm,
            offset / self.mm_across,
            slope * self.mm / self.mm_across,
            lines.thickness / 2 / self.mm_across,
            lines.peak,
            lines.isolated,
        )

    def known(self) -> Segments:
        """The rules found so far."""
        return Segments.joined(
            *(self.measured(lines).select(is_rule) for lines, is_rule in self.found)
        )

    def stands_alone(self, lines: Lines) -> Bools:
        """(T,) bool: which lines are rules if they are long enough."""
        tracks = lines.tracks
        length = tracks.length / self.mm
        _, slope, bend = lines.straight
        isolated, absent = lines.isolated, lines.absent
        # letters in a row leave gaps; so does a worn rule, but that is long or stands alone
        is_rule = (absent <= 0.15) & (isolated >= np.where(isolated * length > 12, 0.12, 0.2))
        is_rule |= (absent <= 0.35) & (isolated >= 0.4) & (length > _LONG_MM)
        is_rule &= ~lines.dashed
        if self.dashed:
            # the step of a typewriter's hyphens is shorter
            is_rule |= (lines.pitch >= _DASH_PITCH_MM * self.mm) & (isolated >= 0.12)
        is_rule &= (lines.peak >= _FAINT) & (lines.peak <= _DARK)
        is_rule &= lines.thickness <= 1.15 * self.max_thickness
        is_rule &= bend / self.mm_across <= np.minimum(0.16, 0.02 + 0.0012 * length)
        # arcs and letters that touch by chance have their pieces beside the line through them
        agreement = lines.agreement(0.12 * self.mm_across)
        sure = (isolated * length >= _SURE_MM) & (absent <= 0.05) & (bend / self.mm_across < 0.05)
        is_rule &= agreement >= np.where(sure, 0.4, 0.85)
        return is_rule & ((length > _LONG_MM) | (np.abs(slope - tracks.page_slope) < 0.02))

    def may_belong(self, lines: Lines) -> Bools:
        """(T,) bool: which lines are rules if others bear them out."""
        _, slope, bend = lines.straight
        straight = (bend / self.mm_across < 0.042) & (
            np.abs(slope - lines.tracks.page_slope) < 0.03
        )
        return straight & (lines.isolated >= 0.3) & (lines.peak >= _FAINT)

    def ruled(self) -> list[RuledLines]:
        """The rules found, with their columns."""
        return [
            RuledLines(lines, self.vertical, is_rule, lines.extent & is_rule[lines.track])
            for lines, is_rule in self.found
            if is_rule.any()
        ]


def _accept_long(sides: tuple[_Side, ...]) -> None:
    """Find the lines that are rules by themselves."""
    batches = []
    for side in sides:
        length = side.segments.length
        fits = (length >= side.min_length) & (side.tracks.roughness < _STEADY)
        long = np.flatnonzero(fits & ~side.in_thicket)
        measured = [(chosen, lines) for chosen, lines in side.measure(long, _REACH_MM)]
        side.found = [(lines, side.stands_alone(lines)) for _, lines in measured]
        usual = _usual_thickness(side.found)
        for (chosen, lines), (_, is_rule) in zip(measured, side.found, strict=True):
            alone = (length[chosen] > _LONG_MM) | (lines.isolated > 0.6)
            is_rule &= alone | _is_usual(lines, usual)
        batches.append([chosen for chosen, _ in measured])
    _drop_lone_leaners(sides)
    for side, parts in zip(sides, batches, strict=True):
        for some, (_, is_rule) in zip(parts, side.found, strict=True):
            side.accepted[some] = is_rule


def _drop_lone_leaners(sides: tuple[_Side, ...]) -> None:
    """Of lines that lean, keep those that others are parallel to: a page is turned as a whole."""
    every = [part for side in sides for part in side.found]
    leans = [
        (-1 if side.vertical else 1) * lines.straight[1] * side.mm / side.mm_across
        for side in sides
        for lines, _ in side.found
    ]
    if not every:
        return
    known = np.concatenate([lean[is_rule] for lean, (_, is_rule) in zip(leans, every, strict=True)])
    for lean, (_, is_rule) in zip(leans, every, strict=True):
        company = (np.abs(lean[:, None] - known) < _PARALLEL).sum(axis=1)
        is_rule &= (np.abs(lean) <= np.tan(np.radians(_UPRIGHT))) | (company >= _COMPANY)


def _accept_short(sides: tuple[_Side, ...]) -> None:
    """Find the lines that are rules because of others; both directions bear witness."""
    usual = _usual_thickness([pair for side in sides for pair in side.found])
    if usual == 0.0:
        return
    known = (sides[0].known(), sides[1].known())
    chosen = []
    for side in sides:
        tracks, length = side.tracks, side.segments.length
        fits = (length >= _SHORT_MM) & (length < _DOUBTFUL_MM) & ~side.in_thicket
        fits &= (tracks.roughness < _STEADY_SHORT) & (tracks.thickness <= usual + 4)
        fits &= np.abs(tracks.slope - tracks.page_slope) < 0.04
        some = np.flatnonzero(fits & ~side.accepted)
        # of too many the longest: they are compared in pairs
        chosen.append(np.sort(some[np.argsort(-length[some], kind="stable")[:_MOST_SHORT]]))
    near = worth_measuring(
        (sides[0].segments.select(chosen[0]), sides[1].segments.select(chosen[1])), known
    )
    measured = []
    for side, some, worth in zip(sides, chosen, near, strict=True):
        lines = [lines for _, lines in side.measure(some[worth], _SHORT_REACH_MM)]
        good = [side.may_belong(one) & _is_usual(one, usual) for one in lines]
        measured.append((lines, good))
    segments = [
        Segments.joined(*(side.measured(one).select(ok) for one, ok in zip(*part, strict=True)))
        for side, part in zip(sides, measured, strict=True)
    ]
    is_rule = short_rules((segments[0], segments[1]), known)
    for side, (lines, good), accepted in zip(sides, measured, is_rule, strict=True):
        left = accepted
        for one, ok in zip(lines, good, strict=True):
            chosen_now = ok.copy()
            chosen_now[ok] = left[: int(ok.sum())]
            left = left[int(ok.sum()) :]
            side.found.append((one, chosen_now))


def _usual_thickness(found: list[tuple[Lines, Bools]]) -> float:
    """Of most of the ruled length, in pixels; 0.0 without a rule."""
    thickness = [lines.thickness[is_rule] for lines, is_rule in found]
    length = [lines.tracks.length[is_rule] for lines, is_rule in found]
    if not thickness:
        return 0.0
    return weighted_median(np.concatenate(thickness), np.concatenate(length).astype(float) ** 2)


def _is_usual(lines: Lines, usual: float) -> Bools:
    return np.asarray(lines.thickness <= max(1.5 * usual, usual + 2))

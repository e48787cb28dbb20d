"""Ruled lines: found, told from strokes, and subtracted in optical density.

Light passes one layer of ink after another, so densities add up (Beer-Lambert law): where a stroke
crosses a rule, the page has the density of both. What a rule has by itself is known from its track;
what the page has beyond it is the stroke's, and nothing needs to be guessed at.
"""

from __future__ import annotations

from collections.abc import Iterator
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from scanclean.density import DENSITY, Tone
from scanclean.elements import box
from scanclean.frames import Segments, hatched, short_rules, worth_measuring
from scanclean.labels import label
from scanclean.morphology import dilate
from scanclean.profiles import Lines, measure_lines
from scanclean.runs import RunSet
from scanclean.settings import setting
from scanclean.smoothing import weighted_median
from scanclean.tracks import find_tracks
from scanclean.units import Length, Resolution

__all__ = ["Rule", "RuleSettings", "Ruling", "find_rules"]

Bools = NDArray[np.bool_]
Floats = NDArray[np.float64]
Ints = NDArray[np.int64]
Bytes = NDArray[np.uint8]

# which lines are looked at, in millimetres
_SHORT_MM = 3.0  # the shortest
_DOUBTFUL_MM = 25.0  # up to here what is no rule by itself may still be a side or a tick
_LONG_MM = 60.0  # from here a rule need not run as the page's others do, nor be as thin
_REACH_MM, _SHORT_REACH_MM = 13.0, 3.0  # how far ends may run on
_FAINTEST = 0.92  # of the paper: what is darker may be a rule, faded ones included
_STEADY, _STEADY_SHORT = 0.22, 0.35  # roughness; letters in a row have 0.27 and more
_BATCH = 1 << 21  # samples measured at a time

# what is subtracted and what is kept
_INK = 0.1  # residual density of a stroke
_SIGMAS = 3.2
_PER_RATIO = 0.434  # d log10(x) / dx at 1: noise of a ratio as noise of a density
_FRINGE_PX = 1.0  # beside a line, still judged by its profile
_STEPS = 100.0  # of density in a byte
_SPECK_MM2, _CROSSING_MM2 = 0.1, 0.5  # loose pieces that are a stroke's, at crossings of rules too
_HORIZONTAL, _VERTICAL, _DOUBTFUL = 1, 2, 4  # flags of the pixels of rules


@dataclass(frozen=True)
class RuleSettings:
    """What counts as a ruled line."""

    enabled: bool = setting(True, "take out ruled lines")
    directions: str = setting(
        "both", "which lines are taken", choices=("both", "horizontal", "vertical")
    )
    min_length: Length = setting(
        Length(17, "mm"), "a straight line at least this long is a rule by itself"
    )
    max_thickness: Length = setting(Length(1.4, "mm"), "a thicker line is no rule")
    max_skew: float = setting(
        5.0, "degrees that rules may lean from the sides of the page", low=0, high=10
    )
    frames: bool = setting(
        True, "take shorter lines where they close a box, hang on a rule as ticks or continue it"
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
        Usual optical density along the middle.
    evidence : {"density", "shape"}
        What told the rule from the strokes on it.
    centre : (P, 2) float array
        Points x, y along the middle, in page coordinates.
    """

    direction: str
    box: tuple[int, int, int, int]
    thickness_px: float
    density: float
    evidence: str
    centre: Floats


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
    if not settings.enabled or not ink or tone is None:
        return Ruling((), nothing, nothing)
    sides = tuple(
        _Side(tone.ratio.T if vertical else tone.ratio, vertical, tone.noise, resolution, settings)
        for vertical in (False, True)
    )
    _accept_long(sides, settings)
    if settings.frames:
        _accept_short(sides)
    if settings.directions != "both":
        # the other direction has borne witness, its lines stay
        sides = tuple(s for s in sides if s.vertical == (settings.directions == "vertical"))
    rules = tuple(rule for side in sides for rule in side.records())
    if not rules:
        return Ruling((), nothing, nothing)
    return Ruling(rules, _subtract(ink, tone, sides, resolution), nothing)


# ---- which lines are rules


class _Side:
    """The lines of one direction; the page is turned so that they run along its rows."""

    def __init__(
        self,
        page: Bytes,
        vertical: bool,
        noise: float,
        resolution: Resolution,
        settings: RuleSettings,
    ) -> None:
        self.page, self.vertical = page, vertical
        turned = resolution.transposed if vertical else resolution
        self.mm, self.mm_across = turned.x_mm, turned.y_mm
        self.min_length = settings.min_length.px(turned.x) / self.mm
        self.max_thickness = settings.max_thickness.px(turned.y)
        self.stroke = max(_INK, 5 * _PER_RATIO * noise)
        tracks = find_tracks(
            page,
            mm_along=self.mm,
            mm_across=self.mm_across,
            level=255 * min(_FAINTEST, 1 - 2.5 * noise),
            max_thickness=self.max_thickness,
        )
        leaning = np.abs(tracks.slope) * self.mm / self.mm_across
        self.tracks = tracks.select(leaning <= np.tan(np.radians(settings.max_skew)))
        self.segments = Segments(
            self.tracks.start / self.mm,
            self.tracks.stop / self.mm,
            self.tracks.offset / self.mm_across,
            self.tracks.slope * self.mm / self.mm_across,
            self.tracks.thickness / 2 / self.mm_across,
            np.zeros(len(self.tracks)),
        )
        self.accepted = np.zeros(len(self.tracks), bool)
        self.found: list[tuple[Lines, Bools]] = []  # measured lines, and which of them are rules

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
                    ink=self.stroke,
                ),
            )
            chosen, thickness, cost = chosen[n:], thickness[n:], cost[n:]

    def measured(self, lines: Lines) -> Segments:
        """Lines in millimetres, with the ends that they run on to."""
        start, stop = lines.tracks.start.copy(), lines.tracks.stop.copy()
        extent = self.extent(lines)
        np.minimum.at(start, lines.track[extent], lines.column[extent])
        np.maximum.at(stop, lines.track[extent], lines.column[extent] + 1)
        offset, slope, _ = lines.straightness()
        return Segments(
            start / self.mm,
            stop / self.mm,
            offset / self.mm_across,
            slope * self.mm / self.mm_across,
            (lines.high - lines.low) / 2 / self.mm_across,
            lines.peak,
        )

    def extent(self, lines: Lines) -> Bools:
        """(N,) bool: columns of each line."""
        return lines.extent(round(0.85 * self.mm))

    def known(self) -> Segments:
        """The rules found so far."""
        return Segments.joined(
            *(self.measured(lines).select(is_rule) for lines, is_rule in self.found)
        )

    def stands_alone(self, lines: Lines) -> Bools:
        """(T,) bool: which lines are rules if they are long enough."""
        tracks = lines.tracks
        length = tracks.length / self.mm
        _, slope, bend = lines.straightness()
        is_rule = (lines.isolated() >= 0.28) & (tracks.covered >= 0.6 * tracks.length)
        is_rule &= (lines.peak >= 0.03) & ~lines.dashed
        is_rule &= lines.high - lines.low <= 1.15 * self.max_thickness
        is_rule &= bend / self.mm_across <= np.minimum(0.16, 0.02 + 0.0012 * length)
        is_rule &= lines.agreement(0.12 * self.mm_across) >= 0.75
        return is_rule & ((length > _LONG_MM) | (np.abs(slope - tracks.page_slope) < 0.02))

    def may_belong(self, lines: Lines) -> Bools:
        """(T,) bool: which lines are rules if others bear them out."""
        _, slope, bend = lines.straightness()
        straight = (bend / self.mm_across < 0.042) & (
            np.abs(slope - lines.tracks.page_slope) < 0.03
        )
        return straight & (lines.isolated() >= 0.3) & (lines.peak >= 0.03)

    def records(self) -> list[Rule]:
        """The rules, from the first one across the page to the last."""
        found = [rule for lines, is_rule in self.found for rule in self._records(lines, is_rule)]
        axis = 0 if self.vertical else 1
        return sorted(found, key=lambda rule: (float(np.median(rule.centre[:, axis])), rule.box))

    def _records(self, lines: Lines, is_rule: Bools) -> Iterator[Rule]:
        extent, thickness = self.extent(lines), lines.thickness()
        step = max(1, round(self.mm))
        begin = np.searchsorted(lines.track, np.arange(len(lines) + 1))
        for i in np.flatnonzero(is_rule):
            place = begin[i] + np.flatnonzero(extent[begin[i] : begin[i + 1]])
            column, centre = lines.column[place], lines.centre[place]
            left, right = int(column[0]), int(column[-1]) + 1
            top = max(0, int(np.floor(centre.min() + lines.low[i] + 0.5)))
            bottom = min(self.page.shape[0], int(np.ceil(centre.max() + lines.high[i] + 0.5)))
            some = np.append(np.arange(0, place.size - 1, step), place.size - 1)
            points = np.stack((column[some], centre[some]), axis=1) + 0.5
            yield Rule(
                "vertical" if self.vertical else "horizontal",
                (top, left, bottom, right) if self.vertical else (left, top, right, bottom),
                float(thickness[i]),
                float(lines.peak[i]),
                "density",
                points[:, ::-1] if self.vertical else points,
            )


def _accept_long(sides: tuple[_Side, ...], settings: RuleSettings) -> None:
    """Find the lines that are rules by themselves."""
    for side in sides:
        length = side.segments.length
        long = np.flatnonzero((length >= side.min_length) & (side.tracks.roughness < _STEADY))
        in_thicket = hatched(side.segments.select(long), side.segments.select(length >= _SHORT_MM))
        long = long[~in_thicket | (length[long] >= _LONG_MM)]
        measured = [(chosen, lines) for chosen, lines in side.measure(long, _REACH_MM)]
        side.found = [(lines, side.stands_alone(lines)) for _, lines in measured]
        usual = _usual_thickness(side.found)
        for (chosen, lines), (_, is_rule) in zip(measured, side.found, strict=True):
            is_rule &= (length[chosen] > _LONG_MM) | _is_usual(lines, usual)
            side.accepted[chosen] = is_rule


def _accept_short(sides: tuple[_Side, ...]) -> None:
    """Find the lines that are rules because of others; both directions bear witness."""
    usual = _usual_thickness([pair for side in sides for pair in side.found])
    if usual == 0.0:
        return
    known = (sides[0].known(), sides[1].known())
    chosen = []
    for side in sides:
        tracks, length = side.tracks, side.segments.length
        fits = (length >= _SHORT_MM) & (length < _DOUBTFUL_MM)
        fits &= (tracks.roughness < _STEADY_SHORT) & (tracks.thickness <= usual + 4)
        fits &= np.abs(tracks.slope - tracks.page_slope) < 0.04
        chosen.append(np.flatnonzero(fits & ~side.accepted))
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
    thickness = [(lines.high - lines.low)[is_rule] for lines, is_rule in found]
    length = [lines.tracks.length[is_rule] for lines, is_rule in found]
    if not thickness:
        return 0.0
    return weighted_median(np.concatenate(thickness), np.concatenate(length).astype(float) ** 2)


def _is_usual(lines: Lines, usual: float) -> Bools:
    return np.asarray(lines.high - lines.low <= max(1.5 * usual, usual + 2))


# ---- which pixels are rule and nothing else


def _subtract(ink: RunSet, tone: Tone, sides: tuple[_Side, ...], resolution: Resolution) -> RunSet:
    """The ink that is no darker than the rules alone would be."""
    predicted = np.zeros(ink.shape, np.uint8)  # density of the rules, in hundredths
    flags = np.zeros(ink.shape, np.uint8)
    for side in sides:
        turn = np.transpose if side.vertical else np.asarray
        for lines, is_rule in side.found:
            _lay(
                lines,
                is_rule[lines.track] & side.extent(lines),
                turn(predicted),
                turn(flags),
                _VERTICAL if side.vertical else _HORIZONTAL,
            )
    zone = np.flatnonzero(flags)
    flag, step = flags.ravel()[zone], predicted.ravel()[zone]
    # a pixel is a stroke's where the page is darker than the rule by more than noise explains;
    # the noise of a density grows with the density
    rule = np.arange(256) / _STEPS
    margin = np.maximum(_INK, _SIGMAS * _PER_RATIO * tone.noise * 10 ** np.minimum(rule, 1.2))
    darkest = 255 * 10.0 ** -(rule + margin)
    darkest_sure = 255 * 10.0 ** -(rule + 1.5 * margin)
    ratio = tone.ratio.ravel()[zone]
    is_stroke = ratio < np.where(flag & _DOUBTFUL, darkest[step], darkest_sure[step])

    ruled = _points(ink.shape, zone) & ink
    strokes = _points(ink.shape, zone[is_stroke]) & ink
    both = _HORIZONTAL | _VERTICAL
    crossings = _points(ink.shape, zone[(flag & both) == both])
    loose = _loose(strokes, ink - ruled, crossings, resolution)
    return ruled - (strokes - loose)


def _lay(lines: Lines, live: Bools, predicted: Bytes, flags: Bytes, flag: int) -> None:
    """Enter the density of lines, in their live columns, into the page's."""
    some = np.flatnonzero(live)
    row, column, density = lines.predicted(some, _FRINGE_PX)
    i, j = np.nonzero((density >= 0) & (row >= 0) & (row < predicted.shape[0]))
    y, x = row[i, j], column[i]
    step = np.minimum(_STEPS * density[i, j] + 0.5, 255).astype(np.uint8)
    predicted[y, x] = np.maximum(predicted[y, x], step)
    flags[y, x] |= np.where(lines.sure[some[i]], flag, flag | _DOUBTFUL).astype(np.uint8)


def _points(shape: tuple[int, int], flat: Ints) -> RunSet:
    """The set of pixels at flat positions y W + x, given in rising order."""
    place = flat + flat // shape[1]  # a page of runs has one column more
    begins = np.diff(place, prepend=-2) != 1
    ends = np.append(begins[1:], True)[: place.size]
    bounds = np.stack((place[begins], place[ends] + 1), axis=1)
    return RunSet(shape, bounds.ravel())


def _loose(strokes: RunSet, ink: RunSet, crossings: RunSet, resolution: Resolution) -> RunSet:
    """Residue that touches no ink beside the rules and is too small for a stroke."""
    mm2 = resolution.x_mm * resolution.y_mm
    pieces = label(strokes)
    pieces = pieces.select(pieces.area < _CROSSING_MM2 * mm2)
    if pieces.n == 0:
        return pieces.runs
    around = dilate(pieces.runs, box(3, 3))
    touched = pieces.touching(dilate(around & ink, box(3, 3)))
    small = pieces.area < _SPECK_MM2 * mm2
    crossed = pieces.runs & crossings
    owner = np.searchsorted(pieces.runs.bounds[0::2], crossed.bounds[0::2], side="right") - 1
    at_crossing = np.bincount(pieces.run_label[owner], crossed.length, pieces.n)
    return pieces.keep(~touched & (small | (2 * at_crossing > pieces.area)))

"""Which pixels of the ink are rule and nothing else.

Light passes one layer of ink after another, so densities add up (Beer-Lambert law): where a stroke
crosses a rule, the page has the density of both. What a rule has by itself is known from its track;
what the page has beyond it is the stroke's. Where there is no tone to tell, shape decides.
"""

from __future__ import annotations

from dataclasses import dataclass
from typing import TypeVar

import numpy as np
from numpy.typing import NDArray

from scanclean.rules.crossings import edges_of, modal_stroke, strokes_within
from scanclean.rules.lines import Lines
from scanclean.sets.elements import box
from scanclean.sets.labels import label
from scanclean.sets.morphology import dilate
from scanclean.sets.runs import RunSet
from scanclean.units import Resolution

__all__ = ["RuledLines", "rule_pixels"]

Bools = NDArray[np.bool_]
Bytes = NDArray[np.uint8]
Floats = NDArray[np.float64]
Ints = NDArray[np.int64]
_Pixel = TypeVar("_Pixel", np.bool_, np.uint8)

_INK = 0.1  # residual density of a stroke
_SIGMAS = 3.2
_PER_RATIO = 0.434  # d log10(x) / dx at 1: noise of a ratio as noise of a density
_CROSSED = 12  # columns that tell what strokes add on a rule
_AS_DARK = 0.15  # difference of density
_FRINGE_PX = 1.0  # beside a line, still judged by its profile
_BLACK = 1.75  # density: of a few grey levels, so nothing darker can be told
_STEPS = 100.0  # of density in a byte
_SPECK_MM2, _CROSSING_MM2 = 0.1, 0.5  # loose pieces that are a stroke's, at crossings of rules too
_THIN = 1.8  # pixels: nothing drawn on purpose is thinner and stands alone

# flags of pixels, by the direction of the rule they are on
_ZONE = (1, 2)
_DOUBTFUL = 4  # the column may hold a stroke
_SHAPED = (8, 16)  # shape decides
_KEPT = (32, 64)  # and finds a stroke
_RIM = 128  # beside a line that shape decides


@dataclass(frozen=True, eq=False)
class RuledLines:
    """Measured lines of one direction, and what of them is rule.

    Parameters
    ----------
    lines : Lines
    vertical : bool
    is_rule : (T,) bool array
    live : (N,) bool array
        Columns of rules.
    """

    lines: Lines
    vertical: bool
    is_rule: Bools
    live: Bools

    def turned(self, page: NDArray[_Pixel]) -> NDArray[_Pixel]:
        """A view of the page in which the lines run along the rows."""
        return page.T if self.vertical else page


def rule_pixels(
    ink: RunSet,
    ratio: Bytes | None,
    noise: float,
    ruled: list[RuledLines],
    resolution: Resolution,
) -> tuple[RunSet, list[Bools]]:
    """The part of the ink that is rule and nothing else.

    Parameters
    ----------
    ink : RunSet
    ratio : (H, W) uint8 array or None
        Page over paper, 255 = paper; None if there is no tone.
    noise : float
        Standard deviation of the ratio on paper.
    ruled : list of RuledLines
    resolution : Resolution

    Returns
    -------
    taken : RunSet
    by_shape : list of (T,) bool arrays
        For each of `ruled`, the rules on which shape decided.
    """
    flags = np.zeros(ink.shape, np.uint8)
    if ratio is None:
        by_shape = [part.is_rule for part in ruled]
    else:
        predicted = np.zeros(ink.shape, np.uint8)  # density of the rules, in steps
        for part in ruled:
            _lay_density(part, part.turned(predicted), part.turned(flags))
        by_shape = _saturated(ruled, flags, noise)
    _lay_shape(ruled, by_shape, ink, flags)

    zone = np.flatnonzero(flags)
    flag = flags.ravel()[zone]
    is_stroke = np.ones(zone.size, bool)
    if ratio is not None:
        is_stroke = _is_darker(ratio.ravel()[zone], predicted.ravel()[zone], flag, noise)
    shaped = flag & (_SHAPED[0] | _SHAPED[1])
    # at a crossing of two rules a stroke has to be one in both directions
    found = (flag & (_KEPT[0] | _KEPT[1])) >> 2
    is_stroke = np.where(shaped > 0, found == shaped, is_stroke)

    on_rules = _points(ink.shape, zone) & ink
    strokes = _points(ink.shape, zone[is_stroke]) & ink
    both = (flag & (_ZONE[0] | _SHAPED[0]) > 0) & (flag & (_ZONE[1] | _SHAPED[1]) > 0)
    crossings = _points(ink.shape, zone[both])
    loose = _loose(strokes, ink - on_rules, crossings, resolution)
    return on_rules - (strokes - loose), by_shape


def _margin(density: Floats, noise: float) -> Floats:
    """Density above a rule's own from which on it is a stroke's.

    The noise of a density grows with the density.
    """
    return np.maximum(_INK, _SIGMAS * _PER_RATIO * noise * 10 ** np.minimum(density, 1.2))


def _saturated(ruled: list[RuledLines], flags: Bytes, noise: float) -> list[Bools]:
    """Rules on which strokes leave no density of their own.

    Where strokes come out on both sides of a rule they must be in it too. What they add there is
    measured, on this rule or, if few strokes cross it, on all that are as dark.
    """
    peaks, added, owners = [], [], []
    for number, part in enumerate(ruled):
        lines = part.lines
        turned = part.turned(flags)
        row = np.clip(np.rint(lines.centre).astype(np.int64), 0, turned.shape[0] - 1)
        column = np.minimum(lines.column, turned.shape[1] - 1)
        other = turned[row, column] & _ZONE[not part.vertical] > 0
        other = np.convolve(other, np.ones(9), mode="same") > 0
        crossed = np.flatnonzero(lines.bridged & part.live & ~other)
        track = lines.track[crossed]
        extra = lines.strength[crossed] - lines.amplitude[crossed]
        added.append(extra * lines.profiles.peak[track])
        peaks.append(lines.peak[track])
        owners.append(np.stack((np.full(track.size, number), track), axis=1))
    all_peaks, all_added = np.concatenate(peaks), np.concatenate(added)
    all_owners = np.concatenate(owners)
    by_shape = []
    for number, part in enumerate(ruled):
        saturated = np.zeros(len(part.lines), bool)
        for i in np.flatnonzero(part.is_rule):
            peak = part.lines.peak[i]
            some = (all_owners == (number, i)).all(axis=1)
            if np.count_nonzero(some) < _CROSSED:
                some = np.abs(all_peaks - peak) < _AS_DARK
            if np.count_nonzero(some) >= _CROSSED:
                saturated[i] = np.quantile(all_added[some], 0.75) < _margin(peak, noise)
            saturated[i] |= peak > _BLACK
        by_shape.append(saturated)
    return by_shape


def _is_darker(ratio: Bytes, predicted: Bytes, flag: Bytes, noise: float) -> Bools:
    """Which pixels are darker than their rules by more than noise explains."""
    # a table by steps of density serves all pixels
    rule = np.arange(256) / _STEPS
    margin = _margin(rule, noise)
    darkest = 255 * 10.0 ** -(rule + margin)
    darkest_sure = 255 * 10.0 ** -(rule + 1.5 * margin)
    darkest[rule > _BLACK] = darkest_sure[rule > _BLACK] = 0
    return ratio < np.where(flag & _DOUBTFUL, darkest[predicted], darkest_sure[predicted])


def _lay_density(part: RuledLines, predicted: Bytes, flags: Bytes) -> None:
    """Enter the density of lines, in their live columns, into the page's."""
    lines, some = part.lines, np.flatnonzero(part.live)
    row, density, belongs = lines.predicted(some, _FRINGE_PX)
    i, j = np.nonzero(belongs & (row >= 0) & (row < predicted.shape[0]))
    y, x = row[i, j], lines.column[some[i]]
    step = np.minimum(_STEPS * density[i, j] + 0.5, 255).astype(np.uint8)
    predicted[y, x] = np.maximum(predicted[y, x], step)
    zone = _ZONE[part.vertical]
    flags[y, x] |= np.where(lines.sure[some[i]], zone, zone | _DOUBTFUL).astype(np.uint8)


def _lay_shape(ruled: list[RuledLines], by_shape: list[Bools], ink: RunSet, flags: Bytes) -> None:
    """Enter the zones of lines that shape decides, and the strokes found in them."""
    if not any(chosen.any() for chosen in by_shape):
        return
    page = ink.to_mask()
    bands = [
        band
        for part, chosen in zip(ruled, by_shape, strict=True)
        if chosen.any()
        for band in _bands(part, chosen, page)
    ]
    for band in bands:
        band.enter(flags, band.half + 1, _RIM)
        band.enter(flags, band.half, _SHAPED[band.part.vertical])
    across = [
        (flags & (_ZONE[d] | _SHAPED[d]) == 0) | (flags & (_ZONE[1 - d] | _SHAPED[1 - d]) > 0)
        for d in (1, 0)
    ]
    off = flags & ~np.uint8(_RIM) == 0
    stroke = modal_stroke(RunSet.from_mask(page & off))
    for band in bands:
        # rules of the other direction are no strokes
        alone = page & across[band.part.vertical]
        band.enter_strokes(flags, band.part.turned(alone), stroke)


@dataclass(frozen=True, eq=False)
class _Band:
    """Lines of one thickness, straightened: the middle pixel in each column."""

    part: RuledLines
    half: int
    row: Ints
    column: Ints
    live: Bools

    def enter(self, flags: Bytes, half: int, flag: int, which: Bools | None = None) -> None:
        """Set a flag on the pixels of the live columns, or on (2 half + 1, n) chosen ones."""
        turned = self.part.turned(flags)
        row = self.row + np.arange(-half, half + 1)[:, None]
        chosen = (row >= 0) & (row < turned.shape[0]) & self.live
        if which is not None:
            chosen &= which
        i, j = np.nonzero(chosen)
        turned[row[i, j], self.column[j]] |= np.uint8(flag)

    def enter_strokes(self, flags: Bytes, page: Bools, stroke: int) -> None:
        """Find the strokes and flag them."""
        _, kept = strokes_within(page, self.row, self.column, self.half, stroke)
        self.enter(flags, self.half, _KEPT[self.part.vertical], kept)


def _bands(part: RuledLines, chosen: Bools, page: Bools) -> list[_Band]:
    lines = part.lines
    low, high = edges_of(lines, np.asarray(part.turned(page)))
    half = np.rint((high - low) / 2).astype(np.int64)
    middle = np.rint(lines.centre + ((low + high) / 2)[lines.track]).astype(np.int64)
    bands = []
    for rows in np.unique(half[chosen]):
        mine = np.flatnonzero((chosen & (half == rows))[lines.track])
        band = _Band(part, int(rows), middle[mine], lines.column[mine], part.live[mine])
        bands.append(band)
    return bands


def _points(shape: tuple[int, int], flat: Ints) -> RunSet:
    """The set of pixels at flat positions y W + x, given in rising order."""
    place = flat + flat // shape[1]  # a page of runs has one column more
    begins = np.diff(place, prepend=-2) != 1
    ends = np.append(begins[1:], True)[: place.size]
    return RunSet(shape, np.stack((place[begins], place[ends] + 1), axis=1).ravel())


def _loose(strokes: RunSet, ink: RunSet, crossings: RunSet, resolution: Resolution) -> RunSet:
    """Residue that touches no ink beside the rules and is too small or too thin for a stroke."""
    mm2 = resolution.x_mm * resolution.y_mm
    pieces = label(strokes)
    longest = np.maximum(pieces.box[:, 2] - pieces.box[:, 0], pieces.box[:, 3] - pieces.box[:, 1])
    thin = pieces.area < _THIN * longest
    doubtful = thin | (pieces.area < _CROSSING_MM2 * mm2)
    pieces, thin = pieces.select(doubtful), thin[doubtful]
    if pieces.n == 0:
        return pieces.runs
    around = dilate(pieces.runs, box(3, 3))
    touched = pieces.touching(dilate(around & ink, box(3, 3)))
    crossed = pieces.runs & crossings
    owner = np.searchsorted(pieces.runs.bounds[0::2], crossed.bounds[0::2], side="right") - 1
    at_crossing = np.bincount(pieces.run_label[owner], crossed.length, pieces.n)
    small = (pieces.area < _SPECK_MM2 * mm2) | (2 * at_crossing > pieces.area)
    return pieces.keep(~touched & (small | thin))

"""What a ruled line has of its own in each column, told from the strokes that cross it.

A line is taken as density(column, row) = amplitude(column) * profile(row - centre(column)), all
three measured robustly. Glossary: T lines, B blocks of W columns, N columns, K samples across.
"""

from __future__ import annotations

from dataclasses import dataclass
from functools import cached_property
from typing import TypeVar

import numpy as np
from numpy.typing import NDArray

from scanclean.rules.profiles import Profiles, mean_profiles, pools
from scanclean.rules.smoothing import fit_lines, group_quantile, running_quantile, whittaker
from scanclean.rules.strips import Strips, cut_strips
from scanclean.rules.tracks import Tracks

__all__ = ["Lines", "measure_lines"]

Bools = NDArray[np.bool_]
Bytes = NDArray[np.uint8]
Floats = NDArray[np.float64]
Singles = NDArray[np.float32]
Ints = NDArray[np.int64]
_Number = TypeVar("_Number", np.float32, np.uint8)

_RUN_MM = 0.85  # of clean line: an end runs on to the last such stretch
_NEAR_PX, _FAR_PX = 0.3, 2.3  # beside the line, where strokes come out of it
_ABOVE, _SPREAD = 0.18, 0.02  # of the line's amplitude: a stroke adds more, noise less
_CAP = 1.04  # of the envelope
_DARKER, _MISFIT = 1.6, 0.1  # a darker stretch of the line itself, and how well it must fit
_STEP = 0.3  # of the envelope in half a millimetre: a stroke's end
_PRIOR = 0.2  # columns in each block that speak for the line's usual strength
_STIFFNESS = 60.0
_ABSENT, _PRESENT = 0.25, 0.4  # of the usual strength
_PCT_WINDOW = 19  # blocks
_CROSSED_ABOVE, _CROSSED_BELOW = 1, 2


@dataclass(frozen=True, eq=False)
class Lines:
    """Measured lines of one direction; columns of one line stand in a row.

    Parameters
    ----------
    tracks : Tracks
    mm : float
        Pixels per millimetre along the lines.
    profiles : Profiles
    track : (N,) int64 array
        Whose a column is.
    column : (N,) int64 array
        Column of the page; strips reach beyond their tracks.
    top : (N,) int64 array
        Row of the first of K samples.
    centre : (N,) float array
        Row of the line's centre.
    within : (N,) bool array
        Whether the column lies on the page between the ends of the track.
    level : (T,) float array
        The usual strength.
    strength : (N,) float array
        Density of the column over the profile, by least squares.
    free : (N,) bool array
        No stroke comes out of the line here, and the column is on the page.
    bridged : (N,) bool array
        Strokes come out on both sides.
    amplitude : (N,) float array
        What of the strength is the line's own.
    sure : (N,) bool array
        The column holds nothing but the line.
    dashed : (T,) bool array
        The line comes and goes too often for a worn one.
    pitch : (T,) float array
        Columns from dash to dash of an evenly dashed line, else 0.
    """

    tracks: Tracks
    mm: float
    profiles: Profiles
    track: Ints
    column: Ints
    top: Ints
    centre: Floats
    within: Bools
    level: Floats
    strength: Floats
    free: Bools
    bridged: Bools
    amplitude: Floats
    sure: Bools
    dashed: Bools
    pitch: Floats

    def __len__(self) -> int:
        return len(self.tracks)

    @property
    def samples(self) -> int:
        """K."""
        return self.profiles.samples

    @cached_property
    def begin(self) -> Ints:
        """(T + 1,) int64: columns ``begin[i]:begin[i + 1]`` are those of line i."""
        return np.searchsorted(self.track, np.arange(len(self) + 1))

    @property
    def thickness(self) -> Floats:
        """(T,) float: rows from edge to edge."""
        low, high = self.profiles.extent
        return np.asarray(high - low)

    @property
    def peak(self) -> Floats:
        """(T,) float: the line's usual density along its middle."""
        return np.asarray(self.profiles.peak * self.level)

    @cached_property
    def isolated(self) -> Floats:
        """(T,) float: share of the track's columns in which the line stands alone."""
        alone = self.free & (self.strength > _PRESENT * self.level[self.track])
        alone &= self.strength < 1.4 * self.amplitude + 0.05
        return self._share(alone & self.within, self.within)

    @cached_property
    def absent(self) -> Floats:
        """(T,) float: share of the columns without strokes in which there is no line either."""
        free = self.within & self.free
        return self._share(free & (self.strength < _ABSENT * self.level[self.track]), free)

    @cached_property
    def straight(self) -> tuple[Floats, Floats, Floats]:
        """Offset and slope of the straight line along each centre; median distance to it."""
        n = len(self)
        some = np.flatnonzero(self.within)[::8]
        x, y, track = self.column[some].astype(float), self.centre[some], self.track[some]
        offset, slope = fit_lines(x, y, track, n)
        bend = group_quantile(np.abs(y - offset[track] - slope[track] * x), track, n)
        return offset, slope, bend

    def agreement(self, tolerance: float) -> Floats:
        """(T,) float: share of the track's knots that lie on the centre found."""
        whose, first = self.tracks.knot_track, self.begin[:-1]
        along = np.rint(self.tracks.knot_x).astype(np.int64) - self.column[first][whose]
        place = np.minimum(first[whose] + along, self.begin[1:][whose] - 1)
        near = np.abs(self.tracks.knot_y - self.centre[place]) < tolerance
        total = np.maximum(np.bincount(whose, minlength=len(self)), 1)
        return np.asarray(np.bincount(whose[near], minlength=len(self)) / total)

    @cached_property
    def extent(self) -> Bools:
        """(N,) bool: the columns between the ends, which run on while the line comes back.

        An end goes on to the last stretch of clean columns with the line's own strength, and from
        there as far as there is anything of it.
        """
        place, level = np.arange(self.track.size), self.level[self.track]
        some = (self.strength > 0.12 * level) & (self.strength < 2.2 * level)
        clean = self.free & (self.strength > 0.3 * level) & (self.strength < 1.6 * level)
        first, last = np.full(len(self), place.size), np.full(len(self), -1)
        inside, run = np.flatnonzero(self.within), round(_RUN_MM * self.mm)
        closing = np.flatnonzero(_run_so_far(clean) >= run)
        opening = np.flatnonzero(_run_so_far(clean[::-1])[::-1] >= run)
        for found in (inside, closing):
            np.maximum.at(last, self.track[found], found)
        for found in (inside, opening):
            np.minimum.at(first, self.track[found], found)
        # on to the next column without anything, or to the strip's own end
        ends = np.zeros(place.size, bool)
        ends[self.begin[1:] - 1] = True
        stops = np.flatnonzero(~some | ends)
        at = stops[np.searchsorted(stops, last)]
        last = np.maximum(last, np.where(some[at], at, at - 1))
        ends[:] = False
        ends[self.begin[:-1]] = True
        stops = np.flatnonzero(~some | ends)
        at = stops[np.searchsorted(stops, first, side="right") - 1]
        first = np.minimum(first, np.where(some[at], at, at + 1))
        return np.asarray((place >= first[self.track]) & (place <= last[self.track]))

    def predicted(self, some: Ints, fringe: float) -> tuple[Ints, Singles, Bools]:
        """The lines' own density in some columns.

        Parameters
        ----------
        some : (n,) int64 array
            Columns' numbers.
        fringe : float
            Rows beyond the edges that belong to the line.

        Returns
        -------
        row : (n, k) int64 array
            Rows round the centre.
        density : (n, k) float32 array
        belongs : (n, k) bool array
            Whether the pixel is the line's, its fringe included.
        """
        low, high = self.profiles.extent
        near = int(np.ceil(max(-low.min(), high.max()) + fringe + 0.5))
        shift = self.centre[some] - self.top[some]
        k = np.rint(shift).astype(np.int64)[:, None] + np.arange(-near, near + 1)
        k = np.clip(k, 0, self.samples - 1)
        at = self.profiles.place(self.track[some], shift)[:, None] * self.samples + k
        bank = self.profiles.laid(self.profiles.line).astype(np.float32)
        density = bank.ravel().take(at) * self.amplitude[some, None].astype(np.float32)
        u = self.profiles.pixel_u
        zone = (u >= (low - fringe)[:, None, None]) & (u <= (high + fringe)[:, None, None])
        return self.top[some, None] + k, density, zone.ravel().take(at)

    def _share(self, part: Bools, whole: Bools) -> Floats:
        total = np.maximum(np.bincount(self.track[whole], minlength=len(self)), 1)
        return np.asarray(np.bincount(self.track[part], minlength=len(self)) / total)


def measure_lines(
    page: NDArray[np.uint8],
    table: Singles,
    tracks: Tracks,
    *,
    mm: float,
    reach: int,
    stroke: float,
) -> Lines:
    """Measure the lines on tracks along the rows of a page.

    Parameters
    ----------
    page, table, tracks, mm, reach
        As of `cut_strips`.
    stroke : float
        Density beside a line from which on it is a stroke.

    Returns
    -------
    Lines
    """
    strips = cut_strips(page, table, tracks, mm=mm, reach=reach)
    pool = pools(strips, mm)
    ones = np.ones(strips.track.size)
    # 1. a first profile from the blocks without strokes beside the line
    profiles = mean_profiles(strips, pool, _clear_blocks(strips, stroke), ones)
    columns = _weighed(strips, profiles, ones, stroke)
    # 2. with the amplitudes that it gives, a better one
    usual, block, _ = _levels(strips, columns, pool)
    good = strips.home & (block > _PRESENT * usual[strips.track])
    few = np.bincount(strips.track[good], minlength=len(tracks)) < 3
    good |= strips.home & few[strips.track]
    weak = block <= np.maximum(0.1 * usual[strips.track], 1e-3)
    profiles = mean_profiles(strips, pool, good, np.where(weak, 1.0, block))
    known = np.flatnonzero(good)
    around = np.interp(np.arange(good.size), known, block[known]) if known.size else block
    columns = _weighed(strips, profiles, around, stroke)
    # 3. what of the strength is the line's own
    level, _, clean = _levels(strips, columns, pool)
    envelope = _envelope(strips, columns, level, clean)
    dashed, pitch = _dashes(strips, columns, clean, envelope, mm)
    amplitude, sure = _own(strips, profiles, columns, envelope, level, dashed)
    return Lines(
        tracks=tracks,
        mm=mm,
        profiles=profiles,
        track=columns.track,
        column=strips.column.ravel(),
        top=np.repeat(strips.top, strips.width),
        centre=np.repeat(strips.top, strips.width) + strips.column_shift(),
        within=columns.core,
        level=level,
        strength=columns.strength,
        free=columns.free,
        bridged=columns.bridged,
        amplitude=amplitude,
        sure=sure,
        dashed=dashed,
        pitch=pitch,
    )


def _clear_blocks(strips: Strips, stroke: float) -> Bools:
    """(B,) bool: blocks with no stroke beside the line; what is there all along is none."""
    u = np.abs(np.arange(strips.samples) - strips.shift[:, None]) - strips.reach
    flank = np.where((u > 1.5) & (u < 4), strips.block, 0).max(axis=1)
    home, n = strips.home, len(strips.tracks)
    always = np.nan_to_num(group_quantile(flank[home], strips.track[home], n, 0.3))
    # where the line falls on the pixels changes what a second line beside it adds to the flank
    limit = np.where(always > stroke, 1.3 * always + stroke, stroke)
    return np.asarray(home & (flank <= limit[strips.track]))


@dataclass(frozen=True, eq=False)
class _Columns:
    """Columns of strips against the profiles, all (N,)."""

    track: Ints
    place: Ints  # in banks of profiles
    core: Bools  # on the page, between the ends of the track
    strength: Floats
    free: Bools
    bridged: Bools


def _weighed(strips: Strips, profiles: Profiles, amplitude: Floats, stroke: float) -> _Columns:
    """Strength of each column, and where strokes come out of the line."""
    track = np.repeat(strips.track, strips.width)
    place = profiles.place(track, strips.column_shift())
    density = strips.density.reshape(-1, strips.samples)
    on_page = strips.on_page.ravel()

    line = np.where(profiles.inside, profiles.laid(profiles.line), 0)
    power = np.maximum((line**2).sum(axis=2), 1e-9)
    ground = np.where(profiles.inside, profiles.laid(profiles.full - profiles.line), 0)
    weight = (line / power[:, :, None]).astype(np.float32)
    strength = np.einsum("ij,ij->i", density, _rows(weight, place)).astype(float)
    strength -= ((ground * line).sum(axis=2) / power).ravel()[place]
    # strokes are darker than the profile has it beside the line
    excess = _rows(profiles.laid(profiles.full).astype(np.float32), place)
    excess *= np.repeat(amplitude, strips.width).astype(np.float32)[:, None]
    np.subtract(density, excess, out=excess)
    low, high = (edge[:, None, None] for edge in profiles.extent)
    above, below = low - profiles.pixel_u, profiles.pixel_u - high
    flank = np.where((above > _NEAR_PX) & (above < _FAR_PX), _CROSSED_ABOVE, 0)
    flank += np.where((below > _NEAR_PX) & (below < _FAR_PX), _CROSSED_BELOW, 0)
    crossed = np.where(excess > stroke, _rows(flank.astype(np.uint8), place), np.uint8(0))
    crossed = np.bitwise_or.reduce(crossed, axis=1)
    core = on_page & strips.within.ravel()
    return _Columns(
        track=track,
        place=place,
        core=core,
        strength=np.where(on_page, strength, 0.0),
        free=~_grown(crossed > 0, 2) & on_page,
        bridged=(crossed == _CROSSED_ABOVE | _CROSSED_BELOW) & core,
    )


def _rows(bank: NDArray[_Number], place: Ints) -> NDArray[_Number]:
    """(N, K): each column's row of a (T, F, K) bank."""
    return bank.reshape(-1, bank.shape[-1]).take(place, axis=0)


def _levels(strips: Strips, columns: _Columns, pool: Ints) -> tuple[Floats, Floats, Bools]:
    """Usual strength of each track and of each block (0: unknown), and the clean columns."""
    n, track, strength = len(strips.tracks), columns.track, columns.strength
    clean = columns.free & columns.core
    few = np.bincount(track[clean], minlength=n) < 8
    if few.any():
        # crossed all along: its faintest columns are the cleanest
        core = columns.core & few[track]
        low = np.nan_to_num(group_quantile(strength[core], track[core], n, 0.4))
        clean |= core & (strength <= low[track])
    ranked, count = _ranked(strength, clean, strips.width)
    block = ranked[np.arange(count.size), np.maximum(count - 1, 0) // 2]
    level = np.nan_to_num(group_quantile(block[count > 0], strips.track[count > 0], n))
    # of a pool of like lines those that seem much darker have strokes on them
    pooled = np.bincount(pool, minlength=n)[pool] >= 5
    usual = np.nan_to_num(group_quantile(level, pool, n))[pool]
    level = np.where(pooled & (level > 1.12 * usual), usual, level)
    return level, np.where(count >= strips.width // 2, block, 0), clean


def _envelope(strips: Strips, columns: _Columns, level: Floats, clean: Bools) -> Floats:
    """(N,) float: lower envelope of the strength along the line.

    Breaks are left out, and strokes on the line weigh little: asymmetric re-weighting of a
    smoother, as for baselines of spectra.

    References
    ----------
    P. H. C. Eilers and H. F. M. Boelens, "Baseline correction with asymmetric least squares
    smoothing", 2005.
    """
    n, width, strength = len(strips.tracks), strips.width, columns.strength
    usual, index = level[strips.track], np.arange(strips.track.size)
    ranked, count = _ranked(strength, clean, width)
    upper = np.where(count > 0, ranked[index, (0.6 * np.maximum(count - 1, 0)).astype(int)], 0)
    around = running_quantile(upper, count > 0, _PCT_WINDOW, 0.6)
    around = np.maximum(np.where(np.isfinite(around), around, usual), 0.05 * usual)
    broken = clean & (strength < _PRESENT * np.repeat(around, width))
    live = clean & ~_grown(broken, 3)
    few = np.bincount(columns.track[live], minlength=n) < 12
    live |= clean & few[columns.track]
    ranked, count = _ranked(strength, live, width)
    value = np.where(count > 0, ranked[index, np.minimum((2 * count) // 5, width - 1)], 0)
    noise = _SPREAD * usual + 0.02
    base, weight = count.astype(float), count.astype(float)
    for _ in range(7):
        # where nothing is known for a while the line is as dark as usual
        total = weight + _PRIOR
        pulled = (weight * value + _PRIOR * usual) / total
        smooth = whittaker(pulled, total, strips.first, _STIFFNESS)
        above = value - smooth
        weight = base * np.where(above > noise, 0.15, np.where(above > 0, 0.6, 1.0))
        stroke = above > _ABOVE * np.maximum(smooth, 0.1 * usual) + 2 * noise
        weight = np.where(stroke, 0.003 * base, weight)
    few = np.bincount(strips.track[count > 0], minlength=n) < 3
    smooth = np.where(few[strips.track], usual, np.maximum(smooth, 0.02 * usual))
    middle = (np.arange(strength.size) - (width - 1) / 2) / width
    return np.interp(middle, index, smooth)


def _dashes(
    strips: Strips, columns: _Columns, clean: Bools, envelope: Floats, mm: float
) -> tuple[Bools, Floats]:
    """Which lines come and go, and at what step if it is an even one (else 0)."""
    n, clean = len(strips.tracks), clean & columns.free
    low = clean & (columns.strength < 0.5 * envelope)
    begins = np.flatnonzero(low & np.insert(~low[:-1] & clean[:-1], 0, False))
    track = columns.track[begins]
    dips = np.bincount(track, minlength=n)
    length = np.bincount(columns.track[clean], minlength=n) / mm
    dashed = (dips >= 4) & (dips > length / 4)
    same = np.diff(track) == 0
    step, whose = np.diff(begins)[same].astype(float), track[1:][same]
    # strokes hide dips, so steps are multiples of the pitch
    shortest = np.maximum(np.nan_to_num(group_quantile(step, whose, n, 0.25)), 1)
    times = np.maximum(np.rint(step / shortest[whose]), 1)
    pitch = np.bincount(whose, step, n) / np.maximum(np.bincount(whose, times, n), 1)
    even = np.abs(step / np.maximum(pitch[whose], 1) - times) < 0.2
    count = np.bincount(whose, minlength=n)
    share = np.bincount(whose[even], minlength=n) / np.maximum(count, 1)
    return dashed, np.where(dashed & (dips >= 8) & (share >= 0.65), pitch, 0)


def _own(
    strips: Strips,
    profiles: Profiles,
    columns: _Columns,
    envelope: Floats,
    level: Floats,
    dashed: Bools,
) -> tuple[Floats, Bools]:
    """The line's amplitude in each column, and the columns that hold nothing else."""
    track, strength, free = columns.track, columns.strength, columns.free
    lying = strength > (1 + _ABOVE) * envelope + 2 * (_SPREAD * level + 0.02)[track]
    # a darker stretch of the line itself has the line's very shape; where it is much darker it
    # begins and ends by and by, while a stroke has ends
    darker = lying & ((strength < _DARKER * envelope) | _gradual(strength, lying, envelope))
    some = np.flatnonzero(darker)
    darker[some] = _misfit(strips, profiles, columns, some) < _MISFIT
    use = free & (~lying | darker)
    few = np.bincount(track[use & columns.core], minlength=level.size) < 8
    use |= free & few[track]
    known = np.flatnonzero(use)
    if known.size == 0:
        return np.zeros(track.size), np.zeros(track.size, bool)
    smooth = running_quantile(strength[known], np.ones(known.size, bool), 7)
    smooth = np.where(dashed[track[known]], strength[known], smooth)  # dashes have sharp ends
    amplitude = np.interp(np.arange(track.size), known, smooth)
    amplitude = np.minimum(amplitude, np.where(darker, np.inf, _CAP * envelope))
    return np.maximum(amplitude, 0), ~_grown(~use, 1)


def _misfit(strips: Strips, profiles: Profiles, columns: _Columns, some: Ints) -> Floats:
    """What the line's shape leaves unexplained of some columns, over what it explains."""
    density = strips.density.reshape(-1, strips.samples)[some]
    place = columns.place[some]
    inside = profiles.inside.reshape(-1, strips.samples)[place]
    line = profiles.laid(profiles.line).reshape(-1, strips.samples)[place] * inside
    explained = columns.strength[some, None] * line
    left = ((density * inside - explained) ** 2).sum(axis=1)
    return np.asarray(np.sqrt(left / np.maximum((explained**2).sum(axis=1), 1e-9)))


# ---- small tools on columns in a row


def _ranked(values: Floats, valid: Bools, width: int) -> tuple[Floats, Ints]:
    """Values of each block in rising order, those that are not valid last; how many are."""
    ranked = np.sort(np.where(valid, values, np.inf).reshape(-1, width), axis=1)
    return ranked, valid.reshape(-1, width).sum(axis=1)


def _grown(mask: Bools, by: int) -> Bools:
    """Dilation by some columns on both sides."""
    grown = mask.copy()
    for k in range(1, by + 1):
        grown[k:] |= mask[:-k]
        grown[:-k] |= mask[k:]
    return grown


def _gradual(values: Floats, chosen: Bools, scale: Floats) -> Bools:
    """Stretches of chosen columns in and beside which values change by little from step to step.

    Where they fall to nothing the line is broken, which is no step.
    """
    step = np.zeros(values.size)
    step[3:-3] = np.abs(values[6:] - values[:-6])
    step[_grown(values < 0.3 * scale, 4)] = 0
    begins = np.insert(chosen[1:] != chosen[:-1], 0, True)
    steep = np.maximum.reduceat(step / np.maximum(scale, 1e-3), np.flatnonzero(begins))
    return np.asarray(chosen & (steep < _STEP)[np.cumsum(begins) - 1])


def _run_so_far(mask: Bools) -> Ints:
    """How many trues stand in a row up to and with each place."""
    count = np.cumsum(mask)
    return np.asarray(count - np.maximum.accumulate(np.where(mask, 0, count)))

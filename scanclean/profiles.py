"""The strip of page round each track, and what it tells of the line there.

A ruled line is taken as density(column, row) = amplitude(column) * profile(row - centre(column)).
All three are measured robustly, so that strokes that cross the line or lie on it do not count, and
to a fraction of a pixel: whole pixels would leave rows of fringe behind.

Strips of all tracks lie one after another, in blocks of a few columns; those columns share the
row at which their samples begin. Glossary: T tracks, B blocks of W columns, N = B W columns, K
samples across, P samples of a profile. Rows are counted at pixel centres.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from scanclean.smoothing import fit_lines, group_quantile, running_quantile, whittaker
from scanclean.tracks import Tracks

__all__ = ["Lines", "measure_lines"]

Bools = NDArray[np.bool_]
Floats = NDArray[np.float64]
Singles = NDArray[np.float32]
Ints = NDArray[np.int64]

_BLOCK_MM = 0.68
_FLANK_PX = 4  # beside the line, where nothing but strokes is expected
_GUARD = 3  # rows more: the refined centre may leave the first guess by as much
_OVERSAMPLING = 4  # samples of a profile in a pixel
_PHASES = 16  # of a pixel: the steps in which a profile is laid over the pixels
_EDGE = 0.12  # of the peak: what is lighter is no longer line
_POOLED_MM = 25.0  # shorter lines of one make share their profile
_ABOVE, _SPREAD = 0.18, 0.02  # of the line's amplitude: a stroke adds more, noise is less
_CAP = 1.04
_PRIOR = 0.2  # columns that speak for the line's usual strength everywhere


@dataclass(frozen=True, eq=False)
class Lines:
    """Measured lines of one direction.

    Parameters
    ----------
    tracks : Tracks
    first : (T,) int64 array
        First block of each track.
    track : (N,) int64 array
        Whose a column is.
    column : (N,) int64 array
        Column of the page; strips reach beyond their tracks.
    top : (N,) int64 array
        Row of the first sample.
    density : (N, K) float32 array
        Of the page; 0 off the page.
    centre : (N,) float array
        Row of the line's centre.
    within : (N,) bool array
        Whether the column lies between the ends of the track.
    profile : (T, P) float array
        Density across the line, four samples a pixel, the centre in the middle.
    low, high : (T,) float arrays
        The line reaches from centre + low to centre + high.
    level : (T,) float array
        The usual strength.
    strength : (N,) float array
        Density of the column over the profile, by least squares.
    free : (N,) bool array
        No stroke leaves the line's flanks here, and the column is on the page.
    bridged : (N,) bool array
        Strokes leave both flanks.
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
    first: Ints
    track: Ints
    column: Ints
    top: Ints
    density: Singles
    centre: Floats
    within: Bools
    profile: Floats
    low: Floats
    high: Floats
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
    def peak(self) -> Floats:
        """(T,) float: the line's usual density along its middle."""
        return np.asarray(self.profile.max(axis=1, initial=0.0) * self.level)

    def thickness(self) -> Floats:
        """(T,) float: rows of an even line of the same middle darkness and the same ink in all."""
        dark = 1 - 10.0 ** -(self.profile * self.level[:, None])
        return np.asarray(
            dark.sum(axis=1) / np.maximum(dark.max(axis=1, initial=0.0), 1e-6) / _OVERSAMPLING
        )

    def predicted(self, some: Ints, fringe: float) -> tuple[Ints, Ints, Singles]:
        """The lines' own density in some columns.

        Returns
        -------
        row : (n, K) int64 array
        column : (n,) int64 array
        density : (n, K) float32 array
            -1 farther than `fringe` rows from the line.
        """
        k, bins = self.density.shape[1], self.profile.shape[1]
        row = self.top[some, None] + np.arange(k)
        u = row - self.centre[some, None]
        track = self.track[some, None]
        at = np.clip((u + bins / _OVERSAMPLING / 2) * _OVERSAMPLING - 0.5, 0, bins - 1.001)
        i = at.astype(np.int64)
        part = at - i
        flat = self.profile.ravel()
        i += track * bins
        density = (flat[i] * (1 - part) + flat[i + 1] * part) * self.amplitude[some, None]
        beside = (u < self.low[track] - fringe) | (u > self.high[track] + fringe)
        density[beside] = -1
        return row, self.column[some], density.astype(np.float32)

    def isolated(self) -> Floats:
        """(T,) float: share of the track's columns in which the line stands alone."""
        alone = self.within & self.free & (self.strength > 0.4 * self.level[self.track])
        alone &= self.strength < 1.4 * self.amplitude + 0.05
        n = len(self)
        return np.bincount(self.track[alone], minlength=n) / np.maximum(
            np.bincount(self.track[self.within], minlength=n), 1
        )

    def absent(self) -> Floats:
        """(T,) float: share of the columns without strokes in which there is no line either."""
        free = self.within & self.free
        none = free & (self.strength < 0.25 * self.level[self.track])
        n = len(self)
        return np.bincount(self.track[none], minlength=n) / np.maximum(
            np.bincount(self.track[free], minlength=n), 1
        )

    def straightness(self) -> tuple[Floats, Floats, Floats]:
        """Offset and slope of the straight line along each centre; median distance to it."""
        n = len(self)
        some = np.flatnonzero(self.within)[::4]
        x, y, track = self.column[some].astype(float), self.centre[some], self.track[some]
        offset, slope = fit_lines(x, y, track, n)
        bend = group_quantile(np.abs(y - offset[track] - slope[track] * x), track, n)
        return offset, slope, bend

    def agreement(self, tolerance: float) -> Floats:
        """(T,) float: share of the track's knots that lie on the centre found."""
        n, whose = len(self), self.tracks.knot_track
        # columns of one track stand in a row, so a knot's place follows from its column
        begin = np.searchsorted(self.track, np.arange(n))
        place = (
            begin[whose] + np.rint(self.tracks.knot_x).astype(np.int64) - self.column[begin][whose]
        )
        near = np.abs(self.tracks.knot_y - self.centre[place]) < tolerance
        return np.bincount(whose[near], minlength=n) / np.maximum(
            np.bincount(whose, minlength=n), 1
        )

    def extent(self, min_run: int) -> Bools:
        """(N,) bool: the columns between the ends, which run on while the line comes back.

        An end goes on to the last run of `min_run` clean columns with the line's own strength, and
        from there as far as there is anything of it.
        """
        n, place = len(self), np.arange(self.track.size)
        level = self.level[self.track]
        some = (self.strength > 0.12 * level) & (self.strength < 2.2 * level)
        clean = self.free & (self.strength > 0.3 * level) & (self.strength < 1.6 * level)
        first, last = np.full(n, place.size), np.full(n, -1)
        inside = np.flatnonzero(self.within)
        np.minimum.at(first, self.track[inside], inside)
        np.maximum.at(last, self.track[inside], inside)
        closing = np.flatnonzero(_run_so_far(clean) >= min_run)
        np.maximum.at(last, self.track[closing], closing)
        opening = np.flatnonzero(_run_so_far(clean[::-1])[::-1] >= min_run)
        np.minimum.at(first, self.track[opening], opening)
        # on to the next column without, or to the strip's own end
        change = np.append(self.track[1:] != self.track[:-1], True)
        stops = np.flatnonzero(~some | change)
        at = stops[np.searchsorted(stops, last)]
        last = np.maximum(last, np.where(some[at], at, at - 1))
        change = np.insert(change[:-1], 0, True)
        stops = np.flatnonzero(~some | change)
        at = stops[np.searchsorted(stops, first, side="right") - 1]
        first = np.minimum(first, np.where(some[at], at, at + 1))
        return (place >= first[self.track]) & (place <= last[self.track])


def measure_lines(
    page: NDArray[np.uint8],
    table: Singles,
    tracks: Tracks,
    *,
    mm: float,
    reach: int,
    ink: float,
) -> Lines:
    """Measure the lines on tracks along the rows of a page.

    Parameters
    ----------
    page : (H, W) uint8 array
        Page over paper, 255 = paper; any memory order.
    table : (256,) float32 array
        Density of each value.
    tracks : Tracks
        At least one. All get as many samples across as the thickest needs.
    mm : float
        Pixels per millimetre along the rows.
    reach : int
        Columns that strips go on beyond the ends of their tracks.
    ink : float
        A density in a line's flank from which on it is a stroke.

    Returns
    -------
    Lines
    """
    width = int(np.clip(round(_BLOCK_MM * mm), 4, 16))
    strips = _cut(page, table, tracks, width, reach)
    # of W samples along the line the 40 % quantile: strokes are darker, so not the median
    low_median = int(0.4 * (width - 1))
    block = np.partition(strips.density, low_median, axis=1)[:, low_median]
    mass = _find_centres(strips, block, stiffness=(16 / width) ** 4)
    return _Measure(strips, block, _pools(tracks, mass, _POOLED_MM * mm), ink).lines(mm)


# ---- strips


@dataclass(eq=False)
class _Strips:
    """Samples along tracks; `shift` is the centre in rows from `top`, at the blocks' middles."""

    tracks: Tracks
    half: int  # rows of a profile on both sides of the centre
    width: int
    first: Ints  # (T,)
    track: Ints  # (B,)
    column: Ints  # (B, W)
    on_page: Bools  # (B, W)
    within: Bools  # (B, W)
    top: Ints  # (B,)
    density: Singles  # (B, W, K)
    shift: Floats  # (B,)

    @property
    def samples(self) -> int:
        return 2 * (self.half + _GUARD) + 1

    def column_shift(self) -> Floats:
        """(N,) float: `shift` in each column, straight within a block."""
        before = np.maximum(np.arange(self.track.size) - 1, self.first[self.track])
        last = np.append(self.first[1:], self.track.size) - 1
        after = np.minimum(np.arange(self.track.size) + 1, last[self.track])
        centre = self.top + self.shift
        slope = (centre[after] - centre[before]) / np.maximum(after - before, 1)
        along = (np.arange(self.width) - (self.width - 1) / 2) / self.width
        return np.asarray((self.shift[:, None] + slope[:, None] * along).ravel())


def _cut(
    page: NDArray[np.uint8], table: Singles, tracks: Tracks, width: int, reach: int
) -> _Strips:
    high, wide = page.shape
    half = int(np.ceil(tracks.thickness.max() / 2)) + _FLANK_PX
    begin = np.maximum(tracks.start - reach, 0)
    n_blocks = -(-(np.minimum(tracks.stop + reach, wide) - begin) // width)
    first = np.cumsum(n_blocks) - n_blocks
    track = np.repeat(np.arange(len(tracks)), n_blocks)
    left = begin[track] + (np.arange(track.size) - first[track]) * width
    column = left[:, None] + np.arange(width)

    # the first guess: the straight line and what the knots say beyond it
    middle = left + (width - 1) / 2
    whose = tracks.knot_track
    at = first[whose] + ((tracks.knot_x - begin[whose]) // width).astype(np.int64)
    count = np.bincount(at, minlength=track.size)
    residue = tracks.knot_y - tracks.offset[whose] - tracks.slope[whose] * tracks.knot_x
    residue = np.bincount(at, residue, track.size) / np.maximum(count, 1)
    weight = (count > 0).astype(float)
    for _ in range(4):
        smooth = whittaker(residue, weight, first, 30.0 * (16 / width) ** 4)
        weight = (count > 0) / (1 + ((residue - smooth) / 0.7) ** 2)
    centre = tracks.offset[track] + tracks.slope[track] * middle + smooth

    top = np.rint(centre).astype(np.int64) - (half + _GUARD)
    row = top[:, None] + np.arange(2 * (half + _GUARD) + 1)
    pixels = page[np.clip(row, 0, high - 1)[:, None, :], np.minimum(column, wide - 1)[:, :, None]]
    density = table.take(pixels)
    off = (row < 0) | (row >= high)
    if off.any():
        density[np.broadcast_to(off[:, None, :], density.shape)] = 0
    within = (column >= tracks.start[track, None]) & (column < tracks.stop[track, None])
    return _Strips(
        tracks, half, width, first, track, column, column < wide, within, top, density, centre - top
    )


def _find_centres(strips: _Strips, block: Singles, stiffness: float) -> Floats:
    """Sharpen `shift` from centroids of the blocks; gives each track's usual mass across.

    Centroids are smoothed along the line. A block counts by its mass, and not at all when a stroke
    in its flanks or a wider spread shows that there is more than the line.
    """
    n, track = len(strips.tracks), strips.track
    reach = strips.tracks.thickness[track, None] / 2
    home = strips.within.mean(axis=1) > 0.5
    for stiff in (20.0, 8.0):
        u = np.arange(strips.samples) - strips.shift[:, None]
        above, below = np.abs(u + reach + 3) <= 1, np.abs(u - reach - 3) <= 1
        flank_above, flank_below = np.where(above, block, 0), np.where(below, block, 0)
        ground = np.minimum(
            flank_above.sum(1) / np.maximum(above.sum(1), 1),
            flank_below.sum(1) / np.maximum(below.sum(1), 1),
        )
        line = np.maximum(block - ground[:, None], 0) * (np.abs(u) <= reach + 2)
        mass = line.sum(axis=1)
        centroid = (line * u).sum(axis=1) / np.maximum(mass, 1e-6)
        moment = (line * (u - centroid[:, None]) ** 2).sum(axis=1)
        spread = np.sqrt(moment / np.maximum(mass, 1e-6))
        usual = np.nan_to_num(group_quantile(mass[home], track[home], n))
        heavy = mass > 0.3 * usual[track]
        usual_spread = np.nan_to_num(group_quantile(spread[heavy], track[heavy], n), nan=1.0)
        counts = np.minimum(mass / np.maximum(usual[track], 1e-6), 1)
        counts *= spread < 1.25 * usual_spread[track] + 0.1
        counts *= np.maximum(flank_above.max(1), flank_below.max(1)) < 0.12
        counts += 1e-4
        weight = counts
        for _ in range(3):
            smooth = whittaker(centroid, weight, strips.first, stiff * stiffness)
            weight = counts / (1 + ((centroid - smooth) / 0.25) ** 2)
        strips.shift = np.clip(strips.shift + smooth, strips.half, strips.half + 2 * _GUARD)
    return usual


def _pools(tracks: Tracks, mass: Floats, short: float) -> Ints:
    """(T,) int: a number that tracks with one profile share; short ones of like mass do.

    A pen leaves the same mass across, however the line falls on the pixels.
    """
    pool = np.arange(len(tracks))
    few = np.flatnonzero(tracks.length < short)
    order = few[np.argsort(mass[few], kind="stable")]
    apart = np.diff(np.log(np.maximum(mass[order], 1e-3)), prepend=-np.inf) > 0.05
    pool[order] = order[apart][np.cumsum(apart) - 1]
    return pool


# ---- profile and amplitude


class _Measure:
    """The steps from strips with centres to lines."""

    def __init__(self, strips: _Strips, block: Singles, pool: Ints, ink: float) -> None:
        self.strips, self.block, self.pool, self.ink = strips, block, pool, ink
        self.n, self.half = len(strips.tracks), strips.half
        self.n_bins = (2 * self.half + 1) * _OVERSAMPLING
        self.bin_u = (np.arange(self.n_bins) + 0.5) / _OVERSAMPLING - self.half - 0.5
        self.shift = strips.column_shift()
        self.density = strips.density.reshape(-1, strips.samples)
        self.track = np.repeat(strips.track, strips.width)
        self.on_page, self.within = strips.on_page.ravel(), strips.within.ravel()
        self.core = self.on_page & self.within
        # each column's row in a bank of profiles laid over the pixels at every phase
        self.phases = 2 * _GUARD * _PHASES + _PHASES + 1
        phase = np.rint((self.shift - self.half + 0.5) * _PHASES).astype(np.int64)
        self.place = self.track * self.phases + np.clip(phase, 0, self.phases - 1)
        lag = np.arange(self.phases) / _PHASES + self.half - 0.5
        self.u = np.arange(strips.samples) - lag[:, None]  # (phases, K)

    def lines(self, mm: float) -> Lines:
        strips, n, track = self.strips, self.n, self.track
        home = strips.within.mean(axis=1) > 0.5
        # 1. a first profile from the blocks with free flanks; where there are hardly any (a rule's
        #    double runs beside it), from those with the least in them
        u = np.arange(strips.samples) - strips.shift[:, None]
        reach = strips.tracks.thickness[strips.track, None] / 2
        beside = (np.abs(u) > reach + 1.5) & (np.abs(u) < reach + 4)
        flank = np.where(beside, self.block, 0).max(axis=1)
        least = np.nan_to_num(group_quantile(flank[home], strips.track[home], n, 0.3))
        good = home & (flank <= np.maximum(self.ink, least)[strips.track])
        profile = self._profile(good, np.ones(strips.track.size))
        self._weigh(profile, np.ones(strips.track.size))
        # 2. with the amplitudes that it gives, a better one
        level, usual = self._levels()
        good = home & (usual > 0.4 * level[strips.track])
        few = np.bincount(strips.track[good], minlength=n) < 3
        good |= home & few[strips.track]
        amplitude = np.where(usual > np.maximum(0.1 * level[strips.track], 1e-3), usual, 1.0)
        profile = self._profile(good, amplitude)
        known = np.flatnonzero(good)
        around = np.interp(np.arange(good.size), known, usual[known]) if known.size else usual
        self._weigh(profile, around)
        level, _ = self._levels()
        # 3. what of the strength is the line's own
        envelope = self._envelope(level)
        dashed, pitch = self._dashes(envelope, mm)
        amplitude, sure = self._own(envelope, level, dashed)
        return Lines(
            tracks=strips.tracks,
            first=strips.first,
            track=track,
            column=strips.column.ravel(),
            top=np.repeat(strips.top, strips.width),
            density=self.density,
            centre=np.repeat(strips.top, strips.width) + self.shift,
            within=self.core,
            profile=self.line_profile,
            low=self.low,
            high=self.high,
            level=level,
            strength=self.strength,
            free=self.free,
            bridged=self.bridged,
            amplitude=amplitude,
            sure=sure,
            dashed=dashed,
            pitch=pitch,
        )

    def _profile(self, good: Bools, amplitude: Floats) -> Floats:
        """(T, P) float: robust mean cross-section of good blocks, each over its amplitude."""
        strips, n_bins = self.strips, self.n_bins
        u = np.arange(strips.samples) - strips.shift[good][:, None]
        place = np.floor((u + self.half + 0.5) * _OVERSAMPLING).astype(np.int64)
        known = (place >= 0) & (place < n_bins)
        key = (self.pool[strips.track[good]][:, None] * n_bins + place)[known]
        value = (self.block[good] / amplitude[good][:, None])[known]
        weight = np.ones(value.size)
        size = self.n * n_bins
        for _ in range(3):
            total = np.bincount(key, weight, size)
            mean = np.bincount(key, weight * value, size) / np.maximum(total, 1e-9)
            peak = mean.reshape(self.n, n_bins).max(axis=1)[key // n_bins]
            weight = 1 / (1 + ((value - mean[key]) / (0.1 * peak + 0.01)) ** 2)
        mean, total = mean.reshape(self.n, n_bins), total.reshape(self.n, n_bins)
        return _bridged(mean, total > 0)[self.pool]

    def _weigh(self, full: Floats, amplitude: Floats) -> None:
        """Extent of the line, strength of each column and where strokes leave the flanks.

        Sets `line_profile`, `low`, `high`, `strength`, `misfit`, `free`.
        """
        strips, u = self.strips, self.u
        full = np.maximum(full, 0)
        profile = self._off_ground(full)
        self.line_profile, self.low, self.high = profile, *self._extent(profile)
        lo, hi = self.low[:, None, None], self.high[:, None, None]
        line = np.where((u >= lo) & (u <= hi), self._laid(profile), 0)
        power = np.maximum((line**2).sum(axis=2), 1e-9)
        ground = np.where(line > 0, self._laid(full - profile), 0)
        rows = self._rows(line / power[:, :, None])
        strength = np.einsum("ij,ij->i", self.density, rows).astype(float)
        strength -= ((ground * line).sum(axis=2) / power).ravel()[self.place]
        self.strength = np.where(self.on_page, strength, 0.0)
        # what the model leaves of the column, over the column
        core = self._rows(((u >= lo) & (u <= hi)).astype(float))
        square = np.einsum("ij,ij,ij->i", self.density, self.density, core)
        explained = strength**2 * power.ravel()[self.place]
        self.misfit = np.sqrt(np.maximum(square - explained, 0) / np.maximum(explained, 1e-9))
        # a stroke leaves the line where the flanks are darker than the profile has them
        excess = (
            self.density
            - self._rows(self._laid(full))
            * np.repeat(amplitude, strips.width).astype(np.float32)[:, None]
        )
        above = np.where((u < lo - 0.3) & (u > lo - 2.3), self.ink, np.inf)
        below = np.where((u > hi + 0.3) & (u < hi + 2.3), self.ink, np.inf)
        leaves = [(excess > self._rows(flank)).any(axis=1) for flank in (above, below)]
        self.bridged = leaves[0] & leaves[1] & self.core
        self.free = ~_grown(leaves[0] | leaves[1], 2) & self.on_page

    def _off_ground(self, profile: Floats) -> Floats:
        """The profile less the levels beside it: tinted fields, halos."""
        reach = self.strips.tracks.thickness[:, None] / 2
        middle = np.where(np.abs(self.bin_u) <= reach + 1.5, profile, 0)
        peak = (middle[:, :-2] + middle[:, 1:-1] + middle[:, 2:]).max(axis=1) / 3
        left = _low_quartile(profile, self.bin_u < -reach - 1)
        right = _low_quartile(profile, self.bin_u > reach + 1)
        across = np.clip((self.bin_u + reach + 1) / (2 * reach + 2), 0, 1)
        ground = left[:, None] * (1 - across) + right[:, None] * across
        # the lower quartile: another line near by is no ground
        return np.maximum(profile - ground * (np.maximum(left, right) < 0.5 * peak)[:, None], 0)

    def _extent(self, profile: Floats) -> tuple[Floats, Floats]:
        """From where to where a profile is more than its edge, seen from its peak."""
        reach = self.strips.tracks.thickness[:, None] / 2
        middle = np.where(np.abs(self.bin_u) <= reach + 1.5, profile, -1.0)
        peak = middle.argmax(axis=1)
        on = profile > _EDGE * middle.max(axis=1)[:, None]
        high = _last_before_gap(on, peak, _OVERSAMPLING)
        mirrored = _last_before_gap(on[:, ::-1], self.n_bins - 1 - peak, _OVERSAMPLING)
        low = self.n_bins - 1 - mirrored
        step, limit = 0.5 / _OVERSAMPLING, self.half - 1.2
        return (
            np.maximum(self.bin_u[low] - step, -limit),
            np.minimum(self.bin_u[high] + step, limit),
        )

    def _laid(self, profile: Floats) -> Floats:
        """(T, phases, K) float: profiles at the pixels, for every phase of the centre."""
        at = np.clip((self.u + self.half + 0.5) * _OVERSAMPLING - 0.5, 0, self.n_bins - 1.001)
        i = at.astype(np.int64)
        part = at - i
        return np.asarray(profile[:, i] * (1 - part) + profile[:, i + 1] * part)

    def _rows(self, bank: NDArray[np.floating]) -> Singles:
        """(N, K) float32: each column's row of a (T, phases, K) bank."""
        flat = bank.reshape(-1, self.strips.samples).astype(np.float32)
        return flat.take(self.place, axis=0)

    def _levels(self) -> tuple[Floats, Floats]:
        """Usual strength of each track and of each block (0: no free column), from free columns."""
        n, track, strength, width = self.n, self.track, self.strength, self.strips.width
        clean = self.free & self.core
        few = np.bincount(track[clean], minlength=n) < 8
        if few.any():
            # crossed all along: its faintest columns are the cleanest
            low = np.nan_to_num(group_quantile(strength[self.core], track[self.core], n, 0.4))
            clean |= self.core & few[track] & (strength <= low[track])
        self.clean = clean
        level = np.nan_to_num(group_quantile(strength[clean], track[clean], n))
        # of a pool of like lines those that seem much darker have strokes on them
        pooled = np.bincount(self.pool, minlength=n)[self.pool] >= 5
        usual = np.nan_to_num(group_quantile(level, self.pool, n))[self.pool]
        level = np.where(pooled & (level > 1.12 * usual), usual, level)
        ranked, count = _ranked(strength, clean, width)
        middle = ranked[np.arange(count.size), np.maximum(count - 1, 0) // 2]
        return level, np.where(count >= width // 2, middle, 0)

    def _envelope(self, level: Floats) -> Floats:
        """(N,) float: lower envelope of the strength along the line.

        Breaks are left out, strokes on the line weigh little: asymmetric re-weighting of a
        smoother, as for baselines of spectra.

        References
        ----------
        P. H. C. Eilers and H. F. M. Boelens, "Baseline correction with asymmetric least squares
        smoothing", 2005.
        """
        strips, n, width, track = self.strips, self.n, self.strips.width, self.track
        ranked, count = _ranked(self.strength, self.clean, width)
        index = np.arange(count.size)
        upper = np.where(count > 0, ranked[index, (0.6 * np.maximum(count - 1, 0)).astype(int)], 0)
        around = running_quantile(upper, count > 0, 19, 0.6)
        around = np.where(np.isfinite(around), around, level[strips.track])
        broken = self.clean & (
            self.strength < 0.4 * np.maximum(np.repeat(around, width), 0.05 * level[track])
        )
        live = self.clean & ~_grown(broken, 3)
        few = np.bincount(track[live], minlength=n) < 12
        live |= self.clean & few[track]
        ranked, count = _ranked(self.strength, live, width)
        value = np.where(count > 0, ranked[index, np.clip((2 * count) // 5, 0, width - 1)], 0)
        noise = (_SPREAD * level + 0.02)[strips.track]
        base, weight = count.astype(float), count.astype(float)
        usual = level[strips.track]
        for _ in range(7):
            # where nothing is known for a while the line is as dark as usual
            total = weight + _PRIOR
            pulled = (weight * value + _PRIOR * usual) / total
            smooth = whittaker(pulled, total, strips.first, 60.0)
            above = value - smooth
            weight = base * np.where(above > noise, 0.15, np.where(above > 0, 0.6, 1.0))
            stroke = above > _ABOVE * np.maximum(smooth, 0.1 * level[strips.track]) + 2 * noise
            weight = np.where(stroke, 0.003 * base, weight)
        smooth = np.maximum(smooth, 0.02 * level[strips.track])
        few = np.bincount(strips.track[count > 0], minlength=n) < 3
        smooth = np.where(few[strips.track], level[strips.track], smooth)
        middle = (np.arange(track.size) - (width - 1) / 2) / width
        return np.interp(middle, index, smooth)

    def _own(self, envelope: Floats, level: Floats, dashed: Bools) -> tuple[Floats, Bools]:
        """The line's amplitude in each column, and the columns that hold nothing else."""
        track = self.track
        lying = self.strength > (1 + _ABOVE) * envelope + 2 * (_SPREAD * level + 0.02)[track]
        # a darker stretch of the line itself has the line's very shape; much darker ones begin
        # and end by and by, where a stroke has ends
        darker = lying & (self.misfit < 0.1)
        darker &= (self.strength < 1.6 * envelope) | _gradual(self.strength, lying, envelope)
        use = self.free & ~(lying & ~darker)
        few = np.bincount(track[use & self.core], minlength=self.n) < 8
        use |= self.free & few[track]
        known = np.flatnonzero(use)
        if known.size == 0:
            return np.zeros(track.size), np.zeros(track.size, bool)
        smooth = running_quantile(self.strength[known], np.ones(known.size, bool), 7)
        smooth = np.where(dashed[track[known]], self.strength[known], smooth)  # dashes have ends
        amplitude = np.interp(np.arange(track.size), known, smooth)
        amplitude = np.minimum(amplitude, np.where(darker, np.inf, _CAP) * envelope)
        return np.maximum(amplitude, 0), ~_grown(~use, 1)

    def _dashes(self, envelope: Floats, mm: float) -> tuple[Bools, Floats]:
        """Which lines come and go, and at what step if it is an even one (else 0)."""
        n = self.n
        clean = self.clean & self.free
        low = clean & (self.strength < 0.5 * envelope)
        begins = np.flatnonzero(low & np.insert(~low[:-1] & clean[:-1], 0, False))
        track = self.track[begins]
        dips = np.bincount(track, minlength=n)
        length = np.bincount(self.track[clean], minlength=n) / mm
        dashed = (dips >= 4) & (dips > length / 4)
        same = np.diff(track) == 0
        step, whose = np.diff(begins)[same].astype(float), track[1:][same]
        # strokes hide dips, so steps are multiples of the pitch
        shortest = np.maximum(np.nan_to_num(group_quantile(step, whose, n, 0.25)), 1)
        times = np.maximum(np.rint(step / shortest[whose]), 1)
        pitch = np.bincount(whose, step, n) / np.maximum(np.bincount(whose, times, n), 1)
        even = np.abs(step / np.maximum(pitch[whose], 1) - times) < 0.2
        share = np.bincount(whose[even], minlength=n) / np.maximum(
            np.bincount(whose, minlength=n), 1
        )
        return dashed, np.where(dashed & (dips >= 8) & (share >= 0.65), pitch, 0)


# ---- small tools


def _low_quartile(values: Floats, where: Bools) -> Floats:
    """Of the chosen values of each row, of which there are some."""
    ranked = np.sort(np.where(where, values, np.inf), axis=1)
    place = (where.sum(axis=1) - 1) // 4
    return np.asarray(ranked[np.arange(values.shape[0]), place])


def _ranked(values: Floats, valid: Bools, width: int) -> tuple[Floats, Ints]:
    """Values of each block in rising order, those that are not valid last; how many are."""
    ranked = np.sort(np.where(valid, values, np.inf).reshape(-1, width), axis=1)
    return ranked, valid.reshape(-1, width).sum(axis=1)


def _grown(mask: Bools, by: int) -> Bools:
    """Dilation along the columns."""
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
    first = np.flatnonzero(begins)
    if first.size == 0:
        return chosen
    steep = np.maximum.reduceat(step / np.maximum(scale, 1e-3), first)
    return np.asarray(chosen & (steep < 0.3)[np.cumsum(begins) - 1])


def _run_so_far(mask: Bools) -> Ints:
    """How many trues stand in a row up to and with each place."""
    count = np.cumsum(mask)
    return np.asarray(count - np.maximum.accumulate(np.where(mask, 0, count)))


def _bridged(values: Floats, known: Bools) -> Floats:
    """Each row with straight lines across what is not known; rows without anything are 0."""
    n = values.shape[1]
    index = np.arange(n)
    left = np.maximum.accumulate(np.where(known, index, -1), axis=1)
    right = np.minimum.accumulate(np.where(known, index, n)[:, ::-1], axis=1)[:, ::-1]
    left, right = (
        np.where(left < 0, np.minimum(right, n - 1), left),
        np.where(right == n, left, right),
    )
    right = np.maximum(right, 0)
    part = np.where(right > left, (index - left) / np.maximum(right - left, 1), 0)
    take = np.take_along_axis
    return np.asarray(take(values, left, 1) * (1 - part) + take(values, right, 1) * part)


def _last_before_gap(on: Bools, begin: Ints, gap: int) -> Ints:
    """In each row the last true from `begin` on that no more than `gap` falses separate from it."""
    n, index = on.shape[1], np.arange(on.shape[1])
    seen = np.maximum.accumulate(np.where(on & (index >= begin[:, None]), index, -1), axis=1)
    seen = np.maximum(seen, begin[:, None])
    over = (index - seen > gap) & (index >= begin[:, None])
    stop = np.where(over.any(axis=1), over.argmax(axis=1), n - 1)
    return np.asarray(seen[np.arange(on.shape[0]), stop])

"""Cross-sections of ruled lines, at quarters of a pixel, and how they lie on the pixels.

Glossary: T tracks, P samples of a profile, F phases in which it may lie, K pixels across.
"""

from __future__ import annotations

from dataclasses import dataclass
from functools import cached_property

import numpy as np
from numpy.typing import NDArray

from scanclean.rules.strips import GUARD, Strips

__all__ = ["Profiles", "mean_profiles", "pools"]

Bools = NDArray[np.bool_]
Floats = NDArray[np.float64]
Singles = NDArray[np.float32]
Ints = NDArray[np.int64]

_OVERSAMPLING = 4  # samples of a profile in a pixel
_PHASES = 16  # of a pixel
_EDGE = 0.12  # of the peak: what is lighter is no longer line
_POOLED_MM = 25.0  # shorter lines of one make share their profile
_ALIKE = 0.05  # difference in the logarithm of mass


@dataclass(frozen=True, eq=False)
class Profiles:
    """Density across lines whose centres lie anywhere between the pixels.

    Parameters
    ----------
    full : (T, P) float array
        Density as found; sample i stands ``(i + 0.5) / 4 - P / 8`` rows from the centre.
    thickness : (T,) float array
        Rough thickness of the lines in pixels.
    """

    full: Floats
    thickness: Floats

    @cached_property
    def u(self) -> Floats:
        """(P,) float: rows from the centre."""
        n = self.full.shape[1]
        return np.asarray((np.arange(n) + 0.5) / _OVERSAMPLING - n / (2 * _OVERSAMPLING))

    @property
    def half(self) -> int:
        """Whole rows on each side of the middle one."""
        return (int(self.full.shape[1]) // _OVERSAMPLING - 1) // 2

    @cached_property
    def line(self) -> Floats:
        """(T, P) float: the line's own density, less the ground beside it: tints, halos."""
        reach = self.thickness[:, None] / 2
        middle = np.where(np.abs(self.u) <= reach + 1.5, self.full, 0)
        peak = (middle[:, :-2] + middle[:, 1:-1] + middle[:, 2:]).max(axis=1) / 3
        # lower quartiles: another line near by is no ground
        left = _low_quartile(self.full, self.u < -reach - 1)
        right = _low_quartile(self.full, self.u > reach + 1)
        across = np.clip((self.u + reach + 1) / (2 * reach + 2), 0, 1)
        ground = left[:, None] * (1 - across) + right[:, None] * across
        has_ground = np.maximum(left, right) < 0.5 * peak
        return np.asarray(np.maximum(self.full - ground * has_ground[:, None], 0))

    @cached_property
    def peak(self) -> Floats:
        """(T,) float: the highest density of the line."""
        return np.asarray(self.line.max(axis=1))

    @cached_property
    def extent(self) -> tuple[Floats, Floats]:
        """From where to where, in rows from the centre, there is more than the line's edge."""
        middle = np.where(np.abs(self.u) <= self.thickness[:, None] / 2 + 1.5, self.line, -1.0)
        peak, n = middle.argmax(axis=1), self.u.size
        on = self.line > _EDGE * middle.max(axis=1)[:, None]
        high = _last_before_gap(on, peak, _OVERSAMPLING)
        low = n - 1 - _last_before_gap(on[:, ::-1], n - 1 - peak, _OVERSAMPLING)
        step, limit = 0.5 / _OVERSAMPLING, self.half - 1.2
        return np.maximum(self.u[low] - step, -limit), np.minimum(self.u[high] + step, limit)

    def even_thickness(self, level: Floats) -> Floats:
        """(T,) float: rows of an even line of the same middle darkness and the same ink in all.

        Parameters
        ----------
        level : (T,) float array
            Strength of each line.
        """
        dark = 1 - 10.0 ** -(self.line * level[:, None])
        return np.asarray(dark.sum(axis=1) / np.maximum(dark.max(axis=1), 1e-6) / _OVERSAMPLING)

    # ---- on the pixels

    @property
    def samples(self) -> int:
        """K."""
        return 2 * (self.half + GUARD) + 1

    @cached_property
    def pixel_u(self) -> Floats:
        """(F, K) float: rows of the pixels from the centre, in every phase."""
        n_phases = (2 * GUARD + 1) * _PHASES + 1
        centre = np.arange(n_phases) / _PHASES + self.half - 0.5
        return np.arange(self.samples) - centre[:, None]

    def place(self, track: Ints, shift: Floats) -> Ints:
        """(N,) int64: row in a (T F, K) bank for lines whose centres are `shift` rows down."""
        n_phases = self.pixel_u.shape[0]
        phase = np.rint((shift - self.half + 0.5) * _PHASES).astype(np.int64)
        return np.asarray(track * n_phases + np.clip(phase, 0, n_phases - 1))

    def laid(self, profile: Floats) -> Floats:
        """(T, F, K) float: (T, P) profiles at the pixels, in every phase."""
        at = np.clip((self.pixel_u + self.half + 0.5) * _OVERSAMPLING - 0.5, 0, self.u.size - 1.001)
        i = at.astype(np.int64)
        part = at - i
        return np.asarray(profile[:, i] * (1 - part) + profile[:, i + 1] * part)

    @cached_property
    def inside(self) -> Bools:
        """(T, F, K) bool: pixels of the line."""
        low, high = (edge[:, None, None] for edge in self.extent)
        return np.asarray((self.pixel_u >= low) & (self.pixel_u <= high))


def pools(strips: Strips, mm: float) -> Ints:
    """(T,) int64: a number that tracks with one profile share; short ones of like mass do."""
    pool = np.arange(len(strips.tracks))
    short = np.flatnonzero(strips.tracks.length < _POOLED_MM * mm)
    order = short[np.argsort(strips.mass[short], kind="stable")]
    apart = np.diff(np.log(np.maximum(strips.mass[order], 1e-3)), prepend=-np.inf) > _ALIKE
    pool[order] = order[apart][np.cumsum(apart) - 1]
    return pool


def mean_profiles(strips: Strips, pool: Ints, good: Bools, amplitude: Floats) -> Profiles:
    """Robust mean cross-sections of good blocks, each over its amplitude.

    Parameters
    ----------
    strips : Strips
    pool : (T,) int64 array
        As of `pools`.
    good : (B,) bool array
    amplitude : (B,) float array
        Positive.

    Returns
    -------
    Profiles
    """
    n, n_bins = len(strips.tracks), (2 * strips.half + 1) * _OVERSAMPLING
    u = np.arange(strips.samples) - strips.shift[good][:, None]
    place = np.floor((u + strips.half + 0.5) * _OVERSAMPLING).astype(np.int64)
    known = (place >= 0) & (place < n_bins)
    key = (pool[strips.track[good]][:, None] * n_bins + place)[known]
    value = (strips.block[good] / amplitude[good][:, None])[known]
    weight = np.ones(value.size)
    for _ in range(3):
        total = np.bincount(key, weight, n * n_bins)
        mean = np.bincount(key, weight * value, n * n_bins) / np.maximum(total, 1e-9)
        peak = mean.reshape(n, n_bins).max(axis=1)[key // n_bins]
        weight = 1 / (1 + ((value - mean[key]) / (0.1 * peak + 0.01)) ** 2)
    full = _bridged(mean.reshape(n, n_bins), total.reshape(n, n_bins) > 0)[pool]
    return Profiles(np.maximum(full, 0), strips.tracks.thickness)


def _low_quartile(values: Floats, where: Bools) -> Floats:
    """Of the chosen values of each row, of which there are some."""
    ranked = np.sort(np.where(where, values, np.inf), axis=1)
    place = (where.sum(axis=1) - 1) // 4
    return np.asarray(ranked[np.arange(values.shape[0]), place])


def _bridged(values: Floats, known: Bools) -> Floats:
    """Each row with straight lines across what is not known; rows without anything are 0."""
    n, index = values.shape[1], np.arange(values.shape[1])
    left = np.maximum.accumulate(np.where(known, index, -1), axis=1)
    right = np.minimum.accumulate(np.where(known, index, n)[:, ::-1], axis=1)[:, ::-1]
    left, right = np.where(left < 0, right, left), np.where(right == n, left, right)
    left, right = np.clip(left, 0, n - 1), np.clip(right, 0, n - 1)
    part = np.where(right > left, (index - left) / np.maximum(right - left, 1), 0)
    at_left = np.take_along_axis(values, left, axis=1)
    at_right = np.take_along_axis(values, right, axis=1)
    return np.asarray(at_left * (1 - part) + at_right * part)


def _last_before_gap(on: Bools, begin: Ints, gap: int) -> Ints:
    """In each row the last true from `begin` on that no more than `gap` falses separate from it."""
    n, index = on.shape[1], np.arange(on.shape[1])
    seen = np.maximum.accumulate(np.where(on & (index >= begin[:, None]), index, -1), axis=1)
    seen = np.maximum(seen, begin[:, None])
    over = (index - seen > gap) & (index >= begin[:, None])
    stop = np.where(over.any(axis=1), over.argmax(axis=1), n - 1)
    return np.asarray(seen[np.arange(on.shape[0]), stop])

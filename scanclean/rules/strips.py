"""Strips of page along tracks, and the centre of the line in them to a fraction of a pixel.

Strips of all tracks lie one after another, in blocks of a few columns; those columns share the
row at which their samples begin. Glossary: T tracks, B blocks of W columns, N = B W columns, K
samples across. Rows are counted at pixel centres.
"""

from __future__ import annotations

from dataclasses import dataclass, replace

import numpy as np
from numpy.typing import NDArray

from scanclean.rules.smoothing import group_quantile, whittaker
from scanclean.rules.tracks import Tracks

__all__ = ["GUARD", "Strips", "cut_strips"]

Bools = NDArray[np.bool_]
Floats = NDArray[np.float64]
Singles = NDArray[np.float32]
Ints = NDArray[np.int64]

GUARD = 2
"""Rows on both sides beyond those of a profile: by so much a centre may leave its first guess."""

_BLOCK_MM = 0.68
_FLANK_PX = 3.5  # beside the line, where nothing but strokes is expected
_LOW_MEDIAN = 0.4  # the quantile taken of a block's columns: strokes are dark
_STIFF_BLOCK = 16  # stiffnesses are for blocks of so many columns
_GUESS_STIFFNESS, _CENTRE_STIFFNESS = 30.0, (20.0, 8.0)
_GUESS_PX, _CENTRE_PX = 0.7, 0.25  # deviations that count half
_FRINGE_PX = 1.25  # beyond the thickness of a track
_STROKE = 0.12  # density beside the line


@dataclass(frozen=True, eq=False)
class Strips:
    """Samples along tracks.

    Parameters
    ----------
    tracks : Tracks
    half : int
        Rows of a profile on both sides of the centre.
    first : (T,) int64 array
        First block of each track.
    track : (B,) int64 array
        Whose a block is.
    column : (B, W) int64 array
        Columns of the page. Strips reach beyond their tracks and may leave the page on the right.
    on_page, within : (B, W) bool arrays
        Columns of the page; those between the ends of the track.
    top : (B,) int64 array
        Row of the first sample; may lie off the page.
    density : (B, W, K) float32 array
        0 off the page.
    block : (B, K) float32 array
        The low median of each block.
    shift : (B,) float array
        Centre of the line in rows from `top`, in the middle of the block.
    mass : (T,) float array
        Usual density across, summed; a pen leaves the same however the line falls on the pixels.
    """

    tracks: Tracks
    half: int
    first: Ints
    track: Ints
    column: Ints
    on_page: Bools
    within: Bools
    top: Ints
    density: Singles
    block: Singles
    shift: Floats
    mass: Floats

    @property
    def width(self) -> int:
        """W, the columns of a block."""
        return int(self.column.shape[1])

    @property
    def samples(self) -> int:
        """K, the samples across."""
        return 2 * (self.half + GUARD) + 1

    @property
    def home(self) -> Bools:
        """(B,) bool: blocks that lie mostly between the ends of their track."""
        return np.asarray(self.within.mean(axis=1) > 0.5)

    @property
    def reach(self) -> Floats:
        """(B, 1) float: half the thickness of the track."""
        return self.tracks.thickness[self.track, None] / 2

    def column_shift(self) -> Floats:
        """(N,) float: `shift` in each column, straight within a block."""
        place = np.arange(self.track.size)
        last = np.append(self.first[1:], place.size) - 1
        before = np.maximum(place - 1, self.first[self.track])
        after = np.minimum(place + 1, last[self.track])
        centre = self.top + self.shift
        slope = (centre[after] - centre[before]) / np.maximum(after - before, 1)
        along = (np.arange(self.width) - (self.width - 1) / 2) / self.width
        return np.asarray((self.shift[:, None] + slope[:, None] * along).ravel())


def cut_strips(
    page: NDArray[np.uint8], table: Singles, tracks: Tracks, *, mm: float, reach: int
) -> Strips:
    """Cut strips along tracks out of a page and find the lines' centres in them.

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

    Returns
    -------
    Strips
    """
    high, wide = page.shape
    width = int(np.clip(round(_BLOCK_MM * mm), 4, 16))
    begin = np.maximum(tracks.start - reach, 0)
    n_blocks = -(-(np.minimum(tracks.stop + reach, wide) - begin) // width)
    first = np.cumsum(n_blocks) - n_blocks
    track = np.repeat(np.arange(len(tracks)), n_blocks)
    left = begin[track] + (np.arange(track.size) - first[track]) * width
    column = left[:, None] + np.arange(width)
    centre = _guess(tracks, first, track, left, width)

    half = int(np.ceil(tracks.thickness.max() / 2 + _FLANK_PX))
    top = np.rint(centre).astype(np.int64) - (half + GUARD)
    row = top[:, None] + np.arange(2 * (half + GUARD) + 1)
    pixels = page[np.clip(row, 0, high - 1)[:, None, :], np.minimum(column, wide - 1)[:, :, None]]
    density = table.take(pixels)
    off = (row < 0) | (row >= high)
    if off.any():
        density[np.broadcast_to(off[:, None, :], density.shape)] = 0
    quantile = int(_LOW_MEDIAN * (width - 1))
    strips = Strips(
        tracks=tracks,
        half=half,
        first=first,
        track=track,
        column=column,
        on_page=column < wide,
        within=(column >= tracks.start[track, None]) & (column < tracks.stop[track, None]),
        top=top,
        density=density,
        block=np.partition(density, quantile, axis=1)[:, quantile],
        shift=centre - top,
        mass=np.zeros(len(tracks)),
    )
    for stiffness in _CENTRE_STIFFNESS:
        strips = _sharpened(strips, _stiff(stiffness, width))
    return strips


def _stiff(stiffness: float, width: int) -> float:
    """A stiffness for blocks of some width that bends over the same length."""
    return stiffness * (_STIFF_BLOCK / width) ** 4


def _guess(tracks: Tracks, first: Ints, track: Ints, left: Ints, width: int) -> Floats:
    """(B,) float: row of the centre from the straight line and what the knots say beyond it."""
    whose = tracks.knot_track
    at = first[whose] + ((tracks.knot_x - left[first][whose]) // width).astype(np.int64)
    # the middle of the page's last cell may lie beyond the page
    at = np.minimum(at, np.append(first[1:], track.size)[whose] - 1)
    count = np.bincount(at, minlength=track.size)
    residue = tracks.knot_y - tracks.offset[whose] - tracks.slope[whose] * tracks.knot_x
    residue = np.bincount(at, residue, track.size) / np.maximum(count, 1)
    weight = (count > 0).astype(float)
    for _ in range(4):
        smooth = whittaker(residue, weight, first, _stiff(_GUESS_STIFFNESS, width))
        weight = (count > 0) / (1 + ((residue - smooth) / _GUESS_PX) ** 2)
    middle = left + (width - 1) / 2
    return np.asarray(tracks.offset[track] + tracks.slope[track] * middle + smooth)


def _sharpened(strips: Strips, stiffness: float) -> Strips:
    """Centres moved to the centroids of the blocks, smoothed along the line.

    A block counts by its mass, and not at all when a stroke in its flanks or a wider spread shows
    that there is more than the line.
    """
    n, track, block, home = len(strips.tracks), strips.track, strips.block, strips.home
    u = np.arange(strips.samples) - strips.shift[:, None]
    beside = np.abs(np.abs(u) - strips.reach - 3) <= 1
    flanks = [np.where(beside & side, block, 0) for side in (u < 0, u > 0)]
    count = [np.maximum((beside & side).sum(axis=1), 1) for side in (u < 0, u > 0)]
    ground = np.minimum(flanks[0].sum(axis=1) / count[0], flanks[1].sum(axis=1) / count[1])
    line = np.maximum(block - ground[:, None], 0) * (np.abs(u) <= strips.reach + _FRINGE_PX)
    mass = line.sum(axis=1)
    centroid = (line * u).sum(axis=1) / np.maximum(mass, 1e-6)
    moment = (line * (u - centroid[:, None]) ** 2).sum(axis=1)
    spread = np.sqrt(moment / np.maximum(mass, 1e-6))
    usual = np.nan_to_num(group_quantile(mass[home], track[home], n))
    heavy = mass > 0.3 * usual[track]
    usual_spread = np.nan_to_num(group_quantile(spread[heavy], track[heavy], n), nan=1.0)
    counts = np.minimum(mass / np.maximum(usual[track], 1e-6), 1)
    counts *= spread < 1.25 * usual_spread[track] + 0.1
    # what is beside the line all along is another line, not a stroke
    flank = np.maximum(flanks[0], flanks[1]).max(axis=1)
    always = np.nan_to_num(group_quantile(flank[home], track[home], n, 0.3))
    counts *= flank < _STROKE + always[track]
    counts += 1e-4
    weight = counts
    for _ in range(3):
        smooth = whittaker(centroid, weight, strips.first, stiffness)
        weight = counts / (1 + ((centroid - smooth) / _CENTRE_PX) ** 2)
    shift = np.clip(strips.shift + smooth, strips.half, strips.half + 2 * GUARD)
    return replace(strips, shift=shift, mass=usual)

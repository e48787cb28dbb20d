"""Skew: by how many degrees a page lies askew, and the page turned upright.

Angles are those on paper, also where the two resolutions differ, and positive where text lines
descend to the right. The page is measured in upright strips: a small turn moves each strip up or
down as a whole, so the ink is counted once a row and strip, and an angle is tried by adding
shifted columns of counts.

Glossary: H, W page height and width; K strips; R rows of the counts; M pieces, what the borders of
the strips cut the runs of a page into.
"""

from __future__ import annotations

import math
from dataclasses import dataclass, replace
from itertools import pairwise
from typing import Any

import numpy as np
from numpy.typing import NDArray
from PIL import Image

from scanclean.sets.runs import RunSet, transpose
from scanclean.units import Resolution

__all__ = ["MOST_SKEW", "find_skew", "straighten"]

MOST_SKEW = 15.0
"""Skew is looked for up to so many degrees on either side."""

Floats = NDArray[np.floating[Any]]
Ints = NDArray[np.int64]
Pixels = NDArray[Any]
Counts = NDArray[np.float32]

_STRIP_MM = 4.0  # a line at 15 degrees climbs 1.1 mm across it, less than an x-height
_SEGMENT_MM = 35.0  # no wider than a column: lines of neighbouring columns need not be level
_ROW_MM = 0.4  # rows of the coarse counts; finer structure is dirt, halftone and serifs
_MARGIN_MM = 2.5  # at the page's edge, where scanners leave borders that are level by themselves
_TAPER_MM = 10.0  # and from there ink counts for more and more: a texture must not end in a step
_SOLID_MM = 3.0  # ink that fills a strip for so long is a picture or a shadow
_SOLID_SHARE = 0.8
_MOST_SHARE = 0.3  # ink of a row of a strip counts up to this share: text has no more
_FINEST_DPI = 300.0  # of finer scans every second, third... row is enough
_LEAST_WIDTH_MM = 15.0  # ink on less than this, a folio number or a spot, gives no direction

_CLIMB_MM = 0.45  # the climb across a segment that one coarse step of the angle makes
_FINE_STEP = 0.05  # degrees
_LAST_REACH = 0.15  # degrees that the segments' angle and the columns' may differ by
_ROUNDS = 3  # of trying angles nearby, should the best one always be the last
_HALVES = 2  # fine counts are taken by half rows, or steps of half a row would show in the result

_LEAST_PROMINENCE = 1.25  # best score over the median one; on noise it stays under 1.2
_CLEAR_PROMINENCE = 3.0  # rows this clear make it needless to look for columns

_GUTTER_SHARE = 0.1  # of the median strip's ink: less is a gutter
_LEAST_COLUMN_MM = 20.0
_LEAST_LINES_MM = 30.0  # of inked rows; with fewer lines, gaps of words would pass for gutters


def find_skew(ink: RunSet, resolution: Resolution) -> float:
    """The skew of a page, from its text lines and rules.

    The angle is the one at which the rows of the page, counted along it, change most sharply from
    ink to paper. Counted are segments narrower than a column, because lines of neighbouring
    columns may lie half a line apart, and at last the columns themselves. Where rows are not
    clear, columns are tried: text that stands on its side, upright rules.

    Parameters
    ----------
    ink : RunSet
        H x W.
    resolution : Resolution

    Returns
    -------
    float
        Degrees within ±`MOST_SKEW`, positive where lines descend to the right; 0.0 where nothing
        can be measured.

    References
    ----------
    .. [1] W. Postl, "Detection of linear oblique structures and skew scan in digitized documents",
       Proc. 8th Int. Conf. on Pattern Recognition, 1986: the sum of squared differences of the
       profile. Here it is taken of several segments, smoothed, and with its extremes cut.
    """
    angle, prominence = _skew_of_rows(ink, resolution)
    if prominence < _CLEAR_PROMINENCE:
        of_columns, of_columns_prominence = _skew_of_rows(transpose(ink), resolution.transposed)
        if of_columns_prominence > prominence:
            angle = -of_columns
    return round(angle, 4) + 0.0  # never -0.0


@dataclass(frozen=True, eq=False)
class _Pieces:
    """Runs cut at the borders of upright strips; columns of length M.

    Parameters
    ----------
    strip, y, length : int64
    x : float64
        The middle of the piece, from the middle of the page.
    n_strips, strip_px : int
    every : int
        Of the page's rows only those are there whose number it divides.
    """

    strip: Ints
    y: Ints
    length: Ints
    x: Floats
    n_strips: int
    strip_px: int
    every: int

    @property
    def middles(self) -> Floats:
        """(K,) the middle of each strip, from the middle of the page."""
        return (np.arange(self.n_strips) - (self.n_strips - 1) / 2) * self.strip_px

    def counts(self, row: Ints, weight: Floats | Ints) -> Floats:
        """(K, R) weights summed by strip and row."""
        n_rows = int(row.max()) + 1
        cell = self.strip * n_rows + row
        sums = np.bincount(cell, weights=weight, minlength=self.n_strips * n_rows)
        return sums.reshape(self.n_strips, n_rows).astype(np.float64, copy=False)

    def keep(self, chosen: NDArray[np.bool_]) -> _Pieces:
        """The chosen pieces alone."""
        return replace(
            self,
            strip=self.strip[chosen],
            y=self.y[chosen],
            length=self.length[chosen],
            x=self.x[chosen],
        )


def _pieces(ink: RunSet, resolution: Resolution) -> _Pieces:
    height, width = ink.shape
    strip_px = max(2, round(_STRIP_MM * resolution.x_mm))
    every = max(1, round(resolution.y / _FINEST_DPI))
    row, margin = ink.row, _MARGIN_MM * resolution.y_mm
    chosen = (row >= margin) & (row < height - margin)
    if every > 1:
        chosen &= row % every == 0
    row, start, stop = row[chosen], ink.start[chosen], ink.stop[chosen]
    first = start // strip_px
    n_pieces = (stop - 1) // strip_px - first + 1
    run = np.repeat(np.arange(row.size), n_pieces)
    strip = np.arange(run.size) - np.repeat(np.cumsum(n_pieces) - n_pieces - first, n_pieces)
    left = np.maximum(start[run], strip * strip_px)
    right = np.minimum(stop[run], (strip + 1) * strip_px)
    n_strips = -(-width // strip_px)
    x = (left + right) / 2 - n_strips * strip_px / 2
    return _Pieces(strip, row[run], right - left, x, n_strips, strip_px, every)


def _skew_of_rows(ink: RunSet, resolution: Resolution) -> tuple[float, float]:
    """The angle in degrees along which the page has rows, and how prominent it is; 0, 0 if none.

    1. Count the ink by strip and row; leave out solids and bound what a cell may count.
    2. Try all angles in coarse steps on those counts.
    3. Count again with the pieces moved as the best angle wants it, exactly and by half
       rows, and try angles nearby; last with the page's own columns for segments.
    """
    nothing = 0.0, 0.0
    pieces = _pieces(ink, resolution)
    if pieces.x.size == 0:
        return nothing

    # 1
    row_px = pieces.every * max(1, round(_ROW_MM * resolution.y_mm / pieces.every))
    row = pieces.y // row_px
    share = pieces.counts(row, pieces.length) / (pieces.strip_px * row_px / pieces.every)
    bounded = _bounded(share, row_px / resolution.y_mm, ink.shape[0] / resolution.y_mm)
    if _used_strips(bounded) * _STRIP_MM < _LEAST_WIDTH_MM:
        return nothing

    # 2
    per_degree = resolution.y / resolution.x  # climbs in pixels are steeper if y is the finer axis
    segments = _segments(pieces.n_strips, round(_SEGMENT_MM / _STRIP_MM))
    step = math.degrees(_CLIMB_MM / _SEGMENT_MM)
    n_steps = math.ceil(MOST_SKEW / step)
    angles = np.arange(-n_steps, n_steps + 1) * step
    climbs = per_degree * np.tan(np.radians(angles))
    counts = bounded.astype(np.float32)
    scores = _scores(counts, np.outer(climbs, pieces.middles / row_px), segments, smooth=1)
    best = int(scores.argmax())
    prominence = float(scores[best] / np.median(scores))
    if prominence < _LEAST_PROMINENCE:
        return nothing

    # 3
    weight = pieces.length * (bounded / np.maximum(share, 1e-9))[pieces.strip, row]
    pieces, weight = pieces.keep(weight > 0), weight[weight > 0]
    angle = float(angles[best])
    for _ in range(_ROUNDS):
        further = _further(pieces, weight, angle, segments, resolution, reach=step)
        angle += further
        if abs(further) < step:
            break
    columns = _columns(pieces, weight, angle, resolution)
    angle += _further(pieces, weight, angle, columns, resolution, reach=_LAST_REACH)
    return (angle, prominence) if abs(angle) <= MOST_SKEW else nothing


def _bounded(share: Floats, row_mm: float, height_mm: float) -> Floats:
    """What each cell counts for: its share of ink, no more than text has, and none of solids.

    Parameters
    ----------
    share : float, shape (K, R)
        0 to 1.
    row_mm, height_mm : float
        Of a row of cells, of the page.
    """
    solid = _long_columns(share >= _SOLID_SHARE, max(2, round(_SOLID_MM / row_mm)))
    from_top = np.arange(share.shape[1]) * row_mm
    from_edge = np.minimum(from_top, height_mm - from_top)
    taper = np.clip((from_edge - _MARGIN_MM) / _TAPER_MM, 0, 1)
    bounded: Floats = np.where(solid, 0.0, np.minimum(share, _MOST_SHARE)) * taper
    return bounded


def _further(
    pieces: _Pieces,
    weight: Floats,
    angle: float,
    segments: list[tuple[int, int]],
    resolution: Resolution,
    *,
    reach: float,
) -> float:
    """By how many degrees more or less than `angle` the rows change most sharply."""
    per_degree = resolution.y / resolution.x
    unit = pieces.every / _HALVES
    smooth = _HALVES * max(1, round(_ROW_MM * resolution.y_mm / pieces.every))
    n_steps = math.ceil(reach / _FINE_STEP) + 1
    nearby = np.arange(-n_steps, n_steps + 1) * _FINE_STEP
    climb = per_degree * math.tan(math.radians(angle))
    row = np.rint((pieces.y - pieces.x * climb) / unit).astype(np.int64)
    counts = (pieces.counts(row - row.min(), weight) / pieces.strip_px).astype(np.float32)
    further = per_degree * np.tan(np.radians(angle + nearby)) - climb
    shifts = np.outer(further, pieces.middles / unit)
    return _peak(nearby, _scores(counts, shifts, segments, smooth=smooth))


def _columns(
    pieces: _Pieces, weight: Floats, angle: float, resolution: Resolution
) -> list[tuple[int, int]]:
    """The columns of the page as groups of strips, cut in the middle of its gutters.

    A page without gutters, or with so few lines that none can be told, is one column.
    """
    tangent = math.tan(math.radians(angle))
    level = pieces.y - pieces.x * tangent * resolution.y / resolution.x
    n_inked = np.unique(np.floor(level / pieces.every)).size
    whole = [(0, pieces.n_strips)]
    if n_inked * pieces.every < _LEAST_LINES_MM * resolution.y_mm:
        return whole
    # where a piece stands across the page if the page is turned; half strips find narrow gutters
    upright = pieces.x + (pieces.y - pieces.y.mean()) * tangent * resolution.x / resolution.y
    half, n_halves = pieces.strip_px / 2, 2 * pieces.n_strips
    place = np.clip(np.floor(upright / half).astype(np.int64) + pieces.n_strips, 0, n_halves - 1)
    ink = np.bincount(place, weights=weight, minlength=n_halves)
    gutter = ink < _GUTTER_SHARE * np.median(ink[ink > 0])
    turns = np.flatnonzero(np.diff(gutter, prepend=False, append=False))
    least = round(_LEAST_COLUMN_MM / _STRIP_MM)
    edges = [0]
    for begin, end in zip(turns[0::2].tolist(), turns[1::2].tolist(), strict=True):
        middle = round((begin + end) / 4)
        if edges[-1] + least <= middle <= pieces.n_strips - least:
            edges.append(middle)
    edges.append(pieces.n_strips)
    return list(pairwise(edges))


def _used_strips(counts: Floats) -> float:
    """How many strips the ink is spread over: the inverse of the sum of their squared shares."""
    ink = counts.sum(axis=1)
    total = float(ink.sum())
    return total * total / float(ink @ ink) if total else 0.0


def _segments(n_strips: int, width: int) -> list[tuple[int, int]]:
    """Strips in groups of about `width`, as (first, after last)."""
    n_segments = max(1, round(n_strips / width))
    edges = [round(i * n_strips / n_segments) for i in range(n_segments + 1)]
    return list(pairwise(edges))


def _scores(
    counts: Counts, shifts: Floats, segments: list[tuple[int, int]], *, smooth: int
) -> Floats:
    """How sharply the rows change from ink to paper when strips are moved up by each of A shifts.

    Parameters
    ----------
    counts : float32, shape (K, R)
    shifts : float64, shape (A, K)
        In rows.
    segments : list of (int, int)
        Groups of strips that are added up.
    smooth : int
        Rows that a profile is averaged over, twice; 1 for none. Where counts are sharper at some
        shifts than at others, by rounding alone, that must not decide.

    Returns
    -------
    float64, shape (A,)
    """
    n_rows = counts.shape[1]
    moves = np.rint(shifts).astype(np.int64)
    pad = int(np.abs(moves).max()) + 2 * smooth
    scores = np.zeros(len(moves))
    # a loop over angles and strips: each turn adds a whole column, a microsecond or two
    for i, offsets in enumerate((pad - moves).tolist()):
        for first, after in segments:
            profile = np.zeros(n_rows + 2 * pad, np.float32)
            for strip in range(first, after):
                offset = offsets[strip]
                profile[offset : offset + n_rows] += counts[strip]
            if smooth > 1:
                profile = _boxed(_boxed(profile, smooth), smooth)
            change = np.diff(profile)
            scores[i] += float(change @ change)
    return scores


def _boxed(profile: Floats, width: int) -> Floats:
    total = np.cumsum(profile, dtype=np.float64)
    return total[width:] - total[:-width]


def _peak(x: Floats, scores: Floats) -> float:
    """Where the scores are highest: the top of a parabola through those near the best one.

    Near are all that reach 0.8 of it on both sides, because a single line of text has a
    peak so broad that three points of it say little.
    """
    best = int(scores.argmax())
    low = np.flatnonzero(scores < 0.8 * scores[best])
    reach = int(np.abs(low - best).min()) - 1 if low.size else scores.size
    reach = min(max(reach, 1), best, scores.size - 1 - best)
    if reach < 1:
        return float(x[best])
    at = np.arange(-reach, reach + 1)
    curve, slope, _ = np.polyfit(at, scores[best - reach : best + reach + 1] / scores[best], 2)
    top = float(np.clip(-slope / (2 * curve), -reach, reach)) if curve < 0 else 0.0
    return float(x[best] + top * (x[1] - x[0]))


def _long_columns(full: NDArray[np.bool_], length: int) -> NDArray[np.bool_]:
    """Cells of a (K, R) array in stretches of at least `length` true ones, and two cells around."""
    n_rows = full.shape[1]
    if n_rows < length:
        return np.zeros_like(full)
    run = np.cumsum(np.pad(full, ((0, 0), (1, 0))), axis=1)
    begins: NDArray[np.bool_] = run[:, length:] - run[:, :-length] == length
    edges = np.zeros((len(full), n_rows + 1), np.int64)
    edges[:, : begins.shape[1]] += begins
    edges[:, length:] -= begins
    inside = np.cumsum(edges[:, :-1], axis=1) > 0
    grown = inside.copy()
    for distance in (1, 2):
        grown[:, distance:] |= inside[:, :-distance]
        grown[:, :-distance] |= inside[:, distance:]
    return grown


# ---- turning a page upright


def straighten(
    pixels: Pixels,
    degrees: float,
    resolution: Resolution,
    *,
    paper: float | tuple[float, ...] | None = None,
) -> tuple[Pixels, Floats]:
    """Turn a page upright, on a canvas that holds all of it.

    Every pixel is taken from the scan once, by Pillow's bicubic interpolation (the cubic
    convolution with a = -1, which keeps strokes crisp). Bitonal pages are turned as grey ones and
    thresholded at half.

    Parameters
    ----------
    pixels : array
        uint8 (H, W) or (H, W, 3), uint16 (H, W), or bool (H, W) with ink true.
    degrees : float
        The skew, as `find_skew` gives it.
    resolution : Resolution
    paper : float or tuple of float, optional
        What the corners are filled with, a value a channel; by default the median of the page,
        which is its paper. Bitonal pages have none.

    Returns
    -------
    turned : array
        Of the same kind.
    to_source : float64, shape (3, 3)
        Takes a point (x, y, 1) of the turned page to the scan; pixel (x, y) covers
        ``[x, x + 1) x [y, y + 1)`` in both.

    Raises
    ------
    ValueError
        If the pixels are of none of these kinds, or the angle is not finite and below 45.
    """
    if not abs(degrees) < 45:
        raise ValueError(f"an angle below 45 degrees is needed, got {degrees}")
    image, fill = _image_of(pixels, paper)
    if degrees == 0:
        return pixels, np.eye(3)
    height, width = pixels.shape[:2]
    sine, cosine = math.sin(math.radians(degrees)), math.cos(math.radians(degrees))
    aspect = resolution.y / resolution.x
    # pixels -> paper -> turned -> pixels
    turn = np.array([[cosine, -sine / aspect], [sine * aspect, cosine]])
    # (the small number keeps rounding errors from adding a row)
    size = np.abs(turn) @ (width, height) - 1e-6
    across, down = (math.ceil(side) for side in size.tolist())
    to_source = np.eye(3)
    to_source[:2, :2] = turn
    to_source[:2, 2] = np.array([width / 2, height / 2]) - turn @ (across / 2, down / 2)
    turned = image.transform(
        (across, down),
        Image.Transform.AFFINE,
        tuple(to_source[:2].ravel().tolist()),
        resample=Image.Resampling.BICUBIC,
        fillcolor=fill,
    )
    array = np.asarray(turned)
    if pixels.dtype == np.bool_:
        return array < 128, to_source
    if pixels.dtype == np.uint16:
        return np.clip(array, 0, 65535).astype(np.uint16), to_source
    return array, to_source


def _image_of(
    pixels: Pixels, paper: float | tuple[float, ...] | None
) -> tuple[Image.Image, int | tuple[int, ...]]:
    """A page as a picture that can be interpolated, and the colour of its paper."""
    colour = pixels.ndim == 3 and pixels.shape[2] == 3 and pixels.dtype == np.uint8
    grey = pixels.ndim == 2 and pixels.dtype in (np.bool_, np.uint8, np.uint16)
    if not (colour or grey):
        raise ValueError(f"no page has {pixels.dtype} pixels of shape {pixels.shape}")
    if pixels.dtype == np.bool_:
        return Image.fromarray(np.where(pixels, np.uint8(0), np.uint8(255))), 255
    if paper is None:
        every = max(1, math.isqrt(pixels.shape[0] * pixels.shape[1] // 100_000))
        paper = np.median(pixels[::every, ::every], axis=(0, 1)).tolist()
    levels = tuple(round(level) for level in np.atleast_1d(paper).tolist())
    if colour:
        return Image.fromarray(pixels), levels
    if pixels.dtype == np.uint16:  # Pillow interpolates 32 bits but not 16
        return Image.fromarray(pixels.astype(np.int32)), levels[0]
    return Image.fromarray(pixels), levels[0]

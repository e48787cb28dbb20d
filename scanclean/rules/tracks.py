"""Where rules may run: long thin pieces along one direction, linked into tracks.

Everything here looks at one direction, along the rows of the page; the other one is the same on
the transposed page. Glossary: T tracks, M knots.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from scanclean.rules.smoothing import fit_lines, group_quantile, weighted_median
from scanclean.sets.labels import label
from scanclean.sets.morphology import open_horizontal
from scanclean.sets.runs import RunSet

__all__ = ["Tracks", "find_tracks"]

Floats = NDArray[np.float64]
Ints = NDArray[np.int64]

_PIECE_MM = 3.0  # the line-shaped element: letters of common sizes have no straight stroke as long
_CELLS_PER_MM = 3.0
_GAP_MM = 6.0
_GAP_SHARE = 0.45  # of the shorter of two pieces
_OVERLAP_MM = 3.0
_LONG_MM = 12.0  # from here a track shows the direction of the page's rules
_LEANING = 0.03  # slope at which a second look is worth its time
_STEADIER = 0.3
_LINK_MM, _LINK_PX, _LINK_DRIFT = 0.135, 1.2, 0.012


@dataclass(frozen=True, eq=False)
class Tracks:
    """Candidate rules of one direction, as columns of length T.

    Rows are counted at pixel centres: a rule that fills row 7 alone has its centre at 7.0.

    Parameters
    ----------
    start, stop : (T,) int64 arrays
        Columns ``[start, stop)`` from the first piece to the last.
    offset, slope : (T,) float arrays
        The straight line nearest to the centre: row = offset + slope * column.
    thickness : (T,) float array
        Median rows of a piece, at a level that takes in all of its fringe.
    covered : (T,) float array
        Columns that pieces cover.
    roughness : (T,) float array
        Change of darkness from cell to cell over median darkness; the 30 % quantile, as rules may
        be crossed every millimetre. A rule is as dark here as there, a row of letters is not.
    knot_track, knot_x, knot_y : (M,) arrays
        Points along the centres: whose, column, row; ordered by track.
    page_slope : float
        The direction most of the ruled length has.
    """

    start: Ints
    stop: Ints
    offset: Floats
    slope: Floats
    thickness: Floats
    covered: Floats
    roughness: Floats
    knot_track: Ints
    knot_x: Floats
    knot_y: Floats
    page_slope: float

    def __len__(self) -> int:
        return self.start.size

    @property
    def length(self) -> Ints:
        """(T,) int64: columns from end to end."""
        return self.stop - self.start

    def row_at(self, column: Floats | Ints | float) -> Floats:
        """Row of each track's straight line at a column (scalar, (T,) or (T, k) with (T, 1))."""
        return np.asarray(self.offset + self.slope * column)

    def select(self, chosen: NDArray[np.bool_] | Ints) -> Tracks:
        """Some of the tracks, by a (T,) bool array or by their numbers in rising order."""
        number = np.full(len(self), -1)
        picked = np.arange(len(self))[chosen]
        number[picked] = np.arange(picked.size)
        mine = number[self.knot_track] >= 0
        return Tracks(
            start=self.start[picked],
            stop=self.stop[picked],
            offset=self.offset[picked],
            slope=self.slope[picked],
            thickness=self.thickness[picked],
            covered=self.covered[picked],
            roughness=self.roughness[picked],
            knot_track=number[self.knot_track][mine],
            knot_x=self.knot_x[mine],
            knot_y=self.knot_y[mine],
            page_slope=self.page_slope,
        )


def find_tracks(
    page: NDArray[np.uint8],
    *,
    mm_along: float,
    mm_across: float,
    level: float,
    max_thickness: float,
) -> Tracks:
    """Find what may be a rule along the rows of a page.

    The page is averaged along the rows in cells of a third of a millimetre, which evens noise out
    and leaves thin lines as they are; what is darker than `level` is opened by a line of 3 mm;
    pieces too thick for a rule are dropped, the rest linked across gaps where the straight
    continuation of one meets the other.

    Parameters
    ----------
    page : (H, W) uint8 array
        Page over paper, 255 = paper; C or Fortran order.
    mm_along, mm_across : float
        Pixels per millimetre along the rows and across them.
    level : float
        On the scale of the page. High, so that faded rules show.
    max_thickness : float
        In pixels.

    Returns
    -------
    Tracks
        In the order of their first pieces.
    """
    cell = max(1, round(mm_along / _CELLS_PER_MM))
    reduced = _reduce_along(page, cell)
    upright = np.zeros(reduced.shape[1], np.int64)
    tracks = _find(reduced, upright, cell, page.shape[1], mm_along, mm_across, level, max_thickness)
    long = tracks.length > _LONG_MM * mm_along
    lean = weighted_median(tracks.slope[long], tracks.length[long].astype(float) ** 2)
    if abs(lean) * mm_along < _LEANING * mm_across:
        return tracks
    # thin lines that lean leave short runs: set them upright, column by column, and look again
    shear = np.rint(lean * cell * np.arange(reduced.shape[1])).astype(np.int64)
    row = np.arange(reduced.shape[0])[:, None] + shear
    inside = (row >= 0) & (row < reduced.shape[0])
    leaning = np.take_along_axis(reduced, np.clip(row, 0, reduced.shape[0] - 1), axis=0)
    leaning[~inside] = 255
    return _find(leaning, shear, cell, page.shape[1], mm_along, mm_across, level, max_thickness)


def _find(
    reduced: NDArray[np.uint8],
    shear: Ints,
    cell: int,
    width: int,
    mm_along: float,
    mm_across: float,
    level: float,
    max_thickness: float,
) -> Tracks:
    """Tracks of a page reduced to cells, whose columns were moved up by `shear` rows."""
    dark = RunSet.from_mask(reduced < level)
    opened = open_horizontal(dark, max(3, round(_PIECE_MM * mm_along / cell)))
    parts = label(opened)
    box = parts.box
    extent = box[:, 2] - box[:, 0]
    rows = parts.area / np.maximum(extent, 1)
    parts = parts.select((rows <= 1.6 * max_thickness + 2) & (extent * cell >= 4 * rows))
    if parts.n == 0:
        none = np.empty(0)
        nobody = np.empty(0, np.int64)
        return Tracks(nobody, nobody, none, none, none, none, none, nobody, none, none, 0.0)

    # 1. of each piece and cell: how many rows, and their mean. A piece has one cell too many,
    #    in which its counts return to 0
    box = parts.box
    extent = box[:, 2] - box[:, 0]
    base = np.cumsum(extent + 1) - (extent + 1) - box[:, 0]
    runs, owner = parts.runs, parts.run_label
    m = int((extent + 1).sum())
    enter, leave = base[owner] + runs.start, base[owner] + runs.stop
    count = np.cumsum(np.bincount(enter, minlength=m) - np.bincount(leave, minlength=m))
    row_sum = np.cumsum(
        np.bincount(enter, runs.row, minlength=m) - np.bincount(leave, runs.row, minlength=m)
    )
    piece = np.repeat(np.arange(parts.n), extent + 1)
    usual = group_quantile(count[count > 0], piece[count > 0], parts.n)
    # cells where a stroke crosses or joins are thicker than the piece is elsewhere
    good = (count > 0) & (count <= usual[piece] + 1.5)
    good &= (usual <= 1.3 * max_thickness + 2)[piece]
    knot_piece, knot_count = piece[good], count[good]
    knot_y = row_sum[good] / knot_count
    knot_cell = np.flatnonzero(good) - base[knot_piece]
    knot_x = (knot_cell + 0.5) * cell - 0.5
    # over three rows, so that the row on which a thin line falls does not matter
    row = np.rint(knot_y).astype(np.int64)[:, None] + np.arange(-1, 2)
    row = np.clip(row, 0, reduced.shape[0] - 1)
    darkness = (255.0 - reduced[row, knot_cell[:, None]]).sum(axis=1)

    # 2. pieces to tracks
    offset, slope = fit_lines(knot_x, knot_y, knot_piece, parts.n)
    alive = np.isfinite(offset)
    start, stop = box[:, 0] * cell, np.minimum(box[:, 2] * cell, width)
    length = (stop - start).astype(float)
    page_slope = weighted_median(slope[alive], length[alive] ** 2)
    lead = np.where(length > 15 * mm_along, slope, page_slope)
    n, track = _link(
        start, stop, offset + slope * start, offset + slope * stop, lead, alive, mm_along, mm_across
    )

    # 3. tracks anew from their knots, back on the page
    knot_y = knot_y + shear[knot_cell]
    page_slope += _slope_of(shear, cell)
    order = np.lexsort((knot_x, track[knot_piece]))
    whose = track[knot_piece][order]
    knot_x, knot_y, darkness = knot_x[order], knot_y[order], darkness[order]
    offset, slope = fit_lines(knot_x, knot_y, whose, n)
    beside = (whose[1:] == whose[:-1]) & (np.diff(knot_x) < 1.5 * cell)
    step = group_quantile(np.abs(np.diff(darkness))[beside], whose[1:][beside], n, _STEADIER)
    usual_darkness = np.maximum(group_quantile(darkness, whose, n), 1.0)
    holder = track[alive]
    first: Ints = np.full(n, width, np.int64)
    last: Ints = np.zeros(n, np.int64)
    np.minimum.at(first, holder, start[alive])
    np.maximum.at(last, holder, stop[alive])
    return Tracks(
        start=first,
        stop=last,
        offset=offset,
        slope=slope,
        thickness=group_quantile(knot_count[order].astype(float), whose, n),
        covered=np.minimum(np.bincount(holder, length[alive], n), last - first),
        roughness=np.nan_to_num(step / usual_darkness, nan=1.0),
        knot_track=whose,
        knot_x=knot_x,
        knot_y=knot_y,
        page_slope=page_slope,
    )


def _slope_of(shear: Ints, cell: int) -> float:
    """Rows per column of the page by which the cells' columns were moved."""
    return float(shear[-1]) / (cell * max(shear.size - 1, 1))


def _reduce_along(page: NDArray[np.uint8], cell: int) -> NDArray[np.uint8]:
    """Mean of each `cell` pixels along the rows."""
    from PIL import Image

    if page.flags.c_contiguous:
        return np.asarray(Image.fromarray(page).reduce((cell, 1)))
    # a transposed page is reduced as it lies in memory and only then turned
    lying = Image.fromarray(np.ascontiguousarray(page.T)).reduce((1, cell))
    return np.asarray(lying.transpose(Image.Transpose.TRANSPOSE))


def _link(
    start: Ints,
    stop: Ints,
    row_start: Floats,
    row_stop: Floats,
    lead: Floats,
    alive: NDArray[np.bool_],
    mm_along: float,
    mm_across: float,
) -> tuple[int, Ints]:
    """Number of tracks, and the track of each piece (-1: no piece)."""
    from scipy.sparse import csr_array
    from scipy.sparse.csgraph import connected_components

    chosen = np.flatnonzero(alive)
    chosen = chosen[np.argsort(start[chosen], kind="stable")]
    start, stop, lead = start[chosen], stop[chosen], lead[chosen]
    row_start, row_stop = row_start[chosen], row_stop[chosen]
    # each piece with those that begin near its end
    lo = np.searchsorted(start, stop - _OVERLAP_MM * mm_along, side="right")
    hi = np.searchsorted(start, stop + _GAP_MM * mm_along, side="left")
    lo = np.maximum(lo, np.searchsorted(start, start, side="right"))  # later beginners only
    count = np.maximum(hi - lo, 0)
    i = np.repeat(np.arange(start.size), count)
    j = np.arange(i.size) - np.repeat(np.cumsum(count) - count - lo, count)
    gap = start[j] - stop[i]
    miss = np.minimum(
        np.abs(row_start[j] - row_stop[i] - lead[i] * gap),
        np.abs(row_start[j] - row_stop[i] - lead[j] * gap),
    )
    close = max(_LINK_PX, _LINK_MM * mm_across) + _LINK_DRIFT * np.maximum(gap, 0)
    # short pieces bear only short gaps: ticks of two combs may stand in line
    length = stop - start
    met = (miss < close) & (gap <= _GAP_SHARE * np.minimum(length[i], length[j]))
    graph = csr_array(
        (np.ones(int(met.sum()), np.int8), (i[met], j[met])), shape=(start.size, start.size)
    )
    n, found = connected_components(graph, directed=False)
    track = np.full(alive.size, -1, np.int64)
    track[chosen] = found
    return int(n), track

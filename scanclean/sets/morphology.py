"""Erosion, dilation and what is built of them, on runs.

Outside the page there is no ink: a page is a set on an endless plane, and results are cut to the
page at the end. So erosion eats from the border where the element reaches over it, and the laws of
the plane (adjunction, idempotence, opening inside and closing outside the set) hold.

References
----------
J. Serra, *Image Analysis and Mathematical Morphology*, 1982. R. M. Haralick, S. R. Sternberg and
X. Zhuang, "Image analysis using mathematical morphology", IEEE PAMI 9(4), 1987, 532-550.
"""

from __future__ import annotations

from collections.abc import Callable

import numpy as np
from numpy.typing import NDArray

from scanclean.sets.elements import Element
from scanclean.sets.labels import label
from scanclean.sets.runs import RunSet, clipped, complement, covered, crop, pad, translate

__all__ = [
    "close_set",
    "dilate",
    "erode",
    "fill_holes",
    "hit_or_miss",
    "open_horizontal",
    "open_set",
    "reconstruct",
]


def erode(a: RunSet, element: Element) -> RunSet:
    """Every place of the origin at which the whole element lies in `a`.

    Parameters
    ----------
    a : RunSet
    element : Element
        Not empty.

    Raises
    ------
    ValueError
        If the element is empty: every place would fit, on and off the page.
    """
    pieces = _checked(element)
    starts, stops = [], []
    # one box at a time: shorten the runs by its width, keep what stands on all of its rows, move it
    for left, top, right, bottom in pieces.tolist():
        rows = _keep_tall(_shorten(a, right - left - 1), bottom - top)
        moved = clipped(a.shape, rows.row - top, rows.start - left, rows.stop - left)
        starts.append(moved[0])
        stops.append(moved[1])
    everywhere = covered(np.concatenate(starts), np.concatenate(stops), at_least=len(pieces))
    return RunSet(a.shape, everywhere)


def dilate(a: RunSet, element: Element) -> RunSet:
    """Every place of the page that the element covers when its origin stands on a point of `a`.

    The same as: every place at which the element reflected in its origin meets `a`. Raises
    ValueError if the element is empty.
    """
    starts, stops = [], []
    for left, top, right, bottom in _checked(element).tolist():
        rows = _grow_tall(a, bottom - top, top)
        moved = clipped(a.shape, rows.row + top, rows.start + left, rows.stop + right - 1)
        starts.append(moved[0])
        stops.append(moved[1])
    return RunSet(a.shape, covered(np.concatenate(starts), np.concatenate(stops), at_least=1))


def open_set(a: RunSet, element: Element) -> RunSet:
    """The union of all placings of the element inside `a`: erosion, then dilation."""
    return _on_plane(a, element, lambda page: dilate(erode(page, element), element))


def close_set(a: RunSet, element: Element) -> RunSet:
    """What no placing of the reflected element outside `a` reaches: dilation, then erosion."""
    return _on_plane(a, element, lambda page: erode(dilate(page, element), element))


def hit_or_miss(a: RunSet, hit: Element, miss: Element) -> RunSet:
    """Every place of the origins at which `hit` lies in `a` and `miss` in its complement.

    Either element may be empty, which asks nothing.
    """
    fits = erode(a, hit) if hit.points else RunSet.full(a.shape)
    if not miss.points:
        return fits
    left, top, right, bottom = miss.reach
    paper = complement(pad(a, left, top, right, bottom))
    clear = erode(paper, miss)
    height, width = a.shape
    return fits & crop(clear, (left, top, left + width, top + height))


def reconstruct(marker: RunSet, mask: RunSet, *, connectivity: int = 8) -> RunSet:
    """The components of `mask` that hold a point of `marker`.

    Raises ValueError if the shapes differ or the connectivity is not 4 or 8.

    References
    ----------
    L. Vincent, "Morphological grayscale reconstruction in image analysis", IEEE TIP 2(2), 1993.
    """
    components = label(mask, connectivity=connectivity)
    return components.keep(components.touching(marker))


def fill_holes(a: RunSet, *, max_area: int | None = None, connectivity: int = 8) -> RunSet:
    """`a` with its holes filled.

    Parameters
    ----------
    a : RunSet
    max_area : int, optional
        Only holes of at most so many pixels; all by default.
    connectivity : {8, 4}
        That of the ink; the paper's is the other one, so that a closed ring encloses its hole.
    """
    paper, around = complement(a), 12 - connectivity
    if max_area is not None:
        # a hole of so few pixels is made of gaps as short, most of the paper is not: what touches
        # a longer gap is no such hole, and the rest is labelled in a tenth of the time
        short = paper.length <= max_area
        pairs = paper.bounds.reshape(-1, 2)
        long = RunSet(a.shape, pairs[~short].ravel())
        paper = RunSet(a.shape, pairs[short].ravel())
        open_run = _beside(paper, long, connectivity=around)
    else:
        open_run = np.zeros(paper.n_runs, bool)
    gaps = label(paper, connectivity=around)
    left, top, right, bottom = gaps.box.T
    height, width = a.shape
    hole = (left > 0) & (top > 0) & (right < width) & (bottom < height)
    hole[gaps.run_label[open_run]] = False
    if max_area is not None:
        hole &= gaps.area <= max_area
    return a | gaps.keep(hole)


def open_horizontal(a: RunSet, length: int) -> RunSet:
    """The opening by a horizontal line of `length` pixels: the runs that are as long or longer."""
    long = a.length >= length
    return RunSet(a.shape, a.bounds.reshape(-1, 2)[long].ravel())


def _checked(element: Element) -> NDArray[np.int64]:
    if not element.points:
        raise ValueError("the structuring element is empty")
    return element.pieces


def _shorten(a: RunSet, by: int) -> RunSet:
    """Runs with `by` pixels taken off their right ends."""
    pairs = a.bounds.reshape(-1, 2)
    pairs = pairs[pairs[:, 1] - pairs[:, 0] > by]
    return RunSet(a.shape, (pairs - np.array([0, by])).ravel())


def _keep_tall(a: RunSet, rows: int) -> RunSet:
    """The points that have ink on `rows` rows from their own downwards.

    Doubles the height it knows: log2(rows) intersections instead of rows.
    """
    known = 1
    while known < rows:
        step = min(known, rows - known)
        a = a & translate(a, 0, -step)
        known += step
    return a


def _grow_tall(a: RunSet, rows: int, top: int) -> RunSet:
    """Every point repeated on `rows` rows, on a page long enough not to cut what may return."""
    if rows == 1:
        return a
    height, width = a.shape
    room = RunSet((height + rows - 1, width), a.bounds)
    known = 1
    while known < rows:
        step = min(known, rows - known)
        room = room | translate(room, 0, step)
        known += step
    return room


def _beside(a: RunSet, b: RunSet, *, connectivity: int) -> NDArray[np.bool_]:
    """(N,) bool: which runs of `a` touch a run of `b` in the row above or below."""
    corners = connectivity == 8
    met = np.zeros(a.n_runs, bool)
    for row in (-a.shape[1] - 1, a.shape[1] + 1):
        lo = np.searchsorted(
            b.bounds[1::2], a.bounds[0::2] + row, side="left" if corners else "right"
        )
        hi = np.searchsorted(
            b.bounds[0::2], a.bounds[1::2] + row, side="right" if corners else "left"
        )
        met |= lo < hi
    return met


def _on_plane(a: RunSet, element: Element, operation: Callable[[RunSet], RunSet]) -> RunSet:
    """`operation` on a page with room for the element on every side, cut back to the page."""
    left, top, right, bottom = element.points.box
    x, y = element.origin
    room_x = max(abs(left - x), abs(right - x), 1)
    room_y = max(abs(top - y), abs(bottom - y), 1)
    height, width = a.shape
    page = operation(pad(a, room_x, room_y, room_x, room_y))
    return crop(page, (room_x, room_y, room_x + width, room_y + height))

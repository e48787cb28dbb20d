"""Components that are writing because of the company they keep, though no text line was found.

Dirt lies where it fell; letters, figures and dashes stand in rows, each beside another of about its
height. A short word in a small type, or a row of dashes, may be too little for a line, but is no
dirt. A dot in the middle of a counter is part of the figure round it.
"""

from __future__ import annotations

import numpy as np
from numpy.typing import NDArray

from scanclean.text.upright import Shapes

__all__ = ["are_in_rows", "fill_counters"]

Bools = NDArray[np.bool_]
Floats = NDArray[np.float64]
Ints = NDArray[np.int64]

_LEAST_STROKES = 2.5  # size of a letter, of a dash its width, in stroke widths
_ALIKE = 1.6  # ratio of sizes of neighbours
_OVERLAP = 0.6  # of the lower one's height
_GAP = 1.3  # to the neighbour, in sizes
_BLOCK = 256  # candidates compared with all others at a time
_OFF_CENTRE = 0.12  # of the figure's height


def are_in_rows(shapes: Shapes, asked: Bools, others: Bools, *, stroke: float) -> Bools:
    """(C,) which of the components asked stand beside another of their size, at its height.

    Parameters
    ----------
    shapes : Shapes
    asked : (C,) bool array
    others : (C,) bool array
        Neighbours that count; those asked may be among them.
    stroke : float
        Stroke width in upright pixels.
    """
    flat = shapes.width > 2 * shapes.height
    size = np.where(flat, shapes.width, shapes.height)
    large = size >= _LEAST_STROKES * stroke
    one, other = np.flatnonzero(asked & large), np.flatnonzero(others & large)
    found = np.zeros(asked.size, bool)
    for block in np.array_split(one, max(1, -(-one.size // _BLOCK))):
        i, j = block[:, None], other[None, :]
        gap = np.maximum(shapes.left[j] - shapes.right[i], shapes.left[i] - shapes.right[j])
        shared = np.minimum(shapes.bottom[i], shapes.bottom[j])
        shared = shared - np.maximum(shapes.top[i], shapes.top[j])
        low = np.minimum(shapes.height[i], shapes.height[j])
        mates = (i != j) & (flat[i] == flat[j])
        mates &= np.maximum(size[i], size[j]) < _ALIKE * np.minimum(size[i], size[j])
        mates &= (shared >= _OVERLAP * low) & (gap > -0.2 * stroke) & (gap < _GAP * size[i])
        found[block] = mates.any(axis=1)
    return found


def fill_counters(shapes: Shapes, asked: Bools, holes: Ints) -> Bools:
    """(C,) which of the components asked stand in the middle of a figure with a counter.

    Parameters
    ----------
    shapes : Shapes
    asked : (C,) bool array
    holes : (C,) int array
        Of each component.
    """
    one, other = np.flatnonzero(asked), np.flatnonzero(holes == 1)
    x = (shapes.left + shapes.right) / 2
    y = (shapes.top + shapes.bottom) / 2
    found = np.zeros(asked.size, bool)
    for block in np.array_split(one, max(1, -(-one.size // _BLOCK))):
        i, j = block[:, None], other[None, :]
        high, wide = shapes.height[j], shapes.width[j]
        near = (np.abs(x[i] - x[j]) < _OFF_CENTRE * high) & (
            np.abs(y[i] - y[j]) < _OFF_CENTRE * high
        )
        near &= (shapes.height[i] < 0.5 * high) & (shapes.width[i] < 0.5 * wide)
        near &= shapes.height[i] > 0.08 * high
        found[block] = near.any(axis=1)
    return found

"""What on a page is plainly no writing: solid lumps and hairs.

Glossary: C components.
"""

from __future__ import annotations

import numpy as np
from numpy.typing import NDArray

from scanclean.labels import Components
from scanclean.upright import Shapes

__all__ = ["is_hair", "is_lump"]

Bools = NDArray[np.bool_]

_LUMP_OF_STROKE = 1.6
_HAIR_OF_STROKE = 0.4


def is_lump(components: Components, shapes: Shapes, stroke: float) -> Bools:
    """(C,) which components are solid lumps: one stretch of ink in a row, thicker than strokes.

    Parameters
    ----------
    components : Components
    shapes : Shapes
        Of the same components.
    stroke : float
        Usual stroke width of the page in pixels.
    """
    area = components.area * shapes.frame.aspect
    width, height = shapes.width, shapes.height
    thick = area / np.maximum(width, height)
    filled = area >= 0.5 * width * height
    whole = (components.n_runs <= 1.25 * height) & (components.holes == 0)
    return filled & whole & (thick >= _LUMP_OF_STROKE * stroke * shapes.frame.aspect)


def is_hair(components: Components, shapes: Shapes, stroke: float) -> Bools:
    """(C,) which components are much longer than thick and thinner than strokes all along."""
    length = np.hypot(shapes.width, shapes.height)
    stroke = stroke * shapes.frame.aspect
    thick = components.area * shapes.frame.aspect / np.maximum(length, 1)
    return (thick < _HAIR_OF_STROKE * stroke) & (length > 4 * stroke)

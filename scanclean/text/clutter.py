"""What on a page is plainly no writing: solid lumps and hairs.

Glossary: C components.
"""

from __future__ import annotations

import numpy as np
from numpy.typing import NDArray

from scanclean.sets.labels import Components
from scanclean.text.textmeasure import TextMeasures
from scanclean.text.upright import Shapes

__all__ = ["is_hair", "is_lump"]

Bools = NDArray[np.bool_]

_LUMP_OF_STROKE = 1.6
_HAIR_OF_STROKE = 0.5


def is_lump(components: Components, shapes: Shapes, measures: TextMeasures) -> Bools:
    """(C,) which components are solid lumps: one stretch of ink in a row, thicker than strokes.

    Parameters
    ----------
    components : Components
    shapes : Shapes
        Of the same components.
    measures : TextMeasures
        Of the page.
    """
    area = components.area * shapes.frame.aspect
    width, height = shapes.width, shapes.height
    thick = area / np.maximum(width, height)
    filled = area >= 0.5 * width * height
    whole = (components.n_runs <= 1.25 * height) & (components.holes == 0)
    stroke = measures.stroke_px * shapes.frame.aspect
    lumps: Bools = filled & whole & (thick >= _LUMP_OF_STROKE * stroke)
    return lumps


def is_hair(components: Components, shapes: Shapes, measures: TextMeasures) -> Bools:
    """(C,) which components are much longer than thick, and thinner than strokes all along.

    The strokes of small print on a page of large writing and the bars of dashes in a thin face may
    be as thin, but they are upright or level, and short.
    """
    length = np.hypot(shapes.width, shapes.height)
    stroke = measures.stroke_px * shapes.frame.aspect
    thick = components.area * shapes.frame.aspect / np.maximum(length, 1)
    letter = (shapes.width < 0.4 * shapes.height) | (shapes.height < 0.25 * shapes.width)
    letter &= length < 2 * measures.x_height_px
    return (thick < _HAIR_OF_STROKE * stroke) & (length > 4 * stroke) & ~letter

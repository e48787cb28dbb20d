"""Components as they would stand on the page turned upright, with square pixels.

Text lines are looked for in this frame, so that nothing after it has to think of skew or of a
resolution that differs between x and y.

Glossary: C components, P points. Lengths are pixels of the page's y axis.
"""

from __future__ import annotations

import math
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from scanclean.sets.labels import Components
from scanclean.text.textmeasure import Spread
from scanclean.units import Resolution

__all__ = ["Frame", "Shapes", "place"]

Floats = NDArray[np.float64]


@dataclass(frozen=True)
class Frame:
    """The turn from the page to the upright page.

    Parameters
    ----------
    slope : float
        Of the text lines, dy / dx of square pixels; positive where they fall to the right.
    aspect : float
        Pixels of y in one pixel of x.
    """

    slope: float = 0.0
    aspect: float = 1.0

    @classmethod
    def at(cls, slope: float, resolution: Resolution | None) -> Frame:
        """The frame for a page of this resolution; square pixels if it is not known."""
        return cls(slope, 1.0 if resolution is None else resolution.y / resolution.x)

    @property
    def cosine(self) -> float:
        """Of the lines' angle."""
        return 1 / math.hypot(1.0, self.slope)

    @property
    def sine(self) -> float:
        """Of the lines' angle."""
        return self.slope * self.cosine

    def upright(self, x: Floats, y: Floats) -> tuple[Floats, Floats]:
        """(P,), (P,) upright coordinates of points of the page."""
        x = x * self.aspect
        return x * self.cosine + y * self.sine, y * self.cosine - x * self.sine

    def page(self, x: Floats, y: Floats) -> tuple[Floats, Floats]:
        """(P,), (P,) page coordinates of upright points."""
        return (x * self.cosine - y * self.sine) / self.aspect, x * self.sine + y * self.cosine


@dataclass(frozen=True, eq=False)
class Shapes:
    """Components on the upright page; columns of length C.

    A box keeps its size and its place about its middle; at the few degrees that scans are out,
    the box of a letter hardly differs from that of the turned letter.

    Parameters
    ----------
    frame : Frame
    left, top, right, bottom : (C,) float array
    x, y : (C,) float array
        Centroid.
    core : (C,) float array
        Height that the bulk of the ink fills, at most the box's.
    """

    frame: Frame
    left: Floats
    top: Floats
    right: Floats
    bottom: Floats
    x: Floats
    y: Floats
    core: Floats

    @property
    def width(self) -> Floats:
        """(C,) of the boxes."""
        return self.right - self.left

    @property
    def height(self) -> Floats:
        """(C,) of the boxes."""
        return self.bottom - self.top

    @property
    def middle(self) -> Floats:
        """(C,) x in the middle of the boxes."""
        return (self.left + self.right) / 2


def place(components: Components, spread: Spread, frame: Frame) -> Shapes:
    """The components in a frame."""
    box = components.box.astype(np.float64)
    half_width = (box[:, 2] - box[:, 0]) / 2 * frame.aspect
    half_height = (box[:, 3] - box[:, 1]) / 2
    mx, my = frame.upright((box[:, 0] + box[:, 2]) / 2, (box[:, 1] + box[:, 3]) / 2)
    x, y = frame.upright(spread.x, spread.y)
    core = np.minimum(spread.core(frame.slope * frame.aspect), 2 * half_height)
    return Shapes(
        frame, mx - half_width, my - half_height, mx + half_width, my + half_height, x, y, core
    )

"""Where components stand in their text lines: levels over the baseline, letters beside them.

What a small component can be is told by its place: a comma hangs on the baseline behind a letter,
an i-dot stands over one, a hyphen at half the x-height between two.

Glossary: C components, M of them asked about. Levels, widths and gaps are in x-heights of the
component's own line, levels counted upwards from its baseline.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from scanclean.text.lineset import LineSet
from scanclean.text.neighbours import keyed_neighbours
from scanclean.text.upright import Shapes

__all__ = ["Places", "find_places"]

Floats = NDArray[np.float64]
Ints = NDArray[np.int64]
Bools = NDArray[np.bool_]


@dataclass(frozen=True, eq=False)
class Places:
    """Components in their lines; columns of length C, zeros and False where a line is lacking.

    Parameters
    ----------
    line : (C,) int array
        Line of each component, or -1.
    left, right : (C,) float array
        In x-heights of the line, from the page's left side.
    top, bottom : (C,) float array
        Levels of the box.
    body : (C,) bool array
        Whether it has the size and level of a letter: it crosses the middle of the line.
    """

    line: Ints
    left: Floats
    right: Floats
    top: Floats
    bottom: Floats
    body: Bools

    @property
    def middle(self) -> Floats:
        """(C,) x of the boxes' middles."""
        return (self.left + self.right) / 2

    @property
    def width(self) -> Floats:
        """(C,) of the boxes."""
        return self.right - self.left

    @property
    def height(self) -> Floats:
        """(C,) of the boxes."""
        return self.top - self.bottom

    def bodies_near(self, asked: Ints, *, count: int = 2, among: Bools | None = None) -> Ints:
        """(2 count, M) bodies of the same line about each component asked, or -1.

        The nearest whose middles lie to the left, outwards, then those to the right. `among` takes
        other components for the bodies.
        """
        bodies = np.flatnonzero(self.body if among is None else among)
        return keyed_neighbours(self.line, self.middle, bodies, asked, count)


def find_places(lines: LineSet, shapes: Shapes) -> Places:
    """Place components in text lines by where they stand."""
    line = lines.assign(shapes)
    some = np.flatnonzero(line >= 0)
    mine = line[some]
    x_height = lines.x_height[mine]
    middle = shapes.middle[some]
    columns = np.zeros((4, line.size))
    columns[0, some] = shapes.left[some] / x_height
    columns[1, some] = shapes.right[some] / x_height
    columns[2, some] = lines.levels(mine, middle, shapes.top[some])
    columns[3, some] = lines.levels(mine, middle, shapes.bottom[some])
    left, right, top, bottom = columns
    body = (line >= 0) & (top >= 0.55) & (bottom <= 0.45) & (top - bottom >= 0.5)
    return Places(line, left, right, top, bottom, body)

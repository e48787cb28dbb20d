"""Text lines as curves with a size, and the zones on the page that belong to them.

Glossary: C components, L lines, P points. Everything is in the upright frame (`upright`).
"""

from __future__ import annotations

from dataclasses import dataclass
from functools import cached_property

import numpy as np
from numpy.typing import NDArray

from scanclean.text.baselines import Baselines
from scanclean.text.neighbours import repeat_range
from scanclean.text.upright import Frame, Shapes

__all__ = ["LineSet"]

Floats = NDArray[np.float64]
Ints = NDArray[np.int64]
Bools = NDArray[np.bool_]

# in x-heights
_REACH = 2.0  # so far beyond its ends a line still claims marks
_REACH_OF_STOPS = 4.0  # and stops on its baseline
_LARGEST = 6.0  # height of what can stand in a line
_KEY = 1e7  # more than any page is high


@dataclass(frozen=True, eq=False)
class LineSet:
    """Text lines as curves with a size, before anything is numbered; columns of length L.

    Parameters
    ----------
    frame : Frame
    baselines : Baselines
    left, right : (L,) float array
        Ends of the letters.
    x_height : (L,) float array
    """

    frame: Frame
    baselines: Baselines
    left: Floats
    right: Floats
    x_height: Floats

    @classmethod
    def empty(cls, frame: Frame) -> LineSet:
        """No lines."""
        none, count = np.empty(0), np.empty(0, np.int64)
        return cls(frame, Baselines(none, none, np.empty((0, 5)), none, count), none, none, none)

    @property
    def n(self) -> int:
        """L."""
        return self.left.size

    def with_lines(self, other: LineSet) -> LineSet:
        """These lines and then others, which give the frame."""
        return LineSet(
            other.frame,
            self.baselines.with_groups(other.baselines),
            np.concatenate((self.left, other.left)),
            np.concatenate((self.right, other.right)),
            np.concatenate((self.x_height, other.x_height)),
        )

    def levels(self, line: Ints, x: Floats, y: Floats) -> Floats:
        """(P,) height of points over the baselines of P lines, in the lines' x-heights."""
        return (self.baselines.at(line, x) - y) / self.x_height[line]

    def reaches(self, line: Ints, x: Floats) -> Bools:
        """(P,) whether places are between the ends of P lines or near enough for a mark."""
        reach = _REACH * self.x_height[line]
        return (x > self.left[line] - reach) & (x < self.right[line] + reach)

    def near(self, x: Floats, y: Floats) -> Ints:
        """(4, P) lines at each place or -1: two with baselines next below, two next above."""
        found = np.full((4, x.size), -1, np.int64)
        if self.n == 0 or x.size == 0:
            return found
        keys, line, strip, first, width = self._strips
        at = np.floor((x - first) / width).astype(np.int64)
        where = np.searchsorted(keys, at * _KEY + y)
        for k, step in enumerate((0, 1, -1, -2)):
            i = np.clip(where + step, 0, keys.size - 1)
            there = (where + step == i) & (strip[i] == at)
            found[k, there] = line[i[there]]
        return found

    def assign(self, shapes: Shapes) -> Ints:
        """(C,) the line in whose zone each component stands, or -1.

        The zone reaches from below the descenders to above the accents. Where two zones overlap,
        what stands over letters is likelier than what hangs under them.
        """
        best = np.full(shapes.x.size, -1, np.int64)
        least = np.full(shapes.x.size, np.inf)
        for line in self.near(shapes.x, shapes.y):
            some = np.flatnonzero(line >= 0)
            mine = line[some]
            x_height = self.x_height[mine]
            level = self.levels(mine, shapes.x[some], shapes.y[some])
            # how far it stands off the line's ends
            off = np.maximum(self.left[mine] - shapes.right[some], 0)
            off = np.maximum(off, shapes.left[some] - self.right[mine]) / x_height
            reach = np.where(np.abs(level - 0.2) < 0.4, _REACH_OF_STOPS, _REACH)
            inside = (level > -1.2) & (level < 3.0) & (off < reach)
            inside &= shapes.core[some] < _LARGEST * x_height
            cost = np.maximum(level - 1, 0) + 1.8 * np.maximum(-level, 0) + 0.3 * off
            cost += 0.1 * np.abs(level - 0.5)
            better = inside & (cost < least[some])
            best[some[better]] = mine[better]
            least[some[better]] = cost[better]
        return best

    def keep(self, chosen: Bools | Ints) -> LineSet:
        """The chosen lines, by a mask or in an order."""
        return LineSet(
            self.frame,
            self.baselines.keep(chosen),
            self.left[chosen],
            self.right[chosen],
            self.x_height[chosen],
        )

    @cached_property
    def _strips(self) -> tuple[Floats, Ints, Ints, float, float]:
        """Baselines where they cross upright strips of the page, sorted by strip and level."""
        width = 2 * float(np.median(self.x_height))
        reach = _REACH_OF_STOPS * self.x_height
        start, stop = self.left - reach, self.right + reach
        first = float(start.min())
        line, strip = repeat_range(
            np.floor((start - first) / width).astype(np.int64),
            np.floor((stop - first) / width).astype(np.int64) + 1,
        )
        middle = first + (strip.astype(np.float64) + 0.5) * width
        keys = strip * _KEY + self.baselines.at(line, middle)
        order = np.argsort(keys, kind="stable")
        return keys[order], line[order], strip[order], first, width

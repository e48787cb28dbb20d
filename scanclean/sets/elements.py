"""Structuring elements: small sets of points with an origin that may lie anywhere."""

from __future__ import annotations

import math
from collections.abc import Callable
from dataclasses import dataclass
from functools import cached_property

import numpy as np
from numpy.typing import ArrayLike, NDArray

from scanclean.sets.runs import RunSet, reflect

__all__ = ["Element", "box", "diamond", "disk", "from_text", "line"]

Grid = NDArray[np.int64]


@dataclass(frozen=True)
class Element:
    """A set of points seen from an origin.

    Parameters
    ----------
    points : RunSet
    origin : (int, int)
        x and y on the page of `points`; off that page too.
    """

    points: RunSet
    origin: tuple[int, int]

    @classmethod
    def from_mask(cls, mask: ArrayLike, origin: tuple[int, int] | None = None) -> Element:
        """The true points of a (h, w) array; origin (w // 2, h // 2) unless given."""
        points = RunSet.from_mask(mask)
        height, width = points.shape
        return cls(points, (width // 2, height // 2) if origin is None else origin)

    def to_mask(self) -> NDArray[np.bool_]:
        """(h, w) bool array of the points; the origin is `origin`, not its centre."""
        return self.points.to_mask()

    @property
    def reflected(self) -> Element:
        """The element with every point p replaced by -p, seen from the origin."""
        height, width = self.points.shape
        x, y = self.origin
        return Element(reflect(self.points), (width - 1 - x, height - 1 - y))

    @property
    def reach(self) -> tuple[int, int, int, int]:
        """How far the points and the origin span to the left, up, right and down of the origin."""
        left, top, right, bottom = self.points.box
        x, y = self.origin
        return (max(0, x - left), max(0, y - top), max(0, right - 1 - x), max(0, bottom - 1 - y))

    @cached_property
    def pieces(self) -> NDArray[np.int64]:
        """(P, 4) int64: boxes ``[left, top, right, bottom]`` round the origin that make up the set.

        Runs that repeat row after row stand as one box: a tall box is one piece, a disk of
        radius r at most 2 r + 1.
        """
        points, (x, y) = self.points, self.origin
        order = np.lexsort((points.row, points.stop, points.start))
        row, start, stop = points.row[order], points.start[order], points.stop[order]
        first = np.ones(row.size, bool)
        first[1:] = (start[1:] != start[:-1]) | (stop[1:] != stop[:-1]) | (row[1:] != row[:-1] + 1)
        last = np.append(first[1:], True)[: row.size]
        return np.stack(
            (start[first] - x, row[first] - y, stop[first] - x, row[last] + 1 - y), axis=1
        )


def box(width: int, height: int) -> Element:
    """A rectangle of width x height pixels, origin (width // 2, height // 2)."""
    _at_least("width", width, 1)
    _at_least("height", height, 1)
    return Element(RunSet.full((height, width)), (width // 2, height // 2))


def line(length: float, angle: float = 0.0) -> Element:
    """A straight line of pixels through the origin at its middle.

    Parameters
    ----------
    length : float
        Pixels along a horizontal or vertical line; a slanting one covers that length too, so it
        holds ``length * max(|cos|, |sin|)`` pixels, rounded.
    angle : float
        Degrees, turning from the x axis towards the y axis: 90 is vertical, 45 falls to the right.
    """
    _at_least("length", length, 1)
    cos, sin = math.cos(math.radians(angle)), math.sin(math.radians(angle))
    steep = abs(sin) > abs(cos)
    major, minor = (sin, cos) if steep else (cos, sin)
    count = max(1, round(length * abs(major)))
    along = np.arange(count) - count // 2
    # symmetric rounding: the line reflected in its origin is the same line
    across = np.sign(along) * np.floor(np.abs(along) * abs(minor / major) + 0.5).astype(np.int64)
    across = across * (1 if minor * major >= 0 else -1)
    x, y = (across, along) if steep else (along, across)
    left, top = int(x.min()), int(y.min())
    mask = np.zeros((int(y.max()) - top + 1, int(x.max()) - left + 1), bool)
    mask[y - top, x - left] = True
    return Element(RunSet.from_mask(mask), (-left, -top))


def disk(radius: float) -> Element:
    """All pixels whose centre is at most `radius` pixels from the origin."""
    _at_least("radius", radius, 0)
    return _ball(radius, lambda x, y: x * x + y * y <= radius * radius)


def diamond(radius: float) -> Element:
    """All pixels at most `radius` steps along the axes from the origin."""
    _at_least("radius", radius, 0)
    return _ball(radius, lambda x, y: np.abs(x) + np.abs(y) <= radius)


def from_text(picture: str, origin: tuple[int, int] | None = None) -> Element:
    """An element drawn with characters, a line a row.

    Parameters
    ----------
    picture : str
        ``#`` is a point, ``.`` none; ``O`` is a point and the origin, ``o`` the origin only. Empty
        lines before and after, and spaces, do not count; short lines are filled with ``.``.
    origin : (int, int), optional
        x and y of an origin that the picture does not mark; it may lie outside.

    Raises
    ------
    ValueError
        If another character stands in the picture, the origin is missing or given twice, or there
        is no point at all.

    Examples
    --------
    >>> from_text('''
    ...     .#.
    ...     #O#
    ...     .#.
    ... ''').points.area
    5
    """
    rows = [row.replace(" ", "").replace("\t", "") for row in picture.strip().splitlines()]
    odd = sorted(set("".join(rows)) - set("#.Oo"))
    if odd:
        raise ValueError(f"a picture is made of # . O and o, got {odd[0]!r}")
    marked = [(x, y) for y, row in enumerate(rows) for x, c in enumerate(row) if c in "Oo"]
    if len(marked) + (origin is not None) != 1:
        raise ValueError("a picture needs one origin: one O or o in it, or its x and y")
    width = max((len(row) for row in rows), default=0)
    mask = np.array([[c in "#O" for c in row.ljust(width, ".")] for row in rows], bool)
    if not mask.any():
        raise ValueError("a picture needs at least one point, # or O")
    return Element(RunSet.from_mask(mask), marked[0] if origin is None else origin)


def _ball(radius: float, inside: Callable[[Grid, Grid], NDArray[np.bool_]]) -> Element:
    reach = math.floor(radius)
    y, x = np.mgrid[-reach : reach + 1, -reach : reach + 1]
    return Element(RunSet.from_mask(inside(x, y)), (reach, reach))


def _at_least(name: str, value: float, least: int) -> None:
    if not value >= least:
        raise ValueError(f"{name} must be at least {least}, got {value}")

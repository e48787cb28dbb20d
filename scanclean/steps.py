"""Morphological steps that a recipe adds to the cleaning of a page.

A step is an operation and a structuring element, in the lengths of the paper; on a page of a
given resolution it is a function from ink to ink. What it takes out is booked in the ink ledger
under the step's own claim, what it puts in as mended.
"""

from __future__ import annotations

import math
from collections.abc import Callable
from dataclasses import dataclass

from scanclean.ledger import CLAIMS
from scanclean.sets import elements
from scanclean.sets.elements import Element
from scanclean.sets.morphology import close_set, dilate, erode, hit_or_miss, open_set, reconstruct
from scanclean.sets.runs import RunSet
from scanclean.settings import setting
from scanclean.units import Length, Resolution

__all__ = ["OPERATIONS", "PLACES", "Step"]

PLACES = ("threshold", "edges", "rules", "holes", "specks")

_SHAPES = {
    "line": ("length",),
    "box": ("width", "height"),
    "disk": ("radius",),
    "diamond": ("radius",),
    "picture": ("picture",),
}


def _open_whole(ink: RunSet, hit: Element, _: Element) -> RunSet:
    return reconstruct(erode(ink, hit), ink)


OPERATIONS: dict[str, Callable[[RunSet, Element, Element], RunSet]] = {
    "erosion": lambda ink, hit, _: erode(ink, hit),
    "dilation": lambda ink, hit, _: dilate(ink, hit),
    "opening": lambda ink, hit, _: open_set(ink, hit),
    "closing": lambda ink, hit, _: close_set(ink, hit),
    "opening-by-reconstruction": _open_whole,
    "hit-or-miss": hit_or_miss,
    "thinning": lambda ink, hit, miss: ink - hit_or_miss(ink, hit, miss),
    "thickening": lambda ink, hit, miss: ink | hit_or_miss(ink, hit, miss),
}
_WITH_MISS = ("hit-or-miss", "thinning", "thickening")


@dataclass(frozen=True)
class Step:
    """One morphological step.

    Raises ValueError, naming the key, if the element lacks a measure or has one that its shape
    does not use.

    References
    ----------
    J. Serra, *Image Analysis and Mathematical Morphology*, 1982, for the operations by name.
    L. Vincent, "Morphological grayscale reconstruction in image analysis", IEEE TIP 2(2), 1993,
    for the opening by reconstruction: the components that the erosion leaves a point of, whole.
    """

    operation: str = setting(
        "opening",
        "what is done; thinning takes out, thickening adds the points where hit-or-miss fits",
        choices=tuple(OPERATIONS),
    )
    after: str = setting("threshold", "the stage that the step follows", choices=PLACES)
    claim: str = setting("speck", "class of what the step takes out", choices=CLAIMS)
    name: str = setting("", "what messages call the step")
    element: str = setting("line", "shape of the structuring element", choices=tuple(_SHAPES))
    length: Length | None = setting(None, "length of a line")
    angle: float = setting(
        0.0, "of a line, degrees from across towards down: 90 is upright", low=-180, high=180
    )
    width: Length | None = setting(None, "width of a box")
    height: Length | None = setting(None, "height of a box")
    radius: Length | None = setting(None, "radius of a disk or diamond")
    picture: str = setting(
        "", "rows of # (point) and . (none); O is a point and the origin, o the origin alone"
    )
    miss: str = setting(
        "", "of hit-or-miss, thinning and thickening: picture of what must be paper"
    )
    origin: tuple[int, int] | None = setting(
        None, "column and row of an origin that no picture marks; it may lie outside"
    )

    def __post_init__(self) -> None:
        needed = _SHAPES[self.element]
        for key in ("length", "width", "height", "radius", "picture"):
            given = bool(getattr(self, key))
            if key in needed and not given:
                raise ValueError(f'element = "{self.element}" needs {_listed(needed)}')
            if given and key not in needed:
                raise ValueError(f'element = "{self.element}" takes {_listed(needed)}, not {key}')
        if self.operation in _WITH_MISS:
            if self.element != "picture" or not self.miss:
                raise ValueError(
                    f'operation = "{self.operation}" needs element = "picture" with picture '
                    "(what must be ink) and miss (what must be paper)"
                )
        elif self.miss:
            raise ValueError(f"miss goes with {_listed(_WITH_MISS)} only")
        if self.origin and self.element != "picture":
            raise ValueError('origin goes with element = "picture" only')
        if self.picture:
            self._drawn("picture")
        if self.miss:
            self._drawn("miss")

    def elements(self, resolution: Resolution) -> tuple[Element, Element]:
        """The structuring elements in the pixels of a page: hit and miss (often empty)."""
        hit = self._hit(resolution)
        empty = Element(RunSet.empty((1, 1)), (0, 0))
        return hit, self._drawn("miss") if self.miss else empty

    def apply(self, ink: RunSet, resolution: Resolution) -> RunSet:
        """The page's ink after the step."""
        return OPERATIONS[self.operation](ink, *self.elements(resolution))

    def _hit(self, resolution: Resolution) -> Element:
        if self.length:
            # a slanting line changes its slope and length where x and y resolution differ
            turn = math.radians(self.angle)
            x = math.cos(turn) * self.length.px(resolution.x)
            y = math.sin(turn) * self.length.px(resolution.y)
            return elements.line(max(1.0, math.hypot(x, y)), math.degrees(math.atan2(y, x)))
        if self.width and self.height:
            return elements.box(
                _pixels(self.width.px(resolution.x)), _pixels(self.height.px(resolution.y))
            )
        if self.radius:
            radius = self.radius.px(math.sqrt(resolution.x * resolution.y))
            return elements.disk(radius) if self.element == "disk" else elements.diamond(radius)
        return self._drawn("picture")

    def _drawn(self, key: str) -> Element:
        try:
            return elements.from_text(getattr(self, key), self.origin)
        except ValueError as error:
            raise ValueError(f"{key}: {error}") from None


def _pixels(length: float) -> int:
    return max(1, round(length))


def _listed(words: tuple[str, ...]) -> str:
    return " and ".join(words) if len(words) < 3 else ", ".join(words[:-1]) + " and " + words[-1]

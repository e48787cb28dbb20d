"""Lengths with their unit, and the resolution that turns them into pixels."""

from __future__ import annotations

import math
import re
from dataclasses import dataclass

__all__ = ["MM_PER_INCH", "POINTS_PER_INCH", "Length", "Resolution"]

MM_PER_INCH = 25.4
POINTS_PER_INCH = 72.0  # the desktop publishing point, 1/72 in

_UNITS = ("mm", "pt", "px")
_LENGTH = re.compile(r"\s*([0-9]+(?:\.[0-9]*)?|\.[0-9]+)\s*([A-Za-z]+)\s*")


@dataclass(frozen=True)
class Resolution:
    """Dots per inch along x and along y; fax pages have two different ones."""

    x: float
    y: float

    def __post_init__(self) -> None:
        for axis in (self.x, self.y):
            if not (math.isfinite(axis) and axis > 0):
                raise ValueError(f"a resolution must be positive, got {self.x} x {self.y} dpi")

    @property
    def x_mm(self) -> float:
        """Pixels per millimetre along x."""
        return self.x / MM_PER_INCH

    @property
    def y_mm(self) -> float:
        """Pixels per millimetre along y."""
        return self.y / MM_PER_INCH

    @property
    def mm(self) -> float:
        """Pixels per millimetre, the geometric mean of both axes."""
        return math.sqrt(self.x * self.y) / MM_PER_INCH

    @property
    def transposed(self) -> Resolution:
        """The resolution of the page with rows and columns exchanged."""
        return Resolution(self.y, self.x)


@dataclass(frozen=True)
class Length:
    """A length as recipes write it: ``0.25 mm``, ``9 pt`` or ``3 px``.

    Parameters
    ----------
    value : float
        Not negative.
    unit : {"mm", "pt", "px"}
    """

    value: float
    unit: str

    def __post_init__(self) -> None:
        if self.unit not in _UNITS:
            raise ValueError(
                f"a length needs one of the units {', '.join(_UNITS)}, got {self.unit!r}"
            )
        if not (math.isfinite(self.value) and self.value >= 0):
            raise ValueError(f"a length must not be negative, got {self.value}")

    @classmethod
    def parse(cls, text: str) -> Length:
        """Read ``"0.25 mm"``; raises ValueError with what is allowed."""
        match = _LENGTH.fullmatch(text) if isinstance(text, str) else None
        if match is None or match[2] not in _UNITS:
            raise ValueError(
                f'a length such as "0.25 mm", "9 pt" or "3 px" is needed, got {text!r}'
            )
        return cls(float(match[1]), match[2])

    def px(self, dpi: float) -> float:
        """The length in pixels on an axis of ``dpi`` dots per inch; not rounded."""
        if self.unit == "px":
            return self.value
        per_inch = MM_PER_INCH if self.unit == "mm" else POINTS_PER_INCH
        return self.value * dpi / per_inch

    def __str__(self) -> str:
        return f"{self.value:g} {self.unit}"

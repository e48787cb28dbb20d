"""Pinholes in strokes, where toner or type left a gap, are filled; counters of letters stay."""

from __future__ import annotations

from dataclasses import dataclass

from scanclean.sets.morphology import fill_holes
from scanclean.sets.runs import RunSet
from scanclean.settings import setting
from scanclean.units import Length, Resolution

__all__ = ["HoleSettings", "find_pinholes"]

# The smallest counter of printed type, that of e, is about a stroke high and wider than high, so a
# hole of an eighth of a stroke's square is far below it; a 4-pixel stroke may lose 2 pixels.
_SHARE_OF_STROKE = 1 / 8


@dataclass(frozen=True)
class HoleSettings:
    """What counts as a pinhole."""

    enabled: bool = setting(True, "fill pinholes in strokes")
    max_width: Length | None = setting(
        None,
        "holes of no more area than a square of this width are filled; auto: an eighth of the "
        "square of the stroke width",
        auto=True,
    )


def find_pinholes(
    ink: RunSet, *, stroke_px: float, resolution: Resolution, settings: HoleSettings
) -> RunSet:
    """The paper inside ink that should be ink.

    Parameters
    ----------
    ink : RunSet
    stroke_px : float
        The page's stroke width in pixels.
    resolution : Resolution
    settings : HoleSettings

    Returns
    -------
    RunSet
        Disjoint from `ink`; empty where switched off.
    """
    if settings.max_width is None:
        max_area = int(_SHARE_OF_STROKE * stroke_px**2)
    else:
        max_area = int(settings.max_width.px(resolution.x) * settings.max_width.px(resolution.y))
    if not settings.enabled or max_area < 1:
        return RunSet.empty(ink.shape)
    return fill_holes(ink, max_area=max_area) - ink

"""What the scanner left at the border of the page: dark margins, edge lines and their fringe.

A dark margin is thick and lies along the border; letters that touch it are thin. On a page reduced
to half-millimetre cells an opening by a small box, with the outside of the page taken as dark,
keeps the margin and lets letters go.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray
from PIL import Image

from scanclean.sets.elements import box
from scanclean.sets.labels import Components, label
from scanclean.sets.morphology import dilate, open_set, reconstruct
from scanclean.sets.runs import RunSet, crop, difference, pad, union
from scanclean.settings import setting
from scanclean.units import Length, Resolution

__all__ = ["EdgeSettings", "find_edges"]

_CELL_MM = 0.5
_DARK = 0.5  # of the paper's own level; scanner beds and lids are darker, stained paper is not
_BLACK = 0.2  # darker than this no text can be read; above it, a shadow may lie over text
_SOLID = 0.5  # share of a margin's cell that is ink; of a line of text it is less
_PAPER_QUANTILE = 0.85
_BODY_CELLS = 3  # a margin is at least 1.5 mm thick, counting what the page's border cut off
_ALONG_MM = 8.0  # a margin follows the border so far; a letter cut by it does not
_FRINGE_MM = 0.4  # grains that touch the border, no deeper than this
_LINE_MM = 25.0  # a line that follows the border at least so far is the paper's own edge


@dataclass(frozen=True)
class EdgeSettings:
    """How far in from the border scanner edges are looked for."""

    enabled: bool = setting(True, "take out dark scanner margins and edge lines at the border")
    max_depth: Length = setting(
        Length(30, "mm"), "a dark margin is taken out no further in from the border than this"
    )
    line_depth: Length = setting(
        Length(3, "mm"), "thin lines along the border are taken as paper edges up to this far in"
    )


def find_edges(
    ink: RunSet, *, grey: NDArray[np.uint8] | None, resolution: Resolution, settings: EdgeSettings
) -> RunSet:
    """The part of the ink that is scanner edge or shadow.

    Parameters
    ----------
    ink : RunSet
        The thresholded page.
    grey : (H, W) uint8 array or None
        The page with light paper; None for bitonal scans, which are judged by their ink.
    resolution : Resolution
    settings : EdgeSettings

    Returns
    -------
    RunSet
        A subset of `ink`.
    """
    if not settings.enabled or not ink:
        return RunSet.empty(ink.shape)
    source = np.where(ink.to_mask(), np.uint8(0), np.uint8(255)) if grey is None else grey
    margin = _dark_margin(ink, source, resolution, settings)
    found = ink & margin
    if margin:
        # grains and lumps that lie mostly in the margin's soft outline belong to it
        cell_x, cell_y = _cell(resolution)
        outline = dilate(margin, box(2 * cell_x + 1, 2 * cell_y + 1))
        found = found | _mostly_in(ink - margin, outline)
    return found | _along_sides(ink - found, resolution, settings)


def _dark_margin(
    ink: RunSet, grey: NDArray[np.uint8], resolution: Resolution, settings: EdgeSettings
) -> RunSet:
    """Thick dark regions along the border, as a set at full resolution."""
    height, width = grey.shape
    cell_x, cell_y = _cell(resolution)
    cells = np.asarray(Image.fromarray(grey).reduce((cell_x, cell_y)))
    paper = np.quantile(cells, _PAPER_QUANTILE)
    dark = RunSet.from_mask(cells < _DARK * paper)
    rim = _rim(dark.shape, 1)
    if not dark & rim:
        return RunSet.empty(grey.shape)
    share = Image.fromarray(ink.to_mask().astype(np.uint8) * 255).reduce((cell_x, cell_y))
    dark &= RunSet.from_mask((cells < _BLACK * paper) | (np.asarray(share) >= 255 * _SOLID))
    outside = _BODY_CELLS
    page = pad(dark, outside, outside, outside, outside)
    frame = _rim(page.shape, outside)
    body = open_set(page | frame, box(_BODY_CELLS, _BODY_CELLS))
    high, wide = dark.shape
    margin = crop(reconstruct(frame, body), (outside, outside, outside + wide, outside + high))
    depth_x = round(settings.max_depth.px(resolution.x) / cell_x)
    depth_y = round(settings.max_depth.px(resolution.y) / cell_y)
    margin &= _rim(dark.shape, depth_x, depth_y)
    pieces = label(margin)
    left, top, right, bottom = pieces.box.T
    long = np.maximum(
        (right - left) * cell_x / resolution.x_mm, (bottom - top) * cell_y / resolution.y_mm
    )
    margin = pieces.keep((long >= _ALONG_MM) & pieces.touching(rim))
    if not margin:
        return RunSet.empty(grey.shape)
    enlarged = margin.to_mask().repeat(cell_y, axis=0).repeat(cell_x, axis=1)
    return RunSet.from_mask(enlarged[:height, :width])


def _along_sides(ink: RunSet, resolution: Resolution, settings: EdgeSettings) -> RunSet:
    """Fringe on the border and thin lines along it, side by side."""
    height, width = ink.shape
    deep_x = max(1, min(width, round(settings.line_depth.px(resolution.x))))
    deep_y = max(1, min(height, round(settings.line_depth.px(resolution.y))))
    sides = {
        "left": (0, 0, deep_x, height),
        "right": (width - deep_x, 0, width, height),
        "top": (0, 0, width, deep_y),
        "bottom": (0, height - deep_y, width, height),
    }
    found = []
    for side, strip in sides.items():
        pieces = label(crop(ink, strip))
        taken = pieces.keep(_is_edge(pieces, side, resolution))
        left, top, right, bottom = strip
        found.append(pad(taken, left, top, width - right, height - bottom))
    return union(*found)


def _is_edge(pieces: Components, side: str, resolution: Resolution) -> NDArray[np.bool_]:
    """(C,) bool: which pieces of one side's strip are fringe or edge lines."""
    high, wide = pieces.runs.shape
    left, top, right, bottom = pieces.box.T
    x, y = resolution.x_mm, resolution.y_mm
    if side in ("left", "right"):
        outer, inner = left, wide - right
        across, along = (right - left) / x, (bottom - top) / y
    else:
        outer, inner = top, high - bottom
        across, along = (bottom - top) / y, (right - left) / x
    if side in ("right", "bottom"):
        outer, inner = inner, outer
    fringe = (outer == 0) & (across <= _FRINGE_MM)
    line = (along >= _LINE_MM) & (along >= 10 * across)
    edge: NDArray[np.bool_] = (fringe | line) & (inner > 0)
    return edge


def _mostly_in(ink: RunSet, zone: RunSet) -> RunSet:
    """The components of `ink` with more than half of their pixels in `zone`."""
    components = label(ink)
    near = components.select(components.touching(zone))
    part = label(near.runs & zone)
    # each part lies in one component: the one whose run holds the part's first point
    owner = np.searchsorted(near.runs.bounds[0::2], part.runs.bounds[0::2], side="right") - 1
    inside = np.bincount(near.run_label[owner], weights=part.runs.length, minlength=near.n)
    return near.keep(2 * inside > near.area)


def _rim(shape: tuple[int, int], wide: int, high: int | None = None) -> RunSet:
    """The points at most `wide` from the left and right, or `high` from the top and bottom."""
    height, width = shape
    high = wide if high is None else high
    if 2 * wide >= width or 2 * high >= height:
        return RunSet.full(shape)
    core = pad(RunSet.full((height - 2 * high, width - 2 * wide)), wide, high, wide, high)
    return difference(RunSet.full(shape), core)


def _cell(resolution: Resolution) -> tuple[int, int]:
    return max(1, round(_CELL_MM * resolution.x_mm)), max(1, round(_CELL_MM * resolution.y_mm))

"""What is dark but no writing: show-through, stains and shadows, known by their soft outlines."""

from __future__ import annotations

import numpy as np
from numpy.typing import NDArray

from scanclean.ink.contrast import Contrast
from scanclean.ink.outlines import Outlines
from scanclean.sets.labels import label
from scanclean.sets.runs import RunSet

__all__ = ["find_shade"]

_REFERENCE = 0.8  # quantile over the outlines of the page's larger pieces
_LARGER = 3.0  # squared stroke widths
_EXTENT = (1.5, 3.0, 6.0, 12.0, 20.0)  # of a piece, in stroke widths
_NEEDED = (0.6, 0.5, 0.42, 0.28, 0.22)  # crispness of ink of that extent
_SHADOW_THICKNESS = 1.0  # stroke widths; and long, and from the page's border: a shadow
_SHADOW_EXTENT = 50.0


def find_shade(ink: RunSet, contrast: Contrast, outlines: Outlines) -> RunSet:
    """Find the pieces of ink that are no writing.

    A piece is compared with the ink of its page by two measures: the slope of the contrast over
    its outline, and its contrast. Show-through is faint and blurred by the paper; a faint pencil
    is as sharp as its contrast lets it be. So with slope g and contrast c as shares of the
    page's, the crispness ``g min(1, g / c)**2`` decides. Small pieces need more of it, since
    grain is made of small pieces.

    Long broad pieces that run into the page's border are shadows whatever their outlines.

    Parameters
    ----------
    ink : RunSet
    contrast, outlines
        Of the same page.

    Returns
    -------
    RunSet
        Whole components (8-connected) of ``ink``.
    """
    pieces = label(ink)
    if pieces.n == 0:
        return ink
    height, width = ink.shape
    stroke = contrast.stroke_px
    piece = np.repeat(pieces.run_label, ink.length)
    first = ink.row * width + ink.start
    position = np.repeat(first - np.cumsum(ink.length) + ink.length, ink.length)
    position += np.arange(position.size)

    # darkness weighted by itself, so that the blurred rim of thin strokes counts little
    value = contrast.values.ravel()[position].astype(np.float32)
    total = np.bincount(piece, weights=value, minlength=pieces.n)
    depth = np.bincount(piece, weights=value * value, minlength=pieces.n) / np.maximum(total, 1.0)

    on_rim = ~_inside(ink.to_mask()).ravel()[position]
    rim = piece[on_rim]
    rim_length = np.maximum(np.bincount(rim, minlength=pieces.n), 1)
    steepest = _steepest_near(outlines.slopes, position[on_rim])
    slope = np.bincount(rim, weights=steepest, minlength=pieces.n) / rim_length

    left, top, right, bottom = pieces.box.T
    on_border = (left == 0) | (top == 0) | (right == width) | (bottom == height)
    extent = np.maximum(right - left, bottom - top) / stroke
    thickness = 2 * pieces.area / rim_length / stroke
    shadow = on_border & (thickness > _SHADOW_THICKNESS) & (extent > _SHADOW_EXTENT)

    reference = (pieces.area > _LARGER * stroke**2) & ~shadow
    free = reference & ~on_border
    if rim_length[free].sum() > 0.3 * rim_length[reference].sum():
        reference = free
    if not reference.any():
        reference = ~shadow if not shadow.all() else shadow
    weight = rim_length[reference]
    slope = slope / max(_weighted_quantile(slope[reference], weight, _REFERENCE), 1e-6)
    depth = depth / max(_weighted_quantile(depth[reference], weight, _REFERENCE), 1e-6)
    crispness = slope * np.minimum(1.0, slope / np.maximum(depth, 0.01)) ** 2
    needed = np.exp(np.interp(np.log(extent), np.log(_EXTENT), np.log(_NEEDED)))
    return pieces.keep((crispness < needed) | shadow)


def _inside(mask: NDArray[np.bool_]) -> NDArray[np.bool_]:
    """Erosion by a box of 3 x 3; what lies beyond the page erodes nothing."""
    across = mask.copy()
    across[:, 1:] &= mask[:, :-1]
    across[:, :-1] &= mask[:, 1:]
    both = across.copy()
    both[1:] &= across[:-1]
    both[:-1] &= across[1:]
    return both


def _steepest_near(slopes: NDArray[np.uint8], position: NDArray[np.int64]) -> NDArray[np.uint8]:
    """Largest slope in the 3 x 3 pixels round flat positions."""
    flat, width = slopes.ravel(), slopes.shape[1]
    steepest = np.zeros(position.size, np.uint8)
    for down in (-width, 0, width):
        for across in (-1, 0, 1):
            # the page's outermost pixels have no slope: leaving it there is harmless
            near = np.clip(position + (down + across), 0, flat.size - 1)
            np.maximum(steepest, flat[near], out=steepest)
    return steepest


def _weighted_quantile(
    values: NDArray[np.float64], weights: NDArray[np.int64], share: float
) -> float:
    order = np.argsort(values)
    count = np.cumsum(weights[order])
    return float(values[order][np.searchsorted(count, share * count[-1])])

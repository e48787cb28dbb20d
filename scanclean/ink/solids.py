"""The inside of solids, which a surface that follows the paper closely takes for paper."""

from __future__ import annotations

import numpy as np
from numpy.typing import NDArray

from scanclean.sets.labels import label
from scanclean.sets.runs import RunSet, complement, union

__all__ = ["fill_solids"]

_REACH = 3  # pixels on both sides of a hole's border whose levels are compared
_SAME = 1.1  # a hole that is brighter by more than this than the ink round it is a hole
_INK = 1.25  # and one brighter by this than the page's ink
_LEAST_AREA = 4.0  # squared stroke widths; eyes of letters are smaller, and blurred


def fill_solids(ink: RunSet, grey: NDArray[np.uint8], *, stroke_px: float) -> RunSet:
    """Fill the holes that are as dark as the ink round them and as the page's ink.

    In a bar, a blot or a picture wider than the surface of the paper is stiff, the surface sinks
    to the level of the ink, and only a rim is found. The inside of stains is lighter than ink.

    Parameters
    ----------
    ink : RunSet
    grey : uint8, shape (H, W)
        Dark on light.
    stroke_px : float

    Returns
    -------
    RunSet
        Contains ``ink``.
    """
    height, width = ink.shape
    paper = complement(ink)
    regions = label(paper, connectivity=4)
    left, top, right, bottom = regions.box.T
    hole = (left > 0) & (top > 0) & (right < width) & (bottom < height)
    hole &= regions.area > _LEAST_AREA * stroke_px**2
    if not hole.any():
        return ink
    flat = grey.ravel()
    usual = float(np.median(flat[ink.row * width + (ink.start + ink.stop) // 2]))
    inner = hole[regions.run_label]
    region, row = regions.run_label[inner], paper.row[inner] * width
    start, stop = paper.start[inner], paper.stop[inner]
    inside, outside = np.zeros(regions.n), np.zeros(regions.n)
    for step in range(_REACH):
        step_in = np.minimum(step, stop - start - 1)
        for at in (start + step_in, stop - 1 - step_in):
            inside += np.bincount(region, flat[row + at], regions.n)
        for at in (start - 1 - step, stop + step):
            outside += np.bincount(region, flat[row + np.clip(at, 0, width - 1)], regions.n)
    same = inside < _SAME * outside
    same &= inside < _INK * usual * 2 * _REACH * regions.n_runs
    return union(ink, regions.keep(hole & same))

"""Ink on a hard page: two guesses from the outlines of its strokes, settled by relaxation.

The energy is Howe's: ink wants the Laplacian of the contrast positive, paper wants it negative,
and neighbours want to be alike unless an outline runs between them. Instead of a graph cut, its
relaxed form is descended a few steps from a good start; that is as good, and cheaper.
"""

from __future__ import annotations

from typing import TypeVar

import numpy as np
from numpy.typing import NDArray

from scanclean.ink.blocks import Surface
from scanclean.ink.contrast import INK, Contrast
from scanclean.ink.outlines import Outlines

__all__ = ["outline_level", "relaxed_ink"]

_STEPS = 3  # of the relaxation
_MARGIN = _STEPS + 4  # pixels round a tile that have a say in it
_TILE = (96, 1024)
_PAPER = np.uint8(0.05 * INK)  # what has less contrast is surely paper
_PAPER_PULL = -2.0
_DATA = 1 / 3  # weight of the Laplacian against the links
_SOLID = 0.6 * INK  # contrast that makes ink far from any outline
_FEWEST = 0.04  # outline pixels a pixel of stroke width that make a level
_FULL_OUTLINE = (1.0, 4.0)  # stroke widths in px from which on the outline is ink: none, all

_Kind = TypeVar("_Kind", bound=np.generic)


def relaxed_ink(contrast: Contrast, outlines: Outlines) -> NDArray[np.bool_]:
    """Find the ink of a page from its outlines.

    1. First guess: the contrast is above the mean of outline pixels near by (`outline_level`).
    2. Second guess, within two pixels of an outline: the Laplacian of a Gaussian is positive.
    3. Starting from the mean u of both, some projected Jacobi steps towards the minimum over
       0 <= u <= 1 of ``sum w_ij (u_i - u_j)**2 / 2 - sum L_i u_i / 3``, with L the Laplacian of
       the contrast, and links w_ij = 1 between neighbours that no outline parts, else 0.
       Ink is u > 1/2.

    An outline pixel goes with the ink or with the paper as its contrast says. People who trace
    ink count its outline in; so the broader the strokes, the more contrast an outline pixel must
    lack to go with the paper. In thin ones holes would fill up.

    Returns
    -------
    bool, shape (H, W)

    References
    ----------
    N. R. Howe, "Document binarization with automatic parameter tuning", Int. J. Document Analysis
    and Recognition 16(3), 247-258, 2013.
    """
    values = contrast.values
    on_outline = np.zeros(values.shape, bool)
    on_outline.ravel()[outlines.position] = True
    level = outline_level(contrast, outlines)
    thin, broad = _FULL_OUTLINE
    share = np.float32(1 - np.clip((contrast.stroke_px - thin) / (broad - thin), 0, 1))
    mask = np.zeros(values.shape, bool)
    for top in range(0, values.shape[0], _TILE[0]):
        rows = slice(top, min(top + _TILE[0], values.shape[0]))
        wide = slice(max(0, rows.start - _MARGIN), rows.stop + _MARGIN)
        if not (on_outline[wide].any() or values[rows].max() > _SOLID):
            continue
        levels = level.rows(wide)
        for left in range(0, values.shape[1], _TILE[1]):
            columns = slice(left, min(left + _TILE[1], values.shape[1]))
            near = _with_margin(on_outline, rows, columns)
            tile = _with_margin(values, rows, columns)
            if near.any() or tile.max() > _SOLID:
                here = slice(rows.start - wide.start, rows.stop - wide.start)
                mask[rows, columns] = _settled(
                    tile, near, _with_margin(levels, here, columns), share
                )
    return mask


def outline_level(contrast: Contrast, outlines: Outlines) -> Surface:
    """Contrast of the outlines near by, weighted by the squared slope: the border of the ink.

    Where there are next to no outlines, contrast near the ink's own is ink: the inside of large
    letters and solids.

    References
    ----------
    The level of outlines as a threshold: B. Su, S. Lu and C. L. Tan, "Robust document image
    binarization technique for degraded document images", IEEE Trans. Image Processing 22(4),
    1408-1417, 2013; the weights are ours.
    """
    from scipy.ndimage import gaussian_filter

    height, width = contrast.values.shape
    size = max(2, round(contrast.stroke_px / 2))
    shape = (-(-height // size), -(-width // size))
    row, column = np.divmod(outlines.position, width)
    cell = (row // size) * shape[1] + column // size
    weight = outlines.slope**2
    sigma = contrast.stroke_px / size
    total, moment = (
        gaussian_filter(
            np.bincount(cell, weights=w, minlength=shape[0] * shape[1])
            .reshape(shape)
            .astype(np.float32),
            sigma,
            truncate=2.5,
        )
        for w in (weight, weight * outlines.level)
    )
    usual = float(np.median(weight)) if weight.size else 1.0
    enough = _FEWEST * contrast.stroke_px * usual / (2 * np.pi * sigma**2)
    level = np.full(shape, _SOLID, np.float32)
    np.divide(moment, total, out=level, where=total > enough)
    return Surface(level, size, (height, width))


def _with_margin(page: NDArray[_Kind], rows: slice, columns: slice) -> NDArray[_Kind]:
    """A tile and its margin; beyond the page its outermost pixels go on."""
    top, left = rows.start - _MARGIN, columns.start - _MARGIN
    bottom, right = rows.stop + _MARGIN, columns.stop + _MARGIN
    height, width = page.shape
    beyond = [
        (max(0, -top), max(0, bottom - height)),
        (max(0, -left), max(0, right - width)),
    ]
    tile = page[max(0, top) : bottom, max(0, left) : right]
    return np.pad(tile, beyond, mode="edge") if any(map(any, beyond)) else tile


def _settled(
    values: NDArray[np.uint8],
    on_outline: NDArray[np.bool_],
    level: NDArray[np.float32],
    share: np.float32,
) -> NDArray[np.bool_]:
    """Both guesses and their relaxation on one tile; the margin is used up on the way."""
    contrast = values.astype(np.int16)
    fine = _binomial(contrast, 1)  # 16 times the contrast, sigma 0.7
    broad = _binomial(fine, 2, shift=2)  # sigma 1.6
    bend = _laplacian(broad)  # this is what the margin is for: 4 px less on each side
    contrast, values, level = _trim(contrast, 4), _trim(values, 4), _trim(level, 4)
    is_paper = values < _PAPER
    first = values > level
    near = _dilated(_trim(on_outline, 2))
    on_outline = _trim(on_outline, 4)
    second = np.where(near, (bend > 0) & ~is_paper, first)
    u = first.astype(np.float32)
    u += second
    u *= np.float32(0.5)

    inside = on_outline & (values > share * level)
    outside = on_outline & ~inside
    across = _links(contrast, inside, outside)
    down = _links(contrast.T, inside.T, outside.T).T
    # each pixel but the outermost: its links to the left, right, above and below
    links = [across[1:-1, :-1], across[1:-1, 1:], down[:-1, 1:-1], down[1:, 1:-1]]
    weight = sum(links[1:], links[0].astype(np.float32))
    np.maximum(weight, 1e-3, out=weight)
    np.reciprocal(weight, out=weight)
    weights = [link * weight for link in links]
    pull = _laplacian(_trim(fine, 3)).astype(np.float32)
    pull *= np.float32(_DATA / (16 * INK))
    np.copyto(pull, np.float32(_PAPER_PULL * _DATA), where=is_paper[1:-1, 1:-1])
    pull *= weight
    for step in range(_STEPS):
        new = _trim(pull, step).copy()
        part = np.empty_like(new)
        sides = (u[1:-1, :-2], u[1:-1, 2:], u[:-2, 1:-1], u[2:, 1:-1])
        for side, of_side in zip(sides, weights, strict=True):
            new += np.multiply(side, _trim(of_side, step), out=part)
        u = np.clip(new, 0, 1, out=new)
    return u > np.float32(0.5)


def _trim(page: NDArray[_Kind], margin: int) -> NDArray[_Kind]:
    return page[margin:-margin, margin:-margin] if margin else page


def _binomial(values: NDArray[np.int16], reach: int, *, shift: int = 0) -> NDArray[np.int16]:
    """Sums by 1-2-1 over both axes, taken ``reach`` pixels apart, each divided by 2**shift.

    Returns
    -------
    int16, shape (h - 2 reach, w - 2 reach)
    """
    for _ in range(2):
        total = values[: -2 * reach] + values[2 * reach :]
        total += values[reach:-reach]
        total += values[reach:-reach]
        total >>= shift
        values = total.T
    return values


def _laplacian(values: NDArray[np.int16]) -> NDArray[np.int16]:
    """Four times a value less its four neighbours; int16, shape (h - 2, w - 2)."""
    result = 4 * values[1:-1, 1:-1]
    result -= values[:-2, 1:-1]
    result -= values[2:, 1:-1]
    result -= values[1:-1, :-2]
    result -= values[1:-1, 2:]
    return result


def _links(
    contrast: NDArray[np.int16], inside: NDArray[np.bool_], outside: NDArray[np.bool_]
) -> NDArray[np.bool_]:
    """Links of each pixel with the next one in its row; shape (h, w - 1).

    An outline pixel that goes with the ink has none with lighter pixels, one that goes with the
    paper none with darker ones.
    """
    falls = contrast[:, 1:] < contrast[:, :-1]
    cut = (inside[:, :-1] | outside[:, 1:]) & falls
    cut |= (inside[:, 1:] | outside[:, :-1]) & ~falls
    return ~cut


def _dilated(mask: NDArray[np.bool_]) -> NDArray[np.bool_]:
    """Dilation by a box of 5 x 5; shape (h - 4, w - 4)."""
    for _ in range(2):
        mask = (mask[:-4] | mask[1:-3] | mask[2:-2] | mask[3:-1] | mask[4:]).T
    return mask

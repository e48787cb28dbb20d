"""Grey page to ink: the threshold that adapts to the page, and published ones by their names."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from scanclean.ink.blocks import Surface, block_moments
from scanclean.ink.contrast import measure_contrast
from scanclean.ink.density import BLOCK, Tone, level_counts, otsu_level
from scanclean.ink.outlines import find_outlines
from scanclean.ink.relaxation import relaxed_ink
from scanclean.ink.shade import find_shade
from scanclean.ink.solids import fill_solids
from scanclean.sets.runs import RunSet
from scanclean.settings import setting
from scanclean.units import Length, Resolution

__all__ = [
    "METHODS",
    "ThresholdSettings",
    "Thresholded",
    "clean_ink",
    "darker",
    "is_clean",
    "local_level",
    "threshold",
]

METHODS = ("adaptive", "sauvola", "niblack", "wolf", "otsu", "fixed")

_DEFAULT_K = {"sauvola": 0.2, "niblack": 0.2, "wolf": 0.5}
_WINDOW_STROKES = 10.0  # the automatic window spans this many stroke widths
_BLOCKS_A_WINDOW = 5
_LEAST_BLOCK = 3  # pixels; smaller blocks cost more than they are worth

_CLEAN_WINDOW = 9  # blocks over which the ink's darkness is averaged
_PAGE_SAY = 0.02  # share of ink in the window at which the page's ink has half the say
_BORDER = 0.58  # share of the ink's mean darkness; blur takes a seventh off the mean
_LEAST_DARKNESS = 0.08
_NOISES = 5.0

_THIN_PX = 2.5  # strokes whose outlines run into each other: nothing to go by for relaxation
_NOISY = 0.035  # noise of the paper as a share of the ink's darkness
_DARK = 0.6  # darkness under which ink has faded
_CRISP = 0.7  # sharpness that makes up for it
_DARK_AND_CRISP = 1.13  # small type loses darkness to blur, faded ink both
_FAINT = 0.7
_SOFT = 0.02


@dataclass(frozen=True)
class ThresholdSettings:
    """How a grey page becomes ink."""

    method: str = setting(
        "adaptive",
        "how ink is told from paper; adaptive measures the page and chooses",
        choices=METHODS,
    )
    window: Length | None = setting(
        None,
        "side of the window of sauvola, niblack and wolf; auto: ten stroke widths",
        low=0,
        auto=True,
    )
    k: float | None = setting(
        None,
        "k of sauvola (auto: 0.2), niblack (auto: 0.2) and wolf (auto: 0.5); more k, less ink",
        low=0,
        high=5,
        auto=True,
    )
    full_spread: float = setting(
        128.0,
        "R of sauvola, the standard deviation of full contrast, in grey levels",
        low=1,
        high=255,
    )
    level: int = setting(
        128,
        "level of the method fixed: what is darker is ink (0 black, 255 white)",
        low=0,
        high=256,
    )
    light_on_dark: bool | None = setting(
        None, "whether light ink stands on dark paper; auto: the page tells", auto=True
    )


@dataclass(frozen=True, eq=False)
class Thresholded:
    """What a threshold finds on a page.

    Attributes
    ----------
    ink : RunSet
        All that is darker than its paper by the threshold, shade included.
    shade : RunSet
        The part of ``ink`` that is no writing: stains, show-through, shadows.
    """

    ink: RunSet
    shade: RunSet


def threshold(
    grey: NDArray[np.uint8], tone: Tone, settings: ThresholdSettings, resolution: Resolution
) -> Thresholded:
    """Tell ink from paper.

    Parameters
    ----------
    grey : uint8, shape (H, W)
        0 black, 255 white, as scanned.
    tone : Tone
        Of the same page; a light-on-dark page is inverted before anything else.
    settings : ThresholdSettings
    resolution : Resolution
        Turns the window into pixels.

    Returns
    -------
    Thresholded
        Empty where the tone says that the page is blank, whatever the method.

    Raises
    ------
    ValueError
        If tone is of another page size or the method unknown.
    """
    if tone.ratio.shape != grey.shape:
        raise ValueError(f"the tone is of a page of {tone.ratio.shape}, not of {grey.shape}")
    if tone.blank:
        nothing = RunSet.empty(grey.shape)
        return Thresholded(nothing, nothing)
    if tone.light_on_dark:
        grey = ~grey
    method = settings.method
    if method == "adaptive":
        if not is_clean(tone):
            return _thresholded_by_outlines(grey, tone)
        mask = clean_ink(tone)
    elif method == "otsu":
        mask = grey <= otsu_level(level_counts(grey))
    elif method == "fixed":
        mask = grey < settings.level
    elif method in _DEFAULT_K:
        window = (
            _WINDOW_STROKES * tone.stroke_px
            if settings.window is None
            else settings.window.px((resolution.x * resolution.y) ** 0.5)
        )
        k = _DEFAULT_K[method] if settings.k is None else settings.k
        level = local_level(grey, method, window=window, k=k, full_spread=settings.full_spread)
        mask = darker(grey, level)
    else:
        raise ValueError(f"method must be one of {', '.join(METHODS)}, got {method!r}")
    return Thresholded(RunSet.from_mask(mask), RunSet.empty(grey.shape))


def local_level(
    grey: NDArray[np.uint8],
    method: str,
    *,
    window: float,
    k: float,
    full_spread: float = 128.0,
) -> Surface:
    """Threshold T from the mean m and standard deviation s of a window round each pixel.

    ========  =========================================================
    niblack   T = m - k s
    sauvola   T = m (1 + k (s / R - 1))
    wolf      T = (1 - k) m + k M + k (s / S) (m - M), M the darkest level of the page, S
              the largest s
    ========  =========================================================

    Ink is ``grey < T``, so that plain paper, where T can equal the paper, stays paper.

    Parameters
    ----------
    grey : uint8, shape (H, W)
    method : {"niblack", "sauvola", "wolf"}
    window : float
        Side of the window in pixels, rounded to an odd number of blocks: five blocks of a fifth
        of it, at least 3 px each.
    k : float
    full_spread : float
        R of sauvola in grey levels.

    Returns
    -------
    Surface
        T in grey levels.

    Notes
    -----
    Moments are taken in blocks and the threshold is interpolated between their centres.
    Against exact windows of 15 to 101 px that moves 0.1 to 0.2 % of the pixels of scikit-image's
    `page` and `text` to the other side with sauvola, 0.8 to 1.4 % with niblack (plain paper lies
    at its threshold), in a sixth of the time.

    References
    ----------
    W. Niblack, An Introduction to Digital Image Processing, Prentice Hall, 1986, 115-116.
    J. Sauvola and M. Pietikainen, "Adaptive document image binarization", Pattern Recognition
    33(2), 225-236, 2000.
    C. Wolf and J.-M. Jolion, "Extraction and recognition of artificial text in multimedia
    documents", Pattern Analysis and Applications 6(4), 309-326, 2004.
    """
    from scipy.ndimage import uniform_filter

    size = max(_LEAST_BLOCK, round(window / _BLOCKS_A_WINDOW))
    blocks = 2 * max(0, round((window / size - 1) / 2)) + 1
    centre = 128.0
    mean, square = block_moments(grey, size, centre=centre)
    mean = uniform_filter(mean, blocks, mode="reflect")
    square = uniform_filter(square, blocks, mode="reflect")
    spread = np.sqrt(np.maximum(square - mean * mean, 0.0))
    mean += np.float32(centre)
    level: NDArray[np.floating]
    if method == "niblack":
        level = mean - k * spread
    elif method == "sauvola":
        level = mean * (1 + k * (spread / full_spread - 1))
    else:
        darkest = float(grey.min())
        largest = max(float(spread.max()), 1e-6)
        level = (1 - k) * mean + k * darkest + k * spread / largest * (mean - darkest)
    return Surface(level.astype(np.float32), size, grey.shape)


def is_clean(tone: Tone) -> bool:
    """Whether the page needs no more than a threshold that follows paper and ink.

    It does where its paper is noisy, its ink faded or blurred, where faint things stand beside
    the ink (show-through, pencil, hairlines) or soft ones apart from it (stains).
    """
    if tone.stroke_px < _THIN_PX:
        return True
    return (
        tone.noise <= _NOISY * tone.ink_darkness
        and (
            tone.ink_darkness >= _DARK
            or tone.sharpness >= _CRISP
            or tone.ink_darkness + tone.sharpness >= _DARK_AND_CRISP
        )
        and tone.faint <= _FAINT
        and tone.soft <= _SOFT
    )


def clean_ink(tone: Tone) -> NDArray[np.bool_]:
    """Ink of a clean page: darker than halfway between the paper and the ink near by.

    With f the darkness of a pixel, ``sum f**2 / sum f`` is the mean darkness weighted by itself:
    that of the ink, however little of the window the ink covers. Where there is next to no ink
    it falls back on the page's.

    Returns
    -------
    bool, shape (H, W)
    """
    from scipy.ndimage import uniform_filter

    mean = uniform_filter(np.maximum(tone.mean, 0.0), _CLEAN_WINDOW, mode="reflect")
    square = np.maximum(tone.square - tone.noise**2, 0.0)
    square = uniform_filter(square, _CLEAN_WINDOW, mode="reflect")
    page = _PAGE_SAY * tone.ink_darkness
    darkness = (square + page * tone.ink_darkness) / (mean + page)
    needed = np.maximum(_BORDER * darkness, max(_NOISES * tone.noise, _LEAST_DARKNESS))
    level = (255.0 * (1.0 - needed)).astype(np.float32)
    return darker(tone.ratio, Surface(level, BLOCK, tone.ratio.shape))


def _thresholded_by_outlines(grey: NDArray[np.uint8], tone: Tone) -> Thresholded:
    """Ink and shade of a page that is not clean."""
    contrast = measure_contrast(grey, tone.stroke_px)
    outlines = find_outlines(contrast)
    ink = RunSet.from_mask(relaxed_ink(contrast, outlines))
    ink = fill_solids(ink, grey, stroke_px=tone.stroke_px)
    return Thresholded(ink, find_shade(ink, contrast, outlines))


def darker(grey: NDArray[np.uint8], level: Surface) -> NDArray[np.bool_]:
    """Where a page is darker than a surface; the surface's own level is not."""
    mask = np.empty(grey.shape, bool)
    for rows, values in level.strips():
        np.less(grey[rows], values, out=mask[rows])
    return mask

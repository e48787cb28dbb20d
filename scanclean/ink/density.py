"""A page measured against its own paper: the ratio of light, its density, and what they tell.

Paper is seldom white and seldom evenly lit. Divided by the level of the paper round it, a pixel
says how much of the light the ink lets through, whatever the lamp did; its negative decimal
logarithm is the optical density, which adds up where ink lies over ink.
"""

from __future__ import annotations

import math
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray
from PIL import Image, ImageFilter

from scanclean.ink.blocks import Surface, block_moments, sliding_max, sliding_min
from scanclean.units import MM_PER_INCH, Resolution

__all__ = ["BLOCK", "DENSITY", "Tone", "level_counts", "measure_tone", "otsu_level", "run_length"]

BLOCK = 8
"""Side in pixels of the blocks whose moments `Tone` holds."""

DENSITY: NDArray[np.float32] = -np.log10(
    np.maximum(np.arange(256) / 255.0, 0.012), dtype=np.float64
).astype(np.float32)
"""(256,) float32: optical density of each value of `Tone.ratio`; black counts as 1.2 % of paper."""

_COARSE_PER_MM = 3.0  # the paper is looked for at about 75 dpi: between lines it still shows
_A4_LONG_SIDE = 297.0  # mm
_LEAST_DPI = 72.0  # no page that can be read has less
_CLOSING_MM = 5.0  # strokes narrower than this are closed over when the paper is looked for
_PAPER_MM = 3.0  # the paper level is smoothed over this
_BLACK = 0.25  # what is darker than this share of the page's bright paper is no paper
_SIGMAS = 5.0  # ink stands out of the paper's noise by more than this
_FEWEST_PAIRS = 12  # neighbours that stand out: a dot of 4 x 4 pixels
_STROKE_DEFAULT = 4.0  # of a page without ink
_FAINT = (0.15, 0.5)  # shares of the ink's darkness between which a pixel is neither
_STRONG = 0.6  # a block that rises by this share of the ink's darkness has ink in it
_SOFT_RISE = 0.12  # one that rises by less than this, or by less noises than that, has nothing
_SOFT_SIGMAS = 8.0
_SOFT = 0.6  # share of the ink's sharpness under which a block is soft


@dataclass(frozen=True, eq=False)
class Tone:
    """A grey page against its paper.

    Attributes
    ----------
    ratio : uint8, shape (H, W)
        255 page / paper, clipped: 255 is paper, 0 black. A light-on-dark page is inverted first.
    noise : float
        Standard deviation of page / paper on blank paper.
    light_on_dark : bool
        Whether the page was inverted.
    stroke_px : float
        Rough width of the strokes in pixels: median run length of ink, the smaller of across
        and down, between 2 and 20; 4 on a blank page.
    paper : Surface
        Level of the paper in grey levels, after inversion.
    paper_level : float
        Median of ``paper``.
    ink_darkness : float
        Darkness ``1 - page / paper`` of the ink, the mean over all ink weighted by itself;
        0 on a blank page.
    blank : bool
        Nothing stands out of the noise of the paper: no ink. An all-black page is blank too.
    sharpness : float
        Of the ink's outlines: the largest step between neighbours as a share of the whole rise
        from paper to ink, the median over blocks with ink.
    faint : float
        Pixels well between paper and ink, for those that blurred outlines of strokes would have:
        about 0.4 on a clean page, 1 and more where something faint stands beside the ink.
    soft : float
        Blocks that are fainter and softer than the ink and apart from it, for each block with ink.
    mean, square : float32, shape (ceil(H / BLOCK), ceil(W / BLOCK))
        Mean of the darkness ``1 - page / paper`` and of its square, in blocks.
    """

    ratio: NDArray[np.uint8]
    noise: float
    light_on_dark: bool
    stroke_px: float
    paper: Surface
    paper_level: float
    ink_darkness: float
    blank: bool
    sharpness: float
    faint: float
    soft: float
    mean: NDArray[np.float32]
    square: NDArray[np.float32]


def measure_tone(
    grey: NDArray[np.uint8],
    *,
    resolution: Resolution | None = None,
    light_on_dark: bool | None = None,
) -> Tone:
    """Measure a grey page against its paper.

    Parameters
    ----------
    grey : uint8, shape (H, W)
        0 black, 255 white.
    resolution : Resolution, optional
        Sets the scale on which paper may be uneven. Where it is not given, or finer than that of
        an A4 page of this size, the A4 page's counts: pictures of scraps are seldom lit evenly.
    light_on_dark : bool, optional
        Whether light ink stands on dark paper; found out when not given.

    Returns
    -------
    Tone

    Raises
    ------
    ValueError
        If ``grey`` is not a two-dimensional uint8 array with at least one pixel.
    """
    if grey.ndim != 2 or grey.dtype != np.uint8 or grey.size == 0:
        raise ValueError(
            f"a grey page must be a (H, W) uint8 array, got {grey.dtype} of shape {grey.shape}"
        )
    per_mm = max(max(grey.shape) / _A4_LONG_SIDE, _LEAST_DPI / MM_PER_INCH)
    if resolution is not None:
        per_mm = min(per_mm, resolution.mm)
    step = min(16, max(1, round(per_mm / _COARSE_PER_MM)))
    coarse = _reduced(grey, step)
    if light_on_dark is None:
        light_on_dark = _is_light_on_dark(coarse)
    if light_on_dark:
        grey = ~grey
        coarse = _reduced(grey, step)  # not ~coarse: it rounds the other way
    paper = _paper_surface(coarse, step, grey.shape, per_mm=per_mm / step)
    mean, square, noise = _darkness_moments(grey, paper)
    ratio = _ratio(grey, paper)

    histogram = level_counts(ratio)
    ink_darkness = _ink_darkness(ratio, histogram, noise)
    blank = ink_darkness == 0.0
    stroke, sharpness, faint, soft = _STROKE_DEFAULT, 1.0, 0.0, 0.0
    if not blank:
        stroke = _stroke_width(ratio, otsu_level(histogram))
        sharpness, soft = _outline_measures(ratio, ink_darkness, noise)
        faint = _faint_share(histogram, ink_darkness, noise) * stroke * sharpness
    return Tone(
        ratio=ratio,
        noise=noise,
        light_on_dark=light_on_dark,
        stroke_px=stroke,
        paper=paper,
        paper_level=float(np.median(paper.grid)),
        ink_darkness=ink_darkness,
        blank=blank,
        sharpness=sharpness,
        faint=faint,
        soft=soft,
        mean=mean,
        square=square,
    )


def level_counts(grey: NDArray[np.uint8]) -> NDArray[np.int64]:
    """Histogram of a grey page: pixels of each level.

    Returns
    -------
    int64, shape (256,)
    """
    # four neighbours as the bands of one image: their counters do not wait for each other, where
    # those of a page that is mostly one level would
    flat = grey.ravel()
    whole = flat.size // 4096 * 4096
    count = np.bincount(flat[whole:], minlength=256)
    if whole:
        bands = Image.fromarray(flat[:whole].reshape(-1, 1024, 4))
        count += np.array(bands.histogram(), np.int64).reshape(4, 256).sum(axis=0)
    return count


def otsu_level(histogram: NDArray[np.integer]) -> int:
    """Threshold that splits a histogram into the two classes farthest apart.

    Parameters
    ----------
    histogram : int, shape (L,)

    Returns
    -------
    int
        The largest level of the lower class, so ink is ``grey <= level``; of equally good
        levels the first. 0 where all pixels have one level.

    References
    ----------
    N. Otsu, "A threshold selection method from gray-level histograms", IEEE Trans. Systems, Man
    and Cybernetics 9(1), 62-66, 1979.
    """
    count = np.cumsum(histogram, dtype=np.float64)
    moment = np.cumsum(histogram * np.arange(len(histogram)), dtype=np.float64)
    total = count[-1]
    splits = (count > 0) & (count < total)
    if not splits.any():
        return 0
    # between-class variance times the number of pixels squared
    lower = np.where(splits, count, 1.0)
    upper = np.where(splits, total - count, 1.0)
    between = (moment[-1] * lower / total - moment) ** 2 / (lower * upper)
    return int(np.argmax(np.where(splits, between, -1.0)))


def run_length(mask: NDArray[np.bool_]) -> NDArray[np.intp]:
    """Lengths of all horizontal runs of a mask, row by row."""
    padded = np.zeros((mask.shape[0], mask.shape[1] + 2), bool)
    padded[:, 1:-1] = mask
    flat = padded.ravel()
    turns = np.flatnonzero(flat[1:] != flat[:-1])
    return turns[1::2] - turns[0::2]


# ---- parts of the measure


def _quantile(values: NDArray[np.uint8], share: float) -> int:
    """Smallest level that at least a share of the pixels do not exceed."""
    count = np.cumsum(level_counts(values))
    return int(np.searchsorted(count, share * count[-1]))


def _reduced(grey: NDArray[np.uint8], step: int) -> NDArray[np.uint8]:
    """Means of ``step`` x ``step`` pixels; of 3 x 3 such cells where they alone are noisy."""
    reduced = Image.fromarray(grey).reduce(step)
    return np.asarray(reduced if step > 2 else reduced.filter(ImageFilter.BoxBlur(1)))


def _is_light_on_dark(coarse: NDArray[np.uint8]) -> bool:
    """Whether what is rare in the textured parts of a dark page is light.

    Where there is text, the ink covers less than the paper, so the mean of a small window lies
    on the paper's side of the middle between its extremes. A scanner bed or a black border
    round a normal page has no say in that: at its edge both sides are even. The page must be dark
    as a whole as well.
    """
    side = 15
    height, width = (n // side * side for n in coarse.shape)
    if not (height and width):
        return bool(np.median(coarse) < 128 and coarse.max() > 128)
    rows = coarse[:height, :width].reshape(height // side, side, width)
    columns = (height // side, width // side, side)
    low = rows.min(axis=1).reshape(columns).min(axis=2).astype(np.float64)
    high = rows.max(axis=1).reshape(columns).max(axis=2).astype(np.float64)
    mean = rows.sum(axis=1, dtype=np.uint32).reshape(columns).sum(axis=2) / side**2
    skewness = mean - (low + high) / 2
    is_dark = _quantile(coarse, 0.5) < (_quantile(coarse, 0.01) + _quantile(coarse, 0.99)) / 2
    return bool(is_dark and skewness.sum() < -0.1 * (high - low).sum())


def _paper_surface(
    coarse: NDArray[np.uint8], step: int, shape: tuple[int, int], *, per_mm: float
) -> Surface:
    """Level of the paper, smooth over some millimetres.

    1. Closing of the reduced page over strokes and small solids: the level of the brightest
       paper near by.
    2. Cells near that level are paper; cells nearly black are no paper at all: solids, scanner
       bed.
    3. Mean of the paper cells in blocks, smoothed; where there are none near by, the nearest.
    """
    side = 2 * max(1, round(_CLOSING_MM * per_mm / 2)) + 1
    closed = sliding_min(sliding_max(coarse, side), side)
    level = np.arange(256)
    lowest = np.maximum(np.ceil(0.93 * level), _BLACK * _quantile(closed, 0.8)).astype(np.uint8)
    highest = np.minimum(1.15 * level, 255).astype(np.uint8)
    is_paper = (coarse >= lowest[closed]) & (coarse <= highest[closed])
    group = max(1, round(_PAPER_MM * per_mm / 2))
    weight = is_paper.astype(np.float32)
    share = np.asarray(Image.fromarray(weight).reduce(group))
    total = np.asarray(Image.fromarray(weight * coarse).reduce(group))
    mean = total / np.maximum(share, np.float32(1e-6))
    smooth = _fill(mean, share)
    # what smoothing flattened is added back: twicing (Tukey 1977, Exploratory Data Analysis)
    smooth += _fill(mean - smooth, share)
    return Surface(np.clip(smooth, 1.0, 255.0), step * group, shape)


def _fill(level: NDArray[np.float32], weight: NDArray[np.float32]) -> NDArray[np.float32]:
    """Weighted mean round each cell; where there is no weight, of wider rounds or of all."""
    from scipy.ndimage import gaussian_filter, uniform_filter

    product = level * weight
    total = gaussian_filter(weight, 1.5, mode="constant", truncate=2.5)
    value = gaussian_filter(product, 1.5, mode="constant", truncate=2.5)
    # what is far from any paper goes by the mean of a wider round, and at last of the page
    for importance, wide in ((1e-2, 25), (1e-3, 125)):
        total += importance * uniform_filter(weight, wide, mode="constant")
        value += importance * uniform_filter(product, wide, mode="constant")
    total += np.float32(1e-5)
    value += np.float32(1e-5) * float(product.sum() / max(weight.sum(), 1e-6))
    return (value / total).astype(np.float32, copy=False)


def _darkness_moments(
    grey: NDArray[np.uint8], paper: Surface
) -> tuple[NDArray[np.float32], NDArray[np.float32], float]:
    """Mean and mean square of ``1 - page / paper`` in blocks, and the noise of blank paper."""
    centre = float(np.median(paper.grid))
    mean, square = block_moments(grey, BLOCK, centre=centre)
    height, width = mean.shape
    # the paper is smoother than the blocks are small: its level at their centres will do
    level = np.asarray(
        Image.fromarray(paper.grid).resize(
            (width, height),
            Image.Resampling.BILINEAR,
            box=(0, 0, paper.shape[1] / paper.size, paper.shape[0] / paper.size),
        )
    )
    variance = np.maximum(square - mean * mean, 0.0) / (level * level)
    darkness = 1.0 - (mean + centre) / level
    blank = np.abs(darkness) < 0.03
    if np.count_nonzero(blank) > 0.01 * blank.size:
        spread = float(np.quantile(variance[blank], 0.3))
    else:
        spread = float(np.quantile(variance, 0.05))
    quantisation = 1.0 / (12.0 * centre * centre)
    return darkness, variance + darkness * darkness, math.sqrt(spread + quantisation)


def _ratio(grey: NDArray[np.uint8], paper: Surface) -> NDArray[np.uint8]:
    """255 page / paper, clipped to uint8."""
    ratio = np.empty_like(grey)
    scale = Surface(np.float32(255.0) / paper.grid, paper.size, paper.shape)
    for rows, values in scale.strips():
        np.multiply(grey[rows], values, out=values)
        np.minimum(values, 255.0, out=values)
        ratio[rows] = values
    return ratio


def _ink_darkness(ratio: NDArray[np.uint8], histogram: NDArray[np.integer], noise: float) -> float:
    """Mean darkness of what stands out of the noise, weighted by itself; 0 if nothing does.

    Of nine million pixels of pure noise some stand out by five standard deviations, but hardly
    ever two side by side.
    """
    darkness = 1.0 - np.arange(256) / 255.0
    stands_out = darkness > _SIGMAS * noise
    level = np.count_nonzero(stands_out)  # darkness falls with the level
    pairs = 0
    for rows in np.array_split(ratio, 16):  # a page with ink shows it soon
        out = rows < level
        pairs += int(np.count_nonzero(out[:, 1:] & out[:, :-1]))
        if pairs >= _FEWEST_PAIRS:
            break
    else:
        return 0.0
    weight = histogram * stands_out
    return float((weight * darkness**2).sum() / (weight * darkness).sum())


def _stroke_width(ratio: NDArray[np.uint8], level: int) -> float:
    """Median run length of ink, the smaller of across and down."""
    # rows and columns spread over the page tell as much as all of them
    thin = max(1, min(ratio.shape) // 300)
    medians = []
    for sample in (ratio[::thin], np.ascontiguousarray(ratio[:, ::thin].T)):
        lengths = run_length(sample <= level)
        lengths = lengths[lengths > 1]
        medians.append(float(np.median(lengths)) if lengths.size else _STROKE_DEFAULT)
    return float(np.clip(min(medians), 2.0, 20.0))


def _faint_share(histogram: NDArray[np.integer], ink_darkness: float, noise: float) -> float:
    """Half the pixels well between paper and ink, for each of ink."""
    darkness = (1.0 - np.arange(256) / 255.0) / ink_darkness
    ink = darkness >= _FAINT[1]
    between = (darkness > max(_FAINT[0], _SIGMAS * noise / ink_darkness)) & ~ink
    return float(histogram[between].sum() / max(1, 2 * histogram[ink].sum()))


def _outline_measures(
    ratio: NDArray[np.uint8], ink_darkness: float, noise: float
) -> tuple[float, float]:
    """Sharpness of the ink's outlines, and the share of soft blocks; see `Tone`.

    Measured in blocks of `BLOCK` pixels on bands three blocks high that are spread over the page;
    the middle blocks of a band have all their neighbours in it.
    """
    n_rows, n_columns = (n // BLOCK for n in ratio.shape)
    if n_rows < 3 or n_columns < 3:
        return 1.0, 0.0
    spacing = min(max(3, n_rows // 16), 12)
    n_bands = n_rows // spacing
    bands = ratio[: n_bands * spacing * BLOCK, : n_columns * BLOCK]
    bands = bands.reshape(n_bands, spacing * BLOCK, -1)[:, : 3 * BLOCK]
    bands = bands.reshape(n_bands, 3, BLOCK, -1)

    def largest(columns: NDArray[np.uint8]) -> NDArray[np.float32]:
        """Largest of the columns of each block, as a share of the paper."""
        block: NDArray[np.uint8] = columns.reshape(n_bands, 3, n_columns, BLOCK).max(axis=-1)
        return np.multiply(block, np.float32(1 / 255), dtype=np.float32)

    rise = largest(bands.max(axis=2)) + largest(255 - bands.min(axis=2)) - 1
    down = largest(_distance(bands[:, :, 1:], bands[:, :, :-1]).max(axis=2))
    across = np.zeros((n_bands, 3, n_columns * BLOCK), np.uint8)
    across[..., :-1] = _distance(bands[..., 1:], bands[..., :-1]).max(axis=2)
    across[..., BLOCK - 1 :: BLOCK] = 0  # from one block into the next
    step = np.maximum(down, largest(across)) / np.maximum(rise, np.float32(1 / 255))

    strong = rise > _STRONG * ink_darkness
    if not strong.any():
        return 1.0, 0.0
    sharpness = float(np.median(step[strong]))
    beside = np.pad(strong, ((0, 0), (0, 0), (1, 1)))
    near = (beside[:, :, :-2] | strong | beside[:, :, 2:]).any(axis=1)
    faint = rise[:, 1] > max(_SOFT_SIGMAS * noise, _SOFT_RISE * ink_darkness)
    soft = faint & ~near & (step[:, 1] < _SOFT * sharpness)
    return sharpness, np.count_nonzero(soft) / max(1, int(np.count_nonzero(strong[:, 1])))


def _distance(a: NDArray[np.uint8], b: NDArray[np.uint8]) -> NDArray[np.uint8]:
    distance: NDArray[np.uint8] = np.maximum(a, b) - np.minimum(a, b)
    return distance

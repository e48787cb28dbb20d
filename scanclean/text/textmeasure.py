"""How large the text of a page is: stroke width and x-height, measured on its components.

Pages carry dirt, pictures and type of several sizes at once. So only components that have the
structure of letters are asked: more than one stroke in a row, or one upright stroke; dirt and
solids have neither. Every later limit is a multiple of these measures.

Glossary: C components. Lengths are pixels; where the two resolutions of a page differ, heights
are pixels of y and widths pixels of x.
"""

from __future__ import annotations

import math
from dataclasses import dataclass, fields

import numpy as np
from numpy.typing import NDArray

from scanclean.sets.labels import Components
from scanclean.units import MM_PER_INCH, POINTS_PER_INCH, Resolution

__all__ = ["Spread", "TextMeasures", "estimate_dpi", "measure_spread", "measure_text"]

Bools = NDArray[np.bool_]
Floats = NDArray[np.float64]

# The body type assumed where a page does not say its resolution: 11 pt, between the 10 pt of
# books and the 12 pt of typewriters, with the x-height of common faces, 0.47 of the size.
_BODY_POINTS = 11.0
_X_HEIGHT_OF_SIZE = 0.47
# Resolutions that scanners offer; an estimate is rounded to one of them.
_USUAL_DPI = (72, 96, 100, 150, 200, 240, 300, 400, 600, 1200)

_LEAST_LETTER_MM = 0.6  # half the x-height of 8 pt type, under that of 6 pt
_LEAST_LETTER_PX = 4.0  # no letter can be told by fewer rows
_MOST_LETTER_MM = 25.0  # letters of posters; beyond it stand pictures and frames
_SAMPLE = 4000  # runs looked at for strokes that lie level
_BAR = 0.25  # what an upright bar counts among letters
_BINS_PER_OCTAVE = 12


@dataclass(frozen=True)
class TextMeasures:
    """The size of a page's text; zeros where a page has none.

    Parameters
    ----------
    stroke_px : float
        Stroke width: the usual length of a run of ink across a letter.
    x_height_px : float
        Height of the letters that most of the page is made of: the x-height of lower case, the
        height of figures on a page of nothing else.
    letters : int
        Components of about that size.
    """

    stroke_px: float
    x_height_px: float
    letters: int = 0


@dataclass(frozen=True, eq=False)
class Spread:
    """First and second moments of each component's ink; columns of length C.

    Parameters
    ----------
    x, y : (C,) float array
        Centroid.
    xx, xy, yy : (C,) float array
        Variances and covariance in square pixels.
    """

    x: Floats
    y: Floats
    xx: Floats
    xy: Floats
    yy: Floats

    def select(self, chosen: Bools) -> Spread:
        """Those that a (C,) bool array chooses."""
        return Spread(*(getattr(self, each.name)[chosen] for each in fields(self)))

    def core(self, slope: float) -> Floats:
        """(C,) height that the bulk of the ink fills, measured across lines of a slope.

        A bar of height h has this core as its height; a word in a running hand has about its
        x-height, since the loops above and below it hold little ink.
        """
        across = self.yy - 2 * slope * self.xy + slope * slope * self.xx
        return np.sqrt(12.0 * np.maximum(across, 0.0))


def measure_spread(components: Components) -> Spread:
    """Moments of the components, from their runs."""
    runs, label, n = components.runs, components.run_label, components.n
    length = runs.length.astype(np.float64)
    # from the middle of each component's box, so that squares stay small
    box = components.box
    middle = (box[:, :2] + box[:, 2:]) / 2
    x = (runs.start + runs.stop) / 2 - middle[label, 0]
    y = runs.row + 0.5 - middle[label, 1]
    area = np.maximum(components.area, 1)

    def mean(values: Floats) -> Floats:
        return np.asarray(np.bincount(label, weights=values, minlength=n)) / area

    mx, my = mean(length * x), mean(length * y)
    # a run of length l adds (l^2 - 1) / 12 about its middle, and each pixel 1 / 12 of its own
    xx = mean(length * (x * x + length * length / 12)) - mx * mx
    xy = mean(length * x * y) - mx * my
    yy = mean(length * (y * y + 1 / 12)) - my * my
    return Spread(mx + middle[:, 0], my + middle[:, 1], xx, xy, yy)


def measure_text(
    components: Components,
    resolution: Resolution | None = None,
    *,
    spread: Spread | None = None,
    among: Bools | None = None,
) -> TextMeasures:
    """Stroke width and x-height of the page, from the components alone.

    The x-height is a first one: close where most letters stand apart, up to a half too large on
    pages of capitals or of a running hand. Each text line has its own, measured on the line.

    Parameters
    ----------
    components : Components
        Of the ink without edges and rules; dirt may still be there.
    resolution : Resolution, optional
        Keeps dirt and pictures out of the reckoning by their size in millimetres.
    spread : Spread, optional
        If it is known already.
    among : (C,) bool array, optional
        Measure these components alone.
    """
    if components.n == 0:
        return TextMeasures(0.0, 0.0)
    spread = spread or measure_spread(components)
    size = np.minimum(spread.core(0.0), components.box[:, 3] - components.box[:, 1])
    weight = _letter_like(components, size, resolution)
    if among is not None:
        weight = np.where(among, weight, 0.0)
    letters = weight > 0
    if not letters.any():
        return TextMeasures(0.0, 0.0)
    x_height = _mode(size[letters], weights=weight[letters])
    near = letters & (size > 0.5 * x_height) & (size < 3 * x_height)
    stroke = _stroke_width(components, near, x_height)
    return TextMeasures(stroke, float(x_height), int(near.sum()))


def estimate_dpi(x_height_px: float) -> float:
    """The resolution at which the page's text would be body type.

    A guess for pages that don't say: it takes the text for 11 pt type of common proportions, and
    rounds to a resolution that scanners have. The caller says that it is one.

    Parameters
    ----------
    x_height_px : float

    Raises
    ------
    ValueError
        If the height is not positive: a page without text gives no hold.
    """
    if not (math.isfinite(x_height_px) and x_height_px > 0):
        raise ValueError(f"x_height_px must be positive, got {x_height_px}")
    exact = x_height_px / (_BODY_POINTS * _X_HEIGHT_OF_SIZE) * POINTS_PER_INCH
    return float(min(_USUAL_DPI, key=lambda dpi: abs(math.log(dpi / exact))))


def _letter_like(components: Components, size: Floats, resolution: Resolution | None) -> Floats:
    """(C,) how far components have a letter's size and more structure than a blob, 0 to 1."""
    least, most = _LEAST_LETTER_PX, math.inf
    if resolution is not None:
        per_mm = resolution.y / MM_PER_INCH
        least = max(least, _LEAST_LETTER_MM * per_mm)
        most = max(4 * least, _MOST_LETTER_MM * per_mm)
    box = components.box
    width, height = box[:, 2] - box[:, 0], box[:, 3] - box[:, 1]
    several_strokes = components.n_runs >= 1.25 * height
    # an l or 1, but also a bar of a chart or a tick
    upright = (height >= 2 * width) & (height >= 2 * least)
    weight = np.where(several_strokes, 1.0, np.where(upright, _BAR, 0.0))
    return np.where((size >= least) & (size <= most), weight, 0.0)


def _stroke_width(components: Components, letters: Bools, x_height: float) -> float:
    """Usual width of the letters' strokes, the smaller of across and down.

    Across it is the median run. Down it is the mean one, on a sample: a mean is larger, and so it
    counts on writing of level or flat strokes only.
    """
    runs = components.runs
    mine = np.flatnonzero(letters[components.run_label])
    lengths = runs.length[mine]
    lengths = lengths[lengths < 3 * x_height]  # bars along the text say nothing of its strokes
    if lengths.size == 0:
        return 0.0
    across = _median_of_counts(np.bincount(lengths))
    sample = mine[:: max(1, mine.size // _SAMPLE)]
    start, stop = runs.bounds[0::2], runs.bounds[1::2]
    ink = np.concatenate(([0], np.cumsum(stop - start)))
    below = runs.shape[1] + 1

    def inked_before(position: NDArray[np.int64]) -> NDArray[np.int64]:
        i = np.searchsorted(start, position, side="right") - 1
        part = np.minimum(position, stop[np.maximum(i, 0)]) - start[np.maximum(i, 0)]
        return np.where(i >= 0, ink[np.maximum(i, 0)] + part, 0)

    area = int((stop - start)[sample].sum())
    goes_on = inked_before(stop[sample] + below) - inked_before(start[sample] + below)
    down = area / max(1, area - int(goes_on.sum()))
    return min(across, down)


def _mode(values: Floats, *, weights: Floats) -> float:
    """The most frequent value, on a scale of equal ratios."""
    bins = np.round(np.log2(values) * _BINS_PER_OCTAVE).astype(np.int64)
    low = int(bins.min()) - 3
    count = np.bincount(bins - low, weights=weights, minlength=int(bins.max()) - low + 4)
    peak = int(np.argmax(np.convolve(count, [1.0, 2.0, 3.0, 2.0, 1.0], mode="same"))) + low
    near = np.abs(bins - peak) <= 2
    return float(np.median(values[near]))


def _median_of_counts(count: NDArray[np.int64]) -> float:
    """Median of whole numbers given how often each occurs, interpolated within its unit."""
    total = np.cumsum(count)
    half = total[-1] / 2
    i = int(np.searchsorted(total, half))
    before = total[i - 1] if i else 0
    return float(i - 0.5 + (half - before) / count[i])

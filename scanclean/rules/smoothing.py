"""Robust smoothing of many short signals at once.

Signals of all tracks of a page lie one after another in one array; ``group`` says whose a sample
is. Groups stand in rising order unless said otherwise, so that no loop over them is needed.
"""

from __future__ import annotations

import numpy as np
from numpy.typing import NDArray

__all__ = ["fit_lines", "group_quantile", "running_quantile", "weighted_median", "whittaker"]

Floats = NDArray[np.float64]
Ints = NDArray[np.int64]


def group_quantile(values: Floats, group: Ints, n: int, q: float = 0.5) -> Floats:
    """The q-quantile (a sample, the lower one) of each of n groups, in any order; NaN if empty.

    Parameters
    ----------
    values : (M,) array
    group : (M,) int array
        From 0 to n - 1.
    n : int
    q : float

    Returns
    -------
    (n,) float array
    """
    order = np.lexsort((values, group))
    count = np.bincount(group, minlength=n)
    place = np.cumsum(count) - count + (q * (count - 1)).astype(np.int64)
    out = np.full(n, np.nan)
    out[count > 0] = values[order[place[count > 0]]]
    return out


def weighted_median(values: Floats, weights: Floats) -> float:
    """The value at which half of the weight is reached; 0.0 of no values."""
    if values.size == 0:
        return 0.0
    order = np.argsort(values)
    total = np.cumsum(weights[order])
    return float(values[order[np.searchsorted(total, total[-1] / 2)]])


def running_quantile(
    values: Floats, valid: NDArray[np.bool_], window: int, q: float = 0.5
) -> Floats:
    """Quantile of the valid samples in a sliding window centred on each sample.

    Parameters
    ----------
    values : (M,) float array
    valid : (M,) bool array
    window : int
        Odd.
    q : float

    Returns
    -------
    (M,) float array
        NaN where the window holds no valid sample.
    """
    half = window // 2
    # samples that don't count sort behind all others
    padded = np.pad(np.where(valid, values, np.inf), half, constant_values=np.inf)
    ranked = np.sort(np.lib.stride_tricks.sliding_window_view(padded, window), axis=1)
    reach = np.cumsum(np.pad(valid.astype(np.int64), (half + 1, half)))
    count = reach[window:] - reach[:-window]
    picked = np.take_along_axis(
        ranked, (q * np.maximum(count - 1, 0)).astype(np.int64)[:, None], axis=1
    )[:, 0]
    return np.where(count > 0, picked, np.nan)


def fit_lines(
    x: Floats, y: Floats, group: Ints, n: int, *, rounds: int = 4, floor: float = 0.3
) -> tuple[Floats, Floats]:
    """A robust straight line through each group of points: y = offset + slope * x.

    Least squares, re-weighted by Cauchy weights with 1.5 mean deviations as their scale.

    Parameters
    ----------
    x, y : (M,) float arrays
    group : (M,) int array
        From 0 to n - 1.
    n : int
    rounds : int
    floor : float
        The least scale, in the unit of y.

    Returns
    -------
    offset, slope : (n,) float arrays
        A group of one abscissa has slope 0, an empty one is NaN.
    """
    weight = np.ones(x.size)
    with np.errstate(invalid="ignore", divide="ignore"):
        for left in range(rounds, 0, -1):
            total = np.bincount(group, weight, n)
            mean_x = np.bincount(group, weight * x, n) / total
            mean_y = np.bincount(group, weight * y, n) / total
            dx = x - mean_x[group]
            var = np.bincount(group, weight * dx * dx, n)
            cov = np.bincount(group, weight * dx * (y - mean_y[group]), n)
            slope = np.where(var > 1e-9, cov / var, 0.0)
            offset = mean_y - slope * mean_x
            if left > 1:
                off = np.abs(y - offset[group] - slope[group] * x)
                scale = np.maximum(1.5 * np.bincount(group, weight * off, n) / total, floor)
                weight = 1 / (1 + (off / scale[group]) ** 2)
    return offset, slope


def whittaker(y: Floats, weight: Floats, first: Ints, stiffness: float) -> Floats:
    """Smooth signals by penalised least squares with second differences.

    Minimises ``sum weight (z - y)^2 + stiffness sum (second difference of z)^2`` for each signal;
    where weights are 0 the result runs on straight.

    Parameters
    ----------
    y, weight : (M,) float arrays
        All signals, one after another.
    first : (n,) int array
        Where each signal begins.
    stiffness : float

    Returns
    -------
    (M,) float array

    References
    ----------
    E. T. Whittaker, "On a new method of graduation", Proc. Edinburgh Math. Soc. 41, 1922.
    P. H. C. Eilers, "A perfect smoother", Analytical Chemistry 75(14), 2003.
    """
    from scipy.linalg import solveh_banded

    m = y.size
    # one second difference for each three neighbours of one signal
    bend = np.full(max(m - 2, 0), float(stiffness))
    inner = first[first > 0]
    across = np.concatenate((inner - 1, inner - 2))  # those that reach into the next signal
    bend[across[(across >= 0) & (across < m - 2)]] = 0
    band = np.zeros((3, m))
    band[2] = weight + 1e-6  # signals without weight stay at 0
    band[2, :-2] += bend
    band[2, 1:-1] += 4 * bend
    band[2, 2:] += bend
    band[1, 1:-1] -= 2 * bend
    band[1, 2:] -= 2 * bend
    band[0, 2:] = bend
    return np.asarray(solveh_banded(band, weight * y, check_finite=False))

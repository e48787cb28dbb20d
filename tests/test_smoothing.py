from __future__ import annotations

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st

from scanclean.rules.smoothing import (
    fit_lines,
    group_quantile,
    running_quantile,
    weighted_median,
    whittaker,
)

RNG = np.random.default_rng(7)


def dense_whittaker(y, weight, stiffness):
    """The normal equations (W + s D'D) z = W y of P. H. C. Eilers, "A perfect smoother", Analytical
    Chemistry 75(14), 2003, solved as full matrices."""
    second = np.diff(np.eye(y.size), 2, axis=0)
    return np.linalg.solve(np.diag(weight) + stiffness * second.T @ second, weight * y)


@pytest.mark.parametrize("stiffness", [0.5, 20.0, 400.0])
def test_whittaker_solves_the_normal_equations(stiffness):
    y, weight = RNG.normal(size=40), RNG.uniform(0.2, 2, 40)
    found = whittaker(y, weight, np.array([0]), stiffness)
    assert np.allclose(found, dense_whittaker(y, weight, stiffness), atol=1e-4)


@given(st.lists(st.integers(1, 9), min_size=1, max_size=5))
def test_signals_in_a_row_are_smoothed_apart(lengths):
    first = np.cumsum(lengths) - lengths
    rng = np.random.default_rng(sum(lengths))
    y, weight = rng.normal(size=sum(lengths)), rng.uniform(0.5, 2, sum(lengths))
    together = whittaker(y, weight, first, 5.0)
    for begin, length in zip(first, lengths, strict=True):
        one = slice(begin, begin + length)
        expected = y[one] if length < 3 else dense_whittaker(y[one], weight[one], 5.0)
        assert np.allclose(together[one], expected, atol=1e-4)


def test_without_weight_a_signal_runs_on_straight():
    y, weight = 3 + 0.25 * np.arange(30.0), np.ones(30)
    y[20:], weight[20:] = 99, 0
    found = whittaker(y, weight, np.array([0]), 1e4)
    assert np.allclose(found, 3 + 0.25 * np.arange(30.0), atol=0.05)


def test_group_quantile_is_numpys_lower_quantile_of_each_group():
    values, group = RNG.normal(size=200), RNG.integers(0, 7, 200)
    for q in (0.0, 0.3, 0.5, 1.0):
        found = group_quantile(values, group, 9, q)
        expected = [np.quantile(values[group == g], q, method="lower") for g in range(7)]
        assert np.array_equal(found[:7], expected)
        assert np.isnan(found[7:]).all()


def test_running_quantile_is_the_quantile_of_each_window():
    values, valid = RNG.normal(size=60), RNG.random(60) < 0.4
    found = running_quantile(values, valid, 9, 0.6)
    for i in range(60):
        window = slice(max(0, i - 4), i + 5)
        some = values[window][valid[window]]
        if some.size:
            assert found[i] == np.quantile(some, 0.6, method="lower")
        else:
            assert np.isnan(found[i])


def test_weighted_median_counts_weights():
    values = np.array([3.0, 1.0, 2.0])
    assert weighted_median(values, np.array([5.0, 1.0, 1.0])) == 3.0
    assert weighted_median(values, np.array([1.0, 1.0, 1.0])) == 2.0
    assert weighted_median(np.empty(0), np.empty(0)) == 0.0


def test_lines_are_found_among_outliers():
    x = np.tile(np.arange(50.0), 2)
    group = np.repeat([0, 1], 50)
    y = np.where(group == 0, 4 + 0.1 * x, -7 - 0.02 * x) + RNG.normal(0, 0.05, 100)
    y[RNG.choice(100, 25, replace=False)] += 9
    offset, slope = fit_lines(x, y, group, 3)
    assert np.allclose(offset[:2], [4, -7], atol=0.15)
    assert np.allclose(slope[:2], [0.1, -0.02], atol=0.006)
    assert np.isnan(offset[2])


def test_a_single_point_gives_a_level_line():
    offset, slope = fit_lines(np.array([8.0]), np.array([2.5]), np.array([0]), 1)
    assert (offset[0], slope[0]) == (2.5, 0.0)

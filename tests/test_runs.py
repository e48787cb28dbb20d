"""The set algebra, judged by numpy on boolean arrays."""

from __future__ import annotations

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st
from hypothesis.extra import numpy as hnp

from scanclean.sets.runs import (
    RunSet,
    complement,
    crop,
    difference,
    intersection,
    is_subset,
    pad,
    reflect,
    symmetric_difference,
    translate,
    transpose,
    union,
)
from tests.strategies import mask_pairs, masks

of = RunSet.from_mask


@given(masks())
def test_mask_to_runs_and_back(mask):
    page = of(mask)
    assert np.array_equal(page.to_mask(), mask)
    assert page.area == mask.sum()
    assert len(page.row_ptr) == mask.shape[0] + 1
    assert (np.diff(page.row_ptr) == np.bincount(page.row, minlength=mask.shape[0])).all()


@given(masks())
def test_runs_are_maximal_and_sorted(mask):
    page = of(mask)
    # in every row a paper pixel at least stands between two runs
    assert (np.diff(page.bounds) > 0).all()
    beginnings = np.diff(mask.astype(int), axis=1, prepend=0) == 1
    assert page.n_runs == beginnings.sum()


@given(mask_pairs())
def test_algebra_is_that_of_numpy(pair):
    a, b = pair
    assert union(of(a), of(b)) == of(a | b)
    assert intersection(of(a), of(b)) == of(a & b)
    assert difference(of(a), of(b)) == of(a & ~b)
    assert symmetric_difference(of(a), of(b)) == of(a ^ b)
    assert complement(of(a)) == of(~a)
    assert is_subset(of(a), of(b)) == bool((a <= b).all())


@given(mask_pairs())
def test_operators_are_the_functions(pair):
    a, b = map(of, pair)
    assert a | b == union(a, b)
    assert a & b == intersection(a, b)
    assert a - b == difference(a, b)
    assert a ^ b == symmetric_difference(a, b)
    assert ~a == complement(a)
    assert (a & b) <= a


@given(mask_pairs())
def test_de_morgan(pair):
    # A. De Morgan, Formal Logic, 1847: the complement of a union is the intersection of complements
    a, b = map(of, pair)
    assert ~(a | b) == ~a & ~b
    assert ~(a & b) == ~a | ~b


@given(masks())
def test_union_of_one_is_itself(mask):
    assert union(of(mask)) == of(mask) == intersection(of(mask))


@given(st.lists(hnp.arrays(bool, (4, 6)), min_size=1, max_size=5))
def test_union_and_intersection_of_many(pages):
    # the reduction against a plain loop
    either, all_ = pages[0], pages[0]
    for page in pages[1:]:
        either, all_ = either | page, all_ & page
    assert union(*map(of, pages)) == of(either)
    assert intersection(*map(of, pages)) == of(all_)


@given(masks(8), st.integers(-10, 10), st.integers(-10, 10))
def test_translation(mask, dx, dy):
    height, width = mask.shape
    room = np.pad(mask, 10)
    moved = room[10 - dy : 10 - dy + height, 10 - dx : 10 - dx + width]
    assert translate(of(mask), dx, dy) == of(moved)


@given(masks())
def test_reflection_turns_the_page(mask):
    assert reflect(of(mask)) == of(mask[::-1, ::-1])
    assert reflect(reflect(of(mask))) == of(mask)


def test_reflection_about_a_point_of_the_page():
    page = of([[1, 0, 0, 0], [0, 1, 0, 0]])
    assert reflect(page, (1, 0)).points().tolist() == [
        [2, 0]
    ]  # (1, 1) goes to (1, -1), off the page
    assert reflect(page, (1.5, 0.5)) == of([[0, 0, 1, 0], [0, 0, 0, 1]])
    with pytest.raises(ValueError, match=r"multiples of 0\.5"):
        reflect(page, (0.3, 0))


@given(masks())
def test_transposition(mask):
    assert transpose(of(mask)) == of(mask.T)


@given(masks(), st.integers(0, 4), st.integers(0, 4), st.integers(0, 4), st.integers(0, 4))
def test_pad_and_crop(mask, left, top, right, bottom):
    padded = pad(of(mask), left, top, right, bottom)
    assert padded == of(np.pad(mask, ((top, bottom), (left, right))))
    height, width = mask.shape
    assert crop(padded, (left, top, left + width, top + height)) == of(mask)


@given(masks())
def test_points_and_box(mask):
    page = of(mask)
    y, x = np.nonzero(mask)
    assert page.points().tolist() == np.stack((x, y), axis=1).tolist()
    if len(x):
        assert page.box == (x.min(), y.min(), x.max() + 1, y.max() + 1)
    else:
        assert page.box == (0, 0, 0, 0)


def test_from_runs_joins_overlaps_and_cuts_at_the_border():
    page = RunSet.from_runs((2, 6), [1, 0, 0, 0, 5], [-3, 2, 0, 3, 0], [2, 4, 3, 9, 2])
    assert page == of([[1, 1, 1, 1, 1, 1], [1, 1, 0, 0, 0, 0]])
    assert page.n_runs == 2


def test_wrong_arguments_are_named():
    with pytest.raises(ValueError, match="two dimensions"):
        of([1, 0])
    with pytest.raises(ValueError, match="differ in shape"):
        of([[1]]) | of([[1, 0]])
    with pytest.raises(ValueError, match="same length"):
        RunSet.from_runs((1, 1), [0], [0, 1], [1])
    with pytest.raises(ValueError, match="at least one page"):
        union()


def test_equal_sets_are_equal_and_hash_alike():
    a = of([[1, 0, 1]])
    b = RunSet.from_runs((1, 3), [0, 0], [2, 0], [3, 1])
    assert a == b
    assert hash(a) == hash(b)
    assert a != of([[1, 0, 1, 0]])


def test_runs_of_a_random_row_are_as_many_as_probability_says():
    # p + (n - 1) p (1 - p) runs in a row of n independent pixels: 500.25 at n = 2000, p = 1/2
    page = of(np.random.default_rng(5).random((2000, 2000)) < 0.5)
    assert page.n_runs / 2000 == pytest.approx(500.25, abs=0.75)

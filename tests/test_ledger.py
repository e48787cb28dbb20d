from __future__ import annotations

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st
from hypothesis.extra import numpy as hnp

from scanclean.ledger import CLASSES, PALETTE, Ledger
from scanclean.sets.runs import RunSet

of = RunSet.from_mask
ARRAYS = hnp.arrays(
    np.uint8, hnp.array_shapes(min_dims=2, max_dims=2, max_side=12), elements=st.integers(0, 6)
)


@given(ARRAYS)
def test_array_to_ledger_and_back(array):
    assert np.array_equal(Ledger.from_array(array).to_array(), array)


@given(ARRAYS)
def test_the_two_laws(array):
    ledger = Ledger.from_array(array)
    assert ledger.ink == of(np.isin(array, (1, 2)))
    assert ledger.thresholded == of(np.isin(array, (1, 3, 4, 5, 6)))


@given(ARRAYS)
def test_counts_add_up(array):
    counts = Ledger.from_array(array).counts()
    assert sum(counts.values()) == np.count_nonzero(array)
    assert counts == {name: (array == value).sum() for name, value in CLASSES.items() if value}


def test_no_pixel_is_claimed_twice_or_from_paper():
    ink, none = of([[1, 1, 0]]), RunSet.empty((1, 3))
    one = of([[1, 0, 0]])
    with pytest.raises(ValueError, match="share a pixel"):
        Ledger(ink, {"speck": one, "rule": one}, none)
    with pytest.raises(ValueError, match="beyond the thresholded"):
        Ledger(ink, {"edge": of([[0, 0, 1]])}, none)
    with pytest.raises(ValueError, match="mended"):
        Ledger(ink, {}, one)
    with pytest.raises(ValueError, match="smudge"):
        Ledger(ink, {"smudge": one}, none)
    with pytest.raises(ValueError, match="7 stands for no class"):
        Ledger.from_array(np.array([[7]], np.uint8))


def test_every_class_has_a_colour_of_its_own():
    assert len(set(PALETTE)) == len(PALETTE) == len(CLASSES)

"""Erosion and what is built of it, judged by scipy.ndimage and by the laws of the plane.

Laws from J. Serra, Image Analysis and Mathematical Morphology, 1982; Haralick, Sternberg and
Zhuang, IEEE PAMI 9(4), 1987; P. Soille, Morphological Image Analysis, 2003 (all from memory).
"""

from __future__ import annotations

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st
from scipy import ndimage

from scanclean.sets.elements import Element, box, diamond, line
from scanclean.sets.morphology import (
    close_set,
    dilate,
    erode,
    fill_holes,
    hit_or_miss,
    open_horizontal,
    open_set,
    reconstruct,
)
from scanclean.sets.runs import RunSet, pad, translate
from tests.strategies import MARGIN, centred, elements, mask_pairs, masks, on_plane

of = RunSet.from_mask
FULL = np.ones((3, 3))


def roomy(mask: np.ndarray) -> RunSet:
    """The page with paper all round, so that laws of the plane are not cut by its border."""
    return pad(of(mask), MARGIN, MARGIN, MARGIN, MARGIN)


# ---- against scipy


@given(masks(), elements())
def test_erosion(mask, element):
    expected = on_plane(mask, lambda page: ndimage.binary_erosion(page, centred(element)))
    assert erode(of(mask), element) == of(expected)


@given(masks(), elements())
def test_dilation(mask, element):
    expected = on_plane(mask, lambda page: ndimage.binary_dilation(page, centred(element)))
    assert dilate(of(mask), element) == of(expected)


@given(masks(), elements())
def test_opening(mask, element):
    expected = on_plane(mask, lambda page: ndimage.binary_opening(page, centred(element)))
    assert open_set(of(mask), element) == of(expected)


@given(masks(), elements())
def test_closing(mask, element):
    expected = on_plane(mask, lambda page: ndimage.binary_closing(page, centred(element)))
    assert close_set(of(mask), element) == of(expected)


@given(masks(), elements(), elements())
def test_hit_or_miss(mask, hit, miss):
    expected = on_plane(
        mask,
        lambda page: (
            ndimage.binary_erosion(page, centred(hit))
            & ndimage.binary_erosion(~page, centred(miss), border_value=1)
        ),
    )
    assert hit_or_miss(of(mask), hit, miss) == of(expected)


@given(mask_pairs())
def test_reconstruction(pair):
    marker, mask = pair
    for connectivity, structure in ((8, FULL), (4, None)):
        expected = ndimage.binary_propagation(marker & mask, structure, mask=mask)
        assert reconstruct(of(marker), of(mask), connectivity=connectivity) == of(expected)


@given(masks())
def test_hole_filling(mask):
    # scipy takes the paper with the structure's connectivity: 4 for ink that is joined by corners
    assert fill_holes(of(mask)) == of(ndimage.binary_fill_holes(mask))
    assert fill_holes(of(mask), connectivity=4) == of(ndimage.binary_fill_holes(mask, FULL))


@given(masks(), st.integers(0, 9))
def test_filling_of_small_holes(mask, max_area):
    for connectivity, structure in ((8, None), (4, FULL)):
        labels, n = ndimage.label(ndimage.binary_fill_holes(mask, structure) & ~mask, structure)
        area = np.bincount(labels.ravel(), minlength=n + 1)
        area[0] = max_area + 1
        expected = mask | (area <= max_area)[labels]
        assert fill_holes(of(mask), max_area=max_area, connectivity=connectivity) == of(expected)


@given(masks())
def test_horizontal_opening_is_the_opening_by_a_line(mask):
    assert open_horizontal(of(mask), 3) == open_set(of(mask), line(3))


# ---- laws


@given(masks(), elements())
def test_duality(mask, element):
    page = roomy(mask)
    # a b complemented is a complemented eroded by b reflected; near the border the page's outside,
    # which is paper, would count as ink of the complement, so only the middle is compared
    left = ~dilate(page, element)
    paper = pad(~page, 8, 8, 8, 8) | ~pad(RunSet.full(page.shape), 8, 8, 8, 8)
    right = erode(paper, element.reflected)
    height, width = page.shape
    assert left.to_mask().tolist() == right.to_mask()[8 : 8 + height, 8 : 8 + width].tolist()


@given(mask_pairs(), elements())
def test_adjunction(pair, element):
    a, b = (roomy(mask) for mask in pair)
    assert (dilate(a, element) <= b) == (a <= erode(b, element))


@given(masks(), elements())
def test_opening_and_closing_bracket_the_set_and_are_idempotent(mask, element):
    page = of(mask)
    opened, closed = open_set(page, element), close_set(page, element)
    assert opened <= page <= closed
    assert open_set(opened, element) == opened
    assert close_set(closed, element) == closed


@given(mask_pairs(), elements())
def test_all_are_increasing(pair, element):
    small, large = of(pair[0] & pair[1]), of(pair[1])
    for operation in (erode, dilate, open_set, close_set):
        assert operation(small, element) <= operation(large, element)


@given(mask_pairs(), elements())
def test_dilation_distributes_over_union_and_erosion_over_intersection(pair, element):
    a, b = map(of, pair)
    assert dilate(a | b, element) == dilate(a, element) | dilate(b, element)
    assert erode(a & b, element) == erode(a, element) & erode(b, element)


@given(masks(), elements())
def test_translation_invariance(mask, element):
    page = roomy(mask)
    for operation in (erode, dilate, open_set, close_set):
        assert operation(translate(page, 2, -1), element) == translate(
            operation(page, element), 2, -1
        )


@given(masks(10), elements(), elements())
def test_chains_of_elements(mask, b, c):
    page = roomy(mask)
    room = pad(b.points, 5, 5, 5, 5)
    both = Element(dilate_element(room, c), (b.origin[0] + 5 + 8, b.origin[1] + 5 + 8))
    assert dilate(dilate(page, b), c) == dilate(page, both)
    assert erode(erode(page, b), c) == erode(page, both)


def dilate_element(points: RunSet, c: Element) -> RunSet:
    return dilate(pad(points, 8, 8, 8, 8), c)


# ---- worked examples


@pytest.mark.parametrize(
    ("element", "dilated", "eroded", "opened", "closed"),
    [
        (box(3, 3), 144, 64, 100, 100),
        (diamond(1), 140, 64, 96, 100),
        (box(5, 5), 196, 36, 100, 100),
    ],
)
def test_square_of_ten(element, dilated, eroded, opened, closed):
    # counts recomputed with scipy.ndimage: a w x h box by a (2k+1) box gives (w+2k)(h+2k)
    square = pad(RunSet.full((10, 10)), 5, 5, 5, 5)
    areas = [f(square, element).area for f in (dilate, erode, open_set, close_set)]
    assert areas == [dilated, eroded, opened, closed]


def test_textbook_dilation_and_erosion_with_the_origin_at_the_end():
    # Haralick, Sternberg and Zhuang 1987, examples of sections II.A and II.B (from memory):
    # A = {(0,1),(1,1),(2,1),(2,2),(3,0)}, B = {(0,0),(0,1)}, coordinates (row, column)
    a = np.zeros((5, 5), bool)
    for point in [(0, 1), (1, 1), (2, 1), (2, 2), (3, 0)]:
        a[point] = True
    b = Element.from_mask([[1, 1]], origin=(0, 0))
    grown = dilate(of(a), b).points().tolist()
    assert grown == [[1, 0], [2, 0], [1, 1], [2, 1], [1, 2], [2, 2], [3, 2], [0, 3], [1, 3]]
    assert erode(of(a), b).points().tolist() == [[1, 2]]


def test_rings_fill_by_the_dual_connectivity():
    ring = np.ones((3, 3), bool)
    ring[1, 1] = False
    assert fill_holes(of(ring)).area == 9
    rhombus = diamond(2).points - pad(diamond(1).points, 1, 1, 1, 1)
    assert rhombus.area == 8
    assert fill_holes(rhombus).area == 13
    assert fill_holes(rhombus, connectivity=4).area == 8


def test_only_small_holes_are_filled_when_asked():
    page = np.ones((7, 9), bool)
    page[2, 2] = page[2:4, 5] = False
    assert fill_holes(of(page), max_area=1).area == 63 - 2
    assert fill_holes(of(page), max_area=2).area == 63


def test_an_empty_element_is_refused():
    nothing = Element.from_mask([[0]])
    with pytest.raises(ValueError, match="empty"):
        erode(of([[1]]), nothing)
    with pytest.raises(ValueError, match="empty"):
        dilate(of([[1]]), nothing)


def test_an_element_far_from_its_origin_moves_the_page():
    page = of([[1, 1, 0, 0, 0]])
    far = Element.from_mask([[1]], origin=(-2, 0))
    assert dilate(page, far) == of([[0, 0, 1, 1, 0]])
    assert open_set(page, far) == page == close_set(page, far)

"""A recipe's own steps do on ink what scipy.ndimage does on boolean arrays."""

from __future__ import annotations

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st
from hypothesis.extra import numpy as hnp
from scipy import ndimage

from scanclean.sets.runs import RunSet
from scanclean.steps import OPERATIONS, Step
from scanclean.units import Length, Resolution

TENTH_MM = Resolution(254, 254)  # ten pixels a millimetre
FAX = Resolution(204, 98)

PAGES = hnp.arrays(bool, st.tuples(st.integers(1, 12), st.integers(1, 16)))


def mm(value: float) -> Length:
    return Length(value, "mm")


def room(mask, operation):
    """The operation on an endless plane: with paper all round, cut back afterwards."""
    return operation(np.pad(mask, 20))[20:-20, 20:-20]


BOX = np.ones((3, 5), bool)
ON_MASKS = {
    "erosion": lambda mask: ndimage.binary_erosion(mask, BOX),
    "dilation": lambda mask: ndimage.binary_dilation(mask, BOX),
    "opening": lambda mask: ndimage.binary_opening(mask, BOX),
    "closing": lambda mask: ndimage.binary_closing(mask, BOX),
    "opening-by-reconstruction": lambda mask: ndimage.binary_propagation(
        ndimage.binary_erosion(mask, BOX), structure=np.ones((3, 3)), mask=mask
    ),
}


@pytest.mark.parametrize("name", ON_MASKS)
@given(mask=PAGES)
def test_an_operation_with_a_box_is_that_of_scipy(name, mask):
    step = Step(operation=name, element="box", width=mm(0.5), height=mm(0.3))
    found = step.apply(RunSet.from_mask(mask), TENTH_MM).to_mask()
    assert np.array_equal(found, room(mask, ON_MASKS[name]))


HIT = np.array([[0, 0, 0], [0, 1, 0], [0, 1, 0]], bool)
MISS = np.array([[1, 1, 1], [0, 0, 0], [0, 0, 0]], bool)


@given(mask=PAGES)
def test_hit_or_miss_thinning_and_thickening_are_those_of_scipy(mask):
    pictures = {"element": "picture", "picture": "...\n.O.\n.#.\n", "miss": "###\n.o.\n...\n"}
    fits = room(mask, lambda page: ndimage.binary_hit_or_miss(page, HIT, MISS))
    ink = RunSet.from_mask(mask)
    for name, expected in (
        ("hit-or-miss", fits),
        ("thinning", mask & ~fits),
        ("thickening", mask | fits),
    ):
        found = Step(operation=name, **pictures).apply(ink, TENTH_MM).to_mask()
        assert np.array_equal(found, expected), name


def test_every_operation_is_checked_here():
    assert set(OPERATIONS) == {*ON_MASKS, "hit-or-miss", "thinning", "thickening"}


@given(mask=PAGES)
def test_a_picture_may_have_its_origin_outside(mask):
    step = Step(operation="dilation", element="picture", picture="#", origin=(-3, 2))
    found = step.apply(RunSet.from_mask(mask), TENTH_MM).to_mask()
    # the only point lies 3 to the right of and 2 above the origin
    expected = np.zeros_like(mask)
    height, width = mask.shape
    if height > 2 and width > 3:
        expected[: height - 2, 3:] = mask[2:, : width - 3]
    assert np.array_equal(found, expected)


@pytest.mark.parametrize(
    ("element", "resolution", "shape", "points"),
    [
        ({"element": "line", "length": mm(1.2)}, TENTH_MM, (1, 12), 12),
        ({"element": "line", "length": mm(1.2), "angle": 90.0}, TENTH_MM, (12, 1), 12),
        # a fax page has 8 pixels a millimetre across and about 4 down
        ({"element": "line", "length": mm(2), "angle": 0.0}, FAX, (1, 16), 16),
        ({"element": "line", "length": mm(2), "angle": 90.0}, FAX, (8, 1), 8),
        ({"element": "line", "length": mm(2), "angle": 45.0}, FAX, (5, 11), 11),
        ({"element": "box", "width": mm(1), "height": mm(1)}, FAX, (4, 8), 32),
        (
            {"element": "box", "width": Length(3, "px"), "height": Length(72, "pt")},
            FAX,
            (98, 3),
            294,
        ),
        ({"element": "disk", "radius": Length(2, "px")}, TENTH_MM, (5, 5), 13),
        ({"element": "diamond", "radius": mm(0.2)}, TENTH_MM, (5, 5), 13),
        ({"element": "disk", "radius": mm(0.0)}, TENTH_MM, (1, 1), 1),
        ({"element": "line", "length": mm(0.01)}, TENTH_MM, (1, 1), 1),
    ],
)
def test_lengths_become_the_pixels_of_the_page(element, resolution, shape, points):
    hit, miss = Step(**element).elements(resolution)
    left, top, right, bottom = hit.points.box
    assert (bottom - top, right - left) == shape
    assert hit.points.area == points
    assert not miss.points


@pytest.mark.parametrize(
    ("keys", "says"),
    [
        ({"element": "line"}, 'element = "line" needs length'),
        ({"element": "box", "width": mm(1)}, 'element = "box" needs width and height'),
        ({"element": "disk", "length": mm(1)}, 'element = "disk" takes radius, not length'),
        ({"element": "picture"}, 'element = "picture" needs picture'),
        ({"element": "line", "length": mm(1), "miss": "#"}, "miss goes with hit-or-miss"),
        ({"element": "line", "length": mm(1), "origin": (1, 1)}, "origin goes with"),
        ({"element": "picture", "picture": "O", "origin": (1, 1)}, "needs one origin"),
        ({"element": "picture", "picture": "...\n.o."}, "at least one point"),
        (
            {"operation": "thinning", "element": "picture", "picture": "O", "miss": "x"},
            "miss: a picture is made of",
        ),
        ({"operation": "thinning", "element": "disk", "radius": mm(1)}, "what must be paper"),
    ],
)
def test_an_element_that_lacks_something_is_refused(keys, says):
    with pytest.raises(ValueError) as caught:  # noqa: PT011 (the text is compared below)
        Step(**keys)
    assert says in str(caught.value)

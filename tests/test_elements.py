from __future__ import annotations

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st

from scanclean.sets.elements import box, diamond, disk, from_text, line
from scanclean.sets.runs import RunSet
from tests.strategies import elements


@pytest.mark.parametrize(("radius", "area"), [(1, 5), (2, 13), (3, 29), (4, 49), (5, 81)])
def test_disks_hold_as_many_lattice_points_as_gauss_circles(radius, area):
    # number of integer points with x^2 + y^2 <= r^2, OEIS A000328 (from memory)
    assert disk(radius).points.area == area


@pytest.mark.parametrize(("radius", "area"), [(1, 5), (2, 13), (3, 25), (4, 41), (5, 61)])
def test_diamonds_are_centred_square_numbers(radius, area):
    # OEIS A001844 (from memory)
    assert diamond(radius).points.area == area


def test_box_has_its_origin_where_scipy_has_it():
    # scipy.ndimage takes the origin of a structure at shape // 2
    assert box(4, 3).origin == (2, 1)
    assert box(4, 3).points == RunSet.full((3, 4))


@pytest.mark.parametrize("angle", [0, 10, 30, 45, 60, 90, 120, 135, 170, -20])
def test_lines_run_at_their_angle(angle):
    element = line(41, angle)
    x, y = (element.points.points() - element.origin).T
    # the principal direction of the points, modulo half a turn
    vector = np.linalg.svd(np.stack((x, y), axis=1) - [x.mean(), y.mean()])[2][0]
    found = np.degrees(np.arctan2(vector[1], vector[0]))
    assert abs((found - angle + 90) % 180 - 90) < 1.0
    assert np.hypot(np.ptp(x) + 1, np.ptp(y) + 1) == pytest.approx(41, abs=1.5)
    if len(x) % 2:  # the middle pixel is the origin, and both halves are alike
        assert element.reflected.pieces.tolist() == element.pieces.tolist()


def test_line_along_an_axis_has_its_length():
    assert line(7).points == RunSet.full((1, 7))
    assert line(7, 90).points == RunSet.full((7, 1))


def test_picture():
    element = from_text(
        """
        .#.
        #o#
        ##
        """
    )
    assert element.origin == (1, 1)
    assert element.points == RunSet.from_mask([[0, 1, 0], [1, 0, 1], [1, 1, 0]])
    assert from_text("##", origin=(-4, 9)).origin == (-4, 9)


@pytest.mark.parametrize(
    ("picture", "origin", "says"),
    [
        ("#x", (0, 0), "'x'"),
        ("##", None, "one origin"),
        ("OO", None, "one origin"),
        ("O#", (0, 0), "one origin"),
        ("..o", None, "at least one point"),
        ("", (0, 0), "at least one point"),
    ],
)
def test_impossible_pictures_are_refused(picture, origin, says):
    with pytest.raises(ValueError, match=says):
        from_text(picture, origin)


@pytest.mark.parametrize("make", [lambda: box(0, 1), lambda: line(0), lambda: disk(-1)])
def test_sizes_are_checked(make):
    with pytest.raises(ValueError, match="at least"):
        make()


@given(elements())
def test_pieces_tile_the_element(element):
    x, y = (element.points.points() - element.origin).T
    tiled = [
        (px, py)
        for left, top, right, bottom in element.pieces.tolist()
        for px in range(left, right)
        for py in range(top, bottom)
    ]
    assert sorted(tiled) == sorted(zip(x.tolist(), y.tolist(), strict=True))


@given(elements())
def test_reflection_negates_every_point(element):
    there = element.points.points() - element.origin
    back = element.reflected.points.points() - element.reflected.origin
    assert sorted(map(tuple, (-there).tolist())) == sorted(map(tuple, back.tolist()))


@given(st.integers(1, 30), st.integers(1, 30))
def test_a_box_is_one_piece(width, height):
    assert len(box(width, height).pieces) == 1

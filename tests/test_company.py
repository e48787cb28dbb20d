from __future__ import annotations

import numpy as np

from scanclean.sets.labels import label
from scanclean.sets.runs import RunSet
from scanclean.text.company import are_in_rows, fill_counters
from scanclean.text.textmeasure import measure_spread
from scanclean.text.upright import Frame, place


def shapes_of(boxes, shape=(60, 200), hollow=()):
    """Boxes (left, top, right, bottom) drawn solid, or as frames 2 pixels thick."""
    mask = np.zeros(shape, bool)
    for number, (left, top, right, bottom) in enumerate(boxes):
        mask[top:bottom, left:right] = True
        if number in hollow:
            mask[top + 2 : bottom - 2, left + 2 : right - 2] = False
    components = label(RunSet.from_mask(mask))
    assert components.n == len(boxes)
    order = [tuple(box) for box in components.box.tolist()]
    shapes = place(components, measure_spread(components), Frame.at(0.0, None))
    return shapes, components, [order.index(tuple(box)) for box in boxes]


def in_rows(boxes):
    shapes, components, number = shapes_of(boxes)
    all_ = np.ones(components.n, bool)
    return are_in_rows(shapes, all_, all_, stroke=3.0)[number].tolist()


def test_letters_side_by_side_keep_each_other():
    assert in_rows([(10, 10, 18, 26), (24, 11, 33, 26), (40, 10, 43, 26)]) == [True] * 3


def test_what_stands_alone_or_is_of_another_size_does_not():
    alone, far, small, other_row = (
        (10, 10, 18, 26),
        (120, 10, 128, 26),
        (22, 20, 25, 24),
        (24, 35, 32, 51),
    )
    assert in_rows([alone, far, small, other_row]) == [False] * 4


def test_dashes_keep_dashes_and_no_letters():
    assert in_rows([(10, 20, 30, 24), (40, 20, 60, 24)]) == [True, True]
    assert in_rows([(10, 20, 30, 24), (34, 10, 42, 30)]) == [False, False]


def test_grains_keep_no_grains():
    assert in_rows([(10, 10, 13, 13), (15, 10, 18, 13), (20, 10, 23, 13)]) == [False] * 3


def test_a_dot_in_the_middle_of_a_counter_is_the_figures():
    zero, dot, beside, speck = (
        (10, 10, 40, 50),
        (23, 27, 27, 33),
        (70, 10, 100, 50),
        (90, 15, 93, 18),
    )
    shapes, components, number = shapes_of([zero, dot, beside, speck], hollow=(0, 2))
    asked = np.zeros(components.n, bool)
    asked[[number[1], number[3]]] = True
    found = fill_counters(shapes, asked, components.holes)
    assert found[number].tolist() == [False, True, False, False]

from __future__ import annotations

import math

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st
from scipy.optimize import linear_sum_assignment
from skimage.metrics import peak_signal_noise_ratio
from sklearn.metrics import f1_score, precision_score, recall_score

from scanclean.score import (
    box_iou,
    cleaning_losses,
    contest_measures,
    glyphs_broken,
    match_boxes,
    match_regions,
    reciprocal_distance_distortion,
    share_kept,
)


def picture(*rows: str) -> np.ndarray:
    return np.array([[char == "#" for char in row] for row in rows])


@pytest.fixture
def bar() -> np.ndarray:
    """16 x 16 with a bar of rows 3-4, columns 2-13: 24 pixels, 2 mixed 8 x 8 blocks."""
    page = np.zeros((16, 16), bool)
    page[3:5, 2:14] = True
    return page


# DRD weights: 1/distance over 5 x 5, normalised by 13.820349 (Lu, Kot and Shi 2004); the rows
# below are worked by hand from them, e.g. a lone speck: all 24 neighbours differ, so 1 / 2.
WORKED = {
    "speck": (((12, 12, True),), 0.500000, 97.9592, 24.0824),
    "bump": (((2, 7, True),), 0.304268, 97.9592, 24.0824),
    "nick": (((3, 7, False),), 0.228237, 97.8723, 24.0824),
    "cut": (((3, 7, False), (4, 7, False)), 0.456475, 95.6522, 21.0721),
    "thicker": (tuple((2, x, True) for x in range(2, 14)), 3.850619, 80.0000, 13.2906),
    "speck in the page's corner": (((15, 15, True),), 0.179268, 97.9592, 24.0824),
}


@pytest.mark.parametrize("case", WORKED)
def test_worked_distortions(bar, case):
    changes, drd, f_measure, psnr = WORKED[case]
    result = bar.copy()
    for y, x, value in changes:
        result[y, x] = value
    measures = contest_measures(result, bar)
    assert measures.drd == pytest.approx(drd, abs=5e-7)
    assert measures.f_measure == pytest.approx(f_measure, abs=5e-5)
    assert measures.psnr == pytest.approx(psnr, abs=5e-5)


def test_the_contests_printed_example():
    # the binarization contests' evaluation program prints, for its example, recall 90.4607,
    # precision 96.9623 and F-measure 93.5987; pixel counts of those rates give that F-measure
    truth = np.zeros((1000, 1200), bool)
    truth.ravel()[:1_000_000] = True
    result = np.zeros_like(truth)
    result.ravel()[1_000_000 - 904_607 : 1_000_000 + round(904_607 / 0.969623 - 904_607)] = True
    measures = contest_measures(result, truth)
    assert measures.recall == pytest.approx(90.4607, abs=5e-5)
    assert measures.precision == pytest.approx(96.9623, abs=5e-5)
    assert measures.f_measure == pytest.approx(93.5987, abs=5e-5)


def test_negative_rate_metric_by_hand():
    truth = picture("##..", "##..")
    result = picture("###.", "#...")
    # one of four ink pixels missed, one of four paper pixels taken for ink
    assert contest_measures(result, truth).nrm == pytest.approx((1 / 4 + 1 / 4) / 2)


@settings(deadline=None, max_examples=40)
@given(st.integers(0, 2**32 - 1), st.floats(0.05, 0.95))
def test_measures_agree_with_scikit_learn_and_scikit_image(seed, share):
    rng = np.random.default_rng(seed)
    truth, result = rng.random((2, 24, 17)) < share
    truth[0, :2] = result[0, :2] = True  # something there and found, something missed or not
    measures = contest_measures(result, truth)
    flat = truth.ravel(), result.ravel()
    assert measures.precision == pytest.approx(100 * precision_score(*flat))
    assert measures.recall == pytest.approx(100 * recall_score(*flat))
    assert measures.f_measure == pytest.approx(100 * f1_score(*flat))
    if (truth != result).any():
        expected = peak_signal_noise_ratio(truth.astype(float), result.astype(float), data_range=1)
        assert measures.psnr == pytest.approx(expected)


@settings(deadline=None, max_examples=30)
@given(st.integers(0, 2**32 - 1))
def test_distortion_against_its_formula_pixel_by_pixel(seed):
    rng = np.random.default_rng(seed)
    truth, result = rng.random((2, 17, 19)) < 0.5
    total = 0.0
    for y, x in np.argwhere(truth != result):
        for dy in range(-2, 3):
            for dx in range(-2, 3):
                if (dy or dx) and 0 <= y + dy < 17 and 0 <= x + dx < 19:
                    weight = 1 / math.hypot(dy, dx) / 13.820349
                    total += weight * (truth[y + dy, x + dx] != result[y, x])
    blocks = [truth[y : y + 8, x : x + 8] for y in (0, 8) for x in (0, 8)]
    mixed = sum(block.any() and not block.all() for block in blocks)
    assert reciprocal_distance_distortion(result, truth) == pytest.approx(total / mixed, rel=1e-6)


def test_perfect_blank_and_full_pages(bar):
    perfect = contest_measures(bar, bar)
    assert (perfect.f_measure, perfect.psnr, perfect.drd, perfect.nrm) == (100, math.inf, 0, 0)
    blank = np.zeros_like(bar)
    nothing = contest_measures(blank, bar)
    assert (nothing.precision, nothing.recall, nothing.f_measure) == (0, 0, 0)
    assert math.isnan(contest_measures(bar, blank).drd)
    assert math.isnan(contest_measures(bar, ~blank).nrm)


def test_pages_of_two_shapes_are_refused(bar):
    with pytest.raises(ValueError, match="one shape"):
        contest_measures(bar[:-1], bar)


def test_iou_of_boxes_by_hand():
    others = [[0, 0, 4, 4], [2, 2, 6, 6], [4, 0, 8, 4], [1, 1, 3, 3], [2, 2, 2, 9]]
    iou = box_iou([[0, 0, 4, 4]], others)
    assert iou.tolist() == [[1.0, 4 / 28, 0.0, 4 / 16, 0.0]]


def test_a_true_box_is_found_once():
    # both found boxes overlap the first true box well enough; the better one takes it
    matching = match_boxes([[0, 0, 10, 9], [0, 0, 10, 10]], [[0, 0, 10, 10], [50, 0, 60, 10]])
    assert matching.found.tolist() == [1]
    assert matching.truth.tolist() == [0]
    assert matching.precision == 0.5
    assert matching.recall == 0.5
    assert matching.f1 == 0.5


def test_boxes_just_under_the_limit_do_not_match():
    box = [0, 0, 100, 1]
    assert match_boxes([box], [[0, 0, 75, 1]]).f1 == 1.0
    assert match_boxes([box], [[0, 0, 74, 1]]).f1 == 0.0


def test_nothing_found_and_nothing_there():
    assert match_boxes(np.empty((0, 4)), np.empty((0, 4))).f1 == 1.0
    assert match_boxes(np.empty((0, 4)), [[0, 0, 1, 1]]).recall == 0.0
    assert match_boxes([[0, 0, 1, 1]], np.empty((0, 4))).precision == 0.0


@settings(deadline=None, max_examples=60)
@given(st.integers(0, 2**32 - 1))
def test_matching_is_one_to_one_and_as_large_as_the_best_assignment(seed):
    rng = np.random.default_rng(seed)
    corner = rng.integers(0, 40, (25, 2))
    truth = np.concatenate([corner, corner + rng.integers(6, 12, (25, 2))], axis=1)
    found = truth[rng.random(25) < 0.8] + rng.integers(-1, 2, 4)
    matching = match_boxes(found, truth, min_iou=0.6)
    assert len(set(matching.found.tolist())) == len(matching.found)
    assert len(set(matching.truth.tolist())) == len(matching.truth)
    iou = box_iou(found, truth)
    assert matching.score == pytest.approx(iou[matching.found, matching.truth])
    good = iou >= 0.6
    best = good[linear_sum_assignment(good, maximize=True)].sum()
    # taking the best first is a maximal matching, so at least half of the largest one
    assert best / 2 <= len(matching.found) <= best
    free_found = np.setdiff1d(np.arange(len(found)), matching.found)
    free_truth = np.setdiff1d(np.arange(len(truth)), matching.truth)
    assert not good[np.ix_(free_found, free_truth)].any()


def test_many_boxes_are_compared_in_blocks(monkeypatch):
    monkeypatch.setattr("scanclean.score._IOU_CELLS", 50)
    left = np.arange(0, 400, 10)
    boxes = np.stack([left, left * 0, left + 8, left * 0 + 8], axis=1)
    matching = match_boxes(boxes[::-1], boxes)
    assert dict(zip(matching.found.tolist(), matching.truth.tolist(), strict=True)) == {
        place: 39 - place for place in range(40)
    }


def test_lines_by_the_segmentation_contests_rule():
    truth = np.zeros((3, 100), int)
    truth[0], truth[1], truth[2] = 1, 2, 3
    found = truth.copy()
    found[0, 95:] = 0  # 95 of 100 points: 0.95, accepted
    found[1, 94:] = 0  # 94 of 100: refused
    found[2, :50] = 4  # split in two: refused both
    matching = match_regions(found, truth)
    assert matching.truth.tolist() == [0]
    assert (matching.n_truth, matching.n_found) == (3, 4)
    assert matching.recall == pytest.approx(1 / 3)
    assert matching.precision == pytest.approx(1 / 4)
    assert matching.f1 == pytest.approx(2 / 7)


def test_published_counts_give_the_published_rates():
    # ICDAR 2013 handwriting segmentation contest, text lines, first and last of the table, from
    # memory: N = 2649; M, one-to-one -> DR, RA, FM in per cent
    from scanclean.score import Matching

    for found, pairs, rates in (
        (2650, 2614, (98.68, 98.64, 98.66)),
        (2696, 2428, (91.66, 90.06, 90.85)),
    ):
        index = np.arange(pairs)
        matching = Matching(index, index, np.ones(pairs), found, 2649)
        got = 100 * matching.recall, 100 * matching.precision, 100 * matching.f1
        assert got == pytest.approx(rates, abs=0.005)


def test_a_line_found_where_nothing_is_counts_against_precision():
    truth = np.zeros((4, 20), int)
    truth[0] = 1
    found = truth.copy()
    found[3] = 2
    matching = match_regions(found, truth)
    assert (matching.recall, matching.precision) == (1.0, 0.5)


def test_share_kept_of_regions():
    regions = np.array([[1, 1, 2, 2, 0, 4]])
    cleaned = np.array([[True, False, True, True, True, False]])
    share = share_kept(cleaned, regions)
    assert share[:2].tolist() == [0.5, 1.0]
    assert math.isnan(share[2])
    assert share[3] == 0.0


LETTER = picture(
    "............",
    ".####..####.",
    ".####..####.",
    ".####..####.",
    "............",
)


def test_a_glyph_cut_through_is_broken_a_glyph_joined_is_not():
    glyphs = np.zeros(LETTER.shape, int)
    glyphs[:, :6][LETTER[:, :6]] = 1
    glyphs[:, 6:][LETTER[:, 6:]] = 2
    cleaned = LETTER.copy()
    cleaned[:, 2] = False  # cuts 3 pixels off the first: too small a piece
    assert glyphs_broken(cleaned, LETTER, glyphs).tolist() == [False, False]
    assert glyphs_broken(cleaned, LETTER, glyphs, min_piece=3).tolist() == [True, False]
    cleaned[:, 5:7] = True
    assert glyphs_broken(cleaned, LETTER, glyphs, min_piece=4).tolist() == [False, False]


def test_losses_by_hand():
    # a glyph over a rule, the rule running on to the right; a mark; one speck alone and one by
    # the glyph, which nobody can tell from it
    ink = np.zeros((30, 60), bool)
    ink[5:20, 10:14] = True  # 60 pixels, 15 rows of 4
    ink[2:4, 20:22] = True
    glyphs, marks = ink * 1, np.zeros(ink.shape, int)
    glyphs[2:4, 20:22] = 2
    marks[2:4, 20:22] = 1
    rules = np.zeros(ink.shape, int)
    rules[12:14, 5:55] = 1
    dirt = np.zeros(ink.shape, int)
    dirt[25:27, 40:42] = 1
    dirt[5:7, 15:17] = 2
    cleaned = ink.copy()
    cleaned[12:14, 10:14] = False  # the crossing lost: 8 pixels
    cleaned[12, 45:49] = True  # 4 of the rule left
    cleaned[2:4, 20] = False  # half of the mark gone: still kept
    cleaned[25:27, 40:42] = True
    losses = cleaning_losses(cleaned, ink, glyphs=glyphs, marks=marks, rules=rules, dirt=dirt)
    assert losses.ink_kept == pytest.approx(54 / 64)
    assert losses.ink_added == 0.0
    # rule columns 5 to 54, of which 8 to 15 lie within 2 pixels of ink: 42 x 2 pixels are clear
    assert losses.rule_left == pytest.approx(4 / 84)
    # ink in rows 10 to 15, columns 10 to 13
    assert losses.ink_lost_at_rules == pytest.approx(8 / 24)
    assert (losses.glyphs_hurt, losses.glyphs_broken, losses.glyphs) == (2, 1, 2)
    assert (losses.marks_lost, losses.marks) == (0, 1)
    assert (losses.specks_left, losses.specks) == (1, 1)
    cleaned[2:4, 20:22] = False
    cleaned[28, :32] = True
    worse = cleaning_losses(cleaned, ink, glyphs=glyphs, marks=marks, rules=rules, dirt=dirt)
    assert worse.marks_lost == 1
    assert worse.ink_added == pytest.approx(32 / 64)


def test_a_perfect_page_has_no_losses(bar):
    losses = cleaning_losses(bar, bar, glyphs=bar * 1, marks=np.zeros(bar.shape, int))
    assert (losses.ink_kept, losses.ink_added, losses.rule_left) == (1.0, 0.0, 0.0)
    assert (losses.ink_lost_at_rules, losses.glyphs_hurt, losses.glyphs_broken) == (0.0, 0, 0)
    assert (losses.marks, losses.specks) == (0, 0)

from __future__ import annotations

import math
from typing import NamedTuple

import numpy as np
import pytest
from skimage.filters import threshold_otsu
from skimage.measure import label, regionprops

from fixtures.drawn import draw
from tests.figures import Outcome, difference, figures_of, hulls, measure


class Promise(NamedTuple):
    """What cleaning promises: at most so many per cent; at least so good an F1."""

    ink_lost: float = 1.5
    rule_left: float = 0.1
    lost_at_rules: float = 1.0
    hurt: float = 0.3
    marks_lost: float = 0.0
    boxes: float = 0.98
    lines: float = 1.0
    words: float = 0.95


PROMISED = {
    "ledger": Promise(words=0.85),
    "ledger colour rules": Promise(boxes=0.97, words=0.85),
    "typed": Promise(boxes=0.985),
    "serif": Promise(words=0.96),
    "serif skew 9": Promise(words=0.92),
    "serif borders": Promise(words=0.94),
    "two columns": Promise(),
    "small print, accents": Promise(words=0.97),
    # joined-up letters have no box of their own
    "cursive on rules": Promise(marks_lost=1.0, boxes=math.nan, lines=0.95, words=0.88),
}


def perfect(page) -> Outcome:
    """The truth handed in as the outcome."""
    return Outcome(page.ink, page.glyphs.box, page.glyphs.word, page.line_map)


@pytest.fixture(scope="module")
def ledger():
    return draw("ledger", seed=3, size=(110.0, 60.0), skew=0.8)


def test_the_truth_itself_gets_perfect_figures(ledger):
    figures = measure(ledger, perfect(ledger))
    losses = figures.losses
    assert (losses.ink_kept, losses.ink_added, losses.rule_left) == (1.0, 0.0, 0.0)
    assert (losses.glyphs_hurt, losses.glyphs_broken, losses.marks_lost) == (0, 0, 0)
    assert losses.specks_left == 0
    assert losses.marks == len(ledger.mark_box)
    assert (figures.boxes, figures.lines, figures.words) == (1.0, 1.0, 1.0)


def plain_script(page) -> Outcome:
    """Otsu, labels and boxes, as a plain scikit-image script would do it."""
    ink = page.scan <= threshold_otsu(page.scan)
    labels = label(ink, connectivity=2)
    box = np.array([region.bbox for region in regionprops(labels)])[:, [1, 0, 3, 2]]
    return Outcome(ink, box, np.arange(len(box)), labels)


def test_a_plain_script_is_told_from_the_truth(ledger):
    figures = measure(ledger, plain_script(ledger))
    assert figures.losses.ink_kept > 0.95
    assert figures.losses.rule_left > 0.9
    assert figures.losses.specks_left > 0.5 * figures.losses.specks
    assert figures.boxes < 0.8
    assert figures.lines < 0.1


def test_losses_show_up_in_their_own_column(ledger):
    whole = perfect(ledger)
    without_marks = Outcome(
        whole.ink & (ledger.mark_map == 0), whole.glyph_box, whole.glyph_word, whole.line_map
    )
    figures = measure(ledger, without_marks)
    assert figures.losses.marks_lost == figures.losses.marks > 0
    assert (figures.losses.rule_left, figures.losses.specks_left) == (0.0, 0)
    merged = np.where(whole.line_map > 1, whole.line_map - 1, whole.line_map)
    lines = measure(ledger, Outcome(whole.ink, whole.glyph_box, whole.glyph_word, merged)).lines
    count = len(ledger.lines)
    assert lines == pytest.approx(2 * (count - 2) / (2 * count - 1))


def test_hulls_of_words():
    box = np.array([[0, 0, 2, 2], [3, 1, 5, 4], [9, 9, 10, 10], [1, 1, 2, 2]])
    assert hulls(box, np.array([4, 4, 7, -1])).tolist() == [[0, 0, 5, 4], [9, 9, 10, 10]]
    assert hulls(np.zeros((0, 4), int), np.zeros(0, int)).shape == (0, 4)


def test_the_difference_picture_marks_what_was_lost(ledger):
    picture = difference(ledger, np.zeros_like(ledger.ink))
    assert (picture[ledger.ink] == (213, 94, 0)).all()


@pytest.mark.parametrize("variant", PROMISED)
def test_promised_figures(variant):
    figures = figures_of(variant)
    losses = figures.losses
    promise = PROMISED[variant]
    assert 100 * (1 - losses.ink_kept) <= promise.ink_lost
    assert 100 * losses.rule_left <= promise.rule_left
    assert 100 * losses.ink_lost_at_rules <= promise.lost_at_rules
    assert 100 * figures.hurt_share <= promise.hurt
    assert 100 * figures.marks_lost_share <= promise.marks_lost
    assert math.isnan(promise.boxes) or figures.boxes >= promise.boxes
    assert figures.lines >= promise.lines
    assert figures.words >= promise.words
    # sure dirt goes; what stands like a mark beside a letter may stay
    assert losses.specks_left <= 0.12 * losses.specks
    assert losses.ink_added <= 0.001

from __future__ import annotations

import numpy as np
import pytest
from skimage.filters import threshold_otsu
from skimage.measure import label, regionprops

from fixtures.drawn import draw
from tests.figures import Outcome, difference, hulls, measure


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

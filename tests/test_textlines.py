from __future__ import annotations

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st
from skimage import data
from skimage.filters import threshold_sauvola

from fixtures.drawn import draw
from scanclean.score import match_regions
from scanclean.sets.labels import label
from scanclean.sets.runs import RunSet
from scanclean.text.columns import Gaps, Occupied, corridors
from scanclean.text.neighbours import (
    beside,
    best_of_both,
    chains,
    grouped_median,
    keyed_neighbours,
    weighted_median,
)
from scanclean.text.upright import Frame
from tests.reading import read, set_text
from tests.strategies import masks

PROSE = ["The keeper of the north", "light writes: gulls fly", "inland, a heavy swell."]


def line_score(page, found) -> float:
    return match_regions(found.line_of_ink, page.line_map, points=page.ink).f1


def bitmap(*rows: str) -> np.ndarray:
    return np.array([[c == "#" for c in row] for row in rows])


# ---- neighbours


def test_neighbours_stand_in_one_row_with_nothing_between():
    #  a a . b b . c c
    #  a a . . . . c c
    #  d d d d d d . .
    order = np.array([1.0, 4.0, 7.0, 3.0])
    top, bottom = np.array([0.0, 0.0, 0.0, 2.0]), np.array([2.0, 1.0, 2.0, 3.0])
    i, j = beside(order, top, bottom, band=1.0)
    assert sorted(zip(i.tolist(), j.tolist(), strict=True)) == [(0, 1), (0, 2), (1, 2)]


def test_links_are_the_best_of_both():
    i, j = np.array([0, 0, 1]), np.array([1, 2, 2])
    cost = np.array([1.0, 3.0, 2.0])
    assert best_of_both(i, j, cost).tolist() == [True, False, True]
    assert chains(i[[0, 2]], j[[0, 2]], 4)[0] == 2


@given(st.integers(1, 4), st.lists(st.tuples(st.integers(0, 3), st.floats(-5, 5)), max_size=30))
def test_grouped_medians_are_numpys(n, entries):
    group = np.array([g % n for g, _ in entries], np.int64)
    values = np.array([v for _, v in entries])
    medians = grouped_median(group, n, values, 7.5)
    for k in range(n):
        mine = values[group == k]
        assert medians[k] == pytest.approx(np.median(mine) if mine.size else 7.5)


def test_weighted_median_reaches_half_the_weight():
    assert weighted_median(np.array([3.0, 1.0, 2.0]), np.array([1, 1, 5])) == 2.0


@given(st.lists(st.tuples(st.integers(0, 2), st.integers(0, 30)), min_size=1, max_size=25))
def test_keyed_neighbours_are_those_of_a_plain_search(things):
    things = sorted(set(things))  # places differ, so that the order is plain
    key, place = np.array(things, float).T
    key = key.astype(np.int64)
    asked = np.arange(len(things))
    found = keyed_neighbours(key, place, asked, asked, 2)
    for m in asked:
        row = [i for i in asked if key[i] == key[m]]
        at = row.index(m)
        before, behind = row[:at][::-1][:2], row[at + 1 :][:2]
        assert [i for i in found[:2, m] if i >= 0] == before
        assert [i for i in found[2:, m] if i >= 0] == behind


# ---- the frame


@given(st.floats(-0.2, 0.2), st.floats(0.4, 2.5), st.floats(-500, 500), st.floats(-500, 500))
def test_the_upright_frame_is_left_as_it_was_entered(slope, aspect, x, y):
    frame = Frame(slope, aspect)
    back = frame.page(*frame.upright(np.array([x]), np.array([y])))
    assert np.allclose(back, [[x], [y]], atol=1e-6)


def test_a_line_of_the_frames_slope_is_level_in_it():
    frame = Frame(0.1)
    x = np.array([0.0, 100.0, 250.0])
    _, level = frame.upright(x, 40 + 0.1 * x)
    assert np.ptp(level) < 1e-9


# ---- columns


def test_gaps_of_a_gutter_share_a_corridor_and_word_spaces_do_not():
    # five rows, 10 high, 20 apart: a gutter at 100..140, word spaces elsewhere
    rows = np.arange(5) * 20.0 + 10
    spaces = np.array([30.0, 60.0, 20.0, 75.0, 45.0])
    left = np.concatenate((np.zeros(5), spaces + 15, np.full(5, 140.0)))
    right = np.concatenate((spaces, np.full(5, 100.0), np.full(5, 240.0)))
    level = np.tile(rows, 3)
    occupied = Occupied(left, right, level - 10, level, 5.0)
    piece = np.arange(5)
    gaps = Gaps(
        np.concatenate((piece, piece + 5)),
        np.concatenate((piece + 5, piece + 10)),
        np.concatenate((spaces, np.full(5, 100.0))),
        np.concatenate((spaces + 15, np.full(5, 140.0))),
        np.tile(rows, 2),
        np.zeros(10),
        np.full(10, 10.0),
    )
    count = corridors(gaps, occupied).sum(axis=1)
    assert (count[5:] == 5).all()
    assert (count[:5] == 1).all()


# ---- whole pages


@pytest.mark.parametrize("skew", [-10.0, -3.0, 0.0, 0.6, 6.0, 10.0])
def test_lines_are_found_up_to_ten_degrees(skew):
    page = set_text(PROSE, skew=skew, size=(110.0, 60.0))
    found = read(page.ink)
    assert line_score(page, found) == 1.0
    assert np.degrees(np.arctan(found.found.frame.slope)) == pytest.approx(skew, abs=0.75)


@pytest.mark.parametrize(
    ("dpi", "face", "points"),
    [
        (150.0, "sans", 9.0),
        (200.0, "serif", 24.0),
        (300.0, "garamond", 6.0),
        (600.0, "italic", 8.0),
    ],
)
def test_lines_of_every_size(dpi, face, points):
    page = set_text(PROSE, face=face, points=points, dpi=dpi, size=(180.0, 55.0), skew=0.5)
    assert line_score(page, read(page.ink, dpi)) == 1.0


def test_baselines_and_x_heights_are_those_drawn():
    page = set_text(PROSE, skew=1.2)
    found = read(page.ink)
    for line, true in zip(range(3), page.lines, strict=True):
        slope, level = np.polyfit(*np.asarray(true.baseline).T, 1)
        for x, y in found.lines.baseline[line]:
            assert y == pytest.approx(slope * x + level, abs=1.5)
        assert found.lines.x_height[line] == pytest.approx(true.x_height_px, rel=0.08)


def test_a_curled_page_keeps_its_lines_whole():
    page = draw("printed", seed=4, size=(130.0, 60.0), curl=0.9, curl_length=150.0, dirt=0.0)
    assert line_score(page, read(page.ink)) == 1.0


def test_fax_pixels_are_higher_than_wide():
    page = set_text(PROSE, dpi=(204.0, 98.0), points=14.0, skew=0.4)
    assert line_score(page, read(page.ink, page.dpi)) == 1.0


def test_a_heading_beside_small_print():
    page = set_text(["HARBOUR"], points=24.0, size=(150.0, 60.0))
    notes = set_text(["notes in small print", "of another size"], points=6.5, size=(150.0, 60.0))
    ink = page.ink.copy()
    ink[:, 900:] |= notes.ink[:, :-900]
    found = read(ink)
    assert sorted(np.bincount(found.glyphs.line).tolist()) == [7, 13, 17]
    assert max(found.lines.x_height) > 3 * min(found.lines.x_height)


def test_columns_are_apart_and_rows_of_a_table_are_whole():
    text = draw("printed", seed=2, columns=2, face="garamond", points=9.0, dirt=0.0, skew=1.0)
    assert line_score(text, read(text.ink)) == 1.0
    table = draw("ledger", seed=2, size=(150.0, 70.0), dirt=0.0, skew=0.5)
    assert line_score(table, read(table.ink)) == 1.0


def test_notes_in_the_margin_are_lines_of_their_own():
    page = draw("book", seed=6, size=(150.0, 90.0), dirt=0.0, skew=0.4)
    found = read(page.ink)
    matching = match_regions(found.line_of_ink, page.line_map, points=page.ink)
    # the drop capital, three lines high, may be left over
    assert matching.f1 > 0.9


@pytest.mark.parametrize("face", ["cursive", "copperplate", "hand", "hand-print"])
def test_hands_of_connected_and_of_single_letters(face):
    page = draw("handwritten", seed=3, face=face, rule=None, size=(140.0, 70.0), dirt=0.0)
    assert line_score(page, read(page.ink)) == 1.0


def test_the_photographed_page_of_scikit_image_line_by_line():
    # read by eye, words a line: Region-based segmentation / Let us first determine markers of the
    # coins and the / background. These markers are pixels that we can label / unambiguously as
    # either object or background. Here, / the markers are found at the two extreme parts of the /
    # histogram of grey values:
    page = data.page()
    found = read(page < threshold_sauvola(page, 25, k=0.2), None)
    assert found.words()[:6] == [2, 10, 9, 7, 11, 4]
    title = found.glyphs.line == 0
    assert title.sum() == len("Region-based") + len("segmentation")
    # letters touch at this resolution, but no line gains any
    letters = [42, 45, 47, 46, 22]
    for line, most in enumerate(letters, start=1):
        assert 0.7 * most <= (found.glyphs.line == line).sum() <= most


# ---- what must hold on any page


@settings(max_examples=60, deadline=None)
@given(masks(max_side=40), st.sampled_from([None, 300.0, 72.0]))
def test_any_page_is_read_and_every_component_has_one_glyph(mask, dpi):
    found = read(mask, dpi)
    glyphs, lines = found.glyphs, found.lines
    assert glyphs.component_glyph.shape == (found.components.n,)
    assert set(glyphs.component_glyph.tolist()) == set(range(len(glyphs.area)))
    assert glyphs.area.sum() == found.components.runs.area
    assert glyphs.parts.sum() == found.components.n
    assert set(glyphs.line[glyphs.line >= 0].tolist()) == set(range(len(lines.box)))
    assert np.isfinite(lines.baseline).all()
    assert (lines.x_height > 0).all()


@pytest.mark.parametrize("shape", [(0, 0), (0, 7), (7, 0), (1, 1), (1, 300), (300, 1)])
@pytest.mark.parametrize("ink", [False, True])
def test_pages_of_no_size_and_of_one_colour(shape, ink):
    found = read(np.full(shape, ink))
    assert len(found.glyphs.area) <= 1


def test_a_moved_page_has_the_same_lines_moved():
    page = set_text(PROSE, skew=0.8).ink
    moved = np.pad(page, ((37, 5), (91, 12)))
    one, other = read(page), read(moved)
    assert np.array_equal(one.glyphs.box + np.array([91, 37, 91, 37]), other.glyphs.box)
    assert np.array_equal(one.glyphs.word, other.glyphs.word)
    assert np.allclose(one.lines.baseline + np.array([91, 37]), other.lines.baseline, atol=1e-6)


def test_the_slices_of_a_word_are_made_of_its_runs():
    from scanclean.text.baselines import cut_slices
    from scanclean.text.textmeasure import measure_spread
    from scanclean.text.upright import place

    mask = bitmap(
        "##........##",
        "##........##",
        "############",
        "..........##",
    )
    components = label(RunSet.from_mask(mask))
    shapes = place(components, measure_spread(components), Frame())
    slices = cut_slices(components, shapes, np.array([True]), step=2.0)
    # a long run counts in its middle slice alone
    assert slices.x.tolist() == [1.0, 7.0, 11.0]
    assert slices.top.tolist() == [0.0, 2.0, 0.0]
    assert slices.bottom.tolist() == [2.0, 3.0, 4.0]

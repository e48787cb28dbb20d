from __future__ import annotations

import numpy as np
import pytest
from PIL import Image, ImageDraw, ImageFont

from fixtures.drawn import draw
from fixtures.sheet import new_sheet
from scanclean.clean import clean_page
from scanclean.recipe import Recipe
from scanclean.scans.pageio import Scan
from scanclean.score import match_boxes
from scanclean.text.words import number_words
from scanclean.units import Resolution
from tests.figures import hulls
from tests.reading import finished, read, set_text


def sequence(page, found) -> np.ndarray:
    """The truth's line of each glyph found, in the order found."""
    x, y = found.components.runs.points().T
    owner = found.glyphs.component_glyph[
        np.repeat(found.components.run_label, found.components.runs.length)
    ]
    true_line = page.line_map[y, x]
    n = len(found.glyphs.area)
    votes = np.zeros((n, true_line.max() + 1), np.int64)
    np.add.at(votes, (owner, true_line), 1)
    return votes.argmax(axis=1)


def paragraphs(sheet, texts, places, face="garamond", points=9.0):
    for text, (x, y) in zip(texts, places, strict=True):
        for k, row in enumerate(text):
            sheet.line()
            sheet.text(x, y + 4.6 * k, row, face, points)


LEFT = ["The keeper trims the light", "at six; wind north by east,", "a heavy swell in the bay,"]
RIGHT = ["gulls fly inland, and glass", "falls. The flag is hoisted", "on the pilot house again."]


def test_left_column_before_right_column():
    sheet = new_sheet((120.0, 50.0), skew=1.0)
    paragraphs(sheet, [LEFT * 2, RIGHT * 2], [(8.0, 10.0), (64.0, 10.0)])
    page = finished(sheet)
    assert (np.diff(sequence(page, read(page.ink))) >= 0).all()


def test_heading_then_columns_then_foot():
    sheet = new_sheet((120.0, 70.0), skew=-0.8)
    paragraphs(sheet, [["Notices to all Pilots of Saltmarrow"]], [(20.0, 10.0)], points=14.0)
    paragraphs(sheet, [LEFT * 2, RIGHT * 2], [(8.0, 20.0), (64.0, 20.0)])
    paragraphs(sheet, [["Printed for the harbour office and posted at the quay"]], [(22.0, 58.0)])
    page = finished(sheet)
    assert (np.diff(sequence(page, read(page.ink))) >= 0).all()


def test_a_date_at_the_right_comes_before_the_letter():
    sheet = new_sheet((120.0, 50.0))
    paragraphs(sheet, [["Marrow Point, 3 May"]], [(80.0, 10.0)])
    body = ["Sir,", *(f"{a} {b}" for a, b in zip(LEFT, RIGHT, strict=True))]
    paragraphs(sheet, [body], [(8.0, 18.0)])
    page = finished(sheet)
    assert (np.diff(sequence(page, read(page.ink))) >= 0).all()


def test_rows_of_a_table_are_read_across():
    page = draw("tides", seed=4, size=(150.0, 70.0), dirt=0.0, dotted=False)
    found = read(page.ink)
    assert (np.diff(sequence(page, found)) >= 0).all()


def test_glyphs_of_a_line_run_from_left_to_right():
    page = draw("printed", seed=5, size=(120.0, 50.0), face="italic", dirt=0.0, skew=3.0)
    glyphs = read(page.ink).glyphs
    middle = (glyphs.box[:, 0] + glyphs.box[:, 2]) / 2
    same = np.diff(glyphs.line) == 0
    # dots of slanted type lean over what follows; hardly any glyph is set back by that
    assert (np.diff(middle)[same] < 0).mean() < 0.01


@pytest.mark.parametrize(
    ("kind", "options", "least"),
    [
        ("typed", {}, 1.0),
        ("typed", {"pitch": 25.4 / 12, "dpi": 200.0, "skew": -1.2}, 1.0),
        ("printed", {"face": "serif"}, 0.99),
        ("printed", {"face": "sans", "points": 9.0, "dpi": 200.0}, 0.98),
        ("printed", {"face": "italic", "points": 12.0}, 0.97),
        ("printed", {"face": "garamond", "columns": 2, "skew": 2.0}, 0.97),
        ("handwritten", {"face": "cursive", "rule": None}, 0.93),
        ("ledger", {"skew": 0.5}, 0.97),
    ],
)
def test_words_of_whole_pages(kind, options, least):
    page = draw(kind, seed=31, **({"size": (130.0, 60.0), "dirt": 0.0} | options))
    found = read(page.ink, page.dpi)
    words = hulls(found.glyphs.box, found.glyphs.word)
    assert match_boxes(words, page.word_box, min_iou=0.75).f1 >= least


def test_lines_of_travel_documents_at_ten_characters_an_inch():
    # ICAO Doc 9303: TD3 2 x 44 and TD1 3 x 30 characters, 10 an inch, lines 6.35 mm apart (from
    # memory); set here in another fixed-pitch face
    td3 = [
        "P<SMWFENNIMORE<<JONAS<QUILL<<<<<<<<<<<<<<<<<",
        "L898902C36SMW7408122F1204159ZE184226B<<<<<10",
    ]
    td1 = [
        "I<SMWD231458907<<<<<<<<<<<<<<<",
        "7408122F1204159SMW<<<<<<<<<<<6",
        "FENNIMORE<<JONAS<QUILL<<<<<<<<",
    ]
    for rows, length in ((td3, 44), (td1, 30)):
        page = set_text(
            rows, face="typewriter", points=12.0, pitch=2.54, leading=1.5, size=(130.0, 32.0)
        )
        found = read(page.ink)
        assert np.bincount(found.glyphs.line).tolist() == [length] * len(rows)
        assert found.words() == [1] * len(rows)
        middle = (found.glyphs.box[:, 0] + found.glyphs.box[:, 2]) / 2
        pitch = np.polyfit(np.arange(length), middle[found.glyphs.line == 0], 1)[0]
        assert pitch == pytest.approx(30.0, abs=0.05)  # 2.54 mm at 300 dpi


def test_words_on_a_fixed_pitch_are_parted_by_empty_cells():
    # a wide m and a narrow i in cells of 10: the ink's own gaps say nothing
    cells = [c for word in range(6) for c in range(word * 4, word * 4 + 3)]
    width = np.where(np.arange(len(cells)) % 2, 9.0, 3.0)
    middle = np.array(cells) * 10.0 + 5
    word = number_words(
        np.zeros(len(cells), np.int64), middle - width / 2, middle + width / 2, np.array([9.0])
    )
    assert word.tolist() == [w for w in range(6) for _ in range(3)]


def test_words_by_the_gaps_of_the_line():
    widths = [8, 7, 9, 8, 6, 8, 9, 7, 8, 8, 5, 9]
    gaps = [2, 1, 2, 7, 2, 1, 6, 2, 2, 8, 1]
    left = np.concatenate(([0], np.cumsum(np.array(widths[:-1]) + gaps))).astype(float)
    line = np.zeros(12, np.int64)
    word = number_words(line, left, left + widths, np.array([10.0]))
    assert word.tolist() == [0, 0, 0, 0, 1, 1, 1, 2, 2, 2, 3, 3]


def test_no_line_no_word():
    none = np.empty(0)
    assert number_words(np.empty(0, np.int64), none, none, none).size == 0
    lone = number_words(np.array([-1, -1]), np.zeros(2), np.ones(2), none)
    assert lone.tolist() == [-1, -1]


def test_baselines_end_at_the_sides_of_the_line_box():
    page = set_text(["The keeper writes", "of oil and wick"], skew=2.0)
    lines = read(page.ink).lines
    assert (lines.baseline[:, 0, 0] == lines.box[:, 0]).all()
    assert (lines.baseline[:, 1, 0] == lines.box[:, 2]).all()
    slope = np.diff(lines.baseline[:, :, 1]) / np.diff(lines.baseline[:, :, 0])
    assert np.degrees(np.arctan(slope)) == pytest.approx(2.0, abs=0.3)


def test_small_captions_between_large_rows_are_read_row_by_row():
    image = Image.new("L", (1500, 900), 255)
    pen = ImageDraw.Draw(image)
    small, large = ImageFont.load_default(26), ImageFont.load_default(64)
    for row in range(5):
        pen.text((60, 40 + 165 * row), "Name of the vessel", font=small, fill=0)
        pen.text((70, 85 + 165 * row), "PATIENT HERON and five men", font=large, fill=0)
    scan = Scan(np.asarray(image), Resolution(300, 300), 1, 1, "form.png")
    lines = clean_page(scan, Recipe()).lines
    assert len(lines.box) == 10
    assert (np.diff(lines.box[:, 3]) > 0).all()

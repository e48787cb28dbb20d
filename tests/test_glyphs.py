from __future__ import annotations

import numpy as np
import pytest
from sklearn.datasets import load_digits

from fixtures.drawn import draw
from scanclean.score import match_boxes
from scanclean.sets.labels import label
from scanclean.sets.runs import RunSet
from scanclean.text.glyphs import join_parts
from scanclean.text.slant import line_slants
from scanclean.text.textmeasure import measure_spread
from scanclean.text.upright import place
from tests.reading import read, set_text


def true_boxes(page) -> np.ndarray:
    """Boxes of the drawn glyphs, those whose ink touches taken together."""
    from scipy import ndimage

    pieces, count = ndimage.label(page.glyph_map > 0, np.ones((3, 3), bool))
    glyphs = page.glyphs.box.shape[0]
    pairs = np.unique(np.stack((page.glyph_map[page.ink] - 1, pieces[page.ink] - 1)), axis=1)
    from scanclean.text.neighbours import chains

    n, group = chains(pairs[0], glyphs + pairs[1], glyphs + count)
    box = np.empty((n, 4), np.int64)
    box[:, :2], box[:, 2:] = 10**9, 0
    np.minimum.at(box[:, :2], group[:glyphs], page.glyphs.box[:, :2])
    np.maximum.at(box[:, 2:], group[:glyphs], page.glyphs.box[:, 2:])
    return box[box[:, 2] > 0]


def scattered(page, found) -> set[str]:
    """Characters that touch no other and whose parts are spread over several glyphs found."""
    x, y = found.components.runs.points().T
    owner = np.repeat(found.components.run_label, found.components.runs.length)
    drawn, got = page.glyph_map[y, x], found.glyphs.component_glyph[owner]
    pairs = np.unique(np.stack((owner, drawn)), axis=1)
    shared = np.bincount(pairs[0]) > 1
    touching = set(pairs[1, shared[pairs[0]]].tolist())
    return {
        character
        for number, character in enumerate(page.glyphs.character, start=1)
        if number not in touching and len(np.unique(got[drawn == number])) != 1
    }


SPECIMENS = [
    ("garamond", 10.0, 300.0),
    ("serif", 9.0, 600.0),
    ("old-style", 12.0, 300.0),
    ("italic", 11.0, 400.0),
]


@pytest.mark.parametrize(("face", "points", "dpi"), SPECIMENS)
def test_parts_of_a_character_are_one_glyph_and_each_mark_its_own(face, points, dpi):
    rows = [
        "Fill in: five jigs, 75 % or = 3; why? Look! Ibid.",
        "äöü ÄÖÜ éèêë íìîï ñ ã ô å Å É çà «né» “so” „da“",
        'it\'s "if" i.e. j.; half-way - end: fin! (jib) nil?',
    ]
    page = set_text(rows, face=face, points=points, dpi=dpi, size=(140.0, 32.0))
    found = read(page.ink, dpi)
    assert scattered(page, found) == set()
    matching = match_boxes(found.glyphs.box, true_boxes(page), min_iou=0.75)
    assert matching.recall == 1.0
    # the dot that grew together with an f is missing on its i
    assert matching.precision >= 0.96


@pytest.mark.parametrize(
    ("kind", "options", "least"),
    [
        ("typed", {"skew": 0.7}, 0.995),
        ("printed", {"face": "serif"}, 0.995),
        ("printed", {"face": "sans", "dpi": 200.0, "points": 9.0}, 0.99),
        ("printed", {"face": "garamond", "columns": 2, "skew": 2.0}, 0.99),
        ("printed", {"face": "garamond", "points": 7.0, "dpi": 400.0, "skew": -1.0}, 0.99),
        ("handwritten", {"face": "hand-print", "rule": None, "skew": 0.5}, 0.98),
    ],
)
def test_boxes_of_whole_pages(kind, options, least):
    page = draw(kind, seed=21, **({"size": (120.0, 60.0), "dirt": 0.0} | options))
    found = read(page.ink, page.dpi)
    assert match_boxes(found.glyphs.box, true_boxes(page), min_iou=0.75).f1 >= least


def test_broken_strokes_are_joined_to_their_letter():
    rows = ["hammer and tongs are kept", "behind the harbour office,", "in a locked shed; the key"]
    page = set_text(rows, points=14.0, size=(100.0, 35.0))
    whole = read(page.ink)
    ink = page.ink.copy()
    # every fourth letter is worn through at some height
    for k, (left, top, right, bottom) in enumerate(page.glyphs.box[::4].tolist()):
        ink[top + (bottom - top) * (3 + k % 4) // 9, left:right] = False
    worn = read(ink)
    assert label(RunSet.from_mask(ink)).n > label(RunSet.from_mask(page.ink)).n + 8
    matching = match_boxes(worn.glyphs.box, whole.glyphs.box, min_iou=0.75)
    assert matching.f1 >= 0.97


def test_glyphs_tell_their_parts_holes_and_area():
    page = set_text(["i% B o."], points=16.0, face="garamond", size=(60.0, 20.0))
    glyphs = read(page.ink).glyphs
    assert glyphs.parts.tolist() == [2, 3, 1, 1, 1]
    assert glyphs.holes.tolist() == [0, 2, 2, 1, 0]
    assert glyphs.area.sum() == page.ink.sum()
    # so 1 - holes is the Euler number of a one-part glyph (Gray 1971)
    assert (1 - glyphs.holes[glyphs.parts == 1]).tolist() == [-1, 0, 1]


@pytest.mark.parametrize(("face", "low", "high"), [("serif", -0.05, 0.05), ("italic", 0.15, 0.4)])
def test_slant_is_that_of_the_face(face, low, high):
    page = set_text(["Mill hill pilots tell", "little of the light"], face=face, points=14.0)
    found = read(page.ink)
    components, lines = found.components, found.found
    shapes = place(components, measure_spread(components), lines.frame)
    slants = line_slants(components, lines, lines.assign(shapes))
    assert ((slants >= low) & (slants <= high)).all()
    sheared = np.zeros((page.ink.shape[0], page.ink.shape[1] + 300), bool)
    y, x = np.nonzero(page.ink)
    sheared[y, x + 150 - np.round(0.3 * (y - 200)).astype(int)] = True
    leaning = read(sheared)
    components, lines = leaning.components, leaning.found
    shapes = place(components, measure_spread(components), lines.frame)
    more = line_slants(components, lines, lines.assign(shapes))
    assert more == pytest.approx(slants + 0.3, abs=0.08)


def test_real_handwritten_digits_in_rows_keep_their_boxes():
    # scikit-learn's digits: 8 x 8 grey pictures of real handwriting, three times enlarged
    pictures = load_digits().images[:120] / 16
    page = np.zeros((1000, 1000), bool)
    boxes, k = [], 0
    for row in range(8):
        for column in range(15):
            digit = np.kron(pictures[k], np.ones((4, 4))) > 0.4
            y, x = 60 + row * 110, 40 + column * 60
            page[y : y + 32, x : x + 32] = digit
            inked = np.argwhere(digit)
            (top, left), (bottom, right) = inked.min(axis=0), inked.max(axis=0) + 1
            boxes.append((x + left, y + top, x + right, y + bottom))
            k += 1
    found = read(page)
    assert len(found.lines.box) == 8
    matching = match_boxes(found.glyphs.box, np.array(boxes), min_iou=0.75)
    assert matching.f1 >= 0.98
    # and in reading order
    order = np.array([found.glyphs.box[:, 1] // 110, found.glyphs.box[:, 0] // 60]).T
    assert (np.diff(order[:, 0] * 100 + order[:, 1]) >= 0).all()


def test_parts_are_components_of_the_page_they_are_asked_for():
    page = set_text(["it is Friday; pay"], size=(80.0, 20.0))
    found = read(page.ink)
    parts = join_parts(found.components, found.found)
    assert parts.glyph.shape == (found.components.n,)
    assert parts.n == len(found.glyphs.area)
    nothing = label(RunSet.from_mask(np.zeros((20, 20), bool)))
    assert join_parts(nothing, found.found).n == 0

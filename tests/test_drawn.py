from __future__ import annotations

import math
from pathlib import Path

import numpy as np
import pytest
from PIL import Image
from scipy import ndimage

from fixtures.drawn import KINDS, VARIANTS, Hand, Ink, RuleStyle, Scanner, available, draw
from fixtures.make import SCANS, TIFF_PAGES
from fixtures.scanner import kanungo
from fixtures.sheet import new_sheet
from scanclean.score import contest_measures

FIXTURES = Path(__file__).parent.parent / "fixtures"
SPOTLESS = Scanner(
    paper=(0.9, 0.9, 0.9), noise=0.0, grain=0.0, mottle=0.0, light_fall=0.0, flare=0.0
)
EVEN = Hand()


@pytest.fixture(scope="module")
def ledger():
    return draw("ledger", seed=3, size=(110.0, 60.0), skew=0.8)


def test_the_same_arguments_give_the_same_page(ledger):
    again = draw("ledger", seed=3, size=(110.0, 60.0), skew=0.8)
    other = draw("ledger", seed=4, size=(110.0, 60.0), skew=0.8)
    assert np.array_equal(again.scan, ledger.scan)
    assert np.array_equal(again.glyph_map, ledger.glyph_map)
    assert not np.array_equal(other.scan, ledger.scan)


@pytest.mark.parametrize("kind", KINDS)
def test_every_kind_keeps_its_books(kind):
    page = draw(kind, seed=1, size=(148.0, 105.0), dpi=200.0, skew=1.0)
    # ISO 216: A6 is 105 x 148 mm, 827 x 1165 px at 200 dpi
    assert page.scan.shape == page.ink.shape == (827, 1165)
    assert not (page.glyph_map > 0)[~page.ink].any()
    if kind != "chart":  # which has ink that is no glyph
        assert (page.glyph_map > 0)[page.ink].all()
    assert not (page.mark_map > 0)[~page.ink].any()
    spans = ndimage.find_objects(page.glyph_map, max_label=len(page.glyphs))
    span = np.array([(x.start, y.start, x.stop, y.stop) for y, x in spans])
    off = np.abs(span - page.glyphs.box).max(axis=1)
    # a letter joined to its neighbours owns but a part of their common ink
    if kind != "handwritten":
        assert (off == 0).mean() > 0.75
        assert (off <= 1).mean() > 0.95
    assert (off <= 6).mean() > 0.95
    assert (np.diff(page.glyphs.line) >= 0).all()
    assert set(page.glyphs.line.tolist()) == set(range(len(page.lines)))
    assert all(
        page.glyphs.is_mark[page.mark_glyph]
        | np.isin([page.glyphs.character[glyph] for glyph in page.mark_glyph], list("ij?!"))
    )


def test_marks_are_the_dots_commas_and_accents():
    sheet = new_sheet((60.0, 12.0))
    sheet.text(3.0, 8.0, "jé: hi, ün?", "serif", 12.0)
    page = sheet.truth("marks", np.zeros(sheet.shape, np.uint8))
    owners = "".join(page.glyphs.character[glyph] for glyph in page.mark_glyph)
    assert owners == "jé::i,ü?"
    whole = [page.glyphs.character[glyph] for glyph in np.flatnonzero(page.glyphs.is_mark)]
    assert whole == [":", ","]
    sizes = np.bincount(page.mark_map.ravel())[1:]
    assert (sizes > 4).all()


def test_a_character_that_a_face_lacks_is_refused():
    sheet = new_sheet((40.0, 12.0))
    with pytest.raises(ValueError, match="has no '—'"):
        sheet.text(3.0, 8.0, "a—b", "sans", 12.0)


def test_typewriters_type_ten_or_twelve_to_the_inch():
    # pica and elite pitch: 30 and 25 px at 300 dpi (10 and 12 characters an inch)
    for pitch, step in ((25.4 / 10, 30.0), (25.4 / 12, 25.0)):
        sheet = new_sheet((110.0, 12.0))
        sheet.text(3.0, 8.0, "o" * 30, "typewriter", 9.0, pitch=pitch)
        box = sheet.truth("pitch", np.zeros(sheet.shape, np.uint8)).glyphs.box
        middles = (box[:, 0] + box[:, 2]) / 2
        assert (middles[-1] - middles[0]) / 29 == pytest.approx(step, abs=0.05)


def test_densities_add_where_a_stroke_crosses_a_rule():
    # Beer-Lambert: light passes one layer after the other
    sheet = new_sheet((40.0, 20.0))
    sheet.rule((2.0, 10.0), (38.0, 10.0), RuleStyle(1.0, 0.3))
    sheet.text(10.0, 16.0, "III", "sans", 40.0, ink=Ink(0.5, grain=0.0))
    light = sheet.light()[..., 0]
    page = sheet.truth("crossing", np.zeros(sheet.shape, np.uint8))
    square = np.ones((3, 3))
    ink, rule = (ndimage.binary_erosion(mask, square) for mask in (page.ink, page.rule))
    no_ink, no_rule = (~ndimage.binary_dilation(mask, square) for mask in (page.ink, page.rule))
    for where, density in ((ink & rule, 0.8), (ink & no_rule, 0.5), (no_ink & rule, 0.3)):
        assert where.any()
        assert -np.log10(light[where]) == pytest.approx(density, abs=1e-4)


def test_rules_are_as_thick_as_asked_under_skew_at_every_place():
    for skew in (0.0, 5.0):
        sheet = new_sheet((60.0, 40.0), skew=skew)
        sheet.rule((5.0, 20.0), (55.0, 20.0), RuleStyle(0.43, 0.6))
        covered = -np.log10(sheet.light()[..., 0]) > 0
        assert covered.any()
        # the light taken from a column, divided by what full coverage takes, is the thickness
        taken = (1 - sheet.light()[..., 0]).sum(axis=0) / (1 - 10**-0.6)
        middle = taken[200:500] * math.cos(math.radians(skew))
        assert middle == pytest.approx(0.43 / 25.4 * 300, abs=0.03)


def test_the_baseline_follows_the_skew():
    page = draw("printed", seed=2, size=(120.0, 60.0), skew=3.0)
    for line in page.lines:
        (x0, y0), (x1, y1) = line.baseline[0], line.baseline[-1]
        assert math.degrees(math.atan2(y1 - y0, x1 - x0)) == pytest.approx(3.0, abs=1e-6)


def test_curled_text_stays_on_its_curled_rule():
    page = draw("ledger", seed=5, size=(150.0, 60.0), curl=0.8, dirt=0.0, hand=EVEN)
    top = next(rule for rule in page.rules if rule.direction == "horizontal")
    x, y = top.centre[:, 0], top.centre[:, 1]
    straight = np.interp(x, x[[0, -1]], y[[0, -1]])
    assert np.abs(y - straight).max() > 5
    for place, height in zip(x.astype(int)[5:-5], y[5:-5], strict=True):
        assert page.rule[int(height), place]


def test_a_threshold_half_way_gives_the_truth_back():
    page = draw("printed", seed=6, size=(80.0, 40.0), dirt=0.0, scanner=SPOTLESS)
    half = 0.9 * 255 * (1 + 10**-1.2) / 2
    assert contest_measures(page.scan < half, page.ink).f_measure > 98.5


def test_bitonal_and_negative_scans():
    options = {"seed": 7, "size": (60.0, 40.0), "dpi": 200.0, "dirt": 0.0}
    bitonal = draw("printed", scanner=Scanner(bitonal=True), **options)
    assert bitonal.scan.dtype == bool
    assert contest_measures(bitonal.scan, bitonal.ink).f_measure > 95
    negative = draw("printed", scanner=Scanner(negative=True), **options)
    assert negative.scan[negative.ink].mean() > 150 > 80 > negative.scan[~negative.ink].mean()


def test_colour_scans_carry_the_rules_colour():
    red = RuleStyle(0.5, 0.6, colour=(0.1, 1.0, 0.9))
    page = draw("form", seed=8, size=(120.0, 40.0), colour=True, rule=red, dirt=0.0)
    alone = page.rule & ~ndimage.binary_dilation(page.ink, iterations=4)
    r, g, b = page.scan[ndimage.binary_erosion(alone, np.ones((3, 3)))].mean(axis=0)
    assert r > 1.8 * g
    assert r > 1.5 * b


def test_kanungo_degradation_flips_as_often_as_its_formula_says():
    # Kanungo, Haralick and Phillips 1993: exp(-alpha d^2) at alpha = 1: 0.367879 at d = 1,
    # 0.018316 at d = 2
    ink = np.zeros((400, 4000), bool)
    ink[:, 2000:] = True
    flipped = kanungo(ink, np.random.default_rng(0), share=1.0) ^ ink
    rate = flipped.mean(axis=0)
    for column, distance in ((1999, 1), (2000, 1), (1998, 2), (2001, 2)):
        chance = math.exp(-(distance**2))
        assert rate[column] == pytest.approx(chance, abs=4 * math.sqrt(chance / 400))
    assert not flipped[:, :1990].any()


def test_show_through_and_borders_are_no_ink():
    options = {"seed": 9, "size": (80.0, 50.0), "dpi": 200.0, "dirt": 0.0}
    plain = draw("printed", **options)
    shown = draw("printed", showing=0.2, **options)
    assert np.array_equal(plain.ink, shown.ink)
    assert shown.shade.any()
    bordered = draw("printed", borders=True, **options)
    assert bordered.edge.any()
    assert not (bordered.edge & bordered.ink).any()
    assert bordered.scan[bordered.edge].mean() < 60


@pytest.mark.parametrize("name", SCANS)
def test_committed_scans_are_those_that_are_drawn(name):
    path = FIXTURES / name
    assert path.stat().st_size < 400_000
    with Image.open(path) as image:
        stored = np.asarray(image).astype(int)
        dpi = image.info["dpi"]
    page = draw(**SCANS[name])
    assert stored.shape == page.scan.shape
    assert dpi == pytest.approx((page.dpi.x, page.dpi.y), abs=0.01)
    # another release of the font rasteriser may move an edge by a grey level
    assert np.abs(stored - page.scan).mean() < 0.5


@pytest.mark.parametrize("name", TIFF_PAGES)
def test_committed_tiffs_are_those_that_are_drawn(name):
    assert (FIXTURES / name).stat().st_size < 400_000
    with Image.open(FIXTURES / name) as image:
        assert image.n_frames == len(TIFF_PAGES[name])
        for number, options in enumerate(TIFF_PAGES[name]):
            image.seek(number)
            assert image.info["compression"] == "group4"
            assert image.info["dpi"] == (300.0, 300.0)
            stored = ~np.asarray(image)
            assert (stored != draw(**options).scan).mean() < 0.002


def test_the_variants_are_many_and_most_can_be_drawn_anywhere():
    assert len(VARIANTS) >= 24
    assert sum(map(available, VARIANTS)) >= len(VARIANTS) - 1

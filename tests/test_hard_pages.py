"""The way through hard pages: contrast, outlines, relaxation, solids and shade."""

from __future__ import annotations

import numpy as np
import pytest
from scipy import ndimage

from fixtures.drawn import Ink, Scanner, draw
from scanclean.ink.contrast import INK, Contrast, close_paper, measure_contrast
from scanclean.ink.density import measure_tone
from scanclean.ink.outlines import find_outlines
from scanclean.ink.relaxation import outline_level, relaxed_ink
from scanclean.ink.shade import find_shade
from scanclean.ink.solids import fill_solids
from scanclean.ink.threshold import ThresholdSettings, is_clean, threshold
from scanclean.score import contest_measures
from scanclean.sets.runs import RunSet
from scanclean.units import Resolution
from tests.greys import bars

DPI = Resolution(300, 300)
BOX = np.ones((3, 3), bool)


def hard(page):
    """Contrast, outlines and relaxed ink of a dark-on-light page."""
    contrast = measure_contrast(page, measure_tone(page).stroke_px)
    outlines = find_outlines(contrast)
    return contrast, outlines, relaxed_ink(contrast, outlines)


def blurred(page, sigma, noise=0.0, seed=1):
    soft = ndimage.gaussian_filter(page.astype(float), sigma)
    soft += np.random.default_rng(seed).normal(0, noise, page.shape)
    return np.clip(np.round(soft), 0, 255).astype(np.uint8)


# ---- contrast


def test_paper_is_followed_into_a_stain_and_not_into_strokes():
    page = bars(600, 600, paper=220, ink=60).astype(float)
    stained = page.copy()
    stained[200:420, 150:450] *= 0.6
    paper = close_paper(stained.astype(np.uint8), 5.0).rows(slice(None))
    assert np.abs(paper[240:380, 190:410] / (0.6 * 220) - 1).max() < 0.04
    assert np.abs(paper[:160] / 220 - 1).max() < 0.04


def test_contrast_of_ink_is_the_same_on_and_off_a_stain():
    page = bars(600, 600, paper=220, ink=60).astype(float)
    stained = page.copy()
    stained[200:420, 150:450] *= 0.75
    values = measure_contrast(stained.astype(np.uint8), 5.0).values
    inside = np.zeros(page.shape, bool)
    inside[240:380, 190:410] = True
    ink = page == 60
    assert np.median(values[ink & inside]) == pytest.approx(INK, rel=0.05)
    assert np.median(values[ink & ~inside]) == pytest.approx(INK, rel=0.05)
    assert np.percentile(values[~ink & inside], 99) < 0.1 * INK


# ---- outlines


def test_the_outline_of_a_step_is_one_pixel_wide_and_halfway_up():
    values = np.zeros((40, 60), np.uint8)
    values[:, 30:] = 160
    outlines = find_outlines(Contrast(values, 4.0))
    row, column = np.divmod(outlines.position, 60)
    assert sorted(row) == list(range(1, 39))
    assert set(column) <= {29, 30}
    assert len(set(column)) == 1
    # Sobel: half of the step is seen from either side of it
    assert outlines.slope == pytest.approx(np.full(38, 80.0))


def test_outlines_against_scikit_image():
    from skimage.feature import canny

    # strokes of every contrast from none to full, so that both thresholds have their say;
    # scikit-image's Sobel slopes are eight times ours
    strokes = (255 - bars(300, 300, paper=255, ink=75)).astype(float)
    values = blurred(strokes * np.linspace(0, 1, 300), 1.2, noise=2)
    theirs = canny(
        values.astype(float),
        sigma=0,
        low_threshold=8 * 0.075 * INK,
        high_threshold=8 * 0.175 * INK,
    )
    ours = np.zeros(values.shape, bool)
    ours.ravel()[find_outlines(Contrast(values, 5.0)).position] = True
    assert theirs.sum() > 500
    assert (ours & ndimage.binary_dilation(theirs, BOX)).sum() > 0.98 * ours.sum()
    assert (theirs & ndimage.binary_dilation(ours, BOX)).sum() > 0.98 * theirs.sum()


def test_a_weak_outline_counts_where_it_joins_a_strong_one():
    values = np.zeros((60, 80), np.uint8)
    values[:30, 40:] = 120  # slope 60 a pixel
    values[30:, 40:] = 40  # slope 20: between weak and strong
    values[20:50, 8:20] = 40  # as weak, and alone
    column = find_outlines(Contrast(values, 4.0)).position % 80
    rows = find_outlines(Contrast(values, 4.0)).position // 80
    assert (rows > 40).any()
    assert (column > 30).all()


@pytest.mark.parametrize("shape", [(1, 1), (2, 9), (9, 2)])
def test_pages_too_small_for_a_slope(shape):
    assert find_outlines(Contrast(np.full(shape, 90, np.uint8), 4.0)).position.size == 0


# ---- relaxation


def test_the_level_of_outlines_is_half_of_the_strokes_near_by():
    # slanted strokes, as outlines lie anywhere between pixels; of contrast 180 on the left, of 90
    # on the right
    y, x = np.mgrid[:300, :400]
    cover = np.clip(3.5 - np.abs((x + 0.13 * y) % 30 - 15), 0, 1)
    values = cover * np.where(x < 200, 180, 90)
    contrast = Contrast(blurred(values, 0.8), 6.0)
    level = outline_level(contrast, find_outlines(contrast)).rows(slice(None))
    assert np.median(level[100:200, 30:150]) == pytest.approx(90, rel=0.06)
    assert np.median(level[100:200, 260:380]) == pytest.approx(45, rel=0.06)


def test_ink_is_exact_where_outlines_are_split_in_half(monkeypatch):
    monkeypatch.setattr("scanclean.ink.relaxation._FULL_OUTLINE", (20.0, 30.0))
    truth = bars(400, 400) == 40
    page = blurred(bars(400, 400, paper=210, ink=70), 1.0, noise=6)
    _, _, ink = hard(page)
    assert contest_measures(ink, truth).f_measure > 98


def test_ink_takes_its_outline_in_and_no_more():
    truth = bars(400, 400) == 40
    page = blurred(bars(400, 400, paper=210, ink=70), 1.0, noise=6)
    _, _, ink = hard(page)
    wider = ndimage.binary_dilation(truth, BOX)
    assert (truth & ~ink).sum() < 0.01 * truth.sum()
    assert (ink & ~wider).sum() < 0.002 * truth.sum()
    assert (ink & ~truth).sum() > 0.1 * truth.sum()


def test_ink_does_not_depend_on_how_the_page_is_cut_into_tiles(monkeypatch):
    page = blurred(bars(300, 500, paper=210, ink=90), 1.0, noise=8)
    _, _, ink = hard(page)
    monkeypatch.setattr("scanclean.ink.relaxation._TILE", (17, 40))
    monkeypatch.setattr("scanclean.ink.outlines._STRIP", 500 * 9)
    _, _, in_small_tiles = hard(page)
    assert (ink == in_small_tiles).all()


def test_ink_of_the_turned_page_is_the_ink_turned():
    page = blurred(bars(320, 480, paper=210, ink=90), 1.0, noise=5)
    _, _, ink = hard(page)
    _, _, turned = hard(np.ascontiguousarray(page.T))
    # steps of contrast that are halves to the last bit may be rounded to either side
    assert np.count_nonzero(turned.T ^ ink) < 0.01 * ink.sum()


# ---- solids


def solid_page():
    """Strokes, a bar and a block far wider than they are, on noisy paper."""
    page = bars(660, 700, paper=210, ink=80)
    page[280:] = 210
    page[300:360, 60:640] = 80
    page[400:600, 100:400] = 80
    return blurred(page, 1.0, noise=6), page == 80


def test_solids_are_filled():
    page, truth = solid_page()
    _, _, ink = hard(page)
    hollow = contest_measures(ink, truth).recall
    filled = fill_solids(RunSet.from_mask(ink), page, stroke_px=5.0).to_mask()
    assert hollow < 80
    assert contest_measures(filled, truth).recall > 99
    assert contest_measures(filled, ndimage.binary_dilation(truth, BOX)).precision > 99.5


def test_holes_of_letters_and_frames_stay_open():
    page = np.full((200, 200), 210, np.uint8)
    page[40:160, 40:160] = 80
    page[46:154, 46:154] = 210
    rings = RunSet.from_mask(page == 80)
    assert fill_solids(rings, page, stroke_px=5.0) == rings


# ---- shade


def test_blurred_faint_pieces_are_shade_and_sharp_faint_ones_are_not():
    strokes = np.zeros((400, 600))
    for left in range(20, 590, 20):
        strokes[40:380, left : left + 5] = INK
    ink = strokes > 0
    third = np.zeros(strokes.shape)
    third[:, :200], third[:, 200:400], third[:, 400:] = 1, 1 / 3, 1 / 2
    sharp = ndimage.gaussian_filter(strokes * third, 1.0)
    soft = ndimage.gaussian_filter(strokes * third, 3.0)
    values = np.where(np.arange(600) < 400, sharp, soft)
    contrast = Contrast(np.round(values).astype(np.uint8), 5.0)
    shade = find_shade(RunSet.from_mask(ink), contrast, find_outlines(contrast)).to_mask()
    assert not shade[:, :400].any()
    assert shade[:, 410:].sum() > 0.99 * ink[:, 410:].sum()


def test_shade_is_made_of_whole_components():
    page = draw("printed", seed=11, size=(80.0, 50.0), showing=0.2, stains=2).scan
    contrast, outlines, ink = hard(page)
    shade = find_shade(RunSet.from_mask(ink), contrast, outlines).to_mask()
    labels, n = ndimage.label(ink, BOX)
    kinds = [set(shade[labels == k]) for k in range(1, n + 1)]
    assert shade.any()
    assert all(len(kind) == 1 for kind in kinds)


def test_no_ink_no_shade():
    contrast = Contrast(np.zeros((50, 60), np.uint8), 4.0)
    nothing = RunSet.empty((50, 60))
    assert find_shade(nothing, contrast, find_outlines(contrast)) == nothing


# ---- the choice, and the whole way

CLEAN = {
    "ledger": {},
    "typed": {"dpi": 200.0},
    "printed": {"dpi": 600.0, "size": (60.0, 40.0)},
    "form": {"scanner": Scanner(light_fall=0.5)},
    "tides": {"skew": 1.0},
    "handwritten": {"scanner": Scanner(jpeg=80)},
}
HARD = {
    "shown through": {"showing": 0.18},
    "stained": {"stains": 4, "scanner": Scanner(light_fall=0.4)},
    "faded": {"ink": Ink(0.3), "scanner": Scanner(blur=0.09)},
    "grainy": {"scanner": Scanner(noise=9.0)},
}


@pytest.mark.parametrize("kind", CLEAN)
def test_clean_pages_take_the_short_way(kind):
    page = draw(kind, seed=21, **{"size": (110.0, 70.0), **CLEAN[kind]})
    tone = measure_tone(page.scan, resolution=page.dpi)
    assert is_clean(tone)
    found = threshold(page.scan, tone, ThresholdSettings(), page.dpi)
    assert not found.shade
    counts = ~(page.rule | page.dirt)
    ink = found.ink.to_mask()
    assert contest_measures(ink & counts, page.ink & counts).f_measure > 95


@pytest.mark.parametrize("kind", HARD)
def test_hard_pages_take_the_long_way(kind):
    page = draw("printed", seed=22, size=(110.0, 70.0), points=11.0, **HARD[kind])
    tone = measure_tone(page.scan, resolution=page.dpi)
    assert not is_clean(tone)
    found = threshold(page.scan, tone, ThresholdSettings(), page.dpi)
    ink = (found.ink - found.shade).to_mask()
    # within a pixel, as outlines are counted in: what is missing, what is more, dirt left out
    wider, core = (
        ndimage.binary_dilation(page.ink | page.dirt, BOX),
        ndimage.binary_erosion(page.ink, BOX),
    )
    assert (core & ~ink).sum() < 0.02 * core.sum()
    assert (ink & ~wider).sum() < 0.02 * page.ink.sum()
    glyphs = np.unique(page.glyph_map[page.ink & ~page.dirt])
    found_glyphs = np.unique(page.glyph_map[ink])
    assert np.isin(glyphs, found_glyphs).mean() > 0.99

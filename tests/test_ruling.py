from __future__ import annotations

from dataclasses import replace

import numpy as np
import pytest
import skimage.data
from hypothesis import given, settings
from hypothesis import strategies as st
from scipy import ndimage
from sklearn.datasets import load_digits

from fixtures.drawn import draw_variant
from scanclean.ink.density import measure_tone
from scanclean.ink.threshold import ThresholdSettings, threshold
from scanclean.rules.ruling import RuleSettings, find_rules
from scanclean.sets.runs import RunSet, transpose
from scanclean.units import Length, Resolution
from tests.ruled import INK_RATIO, Page, box, line, strip, strip_bitonal

SHAPE = (420, 900)
EIGHT = np.ones((3, 3), bool)


# ---- where rules are


@pytest.mark.parametrize("dpi", [150, 300, 600])
@pytest.mark.parametrize(("slope", "mm"), [(0.0, 0.35), (0.013, 0.2), (-0.03, 0.35), (0.034, 0.5)])
def test_centre_thickness_and_ends_of_a_rule(dpi, slope, mm):
    scale = dpi / 300
    shape = (round(500 * scale), round(1100 * scale))
    page = Page(shape, dpi=Resolution(dpi, dpi))
    centre, thickness = 250.3 * scale, mm * dpi / 25.4
    start, stop = round(100 * scale), round(1000 * scale)
    page.rule(
        line(shape, centre=centre, thickness=thickness, slope=slope, start=start, stop=stop), 0.7
    )
    _, found = strip(page.scan(), page.dpi)
    (rule,) = found.rules
    assert rule.direction == "horizontal"
    assert rule.evidence == "density"
    x, y = rule.centre.T
    assert np.abs(y - (centre + slope * x)).max() < 0.12
    # blur widens a line that is as thin as the blur itself
    assert rule.thickness_px == pytest.approx(thickness, abs=0.35 + 0.6 / thickness)
    left, top, right, bottom = rule.box
    assert abs(left - start) <= 2
    assert abs(right - stop) <= 2
    ends = centre + slope * np.array([start, stop])
    assert abs(top - (ends.min() - thickness / 2)) < 2.5
    assert abs(bottom - (ends.max() + thickness / 2)) < 2.5


def test_the_density_of_a_rule_is_measured():
    for density in (0.2, 0.6, 1.0):
        page = Page(SHAPE)
        page.rule(line(SHAPE, centre=200.5, thickness=9), density)
        _, found = strip(page.scan())
        assert found.rules[0].density == pytest.approx(density, abs=0.06)


def test_rules_come_from_top_to_bottom_then_from_left_to_right():
    page = Page(SHAPE)
    for y in (310, 90, 200):
        page.rule(line(SHAPE, centre=y, thickness=3))
    for x in (700, 150):
        page.rule(line(SHAPE[::-1], centre=x, thickness=3).T)
    _, found = strip(page.scan())
    middle = [np.round(rule.centre.mean(axis=0)).astype(int).tolist() for rule in found.rules]
    assert [rule.direction for rule in found.rules] == ["horizontal"] * 3 + ["vertical"] * 2
    assert [y for _, y in middle[:3]] == [90, 200, 310]
    assert [x for x, _ in middle[3:]] == [150, 700]


def form():
    page = Page((560, 900))
    for y in (60, 190, 320):
        page.rule(line(page.shape, centre=y, thickness=3, start=70, stop=830))
    for x in (70, 400, 830):
        page.rule(line(page.shape[::-1], centre=x, thickness=3, start=60, stop=320).T)
    page.text(left=120, baseline=189, count=9)
    page.text(left=330, baseline=314, count=12)
    # a comb: a rule with ticks of 4.5 mm, letters between them
    page.rule(line(page.shape, centre=480, thickness=3, start=100, stop=760))
    for x in range(100, 770, 66):
        page.rule(line(page.shape[::-1], centre=x, thickness=3, start=427, stop=481).T)
    page.text(left=130, baseline=470, pitch=66, count=9)
    return page


def test_a_transposed_page_gives_the_transposed_result():
    tone = measure_tone(form().scan())
    ink = RunSet.from_mask(tone.ratio < INK_RATIO * 255)
    found = find_rules(ink, tone, Resolution(300, 300), RuleSettings())
    over = replace(tone, ratio=np.ascontiguousarray(tone.ratio.T))
    turned = find_rules(transpose(ink), over, Resolution(300, 300), RuleSettings())
    assert transpose(turned.taken) == found.taken
    flipped = {(y0, x0, y1, x1) for x0, y0, x1, y1 in (rule.box for rule in turned.rules)}
    assert flipped == {rule.box for rule in found.rules}


# ---- strokes on rules


def test_densities_of_crossing_layers_add():
    """Beer-Lambert: a stroke of 0.9 over a rule of 0.4 lets 10^-1.3 of the light through, and what
    is darker than the rule's own 10^-0.4 is the stroke."""
    page = Page(SHAPE)
    page.rule(box(SHAPE, 0, 200, 900, 205), 0.4)
    for x in range(60, 860, 80):
        page.stroke(box(SHAPE, x, 150, x + 6, 260), 0.9)
    light = page.scan(blur=0, noise=0)
    assert light[202, 62] == round(230 * 10**-1.3)
    assert light[202, 50] == round(230 * 10**-0.4)
    ink, found = strip(light)
    without = page.scan(blur=0, noise=0, rules=False)
    assert ink - found.taken == RunSet.from_mask(without < INK_RATIO * 230)
    assert not found.mended


@pytest.mark.parametrize("density", [0.25, 0.5, 0.8, 1.0])
@pytest.mark.parametrize("slope", [0.0, 0.012])
def test_letters_on_a_rule_stay_whole_and_nothing_of_the_rule_stays(density, slope):
    page = Page(SHAPE)
    for y in (120, 220, 320):
        page.rule(line(SHAPE, centre=y, thickness=3.4, slope=slope), density)
        for left in (80, 400, 640):
            page.text(left=left, baseline=round(y + slope * (left + 90)) + 1)
    ink, found = strip(page.scan())
    assert len(found.rules) == 3
    kept = (ink - found.taken).to_mask()
    strokes = page.light(page.strokes, 0.6) < INK_RATIO
    truth = strokes & ink.to_mask()
    assert (truth & ~kept).sum() <= 0.01 * truth.sum()
    away = kept & ~ndimage.binary_dilation(strokes, EIGHT, iterations=2)
    assert away.sum() == 0  # nor any of its fringe
    before, after = ndimage.label(truth, EIGHT)[1], ndimage.label(truth & kept, EIGHT)[1]
    assert after == before


def test_an_opening_by_long_lines_cuts_what_subtraction_keeps():
    page = form()
    ink, found = strip(page.scan())
    mask = ink.to_mask()
    opened = mask & ~ndimage.binary_opening(mask, np.ones((1, 60)))
    opened &= ~ndimage.binary_opening(mask, np.ones((60, 1)))
    strokes = page.light(page.strokes, 0.6) < INK_RATIO
    lost = [(strokes & mask & ~kept).sum() for kept in ((ink - found.taken).to_mask(), opened)]
    assert lost[0] < 0.02 * lost[1]


def test_a_stroke_that_lies_along_a_rule_stays():
    page = Page(SHAPE)
    page.rule(line(SHAPE, centre=200, thickness=4), 0.5)
    page.stroke(box(SHAPE, 300, 198, 360, 203))  # a bar as thick as the rule, right on it
    ink, found = strip(page.scan())
    kept = (ink - found.taken).to_mask()
    assert kept[199:202, 304:356].all()
    assert not kept[:, 370:].any()


def test_rules_as_dark_as_the_scanner_sees_are_judged_by_shape():
    page = Page(SHAPE)
    for y in (120, 260):
        page.rule(line(SHAPE, centre=y, thickness=4), 1.0)
        page.text(left=100, baseline=y + 12, count=26, height=40)
    grey = np.maximum(page.scan(noise=0), 40)  # flare: neither rule nor crossing gets darker
    ink, found = strip(grey)
    assert [rule.evidence for rule in found.rules] == ["shape", "shape"]
    kept = (ink - found.taken).to_mask()
    strokes = page.light(page.strokes, 0.6) < INK_RATIO
    assert (strokes & ~kept).sum() < 0.02 * strokes.sum()
    assert (kept & ~ndimage.binary_dilation(strokes, EIGHT, iterations=4)).sum() == 0


def test_a_faded_and_broken_rule_goes_whole():
    page = Page(SHAPE)
    share = line(SHAPE, centre=200, thickness=4, slope=0.004)
    for left in (130, 420, 690):
        share[:, left : left + 30] = 0
    page.rule(share * (0.55 + 0.45 * np.cos(np.arange(900) / 140)), 0.8)
    page.text(left=300, baseline=203, count=5)
    ink, found = strip(page.scan())
    strokes = page.light(page.strokes, 0.6) < INK_RATIO
    kept = (ink - found.taken).to_mask()
    assert (kept & ~ndimage.binary_dilation(strokes, EIGHT, iterations=2)).sum() == 0
    assert (strokes & ~kept).sum() <= 0.01 * strokes.sum()


@pytest.mark.parametrize("gap", [4, 7, 12])
def test_double_rules_go_both(gap):
    page = Page(SHAPE)
    page.rule(line(SHAPE, centre=200, thickness=2.4, slope=0.007))
    page.rule(line(SHAPE, centre=200 + gap + 2.4, thickness=2.4, slope=0.007))
    page.text(left=200, baseline=207, count=12)
    ink, found = strip(page.scan())
    strokes = page.light(page.strokes, 0.6) < INK_RATIO
    kept = (ink - found.taken).to_mask()
    assert (kept & ~ndimage.binary_dilation(strokes, EIGHT, iterations=2)).sum() == 0
    assert (strokes & ink.to_mask() & ~kept).sum() <= 0.01 * strokes.sum()


# ---- frames, combs, dashes


def test_sides_of_boxes_and_ticks_of_combs_go_and_letters_stay():
    page = form()
    ink, found = strip(page.scan())
    strokes = page.light(page.strokes, 0.6) < INK_RATIO
    kept = (ink - found.taken).to_mask()
    assert (kept & ~ndimage.binary_dilation(strokes, EIGHT, iterations=2)).sum() == 0
    assert (strokes & ink.to_mask() & ~kept).sum() <= 0.01 * strokes.sum()
    assert len(found.rules) == len(page.rules)


def test_ticks_stay_where_frames_are_not_wanted():
    page = form()
    _, found = strip(page.scan(), frames=False)
    ticks = [rule for rule in found.rules if rule.box[1] > 400 and rule.direction == "vertical"]
    assert not ticks
    assert len(found.rules) == 3 + 3 + 1


def row_of_marks(page, *, top, length, pitch, height, left=80, right=820):
    for x in range(left, right - length, pitch):
        page.stroke(box(page.shape, x, top, x + length, top + height))


@pytest.mark.parametrize(("length", "pitch", "height"), [(4, 10, 4), (40, 60, 4), (5, 16, 5)])
def test_dotted_and_dashed_rules_go(length, pitch, height):
    page = Page(SHAPE)
    row_of_marks(page, top=200, length=length, pitch=pitch, height=height)
    ink, found = strip(page.scan())
    (rule,) = found.rules
    assert found.taken == ink
    assert rule.dash == pytest.approx((length, pitch - length), abs=2)
    assert strip(page.scan(), dashed=False)[1].taken.area == 0


@pytest.mark.parametrize(
    ("length", "pitch", "height"),
    [(15, 30, 4), (24, 30, 4), (5, 30, 5), (60, 110, 5)],
    ids=["hyphens", "equals signs", "full stops", "long dashes"],
)
def test_rows_of_typed_marks_stay(length, pitch, height):
    page = Page(SHAPE)
    for top in (100, 112, 250):
        row_of_marks(page, top=top, length=length, pitch=pitch, height=height)
    _, found = strip(page.scan())
    assert found.rules == ()
    assert not found.taken


def test_a_line_of_typed_underscores_is_a_rule():
    page = Page(SHAPE)
    page.stroke(box(SHAPE, 100, 200, 700, 204))
    ink, found = strip(page.scan())
    assert found.taken == ink


# ---- what is no rule


def test_bars_blocks_and_barcodes_stay():
    page = Page((700, 1000))
    page.stroke(box(page.shape, 60, 60, 400, 200))  # a solid block
    for x in range(500, 760, 17):
        page.stroke(box(page.shape, x, 60, x + 4 + x % 7, 280))  # bars of 18 mm
    for x in range(60, 500, 110):  # a big E: 9 mm high, its bars 6 mm long and 0.7 mm thick
        page.stroke(box(page.shape, x, 400, x + 12, 506))
        for y in (400, 449, 498):
            page.stroke(box(page.shape, x, y, x + 70, y + 8))
    page.stroke(box(page.shape, 600, 450, 780, 454))  # a dash of 15 mm
    _, found = strip(page.scan())
    assert found.rules == ()
    assert not found.taken


def test_a_wavy_stroke_stays():
    page = Page(SHAPE)
    x = np.arange(900)
    y = 200 + 14 * np.sin(x / 70)
    page.stroke((np.abs(np.arange(420)[:, None] - y) < 2.5).astype(float))
    _, found = strip(page.scan())
    assert not found.taken


@pytest.mark.parametrize("variant", ["typed", "serif", "chart: no rules", "serif 150 dpi"])
def test_nothing_is_taken_from_pages_without_rules(variant):
    drawn = draw_variant(variant)
    ink, tone = inked(drawn)
    found = find_rules(ink, tone, drawn.dpi, RuleSettings())
    assert found.rules == ()
    assert not found.taken


# ---- settings


def test_settings_choose_the_lines():
    page = form()
    grey = page.scan()
    directions = {
        wanted: {rule.direction for rule in strip(grey, directions=wanted)[1].rules}
        for wanted in ("both", "horizontal", "vertical")
    }
    assert directions == {
        "both": {"horizontal", "vertical"},
        "horizontal": {"horizontal"},
        "vertical": {"vertical"},
    }
    assert strip(grey, enabled=False)[1].rules == ()
    assert len(strip(grey, min_length=Length(60, "mm"), frames=False)[1].rules) == 3
    assert strip(grey, max_thickness=Length(1, "px"))[1].rules == ()


def test_rules_that_lean_too_much_stay():
    page = Page(SHAPE)
    slope = np.tan(np.radians(4))
    page.rule(line(SHAPE, centre=150, thickness=4, slope=slope))
    assert strip(page.scan())[1].rules == ()  # alone it is a stroke of a drawing
    page.rule(line(SHAPE, centre=250, thickness=4, slope=slope))
    page.rule(line(SHAPE[::-1], centre=430, thickness=4, slope=-slope).T)
    assert len(strip(page.scan())[1].rules) == 3
    assert strip(page.scan(), max_skew=2.0)[1].rules == ()


# ---- bitonal pages


def test_strokes_through_a_rule_stay_whole_on_a_bitonal_page():
    page = Page(SHAPE)
    page.rule(line(SHAPE, centre=200, thickness=5, slope=0.01), 1.0)
    strokes = np.zeros(SHAPE, bool)
    rows, columns = np.mgrid[: SHAPE[0], : SHAPE[1]]
    for x, lean in [(150, 0.0), (300, 0.4), (450, -0.4), (600, 0.9), (750, -0.9)]:
        strokes |= (np.abs(columns - x - lean * (rows - 205)) < 3 * np.hypot(1, lean)) & (
            np.abs(rows - 205) < 50
        )
    rule = page.light(page.rules, 0) < INK_RATIO
    ink, found = strip_bitonal(rule | strokes)
    assert [r.evidence for r in found.rules] == ["shape"]
    kept = (ink - found.taken).to_mask()
    assert (strokes & ~kept).sum() <= 0.01 * strokes.sum()
    assert (kept & ~strokes).sum() <= 0.02 * strokes.sum()


@pytest.mark.parametrize("x", [140, 600])
def test_a_bowl_that_closes_inside_a_rule_is_closed(x):
    ring = np.zeros(SHAPE, bool)
    rows, columns = np.mgrid[: SHAPE[0], : SHAPE[1]]
    away = np.hypot(rows - 184.5, columns - x)
    ring |= (away > 12) & (away < 17)
    rule = np.zeros(SHAPE, bool)
    rule[198:203] = True
    ink, found = strip_bitonal(ring | rule)
    kept = (ink - found.taken).to_mask()
    assert ndimage.label(~kept)[1] == 2  # the paper inside is still shut off
    assert not kept[:, : x - 40].any()


# ---- laws, whatever the page


@settings(max_examples=40, deadline=None)
@given(st.integers(0, 2**32 - 1))
def test_taken_is_ink_and_mended_is_not(seed):
    rng = np.random.default_rng(seed)
    shape = tuple(rng.integers(1, 400, 2).tolist())
    grey = rng.normal(230, rng.uniform(0, 40), shape)
    for _ in range(rng.integers(0, 12)):
        y, x = rng.integers(0, shape[0]), rng.integers(0, shape[1])
        high, wide = rng.choice([1, 3, 8, 300], 2)
        grey[y : y + high, x : x + wide] *= rng.uniform(0, 1)
    grey = np.clip(grey, 0, 255).astype(np.uint8)
    for ink, found in (strip(grey), strip_bitonal(grey < 140)):
        assert found.taken <= ink
        assert not found.mended & ink
        for rule in found.rules:
            left, top, right, bottom = rule.box
            assert 0 <= left < right <= shape[1]
            assert 0 <= top < bottom <= shape[0]
            assert np.isfinite(rule.centre).all()


@pytest.mark.parametrize("shape", [(1, 1), (1, 300), (300, 1), (3, 3)])
def test_tiny_pages(shape):
    for value in (0, 255):
        ink, found = strip_bitonal(np.full(shape, value == 0))
        assert found.taken <= ink


def test_graph_paper_goes_and_leaves_its_curve():
    page = Page((800, 800))
    for place in range(12, 800, 12):  # a millimetre at 300 dpi
        page.rule(line(page.shape, centre=place, thickness=1.6), 0.35)
        page.rule(line(page.shape, centre=place, thickness=1.6).T, 0.35)
    rows, columns = np.mgrid[:800, :800]
    page.stroke((np.abs(rows - 350 - 200 * np.sin(columns / 110)) < 5).astype(float))
    ink, found = strip(page.scan())
    strokes = page.light(page.strokes, 0.6) < INK_RATIO
    kept = (ink - found.taken).to_mask()
    assert len(found.rules) == 2 * 66
    assert (kept & ~ndimage.binary_dilation(strokes, EIGHT, iterations=3)).sum() == 0
    assert (strokes & ~kept).sum() <= 0.01 * strokes.sum()


# ---- whole pages


def inked(drawn):
    if drawn.scan.dtype == bool:
        return RunSet.from_mask(drawn.scan), None
    grey = drawn.scan
    tone = measure_tone(grey, resolution=drawn.dpi)
    return threshold(grey, tone, ThresholdSettings(), drawn.dpi).ink, tone


def figures(drawn):
    """Rule left away from ink, ink lost on and beside rules, glyphs that lose more than a tenth,
    strokes taken away from rules; shares."""
    ink, tone = inked(drawn)
    found = find_rules(ink, tone, drawn.dpi, RuleSettings())
    before, after = ink.to_mask(), (ink - found.taken).to_mask()
    near_ink = ndimage.binary_dilation(drawn.ink, EIGHT, iterations=3)
    rule = drawn.rule & before & ~near_ink
    near = drawn.ink & before & ndimage.binary_dilation(drawn.rule, EIGHT, iterations=2)
    far = drawn.ink & before & ~ndimage.binary_dilation(drawn.rule, EIGHT, iterations=4)
    had = np.bincount(drawn.glyph_map[before & drawn.ink], minlength=len(drawn.glyphs) + 1)[1:]
    has = np.bincount(drawn.glyph_map[after & drawn.ink], minlength=len(drawn.glyphs) + 1)[1:]
    return (
        (rule & after).sum() / rule.sum(),
        (near & ~after).sum() / max(near.sum(), 1),
        np.mean(has[had > 0] < 0.9 * had[had > 0]),
        (far & ~after).sum() / drawn.ink.sum(),
    )


@pytest.mark.parametrize(
    ("variant", "limits"),
    [
        ("ledger", (0.003, 0.01, 0.001, 0.0005)),
        ("ledger elite 200 dark rules", (0.005, 0.03, 0.005, 0.0005)),
        ("ledger 400 hairlines", (0.003, 0.01, 0.001, 0.0005)),
        ("ledger curled", (0.003, 0.01, 0.001, 0.0005)),
        ("form", (0.003, 0.01, 0.001, 0.0005)),
        ("form dark rules 200", (0.005, 0.03, 0.005, 0.0005)),
        ("cursive on rules", (0.003, 0.01, 0.001, 0.0005)),
        ("tide table", (0.003, 0.01, 0.001, 0.0005)),
        ("ledger bitonal", (0.04, 0.25, 0.1, 0.001)),
        ("form short ticks bitonal", (0.015, 0.15, 0.02, 0.001)),
    ],
)
def test_figures_on_drawn_pages(variant, limits):
    measured = figures(draw_variant(variant))
    assert all(m <= limit for m, limit in zip(measured, limits, strict=True)), measured


def test_real_digits_written_over_rules():
    """Handwriting from scikit-learn's bundled digits, laid over rules by the density law."""
    digits = load_digits().images[:60] / 16
    page = Page((560, 1500))
    for i, digit in enumerate(digits):
        large = (ndimage.zoom(digit, 9, order=1) > 0.45).astype(float)
        top, left = 40 + 120 * (i // 20), 30 + 72 * (i % 20)
        share = np.zeros(page.shape)
        share[top : top + large.shape[0], left : left + large.shape[1]] = large
        page.stroke(share, 0.9)
    for y in (94, 214, 334):  # through the lower half of each row
        page.rule(line(page.shape, centre=y, thickness=3, slope=0.003), 0.45)
    ink, found = strip(page.scan())
    assert len(found.rules) == 3
    strokes = (page.light(page.strokes, 0.6) < INK_RATIO) & ink.to_mask()
    kept = (ink - found.taken).to_mask()
    assert (strokes & ~kept).sum() <= 0.005 * strokes.sum()
    assert (kept & ~ndimage.binary_dilation(strokes, EIGHT, iterations=3)).sum() == 0
    assert ndimage.label(kept, EIGHT)[1] == ndimage.label(strokes, EIGHT)[1]


@pytest.mark.parametrize("name", ["text", "page"])
@pytest.mark.parametrize("dpi", [100, 200, 300])
def test_photographed_writing_stays_whole(name, dpi):
    """scikit-image's photographs of handwriting on faintly ruled paper and of a printed page: no
    stroke in them is a rule, whatever their resolution is taken for."""
    grey = np.ascontiguousarray(getattr(skimage.data, name)())
    resolution = Resolution(dpi, dpi)
    tone = measure_tone(grey, resolution=resolution)
    ink = threshold(grey, tone, ThresholdSettings(), resolution).ink
    assert not find_rules(ink, tone, resolution, RuleSettings()).taken

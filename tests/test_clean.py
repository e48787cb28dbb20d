"""One page through all stages: what holds whatever is on the page."""

from __future__ import annotations

import math
from dataclasses import replace
from functools import cache
from pathlib import Path

import numpy as np
import pytest
from hypothesis import HealthCheck, given, settings
from hypothesis import strategies as st
from hypothesis.extra import numpy as hnp
from PIL import Image
from scipy import ndimage

from fixtures.before_after import before_after
from fixtures.drawn import DrawnPage, RuleStyle, Scanner, draw
from fixtures.make import SCANS as DRAWN
from scanclean.clean import CleanPage, clean_page
from scanclean.ink.density import measure_tone
from scanclean.ink.edges import EdgeSettings
from scanclean.ink.holes import HoleSettings
from scanclean.ink.threshold import ThresholdSettings, threshold
from scanclean.ledger import CLAIMS, CLASSES, Ledger
from scanclean.recipe import Recipe
from scanclean.rules.ruling import RuleSettings
from scanclean.scans.pageio import Scan, count_pages, read_page
from scanclean.steps import PLACES, Step
from scanclean.text.specks import SpeckSettings
from scanclean.units import Length, Resolution

FIXTURES = Path(__file__).parent.parent / "fixtures"
SCANS = [
    (path, number)
    for path in sorted(FIXTURES.glob("*.png")) + sorted(FIXTURES.glob("*.tif"))
    if path.name != "before-after.png"
    for number in range(1, count_pages(path) + 1)
]
LEAST_PIECE = 4  # pixels; specks of coverage at the ends of strokes are less
DPI_300 = Resolution(300, 300)


def scan_of(pixels, dpi=DPI_300) -> Scan:
    return Scan(pixels, dpi, 1, 1, "page.png")


def clean(pixels, dpi=DPI_300, *, straighten=False, **sections) -> CleanPage:
    return clean_page(scan_of(pixels, dpi), Recipe(**sections), straighten=straighten)


@cache
def typed() -> DrawnPage:
    return draw("typed", seed=5, size=(110.0, 55.0), skew=0.4)


@cache
def with_everything() -> DrawnPage:
    """Rules, dirt and the scanner's border on one page."""
    return draw("ledger", seed=6, size=(120.0, 70.0), dirt=0.8, borders=True, skew=0.3)


@cache
def cleaned(page) -> CleanPage:
    drawn = page()
    return clean(drawn.scan, drawn.dpi)


@cache
def cleaned_fixture(name: str) -> CleanPage:
    return clean_page(read_page(FIXTURES / name), Recipe())


def is_class(page: CleanPage, *names: str):
    return np.isin(page.ledger.to_array(), [CLASSES[name] for name in names])


def assert_laws(page: CleanPage, shape) -> None:
    """The two laws of the ledger, and that it survives its own file format."""
    classes = page.ledger.to_array()
    assert classes.shape == shape
    assert np.array_equal(page.ink.to_mask(), is_class(page, "ink", "mended"))
    assert np.array_equal(page.thresholded.to_mask(), is_class(page, "ink", *CLAIMS))
    back = Ledger.from_array(classes)
    assert (back.ink, back.thresholded) == (page.ink, page.thresholded)
    assert page.ledger.counts() == {
        name: int((classes == value).sum()) for name, value in CLASSES.items() if value
    }


def assert_books_agree(page: CleanPage) -> None:
    """Glyphs, lines and components are of the cleaned ink, each in its bounds."""
    height, width = page.ink.shape
    glyphs, lines = page.glyphs, page.lines
    assert glyphs.area.sum() == page.ink.area
    assert glyphs.parts.sum() == page.components.n == len(glyphs.component_glyph)
    for box in (glyphs.box, lines.box):
        assert ((box[:, :2] >= 0) & (box[:, 2:] <= (width, height))).all()
        assert (box[:, :2] < box[:, 2:]).all()
    assert set(np.unique(glyphs.line)) - {-1} == set(range(len(lines.box)))
    assert np.array_equal(glyphs.line < 0, glyphs.word < 0)


# ---- the ledger's laws


@pytest.mark.parametrize(("path", "number"), SCANS, ids=lambda value: getattr(value, "name", value))
def test_laws_and_crops_of_every_fixture(path, number):
    scan = read_page(path, number)
    page = clean_page(scan, Recipe())
    assert_laws(page, scan.shape)
    assert_books_agree(page)
    assert page.ink
    # the thresholded page is the threshold's own, whatever came after
    if scan.pixels.dtype == np.bool_:
        thresholded = scan.pixels
    else:
        grey, resolution = scan.grey(), scan.dpi
        tone = measure_tone(grey, resolution=resolution, light_on_dark=None)
        thresholded = threshold(grey, tone, ThresholdSettings(), resolution).ink.to_mask()
    assert np.array_equal(page.thresholded.to_mask(), thresholded)
    # each crop holds its glyph's ink and nothing else: together they are the page
    together = np.zeros(scan.shape, np.uint8)
    for crop, (left, top, right, bottom), area in zip(
        page.crops(), page.glyphs.box.tolist(), page.glyphs.area.tolist(), strict=True
    ):
        assert crop.shape == (bottom - top, right - left)
        assert crop.sum() == area
        assert crop[0].any()
        assert crop[-1].any()
        assert crop[:, 0].any()
        assert crop[:, -1].any()
        together[top:bottom, left:right] += crop
    assert np.array_equal(together, page.ink.to_mask().view(np.uint8))


@pytest.mark.parametrize("name", DRAWN)
def test_no_piece_of_a_letter_is_lost_from_a_fixture(name):
    """Dots, commas and accents, dots of zeros, what a worn type left of its letter."""
    drawn = draw(**DRAWN[name])
    pieces, count = ndimage.label(drawn.ink, np.ones((3, 3)))
    kept = np.bincount(pieces[cleaned_fixture(name).ink.to_mask()], minlength=count + 1)
    area = np.bincount(pieces.ravel(), minlength=count + 1)
    lost = (kept < 0.5 * area) & (area >= LEAST_PIECE)
    lost[0] = False  # the paper
    found = np.array(ndimage.find_objects(pieces))[lost[1:]]
    assert [(columns.start, rows.start) for rows, columns in found] == []


PAGES = hnp.array_shapes(min_dims=2, max_dims=2, min_side=1, max_side=40).flatmap(
    lambda shape: st.one_of(
        hnp.arrays(np.uint8, shape),
        hnp.arrays(np.uint8, shape, elements=st.sampled_from([0, 40, 200, 255])),
        hnp.arrays(bool, shape),
        hnp.arrays(np.uint16, shape),
        hnp.arrays(np.uint8, (*shape, 3)),
    )
)
RESOLUTIONS = st.sampled_from([None, Resolution(300, 300), Resolution(204, 98), Resolution(30, 30)])


@given(PAGES, RESOLUTIONS, st.booleans())
@settings(max_examples=60, deadline=None, suppress_health_check=[HealthCheck.too_slow])
def test_laws_hold_on_any_page(pixels, dpi, straighten):
    before = pixels.copy()
    page = clean(pixels, dpi, straighten=straighten)
    assert np.array_equal(pixels, before)
    assert_laws(page, page.ink.shape)
    assert_books_agree(page)
    if not straighten:
        assert page.ink.shape == pixels.shape[:2]
    again = clean(pixels, dpi, straighten=straighten)
    assert np.array_equal(page.ledger.to_array(), again.ledger.to_array())


@pytest.mark.parametrize("straighten", [False, True])
def test_the_same_scan_gives_the_same_page(straighten):
    pixels = with_everything().scan
    pages = [clean(copy, straighten=straighten) for copy in (pixels, pixels.copy())]
    one, other = pages
    assert np.array_equal(one.ledger.to_array(), other.ledger.to_array())
    for name in ("box", "line", "word", "parts", "holes"):
        assert np.array_equal(getattr(one.glyphs, name), getattr(other.glyphs, name))
    assert np.array_equal(one.lines.baseline, other.lines.baseline)
    assert (one.measures, one.flags) == (other.measures, other.flags)
    assert [rule.box for rule in one.rules] == [rule.box for rule in other.rules]


def test_the_scan_is_not_changed():
    pixels = typed().scan.copy()
    pixels.flags.writeable = False
    assert_laws(clean(pixels, straighten=True), clean(pixels, straighten=True).ink.shape)


# ---- twins: the same page in another form


def differing(one: CleanPage, other: CleanPage) -> float:
    """Pixels in which the ink of two pages differs, as a share of the ink."""
    return (one.ink ^ other.ink).area / one.ink.area


@pytest.mark.parametrize(
    "twin",
    [
        lambda grey: np.repeat(grey[:, :, None], 3, axis=2),
        lambda grey: grey.astype(np.uint16) * 257,
    ],
    ids=["RGB", "16 bit"],
)
def test_other_kinds_of_pixels_give_the_same_page(twin):
    grey = with_everything().scan
    page = clean(twin(grey))
    assert np.array_equal(page.ledger.to_array(), cleaned(with_everything).ledger.to_array())
    assert page.flags == cleaned(with_everything).flags


def test_the_thresholded_page_scanned_anew_gives_the_same_ink():
    page = cleaned(typed)
    twin = clean(page.thresholded.to_mask())
    assert twin.thresholded == page.thresholded
    assert differing(page, twin) <= 0.001
    assert np.array_equal(twin.glyphs.box, page.glyphs.box)


def test_light_on_dark_gives_the_same_ink():
    page, negative = cleaned(typed), clean(~typed().scan)
    assert "light-on-dark" in negative.flags
    assert "light-on-dark" not in page.flags
    assert differing(page, negative) <= 0.001
    assert np.array_equal(negative.glyphs.box, page.glyphs.box)
    bitonal = clean(~page.thresholded.to_mask())
    assert "light-on-dark" in bitonal.flags
    assert bitonal.thresholded == page.thresholded
    assert bitonal.ink == clean(page.thresholded.to_mask()).ink


def test_light_on_dark_can_be_told():
    told = clean(~typed().scan, threshold=ThresholdSettings(light_on_dark=True))
    assert told.ink == clean(~typed().scan).ink
    denied = clean(~typed().scan, threshold=ThresholdSettings(light_on_dark=False))
    assert "light-on-dark" not in denied.flags


TURNS = {
    "upside down": (lambda a: np.ascontiguousarray(a[::-1, ::-1]), False),
    "mirrored": (lambda a: np.ascontiguousarray(a[:, ::-1]), False),
    "transposed": (lambda a: np.ascontiguousarray(a.T), True),
}


@pytest.mark.parametrize("turn", TURNS)
def test_what_is_no_text_is_told_however_the_page_lies(turn):
    """Ink, edges and rules know no up and down; text lines, and the dirt told by them, do."""
    apply, transposed = TURNS[turn]
    drawn, page = with_everything(), cleaned(with_everything)
    other = clean(apply(drawn.scan), drawn.dpi.transposed if transposed else drawn.dpi)
    for names in ((*CLAIMS, "ink"), ("edge",), ("rule",)):
        there, found = apply(is_class(page, *names)), is_class(other, *names)
        assert (there ^ found).sum() <= 0.005 * there.sum(), names
    assert len(other.rules) == len(page.rules)


# ---- resolutions


@pytest.mark.parametrize("kind", ["typed", "printed", "ledger"])
def test_a_fax_page_is_that_of_square_pixels(kind):
    """204 x 98 and 204 x 196 dpi: ITU-T T.4, 8 pels by 3.85 or 7.7 lines a mm (from memory)."""
    fax = Resolution(204, 98)
    scanner = Scanner(bitonal=True)
    drawn = draw(kind, seed=7, size=(150, 60), dpi=(fax.x, fax.y), dirt=0.0, scanner=scanner)
    page = clean(drawn.scan, fax)
    fine = clean(drawn.scan.repeat(2, axis=0), Resolution(204, 196))
    assert len(page.glyphs.box) > 100
    # a break in a worn letter, and what a rule leaves, may be a row on one and two on the other
    slack = 0 if kind == "typed" else 0.05
    assert len(fine.glyphs.box) == pytest.approx(len(page.glyphs.box), rel=slack)
    assert len(fine.lines.box) == len(page.lines.box) == len(drawn.lines)
    assert len(fine.rules) == len(page.rules)
    assert (fine.ink.area / 2) == pytest.approx(page.ink.area, rel=0.01)


USUAL = (72, 96, 100, 150, 200, 240, 300, 400, 600)


BODY_TYPE = {
    "typed": ("typed", {}),
    "serif": ("printed", {"points": 11.0}),
    "garamond": ("printed", {"face": "garamond", "points": 11.0}),
    "sans": ("printed", {"face": "sans", "points": 11.0}),
}


@pytest.mark.parametrize("face", BODY_TYPE)
@pytest.mark.parametrize("dpi", [150, 200, 300, 400, 600])
def test_an_unknown_resolution_is_estimated_within_a_step(face, dpi):
    kind, options = BODY_TYPE[face]
    size = (15000.0 / dpi + 50.0, 60.0)  # mm
    drawn = draw(kind, seed=8, size=size, dpi=float(dpi), **options)
    page = clean(drawn.scan, None)
    assert page.dpi_estimated
    assert "dpi-estimated" in page.flags
    assert page.resolution.x == page.resolution.y
    steps = USUAL.index(round(page.resolution.x)) - USUAL.index(dpi)
    assert abs(steps) <= 1
    known = clean(drawn.scan, drawn.dpi)
    assert (known.resolution, known.dpi_estimated) == (drawn.dpi, False)
    assert "dpi-estimated" not in known.flags


# ---- turned upright

SKEWS = (-10.0, -3.3, 0.25, 1.4, 6.0, 10.0)


@cache
def straightened(skew: float) -> tuple[DrawnPage, CleanPage]:
    drawn = draw("typed", seed=9, size=(120.0, 90.0), skew=skew, dirt=0.0)
    return drawn, clean(drawn.scan, drawn.dpi, straighten=True)


@pytest.mark.parametrize("skew", SKEWS)
def test_skew_is_measured_to_a_tenth_of_a_degree(skew):
    drawn, page = straightened(skew)
    assert page.skew_degrees == pytest.approx(skew, abs=0.1)
    # the lines of the turned page lie level
    (x0, y0), (x1, y1) = page.lines.baseline[np.argmax(np.ptp(page.lines.box[:, ::2], axis=1))]
    assert math.degrees(math.atan2(y1 - y0, x1 - x0)) == pytest.approx(0, abs=0.15)
    assert len(page.lines.box) == len(drawn.lines)


SKEWED = {
    "two columns": ("printed", {"columns": 2}, -9.5),
    "italic": ("printed", {"face": "italic"}, 0.7),
    "ledger": ("ledger", {}, -3.0),
    "ledger, hardly askew": ("ledger", {}, 0.3),
    "hand": ("handwritten", {}, 9.5),
    "form": ("form", {}, -0.7),
    "table": ("tides", {}, 3.0),
}


@pytest.mark.parametrize("page", SKEWED)
@pytest.mark.parametrize("straighten", [True, False])
def test_skew_of_pages_of_every_kind(page, straighten):
    kind, options, skew = SKEWED[page]
    drawn = draw(kind, seed=9, size=(120.0, 90.0), skew=skew, **options)
    found = clean(drawn.scan, drawn.dpi, straighten=straighten)
    assert found.skew_degrees == pytest.approx(skew, abs=0.1)
    if not straighten:
        assert np.array_equal(found.to_source, np.eye(3)[:2])
        assert found.ink.shape == drawn.scan.shape


@pytest.mark.parametrize("skew", SKEWS)
def test_glyphs_of_the_turned_page_are_found_on_the_scan(skew):
    drawn, page = straightened(skew)
    boxes = np.empty((len(page.glyphs.box), 4))
    for box, crop, (left, top, _, _) in zip(boxes, page.crops(), page.glyphs.box, strict=True):
        y, x = np.nonzero(crop)
        points = page.to_source @ np.stack((x + left + 0.5, y + top + 0.5, np.ones(x.size)))
        box[:2], box[2:] = points.min(axis=1) - 0.5, points.max(axis=1) + 0.5
    offset = boxes[:, None] - drawn.glyphs.box[None]
    furthest = np.abs(offset).max(axis=2).min(axis=0)
    assert len(boxes) == len(drawn.glyphs)
    assert np.quantile(furthest, 0.99) < 1  # pixels; the rest is the threshold's edge
    assert furthest.max() < 1.5


@pytest.mark.parametrize("level", [0, 128, 255])
def test_a_page_without_text_is_not_turned(level):
    page = clean(np.full((300, 400), level, np.uint8), straighten=True)
    assert page.skew_degrees == 0
    assert np.array_equal(page.to_source, np.eye(3)[:2])
    assert page.ink.shape == (300, 400)


# ---- the recipe

OFF = {
    "edge": {"edges": EdgeSettings(enabled=False)},
    "rule": {"rules": RuleSettings(enabled=False)},
    "speck": {"specks": SpeckSettings(enabled=False)},
}


@pytest.mark.parametrize("claim", OFF)
def test_each_section_can_be_switched_off(claim):
    drawn, page = with_everything(), cleaned(with_everything)
    assert all(page.ledger.counts()[name] for name in OFF)
    without = clean(drawn.scan, **OFF[claim])
    assert without.ledger.counts()[claim] == 0
    assert without.thresholded == page.thresholded
    assert_laws(without, drawn.scan.shape)
    # what it would have taken stays, or another section takes it
    kept = is_class(page, claim) & is_class(without, "ink")
    assert kept.sum() > 0.4 * page.ledger.counts()[claim]
    for other in set(OFF) - {claim, "speck"}:
        assert without.ledger.counts()[other] == pytest.approx(
            page.ledger.counts()[other], rel=0.02
        )
    assert len(without.rules) == (0 if claim == "rule" else len(page.rules))


def test_pinholes_can_be_left():
    pixels = np.full((200, 300), 230, np.uint8)
    pixels[60:140, 100:112] = 20
    pixels[100, 105] = 230
    assert is_class(clean(pixels), "mended")[100, 105]
    assert clean(pixels).ledger.counts()["mended"] == 1
    left = clean(pixels, holes=HoleSettings(enabled=False))
    assert left.ledger.counts()["mended"] == 0
    assert left.thresholded == clean(pixels).thresholded


def test_everything_off_is_the_threshold_alone():
    off = {name: value for section in OFF.values() for name, value in section.items()}
    page = clean(with_everything().scan, **off, holes=HoleSettings(enabled=False))
    assert page.ink == page.thresholded - page.ledger.claims.get("shade", page.ink ^ page.ink)
    assert set(page.ledger.claims) <= {"shade"}


# ---- the recipe's own steps


def step(**keys) -> tuple[Step, ...]:
    return (Step(**keys),)


BARS = {"operation": "opening", "element": "line", "length": Length(30, "px")}


def bars() -> np.ndarray:
    """Bars of 20 and of 40 pixels, 12 thick."""
    page = np.zeros((120, 200), bool)
    page[20:32, 20:40] = page[70:82, 20:60] = True
    return page


@pytest.mark.parametrize("claim", CLAIMS)
@pytest.mark.parametrize("after", PLACES)
def test_a_step_takes_out_under_its_claim(after, claim):
    page = clean(bars(), steps=step(after=after, claim=claim, **BARS))
    short = np.zeros((120, 200), bool)
    short[20:32, 20:40] = True
    assert np.array_equal(is_class(page, claim), short)
    assert page.ledger.counts()["ink"] == 12 * 40
    assert_laws(page, (120, 200))
    assert_books_agree(page)


@pytest.mark.parametrize("after", PLACES)
def test_a_step_that_adds_mends(after):
    grow = {"operation": "dilation", "element": "box"}
    grow |= {"width": Length(3, "px"), "height": Length(3, "px")}
    page = clean(bars(), steps=step(after=after, **grow))
    assert page.ledger.counts()["ink"] == 12 * 20 + 12 * 40
    assert page.ledger.counts()["mended"] == 14 * 22 + 14 * 42 - 12 * 60
    assert_laws(page, (120, 200))


def test_steps_of_one_place_follow_their_order():
    one = Step(after="rules", claim="shade", **BARS)
    other = Step(after="rules", claim="edge", **BARS)
    for first, second in ((one, other), (other, one)):
        page = clean(bars(), steps=(first, second))
        assert page.ledger.counts()[first.claim] == 12 * 20
        assert page.ledger.counts()[second.claim] == 0


def test_what_is_put_back_was_never_taken_and_what_is_taken_again_never_mended():
    grow = {"element": "line", "length": Length(3, "px")}
    steps = (
        Step(operation="erosion", after="threshold", claim="shade", **grow),
        Step(operation="dilation", after="edges", **grow),
        Step(operation="dilation", after="rules", **grow),
        Step(operation="erosion", after="holes", claim="shade", **grow),
    )
    page = clean(bars(), steps=steps)
    assert page.ledger.counts() == {**dict.fromkeys(page.ledger.counts(), 0), "ink": 12 * 60}
    assert page.ink == page.thresholded


def test_lengths_of_steps_follow_the_resolution():
    line = {"operation": "opening", "element": "line", "length": Length(2.54, "mm")}
    for dpi, kept in ((300, 40), (600, 0)):  # 30 and 60 pixels
        page = clean(bars(), Resolution(dpi, dpi), steps=step(claim="shade", **line))
        assert page.ledger.counts()["ink"] == 12 * kept


# ---- pages with little or nothing on them


@pytest.mark.parametrize("shape", [(1, 1), (1, 90), (90, 1), (2, 3), (400, 300)])
@pytest.mark.parametrize(
    "value", [0, 255, 128, False, True], ids=["black", "white", "grey", "no ink", "all ink"]
)
@pytest.mark.parametrize("dpi", [None, DPI_300])
def test_pages_of_one_value(shape, value, dpi):
    pixels = np.full(shape, value, bool if isinstance(value, bool) else np.uint8)
    page = clean(pixels, dpi)
    assert_laws(page, shape)
    assert_books_agree(page)
    assert "specks-dense" not in page.flags
    if value is not True and value != 0:
        assert not page.thresholded
        assert "blank" in page.flags
        assert "no-text" not in page.flags
        assert len(page.lines.box) == 0
        assert page.measures["x_height_px"] is None


@pytest.mark.parametrize("spread", [1.0, 8.0, 40.0])
def test_noise_alone_gives_no_text(spread):
    grey = np.random.default_rng(3).normal(200, spread, (600, 500))
    page = clean(np.clip(grey, 0, 255).astype(np.uint8))
    assert_laws(page, (600, 500))
    assert page.ink.area <= 0.002 * 600 * 500
    assert len(page.lines.box) == 0
    assert set(page.flags) & {"blank", "no-text"}


@pytest.mark.parametrize("share", [0.005, 0.3, 0.5])
def test_bitonal_noise_is_accounted_for(share):
    noise = np.random.default_rng(4).random((300, 400)) < share
    page = clean(noise)
    assert np.array_equal(page.thresholded.to_mask(), noise)
    assert_laws(page, noise.shape)
    assert_books_agree(page)


def test_flags():
    assert cleaned(typed).flags == ()
    assert clean(np.full((300, 300), 240, np.uint8)).flags == ("blank",)
    frame = np.zeros((900, 900), bool)
    frame[300:304, 100:110] = True
    lone = clean(frame, specks=SpeckSettings(enabled=False))
    assert lone.flags == ("no-text",)
    dirty = typed().scan.copy()
    rng = np.random.default_rng(5)
    y, x = rng.integers(0, dirty.shape[0], 3000), rng.integers(0, dirty.shape[1], 3000)
    dirty[y, x] = 0
    assert "specks-dense" in clean(dirty).flags
    assert set(clean(~typed().scan, None).flags) == {"light-on-dark", "dpi-estimated"}


def test_measures():
    page = cleaned(typed)
    height, width = page.ink.shape
    assert page.measures["ink_share"] == page.ink.area / (height * width)
    assert page.measures["x_height_px"] == pytest.approx(
        np.median([line.x_height_px for line in typed().lines]), rel=0.1
    )
    dirt = ndimage.label(is_class(page, "speck"), np.ones((3, 3)))[1]
    assert page.measures["specks"] == pytest.approx(dirt, rel=0.05)


def test_rules_are_told_of_with_their_measures():
    drawn = draw("ledger", seed=11, size=(110.0, 60.0), rule=RuleStyle(0.3, 0.5))
    page = clean(drawn.scan, drawn.dpi)
    for direction in ("horizontal", "vertical"):
        found = [rule for rule in page.rules if rule.direction == direction]
        true = [rule for rule in drawn.rules if rule.direction == direction]
        axis = 1 if direction == "horizontal" else 0
        place = sorted((rule.box[axis] + rule.box[axis + 2]) / 2 for rule in found)
        assert place == pytest.approx(sorted(r.centre[:, axis].mean() for r in true), abs=2)
        thick = np.sort([rule.thickness_px for rule in found])
        assert thick == pytest.approx(np.sort([rule.thickness_px for rule in true]), abs=1.0)


def test_the_picture_of_the_readme_is_what_the_program_makes():
    path = FIXTURES / "before-after.png"
    assert path.stat().st_size < 400_000
    with Image.open(path) as image:
        shown = np.asarray(image)
    # a few pixels may change with the stages; if more do, python -m fixtures.before_after
    assert (shown != before_after()).any(axis=2).mean() < 0.001


def test_the_recipe_is_not_shared_between_pages():
    recipe = Recipe()
    before = recipe.identity
    clean_page(scan_of(typed().scan), replace(recipe))
    assert recipe.identity == before

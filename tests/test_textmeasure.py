from __future__ import annotations

import numpy as np
import pytest

from scanclean.sets.labels import label
from scanclean.sets.runs import RunSet
from scanclean.text.textmeasure import estimate_dpi, measure_spread, measure_text
from scanclean.units import Resolution
from tests.reading import set_text

PROSE = ["zoom xenon vase", "a nervous crane", "mercury ran azure"]


def measured(mask, dpi=300.0):
    return measure_text(label(RunSet.from_mask(mask)), Resolution(dpi, dpi))


@pytest.mark.parametrize("points", [7.0, 12.0, 24.0])
def test_the_x_height_is_that_of_the_drawn_letters(points):
    page = set_text(PROSE, points=points, size=(120.0, 50.0))
    flat = [page.glyphs.box[i] for i, c in enumerate(page.glyphs.character) if c in "zxv"]
    height = np.median([bottom - top for _, top, _, bottom in flat])
    assert measured(page.ink).x_height_px == pytest.approx(height, rel=0.07)


def test_measures_grow_with_the_page():
    page = set_text(PROSE)
    once, twice = measured(page.ink), measured(np.kron(page.ink, np.ones((2, 2), bool)), 600.0)
    assert twice.x_height_px == pytest.approx(2 * once.x_height_px, rel=0.02)
    assert twice.stroke_px == pytest.approx(2 * once.stroke_px, rel=0.15)


def test_dirt_and_a_picture_do_not_move_the_measures():
    page = set_text(PROSE, size=(110.0, 70.0))
    clean = measured(page.ink)
    rng = np.random.default_rng(5)
    dirty = page.ink.copy()
    for _ in range(600):
        y, x = rng.integers(0, np.array(dirty.shape) - 6)
        dirty[y : y + rng.integers(1, 6), x : x + rng.integers(1, 6)] = True
    dirty[500:800, 100:700] |= rng.random((300, 600)) < 0.5
    found = measured(dirty)
    assert found.x_height_px == pytest.approx(clean.x_height_px, rel=0.05)
    assert found.stroke_px == pytest.approx(clean.stroke_px, rel=0.15)


def test_stroke_width_of_a_figure_drawn_with_one_pen():
    # letters of level, upright and slanted bars 5 px thick
    letter = np.zeros((34, 30), bool)
    letter[2:32, 3:8] = letter[2:32, 22:27] = letter[14:19, 3:27] = True
    assert measured(np.tile(letter, (3, 12))).stroke_px == pytest.approx(5, abs=0.6)
    flat = np.zeros((40, 110), bool)
    for x in range(90):
        flat[5 + x // 4 : 10 + x // 4, x + 5] = True  # falls one in four: runs across are long
    assert measured(np.tile(flat, (3, 3))).stroke_px < 7


def test_spread_agrees_with_the_moments_of_the_pixels():
    rng = np.random.default_rng(3)
    mask = rng.random((30, 40)) < 0.4
    components = label(RunSet.from_mask(mask))
    spread = measure_spread(components)
    x, y = components.runs.points().T + 0.5
    owner = np.repeat(components.run_label, components.runs.length)
    for i in range(components.n):
        mine = owner == i
        covariance = np.cov(np.stack((x[mine], y[mine])), bias=True)
        assert spread.x[i] == pytest.approx(x[mine].mean())
        assert spread.y[i] == pytest.approx(y[mine].mean())
        # a pixel is a square, not a point: 1/12 more along x and y
        assert spread.xx[i] == pytest.approx(covariance[0, 0] + 1 / 12, abs=1e-9)
        assert spread.yy[i] == pytest.approx(covariance[1, 1] + 1 / 12, abs=1e-9)
        assert spread.xy[i] == pytest.approx(covariance[0, 1], abs=1e-9)


def test_a_blank_page_has_no_measures():
    blank = measured(np.zeros((50, 60), bool))
    assert (blank.stroke_px, blank.x_height_px, blank.letters) == (0.0, 0.0, 0)


@pytest.mark.parametrize("dpi", [150.0, 300.0, 600.0])
def test_the_resolution_is_guessed_from_body_type(dpi):
    page = set_text(PROSE, points=11.0, dpi=dpi)
    assert estimate_dpi(measured(page.ink, dpi).x_height_px) == pytest.approx(dpi, rel=0.35)


def test_no_resolution_without_text():
    with pytest.raises(ValueError, match="must be positive"):
        estimate_dpi(0.0)

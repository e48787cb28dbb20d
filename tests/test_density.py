"""The page against its paper: density, paper level, noise, stroke width, polarity, blank pages."""

from __future__ import annotations

import numpy as np
import pytest
from skimage import filters

from scanclean.ink.blocks import Surface, block_moments, sliding_max, sliding_min
from scanclean.ink.density import DENSITY, measure_tone, otsu_level, run_length
from tests.greys import bars


def test_density_is_the_negative_logarithm_of_the_ratio():
    # optical density, ISO 5-1: D = -log10 of the transmittance or reflectance factor
    ratio = np.arange(256) / 255
    np.testing.assert_allclose(DENSITY[4:], -np.log10(ratio[4:]), rtol=1e-6)
    assert DENSITY[255] == 0
    assert DENSITY[0] == pytest.approx(-np.log10(0.012))
    assert (np.diff(DENSITY) <= 0).all()


def test_block_moments_against_numpy():
    rng = np.random.default_rng(3)
    page = rng.integers(0, 256, (64, 40), np.uint8)
    mean, square = block_moments(page, 8, centre=100)
    cells = page.reshape(8, 8, 5, 8).astype(float) - 100
    np.testing.assert_allclose(mean, cells.mean(axis=(1, 3)), rtol=1e-5, atol=1e-4)
    np.testing.assert_allclose(square, (cells**2).mean(axis=(1, 3)), rtol=1e-5)


@pytest.mark.parametrize("shape", [(64, 40), (61, 43), (7, 100), (1, 1), (100, 5)])
@pytest.mark.parametrize("size", [1, 3, 8])
def test_surface_is_bilinear_between_block_centres(shape, size):
    from scipy.ndimage import map_coordinates

    rng = np.random.default_rng(4)
    grid = rng.normal(size=(-(-shape[0] // size), -(-shape[1] // size))).astype(np.float32)
    pixels = np.full(shape, np.nan)
    for rows, values in Surface(grid, size, shape).strips():
        pixels[rows] = values
    y, x = np.mgrid[: shape[0], : shape[1]]
    expected = map_coordinates(
        grid, ((y + 0.5) / size - 0.5, (x + 0.5) / size - 0.5), order=1, mode="nearest"
    )
    np.testing.assert_allclose(pixels, expected, atol=1e-5)


@pytest.mark.parametrize("size", [1, 3, 7, 15])
def test_sliding_extremes_against_scipy(size):
    from scipy.ndimage import maximum_filter, minimum_filter

    values = np.random.default_rng(5).integers(0, 256, (33, 21), np.uint8)
    outside = {"mode": "constant"}
    assert (sliding_max(values, size) == maximum_filter(values, size, cval=0, **outside)).all()
    assert (sliding_min(values, size) == minimum_filter(values, size, cval=255, **outside)).all()


def test_otsu_of_six_levels():
    # histogram and threshold of A. Greensted's tutorial, 2010, from memory
    assert otsu_level(np.array([8, 7, 2, 6, 9, 4])) == 2
    # scikit-image's own test array, skimage/filters/tests/test_thresholding.py
    array = [0, 0, 1, 3, 5, 0, 1, 4, 3, 4, 1, 2, 5, 4, 1, 2, 4, 5, 2, 1, 4, 5, 1, 0, 0]
    assert otsu_level(np.bincount(array)) == 2
    assert otsu_level(np.array([0, 0, 12, 0])) == 0


@pytest.mark.parametrize("name", ["page", "text", "camera", "coins", "moon"])
def test_otsu_against_scikit_image(name):
    from skimage import data

    image = getattr(data, name)()
    assert otsu_level(np.bincount(image.ravel(), minlength=256)) == filters.threshold_otsu(image)


def test_run_lengths():
    mask = np.array([[1, 1, 0, 1], [0, 1, 1, 1], [0, 0, 0, 0]], bool)
    assert run_length(mask).tolist() == [2, 1, 3]


@pytest.mark.parametrize("stroke", [2, 3, 6, 12])
def test_stroke_width_is_that_of_the_strokes(stroke):
    assert measure_tone(bars(stroke=stroke)).stroke_px == stroke
    assert measure_tone(np.ascontiguousarray(bars(stroke=stroke).T)).stroke_px == stroke


@pytest.mark.parametrize("sigma", [2.0, 5.0, 9.0])
def test_noise_is_that_of_the_blank_paper(sigma):
    tone = measure_tone(bars(noise=sigma, paper=200))
    assert tone.noise == pytest.approx(sigma / 200, rel=0.15)


def test_ratio_takes_uneven_light_out():
    flat = bars(paper=240, ink=48)
    y, x = np.mgrid[: flat.shape[0], : flat.shape[1]]
    light = 0.45 + 0.5 * x / flat.shape[1] + 0.05 * np.sin(y / 90)
    tone = measure_tone(np.round(flat * light).astype(np.uint8))
    paper, ink = flat == 240, flat == 48
    assert np.percentile(np.abs(tone.ratio[paper] / 255.0 - 1.0), 99) < 0.03
    assert np.percentile(np.abs(tone.ratio[ink] / 255.0 - 0.2), 99) < 0.03
    assert tone.ink_darkness == pytest.approx(0.8, abs=0.02)


def test_light_on_dark_is_the_negative_of_the_same_page():
    page = bars(noise=3)
    tone, negative = measure_tone(page), measure_tone(~page)
    assert not tone.light_on_dark
    assert negative.light_on_dark
    assert (tone.ratio == negative.ratio).all()
    assert negative.paper_level == tone.paper_level


def test_a_dark_scanner_bed_does_not_make_a_page_light_on_dark():
    page = bars(noise=3)
    bed = np.full((1000, 1200), 20, np.uint8)
    bed[200:800, 300:800] = page
    tone = measure_tone(bed)
    assert not tone.light_on_dark
    assert np.median(tone.ratio[:150]) < 40  # the bed stays dark
    ink = page == 40
    assert np.median(tone.ratio[200:800, 300:800][~ink]) > 245


def test_light_on_dark_can_be_said():
    page = bars()
    assert measure_tone(page, light_on_dark=True).light_on_dark
    assert not measure_tone(~page, light_on_dark=False).light_on_dark


@pytest.mark.parametrize(
    ("level", "sigma"), [(255, 0), (0, 0), (128, 0), (200, 12), (30, 6), (4, 3), (128, 60)]
)
def test_pages_without_ink_are_blank(level, sigma):
    noise = np.random.default_rng(6).normal(level, sigma, (700, 500))
    tone = measure_tone(np.clip(np.round(noise), 0, 255).astype(np.uint8))
    assert tone.blank
    assert tone.ink_darkness == 0


def test_one_small_dot_is_not_a_blank_page():
    page = np.random.default_rng(7).normal(220, 4, (700, 500)).round().astype(np.uint8)
    page[300:306, 200:206] = 60
    assert not measure_tone(page).blank


@pytest.mark.parametrize("shape", [(1, 1), (1, 50), (50, 1), (9, 2000)])
def test_small_pages(shape):
    assert measure_tone(np.full(shape, 255, np.uint8)).blank


@pytest.mark.parametrize(
    "bad", [np.zeros((3, 3)), np.zeros((3, 3, 3), np.uint8), np.zeros((0, 3), np.uint8)]
)
def test_what_is_no_grey_page(bad):
    with pytest.raises(ValueError, match="uint8"):
        measure_tone(bad)

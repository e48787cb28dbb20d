"""Thresholds: published methods against scikit-image and worked numbers, and the adaptive one."""

from __future__ import annotations

from itertools import pairwise

import numpy as np
import pytest
from PIL import Image
from scipy import ndimage
from skimage import data, filters

from scanclean.ink.density import measure_tone
from scanclean.ink.threshold import METHODS, ThresholdSettings, darker, local_level, threshold
from scanclean.units import Length, Resolution
from tests.benchmarks import bench_threshold
from tests.greys import bars

DPI = Resolution(300, 300)


def ink_of(page, resolution=DPI, **settings):
    tone = measure_tone(page, light_on_dark=settings.get("light_on_dark"))
    return threshold(page, tone, ThresholdSettings(**settings), resolution).ink.to_mask()


@pytest.mark.parametrize("name", ["page", "text"])
@pytest.mark.parametrize("window", [15, 25, 41, 75])
def test_local_methods_against_scikit_image(name, window):
    # the block surface may differ in a small share of pixels, more where plain paper is tested
    # against its own mean as Niblack's does
    page = getattr(data, name)()
    for method, reference, share in (
        ("sauvola", filters.threshold_sauvola(page, window, k=0.2, r=128), 0.002),
        ("niblack", filters.threshold_niblack(page, window, k=0.2), 0.015),
    ):
        mine = darker(page, local_level(page, method, window=window, k=0.2))
        assert (mine != (page < reference)).mean() < share, method


def test_wolf_against_exact_windows():
    from scipy.ndimage import uniform_filter

    page = data.page()
    values = page.astype(float)
    mean = uniform_filter(values, 41)
    spread = np.sqrt(np.maximum(uniform_filter(values**2, 41) - mean**2, 0))
    darkest = values.min()
    level = 0.5 * mean + 0.5 * darkest + 0.5 * spread / spread.max() * (mean - darkest)
    mine = darker(page, local_level(page, "wolf", window=41, k=0.5))
    assert (mine != (page < level)).mean() < 0.004


@pytest.mark.parametrize(
    ("method", "k", "level"),
    [("niblack", 0.2, 44.836022), ("sauvola", 0.5, 30.042947), ("sauvola", 0.2, 42.017179)],
)
def test_worked_levels(method, k, level):
    # 3 x 3 window of 10, 20 .. 90: m = 50, population s = 25.819889; the levels were recomputed
    # with scikit-image. Each value fills a block of 3 x 3 px here, which keeps both moments.
    page = np.kron(np.arange(10, 91, 10).reshape(3, 3), np.ones((3, 3), int)).astype(np.uint8)
    surface = local_level(page, method, window=9, k=k)
    assert surface.size == 3
    assert surface.grid[1, 1] == pytest.approx(level, abs=1e-4)


def test_wolf_is_the_mean_where_the_spread_is_largest():
    # T = (1 - k) m + k M + k (s / S) (m - M) is m where s = S
    page = np.full((90, 90), 200, np.uint8)
    page[40:50, 40:50] = 20
    mean = local_level(page, "niblack", window=25, k=0).grid
    spread = mean - local_level(page, "niblack", window=25, k=1).grid
    at = np.unravel_index(np.argmax(spread), spread.shape)
    assert local_level(page, "wolf", window=25, k=0.5).grid[at] == pytest.approx(mean[at], rel=1e-5)


@pytest.mark.parametrize("method", ["niblack", "sauvola", "wolf"])
def test_plain_paper_stays_paper(method):
    page = np.full((80, 60), 180, np.uint8)
    assert not darker(page, local_level(page, method, window=25, k=0.2)).any()


@pytest.mark.parametrize("method", METHODS)
def test_mirrored_and_turned_pages_give_the_same_ink(method):
    # a page of whole blocks, so that a mirrored page has the same blocks
    page = bars(height=640, width=480, noise=6)
    ink = ink_of(page, method=method)
    assert ink.any()
    assert (ink_of(page[:, ::-1], method=method)[:, ::-1] == ink).all()
    assert (ink_of(page[::-1], method=method)[::-1] == ink).all()
    turned = ink_of(np.ascontiguousarray(page.T), method=method).T
    assert (turned == ink).all()


def test_ink_of_sauvola_grows_as_k_falls():
    page = data.page()
    inks = [darker(page, local_level(page, "sauvola", window=25, k=k)) for k in (0.5, 0.3, 0.1)]
    for less, more in pairwise(inks):
        assert not (less & ~more).any()
        assert more.sum() > less.sum()


def test_a_constant_moves_niblacks_level_with_it_and_not_sauvolas():
    page = bars(paper=200, noise=4)
    for method, moved in (("niblack", True), ("sauvola", False)):
        level = local_level(page, method, window=25, k=0.2).grid
        higher = local_level(page + np.uint8(20), method, window=25, k=0.2).grid
        assert np.allclose(higher, level + 20, atol=1e-2) == moved


@pytest.mark.parametrize("method", METHODS)
def test_light_on_dark_gives_the_ink_of_the_inverted_page(method):
    page = bars(noise=4)
    assert (ink_of(~page, method=method) == ink_of(page, method=method)).all()


@pytest.mark.parametrize("method", METHODS)
@pytest.mark.parametrize(("level", "sigma"), [(255, 0), (0, 0), (128, 0), (200, 12), (4, 3)])
def test_blank_pages_have_no_ink(method, level, sigma):
    noise = np.random.default_rng(8).normal(level, sigma, (500, 400))
    assert not ink_of(np.clip(noise, 0, 255).astype(np.uint8), method=method).any()


@pytest.mark.parametrize("method", METHODS)
def test_clean_strokes_come_out_exactly(method):
    page = bars(paper=235, ink=30)
    assert (ink_of(page, method=method) == (page == 30)).all()


def test_level_of_fixed_is_paper():
    page = bars(paper=200, ink=100)
    assert not ink_of(page, method="fixed", level=100).any()
    assert (ink_of(page, method="fixed", level=101) == (page == 100)).all()


def test_a_window_in_millimetres_follows_the_resolution():
    page = data.page()
    wide = ink_of(page, method="niblack", window=Length(5, "mm"))
    assert (wide == ink_of(page, method="niblack", window=Length(5 / 25.4 * 300, "px"))).all()
    finer = ink_of(page, Resolution(150, 150), method="niblack", window=Length(5, "mm"))
    assert (finer != wide).any()


def test_what_threshold_refuses():
    page = bars()
    tone = measure_tone(page)
    with pytest.raises(ValueError, match="tone is of a page of"):
        threshold(page[1:], tone, ThresholdSettings(), DPI)
    with pytest.raises(ValueError, match="method must be one of adaptive"):
        threshold(page, tone, ThresholdSettings(method="guess"), DPI)


@pytest.mark.parametrize("dpi", [72, 150, 300])
def test_uneven_photograph_of_print(dpi):
    # scikit-image's `page`, 191 x 384 px: print that falls into shadow at its lower left. Read by
    # eye: "Region-based segmentation" has 23 letters, two i-dots and a hyphen, none touching;
    # six lines of type begin at rows 13, 50, 68, 86, 104 and 121 and there is nothing but a faint
    # rule between the last of the text and the line of code.
    page = data.page()
    ink = ink_of(page, Resolution(dpi, dpi))
    heading = ndimage.label(ink[5:34], np.ones((3, 3)))[1]
    assert heading == 26
    assert not ink[34:49].any()
    assert ink[138:166].sum() < 20
    for row in (56, 74, 92, 110, 128):
        assert 0.12 < ink[row - 4 : row + 4].mean() < 0.4


@pytest.mark.parametrize("dpi", [72, 150, 300])
def test_oblique_photograph_of_handwriting(dpi):
    # scikit-image's `text`, 172 x 448 px: handwriting over ruled paper, soft blots between. Read
    # by eye: blots at these points, and a long integral sign from (318, 72) to (424, 51)
    page = data.text()
    tone = measure_tone(page, resolution=Resolution(dpi, dpi))
    found = threshold(page, tone, ThresholdSettings(), Resolution(dpi, dpi))
    ink = (found.ink - found.shade).to_mask()
    for x, y in ((235, 24), (367, 15), (419, 28)):
        assert not ink[y - 4 : y + 5, x - 8 : x + 9].any()
    labels, _ = ndimage.label(ink, np.ones((3, 3)))
    ends = [
        set(labels[y - 3 : y + 4, x - 3 : x + 4].ravel()) - {0} for x, y in ((318, 72), (424, 51))
    ]
    assert ends[0] & ends[1]


def test_the_benchmark_compares_pages_with_their_truth(tmp_path, capsys):
    page = bars(200, 160)
    folder = tmp_path / "typed"
    folder.mkdir()
    Image.fromarray(page).save(folder / "one.png")
    Image.fromarray(np.where(page == 40, 0, 255).astype(np.uint8)).save(folder / "one_gt.png")
    bench_threshold.compare(tmp_path)
    rows = capsys.readouterr().out.splitlines()
    assert rows[1].split()[:2] == ["adaptive", "100.00"]
    assert rows[-1] == "worst: typed/one 100.0"

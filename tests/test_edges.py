from __future__ import annotations

import numpy as np
import pytest

from scanclean.ink.edges import EdgeSettings, find_edges
from scanclean.sets.runs import RunSet
from scanclean.units import Length, Resolution

DPI = Resolution(200, 200)
MM = 200 / 25.4


def page_with(draw, *, height=1100, width=800, dpi=DPI):
    grey = np.full((height, width), 225, np.uint8)
    draw(grey)
    ink = RunSet.from_mask(grey < 128)
    return grey, ink


def edges(grey, ink, **settings):
    return find_edges(ink, grey=grey, resolution=DPI, settings=EdgeSettings(**settings))


def text(grey, left=200, top=200):
    for i in range(8):
        grey[top : top + 22, left + 20 * i : left + 20 * i + 5] = 30


def test_dark_margin_goes_and_text_stays():
    def draw(grey):
        grey[:, :40] = 15
        grey[-25:, :] = 15
        text(grey)

    grey, ink = page_with(draw)
    margin = np.zeros(grey.shape, bool)
    margin[:, :40] = margin[-25:] = True
    assert edges(grey, ink) == RunSet.from_mask(margin)
    # a bitonal scan shows its margin by its ink alone
    assert edges(None, ink) == RunSet.from_mask(margin)


def test_slanting_shadow_goes_whole():
    x = np.arange(800)

    def draw(grey):
        grey[np.arange(1100)[:, None] < 30 + 0.05 * x] = 10
        text(grey)

    grey, ink = page_with(draw)
    assert edges(grey, ink) == RunSet.from_mask(np.arange(1100)[:, None] < 30 + 0.05 * x)


def test_letters_cut_by_the_border_stay():
    def draw(grey):
        text(grey, left=0, top=0)  # thin strokes that touch the corner
        grey[300:304, :] = 40  # a ruled line right across the page

    grey, ink = page_with(draw)
    assert not edges(grey, ink)


def test_letters_that_touch_a_margin_lose_only_what_is_in_it():
    def draw(grey):
        grey[:, :40] = 15
        grey[400:406, 20:90] = 30

    grey, ink = page_with(draw)
    left = (ink - edges(grey, ink)).to_mask()
    assert left[400:406, 40:90].all()
    assert left.sum() == 6 * 50


def test_paper_edge_line_and_fringe_go():
    def draw(grey):
        grey[:, 8:10] = 60  # a line along the side, a millimetre in
        grey[500:503, 798:] = 60  # a grain on the border
        text(grey)

    grey, ink = page_with(draw)
    taken = edges(grey, ink).to_mask()
    assert taken[:, 8:10].all()
    assert taken[500:503, 798:].all()
    assert taken.sum() == 2 * 1100 + 6


def test_depth_is_limited_by_the_settings():
    def draw(grey):
        grey[:, :400] = 15

    grey, ink = page_with(draw)
    for depth in (30, 12):
        taken = edges(grey, ink, max_depth=Length(depth, "mm")).to_mask()
        # half-way down the page only the left side is near
        assert taken[550].sum() == pytest.approx(depth * MM, abs=4)


def test_switched_off_or_nothing_there():
    grey, ink = page_with(lambda grey: text(grey))
    assert edges(grey, ink) == RunSet.empty(grey.shape)
    dark = page_with(lambda grey: grey.__setitem__(np.s_[:, :40], 0))
    assert edges(*dark, enabled=False) == RunSet.empty(grey.shape)


@pytest.mark.parametrize("shape", [(1, 1), (1, 50), (3, 2), (40, 1)])
@pytest.mark.parametrize("level", [0, 255])
def test_tiny_pages(shape, level):
    grey = np.full(shape, level, np.uint8)
    ink = RunSet.from_mask(grey < 128)
    assert edges(grey, ink) <= ink


def test_text_in_a_deep_shadow_at_the_border_stays():
    def draw(grey):
        grey[:, :200] = 90  # two fifths of the paper's light
        for top in range(100, 1000, 40):
            text(grey, left=20, top=top)
        grey[grey == 30] = 10

    grey, _ = page_with(draw)
    ink = RunSet.from_mask(grey < 40)
    assert not edges(grey, ink)

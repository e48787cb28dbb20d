from __future__ import annotations

import numpy as np
import pytest
from scipy import ndimage

from fixtures.drawn import draw
from fixtures.sheet import new_sheet
from scanclean.sets.labels import label
from scanclean.sets.runs import RunSet
from scanclean.text.clutter import is_hair, is_lump
from scanclean.text.specks import SpeckSettings
from scanclean.text.textmeasure import TextMeasures, measure_spread
from scanclean.text.upright import Frame, place
from scanclean.units import Length
from tests.reading import finished, read, set_text

EIGHT = np.ones((3, 3), bool)


def marks_lost(page, found) -> int:
    """Marks of the truth of which more than half went with the specks."""
    count = len(page.mark_box)
    whole = np.bincount(page.mark_map[page.ink], minlength=count + 1)[1:]
    gone = np.bincount(page.mark_map[found.specks], minlength=count + 1)[1:]
    return int((2 * gone > whole).sum())


def specks_left(page, found, ink) -> tuple[int, int]:
    """How many pieces of dirt that touch no ink were left, and how many there were."""
    pieces, count = ndimage.label(ink & ~page.ink, EIGHT)
    touching = np.unique(pieces[ndimage.binary_dilation(page.ink, EIGHT)])
    loose = np.setdiff1d(np.arange(1, count + 1), touching)
    left = np.unique(pieces[found.components.runs.to_mask()])
    return int(np.isin(loose, left).sum()), loose.size


@pytest.mark.parametrize(
    ("kind", "options"),
    [
        ("typed", {}),
        ("typed", {"dpi": 200.0, "skew": -1.0}),
        ("printed", {"face": "serif", "points": 10.0}),
        ("printed", {"face": "sans", "points": 9.0, "dpi": 200.0, "skew": 1.0}),
        ("printed", {"face": "serif", "points": 12.0, "dpi": 150.0}),
        ("printed", {"face": "garamond", "points": 7.0, "dpi": 600.0, "size": (70.0, 40.0)}),
        ("handwritten", {"face": "cursive", "rule": None, "dirt": 0.5}),
    ],
)
def test_marks_stay_and_dirt_goes(kind, options):
    page = draw(kind, seed=11, **({"size": (130.0, 70.0), "dirt": 0.8, "skew": 0.4} | options))
    dirty = page.ink | page.dirt
    found = read(dirty, page.dpi)
    assert marks_lost(page, found) == 0
    left, loose = specks_left(page, found, dirty)
    assert loose > 60
    # what lies where a mark could stand cannot be told from one, least of all at 200 dpi
    assert left <= (0.06 if page.dpi.x >= 300 else 0.11) * loose


@pytest.mark.parametrize(
    ("face", "dpi", "text"),
    [
        ("garamond", 300.0, "«Né à l’île», dit-il: ¿qué? ÄÖÜ çà œ! –"),
        ("serif", 600.0, "«Né à l’île», dit-il: ¿qué? ÄÖÜ çà œ! –"),
        ("garamond", 600.0, "“Ibid.”, 7·5; 3:4 = 3÷4, i.e. ‘jj’ ..."),
        ("serif", 300.0, "“Ibid.”, 7·5; 3:4 = 3÷4, i.e. ‘jj’ ..."),
        ("sans", 200.0, "“Ibid.”, 7.5; 3:4 = 1, i.e. ‘jj’ - !?"),
        ("typewriter", 150.0, "'Ibid.', 7.5; 3:4 = 1, i.e. \"jj\" - !?"),
    ],
)
def test_no_mark_of_a_clean_line_is_dirt(face, dpi, text):
    rows = ["The pilots in the inner light jig", text, "fill his till with five limpid pints"]
    page = set_text(rows, face=face, points=10.0, dpi=dpi)
    found = read(page.ink, dpi)
    # hairlines that the drawing itself broke off are no marks
    assert found.all_components.area[found.speck].max(initial=0) <= 2
    assert marks_lost(page, found) == 0


def test_the_same_spot_is_a_full_stop_or_dirt_by_where_it_stands():
    sheet = new_sheet((90.0, 30.0))
    sheet.line()
    sheet.text(10.0, 12.0, "the inner light is lit in July", "serif", 11.0)
    ink = finished(sheet).ink
    y = 142  # the baseline
    end = int(np.flatnonzero(ink.any(axis=0)).max())
    spot = np.s_[0:5, 0:5]
    places = {
        "stop": (y - 5, end + 8),
        "between": (y + 60, end // 2),
        "margin": (60, 20),
        "far": (y - 5, end + 130),
    }
    for place_, (top, left) in places.items():
        page = ink.copy()
        page[top : top + 5, left : left + 5][spot] = True
        taken = read(page).specks[top : top + 5, left : left + 5].any()
        assert taken == (place_ != "stop"), place_


def test_lone_letters_and_drawings_stay_lumps_and_hairs_go():
    page = set_text(["sealed with seven seals", "and sent to the office"], size=(110.0, 80.0))
    ink = page.ink.copy()
    number = set_text(["7"], size=(110.0, 80.0)).ink
    ink[500:] |= np.roll(number, (500, 500), (0, 1))[500:]
    square = np.s_[550:680, 100:230]
    ink[square] = True
    lump = np.s_[700:718, 900:920]
    ink[lump] = True
    x = np.arange(200)
    hair_y = (600 + 30 * np.sin(x / 40)).astype(int)
    ink[hair_y, 800 + x] = True
    found = read(ink)
    specks = found.specks
    assert not (specks & np.roll(number, (500, 500), (0, 1))).any()
    assert not specks[square].any()
    assert specks[lump].all()
    assert specks[hair_y, 800 + x].all()


def test_dirt_alone_goes_by_its_size_in_millimetres():
    page = np.zeros((400, 400), bool)
    page[50:52, 50:52] = True
    page[200:260, 200:203] = True
    found = read(page, 300.0)
    assert found.specks[50:52, 50:52].all()
    assert not found.specks[200:260, 200:203].any()


def test_settings():
    page = draw("typed", seed=5, size=(100.0, 40.0), dirt=1.0)
    dirty = page.ink | page.dirt
    assert not read(dirty, 300.0, SpeckSettings(enabled=False)).speck.any()
    by_size = read(dirty, 300.0, SpeckSettings(size=Length(0.1, "mm"), place=False))
    box = by_size.all_components.box
    side = np.maximum(box[:, 2] - box[:, 0], box[:, 3] - box[:, 1])
    assert np.array_equal(by_size.speck, side <= 0.1 / 25.4 * 300)
    both = read(dirty, 300.0, SpeckSettings(size=Length(0.1, "mm")))
    assert (both.speck | ~by_size.speck).all()


def test_specks_taken_once_are_taken_for_good():
    page = draw("printed", seed=8, size=(110.0, 50.0), dirt=0.6)
    found = read(page.ink | page.dirt)
    again = read(found.components.runs.to_mask())
    assert found.speck.sum() > 40
    assert again.speck.sum() <= 0.02 * found.speck.sum()


def test_lumps_and_hairs():
    mask = np.zeros((80, 200), bool)
    mask[10:30, 10:30] = True  # lump
    mask[10:40, 50:54] = True  # an l
    mask[10:30, 80:100] = True
    mask[14:26, 84:96] = False  # an o
    for k in range(60):
        mask[10 + k, 120 + k : 122 + k] = True  # a scratch
    mask[70, 10:30] = True  # a thin dash
    components = label(RunSet.from_mask(mask))
    shapes = place(components, measure_spread(components), Frame())
    measures = TextMeasures(4.0, 20.0, 10)
    left = components.box[:, 0].tolist()
    lumps = is_lump(components, shapes, measures)
    hairs = is_hair(components, shapes, measures)
    assert [left[i] for i in np.flatnonzero(lumps)] == [10]
    assert [left[i] for i in np.flatnonzero(hairs)] == [120]

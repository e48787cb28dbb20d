from __future__ import annotations

import math
from functools import cache

import numpy as np
import pytest
from PIL import Image, ImageDraw, ImageFont

from scanclean.ink.skew import MOST_SKEW, find_skew, straighten
from scanclean.sets.runs import RunSet, transpose
from scanclean.units import Resolution

A5_AT_300 = (2480, 1748)  # ISO 216: 210 x 148 mm, lying; from memory
DPI_300 = Resolution(300, 300)
ANGLES = (-10.0, -4.85, -0.6, -0.05, 0.0, 0.1, 1.25, 7.3)
WORDS = ("keeper", "harbour", "brig", "tally", "salt", "quay", "signal", "lamp", "oil", "pilot")


# ---- pages of a known skew


def blank():
    image = Image.new("L", A5_AT_300, 255)
    return image, ImageDraw.Draw(image)


def write_lines(draw, left, right, tops, *, size=42, wobble=0, seed=1):
    rng = np.random.default_rng(seed)
    font = ImageFont.load_default(size)
    for top in tops:
        line = ""
        while draw.textlength(line, font) < right - left - 5 * size:
            line += rng.choice(WORDS) + " "
        shift = rng.uniform(-wobble, wobble)
        draw.text((left, top + shift), line, font=font, fill=0)


@cache
def typed():
    image, draw = blank()
    write_lines(draw, 200, 2280, range(150, 1550, 62))
    return image


@cache
def columns(n_columns):
    """Columns whose lines stand half a line or less apart."""
    image, draw = blank()
    step = 2180 // n_columns
    for k in range(n_columns):
        left = 170 + k * step
        tops = range(150 + 26 * k % 41, 1560, 52)
        write_lines(draw, left, left + step - 60, tops, size=34, seed=k)
    return image


@cache
def by_hand():
    """Lines of loops and slanted strokes whose words jump up and down, but rise nowhere."""
    image, draw = blank()
    rng = np.random.default_rng(4)
    for top in range(200, 1500, 120):
        x = 200.0
        half = rng.choice((-6, -2, 2, 6), 7)
        jumps = iter((*half, *half[::-1], *half))  # the same to the left and to the right
        while x < 2200:
            base = top + next(jumps)
            for _ in range(rng.integers(3, 8)):
                width, height = rng.uniform(18, 34), rng.uniform(30, 44)
                if rng.random() < 0.2:
                    height *= 2
                loop = (x, base - height, x + width, base)
                draw.arc(loop, rng.integers(0, 90), 330, fill=0, width=5)
                lean = rng.uniform(4, 14)
                draw.line((x + width, base, x + width + lean, base - height), fill=0, width=5)
                x += width * 1.1
            x += 45
    return image


@cache
def table():
    image, draw = blank()
    for y in range(150, 1600, 80):
        draw.line((120, y, 2360, y), fill=0, width=4)
    for x in (120, 500, 1500, 1900, 2360):
        draw.line((x, 150, x, 1590), fill=0, width=4)
    for y in range(160, 1500, 80):
        for x in (140, 520, 1520, 1920):
            write_lines(draw, x, x + 300, [y], size=40, seed=y + x)
    return image


@cache
def few_lines(n_lines):
    image, draw = blank()
    write_lines(draw, 300, 2100, range(700, 700 + 70 * n_lines, 70))
    return image


@cache
def upright_rules():
    image, draw = blank()
    for x in range(200, 2300, 160):
        draw.line((x, 120, x, 1620), fill=0, width=4)
    return image


def skewed(image, degrees):
    """The ink of a page turned so that its lines descend to the right by so many degrees."""
    turned = image.rotate(-degrees, Image.Resampling.BICUBIC, fillcolor=255)
    noise = np.random.default_rng(7).normal(0, 12, turned.size[::-1])
    return np.asarray(turned) + noise < 128


def skew_of(mask, resolution=DPI_300):
    return find_skew(RunSet.from_mask(mask), resolution)


@pytest.mark.parametrize("degrees", ANGLES)
@pytest.mark.parametrize(("page", "tolerance"), [(typed, 0.05), (table, 0.05), (by_hand, 0.1)])
def test_skew_of_pages(page, tolerance, degrees):
    assert skew_of(skewed(page(), degrees)) == pytest.approx(degrees, abs=tolerance)


@pytest.mark.parametrize("degrees", ANGLES)
@pytest.mark.parametrize("n_columns", [2, 3])
def test_columns_whose_lines_are_not_level(n_columns, degrees):
    # added up across both columns such lines look sharpest at an angle a degree off
    assert skew_of(skewed(columns(n_columns), degrees)) == pytest.approx(degrees, abs=0.05)


@pytest.mark.parametrize("degrees", [-8.0, 0.3, 2.2])
@pytest.mark.parametrize("n_lines", [1, 2, 3])
def test_few_lines(n_lines, degrees):
    assert skew_of(skewed(few_lines(n_lines), degrees)) == pytest.approx(degrees, abs=0.1)


@pytest.mark.parametrize("degrees", [-3.0, 0.0, 1.7])
def test_upright_rules_and_text_on_its_side(degrees):
    assert skew_of(skewed(upright_rules(), degrees)) == pytest.approx(degrees, abs=0.05)
    sideways = np.ascontiguousarray(np.rot90(skewed(typed(), degrees)))
    assert skew_of(sideways) == pytest.approx(degrees, abs=0.05)


@pytest.mark.parametrize("dpi", [150, 200, 600])
def test_other_resolutions(dpi):
    size = tuple(round(side * dpi / 300) for side in A5_AT_300)
    image = typed().resize(size, Image.Resampling.BICUBIC)
    mask = skewed(image, 2.4)
    assert skew_of(mask, Resolution(dpi, dpi)) == pytest.approx(2.4, abs=0.1 if dpi < 200 else 0.05)


@pytest.mark.parametrize("lines_per_mm", [3.85, 7.7])
def test_fax_pages_of_two_resolutions(lines_per_mm):
    # ITU-T T.4: 1728 pels over 215 mm across, 3.85 or 7.7 lines per mm down, from memory
    resolution = Resolution(1728 / 215 * 25.4, lines_per_mm * 25.4)
    size = (round(210 / 215 * 1728), round(148 * lines_per_mm))
    for degrees in (-6.0, 1.5):
        square = Image.fromarray(np.where(skewed(typed(), degrees), 0, 255).astype(np.uint8))
        fax = np.asarray(square.resize(size, Image.Resampling.BOX)) < 140
        assert skew_of(fax, resolution) == pytest.approx(degrees, abs=0.06)


def ruled_by_formula(degrees, resolution, height=1200, width=1600):
    """Rules 0.4 mm thick, 9 mm apart, at an angle on paper; no drawing, only y - x tan."""
    y, x = np.mgrid[:height, :width] + 0.5
    level = y / resolution.y_mm - x / resolution.x_mm * math.tan(math.radians(degrees))
    return level % 9 < 0.4


@pytest.mark.parametrize("resolution", [DPI_300, Resolution(204, 98), Resolution(200, 400)])
@pytest.mark.parametrize("degrees", [-9.5, -1.0, 0.25, 5.0])
def test_rules_drawn_by_the_formula_of_a_line(degrees, resolution):
    mask = ruled_by_formula(degrees, resolution)
    assert skew_of(mask, resolution) == pytest.approx(degrees, abs=0.03)
    assert skew_of(mask[:, ::-1], resolution) == pytest.approx(-degrees, abs=0.03)
    assert skew_of(mask[::-1, ::-1], resolution) == pytest.approx(degrees, abs=0.03)


@pytest.mark.parametrize("degrees", [-2.5, 3.0])
def test_rules_agree_with_the_hough_transform_of_scikit_image(degrees):
    from skimage.transform import hough_line

    mask = ruled_by_formula(degrees, DPI_300)
    trial = np.radians(np.arange(85, 95, 0.05))  # of the normal, which is upright
    space, angles, _ = hough_line(mask, theta=np.concatenate((trial, trial - np.pi)))
    normal = math.degrees(angles[(space.astype(float) ** 2).sum(axis=0).argmax()]) % 180
    assert skew_of(mask) == pytest.approx(normal - 90, abs=0.1)


def test_a_photographed_page_turned_by_scikit_image():
    from skimage import data
    from skimage.filters import threshold_sauvola
    from skimage.transform import rescale, rotate

    page = rescale(data.page(), 3, order=3)
    found = []
    for degrees in (-4.0, 0.0, 2.0):
        grey = rotate(page, -degrees, order=3, mode="edge")  # its angles are counter-clockwise
        found.append(skew_of(grey < threshold_sauvola(grey, 75), Resolution(225, 225)) - degrees)
    # its lines are bent and fan out a little, so its own skew is known only from itself
    assert np.ptp(found) < 0.15
    assert abs(found[1]) < 1


# ---- what else stands on pages


def with_dirt(mask):
    rng = np.random.default_rng(2)
    mask = mask.copy()
    height, width = mask.shape
    for _ in range(4000):
        y, x, size = rng.integers(height), rng.integers(width), rng.integers(2, 8)
        mask[y : y + size, x : x + size] = True
    return mask


def with_borders(mask):
    """Level black borders of a scanner, wide and narrow, and a level line inside one."""
    mask = mask.copy()
    mask[:70] = mask[-25:] = True
    mask[:, :60] = mask[:, -12:] = True
    mask[76:79] = True
    return mask


def with_picture(mask):
    """A level halftone of 85 lines an inch at 15 degrees, over the lower half of the page."""
    y, x = np.mgrid[: mask.shape[0] // 2, : mask.shape[1] - 400]
    pitch = 300 / 85
    turn = math.radians(15)
    along = (x * math.cos(turn) + y * math.sin(turn)) * 2 * math.pi / pitch
    across = (y * math.cos(turn) - x * math.sin(turn)) * 2 * math.pi / pitch
    tone = 0.9 * np.sin(x / 200) * np.cos(y / 150)
    mask = mask.copy()
    mask[mask.shape[0] // 2 - 60 : -60, 200:-200] = (np.cos(along) + np.cos(across) < tone)[
        : mask.shape[0] - mask.shape[0] // 2
    ]
    return mask


@pytest.mark.parametrize("degrees", [-7.0, 0.4, 3.1])
@pytest.mark.parametrize("spoil", [with_dirt, with_borders, with_picture], ids=lambda f: f.__name__)
def test_what_else_stands_on_pages(spoil, degrees):
    assert skew_of(spoil(skewed(typed(), degrees))) == pytest.approx(degrees, abs=0.05)


def test_text_on_a_dithered_ground():
    ground = np.random.default_rng(1).random(A5_AT_300[::-1]) < 0.12
    assert skew_of(skewed(typed(), 3.3) | ground) == pytest.approx(3.3, abs=0.05)


def nothing_to_measure():
    rng = np.random.default_rng(3)
    shape = A5_AT_300[::-1]
    blank_page = np.zeros(shape, bool)
    yield "empty", blank_page
    yield "full", ~blank_page
    for share in (0.0005, 0.05, 0.5):
        yield f"noise {share}", rng.random(shape) < share
    yield "dirt", with_dirt(blank_page)
    speck = blank_page.copy()
    speck[800:840, 1200:1230] = True
    yield "one speck", speck
    folio, draw = blank()
    draw.text((1200, 1500), "- 17 -", font=ImageFont.load_default(42), fill=0)
    yield "folio number", np.asarray(folio) < 128
    yield "one pixel", np.ones((1, 1), bool)
    yield "no pixel", np.ones((0, 0), bool)
    circles, draw = blank()
    for r in range(50, 250, 5):
        x, y = rng.integers(2480), rng.integers(1748)
        draw.ellipse((x - r, y - r, x + r, y + r), outline=0, width=5)
    yield "circles", np.asarray(circles) < 128


@pytest.mark.parametrize(
    ("name", "mask"), list(nothing_to_measure()), ids=lambda v: v if isinstance(v, str) else ""
)
def test_nothing_to_measure(name, mask):
    assert skew_of(mask) == 0.0


def test_beyond_the_range_nothing_is_claimed():
    assert abs(skew_of(skewed(typed(), 24.0))) <= MOST_SKEW
    assert skew_of(skewed(typed(), 14.0)) == pytest.approx(14.0, abs=0.05)


def test_the_same_ink_gives_the_same_angle_to_the_bit():
    mask = skewed(typed(), 1.1)
    assert skew_of(mask) == skew_of(mask.copy())


def test_a_transposed_page_is_skewed_the_other_way():
    ink = RunSet.from_mask(skewed(table(), 2.0))
    assert find_skew(transpose(ink), DPI_300) == pytest.approx(-2.0, abs=0.05)


# ---- turning pages upright


def to_page(to_source, points):
    return (np.linalg.inv(to_source) @ np.column_stack((points, np.ones(len(points)))).T)[:2].T


RESOLUTIONS = [DPI_300, Resolution(204, 98), Resolution(200, 400)]
MARKS = np.array([(60.5, 41.5), (540.5, 55.5), (300.5, 200.5), (70.5, 360.5), (555.5, 350.5)])


@pytest.mark.parametrize("resolution", RESOLUTIONS)
@pytest.mark.parametrize("degrees", [-9.7, -0.4, 3.0, 15.0])
def test_marks_are_found_where_to_source_says(degrees, resolution):
    grey = np.full((400, 600), 240, np.uint8)
    for x, y in MARKS.astype(int):
        grey[y - 4 : y + 5, x - 4 : x + 5] = 20
    turned, to_source = straighten(grey, degrees, resolution)
    np.testing.assert_array_equal(to_source[2], (0, 0, 1))
    darkness = 240.0 - turned
    for source, (x, y) in zip(MARKS, to_page(to_source, MARKS), strict=True):
        top, left = int(y) - 12, int(x) - 12
        part = darkness[top : top + 25, left : left + 25]
        rows, cols = np.mgrid[top : top + 25, left : left + 25] + 0.5
        centre = np.array([(cols * part).sum(), (rows * part).sum(), part.sum()]) / part.sum()
        assert part.sum() == pytest.approx(220 * 81, rel=0.02)  # no mark is cut or lost
        np.testing.assert_allclose((to_source @ centre)[:2], source, atol=0.1)


@pytest.mark.parametrize("degrees", [-12.0, 0.7, 6.0])
def test_values_are_those_of_the_scan_at_the_source_point(degrees):
    def light(x, y):
        return 128 + 60 * np.sin(x / 11) * np.cos(y / 9)

    y, x = np.mgrid[:300, :420] + 0.5
    turned, to_source = straighten(np.rint(light(x, y)).astype(np.uint8), degrees, DPI_300)
    rows, cols = np.mgrid[: turned.shape[0], : turned.shape[1]] + 0.5
    sx, sy = np.tensordot(to_source[:2, :2], [cols, rows], 1) + to_source[:2, 2, None, None]
    inside = (sx > 3) & (sx < 417) & (sy > 3) & (sy < 297)
    assert inside.sum() > 0.9 * 300 * 420
    error = np.abs(turned[inside] - light(sx[inside], sy[inside]))
    # half a pixel beside it would be 1.4 on the mean, and over 3 at the steepest places
    assert error.mean() < 0.6
    assert error.max() < 2.6


@pytest.mark.parametrize("degrees", [-8.0, 2.5])
def test_the_turned_page_is_that_of_scikit_image(degrees):
    from skimage.transform import rotate

    page = np.asarray(typed().resize((620, 437), Image.Resampling.BOX))
    turned, _ = straighten(page, degrees, DPI_300)
    expected = rotate(page, degrees, resize=True, order=3, mode="constant", cval=1) * 255
    rows, cols = np.minimum(turned.shape, expected.shape)
    assert np.abs(np.subtract(turned.shape, expected.shape)).max() <= 1
    ours, theirs = (
        (a[(a.shape[0] - rows) // 2 :, (a.shape[1] - cols) // 2 :])[:rows, :cols]
        for a in (turned, expected)
    )
    # canvases may differ by a pixel, half of it on either side, so words are compared, not pixels
    blocks = [Image.fromarray(a.astype(np.uint8)).reduce(16) for a in (ours, theirs)]
    assert np.corrcoef([np.asarray(b).ravel() for b in blocks])[0, 1] > 0.98


@pytest.mark.parametrize("resolution", RESOLUTIONS)
def test_the_canvas_holds_the_whole_scan_and_no_more(resolution):
    scan = np.full((301, 450), 200, np.uint8)
    turned, to_source = straighten(scan, 7.0, resolution)
    corners = to_page(to_source, np.array([(0, 0), (450, 0), (0, 301), (450, 301)]))
    size = np.array(turned.shape[::-1])
    assert corners.min() > -0.01
    assert (corners <= size + 0.01).all()
    np.testing.assert_allclose(np.ptp(corners, axis=0), size, atol=1)


@pytest.mark.parametrize("resolution", RESOLUTIONS)
def test_lengths_on_paper_are_kept(resolution):
    _, to_source = straighten(np.zeros((300, 400), np.uint8), -11.0, resolution)
    mm = np.array([resolution.x_mm, resolution.y_mm])
    on_page = to_page(to_source, MARKS) / mm
    on_scan = MARKS / mm
    np.testing.assert_allclose(
        np.linalg.norm(on_page - on_page[0], axis=1), np.linalg.norm(on_scan - on_scan[0], axis=1)
    )


@pytest.mark.parametrize("degrees", [-6.0, 0.8, 9.0])
def test_a_straightened_page_is_straight(degrees):
    mask = skewed(typed(), degrees)
    turned, _ = straighten(mask, skew_of(mask), DPI_300)
    assert turned.dtype == np.bool_
    assert abs(skew_of(turned)) < 0.05
    assert turned.sum() == pytest.approx(mask.sum(), rel=0.01)


def test_corners_are_paper():
    rng = np.random.default_rng(1)
    grey = rng.integers(226, 235, (200, 300)).astype(np.uint8)
    for pixels, white in (
        (grey, 230),
        (np.stack([grey, grey - 30, grey - 60], axis=2), (230, 200, 170)),
        (grey.astype(np.uint16) * 257, 230 * 257),
    ):
        turned, _ = straighten(pixels, 10.0, DPI_300)
        assert turned.dtype == pixels.dtype
        assert turned.ndim == pixels.ndim
        np.testing.assert_allclose(turned[0, 0], white, rtol=0.01)
        np.testing.assert_allclose(turned[-1, -1], white, rtol=0.01)
    assert straighten(grey, 10.0, DPI_300, paper=17)[0][0, 0] == 17
    rgb = np.stack([grey] * 3, axis=2)
    assert straighten(rgb, 10.0, DPI_300, paper=(1, 2, 3))[0][0, 0].tolist() == [1, 2, 3]
    assert not straighten(np.ones((200, 300), bool), 10.0, DPI_300)[0][0, 0]


def test_sixteen_bits_keep_their_depth_and_do_not_wrap():
    deep = np.zeros((100, 100), np.uint16)
    deep[:, 50:] = 65535  # bicubic interpolation overshoots on both sides of such an edge
    turned, _ = straighten(deep, 4.0, DPI_300, paper=65535)
    eight, _ = straighten((deep >> 8).astype(np.uint8), 4.0, DPI_300, paper=255)
    np.testing.assert_allclose(turned / 257, eight, atol=1)
    smooth = np.linspace(1000, 1255, 100 * 100).reshape(100, 100).astype(np.uint16)
    values = np.unique(straighten(smooth, 4.0, DPI_300)[0])
    assert values.size > 200  # 8 bits would leave one or two


def test_no_skew_gives_the_page_itself():
    grey = np.arange(12, dtype=np.uint8).reshape(3, 4)
    turned, to_source = straighten(grey, 0.0, DPI_300)
    np.testing.assert_array_equal(turned, grey)
    np.testing.assert_array_equal(to_source, np.eye(3))


def test_pages_of_one_pixel_can_be_turned():
    for pixels in (np.ones((1, 1), bool), np.full((1, 1), 9, np.uint8)):
        turned, to_source = straighten(pixels, 5.0, DPI_300)
        assert turned.dtype == pixels.dtype
        assert np.isfinite(to_source).all()


@pytest.mark.parametrize("degrees", [45.0, -90.0, math.nan, math.inf])
def test_impossible_angles(degrees):
    with pytest.raises(ValueError, match="angle"):
        straighten(np.zeros((4, 4), np.uint8), degrees, DPI_300)


@pytest.mark.parametrize("shape", [(4,), (4, 4, 4), (4, 4, 3, 1)])
def test_what_is_no_page(shape):
    with pytest.raises(ValueError, match="pixels of shape"):
        straighten(np.zeros(shape, np.uint8), 1.0, DPI_300)
    with pytest.raises(ValueError, match="float64"):
        straighten(np.zeros((4, 4)), 1.0, DPI_300)

"""Components and their measures, judged by scipy, scikit-image and published numbers."""

from __future__ import annotations

import numpy as np
import pytest
from hypothesis import given
from scipy import ndimage
from skimage import data, measure

from scanclean.sets.labels import label
from scanclean.sets.runs import RunSet
from tests.strategies import mask_pairs, masks

of = RunSet.from_mask
FULL = np.ones((3, 3))


@given(masks())
def test_components_are_those_of_scipy(mask):
    for connectivity, structure in ((8, FULL), (4, None)):
        components = label(of(mask), connectivity=connectivity)
        expected, n = ndimage.label(mask, structure)
        assert components.n == n
        for i in range(n):
            assert components.keep(np.arange(n) == i) == of(expected == i + 1)


@given(masks())
def test_columns_are_those_of_regionprops(mask):
    components = label(of(mask))
    props = measure.regionprops(ndimage.label(mask, FULL)[0])
    assert components.area.tolist() == [p.area for p in props]
    top_left = [(p.bbox[1], p.bbox[0], p.bbox[3], p.bbox[2]) for p in props]
    assert [tuple(box) for box in components.box.tolist()] == top_left
    assert components.euler.tolist() == [p.euler_number for p in props]
    for found, p in zip(components.centroid, props, strict=True):
        assert found == pytest.approx([p.centroid[1] + 0.5, p.centroid[0] + 0.5])


@given(mask_pairs())
def test_touching_and_select(pair):
    mask, other = pair
    components = label(of(mask))
    labels, n = ndimage.label(mask, FULL)
    touched = np.isin(np.arange(1, n + 1), labels[other])
    assert components.touching(of(other)).tolist() == touched.tolist()
    chosen = components.select(touched)
    again = label(chosen.runs)
    assert (chosen.n, chosen.runs) == (touched.sum(), components.keep(touched))
    assert chosen.area.tolist() == again.area.tolist()
    assert chosen.holes.tolist() == again.holes.tolist()


SHAPES = {
    # rows; components 4 / 8; Euler numbers 4 / 8, after S. B. Gray 1971 (bit quads, recomputed)
    "A": (".###. #...# ##### #...# #...#", 2, 1, 2, 0),
    "B": ("####. #...# ####. #...# ####.", 3, 1, 3, -1),
    "8": (".###. #...# .###. #...# .###.", 7, 1, 7, -1),
    "i": (".#. ... .#. .#. .#.", 2, 2, 2, 2),
    "diamond": ("..#.. .#.#. #...# .#.#. ..#..", 8, 1, 8, 0),
    "chessboard": ("#.#. .#.# #.#. .#.#", 8, 1, 8, -1),
    "ring": ("### #.# ###", 1, 1, 0, 0),
}


@pytest.mark.parametrize("name", SHAPES)
def test_euler_numbers_of_gray(name):
    picture, n4, n8, euler4, euler8 = SHAPES[name]
    page = of([[c == "#" for c in row] for row in picture.split()])
    four, eight = label(page, connectivity=4), label(page, connectivity=8)
    assert (four.n, eight.n) == (n4, n8)
    assert (four.euler.sum(), eight.euler.sum()) == (euler4, euler8)


@pytest.mark.parametrize(
    ("side", "expected"),
    [
        (2, [1, 13, 2]),
        (3, [1, 218, 208, 78, 6, 1]),
        (4, [1, 11506, 21172, 20262, 9560, 2593, 408, 32, 2]),
    ],
)
def test_every_small_matrix(side, expected):
    # how many of the 0/1 matrices of a size have 0, 1, 2, ... 4-connected components:
    # MathWorld "s-Cluster", OEIS A086266; all of them side by side on one page, paper between
    count = 2 ** (side * side)
    bits = (np.arange(count)[:, None] >> np.arange(side * side)) & 1
    page = np.zeros((count, side + 1, side), bool)
    page[:, :side] = bits.reshape(count, side, side)
    components = label(of(page.reshape(-1, side)), connectivity=4)
    matrix = components.box[:, 1] // (side + 1)
    per_matrix = np.bincount(matrix, minlength=count)
    assert np.bincount(per_matrix).tolist() == expected


def test_random_page_has_as_many_clusters_as_percolation_theory_says():
    # Ziff, Finch and Adamchik, Phys. Rev. Lett. 79, 1997: 0.065770 clusters a pixel at p = 1/2 on
    # an endless lattice; the border of a 2000 x 2000 page adds about 0.0001, chance about 0.00015
    page = of(np.random.default_rng(2).random((2000, 2000)) < 0.5)
    assert label(page, connectivity=4).n / 4e6 == pytest.approx(0.0659, abs=5e-4)


@pytest.mark.parametrize(
    ("name", "level", "ink", "runs", "n4", "n8", "euler4", "euler8"),
    [
        ("page", 157, 26526, 2961, 289, 230, 6, -144),
        ("text", 109, 10255, 1445, 206, 143, 194, 113),
    ],
)
def test_real_images(name, level, ink, runs, n4, n8, euler4, euler8):
    # scikit-image's bundled images at Otsu's level; scipy, scikit-image and OpenCV agree on these
    page = of(getattr(data, name)() <= level)
    four, eight = label(page, connectivity=4), label(page)
    assert (page.area, page.n_runs, four.n, eight.n) == (ink, runs, n4, n8)
    assert (four.euler.sum(), eight.euler.sum()) == (euler4, euler8)


def test_connectivity_is_checked():
    with pytest.raises(ValueError, match="4 or 8"):
        label(of([[1]]), connectivity=6)


def test_nothing_found_is_an_empty_table():
    components = label(RunSet.empty((4, 5)))
    assert components.n == 0
    assert components.box.shape == (0, 4)
    assert components.area.size == components.holes.size == 0
    assert components.keep(np.zeros(0, bool)) == RunSet.empty((4, 5))

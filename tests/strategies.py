"""Random pages and elements for property tests, and the plane on which scipy judges them."""

from __future__ import annotations

from collections.abc import Callable

import numpy as np
from hypothesis import strategies as st
from hypothesis.extra import numpy as hnp
from numpy.typing import NDArray

from scanclean.sets.elements import Element

Mask = NDArray[np.bool_]

MARGIN = 16  # more than any element below reaches, twice


def masks(max_side: int = 14) -> st.SearchStrategy[Mask]:
    """Boolean pages, the empty, the full and the one-pixel page among them."""
    return hnp.array_shapes(min_dims=2, max_dims=2, min_side=1, max_side=max_side).flatmap(
        lambda shape: st.one_of(
            hnp.arrays(bool, shape),
            st.just(np.zeros(shape, bool)),
            st.just(np.ones(shape, bool)),
        )
    )


def mask_pairs(max_side: int = 14) -> st.SearchStrategy[tuple[Mask, Mask]]:
    return hnp.array_shapes(min_dims=2, max_dims=2, min_side=1, max_side=max_side).flatmap(
        lambda shape: st.tuples(hnp.arrays(bool, shape), hnp.arrays(bool, shape))
    )


@st.composite
def elements(draw: st.DrawFn) -> Element:
    """Elements that are not empty, their origins in and outside of them."""
    shape = draw(hnp.array_shapes(min_dims=2, max_dims=2, min_side=1, max_side=5))
    mask = draw(hnp.arrays(bool, shape))
    x = draw(st.integers(0, shape[1] - 1))
    y = draw(st.integers(0, shape[0] - 1))
    mask[y, x] = True
    return Element.from_mask(mask, (draw(st.integers(-3, 7)), draw(st.integers(-3, 7))))


def centred(element: Element) -> Mask:
    """The element in an odd square array whose middle is its origin, as scipy takes it."""
    side = 2 * 8 + 1
    square = np.zeros((side, side), bool)
    y, x = np.nonzero(element.to_mask())
    square[y - element.origin[1] + 8, x - element.origin[0] + 8] = True
    return square


def on_plane(mask: Mask, operation: Callable[[Mask], Mask]) -> Mask:
    """`operation` with paper all round the page, cut back to the page."""
    page = np.pad(mask, MARGIN)
    height, width = mask.shape
    return operation(page)[MARGIN : MARGIN + height, MARGIN : MARGIN + width]

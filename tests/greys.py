"""Grey pages for the tests of density and threshold."""

from __future__ import annotations

import numpy as np


def bars(height=600, width=500, *, paper=230, ink=40, stroke=5, pitch=30, noise=0.0, seed=1):
    """Upright strokes in lines with gaps, `stroke` px wide and longer than that."""
    page = np.full((height, width), float(paper))
    for top in range(40, height - 60, 50):
        for left in range(40, width - 40, pitch):
            page[top : top + 28, left : left + stroke] = ink
    if noise:
        page += np.random.default_rng(seed).normal(0, noise, page.shape)
    return np.clip(np.round(page), 0, 255).astype(np.uint8)

"""Ruled pages drawn from the density law, for the tests of ruling.

Every line and stroke is a layer with its own share of each pixel; light passes the layers one after
another, so that their densities add (Beer-Lambert law).
"""

from __future__ import annotations

from dataclasses import dataclass, field

import numpy as np
from scipy import ndimage

from scanclean.ink.density import measure_tone
from scanclean.rules.ruling import RuleSettings, find_rules
from scanclean.sets.runs import RunSet
from scanclean.units import Resolution

INK_RATIO = 0.68  # of the paper: a plain threshold, so that the tests depend on ruling alone


def line(shape, *, centre, thickness, slope=0.0, start=0, stop=None):
    """Share of each pixel that a line covers; `centre` in page coordinates at column 0."""
    high, wide = shape
    y = centre + slope * (np.arange(wide) + 0.5)
    top, rows = y - thickness / 2, np.arange(high)[:, None]
    share = np.clip(np.minimum(rows + 1, top + thickness) - np.maximum(rows, top), 0, 1)
    share[:, :start] = 0
    if stop is not None:
        share[:, stop:] = 0
    return share


def box(shape, left, top, right, bottom):
    share = np.zeros(shape)
    share[top:bottom, left:right] = 1
    return share


@dataclass
class Page:
    """Layers of rules and of strokes, each a (share, density)."""

    shape: tuple[int, int]
    rules: list = field(default_factory=list)
    strokes: list = field(default_factory=list)
    dpi: Resolution = field(default_factory=lambda: Resolution(300, 300))

    def rule(self, share, density=0.5):
        self.rules.append((share, density))

    def stroke(self, share, density=1.0):
        self.strokes.append((share, density))

    def text(self, *, left, baseline, height=30, width=5, pitch=26, count=8, density=1.0):
        """Upright strokes with a foot: they stand on the baseline and reach below every third."""
        for i in range(count):
            x, foot = left + i * pitch, baseline + (12 if i % 3 == 0 else 0)
            share = box(self.shape, x, baseline - height, x + width, foot)
            share = np.maximum(share, box(self.shape, x - 5, foot - 4, x + width + 5, foot))
            self.stroke(share, density)

    def light(self, layers, blur):
        passed = np.ones(self.shape)
        for share, density in layers:
            passed *= 1 - share * (1 - 10.0**-density)
        return ndimage.gaussian_filter(passed, blur) if blur else passed

    def scan(self, *, blur=0.6, noise=0.01, paper=230.0, seed=1, rules=True):
        light = self.light(self.strokes + (self.rules if rules else []), blur)
        grain = np.random.default_rng(seed).normal(0, noise, self.shape)
        return np.clip(np.rint(paper * (light + grain)), 0, 255).astype(np.uint8)


def strip(grey, dpi=Resolution(300, 300), **settings):  # noqa: B008 (a frozen value)
    """Ink, and what is found on it."""
    tone = measure_tone(grey, resolution=dpi)
    ink = RunSet.from_mask(tone.ratio < INK_RATIO * 255)
    return ink, find_rules(ink, tone, dpi, RuleSettings(**settings))


def strip_bitonal(mask, dpi=Resolution(300, 300), **settings):  # noqa: B008
    ink = RunSet.from_mask(mask)
    return ink, find_rules(ink, None, dpi, RuleSettings(**settings))

"""One page from scan to ink, ledger and layout: the stages in their order, as one pure function."""

from __future__ import annotations

from collections.abc import Iterator, Mapping
from dataclasses import dataclass, field
from functools import partial

import numpy as np
from numpy.typing import NDArray

from scanclean.ink.density import Tone, measure_tone
from scanclean.ink.edges import find_edges
from scanclean.ink.holes import find_pinholes
from scanclean.ink.skew import find_skew
from scanclean.ink.skew import straighten as turn
from scanclean.ink.threshold import threshold
from scanclean.ledger import Ledger
from scanclean.recipe import Recipe
from scanclean.rules.ruling import Rule, find_rules
from scanclean.scans.pageio import Scan
from scanclean.sets.labels import Components, label
from scanclean.sets.runs import RunSet, complement, crop, difference, union
from scanclean.steps import Step
from scanclean.text.glyphs import join_parts
from scanclean.text.reading import Glyphs, TextLines, put_in_order
from scanclean.text.specks import find_specks
from scanclean.text.textlines import LineSet, find_lines
from scanclean.text.textmeasure import (
    Spread,
    TextMeasures,
    estimate_dpi,
    measure_spread,
    measure_text,
)
from scanclean.units import MM_PER_INCH, Resolution

__all__ = ["CleanPage", "clean_page"]

_A4_LONG_SIDE = 297.0 / MM_PER_INCH
_LIKELY_DPI = (72.0, 600.0)  # of a page that says nothing, before its text is measured
_MOSTLY_INK = 0.6  # a bitonal page with more ink than this is a negative
_LEAST_TURN = 0.03  # degrees; half a pixel at the ends of a line across A4 at 300 dpi
_DENSE_SPECKS = 4.0  # a square centimetre: every second letter of small print has one beside it
_MM2_PER_CM2 = 100.0


@dataclass(frozen=True, eq=False)
class CleanPage:
    """A cleaned page and all that is known of it.

    Parameters
    ----------
    ledger : Ledger
        What became of every pixel; `ink` and `thresholded` are its two sides.
    resolution : Resolution
        In force: of the file, of the caller, or estimated.
    dpi_estimated : bool
    skew_degrees : float
        Of the scan's text; positive where it falls to the right.
    to_source : (2, 3) float array
        Takes a page point (x, y, 1) to a point of the scan.
    measures : mapping of str to number or None
        None for what the page gave no hold to measure.
    flags : tuple of str
    components : Components
        Of the cleaned ink.
    glyphs : Glyphs
    lines : TextLines
    rules : tuple of Rule
    """

    ledger: Ledger
    resolution: Resolution
    dpi_estimated: bool
    skew_degrees: float
    to_source: NDArray[np.float64]
    measures: Mapping[str, float | None]
    flags: tuple[str, ...]
    components: Components
    glyphs: Glyphs
    lines: TextLines
    rules: tuple[Rule, ...]

    @property
    def ink(self) -> RunSet:
        """The cleaned page."""
        return self.components.runs

    @property
    def thresholded(self) -> RunSet:
        """The page as it was thresholded, before anything was taken out."""
        return self.ledger.thresholded

    def crops(self) -> Iterator[NDArray[np.bool_]]:
        """Each glyph alone in its box, True on its ink, in reading order."""
        owner = self.glyphs.component_glyph[self.components.run_label]
        order = np.argsort(owner, kind="stable")
        first = np.searchsorted(owner[order], np.arange(len(self.glyphs.box) + 1))
        runs = self.ink.bounds.reshape(-1, 2)[order]
        for glyph, box in enumerate(self.glyphs.box.tolist()):
            mine = RunSet(self.ink.shape, runs[first[glyph] : first[glyph + 1]].ravel())
            yield crop(mine, box).to_mask()


def clean_page(scan: Scan, recipe: Recipe, *, straighten: bool = False) -> CleanPage:
    """Clean one page.

    Parameters
    ----------
    scan : Scan
    recipe : Recipe
    straighten : bool
        Turn the page upright first, by the slope of its text.

    Returns
    -------
    CleanPage
        The same scan and recipe give the same page, to the bit.
    """
    resolution = scan.dpi or _likely_resolution(scan.shape)
    pixels = scan.pixels if scan.pixels.dtype == np.bool_ else scan.grey()
    start = _find_ink(pixels, resolution, recipe)
    skew = leaning = find_skew(start.ink - start.shade, resolution)
    to_source = np.eye(3)
    if straighten and abs(skew) >= _LEAST_TURN:
        pixels, matrix = turn(pixels, skew, resolution)
        to_source = matrix.astype(np.float64)
        start, leaning = _find_ink(pixels, resolution, recipe), 0.0
    if scan.dpi is None:
        resolution = _estimated(start.ink - start.shade, resolution)

    books = _Books.opened(start.ink)
    add_steps = partial(_add_steps, books, recipe.steps, resolution)
    books.take("shade", start.shade)
    add_steps("threshold")
    edges = find_edges(
        books.ink, grey=start.light_paper, resolution=resolution, settings=recipe.edges
    )
    books.take("edge", edges)
    add_steps("edges")
    ruling = find_rules(books.ink, start.tone, resolution, recipe.rules)
    books.take("rule", ruling.taken)
    books.mend(ruling.mended)
    add_steps("rules")
    stroke_px = start.stroke_px
    pinholes = find_pinholes(
        books.ink, stroke_px=stroke_px, resolution=resolution, settings=recipe.holes
    )
    books.mend(pinholes)
    add_steps("holes")
    text = _Text(books.ink, resolution, leaning)
    speck = find_specks(
        text.components, text.lines, text.measures, resolution, recipe.specks, spread=text.spread
    )
    books.take("speck", text.components.keep(speck))
    before = books.ink
    add_steps("specks")
    if books.ink == before:
        text.forget(speck)
    else:
        text = _Text(books.ink, resolution, leaning)
    glyphs, lines = put_in_order(
        text.components, join_parts(text.components, text.lines, spread=text.spread), text.lines
    )
    ledger = books.closed()
    return CleanPage(
        ledger=ledger,
        resolution=resolution,
        dpi_estimated=scan.dpi is None,
        skew_degrees=skew,
        to_source=to_source[:2],
        measures=_measures(ledger, text, start, int(speck.sum())),
        flags=_flags(scan, start, text, int(speck.sum()), resolution),
        components=text.components,
        glyphs=glyphs,
        lines=lines,
        rules=ruling.rules,
    )


# ---- from pixels to ink


@dataclass(frozen=True, eq=False)
class _Start:
    """A page after its threshold.

    `light_paper` is the grey page with light paper, `tone` its measure; both None of bitonal scans.
    """

    ink: RunSet
    shade: RunSet
    light_paper: NDArray[np.uint8] | None
    tone: Tone | None
    light_on_dark: bool
    stroke_px: float


def _find_ink(
    pixels: NDArray[np.uint8] | NDArray[np.bool_], resolution: Resolution, recipe: Recipe
) -> _Start:
    """Threshold a grey page; take a bitonal one as it is, a negative inverted."""
    if pixels.dtype == np.bool_:
        ink = RunSet.from_mask(pixels)
        negative = recipe.threshold.light_on_dark
        if negative is None:
            negative = ink.area > _MOSTLY_INK * pixels.size and ink.area < pixels.size
        if negative:
            ink = complement(ink)
        nothing = RunSet.empty(ink.shape)
        return _Start(ink, nothing, None, None, bool(negative), _stroke_width(ink))
    grey = pixels.astype(np.uint8, copy=False)
    tone = measure_tone(grey, resolution=resolution, light_on_dark=recipe.threshold.light_on_dark)
    found = threshold(grey, tone, recipe.threshold, resolution)
    return _Start(
        ink=found.ink,
        shade=found.shade,
        light_paper=~grey if tone.light_on_dark else grey,
        tone=tone,
        light_on_dark=tone.light_on_dark,
        stroke_px=tone.stroke_px,
    )


def _stroke_width(ink: RunSet) -> float:
    """Median run length of a bitonal page, single pixels apart."""
    lengths = ink.length[ink.length > 1]
    return float(np.median(lengths)) if lengths.size else 1.0


def _likely_resolution(shape: tuple[int, int]) -> Resolution:
    """The resolution of the page if it were A4; to begin with, where the file states none."""
    low, high = _LIKELY_DPI
    dpi = float(round(min(max(max(shape) / _A4_LONG_SIDE, low), high)))
    return Resolution(dpi, dpi)


def _estimated(ink: RunSet, likely: Resolution) -> Resolution:
    """The resolution at which the page's text would have its usual size."""
    measures = measure_text(label(ink), None)
    if not measures.x_height_px:
        return likely
    dpi = estimate_dpi(measures.x_height_px)
    return Resolution(dpi, dpi)


# ---- from ink to ledger


@dataclass
class _Books:
    """The page being cleaned: what is ink now, and what was booked.

    Keeps the ledger's laws whatever the stages and a recipe's own steps do: a pixel that was
    mended and is taken out again was never ink, and one that was taken out and is put back was
    never taken.
    """

    thresholded: RunSet
    ink: RunSet
    mended: RunSet
    claims: dict[str, RunSet] = field(default_factory=dict)

    @classmethod
    def opened(cls, thresholded: RunSet) -> _Books:
        """Books of a page of which nothing was taken yet."""
        return cls(thresholded, thresholded, RunSet.empty(thresholded.shape))

    def take(self, claim: str, found: RunSet) -> None:
        """Take out what is found, for a reason."""
        taken = found & self.ink
        if taken:
            earlier = self.claims.get(claim, RunSet.empty(taken.shape))
            self.claims[claim] = earlier | (taken - self.mended)
            self.mended = self.mended - taken
            self.ink = self.ink - taken

    def mend(self, found: RunSet) -> None:
        """Put in what is missing."""
        if found:
            # what is neither ink nor was taken out was paper
            self.mended = self.mended | difference(found - self.ink, self._taken)
            self.claims = {claim: taken - found for claim, taken in self.claims.items()}
            self.ink = self.ink | found

    @property
    def _taken(self) -> RunSet:
        return union(RunSet.empty(self.ink.shape), *self.claims.values())

    def closed(self) -> Ledger:
        """The ledger of all that was booked."""
        claims = {claim: taken for claim, taken in self.claims.items() if taken}
        return Ledger(self.thresholded, claims, self.mended)


def _add_steps(books: _Books, steps: tuple[Step, ...], resolution: Resolution, after: str) -> None:
    """The recipe's own steps that follow a stage."""
    for step in steps:
        if step.after == after:
            result = step.apply(books.ink, resolution)
            books.take(step.claim, books.ink - result)
            books.mend(result - books.ink)


# ---- from ink to text


class _Text:
    """The components of a page with their measures and text lines."""

    def __init__(self, ink: RunSet, resolution: Resolution, skew_degrees: float) -> None:
        self.components: Components = label(ink)
        self.spread: Spread = measure_spread(self.components)
        self.measures: TextMeasures = measure_text(self.components, resolution, spread=self.spread)
        self.lines: LineSet = find_lines(
            self.components,
            self.measures,
            resolution,
            skew_degrees=skew_degrees,
            spread=self.spread,
        )

    def forget(self, speck: NDArray[np.bool_]) -> None:
        """Go on without the specks; the lines were found without them."""
        if speck.any():
            self.components = self.components.select(~speck)
            self.spread = self.spread.select(~speck)


# ---- what is told about the page


def _measures(ledger: Ledger, text: _Text, start: _Start, n_specks: int) -> dict[str, float | None]:
    height, width = ledger.thresholded.shape
    has_text = text.measures.x_height_px > 0
    return {
        "stroke_px": text.measures.stroke_px if has_text else None,
        "x_height_px": text.measures.x_height_px if has_text else None,
        "ink_share": text.components.runs.area / (height * width),
        "specks": n_specks,
        "noise": None if start.tone is None else start.tone.noise,
        "paper_level": None if start.tone is None else start.tone.paper_level,
        "ink_darkness": None if start.tone is None else start.tone.ink_darkness,
    }


def _flags(
    scan: Scan, start: _Start, text: _Text, n_specks: int, resolution: Resolution
) -> tuple[str, ...]:
    height, width = scan.shape
    cm2 = height * width / (resolution.x_mm * resolution.y_mm) / _MM2_PER_CM2
    found = {
        "blank": not text.components.n,
        "no-text": text.components.n > 0 and not text.lines.n,
        "light-on-dark": start.light_on_dark,
        "dpi-estimated": scan.dpi is None,
        "specks-dense": n_specks > max(20.0, _DENSE_SPECKS * cm2),
    }
    return tuple(name for name, there in found.items() if there)

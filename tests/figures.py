"""How well pages are cleaned, measured on ground-truth pages.

``python -m tests.figures`` prints a table, one row a page; ``--seed-set 2`` draws all pages anew,
``--kind form`` takes those whose kind or name holds the word, ``--save DIR`` writes for each page
the scan, the cleaned page, the ledger and the difference from the truth, for looking.
"""

from __future__ import annotations

import math
import re
import time
from collections.abc import Iterable
from dataclasses import dataclass, fields
from pathlib import Path

import click
import numpy as np
from numpy.typing import NDArray
from PIL import Image
from scipy import ndimage

from fixtures.drawn import VARIANTS, DrawnPage, available, draw_variant
from scanclean.clean import CleanPage, clean_page
from scanclean.ledger import PALETTE
from scanclean.recipe import Recipe
from scanclean.scans.pageio import Scan
from scanclean.score import CleaningLosses, cleaning_losses, match_boxes, match_regions

__all__ = ["Figures", "Outcome", "clean_drawn", "difference", "measure", "outcome_of", "table"]

MIN_IOU = 0.75
MIN_MATCH = 0.95  # the handwriting segmentation contests' threshold for text lines

# where the page differs from the truth, in colours that colour-blind readers tell apart
# (M. Okabe and K. Ito, "Color Universal Design", 2008)
_LOST = (213, 94, 0)
_ADDED = (204, 121, 167)
_RULE_LEFT = (0, 114, 178)
_DIRT_LEFT = (0, 158, 115)
_KEPT = (90, 90, 90)


@dataclass(frozen=True)
class Outcome:
    """What came of cleaning, as plain arrays.

    Attributes
    ----------
    ink : bool array, shape (H, W)
    glyph_box : int array, shape (G, 4)
    glyph_word : int array, shape (G,)
        -1 for none.
    line_map : int array, shape (H, W)
        1 + the index of the text line at each pixel of ink, 0 for none.
    """

    ink: NDArray[np.bool_]
    glyph_box: NDArray[np.integer]
    glyph_word: NDArray[np.integer]
    line_map: NDArray[np.integer]


@dataclass(frozen=True)
class Figures:
    """One row of the table.

    Attributes
    ----------
    losses : CleaningLosses
    boxes, lines, words : float
        F1 of glyph boxes at IoU 0.75, FM of text lines at MatchScore 0.95, F1 of word boxes at
        IoU 0.75; `boxes` is nan for joined-up hands, whose letters have no box of their own.
    seconds : float
    """

    name: str
    losses: CleaningLosses
    boxes: float
    lines: float
    words: float
    seconds: float = math.nan

    @property
    def hurt_share(self) -> float:
        """Share of the glyphs that lost more than a tenth of their ink."""
        return self.losses.glyphs_hurt / max(1, self.losses.glyphs)

    @property
    def broken_share(self) -> float:
        """Share of the glyphs that fell into more pieces."""
        return self.losses.glyphs_broken / max(1, self.losses.glyphs)

    @property
    def marks_lost_share(self) -> float:
        """Share of the small marks that were lost."""
        return self.losses.marks_lost / max(1, self.losses.marks)


def clean_drawn(page: DrawnPage, recipe: Recipe | None = None) -> CleanPage:
    """Clean a drawn page as the program would, from its pixels and resolution alone."""
    scan = Scan(page.scan, page.dpi, 1, 1, page.name)
    return clean_page(scan, recipe or Recipe())


def outcome_of(cleaned: CleanPage) -> Outcome:
    """The arrays that are measured of a cleaned page."""
    ink = cleaned.ink.to_mask()
    components, glyphs = cleaned.components, cleaned.glyphs
    glyph_of_run = glyphs.component_glyph[components.run_label]
    # 0 for runs of no glyph, which -1 picks from the end
    line_of_glyph = np.append(np.asarray(glyphs.line) + 1, 0)
    lines = np.zeros(ink.shape, np.int32)
    lengths = np.asarray(cleaned.ink.stop) - np.asarray(cleaned.ink.start)
    lines[ink] = np.repeat(line_of_glyph[glyph_of_run], lengths)
    return Outcome(ink, np.asarray(glyphs.box), np.asarray(glyphs.word), lines)


def measure(page: DrawnPage, outcome: Outcome, *, seconds: float = math.nan) -> Figures:
    """Measure an outcome against the truth of its page."""
    losses = cleaning_losses(
        outcome.ink,
        page.ink,
        glyphs=page.glyph_map,
        marks=page.mark_map,
        rules=page.rule_map,
        dirt=page.dirt_map,
    )
    boxes = match_boxes(outcome.glyph_box, page.glyphs.box, min_iou=MIN_IOU).f1
    words = match_boxes(
        hulls(outcome.glyph_box, outcome.glyph_word), page.word_box, min_iou=MIN_IOU
    ).f1
    # grown by a pixel, so that an edge thresholded a little early does not count as a lost line
    grown = ndimage.maximum_filter(outcome.line_map, size=3)
    found = np.where(outcome.line_map > 0, outcome.line_map, grown)
    lines = match_regions(found, page.line_map, min_score=MIN_MATCH).f1
    joined = VARIANTS.get(page.name, ("", {}))[0] == "handwritten"
    return Figures(page.name, losses, math.nan if joined else boxes, lines, words, seconds)


def hulls(box: NDArray[np.integer], group: NDArray[np.integer]) -> NDArray[np.int64]:
    """The box round each group of boxes; groups below 0 are none."""
    box, group = box[group >= 0], group[group >= 0]
    _, index = np.unique(group, return_inverse=True)
    hull = np.zeros((int(index.max(initial=-1)) + 1, 4), np.int64)
    hull[:, :2] = np.iinfo(np.int64).max
    np.minimum.at(hull[:, :2], index, box[:, :2])
    np.maximum.at(hull[:, 2:], index, box[:, 2:])
    return hull


def difference(page: DrawnPage, ink: NDArray[np.bool_]) -> NDArray[np.uint8]:
    """A picture of what was lost and what was left, uint8 (H, W, 3)."""
    near = ndimage.maximum_filter(page.ink, size=3)
    picture = np.full((*ink.shape, 3), 255, np.uint8)
    picture[page.rule & ~page.ink] = 232
    picture[ink & page.ink] = _KEPT
    picture[ink & ~page.ink] = _ADDED
    picture[ink & page.rule & ~near] = _RULE_LEFT
    picture[ink & page.dirt & ~near] = _DIRT_LEFT
    picture[page.ink & ~ink] = _LOST
    return picture


_COLUMNS = (
    ("ink kept %", 10),
    ("added %", 8),
    ("rule left %", 11),
    ("lost at rules %", 15),
    ("hurt %", 7),
    ("broken %", 9),
    ("marks lost", 11),
    ("specks left", 12),
    ("boxes", 6),
    ("lines", 6),
    ("words", 6),
    ("s", 6),
)


def heading() -> str:
    """The table's first row."""
    return f"{'page':28}" + "".join(f"{title:>{width}}" for title, width in _COLUMNS)


def row(figures: Figures) -> str:
    """One page's row of the table."""
    losses = figures.losses
    cells = (
        f"{100 * losses.ink_kept:.2f}",
        f"{100 * losses.ink_added:.2f}",
        f"{100 * losses.rule_left:.2f}",
        f"{100 * losses.ink_lost_at_rules:.2f}",
        f"{100 * figures.hurt_share:.2f}",
        f"{100 * figures.broken_share:.2f}",
        f"{losses.marks_lost}/{losses.marks}",
        f"{losses.specks_left}/{losses.specks}",
        "-" if math.isnan(figures.boxes) else f"{figures.boxes:.3f}",
        f"{figures.lines:.3f}",
        f"{figures.words:.3f}",
        f"{figures.seconds:.2f}",
    )
    widths = (width for _, width in _COLUMNS)
    return f"{figures.name:28.28}" + "".join(
        f"{cell:>{width}}" for cell, width in zip(cells, widths, strict=True)
    )


def table(rows: Iterable[Figures]) -> str:
    """All rows with their heading, and their sums or means below."""
    rows = list(rows)
    return "\n".join([heading(), *map(row, rows), *([row(mean(rows))] if rows else [])])


def mean(rows: list[Figures]) -> Figures:
    """Shares as means over the pages, counts as sums."""
    losses = {}
    for part in fields(CleaningLosses):
        values = [getattr(figures.losses, part.name) for figures in rows]
        counted = isinstance(values[0], int)
        losses[part.name] = sum(values) if counted else sum(values) / len(values)
    return Figures(
        "all pages",
        CleaningLosses(**losses),
        float(np.nanmean([figures.boxes for figures in rows])),
        float(np.mean([figures.lines for figures in rows])),
        float(np.mean([figures.words for figures in rows])),
        float(np.sum([figures.seconds for figures in rows])),
    )


def _save(folder: Path, page: DrawnPage, cleaned: CleanPage) -> None:
    folder.mkdir(parents=True, exist_ok=True)
    stem = re.sub(r"[^a-z0-9]+", "-", page.name)
    scan = np.where(page.scan, 0, 255).astype(np.uint8) if page.scan.dtype == bool else page.scan
    ledger = Image.fromarray(cleaned.ledger.to_array(), "P")
    ledger.putpalette([level for colour in PALETTE for level in colour])
    ink = cleaned.ink.to_mask()
    Image.fromarray(scan).save(folder / f"{stem}.1-scan.png")
    Image.fromarray(~ink).save(folder / f"{stem}.2-cleaned.png")
    ledger.save(folder / f"{stem}.3-ledger.png")
    Image.fromarray(difference(page, ink)).save(folder / f"{stem}.4-difference.png")


def figures_of(variant: str, *, seed_set: int = 1, save: Path | None = None) -> Figures:
    """Draw, clean and measure one of the variants."""
    page = draw_variant(variant, seed_set=seed_set)
    start = time.perf_counter()
    cleaned = clean_drawn(page)
    seconds = time.perf_counter() - start
    if save is not None:
        _save(save, page, cleaned)
    return measure(page, outcome_of(cleaned), seconds=seconds)


@click.command()
@click.option("--seed-set", default=1, show_default=True, help="Another set draws other pages.")
@click.option("--kind", default="", help="Only pages whose kind or name holds this word.")
@click.option("--save", type=click.Path(path_type=Path), help="Folder for pictures.")
def main(seed_set: int, kind: str, save: Path | None) -> None:
    """Print how well ground-truth pages are cleaned."""
    chosen = [name for name, (drawn, _) in VARIANTS.items() if kind in name or kind == drawn]
    rows = []
    click.echo(heading())
    for variant in chosen:
        if not available(variant):
            click.echo(f"{variant:28.28}  (its face is not on this system)")
            continue
        rows.append(figures_of(variant, seed_set=seed_set, save=save))
        click.echo(row(rows[-1]))
    if rows:
        click.echo(row(mean(rows)))


if __name__ == "__main__":
    main()

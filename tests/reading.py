"""All the text stages on a bare mask, and pages of text to run them on."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from fixtures.drawn import DrawnPage, Scanner
from fixtures.scanner import scan_sheet
from fixtures.sheet import Sheet, new_sheet
from scanclean.sets.labels import Components, label
from scanclean.sets.runs import RunSet
from scanclean.text.glyphs import join_parts
from scanclean.text.lineset import LineSet
from scanclean.text.reading import Glyphs, TextLines, put_in_order
from scanclean.text.specks import SpeckSettings, find_specks
from scanclean.text.textlines import find_lines
from scanclean.text.textmeasure import TextMeasures, measure_text
from scanclean.units import Resolution

Mask = NDArray[np.bool_]


@dataclass(frozen=True, eq=False)
class Read:
    """What the stages made of a page: `components` are those left after the specks."""

    measures: TextMeasures
    found: LineSet
    all_components: Components
    speck: Mask
    components: Components
    glyphs: Glyphs
    lines: TextLines

    @property
    def line_of_ink(self) -> NDArray[np.int64]:
        """1 + the line at each pixel of ink, 0 for none."""
        return self._map(self.glyphs.line[self.glyphs.component_glyph] + 1)

    @property
    def specks(self) -> Mask:
        return self.all_components.keep(self.speck).to_mask()

    def words(self) -> list[int]:
        """How many words each line has."""
        glyphs = self.glyphs
        return [len(set(glyphs.word[glyphs.line == i])) for i in range(len(self.lines.box))]

    def _map(self, of_component: NDArray[np.int64]) -> NDArray[np.int64]:
        runs = self.components.runs
        page = np.zeros(runs.shape, np.int64)
        x, y = runs.points().T
        page[y, x] = np.repeat(of_component[self.components.run_label], runs.length)
        return page


def read(
    mask: Mask, dpi: float | Resolution | None = 300.0, settings: SpeckSettings | None = None
) -> Read:
    resolution = Resolution(dpi, dpi) if isinstance(dpi, float | int) else dpi
    components = label(RunSet.from_mask(mask))
    measures = measure_text(components, resolution)
    found = find_lines(components, measures, resolution)
    speck = find_specks(components, found, measures, resolution, settings)
    left = components.select(~speck)
    glyphs, lines = put_in_order(left, join_parts(left, found), found)
    return Read(measures, found, components, speck, left, glyphs, lines)


def finished(sheet: Sheet) -> DrawnPage:
    """The truth about a sheet; its scan is of no interest here."""
    return sheet.truth("sheet", scan_sheet(sheet, Scanner()))


def set_text(
    rows: list[str],
    *,
    face: str = "serif",
    points: float = 11.0,
    leading: float = 1.4,
    size: tuple[float, float] = (110.0, 40.0),
    left: float = 8.0,
    pitch: float | None = None,
    dpi: float | tuple[float, float] = 300.0,
    **distortion: float,
) -> DrawnPage:
    """Rows of text under one another, a line each."""
    sheet = new_sheet(size, dpi=dpi, **distortion)
    step = points * 25.4 / 72 * leading
    for number, row in enumerate(rows):
        sheet.line()
        sheet.text(left, 8.0 + step * number, row, face, points, pitch=pitch)
    return finished(sheet)

"""What a command does with one page: read it, work on it, write its results into a folder.

A work is a small frozen value that can be sent to another process. It knows what its results are
called before it starts, and it names all settings that decide what is in them.
"""

from __future__ import annotations

import hashlib
from collections.abc import Iterable, Iterator, Mapping
from dataclasses import dataclass, replace
from pathlib import Path
from typing import Any, Protocol

import numpy as np

from scanclean.batches.sources import SourceFile
from scanclean.clean import CleanPage, clean_page
from scanclean.errors import PageError
from scanclean.layout import Layout, Source
from scanclean.ledger import PALETTE, Ledger
from scanclean.recipe import Recipe
from scanclean.scans.files import Written, shown, write_whole
from scanclean.scans.pageio import bitonal_pages, read_ledger, read_page
from scanclean.scans.pagewrite import bind_pdf, bind_tiff, write_bitonal, write_glyph, write_ledger
from scanclean.units import Resolution

__all__ = [
    "BINDINGS",
    "LEDGER_SUFFIXES",
    "BindWork",
    "CleanWork",
    "Done",
    "PageTask",
    "RestoreWork",
    "Work",
    "page_layout",
]

LEDGER_SUFFIXES = (".ledger.png",)
"""What ledgers in folders end with."""

BINDINGS = {"tiff": ".bound.tif", "pdf": ".bound.pdf"}
"""What a bound file adds to the name of its source."""

_BINDERS = {"tiff": bind_tiff, "pdf": bind_pdf}


@dataclass(frozen=True)
class PageTask:
    """A page to be worked on.

    Parameters
    ----------
    source : SourceFile
    page, n_pages : int
        From 1; page 0 stands for all of them.
    name : str
        Of its results, below the output folder and without suffix.
    sha256 : str
        Of the source.
    """

    source: SourceFile
    page: int
    n_pages: int
    name: str
    sha256: str = ""

    @property
    def leaf(self) -> str:
        """The name without the folders above."""
        return self.name.rpartition("/")[2]

    @property
    def shown(self) -> str:
        """How messages call the page."""
        page = f", page {self.page}" if self.n_pages > 1 and self.page else ""
        return shown(self.source.path) + page


@dataclass(frozen=True)
class Done:
    """What came of a page.

    Parameters
    ----------
    written : mapping of str to Written
        Results by the suffix that they add to the page's name.
    flags : tuple of str
    notes : tuple of str
        What the user should know, a line each.
    """

    written: Mapping[str, Written]
    flags: tuple[str, ...] = ()
    notes: tuple[str, ...] = ()


class Work(Protocol):
    """What a command does with each page."""

    @property
    def settings(self) -> Mapping[str, Any]:
        """All that decides the results, as plain JSON values."""

    @property
    def suffixes(self) -> tuple[str, ...]:
        """What the results add to the page's name; that of a folder ends with a slash."""

    def do(self, task: PageTask, folder: Path) -> Done:
        """Write the page's results, called by its leaf and suffixes, into an empty folder."""


@dataclass(frozen=True)
class CleanWork:
    """Cleans pages.

    Parameters
    ----------
    recipe : Recipe
    dpi : Resolution or None
        Of pages whose file states none; None has it estimated.
    straighten : bool
        Turn pages upright first.
    crops : bool
        Also write a picture of each glyph.
    """

    recipe: Recipe
    dpi: Resolution | None = None
    straighten: bool = False
    crops: bool = False

    @property
    def settings(self) -> Mapping[str, Any]:
        """The recipe's SHA-256 and what the call adds to it."""
        return {
            "recipe": self.recipe.identity,
            "dpi": None if self.dpi is None else [self.dpi.x, self.dpi.y],
            "straighten": self.straighten,
        }

    @property
    def suffixes(self) -> tuple[str, ...]:
        """Cleaned page, ledger, layout and crops."""
        return (".tif", ".ledger.png", ".layout.json") + ((".glyphs/",) if self.crops else ())

    def do(self, task: PageTask, folder: Path) -> Done:
        """Clean a page and write what came of it."""
        scan = read_page(task.source.path, task.page)
        if scan.dpi is None and self.dpi is not None:
            scan = replace(scan, dpi=self.dpi)
        page = clean_page(scan, self.recipe, straighten=self.straighten)
        height, width = scan.shape
        dpi = (page.resolution.x, page.resolution.y)
        source = Source(task.source.path.name, task.page, task.sha256, width, height, dpi)
        text = page_layout(page, source).to_json()
        stem = str(folder / task.leaf)
        written = {
            ".tif": write_bitonal(stem + ".tif", page.ink.to_mask(), page.resolution),
            ".ledger.png": write_ledger(
                stem + ".ledger.png", page.ledger.to_array(), PALETTE, page.resolution
            ),
            ".layout.json": write_whole(stem + ".layout.json", text.encode("utf-8")),
        }
        if self.crops:
            written[".glyphs/"] = _write_crops(page, Path(stem + ".glyphs"))
        return Done(written, page.flags, tuple(_notes(page)))


@dataclass(frozen=True)
class RestoreWork:
    """Gives thresholded pages back from their ledgers."""

    @property
    def settings(self) -> Mapping[str, Any]:
        """Nothing decides what comes back but the ledger."""
        return {}

    @property
    def suffixes(self) -> tuple[str, ...]:
        """The thresholded page."""
        return (".thresholded.tif",)

    def do(self, task: PageTask, folder: Path) -> Done:
        """Read a ledger and write the thresholded page."""
        array, dpi = read_ledger(task.source.path, PALETTE)
        try:
            mask = Ledger.from_array(array).thresholded.to_mask()
        except ValueError as error:
            raise PageError(f"{shown(task.source.path)}: no ink ledger: {error}") from None
        path = folder / f"{task.leaf}.thresholded.tif"
        return Done({".thresholded.tif": write_bitonal(path, mask, dpi)})


@dataclass(frozen=True)
class BindWork:
    """Binds the cleaned pages of a source in one file.

    Parameters
    ----------
    kind : {"tiff", "pdf"}
    pages : tuple of (Path, str)
        The cleaned pages in order, with their SHA-256.
    """

    kind: str
    pages: tuple[tuple[Path, str], ...]

    @property
    def settings(self) -> Mapping[str, Any]:
        """SHA-256 over those of the pages: other pages make another file."""
        joined = "".join(sha256 for _, sha256 in self.pages)
        return {"pages": hashlib.sha256(joined.encode("ascii")).hexdigest()}

    @property
    def suffixes(self) -> tuple[str, ...]:
        """The task's name is that of the bound file."""
        return ("",)

    def do(self, task: PageTask, folder: Path) -> Done:
        """Read the cleaned pages one by one and write them into one file."""
        pages = bitonal_pages(path for path, _ in self.pages)
        return Done({"": _BINDERS[self.kind](folder / task.leaf, pages)})


def page_layout(page: CleanPage, source: Source) -> Layout:
    """The layout of a cleaned page, to be written."""
    height, width = page.ink.shape
    glyphs, lines = page.glyphs, page.lines
    return Layout(
        source=source,
        width=width,
        height=height,
        skew_degrees=page.skew_degrees,
        to_source=page.to_source[:2],
        measures=page.measures,
        flags=page.flags,
        lines={"box": lines.box, "baseline": lines.baseline, "x_height_px": lines.x_height},
        glyphs={
            "line": glyphs.line + 1,
            "word": glyphs.word + 1,
            "box": glyphs.box,
            "area": glyphs.area,
            "parts": glyphs.parts,
            "holes": glyphs.holes,
        },
        rules={
            "direction": np.array([rule.direction for rule in page.rules], str),
            "box": np.array([rule.box for rule in page.rules], int).reshape(-1, 4),
            "thickness_px": np.array([rule.thickness_px for rule in page.rules], float),
        },
    )


def _notes(page: CleanPage) -> Iterator[str]:
    """What the user should know of a page, though it is done."""
    if "blank" in page.flags:
        yield "no ink found: blank, black all over or nothing but noise; look at the scan"
    if page.dpi_estimated:
        yield (
            "no resolution in the file that can be believed, and no --dpi: "
            f"{page.resolution.x:g} dpi estimated"
        )


def _write_crops(page: CleanPage, folder: Path) -> Written:
    """A picture a glyph, called by its id in the layout."""
    folder.mkdir()
    return _combined(
        (f"{i:05d}.png", write_glyph(folder / f"{i:05d}.png", crop, page.resolution))
        for i, crop in enumerate(page.crops(), start=1)
    )


def _combined(files: Iterable[tuple[str, Written]]) -> Written:
    """Size and hash of a folder: SHA-256 of the lines ``sha256  name``, sorted by name."""
    lines, size = [], 0
    for name, written in sorted(files):
        lines.append(f"{written.sha256}  {name}\n")
        size += written.n_bytes
    return Written(size, hashlib.sha256("".join(lines).encode()).hexdigest())

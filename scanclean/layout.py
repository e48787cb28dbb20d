"""The layout of a page: text lines, glyphs and rules, as columns in Python and as JSON in files.

The JSON is written by hand where it is long, a glyph a line: readable, comparable line by line,
and fast. Numbers are rounded to fixed places, so the same page gives the same bytes.
"""

from __future__ import annotations

import json
from collections.abc import Iterator, Mapping
from dataclasses import dataclass
from importlib import resources
from pathlib import Path
from typing import Any

import numpy as np
from numpy.typing import NDArray

from scanclean.errors import PageError

__all__ = ["FORMAT", "VERSION", "Layout", "Source", "Table", "layout_schema", "read_layout"]

FORMAT = "scanclean-layout"
VERSION = 1

Table = Mapping[str, NDArray[Any]]
"""Columns of equal length, by the names that the JSON gives them; row i has the id i + 1."""

_PLACES = 3  # thousandths of a pixel or degree: below what any measure can tell
_MATRIX_PLACES = 9  # of a turn's sine and cosine: a page of 100,000 pixels maps to 1/10,000 pixel
_MEASURE_DIGITS = 6

# Columns that a file has even where it lists nothing, with the shape of one entry.
_LINES = {"box": (4,), "baseline": (2, 2), "x_height_px": ()}
_GLYPHS = {"line": (), "word": (), "box": (4,), "area": (), "parts": (), "holes": ()}
_RULES = {"direction": (), "box": (4,), "thickness_px": ()}
_FLOATS = {"baseline", "x_height_px", "thickness_px"}
_IDS = {"line", "word"}  # 0 is none: null in the file


@dataclass(frozen=True)
class Source:
    """Where a page comes from.

    Parameters
    ----------
    file : str
        Name of the scan, without folders.
    page : int
        From 1.
    sha256 : str
        Of the whole file.
    width, height : int
        Of the scan in pixels.
    dpi : (float, float)
        x and y resolution in force.
    """

    file: str
    page: int
    sha256: str
    width: int
    height: int
    dpi: tuple[float, float]


@dataclass(frozen=True, eq=False)
class Layout:
    """What stands where on a cleaned page.

    Parameters
    ----------
    source : Source
    width, height : int
        Of the cleaned page in pixels.
    skew_degrees : float
        Of the scan's text; positive where it falls to the right.
    to_source : (2, 3) float array
        Takes a page point (x, y, 1) to a point of the scan.
    measures : mapping of str to number or None
        None for what the page gave no hold to measure.
    flags : tuple of str
    lines : Table
        ``box`` (L, 4) int, ``baseline`` (L, 2, 2) two points (x, y), ``x_height_px`` (L,).
    glyphs : Table
        In reading order: ``line``, ``word`` (G,) ids, 0 for what stands in no text line and null
        in the file; ``box`` (G, 4), ``area``, ``parts``, ``holes`` (G,) int.
    rules : Table
        ``direction`` (R,) str, ``box`` (R, 4) int, ``thickness_px`` (R,).
    """

    source: Source
    width: int
    height: int
    skew_degrees: float
    to_source: NDArray[np.float64]
    measures: Mapping[str, float | None]
    flags: tuple[str, ...]
    lines: Table
    glyphs: Table
    rules: Table

    def to_json(self) -> str:
        """The layout as its file holds it.

        Raises
        ------
        ValueError
            If a number is not finite or columns differ in length.
        """
        source, page = self.source, {"width": int(self.width), "height": int(self.height)}
        head = {
            "format": FORMAT,
            "version": VERSION,
            "source": {
                "file": source.file,
                "page": int(source.page),
                "sha256": source.sha256,
                "width": int(source.width),
                "height": int(source.height),
                "dpi": _rounded(np.asarray(source.dpi, float), _PLACES).tolist(),
            },
            "page": {
                **page,
                "skew_degrees": _rounded(np.float64(self.skew_degrees), _PLACES).item(),
                "to_source": _rounded(np.asarray(self.to_source), _MATRIX_PLACES).tolist(),
            },
            "measures": {name: _measure(value) for name, value in self.measures.items()},
            "flags": list(self.flags),
        }
        members = [f"{_dump(key)}: {_dump(value)}" for key, value in head.items()]
        # a file's name may hold bytes that are no text: they are escaped as JSON allows
        members = [each.encode("utf-8", "backslashreplace").decode("utf-8") for each in members]
        tables = {"lines": self.lines, "glyphs": self.glyphs, "rules": self.rules}
        members += [f"{_dump(key)}: {_table_json(table)}" for key, table in tables.items()]
        return "{\n  " + ",\n  ".join(members) + "\n}\n"

    @classmethod
    def from_json(cls, text: str | bytes) -> Layout:
        """Read what `to_json` wrote.

        Raises
        ------
        ValueError
            If the text is no such layout; says what is wrong.
        """
        try:
            data = json.loads(text)
        except (json.JSONDecodeError, UnicodeDecodeError, RecursionError) as error:
            raise ValueError(f"not JSON: {error}") from None
        if not isinstance(data, dict) or data.get("format") != FORMAT:
            raise ValueError(f'"format" is not "{FORMAT}"')
        if data.get("version") != VERSION:
            raise ValueError(f"version {data.get('version')} of the format is not known")
        try:
            source, page = dict(data["source"]), data["page"]
            source["dpi"] = tuple(map(float, source["dpi"]))
            return cls(
                source=Source(**source),
                width=page["width"],
                height=page["height"],
                skew_degrees=page["skew_degrees"],
                to_source=np.asarray(page["to_source"], float).reshape(2, 3),
                measures=dict(data["measures"]),
                flags=tuple(data["flags"]),
                lines=_columns(data["lines"], _LINES),
                glyphs=_columns(data["glyphs"], _GLYPHS),
                rules=_columns(data["rules"], _RULES),
            )
        except KeyError as error:
            raise ValueError(f"{error} is missing") from None
        except (TypeError, AttributeError) as error:
            raise ValueError(f"a value has the wrong type: {error}") from None


def read_layout(path: str | Path) -> Layout:
    """The layout in a file.

    Raises
    ------
    PageError
        If the file cannot be read or holds no layout.
    """
    try:
        return Layout.from_json(Path(path).read_bytes())
    except OSError as error:
        raise PageError(f"{path}: cannot be read: {error.strerror or error}") from None
    except ValueError as error:
        raise PageError(f"{path}: no layout of scanclean: {error}") from None


def layout_schema() -> dict[str, Any]:
    """The JSON Schema (draft 2020-12) of layout files."""
    text = resources.files("scanclean").joinpath("layout.schema.json").read_text("utf-8")
    schema: dict[str, Any] = json.loads(text)
    return schema


# ---- writing


def _dump(value: object) -> str:
    return json.dumps(value, ensure_ascii=False, allow_nan=False)


def _rounded(values: NDArray[Any] | np.float64, places: int) -> NDArray[np.float64]:
    if not np.all(np.isfinite(values)):
        raise ValueError("a layout holds finite numbers only")
    return np.asarray(np.round(values, places) + 0.0)  # no minus before a zero


def _measure(value: float | None) -> float | int | None:
    """A measure's own number type, a float to a fixed number of digits."""
    if value is None or isinstance(value, (int, np.integer)):
        return None if value is None else int(value)
    return float(f"{_rounded(np.float64(value), 12).item():.{_MEASURE_DIGITS}g}")


def _table_json(table: Table) -> str:
    """A JSON array, a row a line."""
    size = len(next(iter(table.values()), ()))
    names = ["id", *table]
    columns = [
        map(str, range(1, size + 1)),
        *(_cells(name, column) for name, column in table.items()),
    ]
    row = "    {" + ", ".join(f"{_dump(name)}: %s" for name in names) + "}"
    rows = [row % cells for cells in zip(*columns, strict=True)]
    return "[\n" + ",\n".join(rows) + "\n  ]" if rows else "[]"


def _cells(name: str, column: NDArray[Any]) -> Iterator[str]:
    """The JSON of each entry of a column."""
    column = np.asarray(column)
    if name in _IDS:
        return (str(value) if value else "null" for value in column.tolist())
    if column.dtype.kind == "f":
        column = _rounded(column, _PLACES)
    if column.dtype.kind in "iu" and column.ndim == 1:
        return map(str, column.tolist())
    if column.dtype.kind in "iu" and column.ndim == 2:
        entry = "[" + ", ".join(["%d"] * column.shape[1]) + "]"
        return (entry % tuple(values) for values in column.tolist())
    return map(_dump, column.tolist())


# ---- reading


def _columns(rows: list[dict[str, Any]], known: Mapping[str, tuple[int, ...]]) -> Table:
    """The columns of a list of rows; those that the format asks for also when it is empty."""
    names = [name for name in rows[0] if name != "id"] if rows else list(known)
    missing = [name for name in known if name not in names]
    if missing:
        raise KeyError(missing[0])
    table = {}
    for name in names:
        number = float if name in _FLOATS else str if name == "direction" else None
        entries = [row[name] or 0 for row in rows] if name in _IDS else [row[name] for row in rows]
        values = np.asarray(entries, number)
        if name in known:
            kind = number if number is not None else np.int64
            values = values.astype(kind).reshape(len(rows), *known[name])
        table[name] = values
    return table

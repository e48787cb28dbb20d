"""The record of a run: ``run.jsonl``, a line a page, from which a later run goes on.

While a run goes, lines are added as pages are finished, so that a run that is cut off at any
moment leaves all that it knew; the newest line on a page counts and a half-written one is passed
over. At the end the file is put in order, a line a page.
"""

from __future__ import annotations

import errno
import json
import os
from collections.abc import Mapping
from dataclasses import asdict, dataclass
from pathlib import Path
from types import TracebackType
from typing import Any

from scanclean.errors import OutputError
from scanclean.scans.files import reason, shown, write_whole, writing

__all__ = ["RUN_LOG", "PageRecord", "ResultFile", "RunLog", "recorded_results"]

RUN_LOG = "run.jsonl"


@dataclass(frozen=True)
class ResultFile:
    """A file, or a folder with a slash at its end, that a page gave.

    Parameters
    ----------
    file : str
        Below the output folder.
    sha256 : str
        Of its bytes; of a folder, of the lines ``sha256  name`` of its files in sorted order.
    bytes : int
        Of a folder, of all its files.
    """

    file: str
    sha256: str
    bytes: int

    def is_present(self, root: Path) -> bool:
        """Whether it stands there with its size; of a folder, that it is there."""
        path = root / self.file
        if self.file.endswith("/"):
            return path.is_dir()
        try:
            return path.is_file() and path.stat().st_size == self.bytes
        except OSError:
            return False


@dataclass(frozen=True)
class PageRecord:
    """What a run knows of a page.

    Parameters
    ----------
    name : str
        Of its results, below the output folder and without suffix.
    source : str
        The scan as the call named it.
    page : int
        From 1; 0 of a file bound of several pages.
    status : {"done", "failed"}
    version : str
        Of scanclean.
    settings : mapping
        All that decided the results, the recipe's SHA-256 among it.
    sha256 : str or None
        Of the scan; None if it could not be read.
    outputs : tuple of ResultFile
    flags : tuple of str
    seconds : float
    error : str or None
    """

    name: str
    source: str
    page: int
    status: str
    version: str
    settings: Mapping[str, Any]
    sha256: str | None = None
    outputs: tuple[ResultFile, ...] = ()
    flags: tuple[str, ...] = ()
    seconds: float = 0.0
    error: str | None = None

    def to_json(self) -> str:
        """One line, without its end."""
        data = {name: value for name, value in asdict(self).items() if value is not None}
        return json.dumps(data)  # escaped to ASCII, whatever bytes the names of files hold

    @classmethod
    def from_json(cls, line: str | bytes) -> PageRecord | None:
        """Read a line; None if it is none of ours."""
        try:
            data = json.loads(line)
            data["outputs"] = tuple(ResultFile(**output) for output in data["outputs"])
            data["flags"] = tuple(data["flags"])
            record = cls(**data)
        except (ValueError, TypeError, KeyError, RecursionError):
            return None
        return record if isinstance(record.name, str) and isinstance(record.page, int) else None

    @property
    def place(self) -> tuple[str, int]:
        """Sorts records by source, then page."""
        return self.name.removesuffix(f".p{self.page:04d}"), self.page


class RunLog:
    """The records of an output folder, by name, open for more.

    Parameters
    ----------
    folder : Path
        The output folder; it must exist.

    Raises
    ------
    OutputError
        If there is a record that cannot be read.
    """

    def __init__(self, folder: Path) -> None:
        self._path = folder / RUN_LOG
        self.records: dict[str, PageRecord] = {}
        data = _read(self._path)
        self._at_line_start = data.endswith(b"\n") or not data
        for line in data.splitlines():
            record = PageRecord.from_json(line)
            if record is not None:
                self.records[record.name] = record

    def __enter__(self) -> RunLog:
        return self

    def __exit__(
        self,
        kind: type[BaseException] | None,
        error: BaseException | None,
        trace: TracebackType | None,
    ) -> None:
        self.close()

    def begin(self) -> None:
        """Make the file if there is none, so that there is one at any moment of the run.

        Raises
        ------
        OutputError
            If it cannot be written.
        """
        with writing(self._path), open(self._path, "ab"):
            pass

    @property
    def files(self) -> set[str]:
        """All results that are recorded."""
        return {output.file for record in self.records.values() for output in record.outputs}

    def put(self, record: PageRecord) -> None:
        """Add what became of a page.

        Raises
        ------
        OutputError
            If the line cannot be written; `close` tries again.
        """
        self.records[record.name] = record
        line = record.to_json().encode("ascii") + b"\n"
        if not self._at_line_start:
            line = b"\n" + line
        self._at_line_start = False
        with writing(self._path), open(self._path, "ab", buffering=0) as file:
            if file.write(line) < len(line):
                raise OSError(errno.ENOSPC, os.strerror(errno.ENOSPC))
        self._at_line_start = True

    def close(self) -> None:
        """Put the file in order, a line a page; raises OutputError if it cannot be written."""
        ordered = sorted(self.records.values(), key=lambda record: record.place)
        data = "".join(record.to_json() + "\n" for record in ordered).encode("ascii")
        if data != _read(self._path):
            write_whole(self._path, data)


def recorded_results(folder: Path) -> set[str] | None:
    """The results that a record in a folder lists, folders without their slash; None if no record.

    A file of that name that holds no record of a page is someone else's.
    """
    try:
        if not (folder / RUN_LOG).is_file():
            return None
        records = RunLog(folder)
    except (OSError, OutputError):
        return None
    if not records.records:
        return None
    return {name.rstrip("/") for name in records.files} | {RUN_LOG}


def _read(path: Path) -> bytes:
    if not os.path.lexists(path):
        return b""
    if not path.is_file():  # a device could be read for ever
        raise OutputError(f"{shown(path)}: is no regular file; move it away")
    try:
        return path.read_bytes()
    except OSError as error:
        message = f"{shown(path)}: cannot be read ({reason(error)}); move it away"
        raise OutputError(message) from error

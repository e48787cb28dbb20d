"""Which scans a call means, and what their results are called; nothing is opened for its pixels.

Folders are walked in sorted order. What is left out on purpose is noted, what could not be looked
at is a problem, and neither is ever silent. Every result is named before any work starts, so that
no two scans write the same name and nothing is written over a scan.
"""

from __future__ import annotations

import os
import re
import unicodedata
from collections.abc import Callable, Collection, Iterable, Iterator, Sequence
from dataclasses import dataclass, field
from pathlib import Path, PurePosixPath

from scanclean.errors import CallError
from scanclean.scans.files import reason, shown

__all__ = [
    "Found",
    "PageSelection",
    "ResultsIn",
    "SourceFile",
    "check_names",
    "find_scans",
    "read_listing",
]

ResultsIn = Callable[[Path], Collection[str] | None]
"""What an earlier run recorded to have written into a folder; None where none was recorded."""

_NAMED = 3  # entries that a note names before it only counts


@dataclass(frozen=True)
class SourceFile:
    """A file that may hold scans.

    Parameters
    ----------
    path : Path
        To open it.
    name : str
        Of its results: the folders below the given one and the file's name without its suffix,
        joined by ``/``.
    """

    path: Path
    name: str


@dataclass(frozen=True)
class Found:
    """What a list of files and folders comes to.

    Parameters
    ----------
    files : tuple of SourceFile
        In the order of the arguments; folders in sorted order.
    notes : tuple of str
        A line for what was left out on purpose.
    problems : tuple of str
        A line for what could not be looked at.
    folders : tuple of Path
        Those that were walked.
    """

    files: tuple[SourceFile, ...]
    notes: tuple[str, ...]
    problems: tuple[str, ...]
    folders: tuple[Path, ...]


@dataclass(frozen=True)
class PageSelection:
    """Pages by number, such as ``1-3,7`` or ``5-``.

    Parameters
    ----------
    ranges : tuple of (int, int or None)
        First and last page, both included; None is the last of the file.
    """

    ranges: tuple[tuple[int, int | None], ...]

    @classmethod
    def parse(cls, text: str) -> PageSelection:
        """Read ``1-3,7``; raises ValueError with what is allowed."""
        ranges: list[tuple[int, int | None]] = []
        for part in text.split(","):
            match = re.fullmatch(r"\s*0*([1-9][0-9]{0,8})\s*(-\s*(0*[1-9][0-9]{0,8})?\s*)?", part)
            if match is None:
                raise ValueError(f"pages are written like 1-3,7 or 5-, from 1; got {text!r}")
            first = int(match[1])
            last = first if match[2] is None else int(match[3]) if match[3] else None
            if last is not None and last < first:
                raise ValueError(f"pages {first}-{last} run backwards")
            ranges.append((first, last))
        return cls(tuple(ranges))

    def of(self, n_pages: int) -> list[int]:
        """The chosen ones of `n_pages` pages, in ascending order."""
        chosen: set[int] = set()
        for first, last in self.ranges:
            chosen.update(range(first, min(n_pages, last or n_pages) + 1))
        return sorted(chosen)


def read_listing(text: bytes) -> list[str]:
    """Paths from a list: one a line, or ended by zero bytes where there are any."""
    separator = b"\0" if b"\0" in text else b"\n"
    lines = (line.removesuffix(b"\r") for line in text.split(separator))
    return [os.fsdecode(line) for line in lines if line.strip()]


def find_scans(
    arguments: Iterable[str | os.PathLike[str]],
    *,
    suffixes: Sequence[str],
    output: Path | None = None,
    results_in: ResultsIn = lambda folder: None,
    count_others: bool = True,
) -> Found:
    """The scans among files and folders.

    Parameters
    ----------
    arguments : iterable of paths
        A file is taken whatever it is called; in a folder, what has one of the suffixes.
    suffixes : sequence of str
        In lower case, with their dot; the longest that fits is cut off for the result's name.
    output : Path, optional
        Where results go that would look like scans: it is not walked.
    results_in : callable
        Folders below the given ones for which it tells results are not walked; in a given one
        those results are passed over.
    count_others : bool
        Whether a note says how many files end with something else.

    Returns
    -------
    Found

    Raises
    ------
    CallError
        If a folder is to be walked and written to.
    """
    search = _Search(
        output="" if output is None else _identity(output),
        suffixes=tuple(suffixes),
        results_in=results_in,
        count_others=count_others,
    )
    for argument in arguments:
        search.add(Path(argument))
    files: dict[tuple[str, str], SourceFile] = {}
    for each in search.files:  # the same scan given twice is done once
        files.setdefault((_identity(each.path), each.name), each)
    return Found(
        tuple(files.values()), tuple(search.notes), tuple(search.problems), tuple(search.folders)
    )


def check_names(found: Found, results: Iterable[tuple[Path, str]], *, output: Path) -> None:
    """Refuse results that would meet each other or a scan.

    Parameters
    ----------
    found : Found
        Every scan of the call.
    results : iterable of (Path, str)
        The scan that each result comes from, and the result's name below `output`; that of a
        folder ends with a slash.
    output : Path

    Raises
    ------
    CallError
        If two scans give the same name, also where only upper and lower case or the encoding of
        accents tell them apart, or if a result would replace a scan or come to stand among scans.
    """
    scans = {_folded(_identity(each.path)): each.path for each in found.files}
    root = _identity(output)
    walked = [home for home in map(_identity, found.folders) if _within(root, home)]
    parents: dict[str, str] = {}  # of results, as the file system has them
    owners: dict[str, tuple[Path, str]] = {}
    for source, name in results:
        above, _, leaf = name.rstrip("/").rpartition("/")
        if above not in parents:
            parents[above] = _identity(output / above)
        parent = parents[above]
        target = _folded(os.path.join(parent, leaf))
        if target in scans:
            raise CallError(
                f"{shown(source)} would write {shown(output / name)} over the scan "
                f"{shown(scans[target])}: choose another output folder"
            )
        if any(_within(home, parent) for home in walked):
            raise CallError(
                f"{shown(source)} would write {shown(output / name)} among the scans: "
                "choose another output folder"
            )
        owner, _ = owners.setdefault(target, (source, name))
        if owner is not source and _identity(owner) != _identity(source):
            raise CallError(_clash(owner, source, output / name))
    _check_nesting(owners, set(map(_folded, parents.values())), output)


def _check_nesting(owners: dict[str, tuple[Path, str]], parents: set[str], output: Path) -> None:
    """Refuse results below a result that is replaced whole."""
    for parent in sorted(parents):
        while parent not in owners and parent != os.path.dirname(parent):
            parent = os.path.dirname(parent)
        if parent in owners:
            owner, name = owners[parent]
            raise CallError(
                f"{shown(owner)} would write {shown(output / name)}, where results of a folder of "
                "scans go: rename one, or give them different output folders"
            )


def _clash(one: Path, other: Path, target: Path) -> str:
    return (
        f"{shown(one)} and {shown(other)} would both write {shown(target)}: "
        "rename one, or give them different output folders"
    )


@dataclass
class _Search:
    """The state of one search."""

    output: str
    suffixes: tuple[str, ...]
    results_in: ResultsIn
    count_others: bool
    files: list[SourceFile] = field(default_factory=list)
    notes: list[str] = field(default_factory=list)
    problems: list[str] = field(default_factory=list)
    folders: list[Path] = field(default_factory=list)

    def add(self, path: Path) -> None:
        """A file or folder that the call names."""
        try:
            if path.is_dir():
                self._add_folder(path)
            elif path.is_file():
                self.files.append(SourceFile(path, self._stem(path.name)))
            elif path.exists():
                self.problems.append(f"{shown(path)}: is no regular file")
            else:
                self.problems.append(f"{shown(path)}: is not there")
        except (OSError, ValueError) as error:  # ValueError: a zero byte in the name
            self.problems.append(f"{shown(path)}: {reason(error)}")

    def _add_folder(self, folder: Path) -> None:
        if _identity(folder) == self.output:
            raise CallError(
                f"{shown(folder)} is the output folder as well: results are not written among "
                "scans, choose another one"
            )
        self.folders.append(folder)
        before = len(self.files), len(self.problems)
        skipped = _Skipped({folder / name for name in self.results_in(folder) or ()})
        home = _identity(folder)
        for path in self._walk(folder, home, skipped):
            below = path.relative_to(folder)
            name = PurePosixPath(*below.parts[:-1], self._stem(path.name))
            self.files.append(SourceFile(path, str(name)))
        self.notes += skipped.notes(folder)
        if (len(self.files), len(self.problems)) == before:
            known = " or ".join(self.suffixes)
            self.problems.append(f"{shown(folder)}: nothing in this folder ends with {known}")

    def _walk(self, folder: Path, home: str, skipped: _Skipped) -> Iterator[Path]:
        """Scans below a folder, depth first, in the order of their names."""
        try:
            with os.scandir(folder) as listing:
                entries = sorted(listing, key=lambda entry: entry.name)
        except OSError as error:
            self.problems.append(f"{shown(folder)}: cannot be listed: {reason(error)}")
            return
        for entry in entries:
            path = folder / entry.name
            if entry.name.startswith("."):
                skipped.hidden.append(path)
                continue
            try:
                if entry.is_symlink() and not self._followed(path, home, skipped):
                    continue
                is_folder, is_file = entry.is_dir(), entry.is_file()
            except OSError as error:
                self.problems.append(f"{shown(path)}: {reason(error)}")
                continue
            if is_folder and _identity(path) == self.output:
                skipped.output.append(path)
            elif (is_folder and self.results_in(path) is not None) or path in skipped.known:
                skipped.results.append(path)
            elif is_folder:
                yield from self._walk(path, home, skipped)
            elif is_file and self._suffix(entry.name):
                yield path
            elif self.count_others:
                skipped.others.append(path)

    def _followed(self, path: Path, home: str, skipped: _Skipped) -> bool:
        """Links to files inside the folder are followed; links to folders would be walked twice."""
        target = _identity(path)
        if not _within(home, target):
            skipped.leaving.append(path)
        elif not os.path.exists(target):
            self.problems.append(f"{shown(path)}: a link to nothing")
        elif os.path.isdir(target):
            skipped.loops.append(path)
        else:
            return True
        return False

    def _suffix(self, name: str) -> str:
        """The longest known suffix of a name; empty where it has none."""
        fitting = [s for s in self.suffixes if name.lower().endswith(s) and len(name) > len(s)]
        return max(fitting, key=len, default="")

    def _stem(self, name: str) -> str:
        suffix = self._suffix(name)
        return name[: -len(suffix)] if suffix else Path(name).stem


@dataclass
class _Skipped:
    """Entries of a folder that were left out, by reason; and the results known to be in it."""

    known: set[Path]
    hidden: list[Path] = field(default_factory=list)
    leaving: list[Path] = field(default_factory=list)
    loops: list[Path] = field(default_factory=list)
    output: list[Path] = field(default_factory=list)
    results: list[Path] = field(default_factory=list)
    others: list[Path] = field(default_factory=list)

    def notes(self, folder: Path) -> Iterator[str]:
        """A line for each reason that there was."""
        reasons = (
            (self.hidden, "hidden"),
            (self.leaving, "links that leave the folder"),
            (self.loops, "links to folders"),
            (self.output, "the output folder"),
            (self.results, "results of an earlier run"),
            (self.others, "no scans"),
        )
        for paths, why in reasons:
            if paths:
                names = [shown(path.relative_to(folder)) for path in paths[:_NAMED]]
                more = ", ..." if len(paths) > _NAMED else ""
                yield f"{shown(folder)}: {len(paths)} skipped ({why}): {', '.join(names)}{more}"


def _identity(path: Path) -> str:
    return os.path.realpath(path)


def _within(home: str, path: str) -> bool:
    return path == home or path.startswith(home.rstrip(os.sep) + os.sep)


def _folded(path: str) -> str:
    """The path as file systems that fold case and accents compare it."""
    return unicodedata.normalize("NFC", unicodedata.normalize("NFC", path).casefold())

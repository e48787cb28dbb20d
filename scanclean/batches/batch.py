"""Many pages: planned, worked off one by one or by several processes, recorded, resumed.

A page's results are first written into a folder of their own inside the output folder and then
moved to their places, so that every file appears whole. The folder stays until the page is
recorded: after a run that was cut off it tells which files are ours. A page that fails, for
whatever reason, fails alone.
"""

from __future__ import annotations

import contextlib
import hashlib
import os
import shutil
import threading
import time
import traceback
from collections import deque
from collections.abc import Generator, Iterable, Iterator, Mapping
from dataclasses import dataclass, replace
from pathlib import Path
from typing import IO

from scanclean import __version__
from scanclean.batches.pool import Job, Ready, run_jobs
from scanclean.batches.runlog import PageRecord, ResultFile, RunLog, recorded_results
from scanclean.batches.sources import Found, PageSelection, SourceFile, check_names, find_scans
from scanclean.batches.work import BINDINGS, BindWork, PageTask, Work
from scanclean.errors import CallError, OutputError, PageError, ScancleanError
from scanclean.scans.files import Written, file_sha256, one_line, shown, writing
from scanclean.scans.pageio import count_pages

__all__ = ["SCAN_SUFFIXES", "Batch", "Outcome", "plan_batch"]

SCAN_SUFFIXES = (".png", ".tif", ".tiff", ".jpg", ".jpeg", ".jp2", ".j2k", ".jpx", ".webp")
"""What files in folders end with to be taken as scans."""

_PART = ".scanclean-part"  # in the output folder while a run goes
_MOVING = "moving"  # in a page's part folder from the first move on


@dataclass(frozen=True)
class Outcome:
    """What became of a page.

    Parameters
    ----------
    name : str
        Of the results, below the output folder and without suffix.
    source : str
        The scan and, of several, the page; printable.
    status : {"done", "skipped", "failed"}
        Skipped: an earlier run has done it and nothing has changed since.
    record : PageRecord
        What the run's record holds of it; its page is 0 for a file bound of several.
    notes : tuple of str
        What the user should know, a line each.
    error : str or None
        One line that says what is wrong and what to do.
    """

    name: str
    source: str
    status: str
    record: PageRecord
    notes: tuple[str, ...] = ()
    error: str | None = None


@dataclass(frozen=True)
class Batch:
    """A call that has been thought through: every scan found, every result named.

    Made by `plan_batch`.

    Parameters
    ----------
    output : Path
    work : Work
    tasks : tuple of PageTask
        In the order of the call.
    unreadable : tuple of (PageTask, str)
        Scans that could not even be opened, and why.
    notes, problems : tuple of str
        What was left out on purpose, and what could not be looked at, a line each.
    bind : {"tiff", "pdf"} or None
    recorded : bool
        Whether a record is kept, from which a later run goes on.
    redo : bool
        Whether pages that are done are done again.
    """

    output: Path
    work: Work
    tasks: tuple[PageTask, ...]
    unreadable: tuple[tuple[PageTask, str], ...] = ()
    notes: tuple[str, ...] = ()
    problems: tuple[str, ...] = ()
    bind: str | None = None
    recorded: bool = True
    redo: bool = False

    @property
    def n_pages(self) -> int:
        """Pages of the call, a scan that cannot be opened counted as one."""
        return len(self.tasks) + len(self.unreadable)

    def run(
        self, *, jobs: int = 1, stop: threading.Event | None = None
    ) -> Generator[Outcome, None, None]:
        """Work off the pages, and yield what became of each as soon as it is known.

        Parameters
        ----------
        jobs : int
            Processes. With more than one, each imports the main module of the calling program, so
            that must be guarded by ``if __name__ == "__main__"``.
        stop : threading.Event, optional
            Once set, the pages in hand are finished and no further one is begun.

        Raises
        ------
        OutputError
            If the output folder or the record in it cannot be written.
        CallError
            If another run is writing there.
        """
        if jobs < 1:
            raise ValueError(f"jobs must be at least 1, got {jobs}")
        with _part_folder(self.output) as part:
            log = RunLog(self.output) if self.recorded else None
            if log is not None:
                log.begin()
            run = _Run(self, part, log)
            try:
                results = run_jobs(run.jobs(), processes=jobs, later=run.later, stop=stop)
                with contextlib.closing(results):
                    for outcome in results:
                        yield run.noted(outcome)
            finally:
                run.close()


def plan_batch(
    scans: Iterable[str | os.PathLike[str]],
    output: str | os.PathLike[str],
    work: Work,
    *,
    pages: PageSelection | None = None,
    bind: str | None = None,
    recorded: bool = True,
    redo: bool = False,
    suffixes: tuple[str, ...] = SCAN_SUFFIXES,
) -> Batch:
    """Find the scans and name their results; nothing is written yet.

    Parameters
    ----------
    scans : iterable of paths
        Files and folders.
    output : path
        The folder for the results.
    work : Work
    pages : PageSelection, optional
        All by default.
    bind : {"tiff", "pdf"}, optional
        Also bind the cleaned pages of each source in one file.
    recorded, redo : bool
        See `Batch`.
    suffixes : tuple of str
        What a file in a folder ends with to be taken.

    Raises
    ------
    CallError
        If two results would have the same name, or one would stand where a scan stands or a file
        that is not ours.
    """
    target = Path(output)
    if recorded:
        found = find_scans(scans, suffixes=suffixes, output=target, results_in=recorded_results)
    else:
        found = find_scans(scans, suffixes=suffixes, count_others=False)
    tasks: list[PageTask] = []
    unreadable: list[tuple[PageTask, str]] = []
    notes, problems = list(found.notes), list(found.problems)
    for source in found.files:
        try:
            n_pages = count_pages(source.path)
        except PageError as error:
            unreadable.append((PageTask(source, 1, 1, source.name), str(error)))
            continue
        chosen = list(range(1, n_pages + 1)) if pages is None else pages.of(n_pages)
        if not chosen:
            notes.append(f"{shown(source.path)}: skipped, none of the chosen pages is in it")
        for page in chosen:
            name = source.name if n_pages == 1 else f"{source.name}.p{page:04d}"
            tasks.append(PageTask(source, page, n_pages, name))
    if not (tasks or unreadable or problems):
        problems.append("no page to work on: name scans, or folders that hold scans")
    batch = Batch(
        output=target,
        work=work,
        tasks=tuple(tasks),
        unreadable=tuple(unreadable),
        notes=tuple(notes),
        problems=tuple(problems),
        bind=bind,
        recorded=recorded,
        redo=redo,
    )
    _check_results(batch, found)
    return batch


def _check_results(batch: Batch, found: Found) -> None:
    """Refuse names that clash, and files in the way that are not of an earlier run."""
    results = [
        (task.source.path, task.name, task.name + suffix)
        for task in batch.tasks
        for suffix in batch.work.suffixes
    ]
    if batch.bind is not None:
        for source in dict.fromkeys(task.source for task in batch.tasks):
            name = source.name + BINDINGS[batch.bind]
            results.append((source.path, name, name))
    check_names(found, ((path, name) for path, _, name in results), output=batch.output)
    if batch.redo:
        return
    known = (recorded_results(batch.output) or set()) if batch.recorded else set()
    for path, job, name in results:
        place = batch.output / name.rstrip("/")
        if not os.path.lexists(place) or name.rstrip("/") in known:
            continue
        if not (_folder_of(batch.output / _PART, job) / _MOVING).exists():
            raise CallError(
                f"{shown(place)} is in the way of a result of {shown(path)}, and no earlier run "
                "has recorded it: move it, choose another output folder, or use --replace"
            )


# ---- a run


_Step = Job[Outcome] | Ready[Outcome]


class _Run:
    """The state of a run: the record, and what is still open of each source."""

    def __init__(self, batch: Batch, part: Path, log: RunLog | None) -> None:
        self.later: deque[_Step] = deque()
        self._batch, self._part, self._log = batch, part, log
        self._source_of = {task.name: task.source for task in batch.tasks}
        self._open: dict[SourceFile, dict[str, PageRecord | None]] = {}
        for task in batch.tasks:
            self._open.setdefault(task.source, {})[task.name] = None
        self._hashed = (Path(), "")

    def jobs(self) -> Iterator[_Step]:
        """What is to do, in the order of the call; what needs no work as its ready outcome."""
        work = self._batch.work
        for task, error in self._batch.unreadable:
            yield Ready(_failed(task, work, error))
        for task in self._batch.tasks:
            if task.n_pages > 1 or self._earlier(task) is not None:
                # here once for all pages of a source, or to see whether there is anything to do
                try:
                    task = replace(task, sha256=self._hash(task.source.path))
                except PageError as error:
                    yield Ready(_failed(task, work, str(error)))
                    continue
            yield self._job(task, work)

    def _hash(self, path: Path) -> str:
        if self._hashed[0] != path:  # the pages of a source follow each other
            self._hashed = (path, file_sha256(path))
        return self._hashed[1]

    def _earlier(self, task: PageTask) -> PageRecord | None:
        return None if self._log is None else self._log.records.get(task.name)

    def _job(self, task: PageTask, work: Work) -> _Step:
        earlier = self._earlier(task)
        if earlier is not None and not self._batch.redo and self._is_current(task, work, earlier):
            return Ready(Outcome(task.name, task.shown, "skipped", earlier))
        return _PageJob(task, work, self._batch.output, _folder_of(self._part, task.name))

    def _is_current(self, task: PageTask, work: Work, earlier: PageRecord) -> bool:
        files = {output.file: output for output in earlier.outputs}
        wanted = [files.get(task.name + suffix) for suffix in work.suffixes]
        return (
            earlier.status == "done"
            and earlier.sha256 == task.sha256
            and earlier.version == __version__
            and earlier.settings == work.settings
            and all(output and output.is_present(self._batch.output) for output in wanted)
        )

    def noted(self, outcome: Outcome) -> Outcome:
        """Record an outcome; after the last page of a source, have its pages bound."""
        if outcome.status != "skipped":
            outcome = replace(outcome, record=self._recorded(outcome.record))
        if outcome.status == "done":
            _remove(_folder_of(self._part, outcome.name))
        source = self._source_of.get(outcome.name)
        if self._batch.bind is not None and source is not None:
            pages = self._open[source]
            pages[outcome.name] = outcome.record
            records = [record for record in pages.values() if record is not None]
            if len(records) == len(pages):
                self.later.append(self._bind_job(source, self._batch.bind, records))
        return outcome

    def _recorded(self, record: PageRecord) -> PageRecord:
        """Put a page into the record, with what it still has of an earlier run."""
        if self._log is None:
            return record
        earlier = self._log.records.get(record.name)
        new = {output.file for output in record.outputs}
        old = [each for each in earlier.outputs if each.file not in new] if earlier else []
        if record.status == "failed":
            record = replace(record, outputs=tuple(old))
        else:  # such as crops, when this run was not asked for them
            for output in old:
                _remove(self._batch.output / output.file)
        # on a full disk the pages fail one by one; `close` writes all lines anew, or says why not
        with contextlib.suppress(OutputError):
            self._log.put(record)
        return record

    def _bind_job(self, source: SourceFile, kind: str, pages: list[PageRecord]) -> _Step:
        files = {output.file: output.sha256 for page in pages for output in page.outputs}
        names = [page.name + ".tif" for page in pages]
        work = BindWork(
            kind, tuple((self._batch.output / name, files.get(name, "")) for name in names)
        )
        task = PageTask(source, 0, len(pages), source.name + BINDINGS[kind], pages[0].sha256 or "")
        if any(page.status == "failed" for page in pages):
            error = f"{task.shown}: not bound, because not all of its pages could be cleaned"
            return Ready(_failed(task, work, error))
        return self._job(task, work)

    def close(self) -> None:
        """Put the record in order."""
        if self._log is not None:
            self._log.close()


@dataclass(frozen=True)
class _PageJob:
    """A page worked on in its part folder, its results then moved to their places."""

    task: PageTask
    work: Work
    output: Path
    part: Path

    def __call__(self) -> Outcome:
        began = time.perf_counter()
        task, work = self.task, self.work
        place = self.output / task.name
        try:
            task = replace(task, sha256=task.sha256 or file_sha256(task.source.path))
            with writing(place.parent):
                place.parent.mkdir(parents=True, exist_ok=True)
            with writing(self.part):
                _empty(self.part)  # the mark of a run that was cut off stays till this is recorded
                self.part.mkdir(exist_ok=True)
            with writing(place):
                done = work.do(task, self.part)
            self._move(done.written, place)
        except Exception as error:
            _empty(self.part)
            # messages name the place where a file was to be in the end
            message = _message(error, task).replace(shown(self.part), shown(place.parent))
            return _failed(task, work, message, time.perf_counter() - began)
        except BaseException:
            _empty(self.part)
            raise
        record = PageRecord(
            name=task.name,
            source=os.fspath(task.source.path),
            page=task.page,
            status="done",
            version=__version__,
            settings=work.settings,
            sha256=task.sha256,
            outputs=tuple(
                ResultFile(task.name + suffix, written.sha256, written.n_bytes)
                for suffix, written in done.written.items()
            ),
            flags=done.flags,
            seconds=round(time.perf_counter() - began, 3),
        )
        return Outcome(task.name, task.shown, "done", record, done.notes)

    def lost(self) -> Outcome:
        message = (
            f"{self.task.shown}: the process that worked on it died twice, for want of memory or "
            "by a damaged file: run fewer jobs at a time, or save the scan anew"
        )
        return _failed(self.task, self.work, message)

    def _move(self, written: Mapping[str, Written], place: Path) -> None:
        """Give the results their names; one that is a folder replaces the whole folder."""
        suffixes = [suffix.rstrip("/") for suffix in written]
        moves = [(self.part / (place.name + each), Path(f"{place}{each}")) for each in suffixes]
        for source, target in moves:  # all or none: what is in the way is found before the first
            if os.path.lexists(target) and source.is_dir() != target.is_dir():
                kind = "file" if source.is_dir() else "folder"
                raise OutputError(f"{shown(target)}: a {kind} of this name is in the way; move it")
        with writing(place):
            (self.part / _MOVING).touch()
            for source, target in moves:
                if source.is_dir() and target.is_dir():
                    os.rename(target, self.part / "replaced")
                os.replace(source, target)


def _failed(task: PageTask, work: Work, message: str, seconds: float = 0.0) -> Outcome:
    record = PageRecord(
        name=task.name,
        source=os.fspath(task.source.path),
        page=task.page,
        status="failed",
        version=__version__,
        settings=work.settings,
        sha256=task.sha256 or None,
        seconds=round(seconds, 3),
        error=message,
    )
    return Outcome(task.name, task.shown, "failed", record, error=message)


def _message(error: Exception, task: PageTask) -> str:
    """One line that names the scan, what is wrong, and what to do."""
    if isinstance(error, ScancleanError):
        text = str(error)
    elif isinstance(error, MemoryError):
        text = "not enough memory for this page: run fewer jobs, or scan at a lower resolution"
    else:
        place = traceback.extract_tb(error.__traceback__)[-1]
        text = (
            f"an error of scanclean itself, please report it: {type(error).__name__} "
            f"({one_line(str(error))}) at {Path(place.filename).name}, line {place.lineno}"
        )
    name = shown(task.source.path)
    return text if text.startswith(name) else f"{task.shown}: {text}"


# ---- the part folder


@contextlib.contextmanager
def _part_folder(output: Path) -> Iterator[Path]:
    """The folder, in the output folder, for results that are not yet in their places.

    Only one run at a time gets it. At the end nothing half-written is left; what remains are the
    names of pages that were being moved when the run was cut off.
    """
    part = output / _PART
    with writing(output):
        output.mkdir(parents=True, exist_ok=True)
    with writing(part):
        part.mkdir(exist_ok=True)
        lock = open(part / "lock", "ab")  # noqa: SIM115 (held to the end of the run)
    try:
        if not _locked(lock):
            raise CallError(
                f"{shown(output)}: another run is writing into this folder: wait for it to end, "
                "or choose another output folder"
            )
        try:
            yield part
        finally:
            with contextlib.suppress(OSError):
                for folder in part.iterdir():
                    _empty(folder)
                part.rmdir()
    finally:
        lock.close()


def _locked(file: IO[bytes]) -> bool:
    """Take a lock that ends with the process; True also where the system has none."""
    try:
        import fcntl
    except ImportError:
        return True
    try:
        fcntl.flock(file, fcntl.LOCK_EX | fcntl.LOCK_NB)
    except BlockingIOError:
        return False
    except OSError:  # some network disks know no locks
        return True
    return True


def _folder_of(part: Path, name: str) -> Path:
    """Where a page's results are made: a flat name of fixed length, whatever the page's is."""
    return part / hashlib.sha256(os.fsencode(name)).hexdigest()[:24]


def _empty(folder: Path) -> None:
    """Remove a part folder, or all but its mark if some of its results are in their places."""
    moving = folder / _MOVING
    if not moving.exists():
        _remove(folder)
        return
    for path in list(folder.iterdir()):
        if path != moving:
            _remove(path)


def _remove(path: Path) -> None:
    """Remove a file or folder of ours, if it is there."""
    if path.is_dir() and not path.is_symlink():
        shutil.rmtree(path, ignore_errors=True)
    else:
        with contextlib.suppress(OSError):
            path.unlink(missing_ok=True)

"""The command line: parse, call one function of the library, say what became of it.

Results go to files and standard output, messages to standard error. Only click and the standard
library are imported here; a command imports what it needs when it is called.
"""

from __future__ import annotations

import contextlib
import functools
import os
import signal
import sys
import threading
import time
import warnings
from collections.abc import Callable, Iterator
from types import FrameType
from typing import TYPE_CHECKING, Any, TypeVar

import click

from scanclean import __version__
from scanclean.errors import CallError, RecipeError, ScancleanError

if TYPE_CHECKING:
    from scanclean.batches.batch import Batch, Outcome
    from scanclean.batches.sources import PageSelection
    from scanclean.recipe import Recipe
    from scanclean.units import Resolution

__all__ = ["cli", "main"]

Command = TypeVar("Command", bound=Callable[..., Any])

_SOME_FAILED = 1
_WRONG_CALL = 2
_INTERRUPTED = 130  # 128 + SIGINT, as shells have it
_DPI_RANGE = (20, 10_000)  # what pageio believes of a file


# ---- values of options


def _dpi(ctx: click.Context, param: click.Parameter, value: str | None) -> Resolution | None:
    """``300``, or ``204,98`` for x and y."""
    if value is None:
        return None
    from scanclean.units import Resolution

    low, high = _DPI_RANGE
    try:
        axes = [float(part) for part in value.split(",")]
    except ValueError:
        axes = []
    if not (1 <= len(axes) <= 2 and all(low <= axis <= high for axis in axes)):
        message = f"write 300, or 204,98 for x and y; from {low} to {high}; got {value!r}"
        raise click.BadParameter(message, ctx, param)
    return Resolution(axes[0], axes[-1])


def _pages(ctx: click.Context, param: click.Parameter, value: str | None) -> PageSelection | None:
    """``1-3,7``."""
    if value is None:
        return None
    from scanclean.batches.sources import PageSelection

    try:
        return PageSelection.parse(value)
    except ValueError as error:
        raise click.BadParameter(str(error), ctx, param) from None


# ---- options that commands share


def _stacked(*decorators: Callable[[Command], Command]) -> Callable[[Command], Command]:
    return lambda command: functools.reduce(lambda f, d: d(f), reversed(decorators), command)


recipe_option = click.option(
    "--recipe",
    "recipe_file",
    type=click.Path(exists=True, dir_okay=False),
    metavar="FILE",
    help="Settings as a TOML file; 'scanclean recipe' prints every key with its default.",
)
output_option = click.option(
    "-o",
    "--output",
    required=True,
    type=click.Path(file_okay=False),
    metavar="DIR",
    help="Folder for the results; made if it is not there.",
)
run_options = _stacked(
    click.option(
        "--jobs",
        type=click.IntRange(min=1),
        default=1,
        show_default=True,
        metavar="N",
        help="Pages worked on at a time, each by a process of its own.",
    ),
    click.option("--replace", is_flag=True, help="Do again what is done, and write over it."),
    click.option("--quiet", is_flag=True, help="Say nothing but what failed."),
)
page_options = _stacked(
    click.option(
        "--dpi",
        callback=_dpi,
        metavar="N or N,N",
        help="Resolution (or that along x and y) of scans whose file states none; estimated from "
        "the size of the text if not given.",
    ),
    click.option(
        "--pages",
        callback=_pages,
        metavar="1-3,7",
        help="Only these pages of each scan file, counted from 1; 5- is all from the fifth on.",
    ),
    click.option(
        "--straighten",
        is_flag=True,
        help="Turn each page upright first, by the slope of its text lines.",
    ),
)


class _Group(click.Group):
    """Ends every command with one line and the right status, never with a traceback."""

    def invoke(self, ctx: click.Context) -> Any:
        """Run the command; errors that a user can mend become a line and a status."""
        try:
            return super().invoke(ctx)
        except (CallError, RecipeError) as error:
            _say(str(error))
            ctx.exit(_WRONG_CALL)
        except ScancleanError as error:
            _say(str(error))
            ctx.exit(_SOME_FAILED)
        except KeyboardInterrupt:
            _say("stopped; the same call goes on from here")
            ctx.exit(_INTERRUPTED)


@click.group(cls=_Group, context_settings={"help_option_names": ["-h", "--help"]})
@click.version_option(__version__, prog_name="scanclean")
def cli() -> None:
    """Clean scanned pages to bitonal ink.

    Every pixel taken out is accounted for in an ink ledger, from which the thresholded page can be
    given back. Keep the scans themselves: they are the masters, and scanclean never writes over
    them.

    \b
    Exit status: 0 all pages done
                 1 some page failed; the others are written
                 2 the call itself is wrong; nothing was done
    """


@cli.command()
@click.argument("scans", nargs=-1, required=True, metavar="SCAN...")
@output_option
@recipe_option
@page_options
@click.option("--glyphs", is_flag=True, help="Also write NAME.glyphs/, a PNG a glyph.")
@click.option(
    "--bind",
    type=click.Choice(["tiff", "pdf"]),
    help="Also write the cleaned pages of each scan file as one NAME.bound.tif or .pdf.",
)
@run_options
def clean(
    scans: tuple[str, ...],
    output: str,
    recipe_file: str | None,
    dpi: Resolution | None,
    pages: PageSelection | None,
    straighten: bool,
    glyphs: bool,
    bind: str | None,
    jobs: int,
    replace: bool,
    quiet: bool,
) -> None:
    """Clean scans: threshold, take out edges, rules and specks, find glyphs and lines, write.

    SCAN is a PNG, TIFF, JPEG, JPEG 2000 or WebP file, a folder (walked in sorted order; its
    folders are kept below DIR), or - for a list of paths on standard input.

    \b
    For a scan folio7.png there will be in DIR:
      folio7.tif          the cleaned page: 1 bit, Group 4
      folio7.ledger.png   the ink ledger: what became of every pixel
      folio7.layout.json  text lines, glyphs, rules, measures, flags
    and for a scan of several pages folio7.p0001.tif and so on. DIR/run.jsonl has
    a line a page. Called again, only pages that are missing or failed, or whose
    scan or recipe changed, are done.

    \b
    Examples:
      scanclean clean box12 -o out --jobs 2
      scanclean clean folio7.png -o out --recipe ledger.toml --glyphs
      find . -name '*.tif' | scanclean clean - -o out --dpi 300
    """
    from scanclean.batches.batch import plan_batch
    from scanclean.batches.work import CleanWork

    work = CleanWork(_recipe(recipe_file), dpi, straighten, glyphs)
    arguments = _arguments(scans)
    _run(plan_batch(arguments, output, work, pages=pages, bind=bind, redo=replace), jobs, quiet)


@cli.command()
@click.argument("ledgers", nargs=-1, required=True, metavar="LEDGER...")
@output_option
@run_options
def restore(ledgers: tuple[str, ...], output: str, jobs: int, replace: bool, quiet: bool) -> None:
    """Give thresholded pages back from their ink ledgers, bit for bit.

    LEDGER is a NAME.ledger.png that 'scanclean clean' wrote, a folder of them (walked), or - for a
    list of paths on standard input. Writes NAME.thresholded.tif into DIR: the page as it was after
    the threshold, before anything was taken out or mended.

    \b
    Examples:
      scanclean restore out/folio7.ledger.png -o back
      scanclean restore out -o back
    """
    from scanclean.batches.batch import plan_batch
    from scanclean.batches.work import LEDGER_SUFFIXES, RestoreWork

    arguments = _arguments(ledgers)
    batch = plan_batch(
        arguments, output, RestoreWork(), suffixes=LEDGER_SUFFIXES, recorded=False, redo=replace
    )
    _run(batch, jobs, quiet)


@cli.command()
@recipe_option
def recipe(recipe_file: str | None) -> None:
    """Print the recipe in force, with every default, its unit and a line of explanation.

    What is printed is a recipe itself: save it, change it, and name it with --recipe.

    \b
    Examples:
      scanclean recipe > ledger.toml
      scanclean recipe --recipe ledger.toml
    """
    from scanclean.recipe import to_toml

    click.echo(to_toml(_recipe(recipe_file)), nl=False)


# ---- arguments


def _recipe(path: str | None) -> Recipe:
    from scanclean.recipe import Recipe, read_recipe

    return Recipe() if path is None else read_recipe(path)


def _arguments(arguments: tuple[str, ...]) -> list[str]:
    """Paths as given and those listed on standard input for ``-``; one not there is refused."""
    from scanclean.batches.sources import read_listing
    from scanclean.scans.files import shown

    if arguments.count("-") > 1:
        raise CallError("- can stand for standard input only once")
    paths: list[str] = []
    for argument in arguments:
        if argument == "-":
            paths += read_listing(sys.stdin.buffer.read())
        elif not os.path.lexists(argument):
            raise CallError(f"{shown(argument)}: there is no such file or folder; check the path")
        else:
            paths.append(argument)
    return paths


# ---- running


def _run(batch: Batch, jobs: int, quiet: bool) -> None:
    """Work off a batch, tell what happens, and exit with the status that it comes to."""
    if not quiet:
        for note in batch.notes:
            _say(note)
    for problem in batch.problems:
        _say(problem)
    counts = dict.fromkeys(("done", "skipped", "failed"), 0)
    stop = threading.Event()
    progress = _Progress(batch.n_pages, counts, silent=quiet or not sys.stderr.isatty())
    began = time.monotonic()
    if batch.n_pages:
        with _stopping(stop), progress:
            for outcome in batch.run(jobs=jobs, stop=stop):
                if outcome.record.page or outcome.status == "failed":
                    counts[outcome.status] += 1
                progress.clear()
                _tell(outcome, quiet)
                progress.show()
    if batch.n_pages and not quiet:
        _say(_summary(batch, counts, time.monotonic() - began))
    if stop.is_set():
        _say("stopped; the same call goes on from here")
        sys.exit(_INTERRUPTED)
    if counts["failed"] or batch.problems:
        sys.exit(_SOME_FAILED)


def _tell(outcome: Outcome, quiet: bool) -> None:
    if outcome.error is not None:
        _say(outcome.error)
    if not quiet:
        for note in outcome.notes:
            _say(f"{outcome.source}: {note}")


def _summary(batch: Batch, counts: dict[str, int], seconds: float) -> str:
    from scanclean.batches.runlog import RUN_LOG
    from scanclean.scans.files import shown

    parts = [f"{counts['done']} done"]
    if counts["skipped"]:
        parts.append(f"{counts['skipped']} unchanged since an earlier run")
    parts.append(f"{counts['failed']} failed")
    where = shown(batch.output / RUN_LOG) if batch.recorded else shown(batch.output)
    return f"pages: {', '.join(parts)} in {seconds:.1f} s; see {where}"


@contextlib.contextmanager
def _stopping(stop: threading.Event) -> Iterator[None]:
    """The first Ctrl-C ends after the pages in hand, the second one at once."""

    def ask(number: int, frame: FrameType | None) -> None:
        if stop.is_set():
            raise KeyboardInterrupt
        stop.set()
        _say("stopping after the pages in hand; Ctrl-C again stops at once")

    before = signal.signal(signal.SIGINT, ask)
    try:
        yield
    finally:
        signal.signal(signal.SIGINT, before)


class _Progress:
    """One line on a terminal: pages, rate, time left, failures."""

    def __init__(self, total: int, counts: dict[str, int], *, silent: bool) -> None:
        self._total, self._counts, self._silent = total, counts, silent
        self._began = time.monotonic()

    def __enter__(self) -> None:
        self.show()

    def __exit__(self, *_: object) -> None:
        self.clear()

    def clear(self) -> None:
        """Take the line away, for a message."""
        if not self._silent:
            sys.stderr.write("\r\x1b[K")

    def show(self) -> None:
        """Draw it."""
        if self._silent:
            return
        seen = sum(self._counts.values())
        rate = self._counts["done"] / max(time.monotonic() - self._began, 1e-9)
        line = f"{seen} of {self._total} pages"
        if rate:
            left = round((self._total - seen) / rate)
            line += f", {rate:.1f} a second, {left // 60}:{left % 60:02d} left"
        if self._counts["failed"]:
            line += f", {self._counts['failed']} failed"
        sys.stderr.write(f"\r\x1b[K{line}")
        sys.stderr.flush()


def _say(message: str) -> None:
    """A line to standard error, if anyone still reads it."""
    with contextlib.suppress(BrokenPipeError):
        click.echo(f"scanclean: {message}", err=True)


def main() -> None:
    """Entry point of the ``scanclean`` command: whatever happens ends in a line and a status."""
    if not sys.warnoptions:
        warnings.simplefilter("ignore")
    try:
        cli(prog_name="scanclean")
    except MemoryError:
        _say("not enough memory; run fewer jobs")
    except OSError as error:  # such as standard output on a full disk; click sees to closed pipes
        _say(f"{error.filename or 'standard output'}: {error.strerror or error}")
        os.dup2(os.open(os.devnull, os.O_WRONLY), 1)  # what is still buffered has nowhere to go
    except Exception as error:
        _say(f"an error of scanclean itself, please report it: {type(error).__name__}: {error}")
    sys.exit(_SOME_FAILED)

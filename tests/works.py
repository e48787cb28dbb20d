"""Works and jobs for tests of batches: small, quick, and as troublesome as asked for.

They are sent to other processes, so they stand in a module of their own.
"""

from __future__ import annotations

import errno
import os
import signal
import time
from collections.abc import Mapping
from dataclasses import dataclass
from pathlib import Path
from typing import Any

from scanclean.batches.work import Done, PageTask
from scanclean.errors import PageError
from scanclean.scans.files import write_whole
from scanclean.scans.pageio import read_page
from scanclean.scans.pagewrite import write_bitonal
from scanclean.units import Resolution


@dataclass(frozen=True)
class Copy:
    """Writes a page's dark pixels as NAME.tif and its size as NAME.txt, or fails by leaf.

    `trouble` pairs a leaf with what happens there: see `_trouble`.
    """

    level: int = 128
    pause: float = 0.0
    parts: bool = False
    trouble: tuple[tuple[str, str], ...] = ()
    scratch: str = ""

    @property
    def settings(self) -> Mapping[str, Any]:
        return {"level": self.level}

    @property
    def suffixes(self) -> tuple[str, ...]:
        return (".tif", ".txt") + ((".parts/",) if self.parts else ())

    def do(self, task: PageTask, folder: Path) -> Done:
        scan = read_page(task.source.path, task.page)
        time.sleep(self.pause)
        mask = scan.grey() < self.level
        written = {".tif": write_bitonal(folder / f"{task.leaf}.tif", mask, Resolution(300, 300))}
        self._trouble(dict(self.trouble).get(task.leaf, ""))
        height, width = scan.shape
        written[".txt"] = write_whole(folder / f"{task.leaf}.txt", f"{width} {height}".encode())
        if self.parts:
            (folder / f"{task.leaf}.parts").mkdir()
            written[".parts/"] = write_whole(folder / f"{task.leaf}.parts" / "1.txt", b"one")
        return Done(written, ("dark",) if mask.mean() > 0.5 else (), ("looked at",))

    def _trouble(self, kind: str) -> None:
        if kind == "page":
            raise PageError("nothing to be seen on it; scan it again")
        if kind == "bug":
            raise IndexError("index 3 is out of bounds\nfor a second line")
        if kind == "memory":
            raise MemoryError
        if kind == "disk":
            raise OSError(errno.ENOSPC, os.strerror(errno.ENOSPC))
        if kind == "die" or (kind == "die once" and _first_time(Path(self.scratch) / "died")):
            os.kill(os.getpid(), signal.SIGKILL)
        if kind == "interrupt":
            raise KeyboardInterrupt


@dataclass(frozen=True)
class Number:
    """A job that gives its number back, or ends its process by `how`."""

    number: int
    how: str = ""
    scratch: str = ""
    pause: float = 0.0

    def __call__(self) -> tuple[int, str]:
        time.sleep(self.pause)
        if self.how == "die" or (self.how == "once" and _first_time(Path(self.scratch) / "once")):
            os._exit(9)
        if self.how == "raise":
            raise ValueError(f"job {self.number}")
        return self.number, os.environ.get("OMP_NUM_THREADS", "unset")

    def lost(self) -> tuple[int, str]:
        return -self.number, "lost"


def _first_time(mark: Path) -> bool:
    try:
        mark.touch(exist_ok=False)
    except FileExistsError:
        return False
    return True

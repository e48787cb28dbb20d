"""Files of the operating system: opened and written so that what goes wrong can be said in a line.

Writing is whole or not at all: a file is written beside its place under another name, forced to
disk and renamed.
"""

from __future__ import annotations

import contextlib
import errno
import hashlib
import os
import secrets
import stat
from collections.abc import Iterator
from dataclasses import dataclass
from io import BufferedReader, BufferedWriter
from pathlib import Path

from scanclean.errors import OutputError, PageError

__all__ = [
    "FilePath",
    "Output",
    "Written",
    "atomic",
    "file_sha256",
    "one_line",
    "open_file",
    "reason",
    "shown",
    "write_whole",
    "writing",
]

FilePath = str | os.PathLike[str]


def shown(path: FilePath | bytes) -> str:
    """A path on one line, whatever bytes its name holds."""
    return _printable(os.fsdecode(path))


def _printable(text: str) -> str:
    return "".join(c if c.isprintable() else c.encode("unicode_escape").decode() for c in text)


def one_line(text: str) -> str:
    """A message of another program, cut to one printable line of at most 120 characters."""
    return _printable(" ".join(text.split()).rstrip("."))[:120]


def reason(error: BaseException) -> str:
    """What an error says of its cause, on one line."""
    if isinstance(error, OSError) and error.strerror:
        return one_line(error.strerror)
    return one_line(str(error)) or type(error).__name__


def open_file(path: FilePath) -> BufferedReader:
    """Open a regular file for reading.

    Raises
    ------
    PageError
        If there is none or it cannot be opened.
    """
    where = shown(path)
    try:
        mode = os.stat(path).st_mode
        if stat.S_ISDIR(mode):
            raise PageError(f"{where}: a folder, not a scan; name a file inside it")
        if not stat.S_ISREG(mode):  # a pipe could block for ever
            raise PageError(f"{where}: not a regular file; name a file on disk")
        return open(path, "rb")
    except (FileNotFoundError, NotADirectoryError) as error:
        raise PageError(f"{where}: there is no such file; check the path") from error
    except PermissionError as error:
        raise PageError(f"{where}: no permission to read it; change its access rights") from error
    except (OSError, ValueError) as error:  # ValueError: a zero byte in the name
        raise PageError(f"{where}: cannot be opened ({reason(error)}); check the path") from error


@dataclass(frozen=True)
class Written:
    """What was written: the size of the file in bytes and the SHA-256 of them in hexadecimal."""

    n_bytes: int
    sha256: str


class Output:
    """A file being written from its first byte to its last, hashed on the way."""

    def __init__(self, file: BufferedWriter) -> None:
        self._file = file
        self._hash = hashlib.sha256()
        self.n_bytes = 0

    def write(self, data: bytes) -> None:
        """Append bytes."""
        self._file.write(data)
        self._hash.update(data)
        self.n_bytes += len(data)

    @property
    def written(self) -> Written:
        """Size and hash so far."""
        return Written(self.n_bytes, self._hash.hexdigest())


@contextlib.contextmanager
def atomic(path: FilePath, *, sync: bool = True) -> Iterator[Output]:
    """Write a file that appears whole, when the block ends, or not at all.

    Parameters
    ----------
    path : str or path-like
        What stands there is replaced. Its folder must exist.
    sync : bool
        Whether the bytes are forced to disk before the file gets its name.

    Yields
    ------
    Output

    Raises
    ------
    OutputError
        For every error of the operating system in the block; nothing is left behind.
    """
    target = Path(path)
    # a name of its own length, so that the longest allowed name of the target works too
    part = target.with_name(f".{secrets.token_hex(8)}.part")
    try:
        with open(part, "xb") as file:
            output = Output(file)
            yield output
            file.flush()
            if sync:
                os.fsync(file.fileno())
        os.replace(part, target)
    except BaseException as error:
        _remove(part)
        if isinstance(error, OSError):
            raise OutputError(f"{shown(path)}: {_write_problem(error)}") from error
        raise


@contextlib.contextmanager
def writing(path: FilePath) -> Iterator[None]:
    """Errors of the operating system in the block become an OutputError about `path`."""
    try:
        yield
    except OSError as error:
        raise OutputError(f"{shown(path)}: {_write_problem(error)}") from error


def _remove(part: Path) -> None:
    with contextlib.suppress(OSError):  # the folder is gone or read-only: nothing of ours is in it
        part.unlink(missing_ok=True)


def _write_problem(error: OSError) -> str:
    match error.errno:
        case errno.ENOSPC | errno.EDQUOT:
            return "the disk is full; make room or choose another folder"
        case errno.EACCES | errno.EPERM | errno.EROFS:
            return "no permission to write here; change the access rights or choose another folder"
        case errno.ENOENT | errno.ENOTDIR:
            return "its folder does not exist; make it or choose another"
        case errno.EEXIST:
            return "a file stands where a folder is needed; move it or choose another folder"
        case errno.EISDIR | errno.ENOTEMPTY:
            return "a folder of this name is in the way; move it or choose another name"
        case errno.ENAMETOOLONG:
            return "the name is too long for this disk; choose a shorter one"
    return f"cannot be written ({reason(error)}); check the disk or choose another folder"


def file_sha256(path: FilePath) -> str:
    """The SHA-256 of a file's bytes in hexadecimal.

    Raises
    ------
    PageError
        If it cannot be read.
    """
    with open_file(path) as file:
        try:
            return hashlib.file_digest(file, "sha256").hexdigest()
        except OSError as error:
            raise PageError(
                f"{shown(path)}: cannot be read ({reason(error)}); copy it again"
            ) from error


def write_whole(path: FilePath, data: bytes, *, sync: bool = True) -> Written:
    """Write all bytes of a file at once, as `atomic` does."""
    with atomic(path, sync=sync) as output:
        output.write(data)
    return output.written

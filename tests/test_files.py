from __future__ import annotations

import errno
import hashlib
import os
import subprocess
import sys
from pathlib import Path

import pytest

from scanclean.errors import OutputError, PageError
from scanclean.ledger import PALETTE
from scanclean.scans import files, pageio
from tests.pagefiles import (
    DPI_300,
    assert_one_clear_line,
    bound_pages,
    drawn_grey,
    drawn_mask,
)

# ---- whole or not at all


def test_a_file_appears_when_the_block_ends(tmp_path):
    path = tmp_path / "a.json"
    path.write_bytes(b"before")
    with pageio.atomic(path) as output:
        output.write(b"after")
        assert path.read_bytes() == b"before"
        assert len(list(tmp_path.iterdir())) == 2  # the other name is in the same folder
    assert path.read_bytes() == b"after"
    assert output.written == pageio.Written(5, hashlib.sha256(b"after").hexdigest())
    assert [p.name for p in tmp_path.iterdir()] == ["a.json"]


def test_a_file_has_the_rights_that_the_user_gives_new_files(tmp_path):
    before = os.umask(0o027)
    try:
        with pageio.atomic(tmp_path / "a") as output:
            output.write(b"x")
    finally:
        os.umask(before)
    assert (tmp_path / "a").stat().st_mode & 0o777 == 0o640


@pytest.mark.parametrize("error", [KeyboardInterrupt, RuntimeError, PageError])
def test_an_interrupted_file_leaves_the_old_one(tmp_path, error):
    path = tmp_path / "a.tif"
    path.write_bytes(b"before")

    def interrupted():
        with pageio.atomic(path) as output:
            output.write(b"half")
            raise error

    with pytest.raises(error):
        interrupted()
    assert path.read_bytes() == b"before"
    assert len(list(tmp_path.iterdir())) == 1


def test_a_full_disk(tmp_path, monkeypatch):
    def full(descriptor):
        raise OSError(errno.ENOSPC, os.strerror(errno.ENOSPC))

    monkeypatch.setattr(os, "fsync", full)
    for write in (
        lambda: pageio.write_bitonal(tmp_path / "a.tif", drawn_mask(), DPI_300),
        lambda: pageio.write_ledger(tmp_path / "a.tif", drawn_grey() % 7, PALETTE, DPI_300),
        lambda: pageio.bind_pdf(tmp_path / "a.tif", bound_pages()),
    ):
        with pytest.raises(OutputError) as error:
            write()
        assert_one_clear_line(error, "a.tif", "disk is full")
    assert list(tmp_path.iterdir()) == []


def test_a_real_limit_of_the_system_leaves_nothing(tmp_path):
    code = (
        "import resource, sys, numpy as np\n"
        "from scanclean import errors, units\n"
        "from scanclean.scans import pageio\n"
        "resource.setrlimit(resource.RLIMIT_FSIZE, (300, 300))\n"
        "noise = np.random.default_rng(0).random((200, 200)) < 0.5\n"
        "try:\n"
        "    pageio.write_bitonal(sys.argv[1], noise, units.Resolution(300, 300))\n"
        "except errors.OutputError as error:\n"
        "    print(error)\n"
    )
    command = [sys.executable, "-c", code, str(tmp_path / "a.tif")]
    result = subprocess.run(
        command, capture_output=True, text=True, cwd=Path(__file__).parent.parent
    )
    assert "a.tif: cannot be written (File too large); " in result.stdout
    assert result.stderr == ""
    assert list(tmp_path.iterdir()) == []


def test_places_that_cannot_be_written(tmp_path):
    (tmp_path / "file").touch()
    (tmp_path / "folder.tif").mkdir()
    for name, part in (
        ("missing/a.tif", "folder does not exist"),
        ("file/a.tif", "folder does not exist"),
        ("folder.tif", "in the way"),
        ("x" * 300, "too long"),
    ):
        with pytest.raises(OutputError) as error:
            pageio.write_bitonal(tmp_path / name, drawn_mask(), DPI_300)
        assert_one_clear_line(error, part, name)
    assert sorted(p.name for p in tmp_path.iterdir()) == ["file", "folder.tif"]


def test_no_permission_to_write(tmp_path, monkeypatch):
    if os.geteuid() == 0:  # root may write everywhere

        def refuse(*args, **kwargs):
            raise PermissionError(errno.EACCES, "Permission denied")

        monkeypatch.setattr(files, "open", refuse, raising=False)
    else:
        tmp_path.chmod(0o500)
    with pytest.raises(OutputError) as error:
        pageio.write_bitonal(tmp_path / "a.tif", drawn_mask(), DPI_300)
    assert_one_clear_line(error, "a.tif", "no permission")


def test_the_longest_name_that_the_disk_allows(tmp_path):
    path = tmp_path / ("x" * 251 + ".tif")
    pageio.write_bitonal(path, drawn_mask(), DPI_300)
    assert path.exists()


def test_hashing_what_is_not_there(tmp_path):
    with pytest.raises(PageError) as error:
        pageio.file_sha256(tmp_path / "missing.png")
    assert_one_clear_line(error, "missing.png", "no such file")

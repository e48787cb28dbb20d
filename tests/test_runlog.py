"""The record of a run outlives whatever ends the run."""

from __future__ import annotations

import json
import os
from pathlib import Path

import pytest
from hypothesis import given
from hypothesis import strategies as st

from scanclean.batches.runlog import RUN_LOG, PageRecord, ResultFile, RunLog, recorded_results
from scanclean.errors import OutputError


def record(name: str, page: int = 1, **changes) -> PageRecord:
    given = {
        "name": name,
        "source": f"box12/{name}.png",
        "page": page,
        "status": "done",
        "version": "0.1.0",
        "settings": {"recipe": "0" * 64, "dpi": [300.0, 300.0]},
        "sha256": "1" * 64,
        "outputs": (ResultFile(f"{name}.tif", "2" * 64, 10),),
        "flags": ("dpi-estimated",),
        "seconds": 0.25,
    }
    return PageRecord(**(given | changes))


TEXT = st.text(max_size=8)
RECORDS = st.builds(
    PageRecord,
    name=TEXT,
    source=TEXT,
    page=st.integers(0, 10**6),
    status=st.sampled_from(["done", "failed"]),
    version=TEXT,
    settings=st.dictionaries(TEXT, st.none() | st.booleans() | TEXT | st.lists(st.integers())),
    sha256=st.none() | TEXT,
    outputs=st.lists(st.builds(ResultFile, TEXT, TEXT, st.integers(0))).map(tuple),
    flags=st.lists(TEXT).map(tuple),
    seconds=st.floats(0, 1e6),
    error=st.none() | TEXT,
)


@given(RECORDS)
def test_a_record_comes_back_from_its_line(one):
    line = one.to_json()
    assert "\n" not in line
    assert PageRecord.from_json(line) == one


def test_a_line_says_what_was_promised():
    data = json.loads(record("folio7").to_json())
    assert data == {
        "name": "folio7",
        "source": "box12/folio7.png",
        "page": 1,
        "status": "done",
        "version": "0.1.0",
        "settings": {"recipe": "0" * 64, "dpi": [300.0, 300.0]},
        "sha256": "1" * 64,
        "outputs": [{"file": "folio7.tif", "sha256": "2" * 64, "bytes": 10}],
        "flags": ["dpi-estimated"],
        "seconds": 0.25,
    }
    assert json.loads(record("folio7", error="why").to_json())["error"] == "why"


def test_names_of_any_bytes_are_recorded():
    name = os.fsdecode(b"caf\xe9\xff")
    assert PageRecord.from_json(record(name).to_json().encode("ascii")).name == name


@pytest.mark.parametrize(
    "line", [b"", b"{}", b"[1]", b"3", b"\xff", b'{"name": "a"}', b"[" * 100_000, b'{"outputs": 3}']
)
def test_a_line_that_is_none_of_ours_is_passed_over(line):
    assert PageRecord.from_json(line) is None


def test_lines_are_added_as_they_come_and_ordered_at_the_end(tmp_path):
    with RunLog(tmp_path) as log:
        log.put(record("b"))
        log.put(record("reg.p0002", 2))
        assert len((tmp_path / RUN_LOG).read_bytes().splitlines()) == 2
        log.put(record("a", status="failed"))
        log.put(record("reg.p10000", 10000))
        log.put(record("reg.p0001", 1))
        log.put(record("a"))
    lines = [json.loads(line) for line in (tmp_path / RUN_LOG).read_text().splitlines()]
    assert [line["name"] for line in lines] == ["a", "b", "reg.p0001", "reg.p0002", "reg.p10000"]
    assert lines[0]["status"] == "done"
    before = (tmp_path / RUN_LOG).stat()
    RunLog(tmp_path).close()  # in order already: not written again
    assert (tmp_path / RUN_LOG).stat().st_mtime_ns == before.st_mtime_ns


@given(cut=st.integers(0))
def test_a_run_cut_off_in_the_middle_of_a_line_loses_that_line_alone(tmp_path_factory, cut):
    folder = tmp_path_factory.mktemp("out")
    log = RunLog(folder)
    for name in "abc":
        log.put(record(name))
    data = (folder / RUN_LOG).read_bytes()
    ends = [i + 1 for i, byte in enumerate(data) if byte == 10]
    cut %= len(data) + 1
    (folder / RUN_LOG).write_bytes(data[:cut])
    again = RunLog(folder)
    whole = sum(end <= cut + 1 for end in ends)  # a line is whole without its end, too
    assert list(again.records) == list("abc")[:whole]
    again.put(record("d"))
    assert list(RunLog(folder).records) == [*"abc"[:whole], "d"]


def test_a_record_that_cannot_be_written_is_told_and_kept_for_later(tmp_path):
    log = RunLog(tmp_path)
    (tmp_path / RUN_LOG).symlink_to("/dev/full")
    with pytest.raises(OutputError, match=r"run\.jsonl: the disk is full; make room"):
        log.put(record("a"))
    (tmp_path / RUN_LOG).unlink()
    log.close()
    assert list(RunLog(tmp_path).records) == ["a"]


def test_a_record_that_cannot_be_read_is_refused(tmp_path):
    for target in ("/dev/zero", ".", "nowhere"):  # to be read for ever, a folder, nothing
        (tmp_path / RUN_LOG).symlink_to(target)
        with pytest.raises(OutputError, match=r"run\.jsonl: is no regular file; move it away"):
            RunLog(tmp_path)
        assert recorded_results(tmp_path) is None
        (tmp_path / RUN_LOG).unlink()


def test_a_record_that_the_disk_does_not_give_is_refused(tmp_path, monkeypatch):
    (tmp_path / RUN_LOG).write_text("")
    monkeypatch.setattr(Path, "read_bytes", _refuse)
    with pytest.raises(OutputError, match=r"run\.jsonl: cannot be read \(Permission denied\)"):
        RunLog(tmp_path)


def _refuse(path):
    raise PermissionError(13, "Permission denied", str(path))


def test_results_that_a_record_lists_are_known(tmp_path):
    assert recorded_results(tmp_path) is None
    assert recorded_results(tmp_path / "none") is None
    with RunLog(tmp_path) as log:
        log.put(record("a", outputs=(ResultFile("a.tif", "", 1), ResultFile("a.glyphs/", "", 1))))
    assert recorded_results(tmp_path) == {"a.tif", "a.glyphs", RUN_LOG}
    (tmp_path / RUN_LOG).write_text('{"some": "other log"}\n')
    assert recorded_results(tmp_path) is None


def test_a_result_is_present_with_its_size(tmp_path):
    (tmp_path / "a.tif").write_bytes(b"12345")
    (tmp_path / "a.glyphs").mkdir()
    assert ResultFile("a.tif", "", 5).is_present(tmp_path)
    assert not ResultFile("a.tif", "", 6).is_present(tmp_path)
    assert not ResultFile("b.tif", "", 5).is_present(tmp_path)
    assert ResultFile("a.glyphs/", "", 99).is_present(tmp_path)
    assert not ResultFile("a.tif/", "", 5).is_present(tmp_path)
    assert not ResultFile("a.glyphs", "", 99).is_present(tmp_path)

"""Batches: every page has its outcome, every file is whole, and a second run does the rest."""

from __future__ import annotations

import errno
import hashlib
import json
import os
import threading
from pathlib import Path

import numpy as np
import pytest
from PIL import Image

import scanclean.batches.batch
from scanclean.batches.batch import Batch, Outcome, plan_batch
from scanclean.batches.runlog import RUN_LOG, RunLog
from scanclean.batches.sources import PageSelection
from scanclean.errors import CallError, OutputError
from scanclean.scans.pageio import read_page
from tests.works import Copy

PART = ".scanclean-part"


def page(seed: int, *, size=(60, 40)) -> Image.Image:
    rng = np.random.default_rng(seed)
    return Image.fromarray(rng.integers(0, 256, size[::-1], np.uint8))


@pytest.fixture
def here(tmp_path, monkeypatch):
    """A folder of four scans, one of them of three pages and one in a folder below."""
    monkeypatch.chdir(tmp_path)
    (tmp_path / "scans" / "sub").mkdir(parents=True)
    page(1).save("scans/a.png", dpi=(300, 300))
    page(2).save("scans/b.png", dpi=(300, 300))
    page(3).save("scans/book.tif", dpi=(200, 200), save_all=True, append_images=[page(4), page(5)])
    page(6).save("scans/sub/a.png", dpi=(300, 300))
    return tmp_path


NAMES = ["a", "b", "book.p0001", "book.p0002", "book.p0003", "sub/a"]


def run(scans=("scans",), out="out", work=None, *, jobs=1, stop=None, **options) -> list[Outcome]:
    batch = plan_batch(scans, out, work or Copy(), **options)
    return list(batch.run(jobs=jobs, stop=stop))


def files(folder="out") -> dict[str, bytes]:
    """Every file below a folder with its bytes, hidden ones too."""
    root = Path(folder)
    return {
        str(path.relative_to(root)): path.read_bytes()
        for path in sorted(root.rglob("*"))
        if path.is_file()
    }


def results(folder="out") -> dict[str, bytes]:
    return {name: data for name, data in files(folder).items() if name != RUN_LOG}


def log(folder="out") -> list[dict]:
    return [json.loads(line) for line in (Path(folder) / RUN_LOG).read_text().splitlines()]


def without_times(folder="out") -> list[dict]:
    return [{**line, "seconds": 0} for line in log(folder)]


def statuses(outcomes) -> dict[str, str]:
    return {outcome.name: outcome.status for outcome in outcomes}


# ---- a run


def test_every_page_is_done_and_recorded(here):
    outcomes = run()
    assert statuses(outcomes) == dict.fromkeys(NAMES, "done")
    assert sorted(results()) == sorted(name + end for name in NAMES for end in (".tif", ".txt"))
    assert [line["name"] for line in log()] == NAMES
    sources = {"a": "a.png", "b": "b.png", "sub/a": "sub/a.png"}
    for line in log():
        source = Path("scans") / sources.get(line["name"], "book.tif")
        assert line["source"] == str(source)
        assert line["sha256"] == hashlib.sha256(source.read_bytes()).hexdigest()
        assert line["page"] == int(line["name"][-4:]) if "book" in line["name"] else 1
        assert [each["file"] for each in line["outputs"]] == [
            line["name"] + ".tif",
            line["name"] + ".txt",
        ]
        for each in line["outputs"]:
            data = (Path("out") / each["file"]).read_bytes()
            assert each["sha256"] == hashlib.sha256(data).hexdigest()
            assert each["bytes"] == len(data)
        assert line["seconds"] >= 0
        assert line["settings"] == {"level": 128}
    assert not (Path("out") / PART).exists()


def test_the_pages_are_the_right_ones(here):
    run()
    for number, seed in enumerate((3, 4, 5), start=1):
        expected = np.asarray(page(seed)) < 128
        assert np.array_equal(read_page(f"out/book.p{number:04d}.tif").pixels, expected)


def test_more_processes_give_the_same_bytes(here):
    run(out="one", bind="tiff", work=Copy(parts=True))
    run(out="three", bind="tiff", work=Copy(parts=True), jobs=3)
    assert results("one") == results("three")
    assert without_times("one") == without_times("three")
    assert len(results("one")) == 3 * len(NAMES) + 4


def test_pages_are_chosen(here):
    batch = plan_batch(["scans"], "out", Copy(), pages=PageSelection.parse("2-"))
    assert [task.name for task in batch.tasks] == ["book.p0002", "book.p0003"]
    assert [note for note in batch.notes if "skipped, none of the chosen" in note] == [
        f"scans/{name}: skipped, none of the chosen pages is in it"
        for name in ("a.png", "b.png", "sub/a.png")
    ]


def test_notes_and_flags_come_with_the_outcome(here):
    Image.new("L", (20, 20), 0).save("scans/dark.png")
    (outcome,) = (each for each in run() if each.name == "dark")
    assert outcome.notes == ("looked at",)
    assert outcome.record.flags == ("dark",)
    assert next(line for line in log() if line["name"] == "dark")["flags"] == ["dark"]


def test_nothing_to_do_is_a_problem(here):
    batch = plan_batch([], "out", Copy())
    assert batch.problems == ("no page to work on: name scans, or folders that hold scans",)
    assert batch.n_pages == 0


# ---- pages that fail


@pytest.mark.parametrize("jobs", [1, 2])
@pytest.mark.parametrize(
    ("kind", "says"),
    [
        ("page", "nothing to be seen on it; scan it again"),
        ("bug", "an error of scanclean itself, please report it: IndexError (index 3 is"),
        ("memory", "not enough memory for this page: run fewer jobs"),
        ("disk", "the disk is full; make room"),
    ],
)
def test_a_page_that_fails_fails_alone_and_leaves_nothing(here, jobs, kind, says):
    outcomes = run(work=Copy(trouble=(("book.p0002", kind),)), jobs=jobs)
    assert statuses(outcomes) == {
        name: "failed" if name == "book.p0002" else "done" for name in NAMES
    }
    (failed,) = (outcome for outcome in outcomes if outcome.status == "failed")
    assert failed.error.startswith("scans/book.tif, page 2: ")
    assert says in failed.error
    assert "\n" not in failed.error
    assert PART not in failed.error
    assert sorted(results()) == sorted(
        name + end for name in NAMES if name != "book.p0002" for end in (".tif", ".txt")
    )
    line = next(line for line in log() if line["name"] == "book.p0002")
    assert line["error"] == failed.error
    assert line["outputs"] == []


def test_a_scan_that_cannot_be_opened_fails_alone(here):
    Path("scans/empty.png").write_bytes(b"")
    Path("scans/zeros.tif").write_bytes(bytes(500))
    outcomes = run()
    failed = {outcome.name: outcome.error for outcome in outcomes if outcome.status == "failed"}
    assert sorted(failed) == ["empty", "zeros"]
    for name, error in failed.items():
        assert error.startswith(f"scans/{name}.")
        assert "\n" not in error
    assert len(outcomes) == len(NAMES) + 2
    assert [line["name"] for line in log() if line["status"] == "failed"] == ["empty", "zeros"]


def test_a_scan_that_vanishes_on_the_way_fails_alone(here):
    batch = plan_batch(["scans"], "out", Copy())
    Path("scans/b.png").unlink()
    Path("scans/book.tif").unlink()
    outcomes = list(batch.run())
    assert statuses(outcomes) == {
        name: "done" if name in ("a", "sub/a") else "failed" for name in NAMES
    }
    assert all("no such file" in each.error for each in outcomes if each.status == "failed")


def test_a_page_that_kills_its_process_fails_alone(here):
    outcomes = run(work=Copy(trouble=(("b", "die"),)), jobs=2)
    assert statuses(outcomes) == {name: "failed" if name == "b" else "done" for name in NAMES}
    (failed,) = (outcome for outcome in outcomes if outcome.status == "failed")
    assert failed.error.startswith("scans/b.png: the process that worked on it died twice")
    assert "b.tif" not in results()
    assert not (Path("out") / PART).exists()


def test_a_page_whose_process_died_once_is_done_after_all(here):
    work = Copy(trouble=(("b", "die once"),), scratch=str(here))
    assert statuses(run(work=work, jobs=2)) == dict.fromkeys(NAMES, "done")
    assert (here / "died").exists()


@pytest.mark.parametrize(
    ("number", "says"),
    [
        (errno.ENOSPC, "the disk is full; make room"),
        (errno.EACCES, "no permission to write here"),
        (errno.EROFS, "no permission to write here"),
    ],
)
@pytest.mark.parametrize("call", ["replace", "fsync"])
def test_a_disk_that_refuses_fails_pages_and_the_rest_goes_on(
    here, monkeypatch, number, says, call
):
    real = getattr(os, call)
    refused = []

    def refusing(*arguments, **options):
        if len(refused) < 2:
            refused.append(call)
            raise OSError(number, os.strerror(number))
        return real(*arguments, **options)

    with monkeypatch.context() as patched:
        patched.setattr(os, call, refusing)
        outcomes = run()
    failed = [outcome for outcome in outcomes if outcome.status == "failed"]
    assert [outcome.name for outcome in failed] == ["a", "b"]
    for outcome in failed:
        assert outcome.error.startswith(f"scans/{outcome.name}.png: out/{outcome.name}")
        assert says in outcome.error
        assert PART not in outcome.error
    assert sorted(results()) == sorted(name + end for name in NAMES[2:] for end in (".tif", ".txt"))
    assert statuses(run()) == {n: "done" if n in ("a", "b") else "skipped" for n in NAMES}
    assert not (Path("out") / PART).exists()


def test_a_disk_that_fills_up_between_two_files_of_a_page_is_made_good_later(here, monkeypatch):
    run(out="undisturbed")
    real, moves = os.replace, []

    def refusing(source, target):
        if str(target).endswith(".txt") and PART not in str(target):
            moves.append(target)
            raise OSError(errno.EIO, os.strerror(errno.EIO))
        return real(source, target)

    with monkeypatch.context() as patched:
        patched.setattr(os, "replace", refusing)
        assert set(statuses(run()).values()) == {"failed"}
    assert len(moves) == len(NAMES)
    whole = {name: data for name, data in results().items() if not name.startswith(PART)}
    assert whole.items() <= results("undisturbed").items()
    assert {Path(name).name for name in results() if name not in whole} == {"moving"}
    assert statuses(run()) == dict.fromkeys(NAMES, "done")
    assert results() == results("undisturbed")


def test_an_output_folder_that_cannot_be_made_is_one_error(here):
    Path("file").write_text("in the way")
    with pytest.raises(OutputError, match=r"^file: a file stands where a folder is needed"):
        run(out="file")
    with pytest.raises(OutputError, match=r"^file/out: "):
        run(out="file/out")


def test_a_folder_of_a_results_name_fails_its_page_before_anything_is_moved(here):
    (here / "out" / "b.txt").mkdir(parents=True)
    outcomes = run(redo=True)
    (failed,) = (outcome for outcome in outcomes if outcome.status == "failed")
    assert failed.error == ("scans/b.png: out/b.txt: a folder of this name is in the way; move it")
    assert "b.tif" not in results()


def test_a_file_where_a_folder_of_results_goes_fails_those_pages(here):
    (here / "out").mkdir()
    (here / "out" / "sub").write_text("in the way")
    outcomes = run(redo=True)
    assert statuses(outcomes) == {n: "failed" if n == "sub/a" else "done" for n in NAMES}


# ---- once more


def test_a_second_run_does_nothing(here):
    run()
    before = {path: path.stat().st_mtime_ns for path in Path("out").rglob("*")}
    assert statuses(run()) == dict.fromkeys(NAMES, "skipped")
    assert {path: path.stat().st_mtime_ns for path in Path("out").rglob("*")} == before


def test_a_second_run_does_what_changed(here, monkeypatch):
    run()
    page(7).save("scans/a.png")  # another scan
    Path("out/b.tif").unlink()  # a result gone
    Path("out/sub/a.txt").write_text("longer than it was")  # one that is not ours any more
    assert statuses(run()) == {n: "done" if n in ("a", "b", "sub/a") else "skipped" for n in NAMES}
    assert statuses(run(work=Copy(level=100))) == dict.fromkeys(NAMES, "done")
    assert statuses(run(work=Copy(level=100))) == dict.fromkeys(NAMES, "skipped")
    assert statuses(run(work=Copy(level=100), redo=True)) == dict.fromkeys(NAMES, "done")
    monkeypatch.setattr(scanclean.batches.batch, "__version__", "0.0.0")
    assert statuses(run(work=Copy(level=100))) == dict.fromkeys(NAMES, "done")


def test_a_page_that_failed_is_tried_again_and_keeps_what_it_had(here):
    run()
    good = results()
    data = Path("scans/a.png").read_bytes()
    Path("scans/a.png").write_bytes(data[:60])
    assert statuses(run())["a"] == "failed"
    assert results() == good
    assert next(line for line in log() if line["name"] == "a")["outputs"]
    Path("scans/a.png").write_bytes(data)
    assert statuses(run()) == {n: "done" if n == "a" else "skipped" for n in NAMES}


def test_results_of_other_calls_stay_recorded(here):
    run(["scans/a.png"])
    run(["scans/b.png"])
    assert [line["name"] for line in log()] == ["a", "b"]


def test_folders_of_results_are_made_replaced_and_removed_whole(here):
    run(["scans/a.png"], work=Copy(parts=True))
    assert sorted(results()) == ["a.parts/1.txt", "a.tif", "a.txt"]
    Path("out/a.parts/2.txt").write_text("of an earlier time")
    run(["scans/a.png"], work=Copy(parts=True), redo=True)
    assert sorted(results()) == ["a.parts/1.txt", "a.tif", "a.txt"]
    run(["scans/a.png"], work=Copy())  # has all it wants
    assert "a.parts/1.txt" in results()
    run(["scans/a.png"], work=Copy(level=1))  # crops of another threshold would be wrong
    assert sorted(results()) == ["a.tif", "a.txt"]


@pytest.mark.parametrize("jobs", [1, 2])
def test_a_run_that_is_stopped_goes_on_later(here, jobs):
    run(out="undisturbed")
    stop = threading.Event()
    stopped = []
    for outcome in plan_batch(["scans"], "out", Copy(pause=0.05)).run(jobs=jobs, stop=stop):
        stopped.append(outcome.name)
        stop.set()
    assert 1 <= len(stopped) < len(NAMES)
    assert not (Path("out") / PART).exists()
    assert [line["name"] for line in log()] == sorted(stopped)
    again = statuses(run(jobs=jobs))
    assert {name for name, status in again.items() if status == "skipped"} == set(stopped)
    assert results() == results("undisturbed")
    assert without_times() == without_times("undisturbed")


@pytest.mark.parametrize("jobs", [1, 2])
def test_a_caller_that_leaves_gets_its_record(here, jobs):
    outcomes = plan_batch(["scans"], "out", Copy(pause=0.05)).run(jobs=jobs)
    first = next(outcomes)
    outcomes.close()
    assert [line["name"] for line in log()] == [first.name]
    assert set(statuses(run()).values()) == {"done", "skipped"}
    assert not (Path("out") / PART).exists()


def test_an_interrupt_in_the_middle_of_a_page_leaves_whole_files(here):
    with pytest.raises(KeyboardInterrupt):
        run(work=Copy(trouble=(("b", "interrupt"),)))
    assert sorted(results()) == ["a.tif", "a.txt"]
    assert [line["name"] for line in log()] == ["a"]
    assert not (Path("out") / PART).exists()


def test_what_a_run_had_begun_to_move_when_it_was_killed_is_known_as_ours(here, monkeypatch):
    """Between the first file of a page and its line in the record there is a moment."""
    run(out="undisturbed")

    class Killed(BaseException):
        pass

    def kill(self, record):
        raise Killed

    with monkeypatch.context() as patched:
        patched.setattr(RunLog, "put", kill)
        patched.setattr(RunLog, "close", lambda self: None)
        with pytest.raises(Killed):
            run()
    assert set(results()) >= {"a.tif", "a.txt"}
    assert (Path("out") / RUN_LOG).read_bytes() == b""
    assert run(["scans/sub/a.png"], work=Copy(trouble=(("a", "page"),)))[0].status == "failed"
    assert statuses(run()) == dict.fromkeys(NAMES, "done")
    assert results() == results("undisturbed")
    assert not (Path("out") / PART).exists()


def test_two_runs_into_one_folder_at_once_are_refused(here):
    first = plan_batch(["scans"], "out", Copy()).run()
    next(first)
    with pytest.raises(CallError, match=r"^out: another run is writing into this folder"):
        run()
    assert statuses(first) == dict.fromkeys(NAMES[1:], "done")
    assert set(statuses(run()).values()) == {"skipped"}


# ---- names


def refused(says, *arguments, **options):
    before = files(".")
    with pytest.raises(CallError, match=says) as caught:
        plan_batch(*arguments, **options)
    assert files(".") == before
    assert "\n" not in str(caught.value)


def test_scans_that_would_write_the_same_name_are_refused(here):
    page(1).save("scans/a.tif")
    refused(r"scans/a.png and scans/a.tif would both write out/a.tif", ["scans"], "out", Copy())
    refused("both write", ["scans/a.png", "scans/sub/a.png"], "out", Copy())


def test_scans_whose_names_differ_by_case_are_refused(here):
    page(1).save("scans/A.png")
    refused(r"scans/A.png and scans/a.png would both write", ["scans"], "out", Copy())


def test_a_page_of_one_scan_named_as_another_scan_is_refused(here):
    page(1).save("scans/book.p0002.png")
    refused(r"would both write out/book.p0002.tif", ["scans"], "out", Copy())


def test_a_bound_file_named_as_a_page_is_refused(here):
    page(1).save("scans/a.bound.png")
    refused(r"would both write out/a.bound.tif", ["scans"], "out", Copy(), bind="tiff")
    assert plan_batch(["scans"], "out", Copy(), bind="pdf").n_pages == 7


def test_nothing_is_written_over_a_scan(here):
    page(1).save("scans/b.tif")
    refused("over the scan scans/b.tif", ["scans/b.png", "scans/b.tif"], "scans", Copy())
    Path("scans/b.png").unlink()
    refused("over the scan scans/b.tif", ["scans/b.tif"], "scans", Copy())
    refused("is the output folder as well", ["scans"], "scans", Copy())


def test_a_file_that_is_not_ours_is_not_written_over(here):
    Path("out").mkdir()
    Path("out/b.tif").write_bytes(b"the only copy")
    refused(r"out/b.tif is in the way of a result of scans/b.png", ["scans"], "out", Copy())
    refused("in the way", ["scans"], "out", Copy(), recorded=False)
    assert statuses(run(redo=True)) == dict.fromkeys(NAMES, "done")


def test_results_beside_the_scans_are_not_taken_for_scans(here):
    run(["scans/a.png", "scans/b.png"], out="scans")
    batch = plan_batch(["scans"], "out", Copy())
    assert [task.name for task in batch.tasks] == NAMES
    assert any("5 skipped (results of an earlier run)" in note for note in batch.notes)


def test_the_output_folder_inside_the_scans_is_not_walked(here):
    for _ in range(2):
        outcomes = run(out="scans/out")
        assert [outcome.name for outcome in outcomes] == NAMES
    run(out="scans/other")
    assert sorted(results("scans/other")) == sorted(results("scans/out"))


# ---- without a record


def test_without_a_record_nothing_is_resumed(here):
    run(recorded=False)
    assert sorted(results()) == sorted(files())
    refused("in the way", ["scans"], "out", Copy(), recorded=False)
    assert set(statuses(run(recorded=False, redo=True)).values()) == {"done"}


# ---- bound files


@pytest.mark.parametrize(("kind", "suffix"), [("tiff", ".tif"), ("pdf", ".pdf")])
@pytest.mark.parametrize("jobs", [1, 2])
def test_the_pages_of_each_scan_are_bound(here, kind, suffix, jobs):
    outcomes = run(bind=kind, jobs=jobs)
    bound = {name: s for name, s in statuses(outcomes).items() if ".bound" in name}
    names = [name + ".bound" + suffix for name in ("a", "b", "book", "sub/a")]
    assert bound == dict.fromkeys(names, "done")
    line = next(line for line in log() if line["name"] == "book.bound" + suffix)
    assert line["page"] == 0
    (output,) = line["outputs"]
    data = (Path("out") / output["file"]).read_bytes()
    assert output["file"] == "book.bound" + suffix
    assert output["sha256"] == hashlib.sha256(data).hexdigest()
    if kind == "tiff":
        for number in (1, 2, 3):
            one = read_page(f"out/book.p{number:04d}.tif")
            again = read_page("out/book.bound.tif", number)
            assert np.array_equal(one.pixels, again.pixels)
            assert again.n_pages == 3
    else:
        assert data.startswith(b"%PDF-1.4")
        assert b"/Count 3 " in data


def test_a_bound_file_is_made_anew_when_a_page_changed_or_others_are_chosen(here):
    def book(**options):
        found = statuses(run(["scans/book.tif"], bind="tiff", **options))
        return found["book.bound.tif"], read_page("out/book.bound.tif").n_pages

    assert book() == ("done", 3)
    assert book() == ("skipped", 3)
    assert book(pages=PageSelection.parse("1-2")) == ("done", 2)
    assert book() == ("done", 3)
    run(["scans/book.tif"], work=Copy(level=90))  # the pages change, and nobody asks for binding
    before = Path("out/book.bound.tif").read_bytes()
    assert book(work=Copy(level=90)) == ("done", 3)
    assert Path("out/book.bound.tif").read_bytes() != before
    Path("out/book.bound.tif").unlink()
    assert book(work=Copy(level=90)) == ("done", 3)


def test_a_scan_may_be_bound_both_ways(here):
    run(["scans/book.tif"], bind="tiff")
    assert statuses(run(["scans/book.tif"], bind="pdf"))["book.bound.pdf"] == "done"
    assert {"book.bound.tif", "book.bound.pdf"} <= set(results())
    assert statuses(run(["scans/book.tif"], bind="tiff"))["book.bound.tif"] == "skipped"


def test_a_scan_with_a_failed_page_is_not_bound(here):
    outcomes = run(bind="tiff", work=Copy(trouble=(("book.p0002", "page"),)))
    (failed,) = (each for each in outcomes if each.name == "book.bound.tif")
    assert (
        failed.error == "scans/book.tif: not bound, because not all of its pages could be cleaned"
    )
    assert "book.bound.tif" not in results()
    assert statuses(run(bind="tiff"))["book.bound.tif"] == "done"


def test_a_batch_is_a_plain_value(here):
    batch = plan_batch(["scans"], "out", Copy())
    assert isinstance(batch, Batch)
    assert not Path("out").exists()
    with pytest.raises(ValueError, match="jobs must be at least 1, got 0"):
        next(batch.run(jobs=0))

"""What a call's files and folders come to, and which names are refused."""

from __future__ import annotations

import os
from pathlib import Path

import pytest
from hypothesis import given
from hypothesis import strategies as st

from scanclean.batches.sources import (
    Found,
    PageSelection,
    SourceFile,
    check_names,
    find_scans,
    read_listing,
)
from scanclean.errors import CallError

SUFFIXES = (".png", ".tif", ".tiff")


def tree(root: Path, *names: str) -> Path:
    for name in names:
        path = root / name
        path.parent.mkdir(parents=True, exist_ok=True)
        path.write_bytes(b"x")
    return root


def names(found: Found) -> list[str]:
    return [each.name for each in found.files]


@pytest.fixture
def here(tmp_path, monkeypatch):
    monkeypatch.chdir(tmp_path)
    return tmp_path


# ---- finding


def test_a_folder_is_walked_in_sorted_order_and_its_folders_are_kept(here):
    tree(here / "scans", "b.png", "a.tif", "box12/z.png", "box12/deep/y.TIFF", "box2/x.png")
    found = find_scans(["scans"], suffixes=SUFFIXES)
    assert names(found) == ["a", "b", "box12/deep/y", "box12/z", "box2/x"]
    assert [str(each.path) for each in found.files][:2] == ["scans/a.tif", "scans/b.png"]
    assert found.notes == found.problems == ()
    assert found.folders == (Path("scans"),)


def test_arguments_keep_their_order_and_a_file_may_be_called_anything(here):
    tree(here, "z.png", "a.scan", "noending", "sub/.hidden.png")
    found = find_scans(["z.png", "a.scan", "noending", "sub/.hidden.png"], suffixes=SUFFIXES)
    assert names(found) == ["z", "a", "noending", ".hidden"]


def test_the_longest_suffix_is_cut_off(here):
    tree(here, "folio7.ledger.png", "folio7.png", ".png")
    found = find_scans(["."], suffixes=(".png", ".ledger.png"))
    assert names(found) == ["folio7", "folio7"]
    assert names(find_scans([".png"], suffixes=SUFFIXES)) == [".png"]


def test_the_same_scan_given_twice_is_done_once(here):
    tree(here / "scans", "a.png")
    found = find_scans(["scans", "scans/a.png", "scans/../scans/a.png"], suffixes=SUFFIXES)
    assert names(found) == ["a"]


def test_hidden_entries_and_other_files_are_skipped_and_told(here):
    tree(here / "s", "a.png", ".b.png", ".dir/c.png", "n1.txt", "n2.txt", "n3.txt", "n4", "sub/n5")
    found = find_scans(["s"], suffixes=SUFFIXES)
    assert names(found) == ["a"]
    assert found.notes == (
        "s: 2 skipped (hidden): .b.png, .dir",
        "s: 5 skipped (no scans): n1.txt, n2.txt, n3.txt, ...",
    )
    assert find_scans(["s"], suffixes=SUFFIXES, count_others=False).notes == found.notes[:1]


def test_links_that_leave_the_folder_are_not_followed(here):
    tree(here, "s/a.png", "s/sub/b.png", "out/c.png", "s2/d.png")
    os.symlink(here / "out" / "c.png", here / "s" / "file.png")
    os.symlink(here / "out", here / "s" / "folder")
    os.symlink(here / "s2" / "d.png", here / "s" / "neighbour.png")  # s2 begins like s
    os.symlink("a.png", here / "s" / "inside.png")
    os.symlink("..", here / "s" / "sub" / "up")
    os.symlink("gone.png", here / "s" / "nothing.png")
    found = find_scans(["s"], suffixes=SUFFIXES)
    assert names(found) == ["a", "inside", "sub/b"]
    assert found.notes == (
        "s: 3 skipped (links that leave the folder): file.png, folder, neighbour.png",
        "s: 1 skipped (links to folders): sub/up",
    )
    assert found.problems == ("s/nothing.png: a link to nothing",)


def test_a_folder_that_cannot_be_listed_is_a_problem_and_the_others_go_on(here, monkeypatch):
    tree(here / "s", "a.png", "closed/b.png", "open/c.png")
    scandir = os.scandir  # permissions do not stop the superuser, so the refusal is injected

    def refusing(path):
        if Path(path).name == "closed":
            raise PermissionError(13, "Permission denied", str(path))
        return scandir(path)

    monkeypatch.setattr(os, "scandir", refusing)
    found = find_scans(["s"], suffixes=SUFFIXES)
    assert names(found) == ["a", "open/c"]
    assert found.problems == ("s/closed: cannot be listed: Permission denied",)


def test_what_is_no_file_is_a_problem(here):
    os.mkfifo(here / "pipe.png")
    found = find_scans(["pipe.png", "none.png", "a\0b.png"], suffixes=SUFFIXES)
    assert found.files == ()
    assert found.problems[0] == "pipe.png: is no regular file"
    assert found.problems[1] == "none.png: is not there"
    assert len(found.problems) == 3
    tree(here / "s", "a.png")
    os.mkfifo(here / "s" / "pipe.png")
    assert find_scans(["s"], suffixes=SUFFIXES).notes == ("s: 1 skipped (no scans): pipe.png",)


def test_a_folder_without_scans_is_a_problem(here):
    tree(here / "s", "notes.txt")
    (here / "empty").mkdir()
    found = find_scans(["s", "empty"], suffixes=SUFFIXES)
    assert found.problems == (
        "s: nothing in this folder ends with .png or .tif or .tiff",
        "empty: nothing in this folder ends with .png or .tif or .tiff",
    )


def test_the_output_folder_is_not_walked(here):
    tree(here / "s", "a.png", "out/a.tif", "out/deep/b.tif")
    found = find_scans(["s"], suffixes=SUFFIXES, output=Path("s/../s/out"))
    assert names(found) == ["a"]
    assert found.notes == ("s: 1 skipped (the output folder): out",)


def test_a_folder_that_is_the_output_as_well_is_refused(here):
    tree(here / "s", "a.png")
    os.symlink("s", here / "alias")
    with pytest.raises(CallError, match="alias is the output folder as well"):
        find_scans(["alias"], suffixes=SUFFIXES, output=Path("s"))


def test_results_of_an_earlier_run_are_not_walked(here):
    tree(here / "s", "a.png", "old/a.tif", "a.tif")

    def results_in(folder):
        return {"s": {"a.tif"}, "old": {"a.tif"}}.get(folder.name)

    found = find_scans(["s"], suffixes=SUFFIXES, results_in=results_in)
    assert names(found) == ["a"]
    assert found.notes == ("s: 2 skipped (results of an earlier run): a.tif, old",)


def test_names_of_any_bytes_are_found_and_told_on_one_line(here):
    tree(here / "s", "line\nbreak.png", "tab\t.txt")
    Path(os.fsdecode(b"s/\xff\xfe.png")).write_bytes(b"x")
    found = find_scans(["s"], suffixes=SUFFIXES)
    assert len(found.files) == 2
    assert found.notes == (r"s: 1 skipped (no scans): tab\t.txt",)


# ---- lists


@pytest.mark.parametrize(
    ("data", "paths"),
    [
        (b"", []),
        (b"\n\n", []),
        (b"a.png\nb c.png\r\n\nd.png", ["a.png", "b c.png", "d.png"]),
        (b"a\n1.png\0b.png\0", ["a\n1.png", "b.png"]),
        (b" a.png\n", [" a.png"]),
        (b"\xff.png\n", [os.fsdecode(b"\xff.png")]),
    ],
)
def test_a_list_of_paths_is_read(data, paths):
    assert read_listing(data) == paths


# ---- pages


@pytest.mark.parametrize(
    ("text", "of_five"),
    [
        ("1-3,7", [1, 2, 3]),
        ("3", [3]),
        ("3,1,3", [1, 3]),
        ("4-", [4, 5]),
        (" 2 - 3 , 5", [2, 3, 5]),
        ("02-003", [2, 3]),
        ("1-999999999", [1, 2, 3, 4, 5]),
        ("6-", []),
    ],
)
def test_pages_are_chosen(text, of_five):
    assert PageSelection.parse(text).of(5) == of_five


@pytest.mark.parametrize(
    "text", ["", "0", "0-3", "-3", "a", "1,,2", "1-2-3", "1;2", "3-1", "1.5", "1-3,", "²", "9" * 12]
)
def test_pages_written_otherwise_are_refused(text):
    with pytest.raises(ValueError, match=r"pages are written like 1-3,7|run backwards"):
        PageSelection.parse(text)


@given(st.lists(st.tuples(st.integers(1, 40), st.integers(0, 10)), min_size=1), st.integers(1, 45))
def test_pages_are_those_of_the_ranges_as_sets(ranges, n_pages):
    text = ",".join(f"{first}-{first + more}" for first, more in ranges)
    expected = {p for first, more in ranges for p in range(first, first + more + 1) if p <= n_pages}
    assert PageSelection.parse(text).of(n_pages) == sorted(expected)


# ---- names


def check(found: list[str], results: list[tuple[str, str]], output: str = "out", folders=()):
    files = tuple(SourceFile(Path(path), Path(path).stem) for path in found)
    check_names(
        Found(files, (), (), tuple(map(Path, folders))),
        [(Path(path), name) for path, name in results],
        output=Path(output),
    )


def test_results_of_their_own_names_are_accepted(here):
    check(
        ["a.png", "b.png"],
        [("a.png", "a.tif"), ("a.png", "a.glyphs/"), ("b.png", "b.tif"), ("b.png", "sub/a.tif")],
    )


@pytest.mark.parametrize(
    ("one", "other"),
    [
        ("a.tif", "a.tif"),
        ("a.tif", "A.TIF"),
        ("sub/a.tif", "Sub/a.tif"),
        ("stra\u00dfe.tif", "STRASSE.tif"),
        ("caf\u00e9.tif", "cafe\u0301.tif"),
        ("a.glyphs/", "a.glyphs"),
    ],
)
def test_two_scans_that_would_write_one_name_are_refused(here, one, other):
    with pytest.raises(CallError, match=r"1/x.png and 2/x.png would both write .*rename one"):
        check(["1/x.png", "2/x.png"], [("1/x.png", one), ("2/x.png", other)])


def test_a_result_over_a_scan_is_refused(here):
    tree(here, "a.png", "a.tif")
    with pytest.raises(CallError, match=r"a.png would write a.tif over the scan a.tif: choose"):
        check(["a.png", "a.tif"], [("a.png", "a.tif")], output=".")
    with pytest.raises(CallError, match="over the scan"):
        check(["A.TIF"], [("A.TIF", "a.tif")], output=".")
    os.symlink(here, here / "alias")
    with pytest.raises(CallError, match="over the scan"):
        check(["a.tif"], [("a.tif", "a.tif")], output="alias")


def test_a_result_among_the_scans_of_a_folder_is_refused(here):
    tree(here, "box12/box12/a.png")
    with pytest.raises(CallError, match=r"would write box12/a.tif among the scans"):
        check(
            ["box12/box12/a.png"],
            [("box12/box12/a.png", "box12/a.tif")],
            output=".",
            folders=["box12"],
        )


def test_results_in_a_folder_below_the_scans_are_accepted(here):
    tree(here, "s/a.png")
    check(["s/a.png"], [("s/a.png", "a.tif")], output="s/out", folders=["s"])


def test_a_result_below_one_that_is_replaced_whole_is_refused(here):
    with pytest.raises(CallError, match=r"x.png would write out/x.glyphs, where results"):
        check(
            ["x.png", "x.glyphs/y.png"],
            [("x.png", "x.glyphs/"), ("x.glyphs/y.png", "x.glyphs/y.tif")],
        )

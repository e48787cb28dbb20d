"""The command line as users run it: in a process of its own, on good scans and on bad ones."""

from __future__ import annotations

import contextlib
import hashlib
import io
import json
import os
import pty
import re
import shutil
import signal
import struct
import subprocess
import sys
import time
import zlib
from pathlib import Path

import click
import jsonschema
import numpy as np
import pytest
from PIL import Image, ImageDraw, ImageFont

from scanclean import __version__
from scanclean.cli import cli
from scanclean.layout import layout_schema
from scanclean.ledger import CLASSES, PALETTE

ROOT = Path(__file__).parent.parent
FIXTURES = ROOT / "fixtures"
MAIN = "from scanclean.cli import main; main()"
PART = ".scanclean-part"
SUFFIXES = (".tif", ".ledger.png", ".layout.json")


def scanclean(*arguments, code=MAIN, stdin=b"", timeout=120, **options):
    """Run the command line; `code` can prepare trouble before it calls main."""
    done = subprocess.run(
        [sys.executable, "-W", "error", "-c", code, *map(str, arguments)],
        input=stdin,
        capture_output=True,
        timeout=timeout,
        check=False,
        **options,
    )
    done.out, done.err = done.stdout.decode(), done.stderr.decode()
    assert "Traceback" not in done.out + done.err, done.err
    return done


def note(*lines: str, size=(420, 260), seed=3, ink=40) -> Image.Image:
    """A small page with some words on it, in tones of grey."""
    image = Image.new("L", size, 235)
    draw = ImageDraw.Draw(image)
    font = ImageFont.load_default(26)
    for i, line in enumerate(lines or ("Saltmarrow Harbour", "cargo of salt: 12 tons")):
        draw.text((30, 30 + 45 * i), line, fill=ink, font=font)
    grain = np.random.default_rng(seed).normal(0, 3, (size[1], size[0]))
    return Image.fromarray(np.clip(np.asarray(image) + grain, 0, 255).astype(np.uint8))


def encoded(image: Image.Image, kind="PNG", **options) -> bytes:
    buffer = io.BytesIO()
    image.save(buffer, kind, **options)
    return buffer.getvalue()


@pytest.fixture(scope="module", autouse=True)
def _package_found_from_everywhere():
    with pytest.MonkeyPatch.context() as patched:
        patched.setenv("PYTHONPATH", str(ROOT), prepend=os.pathsep)
        yield


@pytest.fixture
def here(tmp_path, monkeypatch):
    monkeypatch.chdir(tmp_path)
    return tmp_path


@pytest.fixture
def box12(here):
    """Three scans of one page, one of them in a folder below, and one scan of two pages."""
    folder = here / "box12"
    (folder / "sub").mkdir(parents=True)
    note().save(folder / "folio1.png", dpi=(300, 300))
    note("Tide table", "low water 4.15").save(folder / "folio2.jpg", dpi=(300, 300), quality=95)
    note("Pilot's licence", "No. 88").save(folder / "sub" / "folio1.png", dpi=(300, 300))
    note("Book of the", "harbour, i").save(
        folder / "book.tif",
        dpi=(200, 200),
        save_all=True,
        append_images=[note("Book of the", "harbour, ii")],
    )
    return folder


NAMES = ["book.p0001", "book.p0002", "folio1", "folio2", "sub/folio1"]


def files(folder="out") -> dict[str, bytes]:
    root = Path(folder)
    return {
        str(path.relative_to(root)): path.read_bytes()
        for path in sorted(root.rglob("*"))
        if path.is_file()
    }


def results(folder="out") -> dict[str, bytes]:
    return {name: data for name, data in files(folder).items() if name != "run.jsonl"}


def wanted(names) -> list[str]:
    return sorted(name + suffix for name in names for suffix in SUFFIXES)


def log(folder="out") -> list[dict]:
    return [json.loads(line) for line in (Path(folder) / "run.jsonl").read_text().splitlines()]


def ink_of(path) -> np.ndarray:
    """The ink of a bitonal TIFF: black, as its WhiteIsZero pixels are shown."""
    with Image.open(path) as image:
        assert image.mode == "1"
        return ~np.asarray(image)


def check_page(folder, name) -> dict:
    """A page's three files are whole and keep the ledger's laws; returns the layout."""
    stem = f"{folder}/{name}"
    with Image.open(stem + ".tif") as image:
        assert image.format == "TIFF"
        assert image.info["compression"] == "group4"
        # TIFF 6.0: 262 PhotometricInterpretation 0 WhiteIsZero, 258 BitsPerSample 1
        assert image.tag_v2[262] == 0
        assert image.tag_v2[258] == (1,)
        size = image.size
    with Image.open(stem + ".ledger.png") as image:
        assert (image.format, image.mode, image.size) == ("PNG", "P", size)
        assert image.getpalette() == [value for colour in PALETTE for value in colour]
        ledger = np.asarray(image)
    assert np.array_equal(
        ink_of(stem + ".tif"), np.isin(ledger, [CLASSES["ink"], CLASSES["mended"]])
    )
    layout = json.loads(Path(stem + ".layout.json").read_text("utf-8"))
    jsonschema.validate(layout, layout_schema(), cls=jsonschema.Draft202012Validator)
    assert (layout["page"]["width"], layout["page"]["height"]) == size
    return layout


def check_log(folder="out") -> None:
    """Every recorded file is there with its hash, and nothing else is."""
    recorded = {"run.jsonl"}
    for line in log(folder):
        for output in line["outputs"]:
            path = Path(folder) / output["file"]
            if output["file"].endswith("/"):
                crops = sorted(path.iterdir())
                hashes = [hashlib.sha256(p.read_bytes()).hexdigest() for p in crops]
                data = "".join(
                    f"{sha256}  {p.name}\n" for sha256, p in zip(hashes, crops, strict=True)
                ).encode()
                recorded.update(str(p.relative_to(folder)) for p in crops)
            else:
                data = path.read_bytes()
                assert len(data) == output["bytes"]
                recorded.add(output["file"])
            assert hashlib.sha256(data).hexdigest() == output["sha256"], output["file"]
    assert sorted(files(folder)) == sorted(recorded)


# ---- the job


def test_a_folder_of_scans_becomes_what_was_promised(box12):
    done = scanclean("clean", "box12", "-o", "out")
    assert (done.returncode, done.out) == (0, "")
    assert sorted(files()) == sorted([*wanted(NAMES), "run.jsonl"])
    for name in NAMES:
        layout = check_page("out", name)
        assert layout["source"]["dpi"] == ([200, 200] if "book" in name else [300, 300])
        assert layout["source"]["page"] == (int(name[-1]) if "book" in name else 1)
        assert len(layout["glyphs"]) >= 8
    source = (box12 / "folio1.png").read_bytes()
    assert check_page("out", "folio1")["source"] == {
        "file": "folio1.png",
        "page": 1,
        "sha256": hashlib.sha256(source).hexdigest(),
        "width": 420,
        "height": 260,
        "dpi": [300.0, 300.0],
    }
    with Image.open("out/book.p0001.tif") as image:
        assert image.info["dpi"] == (200, 200)
        assert image.tag_v2[296] == 2  # TIFF 6.0: 296 ResolutionUnit, 2 is the inch
    check_log()
    assert [line["name"] for line in log()] == NAMES
    assert done.err.splitlines()[-1].startswith("scanclean: pages: 5 done, 0 failed in ")
    assert "\r" not in done.err


def test_the_project_s_own_scans_are_cleaned_and_given_back(here):
    done = scanclean("clean", FIXTURES / "harbour-book.tif", FIXTURES / "tide-table.png", "-o", "o")
    assert done.returncode == 0, done.err
    names = ["harbour-book.p0001", "harbour-book.p0002", "harbour-book.p0003", "tide-table"]
    for name in names:
        check_page("o", name)
    ledgers = [f"o/{name}.ledger.png" for name in names]
    done = scanclean("restore", *ledgers, "-o", "back")
    assert (done.returncode, done.out) == (0, "")
    assert sorted(files("back")) == [f"{name}.thresholded.tif" for name in names]
    taken = [CLASSES[name] for name in ("ink", "speck", "rule", "edge", "shade")]
    for number, name in enumerate(names, start=1):
        ledger = np.asarray(Image.open(f"o/{name}.ledger.png"))
        thresholded = ink_of(f"back/{name}.thresholded.tif")
        assert np.array_equal(thresholded, np.isin(ledger, taken))
        if "book" in name:  # a bitonal scan is its own threshold
            with Image.open(FIXTURES / "harbour-book.tif") as image:
                image.seek(number - 1)
                assert np.array_equal(thresholded, ~np.asarray(image))


def test_restore_walks_a_folder_and_takes_a_list(box12):
    assert scanclean("clean", "box12", "-o", "out", "--quiet").returncode == 0
    done = scanclean("restore", "out", "-o", "back")
    assert done.returncode == 0
    assert sorted(files("back")) == sorted(f"{name}.thresholded.tif" for name in NAMES)
    done = scanclean("restore", "-", "-o", "out", stdin=b"out/folio1.ledger.png\n")
    assert done.returncode == 0
    assert (
        Path("out/folio1.thresholded.tif").read_bytes() == files("back")["folio1.thresholded.tif"]
    )


def test_the_bytes_are_the_same_whatever_the_number_of_jobs(box12):
    options = ("--glyphs", "--bind", "pdf", "--quiet")
    for folder, jobs in (("one", 1), ("two", 2), ("again", 2)):
        done = scanclean("clean", "box12", "-o", folder, "--jobs", jobs, *options)
        assert (done.returncode, done.err) == (0, "")
        check_log(folder)
    assert results("one") == results("two") == results("again")
    one, two = ([{**line, "seconds": 0} for line in log(folder)] for folder in ("one", "two"))
    assert one == two
    assert len(results("one")) > 3 * len(NAMES) + 4 + 8 * len(NAMES)


def test_glyphs_are_cut_out_one_by_one(box12):
    assert scanclean("clean", "box12/folio1.png", "-o", "out", "--glyphs").returncode == 0
    glyphs = check_page("out", "folio1")["glyphs"]
    crops = sorted(Path("out/folio1.glyphs").iterdir())
    assert [path.name for path in crops] == [f"{glyph['id']:05d}.png" for glyph in glyphs]
    for path, glyph in zip(crops, glyphs, strict=True):
        left, top, right, bottom = glyph["box"]
        with Image.open(path) as image:
            assert image.size == (right - left, bottom - top)
            assert int((np.asarray(image.convert("L")) < 128).sum()) == glyph["area"]
    check_log()


@pytest.mark.parametrize(("kind", "suffix"), [("tiff", "tif"), ("pdf", "pdf")])
def test_the_pages_of_a_scan_are_bound(box12, kind, suffix):
    done = scanclean("clean", "box12/book.tif", "-o", "out", "--bind", kind)
    assert done.returncode == 0
    assert sorted(files()) == sorted([*wanted(NAMES[:2]), f"book.bound.{suffix}", "run.jsonl"])
    if kind == "tiff":
        with Image.open("out/book.bound.tif") as image:
            assert image.n_frames == 2
            for page in (1, 2):
                image.seek(page - 1)
                assert np.array_equal(~np.asarray(image), ink_of(f"out/book.p000{page}.tif"))
    check_log()


def test_pages_are_chosen(box12):
    assert scanclean("clean", "box12/book.tif", "-o", "out", "--pages", "2,5-9").returncode == 0
    assert sorted(results()) == wanted(["book.p0002"])


def test_paths_come_from_standard_input(box12):
    listing = b"box12/folio2.jpg\nbox12/sub\nbox12/none.png\n"
    done = scanclean("clean", "-", "-o", "out", stdin=listing)
    assert done.returncode == 1
    assert "scanclean: box12/none.png: is not there" in done.err.splitlines()
    assert sorted(results()) == wanted(["folio1", "folio2"])


def test_a_resolution_that_is_not_stated_is_given_or_estimated(here):
    note(size=(700, 400)).save("scan.png")
    done = scanclean("clean", "scan.png", "-o", "given", "--dpi", "204,98")
    assert (done.returncode, "estimated" in done.err) == (0, False)
    layout = check_page("given", "scan")
    assert layout["source"]["dpi"] == [204.0, 98.0]
    assert "dpi-estimated" not in layout["flags"]
    with Image.open("given/scan.tif") as image:
        assert image.info["dpi"] == (204, 98)
    done = scanclean("clean", "scan.png", "-o", "estimated")
    assert done.returncode == 0
    assert re.search(
        r"^scanclean: scan.png: no resolution in the file .*, and no --dpi: [0-9.]+ dpi estimated$",
        done.err,
        re.MULTILINE,
    )
    assert "dpi-estimated" in check_page("estimated", "scan")["flags"]
    assert log("estimated")[0]["flags"].count("dpi-estimated") == 1
    note().save("scan.png", dpi=(300, 300))  # what the file states goes first
    scanclean("clean", "scan.png", "-o", "given", "--dpi", "204,98")
    assert check_page("given", "scan")["source"]["dpi"] == [300.0, 300.0]


def test_a_page_is_turned_upright_and_the_layout_leads_back_to_the_scan(here):
    lines = ("Saltmarrow Harbour Office", "cargo of salt and of herring", "twelve tons, dry")
    page = note(*lines, size=(900, 500))
    page.rotate(-3, expand=True, fillcolor=235, resample=Image.Resampling.BICUBIC).save(
        "scan.png", dpi=(300, 300)
    )
    for name, options in (("plain", ()), ("upright", ("--straighten",))):
        assert scanclean("clean", "scan.png", "-o", name, *options).returncode == 0
    plain, upright = check_page("plain", "scan"), check_page("upright", "scan")
    # turned clockwise by 3 degrees the lines fall to the right
    assert plain["page"]["skew_degrees"] == pytest.approx(3, abs=0.3)
    assert plain["page"]["to_source"] == [[1, 0, 0], [0, 1, 0]]
    assert upright["page"]["skew_degrees"] == pytest.approx(3, abs=0.3)
    (left, top), (right, end) = upright["lines"][0]["baseline"]
    assert abs(end - top) < 0.005 * (right - left)
    to_source = np.array(upright["page"]["to_source"])
    scan = to_source @ np.array([[left, right], [top, end], [1, 1]])
    slope = (scan[1, 1] - scan[1, 0]) / (scan[0, 1] - scan[0, 0])
    assert np.degrees(np.arctan(slope)) == pytest.approx(3, abs=0.3)


def test_a_second_run_does_only_what_is_missing_and_replace_does_all(box12):
    call = ("clean", "box12", "-o", "out")
    scanclean(*call)
    before = results()
    done = scanclean(*call)
    assert done.returncode == 0
    assert "0 done, 5 unchanged since an earlier run, 0 failed" in done.err
    Path("out/folio1.ledger.png").unlink()
    assert "1 done, 4 unchanged" in scanclean(*call).err
    assert "5 done, 0 failed" in scanclean(*call, "--replace").err
    assert results() == before
    Path("mine.toml").write_text("[specks]\nenabled = false\n")
    assert "5 done, 0 failed" in scanclean(*call, "--recipe", "mine.toml").err
    check_log()


def test_a_recipe_is_obeyed(here):
    page = np.asarray(note(size=(600, 300))).copy()
    page[250:252, 500:502] = 20  # a speck, far from any line
    Image.fromarray(page).save("scan.png", dpi=(300, 300))
    Path("keep.toml").write_text("[specks]\nenabled = false\n")
    Path("step.toml").write_text(
        "[[step]]\noperation = 'opening'\nelement = 'disk'\nradius = '2 mm'\n"
        "after = 'threshold'\nclaim = 'shade'\n"
    )
    for name in ("plain", "keep", "step"):
        recipe = () if name == "plain" else ("--recipe", f"{name}.toml")
        done = scanclean("clean", "scan.png", "-o", name, *recipe)
        assert done.returncode == 0, done.err
        check_page(name, "scan")
    ledgers = {
        name: np.asarray(Image.open(f"{name}/scan.ledger.png"))
        for name in ("plain", "keep", "step")
    }
    assert ledgers["plain"][250, 500] == CLASSES["speck"]
    assert ledgers["keep"][250, 500] == CLASSES["ink"]
    # nothing on the page is as thick as 4 mm: all of it goes, under the step's own claim
    assert set(np.unique(ledgers["step"])) == {CLASSES["paper"], CLASSES["shade"]}
    thresholded = ledgers["plain"] != CLASSES["paper"]
    assert np.array_equal(ledgers["step"] != CLASSES["paper"], thresholded)


# ---- recipe


def test_the_recipe_in_force_is_printed_and_can_be_used(box12):
    done = scanclean("recipe")
    assert (done.returncode, done.err) == (0, "")
    Path("whole.toml").write_text(done.out)
    assert scanclean("recipe", "--recipe", "whole.toml").out == done.out
    Path("mine.toml").write_text('[edges]\nmax_depth = "12 mm"\n')
    mine = scanclean("recipe", "--recipe", "mine.toml").out
    changed = set(mine.splitlines()) - set(done.out.splitlines())
    assert 'max_depth = "12 mm"' in changed
    assert len(changed) == 2  # the line, and its comment with the default
    scanclean("clean", "box12/folio1.png", "-o", "out")
    again = scanclean("clean", "box12/folio1.png", "-o", "out", "--recipe", "whole.toml")
    assert "0 done, 1 unchanged" in again.err


# ---- bad scans


def chunk(kind: bytes, data: bytes) -> bytes:
    return struct.pack(">I", len(data)) + kind + data + struct.pack(">I", zlib.crc32(kind + data))


def bomb(width: int, height: int) -> bytes:
    """A PNG of few bytes that claims to be of this size; PNG (W3C 2003), 11.2.2 IHDR."""
    header = struct.pack(">IIBBBBB", width, height, 1, 0, 0, 0, 0)
    data = zlib.compress(bytes(10_000_000), 9)
    signature = b"\x89PNG\r\n\x1a\n"
    return signature + chunk(b"IHDR", header) + chunk(b"IDAT", data) + chunk(b"IEND", b"")


def density(dots: int) -> bytes:
    """The page as a PNG that states so many dots a metre; 0 is none."""
    plain = encoded(note())
    return plain[:33] + chunk(b"pHYs", struct.pack(">IIB", dots, dots, 1)) + plain[33:]


RNG = np.random.default_rng(2024)
GOOD = encoded(note(), dpi=(300, 300))
BAD = {
    "empty.png": b"",
    "random.png": RNG.bytes(3000),
    "random.tif": b"II*\0" + RNG.bytes(3000),
    "random.jpg": b"\xff\xd8\xff\xe0" + RNG.bytes(3000),
    "zeros.tif": bytes(4096),
    "cut.png": GOOD[: len(GOOD) // 2],
    "cut-head.png": GOOD[:20],
    "cut.tif": encoded(note(), "TIFF", compression="tiff_lzw")[:20_000],
    "cut.jpg": encoded(note(), "JPEG")[:300],
    "cut.jp2": encoded(note(), "JPEG2000")[:2000],
    "cut.webp": encoded(note(), "WEBP", lossless=True)[:2000],
    "text.png": b"Captain's log, all well\n" * 20,
    "bomb.png": bomb(60_000, 60_000),
    "bomb-thin.png": bomb(2_000_000_000, 1),
}
ODD = {  # strange, but scans
    "jpeg.png": encoded(note(), "JPEG", dpi=(300, 300)),
    "png.tif": GOOD,
    "one-pixel.png": encoded(Image.new("L", (1, 1), 0), dpi=(300, 300)),
    "one-row.png": encoded(Image.new("L", (500, 1), 255), dpi=(300, 300)),
    "one-column.png": encoded(Image.new("1", (1, 500), 0), dpi=(300, 300)),
    "no-dpi.png": density(0),
    "absurd-dpi.png": density(2**31 - 1),
    "white.png": encoded(Image.new("L", (400, 300), 255), dpi=(300, 300)),
    "white-no-dpi.png": encoded(Image.new("L", (400, 300), 255)),
    "black.png": encoded(Image.new("L", (400, 300), 0), dpi=(300, 300)),
    "black-bitonal.png": encoded(Image.new("1", (400, 300), 0), dpi=(300, 300)),
    "noise.png": encoded(
        Image.fromarray(RNG.integers(0, 256, (300, 400), np.uint8)), dpi=(300, 300)
    ),
    "noise-bitonal.png": encoded(Image.fromarray(RNG.random((300, 400)) < 0.5), dpi=(300, 300)),
    "clear.png": encoded(Image.new("RGBA", (400, 300), (0, 0, 0, 0)), dpi=(300, 300)),
}


@pytest.fixture(scope="module")
def hospital(tmp_path_factory):
    """Every bad and every odd scan in one folder, cleaned by one call."""
    home = tmp_path_factory.mktemp("hospital")
    (home / "scans").mkdir()
    for name, data in {**BAD, **ODD, "good.png": GOOD}.items():
        stem, suffix = name.split(".")
        (home / "scans" / f"{stem}-{suffix}.{suffix}").write_bytes(data)
    before = files(home / "scans")
    done = scanclean("clean", "scans", "-o", "out", "--jobs", 2, cwd=home, timeout=300)
    assert files(home / "scans") == before
    return home, done


def stem_of(name: str) -> str:
    return name.replace(".", "-")


@pytest.mark.parametrize("name", BAD)
def test_a_bad_scan_fails_in_one_clear_line(hospital, name):
    home, done = hospital
    shown = f"scanclean: scans/{stem_of(name)}.{name.split('.')[1]}: "
    lines = [line for line in done.err.splitlines() if line.startswith(shown)]
    assert len(lines) == 1, done.err
    said = lines[0].removeprefix(shown)
    assert 20 < len(said) < 250
    assert re.search(r"scan|copy|convert|save|cut", said), f"no remedy: {said}"
    assert not [path for path in files(home / "out") if path.startswith(stem_of(name) + ".")]
    (line,) = (line for line in log(home / "out") if line["name"] == stem_of(name))
    assert (line["status"], line["outputs"]) == ("failed", [])
    assert lines[0] == f"scanclean: {line['error']}"


@pytest.mark.parametrize("name", [*ODD, "good.png"])
def test_an_odd_scan_is_cleaned(hospital, name):
    home, done = hospital
    layout = check_page(home / "out", stem_of(name))
    if "white" in name or "clear" in name:
        assert not ink_of(home / "out" / f"{stem_of(name)}.tif").any()
        assert "blank" in layout["flags"]
        assert f"{stem_of(name)}.png: no ink found" in done.err
    if "no-dpi" in name or "absurd" in name:
        assert "dpi-estimated" in layout["flags"]
        assert f"{stem_of(name)}.png: no resolution in the file" in done.err
    (line,) = (line for line in log(home / "out") if line["name"] == stem_of(name))
    assert line["status"] == "done"


def test_bad_scans_make_the_status_and_leave_nothing_half_written(hospital):
    home, done = hospital
    assert done.returncode == 1
    assert done.err.splitlines()[-1].startswith(
        f"scanclean: pages: {len(ODD) + 1} done, {len(BAD)} failed in "
    )
    check_log(home / "out")
    assert not list((home / "out").rglob(".*"))


def damaged(data: bytes, seed: int) -> bytes:
    """Cut off, or with some bytes changed."""
    rng = np.random.default_rng(seed)
    if seed % 2:
        return data[: rng.integers(8, len(data))]
    array = np.frombuffer(data, np.uint8).copy()
    array[rng.integers(0, len(array), 6)] ^= rng.integers(1, 256, 6, np.uint8)
    return array.tobytes()


def test_damaged_scans_of_every_format_end_in_a_result_or_a_line(here):
    formats = {
        "png": encoded(note(), dpi=(300, 300)),
        "tif": encoded(note(), "TIFF", compression="tiff_deflate", dpi=(300, 300)),
        "jpg": encoded(note(), "JPEG", dpi=(300, 300)),
        "jp2": encoded(note(), "JPEG2000"),
        "webp": encoded(note(), "WEBP"),
    }
    Path("scans").mkdir()
    for suffix, data in formats.items():
        for seed in range(8):
            Path(f"scans/{suffix}{seed}.{suffix}").write_bytes(damaged(data, seed))
    done = scanclean("clean", "scans", "-o", "out", "--jobs", 2, timeout=300)
    check_log()
    lines = log()
    assert len(lines) == 40
    errors = {line["error"] for line in lines if line["status"] == "failed"}
    assert {f"scanclean: {error}" for error in errors} <= set(done.err.splitlines())
    assert done.returncode == 1
    assert len(errors) >= 10


# ---- bad folders, bad disks


def test_a_folder_without_scans_is_told(here):
    (here / "empty").mkdir()
    (here / "notes").mkdir()
    Path("notes/a.txt").write_text("x")
    done = scanclean("clean", "empty", "notes", "-o", "out")
    assert done.returncode == 1
    lines = [line for line in done.err.splitlines() if "nothing in this folder ends with" in line]
    assert [line.split(":")[1].strip() for line in lines] == ["empty", "notes"]
    assert not Path("out").exists()


def test_hidden_entries_and_leaving_links_are_told(box12):
    Path("box12/.folio3.png").write_bytes(GOOD)
    os.symlink("/etc", "box12/etc")
    done = scanclean("clean", "box12", "-o", "out")
    assert done.returncode == 0
    assert "scanclean: box12: 1 skipped (hidden): .folio3.png" in done.err
    assert "scanclean: box12: 1 skipped (links that leave the folder): etc" in done.err
    assert sorted(results()) == wanted(NAMES)


FULL_DISK = """
import errno, os, sys
from pathlib import Path
real = os.fsync
def fsync(number):
    if {name!r} in os.readlink(f"/proc/self/fd/{{number}}") or {after} < len(done):
        raise OSError({error}, os.strerror({error}))
    done.append(number)
    return real(number)
done = []
os.fsync = fsync
"""


@pytest.mark.parametrize(
    ("error", "says"),
    [
        ("errno.ENOSPC", "the disk is full; make room or choose another folder"),
        ("errno.EACCES", "no permission to write here; change the access rights"),
    ],
)
def test_a_disk_that_is_full_or_closed_fails_pages_and_leaves_nothing_half_written(
    box12, error, says
):
    trouble = FULL_DISK.format(name="nothing", after=7, error=error) + MAIN
    done = scanclean("clean", "box12", "-o", "out", code=trouble)
    assert done.returncode == 1
    failed = [line for line in done.err.splitlines() if says in line]
    assert [line.split(":")[1].strip() for line in failed] == [
        "box12/folio1.png",
        "box12/folio2.jpg",
        "box12/sub/folio1.png",
    ]
    assert PART not in done.err
    assert sorted(results()) == wanted(NAMES[:2])
    for name in NAMES[:2]:
        check_page("out", name)
    done = scanclean("clean", "box12", "-o", "out")
    assert done.returncode == 0
    assert "3 done, 2 unchanged" in done.err
    check_log()


def test_an_output_folder_that_cannot_be_made_is_one_line(box12):
    Path("file").write_text("in the way")
    done = scanclean("clean", "box12", "-o", "file/out")
    assert done.returncode == 1
    assert done.err.count("\n") == 1
    assert done.err.startswith("scanclean: file/out: ")
    refuse = (
        "import os, pathlib\ndef mkdir(*a, **k): raise PermissionError(13, 'Permission denied')\n"
    )
    done = scanclean(
        "clean", "box12", "-o", "o", code=refuse + "pathlib.Path.mkdir = mkdir\n" + MAIN
    )
    assert done.returncode == 1
    assert done.err == (
        "scanclean: o: no permission to write here; "
        "change the access rights or choose another folder\n"
    )


def test_a_record_that_is_no_file_is_one_line(box12):
    Path("out").mkdir()
    Path("out/run.jsonl").symlink_to("/dev/zero")
    done = scanclean("clean", "box12", "-o", "out")
    assert done.returncode == 1
    assert done.err == "scanclean: out/run.jsonl: is no regular file; move it away\n"


def test_a_program_error_is_one_line_that_says_where(box12):
    trouble = (
        "import scanclean.batches.work\n"
        "def broken(*a, **k):\n    raise KeyError('first\\nsecond')\n"
        "scanclean.batches.work.clean_page = broken\n"
    )
    done = scanclean("clean", "box12/folio1.png", "-o", "out", code=trouble + MAIN)
    assert done.returncode == 1
    line = done.err.splitlines()[0]
    assert line.startswith("scanclean: box12/folio1.png: an error of scanclean itself, please")
    assert "KeyError" in line
    trouble = "import scanclean.recipe\nscanclean.recipe.to_toml = None\n"
    done = scanclean("recipe", code=trouble + MAIN)
    assert done.returncode == 1
    assert done.err.count("\n") == 1
    assert done.err.startswith("scanclean: an error of scanclean itself, please report it: ")


# ---- wrong calls


WRONG = {
    "no command": ((), "Usage: scanclean"),
    "unknown command": (("polish", "box12"), "No such command 'polish'"),
    "no scan": (("clean", "-o", "out"), "Missing argument 'SCAN...'"),
    "no output": (("clean", "box12"), "Missing option '-o' / '--output'"),
    "no such scan": (
        ("clean", "box12", "none.png", "-o", "out"),
        "none.png: there is no such file",
    ),
    "no such ledger": (("restore", "none.png", "-o", "out"), "none.png: there is no such file"),
    "no such recipe": (("clean", "box12", "-o", "out", "--recipe", "none.toml"), "does not exist"),
    "recipe is a folder": (("clean", "box12", "-o", "out", "--recipe", "box12"), "is a directory"),
    "recipe is no recipe": (
        ("clean", "box12", "-o", "out", "--recipe", "box12/folio1.png"),
        "box12/folio1.png, line 1: a recipe is a text in UTF-8",
    ),
    "output is a file": (("clean", "box12", "-o", "box12/folio1.png"), "is a file"),
    "unknown option": (("clean", "box12", "-o", "out", "--polish"), "No such option"),
    "dpi 0": (("clean", "box12", "-o", "out", "--dpi", "0"), "from 20 to 10000; got '0'"),
    "dpi negative": (("clean", "box12", "-o", "out", "--dpi", "-300"), "from 20 to 10000"),
    "dpi absurd": (("clean", "box12", "-o", "out", "--dpi", "1e9"), "from 20 to 10000"),
    "dpi nan": (("clean", "box12", "-o", "out", "--dpi", "nan"), "from 20 to 10000"),
    "dpi of three": (("clean", "box12", "-o", "out", "--dpi", "1,2,3"), "from 20 to 10000"),
    "dpi a word": (("clean", "box12", "-o", "out", "--dpi", "high"), "got 'high'"),
    "pages backwards": (("clean", "box12", "-o", "out", "--pages", "3-1"), "run backwards"),
    "pages from 0": (("clean", "box12", "-o", "out", "--pages", "0"), "written like 1-3,7"),
    "jobs 0": (("clean", "box12", "-o", "out", "--jobs", "0"), "Invalid value for '--jobs'"),
    "bind": (("clean", "box12", "-o", "out", "--bind", "book"), "'book' is not one of"),
    "two lists": (("clean", "-", "-", "-o", "out"), "standard input only once"),
    "onto itself": (("clean", "box12", "-o", "box12"), "is the output folder as well"),
    "over a scan": (("clean", "box12/book.tif", "-o", "box12", "--pages", "1"), ""),
    "same name": (
        ("clean", "box12/folio1.png", "box12/sub/folio1.png", "-o", "out"),
        "would both write out/folio1.tif",
    ),
}


@pytest.mark.parametrize("case", WRONG)
def test_a_wrong_call_is_refused_and_nothing_is_done(box12, case):
    arguments, says = WRONG[case]
    if case == "over a scan":  # box12/one.tif is a scan, and what becomes of one.png as well
        Path("box12/one.png").write_bytes(GOOD)
        Path("box12/one.tif").write_bytes(encoded(note(), "TIFF"))
        arguments = ("clean", "box12/one.png", "box12/one.tif", "-o", "box12")
        says = "over the scan box12/one.tif: choose another output folder"
    before = files(".")
    done = scanclean(*arguments)
    assert done.returncode == 2
    assert done.out == ""
    assert says in done.err
    last = done.err.splitlines()[-1]
    if case != "no command":
        assert last.startswith(("Error: ", "scanclean: "))
    assert files(".") == before
    assert not Path("out").exists()


def test_a_wrong_recipe_is_refused_with_line_key_and_what_is_allowed(box12):
    Path("mine.toml").write_text('# mine\n[threshold]\nmethod = "sauvolla"\n')
    done = scanclean("clean", "box12", "-o", "out", "--recipe", "mine.toml")
    assert done.returncode == 2
    assert done.err.startswith(
        'scanclean: mine.toml, line 3: [threshold] method must be one of "adaptive", "sauvola"'
    )
    assert done.err.count("\n") == 1
    assert not Path("out").exists()


def test_a_ledger_that_is_none_is_told(box12):
    Path("bad.ledger.png").write_bytes(b"")
    Path("page.ledger.png").write_bytes(GOOD)
    cut = encoded(Image.new("P", (50, 50)))
    Path("other.ledger.png").write_bytes(cut)
    scanclean("clean", "box12/folio1.png", "-o", "out", "--quiet")
    whole = Path("out/folio1.ledger.png").read_bytes()
    Path("cut.ledger.png").write_bytes(whole[: len(whole) // 2])
    done = scanclean("restore", ".", "-o", "back")
    assert done.returncode == 1
    lines = done.err.splitlines()
    for name in ("bad", "page", "other", "cut"):
        assert sum(line.startswith(f"scanclean: {name}.ledger.png: ") for line in lines) == 1
    assert sorted(files("back")) == ["out/folio1.thresholded.tif"]


# ---- stopped on the way


SLOW = """
import time, scanclean.batches.work
real = scanclean.batches.work.clean_page
def slow(*a, **k):
    time.sleep(0.2)
    return real(*a, **k)
scanclean.batches.work.clean_page = slow
"""


@pytest.fixture(scope="module")
def finished(tmp_path_factory):
    """Eight scans, and what becomes of them in a run that nothing disturbs."""
    home = tmp_path_factory.mktemp("finished")
    (home / "scans").mkdir()
    for i in range(8):
        note(f"Folio {i}", seed=i, size=(220, 120)).save(home / f"scans/{i}.png", dpi=(300, 300))
    done = scanclean("clean", "scans", "-o", "undisturbed", "--jobs", 2, cwd=home)
    assert done.returncode == 0
    return home


@pytest.fixture
def many(finished, here):
    """The same, in a folder of its own."""
    shutil.copytree(finished, here, dirs_exist_ok=True)
    return here


@contextlib.contextmanager
def running(*arguments, code=MAIN):
    """A call in a process group of its own, so that nothing of it can get away."""
    process = subprocess.Popen(
        [sys.executable, "-c", code, *map(str, arguments)],
        stdout=subprocess.DEVNULL,
        stderr=subprocess.PIPE,
        start_new_session=True,
    )
    try:
        yield process
    finally:
        with contextlib.suppress(ProcessLookupError):
            os.killpg(process.pid, signal.SIGKILL)
        process.communicate()


def wait_until(condition, seconds=60):
    end = time.monotonic() + seconds
    while not condition():
        assert time.monotonic() < end, "nothing happened"
        time.sleep(0.01)


def check_stopped_and_resumed():
    """All files are whole, the record is readable, and the same call ends as if undisturbed."""
    whole = results("undisturbed")
    found = {name: data for name, data in results().items() if PART not in name}
    assert 0 < len(found) < len(whole)
    assert found.items() <= whole.items()
    recorded = log()
    assert all(line["status"] == "done" for line in recorded)
    done = scanclean("clean", "scans", "-o", "out", "--jobs", 2)
    assert done.returncode == 0, done.err
    unchanged = f"{len(recorded)} unchanged since an earlier run, " if recorded else ""
    assert f"{8 - len(recorded)} done, {unchanged}0 failed" in done.err
    assert results() == whole
    check_log()
    undisturbed = [{**line, "seconds": 0} for line in log("undisturbed")]
    assert [{**line, "seconds": 0} for line in log()] == undisturbed


@pytest.mark.parametrize(("jobs", "times"), [(1, 1), (2, 1), (2, 2)])
def test_ctrl_c_stops_with_a_line_and_the_same_call_goes_on(many, jobs, times):
    with running("clean", "scans", "-o", "out", "--jobs", jobs, code=SLOW + MAIN) as process:
        wait_until(lambda: list(Path().glob("out/*.layout.json")))
        for _ in range(times):
            os.killpg(process.pid, signal.SIGINT)  # as a terminal does: to every process
            time.sleep(0.05)
        err = process.communicate(timeout=60)[1].decode()
        assert process.returncode == 130
    assert "Traceback" not in err
    assert err.splitlines()[0].startswith("scanclean: stopping after the pages in hand")
    assert err.splitlines()[-1] == "scanclean: stopped; the same call goes on from here"
    assert len(err.splitlines()) <= 3
    assert not (Path("out") / PART).exists()
    check_stopped_and_resumed()


@pytest.mark.parametrize("moment", [1, 3])
def test_a_killed_run_leaves_whole_files_and_no_process_and_goes_on(many, moment):
    with running("clean", "scans", "-o", "out", "--jobs", 2, code=SLOW + MAIN) as process:
        wait_until(lambda: len(list(Path().glob("out/*.layout.json"))) >= moment)
        process.kill()
        process.wait()

        def gone():
            try:
                os.killpg(process.pid, 0)
            except ProcessLookupError:
                return True
            return False

        wait_until(gone, seconds=20)
    check_stopped_and_resumed()


def test_two_calls_into_one_folder_at_once_are_refused(many):
    with running("clean", "scans", "-o", "out", code=SLOW + MAIN):
        wait_until(lambda: list(Path().glob("out/*.layout.json")))
        done = scanclean("clean", "scans", "-o", "out")
        assert done.returncode == 2
        assert "another run is writing into this folder" in done.err


# ---- pipes and terminals


def test_a_reader_that_leaves_is_no_error(here):
    script = f"{sys.executable} -m scanclean recipe | head -n 1"
    done = subprocess.run(["bash", "-c", script], capture_output=True, text=True, check=False)
    assert done.stdout == "# Recipe of scanclean. A key that is left out has its default.\n"
    assert done.stderr == ""


@pytest.mark.skipif(not os.path.exists("/dev/full"), reason="a device that is always full")
def test_standard_output_on_a_full_disk_is_one_line(here):
    with open("/dev/full", "wb") as full:
        done = subprocess.run(
            [sys.executable, "-m", "scanclean", "recipe"],
            stdout=full,
            stderr=subprocess.PIPE,
            check=False,
        )
    assert done.returncode == 1
    assert done.stderr == b"scanclean: standard output: No space left on device\n"


def test_quiet_says_nothing_but_what_failed(box12):
    Path("box12/empty.png").write_bytes(b"")
    Path("box12/.hidden").write_bytes(b"")
    done = scanclean("clean", "box12", "-o", "out", "--quiet")
    assert done.returncode == 1
    assert done.out == ""
    assert done.err.splitlines() == [
        "scanclean: box12/empty.png: the file is empty; scan or copy it again"
    ]


def test_progress_is_drawn_on_a_terminal_only(box12):
    ours, theirs = pty.openpty()
    process = subprocess.Popen(
        [sys.executable, "-m", "scanclean", "clean", "box12", "-o", "out"],
        stdout=subprocess.PIPE,
        stderr=theirs,
    )
    os.close(theirs)
    seen = b""
    with contextlib.suppress(OSError):  # the terminal closes with the process
        while data := os.read(ours, 4096):
            seen += data
    os.close(ours)
    assert process.communicate()[0] == b""
    assert process.returncode == 0
    assert b"\r\x1b[K0 of 5 pages" in seen
    assert re.search(rb"\r\x1b\[K4 of 5 pages, [0-9.]+ a second, 0:0\d left", seen)
    assert seen.endswith(b"run.jsonl\r\n")


def test_names_of_any_bytes_are_cleaned_and_told(here):
    Path("scans").mkdir()
    odd = [b"caf\xe9.png", b"line\nbreak.png", b"-dash.png", "Ærø 7 – kopi.png".encode()]
    for name in odd:
        Path(os.fsdecode(b"scans/" + name)).write_bytes(GOOD)
    Path(os.fsdecode(b"scans/\xff bad.png")).write_bytes(b"")
    done = scanclean("clean", "scans", "-o", "out")
    assert done.returncode == 1
    assert len(results()) == 3 * len(odd)
    assert len([line for line in done.err.splitlines() if "bad.png" in line]) == 1
    assert len(log()) == len(odd) + 1


# ---- help


def test_version():
    done = scanclean("--version")
    assert (done.returncode, done.out) == (0, f"scanclean, version {__version__}\n")


@pytest.mark.parametrize("name", sorted(cli.commands))
def test_every_command_and_option_is_explained_with_examples(name):
    command = cli.commands[name]
    for parameter in command.params:
        if isinstance(parameter, click.Option):
            assert parameter.help, parameter.name
            assert parameter.help.endswith("."), parameter.name
    done = scanclean(name, "--help")
    assert done.returncode == 0
    assert f"Usage: scanclean {name}" in done.out
    examples = re.findall(rf"scanclean {name} (?!\[)[^\n]*", done.out.split("Examples:")[1])
    assert examples
    with contextlib.suppress(click.exceptions.Exit):
        for example in examples:
            words = example.split(">")[0].replace("- -o", "LIST -o").split()[2:]
            if "--recipe" not in words:  # that would look for the file
                command.make_context(name, words)


def test_the_group_s_help_names_every_command_and_status():
    done = scanclean("--help")
    for name in cli.commands:
        assert re.search(rf"^  {name} ", done.out, re.MULTILINE)
    for status in "012":
        assert re.search(rf"\b{status} ", done.out)

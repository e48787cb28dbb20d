from __future__ import annotations

import gc
import hashlib
import re
import struct
import weakref

import numpy as np
import pytest
from PIL import Image

from scanclean.errors import PageError
from scanclean.ledger import PALETTE
from scanclean.scans import pageio
from scanclean.units import Resolution
from tests.pagefiles import (
    DPI_300,
    assert_one_clear_line,
    bound_pages,
    chunks,
    directories,
    drawn_grey,
    drawn_mask,
    indexed,
    raw_tiff,
    saved,
)

# ---- writing


def test_bitonal_tiff_has_the_tags_of_a_group_4_page(tmp_path):
    # TIFF 6.0: 254 NewSubfileType, 256 ImageWidth, 257 ImageLength, 258 BitsPerSample,
    # 259 Compression 4 = T.6, 262 Photometric 0 = WhiteIsZero, 266 FillOrder, 277 SamplesPerPixel,
    # 282 / 283 X / YResolution (RATIONAL), 296 ResolutionUnit 2 = inch
    path = tmp_path / "a.tif"
    written = pageio.write_bitonal(path, drawn_mask(), Resolution(204, 195.58))
    data = path.read_bytes()
    assert written.n_bytes == len(data)
    assert written.sha256 == hashlib.sha256(data).hexdigest() == pageio.file_sha256(path)
    (tags,) = directories(data)
    expected = {256: (61,), 257: (40,), 258: (1,), 259: (4,), 262: (0,), 266: (1,), 277: (1,)}
    expected |= {254: (0,), 274: (1,), 278: (40,), 282: (204, 1), 283: (9779, 50), 296: (2,)}
    assert {tag: tags[tag] for tag in expected} == expected
    assert not {306, 305} & set(tags)  # no date, no program
    scan = pageio.read_page(path)
    np.testing.assert_array_equal(scan.pixels, drawn_mask())
    assert scan.dpi == Resolution(204, 195.58)


def test_bitonal_tiff_is_read_alike_by_another_reader(tmp_path):
    tifffile = pytest.importorskip("tifffile")
    path = tmp_path / "a.tif"
    pageio.write_bitonal(path, drawn_mask(), DPI_300)
    with tifffile.TiffFile(path) as tiff:
        page = tiff.pages[0]
        assert (int(page.compression), page.photometric.name) == (4, "MINISWHITE")
        assert page.tags["XResolution"].value == (300, 1)
        assert page.shape == (40, 61)


@pytest.mark.parametrize("seed", range(4))
def test_bitonal_pages_come_back(tmp_path, seed):
    rng = np.random.default_rng(seed)
    shape = tuple(rng.integers(1, 90, 2))
    mask = rng.random(shape) < (0, 0.05, 0.5, 1)[seed]
    path = tmp_path / "a.tif"
    pageio.write_bitonal(path, mask, DPI_300)
    np.testing.assert_array_equal(pageio.read_page(path).pixels, mask)
    with Image.open(path) as image:  # to a plain reader ink is black
        np.testing.assert_array_equal(np.asarray(image), ~mask)


def test_a_mask_that_is_a_view_is_written_as_it_looks(tmp_path):
    mask = drawn_mask()
    pageio.write_bitonal(tmp_path / "a.tif", mask.T[::-1], DPI_300)
    np.testing.assert_array_equal(pageio.read_page(tmp_path / "a.tif").pixels, mask.T[::-1])
    classes = np.arange(7 * 9, dtype=np.uint8).reshape(7, 9) % 7
    pageio.write_ledger(tmp_path / "a.png", classes.T[:, ::2], PALETTE, DPI_300)
    array, _ = pageio.read_ledger(tmp_path / "a.png", PALETTE)
    np.testing.assert_array_equal(array, classes.T[:, ::2])


def test_what_is_no_mask_is_refused(tmp_path):
    for wrong in (np.zeros((0, 5), bool), np.zeros((5, 5), np.uint8), np.zeros((2, 5, 5), bool)):
        with pytest.raises(ValueError, match="bool page"):
            pageio.write_bitonal(tmp_path / "a.tif", wrong, DPI_300)
    assert list(tmp_path.iterdir()) == []


def test_the_same_page_gives_the_same_bytes(tmp_path):
    classes = np.arange(2440, dtype=np.uint8).reshape(40, 61) % 7

    def write_all(folder):
        folder.mkdir()
        pageio.write_bitonal(folder / "a.tif", drawn_mask(), DPI_300)
        pageio.write_ledger(folder / "a.png", classes, PALETTE, DPI_300)
        pageio.write_glyph(folder / "g.png", drawn_mask(), DPI_300)
        pageio.bind_tiff(folder / "b.tif", [(drawn_mask(), DPI_300)] * 2)
        pageio.bind_pdf(folder / "b.pdf", [(drawn_mask(), DPI_300)] * 2)
        return {path.name: path.read_bytes() for path in folder.iterdir()}

    first = write_all(tmp_path / "one")
    assert first == write_all(tmp_path / "two")
    assert len(first) == 5
    for data in first.values():
        assert not re.search(rb"20\d\d[:-]?[01]\d", data)  # no date


# ---- ledger and glyphs


def test_ledger_png_is_indexed_with_its_palette(tmp_path):
    classes = np.random.default_rng(0).integers(0, 7, (300, 61)).astype(np.uint8)
    path = tmp_path / "a.ledger.png"
    written = pageio.write_ledger(path, classes, PALETTE, Resolution(300, 204))
    data = path.read_bytes()
    assert written.sha256 == hashlib.sha256(data).hexdigest()
    found = chunks(data)
    # W3C PNG: IHDR is width, height, bit depth, colour type 3 = indexed, then three zeros
    assert found[b"IHDR"] == struct.pack(">IIBBBBB", 61, 300, 4, 3, 0, 0, 0)
    assert found[b"PLTE"] == bytes(value for colour in PALETTE for value in colour)
    assert found[b"pHYs"] == struct.pack(">IIB", 11811, 8031, 1)
    array, dpi = pageio.read_ledger(path, PALETTE)
    np.testing.assert_array_equal(array, classes)
    assert dpi == Resolution(300, 204)
    with Image.open(path) as image:
        np.testing.assert_array_equal(np.asarray(image), classes)
        np.testing.assert_array_equal(np.asarray(image.convert("RGB")), np.array(PALETTE)[classes])


def test_pictures_that_are_no_ledger_are_refused(tmp_path):
    classes = np.zeros((40, 61), np.uint8)
    other = [(255, 255, 255), (1, 0, 0), *PALETTE[2:]]
    pageio.write_ledger(tmp_path / "other.png", classes, other, DPI_300)
    saved(tmp_path / "grey.png", drawn_grey())
    pageio.write_bitonal(tmp_path / "bitonal.tif", drawn_mask(), DPI_300)
    saved(tmp_path / "ledger.tif", indexed(classes, PALETTE))
    index_beyond = indexed(np.full((4, 4), 9, np.uint8), PALETTE)
    saved(tmp_path / "beyond.png", index_beyond, bits=4)
    for name in ("other.png", "grey.png", "bitonal.tif", "ledger.tif", "beyond.png"):
        with pytest.raises(PageError) as error:
            pageio.read_ledger(tmp_path / name, PALETTE)
        assert_one_clear_line(error, name, "no ink ledger")
    path = tmp_path / "cut.png"
    pageio.write_ledger(path, drawn_grey() % 7, PALETTE, DPI_300)
    path.write_bytes(path.read_bytes()[:-60])
    with pytest.raises(PageError) as error:
        pageio.read_ledger(path, PALETTE)
    assert_one_clear_line(error, "cut.png", "cut short")


def test_a_class_without_colour_is_refused(tmp_path):
    with pytest.raises(ValueError, match="class 7"):
        pageio.write_ledger(tmp_path / "a.png", np.full((2, 2), 7, np.uint8), PALETTE, DPI_300)


def test_glyph_png(tmp_path):
    mask = drawn_mask()[4:31, 3:51]
    path = tmp_path / "g.png"
    pageio.write_glyph(path, mask, DPI_300)
    scan = pageio.read_page(path)
    assert scan.pixels.dtype == np.bool_
    np.testing.assert_array_equal(scan.pixels, mask)
    assert chunks(path.read_bytes())[b"IHDR"][8:10] == b"\x01\x00"  # 1 bit, grey


# ---- bound files


def test_bound_tiff(tmp_path):
    path = tmp_path / "b.tif"
    written = pageio.bind_tiff(path, iter(bound_pages()))
    data = path.read_bytes()
    assert written == pageio.Written(len(data), hashlib.sha256(data).hexdigest())
    tags = directories(data)
    assert [t[297] for t in tags] == [(0, 0), (1, 0), (2, 0)]  # PageNumber
    assert [t[254] for t in tags] == [(2,)] * 3  # NewSubfileType: one page of several
    assert [t[262] + t[259] for t in tags] == [(0, 4)] * 3
    for scan, (mask, dpi) in zip(pageio.read_pages(path), bound_pages(), strict=True):
        np.testing.assert_array_equal(scan.pixels, mask)
        assert scan.dpi == dpi


def pdf_objects(data):
    """The objects of a PDF by the offsets of its cross-reference table (ISO 32000-1, 7.5.4)."""
    (start,) = re.search(rb"startxref\n(\d+)\n%%EOF\n$", data).groups()
    table = data[int(start) :]
    count = int(re.match(rb"xref\n0 (\d+)\n", table)[1])
    entries = table.split(b"\n", 2)[2]
    found = {}
    for number in range(1, count):
        entry = entries[20 * number : 20 * number + 20]
        assert entry[10:] == b" 00000 n \n"
        body = data[int(entry[:10]) :]
        assert body.startswith(b"%d 0 obj\n" % number)
        head, _, rest = body.partition(b"\nstream\n")
        if b"endobj" in head:
            found[number] = head.partition(b"endobj")[0], None
        else:
            length = int(re.search(rb"/Length (\d+)", head)[1])
            assert rest[length:].startswith(b"\nendstream\nendobj\n")
            found[number] = head, rest[:length]
    assert b"/Size %d " % count in table
    return found


def test_bound_pdf_has_true_sizes_and_the_pages(tmp_path):
    path = tmp_path / "b.pdf"
    written = pageio.bind_pdf(path, iter(bound_pages()))
    data = path.read_bytes()
    assert data.startswith(b"%PDF-1.4\n")
    assert written == pageio.Written(len(data), hashlib.sha256(data).hexdigest())
    found = pdf_objects(data)
    assert b"/Type /Catalog /Pages 2 0 R" in found[1][0]
    assert b"/Kids [3 0 R 6 0 R 9 0 R]" in found[2][0]
    assert b"/Count 3" in found[2][0]
    for number, (mask, dpi) in zip((3, 6, 9), bound_pages(), strict=True):
        height, width = mask.shape
        size = [
            float(v)
            for v in re.search(rb"/MediaBox \[0 0 (\S+) (\S+)\]", found[number][0]).groups()
        ]
        np.testing.assert_allclose(size, (width / dpi.x * 72, height / dpi.y * 72), atol=1e-4)
        drawing = found[number + 1][1].split()
        assert [float(drawing[1]), float(drawing[4])] == size
        head, code = found[number + 2]
        assert (
            b"/Filter /CCITTFaxDecode /DecodeParms << /K -1 /Columns %d /Rows %d >>"
            % (
                width,
                height,
            )
            in head
        )
        assert b"BlackIs1" not in head  # so the black of T.6 is 0, and 0 of DeviceGray is black
        tiff = tmp_path / "code.tif"
        whole = raw_tiff(height, width, 1, 0, code).replace(
            struct.pack("<HHIHH", 259, 3, 1, 1, 0), struct.pack("<HHIHH", 259, 3, 1, 4, 0)
        )
        tiff.write_bytes(whole)
        with Image.open(tiff) as image:
            np.testing.assert_array_equal(~np.asarray(image), mask)


def test_an_a4_page_has_the_size_of_iso_216_in_the_pdf(tmp_path):
    # ISO 216 A4: 210 x 297 mm, 2480 x 3508 pixels at 300 dpi; a PDF unit is 1/72 inch
    path = tmp_path / "b.pdf"
    pageio.bind_pdf(path, [(np.zeros((3508, 2480), bool), DPI_300)])
    size = [
        float(v) for v in re.search(rb"/MediaBox \[0 0 (\S+) (\S+)\]", path.read_bytes()).groups()
    ]
    np.testing.assert_allclose(np.array(size) / 72 * 25.4, (210, 297), atol=0.05)


@pytest.mark.parametrize("bind", [pageio.bind_tiff, pageio.bind_pdf])
def test_binding_holds_one_page_at_a_time(tmp_path, bind):
    alive = []

    def pages():
        for k in range(5):
            gc.collect()
            assert sum(ref() is not None for ref in alive) <= 1, k
            mask = np.roll(drawn_mask(), k)
            alive.append(weakref.ref(mask))
            yield mask, DPI_300
            del mask

    bind(tmp_path / "out", pages())
    assert len(alive) == 5


@pytest.mark.parametrize("bind", [pageio.bind_tiff, pageio.bind_pdf])
def test_a_binding_that_fails_leaves_nothing(tmp_path, bind):
    with pytest.raises(ValueError, match="at least one page"):
        bind(tmp_path / "none", [])
    single = tmp_path / "a.tif"
    pageio.write_bitonal(single, drawn_mask(), DPI_300)
    with pytest.raises(PageError):
        bind(tmp_path / "out", pageio.bitonal_pages([single, tmp_path / "missing.tif"]))
    grey = saved(tmp_path / "grey.png", drawn_grey())
    with pytest.raises(PageError) as error:
        bind(tmp_path / "out", pageio.bitonal_pages([single, grey]))
    assert_one_clear_line(error, "grey.png", "not a bitonal page")
    assert sorted(p.name for p in tmp_path.iterdir()) == ["a.tif", "grey.png"]


def test_files_are_bound_in_order(tmp_path):
    paths = []
    for k, (mask, dpi) in enumerate(bound_pages()):
        paths.append(tmp_path / f"{k}.tif")
        pageio.write_bitonal(paths[-1], mask, dpi)
    written = pageio.bind_tiff(tmp_path / "b.tif", pageio.bitonal_pages(paths))
    assert written == pageio.bind_tiff(tmp_path / "c.tif", bound_pages())


def test_a_pdf_page_needs_a_resolution(tmp_path):
    with pytest.raises(ValueError, match="resolution"):
        pageio.bind_pdf(tmp_path / "a.pdf", [(drawn_mask(), None)])

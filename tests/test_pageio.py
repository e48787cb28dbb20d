from __future__ import annotations

import contextlib
import errno
import io
import os
import struct
import zlib

import numpy as np
import pytest
from PIL import Image

from scanclean.errors import PageError
from scanclean.scans import files, pageio
from scanclean.units import Resolution
from tests.pagefiles import (
    DPI_300,
    assert_one_clear_line,
    chunks,
    directories,
    drawn_grey,
    drawn_mask,
    drawn_rgb,
    indexed,
    png_with,
    raw_tiff,
    saved,
)

# ---- every kind of pixel


@pytest.mark.parametrize(
    ("name", "options"),
    [
        ("a.png", {}),
        ("a.tif", {"compression": "raw"}),
        ("a.tif", {"compression": "tiff_lzw"}),
        ("a.tif", {"compression": "tiff_adobe_deflate"}),
        ("a.tif", {"compression": "packbits"}),
        ("a.jp2", {}),
        ("a.j2k", {}),
    ],
)
def test_grey_and_colour_come_through_lossless_files_unchanged(tmp_path, name, options):
    for pixels in (drawn_grey(), drawn_rgb()):
        scan = pageio.read_page(saved(tmp_path / name, pixels, **options))
        assert scan.pixels.dtype == np.uint8
        np.testing.assert_array_equal(scan.pixels, pixels)
        assert (scan.name, scan.page, scan.n_pages, scan.shape) == (name, 1, 1, (40, 61))


def test_lossy_files_are_read_as_pillow_reads_them(tmp_path):
    smooth = np.repeat(np.linspace(0, 255, 61).astype(np.uint8)[None], 40, axis=0)
    for name, options in (
        ("a.jpg", {"quality": 95}),
        ("a.tif", {"compression": "jpeg"}),
        ("a.webp", {"quality": 95}),
    ):
        scan = pageio.read_page(saved(tmp_path / name, np.stack([smooth] * 3, axis=2), **options))
        assert scan.pixels.shape == (40, 61, 3)
        assert np.abs(scan.grey().astype(int) - smooth).max() <= 6
    assert pageio.read_page(
        saved(tmp_path / "b.webp", drawn_rgb(), lossless=True)
    ).pixels.tolist() == (drawn_rgb().tolist())


@pytest.mark.parametrize("compression", ["raw", "group3", "group4", "tiff_ccitt", "tiff_lzw"])
def test_ink_is_true_in_bitonal_tiffs(tmp_path, compression):
    mask = drawn_mask()
    scan = pageio.read_page(saved(tmp_path / "a.tif", ~mask, compression=compression))
    assert scan.pixels.dtype == np.bool_
    np.testing.assert_array_equal(scan.pixels, mask)
    np.testing.assert_array_equal(scan.grey(), np.where(mask, 0, 255))


@pytest.mark.parametrize("order", ["<", ">"])
@pytest.mark.parametrize("fill_order", [1, 2])
def test_both_photometric_interpretations_of_one_bit(tmp_path, order, fill_order):
    # TIFF 6.0, PhotometricInterpretation: 0 WhiteIsZero, 1 BlackIsZero; FillOrder 2: low bit first
    mask = drawn_mask()
    path = tmp_path / "a.tif"
    for photometric, bits in ((0, mask), (1, ~mask)):
        data = np.packbits(bits, axis=1, bitorder="big" if fill_order == 1 else "little").tobytes()
        extra = [(266, 3, 1, fill_order)]
        path.write_bytes(raw_tiff(40, 61, 1, photometric, data, extra, order))
        np.testing.assert_array_equal(pageio.read_page(path).pixels, mask)


def test_both_photometric_interpretations_of_grey(tmp_path):
    grey = drawn_grey()
    deep = grey.astype("<u2") * 200 + 7
    path = tmp_path / "a.tif"
    for photometric, bits, values, expected in (
        (0, 8, 255 - grey, grey),
        (1, 8, grey, grey),
        (0, 16, (65535 - deep).astype("<u2"), deep),
        (1, 16, deep, deep),
    ):
        path.write_bytes(raw_tiff(40, 61, bits, photometric, values.tobytes()))
        scan = pageio.read_page(path)
        assert scan.pixels.dtype == expected.dtype.newbyteorder("=")
        np.testing.assert_array_equal(scan.pixels, expected)


def test_sixteen_bits_are_kept(tmp_path):
    deep = (drawn_grey().astype(np.uint16) << 8) | 0x5A
    big_endian = raw_tiff(40, 61, 16, 1, deep.astype(">u2").tobytes(), order=">")
    (tmp_path / "big.tif").write_bytes(big_endian)
    saved(tmp_path / "a.png", deep)
    saved(tmp_path / "lzw.tif", deep, compression="tiff_lzw")
    for name in ("big.tif", "a.png", "lzw.tif"):
        pixels = pageio.read_page(tmp_path / name).pixels
        assert pixels.dtype == np.uint16
        assert pixels.dtype.isnative
        np.testing.assert_array_equal(pixels, deep)


def test_a_sixteen_bit_page_has_the_greys_of_its_eight_bit_twin():
    grey = drawn_grey()
    for factor in (257, 256):  # 257: by value, 256: by shifting
        deep = grey.astype(np.uint16) * np.uint16(factor)
        scan = pageio.Scan(deep, None, 1, 1, "a")
        assert np.abs(scan.grey().astype(int) - grey).max() <= (257 - factor)


@pytest.mark.parametrize("bits", [10, 12, 14])
def test_bits_in_the_low_end_of_sixteen_are_spread_over_all_greys(bits):
    ramp = np.linspace(0, 2**bits - 1, 40 * 61).reshape(40, 61)
    deep = np.rint(ramp).astype(np.uint16)
    grey = pageio.Scan(deep, None, 1, 1, "a").grey()
    np.testing.assert_allclose(grey, ramp / (2**bits - 1) * 255, atol=1)
    deep[0, 0] = 65535  # one hot pixel changes nothing
    assert pageio.Scan(deep, None, 1, 1, "a").grey()[1, 1] == grey[1, 1]


def test_a_blank_sixteen_bit_page_stays_blank():
    noise = np.random.default_rng(5).integers(60_000, 60_200, (40, 61)).astype(np.uint16)
    assert np.ptp(pageio.Scan(noise, None, 1, 1, "a").grey()) <= 1


def test_all_black_sixteen_bit_page():
    assert not pageio.Scan(np.zeros((5, 5), np.uint16), None, 1, 1, "a").grey().any()


def test_colour_becomes_luma_of_bt_601():
    # ITU-R BT.601: Y = 0.299 R + 0.587 G + 0.114 B
    pixels = np.random.default_rng(3).integers(0, 256, (30, 40, 3)).astype(np.uint8)
    grey = pageio.Scan(pixels, None, 1, 1, "a").grey()
    np.testing.assert_allclose(grey, pixels @ [0.299, 0.587, 0.114], atol=0.51)


def test_float_and_32_bit_tiffs_are_stretched_to_sixteen(tmp_path):
    ramp = np.linspace(0, 1, 40 * 61).reshape(40, 61).astype(np.float32)
    pixels = pageio.read_page(saved(tmp_path / "f.tif", ramp)).pixels
    np.testing.assert_allclose(pixels, ramp * 65535.0, atol=1)
    ramp[0, 5] = np.nan
    assert pageio.read_page(saved(tmp_path / "nan.tif", ramp)).pixels[0, 5] == 65535
    small = np.arange(40 * 61, dtype=np.int32).reshape(40, 61)
    np.testing.assert_array_equal(pageio.read_page(saved(tmp_path / "i.tif", small)).pixels, small)


def test_cmyk_becomes_rgb(tmp_path):
    cmyk = Image.new("CMYK", (8, 4), (0, 0, 0, 255))
    cmyk.paste((0, 255, 255, 0), (0, 0, 4, 4))  # magenta and yellow: red
    for name, options in (("a.tif", {"compression": "tiff_lzw"}), ("a.jpg", {"quality": 100})):
        pixels = pageio.read_page(saved(tmp_path / name, cmyk, **options)).pixels.astype(int)
        np.testing.assert_allclose(pixels[0, 0], (255, 0, 0), atol=3)
        np.testing.assert_allclose(pixels[0, 7], (0, 0, 0), atol=3)


@pytest.mark.parametrize("name", ["a.png", "a.tif"])
def test_palettes_become_the_least_kind_that_holds_their_colours(tmp_path, name):
    mask = drawn_mask()
    index = mask.astype(np.uint8)
    for paper, ink in (((255,) * 3, (0,) * 3), ((0,) * 3, (255,) * 3)):
        pixels = pageio.read_page(saved(tmp_path / name, indexed(index, [paper, ink]))).pixels
        assert pixels.dtype == np.bool_
        np.testing.assert_array_equal(pixels, mask if ink == (0, 0, 0) else ~mask)
    grey = pageio.read_page(saved(tmp_path / name, indexed(index, [(250,) * 3, (9,) * 3]))).pixels
    np.testing.assert_array_equal(grey, np.where(mask, 9, 250))
    colour = pageio.read_page(saved(tmp_path / name, indexed(index, [(250, 240, 230), (9, 9, 80)])))
    np.testing.assert_array_equal(colour.pixels[mask], np.tile((9, 9, 80), (mask.sum(), 1)))
    np.testing.assert_array_equal(colour.pixels[~mask][0], (250, 240, 230))


# ---- transparency


def test_transparent_pixels_are_paper(tmp_path):
    mask = drawn_mask()
    alpha = np.where(mask, 255, 0).astype(np.uint8)
    black = np.zeros_like(alpha)
    pictures = {
        "la.png": Image.merge("LA", [Image.fromarray(a) for a in (black, alpha)]),
        "rgba.png": Image.merge("RGBA", [Image.fromarray(a) for a in (black, black, black, alpha)]),
        "rgba.tif": Image.merge("RGBA", [Image.fromarray(a) for a in (black, black, black, alpha)]),
        "la.tif": Image.merge("LA", [Image.fromarray(a) for a in (black, alpha)]),
        "rgba.webp": Image.merge(
            "RGBA", [Image.fromarray(a) for a in (black, black, black, alpha)]
        ),
    }
    for name, image in pictures.items():
        options = {"lossless": True} if name.endswith("webp") else {}
        grey = pageio.read_page(saved(tmp_path / name, image, **options)).grey()
        np.testing.assert_array_equal(grey, np.where(mask, 0, 255), err_msg=name)


def test_half_transparent_ink_is_half_as_dark(tmp_path):
    image = Image.new("LA", (4, 4), (0, 128))
    assert pageio.read_page(saved(tmp_path / "a.png", image)).pixels.tolist() == [[127] * 4] * 4


def test_transparent_palette_entries_are_paper(tmp_path):
    index = drawn_mask().astype(np.uint8)
    image = indexed(index, [(0, 0, 0), (0, 0, 0)])
    for transparency in (0, b"\x00\xff"):
        scan = pageio.read_page(saved(tmp_path / "a.png", image, transparency=transparency))
        np.testing.assert_array_equal(scan.pixels, drawn_mask())


def test_a_transparent_colour_is_paper(tmp_path):
    grey = np.full((6, 6), 100, np.uint8)
    grey[2:4] = 30
    expected = np.where(grey == 30, 255, 100)
    path = tmp_path / "a.png"
    assert pageio.read_page(saved(path, grey, transparency=30)).pixels.tolist() == expected.tolist()
    deep = grey.astype(np.uint16) * 257
    pixels = pageio.read_page(saved(path, deep, transparency=30 * 257)).pixels
    assert pixels.tolist() == (expected * 257).tolist()
    rgb = np.stack([grey] * 3, axis=2)
    pixels = pageio.read_page(saved(path, rgb, transparency=(30, 30, 30))).pixels
    assert pixels[:, :, 1].tolist() == expected.tolist()
    assert not pageio.read_page(saved(path, ~drawn_mask(), transparency=0)).pixels.any()


# ---- orientation


# EXIF 2.3 / TIFF 6.0 Orientation: where row 0 and column 0 of the stored picture lie on the page.
# Each entry brings the stored picture upright, with NumPy alone.
UPRIGHT = {
    1: lambda a: a,
    2: lambda a: a[:, ::-1],
    3: lambda a: a[::-1, ::-1],
    4: lambda a: a[::-1],
    5: lambda a: a.T,
    6: lambda a: np.rot90(a, -1),
    7: lambda a: a[::-1, ::-1].T,
    8: lambda a: np.rot90(a),
}


@pytest.mark.parametrize("orientation", UPRIGHT)
def test_orientation_turns_the_page_and_its_resolution(tmp_path, orientation):
    grey = drawn_grey()
    exif = Image.Exif()
    exif[274] = orientation
    rational = struct.pack("<IIII", 204, 1, 98, 1)
    data = grey.tobytes()
    data += b"\0" * (len(data) % 2) + rational
    place = 8 + len(data) - 16
    tags = [(274, 3, 1, orientation), (282, 5, 1, place), (283, 5, 1, place + 8)]
    tiff = tmp_path / "a.tif"
    tiff.write_bytes(raw_tiff(40, 61, 8, 1, data, tags))
    expected = UPRIGHT[orientation](grey)
    dpi = Resolution(98, 204) if orientation >= 5 else Resolution(204, 98)
    with pageio.ScanReader(tiff) as reader:
        for _ in range(2):  # a page read again is the same page
            scan = reader.read(1)
            np.testing.assert_array_equal(scan.pixels, expected)
            assert scan.dpi == dpi
    png = pageio.read_page(saved(tmp_path / "a.png", grey, exif=exif, dpi=(204, 98)))
    np.testing.assert_array_equal(png.pixels, expected)
    assert png.dpi == dpi
    jpeg = saved(
        tmp_path / "a.jpg", np.kron(drawn_mask(), np.ones((8, 8), bool)), exif=exif, dpi=(204, 98)
    )
    scan = pageio.read_page(jpeg)
    stored = UPRIGHT[orientation](np.kron(drawn_mask(), np.ones((8, 8), bool)))
    np.testing.assert_array_equal(scan.pixels > 127, stored)
    assert scan.dpi == dpi


# ---- resolution


# W3C PNG, pHYs in pixels per metre: round(dpi / 0.0254)
PHYS = {72: 2835, 96: 3780, 100: 3937, 150: 5906, 200: 7874, 204: 8031, 240: 9449, 300: 11811}
PHYS |= {400: 15748, 600: 23622, 1200: 47244}


@pytest.mark.parametrize(("dpi", "per_metre"), PHYS.items())
def test_png_dots_per_metre(tmp_path, dpi, per_metre):
    path = tmp_path / "a.png"
    pageio.write_glyph(path, drawn_mask(), Resolution(dpi, dpi))
    assert chunks(path.read_bytes())[b"pHYs"] == struct.pack(">IIB", per_metre, per_metre, 1)
    assert pageio.read_page(path).dpi == Resolution(dpi, dpi)


def test_png_axes_apart_and_unknown_unit(tmp_path):
    path = tmp_path / "a.png"
    path.write_bytes(png_with(drawn_grey(), (b"pHYs", struct.pack(">IIB", 8031, 3850, 1))))
    # ITU-T T.4: 3.85 lines per mm are 97.79 dpi, from memory
    assert pageio.read_page(path).dpi == Resolution(204, 97.79)
    path.write_bytes(png_with(drawn_grey(), (b"pHYs", struct.pack(">IIB", 300, 300, 0))))
    assert pageio.read_page(path).dpi is None


@pytest.mark.parametrize(
    ("x", "y", "unit", "expected"),
    [
        ((300, 1), (300, 1), 2, Resolution(300, 300)),
        ((300, 1), (300, 1), None, Resolution(300, 300)),  # TIFF 6.0: the default unit is the inch
        ((204, 1), (98, 1), 2, Resolution(204, 98)),
        ((11811, 100), (11811, 100), 3, Resolution(300, 300)),  # 118.11 per cm
        (
            (3779, 100),
            (3779, 100),
            3,
            Resolution(95.9866, 95.9866),
        ),  # 37.79 per cm: no round number
        ((300, 1), (300, 1), 1, None),
        ((0, 1), (0, 1), 2, None),
        ((1, 1), (1, 1), 2, None),
        ((0, 0), (0, 0), 2, None),
        ((300, 0), (300, 0), 2, None),
        ((300, 1), (0, 1), 2, None),
        ((19, 1), (19, 1), 2, None),
        ((20, 1), (10_000, 1), 2, Resolution(20, 10_000)),
        ((10_001, 1), (10_001, 1), 2, None),
        ((300, 1), (300, 1), 9, None),
    ],
)
def test_tiff_resolution(tmp_path, x, y, unit, expected):
    data = bytes(drawn_grey().tobytes()) + struct.pack("<IIII", *x, *y)
    place = 8 + len(data) - 16
    tags = [(282, 5, 1, place), (283, 5, 1, place + 8)]
    if unit is not None:
        tags.append((296, 3, 1, unit))
    path = tmp_path / "a.tif"
    path.write_bytes(raw_tiff(40, 61, 8, 1, data, tags))
    assert pageio.read_page(path).dpi == expected


def test_tiff_without_resolution_tags_has_none(tmp_path):
    path = tmp_path / "a.tif"
    path.write_bytes(raw_tiff(40, 61, 8, 1, drawn_grey().tobytes()))
    assert pageio.read_page(path).dpi is None


@pytest.mark.parametrize(
    ("unit", "density", "expected"),
    [
        (0, (1, 1), None),  # JFIF: units 0 is an aspect ratio, never 1 dpi
        (0, (300, 300), None),
        (1, (300, 300), Resolution(300, 300)),
        (1, (204, 98), Resolution(204, 98)),
        (2, (118, 118), Resolution(299.72, 299.72)),
        (1, (1, 1), None),
        (1, (0, 0), None),
    ],
)
def test_jfif_units(tmp_path, unit, density, expected):
    path = saved(tmp_path / "a.jpg", drawn_grey())
    data = bytearray(path.read_bytes())
    assert data[6:11] == b"JFIF\0"
    data[13:18] = struct.pack(">BHH", unit, *density)
    path.write_bytes(data)
    assert pageio.read_page(path).dpi == expected


@pytest.mark.parametrize(
    ("tags", "expected"),
    [
        ({282: 300.0, 283: 300.0, 296: 2}, Resolution(300, 300)),
        ({282: 204.0, 283: 98.0, 296: 2}, Resolution(204, 98)),
        ({282: 118.11, 283: 118.11, 296: 3}, Resolution(300, 300)),
        ({282: 300.0, 283: 300.0, 296: 1}, None),
        ({282: 300.0, 296: 2}, None),
        ({274: 1}, None),
    ],
)
def test_exif_resolution(tmp_path, tags, expected):
    exif = Image.Exif()
    for tag, value in tags.items():
        exif[tag] = value
    for name in ("a.jpg", "a.webp", "a.png"):
        assert pageio.read_page(saved(tmp_path / name, drawn_grey(), exif=exif)).dpi == expected, (
            name
        )


def test_jpeg_2000_resolution(tmp_path):
    # ISO/IEC 15444-1 Annex I, capture resolution: dots per metre as ratios with exponents
    path = saved(tmp_path / "a.jp2", drawn_grey())
    data = path.read_bytes()
    start = data.index(b"jp2h") - 4
    (length,) = struct.unpack_from(">I", data, start)
    capture = struct.pack(">I4sHHHHBB", 18, b"resc", 3850, 1, 11811, 1, 0, 0)  # vertical first
    box = struct.pack(">I4s", 8 + len(capture), b"res ") + capture
    header = struct.pack(">I", length + len(box)) + data[start + 4 : start + length] + box
    path.write_bytes(data[:start] + header + data[start + length :])
    assert pageio.read_page(path).dpi == Resolution(300, 97.79)


# ---- several pages


def many_pages(path, n_pages=3, **options):
    pages = [Image.fromarray(np.roll(drawn_grey(), 5 * k, axis=1)) for k in range(n_pages)]
    pages[0].save(path, save_all=True, append_images=pages[1:], **options)
    return path


def test_pages_of_a_tiff_in_any_order(tmp_path):
    path = many_pages(tmp_path / "a.tif", compression="tiff_lzw")
    assert pageio.count_pages(path) == 3
    scans = list(pageio.read_pages(path))
    assert [(s.page, s.n_pages) for s in scans] == [(1, 3), (2, 3), (3, 3)]
    for k, scan in enumerate(scans):
        np.testing.assert_array_equal(scan.pixels, np.roll(drawn_grey(), 5 * k, axis=1))
    wanted = list(pageio.read_pages(path, [3, 1, 3]))
    assert [s.page for s in wanted] == [3, 1, 3]
    np.testing.assert_array_equal(wanted[0].pixels, scans[2].pixels)
    np.testing.assert_array_equal(wanted[1].pixels, scans[0].pixels)
    assert list(pageio.read_pages(path, [])) == []
    np.testing.assert_array_equal(pageio.read_page(path, 2).pixels, scans[1].pixels)


def test_big_tiff(tmp_path):
    path = many_pages(tmp_path / "a.tif", compression="raw", big_tiff=True)
    assert path.read_bytes()[2:4] == b"+\0"
    assert [s.page for s in pageio.read_pages(path)] == [1, 2, 3]


def test_thumbnails_and_masks_inside_a_tiff_are_no_pages(tmp_path):
    # TIFF 6.0 NewSubfileType: bit 0 a reduced picture, bit 1 one page of several, bit 2 a mask
    path = tmp_path / "a.tif"
    kinds = (0, 1, 2, 4)
    images = [Image.new("L", (9, 9), 40 * kind) for kind in kinds]
    with path.open("w+b") as file:
        from PIL.TiffImagePlugin import AppendingTiffWriter

        with AppendingTiffWriter(file) as writer:
            for kind, image in zip(kinds, images, strict=True):
                image.save(writer, format="TIFF", tiffinfo={254: kind})
                writer.newFrame()
    assert [s.pixels[0, 0] for s in pageio.read_pages(path)] == [0, 80]


def test_a_bad_page_does_not_hide_the_others(tmp_path):
    path = many_pages(tmp_path / "a.tif", compression="raw")
    data = bytearray(path.read_bytes())
    second = directories_at(data)[1]
    (count,) = struct.unpack_from("<H", data, second)
    for i in range(count):
        place = second + 2 + 12 * i
        if struct.unpack_from("<H", data, place)[0] == 258:
            struct.pack_into("<I", data, place + 8, 7)  # no picture has 7 bits a sample
    path.write_bytes(data)
    with pageio.ScanReader(path) as reader:
        assert reader.n_pages == 3
        reader.read(1)
        with pytest.raises(PageError) as error:
            reader.read(2)
        assert_one_clear_line(error, "a.tif, page 2")
        np.testing.assert_array_equal(reader.read(3).pixels, np.roll(drawn_grey(), 10, axis=1))


def directories_at(data):
    (offset,) = struct.unpack_from("<I", data, 4)
    found = []
    while offset:
        found.append(offset)
        (count,) = struct.unpack_from("<H", data, offset)
        (offset,) = struct.unpack_from("<I", data, offset + 2 + 12 * count)
    return found


def test_a_page_that_was_cut_off_is_missed(tmp_path):
    path = many_pages(tmp_path / "a.tif", compression="raw")
    data = path.read_bytes()
    path.write_bytes(data[: directories_at(data)[2] - 10])
    with pageio.ScanReader(path) as reader:
        assert reader.n_pages == 3
        reader.read(2)
        with pytest.raises(PageError, match="page 3"):
            reader.read(3)


def test_a_chain_of_directories_that_bites_its_tail_ends(tmp_path):
    path = many_pages(tmp_path / "a.tif", compression="raw")
    data = bytearray(path.read_bytes())
    places = directories_at(data)
    (count,) = struct.unpack_from("<H", data, places[2])
    struct.pack_into("<I", data, places[2] + 2 + 12 * count, places[0])
    path.write_bytes(data)
    assert len(list(pageio.read_pages(path))) == 3


@pytest.mark.parametrize("page", [0, -1, 4])
def test_a_page_that_is_not_there(tmp_path, page):
    path = many_pages(tmp_path / "a.tif")
    with pytest.raises(PageError) as error:
        pageio.read_page(path, page)
    assert_one_clear_line(error, "a.tif", str(page), "1 to 3")
    with pytest.raises(PageError) as error:
        pageio.read_page(saved(tmp_path / "one.png", drawn_grey()), 2)
    assert_one_clear_line(error, "one page")


def test_only_one_page_is_read_at_a_time(tmp_path, monkeypatch):
    path = many_pages(tmp_path / "a.tif")
    decoded = []
    load = pageio.ScanReader._load
    monkeypatch.setattr(
        pageio.ScanReader, "_load", lambda self, f, w: decoded.append(f) or load(self, f, w)
    )
    pages = pageio.read_pages(path)
    assert decoded == []
    next(pages)
    assert decoded == [0]
    next(pages)
    assert decoded == [0, 1]
    pages.close()


# ---- what cannot be read


def test_files_that_are_no_scans(tmp_path):
    (tmp_path / "empty.png").touch()
    (tmp_path / "notes.png").write_text("Tide table of the Saltmarrow Harbour Office\n" * 9)
    (tmp_path / "noise.tif").write_bytes(np.random.default_rng(1).bytes(5000))
    (tmp_path / "cut.png").write_bytes(b"\x89PNG\r\n\x1a\n")
    (tmp_path / "head.tif").write_bytes(b"II*\0")
    (tmp_path / "jpeg.jpg").write_bytes(b"\xff\xd8\xff\xe0" + bytes(100))
    (tmp_path / "folder.png").mkdir()
    os.mkfifo(tmp_path / "pipe.png")
    for name, part in (
        ("empty.png", "empty"),
        ("notes.png", "no PNG"),
        ("noise.tif", "no PNG"),
        ("cut.png", "cut short"),
        ("head.tif", "cut short"),
        ("jpeg.jpg", "cut short"),
        ("folder.png", "folder"),
        ("pipe.png", "regular file"),
        ("missing.png", "no such file"),
        ("notes.png/a.png", "no such file"),
        ("x" * 300 + ".png", "cannot be opened"),
        ("nul\0.png", "cannot be opened"),
    ):
        for read in (pageio.read_page, pageio.count_pages):
            with pytest.raises(PageError) as error:
                read(tmp_path / name)
            assert_one_clear_line(error, part, name.split("\0")[0])


def test_the_content_counts_and_not_the_name(tmp_path):
    for name, kind in (("a.png", "TIFF"), ("b.tif", "JPEG"), ("c", "PNG"), ("d.jpg", "WEBP")):
        Image.fromarray(drawn_grey()).save(tmp_path / name, format=kind)
        assert pageio.read_page(tmp_path / name).shape == (40, 61)


def test_a_name_of_strange_bytes_stays_on_one_line(tmp_path):
    path = os.fsencode(tmp_path) + b"/fo\nlio\xff.png"
    with pytest.raises(PageError) as error:
        pageio.read_page(os.fsdecode(path))
    assert_one_clear_line(error, r"fo\nlio")


def test_no_permission(tmp_path, monkeypatch):
    path = saved(tmp_path / "a.png", drawn_grey())
    if os.geteuid() == 0:  # root may read everything

        def refuse(*args, **kwargs):
            raise PermissionError(errno.EACCES, "Permission denied")

        monkeypatch.setattr(files, "open", refuse, raising=False)
    else:
        path.chmod(0)
    with pytest.raises(PageError) as error:
        pageio.read_page(path)
    assert_one_clear_line(error, "a.png", "no permission")


KINDS = {
    "png": ("PNG", "L", {}),
    "jpeg": ("JPEG", "L", {}),
    "jpeg2000": ("JPEG2000", "L", {}),
    "webp": ("WEBP", "RGB", {"lossless": True}),
    "raw": ("TIFF", "L", {"compression": "raw"}),
    "lzw": ("TIFF", "L", {"compression": "tiff_lzw"}),
    "deflate": ("TIFF", "L", {"compression": "tiff_adobe_deflate"}),
    "tiff-jpeg": ("TIFF", "L", {"compression": "jpeg"}),
    "group3": ("TIFF", "1", {"compression": "group3"}),
    "group4": ("TIFF", "1", {"compression": "group4"}),
}


def encoded(kind):
    format_, mode, options = KINDS[kind]
    buffer = io.BytesIO()
    page = np.random.default_rng(0).integers(0, 256, (50, 70)).astype(np.uint8)
    Image.fromarray(page).convert(mode).save(buffer, format_, **options)
    return buffer.getvalue()


@pytest.mark.parametrize("kind", KINDS)
def test_a_file_cut_short_is_refused_or_lacks_nothing(tmp_path, capfd, kind):
    data = encoded(kind)
    path = tmp_path / "a"
    path.write_bytes(data)
    whole = pageio.read_page(path).pixels
    refused = []
    end_mark = 22  # checksum and IEND of a PNG: the longest end that no pixel needs
    needed = len(data) - end_mark
    cuts = sorted({*range(1, len(data), max(1, len(data) // 40)), *range(needed, len(data))})
    for cut in cuts:
        path.write_bytes(data[:cut])
        try:
            np.testing.assert_array_equal(pageio.read_page(path).pixels, whole)
        except PageError as error:
            refused.append(str(error))
    assert len(refused) >= sum(cut < needed for cut in cuts)
    assert all(map(str.isprintable, refused))
    assert capfd.readouterr() == ("", "")


@pytest.mark.parametrize("kind", KINDS)
def test_damaged_bytes_give_a_page_or_a_page_error_and_no_noise(tmp_path, capfd, kind):
    data = encoded(kind)
    rng = np.random.default_rng(2)
    path = tmp_path / "a"
    refused = []
    for _ in range(60):
        bad = bytearray(data)
        # the beginning is hit more often: there the numbers are that readers trust
        for place in np.minimum(rng.exponential(len(bad) / 3, 4).astype(int), len(bad) - 1):
            bad[place] = rng.integers(256)
        path.write_bytes(bad)
        try:
            for scan in pageio.read_pages(path):
                assert scan.grey().dtype == np.uint8
        except PageError as error:
            refused.append(str(error))
    assert refused
    assert all(map(str.isprintable, refused))
    assert capfd.readouterr() == ("", "")


@pytest.mark.parametrize("damage", [b"\0" * 8, b"\x01\x07\x00\x5a" * 2])
@pytest.mark.parametrize("share", [0.3, 0.9])
def test_a_broken_group_4_code_is_refused_and_not_guessed(tmp_path, damage, share):
    # libtiff fills such a page with nonsense and says so only on the C standard error, or,
    # after a gap of zeros, leaves the rest of it blank and says nothing
    path = tmp_path / "a.tif"
    noise = np.random.default_rng(3).random((80, 90)) < 0.3
    pageio.write_bitonal(path, noise, DPI_300)
    data = bytearray(path.read_bytes())
    (tags,) = directories(data)
    middle = tags[273][0] + int(tags[279][0] * share)
    data[middle : middle + len(damage)] = damage
    path.write_bytes(data)
    with pytest.raises(PageError) as error:
        pageio.read_page(path)
    assert_one_clear_line(error, "a.tif", "damaged")


# the code of WebP has neither an end mark nor a checksum that could be looked for
@pytest.mark.parametrize("kind", [kind for kind in KINDS if kind != "webp"])
def test_a_page_that_was_refused_is_refused_again(tmp_path, kind):
    path = tmp_path / "a"
    data = encoded(kind)
    path.write_bytes(data[: len(data) * 3 // 5] + bytes(len(data) * 2 // 5))
    messages = []
    with contextlib.suppress(PageError), pageio.ScanReader(path) as reader:
        for _ in range(2):
            with pytest.raises(PageError) as error:
                reader.read(1)
            messages.append(str(error.value))
        assert messages[0] == messages[1]


def test_what_others_write_to_standard_error_while_a_tiff_is_read_gets_through(capfd):
    with pageio._libtiff_complaints("a.tif"):
        os.write(2, b"another thread speaks\n")
    assert capfd.readouterr().err == "another thread speaks\n"


def test_a_decompression_bomb_is_refused_with_its_size(tmp_path):
    path = tmp_path / "bomb.png"
    data = bytearray(png_with(np.zeros((1, 1), np.uint8)))
    struct.pack_into(">II", data, 16, 50_000, 40_000)
    struct.pack_into(">I", data, 29, zlib.crc32(data[12:29]))
    path.write_bytes(data)
    with pytest.raises(PageError) as error:
        pageio.read_page(path)
    assert_one_clear_line(error, "bomb.png", "50000 x 40000", "lower resolution")
    tiff = tmp_path / "bomb.tif"
    tiff.write_bytes(raw_tiff(2**31 - 1, 2**31 - 1, 8, 1, bytes(10)))
    with pytest.raises(PageError, match="2147483647 x 2147483647"):
        pageio.read_page(tiff)


def test_the_largest_page_of_iso_216_at_400_dpi_is_let_through(tmp_path):
    # ISO 216 A0: 841 x 1189 mm, from memory
    height, width = (round(side / 25.4 * 400) for side in (1189, 841))
    assert height * width < pageio.MAX_PIXELS
    path = tmp_path / "a0.tif"
    strips = (1).to_bytes(1, "big")  # a header alone: what is asked is whether it gets as far
    path.write_bytes(raw_tiff(height, width, 1, 0, strips))
    with pytest.raises(PageError, match="cut short"):
        pageio.read_page(path)


def test_pillows_own_limit_is_as_it_was(tmp_path, monkeypatch):
    monkeypatch.setattr(Image, "MAX_IMAGE_PIXELS", 1000)  # a page of 2440 pixels would be too many
    pageio.read_page(saved(tmp_path / "a.png", drawn_grey()))
    assert Image.MAX_IMAGE_PIXELS == 1000


@pytest.mark.parametrize("name", ["a.png", "a.tif", "a.jpg", "a.jp2", "a.webp"])
def test_pages_of_one_pixel(tmp_path, name):
    scan = pageio.read_page(saved(tmp_path / name, np.full((1, 1), 255, np.uint8)))
    assert scan.grey().shape == (1, 1)
    path = tmp_path / "one.tif"
    for ink in (False, True):
        pageio.write_bitonal(path, np.full((1, 1), ink), None)
        scan = pageio.read_page(path)
        assert scan.pixels.tolist() == [[ink]]
        assert scan.dpi is None

"""Small pages, and the files around them put together and taken apart by their standards."""

from __future__ import annotations

import struct
import zlib

import numpy as np
from PIL import Image

from scanclean.units import Resolution

DPI_300 = Resolution(300, 300)


def drawn_mask(height=40, width=61):
    """A page of bars, an odd number of pixels wide, unlike any turn or mirror image of itself."""
    mask = np.zeros((height, width), bool)
    mask[5:9, 4:50] = True
    mask[9:30, 4:8] = True
    mask[14:17, 8:25] = True
    mask[28, 33] = True
    return mask


def drawn_grey(height=40, width=61):
    y, x = np.mgrid[:height, :width]
    return ((y * 5 + x * 3) % 256).astype(np.uint8)


def drawn_rgb(height=40, width=61):
    grey = drawn_grey(height, width)
    return np.stack([grey, grey[::-1], 255 - grey], axis=2)


def saved(path, pixels, **options):
    image = pixels if isinstance(pixels, Image.Image) else Image.fromarray(pixels)
    image.save(path, **options)
    return path


def raw_tiff(height, width, bits, photometric, data, extra=(), order="<"):
    """A TIFF of one strip put together by the letter of TIFF 6.0, without any imaging library."""
    entries = sorted(
        [
            (256, 4, 1, width),
            (257, 4, 1, height),
            (258, 3, 1, bits),
            (259, 3, 1, 1),
            (262, 3, 1, photometric),
            (273, 4, 1, 8),
            (277, 3, 1, 1),
            (278, 4, 1, height),
            (279, 4, 1, len(data)),
            *extra,
        ]
    )
    data += b"\0" * (len(data) % 2)
    out = (b"II*\0" if order == "<" else b"MM\0*") + struct.pack(order + "I", 8 + len(data)) + data
    out += struct.pack(order + "H", len(entries))
    for tag, kind, count, value in entries:
        out += struct.pack(order + "HHI", tag, kind, count)
        out += struct.pack(order + ("HH" if kind == 3 else "I"), *([value, 0][: 3 - kind // 2]))
    return out + struct.pack(order + "I", 0)


def directories(data):
    """The image file directories of a little-endian TIFF: tag -> values."""
    assert data[:4] == b"II*\0"
    (offset,) = struct.unpack_from("<I", data, 4)
    found = []
    while offset:
        assert offset % 2 == 0  # TIFF 6.0: a directory begins on a word boundary
        (count,) = struct.unpack_from("<H", data, offset)
        tags = {}
        for i in range(count):
            tag, kind, n, value = struct.unpack_from("<HHII", data, offset + 2 + 12 * i)
            code, size = {3: ("H", 2), 4: ("I", 4), 5: ("II", 8)}[kind]
            place = value if n * size > 4 else offset + 2 + 12 * i + 8
            tags[tag] = struct.unpack_from("<" + code * n, data, place)
        assert list(tags) == sorted(tags)  # TIFF 6.0: entries in ascending order
        found.append(tags)
        (offset,) = struct.unpack_from("<I", data, offset + 2 + 12 * count)
    return found


def chunks(data):
    """The chunks of a PNG, their checksums checked."""
    assert data[:8] == b"\x89PNG\r\n\x1a\n"
    found, place = {}, 8
    while place < len(data):
        (length,) = struct.unpack_from(">I", data, place)
        kind, body = data[place + 4 : place + 8], data[place + 8 : place + 8 + length]
        assert struct.unpack_from(">I", data, place + 8 + length)[0] == zlib.crc32(kind + body)
        found[kind] = body
        place += length + 12
    return found


def png_with(pixels, *extra):
    """A PNG of 8-bit grey with given chunks before its data, by the W3C specification."""
    height, width = pixels.shape

    def chunk(kind, data):
        return (
            struct.pack(">I", len(data)) + kind + data + struct.pack(">I", zlib.crc32(kind + data))
        )

    rows = b"".join(b"\0" + row.tobytes() for row in pixels)
    header = struct.pack(">IIBBBBB", width, height, 8, 0, 0, 0, 0)
    middle = b"".join(chunk(kind, data) for kind, data in extra)
    body = chunk(b"IHDR", header) + middle + chunk(b"IDAT", zlib.compress(rows))
    return b"\x89PNG\r\n\x1a\n" + body + chunk(b"IEND", b"")


def assert_one_clear_line(error, *parts):
    text = str(error.value)
    assert text.isprintable()
    assert ";" in text  # what is wrong; what to do
    for part in parts:
        assert part in text


def indexed(values, colours):
    image = Image.fromarray(values)
    image.putpalette([value for colour in colours for value in colour])
    return image


def bound_pages():
    return [
        (drawn_mask(), DPI_300),
        (drawn_mask(30, 80), Resolution(204, 98)),
        (~drawn_mask(), Resolution(600, 600)),
    ]

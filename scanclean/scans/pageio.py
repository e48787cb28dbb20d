"""Scans read, one page in memory at a time; the one door to the files of pages.

Reading goes through Pillow. Whatever a file is like, the caller gets a `Scan` or a `PageError`
that says in one line what is wrong, where, and what to do.

Glossary: H, W page height and width in pixels.
"""

from __future__ import annotations

import math
import os
import re
import struct
import sys
import tempfile
import threading
import warnings
from collections.abc import Iterable, Iterator, Sequence
from contextlib import contextmanager
from dataclasses import dataclass
from pathlib import Path
from types import TracebackType
from typing import Any, BinaryIO

import numpy as np
from numpy.typing import NDArray

# the format modules register themselves, so that no search for plugins is needed
from PIL import (
    Image,
    Jpeg2KImagePlugin,  # noqa: F401
    JpegImagePlugin,
    PngImagePlugin,  # noqa: F401
    TiffImagePlugin,
    UnidentifiedImageError,
    WebPImagePlugin,  # noqa: F401
)

from scanclean.errors import PageError
from scanclean.scans.files import (
    FilePath,
    Output,
    Written,
    atomic,
    file_sha256,
    one_line,
    open_file,
    reason,
    shown,
)
from scanclean.scans.pagewrite import bind_pdf, bind_tiff, write_bitonal, write_glyph, write_ledger
from scanclean.units import Resolution

__all__ = [
    "MAX_PIXELS",
    "Output",
    "Scan",
    "ScanReader",
    "Written",
    "atomic",
    "bind_pdf",
    "bind_tiff",
    "bitonal_pages",
    "count_pages",
    "file_sha256",
    "read_ledger",
    "read_page",
    "read_pages",
    "write_bitonal",
    "write_glyph",
    "write_ledger",
]

MAX_PIXELS = 400_000_000
"""The largest page that is read: A0 at 400 dpi has 248 million pixels."""

LOWEST_DPI, HIGHEST_DPI = 20.0, 10_000.0  # a resolution outside is taken as not stated

Pixels = NDArray[Any]
Mask = NDArray[np.bool_]

_FORMATS = ("PNG", "TIFF", "JPEG", "JPEG2000", "WEBP")
_READABLE = "PNG, TIFF, JPEG, JPEG 2000 or WebP"
_SIGNATURES = (
    b"\x89PNG\r\n\x1a\n",
    b"II*\0",
    b"MM\0*",
    b"II+\0",
    b"MM\0+",
    b"\xff\xd8\xff",
    b"\0\0\0\x0cjP  ",
    b"\xff\x4f\xff\x51",
)

_END_OF_IMAGE = b"\xff\xd9"  # a JPEG marker: ITU-T T.81, Table B.1

# TIFF 6.0 tags
_NEW_SUBFILE_TYPE = 254
_COMPRESSION = 259
_PHOTOMETRIC = 262
_STRIP_OFFSETS = 273
_ORIENTATION = 274
_STRIP_BYTE_COUNTS = 279
_X_RESOLUTION = 282
_Y_RESOLUTION = 283
_RESOLUTION_UNIT = 296
_T6 = 4
_PADDING = 64  # zero bytes that a writer may leave after the end of the code
_WHITE_IS_ZERO = 0
_UNIT_NONE, _UNIT_INCH, _UNIT_CENTIMETRE = 1, 2, 3
_REDUCED_OR_MASK = 0b101  # bits of NewSubfileType: a thumbnail, a transparency mask

# EXIF orientation -> what brings the first row to the top
_UPRIGHT = {
    2: Image.Transpose.FLIP_LEFT_RIGHT,
    3: Image.Transpose.ROTATE_180,
    4: Image.Transpose.FLIP_TOP_BOTTOM,
    5: Image.Transpose.TRANSPOSE,
    6: Image.Transpose.ROTATE_270,
    7: Image.Transpose.TRANSVERSE,
    8: Image.Transpose.ROTATE_90,
}
_SIDEWAYS = (5, 6, 7, 8)  # x and y change places


# ---- what is read


@dataclass(frozen=True, eq=False)
class Scan:
    """One page of a scan file.

    Parameters
    ----------
    pixels : array
        uint8 (H, W) grey, uint8 (H, W, 3) RGB, uint16 (H, W) grey, or bool (H, W) bitonal with
        ink true. Upright as the file's orientation says; transparent pixels are white.
    dpi : Resolution or None
        None where the file states none that can be believed.
    page, n_pages : int
        Counted from 1.
    name : str
        The name of the file without its folder.
    """

    pixels: Pixels
    dpi: Resolution | None
    page: int
    n_pages: int
    name: str

    @property
    def shape(self) -> tuple[int, int]:
        """H and W."""
        return int(self.pixels.shape[0]), int(self.pixels.shape[1])

    def grey(self) -> NDArray[np.uint8]:
        """The page in 256 shades, 0 black and 255 white.

        Colour becomes luma by ITU-R BT.601. Of 16 bits the full scale is kept, so that a page
        gives the same greys as its 8-bit twin; only where all but the brightest thousandth of the
        pixels stay within 14 bits or fewer (cameras and scanners store 10, 12 or 14 bits in
        the low end of 16), white is the highest number of so many bits.

        Returns
        -------
        uint8, shape (H, W)
        """
        pixels = self.pixels
        if pixels.dtype == np.bool_:
            return pixels.view(np.uint8) - np.uint8(1)  # ink 1 -> 0, paper 0 -> 255
        if pixels.dtype == np.uint16:
            white = _full_scale(pixels)
            level = np.arange(65536, dtype=np.int64)
            table = np.minimum((level * 255 + white // 2) // white, 255).astype(np.uint8)
            return np.asarray(np.take(table, pixels))
        if pixels.ndim == 3:
            return np.asarray(Image.fromarray(pixels).convert("L"))
        return pixels


def _full_scale(pixels: NDArray[np.uint16]) -> int:
    """The value of white: 65535, or less where the high bits are not in use."""
    every = max(1, math.isqrt(pixels.size // 500_000))  # half a million pixels say enough
    bright = int(np.percentile(pixels[::every, ::every], 99.9))
    bits = bright.bit_length()
    return 65535 if bits > 14 else (1 << max(bits, 8)) - 1


def count_pages(path: FilePath) -> int:
    """The number of pages of a scan file; thumbnails inside a TIFF are none.

    Raises
    ------
    PageError
    """
    with ScanReader(path) as reader:
        return reader.n_pages


def read_page(path: FilePath, page: int = 1) -> Scan:
    """One page of a scan file, counted from 1.

    Raises
    ------
    PageError
        If the file or the page cannot be read whole.
    """
    with ScanReader(path) as reader:
        return reader.read(page)


def read_pages(path: FilePath, pages: Iterable[int] | None = None) -> Iterator[Scan]:
    """Pages of a scan file, one after another, each read when it is asked for.

    A `PageError` ends the iteration; to go on with the other pages use `ScanReader`.
    """
    with ScanReader(path) as reader:
        wanted = range(1, reader.n_pages + 1) if pages is None else pages
        yield from map(reader.read, wanted)


class ScanReader:
    """A scan file held open, of which pages can be read in any order.

    Parameters
    ----------
    path : str or path-like

    Attributes
    ----------
    n_pages : int

    Raises
    ------
    PageError
        If it is no readable PNG, TIFF, JPEG, JPEG 2000 or WebP file. What counts is the
        content, not the name.
    """

    def __init__(self, path: FilePath) -> None:
        self._where = shown(path)
        self._name = Path(path).name
        self._file = open_file(path)
        try:
            with _decoding(self._where):
                self._image = self._open_image()
                self._frames = _tiff_pages(self._file) if self._is_tiff else [0]
        except BaseException:
            self._file.close()
            raise
        self.n_pages = len(self._frames)
        self._resolutions: dict[int, Resolution | None] = {}
        self._refused: dict[int, str] = {}

    def __enter__(self) -> ScanReader:
        return self

    def __exit__(
        self,
        kind: type[BaseException] | None,
        error: BaseException | None,
        trace: TracebackType | None,
    ) -> None:
        self.close()

    def close(self) -> None:
        """Close the file."""
        self._image.close()
        self._file.close()

    @property
    def _is_tiff(self) -> bool:
        return isinstance(self._image, TiffImagePlugin.TiffImageFile)

    def _open_image(self) -> Image.Image:
        head = self._file.read(16)
        if not head:
            raise PageError(f"{self._where}: the file is empty; scan or copy it again")
        self._file.seek(0)
        known = head.startswith(_SIGNATURES) or (head[:4] == b"RIFF" and head[8:12] == b"WEBP")
        if not known:
            raise PageError(
                f"{self._where}: no {_READABLE} file, whatever its name says; "
                "convert it to one of these or leave it out"
            )
        return Image.open(self._file, formats=_FORMATS)

    def read(self, page: int) -> Scan:
        """Read one page, counted from 1.

        Raises
        ------
        PageError
        """
        if not 1 <= page <= self.n_pages:
            raise PageError(
                f"{self._where}: there is no page {page}; "
                + ("it has one page" if self.n_pages == 1 else f"choose from 1 to {self.n_pages}")
            )
        if page in self._refused:  # Pillow would hand out what it had of it as a whole page
            raise PageError(self._refused[page])
        where = self._where if self.n_pages == 1 else f"{self._where}, page {page}"
        try:
            with _decoding(where):
                image, dpi = self._load(self._frames[page - 1], where)
                pixels = _pixels(image)
        except PageError as error:
            self._refused[page] = str(error)
            raise
        return Scan(pixels, dpi, page, self.n_pages, self._name)

    def _load(self, frame: int, where: str) -> tuple[Image.Image, Resolution | None]:
        """The picture of a page, decoded and upright, and its resolution."""
        image = self._image
        image.seek(frame)
        width, height = image.size
        if width * height > MAX_PIXELS:
            raise PageError(
                f"{where}: {width} x {height} pixels are more than the {MAX_PIXELS // 10**6} "
                "million that a page may have; scan at a lower resolution or cut the page up"
            )
        if isinstance(image, TiffImagePlugin.TiffImageFile):
            # Pillow turns a TIFF upright by itself and forgets the tag as soon as it is loaded
            if frame not in self._resolutions:
                orientation = image.tag_v2.get(_ORIENTATION, 1)
                self._resolutions[frame] = _resolution(*_tiff_dpi(image), orientation)
            if image.tag_v2.get(_COMPRESSION) == _T6:
                self._check_group4(image.tag_v2, where)
            with _libtiff_complaints(where):
                image.load()
            return image, self._resolutions[frame]
        if isinstance(image, JpegImagePlugin.JpegImageFile) and image.tile:  # not yet decoded
            self._check_jpeg(where)
        image.load()
        orientation = _exif(image).get(_ORIENTATION, 1)
        dpi = _resolution(*_stated_dpi(image), orientation)
        return image.transpose(_UPRIGHT[orientation]) if orientation in _UPRIGHT else image, dpi

    def _check_jpeg(self, where: str) -> None:
        """Refuse JPEG code without an end: libjpeg takes the zeros of a gap for code of grey.

        Such files are left where a copy of known size broke off. Inside the code, a marker
        such as that of the end cannot occur (ITU-T T.81, B.1.1.5).
        """
        place = self._file.tell()  # where Pillow stopped: the markers before the code are read
        code = self._file.read()
        self._file.seek(place)
        if _END_OF_IMAGE not in code:
            raise _damaged(where, "it has no end")

    def _check_group4(self, tags: Any, where: str) -> None:
        """Refuse T.6 code with a gap: libtiff takes it for the end and leaves the rest blank.

        Among code words, the mark of the end included, there are never more than 14 zero
        bits in a row (ITU-T T.6), so two zero bytes can only stand after the end.
        """
        sizes = tags.get(_STRIP_BYTE_COUNTS, ())
        for offset, size in zip(tags.get(_STRIP_OFFSETS, ()), sizes, strict=True):
            self._file.seek(offset)
            code = self._file.read(size).rstrip(b"\0")
            if b"\0\0" in code or size - len(code) > _PADDING:
                raise _damaged(where, "a gap in its Group 4 code")


_PILLOW = threading.RLock()  # Pillow's size limit and the warning filters are global


@contextmanager
def _decoding(where: str) -> Iterator[None]:
    """Pillow at work: silent, without its own size limit, its errors made a PageError."""
    with _PILLOW, warnings.catch_warnings():
        warnings.simplefilter("ignore")
        limit, Image.MAX_IMAGE_PIXELS = Image.MAX_IMAGE_PIXELS, None
        try:
            yield
        except PageError:
            raise
        except UnidentifiedImageError as error:  # its text is the repr of a file object
            raise _damaged(where, "its header makes no sense") from error
        except MemoryError as error:
            raise PageError(
                f"{where}: not enough memory for this page; run fewer jobs at a time"
            ) from error
        # Its readers raise whatever a damaged byte leads them into: OSError, ValueError,
        # KeyError, OverflowError, struct.error and more
        except Exception as error:
            raise _damaged(where, reason(error)) from error
        finally:
            Image.MAX_IMAGE_PIXELS = limit


def _damaged(where: str, reason: str) -> PageError:
    return PageError(
        f"{where}: cut short, damaged, or of a kind that is not read ({reason}); "
        "copy it again from its source, or save it as plain TIFF or PNG"
    )


_COMPLAINT = re.compile(
    r"(_?(TIFF|Fax|CCITT|LZW|ZIP|JPEG|OJPEG|PackBits|Deflate|ZSTD|LZMA)\w*|tempfile\.tif): .+"
)


@contextmanager
def _libtiff_complaints(where: str) -> Iterator[None]:
    """Catch what libtiff prints to the C standard error, and refuse the page that it is about.

    As Pillow binds it, libtiff reports a broken code word there and nowhere else, and goes
    on to fill the page with nonsense. What others wrote meanwhile is passed on.
    """
    try:
        sink = tempfile.TemporaryFile()  # noqa: SIM115 (closed below, after the descriptor is back)
        before = os.dup(2)
    except OSError:  # no standard error, or nowhere to keep it: nothing to catch
        yield
        return
    with sink:
        if sys.stderr is not None:
            sys.stderr.flush()
        os.dup2(sink.fileno(), 2)
        try:
            yield
        finally:
            os.dup2(before, 2)
            os.close(before)
            sink.seek(0)
            lines = sink.read().decode("utf-8", "replace").splitlines(keepends=True)
            complaints = [line for line in lines if _COMPLAINT.match(line)]
            others = "".join(line for line in lines if not _COMPLAINT.match(line))
            if others:
                os.write(2, others.encode())
        if complaints:
            raise _damaged(where, one_line(complaints[0]))


def _tiff_pages(file: BinaryIO) -> list[int]:
    """Which image file directories of a TIFF are pages: all but thumbnails and masks.

    Only the chain of directories is read, so a page of an unknown kind does not hide others.
    """
    file.seek(0)
    head = file.read(16)
    order = "<" if head[:2] == b"II" else ">"
    big = 43 in head[2:4]
    count_of, pointer, entry_size = ("Q", "Q", 20) if big else ("H", "I", 12)
    pointer_size, count_size = struct.calcsize(order + pointer), struct.calcsize(order + count_of)
    kinds: list[int] = []
    seen = set()
    (offset,) = struct.unpack_from(order + pointer, head, 8 if big else 4)
    size = file.seek(0, os.SEEK_END)
    while offset and offset not in seen:
        seen.add(offset)
        kinds.append(0)  # a directory beyond the end is a page that was cut off: it must be missed
        if offset + count_size > size:
            break
        file.seek(offset)
        (n_entries,) = struct.unpack(order + count_of, file.read(count_size))
        after = offset + count_size + n_entries * entry_size
        if after + pointer_size > size:
            break
        entry = file.read(entry_size)
        # entries stand in ascending order and NewSubfileType is the lowest tag of all
        if n_entries and struct.unpack_from(order + "H", entry)[0] == _NEW_SUBFILE_TYPE:
            (kinds[-1],) = struct.unpack_from(order + pointer, entry, 4 + pointer_size)
        file.seek(after)
        (offset,) = struct.unpack(order + pointer, file.read(pointer_size))
    file.seek(0)
    pages = [frame for frame, kind in enumerate(kinds) if not kind & _REDUCED_OR_MASK]
    return pages or list(range(len(kinds)))


# ---- pixels of every kind


def _pixels(image: Image.Image) -> Pixels:
    """A loaded image as one of the four kinds of array that `Scan` has."""
    mode = image.mode
    if mode == "P":
        return _palette_pixels(image)
    if mode == "1":
        ink: Mask = np.logical_not(np.asarray(image))
        if image.info.get("transparency") == 0:  # black is the transparent colour
            ink = np.zeros_like(ink)
        return ink
    if mode.startswith("I;16"):
        deep = np.asarray(image).astype(np.uint16, copy=False)
        if "transparency" in image.info:
            deep = np.where(deep == image.info["transparency"], np.uint16(65535), deep)
        return _blackest_zero(deep, image)
    if mode in ("I", "F"):
        return _blackest_zero(_sixteen_bit(np.asarray(image)), image)
    if image.has_transparency_data:
        return np.asarray(_on_white(image))
    return np.asarray(image if mode in ("L", "RGB") else image.convert("RGB"))


def _blackest_zero(grey: NDArray[np.uint16], image: Image.Image) -> NDArray[np.uint16]:
    """Grey of 16 bits the usual way up; Pillow itself turns WhiteIsZero only up to 8 bits."""
    tags = image.tag_v2 if isinstance(image, TiffImagePlugin.TiffImageFile) else {}
    return np.bitwise_not(grey) if tags.get(_PHOTOMETRIC) == _WHITE_IS_ZERO else grey


def _on_white(image: Image.Image) -> Image.Image:
    """A picture with transparent parts as it looks on white paper, mode L or RGB."""
    base = "L" if image.mode in ("L", "LA", "La") else "RGB"
    full = image if image.mode in ("LA", "RGBA") else image.convert(f"{base}A")
    paper = Image.new(base, image.size, "white")
    paper.paste(full.convert(base), mask=full.getchannel("A"))
    return paper


def _palette_pixels(image: Image.Image) -> Pixels:
    """An indexed picture: bitonal if it uses only black and white, grey if only greys."""
    image.apply_transparency()
    entries = np.array(image.getpalette("RGBA"), np.float64).reshape(-1, 4)
    colours = np.zeros((256, 3), np.uint8)  # an index beyond the palette is black
    opacity = entries[:, 3:] / 255
    colours[: len(entries)] = np.rint(255 + (entries[:, :3] - 255) * opacity)
    used = colours[np.flatnonzero(image.histogram())]
    indices = np.asarray(image)
    if not (used == used[:, :1]).all():
        image.putpalette(colours.tobytes())
        return np.asarray(image.convert("RGB"))
    greys = colours[:, 0]
    if np.isin(used[:, 0], (0, 255)).all():
        return np.asarray(np.take(greys == 0, indices))
    return np.asarray(np.take(greys, indices))


def _sixteen_bit(values: NDArray[Any]) -> NDArray[np.uint16]:
    """Grey of 32 bits, whole or floating, in 16: as it is if it fits, else its range stretched."""
    if values.dtype.kind != "f" and values.min() >= 0 and values.max() <= 65535:
        return values.astype(np.uint16)
    finite = np.isfinite(values)
    low, high = (values[finite].min(), values[finite].max()) if finite.any() else (0, 0)
    low = min(low, 0)  # no light is black
    scaled = (np.where(finite, values, high) - low) * (65535.0 / max(high - low, 1e-30))
    sixteen: NDArray[np.uint16] = np.rint(scaled).astype(np.uint16)
    return sixteen


# ---- resolution


def _tiff_dpi(image: TiffImagePlugin.TiffImageFile) -> tuple[Any, Any]:
    """What the tags say; read from them, because Pillow fills in 1 dpi where there are none."""
    tags = image.tag_v2
    return _in_inches(
        tags.get(_X_RESOLUTION), tags.get(_Y_RESOLUTION), tags.get(_RESOLUTION_UNIT, _UNIT_INCH)
    )


def _stated_dpi(image: Image.Image) -> tuple[Any, Any]:
    """Dots per inch as a PNG, JPEG, JPEG 2000 or WebP file states them, else None."""
    if image.format in ("JPEG", "MPO"):
        # not info["dpi"]: there Pillow puts 72 where an EXIF block says nothing
        unit = image.info.get("jfif_unit", 0)  # JFIF: 0 aspect ratio only, 1 inch, 2 centimetre
        if unit in (1, 2):
            x, y = image.info["jfif_density"]
            stated = _in_inches(x, y, unit + 1)
            if _resolution(*stated) is not None:
                return stated
    elif "dpi" in image.info:
        return image.info["dpi"][0], image.info["dpi"][1]
    exif = _exif(image)
    return _in_inches(
        exif.get(_X_RESOLUTION), exif.get(_Y_RESOLUTION), exif.get(_RESOLUTION_UNIT, _UNIT_INCH)
    )


def _in_inches(x: Any, y: Any, unit: Any) -> tuple[Any, Any]:
    if x is None or y is None or unit not in (_UNIT_INCH, _UNIT_CENTIMETRE):
        return None, None
    factor = 2.54 if unit == _UNIT_CENTIMETRE else 1.0
    try:
        return float(x) * factor, float(y) * factor
    except (TypeError, ValueError, ArithmeticError):  # a tag of the wrong type, or 0 / 0
        return None, None


def _exif(image: Image.Image) -> dict[int, Any]:
    try:
        return dict(image.getexif())
    except Exception:  # a broken EXIF block says nothing and takes no page away
        return {}


def _resolution(x: Any, y: Any, orientation: Any = 1) -> Resolution | None:
    """A resolution, unless it is unknown, impossible or absurd on either axis.

    PNG and JPEG store whole dots per metre or centimetre, so 300 dpi comes back as 299.9994:
    within half a dot per metre of a whole number that number is meant.
    """
    axes = []
    for dpi in (x, y):
        if not isinstance(dpi, int | float) or not LOWEST_DPI <= dpi <= HIGHEST_DPI:  # NaN: neither
            return None
        whole = float(round(dpi))
        axes.append(whole if abs(dpi - whole) <= 0.0128 else round(float(dpi), 4))
    if orientation in _SIDEWAYS:
        axes.reverse()
    return Resolution(axes[0], axes[1])


# ---- results read back


def bitonal_pages(paths: Iterable[FilePath]) -> Iterator[tuple[Mask, Resolution | None]]:
    """The pages of bitonal files in order, for `bind_tiff` and `bind_pdf`.

    Raises
    ------
    PageError
        If a page cannot be read or is not bitonal.
    """
    for path in paths:
        for scan in read_pages(path):
            if scan.pixels.dtype != np.bool_:
                raise PageError(f"{shown(path)}: not a bitonal page; clean it first")
            yield scan.pixels, scan.dpi


def read_ledger(
    path: FilePath, palette: Sequence[tuple[int, int, int]]
) -> tuple[NDArray[np.uint8], Resolution | None]:
    """Read back what `write_ledger` wrote.

    Parameters
    ----------
    path : str or path-like
    palette : sequence of (red, green, blue)
        The one it was written with; it tells a ledger from other pictures.

    Returns
    -------
    array : uint8, shape (H, W)
    dpi : Resolution or None

    Raises
    ------
    PageError
        If the file cannot be read whole or is no ledger.
    """
    where = shown(path)
    expected = [value for colour in palette for value in colour]
    with ScanReader(path) as reader, _decoding(where):
        image, dpi = reader._load(0, where)
        array = np.asarray(image)
        ours = (image.format, image.mode, image.getpalette()) == ("PNG", "P", expected) and int(
            array.max()
        ) < len(palette)
    if not ours:
        raise PageError(f"{where}: a picture but no ink ledger; name a .ledger.png file")
    return array, dpi

"""PNG, JPEG, BMP, NPY and NPZ files as pages."""

import io
import math
import struct
import zipfile
from collections.abc import Iterator
from functools import partial
from typing import Any, BinaryIO

import imagecodecs
import numpy as np
from PIL import BmpImagePlugin, JpegImagePlugin, PngImagePlugin

from mfeat._pages import MappedPage, Page, UnreadableImage, WholePage

#: The tag Orientation of EXIF and TIFF; rows and columns are those stored, whatever it says.
ORIENTATION = 274
TURNED = "orientation tag not applied"

# Samples of the colour types of PNG (W3C PNG specification, third edition, section 11.2.1).
_PNG_SAMPLES = {0: 1, 2: 3, 3: 3, 4: 2, 6: 4}


def png_pages(stream: BinaryIO, _path: str | None) -> list[Page]:
    """Return the page of a PNG file; libpng decodes it, which checks every checksum."""
    stream.seek(0)
    head = stream.read(33)
    if len(head) < 33 or head[12:16] != b"IHDR":
        raise UnreadableImage("truncated or damaged PNG: no image header")
    cols, rows, depth, colour_type = struct.unpack(">IIBB", head[16:26])
    if colour_type not in _PNG_SAMPLES or 0 in (rows, cols):
        raise UnreadableImage(f"damaged PNG: colour type {colour_type}, {rows}x{cols} pixels")
    before = set(_png_chunks(stream))
    samples = _PNG_SAMPLES[colour_type] + (colour_type < 4 and b"tRNS" in before)
    notes: tuple[str, ...] = ()
    if b"acTL" in before:
        notes += ("animation: first frame only",)
    if depth < 8 and colour_type == 0:
        notes += (f"{depth}-bit grey scaled to 8 bits",)

    def decode() -> np.ndarray:
        stream.seek(0)
        return imagecodecs.png_decode(stream.read())

    dtype = np.dtype(np.uint16 if depth == 16 else np.uint8)
    labels = None
    if colour_type == 3:
        labels = partial(_palette_entries, stream, PngImagePlugin.PngImageFile, (rows, cols))
    elif colour_type == 0 and depth < 8:
        step = 255 // (2**depth - 1)
        labels = partial(WholePage, lambda: decode() // step, (rows, cols), 1, dtype)
    what = {"colour": samples > 2, "alpha": samples in (2, 4), "notes": notes, "labels": labels}
    return [WholePage(decode, (rows, cols), samples, dtype, **what)]


def _palette_entries(stream: BinaryIO, factory: Any, shape: tuple[int, int]) -> Page:
    """Return the page of the entries of a palette, as label images store them."""

    def decode() -> np.ndarray:
        stream.seek(0)
        return np.asarray(factory(stream))

    return WholePage(decode, shape, 1, np.dtype(np.uint8))


def _png_chunks(stream: BinaryIO) -> Iterator[bytes]:
    """Yield the types of the chunks before the pixels."""
    stream.seek(8)
    while True:
        head = stream.read(8)
        if len(head) < 8 or head[4:] in (b"IDAT", b"IEND"):
            return
        yield head[4:]
        stream.seek(int.from_bytes(head[:4], "big") + 4, io.SEEK_CUR)


# Modes of Pillow that are pixels as they are; palettes become colours.
_PIL_SAMPLES = {"1": 1, "L": 1, "P": 3, "RGB": 3, "RGBA": 4}


def jpeg_pages(stream: BinaryIO, _path: str | None) -> list[Page]:
    """Return the page of a JPEG file."""
    return _pillow_pages(stream, JpegImagePlugin.JpegImageFile, "JPEG")


def bmp_pages(stream: BinaryIO, _path: str | None) -> list[Page]:
    """Return the page of a BMP file."""
    [page] = _pillow_pages(stream, BmpImagePlugin.BmpImageFile, "BMP")
    stream.seek(14)
    head = stream.read(16)
    # Bits a pixel; the oldest header, of 12 bytes, has 16-bit numbers before it.
    [bits] = struct.unpack_from("<H", head, 10 if head[0] == 12 else 14)
    if page.dtype == bool and bits != 1:  # Pillow takes two greys for one bit
        raise UnreadableImage(
            f"BMP of {bits} bits a pixel with a palette of black and white only; save it as PNG"
        )
    return [page]


def _pillow_pages(stream: BinaryIO, factory: Any, name: str) -> list[Page]:
    # The class of the format, not Image.open: its global limit of pixels would stand beside ours,
    # and other formats than the one found would be tried.
    stream.seek(0)
    try:
        picture = factory(stream)
    except (SyntaxError, OSError, ValueError, struct.error, IndexError, OverflowError) as error:
        raise UnreadableImage(f"damaged {name} header: {error}") from error
    if picture.mode not in _PIL_SAMPLES:
        raise UnreadableImage(
            f"{name} with colour model {picture.mode}; grey, RGB and palette images are read"
        )

    def decode() -> np.ndarray:
        return np.asarray(picture.convert("RGB") if picture.mode == "P" else picture)

    samples = _PIL_SAMPLES[picture.mode]
    dtype = np.dtype(bool if picture.mode == "1" else np.uint8)
    shape = (picture.size[1], picture.size[0])
    what: dict[str, Any] = {"colour": samples > 2, "alpha": samples == 4}
    if picture.mode == "P":
        what["labels"] = partial(_palette_entries, stream, factory, shape)
    if _is_turned(picture):
        what["notes"] = (TURNED,)
    return [WholePage(decode, shape, samples, dtype, **what)]


def _is_turned(picture: Any) -> bool:
    """Tell whether EXIF says that the picture is to be turned or mirrored for display."""
    try:
        return picture.getexif().get(ORIENTATION, 1) != 1
    except Exception:  # damaged EXIF says nothing
        return False


def npy_pages(stream: BinaryIO, path: str | None) -> list[Page]:
    """Return the page of an NPY file, mapped into memory where the file is a local one."""
    stream.seek(0)
    shape, fortran, dtype = _npy_header(stream)
    offset = stream.tell()
    need = math.prod(shape) * dtype.itemsize
    there = stream.seek(0, io.SEEK_END) - offset
    if there < need and not dtype.hasobject:  # objects are refused by their type
        raise UnreadableImage(f"truncated NPY: {there} of {need} bytes of pixels")
    what = _array_page(shape, dtype)
    if path is not None:
        return [MappedPage(path, offset, shape, "F" if fortran else "C", **what)]

    def decode() -> np.ndarray:
        stream.seek(0)
        return np.lib.format.read_array(stream, allow_pickle=False)

    return [WholePage(decode, **what)]


def npz_pages(stream: BinaryIO, _path: str | None) -> list[Page]:
    """Return one page for each array of an NPZ archive, in its order."""
    stream.seek(0)
    archive = zipfile.ZipFile(stream)
    names = [name for name in archive.namelist() if not name.endswith("/")]
    if not names:
        raise UnreadableImage("NPZ without an array")
    pages = []
    for name in names:
        if not name.endswith(".npy"):
            raise UnreadableImage(f"zip archive with {name!r}; an NPZ holds .npy arrays only")
        with archive.open(name) as member:
            shape, _, dtype = _npy_header(member)
        what = _array_page(shape, dtype)
        if len(names) > 1:
            what["notes"] = ("one of several arrays",)

        def decode(name: str = name) -> np.ndarray:
            with archive.open(name) as member:
                pixels = np.lib.format.read_array(member, allow_pickle=False)
                member.read(1)  # at the end the archive's checksum is compared
            return pixels

        pages.append(WholePage(decode, **what))
    return pages


# Longest header that is read; numpy refuses longer ones too, but reads them before.
_NPY_HEADER = 10_000


def _npy_header(stream: Any) -> tuple[tuple[int, ...], bool, np.dtype]:
    try:
        version = np.lib.format.read_magic(stream)
        if version == (1, 0):
            return np.lib.format.read_array_header_1_0(stream)
        if version not in ((2, 0), (3, 0)):
            raise ValueError(f"version {version[0]}.{version[1]}")
        length = int.from_bytes(stream.read(4), "little")
        if length > _NPY_HEADER:  # numpy would ask for the memory first
            raise ValueError(f"{length} bytes long")
        stream.seek(-4, io.SEEK_CUR)
        # Version 3 differs from 2 in field names beyond Latin-1, which plain numbers have not.
        return np.lib.format.read_array_header_2_0(stream)
    except (ValueError, EOFError, SyntaxError) as error:
        raise UnreadableImage(f"damaged NPY header: {error}") from error


def _array_page(shape: tuple[int, ...], dtype: np.dtype) -> dict[str, Any]:
    """Return what a page of an array is: a grey image, or three or four samples of colour."""
    what: dict[str, Any] = {"shape": shape[:2], "dtype": dtype}
    if len(shape) == 2:
        return what | {"samples": 1}
    if len(shape) == 3 and shape[2] in (3, 4):
        return what | {"samples": shape[2], "colour": True, "alpha": shape[2] == 4}
    raise UnreadableImage(
        f"array of shape {shape}; an image is (rows, columns), or (rows, columns, 3 or 4) for "
        "colours. Save one image a file, or several arrays in an NPZ"
    )

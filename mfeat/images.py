"""Reading image files: grey values of one page, a band of rows at a time.

PNG, JPEG, BMP, TIFF and BigTIFF, NPY and NPZ are told apart by their first bytes, not by their
names. Integers keep their bits and floating-point numbers their type.
"""

import contextlib
import errno
import os
from collections.abc import Callable, Iterator
from dataclasses import dataclass
from typing import Any, BinaryIO

import numpy as np

from mfeat import _checks, locations
from mfeat._formats import bmp_pages, jpeg_pages, npy_pages, npz_pages, png_pages
from mfeat._pages import OutOfResources, Page, UnreadableImage
from mfeat._tiff import tiff_pages

#: Largest number of pixels that are decoded at once: a whole image, or a strip or row of tiles.
MAX_PIXELS = 1 << 28

#: Named channels; an integer picks a sample by its place.
CHANNELS = ("luminance", "red", "green", "blue")

# Luminance of red, green and blue in ten-thousandths: ITU-R BT.709-6 (2015), item 3.2. Integers,
# so that a grey pixel stored as colour keeps its value exactly.
_LUMINANCE = (2126, 7152, 722)

# Pixels whose colours are mixed at a time.
_BLOCK = 1 << 20

# Formats by their first bytes; the last two of TIFF are BigTIFF, of NPZ an empty archive.
_FORMATS: dict[bytes, Callable[[BinaryIO, str | None], list[Page]]] = {
    b"\x89PNG\r\n\x1a\n": png_pages,
    b"\xff\xd8\xff": jpeg_pages,
    b"BM": bmp_pages,
    b"II*\0": tiff_pages,
    b"MM\0*": tiff_pages,
    b"II+\0": tiff_pages,
    b"MM\0+": tiff_pages,
    b"\x93NUMPY": npy_pages,
    b"PK\x03\x04": npz_pages,
    b"PK\x05\x06": npz_pages,
}


@dataclass(frozen=True)
class ImageInfo:
    """What the header of a file says about one page.

    Attributes
    ----------
    page : int
        Number of the page, from 0.
    shape : (int, int)
        Rows and columns.
    dtype : str
        Type of the samples as stored.
    in_strips : bool
        Whether bands of rows can be read without decoding the rest.
    mapped : bool
        Whether the pixels are mapped into memory, so that nothing is decoded.
    notes : str
        Remarks, e.g. "alpha ignored"; separated by "; ".
    """

    page: int
    shape: tuple[int, int]
    dtype: str
    in_strips: bool
    mapped: bool
    notes: str


@contextlib.contextmanager
def reading() -> Iterator[None]:
    """Turn whatever goes wrong with a file inside the block into an `UnreadableImage`."""
    try:
        yield
    except (UnreadableImage, OutOfResources):
        raise
    except FileNotFoundError:
        raise UnreadableImage("there is no such file") from None
    except IsADirectoryError:
        raise UnreadableImage("it is a folder") from None
    except MemoryError:
        raise OutOfResources("out of memory; use fewer jobs, or a smaller max_pixels") from None
    except (OSError, ValueError) as error:
        if getattr(error, "errno", None) in (errno.EMFILE, errno.ENFILE, errno.ENOMEM):
            raise OutOfResources(str(error)) from error
        raise UnreadableImage(_in_one_line(error)) from error
    except Exception as error:  # decoders have errors of their own for damaged files
        raise UnreadableImage(f"damaged: {_in_one_line(error)}") from error


@contextlib.contextmanager
def open_pages(location: str, max_pixels: int = MAX_PIXELS) -> Iterator[list[Page]]:
    """Open a file and give its pages.

    Raises
    ------
    UnreadableImage
        With the reason. What goes wrong inside the block is not touched.
    """
    with contextlib.ExitStack() as stack:
        with reading():
            path = locations.local_path(location)
            if path is not None and os.path.exists(path) and not _is_plain(path):
                raise UnreadableImage("no regular file, but a pipe or a device")
            stream = stack.enter_context(locations.open_input(location))
            pages = _pages_of(stream, path)
            for number, page in enumerate(pages):
                _check_page(page, number, len(pages), max_pixels)
        yield pages


def _is_plain(path: str) -> bool:
    return os.path.isfile(path) or os.path.isdir(path)


def _in_one_line(error: BaseException) -> str:
    return " ".join(str(error).split()) or type(error).__name__


def _pages_of(stream: BinaryIO, path: str | None) -> list[Page]:
    head = stream.read(8)
    if not head:
        raise UnreadableImage("empty file")
    for magic, pages in _FORMATS.items():
        if head.startswith(magic):
            return pages(stream, path)
    raise UnreadableImage(
        f"not an image: it starts with {head!r}; PNG, JPEG, BMP, TIFF, NPY and NPZ are read"
    )


def _check_page(page: Page, number: int, count: int, max_pixels: int) -> None:
    place = f"page {number}: " if count > 1 else ""
    rows, cols = page.shape
    if min(rows, cols) < 2:
        raise UnreadableImage(f"{place}image of {rows}x{cols} pixels; at least 2x2 are needed")
    if page.piece > max_pixels:
        raise UnreadableImage(
            f"{place}too large: {page.piece} pixels of an image of {rows}x{cols} have to be "
            f"decoded at once, the limit max_pixels is {max_pixels}"
        )
    kind, size = page.dtype.kind, page.dtype.itemsize
    if kind not in "biuf" or size > 8:
        raise UnreadableImage(
            f"{place}pixels of type {page.dtype}; bool, integers and real floating-point numbers "
            "of up to 64 bits are read"
        )


def scan(
    location: str, max_pixels: int = MAX_PIXELS, channel: str | int = "luminance"
) -> list[ImageInfo]:
    """Return what the header of a file says about each of its pages; no pixel is decoded.

    Raises
    ------
    UnreadableImage
        With the reason; also if a page lacks the channel.
    """
    with open_pages(locations.as_location(location), max_pixels) as pages:
        for page in pages:
            check_has_channel(page, channel)
        return [
            ImageInfo(
                *(k, page.shape, str(page.dtype), page.in_strips, page.piece == 0),
                "; ".join(page.notes),
            )
            for k, page in enumerate(pages)
        ]


def check_channel(channel: Any) -> str | int:
    """Return a channel's name or number, checked."""
    if isinstance(channel, int | np.integer) and not isinstance(channel, bool):
        return _checks.integer("channel", channel, minimum=0)
    return _checks.choice("channel", channel, CHANNELS)


def check_has_channel(page: Page, channel: str | int) -> None:
    """Refuse a page that lacks a channel."""
    if isinstance(channel, int):
        if channel >= page.samples:
            raise UnreadableImage(f"it has {page.samples} channels, so none of number {channel}")
    elif channel != "luminance":
        if not page.colour:
            raise UnreadableImage(f"a grey image has no channel {channel!r}")
    elif not page.colour and page.samples > 1 + page.alpha:
        raise UnreadableImage(
            f"{page.samples} samples a pixel of unknown meaning; choose one by its number, "
            f"channel 0 to {page.samples - 1}"
        )


def grey_rows(page: Page, start: int, stop: int, channel: str | int = "luminance") -> np.ndarray:
    """Return rows of a page as a 2-D array: as stored, one sample, or the luminance of colours.

    Luminance is 0.2126 red + 0.7152 green + 0.0722 blue (ITU-R BT.709-6) of the stored values, in
    float32; in float64 for integers of more than 16 bits and for float64.
    """
    check_has_channel(page, channel)
    with reading():
        pixels = page.rows(start, stop)
    if pixels.ndim == 2:
        return pixels
    if isinstance(channel, int):
        return pixels[..., channel]
    if channel != "luminance":
        return pixels[..., CHANNELS.index(channel) - 1]
    return _luminance(pixels) if page.colour else pixels[..., 0]


def _luminance(pixels: np.ndarray) -> np.ndarray:
    """Mix colours, in blocks of rows: the sums take more memory than the image."""
    rows, cols = pixels.shape[:2]
    step = max(1, _BLOCK // cols)
    parts = [_mixed(pixels[start : start + step]) for start in range(0, rows, step)]
    return parts[0] if len(parts) == 1 else np.concatenate(parts)


def _mixed(pixels: np.ndarray) -> np.ndarray:
    red, green, blue = (pixels[..., k] for k in range(3))
    r, g, b = _LUMINANCE
    if pixels.dtype.kind in "bui" and pixels.dtype.itemsize <= 2:
        weighted = np.multiply(red, r, dtype=np.int32)
        weighted += np.multiply(green, g, dtype=np.int32)
        weighted += np.multiply(blue, b, dtype=np.int32)
        return (weighted / 10_000.0).astype(np.float32)
    red, green, blue = (part.astype(np.float64) for part in (red, green, blue))
    with np.errstate(over="ignore", invalid="ignore"):  # of infinities, which stay in the image
        mixed = red * (r / 1e4) + green * (g / 1e4) + blue * (b / 1e4)
    np.copyto(mixed, green, where=(red == green) & (green == blue))
    short = pixels.dtype.kind == "f" and pixels.dtype.itemsize <= 4
    return mixed.astype(np.float32 if short else np.float64)


def read_image(
    location: Any,
    page: int = 0,
    *,
    channel: str | int = "luminance",
    missing_value: float | None = None,
    max_pixels: int = MAX_PIXELS,
) -> np.ndarray:
    """Read one image as `dump` does.

    Parameters
    ----------
    location : path-like or str
        A local path, or an fsspec URI.
    page : int, default 0
        Which page of a TIFF, or array of an NPZ.
    channel : {"luminance", "red", "green", "blue"} or int, default "luminance"
        What becomes of colours: the luminance 0.2126 R + 0.7152 G + 0.0722 B (ITU-R BT.709-6), or
        one channel. Alpha is ignored.
    missing_value : float, optional
        Pixels of this value are missing, as are those of the no-data value that a TIFF declares
        itself; the result is then a masked array.
    max_pixels : int, default 268435456
        Largest number of pixels to decode at once.

    Returns
    -------
    ndarray of shape (rows, columns)
        Grey values in the type of the file; luminance as float32, or float64 for integers of more
        than 16 bits and for float64. Uncompressed files are mapped into memory, not read.

    Raises
    ------
    UnreadableImage
        A ValueError with the reason.

    Examples
    --------
    >>> import tempfile, numpy as np
    >>> from pathlib import Path
    >>> from mfeat.images import read_image
    >>> with tempfile.TemporaryDirectory() as folder:
    ...     np.save(Path(folder) / "heights.npy", np.full((3, 4), 2.5, dtype=np.float32))
    ...     read_image(Path(folder) / "heights.npy")[0]
    array([2.5, 2.5, 2.5, 2.5], dtype=float32)
    """
    channel = check_channel(channel)
    page = _checks.integer("page", page, minimum=0)
    with open_pages(locations.as_location(location), max_pixels) as pages:
        if page >= len(pages):
            raise UnreadableImage(f"it has {len(pages)} pages, so none of number {page}")
        pixels = grey_rows(pages[page], 0, pages[page].shape[0], channel)
        missing = missing_pixels(pixels, missing_value, pages[page].missing)
    return pixels if missing is None else np.ma.MaskedArray(pixels, missing)


def missing_pixels(pixels: np.ndarray, *values: float | None) -> np.ndarray | None:
    """Return where pixels equal a value that means "missing", or None where none is declared."""
    found = None
    for value in values:
        if value is not None:
            equal = np.zeros(pixels.shape, bool) if _is_beyond(value, pixels) else pixels == value
            found = equal if found is None else found | equal
    return found


def _is_beyond(value: float, pixels: np.ndarray) -> bool:
    """Tell whether a value would be rounded to an infinity, and so be taken for one."""
    return pixels.dtype.kind == "f" and float(np.finfo(pixels.dtype).max) < abs(value) < np.inf

"""TIFF files as pages: mapped into memory, or decoded a row of strips or tiles at a time."""

import contextlib
import io
import json
import math
import struct
from functools import partial
from typing import BinaryIO

import numpy as np
import tifffile
from PIL import Jpeg2KImagePlugin, JpegImagePlugin

from mfeat._formats import ORIENTATION, TURNED
from mfeat._pages import MappedPage, Page, UnreadableImage

# Values of the tags PhotometricInterpretation, NewSubfileType and ExtraSamples that matter here
# (TIFF Revision 6.0, 1992, sections 3 to 6, 18 and 21).
_WHITE_IS_ZERO, _BLACK_IS_ZERO, _RGB, _PALETTE, _YCBCR = 0, 1, 2, 3, 6
_REDUCED, _MASK = 1, 4
_ALPHA_KINDS = (1, 2)
_JPEG = 7
_SIZED_CODECS = {
    _JPEG: JpegImagePlugin.JpegImageFile,
    **dict.fromkeys((33003, 33005, 34712), Jpeg2KImagePlugin.Jpeg2KImageFile),
}
_PHOTOMETRIC = 262
_NO_DATA = 42113  # registered for the no-data value of geographic rasters
_SEPARATE = 2


def tiff_pages(stream: BinaryIO, path: str | None) -> list[Page]:
    """Return the pages of a TIFF or BigTIFF file, without thumbnails and transparency masks."""
    stream.seek(0)
    try:
        tiff = tifffile.TiffFile(stream)
        found = list(tiff.pages)
    except (tifffile.TiffFileError, struct.error, ValueError, IndexError, KeyError) as error:
        raise UnreadableImage(f"damaged TIFF: {error}") from error
    if not found:
        raise UnreadableImage("damaged TIFF: no image directory can be read")
    _check_chain(tiff, found[-1].offset, len(found))
    pages, left_out = [], 0
    for number in range(len(found)):
        page = tiff.pages[number].aspage()
        if (planes := _planes(tiff, page, number)) > len(found) - number:
            raise UnreadableImage(
                f"TIFF with {planes} planes behind {len(found) - number} directory; save each "
                "plane as a page of its own"
            )
        if page.subfiletype & (_REDUCED | _MASK):
            left_out += 1
        else:
            pages.append(_page_of(tiff, page, path, number))
    if not pages:
        raise UnreadableImage("TIFF with thumbnails or masks only")
    if left_out:
        pages[0].notes += (f"{left_out} thumbnail or mask pages left out",)
    return pages


def _check_chain(tiff: tifffile.TiffFile, offset: int, number: int) -> None:
    """Refuse a file whose chain of directories breaks off: pages would be lost unnoticed."""
    handle = tiff.filehandle
    handle.seek(offset)
    count_size, entry, next_size = (8, 20, 8) if tiff.is_bigtiff else (2, 12, 4)
    order = "little" if tiff.byteorder == "<" else "big"
    count = int.from_bytes(handle.read(count_size), order)
    handle.seek(offset + count_size + count * entry)
    following = handle.read(next_size)
    if len(following) < next_size or int.from_bytes(following, order) != 0:
        raise UnreadableImage(
            f"truncated or damaged TIFF: the chain of directories breaks off after {number} pages"
        )


def _planes(tiff: tifffile.TiffFile, page: tifffile.TiffPage, number: int) -> int:
    """Return how many planes the remarks of a page promise; some have one directory for all."""
    if tiff.is_imagej:
        return int((tiff.imagej_metadata or {}).get("images", 1)) if number == 0 else 1
    if page.is_stk and (stack := page.tags.get(33629)) is not None:
        return int(stack.count)
    with contextlib.suppress(ValueError, TypeError, KeyError):
        shape = tuple(json.loads(page.shaped_description)["shape"])
        if shape[-len(page.shape) :] == page.shape:
            return math.prod(shape[: -len(page.shape)])
    return 1


def _page_of(tiff: tifffile.TiffFile, page: tifffile.TiffPage, path: str | None, number: int):
    photometric = int(page.photometric) if _PHOTOMETRIC in page.tags else _BLACK_IS_ZERO
    jpeg = int(page.compression) == _JPEG
    known = (_WHITE_IS_ZERO, _BLACK_IS_ZERO, _RGB, _PALETTE)
    if photometric not in known and not (photometric == _YCBCR and jpeg):
        raise UnreadableImage(
            f"page {number}: TIFF with colour model {page.photometric!s}; grey, RGB and palette "
            "images are read"
        )
    if page.dtype is None or page.imagedepth != 1 or 0 in page.shape:
        raise UnreadableImage(
            f"page {number}: TIFF with samples of {page.bitspersample} bits, format "
            f"{page.sampleformat!s}, shape {page.shape}; such pixels cannot be read"
        )
    palette = page.colormap if photometric == _PALETTE else None
    samples = 3 if palette is not None else page.samplesperpixel
    colour = photometric in (_RGB, _YCBCR) or palette is not None
    entries = 0 if palette is None else palette.shape[1]
    if photometric == _PALETTE and entries < 2**page.bitspersample:
        raise UnreadableImage(
            f"page {number}: damaged TIFF: a palette of {entries} colours for pixels of "
            f"{page.bitspersample} bits"
        )
    if colour and samples < 3:
        raise UnreadableImage(f"page {number}: damaged TIFF: colours of {samples} sample a pixel")
    own = 3 if colour else 1
    alpha = samples > own and any(kind in _ALPHA_KINDS for kind in page.extrasamples)
    notes: tuple[str, ...] = ()
    if photometric == _WHITE_IS_ZERO:
        notes += ("white is zero, inverted",)
        if page.dtype.kind not in "ub":
            raise UnreadableImage(
                f"page {number}: TIFF whose zero is white, with {page.dtype}; only unsigned "
                "integers can be inverted"
            )
    if ORIENTATION in page.tags and page.tags.valueof(ORIENTATION) != 1:
        notes += (TURNED,)
    offsets, sizes = page.dataoffsets, page.databytecounts
    if len(offsets) == 0 or len(offsets) != len(sizes):
        raise UnreadableImage(f"page {number}: damaged TIFF: no pixels")
    tall, wide = (page.tilelength, page.tilewidth) if page.is_tiled else (page.rowsperstrip, 1)
    if 0 in (tall, wide):
        raise UnreadableImage(f"page {number}: damaged TIFF: strips or tiles of no pixels")
    if len(offsets) != (expected := _segments(page)):
        raise UnreadableImage(
            f"page {number}: damaged TIFF: {len(offsets)} of {expected} strips or tiles"
        )
    end = tiff.filehandle.size
    if any(at + size > end for at, size in zip(offsets, sizes, strict=True)):
        raise UnreadableImage(
            f"page {number}: truncated TIFF: pixels reach to byte "
            f"{max(at + size for at, size in zip(offsets, sizes, strict=True))}, the file ends at "
            f"{end}"
        )
    what = {
        "shape": (page.imagelength, page.imagewidth),
        "samples": samples,
        "colour": colour,
        "alpha": alpha,
        "notes": notes,
        "missing": None if colour else _declared_missing(page),
    }
    plain = page.is_final and page.dtype.kind != "b" and photometric in (_BLACK_IS_ZERO, _RGB)
    if plain and path is not None and page.is_contiguous:
        if offsets[0] + page.nbytes > end:
            raise UnreadableImage(
                f"page {number}: truncated TIFF: pixels reach to byte {offsets[0] + page.nbytes}, "
                f"the file ends at {end}"
            )
        what["dtype"] = page.dtype.newbyteorder(tiff.byteorder)
        planes_first = page.samplesperpixel > 1 and int(page.planarconfig) == _SEPARATE
        return MappedPage(path, offsets[0], page.shape, "C", planes_first=planes_first, **what)
    if palette is not None:
        plain = {"shape": what["shape"], "samples": 1}
        what["labels"] = partial(_SegmentedPage, tiff, page, None, number, **plain)
    inverted = photometric == _WHITE_IS_ZERO
    return _SegmentedPage(tiff, page, palette, number, inverted, **what)


def _check_codec(page: tifffile.TiffPage, packed: bytes, place: str) -> None:
    """Refuse a strip or tile whose codec has a size of its own, larger than the directory says."""
    factory = _SIZED_CODECS.get(int(page.compression))
    if factory is None:
        return
    limit = page.tilelength * page.tilewidth if page.is_tiled else page.rowsperstrip
    limit *= 1 if page.is_tiled else page.imagewidth
    try:
        wide, tall = factory(io.BytesIO(packed)).size
    except Exception as error:  # Pillow has errors of many kinds for damaged headers
        raise UnreadableImage(f"damaged TIFF at {place}: {error}") from error
    if wide * tall > max(limit, 256 * 256):
        raise UnreadableImage(f"damaged TIFF at {place}: it holds {tall}x{wide} pixels")


def _declared_missing(page: tifffile.TiffPage) -> float | None:
    """Return the value that a raster declares as its no-data value, as text in a private tag."""
    try:
        value = float(page.tags.valueof(_NO_DATA))
    except (TypeError, ValueError):
        return None
    return value if math.isfinite(value) else None  # NaN is missing anyway


def _segments(page: tifffile.TiffPage) -> int:
    """Return how many strips or tiles a page needs."""
    planes, _, rows, cols, _ = page.shaped
    if page.is_tiled:
        return planes * math.ceil(rows / page.tilelength) * math.ceil(cols / page.tilewidth)
    return planes * math.ceil(rows / page.rowsperstrip)


class _SegmentedPage(Page):
    """A page in strips or tiles, compressed or packed, or in a file that cannot be mapped."""

    def __init__(self, tiff, page, palette, number, inverted=False, **what):
        cols = what["shape"][1]
        self._tall = page.tilelength if page.is_tiled else page.rowsperstrip
        self._tall = min(int(self._tall), what["shape"][0])
        super().__init__(
            dtype=np.dtype(np.uint16) if palette is not None else page.dtype,
            in_strips=True,
            # up to four samples are a pixel's worth of memory
            piece=max(self._tall * cols, page.tilelength * page.tilewidth * page.is_tiled)
            * math.ceil(page.samplesperpixel / 4),
            **what,
        )
        self._tiff, self._page, self._palette, self._number = tiff, page, palette, number
        self._inverted = inverted
        self._across = math.ceil(cols / page.tilewidth) if page.is_tiled else 1
        self._down = math.ceil(self.shape[0] / self._tall)
        self._latest: tuple[int, np.ndarray] | None = None

    def rows(self, start: int, stop: int) -> np.ndarray:
        """Decode what the rows need and return them; the latest row of tiles is kept."""
        parts = []
        for k in range(start // self._tall, math.ceil(stop / self._tall)):
            if self._latest is None or self._latest[0] != k:
                self._latest = (k, self._decode(k))
            top = k * self._tall
            parts.append(self._latest[1][max(start - top, 0) : stop - top])
        return parts[0] if len(parts) == 1 else np.concatenate(parts)

    def forget(self) -> None:
        """Let go of the latest row of strips or tiles."""
        self._latest = None

    def _decode(self, k: int) -> np.ndarray:
        """Return the rows of the k-th row of strips or tiles."""
        page = self._page
        planes, _, rows, cols, together = page.shaped
        tall = min(self._tall, rows - k * self._tall)
        out = np.empty((planes, tall, cols, together), dtype=page.dtype)
        for plane in range(planes):
            for across in range(self._across):
                index = (plane * self._down + k) * self._across + across
                data, (_, _, _, left, _) = self._segment(index)
                part = data[0, :tall, : cols - left]
                out[plane, :, left : left + part.shape[1]] = part
        pixels = out[0] if planes == 1 else np.moveaxis(out[..., 0], 0, -1)
        if self._palette is not None:
            return np.moveaxis(self._palette[:, pixels[..., 0].astype(np.intp)], 0, -1)
        if self._inverted:
            pixels = ~pixels if pixels.dtype.kind == "b" else self._white(pixels) - pixels
        return pixels[..., 0] if pixels.shape[2] == 1 else pixels

    def _white(self, pixels: np.ndarray) -> np.ndarray:
        return pixels.dtype.type(2**self._page.bitspersample - 1)

    def _segment(self, index: int):
        page = self._page
        offset, size = page.dataoffsets[index], page.databytecounts[index]
        kind = "tile" if page.is_tiled else "strip"
        place = f"page {self._number}, {kind} {index}"
        if offset == 0 or size == 0:
            raise UnreadableImage(f"TIFF without the pixels of {place}")
        handle = self._tiff.filehandle
        handle.seek(offset)
        packed = handle.read(size)  # before `page.decode` is made, which may move in the file
        _check_codec(page, packed, place)
        try:
            data, where, _ = page.decode(packed, index, jpegtables=page.jpegtables)
        except Exception as error:  # each codec has errors of its own
            raise UnreadableImage(f"damaged TIFF at {place}: {error}") from error
        return data, where

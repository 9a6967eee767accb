"""TIFF files as pages: mapped into memory, or decoded a row of strips or tiles at a time."""

import math
import struct
from typing import BinaryIO

import numpy as np
import tifffile

from mfeat._pages import MappedPage, Page, UnreadableImage

# Values of the tags PhotometricInterpretation, NewSubfileType and ExtraSamples that matter here
# (TIFF Revision 6.0, 1992, sections 3 to 6, 18 and 21).
_WHITE_IS_ZERO, _BLACK_IS_ZERO, _RGB, _PALETTE, _YCBCR = 0, 1, 2, 3, 6
_REDUCED, _MASK = 1, 4
_ALPHA_KINDS = (1, 2)
_JPEG = 7


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
        if page.subfiletype & (_REDUCED | _MASK):
            left_out += 1
        else:
            pages.append(_page_of(tiff, page, path, number))
    if not pages:
        raise UnreadableImage("TIFF with thumbnails or masks only")
    stack = tiff.imagej_metadata or {}
    if tiff.is_imagej and stack.get("images", 1) > len(found):
        raise UnreadableImage(
            f"TIFF with {stack['images']} planes behind {len(found)} directory; save each plane as "
            "a page of its own"
        )
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


def _page_of(tiff: tifffile.TiffFile, page: tifffile.TiffPage, path: str | None, number: int):
    photometric = int(page.photometric)
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
    offsets, sizes = page.dataoffsets, page.databytecounts
    if len(offsets) == 0 or len(offsets) != len(sizes):
        raise UnreadableImage(f"page {number}: damaged TIFF: no pixels")
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
    }
    plain = page.is_final and page.dtype.kind != "b" and photometric in (_BLACK_IS_ZERO, _RGB)
    if plain and path is not None and page.is_contiguous:
        if offsets[0] + page.nbytes > end:
            raise UnreadableImage(
                f"page {number}: truncated TIFF: pixels reach to byte {offsets[0] + page.nbytes}, "
                f"the file ends at {end}"
            )
        what["dtype"] = page.dtype.newbyteorder(tiff.byteorder)
        return MappedPage(path, offsets[0], page.shape, "C", **what)
    return _SegmentedPage(tiff, page, palette, number, **what)


class _SegmentedPage(Page):
    """A page in strips or tiles, compressed or packed, or in a file that cannot be mapped."""

    def __init__(self, tiff, page, palette, number, **what):
        cols = what["shape"][1]
        self._tall = page.tilelength if page.is_tiled else page.rowsperstrip
        self._tall = min(int(self._tall), what["shape"][0])
        super().__init__(
            dtype=np.dtype(np.uint16) if palette is not None else page.dtype,
            in_strips=True,
            piece=self._tall * cols,
            **what,
        )
        self._tiff, self._page, self._palette, self._number = tiff, page, palette, number
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
            return np.moveaxis(self._palette[:, pixels[..., 0]], 0, -1)
        if int(page.photometric) == _WHITE_IS_ZERO:
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
        try:
            data, where, _ = page.decode(handle.read(size), index, jpegtables=page.jpegtables)
        except Exception as error:  # each codec has errors of its own
            raise UnreadableImage(f"damaged TIFF at {place}: {error}") from error
        return data, where

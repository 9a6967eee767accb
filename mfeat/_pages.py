"""What every image format offers: pages with a shape, a type, and rows to read.

A file holds one page or several. A page knows its shape from the header alone; pixels are read when
rows are asked for, a band at a time where the format allows it, else all at once.
"""

from collections.abc import Callable

import numpy as np


class UnreadableImage(ValueError):
    """A file, or a page of it, that cannot be used; the message is the reason."""


class Page:
    """One image of a file.

    Attributes
    ----------
    shape : (int, int)
        Rows and columns.
    samples : int
        Numbers a pixel, alpha included.
    colour : bool
        Whether the first three samples are red, green and blue.
    alpha : bool
        Whether the sample after grey or blue is alpha.
    dtype : numpy.dtype
        Type of the samples.
    in_strips : bool
        Whether `rows` reads little more than the rows it is asked for.
    piece : int
        Pixels that are decoded at once, at least: a strip, a row of tiles, or all.
    notes : tuple of str
        What a user should know, e.g. that alpha is ignored.
    """

    def __init__(
        self,
        shape: tuple[int, int],
        samples: int,
        dtype: np.dtype,
        *,
        colour: bool = False,
        alpha: bool = False,
        in_strips: bool = False,
        piece: int | None = None,
        notes: tuple[str, ...] = (),
    ):
        self.shape = shape
        self.samples = samples
        self.dtype = dtype
        self.colour = colour
        self.alpha = alpha
        self.in_strips = in_strips
        self.piece = shape[0] * shape[1] if piece is None else piece
        self.notes = (*(("alpha ignored",) if alpha else ()), *notes)

    def rows(self, start: int, stop: int) -> np.ndarray:
        """Return rows as an array (rows, columns) or (rows, columns, samples)."""
        raise NotImplementedError


class WholePage(Page):
    """A page that is decoded all at once, when its first rows are asked for."""

    def __init__(self, decode: Callable[[], np.ndarray], shape, samples, dtype, **what):
        super().__init__(shape, samples, dtype, **what)
        self._decode = decode
        self._pixels: np.ndarray | None = None

    def rows(self, start: int, stop: int) -> np.ndarray:
        """Return rows of the decoded page."""
        if self._pixels is None:
            pixels = self._decode()
            if pixels.shape[:2] != self.shape:
                raise UnreadableImage(
                    f"the header promises {self.shape[0]}x{self.shape[1]} pixels, decoded are "
                    f"{'x'.join(map(str, pixels.shape[:2]))}"
                )
            self._pixels = pixels
        return self._pixels[start:stop]


class MappedPage(Page):
    """A page whose uncompressed pixels lie in a file in one piece, mapped into memory."""

    def __init__(self, path: str, offset: int, stored: tuple[int, ...], order: str, **what):
        super().__init__(in_strips=True, piece=0, **what)
        self._where = (path, offset, stored, order)
        self._pixels: np.ndarray | None = None

    def rows(self, start: int, stop: int) -> np.ndarray:
        """Return a view of the mapped file."""
        if self._pixels is None:
            path, offset, stored, order = self._where
            mapped = np.memmap(path, self.dtype, "r", offset, stored, order)
            pixels = np.asarray(mapped)
            # samples stored plane by plane come first
            self._pixels = np.moveaxis(pixels, 0, -1) if stored[:2] != self.shape else pixels
        return self._pixels[start:stop]

"""What every image format offers: pages with a shape, a type, and rows to read.

A file holds one page or several. A page knows its shape from the header alone; pixels are read when
rows are asked for, a band at a time where the format allows it, else all at once.
"""

from collections.abc import Callable

import numpy as np


class UnreadableImage(ValueError):
    """A file, or a page of it, that cannot be used; the message is the reason."""


class OutOfResources(RuntimeError):
    """The machine, not the file, is at fault: the run stops, and can be resumed."""


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
    missing : float or None
        Value that the file itself declares to mean "missing".
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
        missing: float | None = None,
        labels: Callable[[], "Page"] | None = None,
    ):
        self.shape = shape
        self.samples = samples
        self.dtype = dtype
        self.colour = colour
        self.alpha = alpha
        self.in_strips = in_strips
        self.piece = shape[0] * shape[1] if piece is None else piece
        spare = samples - (3 if colour else 1) - alpha
        if alpha:
            notes += ("alpha ignored",)
        if colour and spare:
            notes += (f"{spare} samples beside the colours ignored",)
        if missing is not None:
            notes += (f"declares {missing:g} to be missing",)
        self.notes = notes
        self.missing = missing
        self._labels = labels

    def as_labels(self) -> "Page":
        """Return the page as whole numbers: of a palette its entries, of few bits unscaled."""
        return self if self._labels is None else self._labels()

    def rows(self, start: int, stop: int) -> np.ndarray:
        """Return rows as an array (rows, columns) or (rows, columns, samples)."""
        raise NotImplementedError

    def forget(self) -> None:
        """Let go of pixels that are kept for the next call of `rows`."""


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
            promised = self.shape if self.samples == 1 else (*self.shape, self.samples)
            if pixels.shape != promised or pixels.dtype != self.dtype:
                raise UnreadableImage(
                    f"the header promises {'x'.join(map(str, promised))} {self.dtype}, decoded are "
                    f"{'x'.join(map(str, pixels.shape))} {pixels.dtype}"
                )
            self._pixels = pixels
        return self._pixels[start:stop]

    def forget(self) -> None:
        """Let go of the decoded page."""
        self._pixels = None


class MappedPage(Page):
    """A page whose uncompressed pixels lie in a file in one piece, mapped into memory."""

    def __init__(
        self,
        path: str,
        offset: int,
        stored: tuple[int, ...],
        order: str,
        *,
        planes_first: bool = False,
        **what,
    ):
        super().__init__(in_strips=True, piece=0, **what)
        self._where = (path, offset, stored, order)
        self._planes_first = planes_first
        self._pixels: np.ndarray | None = None

    def rows(self, start: int, stop: int) -> np.ndarray:
        """Return a view of the mapped file."""
        if self._pixels is None:
            path, offset, stored, order = self._where
            mapped = np.memmap(path, self.dtype, "r", offset, stored, order)
            pixels = np.asarray(mapped)
            self._pixels = np.moveaxis(pixels, 0, -1) if self._planes_first else pixels
        return self._pixels[start:stop]

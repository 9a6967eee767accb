"""From an item of a plan to patches: reading bands of an image, its mask and its truth.

What is wrong with a file shows before the first patch of it is given, if the image is decoded
whole. Of an image that is read in strips, damage inside concerns the patches that need the damaged
strip.
"""

import contextlib
from collections.abc import Iterator
from dataclasses import dataclass
from typing import Any

import numpy as np

from mfeat._pages import Page, UnreadableImage
from mfeat.images import grey_rows, missing_pixels, open_pages
from mfeat.options import DumpSettings
from mfeat.patches import Patches, positions_of, window_shares
from mfeat.planning import WHOLE_PIXELS, Item

#: Pixels of an image that are held at once where bands can be read; at least one row of patches.
BAND_PIXELS = 1 << 22

_BAND_PATCHES = 1 << 15


@dataclass(frozen=True, eq=False)
class Cut:
    """Patches of one band of an image.

    Attributes
    ----------
    top, left : int
        Where the band starts in the image.
    size : (int, int)
        Rows and columns of a patch.
    positions : ndarray of shape (n, 2)
        Top left pixels of the patches in the band.
    fractions : ndarray of shape (n,)
        Valid fractions.
    pixels : ndarray of shape (rows, cols)
        The band; a masked array where pixels are missing by a mask or by their value.
    truth : ndarray of shape (rows, cols) or None
        Labels of the pixels.
    infinities : ndarray of shape (rows, cols), bool, or None
        Where valid pixels are infinite.
    damage : str or None
        Why the band cannot be read; there are no pixels then.
    """

    top: int
    left: int
    size: tuple[int, int]
    positions: np.ndarray
    fractions: np.ndarray
    pixels: np.ndarray | None = None
    truth: np.ndarray | None = None
    infinities: np.ndarray | None = None
    damage: str | None = None

    def infinite(self, k: int) -> str | None:
        """Return the complaint about infinite pixels of a patch, if there are any."""
        if self.infinities is None:
            return None
        row, col = self.positions[k]
        found = np.argwhere(self.infinities[row : row + self.size[0], col : col + self.size[1]])
        if not len(found):
            return None
        place = found[0] + (row, col)
        value = np.asarray(self.pixels)[tuple(place)]
        return (
            f"holds {value} at row {self.top + place[0]}, column {self.left + place[1]}; infinite "
            "values cannot be ranked"
        )

    def chosen(self, good: np.ndarray) -> Patches:
        """Return some of the patches."""
        return Patches(
            image=self.pixels,
            size=self.size,
            positions=self.positions[good],
            valid_fractions=self.fractions[good],
            left_out=self.positions[~good],
            covered_fraction=1.0,
        )


def cuts(
    settings: DumpSettings, entry: dict[str, Any], item: Item, files: "OpenFiles | None" = None
) -> Iterator[Cut]:
    """Yield the patches of an item, band by band; `files` may hold those of the item before.

    Raises
    ------
    UnreadableImage
        Before the first band, if the file, its mask or its truth cannot be used. Of a piece of an
        image every patch is given with this reason instead: other pieces may be readable.
    """
    with contextlib.ExitStack() as stack:
        files = files or stack.enter_context(OpenFiles(settings))
        try:
            rows = files.of(entry, item)
        except UnreadableImage as error:
            if not item.split:
                raise
            for band in _bands(settings, item):
                yield _damaged(item, *band, str(error))
            return
        for band in _bands(settings, item):
            yield from _cuts_of_band(settings, item, rows, *band)


class OpenFiles(contextlib.AbstractContextManager):
    """The files of one image, open and decoded: its pages and regions follow and share them."""

    def __init__(self, settings: DumpSettings):
        self._settings = settings
        self._files: dict[str, tuple[contextlib.ExitStack, list[Page]]] = {}
        self._rows: dict[tuple[str, str], _Rows] = {}
        self._page = 0

    def of(self, entry: dict[str, Any], item: Item) -> "list[_Rows | None]":
        """Return the rows of an image, its mask and its truth; others are closed."""
        locations = (entry["location"], entry["mask_location"], entry["truth_location"])
        if item.page != self._page or not self._files.keys() <= set(locations):
            self._forget()
        for location in self._files.keys() - set(locations):
            self._files.pop(location)[0].close()
        self._page = item.page
        wanted = [True, locations[1] is not None, self._settings.label_from == "truth"]
        return [
            self._opened(what, location, item) if want else None
            for what, location, want in zip(("", "mask", "truth"), locations, wanted, strict=True)
        ]

    def _opened(self, what: str, location: str, item: Item) -> "_Rows":
        if (what, location) not in self._rows:
            with _told(what, location):
                page = self._page_of(location, item)
                channel = self._settings.channel
                if what:
                    page, channel = page.as_labels(), "luminance"
                    if page.samples != 1 or page.dtype.kind not in "bui":
                        raise UnreadableImage(
                            f"pixels of {page.samples} x {page.dtype}; one bool or integer a pixel "
                            "is needed"
                        )
                self._rows[what, location] = _Rows(page, channel, what, location)
        return self._rows[what, location]

    def _page_of(self, location: str, item: Item) -> Page:
        if location not in self._files:
            with contextlib.ExitStack() as stack:
                pages = stack.enter_context(open_pages(location, self._settings.max_pixels))
                self._files[location] = stack.pop_all(), pages
        pages = self._files[location][1]
        if item.page >= len(pages) > 1:
            raise UnreadableImage(f"it has {len(pages)} pages, so none of number {item.page}")
        page = pages[item.page if len(pages) > 1 else 0]
        if page.shape != (item.rows, item.cols):
            raise UnreadableImage(
                f"it has {page.shape[0]}x{page.shape[1]} pixels, the image {item.rows}x{item.cols}"
            )
        return page

    def _forget(self) -> None:
        """Let go of all pixels."""
        self._rows.clear()
        for _, pages in self._files.values():
            pages[min(self._page, len(pages) - 1)].forget()

    def __exit__(self, *_: Any) -> None:
        self._forget()
        for stack, _pages in self._files.values():
            stack.close()
        self._files.clear()


def _cuts_of_band(
    settings: DumpSettings, item: Item, files: "list[_Rows | None]", top: int, bottom: int,
    positions: np.ndarray, size: tuple[int, int],
) -> Iterator[Cut]:  # fmt: skip
    """Yield the patches of a band; if it cannot be read, row of patches by row of patches."""
    left, right = item.col, item.col + item.width
    try:
        pixels, mask, truth = (
            None if file is None else file.rows(top, bottom)[:, left:right] for file in files
        )
        if (item.height, item.width) != (item.rows, item.cols):
            pixels = pixels.copy()  # a view would keep the whole image while its patches wait
    except UnreadableImage as error:
        starts = np.unique(positions[:, 0])
        if len(starts) == 1:
            yield _damaged(item, top, bottom, positions, size, str(error))
            return
        for start in starts.tolist():
            some = positions[positions[:, 0] == start]
            yield from _cuts_of_band(settings, item, files, start, start + size[0], some, size)
        return
    known = None if mask is None else mask != 0
    where = (top, left, size, positions - (top, left))
    yield _cut(where, pixels, known, truth, (settings.missing_value, files[0].missing))


def _damaged(
    item: Item, top: int, _bottom: int, positions: np.ndarray, size: tuple[int, int], reason: str
) -> Cut:
    where = (top, item.col, size, positions - (top, item.col))
    return Cut(*where, np.zeros(len(positions)), damage=reason)


@contextlib.contextmanager
def _told(what: str, location: str) -> Iterator[None]:
    """Say of which file a complaint is, if it is not of the image itself."""
    try:
        yield
    except UnreadableImage as error:
        raise UnreadableImage(f"{what} {location}: {error}" if what else str(error)) from error


class _Rows:
    """Rows of a page. What can be decoded whole is decoded when this is made."""

    def __init__(self, page: Page, channel: str | int, what: str, location: str):
        self._page, self._channel, self._of = page, channel, (what, location)
        self.missing = page.missing
        self._all: np.ndarray | None = None
        if page.piece > 0 and page.shape[0] * page.shape[1] <= WHOLE_PIXELS:
            self._all = grey_rows(page, 0, page.shape[0], channel)
        elif not page.in_strips:
            grey_rows(page, 0, 1, channel)  # decodes the page; colours are mixed band by band

    def rows(self, start: int, stop: int) -> np.ndarray:
        if self._all is not None:
            return self._all[start:stop]
        with _told(*self._of):
            return grey_rows(self._page, start, stop, self._channel)


def _bands(
    settings: DumpSettings, item: Item
) -> Iterator[tuple[int, int, np.ndarray, tuple[int, int]]]:
    """Yield the first and last row of bands and the patches in each, (row, column) in the image."""
    if item.stop == 0:
        place = np.array([[item.row, item.col]])
        yield item.row, item.row + item.height, place, (item.height, item.width)
        return
    tall = settings.grid.size[0]
    rows, cols = settings.grid.starts((item.height, item.width))
    rows = rows[item.first : item.stop] + item.row
    cols = cols + item.col
    start = 0
    while start < len(rows):
        stop = start + 1
        while (
            stop < len(rows)
            and (rows[stop] + tall - rows[start]) * item.cols <= BAND_PIXELS
            and (stop + 1 - start) * len(cols) <= _BAND_PATCHES
        ):
            stop += 1
        band = rows[start:stop]
        yield int(band[0]), int(band[-1]) + tall, positions_of(band, cols), settings.grid.size
        start = stop


def _cut(
    where: tuple, pixels: np.ndarray, known: np.ndarray | None, truth: np.ndarray | None,
    declared: tuple[float | None, ...],
) -> Cut:  # fmt: skip
    """Return the patches of a band with what is missing in it: by mask, by value, or NaN."""
    missing = missing_pixels(pixels, *declared)
    if missing is not None and missing.any():
        known = ~missing if known is None else known & ~missing
    if known is not None and known.all():
        known = None
    valid, infinities = known, None
    if pixels.dtype.kind == "f" and not (finite := np.isfinite(pixels)).all():
        infinities = np.isinf(pixels) if known is None else np.isinf(pixels) & known
        valid = finite if known is None else known & finite
    if infinities is not None and not infinities.any():
        infinities = None
    _, _, size, positions = where
    fractions = window_shares(None if valid is None else valid.astype(np.uint8), positions, size)
    if infinities is not None:  # their patches are rejected; labels of the others do not see them
        known = ~infinities if known is None else known & ~infinities
    if known is not None:
        pixels = np.ma.MaskedArray(pixels, ~known)
    return Cut(*where, fractions, pixels, truth, infinities)

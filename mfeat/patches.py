"""Cutting images into patches without copying, with positions and labels."""

from collections.abc import Iterator
from dataclasses import dataclass, replace
from typing import Any, NamedTuple

import numpy as np

from mfeat import _checks
from mfeat.counts import windows_of

EDGE_RULES = ("drop", "shift")
LABEL_RULES = ("majority", "any")


class PatchLabels(NamedTuple):
    """Labels of patches and the fraction of valid pixels that carry them.

    Attributes
    ----------
    labels : ndarray of shape (n,), of the label image's type
    fractions : ndarray of shape (n,), float64
    """

    labels: np.ndarray
    fractions: np.ndarray


@dataclass(frozen=True, eq=False)
class Patches:
    """Patches of one image: 2-D views by number, ready for `MinkowskiCurves`.

    Returned by `PatchGrid.cut`. Nothing is copied, so a change of the image shows in its patches.
    `patches[k]` is one patch, `patches[a:b]` are some of them, and `for` goes through them all.

    Attributes
    ----------
    image : ndarray of shape (h, w)
        The image; a masked array where a mask was given.
    size : (int, int)
        Rows and columns of each patch.
    positions : ndarray of shape (n, 2), int
        Row and column of each patch's top left pixel.
    valid_fractions : ndarray of shape (n,), float64
        Share of each patch's 2x2 windows whose four pixels are valid.
    left_out : ndarray of shape (m, 2), int
        Positions of the patches that had too few valid pixels.
    covered_fraction : float
        Share of the image's pixels that lie in at least one position of the grid.
    """

    image: np.ndarray
    size: tuple[int, int]
    positions: np.ndarray
    valid_fractions: np.ndarray
    left_out: np.ndarray
    covered_fraction: float

    def __len__(self) -> int:
        return len(self.positions)

    def __getitem__(self, k: Any) -> Any:
        if isinstance(k, slice):
            part = {name: getattr(self, name)[k] for name in ("positions", "valid_fractions")}
            return replace(self, **part)
        if isinstance(k, bool | np.bool_) or not isinstance(k, int | np.integer):
            raise TypeError(f"patches take an integer or a slice in brackets; got {k!r}")
        if not -len(self) <= k < len(self):
            raise IndexError(f"patch {k} does not exist; there are {len(self)}")
        row, col = self.positions[k]
        return self.image[row : row + self.size[0], col : col + self.size[1]]

    def __iter__(self) -> Iterator[np.ndarray]:
        return (self[k] for k in range(len(self)))

    def __repr__(self) -> str:
        return (
            f"Patches({len(self)} of {self.size[0]}x{self.size[1]} pixels, "
            f"{len(self.left_out)} left out, {self.covered_fraction:.1%} of the image covered)"
        )

    def label(
        self, label_image: Any, rule: str = "majority", *, background: Any = 0
    ) -> PatchLabels:
        """Label each patch from an image of labels, one per pixel.

        Parameters
        ----------
        label_image : array of bool or integers, of the image's shape
            Label of each pixel; missing pixels of the image, and masked labels, are not asked.
        rule : {"majority", "any"}, default "majority"
            "majority": the most frequent label (of equally frequent ones the smallest). "any": the
            most frequent label other than `background` if there is one, else `background`; so one
            defect pixel makes a defect patch.
        background : bool or int, default 0
            The label of sound pixels, for rule "any".

        Returns
        -------
        PatchLabels
            The labels, and the fraction of each patch's valid pixels that carry its label.

        Examples
        --------
        >>> import numpy as np
        >>> from mfeat import PatchGrid
        >>> truth = np.zeros((4, 8), dtype=int)
        >>> truth[1, 5] = 3
        >>> patches = PatchGrid(size=4).cut(np.arange(32.0).reshape(4, 8))
        >>> patches.label(truth, rule="any")
        PatchLabels(labels=array([0, 3]), fractions=array([1.    , 0.0625]))
        """
        _checks.choice("rule", rule, LABEL_RULES)
        label_image = _checks.as_array(label_image, "label_image")
        if label_image.dtype.kind not in "biu":
            raise TypeError(
                "label_image must hold bool or integers; got dtype "
                f"{label_image.dtype}. Encode names as integers first"
            )
        if label_image.shape != self.image.shape:
            raise ValueError(
                f"label_image has shape {label_image.shape}, the image {self.image.shape}"
            )
        _check_background(background, label_image.dtype)
        known = ~np.ma.getmaskarray(label_image) if np.ma.is_masked(label_image) else None
        valid = _checks.valid_pixels(self.image, known)
        found, codes = np.unique(np.asarray(label_image), return_inverse=True)
        codes = codes.reshape(label_image.shape)
        if valid is not None:
            codes[valid == 0] = len(found)  # counted apart, and dropped
        return self._most_frequent(found, codes, rule, background)

    def _most_frequent(
        self, found: np.ndarray, codes: np.ndarray, rule: str, background: Any
    ) -> PatchLabels:
        """Return each patch's label from an image of positions in `found`, the sorted labels."""
        labels = np.empty(len(self), dtype=found.dtype)
        fractions = np.empty(len(self))
        for k, (row, col) in enumerate(self.positions):
            inside = codes[row : row + self.size[0], col : col + self.size[1]]
            number = np.bincount(inside.ravel(), minlength=len(found) + 1)[: len(found)]
            total = number.sum()
            if total == 0:
                raise ValueError(
                    f"the patch at row {row}, column {col} has no valid pixel with a label; cut "
                    "with min_valid > 0, or label more pixels"
                )
            asked = number
            if rule == "any" and number[found != background].any():
                asked = np.where(found == background, 0, number)
            best = int(np.argmax(asked))
            labels[k] = found[best]
            fractions[k] = number[best] / total
        return PatchLabels(labels, fractions)


def _check_background(background: Any, dtype: np.dtype) -> None:
    if not isinstance(background, bool | np.bool_ | int | np.integer):
        raise TypeError(f"background must be a bool or an integer; got {background!r}")
    low, high = (0, 1) if dtype.kind == "b" else (np.iinfo(dtype).min, np.iinfo(dtype).max)
    if not low <= background <= high:
        raise ValueError(
            f"background must be a label that {dtype} can hold, {low} to {high}; got {background!r}"
        )


class PatchGrid:
    """A regular grid of patches.

    Parameters
    ----------
    size : int or (int, int), default 64
        Rows and columns of a patch, each >= 2.
    stride : int or (int, int), optional
        Step from patch to patch; default `size`, so that patches touch. A smaller stride overlaps.
    min_valid : float, default 0.0
        Smallest share of a patch's 2x2 windows with four valid pixels, 0 to 1. Patches below it are
        left out and listed in `Patches.left_out`.
    edge : {"drop", "shift"}, default "drop"
        What happens where the grid does not reach the last row or column: "drop" leaves the rest
        uncovered (`Patches.covered_fraction` tells), "shift" adds patches that end there.

    Examples
    --------
    >>> import numpy as np
    >>> from mfeat import PatchGrid
    >>> image = np.arange(100.0).reshape(10, 10)
    >>> image[:, 8:] = np.nan
    >>> grid = PatchGrid(size=4, min_valid=0.5, edge="shift")
    >>> patches = grid.cut(image)
    >>> patches
    Patches(6 of 4x4 pixels, 3 left out, 100.0% of the image covered)
    >>> patches.positions[-1]
    array([6, 4])
    >>> patches[0].base is not None
    True
    """

    def __init__(
        self, size: Any = 64, stride: Any = None, *, min_valid: float = 0.0, edge: str = "drop"
    ):
        self.size = _pair("size", size, 2)
        self.stride = self.size if stride is None else _pair("stride", stride, 1)
        self.min_valid = _checks.real("min_valid", min_valid, minimum=0.0, maximum=1.0)
        self.edge = _checks.choice("edge", edge, EDGE_RULES)

    def __repr__(self) -> str:
        return (
            f"PatchGrid(size={self.size}, stride={self.stride}, min_valid={self.min_valid}, "
            f"edge={self.edge!r})"
        )

    def positions(self, shape: tuple[int, int]) -> np.ndarray:
        """Return the top left pixels (n, 2) of the grid on an image of a shape, row by row.

        Examples
        --------
        >>> from mfeat import PatchGrid
        >>> PatchGrid(size=4, stride=3).positions((4, 8)).tolist()
        [[0, 0], [0, 3]]
        """
        return positions_of(*self.starts(shape))

    def starts(self, shape: tuple[int, int]) -> tuple[np.ndarray, np.ndarray]:
        """Return the rows and the columns at which patches start on an image of a shape.

        Examples
        --------
        >>> from mfeat import PatchGrid
        >>> PatchGrid(size=4, stride=3, edge="shift").starts((4, 9))
        (array([0]), array([0, 3, 5]))
        """
        shape = _pair("shape", shape, 1)
        if min(shape[0] - self.size[0], shape[1] - self.size[1]) < 0:
            raise ValueError(
                f"an image of {shape[0]}x{shape[1]} pixels is smaller than a patch of "
                f"{self.size[0]}x{self.size[1]}; use a smaller size"
            )
        rows, cols = (
            self._starts(length, size, stride)
            for length, size, stride in zip(shape, self.size, self.stride, strict=True)
        )
        return rows, cols

    def cut(self, image: Any, mask: Any = None) -> Patches:
        """Cut an image into patches, as views.

        Parameters
        ----------
        image : array_like of shape (h, w)
            Grey image or height map, as for `minkowski_curves`.
        mask : array of bool of shape (h, w), optional
            True where a pixel is valid; the patches are then masked arrays.

        Returns
        -------
        Patches
            A sequence of 2-D views for `MinkowskiCurves`.

        Raises
        ------
        ValueError
            If the image is smaller than a patch, or holds infinities, or the mask does not fit.

        Examples
        --------
        >>> import numpy as np
        >>> from mfeat import PatchGrid
        >>> image = np.zeros((20, 30), dtype=np.uint8)
        >>> patches = PatchGrid(size=10, stride=5).cut(image)
        >>> len(patches), patches[0].shape, np.shares_memory(patches[0], image)
        (15, (10, 10), True)
        """
        image = _checks.image(image)
        positions = self.positions(image.shape)
        valid = _checks.valid_pixels(image, _checks.valid_mask(mask, image.shape))
        if mask is not None:
            image = np.ma.MaskedArray(image, mask=(valid == 0) if valid is not None else False)
        fractions = window_shares(valid, positions, self.size)
        kept = fractions >= self.min_valid
        return Patches(
            image=image,
            size=self.size,
            positions=positions[kept],
            valid_fractions=fractions[kept],
            left_out=positions[~kept],
            covered_fraction=self._covered(image.shape, positions),
        )

    def _starts(self, length: int, size: int, stride: int) -> np.ndarray:
        starts = np.arange(0, length - size + 1, stride)
        if self.edge == "shift" and starts[-1] + size < length:
            starts = np.append(starts, length - size)
        return starts

    def _covered(self, shape: tuple[int, int], positions: np.ndarray) -> float:
        share = 1.0
        for axis in (0, 1):
            reached = np.zeros(shape[axis], dtype=bool)
            for start in np.unique(positions[:, axis]):
                reached[start : start + self.size[axis]] = True
            share *= reached.mean()
        return float(share)


def positions_of(rows: np.ndarray, cols: np.ndarray) -> np.ndarray:
    """Return all pairs (n, 2) of starting rows and columns, row by row."""
    return np.stack(np.meshgrid(rows, cols, indexing="ij"), axis=-1).reshape(-1, 2)


def window_shares(
    valid: np.ndarray | None, positions: np.ndarray, size: tuple[int, int]
) -> np.ndarray:
    """Return valid windows of each patch over its windows, from sums over rectangles.

    `valid` is the map of valid pixels of the image as uint8, None where all are.
    """
    if valid is None:
        return np.ones(len(positions))
    ok, _ = windows_of(valid)
    # sums[i, j]: counting windows whose lower right pixel lies above row i, left of column j
    sums = np.zeros((valid.shape[0] + 1, valid.shape[1] + 1), dtype=np.int64)
    np.cumsum(np.cumsum(ok[:-1, :-1], axis=0, dtype=np.int64), axis=1, out=sums[1:, 1:])
    top, left = positions[:, 0] + 1, positions[:, 1] + 1
    bottom, right = positions[:, 0] + size[0], positions[:, 1] + size[1]
    inside = sums[bottom, right] - sums[top, right] - sums[bottom, left] + sums[top, left]
    return inside / ((size[0] - 1) * (size[1] - 1))


def _pair(name: str, value: Any, minimum: int) -> tuple[int, int]:
    if isinstance(value, tuple | list | np.ndarray) and np.ndim(value) > 0:
        if len(value) != 2:
            raise ValueError(f"{name} must be one integer or (rows, columns); got {value!r}")
        return (
            _checks.integer(f"{name}[0]", value[0], minimum=minimum),
            _checks.integer(f"{name}[1]", value[1], minimum=minimum),
        )
    number = _checks.integer(name, value, minimum=minimum)
    return (number, number)

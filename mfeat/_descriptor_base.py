"""What all texture descriptors share: input checks, missing pixels, workers, standard values."""

from collections.abc import Iterable, Iterator
from itertools import pairwise
from typing import Any, ClassVar

import numpy as np
from joblib import Parallel, delayed
from sklearn.base import BaseEstimator, TransformerMixin
from sklearn.exceptions import NotFittedError
from sklearn.utils._param_validation import StrOptions

from mfeat import _checks, stacks
from mfeat.smoothing import fill_nearest

# Order statistics that each training patch gives for a value range, so that all weigh alike.
_PER_PATCH = 101

# Shares of the pooled training values outside `range_`, on either side: stray pixels of a sensor
# would otherwise stretch it.
_STRAY = 0.005


class TextureDescriptor(TransformerMixin, BaseEstimator):
    """Base of the descriptors: one row of numbers a patch, of a length that settings decide.

    A descriptor gives `_names`, `_smallest_side` and `_describe`; one that learns says so in
    `_learns` and stores what it learned in `_learn`. Settings that scikit-learn cannot word are
    checked in `_check_settings`.
    """

    _parameter_constraints: ClassVar[dict] = {
        "location_scale": ["boolean"],
        "missing": [StrOptions({"error", "nearest"})],
        "n_jobs": "no_validation",
    }

    def fit(self, X: Any, y: Any = None) -> "TextureDescriptor":
        """Check the parameters and the patches; learn what the descriptor learns.

        Parameters
        ----------
        X : array of shape (n, h, w), or list of 2-D arrays
            Patches of bool, integers or floating-point numbers.
        y : ignored

        Returns
        -------
        self
        """
        self._check()
        groups = self._groups(X)
        stacked = (self._pixels(group) for group in groups)
        if self._learns():
            self._learn(stacked)
        else:
            for _ in stacked:  # refuses here what `transform` would refuse
                pass
        return self

    def transform(self, X: Any) -> np.ndarray:
        """Return one vector a patch.

        Parameters
        ----------
        X : array of shape (n, h, w), or list of 2-D arrays
            Patches of bool, integers or floating-point numbers.

        Returns
        -------
        ndarray of shape (n, n_features), float32

        Raises
        ------
        ValueError
            For patches that are too small, hold infinities, have no valid pixel, or have missing
            pixels under ``missing="error"``.
        NotFittedError
            Where something is learned, before `fit`.
        """
        self._check()
        if self._learns() and not self.__sklearn_is_fitted__():
            raise NotFittedError(
                f"{type(self).__name__} with these settings learns from training patches: call "
                "fit before this"
            )
        groups = self._groups(X)
        out = np.empty((sum(len(g.images) for g in groups), self._length()), np.float32)
        jobs = self.n_jobs if self.n_jobs is None else min(int(self.n_jobs), len(groups))
        parallel = Parallel(n_jobs=jobs, prefer="threads")
        done = parallel(delayed(self._rows)(group) for group in groups)
        for group, rows in zip(groups, done, strict=True):
            out[group.positions] = rows
        return out

    def get_feature_names_out(self, input_features: Any = None) -> np.ndarray:
        """Return the names of the vector's numbers.

        Parameters
        ----------
        input_features : ignored
            Present for scikit-learn's interface.

        Returns
        -------
        ndarray of str objects
        """
        self._check()
        return np.array(self._all_names(), dtype=object)

    # What a descriptor gives ----------------------------------------------------------------

    def _names(self) -> list[str]:
        """Return the names of the numbers, in order."""
        raise NotImplementedError

    def _smallest_side(self) -> int:
        """Return the smallest number of rows and of columns of a patch."""
        raise NotImplementedError

    def _describe(self, pixels: np.ndarray) -> np.ndarray:
        """Return rows (n, n_features) of complete patches (n, h, w), float64."""
        raise NotImplementedError

    def _check_settings(self) -> None:
        """Check settings beyond `_parameter_constraints`."""

    def _learns(self) -> bool:
        """Return whether `fit` learns anything."""
        return False

    def _learn(self, stacked: Iterable[np.ndarray]) -> None:
        """Learn from the training patches, given as stacks (n, h, w)."""
        self.range_ = value_range(stacked)

    # What is done for it --------------------------------------------------------------------

    def _check(self) -> None:
        self._validate_params()
        if self.n_jobs is not None and not _checks.integer("n_jobs", self.n_jobs, minimum=-(2**31)):
            raise ValueError(
                "n_jobs must be None, >= 1, or <= -1 to count from all processors; got 0"
            )
        self._check_settings()

    def _groups(self, X: Any) -> list[stacks.Group]:
        """Return the checked patches, sorted into groups of one shape and type."""
        refuse_channels(X)
        patches = stacks.collect(X, None)
        side = self._smallest_side()
        small = [k for k, (image,) in enumerate(patches.images) if min(image.shape) < side]
        if small:
            shape = patches.images[small[0]][0].shape
            raise ValueError(
                f"{type(self).__name__} with these settings needs patches of at least "
                f"{side}x{side} pixels; too small: {_some(small)}, X[{small[0]}] with shape "
                f"{shape}. Cut larger patches, or choose smaller scales"
            )
        return stacks.group_patches(patches, self._length())

    def _pixels(self, group: stacks.Group) -> np.ndarray:
        """Return the patches of a group as float64, missing pixels filled if that is wanted."""
        parts = group.stacks()
        shape = group.images[0].shape
        pixels = np.empty((len(group.images), *shape))
        for part in parts:
            pixels[part.places] = part.values
            if part.valid is None:
                continue
            places = [group.positions[place] for place in part.places]
            empty = [k for k, valid in zip(places, part.valid, strict=True) if not valid.any()]
            if empty:
                raise ValueError(f"no valid pixel in {_some(empty)}. Leave these patches out")
            if self.missing == "error":
                raise ValueError(
                    f"missing pixels in {_some(places)}; {type(self).__name__} knows none. Leave "
                    'these patches out, or set missing="nearest" to give each missing pixel the '
                    "value of the nearest valid one"
                )
            for place, valid in zip(part.places, part.valid, strict=True):
                pixels[place] = fill_nearest(pixels[place], valid.astype(bool))
        return pixels

    def _rows(self, group: stacks.Group) -> np.ndarray:
        pixels = self._pixels(group)
        rows = self._describe(pixels)
        if not self.location_scale:
            return rows
        head = mean_and_deviation(pixels)
        size, limits = np.abs(head), np.finfo(np.float32)
        fits = ((size <= limits.max) & ((size >= limits.tiny) | (size == 0))).all(axis=1)
        if not fits.all():
            k = int(np.argmin(fits))
            raise ValueError(
                f"{group.name(k)} has mean {head[k, 0]:.3g} and standard deviation "
                f"{head[k, 1]:.3g}, which float32 cannot hold. Set no-data values to NaN, use "
                "another unit, or set location_scale=False"
            )
        return np.concatenate([head, rows], axis=1)

    def _all_names(self) -> list[str]:
        return ["mean", "std"] * self.location_scale + self._names()

    def _length(self) -> int:
        return len(self._all_names())

    def __sklearn_is_fitted__(self) -> bool:
        return not self._learns() or hasattr(self, "range_")

    def __sklearn_tags__(self):
        tags = super().__sklearn_tags__()
        tags.input_tags.two_d_array = False
        tags.input_tags.three_d_array = True
        tags.input_tags.allow_nan = self.missing == "nearest"
        tags.requires_fit = self._learns()
        tags.transformer_tags.preserves_dtype = []
        return tags


def refuse_channels(X: Any) -> None:
    """Refuse colour images, for which a caller has to choose."""
    shape = np.shape(X) if isinstance(X, np.ndarray) else ()
    if isinstance(X, list | tuple):
        shape = next((s for s in (getattr(x, "shape", ()) for x in X) if len(s) == 3), ())
    if len(shape) == (4 if isinstance(X, np.ndarray) else 3):
        raise ValueError(
            f"patches of shape {shape} have channels; descriptors take grey values only. Give one "
            "channel, e.g. X[..., 0], as an array (n, h, w) or a list of 2-D arrays"
        )


def _some(positions: list[int]) -> str:
    """Return "X[3], X[7]", cut short where there are many."""
    shown = ", ".join(f"X[{k}]" for k in sorted(positions)[:5])
    return shown + (f" and {len(positions) - 5} more" if len(positions) > 5 else "")


def flattened(images: np.ndarray) -> np.ndarray:
    """Return images (n, h, w) as rows (n, h w)."""
    return images.reshape(len(images), -1)


def standardised(pixels: np.ndarray) -> np.ndarray:
    """Return patches (n, h, w) with mean 0 and standard deviation 1; flat ones become 0.

    The middle of the range goes first: a flat patch gives exact zeros, and patches far from zero
    lose no digits.
    """
    flat = flattened(pixels)
    low, high = flat.min(axis=1), flat.max(axis=1)
    # the range becomes 2, so squares neither overflow nor vanish
    half = np.where(high > low, high / 2 - low / 2, 1.0)
    centred = (flat - (low / 2 + high / 2)[:, None]) / half[:, None]
    centred -= centred.mean(axis=1)[:, None]
    deviation = np.sqrt(np.square(centred).mean(axis=1))
    centred[low == high] = 0
    return (centred / np.where(deviation > 0, deviation, 1)[:, None]).reshape(pixels.shape)


def mean_and_deviation(pixels: np.ndarray) -> np.ndarray:
    """Return mean and standard deviation (n, 2) of patches (n, h, w)."""
    flat = flattened(pixels)
    middle = flat.min(axis=1) / 2 + flat.max(axis=1) / 2
    centred = flat - middle[:, None]
    mean = centred.mean(axis=1)
    deviation = np.sqrt(np.square(centred - mean[:, None]).mean(axis=1))
    return np.stack([middle + mean, deviation], axis=1)


def value_range(stacked: Iterable[np.ndarray]) -> tuple[float, float]:
    """Return the central 99 % of the training patches' values, each patch with equal weight."""
    shares = np.linspace(0, 1, _PER_PATCH)
    pool = [np.quantile(flattened(s), shares, axis=1).ravel() for s in stacked]
    low, high = np.quantile(np.concatenate(pool), [_STRAY, 1 - _STRAY])
    return float(low), float(high)


def binned(pixels: np.ndarray, low: float, high: float, bins: int) -> np.ndarray:
    """Return the bin (0 to bins - 1) of each value; the outermost bins are open to the outside."""
    width = (high - low) / bins
    scaled = (pixels - low) / (width if width > 0 else 1.0)
    return np.clip(np.floor(scaled), 0, bins - 1).astype(np.intp)


def ranked(pixels: np.ndarray, bins: int) -> np.ndarray:
    """Return bins of equal probability in each patch of (n, h, w); equal pixels stay together.

    A pixel's bin is that of the middle of the ranks of all pixels equal to it.
    """
    out = np.empty(pixels.shape, np.intp)
    for place, patch in enumerate(pixels):
        order = np.sort(patch, axis=None)
        below = np.searchsorted(order, patch, side="left")
        reached = np.searchsorted(order, patch, side="right")
        out[place] = np.minimum(bins * (below + reached) // (2 * patch.size), bins - 1)
    return out


def positive_integers(name: str, values: Any) -> tuple[int, ...]:
    """Return a sequence of integers >= 1, ascending; it may not be empty."""
    numbers = tuple(_checks.integer(f"{name}[{k}]", v, minimum=1) for k, v in enumerate(values))
    return _ascending(name, numbers)


def positive_numbers(name: str, values: Any) -> tuple[float, ...]:
    """Return a sequence of numbers > 0, ascending; it may not be empty."""
    numbers = tuple(_checks.real(f"{name}[{k}]", v, above=0.0) for k, v in enumerate(values))
    return _ascending(name, numbers)


def _ascending(name: str, numbers: tuple) -> tuple:
    if not numbers:
        raise ValueError(f"{name} must hold at least one number; got {numbers!r}")
    if any(b <= a for a, b in pairwise(numbers)):
        raise ValueError(f"{name} must ascend strictly; got {numbers!r}")
    return numbers


def one_by_one(pixels: np.ndarray) -> Iterator[np.ndarray]:
    """Yield standardised patches as float32; single ones, for then no batch changes rounding."""
    yield from standardised(pixels).astype(np.float32)

"""Patches as users hold them, sorted into stacks of one shape, type and completeness.

The vectors of a patch are the same in whatever stack it is computed, so stacks can be cut for
speed and memory alone.
"""

from dataclasses import dataclass
from typing import Any, NamedTuple

import numpy as np

from mfeat import _checks, _kernels

#: Pixels of a stack; bounds the memory of a worker and is small enough for the processor's cache.
STACK_PIXELS = 1 << 18

#: Counts (of all statistics, levels and fields) of a stack; bounds memory where levels are many.
STACK_COUNTS = 1 << 19


@dataclass(frozen=True)
class Collected:
    """Checked patches: `images[k][c]` is channel c of patch k, a 2-D array."""

    images: list[list[np.ndarray]]
    channels: tuple[str, ...] | None

    @property
    def n_channels(self) -> int:
        """Number of channels, 1 where they have no names."""
        return 1 if self.channels is None else len(self.channels)

    def __len__(self) -> int:
        return len(self.images)


class Stack(NamedTuple):
    """Images of one shape and type: `places` in their group, pixels, valid pixels (None: all)."""

    places: np.ndarray
    values: np.ndarray
    valid: np.ndarray | None


@dataclass(frozen=True)
class Group:
    """Images of one channel, shape and type, in the order of X; a unit of parallel work.

    The images are views of the user's arrays; a worker copies those of its own group only.
    """

    channel: int
    channel_name: str | None
    positions: list[int]
    images: list[np.ndarray]

    def name(self, place: int) -> str:
        """Return how messages call an image: "X[3]", or "X[3] channel 'red'"."""
        channel = "" if self.channel_name is None else f" channel {self.channel_name!r}"
        return f"X[{self.positions[place]}]{channel}"

    def stacks(self) -> list[Stack]:
        """Return the images stacked: those without missing pixels, then those with some."""
        values = _checks.compiled_type(np.stack([np.asarray(image) for image in self.images]))
        valid = self._valid(values)
        _checks.representable(values, valid, self.name)
        if valid is None:
            return [Stack(np.arange(len(values)), values, None)]
        complete = valid.all(axis=(1, 2))
        parts = []
        if complete.any():
            parts.append(Stack(np.flatnonzero(complete), _part(values, complete), None))
        if not complete.all():
            some = ~complete
            parts.append(Stack(np.flatnonzero(some), _part(values, some), valid[some]))
        return parts

    def _valid(self, values: np.ndarray) -> np.ndarray | None:
        """Return the valid pixels of all images as uint8, or None where every pixel is valid."""
        masked = any(isinstance(image, np.ma.MaskedArray) for image in self.images)
        if not masked and (values.dtype.kind != "f" or np.isfinite(values).all()):
            return None
        valid = np.ones(values.shape, dtype=np.uint8)
        for place, image in enumerate(self.images):
            one = _checks.valid_pixels(image, None, self.name(place))
            if one is not None:
                valid[place] = one
        return valid


def _part(values: np.ndarray, chosen: np.ndarray) -> np.ndarray:
    return _checks.read_only(np.ascontiguousarray(values[chosen]))


def collect(X: Any, channels: Any) -> Collected:
    """Check X and return its patches without copying pixels."""
    if isinstance(X, list | tuple) or (isinstance(X, np.ndarray) and X.dtype == object):
        return _from_list(X, channels)
    if not isinstance(X, np.ndarray):
        if hasattr(X, "toarray"):
            raise TypeError(
                f"X is a sparse matrix ({type(X).__name__}); patches are dense arrays: give an "
                "array of shape (n, h, w) or a list of 2-D arrays"
            )
        if isinstance(X, dict):  # after sparse matrices, some of which are dicts
            raise TypeError("X is a dict; give the images in a list, e.g. list(X.values())")
        if hasattr(X, "__array__"):
            return collect(np.asarray(X), channels)
        if isinstance(X, str | bytes) or not hasattr(X, "__len__"):
            raise TypeError(
                "X must be an array of shape (n, h, w) or (n, h, w, c), or a list of 2-D arrays; "
                f"got {type(X).__name__}"
            )
        return collect(list(X), channels)
    if X.ndim not in (3, 4):
        hint = ""
        if X.ndim == 2:
            hint = ". For one image write X[np.newaxis], or use minkowski_curves(image)"
        raise ValueError(
            "X must have shape (n, h, w) or, with channels, (n, h, w, c); "
            f"got an array with {X.ndim} dimensions, shape {X.shape}{hint}"
        )
    if len(X) == 0:
        raise ValueError(
            f"X holds no patch: found 0 sample(s) (shape={X.shape}) while a minimum "
            "of 1 is required"
        )
    number = _n_channels(channels)
    if X.ndim == 4 and channels is None:
        raise ValueError(
            f"X has shape {X.shape}, so {X.shape[3]} channels, but channels is None; name them, "
            f"e.g. channels={tuple(f'c{k}' for k in range(min(X.shape[3], 4)))!r}"
        )
    if X.ndim == 4 and X.shape[3] != number:
        raise ValueError(
            f"X has {X.shape[3]} channels (shape {X.shape}), but channels names {number}: "
            f"{tuple(channels)!r}"
        )
    if X.ndim == 3 and channels is not None:
        raise ValueError(
            f"channels={tuple(channels)!r} needs X of shape (n, h, w, {number}); got {X.shape}"
        )
    _checks.image(X[0] if X.ndim == 3 else X[0, :, :, 0], "X[0]")  # type and size of them all
    if X.ndim == 3:
        return Collected([[image] for image in X], None)
    return Collected([[image[:, :, c] for c in range(number)] for image in X], tuple(channels))


def _n_channels(channels: Any) -> int:
    return 1 if channels is None else len(channels)


def _from_list(X: Any, channels: Any) -> Collected:
    if len(X) == 0:
        raise ValueError("X holds no patch: the list is empty, found 0 sample(s)")
    number = _n_channels(channels)
    images = []
    for k, patch in enumerate(X):
        patch = _checks.as_array(patch, f"X[{k}]")
        if channels is None:
            if patch.ndim == 3:
                raise ValueError(
                    f"X[{k}] has shape {patch.shape}: three dimensions mean channels, but channels "
                    "is None. Name them, or give 2-D arrays"
                )
            images.append([_checks.image(patch, f"X[{k}]")])
            continue
        if patch.ndim != 3 or patch.shape[2] != number:
            raise ValueError(
                f"X[{k}] has shape {patch.shape}, but channels={tuple(channels)!r} needs "
                f"(h, w, {number}) for every patch"
            )
        images.append([_checks.image(patch[:, :, c], f"X[{k}]") for c in range(number)])
    return Collected(images, None if channels is None else tuple(channels))


def group_patches(patches: Collected, table_size: int) -> list[Group]:
    """Sort patches into groups that are small enough to be computed at once.

    A group has at most `STACK_PIXELS` pixels and, with `table_size` counts kept of each patch,
    `STACK_COUNTS` counts; or it is a single patch.
    """
    growing: dict[tuple, Group] = {}
    done: list[Group] = []
    for position, channels in enumerate(patches.images):
        for channel, image in enumerate(channels):
            key = (channel, image.shape, image.dtype)
            name = None if patches.channels is None else patches.channels[channel]
            entry = growing.setdefault(key, Group(channel, name, [], []))
            entry.positions.append(position)
            entry.images.append(image)
            more = len(entry.images) + 1
            if more * image.size > STACK_PIXELS or more * table_size > STACK_COUNTS:
                done.append(growing.pop(key))
    return done + list(growing.values())


def valid_fractions(valid: np.ndarray) -> np.ndarray:
    """Return the share of 2x2 windows with four valid pixels of each image of a stack."""
    rows, cols = valid.shape[1:]
    ok = np.empty((rows + 1, cols + 1), dtype=np.uint8)
    return np.array([_kernels.windows_ok(v, ok) for v in valid]) / ((rows - 1) * (cols - 1))

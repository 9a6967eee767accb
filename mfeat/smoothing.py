"""Gaussian smoothing of stacks of images, over missing pixels too; tilt; moments.

Smoothing agrees with scipy.ndimage.gaussian_filter(mode="reflect", truncate=4.0) to float64
rounding where nothing is missing.
"""

import math
from functools import lru_cache

import numpy as np
from scipy import ndimage

from mfeat import _checks, _field_kernels, _kernels

#: Gaussian kernels reach this many standard deviations, as scipy.ndimage does by default.
TRUNCATE = 4.0


def sigma_pixels(scale: float, pitch: tuple[float, float], scale_unit: str) -> tuple[float, float]:
    """Return the Gaussian's standard deviation in pixels along rows' axis 0 and axis 1.

    In unit "length" the scale is in the unit of the pitch; in unit "pitch" it is in multiples of
    the pitch (for rectangular pixels: of the geometric mean of the two pitches).
    """
    dy, dx = pitch
    length = scale if scale_unit == "length" else scale * math.sqrt(dy * dx)
    return length / dy, length / dx


@lru_cache(maxsize=256)
def gaussian_weights(sigma: float) -> np.ndarray:
    """Return half of the sampled Gaussian kernel, centre first; its mirror image sums to 1 with it.

    Examples
    --------
    >>> from mfeat.smoothing import gaussian_weights
    >>> weights = gaussian_weights(1.0)
    >>> len(weights), round(float(weights[0] + 2 * weights[1:].sum()), 12)
    (5, 1.0)
    """
    if sigma == 0.0:
        return _checks.read_only(np.ones(1))
    distance = np.arange(int(TRUNCATE * sigma + 0.5) + 1)
    weights = np.exp(-0.5 * (distance / sigma) ** 2)
    return _checks.read_only(weights / (weights[0] + 2.0 * weights[1:].sum()))


def fill_nearest(image: np.ndarray, valid: np.ndarray) -> np.ndarray:
    """Return an image whose missing pixels have the value of the nearest valid pixel."""
    nearest = ndimage.distance_transform_edt(~valid, return_distances=False, return_indices=True)
    return image[tuple(nearest)]


def moments_of(values: np.ndarray, valid: np.ndarray) -> tuple[np.ndarray, np.ndarray]:
    """Return mean and standard deviation of each image of a stack; 0 where it is empty."""
    mean, deviation = np.empty(len(values)), np.empty(len(values))
    scratch = np.empty((2, values.shape[2] + 1))
    _kernels.moments(values, valid, scratch[0], scratch[1], mean, deviation)
    return np.nan_to_num(mean), np.nan_to_num(deviation)


class Smoothings:
    """Gaussian smoothings of one stack, each computed once and shared between the families.

    Attributes
    ----------
    values, valid : ndarray of shape (n, h, w)
        Pixels as they are, and where they are valid (uint8).
    missing : bool
        Whether some pixel is not valid.
    offset : ndarray of shape (n,)
        Middle of the range of each image, subtracted before anything is computed.
    error : ndarray of shape (n,)
        Bound of the rounding error of what is computed.
    constant : ndarray of shape (n,), bool
        Which images have equal pixels.
    pitch, scale_unit, remove_tilt
        As in `mfeat.fields.prepared`.
    """

    def __init__(
        self, *, values, valid, missing, offset, error, constant, pitch, scale_unit, remove_tilt
    ):
        self.values = values
        self.valid = valid
        self.missing = missing
        self.offset = offset
        self.error = error
        self.constant = constant
        self.pitch = pitch
        self.scale_unit = scale_unit
        self.remove_tilt = remove_tilt
        self._done: dict[float, np.ndarray] = {}

    def centred(self) -> np.ndarray:
        """Return the images minus their offsets, float64, zero where pixels are missing.

        They are levelled if that is asked for.
        """
        if 0.0 not in self._done:
            centred = self.values - self.offset[:, None, None]
            if self.missing:
                centred[self.valid == 0] = 0.0
            if self.remove_tilt:
                level(centred, self.valid)
            self._done[0.0] = centred
        return self._done[0.0]

    def at(self, scale: float) -> np.ndarray:
        """Return the centred images smoothed at a scale; scale 0 leaves them as they are."""
        if scale == 0.0:
            return self.centred()
        if scale not in self._done:
            [self._done[scale]] = self.smoothed(scale, self.centred())
        return self._done[scale]

    def smoothed(self, scale: float, *stacks: np.ndarray) -> list[np.ndarray]:
        """Return stacks smoothed at a scale, over missing pixels by normalised convolution."""
        found = [self._smooth(stack, scale) for stack in stacks]
        if self.missing:
            support = self._smooth(self.valid.astype(np.float64), scale)
            for smoothed in found:
                _field_kernels.normalise_stack(smoothed, support, self.valid)
        return found

    def _smooth(self, stack: np.ndarray, scale: float) -> np.ndarray:
        sigma_rows, sigma_cols = sigma_pixels(scale, self.pitch, self.scale_unit)
        along_columns, along_rows = gaussian_weights(sigma_rows), gaussian_weights(sigma_cols)
        padded = np.empty(stack.shape[2] + 2 * (len(along_rows) - 1))
        half = np.empty(stack.shape[1:])
        out = np.empty_like(stack)
        _field_kernels.smooth_stack(stack, along_rows, along_columns, padded, half, out)
        return out


def level(images: np.ndarray, valid: np.ndarray) -> None:
    """Subtract the slopes of each image's least-squares plane in place; its mean stays.

    Least squares by normal equations; source: A. M. Legendre, Nouvelles methodes pour la
    determination des orbites des cometes (1805), from memory. Images (n, h, w) are zero where they
    are missing, and stay so. Where the valid pixels do not span a plane, the least steep of the
    best ones is taken.
    """
    y, x = (np.arange(side) - (side - 1) / 2 for side in images.shape[1:])
    in_rows, in_columns = valid.sum(axis=2, dtype=float), valid.sum(axis=1, dtype=float)
    count = np.maximum(in_rows.sum(axis=1), 1.0)
    mean_y, mean_x = in_rows @ y / count, in_columns @ x / count
    # moments about the centre of the valid pixels, where the constant separates from the slopes
    yy = in_rows @ y**2 - count * mean_y**2
    xx = in_columns @ x**2 - count * mean_x**2
    xy = np.einsum("nij,i,j->n", valid, y, x, optimize=True) - count * mean_y * mean_x
    total = images.sum(axis=(1, 2))
    # not a matrix product: its last bit would depend on the number of images
    yz = (images.sum(axis=2) * y).sum(axis=1) - mean_y * total
    xz = (images.sum(axis=1) * x).sum(axis=1) - mean_x * total
    matrix = np.stack([yy, xy, xy, xx], axis=-1).reshape(-1, 2, 2)
    slopes = np.linalg.pinv(matrix, hermitian=True) @ np.stack([yz, xz], axis=-1)[:, :, None]
    for image, where, (down, across), my, mx in zip(
        images, valid, slopes[:, :, 0], mean_y, mean_x, strict=True
    ):
        image -= np.add.outer(down * (y - my), across * (x - mx))
        image[where == 0] = 0.0

"""Matched smoothing: as much of it for each image as brings its detail to a given length.

The length of detail of an image is the root mean square of its gradient over that of its curvature
(minus half the Laplacian). It is made of the spectral moments of a random surface (M. S.
Longuet-Higgins, The statistical analysis of a random, moving surface, Phil. Trans. R. Soc. A 249
(1957), 321-387; P. R. Nayak, Random process model of rough surfaces, J. Lubrication Technology 93
(1971), 398-407), and is l for an isotropic Gaussian field of covariance s^2 exp(-r^2/(2 l^2)):
E|grad f|^2 = 2 s^2/l^2, and E(Laplacian f)^2 = 8 s^2/l^4.

Smoothing makes it grow, so there is one Gaussian that makes it a given length. An image that is out
of focus needs less of that, one that is noisier needs more, and what is left is alike.
"""

import math
from collections.abc import Callable

import numpy as np

from mfeat import _field_kernels
from mfeat.smoothing import TRUNCATE, Smoothings, moments_of, sigma_pixels

#: Gaussians that are tried, in pitches (of rectangular pixels: the geometric mean). Between two of
#: them the right one is interpolated.
LADDER = (
    *(0.0, 0.6, 0.8, 1.1, 1.5, 2.1, 2.9, 4.0, 5.6, 8.0, 11.0, 16.0),
    *(22.0, 32.0, 45.0, 64.0, 90.0, 128.0, 181.0, 256.0, 362.0, 512.0),
)

#: Gaussians narrower than this many pixels leave pixels as they are (exp(-8) = 3e-4 at a
#: neighbour).
SMALLEST_SIGMA = 0.25

#: No Gaussian is wider than this share of an image's shorter side: little would be left.
WIDEST_GAUSSIAN = 0.25

_NO_LENGTH = 1e300  # stands for the length of detail of an image without relief

# A pixel and the window of its slope smooth a little by themselves: this variance, in pitches^2,
# is added to that of the Gaussian, so that logarithms of scales go down to no smoothing at all.
_OWN_VARIANCE = 0.35


def roughness(
    values: np.ndarray, valid: np.ndarray, pitch: tuple[float, float]
) -> tuple[np.ndarray, np.ndarray, np.ndarray]:
    """Return the root mean squares of deviation, gradient and curvature of a stack (n, h, w).

    Gradient and curvature are those of the fields of these names; 0 where there is none.
    """
    deviation = moments_of(values, valid)[1]
    slope = np.sqrt(2.0 * mean_square_slopes(values, valid, pitch))
    count, rows, cols = values.shape
    curvature = np.zeros((count, max(rows - 2, 0), max(cols - 2, 0)))
    defined = np.zeros(curvature.shape, dtype=np.uint8)
    _field_kernels.curvature_stack(values, valid, pitch[0], pitch[1], curvature, defined)
    np.square(curvature, out=curvature)
    return deviation, slope, np.sqrt(moments_of(curvature, defined)[0])


def mean_square_slopes(
    values: np.ndarray, valid: np.ndarray, pitch: tuple[float, float]
) -> np.ndarray:
    """Return half the mean square of the gradient of each image of a stack: tau of the theory."""
    count, rows, cols = values.shape
    slope = np.empty((count, rows - 1, cols - 1))
    defined = np.empty(slope.shape, dtype=np.uint8)
    _field_kernels.slope_stack(values, valid, pitch[0], pitch[1], slope, defined)
    np.square(slope, out=slope)
    return moments_of(slope, defined)[0] / 2.0


def matched_sigmas(
    lengths: tuple[float, ...],
    measure: Callable[[float], np.ndarray],
    count: int,
    widest: float,
) -> dict[float, np.ndarray]:
    """Return the Gaussian in pitches, for each length and image, that gives the image that length.

    Parameters
    ----------
    lengths : tuple of float
        Wanted lengths of detail.
    measure : callable
        Gives the lengths of all images after a Gaussian of so many pitches.
    count : int
        Number of images.
    widest : float
        No Gaussian is wider than this.

    Returns
    -------
    dict of float to ndarray of shape (count,)
        0 where the image has that length already, `widest` where nothing that is allowed gives it.
    """
    found = {length: np.full(count, np.nan) for length in lengths}
    below_sigma, below = 0.0, np.log(measure(0.0))
    for length, own in found.items():
        own[np.log(length) <= below] = 0.0
    rungs = [sigma for sigma in LADDER if 0.0 < sigma < widest] + [widest]
    for sigma in rungs:
        if not any(np.isnan(own).any() for own in found.values()):
            break
        here = np.maximum(np.log(measure(sigma)), below + 1e-9)  # it must grow
        low, high = (np.log(wide**2 + _OWN_VARIANCE) for wide in (below_sigma, sigma))
        for length, own in found.items():
            share = (np.log(length) - below) / (here - below)
            between = np.isnan(own) & (share <= 1.0)
            position = low + np.clip(share, 0.0, 1.0) * (high - low)
            exact = np.sqrt(np.maximum(np.exp(position) - _OWN_VARIANCE, 0.0))
            own[between] = exact[between]
        below_sigma, below = sigma, here
    for own in found.values():
        own[np.isnan(own)] = widest
        own[own < SMALLEST_SIGMA] = 0.0
    return found


class MatchedSmoothings:
    """Smoothings by which each image of a stack gets the length of detail that a scale names."""

    def __init__(self, pixels: Smoothings, lengths: tuple[float, ...]):
        self._pixels = pixels
        count, *sides = pixels.valid.shape
        self._unit = 1.0 if pixels.scale_unit == "pitch" else math.sqrt(math.prod(pixels.pitch))
        per_pitch = sigma_pixels(1.0, pixels.pitch, "pitch")
        self._sigmas = matched_sigmas(
            tuple(length / self._unit for length in lengths),
            self._measured,
            count,
            WIDEST_GAUSSIAN * min(side / one for side, one in zip(sides, per_pitch, strict=True)),
        )
        self._done: dict[float, np.ndarray] = {}

    def _measured(self, sigma: float) -> np.ndarray:
        """Return the lengths of detail, in pitches, after a Gaussian of so many pitches."""
        pixels = self._pixels
        length = math.sqrt(math.prod(pixels.pitch))
        smooth = pixels.centred()
        if sigma > 0.0:
            [smooth] = pixels.smoothed(sigma * self._unit, smooth)
        deviation, slope, curvature = roughness(smooth, pixels.valid, pixels.pitch)
        flat = (deviation <= pixels.error) | (slope == 0.0) | (curvature == 0.0)
        return np.where(flat, _NO_LENGTH, slope / np.where(flat, 1.0, curvature) / length)

    def at(self, scale: float) -> np.ndarray:
        """Return the centred images, each smoothed so that its length of detail is `scale`."""
        if scale == 0.0:
            return self._pixels.centred()
        if scale not in self._done:
            pixels, sigmas = self._pixels, self._sigmas[scale / self._unit]
            smoothed = self._smooth_each(pixels.centred(), sigmas)
            if pixels.missing:
                support = self._smooth_each(pixels.valid.astype(np.float64), sigmas)
                _field_kernels.normalise_stack(smoothed, support, pixels.valid)
            self._done[scale] = smoothed
        return self._done[scale]

    def _smooth_each(self, stack: np.ndarray, sigmas: np.ndarray) -> np.ndarray:
        in_rows, in_cols = sigma_pixels(1.0, self._pixels.pitch, "pitch")
        widest = float(sigmas.max()) * max(in_rows, in_cols)
        reach = int(TRUNCATE * widest + 0.5)
        weights, padded = np.empty(reach + 1), np.empty(stack.shape[2] + 2 * reach)
        half, out = np.empty(stack.shape[1:]), np.empty_like(stack)
        along = (sigmas * in_cols, sigmas * in_rows)
        _field_kernels.smooth_each(stack, *along, weights, padded, half, out)
        return out

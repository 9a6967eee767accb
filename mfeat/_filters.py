"""Linear filters for descriptors: banks given as spectra, and undecimated wavelets."""

import math
from collections.abc import Callable, Iterator
from functools import lru_cache
from typing import NamedTuple

import numpy as np
import scipy.fft

#: Least number of pixels mirrored around a patch, so that its opposite borders do not meet.
MARGIN = 16

# What a wavelet's details are called, by the axes (rows, columns) that they were high-passed along.
DETAILS = ("columns", "rows", "both")


class Bank:
    """A bank of filters for patches of one shape.

    `build` gets row and column frequencies, in cycles a pixel, as two arrays that broadcast. It
    returns the filters' spectra (scales, filters, rows, columns). Patches are continued by
    reflection.
    """

    def __init__(self, shape: tuple[int, int], build: Callable[..., np.ndarray]):
        padded = [_padded_side(side) for side in shape]
        self._pads = [((long - side) // 2,) * 2 for long, side in zip(padded, shape, strict=True)]
        self._inner = tuple(
            slice(pad[0], pad[0] + side) for pad, side in zip(self._pads, shape, strict=True)
        )
        rows, cols = (scipy.fft.fftfreq(n) for n in padded)
        self._spectra = build(rows[:, None], cols[None, :]).astype(np.complex64)
        # there plus and minus are one frequency, so an oriented filter has no value
        self._spectra[:, :, rows == -0.5, :] = 0
        self._spectra[:, :, :, cols == -0.5] = 0

    def responses(self, patch: np.ndarray) -> Iterator[np.ndarray]:
        """Yield the complex64 responses (filters, h, w) of each scale to a float32 patch."""
        spectrum = scipy.fft.fft2(np.pad(patch, self._pads, mode="symmetric"))
        for spectra in self._spectra:  # one scale at a time stays in the processor's cache
            found = scipy.fft.ifft2(spectra * spectrum, overwrite_x=True)
            yield found[:, self._inner[0], self._inner[1]]


def _padded_side(side: int) -> int:
    """Return the next length that is fast to transform and leaves equal margins."""
    length = side + 2 * MARGIN
    while scipy.fft.next_fast_len(length) != length:
        length += 2
    return length


def _turned(rows: np.ndarray, cols: np.ndarray, angle: float) -> tuple[np.ndarray, np.ndarray]:
    """Return frequencies along and across a direction, turned against the clock from the rows'."""
    along = cols * math.cos(angle) - rows * math.sin(angle)
    return along, cols * math.sin(angle) + rows * math.cos(angle)


def gabor_spectra(
    rows: np.ndarray, cols: np.ndarray, frequencies: tuple[float, ...], orientations: int
) -> np.ndarray:
    """Return Gabor filters (frequencies, orientations, rows, columns).

    Gaussians about (f, angle) whose half-peak contours span one octave along the direction and
    touch those of the neighbouring orientations, as Manjunath and Ma (1996) lay them. Only the half
    plane of the filter's direction is kept and doubled: the responses are analytic, no mean gets
    through, and a sinusoid of amplitude 1 at (f, angle) has magnitude 1 everywhere.
    """
    half_peak = math.sqrt(2 * math.log(2))  # half width at half peak, in standard deviations
    spectra = []
    for frequency in frequencies:
        along_width = frequency / 3 / half_peak  # from 2/3 to 4/3 of the frequency: an octave
        across_width = frequency * math.tan(math.pi / (2 * orientations)) / half_peak
        for k in range(orientations):
            along, across = _turned(rows, cols, math.pi * k / orientations)
            exponent = ((along - frequency) / along_width) ** 2 + (across / across_width) ** 2
            # a direction's own border belongs to neither half
            spectra.append(np.where(along > 1e-9, 2 * np.exp(-exponent / 2), 0))
    return np.array(spectra).reshape(len(frequencies), orientations, *spectra[0].shape)


def derivative_spectra(
    rows: np.ndarray,
    cols: np.ndarray,
    scales: tuple[float, ...],
    orientations: int,
    elongation: float,
) -> np.ndarray:
    """Return pairs of Gaussian derivatives (scales, orientations + 1, rows, columns).

    A pair is one complex filter: its response to a real image has that of the first filter as real
    and that of the second as imaginary part, for the price of one. The pairs are edge and bar at
    each orientation, then smoothing and blob.

    Edges and bars are first and second derivatives of a Gaussian across its long axis, which is
    `elongation` times the short one, the scale; a blob is the Laplacian of the round Gaussian. The
    shapes are those of the maximum response filters (Varma and Zisserman 2005); the factor that
    makes scales comparable, scale to the order of the derivative, is Lindeberg's (1998).
    """
    spectra = []
    for scale in scales:
        for k in range(orientations):
            along, across = _turned(rows, cols, math.pi * k / orientations)
            decay = along**2 + (elongation * across) ** 2
            gaussian = np.exp(-2 * (math.pi * scale) ** 2 * decay)
            slope = 2j * math.pi * scale * along
            spectra.append((slope + 1j * slope**2) * gaussian)
        square = (2 * math.pi * scale) ** 2 * (rows**2 + cols**2)
        spectra.append((1 - 1j * square) * np.exp(-square / 2))
    return np.array(spectra).reshape(len(scales), orientations + 1, *spectra[0].shape)


def over_orientations(table: np.ndarray, rotation: str) -> np.ndarray:
    """Return what is kept of values (..., orientations).

    "kept": all of them. "harmonics": moduli of their Fourier coefficients over the orientations,
    divided by the number of orientations; the first is the mean. A turn by whole steps shifts the
    orientations, which changes no modulus.
    """
    if rotation == "kept":
        return table
    return np.abs(scipy.fft.rfft(table, axis=-1)) / table.shape[-1]


def orientation_names(orientations: int, rotation: str) -> list[str]:
    """Return the names of what `over_orientations` keeps."""
    if rotation == "kept":
        return [f"angle_{round(180 * k / orientations):03d}" for k in range(orientations)]
    return [f"harmonic_{k:02d}" for k in range(orientations // 2 + 1)]


@lru_cache
def daubechies(vanishing: int) -> np.ndarray:
    """Return the low-pass filter of Daubechies' wavelet: 2 `vanishing` taps of sum sqrt(2).

    Her construction (Daubechies 1988): the squared modulus of the transfer function is
    cos(w/2)^2p P(sin(w/2)^2) with P(y) = sum over k < p of C(p - 1 + k, k) y^k; of each pair of
    roots z, 1/z the one inside the unit circle is taken. `vanishing` = 1 is Haar's wavelet.
    """
    polynomial = [math.comb(vanishing - 1 + k, k) for k in range(vanishing)]
    roots = [-1.0] * vanishing
    for y in np.roots(polynomial[::-1]):
        # y = sin(w/2)^2 = (2 - z - 1/z) / 4
        roots += [z for z in np.roots([1, 4 * y - 2, 1]) if abs(z) < 1]
    taps = np.poly(roots).real
    return taps * math.sqrt(2) / taps.sum()


class Level(NamedTuple):
    """One level of an undecimated wavelet transform: three details in the order of `DETAILS`."""

    details: tuple[np.ndarray, np.ndarray, np.ndarray]
    smooth: np.ndarray


def wavelet_reach(vanishing: int, levels: int) -> int:
    """Return the side of the square of pixels that a number of the last level depends on."""
    return (2 * vanishing - 1) * (2**levels - 1) + 1


def undecimated(pixels: np.ndarray, vanishing: int, levels: int) -> list[Level]:
    """Return the undecimated wavelet transform of images (n, h, w), fine to coarse.

    Holes in the filters take the place of decimation (à trous; Shensa 1992). Nothing is invented
    beyond the border, so each level is smaller than the one before. Filters are divided by sqrt(2):
    over a period of a periodic image, the energies of all details and of the last smooth image sum
    up to that of the image.
    """
    low = daubechies(vanishing) / math.sqrt(2)
    high = low[::-1] * (-1.0) ** np.arange(len(low))
    done: list[Level] = []
    smooth = pixels
    for level in range(levels):
        rows_low, rows_high = (_filtered(smooth, taps, 2**level, 1) for taps in (low, high))
        smooth, across = (_filtered(rows_low, taps, 2**level, 2) for taps in (low, high))
        down, both = (_filtered(rows_high, taps, 2**level, 2) for taps in (low, high))
        done.append(Level((across, down, both), smooth))
    return done


def _filtered(images: np.ndarray, taps: np.ndarray, step: int, axis: int) -> np.ndarray:
    """Return correlations with taps `step` pixels apart, where all taps are inside."""
    length = images.shape[axis] - (len(taps) - 1) * step
    images = np.moveaxis(images, axis, 0)
    found = sum(tap * images[k * step : k * step + length] for k, tap in enumerate(taps))
    return np.moveaxis(found, 0, axis)

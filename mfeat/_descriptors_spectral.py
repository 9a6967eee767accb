"""Descriptors of power by frequency: wavelets, power spectrum."""

from numbers import Integral
from typing import ClassVar

import numpy as np
import scipy.fft
from sklearn.utils._param_validation import Interval, StrOptions

from mfeat import _checks
from mfeat._descriptor_base import TextureDescriptor, flattened, standardised
from mfeat._filters import DETAILS, undecimated, wavelet_reach

# Share of a patch's variance that counts as nothing when logarithms are taken: below it is the
# rounding of 8-bit images, and a flat patch must have one.
_LEAST = 1e-6

# Added to a kurtosis, which is at least 1 but 0 by definition where there is no detail.
_FLAT_KURTOSIS = 0.1

# Transforms are at least so long, so that every ring of the spectrum holds some frequencies.
_LEAST_TRANSFORM = 128


class WaveletEnergies(TextureDescriptor):
    """Log energies and log kurtosis of the details of an undecimated wavelet transform.

    Patches are standardised and transformed with a wavelet of Daubechies (1988), without decimation
    and inside the patch only. Of each detail the logarithm of its mean square is taken, as usual
    since Laine and Fan (1993), and that of its kurtosis, which tells sparse details from noise.

    Parameters
    ----------
    vanishing_moments : int, default 1
        Vanishing moments of the wavelet, 1 (Haar) to 8; its filters have twice as many taps.
    levels : int, default 4
        Number of levels, 1 to 8; the coarsest details are 2 to that power pixels wide.
    orientations : {"merged", "kept"}, default "merged"
        "merged": details along rows and along columns enter by their energy together, by the
        absolute difference of their energies as a share of it, and by the mean of their kurtosis;
        with Haar's wavelet, reflection and quarter turns do not matter. "kept": each by itself.
    location_scale : bool, default True
        Whether the vector begins with mean and standard deviation of the patch.
    missing : {"error", "nearest"}, default "error"
        What becomes of missing pixels: a ValueError, or the value of the nearest valid pixel.
    n_jobs : int, optional
        Number of joblib threads; None is 1 unless in a joblib context, -1 all processors.

    Examples
    --------
    >>> import numpy as np
    >>> from mfeat.descriptors import WaveletEnergies
    >>> patches = np.random.default_rng(0).normal(size=(5, 64, 64))
    >>> WaveletEnergies().fit_transform(patches).shape
    (5, 23)
    """

    _parameter_constraints: ClassVar[dict] = {
        **TextureDescriptor._parameter_constraints,
        "vanishing_moments": [Interval(Integral, 1, 8, closed="both")],
        "levels": [Interval(Integral, 1, 8, closed="both")],
        "orientations": [StrOptions({"merged", "kept"})],
    }

    def __init__(
        self,
        vanishing_moments=1,
        levels=4,
        orientations="merged",
        location_scale=True,
        missing="error",
        n_jobs=None,
    ):
        self.vanishing_moments = vanishing_moments
        self.levels = levels
        self.orientations = orientations
        self.location_scale = location_scale
        self.missing = missing
        self.n_jobs = n_jobs

    def _smallest_side(self) -> int:
        return wavelet_reach(self.vanishing_moments, self.levels) + 1

    def _names(self) -> list[str]:
        numbers = [f"{kind}-{detail}" for kind in ("energy", "kurtosis") for detail in DETAILS]
        if self.orientations == "merged":
            numbers = ["energy-sum", "energy-anisotropy", "energy-both"]
            numbers += ["kurtosis-mean", "kurtosis-both"]
        names = [f"wavelet_{level}_{number}" for level in range(self.levels) for number in numbers]
        return [*names, "wavelet_smooth_energy"]

    def _describe(self, pixels: np.ndarray) -> np.ndarray:
        levels = undecimated(standardised(pixels), self.vanishing_moments, self.levels)
        columns = []
        for level in levels:
            squares = [np.square(flattened(detail)) for detail in level.details]
            energies = [square.mean(axis=1) for square in squares]
            kurtosis = [
                np.square(square).mean(axis=1) / np.maximum(energy, _LEAST) ** 2
                for square, energy in zip(squares, energies, strict=True)
            ]
            if self.orientations == "merged":
                across, down, both = energies
                total = across + down
                columns += [np.log(total + _LEAST), np.abs(across - down) / (total + _LEAST)]
                energies, kurtosis = [both], [(kurtosis[0] + kurtosis[1]) / 2, kurtosis[2]]
            columns += [np.log(number + _LEAST) for number in energies]
            columns += [np.log(number + _FLAT_KURTOSIS) for number in kurtosis]
        columns.append(np.log(flattened(levels[-1].smooth).var(axis=1) + _LEAST))
        return np.stack(columns, axis=1)


class PowerSpectrum(TextureDescriptor):
    """Log power in rings of spatial frequency, and how it varies with direction.

    Patches are standardised and weighted with Hann's window. The rings are even in the logarithm
    of frequency, from 1/32 to 1/2 cycles per pixel. Of each ring the logarithm of its mean power is
    a feature, and for each order the modulus of the power's Fourier coefficient over direction,
    divided by the power: 0 for isotropic textures, up to 1 for lines, whatever their direction.

    Parameters
    ----------
    rings : int, default 16
        Number of rings, 2 to 24.
    orders : tuple of int, default (2, 4)
        Even orders of the Fourier coefficients over direction, ascending; () for none.
    location_scale : bool, default True
        Whether the vector begins with mean and standard deviation of the patch.
    missing : {"error", "nearest"}, default "error"
        What becomes of missing pixels: a ValueError, or the value of the nearest valid pixel.
    n_jobs : int, optional
        Number of joblib threads; None is 1 unless in a joblib context, -1 all processors.

    Examples
    --------
    >>> import numpy as np
    >>> from mfeat.descriptors import PowerSpectrum
    >>> patches = np.random.default_rng(0).normal(size=(5, 64, 64))
    >>> PowerSpectrum().fit_transform(patches).shape
    (5, 50)
    """

    _parameter_constraints: ClassVar[dict] = {
        **TextureDescriptor._parameter_constraints,
        "rings": [Interval(Integral, 2, 24, closed="both")],
        "orders": [tuple, list],
    }

    def __init__(self, rings=16, orders=(2, 4), location_scale=True, missing="error", n_jobs=None):
        self.rings = rings
        self.orders = orders
        self.location_scale = location_scale
        self.missing = missing
        self.n_jobs = n_jobs

    def _check_settings(self) -> None:
        for k, order in enumerate(self.orders):
            if _checks.integer(f"orders[{k}]", order, minimum=2) % 2:
                raise ValueError(
                    f"orders must be even, since opposite directions have equal power; orders[{k}] "
                    f"is {order}"
                )
        if sorted(set(self.orders)) != list(self.orders):
            raise ValueError(f"orders must ascend strictly; got {self.orders!r}")

    def _smallest_side(self) -> int:
        return 8

    def _names(self) -> list[str]:
        kinds = ["power", *(f"order_{order:02d}" for order in self.orders)]
        return [f"spectrum_{ring:02d}_{kind}" for ring in range(self.rings) for kind in kinds]

    def _describe(self, pixels: np.ndarray) -> np.ndarray:
        window = np.outer(*(np.hanning(side + 2)[1:-1] for side in pixels.shape[1:]))
        shape = [max(side, _LEAST_TRANSFORM) for side in pixels.shape[1:]]
        ring, direction = rings_of(shape, self.rings)
        inside = ring.ravel() < self.rings
        ring, direction = ring.ravel()[inside], direction.ravel()[inside]
        waves = [np.ones(len(ring)), *(np.exp(1j * order * direction) for order in self.orders)]
        sort = np.zeros((len(ring), self.rings))
        sort[np.arange(len(ring)), ring] = 1 / np.bincount(ring, minlength=self.rings)[ring]
        basis = np.concatenate([wave[:, None] * sort for wave in waves], axis=1)
        rows = []
        for patch in standardised(pixels):
            found = np.abs(scipy.fft.fft2(patch * window, shape)).ravel()[inside]
            power = np.abs((np.square(found) / np.square(window).sum()) @ basis)
            power = power.reshape(len(waves), self.rings)
            power[1:] /= power[0] + _LEAST
            power[0] = np.log(power[0] + _LEAST)
            rows.append(power.T.ravel())
        return np.array(rows)


def rings_of(shape: list[int], rings: int) -> tuple[np.ndarray, np.ndarray]:
    """Return ring (number `rings` where outside of all) and direction of each frequency."""
    rows, cols = (scipy.fft.fftfreq(side) for side in shape)
    radius = np.hypot(rows[:, None], cols[None, :])
    octaves = np.log2(np.maximum(radius, 1e-9) * 32) / 4  # 0 to 1 from 1/32 to 1/2
    ring = np.floor(octaves * rings).astype(np.intp)
    ring[(ring < 0) | (ring > rings)] = rings
    return ring, np.arctan2(-rows[:, None], cols[None, :])

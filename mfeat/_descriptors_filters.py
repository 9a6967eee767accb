"""Descriptors from banks of oriented filters: Gabor energies, edges and bars."""

from functools import partial
from numbers import Integral, Real
from typing import ClassVar

import numpy as np
from sklearn.utils._param_validation import Interval, StrOptions

from mfeat._descriptor_base import TextureDescriptor, flattened, one_by_one, positive_numbers
from mfeat._filters import (
    Bank,
    derivative_spectra,
    gabor_spectra,
    orientation_names,
    over_orientations,
)

QUANTILES = (5, 25, 50, 75, 95)  # per cent
MOMENTS = ("mean", "std", "skewness", "kurtosis")

# What the filter bank keeps of the responses at a scale.
_RESPONSES = ("edge", "bright-bar", "dark-bar", "smooth", "blob")

# Responses to a standardised patch that vary less are float32 rounding.
_ROUNDING = 1e-5


class GaborEnergies(TextureDescriptor):
    """Mean and standard deviation of the magnitudes of Gabor filters.

    Patches are standardised, continued by reflection and filtered with Gabor filters one octave
    wide at several frequencies and orientations; mean and standard deviation of each magnitude are
    the features of Manjunath and Ma (1996). Against rotation, the moduli of the Fourier
    coefficients over the orientations take their place (common practice).

    Parameters
    ----------
    frequencies : tuple of float, default (0.0707, 0.1, 0.1414, 0.2, 0.2828, 0.4)
        Centre frequencies in cycles per pixel, ascending, below 0.5.
    orientations : int, default 8
        Number of orientations, 2 to 64.
    rotation : {"harmonics", "kept"}, default "harmonics"
        Whether moduli of the Fourier coefficients over the orientations are features, which turning
        the patch hardly changes, or each orientation by itself.
    location_scale : bool, default True
        Whether the vector begins with mean and standard deviation of the patch.
    missing : {"error", "nearest"}, default "error"
        What becomes of missing pixels: a ValueError, or the value of the nearest valid pixel.
    n_jobs : int, optional
        Number of joblib threads; None is 1 unless in a joblib context, -1 all processors.

    Examples
    --------
    >>> import numpy as np
    >>> from mfeat.descriptors import GaborEnergies
    >>> patches = np.random.default_rng(0).normal(size=(5, 64, 64))
    >>> GaborEnergies().fit_transform(patches).shape
    (5, 62)
    """

    _parameter_constraints: ClassVar[dict] = {
        **TextureDescriptor._parameter_constraints,
        "frequencies": [tuple, list],
        "orientations": [Interval(Integral, 2, 64, closed="both")],
        "rotation": [StrOptions({"harmonics", "kept"})],
    }

    def __init__(
        self,
        frequencies=(0.0707, 0.1, 0.1414, 0.2, 0.2828, 0.4),
        orientations=8,
        rotation="harmonics",
        location_scale=True,
        missing="error",
        n_jobs=None,
    ):
        self.frequencies = frequencies
        self.orientations = orientations
        self.rotation = rotation
        self.location_scale = location_scale
        self.missing = missing
        self.n_jobs = n_jobs

    def _check_settings(self) -> None:
        highest = positive_numbers("frequencies", self.frequencies)[-1]
        if highest >= 0.5:
            raise ValueError(f"frequencies must be below 0.5 cycles per pixel; got {highest}")

    def _smallest_side(self) -> int:
        return 8

    def _names(self) -> list[str]:
        return [
            f"gabor_{scale:02d}_{moment}_{orientation}"
            for scale in range(len(self.frequencies))
            for moment in MOMENTS[:2]
            for orientation in orientation_names(self.orientations, self.rotation)
        ]

    def _describe(self, pixels: np.ndarray) -> np.ndarray:
        build = partial(
            gabor_spectra, frequencies=tuple(self.frequencies), orientations=self.orientations
        )
        bank = Bank(pixels.shape[1:], build)
        table = np.empty((len(pixels), len(self.frequencies), 2, self.orientations))
        for place, patch in enumerate(one_by_one(pixels)):
            for scale, responses in enumerate(bank.responses(patch)):
                sizes = flattened(np.abs(responses))
                table[place, scale] = sizes.mean(axis=1), sizes.std(axis=1)
        return flattened(over_orientations(table, self.rotation))


class FilterBank(TextureDescriptor):
    """Statistics of a bank of edge, bar, smoothing and blob filters at several scales.

    Patches are standardised and continued by reflection. Of edges and bars, which are oriented,
    only the strongest response over the orientations is kept at each pixel, as in the maximum
    response filter sets of Varma and Zisserman (2005): of edges by magnitude, of bars the highest
    (bright bars) and the lowest (dark bars). Instead of textons, quantiles or moments of each
    response describe the patch.

    Parameters
    ----------
    scales : tuple of float, default (1, 2, 4)
        Standard deviations of the Gaussians in pixels, ascending.
    orientations : int, default 6
        Number of orientations of edges and bars, 2 to 64.
    elongation : float, default 2.0
        Length of edges and bars by their width, 1 to 8.
    statistics : {"quantiles", "moments"}, default "quantiles"
        Whether the 5, 25, 50, 75 and 95 % quantiles of each response are features, or mean,
        standard deviation, skewness and kurtosis.
    location_scale : bool, default True
        Whether the vector begins with mean and standard deviation of the patch.
    missing : {"error", "nearest"}, default "error"
        What becomes of missing pixels: a ValueError, or the value of the nearest valid pixel.
    n_jobs : int, optional
        Number of joblib threads; None is 1 unless in a joblib context, -1 all processors.

    Examples
    --------
    >>> import numpy as np
    >>> from mfeat.descriptors import FilterBank
    >>> patches = np.random.default_rng(0).normal(size=(5, 64, 64))
    >>> FilterBank(scales=(1, 2)).fit_transform(patches).shape
    (5, 52)
    """

    _parameter_constraints: ClassVar[dict] = {
        **TextureDescriptor._parameter_constraints,
        "scales": [tuple, list],
        "orientations": [Interval(Integral, 2, 64, closed="both")],
        "elongation": [Interval(Real, 1, 8, closed="both")],
        "statistics": [StrOptions({"quantiles", "moments"})],
    }

    def __init__(
        self,
        scales=(1, 2, 4),
        orientations=6,
        elongation=2.0,
        statistics="quantiles",
        location_scale=True,
        missing="error",
        n_jobs=None,
    ):
        self.scales = scales
        self.orientations = orientations
        self.elongation = elongation
        self.statistics = statistics
        self.location_scale = location_scale
        self.missing = missing
        self.n_jobs = n_jobs

    def _check_settings(self) -> None:
        positive_numbers("scales", self.scales)

    def _smallest_side(self) -> int:
        return 8

    def _names(self) -> list[str]:
        if self.statistics == "quantiles":
            statistics = [f"q{quantile:02d}" for quantile in QUANTILES]
        else:
            statistics = MOMENTS
        return [
            f"filter_{scale:02d}_{response}_{statistic}"
            for scale in range(len(self.scales))
            for response in _RESPONSES
            for statistic in statistics
        ]

    def _describe(self, pixels: np.ndarray) -> np.ndarray:
        build = partial(
            derivative_spectra,
            scales=tuple(self.scales),
            orientations=self.orientations,
            elongation=self.elongation,
        )
        bank = Bank(pixels.shape[1:], build)
        statistics = quantiles if self.statistics == "quantiles" else moments
        rows = []
        for patch in one_by_one(pixels):
            kept = []
            for pairs in bank.responses(patch):
                edges, bars = pairs[:-1].real, pairs[:-1].imag
                kept += [np.abs(edges).max(axis=0), bars.max(axis=0), bars.min(axis=0)]
                kept += [pairs[-1].real, pairs[-1].imag]
            rows.append(statistics(flattened(np.array(kept))).ravel())
        return np.array(rows)


def quantiles(values: np.ndarray) -> np.ndarray:
    """Return the quantiles `QUANTILES` (k, 5) of rows of values."""
    return np.percentile(values, QUANTILES, axis=1).T


def moments(values: np.ndarray) -> np.ndarray:
    """Return mean, standard deviation, skewness, kurtosis (k, 4) of rows of values.

    Skewness and kurtosis are 0 where the deviation is rounding.
    """
    mean = values.mean(axis=1)
    centred = values - mean[:, None]
    deviation = np.sqrt(np.square(centred).mean(axis=1))
    centred /= np.where(deviation > _ROUNDING, deviation, np.inf)[:, None]
    higher = [(centred**power).mean(axis=1) for power in (3, 4)]
    return np.stack([mean, deviation, *higher], axis=1)

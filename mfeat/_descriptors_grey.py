"""Descriptors that count grey values: histogram, local binary patterns, co-occurrence."""

import math
from numbers import Integral
from typing import ClassVar

import numpy as np
from scipy import ndimage
from sklearn.utils._param_validation import Interval, StrOptions

from mfeat import _checks
from mfeat._descriptor_base import (
    TextureDescriptor,
    binned,
    flattened,
    positive_integers,
    ranked,
    standardised,
)
from mfeat._haralick import HARALICK, cooccurrences, haralick_features

# Standardised values beyond three deviations share the outermost bins.
_REACH = 3.0

# What still counts as equal, in standard deviations: far above the rounding of standardised and
# interpolated pixels, far below any difference between stored pixels.
_TIE = 1e-9


class GreyHistogram(TextureDescriptor):
    """Histogram of grey values.

    Parameters
    ----------
    bins : int, default 32
        Number of bins, 2 to 4096.
    scaling : {"standard", "range"}, default "standard"
        "standard": bins span three standard deviations of each patch about its mean, so only the
        histogram's shape counts. "range": bins span the central 99 % of the training patches'
        values, learned in `fit`, so brightness and contrast count. Values outside fall into the
        outermost bins.
    location_scale : bool, default True
        Whether the vector begins with mean and standard deviation of the patch.
    missing : {"error", "nearest"}, default "error"
        What becomes of missing pixels: a ValueError, or the value of the nearest valid pixel.
    n_jobs : int, optional
        Number of joblib threads; None is 1 unless in a joblib context, -1 all processors.

    Attributes
    ----------
    range_ : (float, float)
        Learned range of values, with scaling "range".

    Examples
    --------
    >>> import numpy as np
    >>> from mfeat.descriptors import GreyHistogram
    >>> patches = np.arange(64).reshape(1, 8, 8)
    >>> GreyHistogram(bins=4, scaling="range", location_scale=False).fit_transform(patches)
    array([[0.25, 0.25, 0.25, 0.25]], dtype=float32)
    """

    _parameter_constraints: ClassVar[dict] = {
        **TextureDescriptor._parameter_constraints,
        "bins": [Interval(Integral, 2, 4096, closed="both")],
        "scaling": [StrOptions({"range", "standard"})],
    }

    def __init__(
        self, bins=32, scaling="standard", location_scale=True, missing="error", n_jobs=None
    ):
        self.bins = bins
        self.scaling = scaling
        self.location_scale = location_scale
        self.missing = missing
        self.n_jobs = n_jobs

    def _learns(self) -> bool:
        return self.scaling == "range"

    def _smallest_side(self) -> int:
        return 2

    def _names(self) -> list[str]:
        digits = len(str(self.bins - 1))
        return [f"grey_{k:0{digits}d}" for k in range(self.bins)]

    def _describe(self, pixels: np.ndarray) -> np.ndarray:
        if self.scaling == "range":
            return histograms(binned(pixels, *self.range_, self.bins), self.bins)
        return histograms(standard_bins(pixels, self.bins), self.bins)


class LocalBinaryPatterns(TextureDescriptor):
    """Rotation-invariant uniform local binary patterns at several radii, with magnitudes.

    Each pixel is compared with points on a circle around it, bilinearly interpolated. Uniform
    patterns (at most two changes around the circle) count by their number of ones, all others
    together (Ojala, Pietikäinen and Mäenpää 2002). The completed patterns of Guo, Zhang and Zhang
    (2010) compare the size of each difference with its mean over the patch as well; counted jointly
    they carry contrast, which sign patterns lack. Larger circles are taken on smoothed patches, so
    that each point stands for the pixels around it (Mäenpää and Pietikäinen 2003).

    Patches are standardised; pixels closer to the border than the radius are no centres.

    Parameters
    ----------
    radii : tuple of int, default (1, 2, 3, 5)
        Radii of the circles in pixels, ascending.
    points : tuple of int, default (8, 8, 8, 8)
        Number of points on each circle, 4 to 32.
    smooth : tuple of float, default (0, 0.8, 1.2, 2)
        Standard deviation in pixels of the Gaussian that smooths the patch for each radius; 0 for
        none.
    magnitudes : {"none", "beside", "joint"}, default "joint"
        Whether patterns of magnitudes are left out (points + 2 numbers a radius), counted beside
        those of signs (twice as many), or jointly with them ((points + 2)² numbers).
    location_scale : bool, default True
        Whether the vector begins with mean and standard deviation of the patch.
    missing : {"error", "nearest"}, default "error"
        What becomes of missing pixels: a ValueError, or the value of the nearest valid pixel.
    n_jobs : int, optional
        Number of joblib threads; None is 1 unless in a joblib context, -1 all processors.

    Examples
    --------
    >>> import numpy as np
    >>> from mfeat.descriptors import LocalBinaryPatterns
    >>> patches = np.random.default_rng(0).integers(0, 256, size=(5, 64, 64), dtype=np.uint8)
    >>> LocalBinaryPatterns().fit_transform(patches).shape
    (5, 402)
    """

    _parameter_constraints: ClassVar[dict] = {
        **TextureDescriptor._parameter_constraints,
        "radii": [tuple, list],
        "points": [tuple, list],
        "smooth": [tuple, list],
        "magnitudes": [StrOptions({"none", "beside", "joint"})],
    }

    def __init__(
        self,
        radii=(1, 2, 3, 5),
        points=(8, 8, 8, 8),
        smooth=(0, 0.8, 1.2, 2),
        magnitudes="joint",
        location_scale=True,
        missing="error",
        n_jobs=None,
    ):
        self.radii = radii
        self.points = points
        self.smooth = smooth
        self.magnitudes = magnitudes
        self.location_scale = location_scale
        self.missing = missing
        self.n_jobs = n_jobs

    def _check_settings(self) -> None:
        positive_integers("radii", self.radii)
        for k, number in enumerate(self.points):
            _checks.integer(f"points[{k}]", number, minimum=4, maximum=32)
        for k, scale in enumerate(self.smooth):
            _checks.real(f"smooth[{k}]", scale, minimum=0.0)
        for name, given in (("points", self.points), ("smooth", self.smooth)):
            if len(given) != len(self.radii):
                raise ValueError(
                    f"{name} must hold one number for each of the {len(self.radii)} radii; got "
                    f"{given!r}"
                )

    def _smallest_side(self) -> int:
        return 2 * self.radii[-1] + 1

    def _names(self) -> list[str]:
        names = []
        for radius, points in zip(self.radii, self.points, strict=True):
            codes = [f"{code:02d}" for code in range(points + 2)]
            start = f"lbp_r{radius:02d}"
            if self.magnitudes == "joint":
                names += [f"{start}_sign_{s}_magnitude_{m}" for s in codes for m in codes]
                continue
            names += [f"{start}_sign_{s}" for s in codes]
            if self.magnitudes == "beside":
                names += [f"{start}_magnitude_{m}" for m in codes]
        return names

    def _describe(self, pixels: np.ndarray) -> np.ndarray:
        pixels = standardised(pixels)
        found = []
        for radius, points, scale in zip(self.radii, self.points, self.smooth, strict=True):
            smooth = ndimage.gaussian_filter(pixels, scale, axes=(1, 2)) if scale else pixels
            differences = neighbour_differences(smooth, radius, points)
            signs = uniform_codes(differences >= -_TIE)
            if self.magnitudes == "none":
                found.append(histograms(signs, points + 2))
                continue
            sizes = np.abs(differences)
            usual = flattened(sizes.mean(axis=0)).mean(axis=1)[:, None, None]
            strong = uniform_codes(sizes >= usual - _TIE)
            if self.magnitudes == "joint":
                found.append(histograms(signs * (points + 2) + strong, (points + 2) ** 2))
            else:
                found += [histograms(signs, points + 2), histograms(strong, points + 2)]
        return np.concatenate(found, axis=1)


class CoOccurrence(TextureDescriptor):
    """Haralick's features of grey-level co-occurrence matrices.

    Symmetric matrices of four angles at several distances; of each, the features f1 to f13 of
    Haralick, Shanmugam and Dinstein (1973); of these, mean and range over the angles, as they
    propose against rotation. (f14 is left out, as is common practice: an eigenvalue that is not
    stable.) Distances along diagonals are rounded to whole pixels, so distance 2 is the neighbour
    at (1, 1) there.

    Parameters
    ----------
    levels : int, default 16
        Number of grey levels, 2 to 256.
    distances : tuple of int, default (1, 2, 4, 8)
        Distances of pixel pairs, ascending.
    quantisation : {"standard", "rank", "range"}, default "standard"
        "standard": levels span three standard deviations of each patch about its mean; gain and
        offset do not matter. "rank": all levels have about as many pixels of the patch (the
        authors' equal-probability quantising); increasing tone changes do not matter. "range":
        levels span the central 99 % of the training patches' values, learned in `fit`. Values
        outside fall into the outermost levels.
    location_scale : bool, default True
        Whether the vector begins with mean and standard deviation of the patch.
    missing : {"error", "nearest"}, default "error"
        What becomes of missing pixels: a ValueError, or the value of the nearest valid pixel.
    n_jobs : int, optional
        Number of joblib threads; None is 1 unless in a joblib context, -1 all processors.

    Attributes
    ----------
    range_ : (float, float)
        Learned range of values, with quantisation "range".

    Examples
    --------
    >>> import numpy as np
    >>> from mfeat.descriptors import CoOccurrence
    >>> patches = np.random.default_rng(0).integers(0, 256, size=(5, 64, 64), dtype=np.uint8)
    >>> descriptor = CoOccurrence(distances=(1, 2)).fit(patches)
    >>> descriptor.transform(patches).shape
    (5, 54)
    >>> str(descriptor.get_feature_names_out()[3])
    'cooccurrence_d01_contrast_mean'
    """

    _parameter_constraints: ClassVar[dict] = {
        **TextureDescriptor._parameter_constraints,
        "levels": [Interval(Integral, 2, 256, closed="both")],
        "distances": [tuple, list],
        "quantisation": [StrOptions({"range", "standard", "rank"})],
    }

    def __init__(
        self,
        levels=16,
        distances=(1, 2, 4, 8),
        quantisation="standard",
        location_scale=True,
        missing="error",
        n_jobs=None,
    ):
        self.levels = levels
        self.distances = distances
        self.quantisation = quantisation
        self.location_scale = location_scale
        self.missing = missing
        self.n_jobs = n_jobs

    def _check_settings(self) -> None:
        positive_integers("distances", self.distances)

    def _learns(self) -> bool:
        return self.quantisation == "range"

    def _smallest_side(self) -> int:
        return max(self.distances[-1] + 1, 2)

    def _names(self) -> list[str]:
        return [
            f"cooccurrence_d{distance:02d}_{feature}_{over}"
            for distance in self.distances
            for over in ("mean", "range")
            for feature in HARALICK
        ]

    def _describe(self, pixels: np.ndarray) -> np.ndarray:
        if self.quantisation == "rank":
            grey = ranked(pixels, self.levels)
        elif self.quantisation == "range":
            grey = binned(pixels, *self.range_, self.levels)
        else:
            grey = standard_bins(pixels, self.levels)
        rows = []
        for image in grey:  # singly, for the matrices of many levels are large
            features = haralick_features(cooccurrences(image, self.distances, self.levels))
            summary = [features.mean(axis=1), features.max(axis=1) - features.min(axis=1)]
            rows.append(np.stack(summary, axis=1).ravel())
        return np.array(rows)


def standard_bins(pixels: np.ndarray, bins: int) -> np.ndarray:
    """Return bins over three standard deviations about the mean of each patch of (n, h, w).

    They lie a little low, or rounding would tell on which side a pixel that equals the mean falls.
    """
    return binned(standardised(pixels), -_REACH - _TIE, _REACH - _TIE, bins)


def histograms(bins: np.ndarray, number: int) -> np.ndarray:
    """Return relative frequencies (n, number) of the bins of each image of (n, h, w)."""
    bins = flattened(bins)
    apart = bins + number * np.arange(len(bins))[:, None]
    counts = np.bincount(apart.ravel(), minlength=number * len(bins))
    return counts.reshape(len(bins), number) / bins.shape[1]


def neighbour_differences(pixels: np.ndarray, radius: int, points: int) -> np.ndarray:
    """Return points on a circle minus its centre, as (points, n, h - 2 radius, w - 2 radius).

    The bilinear interpolation is that of differences, not of pixels, so equal pixels give exact
    zeros. Points start to the right and turn against the clock.
    """
    rows, cols = pixels.shape[1] - 2 * radius, pixels.shape[2] - 2 * radius
    centre = pixels[:, radius : radius + rows, radius : radius + cols]
    out = np.zeros((points, *centre.shape))
    for k in range(points):
        angle = 2 * math.pi * k / points
        # rounded so that points on the axes are pixels and their neighbours have equal weights
        row, col = round(-radius * math.sin(angle), 5), round(radius * math.cos(angle), 5)
        top, left = math.floor(row), math.floor(col)
        for i, down in ((top, 1 - (row - top)), (top + 1, row - top)):
            for j, right in ((left, 1 - (col - left)), (left + 1, col - left)):
                if down * right > 0:
                    r, c = radius + i, radius + j
                    out[k] += down * right * (pixels[:, r : r + rows, c : c + cols] - centre)
    return out


def uniform_codes(bits: np.ndarray) -> np.ndarray:
    """Return rotation-invariant uniform codes, 0 to points + 1, of bits (points, ...)."""
    points = len(bits)
    changes = (bits != np.roll(bits, 1, axis=0)).sum(axis=0, dtype=np.intp)
    return np.where(changes <= 2, bits.sum(axis=0, dtype=np.intp), points + 1)

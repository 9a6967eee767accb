"""Co-occurrence matrices of grey levels and Haralick's features of them."""

import math

import numpy as np
from skimage.feature import graycomatrix

#: Directions of pixel pairs, in radians from a row's direction.
ANGLES = (0, math.pi / 4, math.pi / 2, 3 * math.pi / 4)

#: The textural features f1 to f13 of Haralick, Shanmugam and Dinstein (1973), in their order.
HARALICK = (
    *["angular-second-moment", "contrast", "correlation", "variance"],
    *["inverse-difference-moment", "sum-average", "sum-variance", "sum-entropy", "entropy"],
    *["difference-variance", "difference-entropy", "correlation-information-1"],
    "correlation-information-2",
)


def cooccurrences(grey: np.ndarray, distances: tuple[int, ...], levels: int) -> np.ndarray:
    """Return symmetric matrices of sum 1 as (distances, angles, levels, levels)."""
    pairs = graycomatrix(
        grey.astype(np.uint8), distances, ANGLES, levels, symmetric=True, normed=True
    )
    return pairs.transpose(2, 3, 0, 1)


def haralick_features(pairs: np.ndarray) -> np.ndarray:
    """Return the features f1 to f13 (..., 13) of symmetric matrices (..., levels, levels).

    Both marginals of a symmetric matrix are the same, so the entropies HXY1 and HXY2 of the
    publication are twice that of a marginal. The sum variance is taken about the sum average (the
    publication has the sum entropy there, a misprint). Constant images have correlation 1.
    """
    levels = pairs.shape[-1]
    i, j = np.indices((levels, levels))
    grey, sums = np.arange(levels), np.arange(2 * levels - 1)
    marginal = pairs.sum(axis=-1)
    by_sum = _by_index(pairs, i + j, 2 * levels - 1)
    by_difference = _by_index(pairs, abs(i - j), levels)
    mean = marginal @ grey
    variance = marginal @ grey**2 - mean**2
    covariance = (pairs * (i * j)).sum(axis=(-2, -1)) - mean**2
    varied = variance > 1e-12  # else rounding of the squares, whose steps are 1 / pixels
    contrast = by_difference @ grey**2
    sum_average = by_sum @ sums
    entropy, own = _entropy(pairs.reshape(*pairs.shape[:-2], -1)), _entropy(marginal)
    surplus = np.maximum(2 * own - entropy, 0)
    features = [
        np.square(pairs).sum(axis=(-2, -1)),
        contrast,
        np.where(varied, covariance / np.where(varied, variance, 1), 1),
        variance,
        by_difference @ (1 / (1 + grey**2)),
        sum_average,
        by_sum @ sums**2 - sum_average**2,
        _entropy(by_sum),
        entropy,
        contrast - (by_difference @ grey) ** 2,
        _entropy(by_difference),
        -surplus / np.where(own > 0, own, 1),
        np.sqrt(1 - np.exp(-2 * surplus)),
    ]
    return np.stack(features, axis=-1)


def _by_index(pairs: np.ndarray, index: np.ndarray, number: int) -> np.ndarray:
    """Return sums (..., number) over the entries of matrices that share an index."""
    flat = pairs.reshape(-1, index.size)
    apart = index.ravel() + number * np.arange(len(flat))[:, None]
    sums = np.bincount(apart.ravel(), flat.ravel(), minlength=number * len(flat))
    return sums.reshape(*pairs.shape[:-2], number)


def _entropy(p: np.ndarray) -> np.ndarray:
    return -(p * np.log(np.where(p > 0, p, 1))).sum(axis=-1)

"""Whether a difference between two descriptors is more than luck: statistics of repeated splits.

Accuracies of repeated splits of the same patches are not independent, so their plain variance is
too small a measure of luck. Source of the correction: C. Nadeau and Y. Bengio, Inference for the
generalization error, Machine Learning 52 (2003), 239-281: the variance of the mean of J splits with
n1 training and n2 test patches is estimated as (1/J + n2/n1) times the sample variance.
"""

import math
from typing import NamedTuple

import numpy as np
from scipy import stats

#: Share of intervals that are meant to hold the true mean.
CONFIDENCE = 0.95


class Mean(NamedTuple):
    """A mean over splits with its interval; the interval is NaN where there is one split."""

    mean: float
    low: float
    high: float


class Difference(NamedTuple):
    """A paired comparison: mean of one minus the other, its interval, t and two-sided p.

    With a single split there is no measure of luck, and all but the mean is NaN.
    """

    mean: float
    low: float
    high: float
    t: float
    p: float


def corrected_error(values: np.ndarray, ratio: float) -> float:
    """Return the standard error of the mean over splits, corrected for their overlap.

    Parameters
    ----------
    values : ndarray of shape (J,)
        One number a split.
    ratio : float
        Test patches over training patches of a split, n2/n1.

    Returns
    -------
    float
        sqrt((1/J + n2/n1) s^2), s^2 the sample variance (J - 1); NaN for a single split.

    Examples
    --------
    >>> import numpy as np
    >>> from mfeat.significance import corrected_error
    >>> round(corrected_error(np.array([1.0, 2.0, 3.0, 4.0]), ratio=0.25), 6)
    0.912871
    """
    count = len(values)
    if count < 2:
        return math.nan
    return math.sqrt((1.0 / count + ratio) * float(np.var(values, ddof=1)))


def mean_with_interval(values: np.ndarray, ratio: float) -> Mean:
    """Return the mean over splits and its 95 % interval by Student's t with J - 1 degrees."""
    mean = float(np.mean(values))
    half = _half_width(values, ratio)
    return Mean(mean, mean - half, mean + half)


def _half_width(values: np.ndarray, ratio: float) -> float:
    degrees = max(len(values) - 1, 1)
    return float(stats.t.ppf((1 + CONFIDENCE) / 2, degrees)) * corrected_error(values, ratio)


def compare_paired(one: np.ndarray, other: np.ndarray, ratio: float) -> Difference:
    """Compare two descriptors over the same splits by the corrected resampled t-test.

    Parameters
    ----------
    one, other : ndarray of shape (J,)
        Accuracies over the same splits, in the same order.
    ratio : float
        Test patches over training patches of a split.

    Returns
    -------
    Difference
        Equal accuracies everywhere give t = 0 and p = 1; a difference that is the same in every
        split gives p = 0.

    Examples
    --------
    >>> import numpy as np
    >>> from mfeat.significance import compare_paired
    >>> found = compare_paired(np.array([0.9, 0.8, 0.9]), np.array([0.7, 0.7, 0.6]), ratio=1.0)
    >>> round(found.mean, 3), round(found.t, 3), round(found.p, 3)
    (0.2, 1.732, 0.225)
    """
    if one.shape != other.shape:
        raise ValueError(f"paired splits are needed; got {one.shape} and {other.shape}")
    differences = one - other
    mean = float(np.mean(differences))
    if len(differences) > 1 and np.ptp(differences) == 0.0:
        t = math.copysign(math.inf, mean) if mean else 0.0
        return Difference(mean, mean, mean, t, 0.0 if mean else 1.0)
    half = _half_width(differences, ratio)
    t = mean / corrected_error(differences, ratio)
    p = 2.0 * float(stats.t.sf(abs(t), max(len(differences) - 1, 1)))
    return Difference(mean, mean - half, mean + half, t, p)


def holm(p_values: np.ndarray) -> np.ndarray:
    """Return p-values adjusted for making several comparisons; NaN stay, and do not count.

    Source: S. Holm, A simple sequentially rejective multiple test procedure, Scandinavian Journal
    of Statistics 6 (1979), 65-70.

    Examples
    --------
    >>> import numpy as np
    >>> from mfeat.significance import holm
    >>> holm(np.array([0.01, 0.04, 0.03])).round(3).tolist()
    [0.03, 0.06, 0.06]
    """
    given = np.asarray(p_values, dtype=np.float64)
    adjusted = np.full(given.shape, math.nan)
    order = [k for k in np.argsort(given) if not math.isnan(given[k])]
    largest = 0.0
    for rank, k in enumerate(order):
        largest = max(largest, min(1.0, (len(order) - rank) * given[k]))
        adjusted[k] = largest
    return adjusted

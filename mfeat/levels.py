"""Level rules: where the levels of a field lie, and what happens on fields without relief.

"standard": mean + v * standard deviation of the field; "rank": order statistics of the field;
"fixed": data units; "fitted": quantiles learned over a training set. The first two follow each
field of each patch, the last two are the same for all patches.

A field is *flat* when its standard deviation is within the rounding error of its computation (all
pixels equal, or for instance the slope of a perfect plane). Its noise would otherwise be blown up
into a texture. All pixels of a flat field count as equal to its mean: the area steps from 1 to 0
where the levels pass the mean (at v = 0 under "standard"; under "rank" it is 1 at every level),
contour and Euler number are 0.
"""

from collections.abc import Callable
from dataclasses import dataclass
from functools import cached_property
from typing import Any

import numpy as np

from mfeat import _checks, _kernels
from mfeat.counts import thresholds_for

RULES = ("standard", "rank", "fixed", "fitted")

#: Range of the levels where none is given, in the rule's own units.
DEFAULT_RANGES = {"standard": (-2.5, 2.5), "rank": (0.0, 1.0), "fitted": (0.0, 1.0)}

#: Levels of rule "standard", and of rule "rank" on derived fields, lie this many standard
#: deviations below their nominal place, so that pixels tied with a level fall on the same side of
#: it under every gain and offset of the image.
TIE = 1e-9


@dataclass
class Relief:
    """What the level rules need to know of a stack of fields (n, h, w).

    Attributes
    ----------
    values : ndarray of shape (n, h, w)
        The fields, in a type of `mfeat._checks.compiled_type`: of raw fields the images as they
        are, of derived ones float64 without the `offset`.
    valid : ndarray of shape (n, h, w), uint8
        1 where a pixel of the field is defined by valid pixels alone.
    offset : ndarray of shape (n,), float64
        Subtracted before fields are derived, so that an image far from zero loses no digits.
    rounding : ndarray of shape (n,), float64
        A bound of the rounding error of the values; a smaller standard deviation means flat.
    raw : callable, optional
        For raw fields only: returns `values` minus `offset` as float64, zero where missing.
    constant : ndarray of shape (n,), bool, optional
        Which fields are constant, where that is known exactly and rounding has no part in it.
    """

    values: np.ndarray
    valid: np.ndarray
    offset: np.ndarray
    rounding: np.ndarray
    raw: Callable[[], np.ndarray] | None = None
    constant: np.ndarray | None = None

    @property
    def derived(self) -> bool:
        """Whether the values are computed, and without their offset."""
        return self.raw is None

    @property
    def centred(self) -> np.ndarray:
        """The fields minus `offset`, float64."""
        return self.values if self.raw is None else self.raw()

    @property
    def mean(self) -> np.ndarray:
        """Mean of each field minus `offset`; 0 without a valid pixel."""
        return self._moments[0]

    @property
    def deviation(self) -> np.ndarray:
        """Standard deviation of each field; exactly 0 if it is flat."""
        return self._moments[1]

    @cached_property
    def empty(self) -> np.ndarray:
        """Which fields have no valid pixel; nothing of them is counted."""
        return ~self.valid.any(axis=(1, 2))

    @cached_property
    def flat(self) -> np.ndarray:
        """Which fields have no relief."""
        even = self._raw_moments[1] <= self.rounding if self.constant is None else self.constant
        return even & ~self.empty if even.any() else even

    @cached_property
    def _raw_moments(self) -> tuple[np.ndarray, np.ndarray]:
        count, _, cols = self.values.shape
        mean, deviation = np.empty(count), np.empty(count)
        scratch = np.empty((2, cols + 1))
        _kernels.moments(self.centred, self.valid, scratch[0], scratch[1], mean, deviation)
        return mean, deviation

    @cached_property
    def _moments(self) -> tuple[np.ndarray, np.ndarray]:
        mean, deviation = self._raw_moments
        if np.isnan(mean).any():  # an empty field; or one that overflowed, which stays NaN
            mean, deviation = np.where(self.empty, 0.0, (mean, deviation))
        return mean, np.where(self.flat, 0.0, deviation)


@dataclass
class PlacedLevels:
    """Levels of each field of a stack, ready for counting.

    `thresholds` (n, T) are in the type of the pixels; of row k the first `reach[k]` are used, the
    others lie above every possible pixel. `own` (n, T) are the levels in the units of the relief's
    values, without `offset` (n,).
    """

    thresholds: np.ndarray
    reach: np.ndarray
    own: np.ndarray
    offset: np.ndarray

    @property
    def shown(self) -> np.ndarray:
        """The levels in data units, float64."""
        return self.own + self.offset[:, None]


def level_values(levels: Any, rule: str, level_range: Any = None) -> np.ndarray:
    """Return the levels in the units of a rule, as a 1-D float64 array.

    Parameters
    ----------
    levels : int or sequence of float
        A number of levels (1 to 65,535) to spread over `level_range`, or the levels themselves:
        standard deviations from the mean ("standard"), fractions of the pixels from 0 to 1
        ("rank", "fitted"), data units ("fixed"). A sequence must be strictly ascending.
    rule : {"standard", "rank", "fixed", "fitted"}
    level_range : (float, float), optional
        First and last level of rules "standard" and "fixed"; the fractions between which levels of
        rules "rank" and "fitted" are centred in equal steps. Default (-2.5, 2.5) for "standard",
        (0, 1) for "rank" and "fitted"; required for "fixed" with a number of levels.

    Examples
    --------
    >>> from mfeat.levels import level_values
    >>> level_values(5, "standard")
    array([-2.5 , -1.25,  0.  ,  1.25,  2.5 ])
    >>> level_values(4, "rank")
    array([0.125, 0.375, 0.625, 0.875])
    >>> level_values([10, 20, 40], "fixed")
    array([10., 20., 40.])
    """
    _checks.choice("level_rule", rule, RULES)
    if isinstance(levels, int | np.integer | float | np.floating):
        count = _checks.integer("levels", levels, minimum=1, maximum=_checks.MAX_LEVELS)
        low, high = _level_range(level_range, rule)
        if rule in ("rank", "fitted"):
            return low + (high - low) * (np.arange(count) + 0.5) / count
        return np.linspace(low, high, count) if count > 1 else np.array([(low + high) / 2])
    if level_range is not None:
        raise ValueError(
            f"level_range={level_range!r} has no meaning beside explicit levels "
            f"{_checks.show(np.asarray(levels))}; give one of the two"
        )
    given = _checks.level_sequence(levels)
    values = given.astype(np.float64)
    rounded = [int(v) != int(g) for v, g in zip(values, given, strict=True)]
    if given.dtype.kind != "f" and any(rounded):
        raise ValueError(
            f"levels[{rounded.index(True)}] = {given[rounded.index(True)]} is beyond 2**53 and "
            "would be rounded; count_patterns takes such levels exactly"
        )
    if rule in ("rank", "fitted") and (values[0] < 0.0 or values[-1] > 1.0):
        raise ValueError(
            f'levels of rule "{rule}" are fractions of the pixels, from 0 to 1; '
            f"got {_checks.show(values)}"
        )
    return values


def _level_range(level_range: Any, rule: str) -> tuple[float, float]:
    if level_range is None:
        if rule == "fixed":
            raise ValueError(
                'level_rule "fixed" needs level_range=(lowest, highest) in data units, or explicit '
                "levels; an image does not tell what range its successors will have"
            )
        return DEFAULT_RANGES[rule]
    if not isinstance(level_range, tuple | list | np.ndarray) or len(level_range) != 2:
        raise ValueError(f"level_range must be two numbers (lowest, highest); got {level_range!r}")
    low = _checks.real("level_range[0]", level_range[0])
    high = _checks.real("level_range[1]", level_range[1])
    if not low < high:
        raise ValueError(f"level_range must ascend; got ({low}, {high})")
    if rule in ("rank", "fitted") and not 0.0 <= low < high <= 1.0:
        raise ValueError(
            f'level_range of rule "{rule}" holds fractions from 0 to 1; got ({low}, {high})'
        )
    return low, high


def place(relief: Relief, rule: str, values: np.ndarray) -> PlacedLevels:
    """Place levels, given in the units of `rule`, on each field of a stack.

    For rule "fitted", `values` are the learned levels in data units, as for "fixed".
    """
    derived = relief.derived
    offset = relief.offset if derived else np.zeros(len(relief.offset))
    if rule == "standard":
        # The pixels of a raw field keep their offset and their type, and so do its levels.
        middle = relief.mean if derived else relief.offset + relief.mean
        own = middle[:, None] + (values - TIE) * relief.deviation[:, None]
    elif rule == "rank":
        own = _order_statistics(relief, values)
        if derived:  # rounding has blurred the ties of such a field
            own = own - TIE * relief.deviation[:, None]
    else:
        own = values - offset[:, None]
    thresholds, reach = thresholds_for(relief.values.dtype, own)
    if relief.flat.any():
        thresholds, own = np.array(thresholds), own.astype(np.float64)
        for k in np.flatnonzero(relief.flat):
            reach[k] = _reached_by_flat(relief, k, rule, values)
            thresholds[k] = relief.values[k][relief.valid[k] == 1].min()
            if rule in ("standard", "rank"):
                level = relief.mean[k] + (0.0 if derived else relief.offset[k])
                own[k, : reach[k]] = level
                own[k, reach[k] :] = np.nextafter(level, np.inf)
    return PlacedLevels(thresholds, reach, own, offset)


def _reached_by_flat(relief: Relief, k: int, rule: str, values: np.ndarray) -> int:
    """Return how many levels a flat field reaches, all its pixels being its mean."""
    if rule == "rank":
        return len(values)
    if rule == "standard":
        return int(np.count_nonzero(values <= 0.0))
    level = relief.offset[k] + relief.mean[k] + relief.rounding[k]
    return int(np.count_nonzero(values <= level))


def _order_statistics(relief: Relief, fractions: np.ndarray) -> np.ndarray:
    """Return pixel values of given rank: exact, so monotone tone changes leave the counts alone.

    Of n sorted valid values the one at position floor(p n) is the level of fraction p, so that a
    fraction 1 - p of the pixels reaches it where no values are tied.
    """
    count = len(relief.values)
    out = np.empty((count, len(fractions)), dtype=relief.values.dtype)
    for k in range(count):
        ranked = np.sort(relief.values[k][relief.valid[k] == 1])
        if not ranked.size:  # an image without a valid pixel is marked by its caller
            out[k] = 0
            continue
        positions = np.minimum((fractions * ranked.size).astype(np.int64), ranked.size - 1)
        out[k] = ranked[positions]
    return out


def pooled_quantiles(samples: list[np.ndarray], fractions: np.ndarray) -> np.ndarray:
    """Return quantiles of pooled samples, for rule "fitted".

    Source: definition 1 (the inverse of the empirical distribution) of R. J. Hyndman and Y. Fan,
    Sample quantiles in statistical packages, The American Statistician 50 (1996), 361-365.
    """
    return np.quantile(np.concatenate(samples), fractions, method="inverted_cdf")


def sample_of(relief: Relief, k: int, size: int) -> np.ndarray:
    """Return up to `size` evenly spaced order statistics of field k, with its offset, as float64.

    They stand for the field in the pool of `pooled_quantiles`: patches weigh alike however many
    pixels they have, and the memory of `fit` does not grow with the size of the patches.
    """
    ranked = np.sort(relief.centred[k][relief.valid[k] == 1]) + relief.offset[k]
    if len(ranked) <= size:
        return ranked
    return ranked[((np.arange(size) + 0.5) * len(ranked) / size).astype(np.int64)]

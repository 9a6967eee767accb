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

from mfeat import _checks
from mfeat.counts import thresholds_for
from mfeat.smoothing import moments_of

RULES = ("standard", "rank", "fixed", "fitted")

#: Range of the levels where none is given, in the rule's own units.
DEFAULT_RANGES = {"standard": (-2.5, 2.5), "rank": (0.0, 1.0), "fitted": (0.0, 1.0)}

#: Levels lie this many standard deviations (or the rounding error of the field, if that is more)
#: below their nominal place, so that pixels tied with a level fall on the same side of it whatever
#: the rounding. Levels of rules "rank", "fixed" and "fitted" on raw fields stay where they are:
#: pixels there are compared exactly (unless their tilt is removed, which makes a derived field).
TIE = 1e-9


@dataclass
class FieldStack:
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

    @classmethod
    def join(cls, parts: "list[FieldStack]") -> "FieldStack":
        """Return several stacks of derived fields of one size as one, in their order."""
        if len(parts) == 1:
            return parts[0]
        names = ("values", "valid", "offset", "rounding")
        return cls(*(np.concatenate([getattr(part, name) for part in parts]) for name in names))

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
        return moments_of(self.centred, self.valid)

    @cached_property
    def _moments(self) -> tuple[np.ndarray, np.ndarray]:
        mean, deviation = self._raw_moments
        return mean, np.where(self.flat, 0.0, deviation)


@dataclass
class PlacedLevels:
    """Levels of each field of a stack, ready for counting.

    `thresholds` (n, T) are in the type of the pixels; of row k the first `reach[k]` are used, the
    others lie above every possible pixel. `shown` (n, T) are the levels in data units.
    """

    thresholds: np.ndarray
    reach: np.ndarray
    shown: np.ndarray


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
            spread = low + (high - low) * (np.arange(count) + 0.5) / count
        else:
            spread = np.linspace(low, high, count) if count > 1 else np.array([(low + high) / 2])
        if (np.diff(spread) <= 0.0).any():
            raise ValueError(
                f"level_range ({low!r}, {high!r}) is too narrow for {count} distinct levels"
            )
        return spread
    given = _checks.level_sequence(levels)
    if level_range is not None:
        raise ValueError(
            f"level_range={level_range!r} has no meaning beside explicit levels "
            f"{_checks.show(given)}; give one of the two"
        )
    values = given.astype(np.float64)
    if given.dtype.kind != "f":
        rounded = [int(v) != int(g) for v, g in zip(values, given, strict=True)]
        if any(rounded):
            first = rounded.index(True)
            raise ValueError(
                f"levels[{first}] = {given[first]} is beyond 2**53 and would be rounded; "
                "count_patterns takes such levels exactly"
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
    low = _checks.real("level_range[0]", level_range[0], minimum=-1e100, maximum=1e100)
    high = _checks.real("level_range[1]", level_range[1], minimum=-1e100, maximum=1e100)
    if not low < high:
        raise ValueError(f"level_range must ascend; got ({low}, {high})")
    if rule in ("rank", "fitted") and not 0.0 <= low < high <= 1.0:
        raise ValueError(
            f'level_range of rule "{rule}" holds fractions from 0 to 1; got ({low}, {high})'
        )
    return low, high


def place_levels(stack: FieldStack, rule: str, values: np.ndarray) -> PlacedLevels:
    """Place levels, given in the units of `rule`, on each field of a stack.

    `values` are the same for all fields (T,), or of each its own (n, T). For rule "fitted" they
    are the learned levels in data units, as for "fixed".
    """
    derived = stack.derived
    values = np.broadcast_to(values, (len(stack.offset), values.shape[-1]))
    if rule == "standard":
        own = stack.mean[:, None] + values * stack.deviation[:, None]
    elif rule == "rank":
        own = _ranked(stack, values)
    else:
        own = values - stack.offset[:, None] if derived else values
    if derived or rule == "standard":
        own = own - np.maximum(TIE * stack.deviation, stack.rounding)[:, None]
    if not derived and rule == "standard":
        own = own + stack.offset[:, None]  # the pixels kept their offset and their type
    if rule in ("fixed", "fitted"):
        shown = values
    else:
        shown = own + stack.offset[:, None] if derived else own
    thresholds, reach = thresholds_for(stack.values.dtype, own)
    if stack.flat.any() and (derived or rule in ("standard", "rank")):
        thresholds, shown = np.array(thresholds), np.array(shown, dtype=np.float64)
        for k in np.flatnonzero(stack.flat):
            reach[k] = _reached_by_flat(stack, k, rule, values[k])
            thresholds[k] = stack.values[k][stack.valid[k] == 1].min()
            if rule in ("standard", "rank"):
                level = stack.offset[k] + stack.mean[k]
                shown[k, : reach[k]] = level
                shown[k, reach[k] :] = np.nextafter(level, np.inf)
    return PlacedLevels(thresholds, reach, shown)


def _reached_by_flat(stack: FieldStack, k: int, rule: str, values: np.ndarray) -> int:
    """Return how many levels a flat field reaches, all its pixels being its mean."""
    if rule == "rank":
        return len(values)
    if rule == "standard":
        return int(np.count_nonzero(values <= 0.0))
    level = stack.offset[k] + stack.mean[k] + stack.rounding[k]
    return int(np.count_nonzero(values <= level))


def _ranked(stack: FieldStack, fractions: np.ndarray) -> np.ndarray:
    """Return order statistics of each field; being pixel values, they follow any tone change."""
    out = np.zeros(fractions.shape, dtype=stack.values.dtype)
    for k in range(len(stack.values)):
        inside = stack.values[k][stack.valid[k] == 1]
        if inside.size:  # an image without a valid pixel is marked by its caller
            out[k] = order_statistics(np.sort(inside), fractions[k])
    return out


def order_statistics(ranked: np.ndarray, fractions: np.ndarray) -> np.ndarray:
    """Return from n sorted values those at positions floor(p n), by fraction p.

    So a fraction 1 - p of the values reaches the level of p where no values are tied. The tiny
    addition keeps p n from falling below the whole number that it means.

    Examples
    --------
    >>> import numpy as np
    >>> from mfeat.levels import order_statistics
    >>> order_statistics(np.arange(100), np.array([0.0, 0.29, 0.5, 1.0]))
    array([ 0, 29, 50, 99])
    """
    positions = np.floor(fractions * len(ranked) + 1e-9).astype(np.int64)
    return ranked[np.minimum(positions, len(ranked) - 1)]


def pooled_levels(samples: list[np.ndarray], fractions: np.ndarray) -> np.ndarray:
    """Return the levels of rule "fitted": order statistics of pooled samples."""
    return order_statistics(np.sort(np.concatenate(samples)), fractions)


def sample_of(stack: FieldStack, k: int, size: int) -> np.ndarray:
    """Return `size` evenly spaced order statistics of field k, in data units, as float64.

    They stand for the field in the pool of `pooled_levels`: patches weigh alike however many
    pixels they have, and the memory of `fit` does not grow with the size of the patches.
    """
    ranked = np.sort(stack.values[k][stack.valid[k] == 1]).astype(np.float64)
    if stack.derived:  # raw pixels kept their offset, and levels on them must be pixel values
        ranked += stack.offset[k]
    return ranked[((np.arange(size) + 0.5) * len(ranked) / size).astype(np.int64)]

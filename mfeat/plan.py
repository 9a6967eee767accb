"""The plan of a vector: which number stands where, and what it is called.

Names, order and length follow from the settings alone. The same plan drives the computation, the
output columns, the feature table and the fingerprint.
"""

import hashlib
import json
from dataclasses import dataclass
from functools import cached_property
from typing import Any, NamedTuple

import numpy as np

from mfeat.basis import TERMS
from mfeat.fields import Field, check_scales, scale_name

#: Raised whenever the same settings would give other numbers or names than before.
VECTOR_VERSION = 2

#: The four directed crossing densities, in the order of the vector.
DIRECTIONS = ("horizontal", "vertical", "falling", "rising")

#: Functionals that have one value a level, in the order of the vector; directed ones come after.
VECTOR_FUNCTIONALS = tuple(TERMS)

#: How curves enter the vector: their values at levels, or their products with Hermite functions.
BASES = ("levels", "hermite")

#: Families whose mean is a feature under `location_scale`: smoothing keeps the mean of the raw
#: field, and bands and curvature have means near zero.
_LOCATED = ("raw", "slope")


class Feature(NamedTuple):
    """What one number of the vector is.

    Attributes
    ----------
    name : str
        Column name, e.g. "smooth_2_contour_07", or "smooth_2.5_contour_h0".
    field : str
        Family: "raw", "smooth", "band", "slope", "curvature", "contrast"; or "rough" for numbers of
        the scale.
    scale : float
        Scale of the field; 0 for none.
    functional : str
        "area", "contour", "euler", "anisotropy", "crossings_..." or, without levels, "mean", "std",
        "log_contrast", "log_std", "log_slope" or "log_curvature".
    level : float or None
        The level in the units of the level rule; None without levels, and for Hermite functions.
    unit : str
        Dimension in terms of the image's values (v) and the unit of the pitch (l); "1" for pure
        numbers and logarithms.
    term : int or None
        The number of the Hermite function, under basis "hermite".
    """

    name: str
    field: str
    scale: float
    functional: str
    level: float | None
    unit: str
    term: int | None = None


#: Powers of a length that functionals are divided by, for their units and for separating scale.
LENGTH_POWERS = {"area": 0, "contour": 1, "euler": 2, "anisotropy": 1}
_UNITS = ("1", "1/l", "1/l^2")
_VALUE_UNITS = {
    "raw": "v", "smooth": "v", "band": "v", "slope": "v/l", "curvature": "v/l^2", "contrast": "1",
}  # fmt: skip


@dataclass(frozen=True, eq=False)
class VectorPlan:
    """All settings of a vector, checked and resolved.

    `level_values` maps each field's name to its levels in rule units; after `fit`, for rule
    "fitted", `learned` maps it (with channels: "channel_field") to the levels in data units.
    """

    fields: tuple[Field, ...]
    functionals: tuple[str, ...]
    level_rule: str
    level_values: dict[str, np.ndarray]
    location_scale: bool | str
    separate_scale: bool
    roughness: tuple[float, ...]
    basis: str
    terms: dict[str, int]
    directional: bool
    connectivity: Any
    contour_estimator: str
    pitch: tuple[float, float]
    scale_unit: str
    scale_rule: str
    remove_tilt: bool
    dtype: np.dtype
    channels: tuple[str, ...] | None = None
    learned: dict[str, np.ndarray] | None = None

    def check_scales(self, shape: tuple[int, int]) -> None:
        """Refuse scales that cannot act on images of a shape, and images too small for a field."""
        check_scales(self.fields, shape, self.pitch, self.scale_unit, self.scale_rule)
        rough = tuple(Field("smooth", scale) for scale in self.roughness if self.scale_features)
        check_scales(rough, shape, self.pitch, self.scale_unit, "fixed")

    def level_functionals(self) -> tuple[str, ...]:
        """Return the functionals that have one value a level, in the order of the vector."""
        ordered = tuple(name for name in VECTOR_FUNCTIONALS if name in self.functionals)
        return ordered + (tuple(f"crossings_{d}" for d in DIRECTIONS) if self.directional else ())

    def moments(self, field: Field) -> tuple[str, ...]:
        """Return the moments of a field that are features."""
        if self.separate_scale or not self.location_scale:
            return ()
        return ("mean", "std") if field.family in _LOCATED else ("std",)

    @cached_property
    def scale_features(self) -> list[tuple[float, str]]:
        """Gaussian and name of the numbers that tell the scale, where it is kept apart."""
        if not self.separate_scale or not self.location_scale:
            return []
        found = []
        for scale in self.roughness:
            first, located = scale == self.roughness[0], self.location_scale is True
            if located:
                found.append((scale, "log_contrast"))
            # beside contrasts, the ratios of deviations would say the same again
            if self.location_scale != "ratio" if first else not located:
                found.append((scale, "log_std"))
            found += [(scale, "log_slope"), (scale, "log_curvature")]
        return found

    def numbers(self, functional: str, field: Field) -> int:
        """Return how many numbers a functional of a field has."""
        if self.basis == "hermite":
            return self.terms[functional]
        return len(self.level_values[field.name])

    def _terms_in_use(self) -> dict[str, int] | None:
        if self.basis != "hermite":
            return None
        return {name: self.terms[name] for name in self.level_functionals()}

    def levels_of(self, field: Field, channel: str | None) -> np.ndarray:
        """Return the levels to place on a field of a channel: learned ones where there are some."""
        if self.learned is not None:
            return self.learned[learned_key(field, channel)]
        return self.level_values[field.name]

    @cached_property
    def table_size(self) -> int:
        """How many counts are kept of one patch while its vector is computed."""
        return sum(8 * (len(self.level_values[field.name]) + 1) for field in self.fields)

    @cached_property
    def columns(self) -> dict[Field, int]:
        """Where the numbers of each field start."""
        found, column = {}, len(self.scale_features)
        for field in self.fields:
            found[field] = column
            column += self._width(field)
        return found

    @cached_property
    def length(self) -> int:
        """How many numbers the vector of one channel has."""
        return len(self.scale_features) + sum(map(self._width, self.fields))

    def _width(self, field: Field) -> int:
        own = sum(self.numbers(functional, field) for functional in self.level_functionals())
        return len(self.moments(field)) + own

    def features(self) -> list[Feature]:
        """Return one entry a number of the vector of one channel, in order."""
        found = [
            Feature(f"rough_{scale_name(scale)}_{name}", "rough", scale, name, None, "1")
            for scale, name in self.scale_features
        ]
        for field in self.fields:
            prefix = field.name
            for moment in self.moments(field):
                name, unit = f"{prefix}_{moment}", _VALUE_UNITS[field.family]
                found.append(Feature(name, field.family, field.scale, moment, None, unit))
            levels = self.level_values[prefix].tolist()
            for functional in self.level_functionals():
                unit = "1" if self.separate_scale else _UNITS[LENGTH_POWERS.get(functional, 1)]
                own = (field.family, field.scale, functional)
                count = self.numbers(functional, field)
                digits = len(str(count - 1))
                if self.basis == "hermite":
                    found += [
                        Feature(f"{prefix}_{functional}_h{k:0{digits}d}", *own, None, unit, k)
                        for k in range(count)
                    ]
                else:
                    digits = max(2, digits)
                    found += [
                        Feature(f"{prefix}_{functional}_{k:0{digits}d}", *own, level, unit)
                        for k, level in enumerate(levels)
                    ]
        return found

    def all_features(self) -> list[Feature]:
        """Return the features of all channels; names start with the channel if there are some."""
        if self.channels is None:
            return self.features()
        return [
            feature._replace(name=f"{channel}_{feature.name}")
            for channel in self.channels
            for feature in self.features()
        ]

    def settings(self) -> dict[str, Any]:
        """Return what the values depend on, in types that JSON knows."""
        found: dict[str, Any] = {
            "vector_version": VECTOR_VERSION,
            "fields": [[field.family, field.scale] for field in self.fields],
            "functionals": list(self.level_functionals()),
            "level_rule": self.level_rule,
            "levels": {name: values.tolist() for name, values in self.level_values.items()},
            "location_scale": self.location_scale,
            "separate_scale": self.separate_scale,
            "roughness": list(self.roughness) if self.scale_features else None,
            "basis": self.basis,
            "terms": self._terms_in_use(),
            "connectivity": self.connectivity,
            "contour_estimator": self.contour_estimator,
            "pitch": list(self.pitch),
            "scale_unit": self.scale_unit,
            "scale_rule": self.scale_rule,
            "remove_tilt": self.remove_tilt,
            "dtype": str(self.dtype),
            "channels": None if self.channels is None else list(self.channels),
        }
        if self.learned is not None:
            found["learned_levels"] = {k: v.tolist() for k, v in self.learned.items()}
        return found


def learned_key(field: Field, channel: str | None) -> str:
    """Return the key of a field's learned levels."""
    return field.name if channel is None else f"{channel}_{field.name}"


def canonical_sha256(settings: dict[str, Any]) -> str:
    """Return the SHA-256 of settings written as canonical JSON, as 64 hexadecimal digits."""
    text = json.dumps(settings, sort_keys=True, separators=(",", ":"), allow_nan=False)
    return hashlib.sha256(text.encode("utf-8")).hexdigest()

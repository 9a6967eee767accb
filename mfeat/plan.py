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

from mfeat.fields import Field
from mfeat.functionals import FUNCTIONALS

#: Raised whenever the same settings would give other numbers or names than before.
VECTOR_VERSION = 1

#: The four directed crossing densities, in the order of the vector.
DIRECTIONS = ("horizontal", "vertical", "falling", "rising")

#: Families whose mean is a feature under `location_scale`: smoothing keeps the mean of the raw
#: field, and bands and curvature have means near zero.
_LOCATED = ("raw", "slope")


class Feature(NamedTuple):
    """What one number of the vector is.

    Attributes
    ----------
    name : str
        Column name, e.g. "smooth_2_contour_07".
    field : str
        Family: "raw", "smooth", "band", "slope" or "curvature".
    scale : float
        Gaussian scale of the field; 0 for none.
    functional : str
        "area", "contour", "euler", "crossings_..." or, without levels, "mean" or "std".
    level : float or None
        The level in the units of the level rule; None for "mean" and "std".
    unit : str
        Dimension in terms of the image's values (v) and the unit of the pitch (l).
    """

    name: str
    field: str
    scale: float
    functional: str
    level: float | None
    unit: str


_UNITS = {"area": "1", "contour": "1/l", "euler": "1/l^2"}
_VALUE_UNITS = {"raw": "v", "smooth": "v", "band": "v", "slope": "v/l", "curvature": "v/l^2"}


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
    location_scale: bool
    directional: bool
    connectivity: Any
    contour_estimator: str
    pitch: tuple[float, float]
    scale_unit: str
    remove_tilt: bool
    dtype: np.dtype
    channels: tuple[str, ...] | None = None
    learned: dict[str, np.ndarray] | None = None

    def level_functionals(self) -> tuple[str, ...]:
        """Return the functionals that have one value a level, in the order of the vector."""
        ordered = tuple(name for name in FUNCTIONALS if name in self.functionals)
        return ordered + (tuple(f"crossings_{d}" for d in DIRECTIONS) if self.directional else ())

    def moments(self, field: Field) -> tuple[str, ...]:
        """Return the moments of a field that are features."""
        if not self.location_scale:
            return ()
        return ("mean", "std") if field.family in _LOCATED else ("std",)

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
        per_level = len(self.level_functionals())
        found, column = {}, 0
        for field in self.fields:
            found[field] = column
            count = len(self.level_values[field.name])
            column += len(self.moments(field)) + per_level * count
        return found

    @cached_property
    def length(self) -> int:
        """How many numbers the vector of one channel has."""
        per_level = len(self.level_functionals())
        return sum(
            len(self.moments(field)) + per_level * len(self.level_values[field.name])
            for field in self.fields
        )

    def features(self) -> list[Feature]:
        """Return one entry a number of the vector of one channel, in order."""
        found = []
        for field in self.fields:
            prefix = field.name
            unit = _VALUE_UNITS[field.family]
            for moment in self.moments(field):
                name = f"{prefix}_{moment}"
                found.append(Feature(name, field.family, field.scale, moment, None, unit))
            levels = self.level_values[prefix]
            digits = max(2, len(str(len(levels) - 1)))
            for functional in self.level_functionals():
                for k, level in enumerate(levels):
                    name = f"{prefix}_{functional}_{k:0{digits}d}"
                    unit_of = _UNITS.get(functional, "1/l")
                    found.append(
                        Feature(name, field.family, field.scale, functional, float(level), unit_of)
                    )
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
            "connectivity": self.connectivity,
            "contour_estimator": self.contour_estimator,
            "pitch": list(self.pitch),
            "scale_unit": self.scale_unit,
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

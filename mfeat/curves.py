"""Minkowski curves of one image, in physical units."""

from dataclasses import dataclass
from typing import Any

import numpy as np

from mfeat import _checks
from mfeat.counts import EDGES, PatternCounts, count_image
from mfeat.fields import FAMILIES, SCALE_UNITS, Field, check_scales, derive, prepared
from mfeat.functionals import CONNECTIVITIES, CONTOUR_ESTIMATORS, area, contour, euler
from mfeat.levels import RULES, level_values, place_levels


@dataclass(frozen=True, eq=False)
class Curves:
    """Area, contour and Euler number of the level sets of one image, over the levels.

    Returned by `minkowski_curves`.

    Attributes
    ----------
    levels : ndarray of shape (T,), float64
        Levels in the unit of the field; the level set at u is {field >= u}.
    area, contour, euler : ndarray of shape (T,), float64
        Densities per valid window area for edges "inside", totals for "framed"; see `units`.
    valid_fraction : float
        Share of the field's 2x2 windows whose four pixels are all valid.
    units : dict
        Units of "levels", "area", "contour" and "euler".
    field : str
        Name of the field: "raw", "smooth_2", ...
    counts : PatternCounts
        The exact integers behind the curves.
    """

    levels: np.ndarray
    area: np.ndarray
    contour: np.ndarray
    euler: np.ndarray
    valid_fraction: float
    units: dict[str, str]
    field: str
    counts: PatternCounts

    def __repr__(self) -> str:
        rows = [
            f"Curves of the {self.field} field at {len(self.levels)} levels, "
            f"valid fraction {self.valid_fraction:.4g}"
        ]
        for name in ("levels", "area", "contour", "euler"):
            values = getattr(self, name)
            unit = self.units[name]
            rows.append(
                f"  {name:8s}{np.min(values):>12.5g} to {np.max(values):<12.5g}"
                + ("" if unit == "1" else unit)
            )
        return "\n".join(row.rstrip() for row in rows)


def minkowski_curves(
    image: Any,
    levels: Any = 32,
    level_rule: str | None = None,
    pitch: Any = 1.0,
    mask: Any = None,
    edges: str = "inside",
    connectivity: Any = "mean",
    *,
    level_range: Any = None,
    field: str = "raw",
    scale: float = 0.0,
    scale_unit: str = "pitch",
    remove_tilt: bool = False,
    contour_estimator: str = "crofton-4",
    unit: str = "px",
    value_unit: str = "",
) -> Curves:
    """Compute area, contour length and Euler number of all level sets of one image.

    Parameters
    ----------
    image : array_like of shape (h, w), both >= 2
        Grey image or height map: bool, integers of up to 64 bit, float16, float32 or float64. NaN
        and masked pixels (numpy.ma) are missing; infinities are refused.
    levels : int or sequence of float, default 32
        How many levels the rule places (1 to 65,535), or the levels themselves, ascending, in the
        units of the rule.
    level_rule : {"standard", "rank", "fixed"}, optional
        "standard": standard deviations of the field from its mean. "rank": fractions of the field's
        pixels. "fixed": the field's own unit. Default: "standard" for a number of levels, "fixed"
        for explicit levels.
    pitch : float or (float, float), default 1.0
        Pixel pitch, or (row pitch, column pitch), in `unit`.
    mask : array of bool of shape (h, w), optional
        True where a pixel is valid.
    edges : {"inside", "framed"}, default "inside"
        "inside": densities, from the windows inside the image; for textures. "framed": totals, the
        image being surrounded by background; for isolated objects.
    connectivity : {4, 8, "mean"}, default "mean"
        Connectivity of the Euler number.
    level_range : (float, float), optional
        Range of a number of levels, in the units of the rule; see `mfeat.levels.level_values`.
    field : {"raw", "smooth", "band", "slope", "curvature", "contrast"}, default "raw"
        The field whose level sets are measured; see `mfeat.fields`.
    scale : float, default 0.0
        Gaussian scale of the field; must be 0 for "raw", > 0 for "smooth", "band", "contrast".
    scale_unit : {"pitch", "length"}, default "pitch"
        Whether `scale` counts pitches or is a length in `unit`.
    remove_tilt : bool, default False
        Whether the image's least-squares plane is levelled first, about its mean.
    contour_estimator : {"crofton-4", "crofton-2", "pixel-edge", "duda"}, default "crofton-4"
        See `mfeat.functionals.contour`.
    unit : str, default "px"
        Name of the length unit of `pitch`, for `Curves.units`.
    value_unit : str, default ""
        Name of the unit of the pixel values, for `Curves.units`.

    Returns
    -------
    Curves

    Raises
    ------
    ValueError, TypeError
        Naming the parameter, what was found and what to do; also where no window of the field has
        four valid pixels.

    Examples
    --------
    The level sets of a cone of height 10 are discs:

    >>> import numpy as np
    >>> from mfeat import minkowski_curves
    >>> y, x = np.mgrid[-15:16, -15:16]
    >>> cone = 10 - np.hypot(x, y)
    >>> curves = minkowski_curves(cone, levels=[2.5, 5.5], edges="framed", pitch=0.1, unit="mm")
    >>> curves
    Curves of the raw field at 2 levels, valid fraction 1
      levels           2.5 to 5.5
      area            0.69 to 1.77        mm^2
      contour       2.8577 to 4.6887      mm
      euler              1 to 1
    >>> bool(abs(curves.contour[0] - 2 * np.pi * 0.75) < 0.05)
    True
    """
    if level_rule is None:
        level_rule = "standard" if isinstance(levels, int | np.integer) else "fixed"
    _checks.choice("level_rule", level_rule, RULES)
    if level_rule == "fitted":
        raise ValueError(
            'level_rule "fitted" learns from many images; use MinkowskiCurves(level_rule="fitted")'
        )
    values_of_rule = level_values(levels, level_rule, level_range)
    pitch = _checks.pitch(pitch)
    _checks.choice("edges", edges, EDGES)
    connectivity = _checks.choice("connectivity", connectivity, CONNECTIVITIES)
    _checks.choice("contour_estimator", contour_estimator, CONTOUR_ESTIMATORS)
    _checks.choice("scale_unit", scale_unit, SCALE_UNITS)
    chosen = _field(field, scale)
    for name, text in (("unit", unit), ("value_unit", value_unit)):
        if not isinstance(text, str):
            raise TypeError(f"{name} must be a string; got {text!r}")
    if not isinstance(remove_tilt, bool | np.bool_):
        raise TypeError(f"remove_tilt must be True or False; got {remove_tilt!r}")
    image = _checks.image(image)
    valid = _checks.valid_pixels(image, _checks.valid_mask(mask, image.shape))
    if valid is not None and not valid.any():
        raise ValueError("image has no valid pixel: all are NaN or masked")
    values = _checks.compiled_type(np.asarray(image))[None]
    stack_valid = None if valid is None else valid[None]
    _checks.representable(values, stack_valid, lambda _: "image")
    check_scales((chosen,), image.shape, pitch, scale_unit, "fixed")
    pixels = prepared(values, stack_valid, pitch, scale_unit, remove_tilt)
    [(_, fields)] = derive((chosen,), pixels, "fixed")
    placed = place_levels(fields, level_rule, values_of_rule)
    counts = count_image(
        fields.values[0],
        None if stack_valid is None else fields.valid[0].astype(bool),
        placed.shown[0].astype(np.float64),
        placed.thresholds[0],
        placed.reach[0],
        pitch=pitch,
        edges=edges,
    )
    if counts.windows == 0:
        raise ValueError(
            f"field {chosen.name} has no 2x2 window of four valid pixels among its "
            f"{counts.possible_windows}; the image has too few valid pixels"
        )
    return Curves(
        levels=counts.levels,
        area=area(counts),
        contour=contour(counts, estimator=contour_estimator),
        euler=euler(counts, connectivity=connectivity),
        valid_fraction=counts.valid_fraction,
        units=_units(chosen.family, edges, unit, value_unit),
        field=chosen.name,
        counts=counts,
    )


def _field(family: str, scale: float) -> Field:
    _checks.choice("field", family, FAMILIES)
    if family == "raw":
        if _checks.real("scale", scale) != 0.0:
            raise ValueError(f'scale must be 0 for field "raw"; got {scale!r}. Use field="smooth"')
        return Field("raw")
    number = _checks.real("scale", scale, minimum=0.0) + 0.0
    if number == 0.0 and family in ("smooth", "band", "contrast"):
        raise ValueError(f'scale must be > 0 for field "{family}"; got {scale!r}')
    return Field(family, number)


def _units(family: str, edges: str, unit: str, value_unit: str) -> dict[str, str]:
    value = value_unit or "1"
    power = {"slope": f"{value}/{unit}", "curvature": f"{value}/{unit}^2", "contrast": "1"}
    totals = {"area": f"{unit}^2", "contour": unit, "euler": "1"}
    per_area = {"area": "1", "contour": f"1/{unit}", "euler": f"1/{unit}^2"}
    return {"levels": power.get(family, value)} | (totals if edges == "framed" else per_area)

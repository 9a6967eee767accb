"""From the parameters of a transformer to the plan of its vectors: all checks in one place."""

import pickle
from dataclasses import replace
from typing import Any

import numpy as np

from mfeat import _checks
from mfeat.basis import LEVEL_RANGE, MAX_TERMS, TERMS
from mfeat.fields import FAMILIES, Field, scales
from mfeat.functionals import CONNECTIVITIES
from mfeat.levels import level_values
from mfeat.plan import DIRECTIONS, VECTOR_FUNCTIONALS, VectorPlan, learned_key

# Plans by their parameters: checking and resolving them again for each patch of a stream would
# cost more than the patch.
_PLANS: dict[bytes, VectorPlan] = {}
_MOST_PLANS = 64


def resolve(estimator: Any) -> VectorPlan:
    """Check the parameters of a `MinkowskiCurves` as they are now and turn them into a plan.

    Raises
    ------
    ValueError, TypeError
        Naming the parameter, what was given and what is legal.
    """
    parameters = [getattr(estimator, name) for name in estimator._parameter_constraints]
    try:
        key = pickle.dumps(parameters)
    except (pickle.PicklingError, TypeError, AttributeError):
        return _resolve(estimator)  # where it will be said which parameter is wrong
    plan = _PLANS.get(key)
    if plan is None:
        plan = _resolve(estimator)
        if len(_PLANS) >= _MOST_PLANS:
            _PLANS.clear()
        _PLANS[key] = plan
    return plan


def with_learned(
    plan: VectorPlan, fitted: VectorPlan, learned: dict[str, np.ndarray]
) -> VectorPlan:
    """Return a plan with levels learned under another, which must agree where it matters.

    Fields may be left out after `fit`; levels, pitch and new fields need another `fit`.
    """
    for name in ("pitch", "scale_unit", "scale_rule", "remove_tilt", "channels"):
        if getattr(plan, name) != getattr(fitted, name):
            raise ValueError(
                f"parameters were changed after fit: {name} was {getattr(fitted, name)!r} when the "
                f"levels were learned and is {getattr(plan, name)!r} now; call fit again"
            )
    for name, wanted in plan.level_values.items():
        there = fitted.level_values.get(name)
        if there is None or not np.array_equal(there, wanted):
            had = "none" if there is None else _checks.show(there)
            raise ValueError(
                f"parameters were changed after fit: field {name} has the levels "
                f"{_checks.show(wanted)} now, and had {had} when they were learned; call fit again"
            )
    wanted = {
        learned_key(field, channel): len(plan.level_values[field.name])
        for channel in plan.channels or (None,)
        for field in plan.fields
    }
    for key, count in wanted.items():
        values = np.asarray(learned.get(key, ()), dtype=np.float64)
        if values.shape != (count,) or not (np.diff(values) >= 0).all() or np.isnan(values).any():
            raise ValueError(
                f"levels_[{key!r}] must hold {count} ascending numbers; got "
                f"{learned.get(key)!r}. Do not change levels_; call fit again"
            )
    return replace(plan, learned={key: learned[key] for key in wanted})


def _resolve(estimator: Any) -> VectorPlan:
    estimator._validate_params()
    share = _checks.real("min_valid", estimator.min_valid, minimum=0.0)
    if share > 1.0:
        raise ValueError(f"min_valid must be from 0 to 1; got {estimator.min_valid!r}")
    _check_jobs(estimator.n_jobs)
    fields = _fields(estimator)
    families = dict.fromkeys(field.family for field in fields)
    terms = _terms(estimator)
    if isinstance(estimator.levels, dict) or isinstance(estimator.level_range, dict):
        per_family = {
            family: level_values(
                _of_family("levels", estimator.levels, family),
                estimator.level_rule,
                _range(
                    estimator,
                    _of_family("levels", estimator.levels, family),
                    _range_of_family(estimator, family),
                ),
            )
            for family in families
        }
    else:  # one array for all, by which `vector` knows that they are alike
        shared = level_values(
            estimator.levels,
            estimator.level_rule,
            _range(estimator, estimator.levels, estimator.level_range),
        )
        per_family = dict.fromkeys(families, shared)
    plan = VectorPlan(
        fields=fields,
        functionals=_functionals(estimator.functionals),
        level_rule=estimator.level_rule,
        level_values={field.name: per_family[field.family] for field in fields},
        location_scale=_location_scale(estimator),
        separate_scale=bool(estimator.separate_scale),
        roughness=scales("roughness", estimator.roughness, zero=True),
        basis=estimator.basis,
        terms=terms,
        directional=bool(estimator.directional),
        connectivity=_checks.choice("connectivity", estimator.connectivity, CONNECTIVITIES),
        contour_estimator=estimator.contour_estimator,
        pitch=_checks.pitch(estimator.pitch),
        scale_unit=estimator.scale_unit,
        scale_rule=estimator.scale_rule,
        remove_tilt=bool(estimator.remove_tilt),
        dtype=np.dtype(estimator.dtype),
        channels=_channels(estimator.channels),
    )
    if plan.length == 0:
        raise ValueError(
            "the vector would be empty: functionals is (), directional and location_scale are "
            "False; switch one of them on"
        )
    return plan


def _location_scale(estimator: Any) -> bool | str:
    given = estimator.location_scale
    if isinstance(given, str) and not estimator.separate_scale:
        raise ValueError(
            f"location_scale={given!r} chooses among numbers that separate_scale=True keeps apart; "
            "set that, or location_scale to True or False"
        )
    return given if isinstance(given, str) else bool(given)


def _terms(estimator: Any) -> dict[str, int]:
    """Return the number of Hermite functions by functional; directed crossings follow contour."""
    if estimator.basis == "hermite" and estimator.level_rule != "standard":
        raise ValueError(
            f'basis "hermite" needs level_rule "standard", which places levels as its functions '
            f'are; got {estimator.level_rule!r}. Use basis="levels" with other rules'
        )
    given = estimator.terms
    if isinstance(given, dict):
        unknown = [name for name in given if name not in TERMS]
        if unknown:
            raise ValueError(f"terms has entries {unknown}; functionals are {', '.join(TERMS)}")
        own = TERMS | given
    else:
        own = TERMS if given is None else dict.fromkeys(TERMS, given)
    found = {
        name: _checks.integer(f"terms[{name!r}]", count, minimum=1, maximum=MAX_TERMS)
        for name, count in own.items()
    }
    return found | {f"crossings_{direction}": found["contour"] for direction in DIRECTIONS}


def _range(estimator: Any, levels: Any, given: Any) -> Any:
    """Return a range of levels; Hermite functions need a wider one where none is given."""
    if given is None and estimator.basis == "hermite" and _is_number(levels):
        return LEVEL_RANGE
    return given


def _is_number(levels: Any) -> bool:
    return isinstance(levels, int | np.integer | float | np.floating)


def _check_jobs(n_jobs: Any) -> None:
    if n_jobs is None:
        return
    if _checks.integer("n_jobs", n_jobs, minimum=-(2**31)) == 0:
        raise ValueError("n_jobs must be None, >= 1, or <= -1 to count from all processors; got 0")


def _fields(estimator: Any) -> tuple[Field, ...]:
    fields = [Field("raw")] if estimator.raw else []
    for family in FAMILIES[1:]:
        zero = family in ("slope", "curvature")  # differences need no smoothing
        given = scales(family, getattr(estimator, family), zero=zero)
        fields += [Field(family, scale) for scale in given]
    if not fields:
        raise ValueError(
            "no field is left: raw is False and smooth, band, slope, curvature and contrast are "
            "(); give at least one"
        )
    return tuple(fields)


def _functionals(given: Any) -> tuple[str, ...]:
    names = tuple(_checks.choice("functionals", name, VECTOR_FUNCTIONALS) for name in given)
    if len(set(names)) < len(names):
        raise ValueError(f"functionals holds a name twice: {names!r}")
    return names


def _channels(given: Any) -> tuple[str, ...] | None:
    if given is None:
        return None
    names = tuple(given)
    proper = all(isinstance(name, str) and name for name in names)
    if not names or not proper or len(set(names)) < len(names):
        raise ValueError(f"channels must be distinct, non-empty names; got {given!r}")
    return names


def _range_of_family(estimator: Any, family: str) -> Any:
    """Return the range of a family; levels that are given themselves need no entry."""
    ranges, levels = estimator.level_range, _of_family("levels", estimator.levels, family)
    if isinstance(ranges, dict) and not _is_number(levels):
        ranges = {family: None} | ranges
    return _of_family("level_range", ranges, family)


def _of_family(name: str, value: Any, family: str) -> Any:
    """Return a parameter for one family, where it may be a dict over families."""
    if not isinstance(value, dict):
        return value
    unknown = sorted(set(value) - set(FAMILIES), key=str)
    if unknown:
        raise ValueError(f"{name} has unknown field families {unknown}; known are {list(FAMILIES)}")
    if family not in value:
        raise ValueError(
            f"{name} is a dict without an entry for {family!r}, a family in use; it has "
            f"{list(value)}"
        )
    return value[family]

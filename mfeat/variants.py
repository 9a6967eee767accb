"""Variants of a vector for an ablation: one part left out, alone, or done otherwise."""

from collections.abc import Iterator
from typing import Any

import numpy as np
from sklearn.base import clone

from mfeat.fields import FAMILIES
from mfeat.plan import VECTOR_FUNCTIONALS
from mfeat.transformer import MinkowskiCurves, full_curves

# Numbers of levels that are tried.
_LEVELS = (8, 16, 32, 64)


def variants_of(transformer: MinkowskiCurves) -> dict[str, MinkowskiCurves]:
    """Return variants by what they are, e.g. "without euler", "only smooth", "32 levels".

    Each differs from `transformer` in one part. Variants that would be empty, equal to it or to one
    before, or that its other settings exclude (levels given by family, say, where families are
    added) are not among them. They are not fitted, whether it is or not.

    Examples
    --------
    >>> from mfeat import MinkowskiCurves
    >>> from mfeat.variants import variants_of
    >>> list(variants_of(MinkowskiCurves()))[:3]
    ['without area', 'without contour', 'without euler']
    """
    seen = [transformer._plan().settings()]
    found = {}
    for name, parameters in _changes(transformer):
        variant = clone(transformer).set_params(**parameters)
        try:
            settings = variant._plan().settings()
        except ValueError:
            continue  # its settings exclude each other
        if settings not in seen:
            seen.append(settings)
            found[name] = variant
    return found


def _changes(transformer: MinkowskiCurves) -> Iterator[tuple[str, dict[str, Any]]]:
    """Yield the name of a variant and the parameters that make it."""
    functionals = tuple(name for name in VECTOR_FUNCTIONALS if name in transformer.functionals)
    families = [family for family in FAMILIES if _is_on(transformer, family)]
    for parts, without in ((functionals, _functionals), (families, _families)):
        if len(parts) > 1:
            for one in parts:
                rest = [other for other in parts if other != one]
                yield f"without {one}", without(transformer, rest)
            for one in parts:
                yield f"only {one}", without(transformer, [one])
    together = {"separate_scale": False, "location_scale": bool(transformer.location_scale)}
    if functionals:
        yield "without location and scale", {"location_scale": False}
        if transformer.separate_scale:
            yield "scale as ratios", {"location_scale": "ratio"}
        yield "only location and scale", {
            "functionals": (), "directional": False, "location_scale": True,
        }  # fmt: skip
    if functionals and not transformer.directional:
        yield "with directions", {"directional": True}
    if transformer.level_rule == "standard":
        levels = {"basis": "levels", "level_range": None}
        if transformer.basis == "hermite":
            yield "curves at levels", levels
            yield "rank levels", levels | {"level_rule": "rank"}
        else:
            yield "rank levels", {"level_rule": "rank", "level_range": None}
        if isinstance(transformer.levels, int | np.integer):
            for number in _LEVELS:
                yield f"{number} levels", {"levels": number}
    if transformer.separate_scale:
        yield "scale not apart", together
    if transformer.scale_rule == "matched":
        yield "fixed Gaussians", {"scale_rule": "fixed"} | _halved(transformer)
        yield "whole curves of fixed fields", full_curves() | together


def _is_on(transformer: MinkowskiCurves, family: str) -> bool:
    given = getattr(transformer, family)
    return bool(given) if family == "raw" else len(given) > 0


def _functionals(_: MinkowskiCurves, kept: list[str]) -> dict[str, Any]:
    return {"functionals": tuple(kept)}


def _families(transformer: MinkowskiCurves, kept: list[str]) -> dict[str, Any]:
    return {
        family: getattr(transformer, family) if family in kept else family != "raw" and ()
        for family in FAMILIES
    }


def _halved(transformer: MinkowskiCurves) -> dict[str, Any]:
    """Return the scales of Gaussians that give about the lengths of detail that scales name.

    White noise smoothed by a Gaussian of s has the length sqrt(2) s, common surfaces more.
    """
    return {
        family: tuple(scale / 2 for scale in getattr(transformer, family))
        for family in FAMILIES[1:]
    }

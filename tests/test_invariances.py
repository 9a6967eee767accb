"""A registry of invariances: what each vector and curve may not notice, and what it has to.

Every row says which changes leave a descriptor as it is; it must notice all others clearly. Pixels
are float64 and changes exact (no rounding, no clipping), on photographed surfaces.
"""

from functools import cache

import numpy as np
import pytest
from scipy.ndimage import gaussian_filter
from skimage import data

from mfeat import MinkowskiCurves, minkowski_curves
from mfeat.descriptors import DESCRIPTORS
from mfeat.transformer import full_curves

# The tone change rises strictly over 0 to 255, the range of the photographs.
CHANGES = {
    "turn": lambda patch: np.rot90(patch),
    "mirror": lambda patch: patch[:, ::-1],
    "offset": lambda patch: patch + 37.0,
    "gain": lambda patch: patch * 0.5,
    "tone": lambda patch: 255.0 * (patch / 255.0) ** 3,
}
PLACE = {"turn", "mirror"}
LIGHT = {"offset", "gain"}

RANK = {
    "basis": "levels", "level_rule": "rank", "raw": True, "smooth": (), "curvature": (),
    "contrast": (), "separate_scale": False,
}  # fmt: skip

#: Our vector in several settings: name, (parameters, what leaves it as it is).
OURS = {
    "default": ({}, PLACE),
    "scale as ratios": ({"location_scale": "ratio"}, PLACE | LIGHT),
    "scale without contrast": ({"location_scale": "scale"}, PLACE | {"offset"}),
    "no location and scale": ({"location_scale": False}, PLACE | LIGHT),
    "full curves": (full_curves(), PLACE),
    "full curves alone": (full_curves() | {"location_scale": False}, PLACE | LIGHT),
    "rank levels of raw pixels": (RANK | {"location_scale": False}, PLACE | LIGHT | {"tone"}),
    "rank levels with mean and deviation": (RANK, PLACE),
    "rank levels with lengths": (
        # the correlation length divides by a deviation, which tone changes
        RANK | {"location_scale": False, "separate_scale": True}, PLACE | LIGHT,
    ),
    "directions": ({"directional": True}, set()),
    "directions alone": ({"directional": True, "location_scale": False}, LIGHT),
    "directions of rank levels": (
        RANK | {"location_scale": False, "directional": True}, LIGHT | {"tone"},
    ),
    "fixed levels": (
        RANK | {"location_scale": False, "level_rule": "fixed", "level_range": (0, 255)}, PLACE,
    ),
}  # fmt: skip

#: The other descriptors without location and scale; with them, light is noticed, too.
RIVALS = {
    "grey-histogram": PLACE | LIGHT,
    "local-binary-patterns": PLACE | LIGHT,
    "co-occurrence": PLACE | LIGHT,
    "gabor": PLACE | LIGHT,
    "oriented-gradients": LIGHT,
    "filter-bank": PLACE | LIGHT,
    "random-kernels": {"turn"} | LIGHT,
    "wavelets": PLACE | LIGHT,
    "power-spectrum": PLACE | LIGHT,
}

#: Curves of one image: keywords of `minkowski_curves`.
CURVES = {
    "standard": ({}, PLACE | LIGHT),
    "rank": ({"level_rule": "rank"}, PLACE | LIGHT | {"tone"}),
    "rank of a smoothing": (
        {"level_rule": "rank", "field": "smooth", "scale": 1.5}, PLACE | LIGHT,
    ),
    "slope": ({"field": "slope", "scale": 1.0}, PLACE | LIGHT),
    "fixed": ({"levels": [60.0, 100.0, 140.0], "level_rule": "fixed"}, PLACE),
    "fixed slope": (
        {"levels": [2.0, 5.0, 9.0], "level_rule": "fixed", "field": "slope"}, PLACE | {"offset"},
    ),
    "framed": ({"edges": "framed"}, PLACE | LIGHT),
}  # fmt: skip

PITCH = {"smooth": (4, 6), "curvature": (4, 6), "contrast": (4, 6), "roughness": (3, 6)}
FULL = full_curves() | {"smooth": (3, 6), "band": (3,), "slope": (3,)}

#: Whether the same surface, scanned at twice the pitch, has the same vector: ours by parameters.
AT_ANOTHER_PITCH = {
    "default in lengths": (PITCH | {"scale_unit": "length"}, True),
    "default in pitches": (PITCH | {"scale_unit": "pitch"}, False),
    "ratios in lengths": (PITCH | {"scale_unit": "length", "location_scale": "ratio"}, True),
    "ratios in pitches": (PITCH | {"scale_unit": "pitch", "location_scale": "ratio"}, False),
    "no location and scale in lengths": (
        PITCH | {"scale_unit": "length", "location_scale": False}, True,
    ),
    "no location and scale in pitches": (
        PITCH | {"scale_unit": "pitch", "location_scale": False}, False,
    ),
    "full curves in lengths": (FULL | {"scale_unit": "length"}, True),
    "full curves in pitches": (FULL | {"scale_unit": "pitch"}, False),
    "directions in lengths": (FULL | {"scale_unit": "length", "directional": True}, True),
    "rank levels of raw pixels": (RANK | {"location_scale": False}, True),
}  # fmt: skip

CURVES_AT_ANOTHER_PITCH = {
    "raw": ({}, True),
    "smooth in lengths": ({"field": "smooth", "scale": 4.0, "scale_unit": "length"}, True),
    "smooth in pitches": ({"field": "smooth", "scale": 4.0, "scale_unit": "pitch"}, False),
}


@cache
def patches():
    """Three real patches; none is symmetric."""
    found = [data.brick()[40:104, 60:124], data.gravel()[100:164, 30:94],
             data.grass()[200:264, 10:74]]  # fmt: skip
    return np.stack(found).astype(np.float64)


@cache
def changed():
    """The patches as they are, then under each change, as one array."""
    found = [patches(), *(np.stack([c(p) for p in patches()]) for c in CHANGES.values())]
    return np.ascontiguousarray(np.concatenate(found))


def check(rows, invariant):
    """Compare rows of the changed patches with those of the patches, column by column.

    Equal to rounding: within 2e-5 of the largest number of the column and 1e-6 of that of the row
    (float32 filters). Clearly different: some column by more than 1 %, for every patch.
    """
    before, *after = np.split(np.asarray(rows, dtype=np.float64), 1 + len(CHANGES))
    size = np.abs(before).max(axis=0)
    for name, one in zip(CHANGES, after, strict=True):
        gap = np.abs(one - before)
        if name in invariant:
            allowed = 2e-5 * size + 1e-6 * np.abs(before).max(axis=1, keepdims=True)
            assert (gap <= allowed).all(), f"{name} is noticed"
        else:
            assert (gap > 0.01 * size).any(axis=1).all(), f"{name} is not noticed"


def ours(parameters):
    return MinkowskiCurves(**parameters | {"dtype": "float64"})


def curve_numbers(image, **how):
    found = minkowski_curves(image, **{"levels": 8} | how)
    return np.concatenate([found.area, found.contour, found.euler])


@pytest.mark.parametrize("name", OURS)
def test_our_vector(name):
    parameters, invariant = OURS[name]
    check(ours(parameters).fit_transform(changed()), invariant)


@pytest.mark.parametrize("name", RIVALS)
def test_other_descriptors(name):
    whole = DESCRIPTORS[name](location_scale=True).fit_transform(changed())
    check(whole, RIVALS[name] - LIGHT)
    rows = whole[:, 2:]
    check(rows, RIVALS[name])
    alone = DESCRIPTORS[name](location_scale=False).fit_transform(patches())
    np.testing.assert_array_equal(alone, rows[: len(alone)])


@pytest.mark.parametrize("name", CURVES)
def test_curves(name):
    how, invariant = CURVES[name]
    check([curve_numbers(patch, **how) for patch in changed()], invariant)


def test_the_learned_grey_levels_notice_light():
    """Levels and ranges in grey values, learned from the patches, are the other side of LIGHT."""
    fitted = ours(RANK | {"level_rule": "fitted", "location_scale": False}).fit(patches())
    check(fitted.transform(changed()), PLACE)


@cache
def surfaces():
    """Surfaces smooth enough to be scanned at a pitch of 1 and of 2."""
    photographs = (data.brick(), data.gravel(), data.grass())
    return np.stack([gaussian_filter(p[:128, :128].astype(np.float64), 2.5) for p in photographs])


def check_pitch(fine, coarse, invariant):
    """Invariant: within 3 % of the vector's length (borders, and pixels, are others)."""
    gap = np.linalg.norm(fine - coarse, axis=1) / np.linalg.norm(fine, axis=1)
    assert (gap < 0.03).all() if invariant else (gap > 0.04).all(), gap


@pytest.mark.parametrize("name", AT_ANOTHER_PITCH)
def test_our_vector_at_another_pitch(name):
    parameters, invariant = AT_ANOTHER_PITCH[name]
    fine = ours(parameters | {"pitch": 1.0}).fit_transform(surfaces())
    coarse = ours(parameters | {"pitch": 2.0}).fit_transform(surfaces()[:, ::2, ::2])
    check_pitch(fine, coarse, invariant)
    forgotten = ours(parameters | {"pitch": 1.0}).fit_transform(surfaces()[:, ::2, ::2])
    check_pitch(fine, forgotten, False)


@pytest.mark.parametrize("name", CURVES_AT_ANOTHER_PITCH)
def test_curves_at_another_pitch(name):
    """Contour alone, by which a wrong scale or a wrong unit is noticed."""
    how, invariant = CURVES_AT_ANOTHER_PITCH[name]

    def contours(step, pitch):
        images = surfaces()[:, ::step, ::step]
        return np.stack([minkowski_curves(i, 8, pitch=pitch, **how).contour for i in images])

    check_pitch(contours(1, 1.0), contours(2, 2.0), invariant)
    check_pitch(contours(1, 1.0), contours(2, 1.0), False)


def test_the_lists_cover_the_registry_and_every_invariance():
    assert set(RIVALS) == set(DESCRIPTORS)
    told = [invariant for _, invariant in (*OURS.values(), *CURVES.values())] + [*RIVALS.values()]
    assert all(invariant <= set(CHANGES) for invariant in told)
    for change in CHANGES:  # each is listed on both sides, among ours too
        assert {change in invariant for _, invariant in OURS.values()} == {True, False}
    for change in ("offset", "gain", "tone"):
        assert {change in invariant for _, invariant in CURVES.values()} == {True, False}
    for table in (AT_ANOTHER_PITCH, CURVES_AT_ANOTHER_PITCH):
        assert {invariant for _, invariant in table.values()} == {True, False}
    given = [parameters.get("location_scale") for parameters, _ in OURS.values()]
    assert {"ratio", "scale", False, None} <= set(given)


def test_the_check_can_fail():
    rows = np.ones((18, 2))
    check(rows, set(CHANGES))
    with pytest.raises(AssertionError, match="turn is not noticed"):
        check(rows, LIGHT)
    rows[3:6, 0] = 1.0001
    with pytest.raises(AssertionError, match="turn is noticed"):
        check(rows, set(CHANGES))

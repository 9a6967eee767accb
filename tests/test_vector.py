"""Vectors of shape apart from scale, of matched fields and Hermite functions; joined fields."""

import json
import math
import pickle

import numpy as np
import pytest
from scipy import ndimage
from skimage import data
from sklearn.base import clone

from mfeat import MinkowskiCurves, vector
from mfeat.basis import project
from mfeat.fields import Field
from mfeat.surfaces import gaussian_field
from mfeat.transformer import full_curves
from mfeat.vector import LOG_OF_NOTHING

ONLY = {"raw": False, "smooth": (), "band": (), "slope": (), "curvature": (), "contrast": ()}
EVERY = {
    "raw": True, "smooth": (2.5,), "band": (2,), "slope": (0, 2.5), "curvature": (0, 2.5),
    "contrast": (2.5, 3.5),
}  # fmt: skip


def compact(**options):
    """A transformer of the default kind, in float64."""
    return MinkowskiCurves(**{"dtype": "float64"} | options)


def columns(transformer, X):
    """Return {name: numbers} of the features."""
    names = transformer.get_feature_names_out()
    return dict(zip(names, transformer.transform(X).T, strict=True))


def noise(n=5, shape=(24, 26), seed=0):
    return np.random.default_rng(seed).normal(size=(n, *shape))


@pytest.fixture(scope="module")
def surfaces():
    """Real surfaces, scikit-image's brick, grass and gravel."""
    return np.stack([x[40:104, 200:264] for x in (data.brick(), data.grass(), data.gravel())])


# Shape apart from scale ---------------------------------------------------------------------


def test_gaussian_fields_have_the_same_curves_whatever_their_size():
    # With lengths in s / sqrt(tau): contour exp(-v^2/2) / 2, Euler v exp(-v^2/2) / (2 pi)^1.5
    # (Rice 1944/45; Adler 1981; Tomita 1986); products with h_k as in test_basis, by hand.
    root = math.sqrt(math.pi)
    expected = {
        "contour_h0": root / 2, "contour_h1": 0.0,
        "euler_h0": 0.0, "euler_h1": root / 2 / (2 * math.pi) ** 1.5, "euler_h2": 0.0,
        "euler_h3": -3 * root / 4 / math.sqrt(6) / (2 * math.pi) ** 1.5,
        "area_h0": 0.0, "area_h1": 0.0, "area_h2": 0.0, "area_h3": 0.0,
    }  # fmt: skip
    separated = compact(**ONLY | {"raw": True})
    found = {}
    for length, std in ((5.0, 1.0), (7.0, 200.0), (10.0, 1e-3)):
        X = [gaussian_field((512, 512), length, seed, std=std) for seed in range(6)]
        found[length] = columns(separated, X)
    for length, values in found.items():
        for name, value in expected.items():
            size = 0.9 if name.startswith("contour") else 0.06 if "euler" in name else 1.0
            got = values[f"raw_{name}"].mean()
            assert got == pytest.approx(value, abs=0.05 * size), (length, name)
    # the other side: in physical units they differ as lengths do, and squares of lengths
    plain = compact(**ONLY | {"raw": True, "separate_scale": False})
    fine, wide = (columns(plain, gaussian_field((512, 512), x, 0)[None]) for x in (5.0, 10.0))
    ratio = fine["raw_contour_h0"] / wide["raw_contour_h0"]
    assert ratio == pytest.approx(2.0, rel=0.1)
    assert fine["raw_euler_h1"] / wide["raw_euler_h1"] == pytest.approx(4.0, rel=0.2)


@pytest.mark.parametrize("scale", [0, 1.5])
def test_scale_in_logarithms_against_numpy(scale):
    X = 5.0 * noise() + 40.0
    only = ONLY | {"raw": True, "roughness": (scale, 3), "pitch": 0.5}
    found = columns(compact(**only), X) | columns(compact(**only, location_scale="scale"), X)
    sizes = {}
    for sigma in (scale, 3):
        smooth = np.stack([ndimage.gaussian_filter(x, sigma, truncate=4.0) for x in X])
        across = (np.diff(smooth, axis=2)[:, :-1] + np.diff(smooth, axis=2)[:, 1:]) / 2 / 0.5
        down = (np.diff(smooth, axis=1)[:, :, :-1] + np.diff(smooth, axis=1)[:, :, 1:]) / 2 / 0.5
        bend = np.stack([-0.5 * ndimage.laplace(x)[1:-1, 1:-1] / 0.25 for x in smooth])
        sizes[sigma] = {
            "log_std": smooth.std(axis=(1, 2)),
            "log_slope": np.sqrt((across**2 + down**2).mean(axis=(1, 2))),
            "log_curvature": np.sqrt((bend**2).mean(axis=(1, 2))),
        }
    first = sizes[scale]["log_std"]
    assert found[f"rough_{scale}_log_std"] == pytest.approx(np.log(first), rel=1e-10)
    for sigma, expected in sizes.items():
        part = np.log(expected["log_std"] / np.hypot(expected["log_std"], X.mean(axis=(1, 2))))
        assert found[f"rough_{sigma}_log_contrast"] == pytest.approx(part, rel=1e-10)
        for name, size in expected.items():
            if (sigma, name) != (scale, "log_std"):
                got = found[f"rough_{sigma}_{name}"]
                assert got == pytest.approx(np.log(size / first), abs=1e-9), (sigma, name)


def test_curves_are_multiplied_by_powers_of_the_length():
    every = {**EVERY, "basis": "levels", "levels": [0.0, 0.5], "directional": True}
    one = columns(compact(**every), noise())
    plain = columns(compact(**every, separate_scale=False), noise())
    fields = {(f.field, f.scale) for f in compact(**every).feature_table() if f.level is not None}
    assert len(fields) == 9
    for stem in (Field(*field).name for field in fields):
        length = one[f"{stem}_contour_00"] / plain[f"{stem}_contour_00"]
        for functional, power in (("area", 0), ("euler", 2), ("crossings_falling", 1)):
            got = one[f"{stem}_{functional}_01"]
            assert got == pytest.approx(plain[f"{stem}_{functional}_01"] * length**power), stem
        if stem == "raw":  # in pixels, by NumPy: s over the root mean square slope of a direction
            X = noise()
            across = (np.diff(X, axis=2)[:, :-1] + np.diff(X, axis=2)[:, 1:]) / 2
            down = (np.diff(X, axis=1)[:, :, :-1] + np.diff(X, axis=1)[:, :, 1:]) / 2
            tau = (across**2 + down**2).mean(axis=(1, 2)) / 2
            assert length == pytest.approx(X.std(axis=(1, 2)) / np.sqrt(tau), rel=1e-10)


@pytest.mark.parametrize(
    ("options", "expected"),
    [
        (
            {},
            [
                *["rough_1_log_contrast", "rough_1_log_std", "rough_1_log_slope"],
                *["rough_1_log_curvature"],
                *["rough_2.5_log_contrast", "rough_2.5_log_slope", "rough_2.5_log_curvature"],
            ],
        ),
        (
            {"location_scale": "ratio"},
            [
                *["rough_1_log_slope", "rough_1_log_curvature"],
                *["rough_2.5_log_std", "rough_2.5_log_slope", "rough_2.5_log_curvature"],
            ],
        ),
        (
            {"location_scale": "scale", "roughness": (1,)},
            ["rough_1_log_std", "rough_1_log_slope", "rough_1_log_curvature"],
        ),
        (
            {"location_scale": "ratio", "roughness": (0,)},
            ["rough_0_log_slope", "rough_0_log_curvature"],
        ),
        ({"roughness": ()}, []),
        ({"location_scale": False}, []),
        (
            {"separate_scale": False, "raw": True},
            ["raw_mean", "raw_std", "contrast_3_std"],
        ),
    ],
)
def test_which_moments_there_are(options, expected):
    chosen = ONLY | {"contrast": (3,), "roughness": (1, 2.5)} | options
    transformer = compact(**chosen, functionals=("area",))
    moments = [f for f in transformer.feature_table() if f.term is None]
    assert [f.name for f in moments] == expected
    assert all(f.level is None for f in moments)
    assert {f.unit for f in moments if f.field == "rough"} <= {"1"}
    assert np.isfinite(transformer.transform(noise())).all()


@pytest.mark.parametrize(("gain", "offset"), [(1e-6, 0.0), (0.4, 7.0), (3e5, -1e6)])
def test_ratios_know_no_gain_and_offset(surfaces, gain, offset):
    ratio = compact(**EVERY, location_scale="ratio")
    X = surfaces.astype(float)
    expected = ratio.transform(X)
    assert ratio.transform(gain * X + offset) == pytest.approx(expected, rel=1e-6, abs=1e-6)
    # the other side: with it, the deviation of the first field follows, and it alone
    one, other = (columns(compact(**EVERY), x) for x in (X, gain * X + offset))
    moved = {name for name in one if not np.allclose(one[name], other[name], atol=1e-5)}
    contrasts = {"rough_1.1_log_contrast", "rough_3_log_contrast"}
    assert moved == {"rough_1.1_log_std"} | (contrasts if offset else set())
    change = other["rough_1.1_log_std"] - one["rough_1.1_log_std"]
    assert change == pytest.approx(math.log(gain))


@pytest.mark.parametrize("gain", [1e-40, 1e-3, 1e6])
def test_ratios_of_what_is_not_there_know_no_gain_either(gain):
    y, x = np.mgrid[:32, :32]
    plane, board = 0.3 * x - 2.1 * y, (x + y) % 2 * 1.0
    X = gain * np.stack([plane, board, np.zeros((32, 32))])
    found = columns(compact(**ONLY | {"raw": True}, roughness=(0,)), X)
    # by hand: a board has no slope on 2x2 windows, a plane no curvature but rounding
    slope, curvature = found["rough_0_log_slope"], found["rough_0_log_curvature"]
    assert slope[0] == pytest.approx(math.log(math.hypot(0.3, 2.1) / plane.std()))
    assert slope[1:].tolist() == [LOG_OF_NOTHING, 0.0]
    assert curvature[1] == pytest.approx(math.log(4.0))  # 4 / 2 over 1 / 2
    assert curvature[[0, 2]].tolist() == [LOG_OF_NOTHING, 0.0]
    # a constant image has no contrast, whatever its height
    flat = np.full((3, 16, 16), gain) * np.array([0.0, 1.0, -7.0])[:, None, None]
    found = columns(compact(**ONLY | {"raw": True}, roughness=(0, 1)), flat)
    assert found["rough_0_log_contrast"].tolist() == [LOG_OF_NOTHING] * 3
    assert found["rough_0_log_std"].tolist() == [LOG_OF_NOTHING] * 3
    ratios = columns(
        compact(**ONLY | {"raw": True}, roughness=(0, 1), location_scale="ratio"), flat
    )
    assert not ratios["rough_1_log_std"].any()


def test_numbers_of_shape_do_not_follow_the_unit_of_the_pitch(surfaces):
    X = np.concatenate([surfaces, np.full((1, 64, 64), 3), np.indices((1, 64, 64)).sum(axis=0) % 2])
    one, other = (columns(compact(**EVERY, pitch=pitch), X) for pitch in (1.0, 1e-3))
    for name, found in other.items():
        change = found - one[name]
        power = {"slope": 1, "curvature": 2}.get(name.rsplit("_", 1)[-1], 0)
        relief = (np.abs(one[name]) < 60) & (one[name] != 0)
        expected = -power * math.log(1e-3) * (relief if power else 0.0)
        assert change == pytest.approx(expected, abs=1e-7), name


def test_noise_of_rounding_is_no_slope():
    # a checkerboard has no slope on 2x2 windows; 1e-15 of it would make lengths of 1e15, and Euler
    # numbers times the squares of those
    rng = np.random.default_rng(0)
    board = np.indices((20, 20)).sum(axis=0) % 2 + 0.0
    X = np.stack([board, np.where(board, 1.0, 1e-15 * rng.random((20, 20)))])
    found = columns(MinkowskiCurves(**ONLY | {"raw": True}), X)
    for name, (one, other) in found.items():
        assert one == pytest.approx(other, abs=1e-5), name


# Laws of the default vector -----------------------------------------------------------------


@pytest.mark.parametrize(
    "turn",
    [
        lambda x: np.rot90(x, axes=(1, 2)),
        lambda x: x[:, :, ::-1],
        lambda x: x.swapaxes(1, 2),
    ],
    ids=["turned", "mirrored", "transposed"],
)
def test_turns_do_not_matter(surfaces, turn):
    for options in ({}, EVERY):
        own = compact(**options)
        one, other = own.transform(surfaces), own.transform(turn(surfaces))
        assert other == pytest.approx(one, rel=1e-7, abs=1e-7)
    raw = compact(**ONLY | {"raw": True}, roughness=(0,))
    assert np.array_equal(raw.transform(turn(surfaces)), raw.transform(surfaces))


@pytest.mark.parametrize("dtype", ["uint8", "int32", "uint16", "float32", ">f8"])
def test_types_of_pixels_do_not_matter(surfaces, dtype):
    own = compact(**EVERY)
    expected = own.transform(surfaces.astype(float))
    assert np.array_equal(own.transform(surfaces.astype(dtype)), expected)


@pytest.mark.parametrize("holes", [False, True])
def test_channels_stand_side_by_side(holes):
    X = np.stack([noise(), 3 - 2 * noise(seed=1)], axis=-1)
    if holes:
        X[1, 3:6, 4] = np.nan
    both = compact(channels=("a", "b"), **EVERY)
    one = compact(**EVERY)
    expected = np.hstack([one.transform(X[..., c]) for c in range(2)])
    assert np.array_equal(both.transform(X), expected)
    names = one.get_feature_names_out()
    assert both.get_feature_names_out().tolist() == [f"{c}_{n}" for c in "ab" for n in names]


def test_missing_pixels_and_refused_patches():
    X = noise(7)
    X[1, 4:9, 5:20] = np.nan
    X[3] = np.nan
    X[4, 2:] = np.nan  # two rows: windows of the image, none of the curvature
    X[5, ::3] = np.nan
    X[6, 3:] = 4.0
    X[6, :3] = np.nan
    marked = compact(**EVERY, below_min_valid="nan", min_valid=0.0)
    found = marked.transform(X)
    assert np.isnan(found).all(axis=1).tolist() == [False, False, False, True, True, True, False]
    kept = [0, 1, 2, 6]
    assert np.isfinite(found[kept]).all()
    assert np.array_equal(found[kept], marked.transform(X[kept]))
    with pytest.raises(ValueError, match=r"3 of 7 .* X\[3\]: no window .* X\[4\]: one of its fie"):
        compact(**EVERY, min_valid=0.0).transform(X)
    hidden = np.ma.MaskedArray(np.where(np.isnan(X), 1e9, X), np.isnan(X))
    assert np.array_equal(marked.transform(hidden), found, equal_nan=True)


def test_copies_and_options_of_numpy(surfaces):
    given = compact(
        separate_scale=np.True_, location_scale=np.True_, raw=np.True_, terms=np.int64(3),
        contrast=np.array([3.0]), levels=np.int16(16), functionals=["euler", "anisotropy"],
    )  # fmt: skip
    same = compact(raw=True, terms=3, contrast=(3,), functionals=("anisotropy", "euler"))
    assert given.fingerprint() == same.fingerprint()
    for one in (given, same):
        settings = one.settings()
        assert json.loads(json.dumps(settings, allow_nan=False)) == settings
        for copy in (clone(one), pickle.loads(pickle.dumps(one))):
            assert copy.fingerprint() == one.fingerprint()
            assert np.array_equal(copy.transform(surfaces), same.transform(surfaces))


def test_only_terms_in_use_have_their_say_in_the_fingerprint():
    area = compact(functionals=("area",))
    assert clone(area).set_params(terms={"euler": 2}).fingerprint() == area.fingerprint()
    assert clone(area).set_params(terms={"area": 2}).fingerprint() != area.fingerprint()
    directed = {"functionals": (), "directional": True}  # these follow the contour
    one, other = (compact(**directed, terms={"contour": k}) for k in (2, 3))
    assert one.fingerprint() != other.fingerprint()
    assert len(other.feature_table()) > len(one.feature_table())


@pytest.mark.parametrize("scale_rule", ["matched", "fixed"])
def test_levels_learned_on_other_fields_are_refused(scale_rule):
    learned = compact(
        **ONLY | {"smooth": (2.5,), "contrast": (2.5,), "slope": (0,)},
        basis="levels", levels=6, level_rule="fitted", scale_rule=scale_rule,
    ).fit(noise(9))  # fmt: skip
    assert sorted(learned.levels_) == ["contrast_2.5", "slope_0", "smooth_2.5"]
    assert np.isfinite(learned.transform(noise(seed=1))).all()
    settings = learned.settings()
    assert json.loads(json.dumps(settings, allow_nan=False)) == settings
    other = {"matched": "fixed", "fixed": "matched"}[scale_rule]
    with pytest.raises(ValueError, match=f"scale_rule was '{scale_rule}' when the levels were lea"):
        learned.set_params(scale_rule=other).transform(noise())


# Hermite functions --------------------------------------------------------------------------


def test_terms_are_products_of_the_whole_curves():
    levels = np.linspace(-3, 3, 16)
    whole = compact(**EVERY, basis="levels", levels=levels, directional=True)
    few = compact(**EVERY, terms={"area": 5, "contour": 3}, directional=True)
    curves, found = columns(whole, noise()), columns(few, noise())
    asked = {(f.field, f.scale, f.functional) for f in few.feature_table() if f.term is not None}
    assert len(asked) == 9 * (4 + 4)
    for family, scale, functional in asked:
        stem = f"{Field(family, scale).name}_{functional}"
        curve = np.stack([curves[f"{stem}_{k:02d}"] for k in range(16)], axis=-1)
        terms = {"area": 5, "euler": 4}.get(functional, 3)
        expected = project(functional, curve, levels, terms)
        for k in range(terms):
            assert found[f"{stem}_h{k}"] == pytest.approx(expected[:, k], rel=1e-12, abs=1e-13)
        assert f"{stem}_h{terms}" not in found


def test_families_keep_their_own_levels_under_hermite_functions():
    # as many levels as others, but elsewhere
    each = {"smooth": (-3, 3), "slope": (-1, 2), "curvature": None}
    counts = {"smooth": 12, "slope": 12, "curvature": np.linspace(-2, 1, 12)}
    options = {"smooth": (2.5,), "slope": (2.5,), "curvature": (0,), "location_scale": False}
    found = columns(compact(**ONLY | options, levels=counts, level_range=each), noise())
    for family in each:
        alone = compact(
            **ONLY | {family: options[family], "location_scale": False},
            levels=counts[family], level_range=each[family],
        )  # fmt: skip
        for name, expected in columns(alone, noise()).items():
            assert np.array_equal(found[name], expected), name


def test_the_range_of_hermite_functions_is_theirs_in_dicts_too():
    given = {"smooth": (2.5,), "curvature": (0,)}
    one = compact(**ONLY | given, levels=9)
    for levels, level_range in (
        ({"smooth": 9, "curvature": 9}, None),
        (9, {"smooth": None, "curvature": None}),
        ({"smooth": 9, "curvature": 9}, {"smooth": (-3, 3), "curvature": None}),
    ):
        other = compact(**ONLY | given, levels=levels, level_range=level_range)
        assert other.settings()["levels"] == one.settings()["levels"]
    assert one.settings()["levels"]["smooth_2.5"][0] == -3.0
    whole = compact(**ONLY | given, levels={"smooth": 9, "curvature": 9}, basis="levels")
    assert whole.settings()["levels"]["smooth_2.5"][0] == -2.5


def test_names_of_many_terms_sort():
    names = compact(**ONLY | {"raw": True}, terms=12, location_scale=False).get_feature_names_out()
    assert names[:2].tolist() == ["raw_area_h00", "raw_area_h01"]
    for start in range(0, 48, 12):
        assert sorted(names[start : start + 12]) == names[start : start + 12].tolist()
    [feature] = [
        f for f in compact(smooth=(2.5,)).feature_table() if f.name == "smooth_2.5_euler_h3"
    ]
    assert feature[1:] == ("smooth", 2.5, "euler", None, "1", 3)


def test_functionals_of_either_basis_have_units():
    plain = compact(**ONLY | {"raw": True, "contrast": (3,)}, separate_scale=False)
    units = {(f.field, f.functional): f.unit for f in plain.feature_table()}
    assert units["raw", "anisotropy"] == units["contrast", "contour"] == "1/l"
    assert units["raw", "euler"] == "1/l^2"
    assert units["raw", "std"] == "v"
    assert units["contrast", "std"] == units["raw", "area"] == "1"


# Joined fields ------------------------------------------------------------------------------


@pytest.mark.parametrize("basis", ["hermite", "levels"])
@pytest.mark.parametrize("remove_tilt", [False, True])
def test_joining_fields_changes_no_bit(monkeypatch, basis, remove_tilt):
    # matched fields beside others of the same size: levelled images, differences of scale 0
    X = noise(5, (16, 17))
    X[1, 2:4, 3] = np.nan
    X[2] = 7.0
    X[3] += np.arange(17.0)
    own = compact(
        **EVERY, basis=basis, remove_tilt=remove_tilt, min_valid=0.0,
        levels={"raw": 7, "smooth": 7, "band": 6, "slope": 7, "curvature": 6, "contrast": 6},
    )  # fmt: skip
    monkeypatch.setattr(vector, "JOIN_PIXELS", 0)
    apart = own.transform(X)
    assert np.isfinite(apart).all()
    monkeypatch.setattr(vector, "JOIN_PIXELS", 10**9)
    assert np.array_equal(own.transform(X), apart)


# Whole curves -------------------------------------------------------------------------------


def test_whole_curves_are_in_physical_units_and_of_fixed_fields():
    whole = MinkowskiCurves(**full_curves())
    names = whole.get_feature_names_out().tolist()
    # by hand: eight fields with three functionals at 16 levels, mean and deviation of the raw
    # field and of two slopes, the deviation of the other five
    assert len(names) == 8 * 3 * 16 + 2 * 3 + 5
    assert {name.split("_0")[0].split("_1")[0] for name in names if "log" in name} == set()
    assert whole.settings()["terms"] is None
    assert whole.settings()["scale_rule"] == "fixed"
    assert set(full_curves()) <= set(whole.get_params())

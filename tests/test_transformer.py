"""`MinkowskiCurves`: input forms, values, names, parameters, levels, missing pixels, bad input."""

import json
import os
import pickle
import subprocess
import sys
from pathlib import Path

import joblib
import numpy as np
import pandas as pd
import polars as pl
import pytest
import scipy.sparse
from sklearn.base import clone
from sklearn.discriminant_analysis import LinearDiscriminantAnalysis
from sklearn.exceptions import NotFittedError
from sklearn.model_selection import GridSearchCV
from sklearn.pipeline import Pipeline, make_pipeline

import mfeat
from mfeat import MinkowskiCurves, PatchGrid, minkowski_curves, stacks, transformer, vector
from mfeat import settings as plans

WHOLE = transformer.full_curves()
RAW_ONLY = WHOLE | {"smooth": (), "band": (), "slope": ()}
EVERY_FAMILY = WHOLE | {"smooth": (1, 1.5), "band": (1,), "slope": (0, 1), "curvature": (0, 1)}


def noise(n=6, shape=(16, 18), seed=0):
    return np.random.default_rng(seed).normal(size=(n, *shape))


def small(**options):
    """A transformer of whole curves of fields of five families, with few levels."""
    return MinkowskiCurves(**({"levels": 4, "dtype": "float64"} | EVERY_FAMILY | options))


def raw(**options):
    return MinkowskiCurves(**({"levels": 4, "dtype": "float64"} | RAW_ONLY | options))


def with_holes(X):
    """A float copy with missing pixels in patches 1 and 4."""
    X = np.array(X, dtype=float)
    X[1, 2:5, 3:9] = np.nan
    X[4, 0, 0] = np.nan
    return X


def columns(fitted, **wanted):
    """Indices of the features whose attributes are as wanted."""
    return [
        k
        for k, feature in enumerate(fitted.feature_table())
        if all(getattr(feature, key) == value for key, value in wanted.items())
    ]


def values_by_name(fitted, X):
    names = fitted.get_feature_names_out()
    return [dict(zip(names, row, strict=True)) for row in fitted.transform(X).tolist()]


# Input forms --------------------------------------------------------------------------------


@pytest.mark.parametrize("missing", [False, True])
@pytest.mark.parametrize(
    "form",
    [
        list,
        tuple,
        np.asfortranarray,
        lambda X: X.astype(">f8"),
        lambda X: list(X.astype(">f8")),
        lambda X: np.repeat(np.repeat(X, 2, axis=1), 3, axis=2)[:, ::2, ::3],
        lambda X: X[::-1][::-1],
        lambda X: np.ascontiguousarray(X.transpose(0, 2, 1)).transpose(0, 2, 1),
        lambda X: np.array([*X, None], dtype=object)[:-1],
        lambda X: np.ma.MaskedArray(np.where(np.isnan(X), 5.0, X), mask=np.isnan(X)),
        lambda X: np.ma.MaskedArray(np.where(np.isnan(X), np.inf, X), mask=np.isnan(X)),
        lambda X: list(np.ma.masked_invalid(X)),
        lambda X: [patch.tolist() for patch in X],
        lambda X: pd.Series(list(X)),
    ],
    ids=[
        "list",
        "tuple",
        "Fortran order",
        "big-endian",
        "list of big-endian",
        "strided",
        "reversed twice",
        "transposed view",
        "object array of patches",
        "masked array",
        "masked infinities",
        "list of masked arrays",
        "nested lists",
        "pandas Series",
    ],
)
def test_input_forms_give_the_same_bits(form, missing):
    X = with_holes(noise()) if missing else noise()
    expected = small().transform(X)
    assert np.isfinite(expected).all()
    np.testing.assert_array_equal(small().transform(form(X)), expected)


def test_read_only_input_is_taken_and_no_input_is_changed():
    X = with_holes(noise())
    before = X.copy()
    expected = small().transform(X)
    X.flags.writeable = False
    np.testing.assert_array_equal(small().transform(X), expected)
    np.testing.assert_array_equal(X, before)


def test_input_mapped_from_a_file(tmp_path):
    np.save(tmp_path / "X.npy", noise())
    mapped = np.load(tmp_path / "X.npy", mmap_mode="r")
    np.testing.assert_array_equal(small().transform(mapped), small().transform(noise()))


@pytest.mark.parametrize(
    "dtype",
    ["?", "u1", "u2", "u4", "u8", "i1", "i2", "i4", "i8", "f2", "f4", "f8", ">i2", ">u4", ">f4"],
)
def test_every_type_gives_the_values_of_float64(dtype):
    # small integers are exact in every type, so that only the type differs
    X = np.random.default_rng(2).integers(0, 2 if dtype == "?" else 100, size=(3, 12, 12))
    for rule in ("standard", "rank"):
        expected = small(level_rule=rule).transform(X.astype(float))
        np.testing.assert_array_equal(small(level_rule=rule).transform(X.astype(dtype)), expected)


@pytest.mark.parametrize("dtype", ["u1", "i4", "u8"])
def test_masked_integers(dtype):
    X = np.random.default_rng(2).integers(0, 100, size=(3, 12, 12))
    mask = np.zeros(X.shape, dtype=bool)
    mask[1, 4:7, 4:9] = True
    expected = small().transform(np.where(mask, np.nan, X))
    np.testing.assert_array_equal(
        small().transform(np.ma.MaskedArray(X.astype(dtype), mask=mask)), expected
    )


def test_integers_beyond_float64_are_refused():
    # means and derived fields are float64: 2^53 + 1 would become 2^53
    X = np.full((2, 8, 8), 2**53, dtype=np.int64)
    assert np.isfinite(raw().transform(X)).all()
    X[1, 2:5, 2:6] += 1
    with pytest.raises(ValueError, match=r"X\[1\] holds integers from .*beyond 2\*\*53"):
        raw(level_rule="rank").transform(X)
    with pytest.raises(ValueError, match=r"X\[0\] holds integers"):
        raw().transform(X[1:].astype(np.uint64))


def test_lists_of_unequal_sizes():
    shapes = [(9, 11), (12, 9), (9, 11), (20, 21), (12, 9)]
    patches = [noise(1, shape, seed=k)[0] for k, shape in enumerate(shapes)]
    patches[2][3, 4] = np.nan
    together = small().transform(patches)
    alone = np.concatenate([small().transform([patch]) for patch in patches])
    np.testing.assert_array_equal(together, alone)


def test_lists_of_mixed_types():
    patches = [
        np.arange(81, dtype=np.uint8).reshape(9, 9),
        np.arange(81, dtype=np.float32).reshape(9, 9)[::-1],
        np.arange(81).reshape(9, 9).T,
    ]
    together = small().transform(patches)
    alone = np.concatenate([small().transform(patch[None]) for patch in patches])
    np.testing.assert_array_equal(together, alone)


@pytest.mark.parametrize("holes", [False, True])
def test_a_patch_alone_equals_the_patch_among_others(holes):
    X = with_holes(noise()) if holes else noise()
    together = small().transform(X)
    for k in range(len(X)):
        np.testing.assert_array_equal(small().transform(X[k : k + 1])[0], together[k])
    order = [3, 1, 5, 0, 4, 2]
    np.testing.assert_array_equal(small().transform(X[order]), together[order])


def test_a_complete_patch_does_not_feel_its_neighbours_holes():
    X = noise()
    touched = [1, 4]  # as in with_holes
    before, after = small().transform(X), small().transform(with_holes(X))
    whole = [k for k in range(len(X)) if k not in touched]
    np.testing.assert_array_equal(after[whole], before[whole])
    assert (after[touched] != before[touched]).any(axis=1).all()


def test_stacks_of_any_size_give_the_same_bits(monkeypatch):
    X = with_holes(noise(20))
    expected = small().transform(X)
    for pixels in (1, 3 * X[0].size, 7 * X[0].size):
        monkeypatch.setattr(stacks, "STACK_PIXELS", pixels)
        np.testing.assert_array_equal(small().transform(X), expected)


def test_patches_of_a_grid():
    image = noise(1, (40, 50))[0]
    image[3:6, 10:30] = np.nan
    patches = PatchGrid(size=16, stride=11, edge="shift", min_valid=0.6).cut(image)
    assert len(patches) > 4
    expected = small().transform(np.stack(list(patches)))
    np.testing.assert_array_equal(small().fit_transform(patches), expected)


def test_channels_stand_side_by_side():
    X = noise()
    X4 = np.stack([X, 3 - 2 * X[:, ::-1], np.hypot(X, 1)], axis=-1)
    names = ("height", "grey", "other")
    three = small(channels=names)
    one = small()
    expected = np.hstack([one.transform(X4[..., c]) for c in range(3)])
    for form in (X4, list(X4), tuple(X4)):
        np.testing.assert_array_equal(three.transform(form), expected)
    assert three.get_feature_names_out().tolist() == [
        f"{channel}_{name}" for channel in names for name in one.get_feature_names_out()
    ]


def test_masked_channels():
    X = with_holes(noise())
    X4 = np.stack([noise(), X], axis=-1)
    expected = small(channels=("a", "b")).transform(X4)
    masked = np.ma.masked_invalid(X4)
    np.testing.assert_array_equal(small(channels=("a", "b")).transform(masked), expected)


# Values -------------------------------------------------------------------------------------


@pytest.mark.parametrize("holes", [False, True])
@pytest.mark.parametrize("options", [{}, {"connectivity": 8, "contour_estimator": "crofton-2"}])
@pytest.mark.parametrize(
    ("rule", "level_range"), [("standard", None), ("rank", None), ("fixed", (-1.0, 0.7))]
)
def test_values_are_those_of_minkowski_curves(rule, level_range, options, holes):
    image = noise(1)[0]
    if holes:
        image[4:8, 5:7] = np.nan
    pitch = (0.5, 0.75)
    shared = {"level_rule": rule, "level_range": level_range, "pitch": pitch, **options}
    fitted = small(**shared)
    row = fitted.transform(image[None])[0]
    compared = 0
    for field in {(feature.field, feature.scale) for feature in fitted.feature_table()}:
        curves = minkowski_curves(image, levels=4, field=field[0], scale=field[1], **shared)
        for functional in ("area", "contour", "euler"):
            where = columns(fitted, field=field[0], scale=field[1], functional=functional)
            np.testing.assert_allclose(
                row[where], getattr(curves, functional), rtol=1e-14, atol=1e-15
            )
            compared += len(where)
    assert compared == 8 * 3 * 4  # fields, functionals, levels


def test_location_and_scale_are_mean_and_standard_deviation():
    X = noise() + 50.0
    for row, image in zip(values_by_name(raw(), X), X, strict=True):
        assert row["raw_mean"] == pytest.approx(image.mean(), rel=1e-13)
        assert row["raw_std"] == pytest.approx(image.std(), rel=1e-12)
    image = X[1].copy()
    image[2, 3] = np.nan
    [row] = values_by_name(raw(), image[None])
    assert row["raw_mean"] == pytest.approx(np.nanmean(image), rel=1e-13)
    assert row["raw_std"] == pytest.approx(np.nanstd(image), rel=1e-12)


def test_location_scale_switches_moments_and_nothing_else():
    on, off = small(), small(location_scale=False)
    levelled = [k for k, f in enumerate(on.feature_table()) if f.level is not None]
    moments = [f.name for f in on.feature_table() if f.level is None]
    # by hand: two moments of raw and of both slopes, one of each other field
    assert moments == [
        "raw_mean",
        "raw_std",
        "smooth_1_std",
        "smooth_1.5_std",
        "band_1_std",
        "slope_0_mean",
        "slope_0_std",
        "slope_1_mean",
        "slope_1_std",
        "curvature_0_std",
        "curvature_1_std",
    ]
    np.testing.assert_array_equal(off.transform(noise()), on.transform(noise())[:, levelled])


@pytest.mark.parametrize("dtype", ["float32", "float64"])
def test_dtype(dtype):
    out = small(dtype=dtype).transform(noise())
    assert out.dtype == dtype
    assert out.flags.c_contiguous
    np.testing.assert_array_equal(out, small().transform(noise()).astype(dtype))


def bars(height, width):
    image = np.zeros((24, 24))
    for row, col in ((2, 2), (6, 10), (12, 4), (17, 13)):
        image[row : row + height, col : col + width] = 1.0
    return image


def test_only_directed_features_tell_bars_from_turned_bars():
    fitted = raw(levels=[0.5], level_rule="fixed", directional=True)
    upright, turned = values_by_name(fitted, [bars(5, 1), bars(5, 1).T])
    differ = {name for name in upright if upright[name] != turned[name]}
    assert differ == {"raw_crossings_horizontal_00", "raw_crossings_vertical_00"}
    # by hand: a bar of 5 x 1 is crossed 10 times along the rows, 2 times along the columns
    ratio = upright["raw_crossings_horizontal_00"] / upright["raw_crossings_vertical_00"]
    assert ratio == pytest.approx(5.0, rel=1e-14)
    assert turned["raw_crossings_vertical_00"] == upright["raw_crossings_horizontal_00"]


def test_only_two_directed_features_tell_rising_from_falling_bars():
    falling = np.zeros((24, 24))
    for row, col in ((2, 2), (6, 12), (14, 4)):
        falling[np.arange(row, row + 6), np.arange(col, col + 6)] = 1.0
    fitted = raw(levels=[0.5], level_rule="fixed", directional=True)
    one, other = values_by_name(fitted, [falling, falling[:, ::-1]])
    differ = {name for name in one if one[name] != other[name]}
    assert differ == {"raw_crossings_falling_00", "raw_crossings_rising_00"}
    assert one["raw_crossings_falling_00"] == other["raw_crossings_rising_00"]


def test_directional_adds_and_changes_nothing_else():
    plain, directed = small(), small(directional=True)
    names = directed.get_feature_names_out().tolist()
    where = [names.index(name) for name in plain.get_feature_names_out()]
    assert len(names) - len(where) == 8 * 4 * 4  # fields, directions, levels
    np.testing.assert_array_equal(directed.transform(noise())[:, where], plain.transform(noise()))


def waves(pitch, side=64.0):
    """A smooth surface of five waves, sampled at the centres of pixels."""
    along = (np.arange(round(side / pitch)) + 0.5) * pitch
    y, x = np.meshgrid(along, along, indexing="ij")
    return sum(
        np.cos(2 * np.pi * (x * np.cos(angle) + y * np.sin(angle)) / length + phase)
        for angle, length, phase in [(0.3, 14, 0), (1.9, 17, 1), (1.1, 20, 2), (2.6, 12, 3)]
    )


def difference_over_pitch(scale_unit, **wanted):
    """Largest difference of features between pitch 1 and 0.5, as a share of the largest value."""
    found = []
    for pitch in (1.0, 0.5):
        fitted = small(
            levels=5, level_range=(-1.5, 1.5), smooth=(2,), band=(2,), slope=(2,), curvature=(2,),
            pitch=pitch, scale_unit=scale_unit,
        )  # fmt: skip
        found.append(fitted.transform(waves(pitch)[None])[0, columns(fitted, **wanted)])
    coarse, fine = found
    assert len(coarse) > 0
    return np.abs(coarse - fine).max() / np.abs(fine).max()


@pytest.mark.parametrize(
    ("wanted", "tolerance"),
    [
        # frozen: twice to four times what was measured; Euler numbers are few, so they jump
        ({"field": "raw", "functional": "contour"}, 0.03),
        ({"field": "smooth", "functional": "std"}, 0.001),
        ({"field": "smooth", "functional": "area"}, 0.01),
        ({"field": "smooth", "functional": "contour"}, 0.02),
        ({"field": "band", "functional": "std"}, 0.001),
        ({"field": "band", "functional": "contour"}, 0.03),
        ({"field": "slope", "functional": "mean"}, 0.01),
        ({"field": "curvature", "functional": "std"}, 0.03),
        ({"field": "curvature", "functional": "contour"}, 0.05),
    ],
)
def test_lengths_describe_the_surface_whatever_the_pitch(wanted, tolerance):
    assert difference_over_pitch("length", **wanted) < tolerance


@pytest.mark.parametrize(
    "wanted",
    [
        {"field": "smooth", "functional": "std"},
        {"field": "band", "functional": "std"},
        {"field": "slope", "functional": "mean"},
        {"field": "curvature", "functional": "std"},
    ],
)
def test_pitches_do_not(wanted):
    # scales of 2 pitches are 2 and then 1 unit of length
    assert difference_over_pitch("pitch", **wanted) > 0.1


def test_contour_is_one_over_length():
    # law: with scales in pitches, a pitch ten times larger divides contours by 10, Euler by 100
    near, far = small(), small(pitch=10.0)
    one, ten = near.transform(noise()), far.transform(noise())
    for functional, factor in (("area", 1), ("contour", 10), ("euler", 100)):
        where = columns(near, functional=functional)
        np.testing.assert_allclose(ten[:, where] * factor, one[:, where], rtol=1e-13)


# Names --------------------------------------------------------------------------------------


@pytest.mark.parametrize(
    "options",
    [
        {},
        {"directional": True, "location_scale": False},
        {"levels": 1},
        {"levels": 101},
        {"levels": {"raw": 12, "smooth": 3, "band": [0.0, 1.0], "slope": 1, "curvature": 2}},
        {"functionals": ("euler", "area")},
        {"functionals": ()},
        {"raw": False, "smooth": (1.0000001, 1, 0.3), "slope": ()},
        {"channels": ("a", "a_raw", "raw")},
    ],
)
def test_names_agree_with_the_table_and_the_width(options):
    fitted = small(**options)
    names = fitted.get_feature_names_out()
    table = fitted.feature_table()
    assert names.dtype == object
    assert len(set(names)) == len(names)
    assert names.tolist() == [feature.name for feature in table]
    X = noise(2)
    if "channels" in options:
        X = np.stack([X] * 3, axis=-1)
    assert fitted.transform(X).shape == (2, len(names))
    curves = {}
    for feature in table:
        if feature.level is not None:
            stem = feature.name.rsplit("_", 1)[0]
            curves.setdefault(stem, []).append((feature.level, feature.name))
    for entries in curves.values():
        levels, names_of = zip(*entries, strict=True)
        assert list(levels) == sorted(levels)
        assert list(names_of) == sorted(names_of)  # zero-padded


def test_names_in_full():
    fitted = raw(functionals=["euler", "area"], levels=1, band=(1.5,), slope=(0,))
    # by hand; the order of functionals is fixed
    assert fitted.get_feature_names_out().tolist() == [
        "raw_mean",
        "raw_std",
        "raw_area_00",
        "raw_euler_00",
        "band_1.5_std",
        "band_1.5_area_00",
        "band_1.5_euler_00",
        "slope_0_mean",
        "slope_0_std",
        "slope_0_area_00",
        "slope_0_euler_00",
    ]


def test_units_in_the_table():
    units = {(f.field, f.functional): f.unit for f in small(directional=True).feature_table()}
    assert units["raw", "area"] == "1"
    assert units["raw", "contour"] == units["raw", "crossings_falling"] == "1/l"
    assert units["slope", "euler"] == "1/l^2"
    assert units["raw", "mean"] == units["smooth", "std"] == "v"
    assert units["slope", "mean"] == "v/l"
    assert units["curvature", "std"] == "v/l^2"


def test_law_8_names_depend_on_settings_alone():
    expected = small().get_feature_names_out().tolist()
    for X, options in (
        (noise(), {}),
        (np.zeros((2, 12, 12), dtype=np.uint8), {}),
        (noise(1, (40, 9)), {"n_jobs": 2}),
        (with_holes(noise()) * 1e6, {"n_jobs": -1}),
    ):
        fitted = small(**options).fit(X)
        assert fitted.get_feature_names_out().tolist() == expected
        assert fitted.transform(X).shape == (len(X), len(expected))


@pytest.mark.parametrize("rule", ["rank", "fitted"])
def test_tied_data_do_not_shorten_the_vector(rule):
    # two grey values and nine levels: most learned levels coincide
    X = (noise(4) > 0).astype(np.uint8)
    fitted = raw(level_rule=rule, levels=9).fit(X)
    out = fitted.transform(X)
    assert out.shape == (4, 2 + 3 * 9)
    assert np.isfinite(out).all()


# Workers ------------------------------------------------------------------------------------


@pytest.fixture(scope="module")
def many():
    """Patches of several shapes, so that there are several groups to share out."""
    shapes = [(12, 12), (14, 12), (12, 14), (16, 16)] * 3
    return [noise(1, shape, seed=k)[0] for k, shape in enumerate(shapes)]


@pytest.fixture(scope="module")
def single_worker(many):
    return small().transform(many).tobytes()


@pytest.mark.parametrize("n_jobs", [1, 2, 3, -1, np.int64(2)])
def test_workers_change_no_bit(many, single_worker, n_jobs):
    assert small(n_jobs=n_jobs).transform(many).tobytes() == single_worker


@pytest.mark.parametrize("backend", ["threading", "sequential"])
def test_backends_change_no_bit(many, single_worker, backend):
    with joblib.parallel_config(backend=backend, n_jobs=2):
        assert small().transform(many).tobytes() == single_worker
        assert small(n_jobs=2).transform(many).tobytes() == single_worker


def test_worker_processes_change_no_bit(many, single_worker):
    fitted = small(level_rule="fitted").fit(many)
    expected = fitted.transform(many).tobytes()
    with joblib.parallel_config(backend="loky", n_jobs=2):
        assert small().transform(many).tobytes() == single_worker
        again = small(level_rule="fitted").fit(many)
    for name, levels in fitted.levels_.items():
        np.testing.assert_array_equal(again.levels_[name], levels)
    assert again.transform(many).tobytes() == expected


def test_an_error_in_a_worker_reaches_the_caller(many):
    spoilt = [patch.copy() for patch in many]
    spoilt[6][2, 3] = np.inf
    with pytest.raises(ValueError, match=r"X\[6\] holds inf at row 2, column 3"):
        small(n_jobs=2).transform(spoilt)


# scikit-learn -------------------------------------------------------------------------------


def test_set_output():
    fitted = small()
    expected = fitted.transform(noise())
    names = fitted.get_feature_names_out().tolist()
    frame = small().set_output(transform="pandas").fit_transform(noise())
    assert isinstance(frame, pd.DataFrame)
    assert frame.columns.tolist() == names
    np.testing.assert_array_equal(frame.to_numpy(), expected)
    frame = small().set_output(transform="polars").fit_transform(list(noise()))
    assert isinstance(frame, pl.DataFrame)
    assert frame.columns == names
    np.testing.assert_array_equal(frame.to_numpy(), expected)


def test_transform_needs_no_fit_unless_levels_are_learned():
    np.testing.assert_array_equal(small().transform(noise()), small().fit_transform(noise()))
    for call in (
        lambda: raw(level_rule="fitted").transform(noise()),
        lambda: raw(level_rule="fitted").fingerprint(),
        lambda: raw(level_rule="fitted").settings(),
    ):
        with pytest.raises(NotFittedError, match=r'level_rule="fitted" .* call fit before this'):
            call()
    assert len(raw(level_rule="fitted").get_feature_names_out()) == 2 + 3 * 4


@pytest.mark.parametrize("rule", ["standard", "fitted"])
def test_pickle_and_clone(rule):
    fitted = small(level_rule=rule).fit(with_holes(noise()))
    copy = pickle.loads(pickle.dumps(fitted))
    assert copy.get_params() == fitted.get_params()
    assert copy.fingerprint() == fitted.fingerprint()
    np.testing.assert_array_equal(copy.transform(noise(seed=1)), fitted.transform(noise(seed=1)))
    fresh = clone(fitted)
    assert fresh.get_params() == fitted.get_params()
    assert not hasattr(fresh, "levels_")
    assert hasattr(fitted, "levels_") == (rule == "fitted")


def test_repr_shows_what_was_set():
    assert repr(MinkowskiCurves(levels=8, smooth=())) == "MinkowskiCurves(levels=8, smooth=())"


def test_parameters_set_later_take_effect():
    changing = raw(levels=3)
    assert changing.transform(noise()).shape[1] == 2 + 3 * 3
    changing.set_params(levels=5, location_scale=False)
    np.testing.assert_array_equal(
        changing.transform(noise()), raw(levels=5, location_scale=False).transform(noise())
    )
    own = [1.0]
    changing.set_params(smooth=own)
    width = changing.transform(noise()).shape[1]
    own.append(2.0)  # a list changed in place is seen
    assert changing.transform(noise()).shape[1] == width + 3 * 5


def two_textures(n=12):
    """White noise, and noise smoothed to wider spots; both of mean 0 and standard deviation 1."""
    fine = noise(n, (20, 20), seed=3)
    wide = noise(n, (20, 20), seed=4)
    for axis in (1, 2):
        wide = wide + np.roll(wide, 1, axis=axis) + np.roll(wide, -1, axis=axis)
    X = np.concatenate([fine, wide])
    X = (X - X.mean(axis=(1, 2), keepdims=True)) / X.std(axis=(1, 2), keepdims=True)
    return X, np.repeat([0, 1], n)


def test_lda_tells_two_textures_apart():
    X, y = two_textures()
    curves = raw(levels=5, location_scale=False)
    # wider spots have less contour: by the curve at the mean level alone
    names = curves.get_feature_names_out().tolist()
    contour = curves.transform(X)[:, names.index("raw_contour_02")]
    assert contour[y == 0].min() > contour[y == 1].max()
    model = make_pipeline(curves, LinearDiscriminantAnalysis(solver="lsqr", shrinkage="auto"))
    assert model.fit(X[::2], y[::2]).score(X[1::2], y[1::2]) == 1.0


def test_grid_search_in_a_cached_pipeline(tmp_path, monkeypatch):
    X, y = two_textures(6)
    computed = []
    compute = vector.vectors

    def counted(plan, group, stack):
        computed.append(len(stack.values))
        return compute(plan, group, stack)

    monkeypatch.setattr(vector, "vectors", counted)
    grid = {
        "curves__levels": [3, [-1.0, 1.0]],
        "curves__smooth": [(), (1,)],
        "lda__shrinkage": [0.3, 0.6],
    }
    pipeline = Pipeline(
        [
            ("curves", raw(slope=(0,), location_scale=False)),
            ("lda", LinearDiscriminantAnalysis(solver="lsqr")),
        ],
        memory=joblib.Memory(tmp_path, verbose=0),
    )
    search = GridSearchCV(pipeline, grid, cv=2, refit=False, error_score="raise")
    search.fit(X, y)
    assert len(search.cv_results_["params"]) == 8
    assert max(search.cv_results_["mean_test_score"]) == 1.0
    # by hand: 4 settings x 2 folds are fitted, the second shrinkage finds them in the cache;
    # 8 candidates x 2 folds are scored, which is not cached; 6 of 12 patches each time
    assert sum(computed) == (4 * 2 + 8 * 2) * 6
    computed.clear()
    search.fit(X, y)
    assert sum(computed) == 8 * 2 * 6


# Level rules --------------------------------------------------------------------------------


def test_explicit_levels_equal_the_levels_of_their_number():
    for rule, levels, level_range in (
        ("standard", [-2.5, -1.25, 0.0, 1.25, 2.5], None),
        ("rank", [0.1, 0.3, 0.5, 0.7, 0.9], None),
        ("fixed", [-1, 0, 1], (-1, 1)),
    ):
        by_number = small(level_rule=rule, levels=len(levels), level_range=level_range)
        for form in (list, tuple, np.array):
            explicit = small(level_rule=rule, levels=form(levels))
            np.testing.assert_allclose(
                explicit.transform(noise()), by_number.transform(noise()), rtol=1e-14, atol=0
            )


def test_dicts_give_each_family_its_own_levels():
    one = small(
        level_rule="fixed",
        levels={"raw": 3, "smooth": [-1, 1], "band": 2, "slope": 5, "curvature": 1},
        level_range={
            "raw": (-1, 1), "smooth": None, "band": (-0.5, 0.5), "slope": (0, 2),
            "curvature": (-1, 1),
        },
    )  # fmt: skip
    shown = {
        (f.field, f.scale): [g.level for g in one.feature_table() if g[1:3] == f[1:3]
                             and g.functional == "area"]
        for f in one.feature_table()
    }  # fmt: skip
    # by hand
    assert shown["raw", 0.0] == [-1.0, 0.0, 1.0]
    assert shown["smooth", 1.0] == shown["smooth", 1.5] == [-1.0, 1.0]
    assert shown["band", 1.0] == [-0.5, 0.5]
    assert shown["slope", 0.0] == [0.0, 0.5, 1.0, 1.5, 2.0]
    assert shown["curvature", 1.0] == [0.0]
    alone = raw(raw=False, slope=(0,), level_rule="fixed", levels=5, level_range=(0, 2)).transform(
        noise()
    )
    where = columns(one, field="slope", scale=0.0)
    np.testing.assert_array_equal(one.transform(noise())[:, where], alone)


def test_a_dict_may_name_families_not_in_use():
    levels = {"raw": 3, "curvature": 7}
    np.testing.assert_array_equal(
        raw(levels=levels).transform(noise()), raw(levels=3).transform(noise())
    )


def test_learned_levels_are_quantiles_of_the_training_pixels():
    X = noise(5)
    fitted = raw(level_rule="fitted", levels=[0.0, 0.25, 0.5, 1.0]).fit(X)
    pooled = np.sort(X.ravel())
    n = pooled.size
    # by hand: sorted values at floor(n p), at most the last; each patch stands for itself by its
    # evenly spaced order statistics, here 4096 of them from 80 pixels or so, hence the tolerance
    expected = [pooled[0], pooled[n // 4], pooled[n // 2], pooled[-1]]
    assert n % 4 == 0
    np.testing.assert_allclose(fitted.levels_["raw"], expected, atol=0.02)
    fixed = raw(level_rule="fixed", levels=fitted.levels_["raw"])
    np.testing.assert_array_equal(fitted.transform(X), fixed.transform(X))


def test_learned_levels_do_not_depend_on_order_or_workers(many):
    spoilt = [patch.copy() for patch in many]
    spoilt[3][4:7, 2:9] = np.nan
    expected = small(level_rule="fitted").fit(spoilt).levels_
    assert list(expected) == [
        "raw", "smooth_1", "smooth_1.5", "band_1", "slope_0", "slope_1", "curvature_0",
        "curvature_1",
    ]  # fmt: skip
    order = np.random.default_rng(5).permutation(len(spoilt))
    for other in (
        small(level_rule="fitted").fit([spoilt[k] for k in order]),
        small(level_rule="fitted", n_jobs=2).fit(spoilt),
    ):
        for name, levels in expected.items():
            np.testing.assert_array_equal(other.levels_[name], levels)


def test_patches_weigh_alike_in_learned_levels(monkeypatch):
    # a sample of 16 values a patch: the large patch of ones does not outvote the small ones
    monkeypatch.setattr(transformer, "FIT_SAMPLE", 48)
    X = [np.zeros((8, 8)), np.zeros((8, 8)) + 0.5, np.ones((64, 64))]
    levels = raw(level_rule="fitted", levels=[0.2, 0.5, 0.9]).fit(X).levels_["raw"]
    assert levels.tolist() == [0.0, 0.5, 1.0]


def test_levels_are_learned_channel_by_channel():
    # channels of other units share no level
    X4 = np.stack([noise(4, (8, 8)), 200.0 + 0.1 * noise(4, (8, 8), seed=1)], axis=-1)
    fitted = raw(level_rule="fitted", levels=5, channels=("a", "b")).fit(X4)
    assert sorted(fitted.levels_) == ["a_raw", "b_raw"]
    for channel, name in enumerate("ab"):
        alone = raw(level_rule="fitted", levels=5).fit(X4[..., channel])
        np.testing.assert_array_equal(fitted.levels_[f"{name}_raw"], alone.levels_["raw"])
        half = fitted.transform(X4).shape[1] // 2
        got = fitted.transform(X4)[:, channel * half : (channel + 1) * half]
        np.testing.assert_array_equal(got, alone.transform(X4[..., channel]))


def test_a_small_patch_weighs_as_much_as_a_large_one():
    # two small patches of zeros outvote one large patch of ones
    X = [np.zeros((16, 16)), np.zeros((16, 16)), np.ones((64, 64))]
    assert raw(level_rule="fitted", levels=[0.5, 0.9]).fit(X).levels_["raw"].tolist() == [0.0, 1.0]


def test_levels_are_not_learned_from_refused_patches():
    X = [np.full((30, 30), np.nan), noise(1, (16, 16))[0]]
    X[0][:5, :5] = 1000.0
    with pytest.raises(ValueError, match=r"1 of 2 patches .* X\[0\]: valid fraction"):
        raw(level_rule="fitted").fit(X)
    lenient = raw(level_rule="fitted", below_min_valid="nan").fit(X)
    alone = raw(level_rule="fitted").fit(X[1:])
    np.testing.assert_array_equal(lenient.levels_["raw"], alone.levels_["raw"])


@pytest.mark.parametrize(
    "spoilt", [[0.0], [2.0, 1.0, 3.0, 4.0], [0.0, np.nan, 1.0, 2.0], None], ids=str
)
def test_learned_levels_that_somebody_changed_are_refused(spoilt):
    fitted = raw(level_rule="fitted", levels=4).fit(noise())
    if spoilt is None:
        del fitted.levels_["raw"]
    else:
        fitted.levels_["raw"] = np.array(spoilt)
    with pytest.raises(ValueError, match=r"levels_\['raw'\] must hold 4 ascending numbers"):
        fitted.transform(noise())


def test_refitting_on_other_units_changes_nothing():
    # a plateau of saturated pixels keeps its side of a learned level in grey values and in 0..1
    image = np.minimum(255.0, 40.0 * np.abs(noise(6, (40, 40))) + 180.0).round()
    options = {"level_rule": "fitted", "smooth": (1,), "levels": 6, "location_scale": False}
    one = raw(**options).fit_transform(image)
    other = raw(**options).fit_transform(image / 255.0)
    np.testing.assert_allclose(one, other, atol=1e-9)


def test_fit_without_learning_forgets_earlier_levels():
    changing = raw(level_rule="fitted").fit(noise())
    first = changing.levels_["raw"]
    changing.fit(noise() + 100.0)
    assert (changing.levels_["raw"] > first.max()).all()
    changing.set_params(level_rule="standard").fit(noise())
    assert not hasattr(changing, "levels_")
    with pytest.raises(NotFittedError, match="call fit"):
        changing.set_params(level_rule="fitted").transform(noise())


@pytest.mark.parametrize(
    ("change", "message"),
    [
        ({"levels": 2}, r"field raw has the levels \[0.25, 0.75\] now, and had .* call fit again"),
        ({"levels": 8}, r"field raw has the levels .* now, and had \[.*\] when they were learned"),
        ({"levels": [0.1, 0.2, 0.3, 0.4]}, r"field raw has the levels \[0.1, 0.2, 0.3, 0.4\] now"),
        ({"smooth": (1,)}, "field smooth_1 has the levels .*, and had none when they were learned"),
        ({"pitch": 2.0}, r"pitch was \(1.0, 1.0\) when the levels were learned and is \(2.0, 2.0"),
        ({"scale_unit": "length"}, "scale_unit was 'pitch' when the levels were learned"),
    ],
)
def test_learned_levels_of_other_parameters_are_refused(change, message):
    fitted = raw(level_rule="fitted", slope=(0,)).fit(noise()).set_params(**change)
    for call in (lambda: fitted.transform(noise()), fitted.fingerprint):
        with pytest.raises(ValueError, match=message):
            call()
    assert fitted.fit(noise()).transform(noise()).shape == (6, len(fitted.feature_table()))


def test_a_field_dropped_after_fit_leaves_the_others():
    both = raw(level_rule="fitted", slope=(0,)).fit(noise())
    where = columns(both, field="raw")
    expected = both.transform(noise())[:, where]
    np.testing.assert_array_equal(both.set_params(slope=()).transform(noise()), expected)
    assert both.fingerprint() == raw(level_rule="fitted").fit(noise()).fingerprint()


def test_strictly_increasing_tone_changes_leave_ranks_alone():
    # law 5 of the level rules: only order counts on the raw field
    fitted = raw(level_rule="rank", location_scale=False)
    np.testing.assert_array_equal(fitted.transform(np.exp(noise())), fitted.transform(noise()))
    assert (fitted.transform(-noise()) != fitted.transform(noise())).any()


# Missing pixels -----------------------------------------------------------------------------


def half_missing():
    """Six patches of 9 x 9 pixels; 2 has 3 of 8 rows of windows, 5 has no valid pixel."""
    X = noise(6, (9, 9))
    X[2, 4:] = np.nan
    X[5] = np.nan
    return X


def test_too_few_valid_pixels_are_an_error_that_lists_them():
    with pytest.raises(ValueError) as caught:
        raw().transform(half_missing())
    message = str(caught.value)
    # by hand: 24 of 64 windows
    assert "2 of 6 patches have too few valid pixels" in message
    assert "X[2]: valid fraction 0.375 < min_valid 0.5" in message
    assert "X[5]: no window of four valid pixels" in message
    assert 'below_min_valid="nan"' in message


def test_the_channel_is_named():
    X4 = np.stack([noise(6, (9, 9)), half_missing()], axis=-1)
    with pytest.raises(ValueError, match=r"X\[2\] channel 'b': valid fraction 0.375 < min_valid"):
        raw(channels=("a", "b")).transform(X4)
    rows = raw(channels=("a", "b"), below_min_valid="nan").transform(X4)
    assert np.isnan(rows).all(axis=1).tolist() == [False, False, True, False, False, True]
    assert np.isfinite(rows[[0, 1, 3, 4]]).all()


def test_long_lists_of_refused_patches_are_cut():
    with pytest.raises(ValueError, match=r"9 of 9 .*X\[4\]: [^;]*; \.\.\.\. Leave them out"):
        raw().transform(np.full((9, 4, 4), np.nan))


def test_below_min_valid_nan_marks_whole_rows_and_no_others():
    marked = raw(below_min_valid="nan").transform(half_missing())
    assert np.isnan(marked).all(axis=1).tolist() == [False, False, True, False, False, True]
    whole = [0, 1, 3, 4]
    np.testing.assert_array_equal(marked[whole], raw().transform(half_missing()[whole]))


@pytest.mark.parametrize(
    ("min_valid", "kept"), [(0.0, 5), (0.375, 5), (0.376, 4), (0.5, 4), (1.0, 4)]
)
def test_min_valid_is_the_smallest_accepted_fraction(min_valid, kept):
    rows = raw(min_valid=min_valid, below_min_valid="nan").transform(half_missing())
    assert np.isfinite(rows).all(axis=1).sum() == kept


def test_a_patch_without_valid_pixels_is_refused_whatever_min_valid():
    with pytest.raises(ValueError, match=r"X\[0\]: no window of four valid pixels"):
        raw(min_valid=0).transform(np.full((1, 9, 9), np.nan))


def test_a_field_without_windows_is_named_even_where_the_image_has_some():
    # every third row missing: pairs of valid rows remain, but no three in a row for curvature
    X = noise(1, (12, 12))
    X[0, ::3] = np.nan
    assert np.isfinite(raw(min_valid=0).transform(X)).all()
    with pytest.raises(ValueError, match=r"X\[0\]: one of its fields has no window of four valid"):
        raw(min_valid=0, curvature=(0,)).transform(X)
    marked = raw(min_valid=0, curvature=(0,), below_min_valid="nan").transform(X)
    assert np.isnan(marked).all()


def test_values_under_the_mask_do_not_matter():
    X = noise()
    mask = np.zeros(X.shape, dtype=bool)
    mask[1, 2:5, 3:9] = True
    other = np.where(mask, 1e9, X)
    np.testing.assert_array_equal(
        small().transform(np.ma.MaskedArray(X, mask=mask)),
        small().transform(np.ma.MaskedArray(other, mask=mask)),
    )


def test_nothing_to_learn_from_is_an_error():
    empty = np.full((3, 8, 8), np.nan)
    with pytest.raises(ValueError, match=r"3 of 3 patches have too few valid pixels. X\[0\]"):
        raw(level_rule="fitted").fit(empty)
    with pytest.raises(ValueError, match="no patch is accepted, so no level of field raw"):
        raw(level_rule="fitted", below_min_valid="nan").fit(empty)
    # an empty patch beside others does not spoil their levels
    lenient = raw(level_rule="fitted", below_min_valid="nan", min_valid=0.0)
    beside = lenient.fit(half_missing()).levels_["raw"]
    alone = lenient.fit(half_missing()[:5]).levels_["raw"]
    np.testing.assert_array_equal(beside, alone)


# Patches without relief ---------------------------------------------------------------------


@pytest.mark.parametrize("value", [0, 7, 0.1, -1e-300, 1e12, 255])
@pytest.mark.parametrize(
    ("rule", "area"),
    [
        # documented: the area steps from 1 to 0 at the mean under "standard"; 1 under "rank"
        ("standard", [1.0, 1.0, 1.0, 0.0, 0.0]),
        ("rank", [1.0, 1.0, 1.0, 1.0, 1.0]),
    ],
)
def test_constant_patches(rule, area, value):
    fitted = small(level_rule=rule, levels=5)
    [row] = fitted.transform(np.full((1, 12, 12), value))
    for feature, number in zip(fitted.feature_table(), row, strict=True):
        if feature.functional == "area":
            place = int(feature.name.rsplit("_", 1)[1])
            assert number == area[place], feature.name
        elif feature.name == "raw_mean":
            assert number == value
        else:
            assert number == 0.0, feature.name


def test_constant_patches_at_fixed_levels():
    fitted = raw(level_rule="fixed", levels=[1, 2, 3])
    [row] = values_by_name(fitted, np.full((1, 6, 6), 2))
    assert [row[f"raw_area_{k:02d}"] for k in range(3)] == [1.0, 1.0, 0.0]  # a level is reached


def test_the_slope_of_a_tilted_plane_is_flat():
    y, x = np.mgrid[:14, :14]
    plane = 0.3 * y + 0.1 * x + 1000.0
    fitted = raw(raw=False, levels=3, slope=(0,), curvature=(0,))
    [row] = values_by_name(fitted, plane[None])
    assert row["slope_0_mean"] == pytest.approx(np.hypot(0.3, 0.1), rel=1e-10)
    for name, number in row.items():
        _, _, functional, *level = name.split("_")
        if functional == "area":
            assert number == [1.0, 1.0, 0.0][int(level[0])], name
        elif functional != "mean":
            assert number == 0.0, name
    assert sum(name.startswith("curvature") for name in row) == 1 + 3 * 3


@pytest.mark.parametrize("step", [1e-12, 1.0])
def test_one_pixel_of_relief_is_relief(step):
    # a raw field is never rounded, so the smallest difference counts; one pixel of 100
    X = np.zeros((1, 10, 10))
    X[0, 4, 4] = step
    fitted = raw(levels=[1.0])
    [row] = values_by_name(fitted, X)
    # by hand: the pixel is 4 of 4 * 81 window corners, one component in 81 windows
    assert row["raw_area_00"] == pytest.approx(1 / 81, rel=1e-14)
    assert row["raw_euler_00"] == pytest.approx(1 / 81, rel=1e-14)


# Fingerprint --------------------------------------------------------------------------------


def test_equal_settings_written_differently_have_one_fingerprint():
    plain = small(
        functionals=("area", "euler"), levels=4, level_range=(-1.0, 1.0), smooth=(1.0, 2.0),
        band=(1.0,), slope=(0.0,), pitch=0.5, min_valid=1.0,
    )  # fmt: skip
    other = small(
        functionals=["euler", "area"], levels=np.int16(4), level_range=[-1, 1], smooth=[1, 2],
        band=np.array([1]), slope=(0,), pitch=(0.5, np.float32(0.5)), min_valid=1,
        location_scale=np.True_, separate_scale=np.False_, connectivity="mean", n_jobs=2,
    )  # fmt: skip
    dicts = clone(plain).set_params(
        levels=dict.fromkeys(("curvature", "slope", "band", "smooth", "raw"), 4),
        level_range=dict.fromkeys(("raw", "smooth", "band", "slope", "curvature"), (-1, 1)),
    )
    explicit = clone(plain).set_params(levels=np.linspace(-1, 1, 4), level_range=None)
    for same in (other, dicts, explicit):
        assert same.fingerprint() == plain.fingerprint()
    assert len(plain.fingerprint()) == 64
    assert set(plain.fingerprint()) <= set("0123456789abcdef")


#: One other value of each parameter than `full_curves` has, and whether values may depend on it.
OTHER_VALUES = {
    "functionals": (("area", "contour"), True),
    "basis": ("hermite", True),
    "terms": (3, False),  # of basis "hermite" only
    "levels": (17, True),
    "level_rule": ("rank", True),
    "level_range": ((-2.0, 2.0), True),
    "raw": (False, True),
    "smooth": ((1,), True),
    "band": ((), True),
    "slope": ((1, 3), True),
    "curvature": ((1,), True),
    "contrast": ((1,), True),
    "scale_rule": ("matched", True),
    "remove_tilt": (True, True),
    "location_scale": (False, True),
    "separate_scale": (True, True),
    "roughness": ((2,), False),  # of numbers beside a separated scale only
    "directional": (True, True),
    "connectivity": (4, True),
    "contour_estimator": ("crofton-2", True),
    "pitch": (0.5, True),
    "scale_unit": ("length", True),
    "channels": (("a", "b"), True),
    "min_valid": (0.25, True),
    "below_min_valid": ("nan", True),
    "dtype": ("float64", True),
    "n_jobs": (2, False),
}


def test_every_parameter_has_its_say_in_the_fingerprint():
    whole = MinkowskiCurves(**WHOLE)
    assert set(OTHER_VALUES) == set(whole.get_params())
    own = whole.fingerprint()
    seen = {own}
    for name, (value, matters) in OTHER_VALUES.items():
        assert whole.get_params()[name] != value, name
        found = clone(whole).set_params(**{name: value}).fingerprint()
        assert (found != own) == matters, name
        if matters:
            assert found not in seen, name
            seen.add(found)


def test_order_of_scales_and_names_of_channels_matter():
    assert small(smooth=(1, 2)).fingerprint() != small(smooth=(2, 1)).fingerprint()
    assert small(channels=("a",)).fingerprint() != small(channels=("b",)).fingerprint()
    assert small(connectivity=4).fingerprint() != small(connectivity=8).fingerprint()
    assert small(pitch=(1, 2)).fingerprint() != small(pitch=(2, 1)).fingerprint()


def test_learned_levels_are_part_of_the_fingerprint():
    one = raw(level_rule="fitted").fit(noise())
    same = raw(level_rule="fitted", n_jobs=2).fit(noise()[::-1])
    other = raw(level_rule="fitted").fit(noise(seed=1))
    assert one.fingerprint() == same.fingerprint()
    assert one.fingerprint() != other.fingerprint()


def test_settings_are_json():
    settings = raw(level_rule="fitted", channels=["a"]).fit(noise()[..., None]).settings()
    assert json.loads(json.dumps(settings, allow_nan=False)) == settings


def test_fingerprint_is_the_same_in_every_process():
    code = (
        "from mfeat import MinkowskiCurves\n"
        "print(MinkowskiCurves(levels={'smooth': 3, 'curvature': 4}, contrast=()).fingerprint())"
    )
    root = str(Path(mfeat.__file__).parents[1])
    environment = os.environ | {"PYTHONHASHSEED": "77", "PYTHONPATH": root}
    done = subprocess.run(
        [sys.executable, "-c", code], env=environment, capture_output=True, text=True, check=True
    )
    own = MinkowskiCurves(levels={"curvature": 4, "smooth": 3}, contrast=()).fingerprint()
    assert done.stdout.strip() == own


def test_plans_are_kept_and_forgotten(monkeypatch):
    monkeypatch.setattr(plans, "_PLANS", {})
    monkeypatch.setattr(plans, "_MOST_PLANS", 3)
    for levels in range(1, 9):
        assert raw(levels=levels).transform(noise(1)).shape == (1, 2 + 3 * levels)
        assert 1 <= len(plans._PLANS) <= 3


# Bad input ----------------------------------------------------------------------------------

X = noise(3, (8, 8))
SPOILT = noise(3, (8, 8))
SPOILT[1, 4, 5] = -np.inf


@pytest.mark.parametrize("method", ["fit", "transform", "fit_transform"])
@pytest.mark.parametrize(
    ("given", "error", "message"),
    [
        (X[0], ValueError, r"shape \(n, h, w\).* 2 dimensions, shape \(8, 8\).*X\[np.newaxis\]"),
        (X[0, 0], ValueError, "got an array with 1 dimensions"),
        ({"a": X[0]}, TypeError, r"X is a dict; give the images in a list"),
        (X[None, None], ValueError, "got an array with 5 dimensions"),
        (X[:0], ValueError, r"X holds no patch: found 0 sample\(s\)"),
        ([], ValueError, "X holds no patch: the list is empty"),
        (X[:, :1], ValueError, r"X\[0\] must be at least 2x2 pixels; got shape \(1, 8\)"),
        (X[:, :, :1], ValueError, r"X\[0\] must be at least 2x2 pixels; got shape \(8, 1\)"),
        ([X[0], X[1, :1]], ValueError, r"X\[1\] must be at least 2x2 pixels"),
        ([X[0], X[1, 0]], ValueError, r"X\[1\] must have 2 dimensions"),
        ([X[0], [[1, 2], [3]]], ValueError, r"X\[1\] must be an array; it is ragged"),
        (X.astype(object), TypeError, r"X\[0\] must hold bool, integers .* got dtype object"),
        (X.astype(complex), TypeError, r"X\[0\] must hold .* got dtype complex128"),
        (X.astype(np.longdouble), TypeError, r"X\[0\] must hold .* got dtype .*plain numbers"),
        (X.astype(str), TypeError, r"X\[0\] must hold .* got dtype <U"),
        (X.astype("M8[s]"), TypeError, r"X\[0\] must hold .* got dtype datetime64"),
        ([X[0], X[1].astype(complex)], TypeError, r"X\[1\] must hold .* got dtype complex128"),
        ([X[0], None], TypeError, r"X\[1\] must hold .* got dtype object"),
        (["a.png", "b.png"], TypeError, r"X\[0\] must be an array of numbers; got str"),
        ("a.png", TypeError, "X must be an array of shape .* got str"),
        (None, TypeError, "X must be an array of shape .* got NoneType"),
        (iter(X), TypeError, "X must be an array of shape .* got .*iterator"),
        (scipy.sparse.csr_matrix(X[0]), TypeError, r"X is a sparse matrix \(csr_matrix\)"),
        (scipy.sparse.coo_array(X[0]), TypeError, r"X is a sparse matrix \(coo_array\)"),
        (X[..., None], ValueError, r"8, 1\), so 1 channels, but channels is None; name them"),
        ([X[0], X[1][..., None]], ValueError, r"X\[1\] has shape \(8, 8, 1\): three dimensions"),
    ],
)  # fmt: skip
def test_bad_patches(given, error, message, method):
    with pytest.raises(error, match=message):
        getattr(raw(), method)(given)


@pytest.mark.parametrize("form", [np.asarray, list])
def test_infinities(form):
    message = r"X\[1\] holds -inf at row 4, column 5; .* Set them to NaN"
    with pytest.raises(ValueError, match=message):
        raw().transform(form(SPOILT))
    with pytest.raises(ValueError, match=message):
        raw(level_rule="fitted").fit(form(SPOILT))


@pytest.mark.parametrize("method", ["fit", "transform"])
@pytest.mark.parametrize(
    ("options", "shape", "message"),
    [
        ({"slope": (0,)}, (2, 9), r"X\[1\]: field slope_0 needs images of at least 3x3 .* 2x9"),
        ({"curvature": (0,)}, (9, 3), r"X\[1\]: field curvature_0 needs .* at least 4x4 .* 9x3"),
        ({"smooth": (9,)}, (8, 8), r"X\[1\]: field smooth_9: .* 1.12 times the side .* 8x8"),
        ({"band": (4.5,)}, (8, 8), r"X\[1\]: field band_4.5: .* Use smaller scales or larger"),
    ],
)
def test_patches_too_small_for_a_field_are_named(options, shape, message, method):
    with pytest.raises(ValueError, match=message):
        getattr(raw(**options), method)([np.zeros((40, 40)), np.zeros(shape)])


def test_the_smallest_patches_of_each_field():
    sizes = {"raw": 2, "slope": 3, "curvature": 4}
    for family, size in sizes.items():
        options = {} if family == "raw" else {family: (0,), "raw": False}
        fitted = raw(**options)
        assert np.isfinite(fitted.transform(noise(1, (size, size)))).all()


@pytest.mark.parametrize(
    ("scale_unit", "pitch", "message"),
    [
        ("length", 10.0, r"smooth_1: a scale of 1 is 0.1 pixels .* too small .* unit of pitch"),
        ("pitch", 10.0, None),
        ("length", 0.1, r"smooth_1: .* 1.25 times the side .* unit of pitch"),
        ("pitch", 0.1, None),
    ],
)
def test_scales_that_do_not_fit_the_pitch(scale_unit, pitch, message):
    fitted = raw(smooth=(1,), scale_unit=scale_unit, pitch=pitch)
    if message is None:
        assert np.isfinite(fitted.transform(X)).all()
        return
    with pytest.raises(ValueError, match=message):
        fitted.transform(X)


@pytest.mark.parametrize(
    ("given", "channels", "message"),
    [
        (X, ("a", "b"), r"channels=\('a', 'b'\) needs X of shape \(n, h, w, 2\); got \(3, 8, 8\)"),
        (np.stack([X] * 3, -1), ("a", "b"), r"X has 3 channels .* channels names 2: \('a', 'b'\)"),
        (list(X), ("a", "b"), r"X\[0\] has shape \(8, 8\), but channels=\('a', 'b'\) needs"),
        ([np.stack([X[0]] * 2, -1), X[1]], ("a", "b"), r"X\[1\] has shape \(8, 8\), but channels"),
        (
            [np.stack([X[0]] * 2, -1), np.stack([X[0]] * 3, -1)],
            ("a", "b"),
            r"X\[1\] has shape \(8, 8, 3\), but channels=\('a', 'b'\) needs \(h, w, 2\)",
        ),
        (np.stack([X] * 2, -1), ("a", "a"), "channels must be distinct, non-empty names"),
        (np.stack([X] * 2, -1), ("a", ""), "channels must be distinct, non-empty names"),
        (np.stack([X] * 2, -1), ("a", 1), "channels must be distinct, non-empty names"),
        (X[..., None][..., :0], (), "channels must be distinct, non-empty names"),
        (np.stack([X] * 3, -1), "rgb", "'channels' parameter of MinkowskiCurves"),
    ],
)
def test_channels_that_do_not_fit(given, channels, message):
    for method in ("fit", "transform"):
        with pytest.raises(ValueError, match=message):
            getattr(raw(channels=channels), method)(given)


BAD_PARAMETERS = [
    # scales
    ({"smooth": (-1,)}, r"smooth\[0\] must be a finite number >= 0; got -1"),
    ({"smooth": (0,)}, r"smooth\[0\] must be > 0; got 0"),
    ({"band": (1, 0)}, r"band\[1\] must be > 0; got 0"),
    ({"slope": (0, -0.5)}, r"slope\[1\] must be a finite number >= 0; got -0.5"),
    ({"curvature": (np.nan,)}, r"curvature\[0\] must be a finite number >= 0; got nan"),
    ({"smooth": (np.inf,)}, r"smooth\[0\] must be a finite number >= 0; got inf"),
    ({"smooth": (1, 2, 1.0)}, "smooth holds the scale 1.0 twice"),
    ({"slope": (0, 0.0)}, "slope holds the scale 0.0 twice"),
    ({"smooth": ("1",)}, r"smooth\[0\] must be a number; got '1'"),
    ({"slope": (True,)}, r"slope\[0\] must be a number; got True"),
    ({"contrast": (0,)}, r"contrast\[0\] must be > 0; got 0"),
    ({"contrast": 2}, r"contrast must be a tuple.* write contrast=\(2,\)"),
    ({"smooth": 2}, "smooth"),
    ({"band": 1.5}, "band"),
    ({"slope": 0}, "slope"),
    ({"curvature": None}, "curvature"),
    ({"smooth": "12"}, "smooth"),
    # pitch
    ({"pitch": 0}, "pitch must be a finite number > 0; got 0"),
    ({"pitch": -1.0}, "pitch must be a finite number > 0; got -1.0"),
    ({"pitch": np.nan}, "pitch must be a finite number > 0; got nan"),
    ({"pitch": np.inf}, "pitch.* [Gg]ot inf"),
    ({"pitch": True}, "pitch must be a number; got True"),
    ({"pitch": (1, 2, 3)}, r"pitch must be one number or \(row pitch, column pitch\); got 3"),
    ({"pitch": (1, 0)}, r"pitch\[1\] must be a finite number > 0; got 0"),
    # levels
    ({"levels": [2, 1]}, r"levels must be strictly ascending; levels\[0\] = 2 is followed by 1"),
    ({"levels": [0, 1, 1]}, r"levels must be strictly ascending; levels\[1\] = 1"),
    ({"levels": [0.0, np.nan]}, r"levels must be finite; levels\[1\] is nan"),
    ({"levels": [0.0, np.inf]}, r"levels must be finite; levels\[1\] is inf"),
    ({"levels": []}, "levels must hold 1 to 65535 levels; got 0"),
    ({"levels": [[0, 1]]}, "levels must be one-dimensional"),
    ({"levels": ["a"]}, "levels must hold integers or floats"),
    ({"levels": 0}, "levels must be >= 1 and <= 65535; got 0"),
    ({"levels": -2}, "levels must be >= 1 and <= 65535; got -2"),
    ({"levels": 65_536}, "levels must be >= 1 and <= 65535; got 65536"),
    ({"levels": range(65_536)}, "levels must hold 1 to 65535 levels; got 65536"),
    ({"levels": 2.5}, "levels must be an integer; got 2.5"),
    ({"levels": True}, "levels must be an integer; got True"),
    ({"levels": np.nan}, "levels must be an integer; got nan"),
    ({"levels": "16"}, "levels must be a sequence of numbers; got '16'"),
    ({"levels": None}, "levels must be a sequence of numbers; got None"),
    ({"levels": {"rwa": 3}}, r"levels has unknown field families \['rwa'\]; known are \['raw'"),
    ({"levels": {"slope": 3}}, "levels is a dict without an entry for 'raw'"),
    ({"levels": {}}, "levels is a dict without an entry for 'raw'"),
    # level rules and ranges
    ({"level_rule": "otsu"}, "'level_rule' parameter of MinkowskiCurves must be a str among"),
    ({"level_rule": "fixed"}, r'level_rule "fixed" needs level_range=\(lowest, highest\)'),
    ({"level_range": (1, -1)}, r"level_range must ascend; got \(1.0, -1.0\)"),
    ({"level_range": (1, 1)}, r"level_range must ascend; got \(1.0, 1.0\)"),
    ({"level_range": (0, np.nan)}, r"level_range\[1\] must be a finite number .*; got nan"),
    ({"level_range": (0, 1, 2)}, r"level_range must be two numbers \(lowest, highest\)"),
    ({"level_range": 2.5}, "level_range must be two numbers .*; got 2.5"),
    ({"level_rule": "rank", "level_range": (0, 1.5)}, 'level_range of rule "rank" holds frac'),
    ({"level_rule": "fitted", "level_range": (-0.1, 1)}, 'level_range of rule "fitted" holds'),
    ({"level_rule": "rank", "levels": [-0.1, 0.5]}, 'levels of rule "rank" are fractions'),
    ({"level_rule": "fitted", "levels": [0.5, 1.1]}, 'levels of rule "fitted" are fractions'),
    ({"levels": [0, 1], "level_range": (0, 1)}, r"level_range=\(0, 1\) has no meaning beside"),
    ({"level_range": {"rwa": (0, 1)}}, r"level_range has unknown field families \['rwa'\]"),
    ({"level_range": {"band": (0, 1)}}, "level_range is a dict without an entry for 'raw'"),
    # Hermite functions
    ({"terms": 0}, r"terms\['area'\] must be >= 1 and <= 16; got 0"),
    ({"terms": {"euler": 17}}, r"terms\['euler'\] must be >= 1 and <= 16; got 17"),
    ({"terms": 2.0}, r"terms\['area'\] must be an integer; got 2.0"),
    ({"terms": {"area": True}}, r"terms\['area'\] must be an integer; got True"),
    ({"terms": "4"}, r"terms\['area'\] must be an integer; got '4'"),
    ({"terms": {"volume": 2}}, r"terms has entries \['volume'\]; functionals are area, contour"),
    ({"basis": "hermite", "level_rule": "rank"}, 'basis "hermite" needs level_rule "standard"'),
    # closed options
    ({"basis": "fourier"}, "'basis' parameter of MinkowskiCurves must be a str among"),
    ({"scale_rule": "own"}, "'scale_rule' parameter of MinkowskiCurves must be a str among"),
    ({"separate_scale": 1}, "'separate_scale' parameter of MinkowskiCurves must be"),
    ({"location_scale": "ratio"}, "location_scale='ratio' chooses .* separate_scale=True keeps"),
    ({"roughness": (-1,)}, r"roughness\[0\] must be a finite number >= 0; got -1"),
    ({"roughness": 2}, r"roughness must be a tuple.* write roughness=\(2,\)"),
    ({"location_scale": "log"}, "'location_scale' parameter of MinkowskiCurves must be"),
    ({"connectivity": 6}, "'connectivity' parameter of MinkowskiCurves must be .* Got 6"),
    ({"connectivity": 4.0}, "'connectivity' parameter of MinkowskiCurves must be .* Got 4.0"),
    ({"connectivity": "4"}, "'connectivity' parameter of MinkowskiCurves must be .* Got '4'"),
    ({"connectivity": True}, "'connectivity' parameter of MinkowskiCurves must be .* Got True"),
    ({"contour_estimator": "crofton"}, "'contour_estimator' parameter of MinkowskiCurves"),
    ({"scale_unit": "mm"}, "'scale_unit' parameter of MinkowskiCurves must be a str among"),
    ({"below_min_valid": "drop"}, "'below_min_valid' parameter of MinkowskiCurves must be a str"),
    ({"dtype": "float16"}, "'dtype' parameter of MinkowskiCurves must be a str among"),
    ({"dtype": float}, "'dtype' parameter of MinkowskiCurves must be a str among"),
    ({"raw": 1}, "'raw' parameter of MinkowskiCurves must be an instance of 'bool'"),
    ({"location_scale": None}, "'location_scale' parameter of MinkowskiCurves must be"),
    ({"remove_tilt": 1}, "'remove_tilt' parameter of MinkowskiCurves must be"),
    ({"directional": "no"}, "'directional' parameter of MinkowskiCurves must be"),
    ({"min_valid": 1.5}, "min_valid must be from 0 to 1; got 1.5"),
    ({"min_valid": -0.1}, "min_valid must be a finite number >= 0; got -0.1"),
    ({"min_valid": np.nan}, "min_valid must be a finite number >= 0; got nan"),
    ({"min_valid": True}, "min_valid must be a number; got True"),
    ({"n_jobs": 0}, "n_jobs must be None, >= 1, or <= -1 .*; got 0"),
    ({"n_jobs": True}, "n_jobs must be an integer; got True"),
    ({"n_jobs": 1.0}, "n_jobs must be an integer; got 1.0"),
    # functionals and empty vectors
    ({"functionals": ("volume",)}, "functionals must be one of 'area', .* got 'volume'"),
    ({"functionals": ("area", "area")}, r"functionals holds a name twice: \('area', 'area'\)"),
    ({"functionals": "area"}, "'functionals' parameter of MinkowskiCurves must be"),
    ({"raw": False}, "no field is left: raw is False and smooth, band, slope, curvature and con"),
    ({"functionals": (), "location_scale": False}, "the vector would be empty: functionals is"),
]  # fmt: skip


@pytest.mark.parametrize(("options", "message"), BAD_PARAMETERS)
def test_bad_parameters(options, message):
    wrong = raw(**options)  # the constructor only assigns
    for call in (
        lambda: wrong.fit(X),
        lambda: wrong.transform(X),
        wrong.get_feature_names_out,
        wrong.fingerprint,
    ):
        with pytest.raises((ValueError, TypeError), match=message):
            call()


def test_every_parameter_has_a_bad_value_above():
    # channels have a test of their own
    tested = {name for options, _ in BAD_PARAMETERS for name in options}
    assert tested == set(MinkowskiCurves().get_params()) - {"channels"}


def test_a_bare_scale_is_told_how_to_write_it():
    with pytest.raises(TypeError, match=r"smooth must be a tuple.* write smooth=\(2,\)"):
        raw(smooth=2).fit(X)


def test_integer_levels_that_floats_cannot_hold_are_refused():
    huge = [2**53, 2**53 + 1]
    with pytest.raises(ValueError, match=r"levels\[1\] = 9007199254740993 is beyond 2\*\*53"):
        raw(level_rule="fixed", levels=huge).fit(X)
    with pytest.raises(ValueError, match="count_patterns takes such levels exactly"):
        minkowski_curves(X[0], levels=huge)


@pytest.mark.parametrize("marker", [-1.797e308, 1e300])
def test_no_data_markers_are_not_taken_for_heights(marker):
    spoilt = noise(3, (8, 8))
    spoilt[1, 2, 3] = marker
    with pytest.raises(ValueError, match=r"X\[1\] reaches from .* Set no-data values to NaN"):
        raw().transform(spoilt)
    both = spoilt.copy()
    both[1, 0, 0] = -marker  # their difference overflows
    with pytest.raises(ValueError, match=r"X\[1\] reaches from"):
        raw().transform(both)
    spoilt[1, 2, 3] = np.nan
    assert np.isfinite(raw(min_valid=0.0).transform(spoilt)).all()


@pytest.mark.parametrize("factor", [1e60, 1e-60])
def test_numbers_that_the_output_cannot_hold_are_refused(factor):
    # neither infinity nor zero stands in for them
    X = noise(2, (8, 8)) * factor
    with pytest.raises(ValueError, match=r"X\[0\]: feature raw_mean is .*float32 cannot hold"):
        raw(dtype="float32").transform(X)
    assert np.isfinite(raw(dtype="float64").transform(X)).all()


def test_messages_name_the_channel():
    pair = np.stack([noise(2, (8, 8)), noise(2, (8, 8))], axis=-1)
    pair[1, 2, 3, 1] = np.inf
    with pytest.raises(ValueError, match=r"X\[1\] channel 'heat' holds inf at row 2, column 3"):
        raw(channels=("light", "heat")).transform(pair)
    pair[1, :, :, 1] = np.nan
    with pytest.raises(ValueError, match=r"1 of 2 patches .* X\[1\] channel 'heat': no window"):
        raw(channels=("light", "heat")).transform(pair)


def test_curves_and_vectors_agree_to_the_bit():
    # law 9: one image's curves and its vector are the same numbers
    image = noise(1, (15, 19))
    pitch = (0.5, 0.7)
    whole = MinkowskiCurves(**WHOLE, levels=6, pitch=pitch, dtype="float64", location_scale=False)
    row = dict(zip(whole.get_feature_names_out(), whole.transform(image)[0], strict=True))
    for field in ("raw", "smooth_2", "band_1", "slope_0"):
        family, _, scale = field.partition("_")
        curves = minkowski_curves(image[0], 6, pitch=pitch, field=family, scale=float(scale or 0))
        for functional in ("area", "contour", "euler"):
            values = [row[f"{field}_{functional}_{k:02d}"] for k in range(6)]
            assert getattr(curves, functional).tolist() == values, (field, functional)


@pytest.mark.parametrize("rule", ["standard", "rank", "fitted"])
def test_joining_fields_changes_no_bit(monkeypatch, rule):
    # the fast way for few pixels against field by field; missing pixels and a flat patch included
    X = noise(5, (12, 13))
    X[1, 2:4, 3] = np.nan
    X[2] = 7.0
    options = {"smooth": (1, 2), "band": (1,), "slope": (0, 1), "curvature": (1,)}
    whole = small(
        levels={"raw": 5, "smooth": 5, "band": 4, "slope": 5, "curvature": 4},
        level_rule=rule, min_valid=0.0, **options,
    ).fit(X)  # fmt: skip
    monkeypatch.setattr(vector, "JOIN_PIXELS", 0)
    apart = whole.transform(X)
    monkeypatch.setattr(vector, "JOIN_PIXELS", 10**9)
    np.testing.assert_array_equal(whole.transform(X), apart)


def test_learned_raw_levels_are_pixel_values():
    # two grey values, floats that change when an offset is taken off and put back
    for seed in range(20):
        rng = np.random.default_rng(seed)
        low, high = np.sort(rng.normal(size=2))
        X = np.where(rng.random((3, 16, 16)) < 0.5, low, high)
        fitted = raw(level_rule="fitted", levels=[0.25, 0.75], location_scale=False).fit(X)
        assert set(fitted.levels_["raw"]) <= {low, high}
        areas = fitted.transform(X)[:, 0]
        assert (areas == 1.0).all()  # every pixel reaches the lower value


def test_levelled_vectors_do_not_depend_on_the_batch():
    X = noise(23, (100, 7)) + np.arange(7.0)
    options = {"remove_tilt": True, "slope": (0,), "smooth": (1,)}
    together = raw(**options).transform(X)
    apart = np.concatenate([raw(**options).transform(X[k : k + 1]) for k in range(len(X))])
    np.testing.assert_array_equal(together, apart)


def test_levels_are_not_learned_from_what_transform_refuses():
    # two valid rows: windows of the raw field, none of the curvature; or refused in one channel
    X = noise(4, (8, 8))
    X[3, 2:] = np.nan
    X[3, :2] += 1000.0
    options = {"level_rule": "fitted", "below_min_valid": "nan", "min_valid": 0.0}
    fitted = raw(curvature=(0,), **options).fit(X)
    assert np.isnan(fitted.transform(X)[3]).all()
    assert fitted.levels_["raw"].max() < 100.0
    with pytest.raises(ValueError, match=r"X\[3\]: one of its fields has no window"):
        raw(curvature=(0,), level_rule="fitted", min_valid=0.0).fit(X)
    pair = np.stack([noise(4, (8, 8)), noise(4, (8, 8))], axis=-1)
    pair[3, ..., 0] += 1000.0
    pair[3, ..., 1] = np.nan
    fitted = raw(channels=("a", "b"), **options).fit(pair)
    assert fitted.levels_["a_raw"].max() < 100.0


def test_a_refused_patch_is_marked_whatever_it_holds():
    X = noise(3, (8, 8))
    X[2] = np.nan
    X[2, :3, :3] = 1e60
    X[2, 0, 0] = -1e60
    found = raw(below_min_valid="nan", dtype="float32").transform(X)
    assert np.isnan(found[2]).all()
    assert np.isfinite(found[:2]).all()


def test_integers_far_from_zero_are_exact():
    # law 5 for integers: an offset of 2**45 changes no curve
    X = np.random.default_rng(6).integers(0, 11, (3, 20, 20))
    options = {"smooth": (1,), "slope": (0,), "location_scale": False}
    near, far = raw(**options).transform(X), raw(**options).transform(X + 2**45)
    np.testing.assert_allclose(near, far, atol=1e-12)

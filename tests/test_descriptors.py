"""The texture descriptors for comparison: one suite for all, then each by itself."""

import inspect
import math
import pickle

import numpy as np
import pytest
import sklearn.utils.estimator_checks as estimator_checks
from scipy import ndimage
from scipy.stats import kurtosis, skew
from skimage import data
from skimage.feature import graycoprops, hog, local_binary_pattern
from sklearn.base import clone
from sklearn.discriminant_analysis import LinearDiscriminantAnalysis
from sklearn.exceptions import NotFittedError
from sklearn.pipeline import make_pipeline
from test_sklearn_checks import WITHOUT_DATA, available

from mfeat import _descriptor_base as base
from mfeat import _descriptors_filters as filter_descriptors
from mfeat import _descriptors_grey as grey
from mfeat import _descriptors_local as local
from mfeat import _descriptors_spectral as spectral
from mfeat import _filters, _haralick
from mfeat.descriptors import (
    DESCRIPTORS,
    CoOccurrence,
    FilterBank,
    GaborEnergies,
    GreyHistogram,
    LocalBinaryPatterns,
    OrientedGradients,
    PowerSpectrum,
    RandomKernels,
    WaveletEnergies,
)

#: Every descriptor with its defaults, and the other roads through it.
VARIANTS = {name: (kind, {}) for name, kind in DESCRIPTORS.items()} | {
    "grey-histogram range": (GreyHistogram, {"scaling": "range", "bins": 101}),
    "local-binary-patterns signs": (
        LocalBinaryPatterns,
        {"radii": [1, 2], "points": [8, 16], "smooth": [0, 0], "magnitudes": "none"},
    ),
    "local-binary-patterns beside": (LocalBinaryPatterns, {"magnitudes": "beside"}),
    "co-occurrence range": (CoOccurrence, {"quantisation": "range", "levels": 64}),
    "co-occurrence rank": (CoOccurrence, {"quantisation": "rank", "distances": [1]}),
    "gabor kept": (GaborEnergies, {"rotation": "kept", "frequencies": [0.25]}),
    "oriented-gradients cells": (
        OrientedGradients,
        {"cells": 4, "scales": [0], "rotation": "kept"},
    ),
    "filter-bank moments": (FilterBank, {"statistics": "moments", "scales": [1, 3]}),
    "random-kernels straight": (RandomKernels, {"turned": False, "kernels": 7, "side": 2}),
    "wavelets kept": (
        WaveletEnergies,
        {"orientations": "kept", "vanishing_moments": 2, "levels": 3},
    ),
    "power-spectrum rings": (PowerSpectrum, {"orders": [], "rings": 24}),
}
#: Only these learn from training patches.
LEARNING = {"grey-histogram range", "co-occurrence range"}

every = pytest.mark.parametrize("variant", VARIANTS)


def made(variant, **options):
    kind, settings = VARIANTS[variant]
    return kind(**settings, **options)


def patches(count=3, side=56):
    """Return patches of three photographed textures that scikit-image brings along."""
    images = [data.brick(), data.grass(), data.gravel()]
    starts = [20 * k for k in range(count)]
    return np.stack([images[k % 3][s : s + side, 50 : 50 + side] for k, s in enumerate(starts)])


def holes(images, seed=0):
    """Return the patches as floats with a corner, a block and scattered pixels missing."""
    out = images.astype(float)
    out[:, :5, :7] = np.nan
    out[:, 20:26, 30:33] = np.nan
    out[np.random.default_rng(seed).random(images.shape) < 0.02] = np.nan
    return out


# All of them --------------------------------------------------------------------------------


def test_the_registry():
    assert list(DESCRIPTORS) == [
        *["grey-histogram", "local-binary-patterns", "co-occurrence", "gabor"],
        *["oriented-gradients", "filter-bank", "random-kernels", "wavelets", "power-spectrum"],
    ]
    assert {kind for kind, _ in VARIANTS.values()} == set(DESCRIPTORS.values())
    assert {v for v in VARIANTS if made(v).__sklearn_tags__().requires_fit} == LEARNING


@every
def test_shape_type_and_names(variant):
    descriptor = made(variant)
    names = descriptor.get_feature_names_out()
    rows = descriptor.fit_transform(patches())
    assert rows.shape == (3, len(names))
    assert rows.dtype == np.float32
    assert np.isfinite(rows).all()
    assert names.dtype == object
    assert len(set(names)) == len(names)
    assert list(names[:2]) == ["mean", "std"]
    assert all(isinstance(name, str) and name == name.lower() for name in names)
    bare = made(variant, location_scale=False)
    np.testing.assert_array_equal(bare.fit_transform(patches()), rows[:, 2:])
    assert list(bare.get_feature_names_out()) == list(names[2:])


@every
def test_default_vectors_are_not_too_long(variant):
    if VARIANTS[variant][1] == {}:
        assert len(made(variant).get_feature_names_out()) <= 500


@every
def test_textures_differ(variant):
    # a descriptor that looked at nothing would pass much of this suite
    rows = made(variant, location_scale=False).fit_transform(patches(6))
    within = np.abs(rows[:3] - rows[3:]).sum()
    between = np.abs(rows[:3] - np.roll(rows[3:], 1, axis=0)).sum()
    assert 0 < within < between


@every
def test_location_and_scale_are_mean_and_standard_deviation(variant):
    given = patches() * 1e-3 + 5
    rows = made(variant).fit_transform(given)
    np.testing.assert_allclose(rows[:, 0], given.mean(axis=(1, 2)), rtol=1e-6)
    np.testing.assert_allclose(rows[:, 1], given.std(axis=(1, 2)), rtol=1e-6)


@every
def test_clone_pickle_pipeline(variant):
    given = patches()
    fitted = made(variant).fit(given)
    rows = fitted.transform(given)
    copy = pickle.loads(pickle.dumps(fitted))
    assert copy.transform(given).tobytes() == rows.tobytes()
    fresh = clone(fitted)
    assert fresh.get_params() == fitted.get_params()
    assert not hasattr(fresh, "range_")
    many, labels = patches(12), np.arange(12) % 3
    pipeline = make_pipeline(
        made(variant), LinearDiscriminantAnalysis(solver="lsqr", shrinkage="auto")
    )
    assert (pipeline.fit(many, labels).predict(many) == labels).mean() > 0.5


@every
def test_workers_and_batches_change_no_bit(variant, monkeypatch):
    given = patches(7)
    whole = made(variant).fit(given)
    rows = whole.transform(given)
    assert whole.transform(given).tobytes() == rows.tobytes()
    for k in (0, 6):
        assert whole.transform(given[k : k + 1]).tobytes() == rows[k : k + 1].tobytes()
    monkeypatch.setattr("mfeat.stacks.STACK_PIXELS", 2 * given[0].size)
    for n_jobs in (1, 2):
        parallel = made(variant, n_jobs=n_jobs).fit(given)
        assert len(parallel._groups(given)) == 4
        assert parallel.transform(given).tobytes() == rows.tobytes()


@every
def test_lists_equal_arrays_and_may_mix_sizes(variant):
    given = patches()
    descriptor = made(variant).fit(given)
    rows = descriptor.transform(given)
    assert descriptor.transform(list(given)).tobytes() == rows.tobytes()
    mixed = [given[0], given[1][:40, :33].astype(np.float32), given[2], given[0][:, :47] > 100]
    found = descriptor.transform(mixed)
    assert found[[0, 2]].tobytes() == rows[[0, 2]].tobytes()
    for k in (1, 3):
        assert descriptor.transform([mixed[k]]).tobytes() == found[k : k + 1].tobytes()


@every
def test_input_is_not_changed(variant):
    for given in (patches(), holes(patches())):
        before = given.copy()
        given.flags.writeable = False
        made(variant, missing="nearest").fit(given).transform(given)
        np.testing.assert_array_equal(given, before)


@every
@pytest.mark.parametrize("dtype", ["uint16", "int16", "uint64", ">i4", "float32", "float64"])
def test_every_type_gives_the_same_numbers(variant, dtype):
    given = patches()
    descriptor = made(variant).fit(given)
    found = descriptor.transform(given.astype(dtype))
    assert found.tobytes() == descriptor.transform(given).tobytes()


@every
def test_one_bit_patches(variant):
    given = patches() > 110
    descriptor = made(variant).fit(given)
    rows = descriptor.transform(given)
    assert np.isfinite(rows).all()
    assert descriptor.transform(given.astype(np.uint8)).tobytes() == rows.tobytes()


@every
@pytest.mark.parametrize("factor", [1e-40, 1e-7, 1e60])
def test_height_maps_in_any_unit(variant, factor):
    # apart from what is meant to see it, the unit does not matter; nor do outliers break anything
    given = patches().astype(float)
    descriptor = made(variant, location_scale=False)
    rows = descriptor.fit_transform(given)
    np.testing.assert_allclose(descriptor.fit_transform(given * factor), rows, atol=2e-5)
    given[0, 3, 3] = 1e9
    assert np.isfinite(descriptor.fit_transform(given * factor)).all()


@every
@pytest.mark.parametrize("value", [0, 7, 0.1, -1e30])
def test_flat_patches_are_finite(variant, value):
    flat = np.full((2, 48, 48), value)
    descriptor = made(variant)
    for fitted in (descriptor.fit(flat), descriptor.fit(patches())):
        rows = fitted.transform(flat)
        assert np.isfinite(rows).all()
        assert rows[0].tobytes() == rows[1].tobytes()
        np.testing.assert_allclose(rows[:, 0], value, rtol=1e-6)
        assert (rows[:, 1] == 0).all()
        # what is beside the patch's own mean does not depend on its value
        if variant not in LEARNING:
            assert rows[0, 2:].tobytes() == fitted.transform(np.zeros((1, 48, 48)))[0, 2:].tobytes()


@every
def test_nothing_but_ranges_is_learned(variant):
    given = patches()
    if variant in LEARNING:
        assert issubclass(NotFittedError, ValueError)
        with pytest.raises(NotFittedError, match="learns from training patches: call fit"):
            made(variant).transform(given)
        return
    fitted = made(variant).fit(given[::-1] // 3)
    assert fitted.transform(given).tobytes() == made(variant).transform(given).tobytes()


# Missing pixels and refusals ----------------------------------------------------------------


def filled(image):
    """Return an image whose missing pixels have the value of a nearest one, found by search."""
    valid = np.argwhere(~np.isnan(image))
    out = image.copy()
    for row, col in np.argwhere(np.isnan(image)):
        nearest = valid[np.square(valid - (row, col)).sum(axis=1).argmin()]
        out[row, col] = image[tuple(nearest)]
    return out


def test_missing_pixels_take_the_nearest_value():
    image = np.array([[1.0, np.nan, np.nan, np.nan, 9.0]] * 2)
    image[:, 2] = 5
    image[:, 3] = [9, np.nan]
    found = base.fill_nearest(image, ~np.isnan(image))
    assert found[0, 0] == 1
    assert found[0, 1] in (1, 5)
    assert found[1, 3] in (5, 9)
    np.testing.assert_array_equal(found[:, [0, 2, 4]], image[:, [0, 2, 4]])


@every
def test_missing_nearest(variant):
    # one hole a row, off centre, so that no pixel has two nearest ones
    given = patches().astype(float)
    given[:, 10:50:4, :1] = np.nan
    given[:, 30, 20] = given[:, 30, 21] = np.nan
    given[0] = patches()[0]
    by_hand = np.array([filled(image) for image in given])
    descriptor = made(variant, missing="nearest").fit(patches())
    rows = descriptor.transform(given)
    # (30, 20) and (30, 21) have three nearest each; both ways take one at distance 1
    choices = by_hand.copy()
    choices[1:, 30, 20:22] = [
        base.fill_nearest(image, ~np.isnan(image))[30, 20:22] for image in given[1:]
    ]
    assert (np.abs(choices - by_hand) > 0).sum() <= 4
    assert rows.tobytes() == descriptor.transform(choices).tobytes()
    masked = np.ma.masked_array(np.nan_to_num(given, nan=77).astype(np.uint8), np.isnan(given))
    assert descriptor.transform(masked).tobytes() == rows.tobytes()
    assert descriptor.__sklearn_tags__().input_tags.allow_nan


@every
@pytest.mark.parametrize("method", ["fit", "transform"])
def test_refusals(variant, method):
    fitted = made(variant).fit(patches())
    filling = made(variant, missing="nearest").fit(patches())
    assert not fitted.__sklearn_tags__().input_tags.allow_nan

    def refuses(descriptor, given, match, error=ValueError):
        with pytest.raises(error, match=match):
            getattr(descriptor, method)(given)

    some = patches(4).astype(float)
    some[1, 4, 4] = some[3, 9, 9] = np.nan
    refuses(fitted, some, r'missing pixels in X\[1\], X\[3\]; \w+ knows none.*missing="nearest"')
    masked = np.ma.masked_array(patches(), False)
    masked[2, 0, 0] = np.ma.masked
    refuses(fitted, masked, r'missing pixels in X\[2\]; .*missing="nearest"')
    some[2] = np.nan
    for descriptor in (fitted, filling):
        refuses(descriptor, some, r"no valid pixel in X\[2\]")
    some[0, 3, 5] = -np.inf
    for descriptor in (fitted, filling):
        refuses(descriptor, some, r"X\[0\] holds -inf at row 3, column 5")
    refuses(fitted, np.empty((0, 40, 40)), "X holds no patch")
    refuses(fitted, [], "X holds no patch")
    refuses(fitted, patches()[0], r"X must have shape \(n, h, w\)")
    refuses(fitted, patches()[..., None], r"have channels; descriptors take grey values only")
    refuses(fitted, [*patches(), patches()], r"have channels; .*X\[..., 0\]")
    refuses(fitted, patches().astype(str), "got dtype", TypeError)
    refuses(fitted, np.full((1, 40, 40), 2**60), "beyond 2\\*\\*53")
    side = fitted._smallest_side()
    small = [patches()[0], patches()[1][: side - 1], patches()[2][:, : side - 1]]
    if side > 2:
        refuses(fitted, small, rf"at least {side}x{side} pixels; too small: X\[1\], X\[2\], X")
    else:
        refuses(fitted, small, r"X\[1\] must be at least 2x2 pixels")
    least = [patches()[0][:side, :side], patches()[1][:side]]
    assert np.isfinite(fitted.transform(least)).all()


def test_long_lists_of_patches_are_cut_short():
    with pytest.raises(ValueError, match=r"X\[3\], X\[4\] and 15 more; GreyHistogram"):
        GreyHistogram().fit(holes(patches(20)))


@every
def test_means_that_float32_cannot_hold(variant):
    given = patches().astype(float)
    for factor in (1e50, 1e-44):
        with pytest.raises(ValueError, match=r"X\[0\] has mean .* float32 cannot hold"):
            made(variant).fit(given).transform(given * factor)


@every
@pytest.mark.parametrize(
    ("option", "message"),
    [
        ({"missing": "mean"}, "'missing' parameter"),
        ({"location_scale": "yes"}, "'location_scale' parameter"),
        ({"n_jobs": 0}, "n_jobs must be None, >= 1, or <= -1"),
    ],
)
def test_unknown_common_options(variant, option, message):
    descriptor = made(variant).fit(patches()).set_params(**option)
    for method in (descriptor.fit, descriptor.transform):
        with pytest.raises(ValueError, match=message):
            method(patches())
    with pytest.raises(ValueError, match=message):
        descriptor.get_feature_names_out()


@pytest.mark.parametrize(
    ("descriptor", "error", "message"),
    [
        (GreyHistogram(bins=1), ValueError, "'bins' parameter"),
        (GreyHistogram(scaling="rank"), ValueError, "'scaling' parameter"),
        (LocalBinaryPatterns(radii=(2, 1, 3, 5)), ValueError, "radii must ascend strictly"),
        (LocalBinaryPatterns(radii=()), ValueError, "radii must hold at least one"),
        (LocalBinaryPatterns(radii=(1, 2.0, 3, 4)), TypeError, r"radii\[1\] must be an integer"),
        (LocalBinaryPatterns(points=(8, 8)), ValueError, "points must hold one number for each"),
        (LocalBinaryPatterns(points=(8, 8, 8, 3)), ValueError, r"points\[3\] must be >= 4"),
        (LocalBinaryPatterns(smooth=(0, 1, 2)), ValueError, "smooth must hold one number for"),
        (LocalBinaryPatterns(smooth=(0, 1, 2, -1)), ValueError, r"smooth\[3\] must be a finite"),
        (LocalBinaryPatterns(magnitudes=True), ValueError, "'magnitudes' parameter"),
        (CoOccurrence(levels=257), ValueError, "'levels' parameter"),
        (CoOccurrence(distances=(0, 1)), ValueError, r"distances\[0\] must be >= 1"),
        (CoOccurrence(quantisation="uniform"), ValueError, "'quantisation' parameter"),
        (GaborEnergies(frequencies=(0.1, 0.5)), ValueError, "below 0.5 cycles per pixel; got 0.5"),
        (GaborEnergies(frequencies=(0.2, 0.1)), ValueError, "frequencies must ascend strictly"),
        (GaborEnergies(orientations=1), ValueError, "'orientations' parameter"),
        (GaborEnergies(rotation="sum"), ValueError, "'rotation' parameter"),
        (OrientedGradients(cells=1), ValueError, "'cells' parameter"),
        (OrientedGradients(scales=()), ValueError, "scales must ascend strictly and hold"),
        (OrientedGradients(scales=(1, -1)), ValueError, r"scales\[1\] must be a finite number"),
        (OrientedGradients(scales=(1, 1)), ValueError, "scales must ascend strictly"),
        (FilterBank(scales=(0, 1)), ValueError, r"scales\[0\] must be a finite number > 0"),
        (FilterBank(elongation=0.5), ValueError, "'elongation' parameter"),
        (FilterBank(statistics="textons"), ValueError, "'statistics' parameter"),
        (RandomKernels(kernels=0), ValueError, "'kernels' parameter"),
        (RandomKernels(dilations=()), ValueError, "dilations must hold at least one"),
        (RandomKernels(seed=-1), ValueError, "'seed' parameter"),
        (WaveletEnergies(vanishing_moments=0), ValueError, "'vanishing_moments' parameter"),
        (WaveletEnergies(orientations="sum"), ValueError, "'orientations' parameter"),
        (PowerSpectrum(rings=25), ValueError, "'rings' parameter"),
        (PowerSpectrum(orders=(2, 3)), ValueError, r"orders must be even.*orders\[1\] is 3"),
        (PowerSpectrum(orders=(4, 2)), ValueError, "orders must ascend strictly"),
    ],
    ids=lambda item: repr(item) if isinstance(item, base.TextureDescriptor) else "",
)
def test_unknown_options(descriptor, error, message):
    for call in (descriptor.fit, descriptor.transform):
        with pytest.raises(error, match=message):
            call(patches())


@every
@pytest.mark.parametrize("name", available(WITHOUT_DATA))
def test_checks_of_scikit_learn_without_data(variant, name):
    getattr(estimator_checks, name)(type(made(variant)).__name__, made(variant))


@pytest.mark.parametrize("kind", DESCRIPTORS.values())
def test_every_parameter_has_a_constraint(kind):
    assert set(kind._parameter_constraints) == set(inspect.signature(kind).parameters)


def test_more_settings_change_the_vector():
    # each parameter has its say
    changes = {
        GreyHistogram: {"bins": 8, "scaling": "range"},
        LocalBinaryPatterns: {
            "radii": (1, 2, 3, 4),
            "points": (8, 8, 8, 9),
            "smooth": (0, 0, 0, 0),
            "magnitudes": "none",
        },
        CoOccurrence: {"levels": 8, "distances": (1, 2), "quantisation": "rank"},
        GaborEnergies: {"frequencies": (0.1, 0.2), "orientations": 6, "rotation": "kept"},
        OrientedGradients: {
            "orientations": 8,
            "cells": 3,
            "cell_side": 7,
            "scales": (0,),
            "rotation": "kept",
        },
        FilterBank: {
            "scales": (1, 2),
            "orientations": 8,
            "elongation": 3,
            "statistics": "moments",
        },
        RandomKernels: {
            "kernels": 239,
            "side": 3,
            "dilations": (1, 2),
            "turned": False,
            "seed": 1,
        },
        WaveletEnergies: {"vanishing_moments": 2, "levels": 3, "orientations": "kept"},
        PowerSpectrum: {"rings": 12, "orders": (2,)},
    }
    assert set(changes) == set(DESCRIPTORS.values())
    common = {"location_scale", "missing", "n_jobs"}
    for kind, options in changes.items():
        assert set(options) | common == set(kind._parameter_constraints)
        usual = kind().fit_transform(patches()).tobytes()
        for name, value in options.items():
            assert kind(**{name: value}).fit_transform(patches()).tobytes() != usual, name


# Common parts -------------------------------------------------------------------------------


def test_standardised():
    given = patches().astype(float)
    found = base.standardised(given)
    wanted = (given - given.mean(axis=(1, 2), keepdims=True)) / given.std(
        axis=(1, 2), keepdims=True
    )
    np.testing.assert_allclose(found, wanted, atol=1e-12)
    np.testing.assert_allclose(base.standardised(given * 1e74 / 300), found, atol=1e-12)
    np.testing.assert_allclose(base.standardised(given + 1e9), found, atol=1e-6)
    assert (base.standardised(np.full((1, 5, 5), 0.1)) == 0).all()


def test_value_range_leaves_stray_pixels_out():
    given = np.linspace(0, 100, 2500).reshape(1, 50, 50)
    low, high = base.value_range([given])
    assert low == pytest.approx(0.5, abs=0.02)
    assert high == pytest.approx(99.5, abs=0.02)
    stray = given.copy()
    stray[0, 0, 0], stray[0, -1, -1] = -1e9, 1e9
    # one pixel in 2500 is the last of 101 order statistics, so it has weight .01, linearly lost
    many = [given[:, ::2], stray, given, given, given]
    assert base.value_range(many) == pytest.approx((low, high), abs=0.7)


def test_bins_are_closed_below_and_open_outside():
    found = base.binned(np.array([[-5.0, 0, 0.99, 1, 3.99, 4, 77]]), 0.0, 4.0, 4)
    assert found.tolist() == [[0, 0, 0, 1, 3, 3, 3]]
    assert base.binned(np.array([[2.0, 3.0]]), 3.0, 3.0, 4).tolist() == [[0, 0]]


def test_ranks_have_equal_probability_and_keep_ties_together():
    distinct = np.random.default_rng(0).permutation(64).reshape(1, 8, 8)
    assert np.bincount(base.ranked(distinct, 4).ravel()).tolist() == [16] * 4
    np.testing.assert_array_equal(base.ranked(np.exp(distinct / 9), 4), base.ranked(distinct, 4))
    # half zeros, half ones: middle ranks 1/4 and 3/4
    assert base.ranked(np.array([[[0, 1], [1, 0]]]), 4).tolist() == [[[1, 3], [3, 1]]]
    assert base.ranked(np.zeros((1, 2, 2)), 4).tolist() == [[[2, 2], [2, 2]]]
    assert base.ranked(np.array([[[0, 5]]]), 2).tolist() == [[[0, 1]]]


# Each against something outside -------------------------------------------------------------


def test_grey_histogram_is_that_of_numpy():
    given = patches()
    descriptor = GreyHistogram(bins=10, scaling="range", location_scale=False).fit(given)
    edges = np.linspace(*descriptor.range_, 11)
    edges[[0, -1]] = -np.inf, np.inf
    wanted = [np.histogram(image, edges)[0] / image.size for image in given]
    np.testing.assert_allclose(descriptor.transform(given), wanted, atol=1e-7)
    standard = GreyHistogram(bins=12, location_scale=False).transform(given)
    edges = np.linspace(-3, 3, 13)
    edges[[0, -1]] = -np.inf, np.inf
    wanted = [np.histogram((i - i.mean()) / i.std(), edges)[0] / i.size for i in given]
    np.testing.assert_allclose(standard, wanted, atol=1e-7)


def test_pixels_at_the_mean_stay_on_their_side():
    # three values about the mean, which is an edge between bins
    image = np.tile([[1, 2, 3]], (9, 3)).astype(float)
    rows = [
        GreyHistogram(location_scale=False).transform([gain * image + offset])[0]
        for gain in (1, 0.1, 3.3, 7e-5)
        for offset in (0, 0.7, -1e3 / 3)
    ]
    assert np.unique(rows, axis=0).shape[0] == 1
    assert rows[0][16] == np.float32(1 / 3)


@pytest.mark.parametrize(("radius", "points"), [(1, 8), (2, 16), (3, 24), (5, 8)])
def test_local_binary_patterns_are_those_of_scikit_image(radius, points):
    image = data.brick()[:100, :90].astype(np.int64)
    # irregular values leave no ties to rounding
    image = image * 1009 + np.random.default_rng(0).integers(0, 1009, image.shape)
    differences = grey.neighbour_differences(image[None].astype(float), radius, points)
    found = grey.uniform_codes(differences >= 0)[0]
    wanted = local_binary_pattern(image, points, radius, "uniform")
    inner = slice(radius, -radius)
    assert (found == wanted[inner, inner]).mean() > 0.999
    settings = {"radii": (radius,), "points": (points,), "smooth": (0,), "magnitudes": "none"}
    row = LocalBinaryPatterns(**settings, location_scale=False).transform([image])[0]
    counts = np.bincount(wanted[inner, inner].astype(int).ravel(), minlength=points + 2)
    np.testing.assert_allclose(row, counts / counts.sum(), atol=1e-3)


def test_local_binary_patterns_by_hand():
    # a single bright pixel: all neighbours of it are below (0 ones); its right neighbour sees one
    # brighter and seven equal neighbours (8 ones); with P = 8, R = 1 every pixel nearby likewise
    image = np.zeros((1, 5, 5))
    image[0, 2, 2] = 1
    codes = grey.uniform_codes(grey.neighbour_differences(image, 1, 8) >= 0)[0]
    assert codes.tolist() == [[8, 8, 8], [8, 0, 8], [8, 8, 8]]
    # bits that change more than twice around the circle share the last code
    bits = np.array([[1, 0, 1, 0, 0, 0, 0, 0], [1, 1, 1, 0, 0, 0, 0, 1]]).T.astype(bool)
    assert grey.uniform_codes(bits).tolist() == [9, 4]


def test_joint_patterns_have_both_patterns_as_margins():
    given = patches()
    options = {"location_scale": False, "radii": (2,), "points": (8,), "smooth": (1,)}
    joint = LocalBinaryPatterns(**options).transform(given).reshape(3, 10, 10)
    beside = LocalBinaryPatterns(**options, magnitudes="beside").transform(given)
    np.testing.assert_allclose(joint.sum(axis=2), beside[:, :10], atol=1e-6)
    np.testing.assert_allclose(joint.sum(axis=1), beside[:, 10:], atol=1e-6)
    assert beside[:, :10].sum(axis=1) == pytest.approx(1)


# the example of Haralick, Shanmugam and Dinstein (1973), fig. 3; matrices recounted below
HARALICK_IMAGE = np.array([[0, 0, 1, 1], [0, 0, 1, 1], [0, 2, 2, 2], [2, 2, 3, 3]])
HARALICK_COUNTS = {
    (0, 1): [[4, 2, 1, 0], [2, 4, 0, 0], [1, 0, 6, 1], [0, 0, 1, 2]],
    (-1, 1): [[4, 1, 0, 0], [1, 2, 2, 0], [0, 2, 4, 1], [0, 0, 1, 0]],
    (1, 0): [[6, 0, 2, 0], [0, 4, 2, 0], [2, 2, 2, 2], [0, 0, 2, 0]],
    (1, 1): [[2, 1, 3, 0], [1, 2, 1, 0], [3, 1, 0, 2], [0, 0, 2, 0]],
}


def counted(image, step):
    table = np.zeros((4, 4), int)
    for row in range(4):
        for col in range(4):
            other = row + step[0], col + step[1]
            if 0 <= other[0] < 4 and 0 <= other[1] < 4:
                table[image[row, col], image[other]] += 1
                table[image[other], image[row, col]] += 1
    return table.tolist()


def test_cooccurrences_of_haralicks_example():
    for step, wanted in HARALICK_COUNTS.items():
        assert counted(HARALICK_IMAGE, step) == wanted
    found = _haralick.cooccurrences(HARALICK_IMAGE, (1,), 4)[0]
    # scikit-image turns with the rows' downward axis, so the two diagonals may change places
    for k, steps in enumerate([[(0, 1)], [(-1, 1), (1, 1)], [(1, 0)], [(-1, 1), (1, 1)]]):
        tables = [np.array(HARALICK_COUNTS[step]) for step in steps]
        assert any(np.allclose(found[k], table / table.sum()) for table in tables)
    assert not np.allclose(found[1], found[3])


def test_haralicks_features_by_hand():
    # horizontal pairs of the example: 24 counts; sums of squares 16+4+1+4+16+1+36+1+1+4 = 84
    pairs = np.array(HARALICK_COUNTS[0, 1]) / 24
    found = dict(zip(_haralick.HARALICK, _haralick.haralick_features(pairs), strict=True))
    assert found["angular-second-moment"] == pytest.approx(84 / 24**2)
    # off the diagonal: 2+2 and 1+1 pairs one apart, 1+1 two apart
    assert found["contrast"] == pytest.approx((6 * 1 + 2 * 4) / 24)
    assert found["inverse-difference-moment"] == pytest.approx((16 + 6 / 2 + 2 / 5) / 24)
    # marginal 7, 6, 8, 3 of 24
    assert found["sum-average"] == pytest.approx(2 * (6 + 16 + 9) / 24)
    variance = (6 + 32 + 27) / 24 - (31 / 24) ** 2
    assert found["variance"] == pytest.approx(variance)
    # Var(i + j) + Var(i - j) = 2 (Var i + Var j)
    assert found["sum-variance"] == pytest.approx(4 * variance - 14 / 24)
    # |i - j|: 16 zeros, 6 ones, 2 twos
    assert found["difference-variance"] == pytest.approx(14 / 24 - (10 / 24) ** 2)
    shares = np.array([16, 6, 2]) / 24
    assert found["difference-entropy"] == pytest.approx(-(shares * np.log(shares)).sum())
    # i + j: 4, 4, 2 + 4, 0, 6, 2, 2 for 0 to 6
    shares = np.array([4, 4, 6, 6, 2, 2]) / 24
    assert found["sum-entropy"] == pytest.approx(-(shares * np.log(shares)).sum())
    # mutual information from its definition
    margin = np.array([7, 6, 8, 3]) / 24
    product = np.outer(margin, margin)
    seen = pairs > 0
    mutual = (pairs[seen] * np.log(pairs[seen] / product[seen])).sum()
    own = -(margin * np.log(margin)).sum()
    assert found["correlation-information-1"] == pytest.approx(-mutual / own)
    assert found["correlation-information-2"] == pytest.approx(math.sqrt(1 - math.exp(-2 * mutual)))


def test_haralicks_features_are_those_of_scikit_image():
    image = base.ranked(patches()[:1], 16)[0]
    pairs = _haralick.cooccurrences(image, (1, 3), 16)
    found = np.moveaxis(_haralick.haralick_features(pairs), -1, 0)
    found = dict(zip(_haralick.HARALICK, found, strict=True))
    matrices = pairs.transpose(2, 3, 0, 1)
    for ours, theirs in {
        "angular-second-moment": "ASM",
        "contrast": "contrast",
        "correlation": "correlation",
        "inverse-difference-moment": "homogeneity",
    }.items():
        np.testing.assert_allclose(found[ours], graycoprops(matrices, theirs), rtol=1e-9)
    row = CoOccurrence(quantisation="rank", distances=(1, 3), location_scale=False)
    values = dict(zip(row.get_feature_names_out(), row.transform(patches()[:1])[0], strict=True))
    contrast = graycoprops(matrices, "contrast")[1]
    assert values["cooccurrence_d03_contrast_mean"] == pytest.approx(contrast.mean(), rel=1e-6)
    assert values["cooccurrence_d03_contrast_range"] == pytest.approx(np.ptp(contrast), rel=1e-6)


def sinusoid(frequency, angle, side=96, phase=0.3):
    """Return a plane wave; its direction is turned against the clock from the rows'."""
    rows, cols = np.indices((side, side))
    along = cols * math.cos(angle) - rows * math.sin(angle)
    return np.sin(2 * math.pi * frequency * along + phase)


@pytest.mark.parametrize("which", range(6))
@pytest.mark.parametrize("turn", range(8))
def test_gabor_filters_answer_their_own_sinusoid(which, turn):
    frequencies = GaborEnergies().frequencies
    image = sinusoid(frequencies[which], math.pi * turn / 8)
    descriptor = GaborEnergies(rotation="kept", location_scale=False)
    means = descriptor.transform([image]).reshape(6, 2, 8)[0:6, 0]
    assert np.unravel_index(means.argmax(), means.shape) == (which, turn)
    # amplitude 1 of a sinusoid with standard deviation 1/sqrt(2); mirrored borders disturb it
    assert means[which, turn] * image.std() == pytest.approx(1, abs=0.2)
    # a wave between two orientations is in the same ring for the harmonics
    turned = sinusoid(frequencies[which], math.pi * (turn + 0.5) / 8)
    harmonics = GaborEnergies(location_scale=False).transform([turned]).reshape(6, 2, 5)[:, 0]
    assert harmonics[:, 0].argmax() == which


def test_gabor_bank_lets_no_mean_through_and_has_half_peaks_at_the_neighbours():
    rows, cols = np.array([[0.0]]), np.array([[0.0]])
    assert (_filters.gabor_spectra(rows, cols, (0.1, 0.4), 8) == 0).all()
    # an octave: half peak at 2/3 and 4/3 of the frequency
    cols = np.array([[0.2 * 2 / 3, 0.2, 0.2 * 4 / 3]])
    found = _filters.gabor_spectra(np.zeros((1, 1)), cols, (0.2,), 4)[0, 0, 0]
    np.testing.assert_allclose(found, [1, 2, 1])


def test_turning_by_a_step_shifts_no_modulus():
    table = np.random.default_rng(0).random((3, 8))
    found = _filters.over_orientations(table, "harmonics")
    np.testing.assert_allclose(found, _filters.over_orientations(np.roll(table, 3, 1), "harmonics"))
    np.testing.assert_allclose(found[:, 0], table.mean(axis=1))
    # even in angle with two periods: one harmonic only
    wave = 1 + np.cos(2 * np.pi * 2 * np.arange(8) / 8)
    np.testing.assert_allclose(
        _filters.over_orientations(wave, "harmonics"), [1, 0, 0.5, 0, 0], atol=1e-12
    )
    assert _filters.over_orientations(table, "kept") is table


def test_the_filter_bank_filters_as_scipy_does():
    image = patches()[0].astype(np.float32)
    build = filter_descriptors.partial(
        _filters.derivative_spectra, scales=(1.5, 3.0), orientations=4, elongation=1.0
    )
    bank = _filters.Bank(image.shape, build)
    for scale, found in zip((1.5, 3.0), bank.responses(image), strict=True):
        inner = slice(2, -2)  # SciPy samples derivatives in space, the bank in frequency
        smooth = ndimage.gaussian_filter(image, scale, mode="reflect", truncate=6)
        np.testing.assert_allclose(found[-1].real, smooth, atol=0.02)
        blob = scale**2 * ndimage.gaussian_laplace(image, scale, mode="reflect", truncate=6)
        np.testing.assert_allclose(
            found[-1].imag[inner, inner], blob[inner, inner], atol=0.02 * np.ptp(blob)
        )
        # orientation 0 runs along rows, i.e. over columns; orientation 2 runs up
        for k, axis, sign in ((0, 1, 1), (2, 0, -1)):
            order = [0, 0]
            order[axis] = 1
            edge = sign * scale * ndimage.gaussian_filter(image, scale, order, truncate=6)
            np.testing.assert_allclose(found[k].real, edge, atol=0.02 * np.ptp(edge))
            order[axis] = 2
            bar = scale**2 * ndimage.gaussian_filter(image, scale, order, truncate=6)
            np.testing.assert_allclose(found[k].imag, bar, atol=0.02 * np.ptp(bar))


@pytest.mark.parametrize("turn", range(6))
def test_bars_answer_a_line_across_them_as_calculated(turn):
    # a line of Gaussian profile (width s) smoothed at scale t has the height s / sqrt(s^2 + t^2)
    # and there the second derivative -height / (s^2 + t^2), whatever the elongation
    width, scale, angle = 2.0, 2.0, math.pi * turn / 6
    build = filter_descriptors.partial(
        _filters.derivative_spectra, scales=(scale,), orientations=6, elongation=3.0
    )
    rows, cols = np.indices((65, 65)) - 32
    along = cols * math.cos(angle) - rows * math.sin(angle)
    line = np.exp(-np.square(along / width) / 2).astype(np.float32)
    (found,) = _filters.Bank(line.shape, build).responses(line)
    bars = found[:-1, 32, 32].imag
    assert bars.argmin() == turn
    wanted = -(scale**2) * width / (width**2 + scale**2) ** 1.5
    assert bars[turn] == pytest.approx(wanted, rel=1e-3)
    assert np.abs(found[:-1, 32, 32].real).max() < 1e-3  # no edge on top of a line


def test_quantiles_and_moments_are_those_of_numpy_and_scipy():
    values = np.random.default_rng(0).gamma(2, size=(3, 1000))
    np.testing.assert_allclose(
        filter_descriptors.moments(values),
        np.stack(
            [
                *[values.mean(axis=1), values.std(axis=1)],
                *[skew(values, axis=1), kurtosis(values, axis=1, fisher=False)],
            ],
            axis=1,
        ),
    )
    np.testing.assert_allclose(
        filter_descriptors.quantiles(values)[:, 2], np.median(values, axis=1)
    )
    assert filter_descriptors.moments(np.full((1, 9), 2.0)).tolist() == [[2, 0, 0, 0]]


def test_oriented_gradients_are_those_of_scikit_image():
    given = patches(side=64)
    options = {"orientations": 8, "cells": 4, "scales": (0,), "rotation": "kept"}
    found = OrientedGradients(**options, location_scale=False).transform(given)
    # on standardised patches too, for gradients between two bins fall into either by rounding
    standard = base.standardised(given)
    wanted = [hog(image, 8, (16, 16), (2, 2), "L2-Hys") for image in standard]
    np.testing.assert_allclose(found, wanted, atol=1e-6)
    names = OrientedGradients(**options, location_scale=False).get_feature_names_out()
    assert names[8] == "gradients_00_block_00_00_1_angle_000"
    pooled = OrientedGradients(scales=(0,), rotation="kept", location_scale=False)
    blocks = np.reshape([hog(i, 9, (8, 8), (2, 2), "L2-Hys") for i in standard], (3, -1, 9))
    wanted = np.concatenate([blocks.mean(axis=1), blocks.std(axis=1)], axis=1)
    np.testing.assert_allclose(pooled.transform(given), wanted, atol=1e-6)


def test_oriented_gradients_of_stripes():
    # the gradient of vertical stripes runs along the rows: angle 0, of nine bins the first
    stripes = np.tile(np.sin(np.arange(64) / 2), (64, 1))
    row = OrientedGradients(scales=(0,), rotation="kept", location_scale=False).transform([stripes])
    assert row[0, :9].argmax() == 0
    assert row[0, 0] > 0.3
    assert row[0, 1:9].max() < 1e-6
    # stripes along the rows: 90 degrees, the middle of the bin from 80 to 100
    turned = OrientedGradients(scales=(0,), rotation="kept", location_scale=False)
    assert turned.transform([stripes.T])[0, :9].argmax() == 4


def test_random_kernels_are_correlations():
    image = patches()[0]
    options = {"kernels": 5, "side": 3, "dilations": (1, 3), "seed": 7}
    weights, biases = local.random_kernels(7, 5, 3)
    np.testing.assert_allclose(weights.sum(axis=(1, 2)), 0, atol=1e-6)
    assert (np.abs(biases) < 1).all()
    standard = (image - image.mean()) / image.std()
    wanted = []
    for k in range(5):
        dilation = (1, 3)[k % 2]
        both = []
        for turn in range(4):
            holey = np.zeros((2 * dilation + 1, 2 * dilation + 1))
            holey[::dilation, ::dilation] = np.rot90(weights[k], turn)
            response = ndimage.correlate(standard, holey)[dilation:-dilation, dilation:-dilation]
            both.append([(response + biases[k] > 0).mean(), response.max() + biases[k]])
        wanted.append(both)
    straight = RandomKernels(**options, turned=False, location_scale=False).transform([image])
    np.testing.assert_allclose(straight[0], np.ravel([w[0] for w in wanted]), atol=2e-3)
    turned = RandomKernels(**options, location_scale=False).transform([image])
    np.testing.assert_allclose(turned[0], np.ravel([np.mean(w, 0) for w in wanted]), atol=2e-3)


def test_the_kernels_of_a_seed_are_normal_and_stay_the_same():
    weights, biases = local.random_kernels(0, 4000, 5)
    # the mean of 25 normal numbers is taken off, which leaves a variance of 24/25
    assert weights.var() == pytest.approx(0.96, abs=0.02)
    assert biases.var() == pytest.approx(1 / 3, abs=0.02)
    assert not np.array_equal(weights, local.random_kernels(1, 4000, 5)[0])


@pytest.mark.parametrize("vanishing", range(1, 9))
def test_daubechies_filters(vanishing):
    low = _filters.daubechies(vanishing)
    assert low.sum() == pytest.approx(math.sqrt(2))
    # orthonormal to its own shifts by two
    full = np.correlate(low, low, "full")[len(low) - 1 :: 2]
    np.testing.assert_allclose(full, np.eye(1, vanishing)[0], atol=1e-7)
    high = low[::-1] * (-1.0) ** np.arange(len(low))
    grid = np.arange(len(low)) / len(low)
    for power in range(vanishing):
        assert high @ grid**power == pytest.approx(0, abs=1e-7)


def test_daubechies_filters_in_closed_form():
    np.testing.assert_allclose(_filters.daubechies(1), [math.sqrt(0.5)] * 2)
    # Daubechies (1988): (1 +- sqrt 3) / (4 sqrt 2), (3 +- sqrt 3) / (4 sqrt 2)
    root = math.sqrt(3)
    wanted = np.array([1 + root, 3 + root, 3 - root, 1 - root]) / (4 * math.sqrt(2))
    np.testing.assert_allclose(_filters.daubechies(2), wanted)


@pytest.mark.parametrize("vanishing", [1, 2, 4])
def test_wavelets_keep_energy(vanishing):
    image = np.random.default_rng(0).normal(size=(1, 24, 30))
    reach = _filters.wavelet_reach(vanishing, 3) - 1
    periodic = np.pad(image, [(0, 0), (0, reach), (0, reach)], mode="wrap")
    levels = _filters.undecimated(periodic, vanishing, 3)
    assert levels[-1].smooth.shape == image.shape  # so `wavelet_reach` is right
    parts = [detail for level in levels for detail in level.details] + [levels[-1].smooth]
    energy = sum(np.square(part[:, :24, :30]).sum() for part in parts)
    assert energy == pytest.approx(np.square(image).sum())


def test_haar_details_by_hand():
    image = np.array([[[1.0, 3.0], [4.0, 10.0]]])
    ((across, down, both), smooth), *_ = _filters.undecimated(image, 1, 1)
    # halves of differences and sums in each direction
    assert smooth == pytest.approx(18 / 4)
    assert abs(across) == pytest.approx((3 + 10 - 1 - 4) / 4)
    assert abs(down) == pytest.approx((4 + 10 - 1 - 3) / 4)
    assert abs(both) == pytest.approx((1 + 10 - 3 - 4) / 4)
    constant = _filters.undecimated(np.full((1, 20, 20), 3.0), 1, 3)
    assert all((detail == 0).all() for level in constant for detail in level.details)
    assert constant[-1].smooth == pytest.approx(3.0)
    # two vanishing moments do not see a plane
    plane = np.add.outer(2.0 * np.arange(30), 3.0 * np.arange(30))[None]
    for level in _filters.undecimated(plane, 2, 2):
        np.testing.assert_allclose(level.details, 0, atol=1e-9)


def test_wavelet_features_of_stripes():
    stripes = np.tile([1.0, -1.0], (32, 16))
    kept = WaveletEnergies(levels=1, orientations="kept")
    row = dict(zip(kept.get_feature_names_out(), kept.transform([stripes])[0], strict=True))
    # stripes one pixel wide: all energy, 1, in the finest detail along the rows; kurtosis 1
    assert row["wavelet_0_energy-columns"] == pytest.approx(0, abs=1e-5)
    assert row["wavelet_0_energy-rows"] == pytest.approx(math.log(1e-6))
    assert row["wavelet_0_kurtosis-columns"] == pytest.approx(math.log(1.1))
    merged = WaveletEnergies(levels=1)
    row = dict(zip(merged.get_feature_names_out(), merged.transform([stripes])[0], strict=True))
    assert row["wavelet_0_energy-sum"] == pytest.approx(0, abs=1e-5)
    assert row["wavelet_0_energy-anisotropy"] == pytest.approx(1, abs=1e-5)


def test_kurtosis_of_gaussian_noise_is_three():
    noise = np.random.default_rng(0).normal(size=(1, 400, 400))
    kept = WaveletEnergies(levels=2, vanishing_moments=2)
    row = dict(zip(kept.get_feature_names_out(), kept.transform(noise)[0], strict=True))
    assert math.exp(row["wavelet_0_kurtosis-both"]) == pytest.approx(3.1, abs=0.1)
    # white noise: each detail of an undecimated level has the energy of its filters
    assert math.exp(row["wavelet_0_energy-both"]) == pytest.approx(1 / 4, rel=0.03)
    assert math.exp(row["wavelet_1_energy-both"]) == pytest.approx(1 / 16, rel=0.1)
    assert row["wavelet_0_energy-anisotropy"] < 0.05


@pytest.mark.parametrize("shape", [(8, 8), (64, 64), (57, 200), (128, 129)])
@pytest.mark.parametrize("rings", [2, 16, 24])
def test_every_ring_of_the_spectrum_holds_frequencies(shape, rings):
    padded = [max(side, spectral._LEAST_TRANSFORM) for side in shape]
    ring, _ = spectral.rings_of(padded, rings)
    assert (np.bincount(ring.ravel(), minlength=rings + 1)[:rings] > 0).all()


@pytest.mark.parametrize("frequency", [0.05, 0.11, 0.23, 0.4])
@pytest.mark.parametrize("angle", [0, 0.4, 2.0])
def test_the_spectrum_of_a_sinusoid_peaks_in_its_ring(frequency, angle):
    descriptor = PowerSpectrum(location_scale=False)
    row = descriptor.transform([sinusoid(frequency, angle)])[0].reshape(16, 3)
    ring = int(16 * math.log2(32 * frequency) / 4)
    assert abs(row[:, 0].argmax() - ring) <= 1  # next to a border the window spreads it
    # all power in one direction
    assert row[ring, 1:].min() > 0.8


def test_the_spectrum_of_white_noise_is_flat():
    noise = np.random.default_rng(0).normal(size=(400, 64, 64))
    rows = PowerSpectrum(location_scale=False).transform(noise).mean(axis=0).reshape(16, 3)
    # power of each frequency: the variance, 1; the logarithm of the mean of few lies below 0
    np.testing.assert_allclose(rows[8:, 0], 0, atol=0.06)
    # the direction of fewer frequencies varies more by chance
    assert rows[-1, 1] < 0.1 < rows[0, 1]

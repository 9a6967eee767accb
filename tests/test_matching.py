"""Matched smoothing: each image gets the length of detail that was asked for, and no surprises."""

import math

import naive
import numpy as np
import pytest
from scipy import ndimage, optimize

from mfeat import MinkowskiCurves
from mfeat.fields import LONGEST_MATCHED, Field, check_scales, derive, prepared
from mfeat.matching import (
    LADDER,
    WIDEST_GAUSSIAN,
    MatchedSmoothings,
    matched_sigmas,
    mean_square_slopes,
    roughness,
)
from mfeat.surfaces import gaussian_field

SQUARE = (1.0, 1.0)


def matched(images, scale, *, valid=None, pitch=SQUARE, scale_unit="pitch", family="smooth"):
    """Return a field of a stack, with its offset, and the Gaussians in pitches."""
    images = np.asarray(images, float)
    stack_valid = None if valid is None else valid.astype(np.uint8)
    pixels = prepared(images, stack_valid, pitch, scale_unit, False)
    matching = MatchedSmoothings(pixels, (float(scale),))
    [(_, field)] = derive((Field(family, float(scale)),), pixels, "matched")
    [sigmas] = matching._sigmas.values()
    return field.values + field.offset[:, None, None], sigmas


@pytest.fixture(scope="module")
def fields():
    """Gaussian fields of correlation length 2, the length of detail that they are known to have."""
    return np.stack([gaussian_field((192, 192), 2.0, seed) for seed in range(3)])


# Lengths ------------------------------------------------------------------------------------


@pytest.mark.parametrize("pitch", [SQUARE, (0.5, 2.0)])
def test_sizes_are_those_of_plain_loops(pitch):
    rng = np.random.default_rng(0)
    images = rng.normal(size=(2, 9, 11))
    valid = (rng.random(images.shape) < 0.9).astype(np.uint8)
    for where in (np.ones_like(valid), valid):
        given = np.where(where, images, 0.0)
        deviation, slope, curvature = roughness(given, where, pitch)
        assert slope == pytest.approx(np.sqrt(2 * mean_square_slopes(given, where, pitch)))
        for k, image in enumerate(images):
            ok = where[k] == 1
            assert deviation[k] == pytest.approx(image[ok].std(), rel=1e-12)
            expected = naive.detail_length(image, ok, pitch)
            assert slope[k] / curvature[k] == pytest.approx(expected, rel=1e-12)


@pytest.mark.parametrize("length", [1.0, 2.0, 6.0])
def test_a_gaussian_field_has_its_correlation_length(length):
    # On 2x2 windows E|gradient|^2 = 2 (1 - r2), and E curvature^2 = (20 - 32 r1 + 8 r2 + 4 r4) / 4
    # for the five-point stencil, by hand from covariances r at distances 1, sqrt 2 and 2;
    # r(d) = exp(-d^2/(2 l^2)). In the limit of fine pixels the ratio is l.
    images = np.stack([gaussian_field((512, 512), length, seed) for seed in range(4)])
    _, slope, curvature = roughness(images, np.ones(images.shape, np.uint8), SQUARE)
    r1, r2, r4 = (math.exp(-square / (2 * length**2)) for square in (1, 2, 4))
    expected = math.sqrt(2 * (1 - r2) / ((20 - 32 * r1 + 8 * r2 + 4 * r4) / 4))
    assert (slope / curvature).mean() == pytest.approx(expected, rel=0.01)
    if length >= 2:
        assert (slope / curvature).mean() == pytest.approx(length, rel=0.1)


def test_where_there_is_no_gradient_or_curvature_they_are_0():
    images = np.zeros((3, 8, 8))
    images[1] = np.indices((8, 8)).sum(axis=0) % 2  # a checkerboard: no slope on 2x2 windows
    images[2] = np.arange(8)
    valid = np.ones(images.shape, np.uint8)
    _, slope, curvature = roughness(images, valid, SQUARE)
    assert slope.tolist() == [0.0, 0.0, 1.0]
    assert curvature.tolist() == [0.0, 2.0, 0.0]
    assert [one.tolist() for one in roughness(images, 0 * valid, SQUARE)] == [[0.0] * 3] * 3
    assert roughness(images[:, :2], valid[:, :2], SQUARE)[2].tolist() == [0.0] * 3


# Smoothing to a length ----------------------------------------------------------------------


@pytest.mark.parametrize("target", [2.5, 3.7, 8.0])
def test_the_length_that_was_asked_for_is_reached(fields, target):
    noise = np.random.default_rng(1).normal(size=(2, 192, 192))
    for images in (fields, noise, fields + 0.3 * fields.std() * np.resize(noise, fields.shape)):
        smooth, _ = matched(images, target)
        lengths = [naive.detail_length(image) for image in smooth]
        assert lengths == pytest.approx([target] * len(images), rel=0.02)


def test_the_gaussian_is_that_of_theory(fields):
    # covariance exp(-r^2/(2 l^2)) smoothed by a Gaussian of sigma has l^2 + 2 sigma^2 (convolution)
    for target in (3.7, 8.0):
        _, sigmas = matched(fields, target)
        assert sigmas.mean() == pytest.approx(math.sqrt((target**2 - 2.0**2) / 2), rel=0.05)


@pytest.mark.parametrize("target", [1.5, 2.5, 5.0])
def test_the_gaussian_is_that_of_a_search(target):
    image = np.random.default_rng(2).normal(size=(40, 48)) + np.hypot(*np.mgrid[:40, :48]) / 40

    def short_of(sigma):
        return naive.detail_length(ndimage.gaussian_filter(image, sigma, truncate=4.0)) - target

    expected = optimize.brentq(short_of, 0.4, 10.0)
    smooth, [sigma] = matched(image[None], target)
    assert sigma == pytest.approx(expected, rel=0.05)
    direct = ndimage.gaussian_filter(image, sigma, mode="reflect", truncate=4.0)
    assert smooth[0] == pytest.approx(direct, abs=1e-9)


@pytest.mark.parametrize("target", [40.0, 100.0])
def test_long_lengths_are_reached_in_large_images(target):
    images = np.stack([gaussian_field((512, 512), 20.0, seed) for seed in range(2)])
    smooth, _ = matched(images, target)
    inner = np.s_[:, 1:-1, 1:-1]
    across, down = np.gradient(smooth, axis=2)[inner], np.gradient(smooth, axis=1)[inner]
    curvature = np.stack([-0.5 * ndimage.laplace(image) for image in smooth])[inner]
    squares = (across**2 + down**2).mean(axis=(1, 2)) / (curvature**2).mean(axis=(1, 2))
    lengths = np.sqrt(squares)
    assert lengths == pytest.approx([target] * 2, rel=0.04)


def test_what_was_blurred_before_is_smoothed_less_and_looks_alike(fields):
    blurred = np.stack([ndimage.gaussian_filter(image, 1.2, truncate=6.0) for image in fields])
    sharp, own = matched(fields, 3.7)
    again, less = matched(blurred, 3.7)
    # Gaussians of two steps add in squares
    assert less == pytest.approx(np.sqrt(own**2 - 1.2**2), rel=0.05)
    inner = np.s_[:, 16:-16, 16:-16]
    assert np.abs(again - sharp)[inner].max() < 0.05 * sharp.std()
    # the other side: under the rule "fixed" the blur shows
    fixed, after = (
        prepared(images, None, SQUARE, "pitch", False).at(2.2) for images in (fields, blurred)
    )
    assert np.abs(after - fixed)[inner].max() > 0.1 * sharp.std()


def test_an_image_coarser_than_asked_for_stays_as_it_is():
    image = gaussian_field((96, 96), 6.0, 0)
    smooth, sigmas = matched(image[None], 3.0)
    assert sigmas.tolist() == [0.0]
    middle = image.min() / 2 + image.max() / 2
    assert np.array_equal(smooth[0], (image - middle) + middle)


def test_nothing_wider_than_a_share_of_the_side():
    # waves that no allowed Gaussian brings to that length
    row = np.sin(2 * np.pi * np.arange(64) / 9)
    _, [sigma] = matched(np.tile(row, (24, 1))[None], 12.0)
    assert sigma == WIDEST_GAUSSIAN * 24
    # of a rectangular pixel, along the side where that is fewest pixels: pitches of 8 and 1/2 make
    # 4 pixels along axis 1 of one geometric mean
    _, [sigma] = matched(np.tile(row, (64, 1))[None], 30.0, pitch=(8.0, 0.5))
    assert sigma == pytest.approx(WIDEST_GAUSSIAN * 64 / 4)


def test_flat_images_are_not_smoothed_and_stay_flat():
    flat = np.full((2, 32, 32), 7.25)
    flat[1] = -1e12
    smooth, sigmas = matched(flat, 3.0)
    assert np.array_equal(smooth, flat)
    assert sigmas.tolist() == [0.0, 0.0]
    transformer = MinkowskiCurves(dtype="float64")
    X = np.concatenate([flat, np.random.default_rng(3).normal(size=(1, 32, 32))])
    found = transformer.fit_transform(X)
    assert np.isfinite(found).all()
    names = transformer.get_feature_names_out().tolist()
    assert np.array_equal(found[0], found[1])  # whatever their height
    no_curve = [k for k, name in enumerate(names) if "_contour_" in name or "_anisotropy_" in name]
    assert not found[0, no_curve].any()


def test_missing_pixels_do_not_spoil_the_length(fields):
    valid = np.random.default_rng(4).random(fields.shape) < 0.9
    valid[:, 20:60, 30:50] = False
    smooth, sigmas = matched(np.where(valid, fields, 0.0), 5.0, valid=valid)
    lengths = [naive.detail_length(*pair) for pair in zip(smooth, valid, strict=True)]
    assert lengths == pytest.approx([5.0] * 3, rel=0.03)
    # what lies under a missing pixel has no say
    other, same = matched(np.where(valid, fields, 1e6 * valid - 3.0), 5.0, valid=valid)
    assert np.array_equal(other[valid], smooth[valid])
    assert np.array_equal(same, sigmas)
    # plain normalised convolution with the Gaussian that was found, by SciPy
    up = ndimage.gaussian_filter(np.where(valid[0], fields[0], 0.0), sigmas[0], truncate=4.0)
    down = ndimage.gaussian_filter(valid[0].astype(float), sigmas[0], truncate=4.0)
    assert smooth[0][valid[0]] == pytest.approx((up / down)[valid[0]], abs=1e-9)


def test_lengths_of_rectangular_pixels(fields):
    pitch = (0.5, 2.0)  # the geometric mean is 1
    for scale_unit in ("pitch", "length"):
        smooth, [sigma, *_] = matched(fields, 6.0, pitch=pitch, scale_unit=scale_unit)
        lengths = [naive.detail_length(image, pitch=pitch) for image in smooth]
        assert lengths == pytest.approx([6.0] * 3, rel=0.03)
        # the Gaussian is as wide along both axes in lengths, so four times in pixels
        direct = ndimage.gaussian_filter(fields[0], (2 * sigma, sigma / 2), truncate=4.0)
        assert smooth[0] == pytest.approx(direct, abs=1e-9)


def test_lengths_in_units_of_the_pitch(fields):
    one, sigmas = matched(fields, 4.0)
    other, same = matched(fields, 4.0 * 0.01, pitch=(0.01, 0.01), scale_unit="length")
    assert same == pytest.approx(sigmas, rel=1e-9)
    assert other == pytest.approx(one, abs=1e-9)


@pytest.mark.parametrize("family", ["smooth", "contrast", "curvature", "band", "slope"])
def test_turned_and_mirrored_images_have_turned_and_mirrored_fields(fields, family):
    images = fields[:, :96, :80]
    found, sigmas = matched(images, 3.0, family=family)
    for turn in (
        lambda x: np.rot90(x, axes=(1, 2)),
        lambda x: x[:, ::-1],
        lambda x: x.swapaxes(1, 2),
    ):
        other, same = matched(np.ascontiguousarray(turn(images)), 3.0, family=family)
        assert same == pytest.approx(sigmas, rel=1e-9)
        assert other == pytest.approx(turn(found), abs=1e-8)


@pytest.mark.parametrize("holes", [False, True])
def test_an_image_does_not_depend_on_its_neighbours_or_workers(holes):
    X = np.random.default_rng(5).normal(size=(7, 32, 32))
    X[1] = 4.0
    X[2] = gaussian_field((64, 64), 6.0, 1)[:32, :32]
    X[3] *= 1e6
    X[5] = np.indices((32, 32)).sum(axis=0) % 2
    if holes:
        X[2:6, 3:5, 4] = np.nan
    own = MinkowskiCurves(dtype="float64", slope=(0, 2.5), band=(2.5,), raw=True)
    together = own.transform(X)
    assert np.isfinite(together).all()
    for k in range(len(X)):
        assert np.array_equal(own.transform(X[k : k + 1])[0], together[k])
    shapes = [image[: 24 + k, :30] for k, image in enumerate(X)]
    expected = own.transform(shapes)
    parallel = MinkowskiCurves(**own.get_params() | {"n_jobs": 2})
    assert np.array_equal(parallel.transform(shapes), expected)


# The search ---------------------------------------------------------------------------------


def test_the_search_finds_lengths_that_grow_like_powers():
    # lengths sqrt(l^2 + 2 sigma^2), by hand; each image its own l
    own = np.array([1.0, 2.0, 5.0, 50.0])

    def measure(sigma):
        return np.sqrt(own**2 + 2 * sigma**2)

    found = matched_sigmas((3.0, 8.0, 30.0), measure, 4, 100.0)
    for length, sigmas in found.items():
        expected = np.sqrt(np.maximum(length**2 - own**2, 0.0) / 2)
        assert sigmas == pytest.approx(expected, rel=0.04)
    assert matched_sigmas((3.0,), measure, 4, 0.5)[3.0].tolist() == [0.5, 0.5, 0.0, 0.0]


def test_the_search_measures_no_more_than_it_needs():
    asked = []

    def measure(sigma):
        asked.append(sigma)
        return np.array([1.0 + sigma])

    [sigma] = matched_sigmas((2.0,), measure, 1, 16.0)[2.0]
    assert sigma == pytest.approx(1.0, rel=0.05)
    assert asked == list(LADDER[: LADDER.index(1.1) + 1])


def test_vectors_without_smoothing_measure_nothing(monkeypatch):
    def refuse(*_):
        raise AssertionError

    monkeypatch.setattr("mfeat.matching.matched_sigmas", refuse)
    bare = {"smooth": (), "curvature": (0,), "contrast": (), "roughness": (0,)}
    X = np.random.default_rng(6).normal(size=(2, 16, 16))
    assert np.isfinite(MinkowskiCurves(raw=True, **bare).transform(X)).all()
    with pytest.raises(AssertionError):
        MinkowskiCurves().transform(X)


# Refusals -----------------------------------------------------------------------------------


@pytest.mark.parametrize(
    ("field", "shape", "pitch", "scale_unit", "message"),
    [
        (Field("smooth", 0.9), (64, 64), 1.0, "pitch",
         r"field smooth_0.9: a length of detail of 0.9 is 0.9 pixels .*white noise has 0.63 .*mul"),
        (Field("contrast", 5.0), (64, 64), 10.0, "length",
         r"field contrast_5: a length of detail of 5 is 0.5 pixels .* in the unit of pitch"),
        (Field("smooth", 33.0), (64, 90), 1.0, "pitch",
         r"field smooth_33: a length of detail of 33 is 0.516 times the side .* 64x90 .* than 0.5"),
        (Field("band", 17.0), (64, 64), 1.0, "pitch",
         r"field band_17: a length of detail of 34 is 0.531 times the side"),
        (Field("slope", 3.0), (64, 64), 0.05, "length",
         r"field slope_3: a length of detail of 3 is 0.938 times .* in the unit of pitch"),
    ],
)  # fmt: skip
def test_lengths_that_cannot_be_had_are_refused(field, shape, pitch, scale_unit, message):
    with pytest.raises(ValueError, match=message):
        check_scales((field,), shape, (pitch, pitch), scale_unit, "matched")


def test_lengths_at_the_limits_are_taken():
    X = np.random.default_rng(7).normal(size=(1, 16, 16))
    for scale in (1.0, LONGEST_MATCHED * 16):
        lone = MinkowskiCurves(smooth=(scale,), curvature=(0, scale), contrast=(scale,))
        assert np.isfinite(lone.transform(X)).all()
    narrow = (Field("band", LONGEST_MATCHED * 8),)
    check_scales(narrow, (16, 16), SQUARE, "pitch", "matched")
    # scale 0 is no smoothing and needs no length
    check_scales((Field("slope", 0.0), Field("raw")), (3, 3), SQUARE, "pitch", "matched")

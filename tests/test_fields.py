"""Fields against SciPy, the naive reference and analytic surfaces."""

import naive
import numpy as np
import pytest
from scipy import ndimage

from mfeat import minkowski_curves
from mfeat.fields import Field, derive, prepared, scales
from mfeat.functionals import EULER_WEIGHTS
from mfeat.smoothing import gaussian_weights, sigma_pixels


def field_of(
    image,
    family,
    scale,
    *,
    valid=None,
    pitch=(1.0, 1.0),
    scale_unit="pitch",
    scale_rule="fixed",
    remove_tilt=False,
):
    """Return one field of one image with its offset, NaN where it is not valid."""
    stack_valid = None if valid is None else valid[None].astype(np.uint8)
    chosen = (Field(family, float(scale)),)
    image = np.asarray(image, float)
    pixels = prepared(image[None], stack_valid, pitch, scale_unit, remove_tilt)
    [(_, relief)] = derive(chosen, pixels, scale_rule)
    values = relief.centred[0] + relief.offset[0]
    return np.where(relief.valid[0] == 1, values, np.nan)


@pytest.fixture(scope="module")
def image():
    return 40.0 + 9.0 * np.random.default_rng(0).normal(size=(37, 50))


@pytest.mark.parametrize("scale", [0.5, 1, 1.6, 2, 4, 9, 20])
def test_smoothing_equals_scipy(image, scale):
    # scipy.ndimage.gaussian_filter(mode="reflect", truncate=4), to float64 rounding
    expected = ndimage.gaussian_filter(image, scale, mode="reflect", truncate=4.0)
    assert field_of(image, "smooth", scale) == pytest.approx(expected, rel=1e-12, abs=1e-12)


def test_rectangular_pitch_smooths_the_same_length_both_ways(image):
    got = field_of(image, "smooth", 3.0, pitch=(0.5, 2.0), scale_unit="length")
    expected = ndimage.gaussian_filter(image, (6.0, 1.5), mode="reflect", truncate=4.0)
    assert got == pytest.approx(expected, rel=1e-12)
    # in multiples of the pitch: of the geometric mean, here 1
    got = field_of(image, "smooth", 3.0, pitch=(0.5, 2.0))
    assert got == pytest.approx(expected, rel=1e-12)


@pytest.mark.parametrize("scale", [1, 2])
def test_bands_are_differences_of_gaussians(image, scale):
    expected = ndimage.gaussian_filter(image, scale, truncate=4.0) - ndimage.gaussian_filter(
        image, 2 * scale, truncate=4.0
    )
    assert field_of(image, "band", scale) == pytest.approx(expected, abs=1e-11)


def test_missing_pixels_are_filled_for_the_filter_but_stay_missing(image):
    # normalised convolution, Knutsson and Westin (1993); naive reference with plain loops
    valid = np.random.default_rng(1).random(image.shape) < 0.8
    for sigma in (1.0, 2.5):
        got = field_of(np.where(valid, image, 0.0), "smooth", sigma, valid=valid)
        expected = naive.gaussian_smooth(image, sigma, sigma, valid)
        assert np.array_equal(np.isnan(got), ~valid)
        assert got[valid] == pytest.approx(expected[valid], rel=1e-11)


def test_what_lies_under_a_missing_pixel_has_no_say(image):
    valid = np.random.default_rng(2).random(image.shape) < 0.9
    for family, scale in (("smooth", 2), ("band", 1), ("slope", 0), ("slope", 1), ("curvature", 1)):
        one = field_of(np.where(valid, image, 1e6), family, scale, valid=valid)
        other = field_of(np.where(valid, image, -3.0), family, scale, valid=valid)
        assert np.array_equal(one, other, equal_nan=True)


def test_slope_of_a_plane_in_data_units_per_length():
    y, x = np.mgrid[:9, :12]
    dy, dx = 0.5, 2.0
    plane = 3.0 * (y * dy) - 4.0 * (x * dx)
    slope = field_of(plane, "slope", 0, pitch=(dy, dx))
    assert slope.shape == (8, 11)
    assert slope == pytest.approx(5.0, rel=1e-12)


def test_curvature_of_a_paraboloid_is_positive_on_bumps():
    # z = -(x^2 + 3 y^2) / 2: minus half the Laplacian is (1 + 3) / 2 everywhere; the sign of the
    # mean peak curvature Spc of ISO 25178-2 (from memory)
    y, x = np.mgrid[-5:6, -6:7]
    dy, dx = 0.25, 0.5
    bump = -((x * dx) ** 2 + 3 * (y * dy) ** 2) / 2
    curvature = field_of(bump, "curvature", 0, pitch=(dy, dx))
    assert curvature.shape == (9, 11)
    assert curvature == pytest.approx(2.0, rel=1e-9)


def test_slope_and_curvature_against_numpy_differences(image):
    across = (np.diff(image, axis=1)[:-1] + np.diff(image, axis=1)[1:]) / 2
    down = (np.diff(image, axis=0)[:, :-1] + np.diff(image, axis=0)[:, 1:]) / 2
    assert field_of(image, "slope", 0) == pytest.approx(np.hypot(across, down), rel=1e-12)
    # scipy.ndimage.laplace is the same five-point stencil
    expected = -0.5 * ndimage.laplace(image)[1:-1, 1:-1]
    assert field_of(image, "curvature", 0) == pytest.approx(expected, abs=1e-11)


def test_differences_need_every_pixel_of_their_stencil(image):
    valid = np.ones(image.shape, bool)
    valid[10, 20] = False
    slope = np.isnan(field_of(image, "slope", 0, valid=valid))
    assert np.argwhere(slope).tolist() == [[9, 19], [9, 20], [10, 19], [10, 20]]
    curvature = np.isnan(field_of(image, "curvature", 0, valid=valid))
    # the pixel itself and its four neighbours, in coordinates of the inner pixels
    assert np.argwhere(curvature).tolist() == [[8, 19], [9, 18], [9, 19], [9, 20], [10, 19]]


def test_windows_that_touch_missing_pixels_are_not_counted(image):
    valid = np.ones(image.shape, bool)
    valid[10, 20] = False
    got = minkowski_curves(image, levels=4, mask=valid)
    assert got.counts.windows == 36 * 49 - 4
    # the slope field misses four values, so sixteen of its windows less overlaps: a 3x3 block
    got = minkowski_curves(image, levels=4, mask=valid, field="slope")
    assert got.counts.windows == 35 * 48 - 9


def test_large_offsets_lose_no_digits(image):
    # 1e9 + z keeps z to 1e-7; fields are derived from z minus the middle of its range
    shifted = image + 1e9
    z = shifted - 1e9
    for family, scale in (("slope", 1), ("curvature", 1), ("band", 1)):
        got, expected = field_of(shifted, family, scale), field_of(z, family, scale)
        assert got == pytest.approx(expected, rel=1e-9, abs=1e-9)


def test_values_beyond_computation_are_refused():
    # squares, differences over the pitch and their moments would overflow, or vanish
    for large in (1e76, 1e308):
        image = np.array([[large, -large, large]] * 3)
        with pytest.raises(ValueError, match=r"image reaches from .*beyond 1e75"):
            minkowski_curves(image, levels=[0.0])
    with pytest.raises(ValueError, match=r"differences below 1e-75 vanish.*power of ten"):
        minkowski_curves(np.array([[1e-170, 0.0, 2e-170]] * 3), field="slope")
    near = minkowski_curves(np.array([[1e75, -1e75, 1e75]] * 3), field="slope", pitch=1e-59)
    assert np.isfinite(near.levels).all()
    tiny = np.random.default_rng(4).random((9, 9))
    expected = minkowski_curves(tiny, 5, field="curvature")
    got = minkowski_curves(tiny * 1e-74, 5, field="curvature", pitch=1e59)
    assert np.array_equal(got.area, expected.area)


@pytest.mark.parametrize("missing", [0.0, 0.3])
def test_levelling_removes_the_least_squares_plane_and_keeps_the_mean(image, missing):
    # numpy.linalg.lstsq on the valid pixels
    valid = np.random.default_rng(5).random(image.shape) >= missing
    y, x = np.indices(image.shape)
    tilted = image + 0.7 * y - 1.3 * x + 50.0
    got = field_of(np.where(valid, tilted, 0.0), "raw", 0, valid=valid, remove_tilt=True)
    basis = np.stack([np.ones(valid.sum()), y[valid], x[valid]], axis=1)
    plane = basis @ np.linalg.lstsq(basis, tilted[valid], rcond=None)[0]
    expected = tilted[valid] - plane + tilted[valid].mean()
    assert got[valid] == pytest.approx(expected, abs=1e-9)
    assert np.array_equal(np.isnan(got), ~valid)


def test_levelling_a_plane_leaves_a_flat_field():
    y, x = np.mgrid[:20, :30]
    for family, scale in (("raw", 0.0), ("smooth", 2.0), ("slope", 1.0), ("band", 1.0)):
        got = minkowski_curves(
            0.3 * y - 2.0 * x + 7.0, 5, field=family, scale=scale, remove_tilt=True
        )
        assert got.area.tolist() == [1.0, 1.0, 1.0, 0.0, 0.0], family
        assert not got.contour.any()


def test_levelling_where_pixels_lie_on_one_line():
    # a plane is not determined; the least steep one is taken, nothing blows up
    image = np.full((6, 9), np.nan)
    image[2:4] = np.arange(9.0)
    valid = np.isfinite(image)
    got = field_of(np.where(valid, image, 0.0), "raw", 0, valid=valid, remove_tilt=True)
    assert got[valid] == pytest.approx(4.0)


def test_shared_arrays_cannot_be_spoilt():
    for array in (gaussian_weights(1.25), gaussian_weights(0.0), EULER_WEIGHTS[4]):
        with pytest.raises(ValueError, match="read-only"):
            array[:] = 3


def test_a_negative_zero_scale_is_named_like_zero():
    # names may not depend on what was asked for before
    [minus] = scales("slope", (-0.0,), zero=True)
    assert Field("slope", minus).name == Field("slope", 0.0).name == "slope_0"


def test_kernel_weights():
    # radius int(4 sigma + .5) as in SciPy; symmetric kernel sums to one
    for sigma in (0.3, 1.0, 2.49, 10.0):
        half = gaussian_weights(sigma)
        assert len(half) == int(4 * sigma + 0.5) + 1
        assert half[0] + 2 * half[1:].sum() == pytest.approx(1.0, abs=1e-15)
        assert half[1] / half[0] == pytest.approx(np.exp(-0.5 / sigma**2))


def test_scales_in_lengths_follow_the_pitch():
    assert sigma_pixels(4.0, (2.0, 2.0), "length") == (2.0, 2.0)
    assert sigma_pixels(4.0, (2.0, 2.0), "pitch") == (4.0, 4.0)


def test_the_same_surface_at_another_pitch_has_the_same_curves():
    # a band-limited surface sampled at pitch 1 and 0.5; scales are lengths
    def sampled(pitch):
        y, x = np.mgrid[0:120:pitch, 0:120:pitch]
        return np.sin(0.21 * x + 0.4) * np.cos(0.17 * y) + 0.5 * np.sin(0.13 * x - 0.19 * y)

    for family, scale in (
        ("raw", 0.0),
        ("smooth", 3.0),
        ("band", 2.0),
        ("slope", 2.0),
        ("curvature", 2.0),
    ):
        options = {"levels": 7, "field": family, "scale": scale, "scale_unit": "length"}
        coarse = minkowski_curves(sampled(1.0), pitch=1.0, **options)
        fine = minkowski_curves(sampled(0.5), pitch=0.5, **options)
        assert fine.levels == pytest.approx(coarse.levels, rel=0.02, abs=0.01 * np.ptp(fine.levels))
        assert fine.area == pytest.approx(coarse.area, abs=0.02)
        peak = coarse.contour.max()
        assert fine.contour == pytest.approx(coarse.contour, abs=0.06 * peak), family


@pytest.mark.parametrize(
    ("error", "match", "options"),
    [
        (ValueError, r"scale must be 0 for field \"raw\"", {"scale": 1.0}),
        (ValueError, r"scale must be > 0 for field \"smooth\"; got 0", {"field": "smooth"}),
        (
            ValueError,
            r"scale must be a finite number >= 0; got -1",
            {"field": "slope", "scale": -1},
        ),
        (ValueError, r"scale must be a finite", {"field": "slope", "scale": np.nan}),
        (ValueError, r"field must be one of 'raw'.*got 'gradient'", {"field": "gradient"}),
        (
            ValueError,
            r"smooth_0.1: a scale of 0.1 is 0.1 pixels.*too small.*multiples",
            {"field": "smooth", "scale": 0.1},
        ),
        (
            ValueError,
            r"smooth_1: a scale of 1 is 0.1 pixels at pitch.*in the unit of pitch",
            {"field": "smooth", "scale": 1, "pitch": 10, "scale_unit": "length"},
        ),
        (
            ValueError,
            r"band_30: its widest Gaussian .* times the side.*37x50",
            {"field": "band", "scale": 30},
        ),
        (ValueError, r"scale_unit must be one of 'pitch', 'length'", {"scale_unit": "px"}),
    ],
)
def test_bad_fields_are_named(image, error, match, options):
    with pytest.raises(error, match=match):
        minkowski_curves(image, **options)


def test_images_too_small_for_a_field():
    tiny = np.random.default_rng(3).random((2, 9))
    assert minkowski_curves(tiny, 3).levels.shape == (3,)
    with pytest.raises(ValueError, match=r"slope_0 needs images of at least 3x3 pixels; got 2x9"):
        minkowski_curves(tiny, 3, field="slope")
    with pytest.raises(ValueError, match=r"curvature_0 needs images of at least 4x4"):
        minkowski_curves(tiny, 3, field="curvature")


def test_scales_are_tuples_of_distinct_numbers():
    with pytest.raises(TypeError, match=r"smooth must be a tuple.*write smooth=\(2,\)"):
        scales("smooth", 2, zero=False)
    with pytest.raises(ValueError, match=r"smooth holds the scale 2.0 twice"):
        scales("smooth", (2, 2.0), zero=False)
    with pytest.raises(TypeError, match=r"smooth\[1\] must be a number; got '1'"):
        scales("smooth", (2, "1"), zero=False)


# Contrast -----------------------------------------------------------------------------------


@pytest.mark.parametrize("missing", [0.0, 0.25])
@pytest.mark.parametrize("scale", [0.8, 2.0])
def test_contrast_against_plain_loops(missing, scale):
    small = 40.0 + 9.0 * np.random.default_rng(6).normal(size=(17, 21))
    small[:, :8] *= 0.2  # a quiet side
    valid = np.random.default_rng(7).random(small.shape) >= missing
    given = np.where(valid, small, 1e4)
    got = field_of(given, "contrast", scale, valid=valid if missing else None)
    smooth = naive.gaussian_smooth(small, scale, scale, valid)
    expected = naive.local_contrast(smooth, 2.5 * scale, 0.03, valid)
    assert np.array_equal(np.isnan(got), ~valid)
    assert got[valid] == pytest.approx(expected[valid], rel=1e-9, abs=1e-9)


def test_contrast_against_scipy_in_a_wide_image(image):
    smooth = ndimage.gaussian_filter(image, 1.5, mode="reflect", truncate=4.0)
    mean, square = (
        ndimage.gaussian_filter(x, 2.5 * 1.5, mode="reflect", truncate=4.0)
        for x in (smooth, smooth**2)
    )
    expected = (smooth - mean) / np.sqrt(square - mean**2 + (0.03 * smooth.std()) ** 2)
    assert field_of(image, "contrast", 1.5) == pytest.approx(expected, abs=1e-8)


@pytest.mark.parametrize("rule", ["fixed", "matched"])
@pytest.mark.parametrize(("gain", "offset"), [(3.0, 0.0), (1e-6, 5.0), (-2.0, 100.0), (1e9, -1e9)])
def test_contrast_knows_no_gain_and_offset(image, rule, gain, offset):
    got = field_of(gain * image + offset, "contrast", 3.0, scale_rule=rule)
    expected = np.sign(gain) * field_of(image, "contrast", 3.0, scale_rule=rule)
    assert got == pytest.approx(expected, abs=1e-7)


def test_contrast_evens_out_light_that_varies_slowly(image):
    # gain falls to a third across the image; the other side: smoothing follows it
    light = np.linspace(1.0, 1 / 3, image.shape[1])
    even, uneven = image - 40.0, (image - 40.0) * light
    halves = np.s_[:, :12], np.s_[:, -12:]
    for family, least, most in (("contrast", 0.85, 1.2), ("smooth", 1.9, 4.0)):
        ratios = []
        for given in (even, uneven):
            found = field_of(given, family, 1.0)
            ratios.append(found[halves[0]].std() / found[halves[1]].std())
        assert least < ratios[1] / ratios[0] < most, family


def test_contrast_of_a_flat_image_is_nothing():
    for value in (0.0, 7.0, -1e12, 0.1):
        for rule in ("fixed", "matched"):
            got = field_of(np.full((20, 24), value), "contrast", 3.0, scale_rule=rule)
            assert not got.any()
    # quiet places stay quiet: noise of a thousandth beside a step is not blown up to the step's
    step = np.zeros((40, 60))
    step[:, 30:] = 1.0
    step += 1e-3 * np.random.default_rng(8).normal(size=step.shape)
    got = field_of(step, "contrast", 1.0)
    assert np.abs(got[:, :12]).max() < 0.1
    assert np.abs(got).max() > 0.5


def test_contrast_needs_a_scale(image):
    with pytest.raises(ValueError, match=r'scale must be > 0 for field "contrast"; got 0'):
        minkowski_curves(image, 4, field="contrast")
    with pytest.raises(ValueError, match=r"contrast_20: its widest Gaussian .* of 1.35 times"):
        minkowski_curves(image, 4, field="contrast", scale=20)


def test_curves_of_contrast_have_no_unit(image):
    curves = minkowski_curves(image, 5, field="contrast", scale=2, unit="mm", value_unit="um")
    assert curves.units["levels"] == "1"
    assert curves.field == "contrast_2"
    louder = minkowski_curves(5 * image - 3, 5, field="contrast", scale=2)
    assert louder.levels == pytest.approx(curves.levels, abs=1e-9)
    assert louder.euler == pytest.approx(curves.euler)

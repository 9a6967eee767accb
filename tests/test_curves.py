"""Curves against theory: Gaussian fields, Boolean models, ISO 25178-2, real height maps."""

import math

import numpy as np
import pytest
import theory_oracles as theory
from matplotlib.cbook import get_sample_data
from skimage import measure

from mfeat import Curves, count_patterns, minkowski_curves
from mfeat.functionals import contour, euler
from mfeat.surfaces import boolean_discs, gaussian_field


@pytest.mark.parametrize(("length", "size", "fields"), [(3.0, 512, 12), (8.0, 512, 12)])
def test_gaussian_fields_against_exact_lattice_expectations(length, size, fields):
    # Rice (1944/45), Adler (1981), Plackett (1954) on the lattice; every level within 4.5 standard
    # errors of the mean over independent periodic fields
    levels = np.linspace(-2.5, 2.5, 11)
    expected = theory.gaussian_lattice(levels, length)
    names = ("area", "contour", "euler4", "euler8", "euler")
    found = {name: [] for name in names}
    for seed in range(fields):
        field = gaussian_field((size, size), length, seed)
        counts = count_patterns(field, levels)
        found["area"].append(minkowski_curves(field, levels=levels).area)
        found["contour"].append(contour(counts))
        found["euler4"].append(euler(counts, connectivity=4))
        found["euler8"].append(euler(counts, connectivity=8))
        found["euler"].append(euler(counts))
    for name in names:
        values = np.array(found[name])
        error = values.std(axis=0, ddof=1) / math.sqrt(fields)
        z = (values.mean(axis=0) - getattr(expected, name)) / error
        assert np.abs(z).max() < 4.5, (name, z)
        # and the test has power: the standard error is small against the curve
        assert error.max() < 0.04 * np.abs(getattr(expected, name)).max(), name


def test_continuum_curves_of_a_gaussian_field():
    # Adler (1981), Tomita (1986): s = 1, tau = 1 / l^2, in units of a pitch of 0.5 um
    length, pitch = 12.0, 0.5
    levels = np.linspace(-2, 2, 9)
    curves = [
        minkowski_curves(gaussian_field((1024, 1024), length, seed), levels=levels, pitch=pitch)
        for seed in range(6)
    ]
    expected = theory.gaussian_continuum(levels, 1.0, 1.0 / (length * pitch) ** 2)
    for name, tolerance in (("area", 0.03), ("contour", 0.05), ("euler", 0.12)):
        mean = np.mean([getattr(c, name) for c in curves], axis=0)
        wanted = getattr(expected, name)
        assert np.abs(mean - wanted).max() < tolerance * np.abs(wanted).max(), name


def test_boolean_model_of_discs():
    # Miles (1976): area, contour; Euler number with 4-connectivity for unions of grains, whose
    # lattice bias of -.013 per concave corner is known (formulas section 5)
    models = [boolean_discs((512, 512), 6e-4, (10, 30), seed) for seed in range(12)]
    counts = [count_patterns(model.image, [1]) for model in models]
    model = models[0]
    expected = theory.boolean_model(model.intensity, model.mean_area, model.mean_perimeter)
    values = np.array(
        [
            [minkowski_curves(m.image, [1]).area[0], contour(c)[0], euler(c, connectivity=4)[0]]
            for m, c in zip(models, counts, strict=True)
        ]
    )
    error = values.std(axis=0, ddof=1) / math.sqrt(len(models))
    mean = values.mean(axis=0)
    assert abs(mean[0] - expected.area) < 4 * error[0]
    assert abs(mean[1] - expected.contour) < 4 * error[1] + 0.003 * expected.contour
    # method of densities, field by field: unbiased within its error and the lattice's 3 %
    estimates = [
        theory.boolean_intensity_corrected(chi, length, area, corner_bias=-0.013)
        for area, length, chi in values
    ]
    error = np.std(estimates, ddof=1) / math.sqrt(len(estimates))
    assert error < 0.06 * model.intensity
    assert abs(np.mean(estimates) - model.intensity) < 4 * error + 0.03 * model.intensity


def test_area_curve_is_the_areal_material_ratio():
    # ISO 25178-2: the areal material ratio at height c is the fraction of the area at or above c.
    # Inside windows weigh border pixels less, hence the tolerance; a tiled image has none.
    heights = np.random.default_rng(0).gumbel(size=(200, 220))
    levels = np.quantile(heights, [0.05, 0.2, 0.5, 0.8, 0.95])
    curves = minkowski_curves(heights, levels=levels)
    material_ratio = [(heights >= c).mean() for c in levels]
    assert curves.area == pytest.approx(material_ratio, abs=0.01)
    wrapped = np.pad(heights, ((0, 1), (0, 1)), mode="wrap")
    wrapped_curves = minkowski_curves(wrapped, levels=levels)
    assert wrapped_curves.area == pytest.approx(material_ratio, abs=1e-14)
    framed = minkowski_curves(heights, levels=levels, edges="framed")
    assert framed.area / heights.size == pytest.approx(material_ratio, abs=1e-14)


def test_a_real_height_map():
    # matplotlib's bundled elevation grid (metres, 0.00083333 degrees a pixel)
    with get_sample_data("jacksboro_fault_dem.npz") as grid:
        elevation = grid["elevation"]
    pitch = (0.00083333 * 111_320.0, 0.00083333 * 111_320.0 * math.cos(math.radians(36.6)))
    levels = [300, 400, 500, 600, 700]
    got = minkowski_curves(
        elevation,
        levels=levels,
        edges="framed",
        pitch=pitch,
        unit="m",
        value_unit="m",
        connectivity=8,
    )
    for k, level in enumerate(levels):
        land = np.pad(elevation >= level, 1)
        assert got.euler[k] == measure.euler_number(land, connectivity=2)
        assert got.area[k] == pytest.approx(land.sum() * pitch[0] * pitch[1], rel=1e-12)
    assert got.units == {"levels": "m", "area": "m^2", "contour": "m", "euler": "1"}
    # square pixels: scikit-image's perimeter, in metres
    square = minkowski_curves(elevation, levels=levels, edges="framed", pitch=90.0)
    for k, level in enumerate(levels):
        expected = 90.0 * measure.perimeter_crofton(np.pad(elevation >= level, 1), directions=4)
        assert square.contour[k] == pytest.approx(expected, rel=1e-12)
    # a gain in height and pitch leaves the slope field's shape alone
    steep = minkowski_curves(elevation, levels=9, field="slope", pitch=30.0)
    flat = minkowski_curves(elevation.astype(float) * 2, levels=9, field="slope", pitch=60.0)
    assert np.array_equal(steep.area, flat.area)
    assert flat.levels == pytest.approx(steep.levels)
    assert flat.contour == pytest.approx(steep.contour / 2)


def test_missing_data_leave_densities_unbiased():
    # densities are per valid window area: dropping a third of a texture changes little
    field = gaussian_field((512, 512), 4.0, 1)
    holes = np.kron(np.random.default_rng(2).random((32, 32)) < 0.33, np.ones((16, 16), bool))
    levels = np.linspace(-2, 2, 7)
    whole = minkowski_curves(field, levels=levels)
    partial = minkowski_curves(np.where(holes, np.nan, field), levels=levels)
    assert 0.5 < partial.valid_fraction < 0.7
    assert partial.area == pytest.approx(whole.area, abs=0.03)
    assert partial.contour == pytest.approx(whole.contour, abs=0.06 * whole.contour.max())


def test_units_and_repr():
    image = np.random.default_rng(3).random((20, 30))
    options = {"unit": "um", "value_unit": "nm", "pitch": 2.0, "levels": 4}
    curves = minkowski_curves(image, field="slope", scale=1, **options)
    assert isinstance(curves, Curves)
    assert curves.units == {"levels": "nm/um", "area": "1", "contour": "1/um", "euler": "1/um^2"}
    assert curves.field == "slope_1"
    assert repr(curves).splitlines()[0] == (
        "Curves of the slope_1 field at 4 levels, valid fraction 1"
    )
    assert "1/um^2" in repr(curves)
    assert minkowski_curves(image, field="curvature", scale=1, **options).units["levels"] == (
        "nm/um^2"
    )


def test_framed_curves_count_isolated_objects():
    image = np.zeros((40, 40))
    image[5:12, 6:14] = 2.0
    image[20:30, 22:31] = 3.0
    image[24:26, 25:27] = 0.0  # a hole
    curves = minkowski_curves(image, levels=[1.0, 2.5], edges="framed")
    assert curves.euler.tolist() == [2 - 1, 1 - 1]
    assert curves.area.tolist() == [56 + 90 - 4, 90 - 4]


@pytest.mark.parametrize(
    ("error", "match", "arguments", "options"),
    [
        (ValueError, r'"fitted" learns from many images; use MinkowskiCurves', (8, "fitted"), {}),
        (ValueError, r"level_rule must be one of", (8, "quantile"), {}),
        (
            ValueError,
            r"connectivity must be one of 4, 8, 'mean'; got 'both'",
            (8,),
            {"connectivity": "both"},
        ),
        (ValueError, r"contour_estimator must be one of", (8,), {"contour_estimator": "length"}),
        (ValueError, r"edges must be one of", (8,), {"edges": "open"}),
        (ValueError, r"pitch must be a finite number > 0; got 0", (8,), {"pitch": 0.0}),
        (ValueError, r"pitch must be a finite number > 0; got nan", (8,), {"pitch": np.nan}),
        (TypeError, r"unit must be a string; got None", (8,), {"unit": None}),
        (TypeError, r"value_unit must be a string; got 1", (8,), {"value_unit": 1}),
        (TypeError, r"remove_tilt must be True or False; got 1", (8,), {"remove_tilt": 1}),
        (ValueError, r"pitch must be one number or .*got 0 numbers", (8,), {"pitch": []}),
        (
            ValueError,
            r"level_range\[1\] must be <= 1e\+100; got 1e\+200",
            (8, "fixed"),
            {"level_range": (0, 1e200)},
        ),
        (ValueError, r"mask of image has shape", (8,), {"mask": np.ones((2, 2), bool)}),
    ],
)
def test_bad_input_is_named(error, match, arguments, options):
    with pytest.raises(error, match=match):
        minkowski_curves(np.random.default_rng(4).random((12, 12)), *arguments, **options)


def test_images_without_data_are_refused():
    with pytest.raises(ValueError, match=r"image has no valid pixel: all are NaN or masked"):
        minkowski_curves(np.full((5, 5), np.nan))
    lonely = np.full((5, 5), np.nan)
    lonely[::2, ::2] = 1.0
    with pytest.raises(ValueError, match=r"field raw has no 2x2 window of four valid pixels.*16"):
        minkowski_curves(lonely)
    with pytest.raises(ValueError, match=r"holds inf at row 2, column 3"):
        minkowski_curves(np.where(np.arange(20).reshape(4, 5) == 13, np.inf, 0.0))


def test_a_zero_dimensional_pitch_is_a_number():
    image = np.random.default_rng(5).random((12, 12))
    expected = minkowski_curves(image, 5, pitch=0.5)
    assert np.array_equal(minkowski_curves(image, 5, pitch=np.array(0.5)).euler, expected.euler)

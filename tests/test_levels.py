"""Level rules: placement, exactness, and fields without relief."""

import numpy as np
import pytest

from mfeat import count_patterns, minkowski_curves
from mfeat.levels import level_values, order_statistics, pooled_levels


def curves(image, **options):
    return minkowski_curves(image, **{"levels": 9} | options)


def test_standard_levels_are_mean_and_standard_deviations():
    image = np.random.default_rng(0).normal(3.0, 2.0, (50, 60))
    got = curves(image, levels=5)
    expected = image.mean() + np.array([-2.5, -1.25, 0.0, 1.25, 2.5]) * image.std()
    # to the shift of 1e-9 standard deviations that settles ties
    assert got.levels == pytest.approx(expected, abs=2e-9 * image.std())


def test_one_level_lies_in_the_middle():
    assert level_values(1, "standard").tolist() == [0.0]
    assert level_values(1, "rank").tolist() == [0.5]
    assert level_values(1, "fixed", (2, 4)).tolist() == [3.0]


def test_rank_levels_are_order_statistics():
    image = np.random.default_rng(1).permutation(400).reshape(20, 20)
    got = curves(image, levels=4, level_rule="rank")
    # fractions .125, .375, .625, .875 of 400 distinct ranks
    assert got.levels.tolist() == [50, 150, 250, 350]
    shares = [(image >= level).mean() for level in got.levels]
    assert shares == [0.875, 0.625, 0.375, 0.125]
    ends = curves(image, levels=[0.0, 1.0], level_rule="rank")
    assert ends.levels.tolist() == [0, 399]


@pytest.mark.parametrize("base", [2**53, -(2**53) - 5, 2**62])
@pytest.mark.parametrize("rule", ["standard", "rank"])
def test_integers_that_floats_would_round_are_refused(base, rule):
    image = (base + np.random.default_rng(2).permutation(64)).reshape(8, 8)
    with pytest.raises(ValueError, match=r"integers from .* beyond 2\*\*53 .*count_patterns"):
        curves(image, level_rule=rule)
    # what a mask hides does not count
    hidden = np.where(image == image.min(), 0, image)
    assert curves(image - base, mask=hidden != 0).valid_fraction < 1.0


def test_rank_positions_are_floor_of_p_n():
    # by hand, on 0..99: .29 * 100 is 28.999999999999996 in binary
    ranked = np.arange(100)
    fractions = np.array([0.0, 0.25, 0.29, 0.57, 0.58, 0.999, 1.0])
    assert order_statistics(ranked, fractions).tolist() == [0, 25, 29, 57, 58, 99, 99]


def test_fixed_levels_and_explicit_sequences():
    image = np.arange(30.0).reshape(5, 6)
    assert curves(image, levels=3, level_rule="fixed", level_range=(0, 10)).levels.tolist() == [
        0,
        5,
        10,
    ]
    # explicit levels are data units unless a rule is named
    assert curves(image, levels=[3, 7.5]).levels.tolist() == [3.0, 7.5]
    standard = curves(image, levels=[-1, 1], level_rule="standard").levels
    assert standard == pytest.approx([image.mean() - image.std(), image.mean() + image.std()])


@pytest.mark.parametrize("rule", ["standard", "rank"])
@pytest.mark.parametrize("dtype", ["uint8", "uint16", "int64", "float32", "float64"])
def test_curves_are_the_exact_counts_at_the_levels_they_show(rule, dtype):
    image = (np.random.default_rng(3).random((30, 31)) * 200).astype(dtype)
    got = curves(image, level_rule=rule, levels=7)
    distinct = np.unique(got.levels)
    expected = count_patterns(image, distinct)
    which = np.searchsorted(distinct, got.levels)
    assert np.array_equal(got.counts.table, expected.table[:, which])


@pytest.mark.parametrize("value", [0, 7, 255])
@pytest.mark.parametrize("dtype", ["bool", "uint8", "int64", "float32", "float64"])
def test_constant_images_have_the_documented_step(value, dtype):
    image = np.full((6, 7), value, dtype=dtype)
    got = curves(image, levels=5)
    assert got.area.tolist() == [1.0, 1.0, 1.0, 0.0, 0.0]  # v = -2.5, -1.25, 0 | 1.25, 2.5
    assert got.contour.tolist() == got.euler.tolist() == [0.0] * 5
    assert np.isfinite(got.levels).all()
    assert (np.diff(got.levels) >= 0).all()
    ranked = curves(image, levels=5, level_rule="rank")
    assert ranked.area.tolist() == [1.0] * 5
    assert ranked.contour.tolist() == ranked.euler.tolist() == [0.0] * 5


def test_a_constant_image_meets_fixed_levels_exactly():
    # 2**53 - 1 against levels half a unit around it: no tolerance on raw pixels
    image = np.full((5, 5), 2**53 - 1)
    levels = [2.0**53 - 2, 2.0**53 - 1, 2.0**53]
    assert curves(image, levels=levels).area.tolist() == [1.0, 1.0, 0.0]


@pytest.mark.parametrize(
    ("field", "scale"), [("slope", 0), ("slope", 2), ("curvature", 0), ("band", 1)]
)
def test_rounding_noise_is_not_taken_for_texture(field, scale):
    # slope and curvature of a plane are constant, up to rounding; so is the band of a constant
    y, x = np.mgrid[:40, :50]
    plane = 0.1 * y + 0.37 * x + 1e4
    image = plane if field in ("slope", "curvature") else np.full((40, 50), 1.1)
    if scale:  # away from the reflected borders a smoothed plane is a plane
        image = np.pad(image, 0)
    for rule in ("standard", "rank"):
        got = curves(image, field=field, scale=scale, level_rule=rule)
        if field == "slope" and scale:
            assert np.isfinite(got.contour).all()  # reflection bends the plane at the borders
        else:
            assert not got.contour.any()
            assert not got.euler.any()
            assert set(got.area) <= {0.0, 1.0}


def test_flat_fields_meet_fixed_levels_without_noise():
    y, x = np.mgrid[:30, :30]
    plane = 0.3 * y + 0.4 * x  # slope .5 everywhere
    got = curves(plane, field="slope", levels=[0.4, 0.5, 0.6])
    assert got.area.tolist() == [1.0, 1.0, 0.0]
    assert got.contour.tolist() == [0.0, 0.0, 0.0]


def test_one_odd_pixel_is_a_relief():
    image = np.full((8, 8), 5, dtype=np.uint8)
    image[3, 4] = 6
    got = curves(image, levels=[0.5], level_rule="standard")
    assert got.euler[0] == pytest.approx(1 / 49)  # one component in 7x7 windows
    assert got.area[0] == pytest.approx(1 / 49)


def test_ties_with_a_level_survive_gain_and_offset():
    # mean .5, deviation .5: the level at v = 1 is exactly the value 1 of half the pixels
    board = (np.indices((8, 8)).sum(axis=0) % 2).astype(float)
    wanted = curves(board, levels=[-1.0, 0.0, 1.0], level_rule="standard")
    assert wanted.area.tolist() == [1.0, 0.5, 0.5]
    for gain, offset in ((0.1, 0.3), (3.7, -11.1), (1e-6, 1.0), (1e5, 1e3)):
        got = curves(gain * board + offset, levels=[-1.0, 0.0, 1.0], level_rule="standard")
        assert np.array_equal(got.area, wanted.area)
        assert np.array_equal(got.contour, wanted.contour)


def test_pooled_levels_are_observed_values():
    # by hand: sorted pool 1 2 3 4, positions floor(4 p), at most 3
    pool = [np.array([3.0, 1.0]), np.array([2.0, 4.0])]
    assert pooled_levels(pool, np.array([0.0, 0.25, 0.49, 0.5, 1.0])).tolist() == [1, 2, 2, 3, 4]


@pytest.mark.parametrize("rule", ["fixed", "standard", "rank"])
@pytest.mark.parametrize("value", [0.7, 200.0, 255.0])
def test_plateaus_of_smoothed_fields_fall_on_one_side_of_a_level(rule, value):
    # far from the noise a plateau keeps its value up to rounding, which must not decide
    areas = set()
    for seed in range(8):
        image = value * np.random.default_rng(seed).random((64, 64))
        image[20:] = value
        if rule == "fixed":
            got = curves(image, levels=[value], field="smooth", scale=1.0)
        else:
            levels = [0.9] if rule == "rank" else [0.0]
            got = curves(image, levels=levels, level_rule=rule, field="smooth", scale=1.0)
        areas.add(bool(got.area[0] > 0.55))
    assert areas == {True}


def test_levels_of_derived_fields_are_shown_as_given():
    image = 1e4 + np.random.default_rng(5).random((20, 31))
    levels = [1e4 + 0.1, 1e4 + 0.45, 1e4 + 0.7]
    left, right = (
        curves(part, levels=levels, field="smooth", scale=1)
        for part in (image[:, :16], image[:, 15:])
    )
    assert left.levels.tolist() == levels
    assert (left.counts + right.counts).windows == 19 * 30


@pytest.mark.parametrize(
    ("error", "match", "arguments"),
    [
        (ValueError, r"level_rule must be one of .*'standard'.*got 'mean'", (3, "mean")),
        (TypeError, r"levels must be an integer; got 2.5", (2.5, "standard")),
        (TypeError, r"levels must be an integer; got True", (True, "standard")),
        (ValueError, r"levels must be >= 1 and <= 65535; got 0", (0, "standard")),
        (ValueError, r"levels must be >= 1 and <= 65535; got 65536", (65536, "rank")),
        (ValueError, r'"fixed" needs level_range', (3, "fixed")),
        (
            ValueError,
            r"too narrow for 10 distinct levels",
            (10, "fixed", (1.0, np.nextafter(1.0, 2.0))),
        ),
        (TypeError, r"levels must be a sequence of numbers; got None", (None, "fixed", (0, 1))),
        (TypeError, r"levels must be a sequence of numbers; got \{1, 2\}", ({1, 2}, "fixed")),
        (ValueError, r"one-dimensional; it is ragged", ([1, [2, 3]], "fixed")),
        (ValueError, r"levels holds masked entries", (np.ma.array([1, 2], mask=[0, 1]), "fixed")),
        (ValueError, r"integers beyond 64 bit", ([2**64], "fixed")),
        (ValueError, r"level_range must ascend; got \(2.0, 1.0\)", (3, "fixed", (2, 1))),
        (ValueError, r"level_range must be two numbers", (3, "fixed", (1, 2, 3))),
        (ValueError, r"level_range\[1\] must be a finite", (3, "fixed", (1, np.inf))),
        (ValueError, r"fractions from 0 to 1; got \(0.0, 2.0\)", (3, "rank", (0, 2))),
        (ValueError, r"fractions of the pixels, from 0 to 1", ([0.5, 1.5], "rank")),
        (
            ValueError,
            r"level_range=\(0, 1\) has no meaning beside explicit levels",
            ([0.5], "standard", (0, 1)),
        ),
        (ValueError, r"strictly ascending", ([1, 1], "fixed")),
        (ValueError, r"levels\[0\] is nan", ([np.nan], "fixed")),
    ],
)
def test_bad_levels_are_named(error, match, arguments):
    with pytest.raises(error, match=match):
        level_values(*arguments)

"""The oracles check themselves: against each other, other libraries, and simulation.

Rank of every expected value, best first: by hand, law, published, simulated (fixed local seed).
"""

import ast
import itertools
import math
from fractions import Fraction
from pathlib import Path

import naive
import numpy as np
import pytest
import theory_oracles as theory
from hypothesis import given, settings
from hypothesis import strategies as st
from hypothesis.extra import numpy as st_numpy
from scipy import ndimage
from scipy.integrate import quad
from scipy.special import ndtr, owens_t
from skimage.measure import euler_number, perimeter_crofton

SQRT2 = math.sqrt(2)

binary_images = st_numpy.arrays(
    bool, st.tuples(st.integers(1, 9), st.integers(1, 9)), elements=st.booleans()
)


def random_binary_images(number, seed):
    """Random images of many sizes and foreground fractions."""
    rng = np.random.default_rng(seed)
    for _ in range(number):
        shape = rng.integers(1, 16, size=2)
        yield rng.random(shape) < rng.random()


def class_vector(image, valid=None, framed=False):
    """Class counts of a boolean image as one dict of ints."""
    counts = naive.window_classes(image, [1], valid, framed)
    return {name: values[0] for name, values in counts.items()}


def crossing_vector(image, valid=None, framed=False):
    """Crossing counts of a boolean image as one dict of ints."""
    counts = naive.directed_crossings(image, [1], valid, framed)
    return {name: values[0] for name, values in counts.items()}


def four_chi(q):
    """4 chi4 and 4 chi8 from class counts (Gray 1971)."""
    return q["q1"] - q["q3"] + 2 * q["qd"], q["q1"] - q["q3"] - 2 * q["qd"]


def contour2(t):
    """Two-direction contour length at unit pitch."""
    return math.pi / 4 * (t["2h"] + t["2v"]) / 2


def contour4(t):
    """Four-direction contour length at unit pitch."""
    return math.pi / 8 * ((t["2h"] + t["2v"]) / 2 + (t["d"] + t["a"]) / SQRT2)


def z_score(sample, expected):
    """Difference of mean and expectation, in standard errors of the mean."""
    sample = np.asarray(sample, dtype=float)
    return (sample.mean() - expected) / (sample.std(ddof=1) / math.sqrt(len(sample)))


# Independence -------------------------------------------------------------------------------


@pytest.mark.parametrize("name", ["naive.py", "theory_oracles.py"])
def test_oracles_import_nothing_from_the_package(name):
    tree = ast.parse((Path(__file__).parent / name).read_text(encoding="utf-8"))
    roots = set()
    for node in ast.walk(tree):
        if isinstance(node, ast.Import):
            roots |= {alias.name.split(".")[0] for alias in node.names}
        elif isinstance(node, ast.ImportFrom):
            assert node.level == 0
            roots.add(node.module.split(".")[0])
    assert "numpy" in roots
    assert roots <= {"numpy", "scipy", "math", "fractions", "collections", "typing"}


# Foreground ---------------------------------------------------------------------------------


@pytest.mark.parametrize(
    ("image", "level", "expected"),
    [
        # 2^53 + 1 is not a float64: a float comparison would call it equal to 2^53
        (np.array([[2**53, 2**53 + 1]], dtype=np.int64), 2**53 + 1, [[False, True]]),
        (np.array([[2**53, 2**53 + 1]], dtype=np.int64), float(2**53), [[True, True]]),
        (np.array([[2**64 - 1, 0]], dtype=np.uint64), 2**64, [[False, False]]),
        (np.array([[2**64 - 1, 0]], dtype=np.uint64), float(2**64), [[False, False]]),
        (np.array([[2**64 - 1, 0]], dtype=np.uint64), -1, [[True, True]]),
        (np.array([[0, 255]], dtype=np.uint8), 254.5, [[False, True]]),
        (np.array([[0, 255]], dtype=np.uint8), 256, [[False, False]]),
        (np.array([[-128, 127]], dtype=np.int8), -128, [[True, True]]),
        # the float32 nearest to 0.1 is above the float64 nearest to 0.1, which is above 1/10
        (np.array([[0.1]], dtype=np.float32), 0.1, [[True]]),
        (np.array([[0.1]], dtype=np.float64), np.float32(0.1), [[False]]),
        (np.array([[0.1]], dtype=np.float64), Fraction(1, 10), [[True]]),
        (np.array([[0.1]], dtype=np.float16), 0.1, [[False]]),
        (np.array([[np.nan, np.inf, -np.inf]]), 0, [[False, True, False]]),
        (np.array([[np.nan, np.inf, -np.inf]]), -np.inf, [[False, True, True]]),
        (np.array([[np.nan, np.inf, -np.inf]]), np.inf, [[False, True, False]]),
        (np.array([[-0.0, 0.0]]), 0, [[True, True]]),
        (np.array([[False, True]]), 1, [[False, True]]),
        (np.array([[False, True]]), 0.5, [[False, True]]),
    ],
)
def test_foreground_compares_exactly(image, level, expected):
    assert naive.foreground(image, level).tolist() == expected


def test_foreground_respects_the_mask():
    image = np.array([[1, 2], [3, np.nan]])
    valid = np.array([[True, False], [True, True]])
    assert naive.foreground(image, 1, valid).tolist() == [[True, False], [True, False]]
    assert naive.valid_pixels(image, valid).tolist() == [[True, False], [True, False]]


def test_foreground_refuses_what_it_cannot_compare():
    with pytest.raises(ValueError, match="must not be NaN"):
        naive.foreground(np.zeros((2, 2)), math.nan)
    with pytest.raises(TypeError, match="no exact Python value"):
        naive.foreground(np.zeros((2, 2), dtype=complex), 0)
    with pytest.raises(ValueError, match="the mask has shape"):
        naive.foreground(np.zeros((2, 2)), 0, np.ones((2, 3), dtype=bool))


# Windows ------------------------------------------------------------------------------------


def test_windows_by_hand():
    image = np.array([[5, 1, 0], [2, 4, 3]])
    # windows: 5 1 / 2 4 and 1 0 / 4 3
    assert naive.window_classes(image, [0, 1, 2, 3, 4, 5, 6]) == {
        "q0": [0, 0, 0, 0, 0, 1, 2],
        "q1": [0, 0, 0, 0, 1, 1, 0],
        "q2": [0, 0, 1, 1, 0, 0, 0],
        "qd": [0, 0, 0, 1, 1, 0, 0],
        "q3": [0, 1, 1, 0, 0, 0, 0],
        "q4": [2, 1, 0, 0, 0, 0, 0],
    }
    # at level 2 the foreground is 1 0 0 / 1 1 1
    assert naive.directed_crossings(image, [2]) == {"2h": [1], "2v": [3], "d": [1], "a": [2]}
    assert naive.directed_crossings(image, [4]) == {"2h": [3], "2v": [3], "d": [0], "a": [1]}


def test_one_pixel_framed_by_hand():
    one = np.array([[True]])
    assert class_vector(one, framed=True) == {
        "q0": 0, "q1": 4, "q2": 0, "qd": 0, "q3": 0, "q4": 0,
    }  # fmt: skip
    assert crossing_vector(one, framed=True) == {"2h": 4, "2v": 4, "d": 2, "a": 2}
    assert class_vector(one) == dict.fromkeys(naive.CLASS_NAMES, 0)


def test_directions_are_told_apart():
    rows = np.arange(5)[:, None] + np.zeros((1, 5), dtype=int)
    diagonal = np.arange(5)[:, None] - np.arange(5)[None, :]  # constant from a to d
    assert crossing_vector(rows >= 2) == {"2h": 0, "2v": 8, "d": 4, "a": 4}
    assert crossing_vector(rows.T >= 2) == {"2h": 8, "2v": 0, "d": 4, "a": 4}
    assert crossing_vector(diagonal >= 0)["d"] == 0
    assert crossing_vector(diagonal >= 0)["a"] > 0
    assert crossing_vector((diagonal >= 0)[:, ::-1])["a"] == 0


@pytest.mark.parametrize("missing", ["mask", "nan"])
def test_missing_pixels_remove_the_windows_they_touch(missing):
    rng = np.random.default_rng(1)
    image = rng.normal(size=(6, 7))
    valid = None
    if missing == "mask":
        valid = np.ones((6, 7), dtype=bool)
        valid[2, 3] = False
    else:
        image[2, 3] = np.nan
    present = naive.valid_pixels(image, valid)
    assert naive.valid_windows(present) == 30 - 4
    assert naive.valid_windows(present, framed=True) == 56 - 4
    for framed, number in ((False, 26), (True, 52)):
        counts = naive.window_classes(image, [-0.5, 0, 0.5], valid, framed)
        assert [sum(values) for values in zip(*counts.values(), strict=True)] == [number] * 3
    # the windows left are those of the parts above, below, left and right of the hole
    whole = naive.window_classes(image, [0.1], valid)
    parts = [image[:2], image[3:], image[1:4, :3], image[1:4, 4:]]
    for name in naive.CLASS_NAMES:
        assert whole[name][0] == sum(naive.window_classes(p, [0.1])[name][0] for p in parts)


def test_the_frame_is_valid_background_at_every_level():
    image = np.full((2, 3), -np.inf)
    counts = naive.window_classes(image, [-np.inf], framed=True)
    assert {name: values[0] for name, values in counts.items()} == {
        "q0": 0, "q1": 4, "q2": 6, "qd": 0, "q3": 0, "q4": 2,
    }  # fmt: skip


def test_counts_are_python_integers():
    image = np.random.default_rng(2).integers(0, 9, size=(5, 5)).astype(np.uint8)
    counts = naive.window_classes(image, [3]) | naive.directed_crossings(image, [3])
    assert all(type(value) is int for values in counts.values() for value in values)
    assert type(naive.valid_windows(image > 3)) is int


# Class identities (Gray 1971; Duda, in Pratt, Digital Image Processing; both from memory) ------


@pytest.mark.parametrize("pattern", list(itertools.product([False, True], repeat=4)))
def test_class_identities_on_each_of_the_16_windows(pattern):
    image = np.array(pattern).reshape(2, 2)
    q = class_vector(image)
    t = crossing_vector(image)
    area4 = q["q1"] + 2 * q["q2"] + 2 * q["qd"] + 3 * q["q3"] + 4 * q["q4"]
    assert area4 == sum(pattern)
    assert t["2h"] + t["2v"] == 2 * (q["q1"] + q["q2"] + q["q3"] + 2 * q["qd"])
    assert t["d"] + t["a"] == q["q1"] + 2 * q["q2"] + q["q3"]
    duda_area = q["q1"] / 4 + q["q2"] / 2 + 7 * q["q3"] / 8 + q["q4"] + 3 * q["qd"] / 4
    assert duda_area >= area4 / 4
    duda = q["q2"] + (q["q1"] + q["q3"] + 2 * q["qd"]) / SQRT2
    via_duda = math.pi * (1 + SQRT2) / 8 * (duda - (2 - SQRT2) * q["qd"])
    assert contour4(t) == pytest.approx(via_duda, rel=1e-14, abs=1e-14)
    # the same Euler numbers from numbers of pixels, pairs and blocks (all four times)
    a, b, c, d = pattern
    pairs_and = (a and b) + (c and d) + (a and c) + (b and d)
    pairs_or = (a or b) + (c or d) + (a or c) + (b or d)
    assert four_chi(q)[0] == sum(pattern) - 2 * pairs_and + 4 * all(pattern)
    assert four_chi(q)[1] == 4 * any(pattern) - 2 * pairs_or + sum(pattern)
    # complement duality, per window: chi4(X) = -chi8(complement)
    other = class_vector(~image)
    assert four_chi(q)[0] == -four_chi(other)[1]
    assert four_chi(q)[1] == -four_chi(other)[0]
    assert t == crossing_vector(~image)


# Euler numbers ------------------------------------------------------------------------------


EULER_BY_HAND = [
    ([[0]], 0, 0),
    ([[1]], 1, 1),
    ([[1, 0], [0, 1]], 2, 1),
    ([[0, 1], [1, 0]], 2, 1),
    ([[1, 1, 1], [1, 0, 1], [1, 1, 1]], 0, 0),
    ([[0, 1, 0], [1, 0, 1], [0, 1, 0]], 4, 0),
    ([[1, 1, 1, 1], [1, 0, 1, 1], [1, 1, 0, 1], [1, 1, 1, 1]], 0, -1),
]


@pytest.mark.parametrize(("image", "chi4", "chi8"), EULER_BY_HAND)
def test_euler_by_hand(image, chi4, chi8):
    image = np.array(image, dtype=bool)
    for function in (naive.euler_by_definition, naive.components_minus_holes):
        assert function(image, 4) == chi4
        assert function(image, 8) == chi8
    assert four_chi(class_vector(image, framed=True)) == (4 * chi4, 4 * chi8)


def test_euler_agrees_five_ways_on_random_images():
    seen = set()
    for image in random_binary_images(400, seed=3):
        padded = np.pad(image, 1)
        chi4, remainder4 = divmod(four_chi(class_vector(image, framed=True))[0], 4)
        chi8, remainder8 = divmod(four_chi(class_vector(image, framed=True))[1], 4)
        assert remainder4 == remainder8 == 0
        assert chi4 == naive.euler_by_definition(image, 4)
        assert chi8 == naive.euler_by_definition(image, 8)
        assert chi4 == naive.components_minus_holes(image, 4)
        assert chi8 == naive.components_minus_holes(image, 8)
        assert chi4 == euler_number(padded, connectivity=1)
        assert chi8 == euler_number(padded, connectivity=2)
        assert type(naive.euler_by_definition(image, 4)) is int
        assert type(naive.components_minus_holes(image, 8)) is int
        seen.add((chi4, chi8))
    assert len(seen) > 50


@settings(max_examples=100, deadline=None, derandomize=True, database=None)
@given(binary_images)
def test_euler_definitions_agree_on_any_small_image(image):
    chi4, chi8 = four_chi(class_vector(image, framed=True))
    assert chi4 == 4 * naive.euler_by_definition(image, 4)
    assert chi4 == 4 * naive.components_minus_holes(image, 4)
    assert chi8 == 4 * naive.euler_by_definition(image, 8)
    assert chi8 == 4 * naive.components_minus_holes(image, 8)


@pytest.mark.parametrize("function", [naive.euler_by_definition, naive.components_minus_holes])
def test_euler_refuses_other_connectivities(function):
    with pytest.raises(ValueError, match="connectivity must be 4 or 8, not 6"):
        function(np.ones((2, 2), dtype=bool), 6)


# Contour ------------------------------------------------------------------------------------


def test_contour_equals_scikit_image_on_random_images():
    largest = 0.0
    for image in random_binary_images(200, seed=4):
        padded = np.pad(image, 1).astype(np.uint8)
        t = crossing_vector(image, framed=True)
        two = perimeter_crofton(padded, directions=2)
        four = perimeter_crofton(padded, directions=4)
        assert contour2(t) == pytest.approx(two, rel=1e-12, abs=1e-12)
        assert contour4(t) == pytest.approx(four, rel=1e-12, abs=1e-12)
        largest = max(largest, four)
    assert largest > 50


@pytest.mark.parametrize("n", [1, 2, 3, 7])
def test_framed_square(n):
    square = np.ones((n, n), dtype=bool)
    q = class_vector(square, framed=True)
    t = crossing_vector(square, framed=True)
    expected = theory.framed_square(n)
    assert t == {"2h": 4 * n, "2v": 4 * n, "d": 4 * n - 2, "a": 4 * n - 2}
    assert q["q1"] / 4 + q["q2"] / 2 + q["q4"] == expected["area"]
    assert q["q1"] + q["q2"] == expected["edges"]
    assert contour2(t) == pytest.approx(expected["L2"], rel=1e-14)
    assert contour4(t) == pytest.approx(expected["L4"], rel=1e-14)
    assert four_chi(q) == (4 * expected["chi4"], 4 * expected["chi8"])


@pytest.mark.parametrize(("dx", "dy"), [(1, 1), (2, 1), (1, 3), (0.01, 0.013)])
def test_rectangular_weights_are_shares_of_angle(dx, dy):
    weights = theory.rectangular_weights(dx, dy)
    assert math.fsum(w.weight for w in weights.values()) == pytest.approx(1, rel=1e-14)
    # brute force: give each of many angles to the nearest direction, modulo half a turn
    number = 200_000
    angles = (np.arange(number) + 0.5) / number * math.pi
    pairs = {"h": (dx, 0), "v": (0, dy), "d": (dx, dy), "a": (-dx, dy)}
    distance = []
    for x, y in pairs.values():
        gap = np.abs(angles - math.atan2(y, x)) % math.pi
        distance.append(np.minimum(gap, math.pi - gap))
    nearest = np.argmin(distance, axis=0)
    for k, (name, (x, y)) in enumerate(pairs.items()):
        assert weights[name].weight == pytest.approx(np.mean(nearest == k), abs=1e-4)
        assert weights[name].angle == pytest.approx(math.atan2(y, x), rel=1e-14)
        assert weights[name].spacing * math.hypot(x, y) == pytest.approx(dx * dy, rel=1e-14)


def test_square_weights_reduce_to_the_unit_formula():
    weights = theory.rectangular_weights(1, 1)
    per_crossing = {name: math.pi / 2 * w.weight * w.spacing for name, w in weights.items()}
    assert per_crossing == pytest.approx(
        {"h": math.pi / 8, "v": math.pi / 8, "d": math.pi / 8 / SQRT2, "a": math.pi / 8 / SQRT2}
    )


def test_straight_edge_ratio_range():
    angles = np.linspace(0, math.pi, 20_001)
    # ranges measured by simulation of digitised half planes, in percent
    for (dx, dy), low, high in (((1, 1), -5.2, 2.6), ((2, 1), -9.5, 8.6), ((1, 2), -9.5, 8.6)):
        error = 100 * (theory.straight_edge_ratio(angles, dx, dy) - 1)
        assert error.min() == pytest.approx(low, abs=0.05)
        assert error.max() == pytest.approx(high, abs=0.05)
        assert error.mean() == pytest.approx(0, abs=1e-3)  # Cauchy-Crofton: right on average


@pytest.mark.parametrize("degrees", [0, 10, 30, 45, 60, 90, 120, 160])
@pytest.mark.parametrize(("dx", "dy"), [(1, 1), (2, 1)])
def test_half_plane_contour(degrees, dx, dy):
    angle = math.radians(degrees)
    # pixel centres span a square of side 120; the edge passes through its middle
    rows, cols = round(120 / dy) + 1, round(120 / dx) + 1
    offset = 60 * (math.cos(angle) + math.sin(angle)) + 0.123
    t = crossing_vector(theory.half_plane(angle, offset, (rows, cols), dy, dx))
    w = theory.rectangular_weights(dx, dy)
    number = {"h": t["2h"] / 2, "v": t["2v"] / 2, "d": t["d"], "a": t["a"]}
    measured = math.pi / 2 * sum(w[k].weight * w[k].spacing * number[k] for k in w)
    true = 120 / max(abs(math.cos(angle)), abs(math.sin(angle)))
    ratio = theory.straight_edge_ratio(angle, dx, dy)
    assert measured == pytest.approx(true * ratio, rel=0.025)  # end effects: about 2 pixels


def test_half_plane_side():
    image = theory.half_plane(0.0, 2.0, (2, 5))
    assert image.tolist() == [[True, True, True, False, False]] * 2
    image = theory.half_plane(math.pi / 2, 2.0, (3, 2), dy=1.5)
    assert image.tolist() == [[True, True], [True, True], [False, False]]


def test_digitised_disc_by_hand():
    image = theory.digitise_disc(1, (1, 2), (3, 5))
    assert image.astype(int).tolist() == [[0, 0, 1, 0, 0], [0, 1, 1, 1, 0], [0, 0, 1, 0, 0]]
    image = theory.digitise_disc(2, (2, 4), (3, 5), dy=2, dx=1)
    assert image.astype(int).tolist() == [[0, 0, 0, 0, 1], [0, 0, 1, 1, 1], [0, 0, 0, 0, 1]]


@pytest.mark.parametrize(("dx", "dy"), [(1.0, 1.0), (2.0, 1.0), (0.5, 0.8)])
@pytest.mark.parametrize("inner", [None, 6.0])
def test_discs_and_annuli(dx, dy, inner):
    rng = np.random.default_rng(6)
    outer = 15.0
    w = theory.rectangular_weights(dx, dy)
    shape = (round(36 / dy), round(36 / dx))
    expected = theory.disc(outer) if inner is None else theory.annulus(outer, inner)
    areas, contours = [], []
    for _ in range(4):
        centre = tuple(18 + rng.uniform(-1, 1, size=2))
        if inner is None:
            image = theory.digitise_disc(outer, centre, shape, dy, dx)
        else:
            image = theory.digitise_annulus(outer, inner, centre, shape, dy, dx)
        assert image.sum() == image[1:-1, 1:-1].sum()  # the border is background
        for connectivity in (4, 8):
            assert naive.euler_by_definition(image, connectivity) == expected.euler
        t = crossing_vector(image)
        number = {"h": t["2h"] / 2, "v": t["2v"] / 2, "d": t["d"], "a": t["a"]}
        contours.append(math.pi / 2 * sum(w[k].weight * w[k].spacing * number[k] for k in w))
        areas.append(image.sum() * dx * dy)
    assert np.mean(areas) == pytest.approx(expected.area, rel=0.01)
    assert np.mean(contours) == pytest.approx(expected.contour, rel=0.015)


# Smoothing ----------------------------------------------------------------------------------


@pytest.mark.parametrize("shape", [(9, 13), (1, 6), (3, 2), (1, 1)])
@pytest.mark.parametrize("sigmas", [(0, 0), (1, 1), (0.4, 2.3), (3, 0), (0.1, 0.125)])
def test_gaussian_smooth_equals_scipy(shape, sigmas):
    image = np.random.default_rng(7).normal(size=shape)
    expected = ndimage.gaussian_filter(image, sigmas, mode="reflect", truncate=4.0)
    np.testing.assert_allclose(
        naive.gaussian_smooth(image, *sigmas), expected, rtol=1e-12, atol=1e-13
    )


def test_reflection_by_hand():
    assert [naive.reflected(i, 3) for i in range(-7, 10)] == [
        0, 0, 1, 2, 2, 1, 0, 0, 1, 2, 2, 1, 0, 0, 1, 2, 2,
    ]  # fmt: skip


def test_gaussian_weights():
    assert naive.gaussian_weights(0) == [1.0]
    weights = naive.gaussian_weights(1)
    assert len(weights) == 9
    assert weights == weights[::-1]
    assert math.fsum(weights) == pytest.approx(1, rel=1e-15)
    assert weights[5] / weights[4] == pytest.approx(math.exp(-1 / 2), rel=1e-14)


def test_normalised_convolution():
    rng = np.random.default_rng(8)
    image = rng.normal(size=(10, 12))
    valid = rng.random((10, 12)) > 0.3
    got = naive.gaussian_smooth(image, 1.2, 0.8, valid)
    options = {"sigma": (1.2, 0.8), "mode": "reflect", "truncate": 4.0}
    top = ndimage.gaussian_filter(np.where(valid, image, 0), **options)
    bottom = ndimage.gaussian_filter(valid.astype(float), **options)
    np.testing.assert_allclose(got, top / bottom, rtol=1e-11, atol=1e-12)
    # NaN is the same as a mask, and masked values do not matter
    np.testing.assert_array_equal(
        naive.gaussian_smooth(np.where(valid, image, np.nan), 1.2, 0.8), got
    )
    np.testing.assert_array_equal(
        naive.gaussian_smooth(np.where(valid, image, 1e9), 1.2, 0.8, valid), got
    )
    # a constant stays that constant (law)
    np.testing.assert_allclose(
        naive.gaussian_smooth(np.full((10, 12), 3.5), 1.2, 0.8, valid), 3.5, rtol=1e-13
    )
    # scale zero: valid pixels unchanged, missing ones stay missing
    np.testing.assert_array_equal(
        naive.gaussian_smooth(image, 0, 0, valid), np.where(valid, image, np.nan)
    )


def test_smoothing_out_of_reach_of_valid_pixels_is_missing():
    image = np.full((1, 20), np.nan)
    image[0, 0] = 2.0
    got = naive.gaussian_smooth(image, 1, 1)
    assert np.isfinite(got[0]).tolist() == [True] * 5 + [False] * 15
    np.testing.assert_allclose(got[0, :5], 2.0, rtol=1e-14)


# Gaussian fields ----------------------------------------------------------------------------


def block_probability(u, length):
    """P(all four pixels of a window >= u) by one plain integral, another road than Plackett's.

    Given the diagonal pixels a and d, the pixels b and c depend on their sum s alone. s and the
    difference are independent, and both a, d >= u where |difference| <= s - 2u.
    """
    rho1 = math.exp(-1 / (2 * length**2))
    rho2 = math.exp(-1 / length**2)
    sd_sum, sd_difference = math.sqrt(2 * (1 + rho2)), math.sqrt(2 * (1 - rho2))
    # b and c given s: mean rho1 s/(1 + rho2), variance 1 - k, covariance rho2 - k
    k = 2 * rho1**2 / (1 + rho2)
    r = (rho2 - k) / (1 - k)

    def integrand(s):
        density = math.exp(-(s**2) / (2 * sd_sum**2)) / (sd_sum * math.sqrt(2 * math.pi))
        both_diagonal = math.erf((s - 2 * u) / sd_difference / SQRT2)
        h = (u - rho1 * s / (1 + rho2)) / math.sqrt(1 - k)
        both_other = ndtr(-h) - 2 * owens_t(h, math.sqrt((1 - r) / (1 + r)))
        return density * both_diagonal * both_other

    # the integrand rises from 0 within a few sd_difference: integrate that part on its own
    low, middle, high = 2 * u, 2 * u + 10 * sd_difference, max(2 * u, 0) + 20 * sd_sum
    options = {"epsabs": 1e-13, "epsrel": 1e-11, "limit": 500}
    return quad(integrand, low, middle, **options)[0] + quad(integrand, middle, high, **options)[0]


@pytest.mark.parametrize("length", [0.5, 1, 2, 3, 6, 12, 30])
def test_lattice_euler_equals_a_direct_integral(length):
    u = np.array([-3, -1.5, -0.4, 0, 0.4, 1, 1.7, 3.5])
    a, _, _ = theory.lattice_decorrelation(length)
    pixel = ndtr(-u)
    pair = pixel - theory.pair_crossing(u, a) / 2
    block = np.array([block_probability(value, length) for value in u])
    got = theory.gaussian_lattice(u, length)
    np.testing.assert_allclose(got.euler4, pixel - 2 * pair + block, rtol=0, atol=1e-14)
    # chi8 from unions instead of intersections: P(any of 4) - 2 P(any of 2) + P(pixel)
    any_of_four = 1 - np.array([block_probability(-value, length) for value in u])
    any_of_two = 2 * pixel - pair
    expected8 = any_of_four - 2 * any_of_two + pixel
    np.testing.assert_allclose(got.euler8, expected8, rtol=0, atol=1e-14)


@pytest.mark.parametrize("length", [0.8, 1.5, 4])
def test_lattice_expectations_by_monte_carlo(length):
    rng = np.random.default_rng(9)
    number = 400_000
    squared = np.array([[0, 1, 1, 2], [1, 0, 2, 1], [1, 2, 0, 1], [2, 1, 1, 0]])
    root = np.linalg.cholesky(np.exp(-squared / (2 * length**2)))
    samples = root @ rng.standard_normal((4, number))
    worst = 0.0
    for u in (-1.5, -0.5, 0.0, 0.8, 2.0):
        a, b, c, d = (samples >= u).astype(np.int8)
        pixels = a + b + c + d
        q1, q3, qd = pixels == 1, pixels == 3, (pixels == 2) & (a == d)
        odd = q1.astype(np.int8) - q3.astype(np.int8)
        sides = ((a != b).astype(float) + (c != d) + (a != c) + (b != d)) / 2
        diagonals = (a != d).astype(float) + (b != c)
        expected = theory.gaussian_lattice(u, length)
        scores = [
            z_score(pixels / 4, expected.area),
            z_score(math.pi / 8 * (sides + diagonals / SQRT2), expected.contour),
            z_score((odd + 2 * qd) / 4, expected.euler4),
            z_score((odd - 2 * qd) / 4, expected.euler8),
            z_score(odd / 4, expected.euler),
        ]
        worst = max(worst, *map(abs, scores))
    assert worst < 4


def test_lattice_symmetries():
    u = np.linspace(-4, 4, 41)
    for length in (1, 5):
        here, there = theory.gaussian_lattice(u, length), theory.gaussian_lattice(-u, length)
        np.testing.assert_allclose(here.area + there.area, 1, rtol=1e-14)
        np.testing.assert_allclose(here.contour, there.contour, rtol=1e-13)
        np.testing.assert_allclose(here.euler8, -there.euler4, rtol=1e-13)
        np.testing.assert_allclose(here.euler, -there.euler, rtol=1e-9, atol=1e-16)
        assert here.euler[20] == pytest.approx(0, abs=1e-16)


@pytest.mark.parametrize(
    ("length", "contour", "euler", "euler4"),
    [(3, -1.38, 1.78, 2.46), (6, -0.35, 0.44, 0.62), (12, -0.09, 0.11, 0.16)],
)
def test_lattice_bias_against_the_continuum(length, contour, euler, euler4):
    # largest difference in percent of the peak of the continuum curve (frozen: computed values)
    u = np.linspace(-4, 4, 401)
    lattice = theory.gaussian_lattice(u, length)
    smooth = theory.gaussian_continuum(u, 1, 1 / length**2)

    def largest(difference, peak):
        return 100 * difference[np.argmax(np.abs(difference))] / np.max(np.abs(peak))

    assert largest(lattice.contour - smooth.contour, smooth.contour) == pytest.approx(
        contour, abs=0.006
    )
    # an odd function of u: its sign depends on the side of the maximum
    assert abs(largest(lattice.euler - smooth.euler, smooth.euler)) == pytest.approx(
        euler, abs=0.006
    )
    assert largest(lattice.euler4 - smooth.euler, smooth.euler) == pytest.approx(euler4, abs=0.006)
    np.testing.assert_allclose(lattice.area, smooth.area, rtol=1e-15)


def test_lattice_tends_to_white_noise_and_to_the_continuum():
    u = np.linspace(-2.5, 2.5, 11)
    lattice = theory.gaussian_lattice(u, 0.1)  # neighbour correlation exp(-50)
    noise = theory.white_noise(ndtr(-u))
    np.testing.assert_allclose(lattice.euler4, noise["chi4"], rtol=0, atol=1e-14)
    np.testing.assert_allclose(lattice.euler8, noise["chi8"], rtol=0, atol=1e-14)
    expected = math.pi / 8 * (2 * noise["h"] + 2 * noise["d"] / SQRT2)
    np.testing.assert_allclose(lattice.contour, expected, rtol=1e-13)
    # the bias falls with the square of the length
    for length in (20, 40):
        fine = theory.gaussian_lattice(u, length)
        smooth = theory.gaussian_continuum(u, 1, 1 / length**2)
        for got, limit in ((fine.contour, smooth.contour), (fine.euler, smooth.euler)):
            tolerance = 20 / length**2 * np.abs(limit).max()
            np.testing.assert_allclose(got, limit, rtol=0, atol=tolerance)


def test_continuum_laws():
    u = np.linspace(-3, 3, 13)
    unit = theory.gaussian_continuum(u, 1, 1)
    assert unit.area[6] == pytest.approx(0.5)
    assert unit.contour[6] == pytest.approx(0.5)  # by hand: sqrt(tau)/2 at u = 0
    np.testing.assert_allclose(unit.euler, -unit.euler[::-1], atol=1e-17)
    # peak of the Euler density at u = s: exp(-1/2)/(2 pi)^(3/2)
    assert theory.gaussian_continuum(1, 1, 1).euler == pytest.approx(0.0385108, rel=1e-5)
    # gain 3 on heights: levels and s times 3, tau times 9, curves unchanged
    gained = theory.gaussian_continuum(3 * u, 3, 9)
    for one, other in zip(unit, gained, strict=True):
        np.testing.assert_allclose(one, other, rtol=1e-13)
    # pitch 2: slopes halve, contour density 1/2, Euler density 1/4
    coarse = theory.gaussian_continuum(u, 1, 1 / 4)
    np.testing.assert_allclose(coarse.contour, unit.contour / 2, rtol=1e-14)
    np.testing.assert_allclose(coarse.euler, unit.euler / 4, rtol=1e-14)


# White noise --------------------------------------------------------------------------------


@pytest.mark.parametrize("p", [Fraction(0), Fraction(3, 10), Fraction(1, 2), Fraction(1)])
def test_white_noise_by_enumeration(p):
    # exact: all 16 windows, each with its probability, counted by the naive loops
    total = dict.fromkeys([*naive.CLASS_NAMES, *naive.CROSSING_NAMES], Fraction(0))
    for pattern in itertools.product([0, 1], repeat=4):
        image = np.array(pattern, dtype=bool).reshape(2, 2)
        probability = p ** sum(pattern) * (1 - p) ** (4 - sum(pattern))
        for name, value in (class_vector(image) | crossing_vector(image)).items():
            total[name] += probability * value
    expected = theory.white_noise(p)
    for name in naive.CLASS_NAMES:
        assert total[name] == expected[name]
    assert total["2h"] == 2 * expected["h"]
    assert total["2v"] == 2 * expected["v"]
    assert total["d"] == expected["d"]
    assert total["a"] == expected["a"]
    chi4, chi8 = four_chi(total)
    assert chi4 == 4 * expected["chi4"]
    assert chi8 == 4 * expected["chi8"]
    assert sum(expected[name] for name in naive.CLASS_NAMES) == 1


def test_white_noise_by_simulation():
    rng = np.random.default_rng(10)
    p, n, repeats = 0.3, 40, 60
    names = [*naive.CLASS_NAMES, "h", "v", "d", "a", "chi4", "chi8"]
    densities = {name: [] for name in names}
    for _ in range(repeats):
        image = rng.random((n, n)) < p
        q, t = class_vector(image), crossing_vector(image)
        chi4, chi8 = four_chi(q)
        values = q | {"h": t["2h"] / 2, "v": t["2v"] / 2, "d": t["d"], "a": t["a"]}
        values |= {"chi4": chi4 / 4, "chi8": chi8 / 4}
        for name in names:
            densities[name].append(values[name] / (n - 1) ** 2)
    expected = theory.white_noise(p)
    for name in names:
        assert abs(z_score(densities[name], expected[name])) < 4, name


def test_framed_totals_per_pixel_are_biased():
    # exact by hand: pixels p, pairs p^2, blocks p^4, on a framed 3 x 5 image
    p = Fraction(3, 10)
    inside = theory.white_noise(p)["chi4"]
    framed = (15 * p - (3 * 4 + 5 * 2) * p**2 + 2 * 4 * p**4) / 15
    assert float(inside) == pytest.approx(0.1281, rel=1e-12)
    assert float(framed) == pytest.approx(0.17232, rel=1e-12)
    sample = []
    rng = np.random.default_rng(11)
    for _ in range(2000):
        image = rng.random((3, 5)) < 0.3
        sample.append(naive.euler_by_definition(image, 4) / 15)
    assert abs(z_score(sample, float(framed))) < 4
    assert abs(z_score(sample, float(inside))) > 10


# Boolean model ------------------------------------------------------------------------------


def test_boolean_model_laws():
    dilute = theory.boolean_model(1e-9, 3.0, 7.0)
    assert dilute.area == pytest.approx(3e-9, rel=1e-6)
    assert dilute.contour == pytest.approx(7e-9, rel=1e-6)
    assert dilute.euler == pytest.approx(1e-9, rel=1e-6)
    # the method of densities takes the model back to its parameters
    lam, area, perimeter = 0.004, 120.0, 45.0
    model = theory.boolean_model(lam, area, perimeter)
    found = theory.boolean_intensity_corrected(model.euler, model.contour, model.area)
    assert found == pytest.approx(lam, rel=1e-12)
    # a bias b per concave corner, put in by hand, is taken out again
    corners = (1 - model.area) * (lam * perimeter) ** 2 / math.pi
    b = -0.013
    found = theory.boolean_intensity_corrected(
        model.euler + b * corners, model.contour, model.area, b
    )
    assert found == pytest.approx(lam, rel=1e-12)


def test_boolean_model_by_simulation():
    # discs of radius U(4, 12), 40 % covered; grains also from outside the image
    rng = np.random.default_rng(12)
    low, high, n, repeats = 4.0, 12.0, 120, 24
    mean_square = (low**2 + low * high + high**2) / 3
    grain_area, grain_perimeter = math.pi * mean_square, math.pi * (low + high)
    lam = -math.log(0.6) / grain_area
    areas, contours, eulers = [], [], []
    for _ in range(repeats):
        image = np.zeros((n, n), dtype=bool)
        side = n + 2 * high
        for _ in range(rng.poisson(lam * side**2)):
            centre = tuple(rng.uniform(-high, n + high, size=2))
            image |= theory.digitise_disc(rng.uniform(low, high), centre, (n, n))
        q, t = class_vector(image), crossing_vector(image)
        number = naive.valid_windows(np.ones((n, n), dtype=bool))
        areas.append(image.mean())
        contours.append(contour4(t) / number)
        eulers.append(four_chi(q)[0] / 4 / number)
    model = theory.boolean_model(lam, grain_area, grain_perimeter)
    assert model.area == pytest.approx(0.4, rel=1e-12)
    assert abs(z_score(areas, model.area)) < 4
    assert abs(z_score(contours, model.contour)) < 4
    # chi4 on the lattice: the model's value and the corner bias (simulated, not published)
    corners = (1 - model.area) * (lam * grain_perimeter) ** 2 / math.pi
    assert abs(z_score(eulers, model.euler - 0.013 * corners)) < 4
    found = theory.boolean_intensity_corrected(
        np.mean(eulers), np.mean(contours), np.mean(areas), -0.013
    )
    assert found == pytest.approx(lam, rel=0.1)

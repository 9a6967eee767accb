"""Functionals against first principles, published values and scikit-image."""

import itertools
import math

import numpy as np
import pytest
import theory_oracles as theory
from skimage import data, measure

from mfeat import MinkowskiCurves, PatternCounts, count_patterns
from mfeat.counts import STATISTICS
from mfeat.functionals import (
    AREA_WEIGHTS,
    CONTOUR_ESTIMATORS,
    EULER_WEIGHTS,
    anisotropy_of,
    area,
    contour,
    crofton_weights,
    crossings,
    euler,
)
from mfeat.surfaces import gaussian_field
from mfeat.transformer import full_curves

WINDOWS = list(itertools.product((0, 1), repeat=4))


def statistics(a, b, c, d):
    """The eight statistics of one binary window, as their definitions read."""
    found = {
        "pixel": a + b + c + d,
        "diagonal": a + d,
        "horizontal": max(a, b) + max(c, d),
        "vertical": max(a, c) + max(b, d),
        "falling": max(a, d),
        "rising": max(b, c),
        "largest": max(a, b, c, d),
        "smallest": min(a, b, c, d),
    }
    return np.array([found[name] for name in STATISTICS])


def window_class(a, b, c, d):
    number = a + b + c + d
    return "qd" if number == 2 and a == d else f"q{number}"


@pytest.mark.parametrize("window", WINDOWS)
def test_every_table_entry_from_first_principles(window):
    a, b, c, d = window
    stats = statistics(*window)
    kind = window_class(*window)
    # a pixel belongs to four windows
    assert stats @ AREA_WEIGHTS == (a + b + c + d) / 4
    # Euler: vertices - edges + faces, each shared by the windows around it
    pairs = [(a, b), (c, d), (a, c), (b, d)]
    both = sum(p and q for p, q in pairs)
    either = sum(p or q for p, q in pairs)
    assert stats @ EULER_WEIGHTS[4] == (a + b + c + d) / 4 - both / 2 + (a and b and c and d)
    assert stats @ EULER_WEIGHTS[8] == (a or b or c or d) - either / 2 + (a + b + c + d) / 4
    # Gray (1971): quarter turns of the boundary
    quarter = {"q0": 0, "q1": 1, "q2": 0, "qd": 0, "q3": -1, "q4": 0}[kind]
    diagonal = 2 * (kind == "qd")
    assert 4 * (stats @ EULER_WEIGHTS[4]) == quarter + diagonal
    assert 4 * (stats @ EULER_WEIGHTS[8]) == quarter - diagonal
    assert 4 * (stats @ EULER_WEIGHTS["mean"]) == quarter
    # Duda's contour, as given in Pratt, Digital Image Processing (1978), from memory; one window
    # alone is a 2x2 image
    step = {
        "q0": 0,
        "q1": math.sqrt(0.5),
        "q2": 1,
        "qd": math.sqrt(2),
        "q3": math.sqrt(0.5),
        "q4": 0,
    }[kind]
    counts = count_patterns(np.array([[a, b], [c, d]]), [1])
    assert contour(counts, estimator="duda")[0] == pytest.approx(step, abs=1e-15)
    assert {k: int(v[0]) for k, v in counts.classes().items() if v[0]} == {kind: 1}


def test_tables_are_symmetric_and_dual():
    for window in WINDOWS:
        a, b, c, d = window
        turned, mirrored = (c, a, d, b), (b, a, d, c)
        complement = tuple(1 - x for x in window)
        for weights in (AREA_WEIGHTS, *EULER_WEIGHTS.values()):
            value = statistics(*window) @ weights
            assert statistics(*turned) @ weights == pytest.approx(value, abs=1e-15)
            assert statistics(*mirrored) @ weights == pytest.approx(value, abs=1e-15)
        # chi4 of a set = - chi8 of its complement, window by window
        four = statistics(*window) @ EULER_WEIGHTS[4]
        assert four == -(statistics(*complement) @ EULER_WEIGHTS[8])


def count_one(image, **options):
    return count_patterns(image, [1], **{"edges": "framed"} | options)


def test_contours_equal_scikit_image():
    # measure.perimeter_crofton of framed images, 2 and 4 directions
    rng = np.random.default_rng(0)
    for _ in range(200):
        image = rng.random(rng.integers(2, 20, 2)) < rng.random()
        counts = count_one(image)
        for estimator, directions in (("crofton-2", 2), ("crofton-4", 4)):
            expected = measure.perimeter_crofton(np.pad(image, 1), directions=directions)
            assert contour(counts, estimator=estimator)[0] == pytest.approx(
                expected, abs=1e-12, rel=1e-13
            )


@pytest.mark.parametrize("n", [2, 3, 10, 31])
def test_squares(n):
    # formulas: L2 = pi n, L4 = (pi/2)(n + (2n-1)/sqrt2); pixel edges 4n; Duda: 4 corners of
    # 1/sqrt2 and 4 (n - 1) straight steps
    counts = count_one(np.ones((n, n), bool))
    assert contour(counts, estimator="crofton-2")[0] == pytest.approx(math.pi * n, rel=1e-14)
    assert contour(counts)[0] == pytest.approx(
        math.pi / 2 * (n + (2 * n - 1) / math.sqrt(2)), rel=1e-14
    )
    assert contour(counts, estimator="pixel-edge")[0] == 4 * n
    assert contour(counts, estimator="duda")[0] == pytest.approx(
        4 * (n - 1) + 4 / math.sqrt(2), rel=1e-14
    )
    assert area(counts)[0] == n * n
    assert [euler(counts, connectivity=c)[0] for c in (4, 8, "mean")] == [1, 1, 1]


def test_rectangular_pixels_scale_each_side():
    # a rectangle of 3 rows by 5 columns at pitch (0.5, 2): sides 1.5 and 10
    counts = count_one(np.ones((3, 5), bool), pitch=(0.5, 2.0))
    assert area(counts)[0] == 15.0
    assert contour(counts, estimator="pixel-edge")[0] == 2 * (1.5 + 10.0)
    assert euler(counts)[0] == 1.0
    with pytest.raises(ValueError, match=r'"duda" is defined for square pixels.*\(0.5, 2.0\)'):
        contour(counts, estimator="duda")


@pytest.mark.parametrize("pitch", [(1.0, 1.0), (2.0, 1.0), (0.3, 1.7)])
def test_crofton_weights_are_shares_of_the_half_circle(pitch):
    # the oracle derives the angle sectors on its own; sum of w_k = 1
    dy, dx = pitch
    expected = theory.rectangular_weights(dx=dx, dy=dy)
    names = {"horizontal": "h", "vertical": "v", "falling": "d", "rising": "a"}
    for name, length in crofton_weights(pitch, 4).items():
        wanted = expected[names[name]]
        assert length == pytest.approx(math.pi / 2 * wanted.weight * wanted.spacing, rel=1e-12)
    assert sum(w.weight for w in expected.values()) == pytest.approx(1.0)


@pytest.mark.parametrize(("dy", "dx", "bound"), [(1.0, 1.0, 0.004), (1.0, 2.0, 0.006)])
def test_discs_and_annuli(dy, dx, bound):
    # Steiner (1840): 2 pi R and 2 pi (R1 + R0), Euler 1 and 0; mean error over random centres.
    # formulas: discs R = 10 -.06 % [sd .57]; dx = 2, R = 20 -.04 % [.37]
    rng = np.random.default_rng(1)
    errors, ring_errors = [], []
    radius, inner = 20.0, 11.0
    shape = (int(48 / dy), int(48 / dx))
    for _ in range(40):
        centre = (23.0 + rng.random() * dy, 23.0 + rng.random() * dx)
        disc = count_one(theory.digitise_disc(radius, centre, shape, dy=dy, dx=dx), pitch=(dy, dx))
        ring = count_one(
            theory.digitise_annulus(radius, inner, centre, shape, dy=dy, dx=dx), pitch=(dy, dx)
        )
        assert euler(disc)[0] == 1
        assert euler(ring)[0] == 0
        errors.append(contour(disc)[0] / theory.disc(radius).contour - 1)
        ring_errors.append(contour(ring)[0] / theory.annulus(radius, inner).contour - 1)
        assert area(disc)[0] == pytest.approx(theory.disc(radius).area, rel=0.02)
    assert abs(np.mean(errors)) < bound
    assert abs(np.mean(ring_errors)) < bound
    assert max(np.abs(errors)) < 0.02


def test_straight_edges_stay_within_the_stated_bounds():
    # formulas section 3, over all angles: L4 -5.2..+2.6 %, pixel edges 0..+41.4 %,
    # L2 -21.5..+11.1 %, Duda 0..+8.2 %
    size = 200
    found = {name: [] for name in CONTOUR_ESTIMATORS}
    for angle in np.linspace(0, math.pi / 2, 31):
        edge = theory.half_plane(angle, 100 * (math.cos(angle) + math.sin(angle)), (size, size))
        counts = count_patterns(edge, [1])
        # length of the edge's chord inside the window area
        chord = (size - 1) / max(abs(math.cos(angle)), abs(math.sin(angle)))
        for name in CONTOUR_ESTIMATORS:
            found[name].append(contour(counts, "total", estimator=name)[0] / chord - 1)
    bounds = {
        "crofton-4": (-0.052, 0.026),
        "crofton-2": (-0.215, 0.111),
        "pixel-edge": (0.0, 0.414),
        "duda": (0.0, 0.082),
    }
    slack = 2.5 / size  # the chord's ends fall between pixels
    for name, (low, high) in bounds.items():
        assert min(found[name]) == pytest.approx(low, abs=slack), name
        assert max(found[name]) == pytest.approx(high, abs=slack), name


def test_white_noise():
    # closed forms per window for independent pixels; three standard errors, 2 000 000 windows
    rng = np.random.default_rng(2)
    for p in (0.2, 0.5, 0.7):
        image = rng.random((1001, 2001)) < p
        counts = count_patterns(image, [1])
        expected = theory.white_noise(p)
        windows = counts.windows
        for name, number in counts.classes().items():
            tolerance = 4.5 * math.sqrt(expected[name] * (1 - expected[name]) / windows)
            # neighbouring windows share pixels: variance up to that of 9 correlated windows
            assert number[0] / windows == pytest.approx(expected[name], abs=3 * tolerance)
        assert euler(counts, connectivity=4)[0] == pytest.approx(expected["chi4"], abs=1.5e-3)
        assert euler(counts, connectivity=8)[0] == pytest.approx(expected["chi8"], abs=1.5e-3)


def test_inside_densities_are_unbiased_where_framed_ones_are_not():
    # formulas section 2: independent pixels, p = .3, 3x5 images: chi4 .1281 in theory; inside
    # windows .128, framed .172 per pixel (exactly .17232 by enumeration)
    rng = np.random.default_rng(3)
    images = rng.random((20_000, 3, 5)) < 0.3
    inside = sum(count_patterns(image, [1]) for image in images)
    framed = sum(euler(count_patterns(i, [1], edges="framed"), connectivity=4)[0] for i in images)
    assert euler(inside, connectivity=4)[0] == pytest.approx(0.1281, abs=0.003)
    per_pixel = framed / images.size
    assert per_pixel == pytest.approx(0.17232, abs=0.003)


def test_contour_is_submodular_and_area_modular_over_max_and_min():
    # law 3; section 9 of the formulas: area exact, crossing counts never above, an integer test
    rng = np.random.default_rng(4)
    levels = [2, 4, 6]
    strictly_below = 0
    for _ in range(50):
        f, g = rng.integers(0, 9, (2, 9, 11))
        upper, lower = np.maximum(f, g), np.minimum(f, g)
        cf, cg, cu, cl = (count_patterns(x, levels) for x in (f, g, upper, lower))
        pixel = STATISTICS.index("pixel")
        assert np.array_equal(cu.table[pixel] + cl.table[pixel], cf.table[pixel] + cg.table[pixel])
        for name, twice in cf.crossings().items():
            both = twice + cg.crossings()[name]
            merged = cu.crossings()[name] + cl.crossings()[name]
            assert (merged <= both).all()
            strictly_below += int((merged < both).sum())
        assert (contour(cu) + contour(cl) <= contour(cf) + contour(cg) + 1e-12).all()
    assert strictly_below > 0  # the inequality is not always an equality


def test_window_nested_pairs_are_exact():
    # law 3: where f - g keeps one weak sign on each 2x2 window, every window count is additive
    rng = np.random.default_rng(5)
    f = rng.integers(0, 9, (12, 16))
    g = f.copy()
    g[:, :7] += rng.integers(0, 4, (12, 7))  # g >= f on the left, g <= f on the right,
    g[:, 9:] -= rng.integers(0, 4, (12, 7))  # equal in between
    levels = [-2, 1, 3, 5, 8, 11]
    left = count_patterns(np.maximum(f, g), levels) + count_patterns(np.minimum(f, g), levels)
    assert left == count_patterns(f, levels) + count_patterns(g, levels)


def test_units_follow_the_pitch():
    image = np.random.default_rng(6).random((20, 20))
    one, half = (count_patterns(image, [0.5], pitch=p) for p in (1.0, 0.5))
    assert area(half)[0] == area(one)[0]
    assert contour(half)[0] == pytest.approx(2 * contour(one)[0], rel=1e-14)
    assert euler(half)[0] == pytest.approx(4 * euler(one)[0], rel=1e-14)
    assert area(half, "total")[0] == pytest.approx(area(one, "total")[0] / 4, rel=1e-14)
    assert contour(half, "total")[0] == pytest.approx(contour(one, "total")[0] / 2, rel=1e-14)
    assert euler(half, "total")[0] == euler(one, "total")[0]
    for name, value in crossings(half).items():
        assert value[0] == pytest.approx(2 * crossings(one)[name][0], rel=1e-14)


def test_total_of_a_real_silhouette():
    # scikit-image's bundled horse: one object; its measure.perimeter_crofton
    horse = ~data.horse()
    counts = count_one(horse)
    assert area(counts)[0] == horse.sum()
    assert contour(counts)[0] == pytest.approx(
        measure.perimeter_crofton(np.pad(horse, 1), directions=4), rel=1e-12
    )
    assert euler(counts, connectivity=8)[0] == measure.euler_number(np.pad(horse, 1), 2)


def test_a_full_and_an_empty_set_have_exactly_zero_contour_and_euler_number():
    counts = count_patterns(np.zeros((7, 9)), [-1.0, 1.0], pitch=(0.3, 0.7))
    for estimator in ("crofton-4", "crofton-2", "pixel-edge"):
        assert contour(counts, estimator=estimator).tolist() == [0.0, 0.0]
    for connectivity in (4, 8, "mean"):
        assert euler(counts, connectivity=connectivity).tolist() == [0.0, 0.0]
    assert area(counts).tolist() == [1.0, 0.0]


def test_bad_input_is_named():
    counts = count_patterns(np.zeros((3, 3)), [0])
    framed = count_one(np.zeros((3, 3)))
    with pytest.raises(ValueError, match=r"estimator must be one of 'crofton-4'.*got 'best'"):
        contour(counts, estimator="best")
    with pytest.raises(ValueError, match=r"connectivity must be one of 4, 8, 'mean'; got 6"):
        euler(counts, connectivity=6)
    with pytest.raises(ValueError, match=r"connectivity must be one of .*got True"):
        euler(counts, connectivity=True)
    with pytest.raises(ValueError, match=r"kind must be one of 'density', 'total'; got 'mean'"):
        area(counts, kind="mean")
    with pytest.raises(ValueError, match=r'density of framed counts is biased.*edges="inside"'):
        area(framed, kind="density")
    with pytest.raises(ValueError, match=r"crossings are densities"):
        crossings(framed)
    empty = count_patterns(np.full((3, 3), np.nan), [0])
    assert isinstance(empty, PatternCounts)
    for function in (area, contour, euler, crossings):
        with pytest.raises(ValueError, match=r"no 2x2 window has four valid pixels.*4 windows"):
            function(empty)


# Anisotropy ---------------------------------------------------------------------------------


BOTH = {"functionals": ("contour", "anisotropy")}


def contour_and_anisotropy(image, level=0.0, pitch=1.0):
    """Return both at one level of the raw field, as a transformer gives them."""
    transformer = MinkowskiCurves(
        **full_curves() | {"smooth": (), "band": (), "slope": (), "location_scale": False} | BOTH,
        **{"levels": [level], "level_rule": "fixed", "pitch": pitch, "dtype": "float64"},
    )
    names = transformer.get_feature_names_out().tolist()
    row = transformer.transform([image])[0]
    return row[names.index("raw_contour_00")], row[names.index("raw_anisotropy_00")]


def stripes(angle, pitch=(1.0, 1.0), period=23.0, side=400):
    """Waves whose edges have their normal at an angle to the rows, with 2 / period of them."""
    y, x = np.mgrid[:side, :side] * np.array(pitch)[:, None, None]
    return np.sin(2 * np.pi * (x * np.cos(angle) + y * np.sin(angle)) / period + 0.3)


@pytest.mark.parametrize("pitch", [(1.0, 1.0), (0.5, 1.0), (1.5, 1.0)])
@pytest.mark.parametrize("degrees", [0, 10, 22.5, 45, 60, 80, 90, 135, 157.5])
def test_parallel_edges_by_the_crossings_of_four_directions(degrees, pitch):
    # a line at angle t crosses edges with normal at angle a |cos(t - a)| times as often as one
    # along the normal (Buffon); the four lattice directions determine a0, a2, b2, by hand
    angle, rise = np.deg2rad(degrees), math.atan2(*pitch)
    horizontal, vertical, one, other = (
        abs(math.cos(t - angle)) * 2 / 23.0 for t in (0, np.pi / 2, rise, -rise)
    )
    swing = math.hypot((horizontal - vertical) / 2, (one - other) / (2 * math.sin(2 * rise)))
    length, found = contour_and_anisotropy(stripes(angle, pitch), pitch=pitch)
    assert found == pytest.approx(np.pi / 2 * swing, rel=0.03)
    assert length == pytest.approx(2 / 23.0, rel=0.12)
    if pitch == (1.0, 1.0):
        # by hand: 2 sqrt 2 - 2 along the lattice directions, 2 - sqrt 2 half way between
        bounds = 2 - math.sqrt(2), 2 * math.sqrt(2) - 2
        assert 0.97 * bounds[0] < found / length < 1.03 * bounds[1]


def test_parallel_edges_of_all_angles_have_two_thirds_of_the_contour():
    # the second Fourier coefficient of |cos t| over its mean, 4/(3 pi) over 2/pi, in the continuum
    ratios = [
        found / length
        for length, found in (
            contour_and_anisotropy(stripes(angle, side=250))
            for angle in np.linspace(0, np.pi, 32, endpoint=False)
        )
    ]
    assert np.mean(ratios) == pytest.approx(2 / 3, abs=0.04)


def test_surfaces_alike_in_all_directions_have_no_anisotropy():
    board = np.indices((21, 31)).sum(axis=0) % 2
    length, found = contour_and_anisotropy(board, level=1.0)
    assert length > 0.5
    assert found == 0.0  # as many edges across as down, and none along the diagonals
    noise = np.random.default_rng(0).normal(size=(600, 600))
    length, found = contour_and_anisotropy(noise)
    assert found < 0.01 * length
    smooth = gaussian_field((512, 512), 3.0, 1)
    length, found = contour_and_anisotropy(smooth)
    assert found < 0.05 * length
    # the other side: the same surface stretched twofold along one axis, by its pitch
    length, found = contour_and_anisotropy(smooth, pitch=(1.0, 2.0))
    assert found > 0.2 * length


@pytest.mark.parametrize("dtype", ["uint8", "float64"])
def test_anisotropy_does_not_change_under_turns_bit_for_bit(dtype):
    image = data.brick()[40:104, 200:280].astype(dtype)
    options = {"level": 120.0}
    expected = contour_and_anisotropy(image, **options)
    assert expected[1] > 0.1 * expected[0]  # courses of bricks
    for turned in (np.rot90(image), image[::-1], image[:, ::-1], image.T):
        assert contour_and_anisotropy(turned, **options) == expected
    # with rectangular pixels the pitch turns, too
    one = contour_and_anisotropy(image, pitch=(0.5, 2.0), **options)
    other = contour_and_anisotropy(image.T, pitch=(2.0, 0.5), **options)
    assert other == pytest.approx(one, rel=1e-12)


def test_anisotropy_without_a_window_is_nan():
    table = np.zeros((2, 8, 3), dtype=np.int64)
    assert np.isnan(anisotropy_of(table, np.array([0, 0]), (1.0, 1.0))).all()
    assert not anisotropy_of(table, np.array([4, 4]), (1.0, 1.0)).any()

"""Conditions: each against a law or SciPy, in every type of pixel, with gaps; seeds; margins."""

import itertools
import math

import numpy as np
import pytest
from scipy import ndimage, stats

from mfeat.conditions import (
    BLUR,
    CONDITIONS,
    DROPOUTS,
    GAIN,
    GAMMA,
    KINDS,
    NOISE,
    OFFSET,
    TILT,
    ZOOM,
    Scene,
    conditions_for,
    generator_for,
    margin_for,
    missing_in,
)

SIZE = (48, 48)
SHAPES = [(48, 48), (16, 90), (90, 16), (31, 40), (8, 8), (5, 5)]
INTEGERS = ["uint8", "uint16", "int16", "int32", "uint32"]
FLOATS = ["float32", "float64"]
TYPES = ["bool", *INTEGERS, *FLOATS]

every = pytest.mark.parametrize("name", CONDITIONS)
every_type = pytest.mark.parametrize("dtype", TYPES)
any_shape = pytest.mark.parametrize("shape", SHAPES, ids=str)


def changed(name, scene, patch=0, seed=0):
    return CONDITIONS[name].change(scene, generator_for(seed, name, patch))


def coordinates(shape, margin):
    """Return rows and columns about the centre of a patch of a shape, with its margin."""
    sides = (np.arange(-margin, side + margin) - (side - 1) / 2 for side in shape)
    return np.meshgrid(*sides, indexing="ij")


def scene_of(function, shape=SIZE, margin=None):
    margin = margin_for(shape) if margin is None else margin
    return Scene(function(*coordinates(shape, margin)), margin, 1.0)


def noise_scene(shape=SIZE, dtype="float64", seed=0, margin=None):
    """Return a scene of smoothed noise, which fills the middle half of the range of the type."""
    margin = margin_for(shape) if margin is None else margin
    rng = np.random.default_rng(seed)
    sides = [side + 2 * margin for side in shape]
    pixels = ndimage.gaussian_filter(rng.normal(size=sides), 2, mode="wrap")
    pixels = 0.5 + 0.25 * pixels / np.abs(pixels).max()
    kind = np.dtype(dtype)
    if kind.kind == "f":
        return Scene(pixels.astype(dtype), margin, 1.0)
    top = 1.0 if kind.kind == "b" else float(np.iinfo(kind).max)
    return Scene(np.rint(top * pixels).astype(dtype), margin, top)


def with_gaps(scene, seed=1):
    """Return a scene with a block and scattered pixels missing: NaN, or masked integers."""
    gaps = np.random.default_rng(seed).random(scene.region.shape) < 0.01
    m = scene.margin
    gaps[m + 10 : m + 16, m + 20 : m + 28] = True
    if scene.region.dtype.kind == "f":
        return scene._replace(region=np.where(gaps, np.nan, scene.region)), gaps
    return scene._replace(region=np.ma.MaskedArray(scene.region, gaps)), gaps


def inner(scene, array):
    m = scene.margin
    return array[m:-m, m:-m] if m else array


# All of them --------------------------------------------------------------------------------


def test_the_conditions_there_are():
    assert list(CONDITIONS) == [
        *["clean", "light", "rotation", "noise", "blur", "zoom", "tilt", "dropouts"]
    ]
    assert all(condition.about for condition in CONDITIONS.values())


@every
@every_type
@any_shape
def test_type_and_shape_stay(name, dtype, shape):
    scene = noise_scene(shape, dtype)
    found = changed(name, scene)
    assert found.shape == shape
    assert found.dtype == scene.region.dtype
    if dtype in FLOATS:
        assert np.isnan(found).any() == (name == "dropouts")
    elif name != "dropouts":
        assert not np.ma.isMaskedArray(found)


@every
@every_type
@pytest.mark.parametrize("gaps", [False, True])
def test_the_scene_is_never_changed(name, dtype, gaps):
    scene = noise_scene(dtype=dtype)
    if gaps:
        scene, _ = with_gaps(scene)
    before = scene.region.copy()
    found = changed(name, scene)
    np.testing.assert_array_equal(np.ma.getdata(scene.region), np.ma.getdata(before))
    np.testing.assert_array_equal(np.ma.getmaskarray(scene.region), np.ma.getmaskarray(before))
    if name != "clean":
        assert not np.shares_memory(np.ma.getdata(found), np.ma.getdata(scene.region))


@every
def test_read_only_pixels_will_do(name):
    # workers map the pixels into memory, where they cannot be written to
    scene = noise_scene()
    expected = changed(name, scene)
    scene.region.flags.writeable = False
    np.testing.assert_array_equal(changed(name, scene), expected)


@every
def test_the_same_patch_changes_in_the_same_way_whatever_came_before(name):
    scenes = [noise_scene(seed=k) for k in range(3)]
    forward = [changed(name, scene, k, 5) for k, scene in enumerate(scenes)]
    for k in (2, 0, 1):
        np.testing.assert_array_equal(changed(name, scenes[k], k, 5), forward[k])


@pytest.mark.parametrize("name", ["light", "rotation", "noise", "zoom", "tilt", "dropouts"])
def test_other_patches_and_seeds_change_otherwise(name):
    scene = noise_scene()
    found = [changed(name, scene, k, seed).tobytes() for k in range(3) for seed in (0, 1)]
    assert len(set(found)) == 6


def test_draws_differ_between_conditions():
    draws = {generator_for(0, name, 0).random() for name in CONDITIONS}
    assert len(draws) == len(CONDITIONS)
    assert generator_for(3, "noise", 7).random() == generator_for(3, "noise", 7).random()


@every
@every_type
def test_what_is_missing_stays_missing(name, dtype):
    whole = noise_scene(dtype=dtype)
    scene, gaps = with_gaps(whole)
    found, complete = changed(name, scene), changed(name, whole)
    missing = missing_in(found)
    before = inner(scene, gaps)
    if name in ("rotation", "zoom"):
        assert before.mean() < missing.mean() < 9 * before.mean()
    elif name == "dropouts":
        lost = missing_in(complete)
        np.testing.assert_array_equal(missing, before | lost)
    else:
        np.testing.assert_array_equal(missing, before)
    # far from gaps nothing changes: the noise's strength alone follows from all valid pixels
    if name in ("clean", "light", "dropouts"):
        np.testing.assert_array_equal(
            np.ma.getdata(found)[~missing], np.ma.getdata(complete)[~missing]
        )


@pytest.mark.parametrize("name", ["rotation", "zoom"])
@pytest.mark.parametrize("patch", range(6))
def test_a_gap_moves_with_the_part_and_reaches_no_further_than_its_edge(name, patch):
    scene = noise_scene((61, 61))
    rows, cols = coordinates((61, 61), scene.margin)
    hole = np.hypot(rows, cols - 12) <= 4
    whole = changed(name, scene, patch)
    found = changed(name, scene._replace(region=np.where(hole, np.nan, scene.region)), patch)
    # where the middle of the hole went, from a picture of it
    blob = np.exp(-(rows**2 + (cols - 12) ** 2) / 18)
    seen = changed(name, scene._replace(region=blob), patch)
    at = np.unravel_index(np.argmax(seen), seen.shape)
    distance = np.hypot(*(axis - place for axis, place in zip(np.indices(seen.shape), at,
                                                              strict=True)))  # fmt: skip
    missing = np.isnan(found)
    assert missing[distance <= 2.5].all()
    assert not missing[distance > 4 * ZOOM[1] + 2.5].any()
    far = distance > 13
    assert far.any()
    np.testing.assert_allclose(found[far], whole[far], atol=1e-4 * whole.std())


@every
def test_what_lies_under_a_gap_does_not_matter(name):
    scene, gaps = with_gaps(noise_scene(dtype="uint8"))
    other = np.ma.getdata(scene.region).copy()
    other[gaps] = 255
    one = changed(name, scene)
    two = changed(name, scene._replace(region=np.ma.MaskedArray(other, gaps)))
    np.testing.assert_array_equal(np.ma.getmaskarray(one), np.ma.getmaskarray(two))
    np.testing.assert_array_equal(one.compressed(), two.compressed())


@every
def test_masked_floats_are_missing_as_nan_are(name):
    scene, gaps = with_gaps(noise_scene())
    filled = np.where(gaps, 1e30, scene.region)
    masked = scene._replace(region=np.ma.MaskedArray(filled, gaps))
    one, two = changed(name, scene), changed(name, masked)
    missing = missing_in(one)
    np.testing.assert_array_equal(missing_in(two), missing)
    np.testing.assert_array_equal(np.ma.getdata(two)[~missing], one[~missing])


@every
@pytest.mark.parametrize("value", [0, 200, 255])
def test_a_flat_patch_stays_flat(name, value):
    margin = margin_for(SIZE)
    region = np.full([side + 2 * margin for side in SIZE], value, np.uint8)
    found = changed(name, Scene(region, margin, 255.0))
    assert len(np.unique(np.ma.getdata(found))) == 1
    if name != "light":
        assert found.min() == value


@pytest.mark.parametrize("dtype", ["int64", "uint64"])
@pytest.mark.parametrize("name", ["noise", "blur", "rotation", "zoom"])
def test_64_bit_integers_never_wrap_around(name, dtype):
    # the float next to the largest integer lies beyond it
    top = np.iinfo(dtype).max
    margin = margin_for((12, 12))
    region = np.full((12 + 2 * margin,) * 2, top - 4096, dtype)
    region[::2] = top
    found = changed(name, Scene(region, margin, float(top)))
    assert found.min() > top // 2


@pytest.mark.parametrize("name", ["noise", "blur", "rotation", "zoom"])
@pytest.mark.parametrize("dtype", ["bool", "uint8", "int16", "uint16", "int64"])
def test_integers_are_those_of_floats_rounded_and_limited(name, dtype):
    kind = np.dtype(dtype)
    low, high = (0, 1) if kind.kind == "b" else (np.iinfo(kind).min, np.iinfo(kind).max)
    if dtype == "int64":
        low, high = -(10**6), 10**6
    margin = margin_for(SIZE)
    rng = np.random.default_rng(0)
    region = rng.choice([low, high], size=[side + 2 * margin for side in SIZE]).astype(dtype)
    found = changed(name, Scene(region, margin, float(high)))
    exact = changed(name, Scene(region.astype(float), margin, float(high)))
    if dtype == "int64":
        expected = np.rint(exact)
    else:
        expected = np.clip(np.rint(exact), low, high)
        assert (exact < low).any() or name == "blur"
        assert (exact > high).any() or name == "blur"
    np.testing.assert_array_equal(found.astype(float), expected)


# Light --------------------------------------------------------------------------------------


def test_light_is_a_gamma_curve_with_gain_and_offset():
    ramp = np.linspace(0, 1, 48 * 48).reshape(SIZE)
    curves = []
    for patch in range(200):
        lit = changed("light", Scene(ramp, 0, 1.0), patch).ravel()
        x = ramp.ravel()
        inside = (lit > 0) & (lit < 1)
        assert (np.diff(lit) >= 0).all()
        assert (np.diff(lit[inside]) > 0).all()
        assert lit.min() >= 0
        assert lit.max() <= 1
        # recover the three numbers: the offset where nothing is clipped is the value at 0
        if not inside.all():
            continue
        offset = lit[0]
        gain = lit[-1] - offset
        gamma = math.log((lit[1000] - offset) / gain) / math.log(x[1000])
        np.testing.assert_allclose(lit, gain * x**gamma + offset, atol=1e-12)
        curves.append((gamma, gain, offset))
    gamma, gain, offset = np.array(curves).T
    assert len(gamma) > 50
    for values, (low, high) in ((gamma, GAMMA), (gain, GAIN), (offset, (0, OFFSET))):
        assert low <= values.min() < low + 0.2 * (high - low)
        assert high - 0.2 * (high - low) < values.max() <= high + 1e-12


@pytest.mark.parametrize(("dtype", "top"), [("uint8", 255), ("uint16", 4095), ("uint16", 65535)])
def test_light_reckons_with_the_full_scale(dtype, top):
    shares = np.linspace(0, 1, 48 * 48).reshape(SIZE)
    grey = np.rint(shares * top).astype(dtype)
    for patch in range(20):
        found = changed("light", Scene(grey, 0, float(top)), patch)
        share = changed("light", Scene(grey / top, 0, 1.0), patch)
        assert found.max() <= top
        np.testing.assert_array_equal(found, np.rint(share * top))


# Rotation and zoom --------------------------------------------------------------------------


def gradient_of(patch):
    """Return centre value and gradient (rows, columns) of a patch that is a plane."""
    rows, cols = coordinates(patch.shape, 0)
    terms = np.stack([np.ones(patch.size), rows.ravel(), cols.ravel()], axis=1)
    fitted, *_ = np.linalg.lstsq(terms, patch.ravel(), rcond=None)
    np.testing.assert_allclose(patch.ravel(), terms @ fitted, atol=1e-3)
    return fitted[0], fitted[1:]


def bumpy(rows, cols):
    """Return a smooth function that has no symmetry."""
    return np.sin(0.31 * rows + 0.12 * cols) + 0.5 * np.cos(0.17 * cols - 0.05 * rows + 1)


@any_shape
def test_any_rotation_leaves_a_round_blob(shape):
    scene = scene_of(lambda r, c: np.exp(-(r**2 + c**2) / (2 * 3.0**2)), shape)
    for patch in range(25):
        np.testing.assert_allclose(changed("rotation", scene, patch), scene.patch, atol=2e-3)


@any_shape
def test_rotation_turns_a_function_about_the_centre(shape):
    angles = []
    for patch in range(25):
        plane = changed("rotation", scene_of(lambda r, c: 0.3 + 0.01 * r, shape), patch)
        middle, (down, right) = gradient_of(plane)
        assert middle == pytest.approx(0.3, abs=1e-6)
        assert math.hypot(down, right) == pytest.approx(0.01, rel=1e-3)
        cos, sin = down / 0.01, right / 0.01
        rows, cols = coordinates(shape, 0)
        # r turned is cos r + sin c, by the plane; a rotation keeps the sense of the axes
        expected = bumpy(cos * rows + sin * cols, cos * cols - sin * rows)
        found = changed("rotation", scene_of(bumpy, shape), patch)
        np.testing.assert_allclose(found, expected, atol=4e-3)
        angles.append(math.atan2(sin, cos))
    assert {int(angle // (math.pi / 2)) for angle in angles} == {-2, -1, 0, 1}


@any_shape
def test_zoom_scales_a_function_about_the_centre(shape):
    factors = []
    for patch in range(40):
        plane = changed("zoom", scene_of(lambda r, c: 0.3 + 0.01 * r + 0.02 * c, shape), patch)
        middle, (down, right) = gradient_of(plane)
        assert middle == pytest.approx(0.3, abs=1e-6)
        assert right == pytest.approx(2 * down, rel=1e-3)
        rows, cols = coordinates(shape, 0)
        factor = 0.01 / down  # larger parts have smaller gradients
        found = changed("zoom", scene_of(bumpy, shape), patch)
        np.testing.assert_allclose(found, bumpy(rows / factor, cols / factor), atol=4e-3)
        factors.append(factor)
    assert ZOOM[0] * 0.999 <= min(factors) < 0.9
    assert 1.1 < max(factors) <= ZOOM[1] * 1.001


def test_rotation_hardly_blurs():
    # the reason for a cubic spline: detail of three pixels and more keeps its contrast
    scene = scene_of(lambda r, c: np.sin(2 * math.pi * r / 4), (64, 64))
    for patch in range(10):
        assert changed("rotation", scene, patch).std() > 0.9 * scene.patch.std()


# Margins ------------------------------------------------------------------------------------


SIDES = (2, 3, 8, 17, 64, 100, 255)


@pytest.mark.parametrize("shape", list(itertools.product(SIDES, repeat=2)), ids=str)
def test_the_margin_holds_every_turned_and_scaled_patch(shape):
    margin = margin_for(shape)
    corner = (np.array(shape) - 1) / 2
    reach = corner + margin
    needed = 2.0  # pixels beside a place that a cubic spline weighs
    angles = np.linspace(0, 2 * math.pi, 721)
    for sign in (1, -1):
        rows = np.abs(corner[0] * np.cos(angles) - sign * corner[1] * np.sin(angles))
        cols = np.abs(corner[0] * np.sin(angles) + sign * corner[1] * np.cos(angles))
        assert rows.max() + needed <= reach[0]
        assert cols.max() + needed <= reach[1]
    assert (corner / ZOOM[0] + needed <= reach).all()
    assert margin >= int(4 * BLUR + 0.5)  # where SciPy cuts a Gaussian off


def leak(name, shape, missing_margin=0):
    """Return the largest effect of what lies beyond the margin, in deviations of white noise."""
    margin = margin_for(shape) - missing_margin
    more = 40
    sides = [side + 2 * (margin + more) for side in shape]
    worst = 0.0
    for patch in range(30):
        region = np.random.default_rng(patch).normal(size=sides)
        near = Scene(region[more:-more, more:-more], margin, 1.0)
        found = changed(name, near, patch)
        worst = max(worst, np.abs(found - changed(name, Scene(region, margin + more, 1.0),
                                                  patch)).max())  # fmt: skip
    return worst


@any_shape
def test_what_lies_beyond_the_margin_has_no_effect(shape):
    # a spline's weights fall by sqrt(3) - 2 = -.27 a pixel, without end: not exactly zero
    assert leak("rotation", shape) < 0.02
    assert leak("zoom", shape) < 0.02
    assert leak("blur", shape) == 0.0


def test_a_margin_that_is_too_small_would_show():
    assert leak("rotation", (48, 48), missing_margin=6) > 0.5
    assert leak("blur", (48, 48), missing_margin=margin_for((48, 48)) - 2) > 1e-3


@pytest.mark.parametrize("name", ["clean", "light", "noise", "tilt", "dropouts"])
def test_the_surroundings_do_not_enter_where_none_are_needed(name):
    scene = noise_scene()
    poisoned = np.full_like(scene.region, np.nan)
    m = scene.margin
    poisoned[m:-m, m:-m] = scene.patch
    np.testing.assert_array_equal(
        changed(name, scene._replace(region=poisoned)), changed(name, scene)
    )


# Noise, blur, tilt, dropouts ----------------------------------------------------------------


def test_noise_is_white_gaussian_and_of_the_right_deviation():
    scene = noise_scene((128, 128), margin=0)
    added = np.stack([changed("noise", scene, patch) - scene.patch for patch in range(8)])
    unit = added / (NOISE * scene.patch.std())
    n = unit.size
    assert abs(unit.mean()) < 4 / math.sqrt(n)
    assert abs(unit.std() - 1) < 4 / math.sqrt(2 * n)
    for shift in ((0, 1), (1, 0), (1, 1)):
        moved = np.roll(unit, shift, (1, 2))
        assert abs((unit * moved).mean()) < 4 / math.sqrt(n)
    assert abs(np.corrcoef(unit[0].ravel(), unit[1].ravel())[0, 1]) < 4 / math.sqrt(unit[0].size)
    assert stats.kstest(unit.ravel(), "norm").pvalue > 1e-3


def test_the_noise_of_a_patch_with_gaps_follows_its_valid_pixels():
    scene, gaps = with_gaps(noise_scene((64, 64), margin=0))
    whole = noise_scene((64, 64), margin=0)
    added, plain = (changed("noise", one) - one.patch for one in (scene, whole))
    expected = plain * whole.patch[~gaps].std() / whole.patch.std()
    np.testing.assert_allclose(added[~gaps], expected[~gaps], rtol=1e-9, atol=1e-12)


@any_shape
@pytest.mark.parametrize("dtype", ["uint8", "float64"])
def test_blur_is_that_of_a_larger_image(shape, dtype):
    big = noise_scene(shape, dtype, margin=margin_for(shape) + 30)
    near = Scene(big.region[30:-30, 30:-30], big.margin - 30, big.full_scale)
    expected = inner(big, ndimage.gaussian_filter(big.region.astype(float), BLUR))
    found = changed("blur", near)
    if dtype == "uint8":
        expected = np.rint(expected)
    np.testing.assert_allclose(found, expected, rtol=1e-12)


@any_shape
def test_tilt_adds_a_plane_of_the_right_rise(shape):
    scene = noise_scene(shape)
    rises, directions = [], []
    for patch in range(60):
        added = changed("tilt", scene, patch) - scene.patch
        middle, gradient = gradient_of(added)
        assert middle == pytest.approx(0, abs=1e-12)
        assert np.abs(np.diff(added, 2, axis=0)).max() < 1e-12
        assert np.abs(np.diff(added, 2, axis=1)).max() < 1e-12
        rises.append(math.hypot(*gradient) * max(shape) / scene.patch.std())
        directions.append(math.atan2(*gradient))
    assert TILT[0] * (1 - 1e-9) <= min(rises) < 1.4
    assert 3.6 < max(rises) <= TILT[1] * (1 + 1e-9)
    assert {int(angle // (math.pi / 2)) for angle in directions} == {-2, -1, 0, 1}


@pytest.mark.parametrize("shape", [(48, 48), (16, 90), (20, 20)], ids=str)
def test_dropouts_lose_a_share_in_clusters_and_keep_the_rest(shape):
    scene = noise_scene(shape)
    for patch in range(10):
        found = changed("dropouts", scene, patch)
        lost = np.isnan(found)
        assert lost.sum() == pytest.approx(DROPOUTS * lost.size, abs=1)
        np.testing.assert_array_equal(found[~lost], scene.patch[~lost])
        # scattered one by one, 5 % of the neighbours of lost pixels would be lost, too
        beside = (lost[:, 1:] & lost[:, :-1]).sum() / max(lost[:, 1:].sum(), 1)
        assert beside > 0.3


def test_clean_is_the_patch_itself():
    scene, _ = with_gaps(noise_scene(dtype="uint8"))
    found = changed("clean", scene)
    assert np.ma.isMaskedArray(found)
    np.testing.assert_array_equal(found.mask, scene.patch.mask)
    np.testing.assert_array_equal(found.data, scene.patch.data)


def test_a_patch_without_margin_is_the_region():
    region = np.arange(12.0).reshape(3, 4)
    assert Scene(region, 0, 1.0).patch.shape == (3, 4)
    assert Scene(region, 1, 1.0).patch.tolist() == [[5.0, 6.0]]


def test_missing_pixels_are_masked_or_nan():
    values = np.array([[1.0, np.nan], [3.0, 4.0]])
    assert missing_in(values).tolist() == [[False, True], [False, False]]
    masked = np.ma.MaskedArray(values, [[True, False], [False, False]])
    assert missing_in(masked).tolist() == [[True, True], [False, False]]
    assert missing_in(np.ones((2, 2))) is None
    assert missing_in(np.ones((2, 2), np.uint8)) is None
    assert missing_in(np.ma.MaskedArray(np.ones((2, 2)), False)) is None


# Names --------------------------------------------------------------------------------------


@pytest.mark.parametrize("kind", KINDS)
def test_by_default_all_that_make_sense(kind):
    found = conditions_for(kind)
    assert [c.name for c in found] == [n for n, c in CONDITIONS.items() if kind in c.kinds]
    assert found[0].name == "clean"


def test_heights_have_no_light_and_grey_values_no_tilt():
    names = {kind: {c.name for c in conditions_for(kind)} for kind in KINDS}
    assert names["grey"] - names["height"] == {"light"}
    assert names["height"] - names["grey"] == {"tilt", "dropouts"}


@pytest.mark.parametrize(
    ("given", "expected"),
    [
        ([], ["clean"]),
        (["blur"], ["clean", "blur"]),
        (("zoom", "blur", "zoom", "clean"), ["clean", "blur", "zoom"]),
    ],
)
def test_some_conditions_in_the_order_of_reports(given, expected):
    assert [condition.name for condition in conditions_for("grey", given)] == expected


@pytest.mark.parametrize(
    ("kind", "names", "error", "text"),
    [
        ("grey", "blur", TypeError, "conditions must be a list of names; got 'blur'"),
        ("grey", ["fog"], ValueError, r"conditions must be one of 'clean', .*; got 'fog'"),
        ("grey", [3], ValueError, r"conditions must be one of 'clean', .*; got 3"),
        ("grey", 3, TypeError, "conditions must be a list of names; got 3"),
        ("grey", ["tilt"], ValueError, r"'tilt' is for height images, these are grey images"),
        ("height", ["light"], ValueError, r"'light' is for grey .* height .*\(floating-point"),
    ],
)
def test_conditions_that_cannot_be(kind, names, error, text):
    with pytest.raises(error, match=text):
        conditions_for(kind, names)

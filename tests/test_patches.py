"""Cutting images into patches, and labelling them."""

from collections import Counter

import naive
import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from mfeat import MinkowskiCurves, PatchGrid
from mfeat.patches import Patches
from mfeat.transformer import full_curves

IMAGE = np.arange(10 * 13).reshape(10, 13)


def starts(patches):
    return [tuple(position) for position in patches.positions.tolist()]


# Positions ----------------------------------------------------------------------------------


@pytest.mark.parametrize(
    ("options", "shape", "rows", "cols"),
    [
        # by hand
        ({"size": 4}, (8, 12), [0, 4], [0, 4, 8]),
        ({"size": 4}, (10, 13), [0, 4], [0, 4, 8]),
        ({"size": 4, "edge": "shift"}, (10, 13), [0, 4, 6], [0, 4, 8, 9]),
        ({"size": 4, "edge": "shift"}, (8, 12), [0, 4], [0, 4, 8]),
        ({"size": 4, "edge": "shift"}, (4, 5), [0], [0, 1]),
        ({"size": (3, 5)}, (10, 13), [0, 3, 6], [0, 5]),
        ({"size": 4, "stride": 3}, (10, 13), [0, 3, 6], [0, 3, 6, 9]),
        ({"size": 4, "stride": (2, 6)}, (10, 13), [0, 2, 4, 6], [0, 6]),
        ({"size": 4, "stride": 6, "edge": "shift"}, (10, 13), [0, 6], [0, 6, 9]),
        ({"size": (10, 13)}, (10, 13), [0], [0]),
        ({"size": 2, "stride": 100}, (10, 13), [0], [0]),
    ],
)
def test_positions(options, shape, rows, cols):
    expected = [[row, col] for row in rows for col in cols]  # row by row
    assert PatchGrid(**options).positions(shape).tolist() == expected


def test_default_stride_is_the_size():
    assert PatchGrid(size=(4, 6)).stride == (4, 6)
    assert repr(PatchGrid(size=4)) == (
        "PatchGrid(size=(4, 4), stride=(4, 4), min_valid=0.0, edge='drop')"
    )


@pytest.mark.parametrize(
    ("options", "expected"),
    [
        # by hand, of 10 x 13 pixels
        ({"size": 4}, 8 * 12 / 130),
        ({"size": 4, "edge": "shift"}, 1.0),
        ({"size": 4, "stride": 6}, 8 * 8 / 130),  # rows 0-3, 6-9; columns 0-3, 6-9
        ({"size": 10}, 10 * 10 / 130),
    ],
)
def test_covered_fraction(options, expected):
    assert PatchGrid(**options).cut(IMAGE).covered_fraction == pytest.approx(expected, rel=1e-15)


grids = st.fixed_dictionaries(
    {
        "shape": st.tuples(st.integers(2, 14), st.integers(2, 14)),
        "size": st.tuples(st.integers(2, 14), st.integers(2, 14)),
        "stride": st.tuples(st.integers(1, 9), st.integers(1, 9)),
        "edge": st.sampled_from(["drop", "shift"]),
    }
)


@settings(max_examples=150, deadline=None)
@given(case=grids)
def test_every_patch_is_the_slice_at_its_position(case):
    shape = tuple(max(n, s) for n, s in zip(case["shape"], case["size"], strict=True))
    image = np.arange(shape[0] * shape[1]).reshape(shape)
    patches = PatchGrid(case["size"], case["stride"], edge=case["edge"]).cut(image)
    assert len(patches) == len(set(starts(patches))) > 0
    seen = np.zeros(shape, dtype=bool)
    for k, (row, col) in enumerate(starts(patches)):
        expected = image[row : row + case["size"][0], col : col + case["size"][1]]
        assert expected.shape == case["size"]
        np.testing.assert_array_equal(patches[k], expected)
        seen[row : row + case["size"][0], col : col + case["size"][1]] = True
    # law: the fraction is that of the pixels seen, and "shift" leaves none out where strides do not
    assert patches.covered_fraction == pytest.approx(seen.mean(), rel=1e-12)
    gapless = all(step <= side for step, side in zip(case["stride"], case["size"], strict=True))
    if case["edge"] == "shift" and gapless:
        assert seen.all()
        assert patches.covered_fraction == 1.0


# The sequence -------------------------------------------------------------------------------


def test_patches_are_views():
    image = IMAGE.astype(float)
    patches = PatchGrid(size=4, stride=3).cut(image)
    assert all(np.shares_memory(patch, image) for patch in patches)
    image[0, 0] = -5.0
    assert patches[0][0, 0] == -5.0


def test_patches_of_a_masked_image_are_views_too():
    image = IMAGE.astype(float)
    patches = PatchGrid(size=4).cut(image, mask=image > 3)
    assert all(isinstance(patch, np.ma.MaskedArray) for patch in patches)
    assert all(np.shares_memory(patch.data, image) for patch in patches)


def test_indexing():
    patches = PatchGrid(size=4).cut(IMAGE)
    assert len(patches) == len(list(patches)) == 6
    np.testing.assert_array_equal(patches[-1], patches[5])
    np.testing.assert_array_equal(patches[np.int64(2)], IMAGE[0:4, 8:12])
    part = patches[1:6:2]
    assert [int(patch[0, 0]) for patch in part] == [4, 4 * 13, 4 * 13 + 8]
    with pytest.raises(IndexError, match="patch 6 does not exist; there are 6"):
        patches[6]


def test_repr_tells_what_was_left_out():
    image = IMAGE.astype(float)
    image[:4, :4] = np.nan
    patches = PatchGrid(size=4, min_valid=0.5).cut(image)
    # by hand: 8 x 12 of 10 x 13 pixels
    assert repr(patches) == "Patches(5 of 4x4 pixels, 1 left out, 73.8% of the image covered)"


# Missing pixels -----------------------------------------------------------------------------


def missing_image():
    rng = np.random.default_rng(1)
    image = rng.normal(size=(21, 25))
    image[rng.random(image.shape) < 0.06] = np.nan
    image[3:9, 5:14] = np.nan
    return image


@pytest.mark.parametrize("edge", ["drop", "shift"])
@pytest.mark.parametrize("size", [2, (5, 4), 9])
@pytest.mark.parametrize("min_valid", [0.0, 0.4, 1.0])
def test_valid_fractions_against_a_naive_count_of_windows(edge, size, min_valid):
    image = missing_image()
    grid = PatchGrid(size, stride=3, edge=edge, min_valid=min_valid)
    patches = grid.cut(image)
    expected = {}
    for row, col in grid.positions(image.shape).tolist():
        patch = image[row : row + grid.size[0], col : col + grid.size[1]]
        possible = (grid.size[0] - 1) * (grid.size[1] - 1)
        expected[row, col] = naive.valid_windows(~np.isnan(patch)) / possible
    assert len(set(expected.values())) > 1
    kept = [place for place, fraction in expected.items() if fraction >= min_valid]
    left_out = [place for place, fraction in expected.items() if fraction < min_valid]
    assert starts(patches) == kept
    assert [tuple(place) for place in patches.left_out.tolist()] == left_out
    assert patches.valid_fractions.tolist() == [expected[place] for place in kept]


def test_nan_mask_and_masked_array_say_the_same():
    image = missing_image()
    filled = np.where(np.isnan(image), 0.0, image)
    grid = PatchGrid(6, stride=5, min_valid=0.3)
    by_nan = grid.cut(image)
    by_mask = grid.cut(filled, mask=~np.isnan(image))
    by_masked_array = grid.cut(np.ma.MaskedArray(filled, mask=np.isnan(image)))
    assert len(by_nan.left_out) > 0
    for other in (by_mask, by_masked_array):
        np.testing.assert_array_equal(other.positions, by_nan.positions)
        np.testing.assert_array_equal(other.left_out, by_nan.left_out)
        np.testing.assert_array_equal(other.valid_fractions, by_nan.valid_fractions)
        for patch, with_nan in zip(other, by_nan, strict=True):
            np.testing.assert_array_equal(np.ma.filled(patch, np.nan), with_nan)


def test_a_mask_joins_nan_and_an_earlier_mask():
    image = np.ma.MaskedArray(np.ones((4, 4)), mask=False)
    image[0, 0] = np.ma.masked
    image.data[3, 3] = np.nan
    mask = np.ones((4, 4), dtype=bool)
    mask[0, 3] = False
    [patch] = PatchGrid(4).cut(image, mask=mask)
    missing = np.ma.getmaskarray(patch) | np.isnan(patch.data)
    # by hand: the three corners that are masked, NaN, and False in the mask
    assert np.argwhere(missing).tolist() == [[0, 0], [0, 3], [3, 3]]
    # each corner lies in one of 3 x 3 windows
    assert PatchGrid(4).cut(image, mask=mask).valid_fractions.tolist() == [6 / 9]


def test_a_complete_mask_leaves_all_fractions_one():
    patches = PatchGrid(4).cut(IMAGE, mask=np.ones(IMAGE.shape, dtype=bool))
    assert patches.valid_fractions.tolist() == [1.0] * 6
    assert patches.left_out.shape == (0, 2)


def test_nothing_left_is_an_empty_sequence_not_an_error():
    patches = PatchGrid(4, min_valid=0.1).cut(np.full((8, 8), np.nan))
    assert len(patches) == 0
    assert len(patches.left_out) == 4
    labels = patches.label(np.zeros((8, 8), dtype=int))
    assert labels.labels.shape == labels.fractions.shape == (0,)


def test_the_same_fractions_decide_in_the_transformer():
    patches = PatchGrid(6, stride=5).cut(missing_image())
    few = {"levels": 2, "smooth": (), "band": (), "slope": ()}
    transformer = MinkowskiCurves(**full_curves() | few, min_valid=0.5, below_min_valid="nan")
    refused = np.isnan(transformer.transform(patches)).all(axis=1)
    np.testing.assert_array_equal(refused, patches.valid_fractions < 0.5)
    assert 0 < refused.sum() < len(patches)


# Labels -------------------------------------------------------------------------------------


def one_patch(label_image, missing=None, **options):
    label_image = np.array(label_image)
    image = np.zeros(label_image.shape)
    if missing is not None:
        image[np.array(missing, dtype=bool)] = np.nan
    found = PatchGrid(size=label_image.shape).cut(image).label(label_image, **options)
    [label], [fraction] = found.labels.tolist(), found.fractions.tolist()
    return label, fraction


@pytest.mark.parametrize(
    ("label_image", "options", "expected"),
    [
        # by hand
        ([[0, 0, 0], [0, 2, 2]], {}, (0, 4 / 6)),
        ([[0, 0, 2], [2, 2, 2]], {}, (2, 4 / 6)),
        ([[5, 5, 5], [1, 1, 1]], {}, (1, 3 / 6)),  # a tie: the smallest
        ([[-3, 4, 4], [-3, 0, 0]], {}, (-3, 2 / 6)),
        ([[0, 0, 0], [0, 0, 7]], {"rule": "any"}, (7, 1 / 6)),
        ([[0, 0, 0], [0, 0, 0]], {"rule": "any"}, (0, 1.0)),
        ([[0, 3, 3], [0, 0, 7]], {"rule": "any"}, (3, 2 / 6)),
        ([[0, 0, 3], [0, 0, 2]], {"rule": "any"}, (2, 1 / 6)),  # a tie: the smallest
        ([[9, 9, 0], [9, 9, 9]], {"rule": "any", "background": 9}, (0, 1 / 6)),
        ([[9, 9, 9], [9, 9, 9]], {"rule": "any", "background": 9}, (9, 1.0)),
        ([[9, 9, 9], [9, 9, 9]], {"rule": "any", "background": 0}, (9, 1.0)),
        ([[False, False, False], [False, False, True]], {}, (False, 5 / 6)),
        ([[False, False, False], [False, False, True]], {"rule": "any"}, (True, 1 / 6)),
    ],
)
def test_label_rules(label_image, options, expected):
    assert one_patch(label_image, **options) == expected


@pytest.mark.parametrize(
    ("rule", "expected"),
    [("majority", (1, 2 / 3)), ("any", (1, 2 / 3))],
)
def test_missing_pixels_are_not_asked(rule, expected):
    # by hand: of the valid 1, 1, 0 two are 1; the missing 4s are the most frequent of all six
    assert one_patch([[4, 4, 4], [1, 1, 0]], [[1, 1, 1], [0, 0, 0]], rule=rule) == expected


def test_masked_labels_are_not_asked():
    label_image = np.ma.MaskedArray([[4, 4, 4], [1, 1, 0]], mask=[[1, 1, 1], [0, 0, 0]])
    image = np.zeros((2, 3))
    labels, fractions = PatchGrid(size=(2, 3)).cut(image).label(label_image)
    assert (labels.tolist(), fractions.tolist()) == ([1], [2 / 3])  # by hand, as above
    image[1, 0] = np.nan  # a tie of 0 and 1 is left: the smallest
    labels, fractions = PatchGrid(size=(2, 3)).cut(image).label(label_image)
    assert (labels.tolist(), fractions.tolist()) == ([0], [1 / 2])


@pytest.mark.parametrize("dtype", [bool, np.uint8, np.int16, np.int64, np.uint64])
def test_labels_have_the_type_of_the_label_image(dtype):
    labels = PatchGrid(4).cut(IMAGE).label(np.ones(IMAGE.shape, dtype=dtype)).labels
    assert labels.dtype == dtype
    assert labels.tolist() == [1] * 6


@settings(max_examples=60, deadline=None)
@given(seed=st.integers(0, 2**32 - 1), rule=st.sampled_from(["majority", "any"]))
def test_labels_against_a_plain_count(seed, rule):
    rng = np.random.default_rng(seed)
    image = rng.normal(size=(9, 11))
    image[rng.random(image.shape) < 0.3] = np.nan
    truth = rng.integers(0, 4, size=image.shape) * (rng.random(image.shape) < 0.5)
    patches = PatchGrid(3, stride=2, min_valid=0.01).cut(image)
    labels, fractions = patches.label(truth, rule=rule)
    assert len(labels) == len(fractions) == len(patches)
    for (row, col), label, fraction in zip(starts(patches), labels, fractions, strict=True):
        pixels = [
            int(truth[i, j])
            for i in range(row, row + 3)
            for j in range(col, col + 3)
            if not np.isnan(image[i, j])
        ]
        number = Counter(pixels)
        asked = [value for value in number if value != 0] if rule == "any" else list(number)
        best = max(asked or [0], key=lambda value: (number[value], -value))
        assert (label, fraction) == (best, number[best] / len(pixels))


# Bad input ----------------------------------------------------------------------------------


@pytest.mark.parametrize(
    ("options", "error", "message"),
    [
        ({"size": 1}, ValueError, "size must be >= 2; got 1"),
        ({"size": (4, 1)}, ValueError, r"size\[1\] must be >= 2; got 1"),
        ({"size": 0}, ValueError, "size must be >= 2; got 0"),
        ({"size": 4.0}, TypeError, "size must be an integer; got 4.0"),
        ({"size": True}, TypeError, "size must be an integer; got True"),
        ({"size": "4"}, TypeError, "size must be an integer; got '4'"),
        ({"size": (4, 4, 4)}, ValueError, r"size must be one integer or \(rows, columns\)"),
        ({"stride": 0}, ValueError, "stride must be >= 1; got 0"),
        ({"stride": -4}, ValueError, "stride must be >= 1; got -4"),
        ({"stride": (1, 0)}, ValueError, r"stride\[1\] must be >= 1; got 0"),
        ({"stride": 1.5}, TypeError, "stride must be an integer; got 1.5"),
        ({"min_valid": 1.5}, ValueError, "min_valid must be <= 1; got 1.5"),
        ({"min_valid": -0.1}, ValueError, "min_valid must be a finite number >= 0; got -0.1"),
        ({"min_valid": np.nan}, ValueError, "min_valid must be a finite number >= 0; got nan"),
        ({"min_valid": None}, TypeError, "min_valid must be a number; got None"),
        ({"edge": "pad"}, ValueError, "edge must be one of 'drop', 'shift'; got 'pad'"),
        ({"edge": None}, ValueError, "edge must be one of 'drop', 'shift'; got None"),
    ],
)
def test_bad_options(options, error, message):
    with pytest.raises(error, match=message):
        PatchGrid(**options)


@pytest.mark.parametrize(
    ("image", "mask", "error", "message"),
    [
        (np.zeros((3, 9)), None, ValueError, "3x9 pixels is smaller than a patch of 4x4"),
        (np.zeros((9, 3)), None, ValueError, "9x3 pixels is smaller than a patch of 4x4"),
        (np.zeros((9, 9, 3)), None, ValueError, r"2 dimensions .* got shape \(9, 9, 3\)"),
        (np.zeros(9), None, ValueError, r"2 dimensions .* got shape \(9,\)"),
        (np.zeros((9, 9), complex), None, TypeError, "got dtype complex128"),
        ([[1, 2], [3]], None, ValueError, "image must be an array; it is ragged"),
        (np.full((9, 9), np.inf), None, ValueError, "image holds inf at row 0, column 0"),
        (np.zeros((9, 9)), np.ones((9, 9)), TypeError, "mask of image must be boolean"),
        (np.zeros((9, 9)), np.ones((9, 8), bool), ValueError, r"mask of image has shape \(9, 8\)"),
    ],
)
def test_bad_images(image, mask, error, message):
    with pytest.raises(error, match=message):
        PatchGrid(4).cut(image, mask)


@pytest.mark.parametrize(
    ("label_image", "options", "error", "message"),
    [
        (np.zeros((10, 13)), {}, TypeError, "label_image must hold bool or integers; .* float64"),
        (np.full((10, 13), "a"), {}, TypeError, "label_image must hold .* Encode names"),
        (np.zeros((10, 12), int), {}, ValueError, r"label_image has shape \(10, 12\), the image"),
        (np.zeros((13, 10), int), {}, ValueError, r"shape \(13, 10\), the image \(10, 13\)"),
        (np.zeros((10, 13), int), {"rule": "most"}, ValueError, "rule must be one of 'majority',"),
        (np.zeros((10, 13), int), {"background": "0"}, TypeError, "background must be .* got '0'"),
        (np.zeros((10, 13), int), {"background": 0.5}, TypeError, "background must be .* got 0.5"),
        (np.zeros((10, 13), int), {"background": None}, TypeError, "background must be a bool or"),
        (np.zeros((10, 13), int), {"rule": None}, ValueError, "rule must be one of .* got None"),
    ],
)
def test_bad_labels(label_image, options, error, message):
    with pytest.raises(error, match=message):
        PatchGrid(4).cut(IMAGE).label(label_image, **options)


def test_a_patch_without_a_known_label_has_none():
    masked = np.ma.MaskedArray(np.zeros(IMAGE.shape, dtype=int), mask=False)
    masked[0:4, 4:8] = np.ma.masked
    with pytest.raises(ValueError, match="the patch at row 0, column 4 has no valid pixel with a"):
        PatchGrid(4).cut(IMAGE).label(masked)


def test_a_patch_without_valid_pixels_has_no_label():
    image = IMAGE.astype(float)
    image[4:8, 0:4] = np.nan
    patches = PatchGrid(4).cut(image)
    with pytest.raises(ValueError, match="the patch at row 4, column 0 has no valid pixel"):
        patches.label(np.zeros(image.shape, dtype=int))


def test_slices_are_patches_too():
    patches = PatchGrid(size=4).cut(np.arange(64.0).reshape(8, 8))
    part = patches[1:3]
    assert isinstance(part, Patches)
    assert part.positions.tolist() == [[0, 4], [4, 0]]
    assert part.label(np.eye(8, dtype=int)).labels.tolist() == [0, 0]
    assert len(list(part)) == len(part) == 2
    for wrong in (True, 1.0, "a", np.array([0, 1])):
        with pytest.raises(TypeError, match="an integer or a slice in brackets; got"):
            patches[wrong]


@pytest.mark.parametrize(
    ("background", "dtype"), [(300, "uint8"), (-1, "uint8"), (5, "bool"), (2**70, "int64")]
)
def test_a_background_that_no_pixel_can_have_is_refused(background, dtype):
    patches = PatchGrid(size=4).cut(np.zeros((8, 8)))
    with pytest.raises(ValueError, match=r"background must be a label that .* can hold"):
        patches.label(np.zeros((8, 8), dtype), "any", background=background)


@pytest.mark.parametrize("shape", [(4,), 4.5, None, "ab", (4, 4, 4), (4.0, 4.0)])
def test_shapes_are_two_integers(shape):
    with pytest.raises((TypeError, ValueError), match=r"shape(\[0\])? must be"):
        PatchGrid(size=2).positions(shape)

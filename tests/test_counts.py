"""Laws 1 and 2: counting is exact and additive, for every type, layout, mask and level."""

import itertools

import hypothesis.strategies as st
import naive
import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis.extra.numpy import array_shapes, arrays
from skimage import data, measure

from mfeat import count_patterns
from mfeat import counts as counts_module
from mfeat.counts import STATISTICS
from mfeat.functionals import euler

DTYPES = [
    "bool",
    "int8",
    "uint8",
    "int16",
    "uint16",
    "int32",
    "uint32",
    "int64",
    "uint64",
    "float16",
    "float32",
    "float64",
]
DOUBLED = {"horizontal": ("2h", 1), "vertical": ("2v", 1), "falling": ("d", 2), "rising": ("a", 2)}


def assert_equals_naive(image, levels, mask=None, edges="inside"):
    """Compare every integer that users see with the naive reference, with ==."""
    got = count_patterns(image, levels, mask, edges=edges)
    framed = edges == "framed"
    listed = [level.item() for level in got.levels]
    classes = naive.window_classes(np.asarray(image), listed, mask, framed=framed)
    crossings = naive.directed_crossings(np.asarray(image), listed, mask, framed=framed)
    for name, numbers in got.classes().items():
        assert numbers.dtype == np.int64
        assert numbers.tolist() == classes[name], (name, image.dtype)
    for name, numbers in got.crossings().items():
        key, factor = DOUBLED[name]
        assert numbers.tolist() == [factor * n for n in crossings[key]], (name, image.dtype)
    valid = naive.valid_pixels(np.asarray(image), mask)
    assert got.windows == naive.valid_windows(valid, framed=framed)


def random_image(dtype, shape, rng):
    if dtype == "bool":
        return rng.random(shape) < 0.5
    if dtype.startswith("float"):
        return rng.normal(size=shape).round(1).astype(dtype)
    info = np.iinfo(dtype)
    return rng.integers(info.min, info.max, shape, dtype=dtype, endpoint=True)


def levels_around(image, rng):
    """Levels below, among, exactly on and above the pixels, both on and between integers."""
    values = np.unique(image.astype(np.float64))
    chosen = rng.choice(values, min(4, len(values)), replace=False)
    return np.unique(np.concatenate([chosen, chosen + 0.5, [values[0] - 1, values[-1] + 1]]))


@pytest.mark.parametrize("edges", ["inside", "framed"])
@pytest.mark.parametrize("dtype", DTYPES)
def test_every_dtype_equals_the_naive_reference(dtype, edges):
    rng = np.random.default_rng(DTYPES.index(dtype))
    image = random_image(dtype, (6, 9), rng)
    assert_equals_naive(image, levels_around(image, rng), edges=edges)
    mask = rng.random(image.shape) < 0.8
    assert_equals_naive(image, levels_around(image, rng), mask, edges=edges)


@pytest.mark.parametrize("dtype", ["uint8", "uint16", "int64", "float16", "float32", "float64"])
def test_memory_order_strides_and_byte_order_do_not_matter(dtype):
    rng = np.random.default_rng(1)
    image = random_image(dtype, (8, 11), rng)
    levels = levels_around(image, rng)
    wanted = count_patterns(image, levels)
    big = np.zeros((16, 33), dtype=dtype)
    big[::2, ::3] = image
    read_only = image.copy()
    read_only.flags.writeable = False
    for other in (
        np.asfortranarray(image),
        big[::2, ::3],
        image[::-1, ::-1].copy()[::-1, ::-1],
        image.astype(image.dtype.newbyteorder(">")),
        image.astype(image.dtype.newbyteorder("<")),
        read_only,
        image.tolist() if dtype != "float16" else image,
    ):
        assert count_patterns(other, levels) == wanted


@settings(max_examples=60, deadline=None)
@given(st.data())
def test_any_size_type_mask_and_levels(data):
    dtype = data.draw(st.sampled_from(["bool", "int8", "uint16", "int64", "float32", "float64"]))
    shape = data.draw(array_shapes(min_dims=2, max_dims=2, min_side=2, max_side=7))
    small = st.integers(0, 1) if dtype == "bool" else st.integers(0, 4)
    image = data.draw(arrays(dtype, shape, elements=small.map(np.dtype(dtype).type)))
    mask = data.draw(st.none() | arrays(bool, shape))
    levels = data.draw(
        st.lists(
            st.sampled_from([-1, 0, 0.5, 1, 2, 2.5, 3, 4, 9]), min_size=1, max_size=6, unique=True
        ).map(sorted)
    )
    edges = data.draw(st.sampled_from(["inside", "framed"]))
    assert_equals_naive(image, levels, mask, edges)


@pytest.mark.parametrize("dtype", ["int64", "uint64"])
def test_64_bit_integers_do_not_pass_through_floats(dtype):
    # 2**62, 2**62 + 1 and 2**62 + 2 are one float64; the comparison must tell them apart
    base = 2**62
    image = np.array([[base, base + 1], [base + 2, base - 1]], dtype=dtype)
    levels = [base - 1, base, base + 1, base + 2, base + 3]
    assert_equals_naive(image, levels)
    assert count_patterns(image, levels).table[STATISTICS.index("pixel")].tolist() == [
        4,
        3,
        2,
        1,
        0,
    ]


def test_levels_beyond_the_type_of_the_image():
    # no wrap-around: 300 is above every uint8, -1 below
    image = np.array([[0, 255], [255, 0]], dtype=np.uint8)
    assert_equals_naive(image, [-1, 0, 255, 256, 300])
    assert_equals_naive(image, [-1e300, -0.5, 254.5, 255.0, 255.5, 1e300])
    top = np.array([[2**64 - 1, 0], [2**63, 1]], dtype=np.uint64)
    assert_equals_naive(top, np.array([0, 1, 2**63, 2**64 - 1], dtype=np.uint64))
    assert_equals_naive(top, [0.0, float(2**63), float(2**64)])
    low = np.array([[-(2**63), 2**63 - 1], [0, -1]], dtype=np.int64)
    assert_equals_naive(low, np.array([-(2**63), -1, 0, 2**63 - 1]))
    assert_equals_naive(low, np.array([0, 2**63, 2**64 - 1], dtype=np.uint64))
    assert_equals_naive(low, [-float(2**63), -0.5, float(2**63)])


def test_float_levels_are_not_rounded_to_the_type_of_the_image():
    # float32(0.1) > 0.1 > the float32 below it: the level 0.1 itself must decide
    tenth = np.float32(0.1)
    below = np.nextafter(tenth, np.float32(0))
    image = np.array([[tenth, below], [below, tenth]], dtype=np.float32)
    assert float(tenth) > 0.1 > float(below)
    assert_equals_naive(image, [0.1])
    assert_equals_naive(image, [float(below), float(tenth)])
    # a float64 image keeps differences that float32 would lose
    fine = np.array([[1.0, 1.0 + 2**-50], [1.0, 1.0]])
    assert_equals_naive(fine, [1.0, 1.0 + 2**-51, 1.0 + 2**-50])
    # integer levels beyond 2**53 against a float64 image
    large = np.array([[2.0**60, 2.0**60 + 256], [0.0, 1.0]])
    assert_equals_naive(large, [2**60 - 1, 2**60, 2**60 + 1, 2**60 + 256, 2**60 + 257])
    assert_equals_naive(large.astype(np.float32), [2**60 - 1, 2**60, 2**60 + 1])
    # levels beyond the range of float32 and float16
    half = np.array([[65504, 1], [0, -65504]], dtype=np.float16)
    assert_equals_naive(half, [-1e30, -65504.0, 65504.0, 65505.0, 1e30])
    assert_equals_naive(half.astype(np.float32), [-1e300, 0.0, 1e300])


@pytest.mark.parametrize("number", [1, 2, 24, 25, 256, 4096, 65_535])
def test_any_number_of_levels(number):
    rng = np.random.default_rng(2)
    image = rng.integers(0, 65_536, (40, 30)).astype(np.uint16)
    levels = np.arange(1, number + 1) * (65_535 // number)
    got = count_patterns(image, levels)
    for k in np.unique(np.linspace(0, number - 1, 12).astype(int)):
        alone = count_patterns(image, levels[k : k + 1])
        assert np.array_equal(got.table[:, k], alone.table[:, 0])
    if number <= 256:
        for k in (0, number // 2, number - 1):
            assert_equals_naive(image, levels[k : k + 1])


def test_nan_masked_arrays_and_masks_mean_the_same():
    rng = np.random.default_rng(3)
    image = rng.normal(size=(12, 15))
    missing = rng.random(image.shape) < 0.15
    with_nan = np.where(missing, np.nan, image)
    levels = [-1.0, 0.0, 0.3]
    wanted = count_patterns(with_nan, levels)
    assert 0 < wanted.windows < wanted.possible_windows
    assert count_patterns(image, levels, mask=~missing) == wanted
    assert count_patterns(np.ma.MaskedArray(image, missing), levels) == wanted
    half = np.ma.MaskedArray(image, missing & (np.arange(15) < 8))
    assert count_patterns(half, levels, mask=~(missing & (np.arange(15) >= 8))) == wanted
    # a mask that is itself masked is False there; masked rows stay masked
    doubtful = np.ma.MaskedArray(np.ones(image.shape, bool), missing)
    assert count_patterns(image, levels, mask=doubtful) == wanted
    assert count_patterns(list(np.ma.MaskedArray(image, missing)), levels) == wanted
    # what lies under the mask has no say, not even infinity
    wild = np.where(missing, np.inf, image)
    assert count_patterns(wild, levels, mask=~missing) == wanted


def test_all_missing_counts_nothing():
    counts = count_patterns(np.full((4, 5), np.nan), [0.0])
    assert counts.windows == 0
    assert counts.valid_fraction == 0.0
    assert not counts.table.any()


def cut_points(data, length):
    inner = (
        data.draw(st.lists(st.integers(1, length - 2), unique=True, max_size=3))
        if (length > 2)
        else []
    )
    return [0, *sorted(inner), length - 1]


@settings(max_examples=60, deadline=None)
@given(st.data())
def test_tiles_that_share_a_row_and_a_column_add_up(data):
    shape = data.draw(array_shapes(min_dims=2, max_dims=2, min_side=2, max_side=12))
    image = data.draw(arrays(np.uint8, shape, elements=st.integers(0, 5)))
    mask = data.draw(st.none() | arrays(bool, shape))
    levels = [1, 2.5, 4]
    rows, cols = cut_points(data, shape[0]), cut_points(data, shape[1])
    tiles = [
        np.s_[top : bottom + 1, left : right + 1]
        for top, bottom in itertools.pairwise(rows)
        for left, right in itertools.pairwise(cols)
    ]
    order = data.draw(st.permutations(range(len(tiles))))
    parts = [
        count_patterns(image[tiles[k]], levels, None if mask is None else mask[tiles[k]])
        for k in order
    ]
    assert sum(parts) == count_patterns(image, levels, mask)


@pytest.mark.parametrize("edges", ["inside", "framed"])
@pytest.mark.parametrize("band", [1, 7, 64, 1000])
def test_bands_do_not_show(monkeypatch, band, edges):
    rng = np.random.default_rng(4)
    image = rng.normal(size=(31, 13))
    mask = rng.random(image.shape) < 0.9
    wanted = [count_patterns(image, [0.0, 1.0], m, edges=edges) for m in (None, mask)]
    monkeypatch.setattr(counts_module, "BAND_PIXELS", band)
    assert [count_patterns(image, [0.0, 1.0], m, edges=edges) for m in (None, mask)] == wanted


def test_framed_euler_numbers_equal_scikit_image_and_labels():
    # scikit-image's euler_number and SciPy's labels, on 200 random images of all densities
    rng = np.random.default_rng(5)
    for _ in range(200):
        image = rng.random(rng.integers(2, 15, 2)) < rng.random()
        counts = count_patterns(image, [1], edges="framed")
        padded = np.pad(image, 1)
        for connectivity, order in ((4, 1), (8, 2)):
            got = euler(counts, connectivity=connectivity)[0]
            assert got == measure.euler_number(padded, connectivity=order)
            assert got == naive.components_minus_holes(image, connectivity)


def test_real_images_at_every_grey_level():
    # scikit-image's bundled coins, against the same package's euler_number
    image = data.coins()[60:200, 40:180]
    levels = np.arange(1, 256)
    counts = count_patterns(image, levels, edges="framed")
    four, eight = euler(counts, connectivity=4), euler(counts, connectivity=8)
    for k in range(0, 255, 17):
        padded = np.pad(image >= levels[k], 1)
        assert four[k] == measure.euler_number(padded, connectivity=1)
        assert eight[k] == measure.euler_number(padded, connectivity=2)


def test_merging_refuses_what_does_not_belong_together():
    image = np.arange(12).reshape(3, 4)
    counts = count_patterns(image, [1, 2])
    with pytest.raises(ValueError, match=r"different levels.*\[1, 2\].*\[1, 3\]"):
        counts + count_patterns(image, [1, 3])
    with pytest.raises(ValueError, match=r"levels\[1\] = 2.0000000001"):
        counts + count_patterns(image, [1, 2.0000000001])
    assert counts + count_patterns(image, [1.0, 2.0]) == counts + counts  # equal as numbers
    large = [count_patterns(image, levels) for levels in ([2**53 + 1], [2.0**53])]
    assert large[0] != large[1]
    with pytest.raises(ValueError, match=r"different pitch.*\(1.0, 1.0\) and \(2.0, 2.0\)"):
        counts + count_patterns(image, [1, 2], pitch=2.0)
    with pytest.raises(ValueError, match=r"different edges.*'inside' and 'framed'"):
        counts + count_patterns(image, [1, 2], edges="framed")
    framed = count_patterns(image, [1], edges="framed")
    with pytest.raises(ValueError, match=r'framed counts cannot be merged.*edges="inside"'):
        framed + framed
    with pytest.raises(TypeError):
        counts + 1
    with pytest.raises(ValueError, match="read-only"):
        counts.table[0] = 1
    assert (counts == 3) is False
    assert repr(counts) == (
        "PatternCounts(2 levels [1, 2], windows=6 of 6, pitch=(1.0, 1.0), edges='inside')"
    )


OK = np.zeros((3, 3))


@pytest.mark.parametrize(
    ("error", "match", "image", "levels", "options"),
    [
        (ValueError, r"image must have 2 dimensions.*\(9,\)", np.zeros(9), [0], {}),
        (ValueError, r"2 dimensions.*MinkowskiCurves", np.zeros((2, 3, 3)), [0], {}),
        (ValueError, r"at least 2x2.*\(1, 5\)", np.zeros((1, 5)), [0], {}),
        (ValueError, r"at least 2x2.*\(0, 5\)", np.zeros((0, 5)), [0], {}),
        (ValueError, r"ragged", [[1, 2], [3]], [0], {}),
        (TypeError, r"dtype complex128", np.zeros((3, 3), complex), [0], {}),
        (TypeError, r"image must be an array of numbers; got dict", {1: 2}, [0], {}),
        (TypeError, r"dtype object", np.zeros((3, 3), object), [0], {}),
        (TypeError, r"dtype <U1", np.array([["a", "b"], ["c", "d"]]), [0], {}),
        (
            ValueError,
            r"holds inf at row 1, column 2",
            np.array([[0, 0, 0], [0, 0, np.inf]]),
            [0],
            {},
        ),
        (ValueError, r"holds -inf at row 0, column 0", np.array([[-np.inf, 0], [0, 0]]), [0], {}),
        (ValueError, r"levels must hold 1 to 65535 levels; got 0", OK, [], {}),
        (ValueError, r"got 65536", OK, np.arange(65_536), {}),
        (ValueError, r"levels\[1\] is nan", OK, [0, np.nan, 1], {}),
        (ValueError, r"levels\[0\] is -inf", OK, [-np.inf, 1], {}),
        (ValueError, r"strictly ascending; levels\[0\] = 2 is followed by 1", OK, [2, 1], {}),
        (ValueError, r"levels\[1\] = 3 is followed by 3.*numpy.unique", OK, [1, 3, 3], {}),
        (ValueError, r"one-dimensional; got shape \(1, 2\)", OK, [[1, 2]], {}),
        (TypeError, r"sequence of numbers; got 3", OK, 3, {}),
        (TypeError, r"integers or floats", OK, ["1"], {}),
        (TypeError, r"integers or floats; got dtype bool", OK, [True], {}),
        (ValueError, r"levels mixes 9007199254740993", OK, [0.5, 2**53 + 1], {}),
        (
            ValueError,
            r"mask of image has shape \(2, 2\), the image \(3, 3\)",
            OK,
            [0],
            {"mask": np.ones((2, 2), bool)},
        ),
        (
            TypeError,
            r"mask of image must be boolean.*uint8.*mask != 0",
            OK,
            [0],
            {"mask": np.ones((3, 3), np.uint8)},
        ),
        (ValueError, r"pitch must be a finite number > 0; got 0", OK, [0], {"pitch": 0}),
        (ValueError, r"pitch must be from 1e-60 to 1e60; got 1e-170", OK, [0], {"pitch": 1e-170}),
        (
            ValueError,
            r"pitch must be a finite number > 0; got 1000.*characters",
            OK,
            [0],
            {"pitch": 10**400},
        ),
        (
            ValueError,
            r"mask of image must be an array; it is ragged",
            OK,
            [0],
            {"mask": [[True], [True, False]]},
        ),
        (
            ValueError,
            r"pitch\[1\] must be a finite number > 0; got -1",
            OK,
            [0],
            {"pitch": (1, -1)},
        ),
        (ValueError, r"pitch must be one number or .*got 3", OK, [0], {"pitch": (1, 2, 3)}),
        (TypeError, r"pitch must be a number; got '1'", OK, [0], {"pitch": "1"}),
        (
            ValueError,
            r"edges must be one of 'inside', 'framed'; got 'open'",
            OK,
            [0],
            {"edges": "open"},
        ),
    ],
)
def test_bad_input_is_named(error, match, image, levels, options):
    with pytest.raises(error, match=match):
        count_patterns(image, levels, **options)


def test_long_doubles_are_refused():
    if np.dtype(np.longdouble).itemsize == 8:
        pytest.skip("long double is float64 on this platform")
    with pytest.raises(TypeError, match=r"float128|longdouble|float96"):
        count_patterns(np.zeros((3, 3), np.longdouble), [0])

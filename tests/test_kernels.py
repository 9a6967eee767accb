"""Kernels against first principles: compiled, without compilation, and with bounds checks.

The whole file runs in each of the three modes: two child processes run it again in the other two,
and the tests at its end compare which tests passed there with which tests it has.

Rank of expected values: by hand, law, a naive loop written here or in `naive`.
"""

import math
import os
import re
import subprocess
import sys
from fractions import Fraction
from pathlib import Path

import naive
import numba
import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st
from hypothesis.extra import numpy as st_numpy

from mfeat import _checks, _field_kernels, _kernels
from mfeat.counts import STATISTICS
from mfeat.smoothing import gaussian_weights

#: Set in the child processes only, which therefore start none themselves.
MODE = os.environ.get("MFEAT_KERNEL_MODE", "")
MODES = {"uncompiled": {"NUMBA_DISABLE_JIT": "1"}, "checked": {"NUMBA_BOUNDSCHECK": "1"}}

#: The types in which kernels see images.
TYPES = ("uint8", "int32", "int64", "uint64", "float32", "float64")

fixed_examples = settings(max_examples=60, deadline=None, derandomize=True, database=None)


def symmetries(image):
    """The eight images that rotations by 90 degrees and reflections make of one."""
    turned = [np.rot90(image, k) for k in range(4)]
    return [np.ascontiguousarray(view) for t in turned for view in (t, t.T)]


# The modes


def test_the_mode_is_the_one_asked_for():
    compiled = hasattr(_kernels.count_windows, "py_func")
    assert compiled == (not numba.config.DISABLE_JIT)
    if MODE == "uncompiled":
        assert not compiled
    if MODE == "checked":
        assert compiled
        assert numba.config.BOUNDSCHECK == 1


@pytest.mark.skipif(MODE == "", reason="outside an array without bounds checks: undefined")
def test_a_place_outside_an_array_is_noticed():
    index = np.full((3, 3), 9, dtype=np.uint16)  # the table has one column, for index 0
    ok = whole_ok(2, 2)
    with pytest.raises(IndexError, match="out of bounds"):
        _kernels.count_windows(index, ok, np.zeros((8, 1), dtype=np.int64))


# Level indices


def test_the_types_are_those_of_images():
    every = ["?", "i1", "i2", "i4", "i8", "u1", "u2", "u4", "u8", "f2", "f4", "f8"]
    seen = {_checks.compiled_type(np.zeros((2, 2), dtype=name)).dtype.name for name in every}
    assert seen == set(TYPES)


def reached(values, thresholds):
    """The number of thresholds <= each value; a NaN reaches none."""
    found = np.searchsorted(thresholds, values, side="right")
    return np.where(values != values, 0, found)


def by_table(values, thresholds, index, top, left):
    """Index by table, with scratch full of nonsense."""
    scratch = np.full(256, 9999, dtype=np.uint16)
    _kernels.index_by_table(values, thresholds, scratch, index, top, left)


#: The ways to index images of a type.
WAYS = dict.fromkeys(TYPES, (_kernels.index_by_search, _kernels.index_by_comparison))
WAYS["uint8"] = (by_table,)


def check_index(values, thresholds, top=0, left=0):
    """Each way writes the expected indices with a corner at (top, left), and nowhere else."""
    values = _checks.read_only(values)
    shape = (top + values.shape[0] + 1, left + values.shape[1] + 1)
    expected = np.full(shape, 7, dtype=np.uint16)
    expected[top:-1, left:-1] = reached(values, thresholds)
    for by_kernel in WAYS[values.dtype.name]:
        index = np.full(shape, 7, dtype=np.uint16)
        by_kernel(values, thresholds, index, top, left)
        assert np.array_equal(index, expected)


def values_and_thresholds(dtype, shape, count, rng):
    """Values of which many equal a threshold; thresholds of which some are tied."""
    if np.dtype(dtype).kind == "f":
        pool = rng.standard_normal(count + 3).astype(dtype)
        pool[:3] = np.finfo(dtype).min, 0.0, np.finfo(dtype).max
    else:
        limits = np.iinfo(dtype)
        pool = rng.integers(limits.min, limits.max, count + 3, dtype=dtype, endpoint=True)
        pool[:3] = limits.min, limits.max, limits.max - 1
    thresholds = np.sort(rng.choice(pool, count))
    values = rng.choice(pool, shape)
    if np.dtype(dtype).kind == "f":
        values[rng.random(shape) < 0.1] = np.nan
    return values, thresholds


@pytest.mark.parametrize("dtype", TYPES)
def test_index_kernels_count_the_thresholds_reached(dtype):
    rng = np.random.default_rng(1)
    shapes = [(1, 9), (9, 1), (2, 2), (3, 17), (1, 1), (4, 33)]
    for count in (1, 2, 3, 4, 7, 16, 24, 25, 63, 64, 65, 300):
        for k, shape in enumerate(shapes):
            values, thresholds = values_and_thresholds(dtype, shape, count, rng)
            check_index(values, thresholds, top=k % 2, left=k % 3)


@fixed_examples
@given(st.data())
def test_index_kernels_on_any_image(data):
    dtype = data.draw(st.sampled_from(TYPES))
    number = st_numpy.from_dtype(np.dtype(dtype), allow_nan=False)
    count = data.draw(st.integers(1, 40))
    thresholds = np.sort(data.draw(st_numpy.arrays(dtype, count, elements=number)))
    known = st.sampled_from(list(thresholds))
    pixel = st.one_of(st_numpy.from_dtype(np.dtype(dtype)), known)
    shape = data.draw(st_numpy.array_shapes(min_dims=2, max_dims=2, max_side=6))
    check_index(data.draw(st_numpy.arrays(dtype, shape, elements=pixel)), thresholds)


def test_index_of_a_threshold_is_its_place():
    """By hand: of the thresholds 0, 2, 4, ..., the value 2 k reaches k + 1 and 2 k + 1 no more."""
    thresholds = np.arange(0, 1000, 2, dtype=np.int32)
    values = np.array([[-1, 0, 1, 2, 3, 997, 998, 999, 5000]], dtype=np.int32)
    for by_kernel in (_kernels.index_by_search, _kernels.index_by_comparison):
        index = np.zeros((1, 9), dtype=np.uint16)
        by_kernel(_checks.read_only(values), thresholds, index, 0, 0)
        assert index.tolist() == [[0, 1, 1, 2, 2, 499, 500, 500, 500]]


def test_index_of_the_largest_number_of_levels():
    """By hand: 65,535 thresholds fill the 16 bits of an index, and do not overflow them."""
    thresholds = np.arange(_checks.MAX_LEVELS, dtype=np.int32)
    values = np.array([[-1, 0], [_checks.MAX_LEVELS - 2, 1 << 30]], dtype=np.int32)
    for by_kernel in (_kernels.index_by_search, _kernels.index_by_comparison):
        index = np.zeros((2, 2), dtype=np.uint16)
        by_kernel(_checks.read_only(values), thresholds, index, 0, 0)
        assert index.tolist() == [[0, 1], [65_534, 65_535]]


@pytest.mark.parametrize("dtype", ["uint8", "float64"])
def test_no_threshold_means_index_zero(dtype):
    check_index(np.array([[0, 255]], dtype=dtype), np.empty(0, dtype=dtype))


def test_a_table_holds_the_index_of_every_value():
    """All 256 values, with every value a threshold, some of them, tied ones, and the ends."""
    every = np.arange(256, dtype=np.uint8)
    tied = np.repeat(every, 3)
    for thresholds in (every, every[1:], every[::7], tied, every[:1], every[-1:], tied[-6:]):
        check_index(every.reshape(8, 32), thresholds, top=1, left=1)


@pytest.mark.parametrize("few", [0, 3, 100])
def test_stacks_use_the_thresholds_within_reach(few):
    rng = np.random.default_rng(2)
    values = rng.standard_normal((5, 3, 4))
    thresholds = np.sort(rng.standard_normal((5, 8)), axis=1)
    reach = np.array([0, 2, 3, 4, 8])  # none, below, at and above 3 ("few"), all
    index = np.full((5, 4, 5), 9, dtype=np.uint16)
    _kernels.index_stack(_checks.read_only(values), thresholds, reach, few, index)
    for k in range(5):
        expected = np.full((4, 5), 9)
        expected[:3, :4] = reached(values[k], thresholds[k, : reach[k]])
        assert np.array_equal(index[k], expected)


def test_stacks_of_bytes_use_the_thresholds_within_reach():
    rng = np.random.default_rng(20)
    values = rng.integers(0, 256, (5, 3, 4), dtype=np.uint8)
    thresholds = np.sort(rng.integers(0, 256, (5, 8), dtype=np.uint8), axis=1)
    reach = np.array([8, 0, 5, 1, 8])  # also fewer after more: the scratch is used again
    index = np.full((5, 4, 5), 9, dtype=np.uint16)
    scratch = np.empty(256, dtype=np.uint16)
    values = _checks.read_only(values)
    _kernels.index_stack_by_table(values, thresholds, reach, scratch, index)
    for k in range(5):
        expected = np.full((4, 5), 9)
        expected[:3, :4] = reached(values[k], thresholds[k, : reach[k]])
        assert np.array_equal(index[k], expected)


# Windows


def naive_ok(valid):
    """The map of counting windows, by the lower right pixel of each."""
    rows, cols = valid.shape
    ok = np.zeros((rows + 1, cols + 1), dtype=np.uint8)
    for i in range(1, rows):
        for j in range(1, cols):
            ok[i, j] = min(valid[i - 1, j - 1], valid[i - 1, j], valid[i, j - 1], valid[i, j])
    return ok


@pytest.mark.parametrize("shape", [(1, 1), (1, 8), (8, 1), (2, 2), (7, 5), (19, 23)])
@pytest.mark.parametrize("share", [1.0, 0.8, 0.0])
def test_windows_of_four_valid_pixels_count(shape, share):
    valid = (np.random.default_rng(3).random(shape) < share).astype(np.uint8)
    ok = np.full((shape[0] + 1, shape[1] + 1), 9, dtype=np.uint8)
    total = _kernels.windows_ok(valid, ok)
    assert np.array_equal(ok, naive_ok(valid))
    assert total == naive.valid_windows(valid)
    if share == 1.0:
        assert total == (shape[0] - 1) * (shape[1] - 1)


def whole_ok(rows, cols):
    """The map of windows of an image without missing pixels."""
    return naive_ok(np.ones((rows, cols), dtype=np.uint8))


def naive_table(index, ok, levels):
    """Histograms over the indices of the pixels, and of the maxima and minima of their sets."""
    table = {name: [0] * (levels + 1) for name in STATISTICS}
    index = index.tolist()
    for i in range(1, len(ok)):
        for j in range(1, len(ok[0])):
            if not ok[i, j]:
                continue
            a, b, c, d = index[i - 1][j - 1], index[i - 1][j], index[i][j - 1], index[i][j]
            for pixel in (a, b, c, d):
                table["pixel"][pixel] += 1
            for pixel in (a, d):
                table["diagonal"][pixel] += 1
            for pair in ((a, b), (c, d)):
                table["horizontal"][max(pair)] += 1
            for pair in ((a, c), (b, d)):
                table["vertical"][max(pair)] += 1
            table["falling"][max(a, d)] += 1
            table["rising"][max(b, c)] += 1
            table["largest"][max(a, b, c, d)] += 1
            table["smallest"][min(a, b, c, d)] += 1
    return table


def check_count(index, ok, levels):
    """Every row of the table grows by the naive count; what it held before stays."""
    before = np.arange(8 * (levels + 1), dtype=np.int64).reshape(8, -1)
    table = before.copy()
    _kernels.count_windows(index, ok, table)
    expected = naive_table(index, ok, levels)
    for name, old, new in zip(STATISTICS, before, table, strict=True):
        assert (new - old).tolist() == expected[name], name


def random_ok(shape, share, rng):
    """A map of counting windows, none of which leaves an image of the shape."""
    ok = np.zeros((shape[0] + 1, shape[1] + 1), dtype=np.uint8)
    ok[1:-1, 1:-1] = rng.random((shape[0] - 1, shape[1] - 1)) < share
    return ok


@pytest.mark.parametrize("levels", [1, 2, 16, 1000, 65_535])
def test_counts_of_windows(levels):
    rng = np.random.default_rng(4)
    for shape in [(2, 2), (2, 9), (9, 2), (8, 11), (1, 6), (6, 1)]:
        for share in (1.0, 0.7, 0.0):
            index = rng.integers(0, levels, (shape[0] + 1, shape[1] + 1), np.uint16, endpoint=True)
            check_count(index, random_ok(shape, share, rng), levels)


@fixed_examples
@given(st.data())
def test_counts_of_any_windows(data):
    rows, cols = data.draw(st.tuples(st.integers(2, 6), st.integers(2, 6)))
    elements = st.integers(0, 3)  # few, so that ties of every kind occur
    index = data.draw(st_numpy.arrays(np.uint16, (rows + 1, cols + 1), elements=elements))
    ok = np.zeros((rows + 1, cols + 1), dtype=np.uint8)
    inner = (rows - 1, cols - 1)
    ok[1:-1, 1:-1] = data.draw(st_numpy.arrays(np.uint8, inner, elements=st.integers(0, 1)))
    check_count(index, ok, 3)


def test_counts_of_one_window_by_hand():
    """By hand: the window 1 4 / 2 3 has the pairs 14, 23 across, 12, 43 down, 13 and 42 oblique."""
    index = np.array([[1, 4, 0], [2, 3, 0], [0, 0, 0]], dtype=np.uint16)
    ok = whole_ok(2, 2)
    table = np.zeros((8, 5), dtype=np.int64)
    _kernels.count_windows(index, ok, table)
    assert dict(zip(STATISTICS, table.tolist(), strict=True)) == {
        "pixel": [0, 1, 1, 1, 1],
        "diagonal": [0, 1, 0, 1, 0],
        "horizontal": [0, 0, 0, 1, 1],
        "vertical": [0, 0, 1, 0, 1],
        "falling": [0, 0, 0, 1, 0],
        "rising": [0, 0, 0, 0, 1],
        "largest": [0, 0, 0, 0, 1],
        "smallest": [0, 1, 0, 0, 0],
    }


def test_stacks_are_counted_image_by_image():
    rng = np.random.default_rng(5)
    index = rng.integers(0, 5, (4, 6, 8), dtype=np.uint16)
    ok = np.stack([random_ok((5, 7), 0.6, rng) for _ in range(4)])
    table, complete = np.zeros((2, 4, 8, 5), dtype=np.int64)
    _kernels.count_stack(index, ok, table)
    _kernels.count_complete_stack(index, complete)
    for k in range(4):
        expected = naive_table(index[k], ok[k], 4)
        assert table[k].tolist() == [expected[name] for name in STATISTICS]
        expected = naive_table(index[k], whole_ok(5, 7), 4)
        assert complete[k].tolist() == [expected[name] for name in STATISTICS]


@pytest.mark.parametrize("shape", [(2, 2), (2, 9), (9, 2), (3, 3), (3, 8), (17, 12), (64, 63)])
@pytest.mark.parametrize("levels", [1, 3, 40, 70_000 // 2])
def test_complete_images_are_counted_as_with_weights(shape, levels):
    # the fast path against the weighted kernel, and against the naive reference where it is small
    rng = np.random.default_rng(shape[0])
    kinds = (
        rng.integers(0, levels, (shape[0] + 1, shape[1] + 1), dtype=np.uint16, endpoint=True),
        np.full((shape[0] + 1, shape[1] + 1), levels, dtype=np.uint16),
    )
    for index in kinds:
        table, expected = np.zeros((2, 8, levels + 1), dtype=np.int64)
        _kernels.count_complete(index, table)
        _kernels.count_windows(index, whole_ok(*shape), expected)
        assert np.array_equal(table, expected)
        if levels == 3:
            by_hand = naive_table(index, whole_ok(*shape), levels)
            assert table.tolist() == [by_hand[name] for name in STATISTICS]


class Watched(np.ndarray):
    """An array that counts how often an item of it, or of a view of it, is read or written."""

    written = 0
    read = 0

    def __setitem__(self, key, value):
        Watched.written += 1
        super().__setitem__(key, value)

    def __getitem__(self, key):
        Watched.read += 1
        return super().__getitem__(key)


def watched_accesses(kernel, *arrays, levels):
    """Writes to and reads from the table in one count of an image."""
    table = np.zeros((8, levels + 1), dtype=np.int64).view(Watched)
    Watched.written = Watched.read = 0
    getattr(kernel, "py_func", kernel)(*arrays, table)
    return Watched.written, Watched.read


@pytest.mark.parametrize("levels", [1, 16, 1000, 65_535])
def test_counting_costs_the_same_at_any_number_of_levels(levels):
    """Law: eight updates of the table a pixel, whatever the levels and the image."""
    rng = np.random.default_rng(6)
    rows, cols = 6, 9
    shape = (rows + 1, cols + 1)
    whole = whole_ok(rows, cols)
    images = [
        np.zeros(shape, dtype=np.uint16),
        np.full(shape, levels, dtype=np.uint16),
        rng.integers(0, levels, shape, dtype=np.uint16, endpoint=True),
    ]
    for index in images:
        for ok in (whole, random_ok((rows, cols), 0.5, rng)):
            written, read = watched_accesses(_kernels.count_windows, index, ok, levels=levels)
            assert written == 8 * rows * cols
            assert read == written + 8  # and its eight rows are looked up once
        written, _ = watched_accesses(_kernels.count_complete, index, levels=levels)
        # by hand: seven a window; pixel and diagonal of each border pixel, two rows and columns of
        # pairs; and four entries of each column of the table, once an image
        border = 2 * 2 * (rows + cols - 2) + 2 * (rows - 1) + 2 * (cols - 1)
        assert written == 7 * (rows - 1) * (cols - 1) + border + 4 * (levels + 1)


def test_the_watched_array_notices_writes_through_views():
    array = np.zeros((3, 3)).view(Watched)
    Watched.written = 0
    array[1, 1] = 2.0
    array[2][0] += 1.0
    assert Watched.written == 2  # by hand: one assignment and one update


# Ranges and moments of images


@pytest.mark.parametrize("dtype", TYPES)
def test_value_range_is_that_of_valid_pixels(dtype):
    rng = np.random.default_rng(8)
    values = rng.integers(40, 140, (4, 5, 6)).astype(dtype)
    values[0] += 100  # all far above the zeros that `low` starts with
    valid = (rng.random((4, 5, 6)) < 0.5).astype(np.uint8)
    valid[3] = 0
    valid[2] = 0
    valid[2, 4, 5] = 1  # the last pixel alone
    low, high = np.full(4, 7, dtype=dtype), np.full(4, 7, dtype=dtype)
    _kernels.value_range(_checks.read_only(values), valid, low, high)
    for k in range(3):
        assert low[k] == values[k][valid[k] == 1].min()
        assert high[k] == values[k][valid[k] == 1].max()
    assert (low[3], high[3]) == (7, 7)  # no valid pixel: nothing is written


def test_value_range_of_negative_values():
    values = _checks.read_only(np.array([[[-5.0, -3.0], [-9.0, -4.0]]]))
    low, high = np.zeros(1), np.zeros(1)
    _kernels.value_range(values, np.ones((1, 2, 2), dtype=np.uint8), low, high)
    assert (low[0], high[0]) == (-9.0, -3.0)  # by hand; 0 is not among the pixels


# Moments


def moments(images, valid=None):
    """Means and standard deviations of a stack, with scratch full of NaN."""
    valid = np.ones(images.shape, dtype=np.uint8) if valid is None else valid
    mean, deviation = np.full(len(images), 7.0), np.full(len(images), 7.0)
    scratch = np.full((2, images.shape[2] + 1), np.nan)
    _kernels.moments(images, valid, scratch[0], scratch[1], mean, deviation)
    return mean, deviation


def cancelling_image(shape, decades, rng):
    """Values over many decades which, but for a few small ones, add up to zero."""
    size = math.prod(shape)
    number = size // 2 - 1
    half = rng.standard_normal(number) * 10.0 ** rng.uniform(-decades, decades, number)
    small = rng.standard_normal(size - 2 * number) * 10.0**-decades
    return rng.permutation(np.concatenate([half, -half, small])).reshape(shape)


def test_moments_by_hand():
    images = np.array([[[1.0, 2.0], [3.0, 4.0]], [[5.0, 5.0], [5.0, 5.0]]])
    mean, deviation = moments(images)
    assert mean.tolist() == [2.5, 5.0]
    assert deviation.tolist() == [math.sqrt(1.25), 0.0]


def test_moments_agree_with_exact_sums():
    """An exact sum (math.fsum) and an exact variance (fractions), to a rounding or two."""
    rng = np.random.default_rng(9)
    for shape in [(1, 1), (1, 9), (9, 1), (13, 17), (24, 24)]:
        for offset in (0.0, 1e3, -1e9):
            image = rng.standard_normal(shape) + offset
            valid = (rng.random(shape) < 0.8).astype(np.uint8)
            valid[0, 0] = 1
            used = image[valid == 1].tolist()
            [mean], [deviation] = moments(image[None], valid[None])
            assert mean == math.fsum(used) / len(used)
            centre = Fraction(mean)
            variance = sum((Fraction(x) - centre) ** 2 for x in used) / len(used)
            assert deviation == pytest.approx(math.sqrt(variance), rel=1e-15, abs=0.0)


@pytest.mark.parametrize("decades", [0, 3, 8, 15, 100])
def test_mean_of_cancelling_values_is_exact_to_the_largest(decades):
    """Law: the error is no rounding error of partial sums, and stays far below one of a term."""
    rng = np.random.default_rng(10)
    for _ in range(20):
        image = cancelling_image((9, 16), decades, rng)
        [mean], [_] = moments(image[None])
        exact = math.fsum(image.ravel().tolist()) / image.size
        bound = image.size**2 * 2.0**-105 * np.abs(image).max()
        assert abs(mean - exact) <= bound + abs(exact) * 2.0**-52


@pytest.mark.parametrize("decades", [0, 3, 8, 15, 100])
@pytest.mark.parametrize("masked", [False, True])
def test_moments_do_not_depend_on_the_order_of_pixels(decades, masked):
    """Law: bit for bit the same after rotation, reflection and any other exchange of pixels."""
    rng = np.random.default_rng(11)
    for shape in [(2, 3), (9, 16), (16, 16)]:
        image = cancelling_image(shape, decades, rng)
        valid = np.ones(shape, dtype=np.uint8)
        if masked:
            valid = (rng.random(shape) < 0.8).astype(np.uint8)
            valid[0, 0] = 1
        order = rng.permutation(image.size)
        pairs = list(zip(symmetries(image), symmetries(valid), strict=True))
        pairs.append((image.ravel()[order].reshape(shape), valid.ravel()[order].reshape(shape)))
        found = {tuple(np.ravel(moments(x[None], ok[None])).tolist()) for x, ok in pairs}
        assert len(found) == 1


def test_moments_use_valid_pixels_only():
    rng = np.random.default_rng(12)
    images = rng.standard_normal((3, 6, 5))
    valid = (rng.random(images.shape) < 0.6).astype(np.uint8)
    valid[1] = 0
    other = np.where(valid == 1, images, 1e9)
    mean, deviation = moments(images, valid)
    for one, two in zip((mean, deviation), moments(other, valid), strict=True):
        assert np.array_equal(one, two, equal_nan=True)
    assert np.isnan([mean[1], deviation[1]]).all()  # nothing to take a mean of
    assert np.isfinite(mean[[0, 2]]).all()


@pytest.mark.parametrize("size", [1e-300, 1e-160, 1e160, 8e307])
def test_moments_of_very_small_and_very_large_values(size):
    """By hand: half the pixels at -size and half at +size have mean 0 and deviation size."""
    image = np.where(np.arange(48).reshape(1, 6, 8) % 2 == 0, size, -size)
    mean, deviation = moments(image)
    assert mean.tolist() == [0.0]
    assert deviation.tolist() == [size]


def test_moments_of_an_image_do_not_depend_on_its_stack():
    images = np.random.default_rng(13).standard_normal((4, 5, 6)) * [[[1.0]], [[1e9]], [[0]], [[1]]]
    mean, deviation = moments(images)
    for k in range(4):
        assert moments(images[k : k + 1]) == (mean[k], deviation[k])


# Smoothing, slope, curvature


def smooth(images, sigma_rows, sigma_cols):
    """Smooth a stack by the kernels, with scratch and results full of NaN."""
    along_columns, along_rows = gaussian_weights(sigma_rows), gaussian_weights(sigma_cols)
    padded = np.full(images.shape[2] + 2 * (len(along_rows) - 1), np.nan)
    half = np.full(images.shape[1:], np.nan)
    out = np.full(images.shape, np.nan)
    _field_kernels.smooth_stack(images, along_rows, along_columns, padded, half, out)
    return out


#: Standard deviations along axes 0 and 1, in pixels. A Gaussian reaches 4 of them: more than the
#: side of most of the images, so it meets several reflections.
SIGMAS = [(0.0, 0.0), (0.7, 0.7), (1.0, 3.0), (4.0, 0.0), (0.0, 2.0), (6.0, 5.0)]
SHAPES = [(1, 1), (1, 5), (5, 1), (2, 3), (6, 7)]


@pytest.mark.parametrize("sigmas", SIGMAS)
def test_smoothing_agrees_with_the_definition(sigmas):
    rng = np.random.default_rng(14)
    for shape in SHAPES:
        images = rng.standard_normal((2, *shape))
        for image, smoothed in zip(images, smooth(images, *sigmas), strict=True):
            expected = naive.gaussian_smooth(image, *sigmas)
            np.testing.assert_allclose(smoothed, expected, rtol=0, atol=1e-14)


@pytest.mark.parametrize("sigmas", SIGMAS)
def test_smoothing_commutes_with_reflection(sigmas):
    """Law: a mirrored image gives the mirrored result, bit for bit."""
    images = np.random.default_rng(15).standard_normal((2, 6, 7)) * 1e5
    smoothed = smooth(images, *sigmas)
    for axis in (1, 2, (1, 2)):
        mirrored = np.ascontiguousarray(np.flip(images, axis))
        assert np.array_equal(smooth(mirrored, *sigmas), np.flip(smoothed, axis))


def test_smoothing_of_a_row_by_hand():
    """By hand: weights 1/2, 1/4 and reflection d c b a | a b c d."""
    weights = np.array([0.5, 0.25])
    row = np.array([[4.0, 8.0, 0.0]])
    expected = [[0.5 * 4 + 0.25 * (4 + 8), 0.5 * 8 + 0.25 * (4 + 0), 0.5 * 0 + 0.25 * (8 + 0)]]
    out = np.empty((1, 3))
    _field_kernels.smooth_rows(row, weights, np.empty(5), out)
    assert out.tolist() == expected
    out = np.empty((3, 1))
    _field_kernels.smooth_columns(np.ascontiguousarray(row.T), weights, out)
    assert out.T.tolist() == expected


def test_missing_pixels_are_smoothed_by_normalised_convolution():
    rng = np.random.default_rng(16)
    images = rng.standard_normal((3, 6, 7))
    valid = (rng.random(images.shape) < 0.7).astype(np.uint8)
    smoothed = smooth(np.where(valid == 1, images, 0.0), 1.5, 0.8)
    support = smooth(valid.astype(np.float64), 1.5, 0.8)
    _field_kernels.normalise_stack(smoothed, support, valid)
    for image, ok, found in zip(images, valid, smoothed, strict=True):
        expected = naive.gaussian_smooth(image, 1.5, 0.8, ok)
        expected[ok == 0] = 0.0
        np.testing.assert_allclose(found, expected, rtol=0, atol=1e-13)


def derive(by_kernel, images, valid, pitch, smaller):
    """Run the slope or curvature kernel on a stack; results are full of NaN before."""
    shape = (len(images), images.shape[1] - smaller, images.shape[2] - smaller)
    out, defined = np.full(shape, np.nan), np.full(shape, 9, dtype=np.uint8)
    by_kernel(images, valid, pitch[0], pitch[1], out, defined)
    return out, defined


def slope(images, valid, pitch):
    return derive(_field_kernels.slope_stack, images, valid, pitch, 1)


def curvature(images, valid, pitch):
    return derive(_field_kernels.curvature_stack, images, valid, pitch, 2)


def test_slope_by_hand():
    """By hand: the plane 3 x + 4 y has slope 5 everywhere, whatever the pitch."""
    dy, dx = 0.5, 0.25
    y, x = np.mgrid[:5, :6]
    plane = (4 * dy * y + 3 * dx * x)[None]
    found, defined = slope(plane, np.ones(plane.shape, dtype=np.uint8), (dy, dx))
    assert (found == 5.0).all()
    assert (defined == 1).all()
    assert found.shape == (1, 4, 5)


def test_curvature_by_hand():
    """By hand: z = -(x^2 + 2 y^2) has second derivatives -2 and -4, so curvature 3: a bump."""
    dy, dx = 0.5, 0.25
    y, x = np.mgrid[:5, :6]
    bump = -((x * dx) ** 2 + 2 * (y * dy) ** 2)[None]
    found, defined = curvature(bump, np.ones(bump.shape, dtype=np.uint8), (dy, dx))
    assert (found == 3.0).all()
    assert (defined == 1).all()
    assert found.shape == (1, 3, 4)


def test_slope_and_curvature_agree_with_their_formulas():
    dy, dx = 0.7, 1.9
    z = np.random.default_rng(17).standard_normal((3, 7, 9))
    valid = np.ones(z.shape, dtype=np.uint8)
    across = (np.diff(z[:, :-1], axis=2) + np.diff(z[:, 1:], axis=2)) / 2 / dx
    down = (np.diff(z[:, :, :-1], axis=1) + np.diff(z[:, :, 1:], axis=1)) / 2 / dy
    found, _ = slope(z, valid, (dy, dx))
    np.testing.assert_allclose(found, np.hypot(across, down), rtol=1e-14)
    laplacian = np.diff(z, 2, axis=2)[:, 1:-1] / dx**2 + np.diff(z, 2, axis=1)[:, :, 1:-1] / dy**2
    found, _ = curvature(z, valid, (dy, dx))
    np.testing.assert_allclose(found, -laplacian / 2, rtol=0, atol=1e-13)


def test_slope_and_curvature_turn_with_the_image():
    """Law: bit for bit, after every rotation by 90 degrees and reflection, at square pitch."""
    z = np.random.default_rng(18).standard_normal((7, 9)) * 1e3
    for field in (slope, curvature):
        results = []
        for turned in symmetries(z):
            found, _ = field(turned[None], np.ones((1, *turned.shape), dtype=np.uint8), (0.3, 0.3))
            results.append(found[0])
        for found, expected in zip(results, symmetries(results[0]), strict=True):
            assert np.array_equal(found, expected)


def test_a_derived_value_is_defined_if_its_pixels_are_valid():
    rng = np.random.default_rng(19)
    valid = (rng.random((2, 8, 9)) < 0.8).astype(np.uint8)
    images = rng.standard_normal(valid.shape)
    _, by_slope = slope(images, valid, (1.0, 1.0))
    _, by_curvature = curvature(images, valid, (1.0, 1.0))
    for k in range(2):
        assert np.array_equal(by_slope[k], naive_ok(valid[k])[1:-1, 1:-1])
        for i in range(6):
            for j in range(7):
                cross = [(1, 1), (0, 1), (2, 1), (1, 0), (1, 2)]
                assert by_curvature[k, i, j] == all(valid[k, i + p, j + q] for p, q in cross)
    assert 0 < by_slope.mean() < 1
    assert 0 < by_curvature.mean() < 1


# The other two modes

if not MODE:

    def start(arguments, **variables):
        """Start pytest on this file, in an environment without a user's settings of either."""
        kept = {k: v for k, v in os.environ.items() if not k.startswith(("PYTEST", "NUMBA_"))}
        return subprocess.Popen(
            [sys.executable, "-m", "pytest", "-p", "no:cacheprovider", *arguments, __file__],
            cwd=Path(__file__).parent.parent,
            env={**kept, **variables},
            stdout=subprocess.PIPE,
            stderr=subprocess.STDOUT,
            text=True,
        )

    @pytest.fixture(scope="module")
    def reports(tmp_path_factory):
        """The list of tests of this file, and the reports of the two other modes on them."""
        cache = str(tmp_path_factory.mktemp("kernels"))
        children = {
            mode: start(["-rA", "-q"], MFEAT_KERNEL_MODE=mode, MFEAT_CACHE_DIR=cache, **setting)
            for mode, setting in MODES.items()
        }
        children["list"] = start(["--collect-only", "-q"], MFEAT_CACHE_DIR=cache)
        try:
            return {name: child.communicate(timeout=500)[0] for name, child in children.items()}
        finally:
            for child in children.values():
                child.kill()  # no effect on those that have ended

    def named(lines, before=""):
        """The tests of this file that lines of a report name, without the name of the file."""
        return set(re.findall(rf"^{before}\S*test_kernels\.py::(.*?)(?: - .*)?$", lines, re.M))

    @pytest.mark.parametrize("mode", MODES)
    def test_everything_passes_in_the_other_modes(reports, mode):
        report = reports[mode]
        expected = {name for name in named(reports["list"]) if "in_the_other_modes" not in name}
        assert len(expected) > 50, reports["list"]
        assert named(report, "PASSED ") == expected, report
        assert re.search(rf"^{len(expected)} passed in ", report, re.M), report

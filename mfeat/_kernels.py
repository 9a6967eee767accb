"""Compiled loops for level indices and window counts. No checks and no allocation in here.

Layout shared with `counts`: an image of level indices carries one extra row and column, so that
every pixel has a right and a lower neighbour. `ok[i, j]` is 1 where the 2x2 window whose lower
right pixel is (i, j) counts; its first and last row and column are windows that leave the array,
and are 0. A pixel then enters each statistic with the number of counting windows around it as its
weight, which makes borders and missing pixels one and the same case.
"""

import math

import numpy as np

from mfeat._jit import kernel

# Rows of a count table; `counts.STATISTICS` names and explains them.
_PIXEL, _DIAGONAL, _H, _V, _D, _A, _MAX, _MIN = range(8)


@kernel
def index_by_search(values, thresholds, index, top, left):
    """Write the number of `thresholds` (ascending) <= each value, by binary search.

    `index` (uint16) receives the result with its corner at (top, left). A NaN gets 0. All pixels
    of a row take each step of the search together: the number of steps is fixed and the loop over
    pixels has no branch, so it is vectorised.
    """
    rows, cols = values.shape
    for i in range(rows):
        row = values[i]
        found = index[top + i, left : left + cols]  # thresholds known to be reached
        found[:] = 0
        length = len(thresholds)
        while length > 0:
            half = (length + 1) >> 1
            for j in range(cols):
                low = found[j]
                reached = row[j] >= thresholds[np.int64(low) + half - 1]
                found[j] = low + np.uint16(half) if reached else low
            length -= half


@kernel
def index_by_comparison(values, thresholds, index, top, left):
    """Do the work of `index_by_search` by comparing whole rows with one threshold at a time.

    The inner loop is vectorised by the compiler, so this is the faster way for a few levels.
    """
    rows, cols = values.shape
    for i in range(rows):
        row = values[i]
        found = index[top + i, left : left + cols]
        found[:] = 0
        for k in range(len(thresholds)):
            threshold = thresholds[k]
            for j in range(cols):
                found[j] += np.uint16(row[j] >= threshold)


@kernel
def index_by_table(values, thresholds, table, index, top, left):
    """Do the work of `index_by_search` for 8-bit values by looking each one up.

    `table` is scratch of 256 entries; it holds the index of every possible value.
    """
    entry = 0
    for k in range(len(thresholds)):
        while entry < thresholds[k]:
            table[entry] = k
            entry += 1
    table[entry:] = len(thresholds)
    rows, cols = values.shape
    for i in range(rows):
        row = values[i]
        found = index[top + i, left : left + cols]
        for j in range(cols):
            found[j] = table[row[j]]


@kernel
def index_stack_by_table(values, thresholds, reach, table, index):
    """Index a stack of 8-bit images; arguments as for `index_stack`, and scratch of 256 entries."""
    for k in range(len(values)):
        index_by_table(values[k], thresholds[k, : reach[k]], table, index[k], 0, 0)


@kernel
def index_stack(values, thresholds, reach, few, index):
    """Index a stack of images (n, h, w), each with its own thresholds (n, T) and reach (n).

    Only the first `reach[k]` thresholds of image k lie within the type of its pixels.
    """
    for k in range(len(values)):
        if reach[k] <= few:
            index_by_comparison(values[k], thresholds[k, : reach[k]], index[k], 0, 0)
        else:
            index_by_search(values[k], thresholds[k, : reach[k]], index[k], 0, 0)


@kernel
def windows_ok(valid, ok):
    """Write where a window has four valid pixels; `ok` is one row and column larger than `valid`.

    Returns the number of such windows.
    """
    rows, cols = valid.shape
    total = 0
    ok[:] = 0
    for i in range(1, rows):
        for j in range(1, cols):
            good = valid[i - 1, j - 1] & valid[i - 1, j] & valid[i, j - 1] & valid[i, j]
            ok[i, j] = good
            total += np.int64(good)
    return total


@kernel
def count_windows(index, ok, table):
    """Add the statistics of all counting windows to `table` (8, T + 1), one column an index.

    Column k of a row holds how many sets (pixels, pairs, windows) have k as their maximum (or
    minimum, for the last row), so one pass serves every level. Formulas: `formulas` of
    `mfeat.functionals`; the eight rows: `mfeat.counts.STATISTICS`.
    """
    pixel = table[_PIXEL]
    diagonal = table[_DIAGONAL]
    horizontal = table[_H]
    vertical = table[_V]
    falling = table[_D]
    rising = table[_A]
    largest = table[_MAX]
    smallest = table[_MIN]
    rows = index.shape[0] - 1
    cols = index.shape[1] - 1
    for i in range(rows):
        upper, lower = index[i], index[i + 1]
        ok_above, ok_below = ok[i], ok[i + 1]
        # The right half of a window is the left half of the next: carried along, not read again.
        a, c = upper[0], lower[0]
        upper_left, lower_left = np.int64(ok_above[0]), np.int64(ok_below[0])
        for j in range(cols):
            b, d = upper[j + 1], lower[j + 1]
            upper_right, lower_right = np.int64(ok_above[j + 1]), np.int64(ok_below[j + 1])
            ad = max(a, d)
            bc = max(b, c)
            diagonal[a] += upper_left + lower_right
            pixel[a] += upper_left + upper_right + lower_left + lower_right
            horizontal[max(a, b)] += upper_right + lower_right
            vertical[max(a, c)] += lower_left + lower_right
            falling[ad] += lower_right
            rising[bc] += lower_right
            largest[max(ad, bc)] += lower_right
            smallest[min(min(a, d), min(b, c))] += lower_right
            a, c = b, d
            upper_left, lower_left = upper_right, lower_right


@kernel
def count_complete(index, table):
    """Do the work of `count_windows` where all windows of the image count; `table` must be zero.

    Each pixel and pair is counted once and without a weight, at the window whose top left corner it
    starts from; one update less a pixel, and no weights to read. Then the weights of inner pixels
    (four windows) and inner pairs (two) follow for the whole table at once, and the border, where
    they are smaller, is set right.
    """
    pixel = table[_PIXEL]
    diagonal = table[_DIAGONAL]
    horizontal = table[_H]
    vertical = table[_V]
    falling = table[_D]
    rising = table[_A]
    largest = table[_MAX]
    smallest = table[_MIN]
    rows = index.shape[0] - 1
    cols = index.shape[1] - 1
    for i in range(rows - 1):
        upper, lower = index[i], index[i + 1]
        a, c = upper[0], lower[0]
        for j in range(cols - 1):
            b, d = upper[j + 1], lower[j + 1]
            ad = max(a, d)
            bc = max(b, c)
            pixel[a] += 1
            horizontal[max(a, b)] += 1
            vertical[max(a, c)] += 1
            falling[ad] += 1
            rising[bc] += 1
            largest[max(ad, bc)] += 1
            smallest[min(min(a, d), min(b, c))] += 1
            a, c = b, d
    for k in range(table.shape[1]):
        diagonal[k] = 2 * pixel[k]
        pixel[k] *= 4
        horizontal[k] *= 2
        vertical[k] *= 2
    for i in range(rows):
        inner = 0 < i < rows - 1
        for j in range(0, cols, cols - 1 if inner else 1):
            starts = np.int64(i < rows - 1 and j < cols - 1)  # a window starts here: counted above
            ends = np.int64(i > 0 and j > 0)
            windows = (2 if inner else 1) * (2 if 0 < j < cols - 1 else 1)
            pixel[index[i, j]] += windows - 4 * starts
            diagonal[index[i, j]] += ends - starts
    for j in range(cols - 1):
        horizontal[max(index[0, j], index[0, j + 1])] -= 1
        horizontal[max(index[rows - 1, j], index[rows - 1, j + 1])] += 1
    for i in range(rows - 1):
        vertical[max(index[i, 0], index[i + 1, 0])] -= 1
        vertical[max(index[i, cols - 1], index[i + 1, cols - 1])] += 1


@kernel
def count_stack(index, ok, table):
    """Count a stack: index (n, h + 1, w + 1), ok likewise, table (n, 8, T + 1)."""
    for k in range(len(index)):
        count_windows(index[k], ok[k], table[k])


@kernel
def count_complete_stack(index, table):
    """Count a stack of images all of whose windows count; `table` must be zero."""
    for k in range(len(index)):
        count_complete(index[k], table[k])


@kernel
def value_range(values, valid, low, high):
    """Write the smallest and the largest valid value of each image of a stack (n, h, w)."""
    for k in range(len(values)):
        first = True
        for i in range(values.shape[1]):
            for j in range(values.shape[2]):
                if valid[k, i, j]:
                    value = values[k, i, j]
                    if first or value < low[k]:
                        low[k] = value
                    if first or value > high[k]:
                        high[k] = value
                    first = False


@kernel
def _unit_scale(low, high):
    """Return a power of two that brings numbers between `low` and `high` into [-1, 1]."""
    exponent = math.frexp(max(abs(low), abs(high)))[1]
    return math.ldexp(1.0, -max(exponent, -1000))  # numbers near 0 would need an infinite scale


@kernel
def moments(values, valid, total, rest, mean, deviation):
    """Write the mean and the (population) standard deviation of each image of a stack (n, h, w).

    Each term is cut, by adding and subtracting a power of two, into two slices so coarse that
    sums of either are exact. So the result does not depend on the order of the pixels and is the
    same, bit for bit, after rotation or reflection. What lies below the second slice is dropped:
    at most n^2 2^-104 of the largest term in the mean of n pixels.
    `total` and `rest` are scratch of length w + 1: sums of the slices per column, then of all.
    Source: S. M. Rump, T. Ogita and S. Oishi, Accurate floating-point summation part I, SIAM J.
    Sci. Comput. 31 (2008), 189-224, section 3 (extraction of slices).
    """
    count, rows, cols = values.shape
    bits = math.frexp(np.float64(rows * cols + 2))[1]
    coarse = math.ldexp(1.0, bits)
    fine = math.ldexp(1.0, 2 * bits - 53)
    for k in range(count):
        low = np.inf
        high = -np.inf
        n = 0
        for i in range(rows):
            for j in range(cols):
                if valid[k, i, j]:
                    n += 1
                    low = min(low, values[k, i, j])
                    high = max(high, values[k, i, j])
        if n == 0:
            mean[k] = deviation[k] = np.nan
            continue
        for power in range(1, 3):
            centre = mean[k] if power == 2 else 0.0
            scale = _unit_scale(low - centre, high - centre)
            total[:] = 0.0
            rest[:] = 0.0
            for i in range(rows):
                for j in range(cols):
                    term = (values[k, i, j] - centre) * scale if valid[k, i, j] else 0.0
                    if power == 2:
                        term = term * term
                    slice_ = (term + coarse) - coarse
                    total[j] += slice_
                    rest[j] += ((term - slice_) + fine) - fine
            for j in range(cols):
                total[cols] += total[j]
                rest[cols] += rest[j]
            result = (total[cols] + rest[cols]) / n
            if power == 1:
                mean[k] = result / scale
            else:
                deviation[k] = np.sqrt(result) / scale

"""A Gaussian of its own for each image, against the one for all; what the kernels share."""

import numpy as np
import pytest

from mfeat import _field_kernels
from mfeat.smoothing import TRUNCATE, gaussian_weights, moments_of

SIGMAS = (0.0, 0.25, 0.3, 1.0, 1.37, 2.49, 2.5, 6.0)


def alone(image, sigma_rows, sigma_cols):
    """Smooth one image by `smooth_stack`."""
    along_rows, along_columns = gaussian_weights(sigma_cols), gaussian_weights(sigma_rows)
    padded = np.full(image.shape[1] + 2 * (len(along_rows) - 1), np.nan)
    half, out = np.full(image.shape, np.nan), np.full((1, *image.shape), np.nan)
    _field_kernels.smooth_stack(image[None], along_rows, along_columns, padded, half, out)
    return out[0]


def each(images, in_rows, in_cols):
    """Smooth a stack by `smooth_each`, with scratch and results full of NaN."""
    reach = int(TRUNCATE * max(*in_rows, *in_cols) + 0.5)
    weights = np.full(reach + 1, np.nan)
    padded = np.full(images.shape[2] + 2 * reach, np.nan)
    half, out = np.full(images.shape[1:], np.nan), np.full(images.shape, np.nan)
    along = np.array(in_cols), np.array(in_rows)
    _field_kernels.smooth_each(images, *along, weights, padded, half, out)
    return out


@pytest.mark.parametrize("sigma", SIGMAS[1:])
def test_weights_written_by_the_kernel_are_those_of_numpy(sigma):
    expected = gaussian_weights(sigma)
    found = np.full(len(expected) + 3, np.nan)
    assert _field_kernels.write_weights(sigma, found) == len(expected)
    assert found[: len(expected)] == pytest.approx(expected, rel=1e-14)
    assert np.isnan(found[len(expected) :]).all()  # nothing is written beyond


@pytest.mark.parametrize("shape", [(1, 5), (7, 3), (9, 12)])
def test_each_image_by_its_own_gaussian(shape):
    images = np.random.default_rng(0).normal(size=(len(SIGMAS), *shape))
    order = np.random.default_rng(1).permutation(len(SIGMAS))
    in_rows, in_cols = np.array(SIGMAS), 1.5 * np.array(SIGMAS)
    for own in (np.arange(len(SIGMAS)), order):  # a narrow one after a wide one, too
        found = each(images[own], in_rows[own], in_cols[own])
        for place, k in enumerate(own):
            expected = alone(images[k], in_rows[k], in_cols[k])
            assert found[place] == pytest.approx(expected, rel=1e-13, abs=1e-14)
    assert np.array_equal(each(images, in_rows, in_cols)[0], images[0])  # 0 leaves it as it is


def test_each_commutes_with_reflection():
    images = np.random.default_rng(2).normal(size=(3, 6, 7)) * 1e5
    sigmas = [0.5, 1.7, 4.0]
    smoothed = each(images, sigmas, sigmas)
    for axis in (1, 2, (1, 2)):
        mirrored = np.ascontiguousarray(np.flip(images, axis))
        assert np.array_equal(each(mirrored, sigmas, sigmas), np.flip(smoothed, axis))


def test_moments_are_those_of_numpy_and_0_without_pixels():
    values = np.random.default_rng(3).normal(size=(3, 8, 9))
    valid = (np.random.default_rng(4).random(values.shape) < 0.7).astype(np.uint8)
    valid[2] = 0
    mean, deviation = moments_of(values, valid)
    for k in range(2):
        inside = values[k][valid[k] == 1]
        assert mean[k] == pytest.approx(inside.mean(), rel=1e-12)
        assert deviation[k] == pytest.approx(inside.std(), rel=1e-12)
    assert (mean[2], deviation[2]) == (0.0, 0.0)

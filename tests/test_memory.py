"""The stated bounds of memory, by tracemalloc, which sees NumPy's arrays; no timing involved."""

import tracemalloc

import numpy as np
import pytest

from mfeat import MinkowskiCurves, count_patterns, minkowski_curves
from mfeat.transformer import full_curves

MB = 1e6


def peak_of(work):
    """Return the largest number of bytes that a second call holds beyond what was there."""
    work()
    tracemalloc.start()
    try:
        work()
        return tracemalloc.get_traced_memory()[1]
    finally:
        tracemalloc.stop()


@pytest.fixture(scope="module")
def image():
    return np.random.default_rng(0).integers(0, 200, (3000, 2000)).astype(np.uint16)


@pytest.mark.parametrize("dtype", ["uint8", "uint16", ">u2", "float16", "float32", "float64"])
def test_counting_takes_bands_whatever_the_size_and_type(image, dtype):
    given = image.astype(dtype)
    levels = np.arange(1, 33)
    half, whole = (peak_of(lambda x=x: count_patterns(x, levels)) for x in (given[:1500], given))
    assert whole < 21 * MB
    assert whole < half + 0.1 * MB
    assert peak_of(lambda: count_patterns(given.T, levels)) < 21 * MB


def test_counting_with_missing_pixels_takes_bands_too(image):
    levels = np.arange(1, 33)
    mask = image > 20
    assert peak_of(lambda: count_patterns(image, levels, mask)) < 21 * MB
    holes = np.where(mask, image.astype(np.float32), np.nan)
    assert peak_of(lambda: count_patterns(holes, levels)) < 21 * MB


@pytest.mark.parametrize(("field", "scale"), [("raw", 0), ("band", 2), ("curvature", 2)])
def test_curves_take_some_bytes_a_pixel(image, field, scale):
    part = image[:1000, :1000]
    options = {"levels": 16, "field": field, "scale": scale}
    assert peak_of(lambda: minkowski_curves(part, **options)) < 40 * part.size
    assert peak_of(lambda: minkowski_curves(part, mask=part > 20, **options)) < 55 * part.size


@pytest.mark.parametrize("missing", [False, True])
def test_a_worker_takes_groups_whatever_the_number_of_patches(image, missing):
    patches = image[:2048, :1920].reshape(32, 64, 30, 64).swapaxes(1, 2).reshape(-1, 64, 64)
    patches = patches.astype(np.float32)
    if missing:
        patches[:, 3, 4] = np.nan
    transformer = MinkowskiCurves()
    width = len(transformer.get_feature_names_out())
    small, large = (
        peak_of(lambda n=n: transformer.transform(patches[:n])) - 4 * width * n for n in (128, 960)
    )
    assert large < 40 * MB
    # a few hundred bytes a patch for its view of X; nothing of its pixels
    assert large < small + 500 * (960 - 128) + 3 * MB


def test_a_large_patch_takes_some_bytes_a_pixel(image):
    patch = image[None, :1500, :1500]
    assert peak_of(lambda: MinkowskiCurves().transform(patch)) < 105 * patch.size


@pytest.mark.parametrize(
    ("shape", "options"), [((8000, 8, 8), {"smooth": (1, 2)}), ((600, 16, 16), {"levels": 500})]
)
def test_small_patches_and_many_levels_stay_within_the_bound(image, shape, options):
    patches = image.ravel()[: np.prod(shape)].reshape(shape)
    transformer = MinkowskiCurves(**options)
    peak = peak_of(lambda: transformer.transform(patches)) - transformer.transform(patches).nbytes
    assert peak < 60 * MB


def test_learning_levels_keeps_a_bounded_sample(image):
    # half a million values of each of the eight fields, sorted once
    patches = image[:2048, :1920].reshape(32, 64, 30, 64).swapaxes(1, 2).reshape(-1, 64, 64)
    assert (
        peak_of(lambda: MinkowskiCurves(**full_curves(), level_rule="fitted").fit(patches))
        < 80 * MB
    )

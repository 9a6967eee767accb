"""Compiled loops that derive fields from stacks of images: smoothing, slope, curvature.

No checks and no allocation in here. Where pixels are missing, callers pass zeros in their place
together with the map of valid pixels.
"""

import numpy as np

from mfeat._jit import kernel


@kernel
def _mirror(i, n):
    """Fold a position outside 0..n-1 back by half-sample symmetric reflection (d c b a|a b c d)."""
    i = i % (2 * n)
    return i if i < n else 2 * n - 1 - i


@kernel
def _add_pairs(total, weight, left, right):
    """Add weight * (left + right), element by element.

    The two are added before they are weighted, so a mirrored image gives the mirrored result bit
    for bit. One flat loop over three plain vectors: the form that the compiler vectorises.
    """
    for j in range(len(total)):
        total[j] += weight * (left[j] + right[j])


@kernel
def smooth_rows(image, weights, padded, out):
    """Convolve each row with the symmetric kernel of half `weights` (centre first).

    `padded` is scratch of length w + 2 r: the row and its reflections.
    """
    rows, cols = image.shape
    radius = len(weights) - 1
    for i in range(rows):
        row = image[i]
        smoothed = out[i]
        padded[radius : radius + cols] = row
        for k in range(radius):
            padded[k] = row[_mirror(k - radius, cols)]
            padded[radius + cols + k] = row[_mirror(cols + k, cols)]
        for j in range(cols):
            smoothed[j] = weights[0] * row[j]
        for k in range(1, radius + 1):
            left = padded[radius - k : radius - k + cols]
            right = padded[radius + k : radius + k + cols]
            _add_pairs(smoothed, weights[k], left, right)


@kernel
def smooth_columns(image, weights, out):
    """Convolve each column likewise, a whole row at a time."""
    rows = image.shape[0]
    radius = len(weights) - 1
    for i in range(rows):
        row = image[i]
        smoothed = out[i]
        for j in range(len(row)):
            smoothed[j] = weights[0] * row[j]
        for k in range(1, radius + 1):
            above = image[_mirror(i - k, rows)]
            below = image[_mirror(i + k, rows)]
            _add_pairs(smoothed, weights[k], above, below)


@kernel
def smooth_stack(images, row_weights, column_weights, padded, half, out):
    """Smooth each image of a stack (n, h, w) along both axes; `half` is scratch (h, w).

    `row_weights` act along a row (across columns), `column_weights` along a column.
    """
    for k in range(len(images)):
        smooth_rows(images[k], row_weights, padded, half)
        smooth_columns(half, column_weights, out[k])


@kernel
def write_weights(sigma, weights):
    """Write half of the sampled Gaussian kernel, centre first; returns how many weights it has.

    The kernel reaches four standard deviations, and with its mirror image sums to 1.
    """
    count = int(4.0 * sigma + 0.5) + 1
    total = 0.0
    for k in range(count):
        weights[k] = np.exp(-0.5 * (k / sigma) ** 2) if k > 0 else 1.0
        total += weights[k] if k == 0 else 2.0 * weights[k]
    for k in range(count):
        weights[k] /= total
    return count


@kernel
def smooth_each(images, row_sigmas, column_sigmas, weights, padded, half, out):
    """Smooth each image of a stack (n, h, w) by a Gaussian of its own; 0 leaves it as it is.

    `weights` is scratch for the widest kernel, `padded` for a row with it on both sides.
    """
    for k in range(len(images)):
        if row_sigmas[k] == 0.0:
            out[k] = images[k]
            continue
        count = write_weights(row_sigmas[k], weights)
        smooth_rows(images[k], weights[:count], padded, half)
        count = write_weights(column_sigmas[k], weights)
        smooth_columns(half, weights[:count], out[k])


@kernel
def contrast_stack(images, means, squares, valid, floors):
    """Turn images (n, h, w) into (image - mean) / deviation, by the local moments of each pixel.

    `means` and `squares` are smoothed images and smoothed squares; `floors` (n) are variances that
    are added, so that quiet places are not blown up. Zero where a pixel is missing or the floor is.
    """
    for k in range(len(images)):
        for i in range(images.shape[1]):
            for j in range(images.shape[2]):
                if valid[k, i, j] and floors[k] > 0.0:
                    mean = means[k, i, j]
                    variance = max(squares[k, i, j] - mean * mean, 0.0) + floors[k]
                    images[k, i, j] = (images[k, i, j] - mean) / np.sqrt(variance)
                else:
                    images[k, i, j] = 0.0


@kernel
def normalise_stack(smoothed, support, valid):
    """Divide smoothed values by the smoothed map of valid pixels; zero where a pixel is missing.

    Normalised convolution; source: H. Knutsson and C.-F. Westin, Normalized and differential
    convolution, Proc. CVPR (1993), 515-523.
    """
    for k in range(len(smoothed)):
        for i in range(smoothed.shape[1]):
            for j in range(smoothed.shape[2]):
                if valid[k, i, j]:
                    smoothed[k, i, j] /= support[k, i, j]
                else:
                    smoothed[k, i, j] = 0.0


@kernel
def slope_stack(images, valid, pitch_rows, pitch_cols, slope, slope_valid):
    """Write the gradient magnitude at the centre of each 2x2 window: (n, h - 1, w - 1).

    Each component is the mean of the window's two differences along that axis, over the pitch.
    """
    for k in range(len(images)):
        for i in range(images.shape[1] - 1):
            for j in range(images.shape[2] - 1):
                a = images[k, i, j]
                b = images[k, i, j + 1]
                c = images[k, i + 1, j]
                d = images[k, i + 1, j + 1]
                across = ((b - a) + (d - c)) / (2.0 * pitch_cols)
                down = ((c - a) + (d - b)) / (2.0 * pitch_rows)
                slope[k, i, j] = np.sqrt(across * across + down * down)
                slope_valid[k, i, j] = (
                    valid[k, i, j]
                    & valid[k, i, j + 1]
                    & valid[k, i + 1, j]
                    & valid[k, i + 1, j + 1]
                )


@kernel
def curvature_stack(images, valid, pitch_rows, pitch_cols, curvature, curvature_valid):
    """Write minus half the Laplacian, positive on bumps, at each inner pixel: (n, h - 2, w - 2)."""
    for k in range(len(images)):
        for i in range(images.shape[1] - 2):
            for j in range(images.shape[2] - 2):
                centre = images[k, i + 1, j + 1]
                left = images[k, i + 1, j]
                right = images[k, i + 1, j + 2]
                above = images[k, i, j + 1]
                below = images[k, i + 2, j + 1]
                across = ((left - centre) + (right - centre)) / (pitch_cols * pitch_cols)
                down = ((above - centre) + (below - centre)) / (pitch_rows * pitch_rows)
                curvature[k, i, j] = -0.5 * (across + down)
                curvature_valid[k, i, j] = (
                    valid[k, i + 1, j + 1]
                    & valid[k, i + 1, j]
                    & valid[k, i + 1, j + 2]
                    & valid[k, i, j + 1]
                    & valid[k, i + 2, j + 1]
                )

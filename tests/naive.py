"""Naive references: slow, plain, and independent of the package under test.

Everything here is written as the definition reads, with loops over pixels and windows and exact
Python integers, so that it can be checked by eye. Nothing is imported from the package. Sources
are cited from memory.

Conventions
-----------
* The foreground at level ``u`` is the set of pixels with ``pixel >= u``.
* A 2x2 window is ``a b / c d``: a top left, b top right, c bottom left, d bottom right.
* A pixel is missing where it is NaN or where ``valid`` is False. A window counts only if none of
  its four pixels is missing.
* ``framed=True`` first surrounds the image by one ring of valid background pixels. The ring is
  background at every level, even at minus infinity.
"""

import math
from collections.abc import Iterable, Iterator
from fractions import Fraction
from typing import Any

import numpy as np
from scipy import ndimage

Level = int | float | Fraction
Array = np.ndarray[Any, Any]
Window = tuple[bool, bool, bool, bool]

CLASS_NAMES = ("q0", "q1", "q2", "qd", "q3", "q4")
CROSSING_NAMES = ("2h", "2v", "d", "a")


def valid_pixels(image: Array, valid: Array | None = None) -> Array:
    """Return a boolean array: True where the pixel is not NaN and the mask, if any, is True."""
    image = np.asarray(image)
    rows, cols = image.shape
    if valid is not None and np.shape(valid) != image.shape:
        raise ValueError(f"the mask has shape {np.shape(valid)}, the image {image.shape}")
    pixel = image.tolist()
    out = np.zeros((rows, cols), dtype=bool)
    for i in range(rows):
        for j in range(cols):
            is_nan = pixel[i][j] != pixel[i][j]
            out[i, j] = not is_nan and (valid is None or bool(valid[i, j]))
    return out


def foreground(image: Array, level: Level, valid: Array | None = None) -> Array:
    """Return a boolean array: True where ``pixel >= level`` and the pixel is not missing.

    The comparison is the mathematical one: each pixel becomes a Python bool, int or float (a
    lossless step for bool, integers of up to 64 bits and floats of up to 64 bits), and Python
    compares ints, floats and Fractions exactly, whatever their size.
    """
    image = np.asarray(image)
    if image.dtype.kind not in "biuf" or image.dtype.itemsize > 8:
        raise TypeError(f"no exact Python value for pixels of type {image.dtype}")
    if isinstance(level, np.generic):
        level = level.item()
    if level != level:
        raise ValueError("a level must not be NaN")
    present = valid_pixels(image, valid).tolist()
    pixel = image.tolist()
    rows, cols = image.shape
    out = np.zeros((rows, cols), dtype=bool)
    for i in range(rows):
        for j in range(cols):
            out[i, j] = present[i][j] and pixel[i][j] >= level
    return out


def add_frame(binary: Array, value: bool) -> Array:
    """Return the boolean array surrounded by one ring of pixels of the given value."""
    rows, cols = binary.shape
    out = np.full((rows + 2, cols + 2), value, dtype=bool)
    out[1:-1, 1:-1] = binary
    return out


def windows(binary: Array, valid: Array) -> Iterator[Window]:
    """Yield ``(a, b, c, d)`` for each 2x2 window whose four pixels are all valid."""
    rows, cols = binary.shape
    pixel = binary.tolist()
    ok = valid.tolist()
    for i in range(rows - 1):
        for j in range(cols - 1):
            if ok[i][j] and ok[i][j + 1] and ok[i + 1][j] and ok[i + 1][j + 1]:
                yield pixel[i][j], pixel[i][j + 1], pixel[i + 1][j], pixel[i + 1][j + 1]


def windows_at(
    image: Array, level: Level, valid: Array | None = None, framed: bool = False
) -> Iterator[Window]:
    """Yield the valid windows ``(a, b, c, d)`` of the foreground at one level."""
    binary = foreground(image, level, valid)
    present = valid_pixels(image, valid)
    if framed:
        binary = add_frame(binary, False)
        present = add_frame(present, True)
    return windows(binary, present)


def valid_windows(valid: Array, framed: bool = False) -> int:
    """Count the 2x2 windows whose four pixels are all True in ``valid``."""
    present = np.asarray(valid, dtype=bool)
    if framed:
        present = add_frame(present, True)
    return sum(1 for _ in windows(present, present))


def window_class(a: bool, b: bool, c: bool, d: bool) -> str:
    """Name the class of a window: by its number of foreground pixels; qd is a diagonal pair."""
    number = a + b + c + d
    if number == 2:
        return "qd" if a == d else "q2"
    return f"q{number}"


def window_classes(
    image: Array, levels: Iterable[Level], valid: Array | None = None, framed: bool = False
) -> dict[str, list[int]]:
    """Count the 2x2 window classes q0, q1, q2, qd, q3, q4; one entry a level in each list.

    The classes are those of S. B. Gray, "Local properties of binary images in two dimensions",
    IEEE Transactions on Computers C-20 (1971), 551-561.
    """
    out: dict[str, list[int]] = {name: [] for name in CLASS_NAMES}
    for level in levels:
        count = dict.fromkeys(CLASS_NAMES, 0)
        for a, b, c, d in windows_at(image, level, valid, framed):
            count[window_class(a, b, c, d)] += 1
        for name in CLASS_NAMES:
            out[name].append(count[name])
    return out


def directed_crossings(
    image: Array, levels: Iterable[Level], valid: Array | None = None, framed: bool = False
) -> dict[str, list[int]]:
    """Count, over the valid windows, the pixel pairs of which just one is foreground.

    Exact integers, one entry a level in each list:

    * ``"2h"``: horizontal pairs (a, b) and (c, d). TWICE the crossing number Th, because a pair
      inside the image belongs to two windows.
    * ``"2v"``: vertical pairs (a, c) and (b, d). TWICE the crossing number Tv.
    * ``"d"``: diagonal pairs (a, d), the crossing number Td.
    * ``"a"``: antidiagonal pairs (b, c), the crossing number Ta.
    """
    out: dict[str, list[int]] = {name: [] for name in CROSSING_NAMES}
    for level in levels:
        count = dict.fromkeys(CROSSING_NAMES, 0)
        for a, b, c, d in windows_at(image, level, valid, framed):
            count["2h"] += (a != b) + (c != d)
            count["2v"] += (a != c) + (b != d)
            count["d"] += a != d
            count["a"] += b != c
        for name in CROSSING_NAMES:
            out[name].append(count[name])
    return out


def euler_by_definition(binary: Array, connectivity: int) -> int:
    """Euler number of the foreground of an isolated object: vertices - edges + faces.

    Outside the array everything is background. The cell complex is

    * connectivity 4: pixels are points, pairs of 4-neighbours are edges, full 2x2 blocks are
      faces;
    * connectivity 8: pixels are closed unit squares, and distinct sides and distinct corners are
      counted once.

    Euler's polyhedron formula (1758) applied to a planar cell complex.
    """
    rows, cols = np.shape(binary)
    pixels = {(i, j) for i in range(rows) for j in range(cols) if binary[i, j]}
    if connectivity == 4:
        edges = 0
        faces = 0
        for i, j in pixels:
            right = (i, j + 1) in pixels
            below = (i + 1, j) in pixels
            edges += right + below
            faces += right and below and (i + 1, j + 1) in pixels
        return len(pixels) - edges + faces
    if connectivity == 8:
        corners = set()
        sides = set()
        for i, j in pixels:
            corners.update([(i, j), (i, j + 1), (i + 1, j), (i + 1, j + 1)])
            sides.update([("horizontal", i, j), ("horizontal", i + 1, j)])
            sides.update([("vertical", i, j), ("vertical", i, j + 1)])
        return len(corners) - len(sides) + len(pixels)
    raise ValueError(f"connectivity must be 4 or 8, not {connectivity!r}")


def components_minus_holes(binary: Array, connectivity: int) -> int:
    """Euler number as components minus holes; outside the array everything is background.

    Components are labelled with the connectivity given and the background with the other one (A.
    Rosenfeld, "Connectivity in digital pictures", Journal of the ACM 17 (1970), 146-160). A hole
    is a background component that does not touch the outside.
    """
    if connectivity not in (4, 8):
        raise ValueError(f"connectivity must be 4 or 8, not {connectivity!r}")
    structure4 = np.array([[0, 1, 0], [1, 1, 1], [0, 1, 0]])
    structure8 = np.ones((3, 3), dtype=int)
    inner, outer = (structure4, structure8) if connectivity == 4 else (structure8, structure4)
    image = add_frame(np.asarray(binary, dtype=bool), False)
    _, components = ndimage.label(image, structure=inner)
    _, background_components = ndimage.label(~image, structure=outer)
    return int(components) - (int(background_components) - 1)


def reflected(index: int, size: int) -> int:
    """Map any index to 0..size-1 by half-sample symmetric reflection: c b a | a b c | c b a."""
    index %= 2 * size
    return index if index < size else 2 * size - 1 - index


def gaussian_weights(sigma: float) -> list[float]:
    """Sampled Gaussian exp(-k^2/(2 sigma^2)), |k| <= int(4 sigma + 0.5), scaled to sum 1."""
    if sigma == 0:
        return [1.0]
    radius = int(4 * sigma + 0.5)
    raw = [math.exp(-(k**2) / (2 * sigma**2)) for k in range(-radius, radius + 1)]
    total = math.fsum(raw)
    return [value / total for value in raw]


def _smooth_rows(image: list[list[float]], sigma: float) -> list[list[float]]:
    """Convolve along the first index: each output pixel is a weighted sum down its column."""
    weights = gaussian_weights(sigma)
    radius = len(weights) // 2
    rows = len(image)
    cols = len(image[0])
    out = [[0.0] * cols for _ in range(rows)]
    for i in range(rows):
        source = [reflected(i + k, rows) for k in range(-radius, radius + 1)]
        for j in range(cols):
            terms = [w * image[r][j] for w, r in zip(weights, source, strict=True)]
            out[i][j] = math.fsum(terms)
    return out


def _transposed(image: list[list[float]]) -> list[list[float]]:
    """Return the list of columns."""
    return [list(column) for column in zip(*image, strict=True)]


def _smooth_both(image: list[list[float]], sigma_rows: float, sigma_cols: float) -> Array:
    """Convolve along the rows' index, then along the columns' index."""
    down = _smooth_rows(image, sigma_rows)
    across = _transposed(_smooth_rows(_transposed(down), sigma_cols))
    return np.array(across, dtype=np.float64)


def gaussian_smooth(
    image: Array, sigma_rows: float, sigma_cols: float, valid: Array | None = None
) -> Array:
    """Smooth by a sampled, separable Gaussian; missing pixels by normalised convolution.

    Parameters
    ----------
    image : (rows, cols) array
        Values; NaN is missing.
    sigma_rows, sigma_cols : float
        Standard deviation in pixels along the first and along the second index. 0 leaves that
        index unchanged.
    valid : (rows, cols) boolean array, optional
        False marks a missing pixel.

    Returns
    -------
    (rows, cols) float64 array
        The border is continued by half-sample symmetric reflection, values and validity alike.
        With missing pixels the result is ``smooth(x * valid) / smooth(valid)`` (H. Knutsson and
        C.-F. Westin, "Normalized and differential convolution", CVPR 1993), also at the missing
        pixels themselves; NaN where the kernel reaches no valid pixel.
    """
    image = np.asarray(image)
    present = valid_pixels(image, valid)
    rows, cols = image.shape
    values = [
        [float(image[i, j]) if present[i, j] else 0.0 for j in range(cols)] for i in range(rows)
    ]
    if present.all():
        return _smooth_both(values, sigma_rows, sigma_cols)
    numerator = _smooth_both(values, sigma_rows, sigma_cols)
    denominator = _smooth_both(present.astype(float).tolist(), sigma_rows, sigma_cols)
    out = np.full((rows, cols), np.nan)
    for i in range(rows):
        for j in range(cols):
            if denominator[i, j] > 0:
                out[i, j] = numerator[i, j] / denominator[i, j]
    return out


def detail_length(image: Array, valid: Array | None = None, pitch: tuple = (1, 1)) -> float:
    """Return the root mean square of the gradient over that of minus half the Laplacian.

    The gradient is taken on windows of four valid pixels, as the mean difference of their two
    columns and of their two rows; the Laplacian at inner pixels with four valid neighbours
    (Longuet-Higgins 1957; Nayak 1971).
    """
    present = valid_pixels(image, valid)
    rows, cols = image.shape
    dy, dx = pitch
    gradients, curvatures = [], []
    for i in range(rows - 1):
        for j in range(cols - 1):
            if present[i : i + 2, j : j + 2].all():
                (a, b), (c, d) = image[i : i + 2, j : j + 2].tolist()
                across = ((b - a) + (d - c)) / 2 / dx
                down = ((c - a) + (d - b)) / 2 / dy
                gradients.append(across**2 + down**2)
    for i in range(1, rows - 1):
        for j in range(1, cols - 1):
            cross = [(i, j), (i - 1, j), (i + 1, j), (i, j - 1), (i, j + 1)]
            if all(present[place] for place in cross):
                here, up, down, left, right = (float(image[place]) for place in cross)
                laplacian = (up - 2 * here + down) / dy**2 + (left - 2 * here + right) / dx**2
                curvatures.append((laplacian / 2) ** 2)
    return math.sqrt(
        math.fsum(gradients) / len(gradients) / (math.fsum(curvatures) / len(curvatures))
    )


def local_contrast(image: Array, sigma: float, floor: float, valid: Array | None = None) -> Array:
    """Return (image - local mean) / local standard deviation, in Gaussian windows.

    The square of `floor` times the standard deviation of all valid pixels is added to the local
    variance. NaN where a pixel is missing.
    """
    present = valid_pixels(image, valid)
    image = np.where(present, image, 0.0)
    least = (floor * float(image[present].std())) ** 2
    mean = gaussian_smooth(image, sigma, sigma, present)
    centred = np.where(present, image - image[present].mean(), 0.0)
    local = gaussian_smooth(centred, sigma, sigma, present)
    variance = gaussian_smooth(centred**2, sigma, sigma, present) - local**2
    out = np.full(image.shape, np.nan)
    for i, j in np.argwhere(present):
        out[i, j] = (image[i, j] - mean[i, j]) / math.sqrt(max(variance[i, j], 0.0) + least)
    return out


def hermite_polynomial(k: int, v: float) -> float:
    """Return He_k(v), by He_(k + 1) = v He_k - k He_(k - 1)."""
    before, own = 0.0, 1.0
    for order in range(k):
        before, own = own, v * own - order * before
    return own


def hermite_products(curve: list[float], levels: list[float], terms: int) -> list[float]:
    """Return the trapezium rule for the products of a curve with exp(-v^2/2) He_k / sqrt(k!)."""
    found = []
    for k in range(terms):
        values = [
            y * math.exp(-v * v / 2) * hermite_polynomial(k, v) / math.sqrt(math.factorial(k))
            for y, v in zip(curve, levels, strict=True)
        ]
        pairs = range(len(levels) - 1)
        steps = [(levels[t + 1] - levels[t]) * (values[t] + values[t + 1]) / 2 for t in pairs]
        found.append(math.fsum(steps))
    return found

"""Scalar fields derived from stacks of images: raw, smooth, band, slope, curvature.

A derived value is valid only if all pixels of its stencil are; Gaussian smoothing fills its
stencil by normalised convolution instead, and is valid where the pixel itself is. Values outside
a patch are not invented for differences: slope is defined at the centres of 2x2 windows and
curvature at inner pixels, so their fields are one and two pixels smaller than the image.

Smoothing agrees with scipy.ndimage.gaussian_filter(mode="reflect", truncate=4.0) to float64
rounding where nothing is missing.
"""

import math
from collections.abc import Iterator
from functools import lru_cache
from typing import Any, NamedTuple

import numpy as np

from mfeat import _checks, _field_kernels
from mfeat.levels import FieldStack

FAMILIES = ("raw", "smooth", "band", "slope", "curvature")
SCALE_UNITS = ("pitch", "length")

#: The wide Gaussian of a band has this many times the scale of the narrow one: octave bands, whose
#: smoothings serve two bands each. Common practice.
BAND_RATIO = 2.0

#: Gaussian kernels reach this many standard deviations, as scipy.ndimage does by default.
TRUNCATE = 4.0

#: Below this many pixels a sampled Gaussian leaves the image as it is (exp(-8) = 3e-4 at a
#: neighbour), so a smaller scale is taken for a mistake of units.
SMALLEST_SIGMA = 0.25

#: Rounding error of derived fields, as a share of the image's half range: some hundred operations
#: of 2**-53 each, with a wide margin. (Images far from zero bring the rounding of their pixels.)
ROUNDING = 1e-12

#: By how much a field is smaller than its image, and in which power the pitch divides it.
_SHRINK = {"raw": 0, "smooth": 0, "band": 0, "slope": 1, "curvature": 2}

#: By how much a field's stencil can multiply an error of the pixels: the sum of its weights' sizes.
_GAIN = {"raw": 1.0, "smooth": 1.0, "band": 2.0, "slope": 2.0 * math.sqrt(2.0), "curvature": 4.0}


class Field(NamedTuple):
    """One derived field: a family and the Gaussian scale at which it is taken.

    The scale of "raw" is 0. Slope and curvature may have scale 0: no smoothing first.
    """

    family: str
    scale: float = 0.0

    @property
    def name(self) -> str:
        """Name in feature names: "raw", "smooth_2", "slope_0", "band_1.6"."""
        return _field_name(self.family, self.scale)


@lru_cache(maxsize=1024)
def _field_name(family: str, scale: float) -> str:
    if family == "raw":
        return "raw"
    text = f"{scale:g}"
    return f"{family}_{text if float(text) == scale else repr(scale)}"


def scales(name: str, value: Any, *, zero: bool) -> tuple[float, ...]:
    """Check the scales of one family: a tuple or list of distinct numbers, in the given order."""
    if isinstance(value, str) or not isinstance(value, tuple | list | np.ndarray):
        number = isinstance(value, int | float | np.number)
        hint = f". For one scale write {name}=({value!r},)" if number else ""
        raise TypeError(
            f"{name} must be a tuple of Gaussian scales, () for none; got {value!r}{hint}"
        )
    checked = []
    for position, scale in enumerate(value):
        place = f"{name}[{position}]"
        number = _checks.real(place, scale, minimum=0.0) + 0.0  # -0.0 is 0.0 in names, too
        if number == 0.0 and not zero:
            raise ValueError(f"{place} must be > 0; got {scale!r}")
        if number in checked:
            raise ValueError(f"{name} holds the scale {scale!r} twice: {value!r}")
        checked.append(number)
    return tuple(checked)


def sigma_pixels(scale: float, pitch: tuple[float, float], scale_unit: str) -> tuple[float, float]:
    """Return the Gaussian's standard deviation in pixels along rows' axis 0 and axis 1.

    In unit "length" the scale is in the unit of the pitch; in unit "pitch" it is in multiples of
    the pitch (for rectangular pixels: of the geometric mean of the two pitches).
    """
    dy, dx = pitch
    length = scale if scale_unit == "length" else scale * math.sqrt(dy * dx)
    return length / dy, length / dx


@lru_cache(maxsize=256)  # streams of patches ask again and again; a refusal is not cached
def check_scales(
    fields: tuple[Field, ...],
    shape: tuple[int, int],
    pitch: tuple[float, float],
    scale_unit: str,
) -> None:
    """Refuse scales that cannot act on images of this shape, and images too small for a field.

    Raises
    ------
    ValueError
        With the field, the shape and what to change.
    """
    for field in fields:
        _check_scale(field, shape, pitch, scale_unit)


def _check_scale(
    field: Field, shape: tuple[int, int], pitch: tuple[float, float], scale_unit: str
) -> None:
    smallest = 2 + _SHRINK[field.family]
    if min(shape) < smallest:
        raise ValueError(
            f"field {field.name} needs images of at least {smallest}x{smallest} pixels; got "
            f"{shape[0]}x{shape[1]}"
        )
    if field.scale == 0.0:
        return
    widest = field.scale * (BAND_RATIO if field.family == "band" else 1.0)
    if max(sigma_pixels(field.scale, pitch, scale_unit)) < SMALLEST_SIGMA:
        raise ValueError(
            f"field {field.name}: a scale of {field.scale:g} is "
            f"{max(sigma_pixels(field.scale, pitch, scale_unit)):.3g} pixels at pitch {pitch}, too "
            f"small to smooth anything (at least {SMALLEST_SIGMA} pixels). "
            + _scale_hint(scale_unit)
        )
    across = max(
        s / side for s, side in zip(sigma_pixels(widest, pitch, scale_unit), shape, strict=True)
    )
    if across > 1.0:
        raise ValueError(
            f"field {field.name}: its widest Gaussian has a standard deviation of {across:.3g} "
            f"times the side of an image of {shape[0]}x{shape[1]} pixels at pitch {pitch}; nothing "
            "would be left. Use smaller scales or larger images. " + _scale_hint(scale_unit)
        )


def _scale_hint(scale_unit: str) -> str:
    if scale_unit == "length":
        return 'Scales are in the unit of pitch (scale_unit="length")'
    return 'Scales are in multiples of the pitch (scale_unit="pitch")'


@lru_cache(maxsize=256)
def gaussian_weights(sigma: float) -> np.ndarray:
    """Return half of the sampled Gaussian kernel, centre first; its mirror image sums to 1 with it.

    Examples
    --------
    >>> from mfeat.fields import gaussian_weights
    >>> weights = gaussian_weights(1.0)
    >>> len(weights), round(float(weights[0] + 2 * weights[1:].sum()), 12)
    (5, 1.0)
    """
    if sigma == 0.0:
        return _checks.read_only(np.ones(1))
    distance = np.arange(int(TRUNCATE * sigma + 0.5) + 1)
    weights = np.exp(-0.5 * (distance / sigma) ** 2)
    return _checks.read_only(weights / (weights[0] + 2.0 * weights[1:].sum()))


def derive(
    fields: tuple[Field, ...],
    values: np.ndarray,
    valid: np.ndarray | None,
    pitch: tuple[float, float],
    scale_unit: str,
    remove_tilt: bool,
) -> Iterator[tuple[Field, FieldStack]]:
    """Yield each field of a stack of images, in the order of `fields`.

    Parameters
    ----------
    fields : tuple of Field
    values : ndarray of shape (n, h, w)
        Images in a type of `mfeat._checks.compiled_type`.
    valid : ndarray of shape (n, h, w), uint8, or None
        Valid pixels; None if all of them are. A stack is treated as a whole: images with missing
        pixels are smoothed by normalised convolution, those without by plain convolution.
    pitch : (float, float)
    scale_unit : {"pitch", "length"}
    remove_tilt : bool
        Whether each image's least-squares plane is levelled first, about its mean.

    Notes
    -----
    Memory: one float64 array of the stack's size for each distinct smoothing, and five more.
    """
    shape = values.shape[1:]
    check_scales(fields, shape, pitch, scale_unit)
    missing = valid is not None
    low, high = _checks.value_ranges(values, valid)
    if valid is None:
        valid = np.ones(values.shape, dtype=np.uint8)
    # Half of each before they are added: the sum of two large values would overflow.
    offset = low.astype(np.float64) / 2 + high.astype(np.float64) / 2
    half_range = high.astype(np.float64) / 2 - low.astype(np.float64) / 2
    error = ROUNDING * half_range
    if values.dtype.kind == "f":  # integers are exact, however far from zero
        error = np.maximum(error, 2.0**-52 * (np.abs(offset) + half_range))
    nothing = np.zeros(len(values))
    source = _Smoothings(values, valid, missing, offset, pitch, scale_unit, remove_tilt)
    for field in fields:
        order = _SHRINK[field.family]
        rounding = _GAIN[field.family] * error / min(pitch) ** order
        if field.family == "raw" and remove_tilt:
            yield field, FieldStack(source.centred(), valid, offset, rounding)
        elif field.family == "raw":
            yield field, FieldStack(values, valid, offset, rounding, source.centred, low == high)
        elif field.family == "band":
            band = source.at(field.scale) - source.at(BAND_RATIO * field.scale)
            yield field, FieldStack(band, valid, nothing, rounding)
        elif field.family == "smooth":
            yield field, FieldStack(source.at(field.scale), valid, offset, rounding)
        else:
            smaller = (len(values), shape[0] - order, shape[1] - order)
            derived, defined = np.empty(smaller), np.empty(smaller, dtype=np.uint8)
            by_kernel = (
                _field_kernels.slope_stack
                if field.family == "slope"
                else _field_kernels.curvature_stack
            )
            by_kernel(source.at(field.scale), valid, pitch[0], pitch[1], derived, defined)
            yield field, FieldStack(derived, defined, nothing, rounding)


class _Smoothings:
    """Gaussian smoothings of one stack, each computed once and shared between the families."""

    def __init__(self, values, valid, missing, offset, pitch, scale_unit, remove_tilt):
        self._values = values
        self._valid = valid
        self._missing = missing
        self._offset = offset
        self._pitch = pitch
        self._scale_unit = scale_unit
        self._remove_tilt = remove_tilt
        self._done: dict[float, np.ndarray] = {}

    def centred(self) -> np.ndarray:
        """Return the images minus their offsets, float64, zero where pixels are missing.

        They are levelled if that is asked for.
        """
        if 0.0 not in self._done:
            centred = self._values - self._offset[:, None, None]
            if self._missing:
                centred[self._valid == 0] = 0.0
            if self._remove_tilt:
                level(centred, self._valid)
            self._done[0.0] = centred
        return self._done[0.0]

    def at(self, scale: float) -> np.ndarray:
        """Return the centred images smoothed at a scale; scale 0 leaves them as they are."""
        if scale == 0.0:
            return self.centred()
        if scale not in self._done:
            smoothed = self._smooth(self.centred(), scale)
            if self._missing:
                support = self._smooth(self._valid.astype(np.float64), scale)
                _field_kernels.normalise_stack(smoothed, support, self._valid)
            self._done[scale] = smoothed
        return self._done[scale]

    def _smooth(self, stack: np.ndarray, scale: float) -> np.ndarray:
        sigma_rows, sigma_cols = sigma_pixels(scale, self._pitch, self._scale_unit)
        along_columns, along_rows = gaussian_weights(sigma_rows), gaussian_weights(sigma_cols)
        padded = np.empty(stack.shape[2] + 2 * (len(along_rows) - 1))
        half = np.empty(stack.shape[1:])
        out = np.empty_like(stack)
        _field_kernels.smooth_stack(stack, along_rows, along_columns, padded, half, out)
        return out


def level(images: np.ndarray, valid: np.ndarray) -> None:
    """Subtract the slopes of each image's least-squares plane in place; its mean stays.

    Least squares by normal equations; source: A. M. Legendre, Nouvelles methodes pour la
    determination des orbites des cometes (1805), from memory. Images (n, h, w) are zero where they
    are missing, and stay so. Where the valid pixels do not span a plane, the least steep of the
    best ones is taken.
    """
    y, x = (np.arange(side) - (side - 1) / 2 for side in images.shape[1:])
    in_rows, in_columns = valid.sum(axis=2, dtype=float), valid.sum(axis=1, dtype=float)
    count = np.maximum(in_rows.sum(axis=1), 1.0)
    mean_y, mean_x = in_rows @ y / count, in_columns @ x / count
    # moments about the centre of the valid pixels, where the constant separates from the slopes
    yy = in_rows @ y**2 - count * mean_y**2
    xx = in_columns @ x**2 - count * mean_x**2
    xy = np.einsum("nij,i,j->n", valid, y, x, optimize=True) - count * mean_y * mean_x
    total = images.sum(axis=(1, 2))
    # not a matrix product: its last bit would depend on the number of images
    yz = (images.sum(axis=2) * y).sum(axis=1) - mean_y * total
    xz = (images.sum(axis=1) * x).sum(axis=1) - mean_x * total
    matrix = np.stack([yy, xy, xy, xx], axis=-1).reshape(-1, 2, 2)
    slopes = np.linalg.pinv(matrix, hermitian=True) @ np.stack([yz, xz], axis=-1)[:, :, None]
    for image, where, (down, across), my, mx in zip(
        images, valid, slopes[:, :, 0], mean_y, mean_x, strict=True
    ):
        image -= np.add.outer(down * (y - my), across * (x - mx))
        image[where == 0] = 0.0

"""Scalar fields derived from stacks of images: raw, smooth, band, slope, curvature, contrast.

A derived value is valid only if all pixels of its stencil are; Gaussian smoothing fills its
stencil by normalised convolution instead, and is valid where the pixel itself is. Values outside
a patch are not invented for differences: slope is defined at the centres of 2x2 windows and
curvature at inner pixels, so their fields are one and two pixels smaller than the image.
"""

import math
from collections.abc import Iterator
from functools import lru_cache
from typing import Any, NamedTuple

import numpy as np

from mfeat import _checks, _field_kernels
from mfeat.levels import FieldStack
from mfeat.matching import SMALLEST_SIGMA, MatchedSmoothings
from mfeat.smoothing import Smoothings, moments_of, sigma_pixels

FAMILIES = ("raw", "smooth", "band", "slope", "curvature", "contrast")
SCALE_UNITS = ("pitch", "length")
SCALE_RULES = ("matched", "fixed")

#: The wide Gaussian of a band has this many times the scale of the narrow one: octave bands, whose
#: smoothings serve two bands each. Common practice.
BAND_RATIO = 2.0

#: The window of the local mean and deviation of a contrast field: a Gaussian of this many times the
#: scale (rule "fixed"), or the length of detail (rule "matched").
CONTRAST_WINDOW = {"fixed": 2.5, "matched": 1.4}

#: Share of a field's deviation that is added to the local one, so that quiet places stay quiet.
CONTRAST_FLOOR = 0.03

#: No length of detail is longer than this share of an image's shorter side.
LONGEST_MATCHED = 0.5

#: Rounding error of derived fields, as a share of the image's half range: some hundred operations
#: of 2**-53 each, with a wide margin. (Images far from zero bring the rounding of their pixels.)
ROUNDING = 1e-12

#: By how much a field is smaller than its image, and in which power the pitch divides it.
_SHRINK = {"raw": 0, "smooth": 0, "band": 0, "slope": 1, "curvature": 2, "contrast": 0}

#: By how much a field's stencil can multiply an error of the pixels: the sum of its weights' sizes.
GAIN = {
    "raw": 1.0, "smooth": 1.0, "band": 2.0, "slope": 2.0 * math.sqrt(2.0), "curvature": 4.0,
    "contrast": 4.0,
}  # fmt: skip


class Field(NamedTuple):
    """One derived field: a family and the scale at which it is taken.

    The scale is that of a Gaussian (rule "fixed"), or the length of detail that smoothing gives
    the image first (rule "matched"). That of "raw" is 0. Slope and curvature may have scale 0: no
    smoothing first.
    """

    family: str
    scale: float = 0.0

    @property
    def name(self) -> str:
        """Name in feature names: "raw", "smooth_2", "slope_0", "band_1.6"."""
        return _field_name(self.family, self.scale)


@lru_cache(maxsize=1024)
def _field_name(family: str, scale: float) -> str:
    return "raw" if family == "raw" else f"{family}_{scale_name(scale)}"


def scale_name(scale: float) -> str:
    """Return a scale as names of features hold it, e.g. "2" or "1.6"."""
    text = f"{scale:g}"
    return text if float(text) == scale else repr(scale)


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


@lru_cache(maxsize=256)  # streams of patches ask again and again; a refusal is not cached
def check_scales(
    fields: tuple[Field, ...],
    shape: tuple[int, int],
    pitch: tuple[float, float],
    scale_unit: str,
    scale_rule: str,
) -> None:
    """Refuse scales that cannot act on images of this shape, and images too small for a field.

    Raises
    ------
    ValueError
        With the field, the shape and what to change.
    """
    for field in fields:
        smallest = 2 + _SHRINK[field.family]
        if min(shape) < smallest:
            raise ValueError(
                f"field {field.name} needs images of at least {smallest}x{smallest} pixels; got "
                f"{shape[0]}x{shape[1]}"
            )
        if field.scale > 0.0 and scale_rule == "fixed":
            _check_gaussian(field, shape, pitch, scale_unit)
        elif field.scale > 0.0:
            _check_length(field, shape, pitch, scale_unit)


def _check_gaussian(
    field: Field, shape: tuple[int, int], pitch: tuple[float, float], scale_unit: str
) -> None:
    widest = field.scale * {"band": BAND_RATIO, "contrast": CONTRAST_WINDOW["fixed"]}.get(
        field.family, 1.0
    )
    narrowest = max(sigma_pixels(field.scale, pitch, scale_unit))
    if narrowest < SMALLEST_SIGMA:
        raise ValueError(
            f"field {field.name}: a scale of {field.scale:g} is {narrowest:.3g} pixels at pitch "
            f"{pitch}, too small to smooth anything (at least {SMALLEST_SIGMA} pixels). "
            + _scale_hint(scale_unit)
        )
    across = _across(widest, shape, pitch, scale_unit)
    if across > 1.0:
        raise ValueError(
            f"field {field.name}: its widest Gaussian has a standard deviation of {across:.3g} "
            f"times the side of an image of {shape[0]}x{shape[1]} pixels at pitch {pitch}; nothing "
            "would be left. Use smaller scales or larger images. " + _scale_hint(scale_unit)
        )


def _check_length(
    field: Field, shape: tuple[int, int], pitch: tuple[float, float], scale_unit: str
) -> None:
    shortest = max(sigma_pixels(field.scale, pitch, scale_unit))
    if shortest < 1.0:
        raise ValueError(
            f"field {field.name}: a length of detail of {field.scale:g} is {shortest:.3g} pixels "
            f"at pitch {pitch}; white noise has 0.63 already, so give a longer one. "
            + _scale_hint(scale_unit)
        )
    longest = field.scale * (BAND_RATIO if field.family == "band" else 1.0)
    across = _across(longest, shape, pitch, scale_unit)
    if across > LONGEST_MATCHED:
        raise ValueError(
            f"field {field.name}: a length of detail of {longest:g} is {across:.3g} times the side "
            f"of an image of {shape[0]}x{shape[1]} pixels at pitch {pitch}, more than "
            f"{LONGEST_MATCHED}; use smaller scales or larger images. " + _scale_hint(scale_unit)
        )


def _across(
    scale: float, shape: tuple[int, int], pitch: tuple[float, float], scale_unit: str
) -> float:
    """Return a scale over the side of an image, along the axis where that is more."""
    sigmas = sigma_pixels(scale, pitch, scale_unit)
    return max(sigma / side for sigma, side in zip(sigmas, shape, strict=True))


def _scale_hint(scale_unit: str) -> str:
    if scale_unit == "length":
        return 'Scales are in the unit of pitch (scale_unit="length")'
    return 'Scales are in multiples of the pitch (scale_unit="pitch")'


def prepared(
    values: np.ndarray,
    valid: np.ndarray | None,
    pitch: tuple[float, float],
    scale_unit: str,
    remove_tilt: bool,
) -> Smoothings:
    """Return a stack of images, ready to be smoothed and to have fields derived.

    Parameters
    ----------
    values : ndarray of shape (n, h, w)
        Images in a type of `mfeat._checks.compiled_type`.
    valid : ndarray of shape (n, h, w), uint8, or None
        Valid pixels; None if all of them are. A stack is treated as a whole: images with missing
        pixels are smoothed by normalised convolution, those without by plain convolution.
    pitch : (float, float)
    scale_unit : {"pitch", "length"}
    remove_tilt : bool
        Whether each image's least-squares plane is levelled first, about its mean.
    """
    low, high = _checks.value_ranges(values, valid)
    # Half of each before they are added: the sum of two large values would overflow.
    offset = low.astype(np.float64) / 2 + high.astype(np.float64) / 2
    half_range = high.astype(np.float64) / 2 - low.astype(np.float64) / 2
    error = ROUNDING * half_range
    if values.dtype.kind == "f":  # integers are exact, however far from zero
        error = np.maximum(error, 2.0**-52 * (np.abs(offset) + half_range))
    return Smoothings(
        values=values,
        valid=np.ones(values.shape, dtype=np.uint8) if valid is None else valid,
        missing=valid is not None,
        offset=offset,
        error=error,
        constant=low == high,
        pitch=pitch,
        scale_unit=scale_unit,
        remove_tilt=remove_tilt,
    )


def derive(
    fields: tuple[Field, ...], pixels: Smoothings, scale_rule: str
) -> Iterator[tuple[Field, FieldStack]]:
    """Yield each field of a stack of images, in the order of `fields`.

    Parameters
    ----------
    fields : tuple of Field
        Their scales must have been checked for the shape of the images, see `check_scales`.
    pixels : Smoothings
        The images, see `prepared`; what it smooths for one field serves others, too.
    scale_rule : {"matched", "fixed"}

    Notes
    -----
    Memory: one float64 array of the stack's size for each distinct smoothing, and five more.
    """
    lengths = _lengths(fields)
    source: Smoothings | MatchedSmoothings = pixels
    if scale_rule == "matched" and lengths:
        source = MatchedSmoothings(pixels, lengths)
    for field in fields:  # in a function of its own, so that no field outlives its turn
        yield field, _derived(field, pixels, source, scale_rule)


def _derived(
    field: Field, pixels: Smoothings, source: Smoothings | MatchedSmoothings, scale_rule: str
) -> FieldStack:
    """Return one field of a stack."""
    valid, offset, pitch = pixels.valid, pixels.offset, pixels.pitch
    nothing = np.zeros(len(offset))
    order = _SHRINK[field.family]
    rounding = GAIN[field.family] * pixels.error / min(pitch) ** order
    if field.family == "raw" and pixels.remove_tilt:
        return FieldStack(pixels.centred(), valid, offset, rounding)
    if field.family == "raw":
        return FieldStack(pixels.values, valid, offset, rounding, pixels.centred, pixels.constant)
    smooth = source.at(field.scale)
    if field.family == "smooth":
        return FieldStack(smooth, valid, offset, rounding)
    if field.family == "band":
        return FieldStack(smooth - source.at(BAND_RATIO * field.scale), valid, nothing, rounding)
    if field.family == "contrast":
        window = CONTRAST_WINDOW[scale_rule] * field.scale
        contrast, rounding = _contrast(pixels, smooth, window, rounding)
        return FieldStack(contrast, valid, nothing, rounding)
    count, rows, cols = smooth.shape
    derived = np.empty((count, rows - order, cols - order))
    defined = np.empty(derived.shape, dtype=np.uint8)
    by_kernel = (
        _field_kernels.slope_stack if field.family == "slope" else _field_kernels.curvature_stack
    )
    by_kernel(smooth, valid, pitch[0], pitch[1], derived, defined)
    return FieldStack(derived, defined, nothing, rounding)


def _lengths(fields: tuple[Field, ...]) -> tuple[float, ...]:
    """Return the lengths of detail that fields need; a band takes two."""
    own = {field.scale for field in fields}
    wide = {BAND_RATIO * field.scale for field in fields if field.family == "band"}
    return tuple(sorted((own | wide) - {0.0}))


def _contrast(
    pixels: Smoothings, smooth: np.ndarray, window: float, rounding: np.ndarray
) -> tuple[np.ndarray, np.ndarray]:
    """Return (field - local mean) / local deviation of a stack, and a bound of its rounding.

    Local moments are weighted by a Gaussian window. The floor is a share of the deviation of the
    whole field; a flat field gives zeros.
    """
    valid = pixels.valid
    mean, deviation = moments_of(smooth, valid)
    centred = smooth - mean[:, None, None]  # so that squares lose no digits
    if pixels.missing:
        centred[valid == 0] = 0.0
    means, squares = pixels.smoothed(window, centred, np.square(centred))
    relief = deviation > rounding
    floors = np.where(relief, CONTRAST_FLOOR * deviation, 0.0)
    _field_kernels.contrast_stack(centred, means, squares, valid, floors**2)
    return centred, np.where(relief, rounding / np.where(relief, floors, 1.0), 1.0)

"""Checks of what users pass in, and the one wording of each complaint."""

import math
from collections.abc import Callable, Sequence
from typing import Any

import numpy as np

from mfeat import _kernels

#: Largest number of levels: level indices are 16-bit, and index 0 means "below every level".
MAX_LEVELS = 65_535

_FLOATS = (np.float16, np.float32, np.float64)

# Between these, squares and differences of pixels over a pitch neither overflow nor vanish.
_LARGEST, _FINEST = 1e75, 1e-75


def choice(name: str, value: Any, known: Sequence[Any]) -> Any:
    """Return `value` if it is one of `known`; a closed option has no silent fallback."""
    for entry in known:
        kinds = str if isinstance(entry, str) else int | np.integer
        if isinstance(value, kinds) and not isinstance(value, bool) and entry == value:
            return entry
    raise ValueError(f"{name} must be one of {', '.join(map(repr, known))}; got {value!r}")


def real(
    name: str,
    value: Any,
    *,
    minimum: float = -math.inf,
    above: float = -math.inf,
    maximum: float = math.inf,
) -> float:
    """Return `value` as a finite float that is >= `minimum`, > `above` and <= `maximum`."""
    if isinstance(value, bool | np.bool_) or not isinstance(
        value, int | float | np.integer | np.floating
    ):
        raise TypeError(f"{name} must be a number; got {value!r} ({type(value).__name__})")
    try:
        number = float(value)
    except OverflowError:
        number = math.inf
    if not math.isfinite(number) or number < minimum or number <= above:
        bound = f" > {above:g}" if above > -math.inf else ""
        bound = f" >= {minimum:g}" if minimum > -math.inf else bound
        raise ValueError(f"{name} must be a finite number{bound}; got {_short(value)}")
    if number > maximum:
        raise ValueError(f"{name} must be <= {maximum:g}; got {_short(value)}")
    return number


def _short(value: Any) -> str:
    text = repr(value)
    return text if len(text) <= 40 else f"{text[:20]}... ({len(text)} characters)"


def integer(name: str, value: Any, *, minimum: int, maximum: int | None = None) -> int:
    """Return `value` as an int within the bounds; floats and bools are refused."""
    if isinstance(value, bool | np.bool_) or not isinstance(value, int | np.integer):
        raise TypeError(f"{name} must be an integer; got {value!r} ({type(value).__name__})")
    if value < minimum or (maximum is not None and value > maximum):
        upper = "" if maximum is None else f" and <= {maximum}"
        raise ValueError(f"{name} must be >= {minimum}{upper}; got {value}")
    return int(value)


def pitch(value: Any, name: str = "pitch") -> tuple[float, float]:
    """Return the pitch as (row pitch, column pitch); a single number means square pixels."""
    if isinstance(value, np.ndarray) and value.ndim == 0:
        value = value[()]
    if isinstance(value, tuple | list | np.ndarray):
        if len(value) != 2:
            raise ValueError(
                f"{name} must be one number or (row pitch, column pitch); "
                f"got {len(value)} numbers: {value!r}"
            )
        return (_one_pitch(f"{name}[0]", value[0]), _one_pitch(f"{name}[1]", value[1]))
    number = _one_pitch(name, value)
    return (number, number)


def _one_pitch(name: str, value: Any) -> float:
    number = real(name, value, above=0.0)
    if not 1e-60 <= number <= 1e60:  # areas and curvatures need its square, either way up
        raise ValueError(f"{name} must be from 1e-60 to 1e60; got {value!r}. Use another unit")
    return number


def as_array(given: Any, name: str) -> np.ndarray:
    """Return an array; a sequence of masked rows becomes a masked array."""
    if isinstance(given, np.ndarray):
        return given
    if isinstance(given, dict | set | str | bytes):
        raise TypeError(f"{name} must be an array of numbers; got {type(given).__name__}")
    try:
        if isinstance(given, list | tuple) and any(isinstance(r, np.ma.MaskedArray) for r in given):
            return np.ma.stack(given)
        return np.asarray(given)
    except ValueError as error:
        raise ValueError(f"{name} must be an array; it is ragged: {error}") from None


def image(array: Any, name: str = "image") -> np.ndarray:
    """Return a 2-D array of a countable type, in any byte order; masked arrays stay masked.

    Countable: bool, integers of up to 64 bit, float16, float32, float64. Nothing is copied.
    """
    array = as_array(array, name)
    dtype = array.dtype
    if not (dtype == np.bool_ or dtype.kind in "iu" or dtype.newbyteorder("=").type in _FLOATS):
        raise TypeError(
            f"{name} must hold bool, integers of up to 64 bit, float16, float32 or float64; "
            f"got dtype {dtype}. Give an array of plain numbers"
        )
    if array.ndim != 2:
        hint = "; for several images or channels use MinkowskiCurves" if array.ndim > 2 else ""
        raise ValueError(
            f"{name} must have 2 dimensions (rows, columns); got shape {array.shape}{hint}"
        )
    if array.shape[0] < 2 or array.shape[1] < 2:
        raise ValueError(f"{name} must be at least 2x2 pixels; got shape {array.shape}")
    return array


def valid_mask(mask: Any, shape: tuple[int, ...], name: str = "image") -> np.ndarray | None:
    """Return a user's mask as a boolean array; where the mask itself is masked, it is False."""
    if mask is None:
        return None
    mask = as_array(mask, f"mask of {name}")
    if isinstance(mask, np.ma.MaskedArray):
        mask = mask.filled(False)
    if mask.dtype != np.bool_:
        raise TypeError(
            f"mask of {name} must be boolean, True where a pixel is valid; "
            f"got dtype {mask.dtype}. Write e.g. mask=(mask != 0)"
        )
    if mask.shape != shape:
        raise ValueError(f"mask of {name} has shape {mask.shape}, the image {shape}")
    return mask


def valid_pixels(
    array: np.ndarray, mask: np.ndarray | None = None, name: str = "image", first_row: int = 0
) -> np.ndarray | None:
    """Return the map of valid pixels as uint8, or None where every pixel is valid.

    A pixel is missing where `mask` is False, where a masked array masks it, and where it is NaN.
    Infinities in valid pixels are refused; `first_row` is the row of the image that the array
    starts with.
    """
    valid = mask
    if isinstance(array, np.ma.MaskedArray) and array.mask is not np.ma.nomask:
        unmasked = ~np.ma.getmaskarray(array)
        valid = unmasked if valid is None else valid & unmasked
    values = np.asarray(array)
    if values.dtype.kind == "f" and not (finite := np.isfinite(values)).all():
        known = ~np.isnan(values)
        valid = known if valid is None else valid & known
        infinite = np.argwhere(valid & ~finite)
        if len(infinite):
            row, col = infinite[0]
            raise ValueError(
                f"{name} holds {values[row, col]} at row {first_row + row}, column {col}; "
                "infinite values cannot be ranked. Set them to NaN if they mean missing data"
            )
    if valid is None or valid.all():
        return None
    return valid.astype(np.uint8)


def value_ranges(values: np.ndarray, valid: np.ndarray | None) -> tuple[np.ndarray, np.ndarray]:
    """Return the smallest and largest valid value of each image of a stack; 0 where none is."""
    if valid is None:
        return values.min(axis=(1, 2)), values.max(axis=(1, 2))
    low, high = np.zeros((2, len(values)), values.dtype)
    _kernels.value_range(values, valid, low, high)
    return low, high


def representable(
    values: np.ndarray, valid: np.ndarray | None, name_of: Callable[[int], str]
) -> None:
    """Refuse a stack of images with which fields cannot be computed in float64.

    64-bit integers beyond 2**53 would be rounded; squares and differences of floating-point values
    beyond 1e75 overflow, and those of values all within 1e-75 of each other vanish. `name_of` tells
    how messages call an image.
    """
    if values.dtype.itemsize < 8:
        return
    low, high = value_ranges(values, valid)
    whole = values.dtype.kind != "f"
    limit = 2**53 if whole else _LARGEST
    large = (high > limit) | (low < -limit if values.dtype.kind != "u" else False)
    if large.any():
        k = int(np.argmax(large))
        if whole:
            raise ValueError(
                f"{name_of(k)} holds integers from {low[k]} to {high[k]}; beyond 2**53 means and "
                "derived fields would be rounded. Subtract an offset, or count exactly with "
                "count_patterns at levels of your own"
            )
        raise ValueError(
            f"{name_of(k)} reaches from {low[k]:.3g} to {high[k]:.3g}; fields cannot be computed "
            "beyond 1e75. Set no-data values to NaN, or mask them"
        )
    fine = (low < high) & (high - low < _FINEST)
    if not whole and fine.any():
        k = int(np.argmax(fine))
        raise ValueError(
            f"{name_of(k)} reaches from {low[k]!r} to {high[k]!r}; differences below {_FINEST:g} "
            "vanish in fields. Multiply the values by a power of ten"
        )


def compiled_type(array: np.ndarray) -> np.ndarray:
    """Return a contiguous array of a type that the kernels are compiled for; values unchanged.

    It is a read-only view or copy: Numba compiles read-only arrays apart from writable ones, and
    users' arrays may be either.
    """
    kind = array.dtype.kind
    size = array.dtype.itemsize
    if kind == "f":
        wanted = np.float64 if size == 8 else np.float32
    elif (kind == "u" and size == 1) or kind == "b":
        wanted = np.uint8
    elif kind == "u" and size == 8:
        wanted = np.uint64
    elif size < 4 or (kind == "i" and size == 4):
        wanted = np.int32
    else:
        wanted = np.int64
    return read_only(np.ascontiguousarray(array, dtype=wanted))


def read_only(array: np.ndarray) -> np.ndarray:
    """Return a read-only view."""
    view = array.view()
    view.flags.writeable = False
    return view


def level_sequence(levels: Any, name: str = "levels") -> np.ndarray:
    """Return explicit levels as a 1-D int64, uint64 or float64 array; no value is changed.

    They must be finite and strictly ascending, 1 to 65,535 of them.
    """
    if isinstance(levels, np.ma.MaskedArray) and np.ma.getmaskarray(levels).any():
        raise ValueError(f"{name} holds masked entries; give numbers only")
    if isinstance(levels, np.ndarray):
        array = np.asarray(levels)
    else:
        ordered = hasattr(levels, "__len__") and hasattr(levels, "__getitem__")
        if not ordered or isinstance(levels, str | bytes | dict):
            raise TypeError(f"{name} must be a sequence of numbers; got {levels!r}")
        given = list(levels)
        try:
            array = np.asarray(given) if given else np.empty(0)
        except ValueError as error:
            raise ValueError(f"{name} must be one-dimensional; it is ragged: {error}") from None
        if array.ndim == 1 and array.dtype.kind == "f":
            for number, stored in zip(given, array, strict=True):
                if isinstance(number, int | np.integer) and int(stored) != int(number):
                    raise ValueError(
                        f"{name} mixes {number} with other numbers in a way that would round it; "
                        "give all levels as integers of one signedness"
                    )
    if array.ndim != 1:
        raise ValueError(f"{name} must be one-dimensional; got shape {array.shape}")
    if array.dtype.kind == "f" and array.dtype.itemsize <= 8:
        array = array.astype(np.float64)
    elif array.dtype.kind == "u":
        array = array.astype(np.uint64)
    elif array.dtype.kind == "i":
        array = array.astype(np.int64)
    elif array.dtype == object and all(isinstance(number, int) for number in array.flat):
        raise ValueError(f"{name} holds integers beyond 64 bit; no image can reach them")
    elif array.size:
        raise TypeError(f"{name} must hold integers or floats; got dtype {array.dtype}")
    if not 1 <= array.size <= MAX_LEVELS:
        raise ValueError(f"{name} must hold 1 to {MAX_LEVELS} levels; got {array.size}")
    bad = np.flatnonzero(~np.isfinite(array))
    if bad.size:
        raise ValueError(f"{name} must be finite; {name}[{bad[0]}] is {array[bad[0]]}")
    unordered = np.flatnonzero(array[1:] <= array[:-1])
    if unordered.size:
        at = unordered[0]
        raise ValueError(
            f"{name} must be strictly ascending; {name}[{at}] = {array[at]} is followed by "
            f"{array[at + 1]}. Use numpy.unique({name})"
        )
    return array


def show(values: np.ndarray, limit: int = 6) -> str:
    """Return a short text of a long array, for messages and reprs."""
    values = np.asarray(values)
    if values.size <= limit:
        inner = ", ".join(f"{v:.6g}" for v in values)
    else:
        inner = ", ".join(f"{v:.6g}" for v in values[:3]) + f", ..., {values[-1]:.6g}"
    return f"[{inner}]" + (f" ({values.size})" if values.size > limit else "")


def number(count: int, one: str, many: str | None = None) -> str:
    """Return a number with its noun, in the singular or plural."""
    return f"{count} {one if count == 1 else many or one + 's'}"

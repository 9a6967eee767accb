"""Checks of what users pass in, and the one wording of each complaint."""

import math
from collections.abc import Sequence
from typing import Any

import numpy as np

from mfeat import _kernels

#: Largest number of levels: level indices are 16-bit, and index 0 means "below every level".
MAX_LEVELS = 65_535

_FLOATS = (np.float16, np.float32, np.float64)


def choice(name: str, value: Any, known: Sequence[Any]) -> Any:
    """Return `value` if it is one of `known`; a closed option has no silent fallback."""
    for entry in known:
        if type(entry) is type(value) and entry == value:
            return value
        if isinstance(value, int | np.integer) and not isinstance(value, bool) and entry == value:
            return entry
    raise ValueError(f"{name} must be one of {', '.join(map(repr, known))}; got {value!r}")


def real(name: str, value: Any, *, minimum: float = -math.inf, above: float = -math.inf) -> float:
    """Return `value` as a finite float that is >= `minimum` and > `above`."""
    if isinstance(value, bool | np.bool_) or not isinstance(
        value, int | float | np.integer | np.floating
    ):
        raise TypeError(f"{name} must be a number; got {value!r} ({type(value).__name__})")
    number = float(value)
    if not math.isfinite(number) or number < minimum or number <= above:
        bound = f" > {above:g}" if above > -math.inf else ""
        bound = f" >= {minimum:g}" if minimum > -math.inf else bound
        raise ValueError(f"{name} must be a finite number{bound}; got {value!r}")
    return number


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
    if isinstance(value, tuple | list | np.ndarray):
        if len(value) != 2:
            raise ValueError(
                f"{name} must be one number or (row pitch, column pitch); "
                f"got {len(value)} numbers: {value!r}"
            )
        return (real(f"{name}[0]", value[0], above=0.0), real(f"{name}[1]", value[1], above=0.0))
    number = real(name, value, above=0.0)
    return (number, number)


def image(array: Any, name: str = "image") -> np.ndarray:
    """Return a 2-D array of a countable type in native byte order; masked arrays stay masked.

    Countable: bool, integers of up to 64 bit, float16, float32, float64. Nothing is copied unless
    the bytes are swapped.
    """
    if not isinstance(array, np.ndarray):
        try:
            array = np.asarray(array)
        except ValueError as error:
            raise ValueError(f"{name} must be a 2-D array; it is ragged: {error}") from None
    dtype = array.dtype
    if not (dtype == np.bool_ or dtype.kind in "iu" or dtype.newbyteorder("=").type in _FLOATS):
        raise TypeError(
            f"{name} must hold bool, integers of up to 64 bit, float16, float32 or float64; "
            f"got dtype {dtype}. Convert it first, e.g. {name}.astype('float64')"
        )
    if array.ndim != 2:
        hint = "; for several images or channels use MinkowskiCurves" if array.ndim > 2 else ""
        raise ValueError(
            f"{name} must have 2 dimensions (rows, columns); got shape {array.shape}{hint}"
        )
    if array.shape[0] < 2 or array.shape[1] < 2:
        raise ValueError(f"{name} must be at least 2x2 pixels; got shape {array.shape}")
    if not dtype.isnative:
        array = array.astype(dtype.newbyteorder("="))
    return array


def valid_pixels(array: np.ndarray, mask: Any, name: str = "image") -> np.ndarray | None:
    """Return the map of valid pixels as uint8, or None where every pixel is valid.

    A pixel is missing where `mask` is False, where a masked array masks it, and where it is NaN.
    Infinities in valid pixels are refused.
    """
    valid = None
    if mask is not None:
        mask = np.asarray(mask)
        if mask.dtype != np.bool_:
            raise TypeError(
                f"mask of {name} must be boolean, True where a pixel is valid; "
                f"got dtype {mask.dtype}. Write e.g. mask=(mask != 0)"
            )
        if mask.shape != array.shape:
            raise ValueError(f"mask of {name} has shape {mask.shape}, the image {array.shape}")
        valid = mask
    if isinstance(array, np.ma.MaskedArray):
        unmasked = ~np.ma.getmaskarray(array)
        valid = unmasked if valid is None else valid & unmasked
    if array.dtype.kind == "f":
        values = compiled_type(np.asarray(array))
        given = np.ones(array.shape, np.uint8) if valid is None else valid.astype(np.uint8)
        usable = np.empty(array.shape, np.uint8)
        missing, infinite = _kernels.survey(values, given, usable)
        if infinite >= 0:
            row, col = divmod(infinite, array.shape[1])
            raise ValueError(
                f"{name} holds {values[row, col]} at row {row}, column {col}; "
                "infinite values cannot be ranked. Set them to NaN if they mean missing data"
            )
        return usable if missing else None
    if valid is None or valid.all():
        return None
    return valid.astype(np.uint8)


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


def level_sequence(levels: Any, name: str = "levels", *, strict: bool = True) -> np.ndarray:
    """Return explicit levels as a 1-D int64, uint64 or float64 array; no value is changed.

    They must be finite and strictly ascending, 1 to 65,535 of them.
    """
    if isinstance(levels, np.ndarray):
        array = levels
    else:
        try:
            given = list(levels)
        except TypeError:
            raise TypeError(f"{name} must be a sequence of numbers; got {levels!r}") from None
        array = np.asarray(given) if given else np.empty(0)
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
    elif array.size:
        raise TypeError(f"{name} must hold integers or floats; got dtype {array.dtype}")
    if not 1 <= array.size <= MAX_LEVELS:
        raise ValueError(f"{name} must hold 1 to {MAX_LEVELS} levels; got {array.size}")
    bad = np.flatnonzero(~np.isfinite(array))
    if bad.size:
        raise ValueError(f"{name} must be finite; {name}[{bad[0]}] is {array[bad[0]]}")
    unordered = np.flatnonzero(array[1:] <= array[:-1] if strict else array[1:] < array[:-1])
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

"""Exact counts of 2x2 window statistics at every level of an image, in one pass.

A level index (the number of levels that a pixel reaches) replaces the pixel; then the histogram of
the largest index of a pair or window, summed from the top, counts the sets that touch the
foreground at every level at once. Everything downstream is a weighted sum of these integers.
"""

from dataclasses import dataclass, field
from typing import Any

import numpy as np

from mfeat import _checks, _kernels

#: The rows of a count table. Each counts, over all counting windows `a b / c d` and at each level
#: u, how many of the window's sets have their largest value (the last row: smallest value) >= u.
STATISTICS = (
    "pixel",  # the four pixels a, b, c, d
    "diagonal",  # the two pixels a, d
    "horizontal",  # the two pairs (a, b), (c, d)
    "vertical",  # the two pairs (a, c), (b, d)
    "falling",  # the pair (a, d), from top left to bottom right
    "rising",  # the pair (b, c), from bottom left to top right
    "largest",  # the window, by its largest value
    "smallest",  # the window, by its smallest value
)

EDGES = ("inside", "framed")

#: Up to this many levels, comparing whole rows with each level is faster than searching.
FEW_LEVELS = 24

#: Pixels of an image indexed and counted at a time; bounds the memory of `count_patterns`.
BAND_PIXELS = 1 << 20


@dataclass(frozen=True, eq=False)
class PatternCounts:
    """Integer counts of 2x2 window statistics, one column a level; `a + b` merges them exactly.

    Returned by `count_patterns`. The counts are int64 and, inside windows, additive: tiles that
    share one row or column of pixels add up to the counts of the whole image, bit for bit. Arrays
    are read-only.

    Attributes
    ----------
    levels : ndarray of shape (T,)
        Levels, ascending; the foreground at level u is {image >= u}.
    table : ndarray of shape (8, T), int64
        The statistics of `mfeat.counts.STATISTICS`, in that order.
    windows : int
        Number of counting windows: those whose four pixels are valid.
    possible_windows : int
        Number of windows that the image has.
    pitch : tuple of float
        Pixel pitch (rows, columns).
    edges : {"inside", "framed"}
        Windows inside the image only, or also those of a surrounding frame of background.
    """

    levels: np.ndarray
    table: np.ndarray = field(repr=False)
    windows: int
    possible_windows: int
    pitch: tuple[float, float] = (1.0, 1.0)
    edges: str = "inside"

    def __post_init__(self):
        for name in ("levels", "table"):
            object.__setattr__(self, name, _checks.read_only(getattr(self, name)))

    @property
    def valid_fraction(self) -> float:
        """Share of the 2x2 windows, of the framed image if framed, with four valid pixels."""
        return self.windows / self.possible_windows

    def classes(self) -> dict[str, np.ndarray]:
        """Return the number of windows of each class, int64 arrays with one entry a level.

        Classes by the number of foreground pixels of a window: "q0", "q1", "q2" (two adjacent
        ones), "qd" (two on a diagonal), "q3", "q4". Source: S. B. Gray, Local properties of
        binary images in two dimensions, IEEE Trans. Computers C-20 (1971), 551-561.

        Examples
        --------
        >>> import numpy as np
        >>> from mfeat import count_patterns
        >>> counts = count_patterns(np.array([[1, 0, 0], [1, 1, 0]]), levels=[1])
        >>> {name: int(number[0]) for name, number in counts.classes().items()}
        {'q0': 0, 'q1': 1, 'q2': 0, 'qd': 0, 'q3': 1, 'q4': 0}
        """
        return classes_of(self.table, self.windows)

    def crossings(self) -> dict[str, np.ndarray]:
        """Return TWICE the mean number of boundary crossings per direction, as exact int64.

        "horizontal" and "vertical" count the neighbour pairs of each window along that axis
        (two pairs a window, so every inner pair is met by two windows); "falling" and "rising"
        are twice the diagonal pairs, so that all four are on one scale: value / 2 is T of the
        Cauchy-Crofton formula.

        Examples
        --------
        >>> import numpy as np
        >>> from mfeat import count_patterns
        >>> bars = np.tile([0, 1], (4, 2))
        >>> {k: int(v[0]) for k, v in count_patterns(bars, levels=[1]).crossings().items()}
        {'horizontal': 18, 'vertical': 0, 'falling': 18, 'rising': 18}
        """
        return crossings_of(self.table)

    def __add__(self, other: Any) -> "PatternCounts":
        if not isinstance(other, PatternCounts):
            return NotImplemented
        if not self._same_levels(other):
            raise ValueError(
                "counts with different levels cannot be merged: "
                f"{_show_exactly(self.levels, other.levels)} and "
                f"{_show_exactly(other.levels, self.levels)}; "
                "count both images with the same `levels`"
            )
        for name in ("pitch", "edges"):
            mine, theirs = getattr(self, name), getattr(other, name)
            if mine != theirs:
                raise ValueError(
                    f"counts with different {name} cannot be merged: {mine!r} and {theirs!r}"
                )
        if self.edges == "framed":
            raise ValueError(
                "framed counts cannot be merged: each has a frame of its own, so tiles would not "
                'add up to the image. Count tiles with edges="inside"; for totals over separate '
                "images add the functionals"
            )
        return PatternCounts(
            levels=self.levels,
            table=self.table + other.table,
            windows=self.windows + other.windows,
            possible_windows=self.possible_windows + other.possible_windows,
            pitch=self.pitch,
            edges=self.edges,
        )

    def __radd__(self, other: Any) -> "PatternCounts":
        if isinstance(other, int) and other == 0:  # so that sum() of counts works
            return self
        return NotImplemented

    def __eq__(self, other: Any) -> bool:
        if not isinstance(other, PatternCounts):
            return NotImplemented
        return (
            self._same_levels(other)
            and np.array_equal(self.table, other.table)
            and (self.windows, self.possible_windows, self.pitch, self.edges)
            == (other.windows, other.possible_windows, other.pitch, other.edges)
        )

    __hash__ = None

    def _same_levels(self, other: "PatternCounts") -> bool:
        """Compare levels as numbers, exactly: an integer and a float beyond 2**53 may differ."""
        if self.levels.dtype == other.levels.dtype:
            return np.array_equal(self.levels, other.levels)
        return self.levels.tolist() == other.levels.tolist()

    def __repr__(self) -> str:
        return (
            f"PatternCounts({len(self.levels)} levels {_checks.show(self.levels)}, "
            f"windows={self.windows} of {self.possible_windows}, pitch={self.pitch}, "
            f"edges={self.edges!r})"
        )


def count_patterns(
    image: Any,
    levels: Any,
    mask: Any = None,
    *,
    pitch: Any = 1.0,
    edges: str = "inside",
) -> PatternCounts:
    """Count the 2x2 window statistics of {image >= level} at all levels in one pass.

    Parameters
    ----------
    image : array_like of shape (h, w), both >= 2
        bool, an integer type of up to 64 bit, float16, float32 or float64; any memory order. NaN
        and masked pixels (numpy.ma) are missing; infinities are refused.
    levels : sequence of 1 to 65,535 finite numbers, strictly ascending
        In the image's own unit. Each comparison is exact: neither the pixel nor the level is
        rounded, whatever their types.
    mask : array of bool of shape (h, w), optional
        True where a pixel is valid. A window counts only if its four pixels are valid.
    pitch : float or (float, float), default 1.0
        Pixel pitch, or (row pitch, column pitch); recorded with the counts for the functionals.
    edges : {"inside", "framed"}, default "inside"
        "inside" counts the windows inside the image (for densities of a texture); "framed"
        surrounds the image by background first (for totals of isolated objects).

    Returns
    -------
    PatternCounts

    Raises
    ------
    TypeError
        For types that cannot be counted exactly.
    ValueError
        For wrong shapes, infinite pixels, unordered or non-finite levels, unknown options.

    Notes
    -----
    Time grows with the number of pixels: seven table updates each, eight where pixels are missing,
    whatever the number of levels. From some thousand levels on the tables outgrow the processor's
    cache, which costs up to four times as much again. Memory beyond the image and the counts: some
    20 MB, whatever the image's size, type, byte order and missing pixels.

    Examples
    --------
    >>> import numpy as np
    >>> from mfeat import count_patterns
    >>> image = np.array([[0, 3, 0], [0, 3, 9], [0, 0, 0]], dtype=np.uint8)
    >>> counts = count_patterns(image, levels=[1, 5], edges="framed")
    >>> counts.classes()["q1"]
    array([5, 4])
    """
    image = _checks.image(image)
    levels = _checks.level_sequence(levels)
    pitch = _checks.pitch(pitch)
    _checks.choice("edges", edges, EDGES)
    mask = _checks.valid_mask(mask, image.shape)
    [thresholds], [reach] = thresholds_for(compiled_dtype(image), levels[None, :])
    return count_image(image, mask, levels, thresholds, reach, pitch=pitch, edges=edges)


def count_image(
    image: np.ndarray,
    mask: np.ndarray | None,
    levels: np.ndarray,
    thresholds: np.ndarray,
    reach: int,
    *,
    pitch: tuple[float, float],
    edges: str,
) -> PatternCounts:
    """Count a checked image whose levels have been turned into thresholds of its own type.

    The work goes band by band; bands share one row, and the counts of bands add up exactly.
    """
    rows, cols = image.shape
    frame = 1 if edges == "framed" else 0
    table = np.zeros((len(STATISTICS), len(levels) + 1), dtype=np.int64)
    windows = 0
    step = max(1, BAND_PIXELS // cols)
    for start in range(0, rows - 1, step):
        stop = min(start + step + 1, rows)
        top = frame if start == 0 else 0
        bottom = frame if stop == rows else 0
        valid = _checks.valid_pixels(
            image[start:stop], None if mask is None else mask[start:stop], first_row=start
        )
        band = _checks.compiled_type(np.asarray(image[start:stop]))
        shape = (top + len(band) + bottom + 1, cols + 2 * frame + 1)
        index = np.zeros(shape, dtype=np.uint16)
        _index(band, thresholds[:reach], index, top, frame)
        if valid is None:
            of_band = np.zeros_like(table)
            _kernels.count_complete(index, of_band)
            table += of_band
            windows += (shape[0] - 2) * (shape[1] - 2)
        else:
            around = np.pad(valid, ((top, bottom), (frame, frame)), constant_values=1)
            ok, good = windows_of(around)
            _kernels.count_windows(index, ok, table)
            windows += good
    return PatternCounts(
        levels=levels,
        table=levels_from_top(table),
        windows=windows,
        possible_windows=(rows - 1 + 2 * frame) * (cols - 1 + 2 * frame),
        pitch=pitch,
        edges=edges,
    )


def _index(
    band: np.ndarray, thresholds: np.ndarray, index: np.ndarray, top: int, left: int
) -> None:
    """Write level indices of a band by the fastest of three ways, which agree exactly."""
    if band.dtype == np.uint8:
        table = np.empty(256, dtype=np.uint16)
        _kernels.index_by_table(band, thresholds, table, index, top, left)
    elif len(thresholds) <= FEW_LEVELS:
        _kernels.index_by_comparison(band, thresholds, index, top, left)
    else:
        _kernels.index_by_search(band, thresholds, index, top, left)


def index_stack(values: np.ndarray, thresholds: np.ndarray, reach: np.ndarray) -> np.ndarray:
    """Return level indices of a stack (n, h, w), with the extra row and column of `_kernels`."""
    count, rows, cols = values.shape
    index = np.zeros((count, rows + 1, cols + 1), dtype=np.uint16)
    if values.dtype == np.uint8:
        table = np.empty(256, dtype=np.uint16)
        _kernels.index_stack_by_table(values, thresholds, reach, table, index)
    else:
        _kernels.index_stack(values, thresholds, reach, FEW_LEVELS, index)
    return index


def levels_from_top(table: np.ndarray) -> np.ndarray:
    """Turn histograms over level indices (..., T + 1) into counts of "index >= level" (..., T)."""
    return np.cumsum(table[..., :0:-1], axis=-1)[..., ::-1]


def windows_of(valid: np.ndarray) -> tuple[np.ndarray, int]:
    """Return the map of windows with four valid pixels (read-only) and their number."""
    ok = np.empty((valid.shape[0] + 1, valid.shape[1] + 1), dtype=np.uint8)
    number = _kernels.windows_ok(valid, ok)
    return _checks.read_only(ok), int(number)


def _show_exactly(levels: np.ndarray, others: np.ndarray) -> str:
    """Show levels shortly, and the first one that differs from another's with all its digits."""
    pairs = zip(levels.tolist(), others.tolist(), strict=False)
    different = next((k for k, (mine, theirs) in enumerate(pairs) if mine != theirs), None)
    detail = "" if different is None else f", levels[{different}] = {levels.tolist()[different]!r}"
    return f"{_checks.show(levels)}{detail}"


def compiled_dtype(values: np.ndarray) -> np.dtype:
    """Return the type in which the kernels see such an image; it holds every pixel exactly."""
    return _checks.compiled_type(np.empty(0, dtype=values.dtype)).dtype


def thresholds_for(dtype: np.dtype, levels: np.ndarray) -> tuple[np.ndarray, np.ndarray]:
    """Round levels (n, T) up to the nearest value of `dtype`: `pixel >= level` stays exact.

    Returns the thresholds and, per row, how many of them lie within the type's range; the levels
    beyond cannot be reached by any pixel.
    """
    if dtype.kind == "f":
        thresholds = _up_to_float(dtype, levels)
        return thresholds, np.full(len(levels), levels.shape[-1])
    low, high = int(np.iinfo(dtype).min), int(np.iinfo(dtype).max)
    if levels.dtype.kind == "f":
        whole = np.ceil(levels)
        # high + 1 is a power of two: exact as a float, where `high` itself may not be
        reach = np.count_nonzero(whole < float(high + 1), axis=-1)
        return np.clip(whole, low, np.nextafter(float(high + 1), 0.0)).astype(dtype), reach
    lowest = max(low, int(np.iinfo(levels.dtype).min))
    highest = min(high, int(np.iinfo(levels.dtype).max))
    reach = np.count_nonzero(levels <= highest, axis=-1)
    return np.clip(levels, lowest, highest).astype(dtype), reach


def _up_to_float(dtype: np.dtype, levels: np.ndarray) -> np.ndarray:
    """Return the smallest value of a floating-point type that is >= each level."""
    if levels.dtype.kind != "f":
        exact = levels.astype(np.float64)
        if np.abs(exact).max() <= 2.0**53:
            return _up_to_float(dtype, exact)
        too_low = np.reshape(
            [int(e) < int(u) for e, u in zip(exact.flat, levels.flat, strict=True)], levels.shape
        )
        return _up_to_float(dtype, np.where(too_low, np.nextafter(exact, np.inf), exact))
    if dtype == np.float64:
        return levels.astype(np.float64)
    with np.errstate(over="ignore"):  # a level beyond float32 becomes inf, which no pixel reaches
        nearest = levels.astype(dtype)
    too_low = nearest.astype(np.float64) < levels
    return np.where(too_low, np.nextafter(nearest, dtype.type(np.inf)), nearest)


def classes_of(table: np.ndarray, windows: Any) -> dict[str, np.ndarray]:
    """Return the window classes of tables (..., 8, T); see `PatternCounts.classes`."""
    row = {name: table[..., k, :] for k, name in enumerate(STATISTICS)}
    full, touched = row["smallest"], row["largest"]
    mixed = touched - full  # q1 + q2 + qd + q3
    twice = crossings_of(table)
    edges = (twice["horizontal"] + twice["vertical"]) // 2  # q1 + q2 + q3 + 2 qd
    diagonals = (twice["falling"] + twice["rising"]) // 2  # q1 + 2 q2 + q3
    qd = edges - mixed
    q2 = diagonals + edges - 2 * mixed
    single_or_triple = mixed - q2 - qd
    q3 = (row["pixel"] - 4 * full - 2 * (q2 + qd) - single_or_triple) // 2
    return {
        "q0": windows - touched,
        "q1": single_or_triple - q3,
        "q2": q2,
        "qd": qd,
        "q3": q3,
        "q4": full.copy(),
    }


def crossings_of(table: np.ndarray) -> dict[str, np.ndarray]:
    """Return twice the crossings per direction of tables (..., 8, T); see `PatternCounts`."""
    row = {name: table[..., k, :] for k, name in enumerate(STATISTICS)}
    # max-count minus min-count, where min-count = (count of the pixels) - max-count
    return {
        "horizontal": 2 * row["horizontal"] - row["pixel"],
        "vertical": 2 * row["vertical"] - row["pixel"],
        "falling": 4 * row["falling"] - 2 * row["diagonal"],
        "rising": 4 * row["rising"] - 2 * (row["pixel"] - row["diagonal"]),
    }

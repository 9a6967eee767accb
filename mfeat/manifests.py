"""Manifests: CSV or Parquet files that list images with their labels, regions and pitch."""

import csv
import io
import math
import re
from typing import Any, BinaryIO

import numpy as np
import pyarrow as pa
import pyarrow.compute as pc

from mfeat import locations, storage
from mfeat.entries import TRUTH, Sources, entries_table, folder_of, join, kept_label

#: Columns of a manifest that have a meaning; all others are carried into the table.
MANIFEST_COLUMNS = (
    *("path", "label", "group", "mask", "row", "col", "height", "width"),
    *("pitch_x", "pitch_y", "unit"),
)
_REGION = ("row", "col", "height", "width")

# Positions are stored as 32-bit integers.
_FARTHEST = 2**31 - 1

#: Endings of files that are manifests.
MANIFESTS = (".csv", ".parquet")


def read_manifest(location: str, suffix: str) -> Sources:
    """Return what a manifest lists.

    Raises
    ------
    ValueError
        If it cannot be used; rows and columns are named.
    """
    try:
        with locations.open_input(location) as stream:
            table = _read_csv(stream.read()) if suffix == ".csv" else _read_parquet(stream)
    except FileNotFoundError:
        raise FileNotFoundError(f"source {location} does not exist") from None
    except (pa.ArrowInvalid, UnicodeDecodeError, csv.Error) as error:
        raise ValueError(f"manifest {location} cannot be read: {error}") from None
    names = table.column_names
    if len(set(names)) < len(names):
        twice = sorted({name for name in names if names.count(name) > 1})
        raise ValueError(f"manifest {location} has columns of the same name: {twice}")
    if "path" not in names:
        hint = "; separate columns with commas" if len(names) == 1 and ";" in names[0] else ""
        raise ValueError(f"manifest {location} has no column path; it has {names}{hint}")
    base = folder_of(location)
    columns: dict[str, Any] = {name: table[name] for name in MANIFEST_COLUMNS if name in names}
    for name in ("label", "group", *_REGION):
        if name in columns:
            columns[name] = _whole(columns[name])
    if not len(table):
        return Sources(entries_table({"source": []}, {}), ())
    for name in ("path", "label", "group", "unit"):
        if name in columns and not (name == "label" and kept_label(columns[name].type)):
            columns[name] = _as_text(location, name, columns[name])
    paths = columns.pop("path").to_pylist()
    missing = [k for k, path in enumerate(paths) if not path]
    if missing:
        raise ValueError(f"manifest {location}: rows {_rows(missing)} have no path")
    columns["source"] = paths
    columns["location"] = [join(base, path) for path in paths]
    for name in ("mask", TRUTH):
        if name in names:
            listed = _as_text(location, name, table[name]).to_pylist()
            columns[f"{name}_location"] = [join(base, one) if one else None for one in listed]
    _check_regions(location, columns)
    _check_pitch(location, columns)
    carried = {name: table[name] for name in names if name not in MANIFEST_COLUMNS}
    for name in ("pitch_x", "pitch_y", "unit"):
        if name in columns:
            carried[name] = columns[name]
    _check_distinct(location, columns)
    meant = (*MANIFEST_COLUMNS, TRUTH)
    remarks = tuple(
        f"manifest {location}: column {name!r} is carried as it is; did you mean "
        f"{name.strip().lower()}?"
        for name in carried
        if name not in meant and name.strip().lower() in meant
    )
    return Sources(entries_table(columns, carried), tuple(carried), remarks)


def _whole(column: Any) -> Any:
    """Return floats that are all whole as integers: what data frames make of integers with gaps."""
    if not pa.types.is_floating(column.type):
        return column
    values = column.to_numpy()
    if not len(values) or not (np.isnan(values) | (values == np.floor(values))).all():
        return column
    gaps = np.isnan(values)
    if gaps.all() or np.abs(values[~gaps]).max() > 2**53:
        return column
    return pa.chunked_array([pa.array(np.where(gaps, 0, values).astype(np.int64), mask=gaps)])


def _read_csv(content: bytes) -> pa.Table:
    """Read CSV with every column as text, then turn those that are numbers throughout."""
    # Strict, because a quote that is never closed would swallow all further rows.
    rows = list(csv.reader(io.StringIO(content.decode("utf-8-sig")), strict=True))
    rows = [row for row in rows if row]
    if not rows:
        raise csv.Error("it is empty")
    names, body = rows[0], rows[1:]
    for k, row in enumerate(body):
        if len(row) != len(names):
            raise csv.Error(f"row {k + 1} has {len(row)} fields, the header {len(names)}")
    columns = [[row[k] if row[k] != "" else None for row in body] for k in range(len(names))]
    text = ("path", "label", "group", "mask", "unit", TRUTH)
    made = [
        pa.array(column, pa.string()) if name in text else _typed(column)
        for name, column in zip(names, columns, strict=True)
    ]
    return pa.Table.from_arrays(made, names)


def _read_parquet(stream: BinaryIO) -> pa.Table:
    """Read Parquet; columns of types that Arrow cannot choose rows of become plain ones."""
    table = storage.read_parquet(stream).unify_dictionaries()
    plain = {pa.string_view(): pa.string(), pa.binary_view(): pa.binary()}
    fields = [field.with_type(plain.get(field.type, field.type)) for field in table.schema]
    return table.cast(pa.schema(fields))


def _typed(column: list[str | None]) -> pa.Array:
    """Return integers or floats where every field is one and nothing of its text is lost."""
    given = [text for text in column if text is not None]
    if given and all(re.fullmatch(r"0|-?[1-9]\d{0,17}", text) for text in given):
        return pa.array([None if text is None else int(text) for text in column], pa.int64())
    if given and all(_is_float(text) for text in given):
        return pa.array([None if text is None else float(text) for text in column], pa.float64())
    return pa.array(column, pa.string())


def _is_float(text: str) -> bool:
    """Tell whether text is a finite number that, if it is a whole one, float64 holds exactly."""
    number = r"[-+]?((0|[1-9]\d*)(\.\d*)?|\.\d+)([eE][-+]?\d+)?"
    if not re.fullmatch(number, text) or not math.isfinite(float(text)):
        return False
    return not text.lstrip("+-").isdigit() or int(text) == int(float(text))


def _as_text(location: str, name: str, column: Any) -> pa.ChunkedArray:
    if pa.types.is_string(column.type):
        return column
    try:
        made = column.cast(pa.string())
    except (pa.ArrowInvalid, pa.ArrowNotImplementedError) as error:
        raise ValueError(f"manifest {location}: column {name} must hold text: {error}") from None
    if pa.types.is_floating(column.type):  # NaN means that there is none
        made = pc.if_else(pc.is_nan(column), pa.scalar(None, pa.string()), made)
    return made


def _without_number(column: Any) -> str:
    """Return which rows of a column hold something else than a number, for a message."""
    values = column.to_pylist()
    if not pa.types.is_string(column.type):
        return f"; it holds {column.type}"
    wrong = [k for k, one in enumerate(values) if one is not None and not _is_float(one)]
    return f"; rows {_rows(wrong)} do not, the first has {values[wrong[0]]!r}" if wrong else ""


def _rows(numbers: list[int]) -> str:
    """Return rows of a manifest by their number, counted from 1 below the header."""
    shown = ", ".join(str(k + 1) for k in numbers[:5])
    return shown + (", ..." if len(numbers) > 5 else "")


def _check_regions(location: str, columns: dict[str, Any]) -> None:
    there = [name for name in _REGION if name in columns]
    if not there:
        return
    if len(there) < 4:
        raise ValueError(f"manifest {location} has {there} of a region; all of {list(_REGION)}, "
                         "or none, are needed")  # fmt: skip
    values = []
    for name in _REGION:
        column = columns[name]
        if not pa.types.is_integer(column.type) and column.null_count < len(column):
            which = _without_number(column)
            raise ValueError(f"manifest {location}: column {name} must hold integers{which}")
        values.append(column.to_pylist())
    for k, region in enumerate(zip(*values, strict=True)):
        given = [value is not None for value in region]
        if any(given) and not all(given):
            raise ValueError(
                f"manifest {location}: row {k + 1} has part of a region: "
                f"{dict(zip(_REGION, region, strict=True))}"
            )
        if all(given) and (min(region[:2]) < 0 or min(region[2:]) < 2 or max(region) > _FARTHEST):
            raise ValueError(
                f"manifest {location}: row {k + 1} has a region that is no image: "
                f"{dict(zip(_REGION, region, strict=True))}; row and col must be >= 0, height and "
                f"width >= 2, none above {_FARTHEST}"
            )
    for name, column in zip(_REGION, values, strict=True):
        columns[name] = pa.array(column, pa.int64())


def _check_pitch(location: str, columns: dict[str, Any]) -> None:
    there = [name for name in ("pitch_x", "pitch_y") if name in columns]
    for name in there:
        column = columns[name]
        kinds = pa.types.is_integer(column.type) or pa.types.is_floating(column.type)
        if not kinds or column.null_count:
            empty = [k for k, v in enumerate(column.to_pylist()) if v is None]
            which = f"; rows {_rows(empty)} have none" if empty else _without_number(column)
            raise ValueError(f"manifest {location}: column {name} must hold numbers{which}")
        columns[name] = column.cast(pa.float64())
        values = np.asarray(columns[name])
        wrong = np.flatnonzero(~(np.isfinite(values) & (values > 0))).tolist()
        if wrong:
            raise ValueError(
                f"manifest {location}: column {name} must hold numbers > 0; rows {_rows(wrong)} "
                f"do not, the first has {values[wrong[0]]:g}"
            )
    if len(there) == 1:
        raise ValueError(f"manifest {location} has {there[0]} alone; give pitch_x and pitch_y")
    if "unit" in columns and there:
        units = sorted({str(unit) for unit in columns["unit"].to_pylist()})
        if len(units) > 1:
            raise ValueError(
                f"manifest {location} mixes the units {', '.join(units)}; give every pitch in the "
                "same unit"
            )


def _check_distinct(location: str, columns: dict[str, Any]) -> None:
    """Refuse rows that would give the same patches twice."""
    regions = [columns[name].to_pylist() for name in _REGION if name in columns]
    seen: dict[tuple, int] = {}
    places = [locations.absolute(place) for place in columns["location"]]
    for k, key in enumerate(zip(places, *regions, strict=True)):
        first = seen.setdefault(key, k)
        if first != k:
            raise ValueError(
                f"manifest {location}: rows {first + 1} and {k + 1} list the same image and "
                f"region, {columns['source'][k]}"
            )

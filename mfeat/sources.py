"""Where images come from: a folder, a glob, or a manifest; one entry an image file or region."""

import csv
import glob
import io
import json
import os
import re
from collections.abc import Iterator
from dataclasses import dataclass, replace
from pathlib import PurePosixPath
from typing import Any

import numpy as np
import pyarrow as pa
import pyarrow.parquet as pq

from mfeat import storage

#: Columns of a manifest that have a meaning; all others are carried into the table.
MANIFEST_COLUMNS = (
    *("path", "label", "group", "mask", "row", "col", "height", "width"),
    *("pitch_x", "pitch_y", "unit"),
)
_REGION = ("row", "col", "height", "width")

#: Column of a manifest with images of labels, read under ``label_from="truth"``; also carried.
TRUTH = "truth"

#: What names of carried columns start with in `Sources.entries`, apart from its own columns.
CARRIED = "manifest:"

_MANIFESTS = (".csv", ".parquet")


@dataclass(frozen=True)
class Sources:
    """What a source lists, in order.

    Attributes
    ----------
    entries : pyarrow.Table
        One row an image file, or region of one, with the columns `source` (as listed), `location`
        (where it is), `stamp` (changes with the file, its mask and truth; null if missing),
        `label`, `group`, `mask_location`, `truth_location`, `row`, `col`, `height`, `width`,
        `pitch_x`, `pitch_y`, `unit`, then those in `carried`, their names after `CARRIED`.
    carried : tuple of str
        Columns of the manifest that go into the table.
    remarks : tuple of str
        What a user should know.
    """

    entries: pa.Table
    carried: tuple[str, ...]
    remarks: tuple[str, ...] = ()


def list_sources(source: Any, *, label_from: str | None = None, leave_out: str = "") -> Sources:
    """List the images of a folder, a glob or a manifest.

    Parameters
    ----------
    source : path-like or str
        A folder (all its files but hidden ones, in natural order), a pattern with ``*``, ``?`` or
        ``**``, a manifest (CSV or Parquet), or one image file; local or an fsspec URI.
    label_from : {"manifest", "folder", "truth"}, optional
        Where labels come from; "folder" takes the name of the folder an image lies in.
    leave_out : str, default ""
        A folder whose files are not listed: the output, if it lies inside the source.

    Returns
    -------
    Sources

    Raises
    ------
    FileNotFoundError
        If there is no such source, or nothing in it.
    ValueError
        For a manifest that cannot be used; rows and columns are named.

    Examples
    --------
    >>> import tempfile
    >>> from pathlib import Path
    >>> from mfeat.sources import list_sources
    >>> with tempfile.TemporaryDirectory() as folder:
    ...     for name in ("scan10.tif", "scan9.tif"):
    ...         (Path(folder) / name).touch()
    ...     list_sources(folder).entries["source"].to_pylist()
    ['scan9.tif', 'scan10.tif']
    """
    location = storage.absolute(storage.as_location(source, "source"))
    path = storage.local_path(location)
    suffix = PurePosixPath(location).suffix.lower()
    patterned = any(mark in location for mark in "*?[")
    if path is not None and os.path.exists(path):
        patterned = False  # a file may be called image[1].png
    if suffix in _MANIFESTS and not patterned:
        found = _read_manifest(location, suffix)
    else:
        names, base = _list_files(location, path, patterned, leave_out)
        remarks = ()
        if "manifest.csv" in names:
            remarks = (f"{location} holds manifest.csv; give that file to use it as the manifest",)
        columns = {"source": names, "location": [_join(base, name) for name in names]}
        found = Sources(_table(columns, {}), (), remarks)
    if found.entries.num_rows == 0:
        raise FileNotFoundError(f"source {location} has no image: nothing is listed there")
    if label_from == "manifest" and found.entries["label"].null_count == found.entries.num_rows:
        raise ValueError(f"labels are to come from a manifest's column label; {location} has none")
    if label_from == "folder":
        listed = (PurePosixPath(name).parent.name for name in found.entries["source"].to_pylist())
        labels = pa.array([name or None for name in listed], pa.string())
        place = found.entries.column_names.index("label")
        found = replace(found, entries=found.entries.set_column(place, "label", labels))
    if label_from == "truth" and found.entries["truth_location"].null_count:
        raise ValueError(
            f"labels are to come from a manifest's column {TRUTH}, an image of labels for every "
            f"row; {location} has {found.entries['truth'].null_count} rows without one"
        )
    return Sources(_with_stamps(found.entries), found.carried, found.remarks)


def natural(text: str) -> list[Any]:
    """Return a sorting key under which image2 comes before image10.

    Examples
    --------
    >>> from mfeat.sources import natural
    >>> sorted(["b1", "a10.png", "a2.png"], key=natural)
    ['a2.png', 'a10.png', 'b1']
    """
    parts = re.split(r"(\d+)", text)
    key = [(int(part), "") if k % 2 else (0, part) for k, part in enumerate(parts)]
    return [*key, (0, text)]  # 01 and 1 are equal numbers and different names


def _list_files(
    location: str, path: str | None, patterned: bool, leave_out: str
) -> tuple[list[str], str]:
    """Return the names of image files relative to a base, and the base."""
    if path is None:
        return _list_remote(location, patterned)
    if patterned:
        base = _fixed_part(path)
        kept = [name for name in glob.glob(path, recursive=True) if os.path.isfile(name)]
        names = [os.path.relpath(name, base).replace(os.sep, "/") for name in kept]
        if not names:
            raise FileNotFoundError(f"no file matches {location}")
    elif os.path.isdir(path):
        base = path
        names = list(_walk(path, "", {os.path.realpath(path)}, os.path.realpath(leave_out or "/")))
    elif os.path.exists(path):
        base, name = os.path.split(path)
        names = [name]
    else:
        raise FileNotFoundError(f"source {location} does not exist")
    return sorted(names, key=natural), base


def _walk(folder: str, prefix: str, seen: set[str], leave_out: str) -> Iterator[str]:
    """Yield the files below a folder but hidden ones; links to folders are followed once."""
    with os.scandir(folder) as found:
        entries = sorted(found, key=lambda entry: entry.name)
    for entry in entries:
        if entry.name.startswith("."):
            continue
        if not entry.is_dir():
            yield prefix + entry.name
            continue
        real = os.path.realpath(entry.path)
        if real not in seen and real != leave_out:
            seen.add(real)
            yield from _walk(entry.path, f"{prefix}{entry.name}/", seen, leave_out)


def _list_remote(location: str, patterned: bool) -> tuple[list[str], str]:
    found, there = storage.filesystem(location)
    protocol = location.split("://", 1)[0]
    if patterned:
        base = _fixed_part(there)
        paths = found.glob(there)
    elif found.isdir(there):
        base, paths = there, found.find(there)
    elif found.exists(there):
        base, paths = there.rsplit("/", 1)[0], [there]
    else:
        raise FileNotFoundError(f"source {location} does not exist")
    start = base.rstrip("/") + "/"
    names = [str(path).removeprefix(start) for path in paths if not patterned or found.isfile(path)]
    kept = [name for name in names if not any(p.startswith(".") for p in name.split("/"))]
    return sorted(kept, key=natural), f"{protocol}://{base}"


def _fixed_part(pattern: str) -> str:
    """Return the folder above the first wildcard of a pattern."""
    parts = pattern.split("/")
    first = next(k for k, part in enumerate(parts) if any(mark in part for mark in "*?["))
    return "/".join(parts[:first]) or ("/" if pattern.startswith("/") else ".")


def _join(base: str, name: str) -> str:
    """Return where a listed name is: itself if it is absolute or a URI, else below the base."""
    if "://" in name or os.path.isabs(name):
        return name
    return f"{base.rstrip('/')}/{name}" if "://" in base else os.path.join(base, name)


def _read_manifest(location: str, suffix: str) -> Sources:
    try:
        with storage.open_input(location) as stream:
            table = _read_csv(stream.read()) if suffix == ".csv" else pq.read_table(stream)
    except FileNotFoundError:
        raise FileNotFoundError(f"source {location} does not exist") from None
    except (pa.ArrowInvalid, UnicodeDecodeError, csv.Error) as error:
        raise ValueError(f"manifest {location} cannot be read: {error}") from None
    names = table.column_names
    if len(set(names)) < len(names):
        twice = sorted({name for name in names if names.count(name) > 1})
        raise ValueError(f"manifest {location} has columns of the same name: {twice}")
    if "path" not in names:
        raise ValueError(f"manifest {location} has no column path; it has {names}")
    base = os.path.dirname(location) if "://" not in location else location.rsplit("/", 1)[0]
    columns: dict[str, Any] = {name: table[name] for name in MANIFEST_COLUMNS if name in names}
    for name in ("path", "group", "unit"):
        if name in columns:
            columns[name] = _as_text(columns[name])
    paths = columns.pop("path").to_pylist()
    missing = [k for k, path in enumerate(paths) if not path]
    if missing:
        raise ValueError(f"manifest {location}: rows {_rows(missing)} have no path")
    columns["source"] = paths
    columns["location"] = [_join(base, path) for path in paths]
    for name in ("mask", TRUTH):
        if name in names:
            listed = _as_text(table[name]).to_pylist()
            columns[f"{name}_location"] = [_join(base, one) if one else None for one in listed]
    _check_regions(location, columns)
    _check_pitch(location, columns)
    carried = {name: table[name] for name in names if name not in MANIFEST_COLUMNS}
    for name in ("pitch_x", "pitch_y", "unit"):
        if name in columns:
            carried[name] = columns[name]
    _check_distinct(location, columns)
    return Sources(_table(columns, carried), tuple(carried))


def _read_csv(content: bytes) -> pa.Table:
    """Read CSV with every column as text, then turn those that are numbers throughout."""
    rows = list(csv.reader(io.StringIO(content.decode("utf-8-sig"))))
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


def _typed(column: list[str | None]) -> pa.Array:
    """Return integers or floats where every field is one and nothing of its text is lost."""
    given = [text for text in column if text is not None]
    if given and all(re.fullmatch(r"0|-?[1-9]\d{0,17}", text) for text in given):
        return pa.array([None if text is None else int(text) for text in column], pa.int64())
    number = r"[-+]?(\d+\.\d*|\.\d+|[1-9]\d*|0)([eE][-+]?\d+)?"
    if given and all(re.fullmatch(number, text) for text in given):
        return pa.array([None if text is None else float(text) for text in column], pa.float64())
    return pa.array(column, pa.string())


def _as_text(column: Any) -> pa.ChunkedArray:
    return column if pa.types.is_string(column.type) else column.cast(pa.string())


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
            raise ValueError(f"manifest {location}: column {name} must hold integers")
        values.append(column.cast(pa.int64()).to_pylist())
    for k, region in enumerate(zip(*values, strict=True)):
        given = [value is not None for value in region]
        if any(given) and not all(given):
            raise ValueError(
                f"manifest {location}: row {k + 1} has part of a region: "
                f"{dict(zip(_REGION, region, strict=True))}"
            )
        if all(given) and (min(region[:2]) < 0 or min(region[2:]) < 2):
            raise ValueError(
                f"manifest {location}: row {k + 1} has a region that is no image: "
                f"{dict(zip(_REGION, region, strict=True))}; row and col must be >= 0, height and "
                "width >= 2"
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
            which = f"; rows {_rows(empty)} have none" if empty else ""
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
    for k, key in enumerate(zip(columns["location"], *regions, strict=True)):
        first = seen.setdefault(key, k)
        if first != k:
            raise ValueError(
                f"manifest {location}: rows {first + 1} and {k + 1} list the same image and "
                f"region, {columns['source'][k]}"
            )


_TYPES = {
    "source": pa.string(), "location": pa.string(), "label": pa.string(), "group": pa.string(),
    "mask_location": pa.string(), "truth_location": pa.string(),
    "row": pa.int64(), "col": pa.int64(), "height": pa.int64(), "width": pa.int64(),
    "pitch_x": pa.float64(), "pitch_y": pa.float64(), "unit": pa.string(),
}  # fmt: skip


def _table(columns: dict[str, Any], carried: dict[str, Any]) -> pa.Table:
    """Return entries with every column there is; carried columns of own names keep their place."""
    count = len(columns["source"])
    arrays, names = [], []
    for name, kind in _TYPES.items():
        given = columns.get(name)
        if given is None:
            arrays.append(pa.nulls(count, kind))
        elif isinstance(given, list):
            arrays.append(pa.array(given, kind))
        elif name == "label" and _kept_label(given.type):
            arrays.append(given)
        else:
            arrays.append(given.cast(kind))
        names.append(name)
    for name, column in carried.items():
        names.append(CARRIED + name)
        arrays.append(column)
    return pa.Table.from_arrays(arrays, names)


def _kept_label(kind: pa.DataType) -> bool:
    return pa.types.is_integer(kind) or pa.types.is_boolean(kind)


def stamp_of_entry(entry: dict[str, Any], known: dict[str, str | None] | None = None) -> str | None:
    """Return the stamps of the files of an entry as one text, or None where its image is missing.

    `known` keeps stamps of files between calls.
    """
    known = {} if known is None else known
    names = [entry[name] for name in ("location", "mask_location", "truth_location")]
    for name in names:
        if name is not None and name not in known:
            try:
                known[name] = storage.stamp(name)
            except (OSError, ValueError):
                known[name] = None  # the reason is found when it is opened
    own, *more = (known[name] for name in names if name is not None)
    return json.dumps([own, *more]) if more else own


def _with_stamps(entries: pa.Table) -> pa.Table:
    known: dict[str, str | None] = {}
    files = entries.select(["location", "mask_location", "truth_location"])
    stamps = []
    for batch in files.to_batches(10_000):
        stamps += [stamp_of_entry(entry, known) for entry in batch.to_pylist()]
    return entries.add_column(2, "stamp", pa.array(stamps, pa.string()))

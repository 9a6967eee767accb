"""Entries: the image files and regions that a source lists, as a table with stamps of files."""

import json
import os
from dataclasses import dataclass
from typing import Any

import pyarrow as pa

from mfeat import locations

#: Column of a manifest with images of labels, read under ``label_from="truth"``; also carried.
TRUTH = "truth"

#: What names of carried columns start with in `Sources.entries`, apart from its own columns.
CARRIED = "manifest:"


@dataclass(frozen=True)
class Sources:
    """What a source lists, in order.

    Attributes
    ----------
    entries : pyarrow.Table
        One row an image file, or region of one, with the columns `source` (as listed), `location`
        (where it is), `stamp` (changes with the file, its mask and truth; null if missing),
        `label`, `group`, `mask` (as listed), `mask_location`, `truth_location`, `row`, `col`,
        `height`, `width`, `pitch_x`, `pitch_y`, `unit`, then those in `carried`, their names after
        `CARRIED`.
    carried : tuple of str
        Columns of the manifest that go into the table.
    remarks : tuple of str
        What a user should know.
    """

    entries: pa.Table
    carried: tuple[str, ...]
    remarks: tuple[str, ...] = ()


def join(base: str, name: str) -> str:
    """Return where a listed name is: itself if it is absolute or a URI, else below the base."""
    if "://" in name or os.path.isabs(name):
        return name
    protocol, mark, folder = base.partition("://")
    return f"{protocol}://{folder.rstrip('/')}/{name}" if mark else os.path.join(base, name)


def folder_of(location: str) -> str:
    """Return where the files beside a file are."""
    protocol, mark, path = location.partition("://")
    return f"{protocol}://{path.rpartition('/')[0]}" if mark else os.path.dirname(location)


_TYPES = {
    "source": pa.string(), "location": pa.string(), "label": pa.string(), "group": pa.string(),
    "mask": pa.string(), "mask_location": pa.string(), "truth_location": pa.string(),
    "row": pa.int64(), "col": pa.int64(), "height": pa.int64(), "width": pa.int64(),
    "pitch_x": pa.float64(), "pitch_y": pa.float64(), "unit": pa.string(),
}  # fmt: skip


def entries_table(columns: dict[str, Any], carried: dict[str, Any]) -> pa.Table:
    """Return entries with every column there is; carried ones come last."""
    count = len(columns["source"])
    arrays, names = [], []
    for name, kind in _TYPES.items():
        given = columns.get(name)
        if given is None:
            arrays.append(pa.nulls(count, kind))
        elif isinstance(given, list):
            arrays.append(pa.array(given, kind))
        elif name == "label" and kept_label(given.type):
            arrays.append(given)
        else:
            arrays.append(given.cast(kind))
        names.append(name)
    for name, column in carried.items():
        names.append(CARRIED + name)
        arrays.append(column)
    return pa.Table.from_arrays(arrays, names)


def kept_label(kind: pa.DataType) -> bool:
    """Tell whether labels keep their type; others become text."""
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
                known[name] = locations.stamp(name)
            except (OSError, ValueError):
                known[name] = None  # the reason is found when it is opened
    own, *more = (known[name] for name in names if name is not None)
    return json.dumps([own, *more]) if more else own


def with_stamps(entries: pa.Table) -> pa.Table:
    """Return entries with their stamps; each file is asked once."""
    known: dict[str, str | None] = {}
    files = entries.select(["location", "mask_location", "truth_location"])
    stamps = []
    for batch in files.to_batches(10_000):
        stamps += [stamp_of_entry(entry, known) for entry in batch.to_pylist()]
    return entries.add_column(2, "stamp", pa.array(stamps, pa.string()))


def changed_inputs(before: pa.Table, now: pa.Table) -> list[str]:
    """Return how two lists of inputs differ, a line each."""
    if before.equals(now):
        return []
    added_columns = set(now.column_names) ^ set(before.column_names)
    if added_columns:
        return [f"columns of the manifest: {sorted(added_columns)} on one side only"]
    key = ("source", "row", "col", "height", "width")
    rows = [
        {tuple(row[name] for name in key): row for row in table.to_pylist()}
        for table in (before, now)
    ]
    removed = [k[0] for k in rows[0] if k not in rows[1]]
    added = [k[0] for k in rows[1] if k not in rows[0]]
    changed = []
    for k in rows[0].keys() & rows[1].keys():
        one, other = rows[0][k], rows[1][k]
        what = [name for name in one if repr(one[name]) != repr(other[name])]  # NaN is NaN
        if what:
            names = {"stamp": "size or time"}
            changed.append(f"{k[0]} ({', '.join(names.get(name, name) for name in what)})")
    lines = []
    for what, found in (("removed", removed), ("added", added), ("changed", sorted(changed))):
        if found:
            more = f", ... ({len(found)})" if len(found) > 5 else ""
            lines.append(f"inputs {what}: {', '.join(found[:5])}{more}")
    if not lines and list(rows[0]) != list(rows[1]):
        lines.append("inputs: their order")
    return lines  # none where NaN alone made the tables unequal

"""Where images come from: a folder, a glob, or a manifest; one entry an image file or region."""

import glob
import os
import re
from collections.abc import Iterator
from dataclasses import replace
from pathlib import PurePosixPath
from typing import Any

import pyarrow as pa

from mfeat import storage
from mfeat.entries import TRUTH, Sources, entries_table, join, with_stamps
from mfeat.manifests import MANIFESTS, read_manifest


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
    if suffix in MANIFESTS and not patterned:
        found = read_manifest(location, suffix)
    else:
        names, base = _list_files(location, path, patterned, leave_out)
        remarks = ()
        if "manifest.csv" in names:
            remarks = (f"{location} holds manifest.csv; give that file to use it as the manifest",)
        columns = {"source": names, "location": [join(base, name) for name in names]}
        found = Sources(entries_table(columns, {}), (), remarks)
    if found.entries.num_rows == 0:
        raise FileNotFoundError(f"source {location} has no image: nothing is listed there")
    if label_from == "manifest" and found.entries["label"].null_count == found.entries.num_rows:
        raise ValueError(f"labels are to come from a manifest's column label; {location} has none")
    if label_from == "folder":
        places = found.entries["location"].to_pylist()
        labels = pa.array([PurePosixPath(one).parent.name or None for one in places], pa.string())
        place = found.entries.column_names.index("label")
        found = replace(found, entries=found.entries.set_column(place, "label", labels))
    if label_from == "truth" and found.entries["truth_location"].null_count:
        raise ValueError(
            f"labels are to come from a manifest's column {TRUTH}, an image of labels for every "
            f"row; {location} has {found.entries['truth_location'].null_count} rows without one"
        )
    return Sources(with_stamps(found.entries), found.carried, found.remarks)


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
        return _list_remote(location, patterned, leave_out)
    if patterned:
        base = _fixed_part(path)
        found = (name for name in glob.glob(path, recursive=True) if os.path.isfile(name))
        kept = [name for name in found if not _lies_in(name, leave_out)]
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


def _lies_in(name: str, folder: str) -> bool:
    if not folder:
        return False
    real = os.path.realpath(folder)
    return os.path.commonpath([os.path.realpath(name), real]) == real


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


def _list_remote(location: str, patterned: bool, leave_out: str) -> tuple[list[str], str]:
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
    base = f"{protocol}://{base}"
    names = [str(path).removeprefix(start) for path in paths if not patterned or found.isfile(path)]
    kept = [
        name
        for name in names
        if not any(part.startswith(".") for part in name.split("/"))
        and not (leave_out and join(base, name).startswith(leave_out.rstrip("/") + "/"))
    ]
    return sorted(kept, key=natural), base


def _fixed_part(pattern: str) -> str:
    """Return the folder above the first wildcard of a pattern."""
    parts = pattern.split("/")
    first = next(k for k, part in enumerate(parts) if any(mark in part for mark in "*?["))
    return "/".join(parts[:first]) or ("/" if pattern.startswith("/") else ".")

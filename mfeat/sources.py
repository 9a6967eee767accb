"""Where images come from: a folder, a glob, or a manifest; one entry an image file or region."""

import fnmatch
import glob
import os
import re
from collections.abc import Iterator
from dataclasses import replace
from pathlib import PurePosixPath
from typing import Any

import pyarrow as pa

from mfeat import locations
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
    location = locations.absolute(locations.as_location(source, "source"))
    path = locations.local_path(location)
    suffix = PurePosixPath(location).suffix.lower()
    if "::" in location and suffix not in MANIFESTS:
        raise ValueError(
            f"source {location} is a chained URI, which cannot be listed; name its files in a "
            "manifest"
        )
    patterned = any(mark in location for mark in "*?[")
    if patterned and locations.exists(location):
        patterned = False  # a file may be called image[1].png
    if suffix in MANIFESTS and not patterned and not (path is not None and os.path.isdir(path)):
        found = read_manifest(location, suffix)
    else:
        names, base = _list_files(location, path, patterned, leave_out)
        remarks = []
        if "manifest.csv" in names:
            remarks.append(
                f"{location} holds manifest.csv; give that file to use it as the manifest"
            )
        wrong = [_printable(name) for name in names if _printable(name) != name]
        if wrong:
            remarks.append(f"names that are not UTF-8 cannot be read, e.g. {wrong[0]}; rename them")
        columns = {
            "source": [_printable(name) for name in names],
            "location": [_printable(join(base, name)) for name in names],
        }
        found = Sources(entries_table(columns, {}), (), tuple(remarks))
    if found.entries.num_rows == 0:
        raise FileNotFoundError(f"source {location} has no image: nothing is listed there")
    if label_from == "manifest" and found.entries["label"].null_count == found.entries.num_rows:
        raise ValueError(f"labels are to come from a manifest's column label; {location} has none")
    if label_from == "folder":
        places = found.entries["location"].to_pylist()
        folders = (re.split(r"[\\/]", one)[-2:-1] for one in places)
        labels = pa.array([folder[0] or None if folder else None for folder in folders])
        labels = labels.cast(pa.string())
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
        names = _matching(path, base, leave_out)
        if not names:
            hint = '; a bracket in a name is written "[[]"' if "[" in path else ""
            raise FileNotFoundError(f"no file matches {location}{hint}")
    elif os.path.isdir(path):
        base = path
        names = list(_below(path, leave_out))
    elif os.path.exists(path):
        base, name = os.path.split(path)
        names = [name]
    else:
        raise FileNotFoundError(f"source {location} does not exist")
    return sorted(names, key=natural), base


def _printable(name: str) -> str:
    """Return a file name as UTF-8; bytes that are not appear as escapes."""
    return os.fsencode(name).decode("utf-8", "backslashreplace")


def _matching(pattern: str, base: str, leave_out: str) -> list[str]:
    """Return the names of the files below a base that match a pattern."""
    parts = os.path.relpath(pattern, base).split(os.sep)
    if "**" in parts:  # glob would follow loops of links again and again
        return [name for name in _below(base, leave_out) if _matches(name.split("/"), parts)]
    found = (name for name in glob.glob(pattern) if not os.path.isdir(name))
    kept = [name for name in found if not _lies_in(name, leave_out)]
    return [os.path.relpath(name, base).replace(os.sep, "/") for name in kept]


def _matches(parts: list[str], pattern: list[str]) -> bool:
    """Tell whether a path matches a pattern, both in parts; "**" is any number of folders."""
    if not pattern:
        return not parts
    if pattern[0] == "**":
        return any(_matches(parts[k:], pattern[1:]) for k in range(len(parts) + 1))
    return (
        bool(parts) and fnmatch.fnmatch(parts[0], pattern[0]) and _matches(parts[1:], pattern[1:])
    )


def _below(folder: str, leave_out: str) -> Iterator[str]:
    return _walk(folder, "", {os.path.realpath(folder)}, os.path.realpath(leave_out or "/"))


def _lies_in(name: str, folder: str) -> bool:
    if not folder:
        return False
    real = os.path.realpath(folder)
    try:
        return os.path.commonpath([os.path.realpath(name), real]) == real
    except ValueError:  # on different drives
        return False


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
    found, there = locations.filesystem(location)
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
    if leave_out.startswith(f"{protocol}://"):
        outside = locations.filesystem(leave_out)[1].rstrip("/") + "/"
        paths = [path for path in paths if not str(path).startswith(outside)]
    names = [str(path).removeprefix(start) for path in paths if not patterned or found.isfile(path)]
    kept = [name for name in names if not any(p.startswith(".") for p in name.split("/"))]
    return sorted(kept, key=natural), f"{protocol}://{base}"


def _fixed_part(pattern: str) -> str:
    """Return the folder above the first wildcard of a pattern."""
    parts = pattern.replace(os.sep, "/").split("/")
    first = next(k for k, part in enumerate(parts) if any(mark in part for mark in "*?["))
    return "/".join(parts[:first]) or ("/" if pattern.startswith("/") else ".")

"""Where files are read from: local paths and fsspec URIs, with stamps that tell of changes."""

import os
from typing import Any, BinaryIO
from urllib.parse import urlsplit
from urllib.request import url2pathname

import fsspec
from fsspec.implementations.arrow import ArrowFSWrapper
from pyarrow import fs as arrow_fs


def as_location(value: Any, name: str = "location") -> str:
    """Return a path or URI as text."""
    if isinstance(value, os.PathLike):
        value = os.fspath(value)
    if not isinstance(value, str) or not value:
        raise TypeError(f"{name} must be a path or a URI; got {value!r}")
    if "\0" in value:
        raise ValueError(f"{name} holds a null character: {value!r}")
    return value


def local_path(location: str) -> str | None:
    """Return the local path that a location means, or None where it is a URI of another kind."""
    if location.startswith("file://"):
        return url2pathname(urlsplit(location).path)
    return None if "://" in location else location


def absolute(location: str) -> str:
    """Return a location that means the same in another working folder, without links resolved."""
    path = local_path(location)
    return location if path is None else os.path.abspath(path)


def filesystem(location: str) -> tuple[Any, str]:
    """Return the fsspec file system of a URI and the path on it.

    Where fsspec lacks the package for a protocol, Arrow's own file system is taken if it has one.

    Raises
    ------
    ValueError
        If neither knows the protocol; the message says what to install.
    """
    try:
        return fsspec.core.url_to_fs(location)
    except (ImportError, ValueError) as error:
        try:
            found, path = arrow_fs.FileSystem.from_uri(location)
        except (ValueError, OSError, NotImplementedError):
            raise ValueError(f"{location} cannot be reached: {error}") from None
        return ArrowFSWrapper(found), path


def open_input(location: str) -> BinaryIO:
    """Open a file for reading."""
    path = local_path(location)
    if path is not None:
        return open(path, "rb")
    found, there = filesystem(location)
    return found.open(there, "rb")


def exists(location: str) -> bool:
    """Tell whether there is a file or folder."""
    path = local_path(location)
    if path is not None:
        return os.path.exists(path)
    found, there = filesystem(location)
    return found.exists(there)


def stamp(location: str) -> str:
    """Return a text that changes when a file does: its size and the time of its last change.

    Raises
    ------
    FileNotFoundError
        If there is no such file.
    """
    path = local_path(location)
    if path is not None:
        return stamp_of(os.stat(path))
    found, there = filesystem(location)
    info = found.info(there)
    marks = ("mtime", "LastModified", "last_modified", "ETag", "etag", "updated", "created")
    mark = next((str(info[name]) for name in marks if info.get(name)), "")
    return f"{info.get('size')} {mark}".strip()


def stamp_of(status: os.stat_result) -> str:
    """Return the stamp of a local file."""
    return f"{status.st_size} {status.st_mtime_ns}"

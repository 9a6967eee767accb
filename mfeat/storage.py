"""Where tables are written to: folders on disks and on fsspec file systems.

Every write goes to a unique temporary sibling first and is renamed when complete; locally it is
flushed to the disk before, and its folder after, so that neither a killed process nor a power cut
leaves half a file under its final name.
"""

import contextlib
import errno
import json
import logging
import os
import shutil
import socket
import threading
import time
import uuid
from collections.abc import Callable, Iterator
from pathlib import Path
from typing import BinaryIO

import pyarrow as pa
import pyarrow.parquet as pq

from mfeat.locations import filesystem, local_path

_log = logging.getLogger("mfeat")

TEMPORARY = ".tmp"


class OutputInUse(RuntimeError):
    """Another run holds the output folder."""


def output(location: str) -> "LocalStorage | RemoteStorage":
    """Return the storage of an output folder."""
    path = local_path(location)
    return RemoteStorage(location) if path is None else LocalStorage(Path(path))


def read_parquet(stream: BinaryIO) -> pa.Table:
    """Read a small Parquet file in this thread.

    Threads of Arrow that read from a Python stream may outlive it, and abort a process that ends.
    """
    return pq.ParquetFile(stream).read(use_threads=False)


class LocalStorage:
    """A folder on a local or mounted disk. Names of files in it are relative, with "/"."""

    def __init__(self, root: Path):
        self.root = root
        self.location = str(root)

    def make(self, folder: str) -> None:
        """Make a folder in it, and what is above."""
        (self.root / folder).mkdir(parents=True, exist_ok=True)
        for above in Path(folder).parents:  # a power cut must not lose a folder with its files
            self.settle(str(above))

    def exists(self, name: str) -> bool:
        """Tell whether there is a file or folder of a name."""
        return (self.root / name).exists()

    def names(self, folder: str = "") -> list[str]:
        """Return the sorted names of what a folder holds; of a missing one, none."""
        try:
            return sorted(os.listdir(self.root / folder))
        except FileNotFoundError:
            return []

    def open(self, name: str) -> BinaryIO:
        """Open a file for reading."""
        return open(self.root / name, "rb")

    @contextlib.contextmanager
    def writing(self, name: str) -> Iterator[BinaryIO]:
        """Give a file to write; it has its final name when the block ends, or never."""
        target = self.root / name
        aside = target.with_name(f"{target.name}.{uuid.uuid4().hex}{TEMPORARY}")
        try:
            with open(aside, "xb") as stream:
                yield stream
                stream.flush()
                os.fsync(stream.fileno())
            os.replace(aside, target)
        except BaseException:
            with contextlib.suppress(OSError):
                aside.unlink()
            raise
        self.settle(str(Path(name).parent))

    def settle(self, folder: str = "") -> None:
        """Flush the names in a folder to the disk."""
        if os.name == "nt":
            return  # folders cannot be opened; the file system keeps a journal of names
        handle = os.open(self.root / folder, os.O_RDONLY)
        try:
            os.fsync(handle)
        except OSError as error:
            if error.errno not in (errno.EINVAL, errno.ENOTSUP):  # mounts that cannot do it
                raise
        finally:
            os.close(handle)

    def move(self, name: str, target: str) -> None:
        """Rename a file within the folder, over another one if there is one."""
        os.replace(self.root / name, self.root / target)

    def remove(self, name: str) -> None:
        """Delete a file; a missing one is no error."""
        (self.root / name).unlink(missing_ok=True)

    def remove_tree(self, folder: str) -> None:
        """Delete a folder. A worker of a dead run may still write into it, hence the repetition."""
        for _ in range(50):
            shutil.rmtree(self.root / folder, ignore_errors=True)
            if not (self.root / folder).exists():
                return
            time.sleep(0.1)
        raise OSError(f"{self.root / folder} cannot be deleted; another process writes into it")

    @contextlib.contextmanager
    def lock(self, name: str) -> Iterator[Callable[[], None]]:
        """Hold the folder for one run; the operating system lets go when the process ends.

        Gives a call that raises if the folder is not held any more.

        Raises
        ------
        OutputInUse
            If another run holds it.
        """
        path = self.root / name
        was_there = self.root.exists()
        while True:
            try:
                path.parent.mkdir(parents=True, exist_ok=True)
                handle = os.open(path, os.O_RDWR | os.O_CREAT, 0o666)
            except FileNotFoundError:
                continue  # a run that just ended removed the folder in between
            if not _take(handle):
                os.close(handle)
                raise OutputInUse(
                    f"another run writes to {self.root}{_owner_of(path)}; wait for its end, or "
                    "give another output"
                )
            with contextlib.suppress(FileNotFoundError):
                if os.path.samestat(os.fstat(handle), os.stat(path)):
                    break
            os.close(handle)  # the run that held it has ended and removed the file
        owner = {"host": socket.gethostname(), "pid": os.getpid()}
        try:
            os.ftruncate(handle, 0)
            os.write(handle, json.dumps(owner).encode())
            yield lambda: None
        finally:
            if os.name == "nt":  # open files cannot be deleted there
                os.close(handle)
            with contextlib.suppress(OSError):
                path.unlink()
            if os.name != "nt":
                os.close(handle)
            with contextlib.suppress(OSError):
                path.parent.rmdir()  # only if nothing else is in it
                if not was_there:
                    self.root.rmdir()  # a run that was refused leaves nothing


def _owner_of(path: Path) -> str:
    try:
        owner = json.loads(path.read_text())
        return f" (process {owner['pid']} on {owner['host']})"
    except (OSError, ValueError, KeyError):
        return ""


def _take(handle: int) -> bool:
    """Lock an open file without waiting; tell whether it worked."""
    if os.name == "nt":
        import msvcrt

        try:
            msvcrt.locking(handle, msvcrt.LK_NBLCK, 1)
        except OSError:
            return False
        return True
    import fcntl

    try:
        fcntl.flock(handle, fcntl.LOCK_EX | fcntl.LOCK_NB)
    except BlockingIOError:
        return False
    except OSError as error:
        raise OSError(
            f"the output cannot be locked against a second run ({error}); choose a file system "
            "with locks"
        ) from error
    return True


class RemoteStorage:
    """A folder on an fsspec file system, with the methods of `LocalStorage`.

    Renaming is whatever the file system makes of it; object stores copy. There are no locks on such
    stores, so a run rewrites a small file every `BEAT` seconds, and another one that sees it change
    stays away. A run that was killed is recognised by a file that stands still.
    """

    BEAT = 2.0

    def __init__(self, location: str):
        self.location = location
        self._fs, self._root = filesystem(location)
        self.protocol = location.split("://", 1)[0]

    def _at(self, name: str) -> str:
        return f"{self._root.rstrip('/')}/{name}".rstrip("/")

    def make(self, folder: str) -> None:
        """Make a folder in it, and what is above."""
        self._fs.makedirs(self._at(folder), exist_ok=True)

    def exists(self, name: str) -> bool:
        """Tell whether there is a file or folder of a name."""
        self._fs.invalidate_cache()
        return self._fs.exists(self._at(name))

    def names(self, folder: str = "") -> list[str]:
        """Return the sorted names of what a folder holds; of a missing one, none."""
        self._fs.invalidate_cache()
        try:
            found = self._fs.ls(self._at(folder), detail=False)
        except FileNotFoundError:
            return []
        return sorted(str(path).rstrip("/").rsplit("/", 1)[-1] for path in found)

    def open(self, name: str) -> BinaryIO:
        """Open a file for reading."""
        return self._fs.open(self._at(name), "rb")

    @contextlib.contextmanager
    def writing(self, name: str) -> Iterator[BinaryIO]:
        """Give a file to write; it has its final name when the block ends, or never."""
        aside = self._at(f"{name}.{uuid.uuid4().hex}{TEMPORARY}")
        try:
            with self._fs.open(aside, "wb") as stream:
                yield stream
            self._fs.mv(aside, self._at(name))
        except BaseException:
            with contextlib.suppress(OSError):
                self._fs.rm_file(aside)
            raise

    def settle(self, folder: str = "") -> None:
        """Do nothing: such stores keep what they have acknowledged."""

    def move(self, name: str, target: str) -> None:
        """Rename a file within the folder, over another one if there is one."""
        self._fs.mv(self._at(name), self._at(target))

    def remove(self, name: str) -> None:
        """Delete a file; a missing one is no error."""
        with contextlib.suppress(FileNotFoundError):
            self._fs.rm_file(self._at(name))

    def remove_tree(self, folder: str) -> None:
        """Delete a folder."""
        with contextlib.suppress(FileNotFoundError):
            self._fs.rm(self._at(folder), recursive=True)

    @contextlib.contextmanager
    def lock(self, name: str) -> Iterator[Callable[[], None]]:
        """Hold the folder for one run.

        Gives a call that raises if the folder is not held any more.

        Raises
        ------
        OutputInUse
            If another run holds it.
        """
        token = uuid.uuid4().hex
        before = self._read_beat(name)
        if before is not None:
            time.sleep(3 * self.BEAT)
        if self._read_beat(name) != before:
            raise OutputInUse(
                f"another run writes to {self.location}; wait for its end, or give another output"
            )
        self._write_beat(name, token, 0)
        time.sleep(min(self.BEAT, 0.5))  # two runs that start at once: the later writer goes on

        def held() -> None:
            found = self._read_beat(name)
            if found is None or found[0] != token:
                raise OutputInUse(f"another run has taken {self.location} over; this one stops")

        held()
        ended = threading.Event()

        def beat() -> None:
            count = 0
            while not ended.wait(self.BEAT):
                count += 1
                try:
                    held()
                    self._write_beat(name, token, count)
                except OutputInUse:
                    return  # the run asks before it publishes
                except Exception as error:  # a hiccup of the network; the next beat may succeed
                    _log.warning("%s: the sign of life failed: %s", self.location, error)

        beating = threading.Thread(target=beat, daemon=True)
        beating.start()
        try:
            yield held
        finally:
            ended.set()
            beating.join()
            with contextlib.suppress(OutputInUse, OSError):
                held()
                self.remove(name)
                self._fs.rmdir(self._at(name.rsplit("/", 1)[0]))  # only if nothing else is in it

    def _write_beat(self, name: str, token: str, count: int) -> None:
        self.make(name.rsplit("/", 1)[0])
        with self._fs.open(self._at(name), "wb") as stream:
            stream.write(json.dumps([token, count]).encode())

    def _read_beat(self, name: str) -> tuple[str, int] | None:
        try:
            with self.open(name) as stream:
                token, count = json.loads(stream.read())
        except (FileNotFoundError, ValueError):
            return None
        return token, count

"""One policy for all compiled kernels: their flags, their cache, their announcement.

Numba's own cache numbers its files and keeps an index of them; two processes that save different
signatures at the same moment, or an upgrade in place, can leave an index entry that points at the
machine code of something else. Here every compiled function has a file of its own, named by a hash
of all that the machine code depends on: the sources of every kernel module, the signature, the
processor and its features, and the versions of Python, Numba and NumPy. Nothing is ever
overwritten with other content, so a stale file is never loaded; it is merely left behind.
"""

import hashlib
import logging
import os
import pickle
import platform
import sys
import tempfile
import threading
import time
from collections.abc import Callable
from pathlib import Path

import llvmlite
import numba
import numpy as np
from numba.core import compiler, event, serialize
from numba.core.caching import NullCache

_log = logging.getLogger("mfeat")

#: Files whose text decides the machine code of a kernel. A kernel may only call kernels from here.
KERNEL_SOURCES = ("_jit.py", "_kernels.py", "_field_kernels.py")

#: The flags of every kernel. No fastmath: integers and NaN must mean what they say.
FLAGS = {"nogil": True, "error_model": "numpy", "fastmath": False, "boundscheck": None}

_ANNOUNCE_AFTER = 1.0  # seconds of compilation after which a line is logged, once per process


def cache_directory() -> Path | None:
    """Return the folder of the compiled kernels, or None where none can be written.

    The first of: the environment variable ``MFEAT_CACHE_DIR``, Numba's ``NUMBA_CACHE_DIR``, the
    user's cache folder. A folder that cannot be made or written turns caching off: kernels are
    then compiled in every process. No shared temporary folder is used, because loading a cached
    kernel means trusting whoever could write there.
    """
    if os.environ.get("MFEAT_CACHE_DIR"):
        root = Path(os.environ["MFEAT_CACHE_DIR"])
    elif numba.config.CACHE_DIR:
        root = Path(numba.config.CACHE_DIR) / "mfeat"
    else:
        try:
            root = _user_cache() / "mfeat"
        except RuntimeError as error:  # e.g. in a container, a user without a home folder
            _log.info("no kernel cache (%s): kernels are compiled in every process", error)
            return None
    folder = root.absolute() / f"kernels-{_source_hash()[:16]}"
    try:
        folder.mkdir(parents=True, exist_ok=True)
        tempfile.TemporaryFile(dir=folder).close()
    except OSError as error:
        _log.info("no kernel cache at %s (%s): kernels are compiled in every process", root, error)
        return None
    return folder


def _user_cache() -> Path:
    if sys.platform == "win32":
        return Path(os.environ.get("LOCALAPPDATA") or Path.home() / "AppData/Local")
    if sys.platform == "darwin":
        return Path.home() / "Library/Caches"
    return Path(os.environ.get("XDG_CACHE_HOME") or Path.home() / ".cache")


def _source_hash() -> str:
    here = Path(__file__).parent
    digest = hashlib.sha256()
    for name in KERNEL_SOURCES:
        digest.update(name.encode() + b"\0" + (here / name).read_bytes() + b"\0")
    versions = (
        platform.python_version(),
        llvmlite.__version__,
        numba.__version__,
        np.__version__,
    )
    digest.update(repr(versions).encode())
    return digest.hexdigest()


class KernelCache(NullCache):
    """Files of machine code, one for each kernel and signature, named by what made them.

    It replaces Numba's cache on a dispatcher and keeps to the interface of
    ``numba.core.caching._Cache``. A file starts with the SHA-256 of the rest, so a file cut short
    by a power failure is a miss and is written anew.
    """

    def __init__(self, function: Callable, folder: Path):
        self._name = function.__name__
        self._module = function.__module__
        self._folder = folder

    @property
    def cache_path(self) -> str:
        """The folder of the compiled kernels."""
        return str(self._folder)

    def _file(self, sig, codegen) -> Path:
        name = (self._module, self._name)
        key = repr((name, sig, codegen.magic_tuple(), FLAGS, numba.config.BOUNDSCHECK))
        return self._folder / f"{self._name}-{hashlib.sha256(key.encode()).hexdigest()[:32]}.bin"

    def load_overload(self, sig, target_context):
        """Return the compiled function of a signature, or None if there is no sound file."""
        target_context.refresh()
        try:
            stored = self._file(sig, target_context.codegen()).read_bytes()
        except OSError:
            return None
        checksum, payload = stored[:32], stored[32:]
        if hashlib.sha256(payload).digest() != checksum:
            return None
        return compiler.CompileResult._rebuild(target_context, *pickle.loads(payload))

    def save_overload(self, sig, data) -> None:
        """Write a compiled function under its final name in one step."""
        if data.lifted or data.library.has_dynamic_globals:  # cannot be written to a file
            return
        path = self._file(sig, data.codegen)
        payload = serialize.dumps(data._reduce())
        try:
            handle, temporary = tempfile.mkstemp(dir=self._folder, suffix=".tmp")
            try:
                with os.fdopen(handle, "wb") as stream:
                    stream.write(hashlib.sha256(payload).digest() + payload)
                os.replace(temporary, path)
            except BaseException:
                os.unlink(temporary)
                raise
        except OSError as error:
            _log.info("kernel %s was not cached: %s", self._name, error)


def kernel(function):
    """Compile a function under the project's policy; use as a decorator at module level.

    >>> from mfeat import _kernels
    >>> _kernels.count_windows.targetoptions["nogil"]
    True
    """
    dispatcher = numba.njit(**FLAGS)(function)
    if dispatcher is function or _FOLDER is None:  # compilation is switched off, or no cache
        return dispatcher
    dispatcher._cache = KernelCache(function, _FOLDER)
    return dispatcher


class _Announcer(event.Listener):
    """Say once on the log, as a warning, that a compilation is running and is worth a wait."""

    def __init__(self):
        self._lock = threading.Lock()
        self._started = {}
        self._spent = 0.0
        self._said = False

    def on_start(self, happening):
        function = getattr(happening.data.get("dispatcher"), "py_func", None)
        # Generated functions of other packages may have no module at all.
        if not (getattr(function, "__module__", None) or "").startswith("mfeat."):
            return
        with self._lock:
            self._started[threading.get_ident(), function.__name__] = time.perf_counter()
            if self._spent > _ANNOUNCE_AFTER and not self._said:
                self._said = True
                _log.warning(
                    "compiling kernels that are not cached yet: 10 to 20 seconds the first time, a "
                    "second or two for a new type of image (%s)",
                    f"kept in {_FOLDER}" if _FOLDER else "no cache folder could be written",
                )

    def on_end(self, happening):
        function = getattr(happening.data.get("dispatcher"), "py_func", None)
        with self._lock:
            name = getattr(function, "__name__", "")
            start = self._started.pop((threading.get_ident(), name), None)
            if start is not None:
                self._spent += time.perf_counter() - start


_FOLDER = cache_directory()
event.register("numba:compile", _Announcer())

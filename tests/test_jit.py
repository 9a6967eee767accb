"""The one policy of compiled kernels: flags, places, cache, announcement.

Cache tests run child processes on a copy of the package, each with a cache folder of its own.
"""

import ast
import json
import logging
import os
import shutil
import subprocess
import sys
import types
from pathlib import Path

import numba
import numpy as np
import pytest
from numba.core.dispatcher import Dispatcher

from mfeat import _field_kernels, _jit, _kernels
from mfeat.counts import count_patterns

PACKAGE = Path(_jit.__file__).parent
MODULES = (_kernels, _field_kernels)

# Flags of kernels


def stray_functions(module):
    """The module's functions that are not compiled under the one policy."""
    expected = {**_jit.FLAGS, "nopython": True}
    found = []
    for name, member in vars(module).items():
        own = getattr(member, "__module__", None) == module.__name__
        if isinstance(member, Dispatcher):
            cached = isinstance(member._cache, _jit.KernelCache)
            if member.targetoptions != expected or cached != (_jit._FOLDER is not None):
                found.append(name)
        elif own and callable(member):
            found.append(name)
    return found


def kernels_of(module):
    return [name for name, member in vars(module).items() if isinstance(member, Dispatcher)]


def test_the_flags_keep_integers_and_nan_honest():
    """By hand: fastmath assumes that no NaN occurs; a division must not raise in a kernel."""
    assert _jit.FLAGS["fastmath"] is False
    assert _jit.FLAGS["nogil"] is True
    assert _jit.FLAGS["error_model"] == "numpy"


@pytest.mark.parametrize("module", MODULES)
def test_every_function_of_a_kernel_module_is_compiled_under_the_policy(module):
    assert stray_functions(module) == []
    assert len(kernels_of(module)) >= 8


def test_the_modules_walked_are_the_kernel_sources():
    walked = {"_jit.py", *(Path(module.__file__).name for module in MODULES)}
    assert walked == set(_jit.KERNEL_SOURCES)


def test_the_walk_reports_functions_compiled_otherwise():
    def plain(x):
        return x

    module = types.ModuleType("planted")
    plain.__module__ = "planted"
    module.good = _jit.kernel(plain)
    assert stray_functions(module) == []
    module.fast = numba.njit(**{**_jit.FLAGS, "fastmath": True})(plain)
    module.holding = numba.njit(plain)
    module.cached_by_numba = numba.njit(**_jit.FLAGS)(plain)
    module.not_compiled = plain
    expected = ["fast", "holding", "not_compiled"]
    if _jit._FOLDER is not None:
        expected.insert(2, "cached_by_numba")
    assert stray_functions(module) == expected


def test_no_other_module_holds_a_kernel_of_its_own():
    names = [name for name in sys.modules if name.split(".")[0] == "mfeat"]
    assert "mfeat.counts" in names
    for name in names:
        for member in vars(sys.modules[name]).values():
            if isinstance(member, Dispatcher):
                assert member.py_func.__module__ in {module.__name__ for module in MODULES}


# Places of kernels, from the sources

COMPILERS = {"kernel", "njit", "jit", "vectorize", "guvectorize", "cfunc", "stencil", "jitclass"}
COMPILERS |= {"generated_jit", "overload", "intrinsic"}


def last_name(node):
    """The last part of a dotted name, called or not: "njit" of `numba.njit(nogil=True)`."""
    node = node.func if isinstance(node, ast.Call) else node
    return getattr(node, "attr", getattr(node, "id", ""))


def imported(tree):
    """The modules that a file imports, anywhere in it; "mfeat._jit" for a name of `mfeat`."""
    for node in ast.walk(tree):
        if isinstance(node, ast.Import):
            yield from (alias.name for alias in node.names)
        elif isinstance(node, ast.ImportFrom):
            if node.module == "mfeat":
                yield from (f"mfeat.{alias.name}" for alias in node.names)
            else:
                yield "." * node.level + (node.module or "")


def misplaced_kernels(package, sources=_jit.KERNEL_SOURCES):
    """Complaints about kernels that are made in other places or ways than the policy has it."""
    found = []
    allowed = {"math", "numpy", *(f"mfeat.{Path(name).stem}" for name in sources)}
    for path in sorted(package.rglob("*.py")):
        name = path.relative_to(package).as_posix()
        tree = ast.parse(path.read_text(encoding="utf-8"))
        modules = set(imported(tree))
        if name != "_jit.py":
            if any(module.split(".")[0] == "numba" for module in modules):
                found.append(f"{name}: imports numba")
            if name not in sources and "kernels" in path.stem:
                found.append(f"{name}: not among the sources")
            if name in sources and not modules <= allowed:
                found.append(f"{name}: imports {sorted(modules - allowed)}")
        top = {
            id(decorator)
            for node in tree.body
            if isinstance(node, ast.FunctionDef)
            for decorator in node.decorator_list
            if name in sources and last_name(decorator) == "kernel"
        }
        for node in ast.walk(tree):
            for decorator in getattr(node, "decorator_list", []):
                if last_name(decorator) in COMPILERS and id(decorator) not in top:
                    found.append(f"{name}: {node.name} is decorated out of place")
            if isinstance(node, ast.Call) and last_name(node) in COMPILERS:
                found.append(f"{name}: {last_name(node)} is called")
    return found


#: The one call that compiles, in `_jit.kernel`.
THE_CALL = "_jit.py: njit is called"


def test_kernels_are_made_at_module_level_of_the_kernel_sources_only():
    assert misplaced_kernels(PACKAGE) == [THE_CALL]
    for name in _jit.KERNEL_SOURCES:
        assert (PACKAGE / name).is_file()


PLANTED = {
    "def make():\n    @kernel\n    def inner(x):\n        return x\n": "inner is decorated",
    "class A:\n    @kernel\n    def method(x):\n        return x\n": "method is decorated",
    "@numba.njit(fastmath=True)\ndef fast(x):\n    return x\n": "fast is decorated",
    "def make(f):\n    return kernel(f)\n": "kernel is called",
    "from scipy import special\n": "imports ['scipy']",
    "def late():\n    import numba.typed\n": "imports numba",
    "from mfeat import _checks, _jit\n": "imports ['mfeat._checks']",
    "from .levels import place\n": "imports ['.levels']",
}


@pytest.mark.parametrize("text", PLANTED, ids=range(len(PLANTED)))
def test_the_search_reports_planted_offences_in_a_kernel_source(tmp_path, text):
    for name in _jit.KERNEL_SOURCES:
        shutil.copy(PACKAGE / name, tmp_path)
    assert misplaced_kernels(tmp_path) == [THE_CALL]
    with (tmp_path / "_kernels.py").open("a") as stream:
        stream.write(text)
    assert any(PLANTED[text] in complaint for complaint in misplaced_kernels(tmp_path))


def test_the_search_reports_kernels_in_other_files(tmp_path):
    good = "from mfeat._jit import kernel\n\n@kernel\ndef f(x):\n    return x\n"
    (tmp_path / "_kernels.py").write_text(good)
    assert misplaced_kernels(tmp_path) == []
    (tmp_path / "curves.py").write_text(good)
    (tmp_path / "_more_kernels.py").write_text("")
    assert misplaced_kernels(tmp_path) == [
        "_more_kernels.py: not among the sources",
        "curves.py: f is decorated out of place",
    ]


# Where the cache lies


@pytest.fixture
def bare_environment(monkeypatch, tmp_path):
    """No variable that names a cache folder; a home in tmp_path."""
    for name in ("MFEAT_CACHE_DIR", "XDG_CACHE_HOME", "LOCALAPPDATA"):
        monkeypatch.delenv(name, raising=False)
    monkeypatch.setattr(numba.config, "CACHE_DIR", "")
    monkeypatch.setattr(Path, "home", lambda: tmp_path / "home")
    return monkeypatch


@pytest.mark.parametrize(
    ("platform", "place"),
    [("linux", ".cache"), ("darwin", "Library/Caches"), ("win32", "AppData/Local")],
)
def test_the_cache_lies_in_the_users_cache_folder(bare_environment, tmp_path, platform, place):
    bare_environment.setattr(sys, "platform", platform)
    folder = _jit.cache_directory()
    assert folder.parent == tmp_path / "home" / place / "mfeat"
    assert folder.is_dir()


def test_named_folders_come_first(bare_environment, tmp_path):
    bare_environment.setenv("XDG_CACHE_HOME", str(tmp_path / "xdg"))
    assert _jit.cache_directory().parent == tmp_path / "xdg" / "mfeat"
    bare_environment.setattr(numba.config, "CACHE_DIR", str(tmp_path / "numba"))
    assert _jit.cache_directory().parent == tmp_path / "numba" / "mfeat"
    bare_environment.setenv("MFEAT_CACHE_DIR", str(tmp_path / "own"))
    assert _jit.cache_directory().parent == tmp_path / "own"


def test_a_relative_folder_is_fixed_when_it_is_made(bare_environment, tmp_path):
    bare_environment.setenv("MFEAT_CACHE_DIR", "relative")
    bare_environment.chdir(tmp_path)
    assert _jit.cache_directory().parent == tmp_path / "relative"


def test_no_home_means_no_cache_and_is_logged(bare_environment, caplog):
    def homeless():
        raise RuntimeError("Could not determine home directory.")  # what Path.home raises

    bare_environment.setattr(Path, "home", homeless)
    bare_environment.setattr(sys, "platform", "linux")
    with caplog.at_level(logging.INFO, "mfeat"):
        assert _jit.cache_directory() is None
    assert "no kernel cache (Could not determine home directory.)" in caplog.text


def test_an_unwritable_folder_means_no_cache_and_is_logged(bare_environment, tmp_path, caplog):
    (tmp_path / "file").write_text("")
    bare_environment.setenv("MFEAT_CACHE_DIR", str(tmp_path / "file" / "sub"))
    with caplog.at_level(logging.INFO, "mfeat"):
        assert _jit.cache_directory() is None
    assert "no kernel cache at" in caplog.text


# The announcement, with a clock of its own


class Clock:
    now = 0.0

    def __call__(self):
        return self.now


@pytest.fixture
def compiling(monkeypatch):
    """A function that lets an announcer see a compilation of some seconds."""
    clock = Clock()
    monkeypatch.setattr(_jit, "time", types.SimpleNamespace(perf_counter=clock))
    announcer = _jit._Announcer()

    def compiles(seconds, module="mfeat._kernels"):
        def function():
            pass

        function.__module__ = module
        dispatcher = types.SimpleNamespace(py_func=function)
        happening = types.SimpleNamespace(data={"dispatcher": dispatcher})
        announcer.on_start(happening)
        clock.now += seconds
        announcer.on_end(happening)

    return compiles


def test_a_long_compilation_is_announced_once(compiling, caplog):
    for _ in range(5):
        compiling(0.25)
    assert caplog.records == []  # the fifth began when 1.0 s had passed, not more
    compiling(0.25)
    compiling(9.0)
    [record] = caplog.records
    assert (record.name, record.levelname) == ("mfeat", "WARNING")
    assert record.getMessage().startswith("compiling kernels")


def test_compilations_of_other_packages_are_not_announced(compiling, caplog):
    for _ in range(3):
        compiling(9.0, module="somebody.else")
    compiling(9.0)  # the first of ours: nothing of ours was slow before
    assert caplog.records == []
    compiling(0.1)
    assert len(caplog.records) == 1


def test_an_event_without_a_dispatcher_is_no_error():
    happening = types.SimpleNamespace(data={})
    announcer = _jit._Announcer()
    announcer.on_start(happening)
    announcer.on_end(happening)


# The cache itself, in child processes

CHILD = """
import json, logging, sys
settings = json.loads(sys.argv[1])
if settings["logging"]:
    logging.basicConfig(format="%(levelname)s|%(name)s|%(message)s")
from numba.core import event
with event.install_recorder("numba:compile") as recorder:
    from mfeat import _jit, _kernels, _field_kernels
    _jit._ANNOUNCE_AFTER = settings["announce_after"]
    kernels = []
    for module in (_kernels, _field_kernels):
        kernels += [k for k in vars(module).values() if hasattr(k, "stats")]
    if settings["lose_folder"]:
        import shutil
        shutil.rmtree(_jit._FOLDER)
    answer = None
    if settings["work"] == "counts":
        import numpy as np
        from mfeat.counts import count_patterns
        image = np.random.default_rng(1).standard_normal((9, 11))
        image[2, 3] = np.nan
        answer = count_patterns(image, [-1.0, 0.0, 0.5]).table.tolist()
    elif settings["work"] == "planted":
        answer = [_kernels.caller(1), _field_kernels.twin(1), _kernels.twin(1)]
print(json.dumps({
    "answer": answer,
    "compiled": [
        happening.data["dispatcher"].py_func.__name__ for _, happening in recorder.buffer
        if happening.is_start
        and happening.data["dispatcher"].py_func.__module__.startswith("mfeat.")
    ],
    "hits": sum(sum(k.stats.cache_hits.values()) for k in kernels),
    "misses": sum(sum(k.stats.cache_misses.values()) for k in kernels),
    "caches": sorted({type(k._cache).__name__ for k in kernels}),
    "folder": _jit._FOLDER and str(_jit._FOLDER),
}))
"""


def copy_package(folder):
    """Copy the package below a folder, without what its `__init__` imports: children start fast."""
    shutil.copytree(PACKAGE, folder / "mfeat", ignore=shutil.ignore_patterns("__pycache__"))
    (folder / "mfeat" / "__init__.py").write_text("")
    return folder


#: Kernels that compile at once, for tests that need no others.
CALLER = """

@kernel
def callee(x):
    return x + 1


@kernel
def caller(x):
    return 10 * callee(x)


@kernel
def twin(x):
    return x + 5
"""
OTHER = """

@kernel
def twin(x):
    return x + 7
"""
PLANTED_NAMES = {"caller", "callee", "twin"}
EXPECTED = [20, 8, 6]  # by hand: 10 (1 + 1), 1 + 7 and 1 + 5


def plant(folder):
    """Return a copy of the package below a folder, with the planted kernels."""
    copy = copy_package(folder)
    for name, text in [("_kernels.py", CALLER), ("_field_kernels.py", OTHER)]:
        with (copy / "mfeat" / name).open("a") as stream:
            stream.write(text)
    return copy


def start(copy, variables, work="counts", announce_after=1e9, logging=False, lose_folder=False):
    """Start a child; by default it announces nothing, however slow the machine."""
    names = ("NUMBA_", "MFEAT_", "PYTHON", "XDG_")
    kept = {k: v for k, v in os.environ.items() if not k.startswith(names)}
    asked = {
        "work": work,
        "announce_after": announce_after,
        "logging": logging,
        "lose_folder": lose_folder,
    }
    # Python's own cache knows a source by its time and size, which tests keep: do without it.
    variables = {"PYTHONPATH": str(copy), "PYTHONDONTWRITEBYTECODE": "1", **variables}
    return subprocess.Popen(
        [sys.executable, "-W", "error", "-c", CHILD, json.dumps(asked)],
        cwd=copy,
        env={**kept, **variables},
        stdout=subprocess.PIPE,
        stderr=subprocess.PIPE,
        text=True,
    )


def finish(child):
    """Return what a child reports and its lines on stderr."""
    try:
        out, err = child.communicate(timeout=300)
    finally:
        child.kill()
    assert child.returncode == 0, err
    return types.SimpleNamespace(**json.loads(out), stderr=err.splitlines())


def run(copy, cache, **options):
    return finish(start(copy, {"MFEAT_CACHE_DIR": str(cache)}, **options))


def files(cache):
    """The files of a cache folder with their contents."""
    return {path: path.read_bytes() for path in Path(cache).rglob("*") if path.is_file()}


@pytest.fixture(scope="module")
def copy(tmp_path_factory):
    return copy_package(tmp_path_factory.mktemp("copy"))


@pytest.fixture(scope="module")
def planted(tmp_path_factory):
    return plant(tmp_path_factory.mktemp("planted"))


@pytest.fixture(scope="module")
def first(copy, tmp_path_factory):
    """The report of a process that found its cache folder empty."""
    before = files(copy)
    report = run(copy, tmp_path_factory.mktemp("cache"), announce_after=0.0)
    assert files(copy) == before  # nothing is written beside the sources
    return report


KERNELS_USED = {"index_by_comparison", "windows_ok", "count_windows"}


def test_the_first_process_compiles_and_writes(first):
    assert set(first.compiled) == KERNELS_USED
    assert (first.hits, first.misses) == (0, len(KERNELS_USED))
    assert first.caches == ["KernelCache"]
    written = {path.name.rpartition("-")[0] for path in files(first.folder)}
    assert written == KERNELS_USED
    assert all(path.suffix == ".bin" for path in files(first.folder))


def test_an_empty_cache_is_announced_by_one_line_on_stderr(first):
    [line] = first.stderr
    assert line.startswith("compiling kernels")
    assert first.folder in line


def test_the_second_process_compiles_nothing_and_is_silent(copy, first):
    before = files(first.folder)
    second = run(copy, Path(first.folder).parent, announce_after=0.0)
    assert second.compiled == []
    assert (second.hits, second.misses) == (len(KERNELS_USED), 0)
    assert second.answer == first.answer
    assert second.folder == first.folder
    assert second.stderr == []
    assert files(first.folder) == before


def test_the_counts_of_children_are_those_of_this_process(first):
    image = np.random.default_rng(1).standard_normal((9, 11))
    image[2, 3] = np.nan
    assert first.answer == count_patterns(image, [-1.0, 0.0, 0.5]).table.tolist()


DAMAGES = (
    lambda content: content[:-1],  # cut short
    lambda content: b"",
    lambda content: b"\x80\x04garbage" * 100,
    lambda content: content[:-7] + bytes([content[-7] ^ 1]) + content[-6:],  # one bit changed
)


def test_damaged_files_are_compiled_and_written_again(planted, tmp_path):
    """Another damage to each of the four files; then one of them is lost."""
    cache = tmp_path / "cache"
    report = run(planted, cache, work="planted")
    assert report.answer == EXPECTED
    names = files(cache).keys()
    for path, damage in zip(sorted(names), DAMAGES, strict=True):
        path.write_bytes(damage(path.read_bytes()))
    damaged = files(cache)

    report = run(planted, cache, work="planted")
    assert (report.hits, set(report.compiled)) == (0, PLANTED_NAMES)
    assert report.answer == EXPECTED
    repaired = files(cache)
    assert repaired.keys() == names
    assert all(repaired[path] != damaged[path] for path in names)

    next(path for path in names if path.name.startswith("caller-")).unlink()
    report = run(planted, cache, work="planted")
    assert report.compiled == ["caller"]  # the repaired others are sound
    assert report.answer == EXPECTED
    assert files(cache).keys() == names


def test_without_a_writable_folder_kernels_are_compiled_in_memory(copy, first, tmp_path):
    """Below a regular file no folder can be made, by whomever."""
    (tmp_path / "file").write_text("")
    options = {"announce_after": 0.0, "logging": True}
    report = run(copy, tmp_path / "file" / "sub", **options)
    assert report.folder is None
    assert report.caches == ["NullCache"]
    assert report.answer == first.answer
    [line] = report.stderr
    assert line.startswith("WARNING|mfeat|compiling kernels")
    assert "no cache folder could be written" in line
    assert [path.name for path in files(tmp_path)] == ["file"]


def test_a_folder_that_vanishes_is_no_error(planted, tmp_path):
    report = run(planted, tmp_path / "cache", work="planted", lose_folder=True)
    assert report.answer == EXPECTED
    assert set(report.compiled) == PLANTED_NAMES
    assert not Path(report.folder).exists()


def test_processes_that_start_at_once_share_an_empty_cache(planted, tmp_path):
    children = [
        start(planted, {"MFEAT_CACHE_DIR": str(tmp_path)}, work="planted") for _ in range(3)
    ]
    for report in [finish(child) for child in children]:
        assert report.answer == EXPECTED
        assert report.stderr == []
    assert [path.suffix for path in files(tmp_path)] == [".bin"] * 4  # one a kernel, no *.tmp
    last = run(planted, tmp_path, work="planted")
    assert (last.compiled, last.answer) == ([], EXPECTED)


def test_numbas_own_variable_names_the_folder_and_targets_have_their_own_files(
    copy, first, tmp_path
):
    """The same counts for a plain processor, from files of the same folder with other names."""
    shutil.copytree(Path(first.folder).parent, tmp_path / "mfeat")
    variables = {"NUMBA_CACHE_DIR": str(tmp_path)}
    plain = {"NUMBA_CPU_NAME": "generic", "NUMBA_CPU_FEATURES": ""}
    report = finish(start(copy, {**variables, **plain}))
    assert Path(report.folder).parent == tmp_path / "mfeat"
    assert Path(report.folder).name == Path(first.folder).name
    assert set(report.compiled) == KERNELS_USED  # and loads nothing made for another processor
    assert report.answer == first.answer
    assert len(files(tmp_path)) == 2 * len(KERNELS_USED)
    report = finish(start(copy, variables))
    assert report.compiled == []
    assert report.answer == first.answer


# Changed sources


def edit(copy, name, old, new):
    """Replace text by text of the same length; the file keeps its size and its time."""
    path = copy / "mfeat" / name
    before = path.stat()
    text = path.read_text()
    assert text.count(old) == 1
    assert len(new) == len(old)
    path.write_text(text.replace(old, new))
    os.utime(path, ns=(before.st_atime_ns, before.st_mtime_ns))
    after = path.stat()
    assert (after.st_size, after.st_mtime_ns) == (before.st_size, before.st_mtime_ns)


def test_changed_sources_are_compiled_again(tmp_path):
    copy, cache = plant(tmp_path / "package"), tmp_path / "cache"
    report = run(copy, cache, work="planted")
    assert set(report.compiled) == PLANTED_NAMES
    assert report.answer == EXPECTED  # also of two kernels of one name in two modules

    edit(copy, "_kernels.py", "return 10 * callee", "return 20 * callee")
    report = run(copy, cache, work="planted")
    assert set(report.compiled) == PLANTED_NAMES
    assert report.answer == [40, 8, 6]

    edit(copy, "_kernels.py", "return x + 1", "return x + 2")  # the callee, not its caller
    edit(copy, "_field_kernels.py", "return x + 7", "return x + 9")
    report = run(copy, cache, work="planted")
    assert set(report.compiled) == PLANTED_NAMES
    assert report.answer == [60, 10, 6]

    edit(copy, "_field_kernels.py", "return x + 9", "return x + 7")
    edit(copy, "_kernels.py", "return x + 2", "return x + 1")
    edit(copy, "_kernels.py", "return 20 * callee", "return 10 * callee")
    report = run(copy, cache, work="planted")
    assert (report.compiled, report.answer) == ([], EXPECTED)  # the first files are still sound


def test_each_type_and_kernel_has_a_file_of_its_own(tmp_path):
    codegen = _kernels.count_windows.targetctx.codegen()
    arrays = [
        numba.types.Array(element, dimensions, layout, readonly=readonly)
        for element in (numba.int32, numba.int64, numba.float32)
        for dimensions in (1, 2)
        for layout in "CA"
        for readonly in (True, False)
    ]
    caches = [
        _jit.KernelCache(kernel.py_func, tmp_path)
        for kernel in (_kernels.index_by_search, _kernels.index_by_comparison)
    ]
    names = [cache._file((array,), codegen) for cache in caches for array in arrays]
    assert len(names) == len(set(names)) == 48  # 3 types, 2 dimensions, 2 layouts, 2, 2 kernels


def test_functions_of_other_packages_compile_as_ever():
    # generated code may have no module; the listener must neither fail nor announce it
    namespace = {}
    exec("def grown(x):\n    return x + 1", namespace)
    assert numba.njit(namespace["grown"])(1) == 2

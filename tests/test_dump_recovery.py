"""Interrupted dumps: whatever stops a run, the same call goes on to the table of a run undisturbed.

A crash is staged at every step of the storage in turn, and processes are killed at random moments.
Tables are compared file by file, byte by byte.
"""

import contextlib
import errno
import itertools
import json
import logging
import os
import random
import signal
import subprocess
import sys
import threading
import time
import uuid
from pathlib import Path

import fsspec
import numpy as np
import pyarrow.parquet as pq
import pytest
from joblib.externals.loky import reusable_executor
from sklearn.base import clone

from mfeat import MinkowskiCurves, dump, locations, parts, planning, read_table, runs, storage
from mfeat.parts import InputChanged
from mfeat.runs import OutputRefused
from mfeat.storage import LocalStorage, OutputInUse, RemoteStorage, output
from mfeat.transformer import full_curves

FEW = MinkowskiCurves(**full_curves() | {"levels": 2, "smooth": (), "band": (), "slope": ()})
OTHER = clone(FEW).set_params(levels=3)
SIZE = 16
UNFINISHED = ".unfinished"


def dumped(source, out, transformer=FEW, **options):
    return dump(source, out, transformer, **{"size": SIZE, "jobs": 1} | options)


def noise(seed, shape=(40, 32)):
    return np.random.default_rng(seed).normal(size=shape).astype(np.float32)


def write_images(folder):
    """Write images of three parts, one with a rejected patch, and a file that is rejected."""
    folder.mkdir(exist_ok=True)
    holes = noise(1, (20, 32))
    holes[:16, :16] = np.nan
    np.save(folder / "a.npy", noise(0))
    np.save(folder / "b.npy", holes)
    (folder / "c.png").write_bytes(b"")
    return folder


def files_of(out):
    """Return the bytes of all files of a table, local or remote, by name."""
    if "://" in str(out):
        found, root = fsspec.core.url_to_fs(out)
        return {path[len(root) :].strip("/"): found.cat_file(path) for path in found.find(root)}
    return {
        str(path.relative_to(out)): path.read_bytes()
        for path in Path(out).rglob("*")
        if not path.is_dir()
    }


def write_files(out, files):
    """Write the files of a table."""
    found, root = fsspec.core.url_to_fs(out)
    found.makedirs(root)
    for name, content in files.items():
        found.pipe_file(f"{root}/{name}", content)


def remove(out):
    found, root = fsspec.core.url_to_fs(out)
    with contextlib.suppress(FileNotFoundError):
        found.rm(root, recursive=True)


def is_complete(out, reference):
    """Tell whether a table equals the reference and nothing else is there."""
    return files_of(out) == reference and not output(str(out)).exists(UNFINISHED)


@pytest.fixture(autouse=True)
def small_parts(monkeypatch):
    monkeypatch.setattr(planning, "_PART_COSTS", (1, 1))
    monkeypatch.setattr(RemoteStorage, "BEAT", 0.01)


@pytest.fixture(scope="module")
def source(tmp_path_factory):
    return write_images(tmp_path_factory.mktemp("recovery") / "in")


@pytest.fixture(scope="module")
def reference(source, tmp_path_factory):
    """The files of a table, by transformer, that nothing disturbed."""
    found = {}
    with pytest.MonkeyPatch.context() as patch:
        patch.setattr(planning, "_PART_COSTS", (1, 1))
        for name, transformer in (("few", FEW), ("other", OTHER)):
            out = tmp_path_factory.mktemp("recovery") / name
            summary = dumped(source, out, transformer)
            found[name] = files_of(out)
            assert (summary.parts, summary.rejects, summary.patches) == (4, 2, 5)
    return found


@pytest.fixture(params=["local", "memory"])
def out(request, tmp_path):
    """A new output, on the disk or in the memory file system of fsspec."""
    if request.param == "local":
        yield str(tmp_path / "out")
        return
    root = f"memory://{uuid.uuid4().hex}"
    yield f"{root}/out"
    remove(root)


# Crashes at every step ----------------------------------------------------------------------


class Killed(BaseException):
    """The process is dead: nothing after this has any effect."""


class Faults:
    """Fails at one step of the storage: before an operation, or between writing and renaming.

    With `Killed` nothing is cleaned up afterwards, as after SIGKILL or a power cut.
    """

    OPERATIONS = ("make", "settle", "move", "remove", "remove_tree")

    def __init__(self, patch, error, at):
        self.error, self.at = error, at
        self.steps, self.failed, self.dead = 0, False, False
        for kind in (LocalStorage, RemoteStorage):
            for name in self.OPERATIONS:
                patch.setattr(kind, name, self._failing(getattr(kind, name)))
            patch.setattr(kind, "writing", self._writing(kind.writing))
        patch.setattr(Path, "unlink", self._unlink(Path.unlink))
        memory = fsspec.get_filesystem_class("memory")
        patch.setattr(memory, "rm_file", self._unlink(memory.rm_file))
        patch.setattr(storage.os, "fsync", lambda handle: None)  # nothing here can show its effect

    def step(self):
        if threading.current_thread() is not threading.main_thread():  # that of a remote lock
            if self.dead:
                raise OSError(errno.EIO, "dead")
            return
        if self.dead:
            raise self.error()
        self.steps += 1
        if self.steps == self.at:
            self.failed = True
            self.dead = self.error is Killed
            raise self.error(errno.ENOSPC, "No space left on device")

    def end(self):
        """Fail no more."""
        self.dead, self.at = False, 0

    def _failing(self, operation):
        def failing(store, *arguments):
            self.step()
            return operation(store, *arguments)

        return failing

    def _writing(self, operation):
        @contextlib.contextmanager
        def writing(store, name):
            self.step()
            with operation(store, name) as stream:
                yield stream
                self.step()

        return writing

    def _unlink(self, operation):
        def unlink(*arguments, **options):
            if self.dead:
                raise OSError(errno.EIO, "dead")
            return operation(*arguments, **options)

        return unlink


ERRORS = {"killed": Killed, "full": OSError, "interrupted": KeyboardInterrupt}


def crashes(error, out, every=1):
    """Yield faults for each step at which a run can fail, until one passes, and an output."""
    for at in itertools.count(1, every):
        place = f"{out}{at}"
        with pytest.MonkeyPatch.context() as patch:
            faults = Faults(patch, error, at)
            yield faults, place
        remove(place)
        if not faults.failed:
            assert at > 30  # the faults were there
            return


LONG = pytest.mark.long
CASES = [
    *[("local", "killed"), ("local", "full"), ("memory", "killed")],
    *[pytest.param("memory", "full", marks=LONG), ("local", "interrupted")],
    pytest.param("memory", "interrupted", marks=LONG),
]


@pytest.mark.parametrize(("out", "how"), CASES, indirect=["out"])
def test_a_crash_at_any_step_is_resumed(how, source, out, reference):
    for faults, place in crashes(ERRORS[how], out):
        with contextlib.suppress(ERRORS[how]):
            dumped(source, place)
        faults.end()
        if faults.failed:
            with contextlib.suppress(FileNotFoundError):  # there is none, or the whole one
                assert len(read_table(place)) == 5
            summary = dumped(source, place)
            assert (summary.patches, summary.rejects) == (5, 2)
        assert is_complete(place, reference["few"]), faults.steps


@pytest.mark.parametrize(("out", "how"), CASES[:4], indirect=["out"])
def test_an_old_table_stays_until_the_new_one_is_complete(how, source, out, reference):
    seen = set()
    for faults, place in crashes(ERRORS[how], out):
        write_files(place, reference["few"])
        with contextlib.suppress(ERRORS[how]):
            dumped(source, place, OTHER, fresh=True)
        faults.end()
        there = files_of(place)
        if reference["few"].items() <= there.items():
            assert read_table(place).fingerprint == FEW.fingerprint()
            seen.add("old")
            dumped(source, place, OTHER, fresh=True)
        elif "manifest.json" not in there:
            with pytest.raises(FileNotFoundError, match="unfinished; run the same command again"):
                read_table(place)
            seen.add("between")
            dumped(source, place, OTHER)  # goes on without being told to start anew
        else:
            assert reference["other"].items() <= there.items()  # never a mixture
            seen.add("new")
            assert "nothing was done" in str(dumped(source, place, OTHER))
        assert is_complete(place, reference["other"]), faults.steps
    assert seen == {"old", "between", "new"}


def test_a_second_crash_while_the_first_is_mended(source, out, reference):
    for faults, place in crashes(Killed, out, every=4):
        first = faults.at
        for later in (first, first + 7, 3):
            faults.dead, faults.steps, faults.at = False, 0, later
            with contextlib.suppress(Killed):
                dumped(source, place)
        faults.end()
        dumped(source, place)
        assert is_complete(place, reference["few"]), first
        faults.failed = first <= 30


def test_a_full_disk_while_the_lock_is_taken_does_not_keep_it(source, tmp_path, monkeypatch):
    def full(handle, content):
        raise OSError(errno.ENOSPC, "No space left on device")

    monkeypatch.setattr(storage.os, "write", full)
    with pytest.raises(OSError, match="No space left"):
        dumped(source, tmp_path / "out")
    monkeypatch.undo()
    assert dumped(source, tmp_path / "out").patches == 5


def test_the_old_manifest_is_gone_for_good_before_a_part_is_replaced(
    source, tmp_path, monkeypatch, reference
):
    """After a power cut, names that were not flushed to the disk may be the old ones."""
    dumped(source, tmp_path / "out")
    done = []
    for operation in ("move", "remove", "settle"):
        original = getattr(LocalStorage, operation)

        def noting(store, *arguments, operation=operation, original=original):
            done.append((operation, *arguments))
            return original(store, *arguments)

        monkeypatch.setattr(LocalStorage, operation, noting)
    dumped(source, tmp_path / "out", OTHER, fresh=True)
    gone = done.index(("remove", "manifest.json"))
    moves = [k for k, (operation, *names) in enumerate(done) if operation == "move"]
    assert done[moves[0]][-1] == "part-00000.parquet"
    assert done[moves[-1]][-1] == "manifest.json"
    settled = [k for k, step in enumerate(done) if step == ("settle",)]
    assert any(gone < k < moves[0] for k in settled)
    assert any(moves[-2] < k < moves[-1] for k in settled)  # all is there when it appears
    assert settled[-1] > moves[-1]
    assert is_complete(tmp_path / "out", reference["other"])


# Killed processes ---------------------------------------------------------------------------

RUN = """
import sys
from mfeat import MinkowskiCurves, dump, planning
from mfeat.transformer import full_curves
planning._PART_COSTS = (1, 1)
few = MinkowskiCurves(**full_curves() | {"levels": 2, "smooth": (), "band": (), "slope": ()})
dump(sys.argv[1], sys.argv[2], few, size=16, jobs=2, backend=sys.argv[3])
"""


@pytest.fixture(scope="module")
def many(tmp_path_factory):
    """A source of 150 parts and the files of its table."""
    folder = tmp_path_factory.mktemp("many")
    (folder / "in").mkdir()
    for k in range(10):
        np.save(folder / "in" / f"{k}.npy", noise(k, (240, 512)))
    with pytest.MonkeyPatch.context() as patch:
        patch.setattr(planning, "_PART_COSTS", (1, 1))
        assert dumped(folder / "in", folder / "out").parts == 150
    return folder / "in", files_of(folder / "out")


def finished_parts(out):
    return len(list(Path(out).glob(f"{UNFINISHED}/*/part-*.parquet")))


LOKY = pytest.param("loky", marks=LONG)


@pytest.mark.parametrize("backend", ["threading", LOKY])
def test_killed_at_random_moments_and_resumed(backend, many, tmp_path):
    source, reference = many
    out, rng = tmp_path / "out", random.Random(backend)
    command = [sys.executable, "-c", RUN, str(source), str(out), backend]
    for more in (1, 40)[-1 if backend == "loky" else 0 :]:
        wanted = finished_parts(out) + more + rng.randrange(30)
        process = subprocess.Popen(command, stderr=subprocess.DEVNULL)
        while process.poll() is None and finished_parts(out) < wanted:
            time.sleep(0.001)
        time.sleep(rng.random() / 100)
        process.kill()
        assert process.wait() == -signal.SIGKILL
        with pytest.raises(FileNotFoundError, match="its dump is unfinished"):
            read_table(out)
    summary = dumped(source, out, jobs=2)
    assert summary.kept_parts >= 41
    assert f"{summary.kept_parts} parts kept from an interrupted run" in str(summary)
    assert is_complete(out, reference)


@LONG
def test_a_worker_that_is_killed_is_replaced(many, tmp_path, caplog):
    source, reference = many
    out = tmp_path / "out"

    def kill_one():
        while finished_parts(out) < 3:
            time.sleep(0.001)
        os.kill(next(iter(reusable_executor._executor._processes)), signal.SIGKILL)

    killer = threading.Thread(target=kill_one)
    killer.start()
    with caplog.at_level(logging.WARNING, logger="mfeat"):
        dumped(source, out, jobs=2, backend="loky")
    killer.join()
    assert "a worker process died; its parts are done again" in caplog.messages
    assert is_complete(out, reference)


@LONG
def test_workers_that_always_die_end_the_run(source, tmp_path, monkeypatch, reference):
    def dying(*arguments):  # a local function travels whole, this module could not be imported
        import os
        import signal

        os.kill(os.getpid(), signal.SIGKILL)

    monkeypatch.setattr(runs, "write_part", dying)
    with pytest.raises(RuntimeError, match="died before it could finish a part: out of memory"):
        dumped(source, tmp_path / "out", jobs=2, backend="loky")
    monkeypatch.setattr(runs, "write_part", parts.write_part)
    dumped(source, tmp_path / "out")
    assert is_complete(tmp_path / "out", reference["few"])


@pytest.mark.parametrize("backend", ["threading", LOKY])
def test_an_interrupt_stops_all_workers(backend, many, tmp_path, monkeypatch):
    source, reference = many
    out = tmp_path / "out"

    class Interrupting:
        """Stands for the progress bar; the user interrupts after five parts."""

        def __init__(self, **options):
            self.left = 5

        __enter__ = lambda self: self  # noqa: E731
        __exit__ = lambda self, *_: None  # noqa: E731

        def update(self, patches):
            self.left -= 1
            if self.left == 0:
                raise KeyboardInterrupt

    with monkeypatch.context() as patch:
        patch.setattr(runs, "tqdm", Interrupting)
        with pytest.raises(KeyboardInterrupt):
            dumped(source, out, jobs=2, backend=backend)
    stopped = finished_parts(out)
    assert 5 <= stopped < 150
    time.sleep(0.1)
    assert finished_parts(out) <= stopped + 2  # a part in work may be finished
    summary = dumped(source, out, jobs=2)
    assert summary.kept_parts >= stopped
    assert is_complete(out, reference)


# What is resumed, and what is refused -------------------------------------------------------


def interrupted(source, out, after=2, transformer=FEW, **options):
    """Leave a run with some parts."""
    with pytest.MonkeyPatch.context() as patch:
        done, write_part = [], parts.write_part

        def stopping(*arguments):
            if len(done) == after:
                raise KeyboardInterrupt
            done.append(arguments)
            return write_part(*arguments)

        patch.setattr(runs, "write_part", stopping)
        with pytest.raises(KeyboardInterrupt):
            dumped(source, out, transformer, **options)


def test_finished_parts_are_kept_and_a_truncated_one_is_redone(source, tmp_path, reference):
    interrupted(source, tmp_path / "a", after=3)
    assert dumped(source, tmp_path / "a").kept_parts == 3
    assert is_complete(tmp_path / "a", reference["few"])
    interrupted(source, tmp_path / "b", after=3)
    there = sorted((tmp_path / "b").glob(f"{UNFINISHED}/*/part-*.parquet"))
    there[0].write_bytes(there[0].read_bytes()[:-1])
    there[1].write_bytes(b"")
    (there[0].parent / f"{there[0].name}.0123.tmp").write_bytes(b"half")
    assert dumped(source, tmp_path / "b").kept_parts == 1
    assert is_complete(tmp_path / "b", reference["few"])


def test_a_resume_needs_no_part_of_the_settings_that_decide_nothing(source, tmp_path, reference):
    interrupted(source, tmp_path / "out")
    other_jobs = MinkowskiCurves(**FEW.get_params() | {"n_jobs": 2})
    assert dumped(source, tmp_path / "out", other_jobs, jobs=3).kept_parts == 2
    read = [pq.read_table(io) for io in sorted((tmp_path / "out").glob("part-*.parquet"))]
    assert sum(len(table) for table in read) == 5


def test_a_complete_table_is_left_alone(source, out, reference):
    dumped(source, out)
    summary = dumped(source, out)
    assert "the table was complete already; nothing was done" in str(summary)
    assert (summary.patches, summary.rejects, summary.kept_parts) == (5, 2, 4)
    assert is_complete(out, reference["few"])


@pytest.mark.parametrize("state", ["an interrupted run", "a complete table"])
@pytest.mark.parametrize(
    ("transformer", "options", "message"),
    [
        (OTHER, {}, r"features\.levels\.raw: \[-2\.5, 2\.5\] -> \[-2\.5, 0\.0, 2\.5\]"),
        (FEW, {"size": 20}, r"size: \[16, 16\] -> \[20, 20\]"),
        (FEW, {"missing_value": 7.0}, r"missing_value: null -> 7\.0"),
        (FEW, {"label_from": "folder"}, r'label_from: null -> "folder"'),
    ],
)
def test_other_settings_are_refused(
    state, transformer, options, message, source, tmp_path, reference
):
    out = tmp_path / "out"
    if state == "a complete table":
        dumped(source, out)
    else:
        interrupted(source, out)
    before = files_of(out)
    with pytest.raises(OutputRefused, match=rf"holds {state} of other[\s\S]*{message}[\s\S]*fresh"):
        dumped(source, out, transformer, **options)
    assert files_of(out) == before
    dumped(source, out)
    assert is_complete(out, reference["few"])


def test_another_version_is_refused(source, tmp_path, monkeypatch):
    interrupted(source, tmp_path / "out")
    monkeypatch.setattr(runs, "__version__", "99.0.0")
    with pytest.raises(OutputRefused, match=r'mfeat_version: ".*" -> "99\.0\.0"'):
        dumped(source, tmp_path / "out")


@pytest.mark.parametrize("state", ["an interrupted run", "a complete table"])
@pytest.mark.parametrize(
    ("change", "message"),
    [
        (lambda folder: np.save(folder / "d.npy", noise(5)), r"inputs added: d\.npy"),
        (lambda folder: (folder / "a.npy").unlink(), r"inputs removed: a\.npy"),
        (
            lambda folder: np.save(folder / "b.npy", noise(5, (50, 50))),
            r"inputs changed: b\.npy \(size or time\)",
        ),
    ],
)
def test_other_inputs_are_refused(state, change, message, tmp_path):
    source, out = write_images(tmp_path / "in"), tmp_path / "out"
    if state == "a complete table":
        dumped(source, out)
    else:
        interrupted(source, out)
    change(source)
    with pytest.raises(
        OutputRefused, match=rf"{state} of other settings or inputs[\s\S]*{message}"
    ):
        dumped(source, out)
    fresh = dumped(source, out, fresh=True)
    dumped(source, tmp_path / "again")
    assert fresh.kept_parts == 0
    assert is_complete(out, files_of(tmp_path / "again"))


def test_many_changed_inputs_are_shortened(tmp_path):
    for k in range(9):
        np.save(tmp_path / f"{k}.npy", noise(k))
    dumped(tmp_path / "?.npy", tmp_path / "out")
    for k in range(9):
        os.utime(tmp_path / f"{k}.npy", (1, k))
    with pytest.raises(OutputRefused, match=r"0\.npy \(size or time\), .*, \.\.\. \(9\)"):
        dumped(tmp_path / "?.npy", tmp_path / "out")


def test_a_changed_manifest_is_refused_with_the_column(tmp_path):
    np.save(tmp_path / "a.npy", noise(0))
    manifest = tmp_path / "m.csv"
    manifest.write_text("path,label\na.npy,dull\n")
    dumped(manifest, tmp_path / "out")
    manifest.write_text("path,label\na.npy,bright\n")
    with pytest.raises(OutputRefused, match=r"inputs changed: a\.npy \(label\)"):
        dumped(manifest, tmp_path / "out")
    manifest.write_text("path,label,lot\na.npy,dull,3\n")
    with pytest.raises(OutputRefused, match=r"columns of the manifest: .*lot.* on one side only"):
        dumped(manifest, tmp_path / "out")


def test_another_mask_of_the_same_size_and_time_is_noticed(tmp_path):
    np.save(tmp_path / "a.npy", noise(0, (16, 16)))
    for name, row in (("one", 3), ("other", 9)):
        mask = np.ones((16, 16), dtype=bool)
        mask[row] = False
        np.save(tmp_path / f"{name}.npy", mask)
        os.utime(tmp_path / f"{name}.npy", (7, 7))  # as archives with fixed times unpack
    manifest = tmp_path / "m.csv"
    manifest.write_text("path,mask\na.npy,one.npy\n")
    dumped(manifest, tmp_path / "out")
    manifest.write_text("path,mask\na.npy,other.npy\n")
    with pytest.raises(OutputRefused, match=r"inputs changed: a\.npy \(mask\)"):
        dumped(manifest, tmp_path / "out")


def test_a_complete_table_is_recognised_when_its_source_has_moved(tmp_path):
    source = write_images(tmp_path / "in")
    dumped(source, tmp_path / "out")
    source.rename(tmp_path / "there")
    assert "nothing was done" in str(dumped(tmp_path / "there", tmp_path / "out"))


def test_an_interrupted_run_is_refused_when_its_source_has_moved(tmp_path):
    """Its plan says where the files lay; no file is to be blamed for a change it has not seen."""
    source = write_images(tmp_path / "in")
    interrupted(source, tmp_path / "out")
    source.rename(tmp_path / "there")
    with pytest.raises(OutputRefused, match=r"inputs changed: a\.npy \(location\), b\.npy"):
        dumped(tmp_path / "there", tmp_path / "out")


def test_starting_anew_drops_an_interrupted_run(source, tmp_path, reference):
    interrupted(source, tmp_path / "out", transformer=OTHER)
    assert dumped(source, tmp_path / "out", fresh=True).kept_parts == 0
    assert is_complete(tmp_path / "out", reference["few"])


def test_parts_of_a_longer_old_table_do_not_stay(source, tmp_path, reference, monkeypatch):
    np.save(tmp_path / "long.npy", noise(0, (400, 16)))
    assert dumped(tmp_path / "long.npy", tmp_path / "out").parts == 25
    dumped(source, tmp_path / "out", fresh=True)
    assert is_complete(tmp_path / "out", reference["few"])


# Changes during a run -----------------------------------------------------------------------


def test_a_file_that_changes_after_the_plan_ends_the_run(tmp_path, monkeypatch):
    source, out = write_images(tmp_path / "in"), tmp_path / "out"
    make_plan = runs.make_plan

    def changing(*arguments):
        plan = make_plan(*arguments)
        np.save(source / "b.npy", noise(9, (20, 32)))
        return plan

    with monkeypatch.context() as patch:
        patch.setattr(runs, "make_plan", changing)
        with pytest.raises(InputChanged, match=r"b\.npy has changed since the run was planned"):
            dumped(source, out)
    with pytest.raises(OutputRefused, match=r"inputs changed: b\.npy"):
        dumped(source, out)
    assert dumped(source, out, fresh=True).patches == 6


@pytest.mark.parametrize("what", ["image", "mask"])
def test_a_file_that_vanishes_during_the_run_ends_it(what, tmp_path, monkeypatch):
    for name in ("image", "mask"):
        np.save(tmp_path / f"{name}.npy", np.ones((16, 16), dtype=np.uint8))
    (tmp_path / "m.csv").write_text("path,mask\nimage.npy,mask.npy\n")
    make_plan = runs.make_plan

    def removing(*arguments):
        plan = make_plan(*arguments)
        (tmp_path / f"{what}.npy").unlink()
        return plan

    monkeypatch.setattr(runs, "make_plan", removing)
    with pytest.raises(InputChanged, match=r"image\.npy has changed"):
        dumped(tmp_path / "m.csv", tmp_path / "out")


def test_a_file_that_changes_while_it_is_read_ends_the_run(tmp_path, monkeypatch):
    source = write_images(tmp_path / "in")
    cuts = parts.cuts

    def changing(settings, entry, item, *more):
        for cut in cuts(settings, entry, item, *more):
            yield cut
            if entry["source"] == "b.npy":
                with open(source / "b.npy", "r+b") as stream:  # in place: mapped pixels change
                    stream.seek(-4, os.SEEK_END)
                    stream.write(np.float32(7).tobytes())
                os.utime(source / "b.npy", (1, 1))

    monkeypatch.setattr(parts, "cuts", changing)
    with pytest.raises(InputChanged, match=r"b\.npy has changed since the run was planned"):
        dumped(source, tmp_path / "out")


def test_a_worker_of_another_version_is_refused(source, tmp_path, monkeypatch):
    monkeypatch.setattr(parts, "__version__", "99.0.0")
    with pytest.raises(RuntimeError, match=r"planned by mfeat .*, this worker has 99\.0\.0"):
        dumped(source, tmp_path / "out")


# Two runs at once ---------------------------------------------------------------------------


def test_a_second_run_on_an_output_is_refused(source, out, reference):
    with output(out).lock(f"{UNFINISHED}/lock"):
        for fresh in (False, True):
            with pytest.raises(OutputInUse, match=r"another run writes to .*wait for its end, or"):
                dumped(source, out, fresh=fresh)
    dumped(source, out)
    assert is_complete(out, reference["few"])


def test_of_two_runs_that_start_together_one_goes_on(many, tmp_path):
    source, reference = many
    ended = []

    def run():
        try:
            ended.append(dumped(source, tmp_path / "out").patches)
        except OutputInUse:
            ended.append("refused")

    together = [threading.Thread(target=run) for _ in range(3)]
    for one in together:
        one.start()
    for one in together:
        one.join()
    # a run that starts after another has ended finds the table complete
    assert ended.count("refused") >= 1
    assert set(ended) == {"refused", 10 * 15 * 32}
    assert is_complete(tmp_path / "out", reference)


HOLD = """
import sys
from mfeat.storage import output
with output(sys.argv[1]).lock(".unfinished/lock"):
    print("held", flush=True)
    sys.stdin.read()
"""


def test_a_lock_goes_with_its_process(source, tmp_path, reference):
    out = tmp_path / "out"
    command = [sys.executable, "-c", HOLD, str(out)]
    with subprocess.Popen(command, stdin=subprocess.PIPE, stdout=subprocess.PIPE) as holder:
        assert holder.stdout.readline() == b"held\n"
        with pytest.raises(OutputInUse, match=rf"\(process {holder.pid} on .*\)"):
            dumped(source, out)
        holder.kill()
    assert (out / UNFINISHED / "lock").exists()
    dumped(source, out)
    assert is_complete(out, reference["few"])


# fsspec -------------------------------------------------------------------------------------


def test_remote_inputs_and_outputs(source, reference):
    root = f"memory://{uuid.uuid4().hex}"
    found, path = fsspec.core.url_to_fs(root)
    for image in source.iterdir():
        found.pipe_file(f"{path}/in/{image.name}", image.read_bytes())
    interrupted(f"{root}/in", f"{root}/out", after=1)
    with pytest.raises(FileNotFoundError, match="its dump is unfinished"):
        read_table(f"{root}/out")
    summary = dumped(f"{root}/in", f"{root}/out", jobs=2)
    assert (summary.kept_parts, summary.patches, summary.rejects) == (1, 5, 2)
    table = read_table(f"{root}/out")
    dumped(f"{root}/in/*", f"{root}/again")
    assert read_table(f"{root}/again").X.tobytes() == table.X.tobytes()
    local = pq.read_table(fsspec.open(f"{root}/out/rejects.parquet").open())
    assert local["source"].to_pylist() == ["b.npy", "c.png"]
    found.pipe_file(f"{path}/in/a.npy", (source / "b.npy").read_bytes())
    with pytest.raises(OutputRefused, match=r"inputs changed: a\.npy"):
        dumped(f"{root}/in", f"{root}/out")
    remove(root)


def test_a_remote_run_that_stands_still_is_taken_over(source):
    place = f"memory://{uuid.uuid4().hex}/out"
    store = output(place)
    store._write_beat(f"{UNFINISHED}/lock", "of a killed run", 3)
    assert dumped(source, place).patches == 5
    assert not store.exists(UNFINISHED)
    remove(place)


def test_an_unknown_protocol_is_refused(source):
    with pytest.raises(ValueError, match="nowhere://x/out cannot be reached"):
        dumped(source, "nowhere://x/out")


# Storage: what both kinds must do -----------------------------------------------------------


def written(store, name, content=b"content"):
    with store.writing(name) as stream:
        stream.write(content)


def content_of(store, name):
    with store.open(name) as stream:
        return stream.read()


@pytest.fixture
def store(out):
    found = output(out)
    found.make("")
    return found


def test_a_file_appears_when_it_is_complete(store):
    store.make("folder")
    for content in (b"one", b"another"):
        before = store.names("folder")
        with store.writing("folder/name") as stream:
            stream.write(content)
            assert [name for name in store.names("folder") if not name.endswith(".tmp")] == before
            if before:
                assert content_of(store, "folder/name") == b"one"
        assert store.names("folder") == ["name"]
        assert content_of(store, "folder/name") == content


def fail_to_write(store, name, error):
    with store.writing(name) as stream:
        stream.write(b"half")
        raise error


@pytest.mark.parametrize("error", [OSError("full"), KeyboardInterrupt()])
def test_a_file_whose_writing_fails_never_appears(error, store):
    written(store, "old")
    for name in ("new", "old"):
        with pytest.raises(type(error)):
            fail_to_write(store, name, error)
    assert store.names() == ["old"]
    assert content_of(store, "old") == b"content"


def test_two_writers_of_one_file_do_not_mix(store):
    with store.writing("name") as one:
        one.write(b"one")
        with store.writing("name") as other:
            other.write(b"other")
        assert content_of(store, "name") == b"other"
    assert content_of(store, "name") == b"one"
    assert store.names() == ["name"]


def test_names_are_sorted_and_those_of_a_folder_only(store):
    assert store.names("nowhere") == []
    for folder in ("b", "a", "a/deep"):
        store.make(folder)
    for name in ("c", "a/z", "a/deep/y", "B"):
        written(store, name)
    assert [name for name in store.names() if name != "b"] == ["B", "a", "c"]  # b is empty
    assert store.names("a") == ["deep", "z"]


def test_what_exists(store):
    assert not store.exists("a")
    assert not store.exists("a/b")
    store.make("a")
    written(store, "a/b")
    assert store.exists("a")
    assert store.exists("a/b")
    store.make("a")  # again is no error, and empties nothing
    assert store.exists("a/b")


def test_a_missing_file_cannot_be_opened(store):
    with pytest.raises(FileNotFoundError):
        store.open("nothing")


def test_moving_replaces(store):
    store.make("a")
    written(store, "a/one", b"new")
    written(store, "two", b"old")
    store.move("a/one", "two")
    assert content_of(store, "two") == b"new"
    assert not store.exists("a/one")
    with pytest.raises(FileNotFoundError):
        store.move("a/one", "two")
    assert content_of(store, "two") == b"new"


def test_removing(store):
    written(store, "a")
    written(store, "b")
    store.remove("a")
    store.remove("a")  # a missing file is no error
    assert store.names() == ["b"]
    store.make("deep/er")
    written(store, "deep/er/c")
    written(store, "deep/d")
    store.remove_tree("deep")
    store.remove_tree("deep")
    assert not store.exists("deep")
    assert store.names() == ["b"]


def test_settling_any_folder(store):
    store.make("a")
    store.settle()
    store.settle("a")
    assert store.names() in (["a"], [])


def test_a_lock_is_held_once_and_let_go_whatever_happens(store):
    def twice():
        with store.lock("folder/lock"), store.lock("folder/lock"):
            pass

    for _ in range(2):  # the refusal of the inner one goes through the outer one
        with pytest.raises(OutputInUse):
            twice()
    with store.lock("folder/lock"):
        assert store.exists("folder/lock")
    assert not store.exists("folder")  # nothing is left behind


def test_a_lock_leaves_what_lies_beside_it(store):
    with store.lock("folder/lock"):
        written(store, "folder/kept")
    assert store.names("folder") == ["kept"]


def test_a_folder_that_is_written_into_while_it_is_deleted(tmp_path, monkeypatch):
    store = LocalStorage(tmp_path)
    store.make("run")
    rmtree, calls = storage.shutil.rmtree, []

    def late(path, **options):
        rmtree(path, **options)
        calls.append(path)
        if len(calls) < 3:
            path.mkdir()  # a worker of a dead run was there meanwhile

    monkeypatch.setattr(storage.shutil, "rmtree", late)
    store.remove_tree("run")
    assert len(calls) == 3
    assert not store.exists("run")
    monkeypatch.setattr(storage.shutil, "rmtree", lambda path, **options: None)
    monkeypatch.setattr(storage.time, "sleep", lambda seconds: None)
    store.make("run")
    with pytest.raises(OSError, match="cannot be deleted; another process writes into it"):
        store.remove_tree("run")


@pytest.mark.parametrize("wrong", [None, 3, b"x", ""])
def test_places_are_paths_or_uris(wrong):
    with pytest.raises(TypeError, match="there must be a path or a URI; got"):
        locations.as_location(wrong, "there")
    with pytest.raises(ValueError, match="null character"):
        locations.as_location("a\0b")


def test_a_stamp_changes_with_the_file(tmp_path, monkeypatch):
    path = tmp_path / "a"
    path.write_bytes(b"one")
    first = locations.stamp(str(path))
    assert locations.stamp(f"file://{path}") == first
    os.utime(path, (5, 5))
    assert locations.stamp(str(path)) != first
    with pytest.raises(FileNotFoundError):
        locations.stamp(str(tmp_path / "b"))
    place = f"memory://{uuid.uuid4().hex}"
    found, root = fsspec.core.url_to_fs(place)
    found.pipe_file(root, b"one")
    first = locations.stamp(place)
    assert json.dumps(first)
    found.pipe_file(root, b"two")
    assert locations.stamp(place) != first
    found.rm(root)

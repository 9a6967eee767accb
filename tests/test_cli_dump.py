"""The command `mfeat dump`: exit codes, streams, flags and settings files."""

import inspect
import io
import json
import os
import re
import subprocess
import sys
import tomllib

import numpy as np
import pyarrow as pa
import pyarrow.parquet as pq
import pytest

import mfeat
from mfeat import MinkowskiCurves, cli, read_table, storage
from mfeat.cli import main
from mfeat.options import KEYS, dump_settings, read_settings
from mfeat.transformer import full_curves

# A short vector: two moments and three functionals at three levels.
FEW = full_curves() | {"levels": 3, "smooth": (), "band": (), "slope": ()}
SHORT = ["--size", "32", "--jobs", "1"]
for name, value in FEW.items():
    SHORT += ["--set", f"{name}={json.dumps(value)}"]


@pytest.fixture
def scans(tmp_path):
    """A folder of three images of four patches each."""
    folder = tmp_path / "scans"
    folder.mkdir()
    for k in range(3):
        noise = np.random.default_rng(k).normal(size=(64, 64)).astype(np.float32)
        np.save(folder / f"noise{k}.npy", noise)
    return folder


@pytest.fixture
def table(tmp_path):
    return tmp_path / "table"


@pytest.fixture
def run(capsys):
    """Return a function that runs the command and returns its exit code, stdout and stderr."""

    def command(*arguments):
        capsys.readouterr()
        code = main(["dump", *map(str, arguments)])
        return code, *capsys.readouterr()

    return command


def stopped_by_parser(capsys, *arguments):
    capsys.readouterr()
    with pytest.raises(SystemExit) as stop:
        main(["dump", *map(str, arguments)])
    out, err = capsys.readouterr()
    assert out == ""
    return stop.value.code, err


def as_process(*arguments, **options):
    """Run the command in a process of its own; returns code, stdout and stderr."""
    code = "import sys; from mfeat.cli import main; sys.exit(main())"
    command = [sys.executable, "-c", code, "dump", *map(str, arguments)]
    done = subprocess.run(command, capture_output=True, check=False, **options)
    return done.returncode, done.stdout, done.stderr


def everything_in(folder):
    return {path: path.stat().st_mtime_ns for path in folder.rglob("*")}


def failing_at(monkeypatch, ending, failure):
    """Let the next renaming of a file to a name with this ending fail."""
    replace = os.replace

    def failing(path, target, **options):
        if os.fspath(target).endswith(ending):
            raise failure
        return replace(path, target, **options)

    monkeypatch.setattr(os, "replace", failing)


# Done


def test_the_folder_goes_to_stdout_and_the_summary_to_stderr(scans, table, run):
    code, out, err = run(scans, "--out", table, *SHORT)
    assert code == 0
    assert out == f"{table}\n"
    summary = (
        r"mfeat dump: 12 patches of 3 images, 11 numbers each, in 1 parts?: .*table, [\d.]+ s\n"
    )
    assert re.fullmatch(summary, err)
    assert read_table(table).X.shape == (12, 11)
    assert not (table / ".unfinished").exists()


def test_the_printed_folder_is_absolute(scans, tmp_path, run, monkeypatch):
    monkeypatch.chdir(tmp_path)
    assert run("scans", "--out", "a table", *SHORT)[:2] == (0, f"{tmp_path / 'a table'}\n")
    assert run("scans", "--out", "memory://cli/table", *SHORT)[:2] == (0, "memory://cli/table\n")
    assert len(read_table("memory://cli/table")) == 12


def test_the_same_command_again_does_nothing(scans, table, run):
    assert run(scans, "--out", table, *SHORT)[0] == 0
    before = everything_in(table)
    code, out, err = run(scans, "--out", table, *SHORT)
    assert (code, out) == (0, f"{table}\n")
    assert err.endswith("the table was complete already; nothing was done\n")
    assert everything_in(table) == before


def test_the_output_may_lie_inside_the_source(scans, run):
    for source in (scans, f"{scans}/**/*"):
        for attempt in range(2):
            code, _, err = run(source, "--out", scans / "table", *SHORT)
            assert code == 0
            assert "12 patches of 3 images" in err
            assert ("complete already" in err) == (attempt == 1)
        code, _, err = run(source, "--out", scans / "table", *SHORT, "--fresh")
        assert code == 0
        assert "12 patches of 3 images" in err
        for path in (scans / "table").iterdir():
            path.unlink()


def test_streams_of_a_process_hold_no_progress_bar(scans, table):
    (scans / "manifest.csv").write_text("path\n")
    code, out, err = as_process(scans, "--out", table, *SHORT)
    assert code == 0
    assert out == f"{table}{os.linesep}".encode()
    lines = err.decode().splitlines()
    assert lines[0].startswith("mfeat: ")
    assert "holds manifest.csv; give that file to use it as the manifest" in lines[0]
    assert lines[1].startswith("mfeat dump: 12 patches of 4 images")
    assert len(lines) == 4  # the last two tell of the reject
    assert "1 reject" in lines[2]
    assert lines[3].startswith("  1 x not an image")
    assert lines[3].endswith("e.g. manifest.csv")
    assert b"\r" not in err.replace(os.linesep.encode(), b"")
    assert b"patch/s" not in err


def test_demo_and_dump_go_together(tmp_path, table, run, capsys):
    demo = ["demo", "--out", str(tmp_path / "demo"), "--panels", "1", "--side", "64"]
    assert main(demo) == 0
    manifest = capsys.readouterr().out.strip()
    code, _, err = run(manifest, "--out", table, *SHORT, "--label-from", "truth")
    assert code == 0
    assert "24 patches of 6 images" in err
    found = read_table(table)
    assert found.y.dtype.kind == "i"
    assert set(found.columns["unit"].to_pylist()) == {"um"}
    assert tuple(found.transformer.pitch) == (10.0, 10.0)
    assert {group.split("_")[0] for group in found.groups} >= {"sound", "craters"}


# Rejects


def test_rejects_exit_with_1_only_under_strict(scans, table, run):
    (scans / "notes.txt").write_text("hello")
    for options, expected in (
        (["--strict"], 1),
        (["--strict"], 1),  # also when the table was complete before
        ([], 0),
        (["--strict", "--fresh"], 1),
    ):
        code, out, err = run(scans, "--out", table, *SHORT, *options)
        assert code == expected
        assert out == f"{table}\n"  # the table is complete
        assert re.search(r"1 rejects? \(1 whole images?\).* rejects.parquet", err)
        assert len(read_table(table)) == 12
    rejects = pq.read_table(table / "rejects.parquet").to_pylist()
    assert [(reject["source"], reject["row"]) for reject in rejects] == [("notes.txt", None)]


def test_strict_without_rejects_is_done(scans, table, run):
    for _ in range(2):
        assert run(scans, "--out", table, *SHORT, "--strict")[0] == 0


# Unusable arguments


@pytest.mark.parametrize(
    ("arguments", "message"),
    [
        (["--size", "1"], "size must be >= 2; got 1"),
        (["--size", "32x32x32"], "size must be one integer or (rows, columns); got (32, 32, 32)"),
        (["--stride", "0"], "stride must be >= 1; got 0"),
        (["--channel", "pink"], "channel must be one of 'luminance', 'red', 'green', 'blue'; got"),
        (["--channel=-1"], "channel must be one of 'luminance', 'red', 'green', 'blue'; got '-1'"),
        (["--missing-value", "nan"], "missing_value must be a finite number; got nan"),
        (["--max-pixels", "1"], "max_pixels must be >= 4; got 1"),
        (["--jobs", "0"], "jobs must be >= 1, or <= -1 to count from all processors; got 0"),
        (["--set", "levels"], "'levels' is not NAME=VALUE, e.g. levels=32 or 'smooth=[1, 2]'"),
        (["--set", "level=3"], "--set: MinkowskiCurves has no parameter ['level']; it has band, "),
        (["--set", "levels=many"], "levels must be a sequence of numbers; got 'many'"),
        (["--set", "levels=0"], "levels must be >= 1 and <= 65535; got 0"),
        (["--set", "smooth=1,2"], "smooth must be a tuple of Gaussian scales, () for none; got "),
        (["--set", "raw=yes"], "'raw' parameter of MinkowskiCurves must be an instance of 'bool'"),
        (
            ["--set", "basis=levels", "--set", "level_rule=fitted"],
            "learns its levels from training patches: call fit",
        ),
        (["--set", 'channels=["a"]'], "transformer has channels, but dump reads one channel"),
        (
            ["--set", "scale_rule=fixed", "--set", "smooth=[40]"],
            "field smooth_40: its widest Gaussian has a standard deviation",
        ),
        (["--settings", "none.toml"], "none.toml"),
        (["--backend", "loky", "--cluster", "tcp://x:1"], "and a cluster were given; choose one"),
        (["--label-from", "manifest"], "labels are to come from a manifest's column label; "),
        (["--label-from", "truth"], "labels are to come from a manifest's column truth, an image"),
    ],
    ids=lambda value: value if isinstance(value, str) else " ".join(value),
)
def test_unusable_values_exit_with_2_and_leave_nothing(arguments, message, scans, table, run):
    code, out, err = run(scans, "--out", table, *SHORT, *arguments)
    assert (code, out) == (2, "")
    assert err.startswith("mfeat dump: ")
    assert message in err
    assert not table.exists()


def test_unusable_sources_and_outputs_exit_with_2(scans, tmp_path, table, run):
    (tmp_path / "wrong.csv").write_text("path,raw_mean\nscans/noise0.npy,1\n")
    before = everything_in(tmp_path)
    for source, out, message in (
        (tmp_path / "none", table, "none does not exist"),
        ("", table, "source must be a path or a URI; got ''"),
        (f"{scans}/*.tif", table, "no file matches"),
        ("nowhere://a", table, "nowhere://a cannot be reached"),
        (tmp_path / "wrong.csv", table, "the manifest's columns ['raw_mean'] have names that"),
        (scans, "", "out must be a path or a URI; got ''"),
        (scans, scans, "holds other files, e.g. noise0.npy; name a new or empty folder"),
        (scans, scans / "noise0.npy", "noise0.npy is a file, or lies below one; name a folder"),
        (scans, scans / "noise0.npy" / "x", "is a file, or lies below one; name a folder"),
        (scans, "nowhere://table", "nowhere://table cannot be reached"),
    ):
        code, printed, err = run(source, "--out", out, *SHORT)
        assert (code, printed) == (2, "")
        assert message in err
        assert everything_in(tmp_path) == before


@pytest.mark.parametrize(
    ("arguments", "message"),
    [
        (["--size", "many"], "argument --size: "),
        (["--size", "32x"], "argument --size: "),
        (["--stride", "2.5"], "argument --stride: "),
        (["--edge", "pad"], "argument --edge: invalid choice: 'pad'"),
        (["--regions", "all"], "argument --regions: invalid choice: 'all'"),
        (["--label-from", "name"], "argument --label-from: invalid choice: 'name'"),
        (["--truth-rule", "most"], "argument --truth-rule: invalid choice: 'most'"),
        (["--backend", "mpi"], "argument --backend: invalid choice: 'mpi'"),
        (["--missing-value", "none"], "argument --missing-value: invalid float value: 'none'"),
        (["--max-pixels", "1e9"], "argument --max-pixels: invalid int value: '1e9'"),
        (["--jobs", "two"], "argument --jobs: invalid int value: 'two'"),
        (["--paint"], "unrecognized arguments: --paint"),
        (["--out"], "argument --out: expected one argument"),
    ],
    ids=lambda value: value if isinstance(value, str) else " ".join(value),
)
def test_arguments_of_the_wrong_form_exit_with_2(arguments, message, scans, table, capsys):
    code, err = stopped_by_parser(capsys, scans, "--out", table, *arguments)
    assert code == 2
    assert message in err
    assert "_sides" not in err  # a name of the code is no help
    assert not table.exists()


def test_an_output_is_needed_but_for_a_dry_run(scans, capsys):
    code, err = stopped_by_parser(capsys, scans)
    assert code == 2
    assert "dump needs --out DIR, unless with --dry-run" in err
    code, err = stopped_by_parser(capsys, "--out", "table")
    assert code == 2
    assert "the following arguments are required: SOURCE" in err


def test_an_output_in_use_is_refused(scans, table, run):
    with storage.output(str(table)).lock(".unfinished/lock"):
        code, out, err = run(scans, "--out", table, *SHORT)
    assert (code, out) == (2, "")
    assert f"another run writes to {table}" in err
    assert run(scans, "--out", table, *SHORT)[0] == 0


# Other settings, other inputs


def test_a_table_of_other_settings_is_kept_unless_started_afresh(scans, table, run):
    assert run(scans, "--out", table, *SHORT)[0] == 0
    before = everything_in(table)
    code, out, err = run(scans, "--out", table, *SHORT, "--size", "16", "--set", "levels=2")
    assert (code, out) == (2, "")
    for line in ("size: [32, 32] -> [16, 16]", "name another output, or start anew with fresh"):
        assert line in err
    assert everything_in(table) == before
    code, out, err = run(scans, "--out", table, *SHORT, "--size", "16", "--fresh")
    assert (code, out) == (0, f"{table}\n")
    assert "48 patches" in err
    assert len(read_table(table)) == 48


def test_a_fresh_start_that_fails_leaves_the_old_table(scans, table, run, monkeypatch):
    assert run(scans, "--out", table, *SHORT)[0] == 0
    with monkeypatch.context() as patch:
        failing_at(patch, "part-00000.parquet", OSError(28, "No space left on device"))
        assert run(scans, "--out", table, *SHORT, "--size", "16", "--fresh")[0] == 3
    assert len(read_table(table)) == 12
    assert run(scans, "--out", table, *SHORT, "--size", "16")[0] == 0  # goes on
    assert len(read_table(table)) == 48


def test_a_table_of_other_inputs_is_kept(scans, table, run):
    assert run(scans, "--out", table, *SHORT)[0] == 0
    np.save(scans / "noise1.npy", np.zeros((64, 65), np.float32))
    (scans / "noise2.npy").unlink()
    np.save(scans / "noise3.npy", np.zeros((64, 64), np.float32))
    code, out, err = run(scans, "--out", table, *SHORT)
    assert (code, out) == (2, "")
    for line in (
        "inputs removed: noise2.npy",
        "inputs added: noise3.npy",
        "inputs changed: noise1.npy (size or time)",
    ):
        assert line in err
    assert len(read_table(table)) == 12


# Failures


@pytest.mark.parametrize(
    ("failure", "code", "message"),
    [
        (OSError(28, "No space left on device"), 3, "No space left on device; what is finished"),
        (PermissionError(13, "Permission denied"), 3, "Permission denied; what is finished"),
        (KeyboardInterrupt(), 130, "mfeat dump: interrupted; what is finished is kept in "),
    ],
    ids=lambda value: type(value).__name__ if isinstance(value, BaseException) else "",
)
@pytest.mark.parametrize("ending", ["part-00000.parquet", "rejects.parquet", "manifest.json"])
def test_a_run_that_stops_goes_on(ending, failure, code, message, scans, table, run, monkeypatch):
    with monkeypatch.context() as patch:
        failing_at(patch, ending, failure)
        found, out, err = run(scans, "--out", table, *SHORT)
    assert (found, out) == (code, "")
    assert message in err
    assert f"kept in {table}; the same command goes on from there" in err
    with pytest.raises(FileNotFoundError, match="unfinished; run the same command again"):
        read_table(table)
    code, out, err = run(scans, "--out", table, *SHORT)
    assert (code, out) == (0, f"{table}\n")
    assert len(read_table(table)) == 12
    assert sorted(path.name for path in table.iterdir()) == [
        *("inputs.arrow", "manifest.json", "part-00000.parquet", "rejects.parquet")
    ]


def test_an_input_that_changes_during_the_run_exits_with_3(scans, table, run, monkeypatch):
    replace = os.replace

    def changing(path, target, **options):
        replace(path, target, **options)
        if os.fspath(target).endswith("plan.arrow"):
            np.save(scans / "noise1.npy", np.zeros((64, 65), np.float32))

    with monkeypatch.context() as patch:
        patch.setattr(os, "replace", changing)
        code, out, err = run(scans, "--out", table, *SHORT)
    assert (code, out) == (3, "")
    assert "noise1.npy has changed since the run was planned; start anew with fresh" in err
    assert "the same command goes on" not in err  # it would be refused
    assert run(scans, "--out", table, *SHORT)[0] == 2
    assert run(scans, "--out", table, *SHORT, "--fresh")[0] == 0
    assert len(read_table(table)) == 12


class Broken(io.StringIO):
    def write(self, text):
        raise BrokenPipeError(32, "Broken pipe")

    flush = write


def test_a_reader_that_goes_away_loses_no_table(scans, table, capsys, monkeypatch):
    monkeypatch.setattr("sys.stdout", Broken())
    assert main(["dump", str(scans), "--out", str(table), *SHORT]) == 3
    assert f"{table} is complete, but stdout failed: [Errno 32]" in capsys.readouterr().err
    assert len(read_table(table)) == 12


def test_a_dry_run_whose_reader_goes_away_is_no_table(scans, capsys, monkeypatch):
    monkeypatch.setattr("sys.stdout", Broken())
    assert main(["dump", str(scans), "--dry-run", *SHORT]) == 3
    err = capsys.readouterr().err
    assert "stdout failed: [Errno 32] Broken pipe" in err
    assert "complete" not in err


def test_names_that_stdout_cannot_show_are_no_crash(scans, tmp_path, capsys, monkeypatch):
    with monkeypatch.context() as patch:
        patch.setattr("sys.stdout", io.TextIOWrapper(io.BytesIO(), encoding="ascii"))
        assert main(["dump", str(scans), "--out", str(tmp_path / "fläche"), *SHORT]) == 3
    assert "is complete, but stdout failed" in capsys.readouterr().err
    assert len(read_table(tmp_path / "fläche")) == 12


# Dry runs


def test_a_dry_run_prints_the_plan_and_writes_nothing(scans, tmp_path, table, run):
    (scans / "notes.txt").write_text("hello")
    before = everything_in(tmp_path)
    for options in ([], ["--out", table], ["--out", table, "--strict", "--fresh"]):
        code, out, err = run(scans, "--dry-run", *SHORT, *options)
        assert (code, err) == (0, "")
        assert everything_in(tmp_path) == before
        plan = [line for line in out.splitlines() if line.startswith("#")]
        assert re.fullmatch(r"# 3 images with 12 patches in 1 parts?", plan[0])
        assert plan[1].startswith("# 21 columns: source, row, col, ")
        assert plan[1].endswith("; 11 numbers, raw_mean to raw_euler_02")
        assert re.match(r"# about [\d.]+ kB and \d+ s with 1 workers?, from a sample", plan[2])
        assert re.fullmatch(r"# 1 files? to be rejected by (their|its) headers?:", plan[3])
        assert plan[4].startswith("#   1 x not an image")


@pytest.mark.parametrize(
    "arguments",
    [
        [],
        ["--size", "16x48", "--stride", "8", "--edge", "shift", "--regions", "grid"],
        ["--channel", "red", "--missing-value", "-9999", "--max-pixels", "100000"],
        ["--channel", "2", "--label-from", "folder", "--truth-rule", "any"],
        ["--set", "levels={raw = 4, slope = [0, 1.5]}", "--set", "slope=[0, 2]"],
        ["--set", "level_rule=fixed", "--set", "level_range=[-1e-3, 2]", "--set", "pitch=[1, 2.5]"],
        ["--set", "directional=true", "--set", "connectivity=8", "--set", "dtype=float64"],
        ["--set", "min_valid=1", "--set", "below_min_valid=nan", "--set", "functionals=['area']"],
    ],
    ids=" ".join,
)
def test_a_dry_run_prints_a_settings_file_of_the_same_settings(arguments, scans, tmp_path, run):
    code, out, _ = run(scans, "--dry-run", *SHORT, *arguments)
    assert code == 0
    path = tmp_path / "dump.toml"
    path.write_text(out, encoding="utf-8")
    found = dump_settings(**read_settings(path))
    again = run(scans, "--dry-run", "--jobs", "1", "--settings", path)[1]
    without_plan = [line for line in out.splitlines() if not line.startswith("#")]
    assert [line for line in again.splitlines() if not line.startswith("#")] == without_plan
    assert "".join(f"{line}\n" for line in without_plan).strip() == found.toml().strip()


def test_a_table_can_be_made_of_the_printed_settings(scans, tmp_path, run):
    arguments = [*SHORT, "--stride", "8", "--missing-value", "0", "--set", "pitch=0.25"]
    assert run(scans, "--out", tmp_path / "flags", *arguments)[0] == 0
    printed = tmp_path / "dump.toml"
    printed.write_text(run(scans, "--dry-run", *arguments)[1], encoding="utf-8")
    assert run(scans, "--out", tmp_path / "file", "--settings", printed)[0] == 0
    flags, file = (read_table(tmp_path / name) for name in ("flags", "file"))
    assert file.fingerprint == flags.fingerprint
    assert np.array_equal(file.X, flags.X)
    assert run(scans, "--out", tmp_path / "flags", "--settings", printed)[0] == 0  # complete


def test_a_dry_run_prints_the_pitch_that_was_given_not_that_of_the_manifest(scans, run):
    (scans / "list.csv").write_text("path,pitch_x,pitch_y,unit\nnoise0.npy,2,0.5,um\n")
    out = run(scans / "list.csv", "--dry-run", *SHORT)[1]
    assert tomllib.loads(out)["features"]["pitch"] == 1.0  # good for other manifests


def test_names_of_columns_do_not_break_the_printed_settings(scans, run):
    names = ["two\nlines", "size = 3", "bell\x07", "größe", "next\x85line", '"quoted"', "#", "a\tb"]
    header = ",".join('"' + name.replace('"', '""') + '"' for name in ["path", *names])
    text = f"{header}\nnoise0.npy{',x' * len(names)}\n"
    (scans / "list.csv").write_text(text, encoding="utf-8", newline="")
    code, out, _ = run(scans / "list.csv", "--dry-run", *SHORT)
    assert code == 0
    assert tomllib.loads(out)["size"] == [32, 32]


@pytest.mark.parametrize(
    ("failure", "code"), [(KeyboardInterrupt(), 130), (OSError(5, "Input/output error"), 3)]
)
def test_a_dry_run_that_stops_promises_nothing(failure, code, scans, run, monkeypatch):
    def failing(*_, **__):
        raise failure

    monkeypatch.setattr(cli, "estimate", failing)
    found, out, err = run(scans, "--dry-run", *SHORT)
    assert (found, out) == (code, "")
    assert "None" not in err
    assert "kept" not in err


def test_a_dry_run_of_nothing_usable_is_no_crash(tmp_path, run):
    (tmp_path / "notes.txt").write_text("hello")
    code, out, _ = run(tmp_path, "--dry-run", *SHORT)
    assert code == 0
    assert "# 0 images with 0 patches" in out


# Flags and settings files


@pytest.fixture
def recorded(monkeypatch):
    """Return a function that gives the arguments with which the command calls `dump`."""

    def of(*arguments):
        calls = []

        def recording(*given, **named):
            calls.append((given, named))
            raise KeyboardInterrupt

        with monkeypatch.context() as patch:
            patch.setattr(cli, "dump", recording)
            assert main(["dump", "SOURCE", "--out", "OUT", *map(str, arguments)]) == 130
        ((given, named),) = calls
        bound = inspect.signature(mfeat.dump).bind(*given, **named)
        found = {k: v for k, v in bound.arguments.items() if k not in ("source", "out")}
        assert (bound.arguments["source"], bound.arguments["out"]) == ("SOURCE", "OUT")
        assert found.pop("fresh") == ("--fresh" in arguments)
        if found["cluster"] is None:
            del found["cluster"]
        return found

    return of


FLAGS = [
    (["--size", "32"], "size", 32),
    (["--size", "32x48"], "size", (32, 48)),
    (["--stride", "8x1"], "stride", (8, 1)),
    (["--edge", "shift"], "edge", "shift"),
    (["--regions", "grid"], "regions", "grid"),
    (["--label-from", "folder"], "label_from", "folder"),
    (["--truth-rule", "any"], "truth_rule", "any"),
    (["--channel", "green"], "channel", "green"),
    (["--channel", "3"], "channel", 3),
    (["--missing-value", "-9999"], "missing_value", -9999.0),
    (["--missing-value", "0"], "missing_value", 0.0),
    (["--missing-value=-1e30"], "missing_value", -1e30),
    (["--max-pixels", "1000"], "max_pixels", 1000),
    (["--jobs", "2"], "jobs", 2),
    (["--jobs=-2"], "jobs", -2),
    (["--backend", "loky"], "backend", "loky"),
    (["--cluster", "tcp://127.0.0.1:8786"], "cluster", "tcp://127.0.0.1:8786"),
]


@pytest.mark.parametrize(("arguments", "name", "value"), FLAGS, ids=lambda v: str(v))
def test_each_flag_is_a_parameter_of_dump(arguments, name, value, recorded):
    assert recorded(*arguments) == {name: value}
    assert recorded(*arguments, "--fresh") == {name: value}


def test_every_key_of_a_settings_file_has_a_flag(recorded):
    assert {name for _, name, _ in FLAGS} == {*KEYS, "cluster"}
    assert recorded() == {}  # so that the defaults are those of dump


def test_parameters_of_the_vector_are_set_by_name(recorded):
    found = recorded("--set", "levels=8", "--set", "smooth=[1]", "--set", "connectivity=8")
    assert list(found) == ["transformer"]
    expected = {"levels": 8, "smooth": [1], "connectivity": 8}
    assert found["transformer"].get_params() == MinkowskiCurves().get_params() | expected
    assert recorded("--set", "levels=8", "--set", "levels=9")["transformer"].levels == 9


def test_flags_go_before_the_settings_file(recorded, tmp_path):
    path = tmp_path / "dump.toml"
    values = {
        "size": [8, 8], "stride": 4, "edge": "drop", "regions": "patch", "label_from": "manifest",
        "truth_rule": "majority", "channel": "blue", "missing_value": 7.5, "max_pixels": 77,
        "jobs": 7, "backend": "threading",
    }  # fmt: skip
    assert set(values) == set(KEYS)
    text = "".join(f"{name} = {json.dumps(value)}\n" for name, value in values.items())
    path.write_text(f"{text}[features]\nlevels = 5\nsmooth = [3]\n")
    found = recorded("--settings", path)
    transformer = found.pop("transformer")
    assert found == values
    assert (transformer.levels, transformer.smooth) == (5, [3])
    for arguments, name, value in FLAGS:
        found = recorded("--settings", path, *arguments)
        assert found.pop("transformer").get_params() == transformer.get_params()
        assert found == values | {name: value}
    found = recorded("--settings", path, "--set", "levels=6")["transformer"]
    assert found.get_params() == transformer.get_params() | {"levels": 6}


@pytest.mark.parametrize(
    ("text", "message"),
    [
        ("size 3", "are not TOML"),
        ("siez = 3", "have unknown keys ['siez']; known are size, stride"),
        ("size = '64'", "size must be an integer; got '64'"),
        ("jobs = 'all'", "jobs must be an integer; got 'all'"),
        ("backend = 'mpi'", "backend must be one of 'threading', 'loky'; got 'mpi'"),
        ("label_from = 'name'", "label_from must be one of 'manifest', 'folder', 'truth'"),
        ("[features]\nlevel = 3", "MinkowskiCurves has no parameter ['level']"),
        ("[features]\nlevels = 'x'", "levels must be a sequence of numbers; got 'x'"),
    ],
)
def test_unusable_settings_files_exit_with_2(text, message, scans, tmp_path, table, run):
    path = tmp_path / "dump.toml"
    path.write_text(text)
    code, out, err = run(scans, "--out", table, "--settings", path)
    assert (code, out) == (2, "")
    assert message in err
    assert not table.exists()


def test_help_tells_of_every_flag_and_of_manifests(capsys):
    with pytest.raises(SystemExit) as stop:
        main(["dump", "--help"])
    assert stop.value.code == 0
    text = " ".join(capsys.readouterr().out.split())
    for flag in {argument.split("=")[0] for arguments, _, _ in FLAGS for argument in arguments[:1]}:
        assert flag in text
    for flag in ("--out", "--set", "--settings", "--dry-run", "--strict", "--fresh"):
        assert flag in text
    for column in ("path", "label", "group", "mask", "row", "pitch_x", "unit", "truth"):
        assert column in text


def test_carried_columns_of_a_parquet_manifest_reach_the_table_with_their_types(
    scans, table, run, tmp_path
):
    columns = {
        "label": pa.array([3, None, -1], pa.int16()),
        "line": pa.array(["u", "v", "u"]).dictionary_encode(),
        "at": pa.array([0, 1, None], pa.timestamp("us", "UTC")),
        "probes": pa.array([[1], [], None], pa.list_(pa.int8())),
        "ok": pa.array([True, False, None]),
    }
    paths = [str(scans / f"noise{k}.npy") for k in range(3)]
    pq.write_table(pa.table({"path": paths} | columns), tmp_path / "list.parquet")
    assert run(tmp_path / "list.parquet", "--out", table, *SHORT)[0] == 0
    found = pq.read_table(table / "part-00000.parquet")
    for name, column in columns.items():
        assert found[name].type == column.type
        assert found[name].to_pylist() == [one for one in column.to_pylist() for _ in range(4)]
    assert found["label_fraction"].to_pylist() == [1.0] * 4 + [None] * 4 + [1.0] * 4

"""The command line: exit codes, streams, and that it only delegates."""

import csv
import re
import shutil
import subprocess
import sys
from pathlib import Path

import numpy as np
import pytest
import tifffile

import mfeat
from mfeat import demo
from mfeat.cli import main
from mfeat.demo import MANIFEST_COLUMNS, write_demo
from mfeat.surfaces import PANEL_CONDITIONS, simulate_panel


def test_demo_writes_what_the_manifest_says(tmp_path, capsys):
    folder = tmp_path / "demo"
    arguments = ["demo", "--out", str(folder), "--panels", "2", "--side", "40", "--seed", "5"]
    assert main(arguments) == 0
    out, err = capsys.readouterr()
    assert out == f"{folder / 'manifest.csv'}\n"
    assert err == ""  # no progress bar where nobody looks
    with open(folder / "manifest.csv", newline="", encoding="utf-8") as stream:
        rows = list(csv.DictReader(stream))
    assert tuple(rows[0]) == MANIFEST_COLUMNS
    assert [row["label"] for row in rows] == [c for c in PANEL_CONDITIONS for _ in range(2)]
    for row, seed in zip(rows, [5, 6] * len(PANEL_CONDITIONS), strict=True):
        panel = simulate_panel(row["label"], seed, (40, 40))
        height = tifffile.imread(folder / row["path"])
        assert height.dtype == np.float32
        assert np.array_equal(height, panel.height, equal_nan=True)
        assert np.array_equal(tifffile.imread(folder / row["truth"]), panel.truth)
    assert len(list(folder.rglob("*.tif"))) == 2 * len(rows)


def test_nothing_is_overwritten(tmp_path, capsys):
    (tmp_path / "mine.txt").write_text("keep")
    assert main(["demo", "--out", str(tmp_path), "--panels", "1", "--side", "16"]) == 2
    out, err = capsys.readouterr()
    assert out == ""
    assert "not an empty folder; name a new one" in err
    assert [path.name for path in tmp_path.iterdir()] == ["mine.txt"]
    with pytest.raises(FileExistsError, match="not an empty folder"):
        write_demo(tmp_path)


@pytest.mark.parametrize(
    ("failure", "code", "message"),
    [
        (OSError(28, "No space left on device"), 3, "No space left.*no file is left in"),
        (KeyboardInterrupt(), 130, "interrupted; no file is left in"),
    ],
)
def test_a_run_that_stops_leaves_nothing(failure, code, message, tmp_path, capsys, monkeypatch):
    write, written = tifffile.imwrite, []

    def failing(path, *arguments, **options):
        if len(written) == 5:
            raise failure
        written.append(path)
        write(path, *arguments, **options)

    monkeypatch.setattr(demo.tifffile, "imwrite", failing)
    assert main(["demo", "--out", str(tmp_path / "new"), "--panels", "1", "--side", "16"]) == code
    out, err = capsys.readouterr()
    assert out == ""
    assert re.search(message, err)
    assert len(written) == 5
    assert list(tmp_path.iterdir()) == []
    # and the same command goes through once the cause is gone
    monkeypatch.undo()
    assert main(["demo", "--out", str(tmp_path / "new"), "--panels", "1", "--side", "16"]) == 0


def test_an_empty_folder_is_filled_where_it_stands(tmp_path, capsys, monkeypatch):
    (tmp_path / "real").mkdir(mode=0o700)
    (tmp_path / "link").symlink_to(tmp_path / "real")
    monkeypatch.chdir(tmp_path / "real")
    for out in (str(tmp_path / "link"), "."):
        assert main(["demo", "--out", out, "--panels", "1", "--side", "16"]) == 0
        found = sorted(path.name for path in (tmp_path / "real").iterdir())
        assert found == ["heights", "manifest.csv", "truth"]
        assert (tmp_path / "real").stat().st_mode & 0o777 == 0o700
        shutil.rmtree("heights")
        shutil.rmtree("truth")
        Path("manifest.csv").unlink()


def test_a_folder_below_a_file_is_told_apart(tmp_path, capsys):
    (tmp_path / "file").write_text("")
    assert main(["demo", "--out", str(tmp_path / "file" / "x"), "--side", "16"]) == 2
    assert "lies below a file; name a folder" in capsys.readouterr().err


def test_a_reader_that_goes_away_is_no_crash(tmp_path, capsys, monkeypatch):
    class Gone:
        def write(self, text):
            raise BrokenPipeError(32, "Broken pipe")

        flush = write

    monkeypatch.setattr("sys.stdout", Gone())
    assert main(["demo", "--out", str(tmp_path / "new"), "--panels", "1", "--side", "16"]) == 3
    assert "is written, but stdout failed" in capsys.readouterr().err


def test_folders_are_paths():
    for wrong in (None, 3, b"folder", ""):
        with pytest.raises(TypeError, match="folder must be a path; got"):
            write_demo(wrong)


@pytest.mark.parametrize(
    ("arguments", "message"),
    [
        ([], "COMMAND"),
        (["paint"], "invalid choice: 'paint'"),
        (["demo"], "--out"),
        (["demo", "--out", "x", "--panels", "many"], "invalid int value: 'many'"),
    ],
)
def test_unusable_arguments_exit_with_2(arguments, message, capsys):
    with pytest.raises(SystemExit) as stop:
        main(arguments)
    assert stop.value.code == 2
    assert message in capsys.readouterr().err


@pytest.mark.parametrize(
    ("option", "value", "message"),
    [
        ("--panels", "0", "panels must be >= 1 and <= 10000; got 0"),
        ("--side", "8", "side must be >= 16 and <= 16384; got 8"),
        ("--pitch", "-1", "pitch must be a finite number >= 0.01; got -1.0"),
        ("--seed", "-1", "seed must be >= 0 and <= 9223372036854775808; got -1"),
    ],
)
def test_unusable_values_exit_with_2_and_write_nothing(option, value, message, tmp_path, capsys):
    assert main(["demo", "--out", str(tmp_path / "new"), option, value]) == 2
    assert message in capsys.readouterr().err
    assert not (tmp_path / "new").exists()


def test_the_installed_command_knows_its_version_and_cautions():
    run = subprocess.run(
        [sys.executable, "-c", "from mfeat.cli import main; main()", "--version"],
        capture_output=True,
        text=True,
        check=True,
    )
    assert run.stdout == f"mfeat {mfeat.__version__}\n"


def test_help_carries_the_caution(capsys):
    with pytest.raises(SystemExit) as stop:
        main(["--help"])
    assert stop.value.code == 0
    assert "verdict is an aid" in capsys.readouterr().out

"""The command `mfeat compare`: exit codes, streams, and flags that mean what the call means."""

import inspect
import os
import subprocess
import sys

import numpy as np
import pytest
import toys
from toys import texture, write_textures

import mfeat
from mfeat import MinkowskiCurves, cli, comparing, read_comparison, storage
from mfeat.candidates import CLASSIFIERS
from mfeat.cli import build_parser, main
from mfeat.conditions import CONDITIONS
from mfeat.descriptors import DESCRIPTORS

SHORT = [
    *("--size", "16", "--train", "2", "--train", "4", "--test", "4", "--repeats", "2"),
    *("--jobs", "1", "--condition", "clean", "--classifier", "lda"),
]
GREY = ["--descriptor", "grey-histogram"]


@pytest.fixture
def folder(tmp_path):
    return write_textures(tmp_path / "images")


@pytest.fixture
def plain(monkeypatch):
    monkeypatch.setattr(comparing, "write_report", lambda found: {"report.html": b"plain"})


@pytest.fixture
def run(capsys):
    """Return a function that runs the command and returns its exit code, stdout and stderr."""

    def command(*arguments):
        capsys.readouterr()
        code = main(["compare", *map(str, arguments)])
        return code, *capsys.readouterr()

    return command


@pytest.fixture
def received(monkeypatch, run, tmp_path):
    """Return a function that runs the command and returns what `compare` is called with."""
    calls = []

    def fake(*positional, **named):
        calls.append(inspect.signature(mfeat.compare).bind(*positional, **named).arguments)
        raise ValueError("not now")

    monkeypatch.setattr(cli, "compare", fake)

    def command(*arguments):
        code, out, error = run("images", "--out", "results", *arguments)
        assert (code, out, error) == (2, "", "mfeat compare: not now\n")
        return calls.pop()

    return command


def test_stdout_holds_the_path_of_the_report_alone(folder, tmp_path, run):
    out = tmp_path / "out"
    code, stdout, stderr = run(folder, "--out", out, *SHORT, *GREY, "--descriptor", "co-occurrence")
    assert code == 0
    assert stdout == f"{out}/report.html\n"
    assert os.path.exists(stdout.strip())
    lines = [line for line in stderr.splitlines() if line.startswith("mfeat compare: ")]
    assert len(lines) == 1
    assert "grey-histogram: " in lines[0]
    assert "the best other, co-occurrence: " in lines[0]
    found = read_comparison(out)
    assert found.descriptors == ["grey-histogram", "co-occurrence"]
    assert (found.conditions, found.classifiers) == (["clean"], ["lda"])
    assert (found.sizes, found.train_sizes()) == ([(16, 16)], [2, 4])
    again = run(folder, "--out", out, *SHORT, *GREY, "--descriptor", "co-occurrence")
    assert again[:2] == (0, stdout)


def test_flags_are_the_parameters_of_the_call(received):
    given = received(
        *("--descriptor", "gabor", "--descriptor", "minkowski", "--ablation"),
        *("--condition", "noise", "--classifier", "svm", "--protocol", "halves"),
        *("--size", "32", "--size", "64x16", "--train", "3", "--train", "5", "--test", "7"),
        *("--patches", "40", "--repeats", "4", "--folds", "3", "--seed", "9"),
        *("--regions", "grid", "--label-from", "folder", "--truth-rule", "any"),
        *("--channel", "red", "--missing-value", "-1", "--max-pixels", "5000"),
        *("--jobs", "2", "--backend", "threading", "--fresh"),
    )
    assert given == {
        "source": "images", "out": "results", "descriptors": ["gabor", "minkowski"],
        "ablation": True, "conditions": ["noise"], "classifiers": ["svm"], "protocol": "halves",
        "size": [32, (64, 16)], "train": [3, 5], "test": 7, "patches": 40, "repeats": 4, "folds": 3,
        "seed": 9, "regions": "grid", "label_from": "folder", "truth_rule": "any",
        "channel": "red", "missing_value": -1.0, "max_pixels": 5000, "jobs": 2,
        "backend": "threading", "fresh": True,
    }  # fmt: skip
    # whatever the call can do the command can do, but for its progress bars
    known = set(inspect.signature(mfeat.compare).parameters) - {"progress"}
    assert set(given) | {"transformer"} == known


def test_without_flags_the_defaults_are_those_of_the_call(received):
    assert received() == {"source": "images", "out": "results", "ablation": False, "fresh": False}


def test_set_changes_our_vector(received):
    given = received("--set", "levels=8", "--set", "smooth=[1, 2]")
    assert (
        given["transformer"].get_params() == MinkowskiCurves(levels=8, smooth=[1, 2]).get_params()
    )


def test_choices_are_the_registries(capsys, monkeypatch):
    monkeypatch.setenv("COLUMNS", "1000")  # names are not broken at their hyphens
    with pytest.raises(SystemExit) as stop:
        main(["compare", "--help"])
    assert stop.value.code == 0
    text = " ".join(capsys.readouterr().out.split())
    for name in ("minkowski", *DESCRIPTORS, *CONDITIONS, *CLASSIFIERS):
        assert name in text
    parameters = inspect.signature(mfeat.compare).parameters
    [commands] = [a for a in build_parser()._actions if a.dest == "command"]
    told = 0
    for action in commands.choices["compare"]._actions:
        if action.dest in parameters and "(default " in (action.help or ""):
            said = action.help.split("(default ")[1].rstrip(")").split()[0]
            default = parameters[action.dest].default
            if isinstance(default, int) and said.isdigit():
                assert int(said) == default, action.dest
                told += 1
    assert told >= 4


@pytest.mark.parametrize(
    ("arguments", "text"),
    [
        (["--condition", "fog"], "invalid choice: 'fog'"),
        (["--classifier", "knn"], "invalid choice: 'knn'"),
        (["--protocol", "thirds"], "invalid choice: 'thirds'"),
        (["--backend", "dask"], "invalid choice: 'dask'"),
        (["--size", "big"], "'big' is neither a number of pixels nor ROWSxCOLUMNS"),
        (["--train", "few"], "invalid int value: 'few'"),
        (["--sizes"], "unrecognized arguments: --sizes"),
    ],
)
def test_what_the_parser_refuses(capsys, arguments, text):
    with pytest.raises(SystemExit) as stop:
        main(["compare", "images", "--out", "results", *arguments])
    assert stop.value.code == 2
    out, error = capsys.readouterr()
    assert out == ""
    assert text in error


def test_out_is_required(capsys):
    with pytest.raises(SystemExit) as stop:
        main(["compare", "images"])
    assert stop.value.code == 2
    assert "--out" in capsys.readouterr().err


@pytest.mark.parametrize(
    ("arguments", "text"),
    [
        (["--descriptor", "gabour"], "there is no descriptor 'gabour'; known are minkowski, grey-"),
        (["--descriptor", "nowhere_at_all:X"], "module 'nowhere_at_all' cannot be imported"),
        (["--descriptor", "math:tau"], "'math:tau' is 6.28"),
        (["--descriptor", "math:nothing"], "module 'math' has no attribute 'nothing'"),
        ([*GREY, *GREY], "descriptors holds a name twice"),
        (["--condition", "tilt"], "condition 'tilt' is for height images"),
        (["--repeats", "1"], "repeats must be >= 2; got 1"),
        (["--train", "1"], "train must be ascending numbers of patches a class"),
        (["--size", "200"], "size"),
        (["--jobs", "0"], "jobs must be >= 1"),
        (["--set", "nothing=3"], "MinkowskiCurves has no parameter ['nothing']"),
        (["--set", "levels"], "'levels' is not NAME=VALUE"),
        (["--ablation", *GREY], "must come first among the descriptors"),
        (["--protocol", "groups"], "no patch has a label"),
    ],
)
def test_what_cannot_be_compared_exits_with_2(folder, tmp_path, run, plain, arguments, text):
    own = GREY if "--descriptor" not in arguments else []
    code, out, error = run(folder, "--out", tmp_path / "out", *SHORT, *own, *arguments)
    assert (code, out) == (2, "")
    assert error.splitlines()[-1].startswith("mfeat compare: ")
    assert text in error
    assert not (tmp_path / "out").exists()


def test_other_refusals_exit_with_2(folder, tmp_path, run, plain, monkeypatch):
    out = tmp_path / "out"
    assert run(tmp_path / "nowhere", "--out", out, *SHORT)[0] == 2
    assert run(folder, "--out", out, *SHORT, *GREY)[0] == 0
    code, stdout, error = run(folder, "--out", out, *SHORT, *GREY, "--seed", "3")
    assert (code, stdout) == (2, "")
    assert "seed: 0 -> 3" in error
    assert "--fresh" in error
    assert run(folder, "--out", out, *SHORT, *GREY, "--seed", "3", "--fresh")[0] == 0
    assert run(folder, "--out", folder, *SHORT, *GREY)[0] == 2
    assert run(folder, "--out", folder / "texture0.npy", *SHORT, *GREY)[0] == 2
    with storage.output(str(tmp_path / "busy")).lock(f"{comparing.UNFINISHED}/lock"):
        code, _, error = run(folder, "--out", tmp_path / "busy", *SHORT, *GREY)
    assert code == 2
    assert "another run writes to" in error
    monkeypatch.setitem(sys.modules, "matplotlib.figure", None)
    code, stdout, error = run(folder, "--out", tmp_path / "new", *SHORT, *GREY)
    assert (code, stdout) == (2, "")
    assert "charts need matplotlib: python -m pip install" in error
    assert not (tmp_path / "new").exists()


@pytest.mark.parametrize(
    ("raised", "code", "text"),
    [
        (KeyboardInterrupt(), 130, "interrupted; what is finished is kept in"),
        (MemoryError("no room"), 3, "unforeseen error; what is finished is kept in"),
        (OSError("disk full"), 3, "disk full; what is finished is kept in"),
        (RuntimeError("a worker died"), 3, "a worker died; what is finished is kept in"),
        (KeyError("x"), 3, "stopped by an unforeseen error"),
    ],
    ids=lambda one: type(one).__name__,
)
@pytest.mark.parametrize("fresh", [False, True])
def test_what_stops_a_run(folder, tmp_path, run, plain, monkeypatch, raised, code, text, fresh):
    out = tmp_path / "out"
    arguments = [folder, "--out", out, *SHORT, *GREY, "--descriptor", "co-occurrence"]
    real = comparing.results_of

    def stops(name, *rest, **how):
        if name == "co-occurrence":
            raise raised
        return real(name, *rest, **how)

    with monkeypatch.context() as patch:
        patch.setattr(comparing, "results_of", stops)
        found, stdout, error = run(*arguments, *["--fresh"] * fresh)
    assert (found, stdout) == (code, "")
    assert text in error
    again = "the same command without --fresh goes on" if fresh else "the same command goes on"
    assert again in error.splitlines()[-1]
    assert (out / comparing.UNFINISHED / "comparison" / "part-00-000.parquet").exists()
    assert run(*arguments)[0] == 0


def test_changed_images_of_a_table_exit_with_3(folder, tmp_path, run, plain):
    np.save(folder / "texture3.npy", texture(5, 1.4))
    manifest = tmp_path / "list.csv"
    lines = [f"images/texture{k}.npy,{'ab'[k % 2]},g{k}" for k in range(4)]
    manifest.write_text("\n".join(["path,label,group", *lines]))
    table = tmp_path / "table"
    mfeat.dump(manifest, table, toys.small_curves(), size=16, jobs=1, progress=False)
    assert run(table, "--out", tmp_path / "out", *SHORT, *GREY)[0] == 0
    np.save(folder / "texture0.npy", texture(5, 1, (50, 50)))
    code, stdout, error = run(table, "--out", tmp_path / "other", *SHORT, *GREY)
    assert (code, stdout) == (3, "")
    assert "texture0.npy" in error


def test_a_module_of_the_current_folder(folder, tmp_path):
    """In a process of its own, as `sys.path` and the modules of this one are known already."""
    (tmp_path / "mine_only.py").write_text(
        "from sklearn.base import BaseEstimator, TransformerMixin\n"
        "class Means(TransformerMixin, BaseEstimator):\n"
        "    def fit(self, X, y=None):\n        return self\n"
        "    def transform(self, X):\n        return X.std(axis=(1, 2))[:, None] + 0.0\n"
        "def make():\n    return Means()\n"
    )
    environment = os.environ | {"PYTHONPATH": os.path.dirname(os.path.dirname(mfeat.__file__))}
    script = "import sys; from mfeat.cli import main; sys.path.remove(''); sys.exit(main())"
    done = subprocess.run(
        [sys.executable, "-c", script, "compare", "images", "--out", "out", *SHORT,
         "--descriptor", "mine_only:Means", "--descriptor", "mine_only:make"],
        cwd=tmp_path, env=environment, check=False, capture_output=True, text=True,
    )  # fmt: skip
    assert done.returncode == 0, done.stderr
    assert done.stdout == f"{tmp_path}/out/report.html\n"
    found = read_comparison(tmp_path / "out")
    assert found.descriptors == ["mine_only:Means", "mine_only:make"]
    assert found.failures() == []


def test_stdout_that_cannot_be_written(folder, tmp_path, run, plain, monkeypatch):
    class Full:
        def write(self, text):
            raise OSError("no space")

        def flush(self):
            raise OSError("no space")

    out = tmp_path / "out"
    monkeypatch.setattr(sys, "stdout", Full())
    code = main(["compare", str(folder), "--out", str(out), *SHORT, *GREY])
    assert code == 3
    assert (out / "comparison.json").exists()

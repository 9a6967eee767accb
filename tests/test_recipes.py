"""Recipes and benchmarks run, on small sizes, in an empty folder of their own."""

import importlib.util
from pathlib import Path

import pytest

ROOT = Path(__file__).parents[1]
RECIPES = {
    "panel_defects": ["--panels", "3", "--side", "256", "--size", "64", "--folds", "3"],
    "real_surfaces": ["--patches", "6", "--stride", "64"],
}
BENCHMARKS = {
    "speed_floor": [
        *["--rounds", "1", "--side", "16", "--patches", "2", "--sides", "32"],
        *["--levels", "8", "--no-cold"],
    ]
}


def load(folder, name):
    spec = importlib.util.spec_from_file_location(name, ROOT / folder / f"{name}.py")
    module = importlib.util.module_from_spec(spec)
    spec.loader.exec_module(module)
    return module


def test_every_recipe_and_benchmark_is_listed():
    for folder, known in (("recipes", RECIPES), ("benchmarks", BENCHMARKS)):
        found = {path.stem for path in (ROOT / folder).glob("*.py")}
        assert found == set(known)
        assert found  # neither folder is empty


def test_panel_defects(tmp_path, monkeypatch, capsys):
    monkeypatch.chdir(tmp_path)
    accuracy = load("recipes", "panel_defects").main(RECIPES["panel_defects"])
    out = capsys.readouterr().out
    assert accuracy > 0.35  # chance is 1/6; three small panels a class
    assert "macro avg" in out
    assert "verdict of a classifier is an aid" in out
    assert (tmp_path / "out" / "panel_defects.png").stat().st_size > 10_000


def test_real_surfaces(tmp_path, monkeypatch, capsys):
    monkeypatch.chdir(tmp_path)
    accuracies = load("recipes", "real_surfaces").main(RECIPES["real_surfaces"])
    assert accuracies["default vector"]["clean"] >= 0.9
    assert accuracies["without fields at pixel scale"]["blur"] >= 0.8
    assert list(accuracies["default vector"]) == [
        "clean", "light", "rotation", "noise", "blur", "zoom"
    ]  # fmt: skip
    assert "train: 96 patches" in capsys.readouterr().out


def test_speed_floor_compares_equal_answers(capsys):
    found = load("benchmarks", "speed_floor").main(BENCHMARKS["speed_floor"])
    assert all(low > 0 for low, _, _ in found["loop"].values())
    assert "times faster" in capsys.readouterr().out


def test_the_benchmark_stops_where_answers_differ(monkeypatch):
    module = load("benchmarks", "speed_floor")
    monkeypatch.setattr(module, "level_loop", lambda patch, levels: 0.0 * levels + [[1]] * 3)
    with pytest.raises(AssertionError):
        module.main(BENCHMARKS["speed_floor"])

"""Recipes and benchmarks run, on small sizes, in an empty folder of their own."""

import importlib.util
import sys
from pathlib import Path

import numpy as np
import pytest
from skimage import data

ROOT = Path(__file__).parents[1]
RECIPES = {
    "panel_defects": ["--panels", "3", "--side", "256", "--size", "64", "--folds", "3"],
    "real_surfaces": ["--patches", "6", "--stride", "64"],
    "folder_to_classifier": ["--panels", "3", "--side", "256", "--size", "64", "--folds", "3"],
    "compare_descriptors": [
        *["--panels", "3", "--side", "128", "--size", "32", "--repeats", "2", "--jobs", "1"],
    ],
    "dask_cluster": ["--panels", "1", "--side", "128", "--stride", "64"],
}
BENCHMARKS = {
    "speed_floor": [
        *["--rounds", "1", "--side", "16", "--patches", "2", "--sides", "32"],
        *["--levels", "8", "--no-cold"],
    ],
    "dump_endurance": ["--parts", "files", "--files", "60", "--side", "64"],
    "dump_throughput": ["--images", "2", "--side", "128", "--rounds", "1", "--jobs", "2"],
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
    assert accuracies["default vector"]["blur"] >= 0.8
    assert accuracies['scale_rule="fixed"']["noise"] >= 0.8
    assert list(accuracies["default vector"]) == [
        "clean", "light", "rotation", "noise", "blur", "zoom"
    ]  # fmt: skip
    assert "train: 96 patches" in capsys.readouterr().out


def test_compare_descriptors(tmp_path, monkeypatch, capsys):
    monkeypatch.chdir(tmp_path)
    monkeypatch.setattr("sys.path", sys.path.copy())
    monkeypatch.setenv("PYTHONPATH", "")  # restored afterwards: the recipe adds to it
    accuracies = load("recipes", "compare_descriptors").main(RECIPES["compare_descriptors"])
    assert set(accuracies) == {"minkowski", "height parameters", "filter bank"}
    assert max(accuracies.values()) > 1 / 6  # chance
    out = capsys.readouterr().out
    assert "compare_descriptors:HeightParameters" in out
    for made in ("from_python", "from_command"):
        assert (tmp_path / "out" / "compare_descriptors" / made / "report.html").exists()


def test_folder_to_classifier(tmp_path, monkeypatch, capsys):
    monkeypatch.chdir(tmp_path)
    recipe = load("recipes", "folder_to_classifier")
    accuracy = recipe.main(RECIPES["folder_to_classifier"])
    assert accuracy > 0.35  # chance is 1/6; three small panels a class
    out = capsys.readouterr().out
    assert "no image on both sides" in out
    assert "verdict of a classifier is an aid" in out
    # the second time the table is there
    assert recipe.main(RECIPES["folder_to_classifier"]) == accuracy
    assert "nothing was done" in capsys.readouterr().out


def test_folder_to_classifier_on_images_of_ones_own(tmp_path, monkeypatch, capsys):
    monkeypatch.chdir(tmp_path)
    for name, image in {"brick": data.brick(), "grass": data.grass()}.items():
        (tmp_path / "images" / name).mkdir(parents=True)
        for k in range(4):
            np.save(tmp_path / "images" / name / f"{k}.npy", image[128 * k : 128 * (k + 1), :256])
    arguments = ["images", "--label-from", "folder", "--size", "64", "--folds", "2"]
    assert load("recipes", "folder_to_classifier").main(arguments) > 0.9
    assert "brick" in capsys.readouterr().out


def test_dask_cluster(tmp_path, monkeypatch, capsys):
    monkeypatch.chdir(tmp_path)
    assert load("recipes", "dask_cluster").main(RECIPES["dask_cluster"]) == 24
    assert "bit for bit" in capsys.readouterr().out


def test_dump_endurance_loses_no_file(capsys):
    found = load("benchmarks", "dump_endurance").main(BENCHMARKS["dump_endurance"])["files"]
    assert found["files"] == 60
    assert 0 < found["damaged"] < 60
    assert "none in both" in capsys.readouterr().out


def test_dump_throughput_compares_both(capsys):
    found = load("benchmarks", "dump_throughput").main(BENCHMARKS["dump_throughput"])
    assert set(found) == {"png threading", "png loky", "tif threading", "tif loky"}
    assert all(ratio > 0 for ratios in found.values() for ratio in ratios)


def test_speed_floor_compares_equal_answers(capsys):
    found = load("benchmarks", "speed_floor").main(BENCHMARKS["speed_floor"])
    assert all(low > 0 for low, _, _ in found["loop"].values())
    assert "times faster" in capsys.readouterr().out


def test_the_benchmark_stops_where_answers_differ(monkeypatch):
    module = load("benchmarks", "speed_floor")
    monkeypatch.setattr(module, "level_loop", lambda patch, levels: 0.0 * levels + [[1]] * 3)
    with pytest.raises(AssertionError):
        module.main(BENCHMARKS["speed_floor"])

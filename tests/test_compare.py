"""`compare` from files to files: what it writes, resumes, refuses, and what does not matter."""

import json
import os
import re
import signal
import subprocess
import sys
import textwrap

import numpy as np
import pandas as pd
import pyarrow.parquet as pq
import pytest
import tifffile
import toys
from sklearn.preprocessing import FunctionTransformer
from toys import QUICK, Blind, Breaks, Nearest, Slopes, small_curves, texture, write_textures

import mfeat
from mfeat import compare, comparing, contests, dump, read_comparison, storage
from mfeat.contest import RESULTS_SCHEMA
from mfeat.costs import COSTS_SCHEMA
from mfeat.parts import InputChanged
from mfeat.publishing import OutputRefused
from mfeat.schema import UNFINISHED
from mfeat.storage import OutputInUse

NEAREST = {"classifiers": {"nearest": Nearest()}}
CLEAN = {"conditions": ["clean"]} | NEAREST
FILES = ["charts", "comparison.json", "costs.parquet", "report.html", "report.md",
         "results.parquet"]  # fmt: skip


@pytest.fixture
def plain(monkeypatch):
    """Leave the charts out, which take a second."""
    monkeypatch.setattr(comparing, "write_report", lambda found: {"report.md": b"plain"})


@pytest.fixture
def folder(tmp_path):
    return write_textures(tmp_path / "images")


def quick(source, out, descriptors=None, **how):
    descriptors = {"slopes": Slopes(), "blind": Blind()} if descriptors is None else descriptors
    return compare(source, out, descriptors, **QUICK | CLEAN | how)


def results_at(out):
    return pq.read_table(out / "results.parquet")


# What is written ---------------------------------------------------------------------------------


def test_all_files_are_written_and_read_back(folder, tmp_path):
    out = tmp_path / "out"
    descriptors = {"ours": small_curves(), "broken": Breaks("raise"), "slopes": Slopes()}
    found = compare(folder, out, descriptors, **QUICK)
    assert sorted(os.listdir(out)) == FILES
    conditions = ["clean", "light", "rotation", "noise", "blur", "zoom"]
    assert found.conditions == conditions
    table = results_at(out)
    assert table.schema.equals(RESULTS_SCHEMA)
    # descriptors, classifiers, conditions, training sizes, repeats
    assert table.num_rows == 3 * 2 * 6 * 2 * 2
    frame = pd.read_parquet(out / "results.parquet")
    whole = ["descriptor", "classifier", "condition", "train_size", "repeat", "fold"]
    assert not frame.duplicated(whole).any()
    assert (frame.groupby("descriptor").size() == 48).all()
    assert (frame["n_train"] == 3 * frame["train_size"]).all()
    assert (frame["n_test"] == 3 * 4).all()
    broken = frame[frame["descriptor"] == "broken"]
    assert (broken["failure"] == "ValueError: cannot be transformed").all()
    assert broken[["accuracy", "balanced_accuracy"]].isna().all(axis=None)
    assert frame[frame["descriptor"] != "broken"]["failure"].isna().all()
    costs = pq.read_table(out / "costs.parquet")
    assert costs.schema.equals(COSTS_SCHEMA)
    assert costs["descriptor"].to_pylist() == list(descriptors)
    about = json.loads((out / "comparison.json").read_text())
    assert about["reference"] == "ours"
    assert about["kind"] == "grey"
    assert about["classes"] == ["texture0.npy", "texture1.npy", "texture2.npy"]
    assert about["record"]["mfeat_version"] == mfeat.__version__
    assert about["record"]["train"] == [2, 4]
    [size] = about["sizes"]
    assert (size["splits"], size["classes"], size["train_sizes"]) == (2, 3, [2, 4])
    assert size["ratio"] == 1.0  # four tested, four trained
    again = read_comparison(out)
    assert again.results.equals(found.results)
    assert again.costs.equals(found.costs)
    assert again.about == found.about == about
    for text in ((out / "report.md").read_text(), (out / "report.html").read_text()):
        assert "ValueError: cannot be transformed" in text


def test_groups_of_labelled_images(tmp_path, plain):
    for k in range(6):
        place = tmp_path / "images" / f"class{k % 2}"
        place.mkdir(parents=True, exist_ok=True)
        np.save(place / f"part{k}.npy", texture(k, 0.6 + k % 2, (48, 48)))
    found = quick(tmp_path / "images", tmp_path / "out", label_from="folder", patches=12)
    assert found.about["record"]["protocol"] == "groups"
    assert found.about["classes"] == ["class0", "class1"]
    frame = found.results.to_pandas()
    assert found.about["sizes"][0]["patches"] == 24
    assert found.about["sizes"][0]["groups"] == 6
    slopes = frame[(frame["descriptor"] == "slopes") & (frame["train_size"] == 4)]
    assert len(slopes) == 2 * 3  # repeats and folds: a class has three groups
    assert slopes.groupby("repeat")["n_test"].sum().tolist() == [24, 24]
    assert slopes["balanced_accuracy"].mean() > 0.9


def test_a_manifest_and_truth_images(tmp_path, plain):
    for k in range(4):
        image = np.hstack([texture(k, 0.6, (48, 48)), texture(k, 2.0, (48, 48))])
        np.save(tmp_path / f"part{k}.npy", image)
        truth = np.zeros((48, 96), np.uint8)
        truth[:, 48:] = 7
        tifffile.imwrite(tmp_path / f"truth{k}.tif", truth)
    lines = [f"part{k}.npy,g{k // 2},truth{k}.tif" for k in range(4)]
    manifest = tmp_path / "list.csv"
    manifest.write_text("\n".join(["path,group,truth", *lines]))
    found = quick(manifest, tmp_path / "out", label_from="truth", patches=8)
    assert found.about["classes"] == ["0", "7"]
    assert found.about["sizes"][0]["groups"] == 2
    frame = found.results.to_pandas()
    assert set(frame["fold"]) == {0, 1}
    slopes = frame[(frame["descriptor"] == "slopes") & (frame["train_size"] == 4)]
    assert slopes["accuracy"].mean() > 0.9

    labelled = tmp_path / "labelled.csv"
    lines = [f"part{k}.npy,{'rough' if k % 2 else 'fine'},g{k}" for k in range(4)]
    labelled.write_text("\n".join(["path,label,group", *lines]))
    assert quick(labelled, tmp_path / "other").about["classes"] == ["fine", "rough"]


def test_height_maps_with_missing_pixels(tmp_path, plain):
    place = tmp_path / "images"
    place.mkdir()
    for k in range(3):
        heights = texture(k, 0.6 + 0.8 * k, dtype=np.float32)
        heights[10:12, 20:30] = np.nan
        tifffile.imwrite(place / f"h{k}.tif", heights)
    descriptors = {"ours": small_curves(), "grey-histogram": mfeat_descriptor("grey-histogram"),
                   "own": Breaks("missing")}  # fmt: skip
    found = quick(place, tmp_path / "out", descriptors, conditions=None)
    assert found.about["kind"] == "height"
    assert found.conditions == ["clean", "rotation", "noise", "blur", "zoom", "tilt", "dropouts"]
    assert {name for name, *_ in found.failures()} == {"own"}
    assert {condition for _, condition, *_ in found.failures()} == set(found.conditions)
    with pytest.raises(ValueError, match="condition 'light' is for grey images, these are height"):
        quick(place, tmp_path / "no", conditions=["light"])


def mfeat_descriptor(name):
    from mfeat.descriptors import DESCRIPTORS

    return DESCRIPTORS[name]()


def test_several_sizes(folder, tmp_path):
    found = quick(folder, tmp_path / "out", size=[16, (12, 20)], train=None)
    assert found.sizes == [(16, 16), (12, 20)]
    frame = found.results.to_pandas()
    counts = frame.groupby(["descriptor", "patch_rows", "patch_cols"]).size()
    assert counts.index.tolist() == [
        (name, *size) for name in ("blind", "slopes") for size in ((12, 20), (16, 16))
    ]
    for size in found.sizes:
        own = frame[(frame["patch_rows"] == size[0]) & (frame["descriptor"] == "slopes")]
        assert sorted(set(own["train_size"])) == found.train_sizes(size)
        wanted = own[own["train_size"] == found.train_sizes(size)[-1]]["balanced_accuracy"].mean()
        assert found.accuracy("slopes", size=size).mean == pytest.approx(wanted)
        assert found.cost("blind", size)["patch_cols"] == size[1]
    assert "12x20" in (tmp_path / "out" / "report.md").read_text()
    assert (tmp_path / "out" / "charts" / "patch-size.svg").exists()


def test_a_table_made_by_dump_is_a_source(tmp_path, plain):
    place = tmp_path / "images"
    for k in range(6):
        (place / f"class{k % 2}").mkdir(parents=True, exist_ok=True)
        np.save(place / f"class{k % 2}" / f"part{k}.npy", texture(k, 0.6 + k % 2, (48, 48)))
    table = tmp_path / "table"
    dump(place, table, small_curves(), size=16, label_from="folder", jobs=1, progress=False)
    names = ["minkowski", "grey-histogram"]
    found = quick(table, tmp_path / "out", names, patches=12)
    direct = quick(place, tmp_path / "direct", names, transformer=small_curves(), patches=12,
                   label_from="folder")  # fmt: skip
    assert found.results.equals(direct.results)
    with pytest.raises(ValueError, match=r"is a table.*leave out truth_rule, channel"):
        quick(table, tmp_path / "no", names, truth_rule="any", channel="red")
    np.save(place / "class0" / "part0.npy", texture(9, 1, (50, 50)))
    with pytest.raises(InputChanged, match=r"part0\.npy"):
        quick(table, tmp_path / "changed", names, patches=12)


def test_the_output_may_lie_in_the_source(folder, plain):
    out = folder / "results"
    found = quick(folder, out)
    assert found.about["classes"] == ["texture0.npy", "texture1.npy", "texture2.npy"]
    assert quick(folder, out).results.equals(found.results)
    with pytest.raises(OutputRefused, match="holds other files"):
        quick(folder, folder)


def test_unreadable_images_are_left_out_and_named(folder, tmp_path):
    (folder / "notes.txt").write_text("no image")
    (folder / "torn.png").write_bytes(b"\x89PNG\r\n\x1a\n torn")
    found = quick(folder, tmp_path / "out")
    left_out = dict(found.about["sizes"][0]["left_out"])
    assert set(left_out) == {"notes.txt", "torn.png"}
    text = (tmp_path / "out" / "report.md").read_text()
    for name, reason in left_out.items():
        assert name in text
        assert reason.split(":")[0] in text


def test_ablation_varies_the_first(folder, tmp_path):
    few = small_curves(
        **{"basis": "levels", "level_rule": "rank", "functionals": ("area", "euler")},
        scale_rule="fixed", separate_scale=False, levels=(0.2, 0.5),
    )  # fmt: skip
    found = quick(folder, tmp_path / "out", ["minkowski"], transformer=few, ablation=True)
    assert found.rivals == ["minkowski"]
    assert "minkowski: without euler" in found.variants
    frame = found.results.to_pandas()
    variants = frame[frame["descriptor"] != "minkowski"]
    assert set(variants["train_size"]) == {4}
    assert (variants.groupby("descriptor").size() == 2).all()
    assert set(variants["descriptor"]) == set(found.variants)
    assert (tmp_path / "out" / "charts" / "ablation.png").exists()
    for names in (["grey-histogram", "minkowski"], {"ours": small_curves()}):
        with pytest.raises(ValueError, match="must come first among the descriptors; got"):
            quick(folder, tmp_path / "no", names, ablation=True)
    again = quick(folder, tmp_path / "out", ["minkowski"], fresh=True)
    assert again.variants == []
    charts = os.listdir(tmp_path / "out" / "charts")
    assert "ablation.png" not in charts  # charts of the old report are gone
    assert "accuracy-by-condition.png" in charts


# What does not matter, and what does --------------------------------------------------------------


def test_the_order_and_the_company_do_not_matter(folder, tmp_path, plain):
    many = {"slopes": Slopes(), "blind": Blind(), "spy": toys.Writes(), "ours": small_curves()}
    orders = [["slopes"], ["ours", "blind", "slopes", "spy"], ["spy", "slopes"]]
    found = [
        quick(folder, tmp_path / f"out{k}", {name: many[name] for name in order}, conditions=None)
        for k, order in enumerate(orders)
    ]
    own = [one.results.to_pandas().query("descriptor == 'slopes'") for one in found]
    for other in own[1:]:
        pd.testing.assert_frame_equal(own[0].reset_index(drop=True), other.reset_index(drop=True))


@pytest.mark.parametrize(("jobs", "backend"), [(2, "threading"), (2, "loky")])
def test_workers_do_not_matter(folder, tmp_path, plain, jobs, backend):
    names = {"slopes": Slopes(), "blind": Blind(), "ours": small_curves()}
    alone = quick(folder, tmp_path / "one", names, conditions=["noise"])
    many = quick(folder, tmp_path / "two", names, conditions=["noise"], jobs=jobs, backend=backend)
    assert many.results.equals(alone.results)


def test_the_seed_matters(folder, tmp_path, plain):
    one, same, other = (
        quick(folder, tmp_path / f"out{k}", {"blind": Blind()}, seed=seed)
        for k, seed in enumerate((1, 1, 2))
    )
    assert one.results.equals(same.results)
    assert not one.results.equals(other.results)


def test_a_better_descriptor_is_found_and_a_twin_is_not(folder, tmp_path, plain):
    names = {"slopes": Slopes(), "twin": Slopes(), "blind": Blind()}
    found = quick(folder, tmp_path / "out", names, repeats=6)
    tests = {(t.descriptor, t.condition): t for t in found.against_reference(names)}
    twin, blind = tests["twin", "mean"], tests["blind", "mean"]
    assert twin.difference == (0.0, 0.0, 0.0, 0.0, 1.0)
    assert twin.adjusted_p == 1.0
    assert blind.difference.mean > 0.3
    assert blind.adjusted_p < 0.05
    assert abs(found.accuracy("blind").mean - 1 / 3) < 4 * np.sqrt(2 / 9 / (6 * 12))


# Resuming ----------------------------------------------------------------------------------------


class Stops(Slopes):
    """Raises `KeyboardInterrupt` as long as `armed`."""

    armed = True

    def transform(self, X):
        if Stops.armed:
            raise KeyboardInterrupt
        return super().transform(X)


THREE = {"a": Slopes(), "b": Stops(), "c": Blind()}


def interrupted(folder, out, names=THREE, **how):
    Stops.armed = True
    with pytest.raises(KeyboardInterrupt):
        quick(folder, out, names, **how)
    Stops.armed = False


def counted(monkeypatch):
    """Return a list of the names of candidates that are computed from now on."""
    done, real = [], comparing.results_of

    def spy(name, *arguments, **how):
        done.append(name)
        return real(name, *arguments, **how)

    monkeypatch.setattr(comparing, "results_of", spy)
    return done


def test_an_interrupted_call_goes_on(folder, tmp_path, plain, monkeypatch):
    out = tmp_path / "out"
    done = counted(monkeypatch)
    interrupted(folder, out)
    assert done == ["a", "b"]
    assert os.listdir(out) == [UNFINISHED]
    assert os.listdir(out / UNFINISHED) == ["comparison"]
    assert sorted(os.listdir(out / UNFINISHED / "comparison")) == [
        "part-00-000.parquet",
        "record.json",
    ]
    with pytest.raises(FileNotFoundError, match="holds no complete comparison"):
        read_comparison(out)
    done.clear()
    found = quick(folder, out, THREE)
    assert done == ["b", "c"]
    whole = quick(folder, tmp_path / "whole", THREE)
    assert found.results.equals(whole.results)
    assert found.about == whole.about
    assert UNFINISHED not in os.listdir(out)
    done.clear()
    before = {name: os.stat(out / name).st_mtime_ns for name in os.listdir(out)}
    assert quick(folder, out, THREE).results.equals(found.results)
    assert done == []
    assert {name: os.stat(out / name).st_mtime_ns for name in os.listdir(out)} == before


def test_a_killed_process_is_resumed(folder, tmp_path, plain):
    """The process kills itself in the second candidate; the next finishes the work."""
    script = textwrap.dedent(
        """
        import os, signal, sys
        import toys
        from mfeat import compare
        sys.modules["mfeat.comparing"].write_report = lambda found: {"report.md": b"plain"}
        source, out, kill = sys.argv[1:]
        class Kills(toys.Slopes):
            def transform(self, X):
                if kill == "yes":
                    os.kill(os.getpid(), signal.SIGKILL)
                return super().transform(X)
        function = toys.Calls(toys.Slopes().transform)
        names = {"a": toys.Slopes(), "b": Kills(), "c": toys.Blind(), "d": function}
        compare(source, out, names, **toys.QUICK, conditions=["noise"], classifiers=["lda"])
        """
    )
    environment = os.environ | {"PYTHONPATH": os.pathsep.join(p for p in sys.path if p)}
    out = tmp_path / "out"

    def run(kill):
        command = [sys.executable, "-c", script, str(folder), str(out), kill]
        return subprocess.run(command, env=environment, check=False, capture_output=True, text=True)

    assert run("yes").returncode == -signal.SIGKILL
    parts = out / UNFINISHED / "comparison"
    assert (parts / "part-00-000.parquet").exists()
    assert not (parts / "part-00-001.parquet").exists()
    (parts / "part-00-002.parquet.abc.tmp").write_bytes(b"half a part")
    done = run("no")
    assert done.returncode == 0, done.stderr
    assert sorted(os.listdir(out)) == [
        "comparison.json", "costs.parquet", "report.md", "results.parquet",
    ]  # fmt: skip
    names = {"a": Slopes(), "b": Slopes(), "c": Blind(), "d": Slopes()}
    whole = quick(folder, tmp_path / "whole", names, conditions=["noise"], classifiers=["lda"])
    assert results_at(out).equals(whole.results)


@pytest.mark.parametrize("at", ["results.parquet", "report.md", "comparison.json", "last"])
def test_a_run_interrupted_while_results_appear_goes_on(folder, tmp_path, plain, monkeypatch, at):
    out = tmp_path / "out"
    real_move, real_tree = storage.LocalStorage.move, storage.LocalStorage.remove_tree

    def move(self, name, target):
        if target == at:
            raise KeyboardInterrupt
        real_move(self, name, target)

    def remove_tree(self, folder):
        if at == "last" and (self.root / "comparison.json").exists():
            raise KeyboardInterrupt
        real_tree(self, folder)

    with monkeypatch.context() as patch:
        patch.setattr(storage.LocalStorage, "move", move)
        patch.setattr(storage.LocalStorage, "remove_tree", remove_tree)
        with pytest.raises(KeyboardInterrupt):
            quick(folder, out)
    found = quick(folder, out)
    assert found.results.equals(quick(folder, tmp_path / "whole").results)
    assert UNFINISHED not in os.listdir(out)


def test_other_settings_are_refused_with_the_differences(folder, tmp_path, plain):
    out = tmp_path / "out"
    interrupted(folder, out)
    for change, text in (
        ({"seed": 3}, "seed: 0 -> 3"),
        ({"repeats": 3}, "repeats: 2 -> 3"),
        ({"conditions": ["noise"]}, 'conditions: ["clean"] -> ["noise"]'),
        ({"size": 12}, "sizes: "),
        ({"classifiers": ["lda"]}, "classifiers.lda: "),
        ({"missing_value": 3}, "reading.missing_value: null -> 3.0"),
        ({"descriptors": THREE | {"a": Slopes(True)}}, "doubled=False.*doubled=True"),
        ({"descriptors": dict(reversed(THREE.items()))}, r'order: \["a", "b", "c"\] -> \["c"'),
    ):
        call = {"descriptors": THREE} | change
        pattern = text if "*" in text or "\\" in text else re.escape(text)
        with pytest.raises(OutputRefused, match=f"(?s)an interrupted comparison.*{pattern}"):
            quick(folder, out, **call)
    found = quick(folder, out, THREE)
    with pytest.raises(OutputRefused, match=r"(?s)holds a comparison of other.*seed.*--fresh"):
        quick(folder, out, THREE, seed=3)
    with pytest.raises(OutputRefused, match="order: "):  # another reference
        quick(folder, out, dict(reversed(THREE.items())))
    assert results_at(out).equals(found.results)
    anew = quick(folder, out, THREE, seed=3, fresh=True)
    assert anew.results.equals(quick(folder, tmp_path / "whole", THREE, seed=3).results)


def test_fresh_leaves_the_old_results_until_the_new_are_complete(folder, tmp_path, plain):
    out = tmp_path / "out"
    Stops.armed = False
    old = quick(folder, out, THREE)
    interrupted(folder, out, seed=5, fresh=True)
    assert read_comparison(out).results.equals(old.results)
    Stops.armed = False
    found = quick(folder, out, THREE, seed=5)  # goes on without fresh
    assert found.about["record"]["seed"] == 5
    with pytest.raises(ValueError, match="size"):
        quick(folder, out, THREE, size=99, fresh=True)
    assert read_comparison(out).results.equals(found.results)


def test_parts_without_a_record_are_not_taken_for_results(folder, tmp_path, plain):
    """As when a process is killed while it deletes what `fresh` replaces."""
    out = tmp_path / "out"
    names = {"c": Blind(), "b": Stops()}
    interrupted(folder, out, names, seed=9)
    (out / UNFINISHED / "comparison" / "record.json").unlink()
    found = quick(folder, out, names)
    assert found.results.equals(quick(folder, tmp_path / "whole", names).results)


def test_changed_images_are_noticed(folder, tmp_path, plain):
    out = tmp_path / "out"
    interrupted(folder, out)
    np.save(folder / "texture1.npy", texture(8, 1.0, (100, 96)))
    with pytest.raises(OutputRefused, match=r"changed: texture1\.npy \(size or time\)"):
        quick(folder, out, THREE)
    quick(folder, out, THREE, fresh=True)
    np.save(folder / "texture7.npy", texture(8, 1.0))
    with pytest.raises(OutputRefused, match=r"inputs added: texture7\.npy"):
        quick(folder, out, THREE)


def test_changed_regions_and_labels_are_noticed(folder, tmp_path, plain):
    manifest, out = tmp_path / "list.csv", tmp_path / "out"

    def regions(row, label="x"):
        lines = [f"texture{k}.npy,{row},0,64,96,{label}{k},{k}" for k in range(3)]
        head = "path,row,col,height,width,label,group"
        text = "\n".join([head, *lines]).replace("texture", "images/texture")
        manifest.write_text(text)

    regions(0)
    how = {"protocol": "halves"}
    quick(manifest, out, **how)
    regions(16)
    with pytest.raises(OutputRefused, match="inputs removed: images/texture0"):
        quick(manifest, out, **how)
    regions(0, "y")
    with pytest.raises(OutputRefused, match=r"changed: images/texture0\.npy \(label\)"):
        quick(manifest, out, **how)


def test_a_second_run_is_kept_out(folder, tmp_path, plain):
    out = tmp_path / "out"
    with (
        storage.output(str(out)).lock(f"{UNFINISHED}/lock"),
        pytest.raises(OutputInUse, match="another run writes to"),
    ):
        quick(folder, out)
    assert not out.exists()
    quick(folder, out)


def test_other_files_are_left_alone(folder, tmp_path, plain):
    out = tmp_path / "out"
    out.mkdir()
    (out / "thesis.txt").write_text("precious")
    for how in ({}, {"fresh": True}):
        with pytest.raises(OutputRefused, match=r"holds other files, e\.g\. thesis\.txt"):
            quick(folder, out, **how)
    assert os.listdir(out) == ["thesis.txt"]
    table = tmp_path / "table"
    dump(folder, table, small_curves(), size=16, jobs=1, progress=False)
    with pytest.raises(OutputRefused, match="holds other files"):
        quick(folder, table)


def test_functions_are_the_same_in_another_process(folder, tmp_path, plain, monkeypatch):
    """Their text holds an address, which another process would not have."""
    one = FunctionTransformer(lambda X: X)
    other = FunctionTransformer(lambda X: X)
    assert repr(one.func) != repr(other.func)
    assert contests._described(one) == contests._described(other)
    long = np.arange(5000.0)
    short = long.copy()
    short[2500] += 1e-12
    texts = [contests._described(Slopes(doubled=values)) for values in (long, short, long.copy())]
    assert texts[0] != texts[1]
    assert texts[0] == texts[2]


# What is refused ----------------------------------------------------------------------------------


@pytest.mark.parametrize(
    ("how", "error", "text"),
    [
        ({"descriptors": ["minkowsky"]}, ValueError, "no descriptor 'minkowsky'.*power-spectrum"),
        ({"descriptors": []}, ValueError, "descriptors is empty; known are minkowski, grey"),
        ({"descriptors": {"a": Slopes}}, TypeError, "'a' must be a scikit-learn transformer"),
        ({"descriptors": ["nowhere.at.all:X"]}, ImportError, "module 'nowhere.at.all' cannot be"),
        ({"conditions": ["fog"]}, ValueError, "conditions must be one of 'clean', 'light'.*'fog'"),
        ({"conditions": "noise"}, TypeError, "conditions must be a list of names; got 'noise'"),
        ({"conditions": ["tilt"]}, ValueError, "'tilt' is for height images, these are grey"),
        ({"classifiers": ["knn"]}, ValueError, "classifiers must be one of 'lda', 'svm'.*'knn'"),
        ({"classifiers": []}, ValueError, "classifiers is empty; known are lda, svm"),
        ({"classifiers": {"a": Nearest}}, TypeError, "classifier 'a' must be a scikit-learn"),
        ({"classifiers": {"a": object()}}, TypeError, "classifier 'a' must be a scikit-learn"),
        ({"protocol": "thirds"}, ValueError, "protocol must be one of 'halves', 'groups'"),
        ({"protocol": "groups"}, ValueError, "no patch has a label; name where labels come from"),
        ({"size": 90}, ValueError, "3 images too small for two patches of 90x90 pixels"),
        ({"size": []}, ValueError, "size is an empty list"),
        ({"size": [16, (16, 16)]}, ValueError, "size holds a size twice"),
        ({"size": 16.5}, TypeError, "size"),
        ({"train": (4, 2)}, ValueError, r"train must be ascending numbers.*\(4, 2\)"),
        ({"train": (2, 2)}, ValueError, "train must be ascending"),
        ({"train": ()}, ValueError, "train must be ascending"),
        ({"train": (0,)}, ValueError, r"train\[0\] must be >= 1"),
        ({"train": (2.0,)}, TypeError, r"train\[0\] must be an integer"),
        ({"train": 4.0}, TypeError, "train must be numbers of patches a class; got 4.0"),
        ({"train": "4"}, TypeError, "train must be numbers of patches a class; got '4'"),
        ({"train": (999,)}, ValueError, "asks for 999 patches a class, but class 'texture0"),
        ({"test": 1}, ValueError, "test must be >= 2"),
        ({"test": None}, TypeError, "test must be an integer"),
        ({"repeats": 1}, ValueError, "repeats must be >= 2; got 1"),
        ({"repeats": True}, TypeError, "repeats must be an integer"),
        ({"folds": 1}, ValueError, "folds must be >= 2"),
        ({"patches": 1}, ValueError, "patches must be >= 2"),
        ({"seed": -1}, ValueError, "seed must be >= 0"),
        ({"jobs": 0}, ValueError, "jobs must be >= 1, or <= -1"),
        ({"backend": "dask"}, ValueError, "backend must be one of 'threading', 'loky'"),
        ({"transformer": Slopes()}, TypeError, "transformer must be a MinkowskiCurves"),
        ({"label_from": "moon"}, ValueError, "label_from must be one of"),
        ({"source": "nowhere"}, FileNotFoundError, "nowhere does not exist"),
    ],
    ids=lambda one: re.sub(" at 0x[0-9a-f]+", "", str(one)),
)  # fmt: skip
def test_what_cannot_be_compared_is_refused_and_leaves_no_trace(
    folder, tmp_path, plain, how, error, text
):
    arguments = {"source": folder} | how
    with pytest.raises(error, match=f"(?s){text}"):
        quick(out=tmp_path / "out", **arguments)
    assert not (tmp_path / "out").exists()
    quick(folder, tmp_path / "out")  # the next call is not held up by the failed one


def test_too_few_classes_patches_and_groups(folder, tmp_path, plain):
    with pytest.raises(ValueError, match="two images at least are needed; found 1 class"):
        quick(folder / "texture0.npy", tmp_path / "out")
    manifest = tmp_path / "list.csv"
    manifest.write_text("path,label\nimages/texture0.npy,a\nimages/texture1.npy,b\n")
    with pytest.raises(ValueError, match="classes 'a', 'b' have patches of one group only"):
        quick(manifest, tmp_path / "out")
    manifest.write_text(
        "path,label\nimages/texture0.npy,a\nimages/texture1.npy,b\nimages/texture2.npy,a\n"
    )
    with pytest.raises(ValueError, match="classes 'b' have patches of one group only"):
        quick(manifest, tmp_path / "out")
    four = "".join(f"images/texture{k}.npy,{'ab'[k % 2]}\n" for k in range(4))
    np.save(folder / "texture3.npy", texture(3, 1.0))
    manifest.write_text("path,label\n" + four)
    with pytest.raises(ValueError, match="folds=3, but class 'a' has 2 groups"):
        quick(manifest, tmp_path / "out", folds=3)
    with pytest.raises(ValueError, match=r"train asks for 30 patches .* class '[ab]' has \d+ on"):
        quick(manifest, tmp_path / "out", train=(30,), patches=40)
    assert not (tmp_path / "out").exists()


def test_without_matplotlib_nothing_is_begun(folder, tmp_path, monkeypatch):
    monkeypatch.setitem(sys.modules, "matplotlib.figure", None)
    with pytest.raises(ImportError, match="charts need matplotlib: python -m pip install"):
        quick("no/such/source", tmp_path / "out")
    assert not (tmp_path / "out").exists()

"""One candidate in a contest: every result against a plain loop, and whatever can go wrong."""

import re
import time
from dataclasses import replace

import numpy as np
import pyarrow as pa
import pytest
import toys
from sklearn.base import clone
from sklearn.metrics import accuracy_score, balanced_accuracy_score
from sklearn.neighbors import KNeighborsClassifier
from toys import Breaks, Nearest, QuietSpy, Slopes, Spy, contest_of, small_curves

from mfeat.candidates import classifiers_of, lda
from mfeat.conditions import CONDITIONS, generator_for
from mfeat.contest import RESULTS_SCHEMA, Contest, results_of, together
from mfeat.costs import COSTS_SCHEMA, measure_costs
from mfeat.descriptors import DESCRIPTORS
from mfeat.trials import Split, grouped_splits

ONE = {"nearest": Nearest()}


def rows_of(*arguments, **how):
    return results_of(*arguments, **how).to_pylist()


def nameless(table):
    return table.drop_columns(["descriptor"])


def test_every_result_is_that_of_a_plain_loop():
    contest = contest_of(classifiers_of(["lda", "svm"]))
    rows = rows_of("slopes", Slopes(), contest)
    expected = []
    for split in contest.splits:
        for size in contest.train_sizes:
            train = np.concatenate([own[:size] for own in split.train])
            given = Slopes().transform([contest.scenes[k].patch for k in train])
            for name, classifier in contest.classifiers.items():
                model = clone(classifier).fit(given, contest.labels[train])
                for condition in contest.conditions:
                    change = CONDITIONS[condition].change
                    changed = [
                        change(contest.scenes[k], generator_for(contest.seed, condition, int(k)))
                        for k in split.test
                    ]
                    truth = contest.labels[split.test]
                    answer = model.predict(Slopes().transform(changed))
                    expected.append({
                        "descriptor": "slopes", "classifier": name, "condition": condition,
                        "patch_rows": 16, "patch_cols": 16, "train_size": size,
                        "repeat": split.repeat, "fold": split.fold, "n_train": 3 * size,
                        "n_test": 12, "accuracy": accuracy_score(truth, answer),
                        "balanced_accuracy": balanced_accuracy_score(truth, answer),
                        "n_features": 3, "failure": None,
                    })  # fmt: skip
    assert len(rows) == len(expected) == 2 * 2 * 2 * 2
    for found, wanted in zip(rows, expected, strict=True):
        for number in ("accuracy", "balanced_accuracy"):
            assert found.pop(number) == pytest.approx(wanted.pop(number), abs=1e-12)
        assert found == wanted


def test_the_table_has_the_schema_and_only_the_largest_size_if_asked():
    contest = contest_of(ONE)
    everything = results_of("a", Slopes(), contest)
    assert everything.schema.equals(RESULTS_SCHEMA)
    largest = results_of("a", Slopes(), contest, largest_only=True)
    wanted = everything.filter(pa.compute.equal(everything["train_size"], 4))
    assert largest.equals(wanted)
    assert largest.num_rows == 4


def test_a_training_size_that_no_class_reaches_is_not_repeated():
    contest = contest_of(ONE, sizes=(2, 4))
    again = replace(contest, train_sizes=(2, 4, 8))  # the splits have four a class
    assert results_of("a", Slopes(), again).equals(results_of("a", Slopes(), contest))


def test_twins_have_equal_results():
    contest = contest_of(classifiers_of(["lda", "svm"]))
    one, other = (results_of(name, small_curves(), contest) for name in ("one", "other"))
    assert nameless(one).equals(nameless(other))
    assert set(one["descriptor"].to_pylist()) == {"one"}


@pytest.mark.parametrize(
    "transformer", [small_curves(), Slopes(), Spy()], ids=["curves", "slopes", "spy"]
)
def test_results_do_not_depend_on_who_went_before(transformer):
    contest = contest_of(ONE)
    Spy.seen = []
    alone = results_of("a", transformer, contest)
    for other in (Breaks("raise"), toys.Writes(), DESCRIPTORS["gabor"]()):
        results_of("b", other, contest)
    assert results_of("a", transformer, contest).equals(alone)


def test_a_candidate_that_writes_into_patches_of_two_types_harms_nobody():
    contest = contest_of(ONE)
    wide = [
        scene if k % 2 else scene._replace(region=scene.region.astype(np.uint16))
        for k, scene in enumerate(contest.scenes)
    ]
    contest = replace(contest, scenes=wide)
    before = results_of("a", Slopes(), contest)
    pixels = [scene.region.copy() for scene in wide]
    assert results_of("b", toys.Writes(), contest)["failure"].null_count == 8
    for scene, old in zip(wide, pixels, strict=True):
        np.testing.assert_array_equal(scene.region, old)
    assert results_of("a", Slopes(), contest).equals(before)


def test_seeds_decide():
    first = results_of("a", Slopes(), contest_of(ONE, seed=1))
    assert results_of("a", Slopes(), contest_of(ONE, seed=1)).equals(first)
    contest = contest_of(ONE, conditions=("clean", "noise", "light"), seed=1)
    other = replace(contest, seed=2)  # same patches and splits, other noise and light
    one, two = (rows_of("a", Slopes(), c) for c in (contest, other))
    same = {
        name: [a["balanced_accuracy"] for a in one if a["condition"] == name]
        == [b["balanced_accuracy"] for b in two if b["condition"] == name]
        for name in contest.conditions
    }
    assert same["clean"]
    assert not all(same.values())


# What goes wrong ------------------------------------------------------------------------------

BROKEN = {
    "raise": "ValueError: cannot be transformed",
    "fit": "RuntimeError: cannot be fitted",
    "nan": r"NaN or infinite features of \d+ of \d+ patches",
    "inf": r"NaN or infinite features of (\d+) of \1 patches",
    "short": r"transform gave float64 of shape \(29, 3\) for 30 patches; numbers of shape",
    "flat": r"transform gave float64 of shape \(30,\) for 30 patches",
    "text": r"transform gave <U\d+ of shape \(30, 3\) for 30 patches",
    "objects": r"transform gave object of shape \(30, 3\)",
    "complex": r"transform gave complex128 of shape \(30, 3\)",
    "none": r"transform gave object of shape \(\) for 30 patches",
}


@pytest.mark.parametrize("how", BROKEN)
def test_a_broken_candidate_has_all_its_rows_with_the_reason(how):
    contest = contest_of(ONE)
    rows = rows_of("broken", Breaks(how), contest)
    sound = rows_of("broken", Slopes(), contest)
    results = ("accuracy", "balanced_accuracy", "failure", "n_features")
    assert [{k: v for k, v in row.items() if k not in results} for row in rows] == [
        {k: v for k, v in row.items() if k not in results} for row in sound
    ]
    failed = [row for row in rows if row["failure"] is not None]
    # the last patch of all has NaN, and it is not on both sides of every split
    assert len(failed) == len(rows) if how != "nan" else 0 < len(failed) < len(rows)
    for row in failed:
        assert re.match(BROKEN[how], row["failure"])
        assert row["accuracy"] is row["balanced_accuracy"] is None
    for row, other in zip(rows, sound, strict=True):
        assert row["failure"] is not None or row == other


def test_a_candidate_that_knows_no_missing_pixels_fails_where_some_are():
    contest = contest_of(ONE, conditions=("clean", "tilt", "dropouts"), dtype=np.float32)
    rows = rows_of("a", Breaks("missing"), contest)
    reasons = {row["condition"]: row["failure"] for row in rows}
    assert reasons == {"clean": None, "tilt": None, "dropouts": "ValueError: a pixel is missing"}
    sound = rows_of("a", Slopes(), contest)
    kept = [(a, b) for a, b in zip(rows, sound, strict=True) if a["condition"] != "dropouts"]
    assert all(a == b for a, b in kept)
    assert len(kept) == 8


def test_rivals_fill_missing_pixels_and_ours_counts_without_them():
    contest = contest_of(ONE, conditions=("clean", "dropouts"), dtype=np.float32)
    patches = contest.patches("dropouts", range(3))
    assert all(0 < np.isnan(patch).mean() < 0.1 for patch in patches)
    for name in ("grey-histogram", "co-occurrence"):
        assert results_of(name, DESCRIPTORS[name](), contest)["failure"].null_count == 8
    assert results_of("minkowski", small_curves(), contest)["failure"].null_count == 8
    strict = results_of("minkowski", small_curves(min_valid=0.99), contest).to_pylist()
    reasons = {row["condition"]: row["failure"] for row in strict}
    assert reasons["clean"] is None
    assert reasons["dropouts"].startswith("NaN or infinite features of 12 of 12")


def test_a_width_that_changes_under_a_condition_is_a_failure_there():
    contest = contest_of(ONE, conditions=("clean", "dropouts"), dtype=np.float32)
    rows = rows_of("a", Breaks("width"), contest)
    for row in rows:
        assert (row["failure"] is None) == (row["condition"] == "clean")


def test_a_width_that_changes_between_batches_is_a_failure(monkeypatch):
    monkeypatch.setattr("mfeat.contest._BATCH", 8)

    class Grows(Slopes):
        def transform(self, X):
            return np.hstack([super().transform(X)] * (1 if len(X) == 8 else 2))

    contest = contest_of(ONE)
    assert results_of("a", Slopes(), contest)["failure"].null_count == 8
    reasons = set(results_of("a", Grows(), contest)["failure"].to_pylist())
    assert reasons == {"the number of features changes: [3, 3, 3, 6]"}


def test_no_features_at_all_is_a_failure():
    rows = rows_of("a", Breaks("empty"), contest_of({"lda": lda()}))
    assert all("0 feature" in row["failure"] for row in rows)


@pytest.mark.parametrize(
    "transformer", [toys.Untagged(), toys.Uncloneable()], ids=["untagged", "uncloneable"]
)
def test_what_cannot_be_prepared_is_a_failure_and_stops_nothing(transformer):
    rows = rows_of("a", transformer, contest_of(ONE))
    assert len(rows) == 8
    assert all(row["failure"] and row["accuracy"] is None for row in rows)


@pytest.mark.parametrize(
    ("how", "reason"),
    [
        ("fit", "ValueError: cannot be trained"),
        ("predict", "ValueError: cannot answer"),
        ("short", "predict gave shape (11,) for 12 patches"),
        ("column", "predict gave shape (12, 1) for 12 patches"),
    ],
)
def test_a_broken_classifier_fails_alone(how, reason):
    contest = contest_of(ONE | {"broken": Nearest(how)})
    rows = rows_of("a", Slopes(), contest)
    by = {name: [row for row in rows if row["classifier"] == name] for name in contest.classifiers}
    assert len(by["broken"]) == len(by["nearest"]) == 8
    assert {row["failure"] for row in by["broken"]} == {reason}
    assert all(row["n_features"] == 3 for row in by["broken"])
    assert by["nearest"] == rows_of("a", Slopes(), contest_of(ONE))


@pytest.mark.parametrize("stop", [MemoryError, KeyboardInterrupt])
def test_what_is_not_the_fault_of_a_candidate_is_raised(stop):
    class Stops(Slopes):
        def transform(self, X):
            raise stop

    with pytest.raises(stop):
        results_of("a", Stops(), contest_of(ONE))


def test_classes_that_are_not_tested_do_not_count():
    scenes, labels = toys.scenes_of(3, 6)
    train = [np.flatnonzero(labels == c)[:2] for c in range(3)]
    tested = np.concatenate([np.flatnonzero(labels == 0)[2:], np.flatnonzero(labels == 2)[2:4]])
    contest = Contest(
        scenes, labels, [Split(0, 0, train, tested)], (2,), ("clean",),
        {"in turn": Nearest("in turn")}, toys.SIZE, 0,
    )  # fmt: skip
    [row] = rows_of("a", Slopes(), contest)
    # the answers are 0 1 2 0 1 2 where 0 0 0 0 2 2 is right; nothing is warned of either
    assert row["accuracy"] == 3 / 6
    assert row["balanced_accuracy"] == (2 / 4 + 1 / 2) / 2


# Who sees what ----------------------------------------------------------------------------------


def test_what_learns_sees_clean_training_patches_only():
    contest = contest_of(ONE, conditions=("clean", "noise", "rotation"))
    Spy.seen = []
    results_of("spy", Spy(), contest)
    fits = [one for one in Spy.seen if one[0] == "fit"]
    trainings = [(s, s.training(size)) for s in contest.splits for size in contest.train_sizes]
    assert len(fits) == len(trainings) == 4
    for (_, patches, labels), (split, train) in zip(fits, trainings, strict=True):
        assert labels == contest.labels[train].tolist()
        for patch, k in zip(patches, train, strict=True):
            np.testing.assert_array_equal(patch, contest.scenes[k].patch)
        tested = {contest.scenes[k].patch.tobytes() for k in split.test}
        assert not tested & {patch.tobytes() for patch in patches}


def test_what_learns_nothing_is_computed_once_a_condition():
    conditions = ("clean", "noise", "rotation")
    contest = contest_of(classifiers_of(["lda", "svm"]), conditions=conditions)
    QuietSpy.seen = []
    results_of("spy", QuietSpy(), contest)
    transforms = [one for kind, one in QuietSpy.seen if kind == "transform"]
    assert len(transforms) == len(conditions)
    assert sum(kind == "fit" for kind, _ in QuietSpy.seen) == 1
    for condition, patches in zip(conditions, transforms, strict=True):
        wanted = contest.patches(condition, range(len(contest.scenes)))
        for patch, own in zip(patches, wanted, strict=True):
            np.testing.assert_array_equal(patch, own)


def test_a_failed_condition_is_not_tried_again():
    calls = []

    class Counts(Slopes):
        def transform(self, X):
            calls.append(len(X))
            raise ValueError("no")

    results_of("a", Counts(), contest_of(ONE))
    assert len(calls) == 1  # without clean features nothing can be trained


def test_learned_levels_are_learned_anew_in_each_split():
    contest = contest_of(ONE)
    fitted = small_curves(level_rule="fitted", basis="levels")
    rows = rows_of("a", fitted, contest)
    split, size = contest.splits[1], 4
    train = split.training(size)
    model = clone(fitted).fit(np.stack([contest.scenes[k].patch for k in train]))
    given, found = (
        model.transform(np.stack([contest.scenes[k].patch for k in members]))
        for members in (train, split.test)
    )
    answer = Nearest().fit(given, contest.labels[train]).predict(found)
    [row] = [
        row for row in rows
        if (row["repeat"], row["train_size"], row["condition"]) == (1, 4, "clean")
    ]  # fmt: skip
    assert row["accuracy"] == pytest.approx(np.mean(answer == contest.labels[split.test]))


def test_random_labels_over_groups_give_chance():
    """Patches of a group are alike: a leak of groups, or of labels, would lift accuracy far above.

    100 groups, half of each label at random. Folds are tested once a repeat, so the mean accuracy
    of 100 independent groups has a standard error of at most .5 / sqrt(100) = .05.
    """
    rng = np.random.default_rng(0)
    scenes, groups = [], []

    class Deviation(toys.Stateless):
        def transform(self, X):
            return toys.as_stack(X).std(axis=(1, 2))[:, None]

    for group in range(100):
        own = 10 + 3 * group  # a deviation that no other group has
        for _ in range(2):
            region = 300 + own * unit_noise(rng)
            scenes.append(toys.Scene(region.astype(np.float32), 8, 1.0))
            groups.append(group)
    labels = np.repeat(rng.permutation(np.repeat([0, 1], 50)), 2)
    splits = grouped_splits(labels, np.array(groups), ["a", "b"], 80, 5, 2, 0)
    contest = Contest(
        scenes, labels, splits, (80,), ("clean",), classifiers_of(["lda", "svm"]), toys.SIZE, 0
    )
    for row in rows_of("a", Deviation(), contest):
        assert row["failure"] is None
    found = results_of("a", Deviation(), contest)["balanced_accuracy"].to_numpy()
    assert abs(found.mean() - 0.5) < 4 * 0.05
    leaking = replace(
        contest,
        classifiers={"neighbour": KNeighborsClassifier(1)},
        splits=[Split(0, 0, [np.flatnonzero(labels == c)[::2] for c in (0, 1)],
                      np.arange(1, 200, 2))],
    )  # fmt: skip
    [row] = rows_of("a", Deviation(), leaking)
    assert row["accuracy"] > 0.5 + 4 * 0.05  # the bound can be broken


def unit_noise(rng):
    noise = rng.normal(size=(32, 32))
    return (noise - noise[8:-8, 8:-8].mean()) / noise[8:-8, 8:-8].std()


def test_patches_come_together_as_one_array_where_they_can():
    a, b = np.zeros((4, 4), np.uint8), np.ones((4, 4), np.uint8)
    assert together([a, b]).shape == (2, 4, 4)
    masked = np.ma.MaskedArray(b, b == 1)
    both = together([a, masked])
    assert isinstance(both, np.ma.MaskedArray)
    np.testing.assert_array_equal(np.ma.getmaskarray(both), [np.zeros((4, 4)), np.ones((4, 4))])
    for other in (b.astype(float), np.zeros((4, 5), np.uint8)):
        found = together([a, other])
        assert isinstance(found, list)
        assert found[1].dtype == other.dtype
        assert not np.shares_memory(found[0], a)


# Costs ------------------------------------------------------------------------------------------


def test_costs_of_candidates():
    class Slow(Slopes):
        def transform(self, X):
            time.sleep(0.02)
            return np.hstack([super().transform(X)] * 2)

    class Large(Slopes):
        def transform(self, X):
            waste = np.ones(1_000_000)
            return super().transform(X) * waste[0]

    candidates = {"first": Slopes(), "slow": Slow(), "large": Large(), "broken": Breaks("raise")}
    table = measure_costs(candidates, contest_of(ONE), True)
    assert table.schema.equals(COSTS_SCHEMA)
    rows = {row["descriptor"]: row for row in table.to_pylist()}
    assert list(rows) == list(candidates)
    assert [rows[name]["n_features"] for name in candidates] == [3, 6, 3, None]
    assert rows["first"]["ratio"] == rows["first"]["ratio_low"] == rows["first"]["ratio_high"] == 1
    assert rows["slow"]["microseconds"] >= 0.02 / 30 * 1e6  # 30 patches a call
    assert rows["slow"]["ratio"] > 1
    assert rows["slow"]["ratio_low"] <= rows["slow"]["ratio"] <= rows["slow"]["ratio_high"]
    assert 8e6 <= rows["large"]["peak_bytes"] < 16e6
    assert rows["first"]["peak_bytes"] < 4e6
    broken = rows.pop("broken")
    assert broken["failure"] == "ValueError: cannot be transformed"
    assert {broken[k] for k in ("microseconds", "ratio", "ratio_low", "peak_bytes")} == {None}
    assert all(row["failure"] is None for row in rows.values())
    assert {(row["patch_rows"], row["patch_cols"]) for row in rows.values()} == {(16, 16)}


def test_costs_of_those_that_fail_late_or_write_into_patches():
    class Tires(Slopes):
        def fit(self, X, y=None):
            self.calls_ = 0
            return self

        def transform(self, X):
            self.calls_ += 1
            if self.calls_ > 3:
                raise RuntimeError("tired")
            return super().transform(X)

    class Checks(Slopes):
        def transform(self, X):
            if not np.std(X):
                raise ValueError("somebody wrote into the patches")
            return super().transform(X)

    candidates = {"writes": toys.Writes(), "tires": Tires(), "checks": Checks()}
    rows = measure_costs(candidates, contest_of(ONE), True).to_pylist()
    assert [row["failure"] for row in rows] == [None, "RuntimeError: tired", None]
    assert rows[1]["microseconds"] is rows[1]["n_features"] is None


def test_costs_without_a_first_candidate_have_no_ratios():
    table = measure_costs({"broken": Breaks("fit"), "b": Slopes()}, contest_of(ONE), True)
    broken, other = table.to_pylist()
    assert broken["failure"] == "RuntimeError: cannot be fitted"
    assert other["ratio"] is None
    assert other["microseconds"] > 0


def test_costs_take_the_clean_patches_with_missing_ones_filled():
    contest = contest_of(ONE, conditions=("clean", "dropouts"), dtype=np.float32)
    rows = measure_costs(
        {"ours": small_curves(), "c": DESCRIPTORS["co-occurrence"]()}, contest, True
    )
    assert rows["failure"].null_count == 2

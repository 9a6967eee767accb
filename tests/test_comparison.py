"""What a comparison says, worked out again from its tables with pandas and SciPy."""

import json
import sys

import numpy as np
import pyarrow.parquet as pq
import pytest
from made_up import CONDITIONS, NAMES, made_up
from scipy import stats
from toys import QUICK, Blind, Nearest, Slopes, texture

from mfeat import compare, read_comparison
from mfeat.comparison import ALL, Paired

TWO_SIZES = {"sizes": ((16, 16), (12, 20)), "trains": ((2, 4), (2, 4, 8))}


def means_by_split(found, name, conditions, classifiers, size, train):
    """Balanced accuracies averaged over conditions and classifiers, by split, with pandas."""
    frame = found.results.to_pandas()
    own = frame[
        (frame["descriptor"] == name)
        & frame["condition"].isin(conditions)
        & frame["classifier"].isin(classifiers)
        & (frame["patch_rows"] == size[0])
        & (frame["patch_cols"] == size[1])
        & (frame["train_size"] == train)
    ]
    return own.groupby(["repeat", "fold"])["balanced_accuracy"].agg(lambda x: x.mean(skipna=False))


@pytest.mark.parametrize("condition", [*CONDITIONS, ALL])
@pytest.mark.parametrize("classifier", [None, "svm"])
@pytest.mark.parametrize("size", [None, (12, 20)])
@pytest.mark.parametrize("train", [None, 2])
def test_splits_are_means_over_what_is_not_chosen(condition, classifier, size, train):
    found = made_up(**TWO_SIZES)
    values = found.splits("ours", condition, classifier=classifier, size=size, train_size=train)
    wanted = means_by_split(
        found, "ours", CONDITIONS if condition == ALL else [condition],
        [classifier] if classifier else ["lda", "svm"], size or (16, 16),
        train or (8 if size else 4),
    )  # fmt: skip
    assert values.shape == (6,)
    np.testing.assert_allclose(values, wanted.to_numpy(), rtol=1e-12)


@pytest.mark.parametrize(("size", "train"), [(None, None), (None, 2), ((12, 20), 4)])
def test_accuracy_has_the_corrected_interval(size, train):
    found = made_up(**TWO_SIZES)
    which = {"size": size, "train_size": train}
    values = found.splits("better|half", "noise", **which)
    n_train = 3 * (train or 4)
    error = np.sqrt((1 / 6 + 6 / n_train) * values.var(ddof=1))
    half = stats.t(5).ppf(0.975) * error
    mean = found.accuracy("better|half", "noise", **which)
    assert mean == pytest.approx((values.mean(), values.mean() - half, values.mean() + half))


def test_against_reference_is_the_corrected_t_test_adjusted_by_holm():
    found = made_up()
    tests = found.against_reference(NAMES)
    others = [name for name in NAMES if name != "ours"]
    places = [(place, name) for place in (*CONDITIONS, ALL) for name in others]
    assert [(t.condition, t.descriptor) for t in tests] == places
    p_values = []
    for test in tests:
        assert isinstance(test, Paired)
        d = found.splits("ours", test.condition) - found.splits(test.descriptor, test.condition)
        t = d.mean() / np.sqrt((1 / 6 + 6 / 12) * d.var(ddof=1))
        assert test.difference.mean == pytest.approx(d.mean())
        assert test.difference.t == pytest.approx(t)
        assert test.difference.p == pytest.approx(2 * stats.t(5).cdf(-abs(t)))
        p_values.append(test.difference.p)
    order = np.argsort(p_values)
    running = np.maximum.accumulate([
        (len(order) - k) * p_values[j] for k, j in enumerate(order)
    ])  # fmt: skip
    for k, j in enumerate(order):
        assert tests[j].adjusted_p == pytest.approx(min(1, running[k]))


def test_failures_make_nan_where_they_are_and_in_the_mean():
    found = made_up(failures={("gone", "noise"): lambda repeat: "lost" if repeat else None})
    clean, noise, mean = (found.splits("gone", place) for place in ("clean", "noise", ALL))
    assert not np.isnan(clean).any()
    assert np.isnan(noise).tolist() == np.isnan(mean).tolist() == [False] * 2 + [True] * 4
    assert np.isnan(found.accuracy("gone").mean)
    assert not np.isnan(found.accuracy("gone", "clean").mean)
    tests = {(t.descriptor, t.condition): t for t in found.against_reference(["gone", "a<b> & c"])}
    for place in ("noise", ALL):
        assert np.isnan(tests["gone", place].adjusted_p)
    # NaN are no comparisons: six are left of eight
    six = [t for key, t in tests.items() if key not in (("gone", "noise"), ("gone", ALL))]
    smallest = min(t.difference.p for t in six)
    assert min(t.adjusted_p for t in six) == pytest.approx(min(1, 6 * smallest))


def test_failures_are_counted_by_reason():
    found = made_up(
        failures={
            ("gone", "noise"): lambda repeat: f"lost {repeat}" if repeat else None,
            ("ours", "blur"): lambda repeat: "all",
        }
    )
    frame = found.results.to_pandas()
    wanted = frame.groupby(["descriptor", "condition", "failure"]).size()
    assert {f[:3]: f[3] for f in found.failures()} == wanted.to_dict()
    # two training sizes, two classifiers, two folds; and three repeats
    assert sorted(found.failures()) == [
        ("gone", "noise", "lost 1", 8), ("gone", "noise", "lost 2", 8), ("ours", "blur", "all", 24),
    ]  # fmt: skip
    assert made_up().failures() == []


def test_costs_are_found_by_name_and_size():
    found = made_up(**TWO_SIZES)
    for size in ((16, 16), (12, 20)):
        [wanted] = [
            row for row in found.costs.to_pylist()
            if (row["descriptor"], row["patch_cols"]) == ("gone", size[1])
        ]  # fmt: skip
        assert found.cost("gone", size) == wanted
    assert found.cost("gone") == found.cost("gone", (16, 16))
    with pytest.raises(KeyError, match="no cost of 'nobody' at"):
        found.cost("nobody")


def test_names_and_sizes():
    found = made_up(("ours", "minkowski: without euler", "other"), **TWO_SIZES)
    assert found.reference == "ours"
    assert found.descriptors == ["ours", "minkowski: without euler", "other"]
    assert (found.rivals, found.variants) == (["ours", "other"], ["minkowski: without euler"])
    assert found.classifiers == ["lda", "svm"]
    assert found.sizes == [(16, 16), (12, 20)]
    assert (found.train_sizes(), found.train_sizes((12, 20))) == ([2, 4], [2, 4, 8])
    assert found.ratio() == 6 / 12
    assert found.ratio(train_size=2) == 6 / 6
    assert found.ratio((12, 20)) == 6 / 24
    assert repr(found) == "Comparison(3 descriptors, 3 conditions, 3 classes: somewhere)"
    assert found.splits("minkowski: without euler").shape == (6,)


@pytest.mark.parametrize(
    ("arguments", "how", "text"),
    [
        (("nobody",), {}, "descriptor must be one of 'ours'.*got 'nobody'"),
        (("ours", "fog"), {}, "condition must be one of 'clean', 'noise', 'blur', 'mean'; got"),
        (("ours",), {"classifier": "knn"}, "classifier must be one of 'lda', 'svm'; got 'knn'"),
        (("ours",), {"size": (9, 9)}, r"size must be one of \(16, 16\); got \(9, 9\)"),
        (("ours",), {"size": 16}, r"size must be one of \(16, 16\); got 16"),
        (("ours",), {"train_size": 3}, "train_size must be one of 2, 4; got 3"),
        (("minkowski: few",), {"train_size": 2}, "train_size must be one of 4; got 2"),
    ],
)
def test_what_did_not_take_part_is_refused(arguments, how, text):
    found = made_up(("ours", "minkowski: few"))
    with pytest.raises(ValueError, match=text):
        found.splits(*arguments, **how)
    with pytest.raises(ValueError, match=text):
        found.accuracy(*arguments, **how)


def test_the_ratio_is_that_of_patches_that_were_really_used(tmp_path, monkeypatch):
    """Classes give up to 16 training patches, of which 8 are used where the smallest has 12.

    Test over training patches, averaged over the splits, can be read off the results.
    """
    for k in range(6):
        place = tmp_path / "images" / f"class{k % 2}"
        place.mkdir(parents=True, exist_ok=True)
        shape = (32, 48) if k % 2 else (64, 128)
        np.save(place / f"part{k}.npy", texture(k, 0.6 + k % 2, shape))
    monkeypatch.setattr(sys.modules["mfeat.comparing"], "write_report", lambda found: {})
    how = QUICK | {"train": None, "label_from": "folder", "classifiers": {"n": Nearest()}}
    found = compare(
        tmp_path / "images", tmp_path / "out", {"s": Slopes(), "b": Blind()},
        conditions=["clean"], **how,
    )  # fmt: skip
    assert found.train_sizes() == [2, 4, 8]
    frame = found.results.to_pandas()
    for train in found.train_sizes():
        own = frame[(frame["train_size"] == train) & (frame["descriptor"] == "s")]
        assert (own["n_train"] == 2 * train).all()
        assert found.ratio(train_size=train) == pytest.approx(
            (own["n_test"] / own["n_train"]).mean()
        )


def test_reading_back(tmp_path):
    found = made_up()
    for name, table in (("results", found.results), ("costs", found.costs)):
        pq.write_table(table, tmp_path / f"{name}.parquet")
    with pytest.raises(FileNotFoundError, match="holds no complete comparison; compare writes one"):
        read_comparison(tmp_path)
    (tmp_path / "comparison.json").write_text(json.dumps(found.about))
    again = read_comparison(tmp_path)
    assert again.results.equals(found.results)
    assert again.against_reference(NAMES) == found.against_reference(NAMES)
    with pytest.raises(FileNotFoundError):
        read_comparison(tmp_path / "nowhere")

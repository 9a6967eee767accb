"""Comparisons with made-up results, for tests of what is said about results."""

import numpy as np
import pyarrow as pa

from mfeat.comparison import Comparison
from mfeat.contest import RESULTS_SCHEMA
from mfeat.costs import COSTS_SCHEMA

NAMES = ("ours", "better|half", "a<b> & c", "gone")
CONDITIONS = ("clean", "noise", "blur")


def made_up(
    names=NAMES,
    conditions=CONDITIONS,
    classifiers=("lda", "svm"),
    sizes=((16, 16),),
    trains=((2, 4),),
    repeats=3,
    folds=2,
    failures=None,
    costless=(),
    left_out=(),
    n_test=6,
    seed=0,
    shuffled=True,
):
    """Return a comparison whose accuracies are random, in a random order of rows unless told.

    `failures` maps (descriptor, condition) to a function of the repeat that gives a reason.
    """
    rng = np.random.default_rng(seed)
    failures = failures or {}
    rows = []
    for size, train_sizes in zip(sizes, trains, strict=True):
        for name in names:
            for train in train_sizes[-1:] if name.startswith("minkowski: ") else train_sizes:
                for classifier in classifiers:
                    for condition in conditions:
                        level = rng.uniform(0.3, 0.95)
                        for repeat in range(repeats):
                            for fold in range(folds):
                                reason = failures.get((name, condition))
                                reason = reason and reason(repeat)
                                score = float(np.clip(level + rng.normal() / 30, 0, 1))
                                rows.append({
                                    "descriptor": name, "classifier": classifier,
                                    "condition": condition, "patch_rows": size[0],
                                    "patch_cols": size[1], "train_size": train, "repeat": repeat,
                                    "fold": fold, "n_train": 3 * train, "n_test": n_test,
                                    "accuracy": None if reason else score,
                                    "balanced_accuracy": None if reason else score,
                                    "n_features": None if reason else 7, "failure": reason,
                                })  # fmt: skip
    if shuffled:
        rows = [rows[k] for k in rng.permutation(len(rows))]
    costs = [
        {
            "descriptor": name, "patch_rows": size[0], "patch_cols": size[1],
            "failure": "ValueError: no cost",
        } if name in costless else {
            "descriptor": name, "patch_rows": size[0], "patch_cols": size[1], "n_features": 7 + k,
            "microseconds": 10.0 * (k + 1), "ratio": k + 1.0, "ratio_low": k + 0.9,
            "ratio_high": k + 1.1, "peak_bytes": 1000 * (k + 1), "failure": None,
        }
        for size in sizes for k, name in enumerate(names)
    ]  # fmt: skip
    about = {
        "record": {
            "descriptors": {name: f"pkg.{name}()" for name in names}, "order": list(names),
            "classifiers": dict.fromkeys(classifiers, "c()"), "protocol": "groups", "seed": 0,
            "inputs": [],
        },
        "reference": names[0], "kind": "grey", "classes": ["x", "y", "z"],
        "sizes": [
            {
                "size": list(size), "patches": 30, "classes": 3, "groups": 6,
                "train_sizes": list(train), "conditions": list(conditions),
                "splits": repeats * folds, "ratio": n_test / (3 * train[-1]), "mirrored": 0,
                "overlapping": False, "left_out": list(left_out),
            }
            for size, train in zip(sizes, trains, strict=True)
        ],
    }  # fmt: skip
    tables = pa.Table.from_pylist(rows, RESULTS_SCHEMA), pa.Table.from_pylist(costs, COSTS_SCHEMA)
    return Comparison("somewhere", *tables, about)

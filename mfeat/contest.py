"""One candidate: its features under every condition, what classifiers make of them, by split."""

from collections.abc import Iterator, Sequence
from dataclasses import dataclass
from typing import Any

import numpy as np
import pyarrow as pa
from sklearn.base import clone
from threadpoolctl import threadpool_limits

from mfeat.candidates import learns, prepared
from mfeat.conditions import CONDITIONS, Scene, generator_for, missing_in
from mfeat.trials import Split

# Patches that are changed and transformed at a time.
_BATCH = 256

#: One row a split, classifier, condition and training size.
RESULTS_SCHEMA = pa.schema(
    [
        pa.field("descriptor", pa.string(), nullable=False),
        pa.field("classifier", pa.string(), nullable=False),
        pa.field("condition", pa.string(), nullable=False),
        pa.field("patch_rows", pa.int32(), nullable=False),
        pa.field("patch_cols", pa.int32(), nullable=False),
        pa.field("train_size", pa.int32(), nullable=False),
        pa.field("repeat", pa.int32(), nullable=False),
        pa.field("fold", pa.int32(), nullable=False),
        pa.field("n_train", pa.int32(), nullable=False),
        pa.field("n_test", pa.int32(), nullable=False),
        ("accuracy", pa.float64()),
        ("balanced_accuracy", pa.float64()),
        ("n_features", pa.int32()),
        ("failure", pa.string()),
    ]
)


@dataclass(frozen=True, eq=False)
class Contest:
    """What all candidates have in common.

    Attributes
    ----------
    scenes : list of Scene
    labels : ndarray of shape (n,), int
    splits : list of Split
    train_sizes : tuple of int
    conditions : tuple of str
    classifiers : dict of str to classifier
    size : (int, int)
        Rows and columns of a patch, for the results.
    seed : int
    """

    scenes: list[Scene]
    labels: np.ndarray
    splits: list[Split]
    train_sizes: tuple[int, ...]
    conditions: tuple[str, ...]
    classifiers: dict[str, Any]
    size: tuple[int, int]
    seed: int

    def patches(self, condition: str, members: Sequence[int]) -> list[np.ndarray]:
        """Return some patches as they are under a condition."""
        change = CONDITIONS[condition].change
        return [
            change(self.scenes[k], generator_for(self.seed, condition, int(k))) for k in members
        ]

    def any_missing(self) -> bool:
        """Tell whether some patch has missing pixels, or will have."""
        return "dropouts" in self.conditions or any(
            missing_in(scene.region) is not None for scene in self.scenes
        )


class Failed(Exception):
    """A candidate could not give features; the message says why."""


def results_of(
    name: str, transformer: Any, contest: Contest, *, largest_only: bool = False
) -> pa.Table:
    """Return all single results of one candidate, or those of the largest training size only.

    Whatever goes wrong in it is a result too: rows without accuracy, with the failure.
    """
    features = _Features(transformer, contest)
    rows = []
    with threadpool_limits(1):  # workers share the processors already
        for split in contest.splits:
            before = 0
            for size in contest.train_sizes[-1:] if largest_only else contest.train_sizes:
                train = split.training(size)
                if len(train) > before:  # else no class has more patches than before
                    rows += _rows_of_split(features, contest, split, train, size)
                before = len(train)
    columns = {"descriptor": [name] * len(rows)}
    columns |= {f.name: [row[f.name] for row in rows] for f in list(RESULTS_SCHEMA)[1:]}
    return pa.table(columns, schema=RESULTS_SCHEMA)


def _rows_of_split(
    features: "_Features", contest: Contest, split: Split, train: np.ndarray, size: int
) -> Iterator[dict[str, Any]]:
    given, failure = _tried(features.training, train)
    tests = {
        condition: (None, failure) if failure else _tried(features.of, condition, split.test, train)
        for condition in contest.conditions
    }
    for name, classifier in contest.classifiers.items():
        model, untrained = (None, failure) if failure else _tried(_fitted, classifier, given,
                                                                 contest.labels[train])  # fmt: skip
        for condition, (found, reason) in tests.items():
            reason = untrained or reason
            truth = contest.labels[split.test]
            scores = None
            if reason is None:
                scores, reason = _tried(_scores, model, found, truth)
            yield {
                "classifier": name,
                "condition": condition,
                "patch_rows": contest.size[0],
                "patch_cols": contest.size[1],
                "train_size": size,
                "repeat": split.repeat,
                "fold": split.fold,
                "n_train": len(train),
                "n_test": len(truth),
                "accuracy": None if scores is None else scores[0],
                "balanced_accuracy": None if scores is None else scores[1],
                "n_features": None if given is None else given.shape[1],
                "failure": reason,
            }


def _mean_recall(truth: np.ndarray, answer: np.ndarray) -> float:
    """Return the mean over the classes in `truth` of the share that was found."""
    return float(np.mean([np.mean(answer[truth == one] == one) for one in np.unique(truth)]))


def _tried(call: Any, *arguments: Any) -> tuple[Any, str | None]:
    """Return what a call gives, or the reason why it gives nothing."""
    try:
        return call(*arguments), None
    except MemoryError:
        raise
    except Failed as error:
        return None, str(error)
    except Exception as error:  # of a candidate: any
        return None, told(error)


def told(error: Exception) -> str:
    """Return an error of a candidate in one line."""
    return f"{type(error).__name__}: {' '.join(str(error).split())}"


def _fitted(classifier: Any, features: np.ndarray, labels: np.ndarray) -> Any:
    return clone(classifier).fit(features, labels)


def _scores(model: Any, features: np.ndarray, truth: np.ndarray) -> tuple[float, float]:
    """Return the share of right answers, and its mean over the classes that are tested."""
    answer = np.asarray(model.predict(features))
    if answer.shape != truth.shape:
        raise Failed(f"predict gave shape {answer.shape} for {len(truth)} patches")
    return float(np.mean(answer == truth)), _mean_recall(truth, answer)


class _Features:
    """Features of a candidate; those that depend on no training set are computed once."""

    def __init__(self, transformer: Any, contest: Contest):
        self._contest = contest
        self._made, self._unmade = _tried(prepared, transformer, contest.any_missing())
        self._learns = self._unmade is None and learns(self._made)
        self._known: dict[str, tuple[np.ndarray | None, str | None]] = {}
        self._last: tuple[Any, Any] = (None, None)

    def training(self, train: np.ndarray) -> np.ndarray:
        return self.of("clean", train, train)

    def of(self, condition: str, members: np.ndarray, train: np.ndarray) -> np.ndarray:
        """Return the features (n, p) of some patches under a condition."""
        if self._unmade is not None:
            raise Failed(self._unmade)
        if self._learns:
            found = self._computed(self._fitted(train), condition, members)
        else:
            if condition not in self._known:
                self._known[condition] = _tried(self._all, condition)
            everything, reason = self._known[condition]
            if reason is not None:
                raise Failed(reason)
            found = everything[members]
        bad = ~np.isfinite(found).all(axis=1)
        if bad.any():
            raise Failed(f"NaN or infinite features of {bad.sum()} of {len(bad)} patches")
        return found

    def _all(self, condition: str) -> np.ndarray:
        # `fit` of such transformers checks, and learns nothing
        fitted = self._fitted(np.arange(min(2, len(self._contest.scenes))))
        return self._computed(fitted, condition, np.arange(len(self._contest.scenes)))

    def _fitted(self, train: np.ndarray) -> Any:
        key = train.tobytes()
        if self._last[0] != key:
            patches = together(self._contest.patches("clean", train))
            labels = self._contest.labels[train]
            self._last = key, clone(self._made).fit(patches, labels)
        return self._last[1]

    def _computed(self, fitted: Any, condition: str, members: np.ndarray) -> np.ndarray:
        parts = []
        for start in range(0, len(members), _BATCH):
            some = members[start : start + _BATCH]
            found = fitted.transform(together(self._contest.patches(condition, some)))
            found = np.asarray(found)
            if found.ndim != 2 or len(found) != len(some) or found.dtype.kind not in "biuf":
                raise Failed(
                    f"transform gave {found.dtype} of shape {found.shape} for {len(some)} patches; "
                    "numbers of shape (patches, features) are needed"
                )
            parts.append(found)
        if len({part.shape[1] for part in parts}) > 1:
            raise Failed(f"the number of features changes: {[part.shape[1] for part in parts][:4]}")
        return np.concatenate(parts)


def together(patches: list[np.ndarray]) -> Any:
    """Return copies of patches, as one array where they can be one, else as a list."""
    alike = len({(patch.shape, patch.dtype) for patch in patches}) == 1
    if not alike:  # a candidate that writes into its input must not change that of others
        return [patch.copy() for patch in patches]
    masked = any(np.ma.isMaskedArray(patch) for patch in patches)
    return np.ma.stack(patches) if masked else np.stack(patches)

"""The results of a comparison: every single one, and what they say together."""

import json
from collections.abc import Iterable
from dataclasses import dataclass
from functools import cached_property
from typing import Any, NamedTuple

import numpy as np
import pyarrow as pa

from mfeat import _checks, locations, storage
from mfeat.significance import Difference, Mean, compare_paired, holm, mean_with_interval

RESULTS = "results.parquet"
COSTS = "costs.parquet"
COMPARISON = "comparison.json"

#: What the names of variants in an ablation begin with.
VARIANT = "minkowski: "

#: Name of the mean over all conditions, beside those of conditions.
ALL = "mean"


def is_variant(name: str) -> bool:
    """Tell whether a descriptor is a variant in an ablation."""
    return name.startswith(VARIANT)


class Paired(NamedTuple):
    """A descriptor against the reference: the difference (reference minus it) and Holm's p."""

    descriptor: str
    condition: str
    difference: Difference
    adjusted_p: float


@dataclass(frozen=True, eq=False)
class Comparison:
    """What `mfeat.compare` found.

    Attributes
    ----------
    out : str
        The folder of the results.
    results : pyarrow.Table
        Every single result: descriptor, classifier, condition, patch_rows, patch_cols, train_size,
        repeat, fold, n_train, n_test, accuracy, balanced_accuracy, n_features, failure.
    costs : pyarrow.Table
        Of each descriptor and patch size: n_features, microseconds a patch, ratio to the reference
        with quartiles, peak_bytes.
    about : dict
        Settings, classes, what was left out.
    """

    out: str
    results: pa.Table
    costs: pa.Table
    about: dict[str, Any]

    def __repr__(self) -> str:
        return (
            f"Comparison({len(self.descriptors)} descriptors, {len(self.conditions)} conditions, "
            f"{len(self.about['classes'])} classes: {self.out})"
        )

    @property
    def descriptors(self) -> list[str]:
        """Names of all that took part, variants of an ablation among them."""
        return list(self.about["record"]["descriptors"])

    @property
    def rivals(self) -> list[str]:
        """Names without the variants of an ablation."""
        return [name for name in self.descriptors if not is_variant(name)]

    @property
    def variants(self) -> list[str]:
        """Names of the variants of an ablation."""
        return [name for name in self.descriptors if is_variant(name)]

    @property
    def reference(self) -> str:
        """The descriptor that the others are compared with."""
        return self.about["reference"]

    @property
    def conditions(self) -> list[str]:
        """Names of the conditions."""
        return self.about["sizes"][0]["conditions"]

    @property
    def classifiers(self) -> list[str]:
        """Names of the classifiers."""
        return list(self.about["record"]["classifiers"])

    @property
    def sizes(self) -> list[tuple[int, int]]:
        """Patch sizes."""
        return [tuple(one["size"]) for one in self.about["sizes"]]

    def train_sizes(self, size: tuple[int, int] | None = None) -> list[int]:
        """Return the numbers of training patches a class at a patch size, by default the first."""
        return self._about_size(size)["train_sizes"]

    def _about_size(self, size: tuple[int, int] | None) -> dict[str, Any]:
        sizes = self.about["sizes"]
        if size is None:
            return sizes[0]
        if isinstance(size, tuple | list) and tuple(size) in self.sizes:
            return sizes[self.sizes.index(tuple(size))]
        raise ValueError(f"size must be one of {', '.join(map(str, self.sizes))}; got {size!r}")

    def splits(
        self,
        descriptor: str,
        condition: str = ALL,
        *,
        classifier: str | None = None,
        size: tuple[int, int] | None = None,
        train_size: int | None = None,
    ) -> np.ndarray:
        """Return the balanced accuracy of each split, in the order of splits.

        Parameters
        ----------
        descriptor : str
        condition : str, default "mean"
            A condition, or "mean" for the mean over all of them.
        classifier : str, optional
            Default the mean over classifiers.
        size : (int, int), optional
            Patch size; default the first.
        train_size : int, optional
            Training patches a class; default the largest.

        Returns
        -------
        ndarray of shape (J,)
            NaN where something failed.

        Raises
        ------
        ValueError
            For what did not take part; variants took part at the largest training size only.
        """
        _checks.choice("descriptor", descriptor, self.descriptors)
        _checks.choice("condition", condition, [*self.conditions, ALL])
        conditions = self.conditions if condition == ALL else [condition]
        classifiers = self.classifiers
        if classifier is not None:
            classifiers = [_checks.choice("classifier", classifier, self.classifiers)]
        known = self.train_sizes(size)[-1:] if is_variant(descriptor) else self.train_sizes(size)
        size = self.sizes[0] if size is None else tuple(size)
        if train_size is None:
            train_size = known[-1]
        _checks.choice("train_size", train_size, known)
        found = [
            self._index[descriptor, one, other, size, train_size]
            for one in classifiers
            for other in conditions
        ]
        return np.mean(found, axis=0)

    @cached_property
    def _index(self) -> dict[tuple, np.ndarray]:
        """Balanced accuracies of all splits by what they are of."""
        names = (
            *("descriptor", "classifier", "condition", "patch_rows", "patch_cols"),
            *("train_size", "balanced_accuracy"),
        )
        ordered = self.results.sort_by([("repeat", "ascending"), ("fold", "ascending")])
        columns = [ordered[name].to_pylist() for name in names]
        known: dict[tuple, list[float]] = {}
        for name, model, condition, rows, cols, train, accuracy in zip(*columns, strict=True):
            key = (name, model, condition, (rows, cols), train)
            known.setdefault(key, []).append(np.nan if accuracy is None else accuracy)
        return {key: np.array(values) for key, values in known.items()}

    def ratio(self, size: tuple[int, int] | None = None, train_size: int | None = None) -> float:
        """Return test patches over training patches of a split, for the corrected variance."""
        about = self._about_size(size)
        largest = about["train_sizes"][-1]
        return about["ratio"] * largest / (largest if train_size is None else train_size)

    def accuracy(self, descriptor: str, condition: str = ALL, **which: Any) -> Mean:
        """Return the mean balanced accuracy with its interval; arguments as for `splits`."""
        ratio = self.ratio(which.get("size"), which.get("train_size"))
        return mean_with_interval(self.splits(descriptor, condition, **which), ratio)

    def against_reference(self, others: Iterable[str], **which: Any) -> list[Paired]:
        """Compare the reference with others, under every condition and their mean.

        Corrected resampled t-test (Nadeau & Bengio 2003), adjusted for the number of comparisons
        by Holm (1979). Arguments as for `splits`.
        """
        ratio = self.ratio(which.get("size"), which.get("train_size"))
        found = []
        for condition in (*self.conditions, ALL):
            own = self.splits(self.reference, condition, **which)
            for other in others:
                if other != self.reference:
                    theirs = self.splits(other, condition, **which)
                    found.append((other, condition, compare_paired(own, theirs, ratio)))
        adjusted = holm(np.array([difference.p for *_, difference in found]))
        return [Paired(*one, float(p)) for one, p in zip(found, adjusted, strict=True)]

    def cost(self, descriptor: str, size: tuple[int, int] | None = None) -> dict[str, Any]:
        """Return the row of `costs` of a descriptor."""
        size = self.sizes[0] if size is None else size
        for row in self.costs.to_pylist():
            own = (row["descriptor"], row["patch_rows"], row["patch_cols"])
            if own == (descriptor, *size):
                return row
        raise KeyError(f"no cost of {descriptor!r} at {size}")

    def failures(self) -> list[tuple[str, str, str, int]]:
        """Return (descriptor, condition, reason, number of results) of all that failed."""
        counts: dict[tuple[str, str, str], int] = {}
        names = ("descriptor", "condition", "failure")
        for key in zip(*(self.results[name].to_pylist() for name in names), strict=True):
            if key[2] is not None:
                counts[key] = counts.get(key, 0) + 1
        return [(*key, count) for key, count in counts.items()]


def read_comparison(path: Any) -> Comparison:
    """Read the results that `mfeat.compare` wrote.

    Parameters
    ----------
    path : path-like or str

    Returns
    -------
    Comparison

    Raises
    ------
    FileNotFoundError
        If there are no complete results.
    """
    place = locations.as_location(path, "path")
    store = storage.output(place)
    if not store.exists(COMPARISON):
        raise FileNotFoundError(f"{place} holds no complete comparison; compare writes one")
    with store.open(COMPARISON) as stream:
        about = json.loads(stream.read())
    tables = []
    for name in (RESULTS, COSTS):
        with store.open(name) as stream:
            tables.append(storage.read_parquet(stream))
    return Comparison(place, *tables, about)

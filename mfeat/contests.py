"""The plan of a comparison: what is compared with what, and the contest at each patch size."""

import re
import sys
from collections.abc import Sequence
from dataclasses import dataclass, replace
from typing import Any

import numpy as np

from mfeat import __version__
from mfeat.conditions import conditions_for
from mfeat.contest import Contest
from mfeat.entries import Sources
from mfeat.options import DumpSettings, dump_settings
from mfeat.pool import Pool, halves_pool, labelled_pool
from mfeat.trials import TRAIN_SIZES, grouped_splits, half_splits


@dataclass(frozen=True, eq=False)
class ComparisonPlan:
    """What is compared with what, and how."""

    sources: Sources
    settings: DumpSettings
    candidates: dict[str, Any]
    classifiers: dict[str, Any]
    conditions: Sequence[str] | None
    protocol: str
    sizes: list[tuple[int, int]]
    train: tuple[int, ...] | None
    test: int
    patches: int
    repeats: int
    folds: int | None
    seed: int

    def record(self) -> dict[str, Any]:
        """Return all that the accuracies depend on, in types that JSON knows."""
        reading = self.settings.keywords()
        kept = ("regions", "label_from", "truth_rule", "channel", "missing_value", "max_pixels")
        inputs = ("source", "stamp", "label", "group", "mask", "row", "col", "height", "width")
        return {
            "mfeat_version": __version__,
            "descriptors": {name: _described(one) for name, one in self.candidates.items()},
            "order": list(self.candidates),  # the first is the reference; parts are numbered by it
            "classifiers": {name: _described(one) for name, one in self.classifiers.items()},
            "conditions": None if self.conditions is None else list(self.conditions),
            "protocol": self.protocol,
            "sizes": [list(size) for size in self.sizes],
            "train": None if self.train is None else list(self.train),
            "test": self.test,
            "patches": self.patches,
            "repeats": self.repeats,
            "folds": self.folds,
            "seed": self.seed,
            "reading": {name: reading[name] for name in kept},
            "inputs": self.sources.entries.select(inputs).to_pylist(),
        }

    def contest(self, size: tuple[int, int], quiet: bool | None) -> tuple[Contest, Pool]:
        """Choose and read the patches of a size, and draw the splits."""
        grid = dump_settings(size=size).grid
        settings = replace(self.settings, grid=grid)
        if self.protocol == "halves":
            wanted = max(*(self.train or TRAIN_SIZES), self.test)
            pool = halves_pool(self.sources, settings, wanted, quiet)
        else:
            pool = labelled_pool(self.sources, settings, self.patches, self.seed, quiet)
        labels = pool.codes()
        most = max(self.train or TRAIN_SIZES)
        if self.protocol == "halves":
            halves = np.array([place.half for place in pool.places])
            splits = half_splits(labels, halves, most, self.test, self.repeats, self.seed)
        else:
            groups = np.array([place.group for place in pool.places])
            splits = grouped_splits(
                labels, groups, pool.classes, most, self.folds, self.repeats, self.seed
            )
        available = [min(len(own) for own in split.train) for split in splits]
        return Contest(
            scenes=pool.scenes,
            labels=labels,
            splits=splits,
            train_sizes=self._possible(min(available), pool, splits[int(np.argmin(available))]),
            conditions=tuple(c.name for c in conditions_for(pool.kind, self.conditions)),
            classifiers=self.classifiers,
            size=size,
            seed=self.seed,
        ), pool

    def _possible(self, fewest: int, pool: Pool, worst: Any) -> tuple[int, ...]:
        """Return the training sizes; those asked for must be possible."""
        if self.train is None:
            found = tuple(n for n in TRAIN_SIZES if n <= fewest)
            return found or (fewest,)
        if self.train[-1] > fewest:
            name = pool.classes[int(np.argmin([len(own) for own in worst.train]))]
            raise ValueError(
                f"train asks for {self.train[-1]} patches a class, but class {name!r} has {fewest} "
                "on the training side of a split; use fewer, smaller patches, or more images"
            )
        return self.train


def _described(one: Any) -> str:
    """Return a transformer or classifier as text with all its parameters."""
    with np.printoptions(threshold=sys.maxsize, floatmode="unique"):  # nothing is left out
        parameters = ", ".join(f"{k}={v!r}" for k, v in sorted(one.get_params(deep=False).items()))
    text = f"{type(one).__module__}.{type(one).__qualname__}({parameters})"
    return re.sub(r" at 0x[0-9a-fA-F]+", "", text)  # another process has other addresses

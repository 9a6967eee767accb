"""Who trains and who is tested: repeated splits under two protocols.

"halves": every image is a class; patches of one half train, patches of the other half are tested,
and the halves change roles from repeat to repeat. "groups": labelled patches; no group stands on
both sides of a split (repeated grouped and stratified cross-validation).
"""

from dataclasses import dataclass
from typing import Any

import numpy as np
from sklearn.model_selection import StratifiedGroupKFold

PROTOCOLS = ("halves", "groups")

#: Training patches a class where none are given: those of these that every class has.
TRAIN_SIZES = (2, 4, 8, 16)

#: Folds of grouped cross-validation where none are given and the groups allow it.
FOLDS = 5

# Draws of folds before it is given up to have every class among the training patches.
_TRIES = 50


@dataclass(frozen=True, eq=False)
class Split:
    """One split.

    Attributes
    ----------
    repeat, fold : int
    train : list of ndarray
        Training patches of each class, in the order in which smaller training sizes take them.
    test : ndarray
        Test patches.
    """

    repeat: int
    fold: int
    train: list[np.ndarray]
    test: np.ndarray

    def training(self, size: int) -> np.ndarray:
        """Return at most `size` training patches of each class."""
        return np.concatenate([patches[:size] for patches in self.train])


def half_splits(
    labels: np.ndarray, halves: np.ndarray, train: int, test: int, repeats: int, seed: int
) -> list[Split]:
    """Return splits of protocol "halves".

    Parameters
    ----------
    labels : ndarray of shape (n,), int
        Class of each patch.
    halves : ndarray of shape (n,), int
        0 or 1, the half of its image that a patch lies in.
    train, test : int
        Largest numbers of patches of a class to train on and to test.
    repeats, seed : int
    """
    splits = []
    for repeat in range(repeats):
        rng = np.random.default_rng([seed, repeat])
        own = [
            [rng.permutation(np.flatnonzero((labels == c) & (halves == side))) for side in (0, 1)]
            for c in np.unique(labels)
        ]
        side = repeat % 2
        chosen = np.concatenate([both[1 - side][:test] for both in own])
        splits.append(Split(repeat, 0, [both[side][:train] for both in own], chosen))
    return splits


def grouped_splits(
    labels: np.ndarray,
    groups: np.ndarray,
    names: list[Any],
    train: int,
    folds: int | None,
    repeats: int,
    seed: int,
) -> list[Split]:
    """Return splits of protocol "groups": `folds` a repeat, 5 or as many as the groups allow.

    Raises
    ------
    ValueError
        If a class has one patch or one group, or fewer groups than folds; it is named.
    """
    folds = _checked_folds(labels, groups, names, folds)
    splits = []
    for repeat in range(repeats):
        for fold, (rest, tested) in enumerate(_folds(labels, groups, folds, seed, repeat)):
            rng = np.random.default_rng([seed, repeat, fold])
            own = [
                _group_by_group(rest[labels[rest] == c], groups, rng)[:train]
                for c in range(len(names))
            ]
            splits.append(Split(repeat, fold, own, tested))
    return splits


def _checked_folds(
    labels: np.ndarray, groups: np.ndarray, names: list[Any], folds: int | None
) -> int:
    counts = [len(np.unique(groups[labels == c])) for c in range(len(names))]
    single = [repr(names[c]) for c, count in enumerate(counts) if count < 2]
    if single:
        raise ValueError(
            f"classes {', '.join(single)} have patches of one group only (the group is the image "
            "where none is given), so none would be left to train on; label patches of a second "
            "group, or leave the class out"
        )
    fewest = int(np.argmin(counts))
    if folds is None:
        return min(FOLDS, counts[fewest])
    if folds > counts[fewest]:
        raise ValueError(
            f"folds={folds}, but class {names[fewest]!r} has {counts[fewest]} groups; use at most "
            "that many folds"
        )
    return folds


def _folds(
    labels: np.ndarray, groups: np.ndarray, folds: int, seed: int, repeat: int
) -> list[tuple[np.ndarray, np.ndarray]]:
    """Return folds in all of which every class is among the training patches."""
    everything = np.unique(labels)
    for attempt in range(_TRIES):
        state = int(np.random.SeedSequence([seed, repeat, attempt]).generate_state(1)[0])
        splitter = StratifiedGroupKFold(folds, shuffle=True, random_state=state)
        found = list(splitter.split(labels, labels, groups))
        if all(len(np.unique(labels[rest])) == len(everything) for rest, _ in found):
            return found
    raise ValueError(
        f"no way was found to cut the groups into {folds} folds with every class on the training "
        "side; use fewer folds, or label more groups"
    )


def _group_by_group(patches: np.ndarray, groups: np.ndarray, rng: np.random.Generator):
    """Return patches in random order, one of each group in turn, so that few come from many."""
    shuffled = rng.permutation(patches)
    turn = np.zeros(len(shuffled), dtype=np.int64)
    seen: dict[Any, int] = {}
    for k, group in enumerate(groups[shuffled]):
        turn[k] = seen[group] = seen.get(group, -1) + 1
    return shuffled[np.argsort(turn, kind="stable")]

"""Splits: who trains, who is tested, and that they never meet."""

import itertools

import numpy as np
import pytest

from mfeat.trials import FOLDS, grouped_splits, half_splits


def of_halves(classes=3, each=10):
    """Return labels and halves of a pool with as many patches in every half."""
    labels = np.repeat(np.arange(classes), 2 * each)
    return labels, np.tile(np.repeat([0, 1], each), classes)


def of_groups(sizes):
    """Return labels and groups: sizes[c] are the patches of each group of class c."""
    labels, groups = [], []
    for c, own in enumerate(sizes):
        for g, size in enumerate(own):
            labels += [c] * size
            groups += [f"class {c} group {g}"] * size
    return np.array(labels), np.array(groups)


def grouped(labels, groups, train=8, folds=None, repeats=4, seed=0):
    names = [f"class {c}" for c in range(labels.max() + 1)]
    return grouped_splits(labels, groups, names, train, folds, repeats, seed)


def contents(splits):
    return [
        (s.repeat, s.fold, s.test.tolist(), [patches.tolist() for patches in s.train])
        for s in splits
    ]


# Halves -------------------------------------------------------------------------------------


def test_halves_train_on_one_side_and_test_on_the_other_by_turns():
    labels, halves = of_halves()
    splits = half_splits(labels, halves, 4, 6, 6, 0)
    assert [(s.repeat, s.fold) for s in splits] == [(k, 0) for k in range(6)]
    for split in splits:
        train = np.concatenate(split.train)
        assert set(halves[train]) == {split.repeat % 2}
        assert set(halves[split.test]) == {1 - split.repeat % 2}
        assert not set(train) & set(split.test)
        np.testing.assert_array_equal(np.bincount(labels[split.test]), [6, 6, 6])
        for c, patches in enumerate(split.train):
            assert len(set(patches.tolist())) == 4
            assert set(labels[patches]) == {c}


def test_fewer_patches_than_wanted_are_all_taken():
    labels, halves = of_halves(each=5)
    (split,) = half_splits(labels, halves, 16, 16, 1, 0)
    assert [sorted(p.tolist()) for p in split.train] == [
        np.flatnonzero((labels == c) & (halves == 0)).tolist() for c in range(3)
    ]
    assert sorted(split.test) == np.flatnonzero(halves == 1).tolist()


def test_smaller_training_sets_are_parts_of_larger_ones():
    labels, halves = of_halves()
    for split in half_splits(labels, halves, 8, 4, 4, 1):
        sets = [set(split.training(size)) for size in range(1, 10)]
        assert [len(s) for s in sets] == [*(3 * n for n in range(1, 9)), 24]
        assert all(small <= large for small, large in itertools.pairwise(sets))
        assert all(
            (np.bincount(labels[split.training(size)]) == size).all() for size in range(1, 9)
        )


def test_more_training_patches_change_neither_the_first_ones_nor_the_tests():
    labels, halves = of_halves()
    few, many = (half_splits(labels, halves, n, 4, 5, 3) for n in (2, 8))
    for one, two in zip(few, many, strict=True):
        np.testing.assert_array_equal(one.training(2), two.training(2))
        np.testing.assert_array_equal(one.test, two.test)


def test_halves_follow_from_the_seed():
    labels, halves = of_halves()
    one, same, other = (half_splits(labels, halves, 4, 4, 4, seed) for seed in (5, 5, 6))
    assert contents(one) == contents(same)
    assert contents(one) != contents(other)
    # more repeats go on where fewer ended
    assert contents(half_splits(labels, halves, 4, 4, 9, 5))[:4] == contents(one)
    assert len({str(split.test) for split in half_splits(labels, halves, 4, 4, 9, 5)}) == 9


# Groups -------------------------------------------------------------------------------------

POOLS = [
    [[4] * 5, [4] * 5],
    [[4] * 7, [3] * 6, [10, 1, 1, 5, 5]],
    [[1, 60], [5, 5, 5]],
    [[1] * 12, [100] * 3, [2, 3]],
]


@pytest.mark.parametrize("sizes", POOLS, ids=str)
def test_no_group_stands_on_both_sides_and_every_class_trains(sizes):
    labels, groups = of_groups(sizes)
    splits = grouped(labels, groups)
    folds = min(FOLDS, *map(len, sizes))
    assert [(s.repeat, s.fold) for s in splits] == list(itertools.product(range(4), range(folds)))
    for split in splits:
        train = np.concatenate(split.train)
        assert not set(groups[train]) & set(groups[split.test])
        assert len(set(train.tolist())) == len(train)
        assert len(split.train) == len(sizes)
        for c, patches in enumerate(split.train):
            assert set(labels[patches]) == {c}
            there = np.flatnonzero((labels == c) & ~np.isin(groups, groups[split.test]))
            assert len(patches) == min(8, len(there))
        assert len(split.test) > 0
    for repeat in range(4):  # each patch is tested once a repeat
        tested = np.concatenate([s.test for s in splits if s.repeat == repeat])
        assert sorted(tested.tolist()) == list(range(len(labels)))


def test_groups_shared_by_classes_never_stand_on_both_sides():
    # lots, each with good and bad parts
    labels = np.tile([0, 0, 1], 24)
    groups = np.repeat([f"lot {k}" for k in range(6)], 12)
    for split in grouped(labels, groups, folds=3):
        train = np.concatenate(split.train)
        assert not set(groups[train]) & set(groups[split.test])
        assert set(labels[train]) == {0, 1}


def test_few_training_patches_come_from_many_groups():
    labels, groups = of_groups([[20, 2, 9, 1, 6], [8] * 5])
    for split in grouped(labels, groups, train=100, folds=2):
        for c, patches in enumerate(split.train):
            own = groups[patches]
            n_groups = len(set(own))
            assert len(set(own[:n_groups])) == n_groups
            # at any size, a group gives more than another only if that one has no more
            available = {g: (groups == g).sum() for g in set(own)}
            for size in range(1, len(own)):
                counts = {g: (own[:size] == g).sum() for g in available}
                most = max(counts.values())
                assert all(counts[g] >= min(available[g], most - 1) for g in available), c


def test_training_sizes_of_groups_are_nested():
    labels, groups = of_groups(POOLS[1])
    for split in grouped(labels, groups):
        sets = [set(split.training(size)) for size in (1, 2, 4, 8)]
        assert all(small < large for small, large in itertools.pairwise(sets[:3]))
        assert sets[2] <= sets[3]
    few, many = (grouped(labels, groups, train=n) for n in (2, 8))
    for one, two in zip(few, many, strict=True):
        np.testing.assert_array_equal(one.training(2), two.training(2))


def test_groups_follow_from_the_seed():
    labels, groups = of_groups(POOLS[1])
    one, same, other = (grouped(labels, groups, seed=seed) for seed in (5, 5, 6))
    assert contents(one) == contents(same)
    assert contents(one) != contents(other)
    assert contents(grouped(labels, groups, seed=5, repeats=6))[: len(one)] == contents(one)
    repeats = {str([s.test.tolist() for s in one if s.repeat == r]) for r in range(4)}
    assert len(repeats) > 1


def test_folds_may_be_chosen():
    labels, groups = of_groups([[4] * 7, [4] * 6])
    assert len(grouped(labels, groups, repeats=1)) == FOLDS
    assert len(grouped(labels, groups, folds=6, repeats=1)) == 6
    assert len(grouped(labels, groups, folds=2, repeats=3)) == 6


def test_more_folds_than_groups_are_refused():
    labels, groups = of_groups([[4] * 7, [4] * 3])
    with pytest.raises(
        ValueError, match=r"folds=4, but class 'class 1' has 3 groups; use at most that many folds"
    ):
        grouped(labels, groups, folds=4)


def test_classes_of_one_group_are_named():
    labels, groups = of_groups([[4] * 3, [9], [1]])
    with pytest.raises(
        ValueError, match=r"classes 'class 1', 'class 2' have patches of one group only"
    ):
        grouped(labels, groups)


def test_groups_that_cannot_be_cut_are_refused():
    labels = np.array([0, 1, 1, 0, 2, 2])
    groups = np.array(["x", "x", "y", "z", "y", "z"])
    # each class lies in two of three lots; one of two folds holds two lots, and so a whole class
    with pytest.raises(ValueError, match=r"no way was found to cut the groups into 2 folds"):
        grouped(labels, groups, folds=2)

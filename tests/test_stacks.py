"""Collecting patches as users hold them, and sorting them into groups and stacks."""

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from mfeat import stacks

MIXED_SHAPES = [(4, 5), (6, 3), (4, 5), (2, 2), (6, 3), (4, 5)]


def numbered(shapes, dtype=np.float64):
    """Patches that hold their own position, so that a lost or doubled one shows."""
    return [np.full(shape, k, dtype=dtype) for k, shape in enumerate(shapes)]


def places_in(groups, number, n_channels=1):
    """How often each (patch, channel) is in the groups, and check that it is the right image."""
    seen = np.zeros((number, n_channels), dtype=int)
    for group in groups:
        assert len(group.positions) == len(group.images)
        for position, image in zip(group.positions, group.images, strict=True):
            seen[position, group.channel] += 1
            assert (np.asarray(image) == position + 100 * group.channel).all()
    return seen


# Collecting ---------------------------------------------------------------------------------


def test_collecting_copies_no_pixels():
    X = np.zeros((3, 4, 5))
    for given_X in (X, list(X), X[:, ::2, ::2], X.transpose(0, 2, 1)):
        collected = stacks.collect(given_X, None)
        assert len(collected) == 3
        assert collected.n_channels == 1
        assert all(np.shares_memory(images[0], X) for images in collected.images)


def test_channels_are_views_of_the_last_axis():
    X = np.arange(2 * 4 * 5 * 3).reshape(2, 4, 5, 3)
    for given_X in (X, list(X)):
        collected = stacks.collect(given_X, ("r", "g", "b"))
        assert collected.n_channels == 3
        for k in range(2):
            for c in range(3):
                np.testing.assert_array_equal(collected.images[k][c], X[k, :, :, c])
                assert np.shares_memory(collected.images[k][c], X)


def test_bytes_are_swapped_where_they_are_computed():
    X = np.arange(40.0).reshape(2, 4, 5)
    for given_X in (X.astype(">f8"), list(X.astype(">f8"))):
        [group] = stacks.group_patches(stacks.collect(given_X, None), 1)
        [stack] = group.stacks()
        assert stack.values.dtype.isnative
        np.testing.assert_array_equal(stack.values, X)


@pytest.mark.parametrize(("table_size", "sizes"), [(1, [7]), (30, [3, 3, 1]), (1000, [1] * 7)])
def test_groups_are_bounded_by_their_tables_too(monkeypatch, table_size, sizes):
    monkeypatch.setattr(stacks, "STACK_COUNTS", 100)
    groups = stacks.group_patches(stacks.collect(numbered([(4, 5)] * 7), None), table_size)
    assert [len(group.positions) for group in groups] == sizes


def test_masks_stay_with_their_patches():
    X = np.ma.MaskedArray(np.zeros((2, 4, 5)), mask=False)
    X[1, 2, 3] = np.ma.masked
    for given_X in (X, list(X)):
        masks = [np.ma.getmaskarray(images[0]) for images in stacks.collect(given_X, None).images]
        assert [int(mask.sum()) for mask in masks] == [0, 1]


def test_an_object_with_an_array_interface_needs_no_length():
    class Tensor:
        def __init__(self, values):
            self.values = values

        def __array__(self, dtype=None, copy=None):
            return np.asarray(self.values, dtype=dtype)

    X = np.arange(40.0).reshape(2, 4, 5)
    [first, second] = stacks.collect(Tensor(X), None).images
    np.testing.assert_array_equal(first[0], X[0])
    np.testing.assert_array_equal(second[0], X[1])


def test_a_ragged_patch_is_named():
    with pytest.raises(ValueError, match=r"X\[1\] must be an array; it is ragged"):
        stacks.collect([[[1, 2], [3, 4]], [[1, 2], [3]]], None)


# Grouping -----------------------------------------------------------------------------------


def test_groups_are_of_one_shape_and_type_in_the_order_of_x():
    patches = [*numbered(MIXED_SHAPES), np.full((4, 5), 6, dtype=np.uint8)]
    groups = stacks.group_patches(stacks.collect(patches, None), 1)
    # by hand: three shapes of float64, and the one patch of uint8
    assert sorted(group.positions for group in groups) == [[0, 2, 5], [1, 4], [3], [6]]
    assert (places_in(groups, 7) == 1).all()


def test_channels_are_grouped_apart():
    X = np.stack([np.arange(3), 100 + np.arange(3)], axis=-1)[:, None, None, :]
    X = np.broadcast_to(X, (3, 4, 4, 2))
    groups = stacks.group_patches(stacks.collect(X, ("a", "b")), 1)
    found = [(group.channel, group.positions) for group in groups]
    assert found == [(0, [0, 1, 2]), (1, [0, 1, 2])]
    assert (places_in(groups, 3, 2) == 1).all()


@pytest.mark.parametrize(
    ("limit", "sizes"),
    [
        # 20 pixels a patch: a group holds floor(limit / 20), at least one
        (20, [1, 1, 1, 1, 1, 1, 1]),
        (59, [2, 2, 2, 1]),
        (60, [3, 3, 1]),
        (140, [7]),
        (1, [1, 1, 1, 1, 1, 1, 1]),
    ],
)
def test_groups_are_bounded(monkeypatch, limit, sizes):
    monkeypatch.setattr(stacks, "STACK_PIXELS", limit)
    groups = stacks.group_patches(stacks.collect(numbered([(4, 5)] * 7), None), 1)
    assert [len(group.positions) for group in groups] == sizes
    assert [position for group in groups for position in group.positions] == list(range(7))


@settings(max_examples=50, deadline=None)
@given(
    shapes=st.lists(st.tuples(st.integers(2, 6), st.integers(2, 6)), min_size=1, max_size=30),
    limit=st.integers(1, 120),
)
def test_grouping_loses_and_doubles_nothing(shapes, limit):
    patches = stacks.collect(numbered(shapes, np.int16), None)
    with pytest.MonkeyPatch.context() as patch:
        patch.setattr(stacks, "STACK_PIXELS", limit)
        groups = stacks.group_patches(patches, 1)
    assert (places_in(groups, len(shapes)) == 1).all()
    for group in groups:
        assert group.positions == sorted(group.positions)
        assert len({(image.shape, image.dtype) for image in group.images}) == 1
        pixels = sum(image.size for image in group.images)
        assert pixels <= limit or len(group.images) == 1


# Stacking -----------------------------------------------------------------------------------


def the_group(patches):
    [group] = stacks.group_patches(stacks.collect(patches, None), 1)
    return group


def test_complete_patches_are_one_stack_without_a_mask():
    [stack] = the_group(numbered([(3, 3)] * 4)).stacks()
    assert stack.valid is None
    assert stack.places.tolist() == [0, 1, 2, 3]
    np.testing.assert_array_equal(stack.values[:, 0, 0], [0, 1, 2, 3])


def test_patches_with_missing_pixels_are_stacked_apart():
    patches = numbered([(3, 3)] * 4)
    patches[1][0, 2] = np.nan
    patches[2] = np.ma.MaskedArray(patches[2], mask=np.eye(3, dtype=bool))
    complete, incomplete = the_group(patches).stacks()
    assert complete.valid is None
    assert complete.places.tolist() == [0, 3]
    assert complete.values[:, 1, 1].tolist() == [0.0, 3.0]
    assert incomplete.places.tolist() == [1, 2]
    expected = np.ones((2, 3, 3), dtype=np.uint8)
    expected[0, 0, 2] = 0
    expected[1][np.eye(3, dtype=bool)] = 0
    np.testing.assert_array_equal(incomplete.valid, expected)


def test_a_masked_array_that_masks_nothing_is_complete():
    [stack] = the_group([np.ma.MaskedArray(np.ones((3, 3)), mask=False)]).stacks()
    assert stack.valid is None


def test_stacks_cannot_write_to_the_users_pixels():
    patches = numbered([(3, 3)] * 2)
    patches[0][1, 1] = np.nan
    for stack in the_group(patches).stacks():
        assert not stack.values.flags.writeable


@pytest.mark.parametrize("form", [list, np.stack])
def test_an_infinity_is_placed(form):
    patches = numbered([(3, 4)] * 3)
    patches[2][1, 3] = -np.inf
    with pytest.raises(ValueError, match=r"X\[2\] holds -inf at row 1, column 3"):
        the_group(form(patches)).stacks()


def test_an_infinity_under_a_mask_is_missing():
    patch = np.zeros((3, 4))
    patch[1, 3] = np.inf
    [stack] = the_group([np.ma.MaskedArray(patch, mask=np.isinf(patch))]).stacks()
    assert stack.valid.sum() == 11


def test_valid_fractions_are_shares_of_windows():
    valid = np.ones((3, 3, 4), dtype=np.uint8)
    valid[1, 0, 0] = 0  # a corner pixel lies in 1 of 2 x 3 windows
    valid[2, 1, :] = 0  # the middle row lies in all of them
    np.testing.assert_array_equal(stacks.valid_fractions(valid), [1.0, 5 / 6, 0.0])

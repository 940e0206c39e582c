"""The rooted tree: sums, paths, depths, and what is not a tree."""

from __future__ import annotations

import numpy as np
import pytest
from feederhost.flow.tree import Tree, depths, frozen, path, path_sum, subtree_sum
from hypothesis import given
from hypothesis import strategies as st

#        0
#      /   \
#     1     4
#    / \     \
#   2   3     5
#             |
#             6
FORK = Tree(np.array([-1, 0, 1, 1, 0, 4, 5]))
VALUES = np.array([1.0, 2.0, 4.0, 8.0, 16.0, 32.0, 64.0])


def test_subtree_sums_of_a_fork():
    # Powers of two, so that every sum names its members: node 1 holds 1, 2, 3; node 4 4, 5, 6.
    assert subtree_sum(FORK, VALUES).tolist() == [127, 14, 4, 8, 112, 96, 64]


def test_path_sums_of_a_fork_include_both_ends():
    assert path_sum(FORK, VALUES).tolist() == [1, 3, 7, 11, 17, 49, 113]


def test_path_and_depth():
    assert path(FORK, 6) == [4, 5, 6]
    assert path(FORK, 0) == []
    assert depths(FORK).tolist() == [0, 1, 2, 2, 1, 2, 3]


def test_sums_leave_their_argument_alone_and_keep_trailing_axes():
    values = np.stack([VALUES, 10 * VALUES], axis=-1)[:, None, :]
    before = values.copy()
    assert subtree_sum(FORK, values)[:, 0, 1].tolist() == [1270, 140, 40, 80, 1120, 960, 640]
    assert path_sum(FORK, values)[6, 0].tolist() == [113, 1130]
    assert np.array_equal(values, before)


@pytest.mark.parametrize("kind", [float, complex])
def test_many_columns_at_once_sum_as_each_alone(kind: type):
    # Few columns and many take different roads; both must give the same sums.
    rng = np.random.default_rng(1)
    values = rng.normal(size=(7, 3, 40)).astype(kind)
    if kind is complex:
        values += 1j * rng.normal(size=values.shape)
    for total in (subtree_sum, path_sum):
        many = total(FORK, values)
        assert many.shape == values.shape
        for i in range(3):
            for c in (0, 17, 39):
                alone = total(FORK, values[:, i, c])
                assert np.allclose(many[:, i, c], alone, rtol=0, atol=1e-12)


def test_whole_numbers_stay_whole():
    assert subtree_sum(FORK, np.ones(7, int)).tolist() == [7, 3, 1, 1, 3, 2, 1]
    assert path_sum(FORK, np.ones(7, int)).dtype == int


def test_a_lost_column_does_not_spoil_its_neighbours():
    values = np.stack([VALUES, np.full(7, np.nan)], axis=-1)
    assert subtree_sum(FORK, values)[:, 0].tolist() == [127, 14, 4, 8, 112, 96, 64]
    assert path_sum(FORK, values)[:, 0].tolist() == [1, 3, 7, 11, 17, 49, 113]


def test_a_single_node_is_a_tree():
    alone = Tree(np.array([-1]))
    assert alone.size == 1
    assert subtree_sum(alone, np.array([3.0])).tolist() == [3.0]
    assert depths(alone).tolist() == [0]


@pytest.mark.parametrize(
    ("parent", "why"),
    [
        ([], "root"),
        ([0], "root"),
        ([0, -1], "root"),
        ([-1, 1], "parent"),
        ([-1, 2, 1], "parent"),
        ([-1, -1], "parent"),
    ],
)
def test_what_is_not_a_rooted_tree_is_refused(parent: list[int], why: str):
    with pytest.raises(ValueError, match=why):
        Tree(np.array(parent, dtype=int))


def test_the_tree_cannot_be_changed_afterwards():
    given_array = np.array([-1, 0, 1])
    tree = Tree(given_array)
    given_array[2] = 0
    assert tree.parent.tolist() == [-1, 0, 1]
    with pytest.raises(ValueError, match="read-only"):
        tree.parent[2] = 0


def test_frozen_copies():
    values = np.array([1.0, 2.0])
    held = frozen(values)
    values[0] = 9.0
    assert held.tolist() == [1.0, 2.0]
    assert not held.flags.writeable


@st.composite
def trees(draw: st.DrawFn) -> Tree:
    n = draw(st.integers(1, 25))
    return Tree(np.array([-1, *(draw(st.integers(0, k - 1)) for k in range(1, n))]))


@given(trees())
def test_sums_agree_with_the_ancestor_matrix(tree: Tree):
    n = tree.size
    # above[i, k]: k lies on the way from i to the root, both ends counted.
    above = np.eye(n)
    for k in range(1, n):
        above[k] += above[tree.parent[k]]
    values = np.arange(1.0, n + 1)
    assert np.allclose(path_sum(tree, values), above @ values)
    assert np.allclose(subtree_sum(tree, values), above.T @ values)
    assert depths(tree).tolist() == (above.sum(axis=1) - 1).tolist()
    assert all(np.flatnonzero(above[k])[1:].tolist() == path(tree, k) for k in range(n))

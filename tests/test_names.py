"""Near misses of names, found without comparing each with each."""

from __future__ import annotations

import pytest
from feederhost.feeder.names import listed, near_index, nearest, within_one
from hypothesis import given
from hypothesis import strategies as st


@pytest.mark.parametrize(
    ("first", "second", "near"),
    [
        ("kvar", "kvar", True), ("kvar", "kva", True), ("kvar", "kvr", True),
        ("kvar", "kvat", True), ("kvar", "kvra", True), ("kvar", "vkar", True),
        ("kvar", "kvarxx", False), ("kvar", "vkra", False), ("kvar", "kxxr", False),
        ("", "a", True), ("", "", True), ("", "ab", False), ("abcd", "abdx", False),
    ],
)  # fmt: skip
def test_one_letter_apart(first, second, near):
    assert within_one(first, second) is near
    assert within_one(second, first) is near


def test_nearest_prefers_names_that_differ_by_case_and_names_at_most_three():
    index = near_index(["N-7", "N-8", "N-6", "N-5", "x" * 65])
    assert nearest("n-7", index) == ["N-7"]
    assert nearest("n-1", index) == ["N-7", "N-8", "N-6"]
    assert nearest("Y", near_index(["S", "A"])) == []
    assert nearest("cab", near_index(["abc"])) == []
    assert nearest("x" * 64 + "y", index) == []


def test_long_lists_are_cut():
    assert listed("abcdefgh") == "a, b, c, d, e, f, g, h"
    assert listed("abcdefghij") == "a, b, c, d, e, f, g, h and 2 more"


@given(st.text("abA", max_size=5), st.lists(st.text("abA", max_size=5), max_size=6, unique=True))
def test_index_finds_what_comparing_each_with_each_finds(word, names):
    wanted = {n for n in names if within_one(n.casefold(), word.casefold())}
    same = {n for n in names if n.casefold() == word.casefold()}
    found = nearest(word, near_index(names))
    assert set(found) <= (same or wanted)
    if len(word) > 1:
        assert len(found) == min(3, len(same or wanted))

"""tag_states: a tag's newest good sample and since when its value holds, however it was cut."""

from __future__ import annotations

from collections.abc import Sequence
from itertools import pairwise

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st

from audit.records import Role, Samples, TagState
from audit.tag_states import follow, follow_all


def samples(value: Sequence[float], first: int = 0, bad: Sequence[int] = ()) -> Samples:
    good = np.ones(len(value), np.bool_)
    good[list(bad)] = False
    stamps = np.arange(first, first + len(value), dtype=np.int64)
    return Samples(stamps, np.where(good, np.array(value, np.float64), np.nan), good)


def test_the_newest_good_sample_and_the_first_of_the_equal_ones() -> None:
    assert follow(samples([1.0, 2.0, 2.0, 2.0]), None) == TagState(3, 2.0, 1)
    assert follow(samples([2.0, 2.0]), None) == TagState(1, 2.0, 0)
    assert follow(samples([2.0, 3.0, 9.0], bad=[2]), None) == TagState(1, 3.0, 1)


def test_without_a_good_sample_there_is_no_state_or_the_one_before() -> None:
    assert follow(Samples.empty(), None) is None
    before = TagState(5, 2.0, 1)
    assert follow(samples([9.0], first=7, bad=[0]), before) == before


def test_a_value_that_goes_on_holds_since_it_began() -> None:
    before = TagState(5, 2.0, 1)
    assert follow(samples([2.0, 2.0], first=6), before) == TagState(7, 2.0, 1)
    assert follow(samples([3.0, 2.0], first=6), before) == TagState(7, 2.0, 7)
    assert follow(samples([3.0, 3.0], first=6), before) == TagState(7, 3.0, 6)


def test_samples_older_than_the_newest_change_nothing_until_they_reach_it() -> None:
    before = TagState(5, 2.0, 3)
    assert follow(samples([7.0, 7.0], first=3), before) == before
    assert follow(samples([7.0, 7.0, 7.0], first=3), before) == TagState(5, 7.0, 3)


def test_what_is_only_partly_replaced_is_not_called_held_for_longer() -> None:
    """Stored: 2.0 since 5. A file with 2.0 from 0 on may leave other samples between."""
    assert follow(samples([1.0, *[2.0] * 8]), TagState(7, 2.0, 5)) == TagState(8, 2.0, 5)


VALUES = st.lists(st.sampled_from([0.0, 1.0, 2.0]), min_size=1, max_size=30)


@given(VALUES, st.sets(st.integers(0, 29)), st.lists(st.integers(0, 30), max_size=5))
def test_pieces_in_order_lead_to_the_state_of_the_whole(
    values: list[float], bad: set[int], cuts: list[int]
) -> None:
    whole = samples(values, bad=[i for i in bad if i < len(values)])
    state: TagState | None = None
    edges = sorted({0, len(values), *(cut for cut in cuts if cut < len(values))})
    for start, stop in pairwise(edges):
        state = follow(whole.between(start, stop - 1), state)
    assert state == follow(whole, None)
    assert follow(whole, state) == state


@given(VALUES, st.integers(1, 10), st.integers(0, 10))
def test_pieces_that_overlap_lead_to_the_state_of_the_whole(
    values: list[float], size: int, overlap: int
) -> None:
    whole = samples(values)
    state: TagState | None = None
    for start in range(0, len(values), size):
        state = follow(whole.between(start - overlap, start + size - 1), state)
    assert state == follow(whole, None)


@pytest.mark.parametrize("first", [0, 4])
def test_only_the_states_that_changed_are_given(first: int) -> None:
    before = {Role.PV: TagState(3, 1.0, 0), Role.MODE: TagState(3, 1.0, 0)}
    fresh = {
        Role.PV: samples([1.0] * 4, first=first),
        Role.SP: samples([5.0]),
        Role.OUTPUT: Samples.empty(),
    }
    moved = {Role.PV: TagState(7, 1.0, 0)} if first else {}
    assert follow_all(fresh, before) == {**moved, Role.SP: TagState(0, 5.0, 0)}

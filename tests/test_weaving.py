"""Which export holds where, and the record put together around what is new."""

from __future__ import annotations

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from audit.records import (
    Between,
    CellAccount,
    Coverage,
    ExportFile,
    ExportRead,
    RawSamples,
    Reading,
    Record,
    Role,
    Samples,
    Windows,
)
from audit.weaving.precedence import FreshExport, settle
from audit.weaving.spans import inside, subtract, union
from audit.weaving.stretches import context, dependence, edges, to_look_at, weave

SPANS = st.lists(
    st.tuples(st.integers(0, 60), st.integers(0, 12)).map(lambda s: (s[0], s[0] + s[1])), max_size=6
)


def samples(*stamps: int, value: float = 1.0) -> Samples:
    t_us = np.array(stamps, np.int64)
    return Samples(t_us, np.full(len(t_us), value), np.ones(len(t_us), np.bool_))


def export(path: str, stamps: tuple[int, ...], value: float, revision: int = 0) -> FreshExport:
    read = ExportRead(
        content_hash=path,
        first_us=min(stamps),
        last_us=max(stamps),
        named=("A",),
        columns={"A": RawSamples(samples(*stamps, value=value))},
        account=CellAccount(rows=len(stamps), read=len(stamps), taken=len(stamps)),
    )
    return FreshExport(ExportFile("dcs", path, 1, "1", revision), read)


@given(SPANS, SPANS)
def test_span_arithmetic_agrees_with_sets_of_instants(
    one: list[tuple[int, int]], other: list[tuple[int, int]]
) -> None:
    def instants(spans: list[tuple[int, int]]) -> set[int]:
        return {t for a, b in spans for t in range(a, b + 1)}

    assert instants(union(one)) == instants(one)
    assert instants(subtract(one, other)) == instants(one) - instants(other)
    t_us = np.arange(-2, 80, dtype=np.int64)
    assert set(t_us[inside(t_us, union(one))].tolist()) == instants(one)


def test_of_two_files_the_later_path_holds_where_both_cover() -> None:
    fresh = [export("b.csv", (0, 5, 10), 2.0), export("a.csv", (4, 8, 12), 1.0)]
    settled = settle(fresh, [])
    tags, accounts = settled.tags, settled.accounts
    raw = tags["A"].load().samples
    assert raw.t_us.tolist() == [0, 5, 10, 12]
    assert raw.value.tolist() == [2.0, 2.0, 2.0, 1.0]
    assert (accounts[1].taken, accounts[1].replaced, accounts[1].balance) == (1, 2, 0)
    assert accounts[0].replaced == 0
    assert tags["A"].spans == ((0, 12),)


def test_revision_goes_before_the_path() -> None:
    fresh = [export("a.csv", (0, 10), 1.0, 2), export("b.csv", (0, 10), 2.0, 1)]
    assert settle(fresh, []).tags["A"].load().samples.value.tolist() == [1.0, 1.0]


@pytest.mark.parametrize(
    ("path", "held"), [("a.csv", [0, 3, 17, 20]), ("z.csv", [0, 3, 7, 13, 17, 20])]
)
def test_stored_coverage_wins_or_loses_by_the_same_rule(path: str, held: list[int]) -> None:
    stored = [Coverage("A", 5, 15, "dcs", "m.csv", 0)]
    settled = settle([export(path, (0, 3, 7, 13, 17, 20), 1.0)], stored)
    assert settled.tags["A"].load().samples.t_us.tolist() == held
    assert settled.accounts[0].replaced == 6 - len(held)


def test_new_content_of_a_path_also_clears_where_only_the_old_reached() -> None:
    stored = [Coverage("A", 0, 100, "dcs", "m.csv", 0), Coverage("B", 0, 100, "dcs", "m.csv", 0)]
    tags = settle([export("m.csv", (40, 50), 1.0)], stored).tags
    assert tags["A"].spans == ((0, 100),)
    assert tags["B"].spans == ((0, 100),)
    assert len(tags["B"].load().samples) == 0


def test_weave_replaces_kept_samples_only_in_the_replaced_spans() -> None:
    kept = [Record({Role.PV: samples(0, 5, 10)}), Record({Role.PV: samples(10, 20)})]
    record = weave(kept, {Role.PV: samples(6, 9, value=2.0)}, {Role.PV: [(4, 9)]})
    assert record.of(Role.PV).t_us.tolist() == [0, 6, 9, 10, 20]
    assert record.of(Role.PV).value.tolist() == [1.0, 2.0, 2.0, 1.0, 1.0]


WINDOWS = Windows(before_us=10, after_us=100, join_us=5)


@settings(max_examples=60)
@given(
    st.sets(st.integers(0, 2000), min_size=5, max_size=150),
    st.integers(0, 2000),
    st.integers(0, 400),
)
def test_edges_hold_all_that_a_change_across_the_border_needs(
    stamps: set[int], cut: int, hole: int
) -> None:
    """A hole filled later: what kept edges and new samples give equals the whole record."""
    whole = Record({Role.PV: samples(*sorted(stamps))})
    parts = [
        [t for t in sorted(stamps) if t < cut],
        [t for t in sorted(stamps) if cut <= t <= cut + hole],
        [t for t in sorted(stamps) if t > cut + hole],
    ]
    if not all(parts):
        return
    before, new, after = (samples(*part) for part in parts)
    first = Record({Role.PV: Samples(*(np.concatenate(p) for p in _fields(before, after)))})
    spans = [(part[0], part[-1]) for part in (parts[0], parts[2])]
    kept = [edge.record for edge in edges(first, spans, WINDOWS)]
    woven = weave(kept, {Role.PV: new}, {Role.PV: [(parts[1][0], parts[1][-1])]})
    for a, b in to_look_at(woven, [(parts[1][0], parts[1][-1])], WINDOWS):
        for at in (a, (a + b) // 2, b):
            low, high = at - 15, at + 105
            assert (
                woven.around(low, high).of(Role.PV).t_us.tolist()
                == whole.around(low, high).of(Role.PV).t_us.tolist()
            )


def _fields(one: Samples, other: Samples) -> list[tuple[np.ndarray, np.ndarray]]:
    return [(one.t_us, other.t_us), (one.value, other.value), (one.good, other.good)]


def test_context_reaches_past_what_is_looked_at_by_a_whole_window() -> None:
    (looked,) = to_look_at(Record({}), [(1000, 2000)], WINDOWS)
    (known,) = context([(1000, 2000)], WINDOWS)
    assert known[0] <= looked[0] - WINDOWS.before_us - WINDOWS.join_us
    assert known[1] >= looked[1] + WINDOWS.after_us + WINDOWS.join_us


def test_the_next_setpoint_sample_is_looked_at_however_far() -> None:
    record = Record({Role.SP: samples(1500, 9000, 9500)})
    spans = to_look_at(record, [(1000, 2000)], WINDOWS)
    assert any(a <= 9000 <= b for a, b in spans)
    assert not any(a <= 9500 <= b for a, b in spans)


def test_dependence_is_open_where_the_bounding_sample_is_not_known() -> None:
    record = Record(
        {
            Role.PV: samples(80, 90, 150, 230),
            Role.SP: samples(10, 100),
            Role.OUTPUT: samples(84, 200),
        }
    )
    roles = (Role.PV, Role.SP, Role.OUTPUT)
    assert dependence(record, 100, roles, WINDOWS, Reading()) == (10, 230)
    linear = Reading(output_between=Between.LINEAR)
    assert dependence(record, 100, roles, WINDOWS, linear) == (10, None)
    assert dependence(record, 100, (*roles, Role.MODE), WINDOWS, Reading())[0] is None

"""Slices of a record: put together and cut as by going through its samples one by one."""

from __future__ import annotations

import numpy as np
from hypothesis import given
from hypothesis import strategies as st

from audit.records import Record, Role, Samples
from audit.weaving.spans import inside, pick
from audit.weaving.stretches import weave

STAMPS = st.sets(st.integers(0, 40), max_size=30)
FEW = st.lists(STAMPS, max_size=5)


def samples(stamps: set[int], value: float, bad: int = 7) -> Samples:
    t_us = np.array(sorted(stamps), np.int64)
    good = t_us % bad != 0
    return Samples(t_us, np.where(good, value, np.nan), good)


def listed(found: Samples) -> list[tuple[int, str, bool]]:
    rows = zip(found.t_us.tolist(), found.value.tolist(), found.good.tolist(), strict=True)
    return [(stamp, repr(value), good) for stamp, value, good in rows]


@given(FEW, STAMPS, st.tuples(st.integers(0, 40), st.integers(0, 12)), st.booleans())
def test_a_woven_record_holds_each_sample_once_and_the_fresh_ones_where_they_replace(
    kept: list[set[int]], fresh: set[int], span: tuple[int, int], blocks: bool
) -> None:
    """Whether the slices overlap, enclose one another, or follow one another (``blocks``)."""
    start, end = span[0], span[0] + span[1]
    new = samples({stamp for stamp in fresh if start <= stamp <= end}, -1.0)
    if blocks:
        kept = [{s for s in part if s // 8 == place} for place, part in enumerate(kept)]
    parts = [samples(part, float(place)) for place, part in enumerate(kept)]
    expected: dict[int, tuple[int, str, bool]] = {row[0]: row for row in listed(new)}
    for part in parts:
        left = pick(part, ~inside(part.t_us, [(start, end)]))
        for row in listed(left):
            expected.setdefault(row[0], row)
    record = weave(
        [Record({Role.SP: part}) for part in parts], {Role.SP: new}, {Role.SP: [(start, end)]}
    )
    assert listed(record.of(Role.SP)) == [expected[stamp] for stamp in sorted(expected)]
    assert set(record.signals) == {Role.SP}


@given(STAMPS, st.integers(-3, 43), st.integers(0, 20), st.sampled_from([1, 2, 3, 50]))
def test_a_slice_reaches_to_the_good_samples_next_to_it(
    stamps: set[int], from_us: int, length: int, bad: int
) -> None:
    whole = samples(stamps, 1.0, bad)
    to_us = from_us + length
    good = [int(stamp) for stamp in whole.t_us[whole.good]]
    start = max((stamp for stamp in good if stamp < from_us), default=from_us)
    end = min((stamp for stamp in good if stamp > to_us), default=to_us)
    expected = [row for row in listed(whole) if start <= row[0] <= end]
    assert listed(whole.around(from_us, to_us)) == expected

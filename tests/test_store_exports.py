"""Exports in the store: states, accounts, what they cover, which content of a path holds."""

from __future__ import annotations

from dataclasses import replace

import store_samples as some
from sqlalchemy import text

from audit.records import CellAccount, Coverage
from audit.store import Store, queries, writes

PV, SP = "FIC-101.PV", "FIC-101.SP"
SPAN = (some.T0, some.T0 + some.HOUR_US)


def covered(tag: str, path: str = "exports/a.csv", span: tuple[int, int] = SPAN) -> Coverage:
    return Coverage(tag, *span, "dcs", path, 0)


def test_an_export_is_reading_until_it_is_taken(store: Store) -> None:
    with some.writing(store) as session:
        export_id = writes.begin_export(session, some.file(), some.read(), some.NOW)
        (begun,) = queries.exports(session)
        writes.finish_exports(session, [export_id], some.LATER)
        (taken,) = queries.exports(session)
    assert (begun.state, taken.state) == ("reading", "taken")
    assert (taken.path, taken.size, taken.stamp, taken.content_hash) == (
        "exports/a.csv",
        1234,
        "1",
        "h1",
    )
    assert (taken.first_us, taken.last_us, taken.id) == (*SPAN, export_id)
    assert taken.account == some.read().account
    assert taken.account.balance == 0
    assert taken.read_at == some.LATER


def test_coverage_is_of_each_named_tag_over_the_whole_file(store: Store) -> None:
    other = (some.T0 + 2 * some.HOUR_US, some.T0 + 3 * some.HOUR_US)
    with some.writing(store) as session:
        writes.begin_export(session, some.file(), some.read(), some.NOW)
        writes.begin_export(
            session, some.file("exports/b.csv"), some.read("h2", other, [PV]), some.NOW
        )
        writes.begin_export(session, some.file("exports/c.csv"), some.read("h3", None), some.NOW)
    b = covered(PV, "exports/b.csv", other)
    with store.read() as session:
        assert queries.coverage(session) == [covered(PV), b, covered(SP)]
        assert queries.coverage(session, [SP]) == [covered(SP)]
        assert queries.coverage(session, []) == []
        assert queries.coverage(session, from_us=SPAN[1] + 1) == [b]
        assert queries.coverage(session, [PV], to_us=other[0] - 1) == [covered(PV)]


def test_new_content_of_a_path_replaces_the_old(store: Store) -> None:
    shorter = (some.T0, some.T0 + 60)
    with some.writing(store) as session:
        first = writes.begin_export(session, some.file(), some.read(), some.NOW)
        second = writes.begin_export(
            session, some.file(stamp="2"), some.read("h2", shorter, [PV]), some.LATER
        )
        (current,) = queries.exports(session)
        assert (current.id, current.content_hash) == (second, "h2")
        old = [covered(PV), covered(SP)]
        known = queries.coverage(session)
        assert [one for one in known if one in old] == old
        assert [one for one in known if one not in old] == [covered(PV, span=shorter)]
        writes.finish_exports(session, [second], some.LATER)
        assert queries.coverage(session) == [covered(PV, span=shorter)]
        again = writes.begin_export(session, some.file(stamp="3"), some.read(), some.LATER)
        (current,) = queries.exports(session)
        assert (again, current.id, current.stamp) == (first, first, "3")
        writes.finish_exports(session, [again], some.LATER)
        assert queries.coverage(session) == [covered(PV), covered(SP)]
        assert session.execute(text("SELECT count(*) FROM export")).scalar_one() == 2


def test_a_refused_file_keeps_what_its_path_covered(store: Store) -> None:
    with some.writing(store) as session:
        writes.begin_export(session, some.file(), some.read(), some.NOW)
        for reason in ("cut off in the middle", "still cut off"):
            writes.refuse_export(session, some.file(stamp="2"), reason, some.LATER)
        (current,) = queries.exports(session)
        assert (current.state, current.reason) == ("refused", "still cut off")
        assert (current.stamp, current.content_hash) == ("2", None)
        assert current.account == CellAccount()
        assert queries.coverage(session) == [covered(PV), covered(SP)]
        assert queries.newest_stamp(session, SPAN[1]) == SPAN[1]
        empty = writes.begin_export(session, some.file(), some.read("h2", None), some.LATER)
        (current,) = queries.exports(session)
        assert (current.state, current.reason) == ("reading", None)
        writes.finish_exports(session, [empty], some.LATER)
        assert queries.coverage(session) == []


def test_the_newest_stamp_is_a_good_one_and_not_in_the_future(store: Store) -> None:
    future = some.T0 + 10**6 * some.HOUR_US
    with some.writing(store) as session:
        assert queries.newest_stamp(session, future) is None
        writes.begin_export(session, some.file(), some.read(good=False), some.NOW)
        assert queries.newest_stamp(session, future) == SPAN[0]
        later = some.read("h2", (some.T0 + 5, future))
        writes.begin_export(session, some.file("exports/b.csv"), later, some.NOW)
        assert queries.newest_stamp(session, future) == some.T0 + 5
        assert queries.newest_stamp(session, some.T0 + 4) == some.T0
        assert [seen.future_stamps for seen in queries.exports(session)] == [0, 2]


def test_a_tag_is_read_as_the_source_that_brings_it_now_declares(store: Store) -> None:
    later = (SPAN[0], SPAN[1] + 1)
    with some.writing(store) as session:
        writes.begin_export(session, some.file(), some.read(), some.NOW)
        other = replace(some.file("exports/b.csv"), source="lab")
        writes.begin_export(session, other, some.read("h2", later, [PV]), some.NOW)
        assert queries.tag_sources(session) == {PV: "lab", SP: "dcs"}


def test_exports_that_name_the_same_tags_share_one_set(store: Store) -> None:
    with some.writing(store) as session:
        for number in range(3):
            one = some.file(f"exports/{number}.csv")
            writes.begin_export(session, one, some.read(f"h{number}"), some.NOW)
        writes.begin_export(session, some.file(), some.read("h9", named=[PV]), some.NOW)
        assert session.execute(text("SELECT count(*) FROM tag_of_set")).scalar_one() == 3
        assert len(queries.coverage(session)) == 7

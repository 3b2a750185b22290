"""Published nights, the run log, and the canonical dump."""

from __future__ import annotations

import json
from collections.abc import Iterator
from datetime import date, timedelta
from pathlib import Path

import pytest
import store_samples as some
from conftest import Postgres
from store_samples import LATER, NOW, standing, unseen

from audit.errors import UnknownLoop
from audit.records import LoopResult
from audit.store import Store, open_store, queries, writes
from audit.store.dump import dump
from audit.store.entries import NightInfo, RunInfo

NIGHT = date(2026, 3, 2)
LIST = [standing("FIC-102"), standing(), unseen("FIC-100")]


@pytest.fixture
def site(store: Store) -> Store:
    """A store with three loops in it."""
    with some.writing(store) as session:
        some.enter(session, "FIC-100", "FIC-101", "FIC-102")
    return store


def test_a_list_comes_back_in_its_order(site: Store) -> None:
    with some.writing(site) as session:
        assert queries.standings(session) is None
        assert writes.save_night(session, NIGHT, NOW, LIST, LATER) == 1
    with site.read() as session:
        assert queries.standings(session) == (NightInfo(NIGHT, 1, 1, NOW, LATER), LIST)
        assert queries.standings(session, NIGHT + timedelta(days=1)) is None


def test_an_equal_list_adds_nothing_and_a_changed_one_stands_beside_it(site: Store) -> None:
    revised = [some.changed(LIST[0]), *LIST[1:]]
    with some.writing(site) as session:
        for standings, revision in ((LIST, 1), (LIST, 1), (revised, 2), (revised, 2), (LIST, 3)):
            assert writes.save_night(session, NIGHT, NOW, standings, LATER) == revision
        reordered = [LIST[1], LIST[0], LIST[2]]
        assert writes.save_night(session, NIGHT, NOW, reordered, LATER) == 4
        assert writes.save_night(session, NIGHT, LATER, reordered, LATER) == 5
    with site.read() as session:
        newest, published = queries.standings(session), queries.standings(session, first=True)
        assert queries.nights(session) == [NightInfo(NIGHT, 5, 5, LATER, LATER)]
    assert newest == (NightInfo(NIGHT, 5, 5, LATER, LATER), reordered)
    assert published == (NightInfo(NIGHT, 1, 5, NOW, LATER), LIST)


def test_the_newest_night_is_given_when_none_is_asked_for(site: Store) -> None:
    before = NIGHT - timedelta(days=1)
    with some.writing(site) as session:
        writes.save_night(session, NIGHT, NOW, LIST, LATER)
        writes.save_night(session, before, NOW, [unseen("FIC-100", before)], LATER)
    with site.read() as session:
        assert [info.night for info in queries.nights(session)] == [before, NIGHT]
        newest, earlier = queries.standings(session), queries.standings(session, before)
    assert newest is not None
    assert earlier is not None
    assert (newest[0].night, earlier[1]) == (NIGHT, [unseen("FIC-100", before)])


def test_a_list_with_a_stranger_or_another_nights_standing_is_refused(site: Store) -> None:
    with some.writing(site) as session:
        with pytest.raises(UnknownLoop, match="FIC-999"):
            writes.save_night(session, NIGHT, NOW, [unseen("FIC-999")], NOW)
        with pytest.raises(ValueError, match="2026-03-01"):
            writes.save_night(session, NIGHT, NOW, [unseen("FIC-100", date(2026, 3, 1))], NOW)
        assert queries.nights(session) == []


def test_the_run_log_tells_how_runs_ended(store: Store) -> None:
    with some.writing(store) as session:
        first = writes.start_run(session, NOW, "nightly")
        second = writes.start_run(session, LATER, "demo")
        writes.end_run(session, first, LATER, "failed", {"files": 2}, "disk full")
    with store.read() as session:
        assert queries.runs(session) == [
            RunInfo(second, "demo", LATER, None, "running", {}, None),
            RunInfo(first, "nightly", NOW, LATER, "failed", {"files": 2}, "disk full"),
        ]
        assert len(queries.runs(session, limit=1)) == 1


def fill(store: Store, path: str = "exports/a.csv") -> list[str]:
    """A little of everything; returns the dump."""
    with some.writing(store) as session:
        some.enter(session, "FIC-100", "FIC-101", "FIC-102")
        export_id = writes.begin_export(session, some.file(path), some.read(), NOW)
        steps = (some.measured_step(), some.measured_step(some.T0 + some.HOUR_US, value=1 / 3))
        days = (some.day(1), some.day(2))
        writes.save_loop(session, LoopResult("FIC-101", steps, days=days), NOW)
        writes.save_night(session, NIGHT, NOW, LIST, NOW)
        writes.finish_exports(session, [export_id], NOW)
    with store.read() as session:
        return list(dump(session))


@pytest.fixture
def both(tmp_path: Path, sqlite_migrated: Path, postgres: Postgres) -> Iterator[list[Store]]:
    """One store on each database."""
    path = tmp_path / "one.db"
    path.write_bytes(sqlite_migrated.read_bytes())
    name = postgres.create_migrated()
    with open_store(f"sqlite:///{path}") as one, open_store(postgres.url(name)) as other:
        yield [one, other]
    postgres.drop(name)


def test_equal_content_gives_equal_dumps_on_both_databases(both: list[Store]) -> None:
    one, other = (fill(store) for store in both)
    assert one == other
    kinds = [next(iter(json.loads(line))) for line in one]
    assert kinds == [*["loop"] * 3, *["spec"] * 3, "step", "step", "day", "day", *["standing"] * 3]
    first = json.loads(one[6])["step"]
    assert (first["tag"], first["at"]) == ("FIC-101", "2026-03-01T08:00:00Z")
    assert first["measured"]["overshoot_pct"] == {
        "value": 5e-324,
        "low": -0.0,
        "high": 1.7976931348623157e308,
        "how": "direct",
        "why": None,
    }
    assert '"low": -0.0, "high": 1.7976931348623157e+308' in one[6]
    assert first["verdicts"]["rise_time_s"]["limit"] == 12.1


def test_the_dump_leaves_out_how_the_content_came_in(store: Store) -> None:
    lines = fill(store)
    with some.writing(store) as session:
        writes.save_loop(session, some.result(some.measured_step(value=5.0)), LATER)
        writes.save_night(session, NIGHT, NOW, LIST[:1], LATER)
        writes.start_run(session, LATER, "nightly")
    with store.read() as session:
        assert list(dump(session)) != lines
    with some.writing(store) as session:
        writes.save_loop(session, some.result(some.measured_step()), LATER)
        writes.save_night(session, NIGHT, NOW, LIST, LATER)
        writes.begin_export(session, some.file("elsewhere/b.csv"), some.read(), LATER)
    with store.read() as session:
        assert list(dump(session)) == lines
    assert not any(word in line for line in lines for word in ("exports/", "2026-03-02T02"))

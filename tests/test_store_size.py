"""The size of the store, its growth a year, and the newest step of each loop."""

from __future__ import annotations

from collections.abc import Sequence
from datetime import datetime, timedelta
from itertools import pairwise
from pathlib import Path

import numpy as np
import pytest
import store_samples as some
from sqlalchemy import text
from store_samples import HOUR_US, NOW, T0, measured_step, result

from audit.records import DAY_US, ChangeKind, LoopResult, instant, to_us
from audit.reports import store_size
from audit.store import Store, queries, writes
from audit.store.entries import NewestStep, RunInfo
from audit.store.size import Content, Size, size

TAGS = [f"FIC-{number}" for number in range(101, 131)]
DAYS = 20


@pytest.fixture
def filled(store: Store) -> Store:
    """Thirty loops, each with three steps a day over twenty days, edges, days, and two lists."""
    with some.writing(store) as session:
        some.enter(session, *TAGS)
        for number, tag in enumerate(TAGS):
            stamps = [T0 + n * 8 * HOUR_US + number * 1_000_000 for n in range(3 * DAYS)]
            steps = tuple(measured_step(at_us) for at_us in stamps)
            edges = tuple(some.edge(at_us) for at_us in stamps[::3])
            days = tuple(some.day(number) for number in range(1, DAYS + 1))
            writes.save_loop(session, LoopResult(tag, steps, edges=edges, days=days), NOW)
        for night in (NOW.date(), NOW.date() + timedelta(days=1)):
            list_ = [some.standing(tag, night) for tag in TAGS]
            writes.save_night(session, night, NOW, list_, NOW)
    return store


def sized(store: Store) -> Size:
    with store.read() as session:
        newest = queries.newest_steps(session)
        steps = queries.step_counts(session)["measurements"]
        return size(session, steps, max(step.at_us for step in newest.values()))


def test_rows_are_told_from_some_loops_and_bytes_make_up_the_whole(filled: Store) -> None:
    found = sized(filled)
    rows = {one.kind: one.rows for one in found.contents}
    with filled.read() as session:
        for kind, table in (
            ("samples", "curve"),
            ("measurements", "measurement"),
            ("verdicts", "verdict"),
            ("edges", "edge"),
            ("days", "day_record"),
            ("lists", "standing"),
        ):
            counted = session.execute(text(f"SELECT count(*) FROM {table}")).scalar_one()
            assert rows[kind] == counted > 0
        used = queries.size_bytes(session)
    assert sum(one.size_bytes for one in found.contents) == found.used_bytes == used
    assert all(one.size_bytes >= 0 for one in found.contents)
    ordered = [one.size_bytes for one in found.contents[:-1]]
    assert all(more >= less for more, less in pairwise(ordered))


def test_the_whole_size_is_what_the_database_says(filled: Store, store_kind: str) -> None:
    """Against the file's size, and PostgreSQL's size of the database, which holds more."""
    found = sized(filled)
    if store_kind == "sqlite":
        filled.close()  # the log goes into the file when the last one leaves
        file = Path(filled.url.removeprefix("sqlite:///"))
        assert found.free_bytes is not None
        assert found.used_bytes + found.free_bytes == file.stat().st_size
        assert found.sampled
        return
    with filled.read() as session:
        whole = session.execute(text("SELECT pg_database_size(current_database())")).scalar_one()
    assert 0.3 * whole < found.used_bytes < whole
    assert found.free_bytes is None
    assert not found.sampled


def test_a_kind_takes_more_than_its_blobs_but_not_many_times_as_much(filled: Store) -> None:
    """Against the lengths of them all, as the database adds them up."""
    sizes = {one.kind: one.size_bytes for one in sized(filled).contents}
    columns = {
        "samples": "SELECT sum(length(data)) FROM curve",
        "edges": "SELECT sum(length(data)) FROM edge",
        "measurements": "SELECT sum(length(CAST(measured AS text))) FROM measurement",
    }
    with filled.read() as session:
        for kind, query in columns.items():
            held = session.execute(text(query)).scalar_one()
            assert held < sizes[kind] < 6 * held, kind


def test_an_empty_store_has_a_size_and_no_history(store: Store) -> None:
    with store.read() as session:
        found = queries.size(session, 0, None)
    assert found.recent_days == 0
    assert found.used_bytes > 0
    assert [one.rows for one in found.contents] == [0] * len(found.contents)
    assert store_size.growth(found, []) == {
        "bytes_a_year": None,
        "how": "not_enough_history",
        "days": 0.0,
    }


def test_growth_is_estimated_from_the_days_of_record(filled: Store) -> None:
    found = sized(filled)
    told = store_size.growth(found, [])
    assert told["how"] == "estimated"
    # the first of three steps a day is at 8 o'clock, the last 8 h before the end of the 20th day
    assert told["days"] == pytest.approx(DAYS - 1 / 3, abs=0.05)
    resting = [one for one in found.contents if one.kind not in ("other", "exports")]
    whole = sum(one.size_bytes for one in resting)
    assert told["bytes_a_year"] == pytest.approx(whole / told["days"] * 365, rel=0.02)


def test_growth_counts_only_what_belongs_to_the_last_days() -> None:
    contents = (Content("samples", 100, 4_000_000, 0.25), Content("other", 0, 9_000_000, 0.0))
    found = Size(13_000_000, 0, contents, 90.0, True)
    assert store_size.growth(found, []) == {
        "bytes_a_year": round(1_000_000 / 90 * 365),
        "how": "estimated",
        "days": 90.0,
    }
    assert store_size.growth(Size(1, 0, contents, 6.9, True), [])["bytes_a_year"] is None


def run(day: int, bytes_: int | None, kind: str = "nightly") -> RunInfo:
    at = datetime(2026, 6, 1, tzinfo=NOW.tzinfo) + timedelta(days=day)
    counts = {} if bytes_ is None else {store_size.BYTES_COUNTED: bytes_}
    return RunInfo(day, kind, at, at, "finished", counts, None)


@pytest.mark.parametrize(
    ("runs", "a_year"),
    [
        ([run(10, 500), run(5, None), run(0, 400)], 3650),
        ([run(100, 500), run(11, 322), run(0, 0)], 730),  # not more than 90 days back
        ([run(10, 400), run(0, 500)], -3650),
        ([run(10, 500), run(4, 450), run(3, None, "prune"), run(0, 400)], None),
        ([run(6, 500), run(0, 400)], None),
        ([run(10, 500)], None),
    ],
)
def test_growth_is_measured_where_runs_counted_the_size(
    runs: Sequence[RunInfo], a_year: int | None
) -> None:
    told = store_size.growth(Size(1, 0, (), 0.0, True), runs)
    assert told["bytes_a_year"] == a_year
    assert told["how"] == ("not_enough_history" if a_year is None else "measured")


def test_the_newest_step_of_each_loop_is_the_last_of_its_history(store: Store) -> None:
    rng = np.random.default_rng(5)
    tags = TAGS[:8]
    with some.writing(store) as session:
        some.enter(session, *tags)
        for tag in tags[:-1]:
            stamps = T0 + rng.permutation(9)[: rng.integers(1, 9)].astype(int) * HOUR_US
            writes.save_loop(
                session, result(*(measured_step(int(at)) for at in stamps), tag=tag), NOW
            )
            newest = int(max(stamps))
            if rng.random() < 0.5:
                writes.save_loop(session, LoopResult(tag, withdrawn=(newest,)), NOW)
            else:
                writes.save_loop(session, result(measured_step(newest, 12.5), tag=tag), NOW)
    with store.read() as session:
        found = queries.newest_steps(session)
        expected = {tag: queries.history(session, tag)[-1:] for tag in tags}
    assert found == {
        tag: NewestStep(step.change.at_us, step.usable, step.change.kind)
        for tag, steps in expected.items()
        for step in steps
    }
    assert tags[-1] not in found
    assert len(found) > 3


def test_loops_without_a_step_for_long_are_named() -> None:
    end = datetime(2026, 3, 31, tzinfo=NOW.tzinfo)
    days = {"A": 0, "B": 7, "C": 8, "D": 30, "E": 31, "F": 400, "gone": 900}
    newest = {
        tag: NewestStep(to_us(end) - back * DAY_US, tag != "F", ChangeKind.STEP)
        for tag, back in days.items()
    }
    told = store_size.newest_steps(newest, [*"ABCDEF", "never"], end)
    assert {key: told[key] for key in ("loops", "with_steps", "last_7_days", "last_30_days")} == {
        "loops": 7,
        "with_steps": 6,
        "last_7_days": 2,
        "last_30_days": 4,
    }
    assert [one["tag"] for one in told["longest_without"]] == ["F", "E", "D", "C", "B"]
    assert told["longest_without"][0] == {
        "tag": "F",
        "at": instant(newest["F"].at_us).isoformat().replace("+00:00", "Z"),
        "usable": False,
        "kind": "step",
    }
    assert told["as_of"] == "2026-03-31T00:00:00Z"
    assert store_size.newest_steps({}, [], None)["as_of"] is None

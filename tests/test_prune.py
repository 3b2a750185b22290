"""What is pruned by age and kind, what stays, and what late data may still change afterwards."""

from __future__ import annotations

from collections.abc import Sequence
from contextlib import AbstractContextManager
from dataclasses import replace
from datetime import UTC, date, datetime, timedelta
from pathlib import Path
from types import SimpleNamespace

import numpy as np
import pytest
import store_samples as some
from conftest import Postgres
from sqlalchemy import text
from sqlalchemy.orm import Session
from store_samples import HOUR_US, NOW, T0, measured_step, result

import sites
from audit import retention, trend
from audit.cli.ages import age
from audit.cli.arguments import PRUNED
from audit.cli.print_pruning import WHAT
from audit.errors import AuditError, StoreUnready
from audit.records import (
    DAY_US,
    LIMITED,
    ChangeKind,
    LoopResult,
    Measured,
    PastStep,
    Quantity,
    Record,
    Role,
    Samples,
)
from audit.retention import Kind, Pruning, baseline_steps
from audit.site import Site, open_site
from audit.store import Lease, Store, open_store, queries, take_lease, writes
from audit.store.closed import Closed, closed_time
from audit.store.dump import dump
from audit.store.entries import SavedLoop
from audit.store.vacuum import vacuum

TAG = "FIC-101"
NIGHT = NOW.date()
OLD_US = T0 - 400 * DAY_US
TODAY = datetime(2026, 3, 3, 12, tzinfo=UTC)
LOOPS = f"tag,pv,sp\n{TAG},p,s\n"
SPECS = "tag,valid_from,rise_time_s,set_by,reason\n"


@pytest.fixture
def site(tmp_path: Path) -> Site:
    return open_site(sites.SiteFiles(LOOPS, SPECS, sites.WIDE).lay(tmp_path / "site"), {})


def old(count: int, every_us: int = DAY_US) -> list[int]:
    """Instants of steps more than a year before the newest night."""
    return [OLD_US + n * every_us for n in range(count)]


def fill(store: Store, stamps: Sequence[int], tag: str = TAG) -> None:
    """A ranked night, and steps of one loop with an edge on either side of each."""
    with some.writing(store) as session:
        some.enter(session, TAG, "FIC-102")
        steps = tuple(measured_step(at_us) for at_us in stamps)
        edges = [some.edge(at_us + HOUR_US, "to") for at_us in stamps]
        edges += [some.edge(at_us - HOUR_US, "from") for at_us in stamps]
        writes.save_loop(session, LoopResult(tag, steps, edges=tuple(edges)), NOW)
        writes.save_night(session, NIGHT, NOW, [some.standing()], NOW)


def prune(
    site: Site, store: Store, *kinds: Kind, older: str = "13m", dry_run: bool = False
) -> dict[str, int]:
    """Rows that went, by kind."""
    done = pruned(site, store, *kinds, older=older, dry_run=dry_run)
    return {one.kind.value: one.counts.rows for one in done.kinds}


def pruned(
    site: Site,
    store: Store,
    *kinds: Kind,
    older: str,
    dry_run: bool = False,
    make_smaller: bool = False,
) -> Pruning:
    asked = age(older)
    before = date.fromisoformat(older) if asked is None else asked.before(TODAY.date())
    return retention.prune(
        site, store, kinds, before, now=TODAY, dry_run=dry_run, make_smaller=make_smaller
    )


def rows(store: Store, table: str, where: str = "1 = 1") -> int:
    with store.read() as session:
        query = text(f"SELECT count(*) FROM {table} WHERE {where}")
        return int(session.execute(query).scalar_one())


def content(store: Store) -> list[str]:
    with store.read() as session:
        return list(dump(session))


def test_replaced_measurements_go_with_what_only_they_rest_on(site: Site, store: Store) -> None:
    fill(store, [OLD_US, T0])
    long_ago = NOW - timedelta(days=500)
    with some.writing(store) as session:
        # measured three times: twice from the same samples, and then from others
        for value, seed in ((12.0, 1), (13.0, 2)):
            again = measured_step(OLD_US, value, seed)
            writes.save_loop(session, result(again), long_ago)
        writes.save_loop(session, LoopResult(TAG, withdrawn=(T0,)), NOW)
    before = content(store)
    assert (rows(store, "measurement"), rows(store, "curve")) == (4, 3)
    assert prune(site, store, Kind.SUPERSEDED) == {"superseded": 2}
    assert content(store) == before
    # the samples of the first two are gone, those of the current one and the one withdrawn not
    assert (rows(store, "measurement"), rows(store, "curve")) == (2, 2)
    assert rows(store, "verdict") == 4
    assert prune(site, store, Kind.SUPERSEDED, older=TODAY.date().isoformat()) == {"superseded": 1}
    assert (rows(store, "measurement"), rows(store, "curve")) == (1, 1)
    assert content(store) == before
    # the numbers of what is gone are free again
    with some.writing(store) as session:
        assert writes.save_loop(session, result(measured_step(T0)), NOW) == SavedLoop(new=1)


def test_samples_that_a_current_measurement_rests_on_stay(site: Site, store: Store) -> None:
    fill(store, [OLD_US])
    with some.writing(store) as session:
        writes.save_loop(session, result(measured_step(OLD_US, 12.0)), NOW - timedelta(days=500))
    assert (rows(store, "measurement"), rows(store, "curve")) == (2, 1)
    assert prune(site, store, Kind.SUPERSEDED) == {"superseded": 1}
    with store.read() as session:
        kept = queries.curve(session, TAG, OLD_US)
    assert kept is not None
    assert some.same_record(kept, measured_step(OLD_US).curve)


def test_samples_go_and_measurements_stay(site: Site, store: Store) -> None:
    stamps = [*old(4), T0]
    fill(store, stamps)
    before = content(store)
    done = pruned(site, store, Kind.SAMPLES, older=str(date(2025, 1, 27)))
    assert [(one.kind, one.counts.rows) for one in done.kinds] == [
        (Kind.SAMPLES, 2),
        (Kind.EDGES, 4),
    ]
    assert content(store) == before
    with store.read() as session:
        held = [queries.curve(session, TAG, at_us) is not None for at_us in stamps]
        assert held == [False, False, True, True, True]
        assert [one.at_us for one in queries.past_steps(session, TAG)] == stamps
    assert prune(site, store, Kind.SAMPLES, older="2025-01-27") == {"samples": 0, "edges": 0}


def test_what_the_newest_night_rests_on_keeps_its_samples(site: Site, store: Store) -> None:
    """The steps of ``[standing] days``, 30 unless set, and a loop's newest however old."""
    fill(store, [T0 - days * DAY_US for days in (40, 32, 29, 2)])
    with some.writing(store) as session:
        lonely = result(measured_step(OLD_US), measured_step(OLD_US + 1), tag="FIC-102")
        writes.save_loop(session, lonely, NOW)
    done = pruned(site, store, Kind.SAMPLES, older="1d")
    samples, edges = done.kinds
    assert samples.before == edges.before == date(2026, 1, 30)
    assert samples.counts.rows == 2 + 1
    with store.read() as session:
        assert queries.curve(session, "FIC-102", OLD_US + 1) is not None
        assert queries.curve(session, TAG, T0 - 29 * DAY_US) is not None


def test_nothing_a_standing_rests_on_goes_before_a_night_was_ranked(
    site: Site, store: Store
) -> None:
    with some.writing(store) as session:
        some.enter(session, TAG)
        writes.save_loop(session, result(*map(measured_step, old(3))), NOW)
    done = pruned(site, store, Kind.SAMPLES, Kind.STEPS, older="13m")
    assert {one.before for one in done.kinds} == {None}
    assert rows(store, "curve", "length(data) > 0") == 3


def test_late_data_change_nothing_where_samples_are_gone(site: Site, store: Store) -> None:
    stamps = [*old(3), T0]
    fill(store, stamps)
    assert prune(site, store, Kind.SAMPLES, older="2025-01-27")["samples"] == 2
    last = stamps[1] + HOUR_US  # an edge
    reach = some.WINDOWS.reach_us
    before = content(store)
    with store.read() as session:
        closed = closed_time(session, TAG)
        assert closed == Closed(last, last + reach)
        assert closed_time(session, "FIC-102") is None
        assert queries.touched(session, TAG, last - DAY_US, last) == []
        touched = queries.touched(session, TAG, last, stamps[2])
        assert [one.at_us for one in touched] == [stamps[2]]
    late = [
        measured_step(stamps[0], 99.0, seed=8),
        measured_step(last + reach, 99.0, seed=8),
    ]
    with some.writing(store) as session:
        saved = writes.save_loop(
            session,
            LoopResult(TAG, tuple(late), withdrawn=(stamps[1],), edges=(some.edge(last),)),
            NOW,
        )
        assert saved == SavedLoop(closed=2)
    assert content(store) == before
    with some.writing(store) as session:
        later = measured_step(last + reach + 1, 99.0)
        assert writes.save_loop(session, result(later), NOW) == SavedLoop(new=1)


def test_nothing_from_before_the_end_of_closed_time_is_given_to_late_data(
    site: Site, store: Store
) -> None:
    """What a kept slice says the setpoint holds may have changed where slices are missing."""
    stamps = [*old(3, 5 * DAY_US), T0]
    fill(store, stamps)
    first_edge = stamps[0] - HOUR_US
    with store.read() as session:
        assert len(queries.edges_next_to(session, TAG, stamps[0] + DAY_US, stamps[0] + DAY_US)) == 5
    assert prune(site, store, Kind.SAMPLES, older="2025-02-01")["samples"] == 2
    with some.writing(store) as session:  # an edge that is left, from before the closed time's end
        session.execute(
            text(
                "INSERT INTO edge SELECT loop_id, :border, side, :border, :border, data FROM edge "
                "WHERE border_us = (SELECT max(border_us) FROM edge WHERE side = 'to')"
            ).bindparams(border=first_edge)
        )
    with store.read() as session:
        closed_us = stamps[1] + HOUR_US
        for from_us, to_us, slices in (
            (first_edge, closed_us, 0),  # within closed time
            (closed_us + 1, closed_us + 2, 3),  # nothing before it; two edges, one step after it
            (stamps[2] + DAY_US, stamps[2] + DAY_US, 4),
        ):
            assert len(queries.edges_next_to(session, TAG, from_us, to_us)) == slices
        assert queries.kept(session, TAG, first_edge, closed_us) == []
        assert len(queries.kept(session, TAG, first_edge, stamps[2])) == 2


def test_edges_go_but_for_the_newest_at_which_the_next_export_goes_on(
    site: Site, store: Store
) -> None:
    stamps = old(3)
    fill(store, stamps)
    assert prune(site, store, Kind.EDGES) == {"edges": 5}
    assert prune(site, store, Kind.EDGES, older="1d") == {"edges": 0}
    with store.read() as session:
        assert queries.edges(session, TAG) == [(stamps[-1] + HOUR_US, "to")]
        assert rows(store, "curve", "length(data) > 0") == 3
        newest = queries.edges_next_to(session, TAG, T0, T0)
        assert len(newest) == 2  # that edge, and the newest step, which lies after closed time


def test_steps_go_but_for_the_baselines_and_the_newest(site: Site, store: Store) -> None:
    stamps = [OLD_US - DAY_US + n * HOUR_US // 2 for n in range(100)]
    fill(store, stamps)
    before = content(store)
    assert prune(site, store, Kind.STEPS, older="1y") == {"steps": 39, "edges": 199}
    with store.read() as session:
        left = [one.at_us for one in queries.past_steps(session, TAG)]
    # every step of store_samples is usable: the first 60, and the newest
    assert left == [*stamps[:60], stamps[-1]]
    assert rows(store, "curve") == rows(store, "measurement") == 61
    assert rows(store, "verdict") == 122
    assert set(content(store)) < set(before)
    with store.read() as session:
        assert closed_time(session, TAG) is not None


def test_steps_younger_than_a_year_are_refused(site: Site, store: Store) -> None:
    fill(store, [OLD_US, T0])
    for older in ("364d", "11m", "2025-03-05"):
        with pytest.raises(AuditError, match="year") as raised:
            prune(site, store, Kind.STEPS, older=older)
        assert raised.value.exit_code == 2
    assert rows(store, "measurement") == 2


def past(at: int, rng: np.random.Generator, usable: bool, known: Sequence[Quantity]) -> PastStep:
    values = {q: float(np.exp(rng.normal(0, 0.1))) * (1 + at / 300) for q in known}
    measured = {q: Measured(v, 0.98 * v, 1.02 * v, "direct") for q, v in values.items()}
    at_us = at * DAY_US
    return PastStep(at_us, at_us + 1, 50, 55, ChangeKind.STEP, usable, (), measured, 2.0)


@pytest.mark.parametrize("seed", range(4))
def test_a_loop_keeps_its_baselines_when_its_steps_are_pruned(seed: int) -> None:
    """Against the trend itself: the level, its interval and its steps come out the same."""
    rng = np.random.default_rng(seed)
    steps = [
        past(at, rng, bool(rng.random() < 0.7), [q for q in LIMITED if rng.random() < 0.6])
        for at in range(400)
    ]
    stays = baseline_steps(steps)
    assert 60 < len(stays) < 200
    left = [one for one in steps if one.at_us in stays or one.at_us >= 350 * DAY_US]
    whole, short = (trend.assess(some_, some.loop(), LIMITED) for some_ in (steps, left))
    for quantity, found in whole.quantities.items():
        again = short.quantities[quantity]
        assert found.baseline_steps >= 10
        assert (again.baseline, again.baseline_low, again.baseline_high, again.baseline_steps) == (
            found.baseline,
            found.baseline_low,
            found.baseline_high,
            found.baseline_steps,
        )


def publish(store: Store, days: Sequence[int], revisions: int) -> None:
    with some.writing(store) as session:
        some.enter(session, TAG)
        for back in days:
            night = NIGHT - timedelta(days=back)
            list_ = [some.standing(night=night)]
            for number in range(revisions):
                list_ = [replace(list_[0], usable_steps=number)]
                writes.save_night(session, night, NOW - timedelta(days=back), list_, NOW)


def test_revisions_go_but_for_the_first_and_the_newest(site: Site, store: Store) -> None:
    publish(store, [800, 10, 0], revisions=4)
    before = content(store)
    assert prune(site, store, Kind.REVISIONS, older="2y") == {"revisions": 2}
    assert prune(site, store, Kind.REVISIONS, older="1d") == {"revisions": 2}
    with store.read() as session:
        for back, count in ((800, 2), (10, 2), (0, 4)):
            night = NIGHT - timedelta(days=back)
            for first, steps in ((True, 0), (False, 3)):
                found = queries.standings(session, night, first)
                assert found is not None
                assert (found[0].revisions, found[1][0].usable_steps) == (count, steps)
    assert content(store) == before
    assert rows(store, "standing") == 8


def test_lists_of_nights_go_but_never_the_newest(site: Site, store: Store) -> None:
    publish(store, [900, 800], revisions=3)
    before = content(store)
    done = prune(site, store, Kind.LISTS, Kind.REVISIONS, older="2y")
    assert done == {"lists": 3}
    with store.read() as session:
        assert [info.night for info in queries.nights(session)] == [NIGHT - timedelta(days=800)]
    assert content(store) == before


def test_lines_of_the_run_log_go_but_for_the_newest_twenty(site: Site, store: Store) -> None:
    with some.writing(store) as session:
        some.enter(session, TAG)
        for day in range(500, 470, -1):
            writes.start_run(session, TODAY - timedelta(days=day), "nightly")
    assert prune(site, store, Kind.RUNS) == {"runs": 11}  # the line of this pruning is the newest
    with store.read() as session:
        left = queries.runs(session, 99)
    assert [run.kind for run in left] == ["prune", *["nightly"] * 19]
    assert left[-1].started_at == TODAY - timedelta(days=489)


def test_replaced_export_contents_go_once_they_cover_nothing(site: Site, store: Store) -> None:
    long_ago = NOW - timedelta(days=500)
    named = [("a.PV", "a.SP"), ("a.PV", "b.SP"), ("a.PV",)]
    with some.writing(store) as session:
        some.enter(session, TAG)
        for number, tags in enumerate(named):
            read = some.read(f"h{number}", named=tags)
            taken = writes.begin_export(session, some.file(), read, long_ago)
            if number < 2:
                writes.finish_exports(session, [taken], long_ago)
        # the third is not finished: what the second covered is still needed
    assert prune(site, store, Kind.EXPORTS) == {"exports": 1}
    assert rows(store, "export") == 2
    assert rows(store, "tag_set") == 2
    assert rows(store, "tag_of_set") == 3
    with some.writing(store) as session:
        writes.finish_exports(session, [taken], long_ago)
    assert prune(site, store, Kind.EXPORTS) == {"exports": 1}
    with store.read() as session:
        (seen,) = queries.exports(session)
        assert [cover.tag for cover in queries.coverage(session)] == ["a.PV"]
    assert seen.content_hash == "h2"


ALL = [kind for kind in Kind if kind not in (Kind.STEPS, Kind.LISTS)]


def fill_all(store: Store) -> None:
    fill(store, [*old(9), T0])
    publish(store, [800, 0], revisions=4)
    with some.writing(store) as session:
        for value in (12.0, 13.0):
            again = measured_step(OLD_US, value, seed=int(value))
            writes.save_loop(session, result(again), NOW - timedelta(days=500))


def test_a_dry_run_counts_what_goes_and_changes_nothing(site: Site, store: Store) -> None:
    fill_all(store)
    before = [content(store), rows(store, "curve"), rows(store, "run"), rows(store, "edge")]
    looked = pruned(site, store, *ALL, older="13m", dry_run=True)
    after = [content(store), rows(store, "curve"), rows(store, "run"), rows(store, "edge")]
    assert after == before
    assert sum(one.counts.rows > 0 for one in looked.kinds) == 4
    done = pruned(site, store, *ALL, older="13m")
    assert done.kinds == looked.kinds
    assert content(store) == before[0]
    assert {one.counts for one in pruned(site, store, *ALL, older="13m").kinds} == {(0, 0)}


def test_small_portions_take_out_the_same(
    site: Site, store: Store, monkeypatch: pytest.MonkeyPatch
) -> None:
    fill_all(store)
    looked = pruned(site, store, *ALL, older="13m", dry_run=True)
    monkeypatch.setattr("audit.store.prune.PORTION", 2)
    monkeypatch.setattr("audit.store.prune_steps.PORTION", 2)
    written = []
    write = Store.write

    def counted(self: Store, lease: Lease) -> AbstractContextManager[Session]:
        written.append(lease)
        return write(self, lease)

    monkeypatch.setattr(Store, "write", counted)
    assert pruned(site, store, *ALL, older="13m").kinds == looked.kinds
    assert len(written) > 12


def test_who_reads_meanwhile_sees_one_state_of_it(site: Site, store: Store) -> None:
    fill_all(store)
    with store.read() as session:
        before = list(dump(session))
        curves = [queries.curve(session, TAG, at_us) for at_us in old(9)]
        prune(site, store, *ALL)
        assert list(dump(session)) == before
        again = [queries.curve(session, TAG, at_us) for at_us in old(9)]
    assert None not in again
    assert len(again) == len(curves)


def test_a_pruning_is_a_run_with_its_line(site: Site, store: Store) -> None:
    fill_all(store)
    prune(site, store, Kind.SAMPLES, Kind.SUPERSEDED)
    with store.read() as session:
        (run,) = queries.runs(session)
    assert (run.kind, run.state, run.error) == ("prune", "finished", None)
    assert {key: count for key, count in run.counts.items() if key != "bytes_freed"} == {
        "superseded": 2,
        "samples": 9,
        "edges": 18,
    }
    assert run.counts["bytes_freed"] > 1000


def test_a_pruning_that_fails_says_so_in_its_line(
    site: Site, store: Store, monkeypatch: pytest.MonkeyPatch
) -> None:
    fill_all(store)

    def fails(*_: object) -> None:
        raise AuditError("the disk is full")

    monkeypatch.setattr(retention, "cut_some", fails)
    with pytest.raises(AuditError, match="full"):
        prune(site, store, Kind.SAMPLES)
    with store.read() as session:
        (run,) = queries.runs(session)
    assert (run.state, run.error) == ("failed", "the disk is full")


def test_a_store_that_is_held_or_of_another_site_is_left_alone(
    site: Site, store: Store, tmp_path: Path
) -> None:
    fill(store, [*old(3), T0])
    with take_lease(store, "an audit"), pytest.raises(StoreUnready, match="an audit"):
        prune(site, store, Kind.SAMPLES)
    other = sites.SiteFiles(LOOPS, SPECS, sites.WIDE, name="Other Works").lay(tmp_path / "other")
    for dry_run in (True, False):
        with pytest.raises(StoreUnready, match="Quay Test Works"):
            prune(open_site(other, {}), store, Kind.SAMPLES, dry_run=dry_run)
    with pytest.raises(AuditError, match="still to come"):
        prune(site, store, Kind.SAMPLES, older="2026-03-04")
    assert rows(store, "curve", "length(data) > 0") == 4


def test_vacuum_makes_an_sqlite_file_smaller(
    site: Site, store: Store, store_kind: str, monkeypatch: pytest.MonkeyPatch
) -> None:
    fill(store, [*old(60, HOUR_US), T0])
    with some.writing(store) as session:
        heavy = [replace(measured_step(at), curve=noise(at)) for at in old(60, HOUR_US)]
        writes.save_loop(session, result(*heavy), NOW)
    if store_kind == "postgresql":
        assert pruned(site, store, Kind.SAMPLES, older="13m", make_smaller=True).vacuumed is False
        return
    file = Path(store.url.removeprefix("sqlite:///"))
    assert pruned(site, store, Kind.SAMPLES, older="13m").vacuumed is None
    with store.read() as session:
        used, free = queries.size_bytes(session), queries.size(session, 1, None).free_bytes
    assert free is not None
    assert free > 60 * 30_000
    monkeypatch.setattr("shutil.disk_usage", lambda _: SimpleNamespace(free=10))
    with pytest.raises(StoreUnready, match="free beside it"):
        vacuum(store)
    monkeypatch.undo()
    kept = content(store)
    assert pruned(site, store, Kind.SAMPLES, older="13m", make_smaller=True).vacuumed is True
    assert file.stat().st_size <= used < used + free
    assert content(store) == kept


def noise(at_us: int) -> Record:
    """A curve of 5000 samples that does not get smaller when packed."""
    t_us = at_us + np.arange(5000, dtype=np.int64)
    value = np.random.default_rng(at_us).random(5000)
    return Record({Role.PV: Samples(t_us, value, np.ones(5000, np.bool_))})


@pytest.mark.parametrize("today", [date(2026, 3, 31), date(2024, 2, 29), date(2025, 1, 1)])
def test_an_age_is_counted_back_as_the_calendar_does(today: date, postgres: Postgres) -> None:
    """Against PostgreSQL's intervals."""
    written = ["1d", "90d", "1m", "13m", "18m", "1y", "2y", "4y", "100y"]
    counted = text("SELECT (CAST(:today AS date) - CAST(:back AS interval))::date")
    with open_store(postgres.url("postgres")) as store, store.read() as session:
        for one in written:
            unit = {"d": "days", "m": "months", "y": "years"}[one[-1]]
            values = {"today": today, "back": f"{one[:-1]} {unit}"}
            found = age(one)
            assert found is not None
            assert found.before(today) == session.execute(counted, values).scalar_one()


@pytest.mark.parametrize(
    "written", ["", "d", "0d", "90", "-1d", "1w", "1.5y", "9999y", "1\u0663d", "1y "]
)
def test_what_is_no_age(written: str) -> None:
    assert age(written) is None


def test_the_command_knows_the_kinds_of_the_store() -> None:
    assert list(PRUNED) == [kind.value for kind in Kind] == list(WHAT)

"""Who holds the lease and whether that run still exists; locks that nobody lets go of."""

from __future__ import annotations

import os
import signal
import subprocess
import sys
import threading
import time
from dataclasses import replace
from datetime import timedelta

import pytest
import store_samples as some
from sqlalchemy import event, text

from audit.errors import StoreUnready
from audit.store import Lease, Store, lease, open_store, queries, take_lease, writes
from audit.store.failures import StoreFailed
from audit.store.holder import Holder, Life, Pulse, here, life, look

PULSE = Pulse("quay/boot-1/pid:[1]", 4711, 900)


# --- the decision ---------------------------------------------------------------------------


@pytest.mark.parametrize(
    ("seen", "found"),
    [
        ((True, 900), Life.ALIVE),
        ((True, None), Life.ALIVE),
        ((True, 901), Life.GONE),
        ((False, None), Life.GONE),
    ],
)
def test_a_holder_of_this_table_is_looked_up(seen: tuple[bool, int | None], found: Life) -> None:
    own = replace(PULSE, thread=1, started=5000)
    assert (
        life(Holder("a run", PULSE), own, lambda thread: seen if thread == 4711 else (True, 1))
        is found
    )


@pytest.mark.parametrize(
    "table", ["jetty/boot-1/pid:[1]", "quay/boot-2/pid:[1]", "quay/boot-1/pid:[2]"]
)
def test_a_holder_of_another_table_is_out_of_sight(table: str) -> None:
    def never(_: int) -> tuple[bool, int | None]:
        raise AssertionError("looked up in the wrong table")

    for holder in (Holder("a run", replace(PULSE, table=table)), Holder("a run")):
        assert life(holder, PULSE, never) is Life.OUT_OF_SIGHT
    assert life(Holder("a run", PULSE), None, never) is Life.OUT_OF_SIGHT


def test_a_holder_comes_back_as_it_was_kept() -> None:
    for holder in (Holder("quay process 7 \N{EM DASH} «nightly»", PULSE), Holder("a run")):
        assert Holder.of(holder.kept()) == holder
    assert Holder.of("quay process 7") == Holder("quay process 7")


# --- the table of processes -----------------------------------------------------------------


def test_a_thread_began_when_the_kernels_clock_says() -> None:
    """Against CLOCK_BOOTTIME (clock_gettime(2)), to the clock tick."""
    ticks = os.sysconf("SC_CLK_TCK")
    found: list[Pulse | None] = []
    before = time.clock_gettime(time.CLOCK_BOOTTIME)
    thread = threading.Thread(target=lambda: found.append(here()))
    thread.start()
    thread.join()
    after = time.clock_gettime(time.CLOCK_BOOTTIME)
    (pulse,) = found
    assert pulse is not None
    assert before - 1.5 / ticks <= pulse.started / ticks <= after
    main = here()
    assert main is not None
    assert (main.table, main.thread == pulse.thread) == (pulse.table, False)


def test_what_is_looked_up_is_there_until_it_has_ended() -> None:
    child = subprocess.Popen([sys.executable, "-c", "input()"], stdin=subprocess.PIPE)
    exists, started = look(child.pid)
    assert (exists, started is not None) == (True, True)
    child.send_signal(signal.SIGSTOP)
    assert look(child.pid) == (True, started)
    child.kill()
    os.waitid(os.P_PID, child.pid, os.WEXITED | os.WNOWAIT)  # ended, not yet collected
    assert look(child.pid)[0] is False
    child.communicate()
    assert look(child.pid) == (False, None)


def test_a_process_of_another_user_is_there() -> None:
    """Process 1 may be another user's; it is never gone."""
    assert look(1)[0] is True


# --- taking over ----------------------------------------------------------------------------


def stalled(store: Store, holder: Holder, ttl_s: float) -> Lease:
    with store._writing() as connection:
        claimed = lease.claim(connection, holder, ttl_s)
    assert isinstance(claimed, Lease)
    return claimed


def test_the_hold_of_a_thread_that_has_ended_is_taken_over_at_once(store: Store) -> None:
    found: list[Pulse | None] = []
    thread = threading.Thread(target=lambda: found.append(here()))
    thread.start()
    thread.join()
    assert found[0] is not None
    while look(found[0].thread)[0]:  # the system may take a moment longer than Python
        time.sleep(0.001)
    old = stalled(store, Holder("the dead run", found[0]), 3600.0)
    with take_lease(store, "the next run") as new:
        assert new.fence == old.fence + 1
        with (
            pytest.raises(StoreFailed, match="the dead run no longer holds the store"),
            store.write(old),
        ):
            pass


def test_a_holder_out_of_sight_is_waited_for_until_its_time_has_run_out(store: Store) -> None:
    old = stalled(store, Holder("jetty process 9", replace(PULSE, table="jetty")), 0.4)
    told: list[tuple[str, int, int]] = []
    with take_lease(store, "the next run", told=lambda *words: told.append(words)) as new:
        assert new.fence == old.fence + 1
    assert ("waiting for jetty process 9", 0, 0) in told


def test_a_holder_out_of_sight_that_shows_life_is_not_waited_for(store: Store) -> None:
    old = stalled(store, Holder("jetty process 9", replace(PULSE, table="jetty")), 600.0)

    def renewed(*_: object) -> None:
        with store._writing() as connection:
            assert lease.renew(connection, old)

    with (
        pytest.raises(StoreUnready, match=r"held by jetty process 9 since \d{4}-.* UTC — wait"),
        take_lease(store, "the next run", told=renewed),
    ):
        pass


def test_the_run_at_work_is_told_from_one_that_was_cut_off(store: Store) -> None:
    def running() -> int | None:
        with store.read() as session:
            return lease.running(session)

    assert running() is None
    with take_lease(store, "a run") as held:
        with store.write(held) as session:
            first = writes.start_run(session, some.NOW, "nightly")
        assert running() == first
    assert running() is None  # ended without a word in the log: cut off
    with take_lease(store, "the next run") as held:
        with store.write(held) as session:
            second = writes.start_run(session, some.NOW, "nightly")
        assert running() == second
        with store.write(held) as session:
            writes.end_run(session, second, some.NOW + timedelta(hours=1), "finished", {})
        assert running() is None
    with store.read() as session:
        assert [run.ended_at is None for run in queries.runs(session)] == [False, True]


# --- locks, silence, safety -----------------------------------------------------------------


def test_a_writer_that_never_ends_its_transaction_is_said(
    migrated_url: str, monkeypatch: pytest.MonkeyPatch
) -> None:
    monkeypatch.setattr("audit.store.engine.BUSY_S", 0.2)
    with (
        open_store(migrated_url) as one,
        open_store(migrated_url) as other,
        take_lease(one, "the slow run") as held,
        one.write(held) as session,
    ):
        writes.enter_site(session, "Quay Test Works")
        with (
            pytest.raises(StoreFailed, match=r"is busy: .* another process is in the middle of a"),
            take_lease(other, "the next run"),
        ):
            pass
    with open_store(migrated_url) as store, store.read() as session:
        assert queries.site_name(session) == "Quay Test Works"


@pytest.mark.parametrize("store_kind", ["postgresql"])
def test_a_writer_that_falls_silent_shuts_nobody_out(
    store: Store, monkeypatch: pytest.MonkeyPatch
) -> None:
    monkeypatch.setattr("audit.store.engine.SILENT_S", 0.1)

    def fall_silent(held: Lease) -> None:
        with store.write(held) as session:
            writes.enter_site(session, "Quay Test Works")
            time.sleep(0.5)
            session.execute(text("SELECT 1"))

    with take_lease(store, "the silent run") as held:
        with pytest.raises(StoreFailed, match="idle-in-transaction"):
            fall_silent(held)
        with store.write(held) as session:
            assert queries.site_name(session) is None


@pytest.mark.parametrize("store_kind", ["postgresql"])
def test_a_database_that_may_only_be_read_is_said(store: Store) -> None:
    with store._engine.connect() as connection:
        name = connection.exec_driver_sql("SELECT current_database()").scalar_one()
        connection.exec_driver_sql(
            f'ALTER DATABASE "{name}" SET default_transaction_read_only = on'
        )
        connection.commit()
    store.close()
    with (
        pytest.raises(StoreFailed, match="the database may only be read, as a copy"),
        take_lease(store, "a run"),
    ):
        pass


@pytest.mark.parametrize("store_kind", ["sqlite"])
def test_the_end_of_a_run_waits_for_the_disk(store: Store) -> None:
    """SQLite's manual, pragma synchronous: FULL syncs the log at the commit, NORMAL does not."""
    statements: list[str] = []

    def note(_: object, __: object, statement: str, *___: object) -> None:
        statements.append(statement.split("\n", maxsplit=1)[0])

    event.listen(store._engine, "before_cursor_execute", note)
    with take_lease(store, "a run") as held, store.write(held) as session:
        writes.enter_site(session, "Quay Test Works")
    waits = [words for words in statements if "synchronous" in words]
    assert waits == ["PRAGMA synchronous = NORMAL"] * 2 + ["PRAGMA synchronous = FULL"]
    with store.read() as session:
        assert session.execute(text("PRAGMA journal_mode")).scalar_one() == "wal"

"""The nightly job stopped in the middle: killed, suspended, out of disk, its database gone.

Whatever happens, the next run completes the night, and the store's content is that of a run nobody
disturbed. Killed: SIGKILL at random instants over the whole of a run (seeded).
"""

from __future__ import annotations

import time
from collections.abc import Callable, Iterator
from contextlib import contextmanager

import pytest
from conftest import STORE_KINDS, Postgres
from killing import (
    Child,
    Night,
    PostgresStores,
    SqliteStores,
    instants,
    kill_and_go_on,
    prepare,
)
from private_postgres import PrivateServer, private_server
from sqlalchemy import event, text

import sites
from audit import nightly
from audit.errors import StoreUnready
from audit.site import open_site
from audit.store import Store, lease, open_store, queries, take_lease
from audit.store.failures import StoreFailed

KILLS = 5


@pytest.fixture(scope="module")
def on_sqlite(tmp_path_factory: pytest.TempPathFactory) -> Night:
    folder = tmp_path_factory.mktemp("sqlite")
    return prepare(folder / "site", SqliteStores(folder))


@pytest.fixture(scope="module")
def on_postgresql(postgres: Postgres, tmp_path_factory: pytest.TempPathFactory) -> Night:
    return prepare(tmp_path_factory.mktemp("postgresql") / "site", PostgresStores(postgres))


@pytest.fixture(params=STORE_KINDS)
def night(request: pytest.FixtureRequest) -> Night:
    """A night to be done, on each database."""
    found = request.getfixturevalue(f"on_{request.param}")
    assert isinstance(found, Night)
    return found


@contextmanager
def copied(night: Night) -> Iterator[str]:
    """A store that awaits the night's audit."""
    url = night.stores.copy(night.before)
    yield url
    night.stores.drop(url)


@pytest.fixture
def url(night: Night) -> Iterator[str]:
    with copied(night) as url:
        yield url


def content(night: Night, url: str) -> tuple[str, ...]:
    return tuple(sites.content(night.folder, url))


def states(url: str) -> list[str]:
    with open_store(url) as store, store.read() as session:
        return [run.state for run in queries.runs(session)]


def test_the_night_is_one_that_can_go_wrong(night: Night, url: str) -> None:
    """New changes, changes measured again, and every piece of the record in the content."""
    report = sites.audit(night.folder, url)
    assert (report.files_new, report.files_refused) == (5, ())
    assert report.steps_new > 10
    assert report.steps_changed > 4
    assert content(night, url) == night.wanted


# --- killed ---------------------------------------------------------------------------------


def test_killed_at_any_instant_the_next_run_completes_the_night(night: Night) -> None:
    kills = [kill_and_go_on(night, at_s) for at_s in instants(KILLS, night.took_s, seed=20)]
    assert [kill.wrong for kill in kills] == [()] * KILLS
    assert any(kill.left_open for kill in kills)
    assert any(kill.lease_left for kill in kills)


# --- two at once, and suspended -------------------------------------------------------------


def test_a_suspended_run_shuts_others_out_until_its_hold_has_run_out(
    night: Night, url: str
) -> None:
    child = Child(night.folder, url, pause_at=2)
    pid = child.pid
    try:
        child.wait_until_paused()
        with pytest.raises(StoreUnready, match=rf"is held by \S+ process {pid} since 20"):
            sites.audit(night.folder, url)
        with open_store(url) as store, store._writing() as connection:
            connection.execute(text("UPDATE lease SET expires_us = 1"))  # its time has run out
        sites.audit(night.folder, url)
        assert content(night, url) == night.wanted
    finally:
        child.go_on()
    said = child.outcome()
    assert f"process {pid} no longer holds the store: another run took it over" in said
    assert said.startswith("1: ")
    assert content(night, url) == night.wanted
    assert states(url) == ["finished", "running", "finished"]
    with open_store(url) as store, store.read() as session:
        assert lease.running(session) is None


# --- out of disk ----------------------------------------------------------------------------


def limited(store: Store, pages: int) -> None:
    """Let an SQLite file grow by so many pages; one more is answered as a full disk is."""

    def limit(connection: object, _: object) -> None:
        cursor = connection.execute("PRAGMA page_count")  # type: ignore[attr-defined]
        most = cursor.fetchone()[0] + pages
        connection.execute(f"PRAGMA max_page_count = {most}")  # type: ignore[attr-defined]

    event.listen(store._engine, "connect", limit)


@pytest.mark.parametrize("pages", [0, 3, 9])
def test_a_full_disk_is_said_and_the_next_run_completes_the_night(
    on_sqlite: Night, pages: int
) -> None:
    with copied(on_sqlite) as url:
        with open_store(url) as store:
            limited(store, pages)
            with pytest.raises(StoreFailed, match=r"disk is full — .*make room on the disk"):
                audit(on_sqlite, store)
        sites.audit(on_sqlite.folder, url)
        assert content(on_sqlite, url) == on_sqlite.wanted


@pytest.mark.parametrize("most", [40_000, 120_000])
def test_a_file_that_cannot_grow_is_said_and_the_next_run_completes_the_night(
    on_sqlite: Night, most: int
) -> None:
    """The operating system itself says no (setrlimit(2), RLIMIT_FSIZE)."""
    with copied(on_sqlite) as url:
        said = Child(on_sqlite.folder, url, file_limit=most).outcome()
        assert "there is room on the disk" in said or "make room" in said
        sites.audit(on_sqlite.folder, url)
        assert content(on_sqlite, url) == on_sqlite.wanted


# --- the database gone and back -------------------------------------------------------------


@pytest.fixture(scope="module")
def server(postgres: Postgres) -> Iterator[PrivateServer]:
    """A server to be stopped; begun after the shared one, which settles where sockets go."""
    assert postgres
    with private_server() as server:
        yield server


class CrashedStores(PostgresStores):
    """Copies that are whole after a crash.

    After a checkpoint alone a sequence writes how far it is gone before it is used (PostgreSQL's
    sequence.c); in a database copied since, it would give the same numbers again.
    """

    def copy(self, url: str) -> str:
        made = super().copy(url)
        with open_store(made) as store, store._engine.connect() as connection:
            connection.exec_driver_sql("CHECKPOINT")
        return made


@pytest.fixture(scope="module")
def frail(server: PrivateServer, tmp_path_factory: pytest.TempPathFactory) -> Night:
    """The night on that server."""
    stores = CrashedStores(Postgres(server.uri))
    return prepare(tmp_path_factory.mktemp("frail") / "site", stores)


def audit(night: Night, store: Store, in_the_middle: Callable[[], None] | None = None) -> None:
    """The night's audit; ``in_the_middle`` is called when two loops have been stored."""

    def progress(stage: str, done: int, total: int) -> None:
        if stage == "measuring loops" and done == 3 and in_the_middle is not None:
            in_the_middle()

    nightly.run(open_site(night.folder, {}), store, now=sites.NOW, cores=1, progress=progress)


def test_a_database_that_goes_away_is_said_and_the_next_run_completes_the_night(
    server: PrivateServer, frail: Night
) -> None:
    with copied(frail) as url, open_store(url) as store:
        with pytest.raises(StoreFailed, match=r"see that the database is there") as caught:
            audit(frail, store, server.stop)
        assert caught.value.exit_code == 1
        server.start()
        audit(frail, store)
        assert content(frail, url) == frail.wanted
        assert states(url) == ["finished", "running", "finished"]


def test_a_database_that_goes_away_in_a_transaction_keeps_nothing_of_it(
    server: PrivateServer, frail: Night
) -> None:
    with copied(frail) as url, open_store(url) as store:
        stopped: list[str] = []

        def stop(_: object, __: object, statement: str, *___: object) -> None:
            if not stopped and statement.startswith("INSERT INTO measurement"):
                stopped.append(statement)
                server.stop()

        event.listen(store._engine, "after_cursor_execute", stop)
        with pytest.raises(StoreFailed, match=r"see that the database is there"):
            audit(frail, store)
        assert stopped
        server.start()
        audit(frail, store)
        assert content(frail, url) == frail.wanted


def test_a_run_outlives_a_database_that_is_started_anew_between_two_writes(
    server: PrivateServer, frail: Night
) -> None:
    def restart() -> None:
        server.stop()
        server.start()

    with copied(frail) as url, open_store(url) as store:
        audit(frail, store, restart)
        assert content(frail, url) == frail.wanted
        assert states(url) == ["finished", "finished"]


def test_the_heartbeat_goes_on_when_the_store_is_back(server: PrivateServer, frail: Night) -> None:
    with (
        copied(frail) as url,
        open_store(url) as store,
        take_lease(store, "patient", ttl_s=0.6),
    ):
        server.stop()
        time.sleep(0.7)  # the hold runs out meanwhile
        server.start()
        left_s, until = 0.0, time.monotonic() + 20
        while left_s == 0.0 and time.monotonic() < until:
            with store.read() as session:
                held = lease.held(session)
            left_s = held.left_s if held is not None else 0.0
        assert left_s > 0.0


def test_a_database_that_is_not_there_is_said_at_the_start(
    server: PrivateServer, frail: Night
) -> None:
    server.stop()
    with (
        open_store(frail.before) as store,
        pytest.raises(StoreUnready, match=r"cannot be opened: .* see that the database is there"),
    ):
        audit(frail, store)
    server.start()

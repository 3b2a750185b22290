"""Store URL -> ``Store``: short transactions to read and to write in, and the lease for writing.

Opening a store changes nothing in it; only ``Store.upgrade`` touches the schema.
"""

from __future__ import annotations

import sqlite3
import time
from collections.abc import Callable, Iterator
from contextlib import closing, contextmanager, suppress
from pathlib import Path

from sqlalchemy import Connection
from sqlalchemy.orm import Session

from audit.errors import StoreUnready
from audit.store import lease as lease_row
from audit.store import schema as schema_of
from audit.store.engine import Purpose, connected, make_engine
from audit.store.entries import Lease, Schema
from audit.store.heartbeat import Heartbeat
from audit.store.holder import Holder
from audit.store.urls import checked_url, shown, sqlite_file

Told = Callable[[str, int, int], None]
"""Called while waiting with what for, seconds waited, and seconds it may take at most."""

__all__ = ["Lease", "Schema", "Store", "backup", "open_store", "take_lease"]


class Store:
    """One site's store. ``close`` it, or use it as a context manager."""

    def __init__(self, url: str) -> None:
        self._url = checked_url(url)
        self._engine = make_engine(self._url)
        self._reached = False

    @property
    def url(self) -> str:
        """The store's URL, without its password and its options."""
        return shown(self._url)

    def close(self) -> None:
        """Closes all connections."""
        self._engine.dispose()

    def __enter__(self) -> Store:
        return self

    def __exit__(self, *_: object) -> None:
        self.close()

    def schema(self) -> Schema:
        """The schema's revision and the one this program needs; makes no file where none is."""
        file = sqlite_file(self._url)
        if file is not None and not file.exists():
            return Schema(None, schema_of.head())
        with self._connected(Purpose.READ) as connection:
            return schema_of.read_schema(connection)

    def require_current(self) -> None:
        """Raises StoreUnready, with what to do, unless the schema is this program's."""
        schema_of.require(self.schema())

    def upgrade(self) -> None:
        """Brings the schema up to this program's revision, all or nothing.

        Raises StoreUnready for a schema newer than this program.
        """
        with self._writing(Purpose.RESHAPE) as connection:
            schema_of.upgrade(connection)

    @contextmanager
    def read(self) -> Iterator[Session]:
        """One consistent snapshot; writing in it fails."""
        with (
            self._connected(Purpose.READ) as connection,
            Session(connection, autoflush=False) as session,
        ):
            yield session

    @contextmanager
    def write(self, lease: Lease) -> Iterator[Session]:
        """One short transaction, committed at its end; raises StoreUnready if the lease is lost."""
        with (
            self._writing() as connection,
            Session(connection, autoflush=False) as session,
        ):
            lease_row.prove(session, lease)
            yield session

    @contextmanager
    def _connected(self, purpose: Purpose) -> Iterator[Connection]:
        with connected(self._engine, purpose, self._reached) as connection:
            self._reached = True
            yield connection

    @contextmanager
    def _writing(self, purpose: Purpose = Purpose.WRITE) -> Iterator[Connection]:
        with self._connected(purpose) as connection, connection.begin():
            yield connection

    def _renew(self, lease: Lease) -> bool:
        with self._writing() as connection:
            return lease_row.renew(connection, lease)


def open_store(url: str) -> Store:
    """A store by its URL. Opens no connection yet; raises StoreUnready for an unusable URL."""
    return Store(url)


@contextmanager
def take_lease(
    store: Store, holder: str, ttl_s: float = 90.0, told: Told | None = None
) -> Iterator[Lease]:
    """Holds the right to write while the block runs.

    ``holder`` is what others are told (who, where). A thread puts off the end of the lease every
    third of ``ttl_s`` seconds. A holder that was a run on this machine and is no more is replaced
    at once; one that is not seen from here, when its lease has run out, which is waited
    for. Raises StoreUnready, naming the holder, if another run holds the store and shows life.
    """
    with Heartbeat(store._renew) as beat:
        lease = _claim(store, Holder(holder, beat.pulse), ttl_s, told)
        beat.keep(lease)
        try:
            yield lease
        finally:
            # A store that has gone away takes no lease back: it is seen to be left, or runs out.
            with suppress(StoreUnready), store._writing(Purpose.SEAL) as connection:
                lease_row.release(connection, lease)


def _claim(store: Store, holder: Holder, ttl_s: float, told: Told | None) -> Lease:
    """The lease; waits for one to run out unless its holder is seen alive, or renews it."""
    begun = time.monotonic()
    first: lease_row.Held | None = None
    while True:
        with store._writing() as connection:
            got = lease_row.claim(connection, holder, ttl_s)
        if isinstance(got, Lease):
            return got
        first = first or got
        waited_s = time.monotonic() - begun
        if got.refuses(first, waited_s):
            raise got.refusal()
        if told is not None:
            told(f"waiting for {got.name}", round(waited_s), round(first.left_s))
        time.sleep(min(1.0, got.left_s))


def backup(store: Store, path: Path) -> None:
    """A copy of an SQLite store while it is in use, by SQLite's online backup.

    Raises StoreUnready if ``path`` is there already or the store is not on SQLite.
    """
    file = sqlite_file(store._url)
    if file is None:
        raise StoreUnready("only an SQLite store is copied this way", "use pg_dump for PostgreSQL")
    if path.exists():
        raise StoreUnready(f"{path} is there already", "name a file that is not there yet")
    if not file.exists():
        raise StoreUnready(f"there is no store at {file} yet", "run: loopassay store upgrade")
    with closing(sqlite3.connect(file)) as source, closing(sqlite3.connect(path)) as copy:
        source.backup(copy)

"""Store URL -> engine, with each database set up for one writer beside many readers.

SQLite: write-ahead log, so that readers go on while one process writes; a writer takes its lock
when its transaction starts (BEGIN IMMEDIATE) and waits for it; readers cannot write.
PostgreSQL: psycopg 3; a reader sees one snapshot and cannot write; a writer that falls silent in
the middle of a transaction is cut off by the server, so that it shuts nobody out for long.
"""

from __future__ import annotations

import json
from collections.abc import Iterator
from contextlib import contextmanager
from enum import Enum
from typing import Any

from sqlalchemy import URL, Connection, Engine, create_engine, event
from sqlalchemy.engine.interfaces import DBAPIConnection
from sqlalchemy.exc import DBAPIError
from sqlalchemy.pool import ConnectionPoolEntry

from audit.store.failures import failure, not_opened

BUSY_S = 30.0
"""How long a writer waits for the one before it."""
SILENT_S = 60.0
"""How long a writer on PostgreSQL may be silent in the middle of a transaction."""
_JSON = json.JSONEncoder(ensure_ascii=False, allow_nan=False, separators=(",", ":"))
_PURPOSE = "audit_purpose"
_WAL = "audit_wal"

_REACHING = {
    "connect_timeout": 10,
    "keepalives_idle": 30,
    "keepalives_interval": 10,
    "keepalives_count": 3,
    "tcp_user_timeout": 60_000,
}
"""After what time a server that is silent counts as gone (s; the last in ms): without these, waits
for hours, as the operating system has it. libpq's names; the URL's own values win."""


class Purpose(Enum):
    """What a transaction is for."""

    READ = "read"
    WRITE = "write"
    SEAL = "seal"
    """The last write of a run: with it all before it survives a power cut."""
    RESHAPE = "reshape"
    """A migration: SQLite rebuilds tables, which foreign keys would answer by deleting rows."""


def compact_json(value: object) -> str:
    """JSON without spaces; floats by repr, so that they come back exact; NaN is refused."""
    return _JSON.encode(value)


def make_engine(url: URL) -> Engine:
    """The engine of a store; opens nothing yet."""
    if url.get_backend_name() != "sqlite":
        reaching = {name: value for name, value in _REACHING.items() if name not in url.query}
        engine = create_engine(
            url, json_serializer=compact_json, pool_pre_ping=True, connect_args=reaching
        )
        event.listen(engine, "begin", _begin_postgresql)
        return engine
    engine = create_engine(url, json_serializer=compact_json, connect_args={"timeout": BUSY_S})
    event.listen(engine, "connect", _set_up_sqlite)
    event.listen(engine, "begin", _begin_sqlite)
    return engine


def _set_up_sqlite(dbapi: DBAPIConnection, entry: ConnectionPoolEntry) -> None:
    dbapi.isolation_level = None  # transactions are begun by _begin_sqlite, not by the driver
    cursor = dbapi.cursor()
    cursor.execute("PRAGMA journal_mode")
    mode = cursor.fetchone()
    if mode != ("wal",):
        cursor.execute("PRAGMA journal_mode = WAL")
        mode = cursor.fetchone()
    entry.info[_WAL] = mode == ("wal",)
    # Only macOS has it: there a plain fsync leaves the data in the drive's cache.
    cursor.execute("PRAGMA fullfsync = ON")
    cursor.close()


def _begin_sqlite(connection: Connection) -> None:
    purpose = connection.get_execution_options().get(_PURPOSE, Purpose.READ)
    reads = purpose is Purpose.READ
    connection.exec_driver_sql(f"PRAGMA query_only = {int(reads)}")
    connection.exec_driver_sql(f"PRAGMA foreign_keys = {int(purpose is not Purpose.RESHAPE)}")
    connection.exec_driver_sql(f"PRAGMA synchronous = {_synchronous(connection, purpose)}")
    connection.exec_driver_sql("BEGIN" if reads else "BEGIN IMMEDIATE")


def _synchronous(connection: Connection, purpose: Purpose) -> str:
    """How hard SQLite waits for the disk (sqlite.org/pragma.html#pragma_synchronous).

    A killed process loses no commit whatever this is. In WAL mode NORMAL stays whole at a power cut
    too, but may lose the last commits; the next run does them again. Once the log is synced all
    commits in it are safe, so FULL in the last transaction of a run makes safe what people have
    been shown. Where no log can be had (a network drive), only FULL is safe.
    """
    waits = purpose in (Purpose.SEAL, Purpose.RESHAPE) or not connection.info[_WAL]
    return "FULL" if waits else "NORMAL"


def _begin_postgresql(connection: Connection) -> None:
    purpose = connection.get_execution_options().get(_PURPOSE, Purpose.READ)
    if purpose is not Purpose.READ:
        connection.exec_driver_sql(
            f"SELECT set_config('lock_timeout', '{BUSY_S * 1e3:.0f}', true), "
            f"set_config('idle_in_transaction_session_timeout', '{SILENT_S * 1e3:.0f}', true)"
        )


@contextmanager
def connected(
    engine: Engine, purpose: Purpose, reached_before: bool = False
) -> Iterator[Connection]:
    """A connection for one transaction.

    Raises StoreUnready when the database is not reached; StoreFailed when it could be before, and
    when it fails on the way: a full disk, a lock nobody lets go of, a server that goes away.
    """
    try:
        connection = engine.connect()
    except DBAPIError as error:
        raise not_opened(error, engine.url, reached_before) from error
    reading = purpose is Purpose.READ
    try:
        with connection:
            options: dict[str, Any] = {_PURPOSE: purpose}
            if engine.dialect.name == "postgresql" and reading:
                options |= {"isolation_level": "REPEATABLE READ", "postgresql_readonly": True}
            yield connection.execution_options(**options)
    except DBAPIError as error:
        found = failure(error, engine.url, reading)
        if found is None:
            raise
        raise found from error

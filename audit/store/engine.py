"""Store URL -> engine, with each database set up for one writer beside many readers.

SQLite: write-ahead log, so that readers go on while one process writes; a writer takes its lock
when its transaction starts (BEGIN IMMEDIATE) and waits for it; readers cannot write.
PostgreSQL: psycopg 3; a reader sees one snapshot and cannot write.
"""

from __future__ import annotations

import json
from collections.abc import Iterator
from contextlib import contextmanager
from enum import Enum
from pathlib import Path
from typing import Any

from sqlalchemy import URL, Connection, Engine, create_engine, event, make_url
from sqlalchemy.engine.interfaces import DBAPIConnection
from sqlalchemy.exc import ArgumentError, DatabaseError, DBAPIError, OperationalError
from sqlalchemy.pool import ConnectionPoolEntry

from audit.errors import StoreUnready

BUSY_S = 30.0
_JSON = json.JSONEncoder(ensure_ascii=False, allow_nan=False, separators=(",", ":"))
_PURPOSE = "audit_purpose"
_KINDS = "sqlite:///FILE or postgresql+psycopg://USER@HOST/DATABASE"


class Purpose(Enum):
    """What a transaction is for."""

    READ = "read"
    WRITE = "write"
    RESHAPE = "reshape"
    """A migration: SQLite rebuilds tables, which foreign keys would answer by deleting rows."""


def compact_json(value: object) -> str:
    """JSON without spaces; floats by repr, so that they come back exact; NaN is refused."""
    return _JSON.encode(value)


def checked_url(url: str) -> URL:
    """The URL with its driver named. Raises StoreUnready for what no store can be."""
    try:
        parsed = make_url(url)
    except ArgumentError as error:
        raise StoreUnready("the store's URL cannot be read", f"give {_KINDS}") from error
    if parsed.drivername in ("postgresql", "postgres"):
        parsed = parsed.set(drivername="postgresql+psycopg")
    if parsed.drivername not in ("sqlite", "sqlite+pysqlite", "postgresql+psycopg"):
        raise StoreUnready(f"no store can be kept in {parsed.drivername!r}", f"give {_KINDS}")
    if sqlite_file(parsed) is None and parsed.get_backend_name() == "sqlite":
        raise StoreUnready("a store in memory would be lost at the end", f"give {_KINDS}")
    return parsed


def sqlite_file(url: URL) -> Path | None:
    """The file of an SQLite store; None for one in memory or on another database."""
    if url.get_backend_name() != "sqlite" or url.database in (None, "", ":memory:"):
        return None
    return Path(str(url.database))


def make_engine(url: URL) -> Engine:
    """The engine of a store; opens nothing yet."""
    if url.get_backend_name() != "sqlite":
        return create_engine(url, json_serializer=compact_json, pool_pre_ping=True)
    engine = create_engine(url, json_serializer=compact_json, connect_args={"timeout": BUSY_S})
    event.listen(engine, "connect", _set_up_sqlite)
    event.listen(engine, "begin", _begin_sqlite)
    return engine


def _set_up_sqlite(dbapi: DBAPIConnection, _entry: ConnectionPoolEntry) -> None:
    dbapi.isolation_level = None  # transactions are begun by _begin_sqlite, not by the driver
    cursor = dbapi.cursor()
    cursor.execute("PRAGMA journal_mode")
    if cursor.fetchone() != ("wal",):
        cursor.execute("PRAGMA journal_mode = WAL")
        cursor.fetchone()
    # In WAL mode NORMAL can lose the last commits with the power, but never their order: what is
    # missing is done again by the next run.
    cursor.execute("PRAGMA synchronous = NORMAL")
    cursor.close()


def _begin_sqlite(connection: Connection) -> None:
    purpose = connection.get_execution_options().get(_PURPOSE, Purpose.READ)
    reads = purpose is Purpose.READ
    connection.exec_driver_sql(f"PRAGMA query_only = {int(reads)}")
    connection.exec_driver_sql(f"PRAGMA foreign_keys = {int(purpose is not Purpose.RESHAPE)}")
    connection.exec_driver_sql("BEGIN" if reads else "BEGIN IMMEDIATE")


def shown(url: URL) -> str:
    """The URL as it may be printed: without password, and without options, which can hold one."""
    return url.set(query={}).render_as_string()


@contextmanager
def connected(engine: Engine, purpose: Purpose) -> Iterator[Connection]:
    """A connection for one transaction.

    Raises StoreUnready when the database is not reached, and when it fails on the way: a full disk,
    a file that may not be written, a server that goes away.
    """
    try:
        connection = engine.connect()
    except DBAPIError as error:
        raise StoreUnready(
            f"the store {shown(engine.url)} cannot be opened: {_reason(error)}",
            _remedy(error, engine.url),
        ) from error
    try:
        with connection:
            options: dict[str, Any] = {_PURPOSE: purpose}
            if engine.dialect.name == "postgresql" and purpose is Purpose.READ:
                options |= {"isolation_level": "REPEATABLE READ", "postgresql_readonly": True}
            yield connection.execution_options(**options)
    except DatabaseError as error:
        if type(error) not in (OperationalError, DatabaseError):
            raise  # a statement of ours is wrong
        raise StoreUnready(
            f"the store {shown(engine.url)} failed: {_reason(error)}",
            f"what was not finished was not kept; {_remedy(error, engine.url)}",
        ) from error


def _reason(error: DBAPIError) -> str:
    """What the database says, on one line and without the statement."""
    return " ".join(str(error.orig).split())


_REMEDIES = {
    "not a database": "the file is none that SQLite made: name another one",
    "malformed": "the file is damaged: put the last copy of it in its place",
    "full": "make room on the disk, then start again",
    "I/O error": "see that there is room on the disk and that it is sound, then start again",
    "readonly": "SQLite keeps a log beside the file: reading too needs the right to write in its "
    "folder, and an audit the right to write the file",
    "unable to open": "see that it is a file, and that this user may read and write it and its "
    "folder",
}
"""What helps, by a word of SQLite's message (its result codes, sqlite.org/rescode.html)."""


def _remedy(error: DBAPIError, url: URL) -> str:
    file = sqlite_file(url)
    if file is None:
        return "see that the database is there, running, and open to this user"
    if not file.parent.is_dir():
        return f"there is no folder {file.parent}"
    fitting = (remedy for word, remedy in _REMEDIES.items() if word in str(error.orig))
    return next(fitting, "start again; if it stays so, report it with this message")

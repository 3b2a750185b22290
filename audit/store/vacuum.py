"""The free space of an SQLite file back to the disk."""

from __future__ import annotations

import shutil
import sqlite3
from contextlib import closing
from pathlib import Path

from audit.errors import StoreUnready
from audit.store.session import Store
from audit.store.urls import sqlite_file

BUSY_S = 30.0
"""How long a transaction of somebody else is waited for."""


def vacuum(store: Store) -> bool:
    """Gives the free space of an SQLite file back to the disk; False on PostgreSQL: not done.

    SQLite writes the file anew beside the old one (sqlite.org/lang_vacuum.html): raises
    StoreUnready where the disk has not twice its size free, or somebody writes.
    """
    file = sqlite_file(store._url)
    if file is None:
        return False
    try:
        with closing(sqlite3.connect(file, isolation_level=None, timeout=BUSY_S)) as connection:
            _check_room(connection, file)
            connection.execute("VACUUM")
            connection.execute("PRAGMA wal_checkpoint(TRUNCATE)")
    except sqlite3.OperationalError as error:
        raise StoreUnready(
            f"{file} could not be made smaller: {error}", "try again when nobody uses the store"
        ) from error
    return True


def _check_room(connection: sqlite3.Connection, file: Path) -> None:
    (pages,) = connection.execute("PRAGMA page_count").fetchone()
    (page_bytes,) = connection.execute("PRAGMA page_size").fetchone()
    needed, free = 2 * pages * page_bytes, shutil.disk_usage(file.parent).free
    if free < needed:
        raise StoreUnready(
            f"to make {file} smaller, {needed / 1e6:.0f} MB have to be free beside it; "
            f"there are {free / 1e6:.0f} MB",
            "make room; the free space in the file is used for new rows meanwhile",
        )

"""What a database says when it fails -> what a person is told, and what helps.

A statement of ours that is wrong is no such failure: ``failure`` knows nothing of it, and it stays
the exception it is.
"""

from __future__ import annotations

import sqlite3

from sqlalchemy import URL
from sqlalchemy.exc import DatabaseError, DBAPIError, OperationalError

from audit.errors import StoreUnready
from audit.store.urls import shown, sqlite_file


class StoreFailed(StoreUnready):
    """The store went away, filled up or was taken over while it was in use.

    No fault of the command or the site's files, hence exit code 1; the next run completes the work.
    """

    exit_code = 1


_OUTSIDE = ("53", "57", "58", "XX")
"""Classes of SQLSTATE (PostgreSQL manual, appendix A): resources, operators, the system, damage."""
_IDLE_TOO_LONG = "25P03"
_READ_ONLY = "25006"
_LOCKED = "55P03"

_STATE_REMEDIES = {
    "53100": "make room on the disk of the database server, then start again",
    "53300": "the database server has no connection to spare: start again when it has",
    _READ_ONLY: "the database may only be read, as a copy of another: name the one that is written",
}

_WORD_REMEDIES = {
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


def not_opened(error: DBAPIError, url: URL, reached_before: bool) -> StoreUnready:
    """A database that cannot be connected to; one that could before has gone away."""
    kind = StoreFailed if reached_before else StoreUnready
    return kind(
        f"the store {shown(url)} cannot be opened: {_reason(error)}",
        _busy_remedy(error) or _remedy(error, url),
    )


def failure(error: DBAPIError, url: URL, reading: bool) -> StoreUnready | None:
    """What to tell of a transaction that failed; None if the statement was wrong."""
    busy = _busy_remedy(error)
    if busy is not None:
        return StoreFailed(f"the store {shown(url)} is busy: {_reason(error)}", busy)
    if not _from_outside(error, reading):
        return None
    return StoreFailed(
        f"the store {shown(url)} failed: {_reason(error)}",
        f"what was not finished was not kept; {_remedy(error, url)}",
    )


def _from_outside(error: DBAPIError, reading: bool) -> bool:
    if error.connection_invalidated or type(error) in (OperationalError, DatabaseError):
        return True
    state = _state(error)
    return (
        state.startswith(_OUTSIDE)
        or state == _IDLE_TOO_LONG
        or (state == _READ_ONLY and not reading)
    )


def _state(error: DBAPIError) -> str:
    return getattr(error.orig, "sqlstate", None) or ""


def _reason(error: DBAPIError) -> str:
    """What the database says, on one line and without the statement."""
    return " ".join(str(error.orig).split())


def _busy_remedy(error: DBAPIError) -> str | None:
    """What helps against a lock that nobody lets go of; None for any other failure."""
    code = getattr(error.orig, "sqlite_errorcode", None)
    if _state(error) != _LOCKED and (code is None or code & 0xFF != sqlite3.SQLITE_BUSY):
        return None
    return (
        "another process is in the middle of a write and does not come to its end (suspended, "
        "perhaps): let it go on or end it, then start again"
    )


def _remedy(error: DBAPIError, url: URL) -> str:
    file = sqlite_file(url)
    if file is None:
        usual = "see that the database is there, running, and open to this user, then start again"
        return _STATE_REMEDIES.get(_state(error), usual)
    if not file.parent.is_dir():
        return f"there is no folder {file.parent}"
    fitting = (remedy for word, remedy in _WORD_REMEDIES.items() if word in str(error.orig))
    return next(fitting, "start again; if it stays so, report it with this message")

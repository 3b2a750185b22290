"""A store's URL: which ones can be kept in, what may be printed of them."""

from __future__ import annotations

from pathlib import Path

from sqlalchemy import URL, make_url
from sqlalchemy.exc import ArgumentError

from audit.errors import StoreUnready

_KINDS = "sqlite:///FILE or postgresql+psycopg://USER@HOST/DATABASE"


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


def shown(url: URL) -> str:
    """The URL as it may be printed: without password, and without options, which can hold one."""
    return url.set(query={}).render_as_string()

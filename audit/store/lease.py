"""The lease row: who may write, by the database's clock, with a number that fences off the rest.

Each holder gets a fencing number one higher than the last. Every write transaction first renews the
row under its own number; a holder that was taken for dead and replaced finds no such row any more
and cannot write, however late it wakes up.
"""

from __future__ import annotations

from typing import Any

from sqlalchemy import BigInteger, ColumnElement, Connection, select, update
from sqlalchemy.ext.compiler import compiles
from sqlalchemy.orm import Session
from sqlalchemy.sql.compiler import SQLCompiler
from sqlalchemy.sql.functions import FunctionElement

from audit.errors import StoreUnready
from audit.records import SECOND_US, instant
from audit.store.entries import Lease
from audit.store.tables import LeaseRow


class database_now_us(FunctionElement[int]):  # noqa: N801 (reads as the SQL function it is)
    """The database's clock, microseconds since 1970 UTC (SQLite: to the millisecond)."""

    type = BigInteger()
    inherit_cache = True


@compiles(database_now_us, "sqlite")
def _on_sqlite(element: database_now_us, compiler: SQLCompiler, **_: Any) -> str:
    return "CAST(round((julianday('now') - 2440587.5) * 86400000.0) AS INTEGER) * 1000"


@compiles(database_now_us, "postgresql")
def _on_postgresql(element: database_now_us, compiler: SQLCompiler, **_: Any) -> str:
    return "CAST(extract(epoch FROM clock_timestamp()) * 1000000 AS BIGINT)"


def claim(connection: Connection, holder: str, ttl_s: float) -> Lease:
    """Takes the lease if it is free or has run out. Raises StoreUnready if someone holds it."""
    row = connection.execute(
        select(LeaseRow.fence, LeaseRow.holder, LeaseRow.taken_us).with_for_update()
    ).one()
    # The clock is read after the row is locked: waiting for the lock takes time.
    now_us, expires_us = connection.execute(select(database_now_us(), LeaseRow.expires_us)).one()
    if row.holder is not None and expires_us > now_us:
        since = instant(row.taken_us).strftime("%Y-%m-%d %H:%M:%S UTC")
        raise StoreUnready(
            f"the store is held by {row.holder} since {since}",
            "wait until that run has ended; if it was killed, its hold runs out by itself within "
            f"{max(1, round((expires_us - now_us) / SECOND_US))} s",
        )
    lease = Lease(row.fence + 1, holder, ttl_s)
    connection.execute(
        update(LeaseRow).values(
            fence=lease.fence,
            holder=holder,
            taken_us=now_us,
            expires_us=now_us + _micros(ttl_s),
        )
    )
    return lease


def renew(session: Connection | Session, lease: Lease) -> bool:
    """Puts off the end of a lease; False when it is no longer this holder's."""
    return _touch(session, lease, expires_us=database_now_us() + _micros(lease.ttl_s))


def prove(session: Session, lease: Lease) -> None:
    """Renews and locks the lease in a write transaction. Raises StoreUnready if it is lost."""
    if not renew(session, lease):
        raise StoreUnready(
            f"{lease.holder} no longer holds the store: another run took it over",
            "nothing was written; start the run again when the other one has ended",
        )


def release(connection: Connection, lease: Lease) -> None:
    """Gives the lease back; does nothing if it was taken over."""
    _touch(connection, lease, holder=None, expires_us=0)


def _touch(
    session: Connection | Session, lease: Lease, **values: int | ColumnElement[int] | None
) -> bool:
    row = session.execute(
        update(LeaseRow)
        .where(LeaseRow.fence == lease.fence, LeaseRow.holder.is_not(None))
        .values(**values)
        .returning(LeaseRow.fence)
        .execution_options(synchronize_session=False)
    ).first()
    return row is not None


def _micros(seconds: float) -> int:
    return round(seconds * SECOND_US)

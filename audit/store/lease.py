"""The lease row: who may write, by the database's clock, with a number that fences off the rest.

Each holder gets a fencing number one higher than the last. Every write transaction first renews the
row under its own number; a holder that was taken for dead and replaced finds no such row any more
and cannot write, however late it wakes up.
"""

from __future__ import annotations

from dataclasses import dataclass
from functools import cache
from typing import Any

from sqlalchemy import BigInteger, Connection, bindparam, select, update
from sqlalchemy.ext.compiler import compiles
from sqlalchemy.orm import Session
from sqlalchemy.sql.compiler import SQLCompiler
from sqlalchemy.sql.functions import FunctionElement

from audit.errors import StoreUnready
from audit.records import SECOND_US, instant
from audit.store import holder as holder_of
from audit.store.entries import Lease
from audit.store.failures import StoreFailed
from audit.store.holder import Holder, Life
from audit.store.tables import LeaseRow, RunRow

_PATIENCE_S = 5.0
"""How much longer than it should take a lease is waited for: the database's clock may be set."""


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


@dataclass(frozen=True)
class Held:
    """The lease in another's hand; ``now_us``: the database's time when it was looked at."""

    fence: int
    name: str
    life: Life
    taken_us: int
    expires_us: int
    now_us: int

    @property
    def left_s(self) -> float:
        """Seconds until it runs out, 0 if it has."""
        return max(0.0, (self.expires_us - self.now_us) / SECOND_US)

    @property
    def free(self) -> bool:
        """Whether another may take it: it has run out, or its holder is no more."""
        return self.left_s == 0 or self.life is Life.GONE

    @property
    def writing(self) -> bool:
        """Whether its holder may still be at work."""
        return self.life is Life.ALIVE or not self.free

    def refuses(self, first: Held, waited_s: float) -> bool:
        """Whether it is vain to wait: the holder is seen alive, or renewed it since ``first``."""
        renewed = (self.fence, self.expires_us) > (first.fence, first.expires_us)
        return self.life is Life.ALIVE or renewed or waited_s > first.left_s + _PATIENCE_S

    def refusal(self) -> StoreUnready:
        """What a run that cannot have it is told."""
        since = instant(self.taken_us).strftime("%Y-%m-%d %H:%M:%S UTC")
        return StoreUnready(
            f"the store is held by {self.name} since {since}",
            "wait until that run has ended; if it was killed or stands still, its hold runs out by "
            f"itself, at the earliest in {max(1, round(self.left_s))} s",
        )


def claim(connection: Connection, holder: Holder, ttl_s: float) -> Lease | Held:
    """Takes the lease if it is free, has run out, or its holder is no more; else who holds it."""
    connection.execute(select(LeaseRow.fence).with_for_update())
    # All else is read after the row is locked: waiting for the lock takes time.
    found = held(connection)
    if found is not None and not found.free:
        return found
    taken = connection.execute(
        update(LeaseRow)
        .values(
            fence=LeaseRow.fence + 1,
            holder=holder.kept(),
            taken_us=database_now_us(),
            expires_us=database_now_us() + _micros(ttl_s),
        )
        .returning(LeaseRow.fence)
    )
    return Lease(taken.scalar_one(), holder.name, ttl_s)


def held(session: Connection | Session) -> Held | None:
    """Who holds the lease, and whether that process still exists; None if nobody does."""
    row = session.execute(
        select(
            LeaseRow.fence,
            LeaseRow.holder,
            LeaseRow.taken_us,
            LeaseRow.expires_us,
            database_now_us(),
        )
    ).one()
    fence, kept, taken_us, expires_us, now_us = row
    if kept is None:
        return None
    holder = Holder.of(kept)
    seen = holder_of.life(holder, holder_of.here(), holder_of.look)
    return Held(fence, holder.name, seen, taken_us, expires_us, now_us)


def running(session: Session) -> int | None:
    """The id of the run that is at work; any other run without an end was cut off.

    Only the newest can be. Between a run's claim and its first line in the log, a moment, the one
    before it is taken for it.
    """
    holder = held(session)
    newest = session.execute(
        select(RunRow.id, RunRow.ended_at).order_by(RunRow.id.desc()).limit(1)
    ).first()
    if holder is None or not holder.writing or newest is None or newest.ended_at is not None:
        return None
    return int(newest.id)


def renew(session: Connection | Session, lease: Lease) -> bool:
    """Puts off the end of a lease; False when it is no longer this holder's."""
    connection = session.connection() if isinstance(session, Session) else session
    values = {"held": lease.fence, "ttl_us": _micros(lease.ttl_s)}
    return connection.execute(_renewal(), values).first() is not None


@cache
def _renewal() -> Any:
    """Built once: every write begins with it."""
    return (
        update(LeaseRow)
        .where(LeaseRow.fence == bindparam("held"), LeaseRow.holder.is_not(None))
        .values(expires_us=database_now_us() + bindparam("ttl_us", type_=BigInteger))
        .returning(LeaseRow.fence)
    )


def prove(session: Session, lease: Lease) -> None:
    """Renews and locks the lease in a write transaction. Raises StoreFailed if it is lost."""
    if not renew(session, lease):
        raise StoreFailed(
            f"{lease.holder} no longer holds the store: another run took it over",
            "nothing was written; start the run again when the other one has ended",
        )


def release(connection: Connection, lease: Lease) -> None:
    """Gives the lease back; does nothing if it was taken over."""
    connection.execute(
        update(LeaseRow)
        .where(LeaseRow.fence == lease.fence, LeaseRow.holder.is_not(None))
        .values(holder=None, expires_us=0)
    )


def _micros(seconds: float) -> int:
    return round(seconds * SECOND_US)

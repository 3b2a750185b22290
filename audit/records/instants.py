"""Instants: integer microseconds since 1970-01-01T00:00Z, without leap seconds."""

from __future__ import annotations

from datetime import UTC, date, datetime, timedelta, tzinfo

SECOND_US = 1_000_000


DAY_US = 86_400 * SECOND_US


EPOCH = datetime(1970, 1, 1, tzinfo=UTC)


Span = tuple[int, int]
"""A closed interval of instants, microseconds."""


def instant(at_us: int) -> datetime:
    """Microseconds since 1970-01-01T00:00Z as an aware UTC time."""
    return EPOCH + timedelta(microseconds=at_us)


def local_day(at_us: int, zone: tzinfo) -> date:
    """The site's calendar day of an instant."""
    return instant(at_us).astimezone(zone).date()


def to_us(at: datetime) -> int:
    """An aware time as microseconds since 1970-01-01T00:00Z, exactly."""
    return (at - EPOCH) // timedelta(microseconds=1)

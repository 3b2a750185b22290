"""All that the sentences on the feed rest on, in one value, and how loops are named in them.

In: what the store knows. Out: ``Facts``; lists of loops as text.
"""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from dataclasses import dataclass, field
from datetime import date, datetime, timedelta

from audit.records import (
    DayRecord,
    ExportSource,
    Loop,
    Measured,
    Reading,
    Role,
    TagState,
    instant,
    to_us,
)

MOST_NAMED = 10
"""Loops named in one sentence; the others are counted."""

ROLE = {
    Role.PV: "process variable",
    Role.SP: "setpoint",
    Role.OUTPUT: "controller output",
    Role.MODE: "mode",
}


@dataclass(frozen=True)
class Facts:
    """What is known of the feed, asked at a time.

    ``loops``: those the list is about. ``named``: historian tags some export names, with the
    source that brings each. ``newest``: newest good stamp taken, not after ``asked``. ``night``:
    the list's; its last day is the one before. ``days``: the days' records of each loop that has
    any, from ``DAYS`` before the night on. ``states``: what each loop's tags last said.
    ``reactions``: how the output reacted to each loop's newest changes, oldest first.
    """

    loops: Sequence[Loop]
    named: Mapping[str, str]
    newest: datetime | None
    asked: datetime
    night: date
    days: Mapping[str, Sequence[DayRecord]]
    states: Mapping[str, Mapping[Role, TagState]] = field(default_factory=dict)
    reactions: Mapping[str, Sequence[Measured]] = field(default_factory=dict)
    exports: Sequence[ExportSource] = ()

    def reading(self, tag: str) -> Reading:
        """How a historian tag's samples are read; the defaults where its export is not known."""
        by_name = {source.name: source.reading for source in self.exports}
        return by_name.get(self.named.get(tag, ""), Reading())

    @property
    def until_us(self) -> int:
        """What came after the time asked about is not looked at."""
        return to_us(self.asked)

    def absent(self) -> list[str]:
        """Loops whose process variable or setpoint no export names."""
        return [loop.tag for loop in self.loops if not {loop.pv, loop.sp} <= set(self.named)]


def listed(items: Sequence[str]) -> str:
    """What there is to say of some loops, each beginning with its tag; the first few of them."""
    more = f" and {len(items) - MOST_NAMED} more" if len(items) > MOST_NAMED else ""
    return f"{', '.join(sorted(items)[:MOST_NAMED])}{more}"


def counted(items: Sequence[str]) -> str:
    return "1 loop" if len(items) == 1 else f"{len(items)} loops"


def when(at_us: int) -> str:
    return f"{instant(at_us):%Y-%m-%d %H:%M} UTC"


def hours(span_us: int) -> str:
    """A span in hours, from three days on in days."""
    span = timedelta(microseconds=span_us)
    if span > timedelta(days=3):
        return f"{span / timedelta(days=1):.1f} days"
    return f"{span / timedelta(hours=1):.0f} h"

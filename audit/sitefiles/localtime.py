"""Local dates and times of a site -> instants (aware datetimes in UTC).

One rule holds everywhere: a local time that does not exist (clocks put forward) is moved on by the
length of the hole; of one that comes twice (clocks put back) the first counts. The rule is what
PEP 495 gives for ``fold=0``: the offset in force before the change is used.
"""

from __future__ import annotations

import re
from datetime import UTC, datetime
from functools import cache
from zoneinfo import ZoneInfo, available_timezones

from audit.sitefiles.text import nearest

_MOMENT = re.compile(
    r"\d{4}-\d{2}-\d{2}(?P<time>[Tt ]\d{2}:\d{2}(:\d{2}(\.\d{1,9})?)?([Zz]|[+-]\d{2}:\d{2})?)?",
    re.ASCII,
)
_YEARS = range(1970, 2201)


@cache
def _zone_names() -> frozenset[str]:
    return frozenset(available_timezones()) - {"Factory", "localtime"}


def zone_named(name: str) -> ZoneInfo | None:
    """The IANA zone of that name, or None; names that depend on the machine are none."""
    return ZoneInfo(name) if name in _zone_names() else None


def zone_meant(name: str) -> str:
    """Remedy for a zone name that is none: the nearest IANA name."""
    names = sorted(_zone_names())
    ends = {each.rpartition("/")[2]: each for each in reversed(names)}
    guess = nearest(name, names, 0.75)
    if guess is None:
        end = nearest(name.rpartition("/")[2], ends, 0.75)
        guess = None if end is None else ends[end]
    listed = "an IANA name, such as Europe/Oslo or UTC"
    return listed if guess is None else f"did you mean '{guess}'? {listed}"


def instant(local: datetime, zone: ZoneInfo) -> datetime:
    """UTC instant of a local time without offset, by the rule above."""
    return local.replace(tzinfo=zone, fold=0).astimezone(UTC)


def moment(text: str, zone: ZoneInfo) -> datetime:
    """UTC instant of a date (its midnight) or an RFC 3339 date-time; without offset it is local.

    Seconds may be left out; digits past the microsecond are dropped. Raises ValueError, with what
    is wrong in words, for anything else, a leap second, and years outside 1970 to 2200.
    """
    shape = _MOMENT.fullmatch(text)
    if shape is None:
        raise ValueError("is not a date or RFC 3339 date-time")
    if re.search(r":60(?!:)", shape["time"] or "") and not re.search(r"[+-]\d{2}:60$", text):
        raise ValueError("is a leap second, which has no place in this count of time")
    try:
        read = datetime.fromisoformat(text.upper())
    except ValueError as failure:
        raise ValueError(f"is no day or time of the calendar ({failure})") from None
    if read.year not in _YEARS:
        raise ValueError(f"lies outside the years {_YEARS[0]} to {_YEARS[-1]}")
    return instant(read, zone) if read.tzinfo is None else read.astimezone(UTC)

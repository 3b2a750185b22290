"""RFC 3339 texts of the reports -> the site's local time, as a person reads it."""

from __future__ import annotations

from datetime import datetime
from zoneinfo import ZoneInfo


def local(text: str | None, zone: ZoneInfo, seconds: bool = False) -> str:
    """``2026-03-14 02:15`` in the site's zone; a dash for nothing."""
    if text is None:
        return "-"
    moment = datetime.fromisoformat(text).astimezone(zone)
    return moment.strftime("%Y-%m-%d %H:%M:%S" if seconds else "%Y-%m-%d %H:%M")


def local_day(text: str | None, zone: ZoneInfo) -> str:
    """The local date of an instant; a dash for nothing."""
    return local(text, zone)[:10]

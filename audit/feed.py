"""Is the feed alive? A quiet feed is not a quiet plant, and is said before any result."""

from __future__ import annotations

from collections.abc import Collection, Mapping, Sequence
from datetime import datetime, timedelta

from audit.records import DayRecord, Loop

EXPORTS_STOPPED = timedelta(hours=36)
"""A newest stamp older than this before the time asked about: the exports have stopped."""

MOST_NAMED = 10
"""Tags named in one sentence; the others are counted."""


def quiet(
    loops: Sequence[Loop],
    named: Collection[str],
    newest: datetime | None,
    asked: datetime,
    last_days: Mapping[str, Sequence[DayRecord]],
) -> tuple[str, ...]:
    """Sentences on what is missing from the feed; none: it is alive.

    ``named``: historian tags some export names. ``newest``: newest good stamp taken. ``asked``:
    the time the audit speaks for. ``last_days``: the last days' records of each loop that has any.
    """
    if newest is None:
        return ("No export has given a good sample yet; nothing can be judged.",)
    sentences: list[str] = []
    if asked - newest > EXPORTS_STOPPED:
        hours = (asked - newest).total_seconds() / 3600
        sentences.append(
            f"The exports have stopped: the newest good sample is {hours:.0f} h old "
            f"({newest:%Y-%m-%d %H:%M} UTC)."
        )
    absent = [loop.tag for loop in loops if not {loop.pv, loop.sp} <= set(named)]
    if absent:
        sentences.append(_listed("No export names the tags of", absent))
    silent = [
        loop.tag
        for loop in loops
        if loop.tag not in absent and not _has_data(last_days.get(loop.tag, ()))
    ]
    if silent:
        sentences.append(_listed("No good process variable for two days from", silent))
    return tuple(sentences)


def _has_data(days: Sequence[DayRecord]) -> bool:
    return any(day.pv_bad_us < day.span_us for day in days)


def _listed(head: str, tags: Sequence[str]) -> str:
    loops = "1 loop" if len(tags) == 1 else f"{len(tags)} loops"
    more = f" and {len(tags) - MOST_NAMED} more" if len(tags) > MOST_NAMED else ""
    return f"{head} {loops}: {', '.join(sorted(tags)[:MOST_NAMED])}{more}."

"""Is the feed alive? A quiet feed is not a quiet plant, and is said before any result.

In: ``Facts``. Out: sentences. ``flat`` (tags that do not move, tags gone silent), ``share`` (loops
with data), ``clocks`` (clocks that differ).
"""

from __future__ import annotations

from datetime import timedelta

from audit.feed import clocks, flat, share
from audit.feed.facts import Facts, counted, hours, listed

__all__ = ["DAYS", "REACTIONS", "Facts", "sentences"]

EXPORTS_STOPPED = timedelta(hours=36)
"""A newest stamp older than this before the time asked about: the exports have stopped (common
practice, no source)."""

EMPTY_DAYS = 2
"""A loop without a good process variable for so many days is named (common practice, no source)."""

DAYS = share.DAYS_BEFORE + 1
"""Days before the night whose records ``Facts.days`` is to hold."""

REACTIONS = clocks.CHANGES
"""Newest reactions of each loop that ``Facts.reactions`` is to hold."""


def sentences(facts: Facts) -> tuple[str, ...]:
    """Sentences on what is missing from the feed, or false in it; none: it is alive."""
    if facts.newest is None:
        return ("No export has given a good sample yet; nothing can be judged.",)
    found: list[str] = []
    if facts.asked - facts.newest > EXPORTS_STOPPED:
        old = hours((facts.asked - facts.newest) // timedelta(microseconds=1))
        found.append(
            f"The exports have stopped: the newest good sample is {old} old "
            f"({facts.newest:%Y-%m-%d %H:%M} UTC). See to the job that exports."
        )
    absent = facts.absent()
    if absent:
        found.append(f"No export names the tags of {counted(absent)}: {listed(absent)}.")
    said = {*absent, *flat.without_pv(facts)}
    empty = [tag for tag in share.empty(facts, EMPTY_DAYS) if tag not in said]
    if empty:
        found.append(
            f"No good process variable for two days from {counted(empty)}: {listed(empty)}."
        )
    found += share.falling(facts)
    found += flat.silent(facts)
    found += flat.flat(facts)
    found += clocks.differing(facts)
    return tuple(found)

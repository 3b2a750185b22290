"""How large the store is, what it grows by a year, and which loops have had no step for long."""

from __future__ import annotations

from collections.abc import Collection, Mapping, Sequence
from datetime import datetime

from audit.records import DAY_US, to_us
from audit.reports import contract
from audit.reports.contract import Json
from audit.store.entries import NewestStep, RunInfo
from audit.store.size import RECENT_DAYS, Size

DAYS_NEEDED = 7
"""Of fewer days of record, or between fewer, no growth is told."""
DAYS_A_YEAR = 365
BYTES_COUNTED = "store_bytes"
"""Under this name a run counts how many bytes the store took at its end."""
LONGEST = 5
SINCE_DAYS = (7, 30)


def size(found: Size) -> Json:
    """Bytes in use and free, and of each kind of content."""
    return {
        "bytes": found.used_bytes,
        "free_bytes": found.free_bytes,
        "estimated": found.sampled,
        "contents": [
            {"kind": one.kind, "rows": one.rows, "bytes": one.size_bytes} for one in found.contents
        ],
    }


def growth(found: Size, runs: Sequence[RunInfo]) -> Json:
    """Bytes a year, and how they were told; ``runs`` newest first.

    ``measured``: from the size at the end of runs at least a week apart, of the last 90 days, with
    nothing pruned in between. Else ``estimated``: what the content that belongs to the last days of
    record (at most 90) takes, a day, times 365. Of less than a week of record: null.
    """
    measured = _measured(runs)
    if measured is not None:
        bytes_, days = measured
        how = "measured"
    else:
        days = found.recent_days
        bytes_ = sum(one.size_bytes * one.recent_share for one in found.contents)
        how = "estimated"
    if days < DAYS_NEEDED:
        return {"bytes_a_year": None, "how": "not_enough_history", "days": round(days, 1)}
    return {
        "bytes_a_year": round(bytes_ / days * DAYS_A_YEAR),
        "how": how,
        "days": round(days, 1),
    }


def _measured(runs: Sequence[RunInfo]) -> tuple[float, float] | None:
    """Growth in bytes, and in how many days; None where no runs tell."""
    sizes: list[tuple[datetime, int]] = []
    for run in runs:
        if run.kind == "prune":
            break
        if run.ended_at is not None and BYTES_COUNTED in run.counts:
            sizes.append((run.ended_at, run.counts[BYTES_COUNTED]))
    sizes = [one for one in sizes if (sizes[0][0] - one[0]).days < RECENT_DAYS]
    if not sizes:
        return None
    (last, more), (first, less) = sizes[0], sizes[-1]
    days = (to_us(last) - to_us(first)) / DAY_US
    return (more - less, days) if days >= DAYS_NEEDED else None


def newest_steps(
    newest: Mapping[str, NewestStep], tags: Collection[str], as_of: datetime | None
) -> Json:
    """How many loops of the register had a setpoint change lately, and which had none for longest.

    Counted back from ``as_of``, or without it from the newest change of all.
    """
    known = {tag: newest[tag].at_us for tag in tags if tag in newest}
    end_us = max(known.values(), default=0) if as_of is None else to_us(as_of)
    longest = sorted(known.items(), key=lambda item: (item[1], item[0]))[:LONGEST]
    since = {
        f"last_{days}_days": sum(at_us >= end_us - days * DAY_US for at_us in known.values())
        for days in SINCE_DAYS
    }
    return {
        "as_of": contract.stamp(end_us) if known else None,
        "loops": len(tags),
        "with_steps": len(known),
        **since,
        "longest_without": [
            {
                "tag": tag,
                "at": contract.stamp(at_us),
                "usable": newest[tag].usable,
                "kind": newest[tag].kind.value,
            }
            for tag, at_us in longest
        ],
    }

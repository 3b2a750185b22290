"""One loop: its register row, specs, steps, days and newest standing, as the contract's JSON."""

from __future__ import annotations

from collections import Counter
from collections.abc import Sequence
from datetime import UTC, date, datetime, time, timedelta
from difflib import get_close_matches
from zoneinfo import ZoneInfo

from audit.errors import UnknownLoop
from audit.figures import share
from audit.records import DayRecord, Spec, Standing, Step, instant, spec_in_force, to_us
from audit.reports import contract
from audit.reports.contract import Json
from audit.site import Site
from audit.store import Store, queries
from audit.store.entries import NightInfo


def history(
    store: Store, site: Site, tag: str, since: date | None = None, until: date | None = None
) -> Json:
    """The history of one loop over the site's local days ``since`` to ``until``, both inclusive.

    ``steps`` come in time order; ``standing`` is that of the newest night, whatever the days
    asked for. ``days`` holds shares of a day's known time (0 to 1) and counts of changes.
    Raises UnknownLoop for a tag the register never held.
    """
    zone = site.config.timezone
    from_us = _day_start(since, zone) if since else None
    to_us = _day_start(until + timedelta(days=1), zone) - 1 if until else None
    store.require_current()
    with store.read() as session:
        stored = queries.loop(session, tag)
        if stored is None:
            rows = queries.loops(session, include_retired=True)
            raise _unknown(tag, [row.loop.tag for row in rows])
        specs = queries.specs(session).get(tag, [])
        steps = queries.history(session, tag, from_us, to_us)
        days = queries.day_records(session, tag, since or date.min, until or date.max)
        newest = queries.standings(session)
    standing = next((row for row in newest[1] if row.tag == tag), None) if newest else None
    return {
        "site": site.config.name,
        "timezone": str(zone),
        "loop": contract.loop(stored.loop) | {"retired_at": contract.stamp(stored.retired_at)},
        "specs": [contract.spec(row) for row in specs],
        "interventions": [],
        "steps": [contract.step(step) for step in steps],
        "standing": _standing(standing, newest, specs),
        "days": [_day(day, count) for day, count in _with_counts(days, steps, zone)],
    }


def _standing(
    standing: Standing | None,
    newest: tuple[NightInfo, list[Standing]] | None,
    specs: Sequence[Spec],
) -> Json:
    """The newest standing with its rank, settling band and trends; empty without one."""
    if standing is None or newest is None:
        return {}
    night, ranked = newest
    spec = spec_in_force(specs, night.cutoff)
    trend = standing.trend.quantities if standing.trend else {}
    return (
        {"rank": [row.tag for row in ranked].index(standing.tag) + 1}
        | contract.standing(standing)
        | {"settling_band_pct": spec.settling_band_pct if spec else None}
        | {"trend": {q.value: contract.quantity_trend(found) for q, found in trend.items()}}
    )


def _with_counts(
    days: Sequence[DayRecord], steps: Sequence[Step], zone: ZoneInfo
) -> list[tuple[DayRecord, tuple[int, int]]]:
    """Each day's record with how many of its changes were seen, and how many were usable."""
    seen: Counter[date] = Counter()
    usable: Counter[date] = Counter()
    for step in steps:
        day = instant(step.change.at_us).astimezone(zone).date()
        seen[day] += 1
        usable[day] += step.usable
    return [(record, (seen[record.day], usable[record.day])) for record in days]


def _day(record: DayRecord, changes: tuple[int, int]) -> Json:
    return {
        "day": record.day.isoformat(),
        "automatic": share(record.auto_us, record.mode_us),
        "output_saturated": share(record.saturated_us, record.output_us),
        "pv_bad_or_missing": share(record.pv_bad_us, record.span_us),
        "changes": changes[0],
        "usable_changes": changes[1],
    }


def _day_start(day: date, zone: ZoneInfo) -> int:
    """The first instant of a local day, microseconds; a midnight that is skipped is moved on."""
    return to_us(datetime.combine(day, time(), zone).astimezone(UTC))


def _unknown(tag: str, tags: Sequence[str]) -> UnknownLoop:
    if not tags:
        return UnknownLoop(f"the store knows no loop {tag} yet", "run `loopassay nightly` first")
    close = get_close_matches(tag, tags, n=3, cutoff=0.5)
    remedy = f"did you mean {', '.join(close)}?" if close else "`loopassay rank --all` lists all"
    return UnknownLoop(f"the register has no loop {tag}", remedy)

"""Records in, the contract's JSON shapes out: plain dicts of what ``json.dumps`` can write.

Instants are RFC 3339 in UTC, dates ISO 8601, units in the keys. What is not there is null, never
NaN. Keys are only ever added; a changed or dropped key is a breaking change.
"""

from __future__ import annotations

from collections.abc import Callable, Mapping
from datetime import UTC, datetime
from typing import Any, TypeVar

from audit.records import (
    SECOND_US,
    CellAccount,
    LimitStanding,
    Loop,
    Measured,
    Quantity,
    QuantityTrend,
    Spec,
    Standing,
    Step,
    Verdict,
    instant,
)

Json = dict[str, Any]
"""A JSON object."""

Found = TypeVar("Found")


def stamp(at: datetime | int | None) -> str | None:
    """RFC 3339 in UTC with a ``Z``; microseconds only where there are any."""
    if at is None:
        return None
    moment = instant(at) if isinstance(at, int) else at
    return moment.astimezone(UTC).isoformat().replace("+00:00", "Z")


def loop(row: Loop) -> Json:
    """A row of the loop register."""
    return {
        "tag": row.tag,
        "process_unit": row.process_unit,
        "service": row.service,
        "kind": row.kind.value,
        "pv": row.pv,
        "sp": row.sp,
        "output": row.output,
        "mode": row.mode,
        "eu": row.eu,
        "range_low": row.range_low,
        "range_high": row.range_high,
        "output_low": row.output_low,
        "output_high": row.output_high,
        "auto_modes": list(row.auto_modes),
        "criticality": row.criticality,
        "cascade_primary": row.cascade_primary,
        "averaging": row.averaging,
        "before_s": row.windows.before_us / SECOND_US,
        "after_s": row.windows.after_us / SECOND_US,
        "join_s": row.windows.join_us / SECOND_US,
        "notes": row.notes,
    }


def spec(row: Spec) -> Json:
    """A stored spec version; ``limits`` holds the quantities that have one."""
    return {
        "valid_from": stamp(row.valid_from),
        "limits": {quantity.value: limit for quantity, limit in row.limits.items()},
        "settling_band_pct": row.settling_band_pct,
        "min_step_eu": row.min_step_eu,
        "set_by": row.set_by,
        "reason": row.reason,
        "version": row.version,
        "entered_at": stamp(row.entered_at),
    }


def measured(found: Measured) -> Json:
    """One quantity of one step."""
    return {
        "value": found.value,
        "low": found.low,
        "high": found.high,
        "how": found.how,
        "why": found.why.value if found.why else None,
    }


def verdict(given: Verdict) -> Json:
    """The verdict on one limited quantity of one step."""
    return {
        "limit": given.limit,
        "outcome": given.outcome.value,
        "why": given.why.value if given.why else None,
        "spec_valid_from": stamp(given.spec_valid_from),
        "spec_version": given.spec_version,
    }


def step(audited: Step) -> Json:
    """One setpoint change, measured and judged."""
    change, response = audited.change, audited.response
    return {
        "at": stamp(change.at_us),
        "sp_from": change.sp_from,
        "sp_to": change.sp_to,
        "kind": change.kind.value,
        "window_s": change.window_s,
        "complete": change.complete,
        "usable": audited.usable,
        "set_aside": [reason.value for reason in audited.set_aside],
        "method_version": response.method_version,
        "settling_band_pct": response.spec_band_pct,
        "measured": _by_quantity(response.measured, measured),
        "verdicts": _by_quantity(audited.verdicts, verdict),
    }


def limit_standing(row: LimitStanding) -> Json:
    """One limited quantity over a loop's last usable steps."""
    return {
        "limit": row.limit,
        "outcome": row.outcome.value,
        "median": row.median,
        "low": row.low,
        "high": row.high,
        "steps": row.steps,
        "longer_than": row.longer_than,
    }


def quantity_trend(found: QuantityTrend) -> Json:
    """One quantity against the loop's own baseline."""
    return {
        "baseline": found.baseline,
        "baseline_low": found.baseline_low,
        "baseline_high": found.baseline_high,
        "baseline_steps": found.baseline_steps,
        "provisional": found.provisional,
        "recent": found.recent,
        "recent_low": found.recent_low,
        "recent_high": found.recent_high,
        "recent_steps": found.recent_steps,
        "changed": found.changed,
        "since": stamp(found.since_us),
        "since_low": stamp(found.since_low_us),
        "since_high": stamp(found.since_high_us),
        "note": found.note,
    }


def standing(row: Standing) -> Json:
    """Where a loop stands on a night, without its place in the list."""
    return {
        "night": row.night.isoformat(),
        "criticality": row.criticality,
        "group": row.group.value,
        "standing": row.standing.value,
        "degraded": row.degraded,
        "since": row.since.isoformat() if row.since else None,
        "usable_steps": row.usable_steps,
        "reasons": [{"code": reason.code, "text": reason.text} for reason in row.reasons],
        "limits": {limit.quantity.value: limit_standing(limit) for limit in row.limits},
        "order": {
            "quantity": row.order_quantity.value if row.order_quantity else None,
            "distance": row.distance,
            "reference": row.reference,
            "reference_kind": row.reference_kind,
            "value": row.order_value,
        },
    }


def account(cells: CellAccount) -> Json:
    """What became of every cell read; ``balance`` is 0 where the sum holds."""
    return {
        "rows": cells.rows,
        "read": cells.read,
        "taken": cells.taken,
        "duplicate": cells.duplicate,
        "replaced": cells.replaced,
        "blank": cells.blank,
        "bad_quality": cells.bad_quality,
        "unregistered": cells.unregistered,
        "refused": dict(cells.refused),
        "balance": cells.balance,
    }


def _by_quantity(found: Mapping[Quantity, Found], shape: Callable[[Found], Json]) -> Json:
    """Quantities in the glossary's order, each in its shape."""
    return {quantity.value: shape(found[quantity]) for quantity in Quantity if quantity in found}

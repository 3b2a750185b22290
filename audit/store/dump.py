"""The store's canonical content, one JSON object a line: equal stores give equal lines.

Register and specs as they stand, current steps with their measurements and verdicts, days, and the
newest night's newest list, all by their natural keys. Left out is what depends on how the content
came in: surrogate keys, export names, the run log, write times. Floats are written by ``repr``.
"""

from __future__ import annotations

import json
from collections.abc import Iterator, Mapping
from dataclasses import asdict
from datetime import UTC, date, datetime
from typing import Any

from sqlalchemy.orm import Session

from audit.records import DayRecord, Measured, Quantity, Spec, Standing, Step, Verdict, instant
from audit.store import queries
from audit.store.payload import loop_values, standing_detail


def dump(s: Session) -> Iterator[str]:
    """The lines, without line ends: objects with one key: loop, spec, step, day or standing."""
    stored = queries.loops(s, include_retired=True)
    for one in stored:
        retired = {"retired": one.retired_at is not None}
        yield _line("loop", {"tag": one.loop.tag} | loop_values(one.loop) | retired)
    for tag, versions in queries.specs(s).items():
        in_force = {spec.valid_from: spec for spec in versions}
        yield from (_line("spec", _spec(tag, spec)) for spec in in_force.values())
    for one in stored:
        tag = one.loop.tag
        yield from (_line("step", {"tag": tag} | _step(step)) for step in queries.history(s, tag))
        for day in queries.day_records(s, tag, date.min, date.max):
            yield _line("day", {"tag": tag} | _day(day))
    newest = queries.standings(s)
    if newest is not None:
        for rank, standing in enumerate(newest[1], start=1):
            yield _line("standing", _standing(rank, standing))


def _line(kind: str, content: Mapping[str, Any]) -> str:
    return json.dumps({kind: content}, ensure_ascii=False, allow_nan=False)


def _stamp(at: datetime) -> str:
    return at.astimezone(UTC).isoformat().replace("+00:00", "Z")


def _spec(tag: str, spec: Spec) -> dict[str, Any]:
    return {
        "tag": tag,
        "valid_from": _stamp(spec.valid_from),
        "version": spec.version,
        "limits": {q.value: spec.limits[q] for q in Quantity if q in spec.limits},
        "settling_band_pct": spec.settling_band_pct,
        "min_step_eu": spec.min_step_eu,
        "set_by": spec.set_by,
        "reason": spec.reason,
    }


def _step(step: Step) -> dict[str, Any]:
    change, response = step.change, step.response
    return {
        "at": _stamp(instant(change.at_us)),
        "sp_from": change.sp_from,
        "sp_to": change.sp_to,
        "kind": change.kind.value,
        "moves": [list(move) for move in change.moves],
        "window_s": change.window_s,
        "complete": change.complete,
        "cut": change.cut,
        "change_set_aside": list(change.set_aside),
        "sp_noise_eu": change.sp_noise_eu,
        "usable": step.usable,
        "set_aside": list(step.set_aside),
        "method_version": response.method_version,
        "settling_band_pct": response.spec_band_pct,
        "y0_eu": response.y0_eu,
        "y_end_eu": response.y_end_eu,
        "noise_eu": response.noise_eu,
        "measured": {
            q.value: _measured(response.measured[q]) for q in Quantity if q in response.measured
        },
        "verdicts": {q.value: _verdict(step.verdicts[q]) for q in Quantity if q in step.verdicts},
    }


def _measured(one: Measured) -> dict[str, Any]:
    return {
        "value": one.value,
        "low": one.low,
        "high": one.high,
        "how": one.how,
        "why": one.why,
    }


def _verdict(one: Verdict) -> dict[str, Any]:
    return {
        "limit": one.limit,
        "outcome": one.outcome.value,
        "why": one.why,
        "spec_valid_from": _stamp(one.spec_valid_from),
        "spec_version": one.spec_version,
    }


def _day(day: DayRecord) -> dict[str, Any]:
    return asdict(day) | {"day": day.day.isoformat()}


def _standing(rank: int, standing: Standing) -> dict[str, Any]:
    return {
        "night": standing.night.isoformat(),
        "rank": rank,
        "tag": standing.tag,
        "group": standing.group.value,
        "standing": standing.standing.value,
        "degraded": standing.degraded,
        "since": None if standing.since is None else standing.since.isoformat(),
        "usable_steps": standing.usable_steps,
        "criticality": standing.criticality,
        "distance": standing.distance,
        "reference": standing.reference,
        "reference_kind": standing.reference_kind,
        "order_quantity": standing.order_quantity,
        "order_value": standing.order_value,
    } | standing_detail(standing)

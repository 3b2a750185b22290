"""What one audit of a loop found -> the values of its rows: no database, no clock.

It is the greater part of the work of storing, and can be done in another process.
"""

from __future__ import annotations

import hashlib
import json
from collections.abc import Mapping, Sequence
from dataclasses import dataclass
from functools import cached_property
from typing import Any

from audit.records import LoopResult, MeasuredStep, Record
from audit.store import codec_first
from audit.store.bulk import JsonText
from audit.store.codec import Packed, decode, encode, pack
from audit.store.engine import compact_json
from audit.store.payload import step_values

Values = dict[str, Any]
"""Columns by name; never changed once made."""

_JSON_COLUMNS = ("moves", "change_set_aside", "measured", "set_aside")


@dataclass(frozen=True, eq=False)
class StepRows:
    """The values of one measured step: its measurement, its curve and its verdicts.

    ``fingerprint``: what the measurement is told from another by, its curve included.
    """

    at_us: int
    measurement: Values
    curve: Values
    verdicts: tuple[Values, ...]
    fingerprint: bytes

    @cached_property
    def first_curve_digest(self) -> bytes:
        """The curve's digest as it was made when curves were stored in the first encoding."""
        return codec_first.digest(decode(self.curve["data"]))

    def first_fingerprint(self) -> bytes:
        """The fingerprint as it was made then."""
        plain = {
            name: json.loads(value) if isinstance(value, JsonText) else value
            for name, value in self.measurement.items()
        }
        content = compact_json([plain, list(self.verdicts)]).encode() + self.first_curve_digest
        return hashlib.blake2b(content, digest_size=16).digest()


@dataclass(frozen=True, eq=False)
class LoopRows:
    """The values of all rows that one loop's result leads to; of which some may be there already.

    ``ends_us``: where the windows of its steps end.
    """

    tag: str
    steps: tuple[StepRows, ...]
    ends_us: tuple[int, ...]
    withdrawn: tuple[int, ...]
    edges: tuple[Values, ...]
    dropped_edges: tuple[tuple[int, str], ...]
    days: tuple[Values, ...]
    tag_states: tuple[Values, ...]


def rows_of(result: LoopResult) -> LoopRows:
    """The rows of a loop's result."""
    return LoopRows(
        tag=result.tag,
        steps=tuple(_step_rows(one) for one in result.steps),
        ends_us=tuple(one.step.change.window_end_us for one in result.steps),
        withdrawn=result.withdrawn,
        edges=tuple(_edges(result)),
        dropped_edges=result.dropped_edges,
        days=tuple(_days(result)),
        tag_states=tuple(_tag_states(result)),
    )


def _step_rows(one: MeasuredStep) -> StepRows:
    values = step_values(one.step) | {
        "depends_from_us": one.depends_from_us,
        "depends_to_us": one.depends_to_us,
    }
    texts = {name: JsonText(compact_json(values[name])) for name in _JSON_COLUMNS}
    verdicts = _verdict_values(one)
    packed = pack(one.curve)
    at_us = one.step.change.at_us
    from_us, to_us = _span(one.curve, at_us)
    return StepRows(
        at_us,
        values | texts,
        {"from_us": from_us, "to_us": to_us, "digest": packed.digest, "data": packed.data},
        tuple(verdicts),
        _fingerprint(values, texts, verdicts, packed),
    )


def _verdict_values(one: MeasuredStep) -> list[Values]:
    return [
        {
            "quantity": quantity.value,
            "spec_version": verdict.spec_version,
            "limit_value": verdict.limit,
            "outcome": verdict.outcome.value,
            "why": None if verdict.why is None else verdict.why.value,
        }
        for quantity, verdict in sorted(one.step.verdicts.items())
    ]


def _fingerprint(
    values: Mapping[str, Any],
    texts: Mapping[str, str],
    verdicts: Sequence[Mapping[str, Any]],
    packed: Packed,
) -> bytes:
    """What a measurement is told from another by: all that is stored of it, and its curve."""
    plain = [value for name, value in values.items() if name not in texts]
    judged = [list(verdict.values()) for verdict in verdicts]
    content = "\n".join((compact_json([plain, judged]), *texts.values()))
    return hashlib.blake2b(content.encode() + packed.digest, digest_size=16).digest()


def _span(record: Record, otherwise_us: int) -> tuple[int, int]:
    """First and last stamp of a record; of one without samples the given instant."""
    filled = [samples.t_us for samples in record.signals.values() if len(samples)]
    first = min((int(stamps[0]) for stamps in filled), default=otherwise_us)
    last = max((int(stamps[-1]) for stamps in filled), default=otherwise_us)
    return first, last


def _edges(result: LoopResult) -> list[Values]:
    rows = []
    for edge in result.edges:
        from_us, to_us = _span(edge.record, edge.border_us)
        rows.append(
            {
                "border_us": edge.border_us,
                "side": edge.side,
                "from_us": from_us,
                "to_us": to_us,
                "data": encode(edge.record),
            }
        )
    return rows


def _days(result: LoopResult) -> list[Values]:
    return [
        {
            "day": kept.record.day,
            "span_us": kept.record.span_us,
            "auto_us": kept.record.auto_us,
            "mode_us": kept.record.mode_us,
            "saturated_us": kept.record.saturated_us,
            "output_us": kept.record.output_us,
            "pv_bad_us": kept.record.pv_bad_us,
            "runs": kept.runs,
        }
        for kept in result.days
    ]


def _tag_states(result: LoopResult) -> list[Values]:
    return [
        {
            "role": role.value,
            "newest_us": state.newest_us,
            "value": state.value,
            "held_since_us": state.held_since_us,
        }
        for role, state in result.tag_states.items()
    ]

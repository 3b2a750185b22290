"""Records <-> the JSON and column values they are stored as; equal after a round trip.

``measured``: quantity -> ``[value, low, high, how]`` with ``why`` as a fifth where there is one, or
the bare ``why`` of a quantity that was not measured. A standing's ``detail`` holds its reasons as
``[code, text]``, its limits and its trend by field name; fields at their default are left out.
"""

from __future__ import annotations

import json
from collections.abc import Iterator, Mapping
from dataclasses import MISSING, fields
from typing import Any

from audit.records import (
    ChangeKind,
    LimitStanding,
    ListReason,
    Loop,
    LoopKind,
    Measured,
    Outcome,
    Quantity,
    QuantityTrend,
    Reason,
    SetpointChange,
    Standing,
    Step,
    Trend,
    Windows,
)

Columns = Mapping[Any, Any]
"""A row by column name."""

_QUANTITY = {quantity.value: quantity for quantity in Quantity}
_MISSING = {reason.value: Measured.missing(reason) for reason in Reason}
_LOOP_PLAIN = (
    "process_unit",
    "service",
    "pv",
    "sp",
    "output",
    "mode",
    "eu",
    "range_low",
    "range_high",
    "output_low",
    "output_high",
    "criticality",
    "cascade_primary",
    "averaging",
    "notes",
)


def loop_values(loop: Loop) -> dict[str, Any]:
    """The columns of a loop's version."""
    return {
        **{name: getattr(loop, name) for name in _LOOP_PLAIN},
        "kind": loop.kind.value,
        "auto_modes": list(loop.auto_modes),
        "before_us": loop.windows.before_us,
        "after_us": loop.windows.after_us,
        "join_us": loop.windows.join_us,
    }


def loop_of(tag: str, row: Columns) -> Loop:
    """The loop of a version's columns."""
    return Loop(
        tag=tag,
        windows=Windows(row["before_us"], row["after_us"], row["join_us"]),
        kind=LoopKind(row["kind"]),
        auto_modes=tuple(row["auto_modes"]),
        **{name: row[name] for name in _LOOP_PLAIN},
    )


def measured_values(measured: Mapping[Quantity, Measured]) -> dict[str, Any]:
    """The JSON of what was measured, in the order of the quantities."""
    return {name: _measured_value(measured[q]) for name, q in _QUANTITY.items() if q in measured}


def _measured_value(one: Measured) -> str | list[Any]:
    if not one.known and one.how is None and one.why is not None:
        return one.why.value
    row = [one.value, one.low, one.high, one.how]
    return row if one.why is None else [*row, one.why.value]


def measured_of(stored: Mapping[str, Any]) -> dict[Quantity, Measured]:
    """What was measured, from its JSON."""
    return {_QUANTITY[name]: _measured_of(one) for name, one in stored.items()}


def measured_one(stored: str | list[Any] | None) -> Measured | None:
    """One quantity from its JSON; None where it was not looked for yet."""
    return None if stored is None else _measured_of(stored)


def _measured_of(one: str | list[Any]) -> Measured:
    if isinstance(one, str):
        return _MISSING[one]
    value, low, high, how, *why = one
    return Measured(value, low, high, how, Reason(why[0]) if why else None)


class StoredMeasured(Mapping[Quantity, Measured]):
    """What was measured, as the text of its JSON until something in it is asked for.

    A night reads thousands of steps a loop and looks at few quantities of each; what goes to
    another process goes as text.
    """

    __slots__ = ("_stored", "_text")

    def __init__(self, text: str) -> None:
        self._text = text
        self._stored: dict[str, Any] | None = None

    def _read(self) -> dict[str, Any]:
        if self._stored is None:
            self._stored = json.loads(self._text)
        return self._stored

    def __getitem__(self, quantity: Quantity) -> Measured:
        return _measured_of(self._read()[quantity])

    def __iter__(self) -> Iterator[Quantity]:
        return (_QUANTITY[name] for name in self._read())

    def __len__(self) -> int:
        return len(self._read())

    def __reduce__(self) -> tuple[type[StoredMeasured], tuple[str]]:
        return StoredMeasured, (self._text,)

    def __repr__(self) -> str:
        return f"StoredMeasured({self._text!r})"


def reasons_of(codes: list[str]) -> tuple[Reason, ...]:
    """Reasons from their codes."""
    return tuple(Reason(code) for code in codes)


def step_values(step: Step) -> dict[str, Any]:
    """The columns of a measurement: the change and what was measured of it."""
    change, response = step.change, step.response
    return {
        "at_us": change.at_us,
        "sp_from": change.sp_from,
        "sp_to": change.sp_to,
        "kind": change.kind.value,
        "moves": [list(move) for move in change.moves],
        "window_end_us": change.window_end_us,
        "complete": change.complete,
        "cut": None if change.cut is None else change.cut.value,
        "change_set_aside": [reason.value for reason in change.set_aside],
        "sp_noise_eu": change.sp_noise_eu,
        "measured": measured_values(response.measured),
        "method_version": response.method_version,
        "spec_band_pct": response.spec_band_pct,
        "y0_eu": response.y0_eu,
        "y_end_eu": response.y_end_eu,
        "noise_eu": response.noise_eu,
        "usable": step.usable,
        "set_aside": [reason.value for reason in step.set_aside],
    }


def change_of(row: Columns) -> SetpointChange:
    """The setpoint change of a measurement's columns."""
    return SetpointChange(
        at_us=row["at_us"],
        sp_from=row["sp_from"],
        sp_to=row["sp_to"],
        kind=ChangeKind(row["kind"]),
        moves=tuple((at_us, value) for at_us, value in row["moves"]),
        window_end_us=row["window_end_us"],
        complete=row["complete"],
        cut=None if row["cut"] is None else Reason(row["cut"]),
        set_aside=reasons_of(row["change_set_aside"]),
        sp_noise_eu=row["sp_noise_eu"],
    )


def standing_detail(standing: Standing) -> dict[str, Any]:
    """The JSON of a standing's reasons, limits and trend."""
    trend = standing.trend
    return {
        "reasons": [[reason.code, reason.text] for reason in standing.reasons],
        "limits": [_by_name(limit) for limit in standing.limits],
        "trend": None if trend is None else [_by_name(trend.quantities[q]) for q in _order(trend)],
    }


def _order(trend: Trend) -> list[Quantity]:
    return [quantity for quantity in Quantity if quantity in trend.quantities]


def _by_name(record: LimitStanding | QuantityTrend) -> dict[str, Any]:
    values = {field.name: (getattr(record, field.name), field.default) for field in fields(record)}
    return {
        name: value
        for name, (value, default) in values.items()
        if value != default and not (default is MISSING and value is None)
    }


def detail_of(
    stored: Mapping[str, Any],
) -> tuple[tuple[ListReason, ...], tuple[LimitStanding, ...], Trend | None]:
    """Reasons, limits and trend of a standing, from their JSON."""
    reasons = tuple(ListReason(code, text) for code, text in stored["reasons"])
    limits = tuple(_limit_of(one) for one in stored["limits"])
    if stored["trend"] is None:
        return reasons, limits, None
    quantities = [_trend_of(one) for one in stored["trend"]]
    return reasons, limits, Trend({one.quantity: one for one in quantities})


def _limit_of(stored: Mapping[str, Any]) -> LimitStanding:
    values: dict[str, Any] = {"median": None, "low": None, "high": None, **stored}
    values["quantity"] = Quantity(values["quantity"])
    values["outcome"] = Outcome(values["outcome"])
    return LimitStanding(**values)


def _trend_of(stored: Mapping[str, Any]) -> QuantityTrend:
    blank = {field.name: None for field in fields(QuantityTrend) if field.default is MISSING}
    values: dict[str, Any] = {**blank, **stored}
    values["quantity"] = Quantity(values["quantity"])
    return QuantityTrend(**values)

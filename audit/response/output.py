"""What the final control element paid: the controller output's side of a change.

In: the record, the change, the output's limits. Out: travel, overshoot, reversals and saturated
share as ``Measured``; and how long the output was saturated in a stretch.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from audit.records import (
    SECOND_US,
    Between,
    Measured,
    MeasureSettings,
    Quantity,
    Reason,
    Record,
    Role,
    SetpointChange,
)
from audit.response.constants import CONSTANTS
from audit.response.localfit import Array
from audit.response.order import clamped, differences, median
from audit.response.shape import turning
from audit.response.uncertainty import interval

QUANTITIES = (
    Quantity.OUTPUT_TRAVEL,
    Quantity.OUTPUT_OVERSHOOT,
    Quantity.OUTPUT_REVERSALS,
    Quantity.OUTPUT_SATURATED,
)


@dataclass(frozen=True, eq=False)
class Output:
    """Good samples of the controller output: s from t0, output units; noise sd."""

    t: Array
    u: Array
    sd: float
    hold: bool
    low: float
    high: float
    silent: bool


def read(record: Record, change: SetpointChange, settings: MeasureSettings) -> Output | None:
    """The output around a change; None without any good sample up to the end of the window."""
    raw = record.of(Role.OUTPUT)
    good = raw.around(change.at_us - settings.before_us, change.window_end_us).only_good()
    if len(good) == 0 or int(good.t_us[0]) > change.window_end_us:
        return None
    silence = settings.reading.silence_us.get(Role.OUTPUT)
    inside = good.t_us[(good.t_us <= change.window_end_us)]
    points = np.concatenate([[change.at_us], inside[inside > change.at_us], [change.window_end_us]])
    silent = silence is not None and (
        int(np.diff(points).max()) > silence or change.at_us - int(good.t_us[0]) < 0
    )
    t = (good.t_us - change.at_us) / SECOND_US
    before = good.value[t <= 0]
    hold = settings.reading.output_between is Between.HOLD
    return Output(
        t, good.value, _noise(before), hold, settings.output_low, settings.output_high, silent
    )


def _noise(before: Array) -> float:
    """Noise of the output from its first differences before the change, output units."""
    if len(before) < 8:
        return 0.0
    step = differences(before)
    return float(np.sqrt(0.5 * float(np.mean(clamped(step, *_reach(step)) ** 2))))


def _reach(step: Array) -> tuple[float, float]:
    robust = 1.4826 * median(np.abs(step))
    reach = 4.0 * robust if robust > 0 else float(np.abs(step).max())
    return -reach, reach


def at_limit_s(output: Output, from_s: float, to_s: float) -> float:
    """Seconds of from_s..to_s with the output at either limit."""
    slack = CONSTANTS.saturated_tolerance * abs(output.high - output.low)
    stuck = (output.u >= output.high - slack) | (output.u <= output.low + slack)
    ends = np.append(output.t[1:], max(to_s, float(output.t[-1])))
    start = clamped(output.t, from_s, to_s)
    stop = clamped(ends, from_s, to_s)
    until = stuck if output.hold else stuck & np.append(stuck[1:], stuck[-1])
    return float((stop - start) @ until)


def measure(output: Output | None, window_s: float) -> dict[Quantity, Measured]:
    """The four quantities of the output over the window."""
    if output is None or window_s <= 0:
        return dict.fromkeys(QUANTITIES, Measured.missing(Reason.NO_OUTPUT))
    if output.silent:
        return dict.fromkeys(QUANTITIES, Measured.missing(Reason.GAP))
    u = _inside(output, window_s)
    turns = u[turning(u, max(4.0 * output.sd, 1e-9))]
    found = {
        Quantity.OUTPUT_TRAVEL: _travel(turns, output.sd),
        Quantity.OUTPUT_REVERSALS: _reversals(turns, u, output.sd),
        Quantity.OUTPUT_OVERSHOOT: _overshoot(turns, output, window_s),
    }
    share = 100.0 * at_limit_s(output, 0.0, window_s) / window_s
    step = 100.0 * min(window_s / max(len(u), 1), window_s) / window_s
    doubt = step / np.sqrt(12.0) if 0.0 < share < 100.0 else 0.0
    found[Quantity.OUTPUT_SATURATED] = interval(share, doubt, "direct", 0.0, 100.0)
    return found


def _inside(output: Output, window_s: float) -> Array:
    """The output from its value at t0 to that at the end of the window."""
    inside = output.u[(output.t > 0) & (output.t <= window_s)]
    if output.hold:
        first = output.u[max(int(np.searchsorted(output.t, 0.0, "right")) - 1, 0)]
        return np.concatenate([[first], inside])
    ends = np.interp([0.0, window_s], output.t, output.u)
    return np.concatenate([ends[:1], inside, ends[1:]])


def _travel(turns: Array, sd: float) -> Measured:
    """Total variation of the swings beyond noise, output units."""
    swings = np.abs(differences(turns))
    net = abs(float(turns[-1] - turns[0]))
    doubt = sd * np.sqrt(2.0 * max(len(swings), 1))
    return interval(float(swings.sum()), float(doubt), "direct", max(net - 4.0 * sd, 0.0))


def _reversals(turns: Array, u: Array, sd: float) -> Measured:
    """Changes of direction beyond noise; the interval from counting at 3 and at 6 sd."""
    value = float(max(len(turns) - 2, 0))
    if sd <= 0:
        return Measured(value=value, low=value, high=value, how="direct")
    most = float(max(len(turning(u, 3.0 * sd)) - 2, 0))
    least = float(max(len(turning(u, 6.0 * sd)) - 2, 0))
    return Measured(value=value, low=min(least, value), high=max(most, value), how="direct")


def _overshoot(turns: Array, output: Output, window_s: float) -> Measured:
    """Largest excursion beyond the final output, percent of the net change of the output."""
    before = output.u[output.t <= 0]
    tail = output.u[(output.t >= 0.75 * window_s) & (output.t <= window_s)]
    if len(before) == 0:
        return Measured.missing(Reason.GAP)
    held = output.u[output.t <= window_s]
    start = median(before)
    end = float(median(tail)) if len(tail) else float(held[-1])
    net = end - start
    spread = max(output.sd, 0.25 * float(np.ptp(tail)) if len(tail) else 0.0)
    u_level = spread / np.sqrt(max(min(len(before), len(tail)), 1))
    if abs(net) <= max(4.0 * u_level, 2.0 * output.sd, 1e-9):
        return Measured.missing(Reason.TOO_SMALL)
    excess = float(np.max(np.sign(net) * (turns - end)))
    value = 100.0 * excess / abs(net)
    doubt = 100.0 * float(np.hypot(output.sd, u_level * (1.0 + excess / abs(net)))) / abs(net)
    return interval(value, doubt, "direct", 0.0)

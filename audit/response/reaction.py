"""When the controller output reacts to a setpoint change; before it only where clocks differ.

In: the output around a change, the setpoint's samples. Out: ``OUTPUT_REACTION`` as ``Measured``.
"""

from __future__ import annotations

import numpy as np
from numpy.typing import NDArray

from audit.records import (
    SECOND_US,
    Measured,
    MeasureSettings,
    Reason,
    Record,
    Role,
    SetpointChange,
)
from audit.response.constants import CONSTANTS
from audit.response.localfit import Array
from audit.response.order import differences, median
from audit.response.output import Output, at_limit_s

NEAR = 32
"""Samples to either side that tell whether a record is sampled regularly."""


def measure(
    output: Output | None,
    record: Record,
    change: SetpointChange,
    settings: MeasureSettings,
    step_s: float,
) -> Measured:
    """From the stamp of a step to that of the first plain movement of the output, s.

    A controller answers a step of its setpoint at its next execution: by a kick if it acts on the
    error in proportion, by a ramp if by its integral alone; both move fastest at their start. Plain
    is the first movement from sample to sample of at least half the largest near the change, which
    has to stand out from all of an earlier stretch. The interval is what the sampling leaves open:
    the output moved after the sample before, the setpoint up to one of its intervals earlier than
    its stamp. ``step_s``: typical interval of the process variable.
    """
    if output is None:
        return Measured.missing(Reason.NO_OUTPUT)
    if output.silent:
        return Measured.missing(Reason.GAP)
    before_s = settings.before_us / SECOND_US
    until = min(before_s, (change.window_end_us - change.at_us) / SECOND_US)
    near_us = change.at_us + round(until * SECOND_US)
    sp = record.of(Role.SP).around(change.at_us - settings.before_us, near_us).only_good()
    sp_t = (sp.t_us - change.at_us) / SECOND_US
    if _moved_before(sp.value[sp_t < 0.0], change):
        return Measured.missing(Reason.UNSETTLED_BEFORE)
    found = _kick(output, before_s, until)
    if isinstance(found, Reason):
        return Measured.missing(found)
    value = float(output.t[found])
    low = value - _late_s(output.t, found, step_s)
    high = value + _late_s(sp_t, int(sp_t.searchsorted(0.0, "left")), step_s)
    return Measured(value=value, low=low, high=high, how="direct")


def _kick(output: Output, before_s: float, until_s: float) -> int | Reason:
    """Which sample is the first of the reaction, or why that cannot be told."""
    quiet_s = CONSTANTS.reaction_quiet * before_s
    first = int(output.t.searchsorted(-before_s, "right"))
    near = int(output.t.searchsorted(quiet_s - before_s, "right"))
    stop = int(output.t.searchsorted(until_s, "right"))
    jump = np.abs(differences(output.u[:stop]))
    base, close = jump[max(first - 1, 0) : max(near - 1, 0)], jump[max(near - 1, 0) :]
    usual = float(base.max(initial=0.0))
    few = len(base) < CONSTANTS.reaction_samples
    if few and not output.hold:
        return Reason.TOO_SPARSE
    largest = float(close.max(initial=0.0))
    if largest <= 0.0:
        stuck = until_s > 0 and at_limit_s(output, 0.0, until_s) > 0.5 * until_s
        return Reason.OUTPUT_SATURATED if stuck else Reason.TOO_SMALL
    rms = float(np.sqrt(base @ base / len(base))) if len(base) else 0.0
    most = CONSTANTS.reaction_most_few if few else CONSTANTS.reaction_most
    if largest < max(CONSTANTS.reaction_sd * rms, most * usual):
        return Reason.TOO_SPARSE if few else Reason.NOISY
    at = int(np.argmax(close >= CONSTANTS.reaction_share * largest))
    return max(near - 1, 0) + at + 1


def _moved_before(value: Array, change: SetpointChange) -> bool:
    """Whether the setpoint held anything else in the time looked at before the change.

    ``value``: its samples there, and the last one before them, which it held until the first.
    """
    least = max(3.0 * change.sp_noise_eu, CONSTANTS.least_away * abs(change.size_eu))
    return bool((np.abs(value - change.sp_from) > least).any())


def _late_s(t: Array, at: int, step_s: float) -> float:
    """How much later than what it tells a stamp may be: the interval before it, s.

    Of a record that tells changes only, no more than one interval of the process variable.
    """
    if at <= 0 or at >= len(t):
        return step_s
    interval = float(t[at] - t[at - 1])
    if interval <= step_s or _regular(t[max(at - NEAR, 0) : at + NEAR]):
        return interval
    return step_s


def _regular(t: Array) -> bool:
    length = differences(t)
    if len(length) < CONSTANTS.reaction_samples:
        return False
    alike: NDArray[np.bool_] = np.abs(length - median(length)) <= 0.1 * median(length)
    return float(alike.mean()) > 0.9

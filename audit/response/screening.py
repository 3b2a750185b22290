"""What spoils a change, or single quantities of it, and why.

In: the record, the curve and what was found of it. Out: a ``Reason`` for each spoiled quantity.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from audit.records import (
    SECOND_US,
    Measured,
    MeasureSettings,
    Quantity,
    Reason,
    Record,
    Role,
    SetpointChange,
)
from audit.response.constants import CONSTANTS
from audit.response.curve import Curve
from audit.response.levels import Level
from audit.response.noise import Noise
from audit.response.order import differences
from audit.response.shape import boxcar

SETTLING = (
    Quantity.SETTLING_TIME,
    Quantity.SETTLING_TIME_2PCT,
    Quantity.SETTLING_TIME_5PCT,
)
PEAKS = (
    Quantity.OVERSHOOT,
    Quantity.PEAK_TIME,
    Quantity.DECAY_RATIO,
    Quantity.DAMPED_PERIOD,
)
SHAPE = (
    Quantity.RISE_TIME,
    Quantity.PEAK_TIME,
    *SETTLING,
    Quantity.OVERSHOOT,
    Quantity.UNDERSHOOT,
    Quantity.DECAY_RATIO,
    Quantity.DAMPED_PERIOD,
)
FROM_MODEL = (Quantity.DEAD_TIME, Quantity.DAMPING_RATIO, Quantity.NATURAL_FREQUENCY)
SPARE_LONGER = (Reason.UNSETTLED_BEFORE, Reason.OUTPUT_SATURATED)
"""A "longer than" stands in spite of these."""
CAUSES = (
    Reason.GAP,
    Reason.BAD_QUALITY,
    Reason.OSCILLATING,
    Reason.UNSETTLED_BEFORE,
    Reason.OUT_OF_RANGE,
)
FOLLOW = (Reason.NOISY, Reason.NO_PEAK, Reason.TOO_SPARSE)


@dataclass(frozen=True)
class Silence:
    """A silence of good samples, s from t0; ``bad``: bad samples lie in it."""

    from_s: float
    to_s: float
    bad: bool

    @property
    def reason(self) -> Reason:
        return Reason.BAD_QUALITY if self.bad else Reason.GAP

    def overlap_s(self, from_s: float, to_s: float) -> float:
        return max(0.0, min(self.to_s, to_s) - max(self.from_s, from_s))


def whole(change: SetpointChange, settings: MeasureSettings) -> Reason | None:
    """What spoils everything of a change before its curve is looked at."""
    if change.set_aside:
        return change.set_aside[0]
    if not change.complete:
        return Reason.WINDOW_INCOMPLETE
    size = abs(change.size_eu)
    if size == 0 or (settings.min_step_eu is not None and size < settings.min_step_eu):
        return Reason.TOO_SMALL
    return None


def silences(
    record: Record, change: SetpointChange, settings: MeasureSettings, longest_us: int
) -> list[Silence]:
    """Silences of the process variable longer than ``longest_us`` from the window before on."""
    pv = record.of(Role.PV).around(change.at_us - settings.before_us, change.window_end_us)
    good = pv.t_us[pv.good]
    ends = [max(change.window_end_us, int(good[-1]))] if len(good) else [change.window_end_us]
    begin = [] if len(good) else [change.at_us - settings.before_us]
    edges = np.concatenate([np.array(begin, np.int64), good, np.array(ends, np.int64)])
    long = np.flatnonzero(np.diff(edges) > longest_us)
    bad = pv.t_us[~pv.good]
    found = []
    for i in long:
        start, stop = int(edges[i]), int(edges[i + 1])
        inside = bool(((bad > start) & (bad < stop)).any())
        found.append(
            Silence((start - change.at_us) / SECOND_US, (stop - change.at_us) / SECOND_US, inside)
        )
    return found


def in_transient(curve: Curve, noise: Noise, rise_s: float, until_s: float) -> bool:
    """A hole longer than half the rise time before the response has settled.

    Not where the record tells changes only (held, or a deadband seen): there silence is a value.
    """
    if curve.hold or noise.deadband > 0 or len(curve.t) < 3:
        return False
    length = differences(curve.t)
    regular = float(np.mean(length < 1.5 * curve.step_s)) > 0.9
    least = max(0.5 * rise_s, (3.0 if regular else 10.0) * curve.step_s)
    inside = (curve.t[1:] > 0) & (curve.t[:-1] < until_s)
    return bool((length[inside] > least).any())


def oscillating(curve: Curve, noise: Noise) -> bool:
    """A sustained, regular oscillation before the change and in the last half of the window.

    Regularity of the intervals between zero crossings as in Thornhill, Huang and Zhang (2003), on
    the signal itself; similar in amplitude and, where the time before shows it, in period.
    """
    end = curve.window_s
    after = _swing(curve, CONSTANTS.oscillation_from * end, end)
    prior = _swing(curve, -curve.before_s, 0.0)
    if after is None or prior is None:
        return False
    amplitude, period, regular, sustained = after
    was, was_period, was_regular, _ = prior
    sure = CONSTANTS.oscillation_sd if was_regular else CONSTANTS.oscillation_sd_alone
    least = max(CONSTANTS.oscillation_share, sure * noise.sd)
    if not (regular and sustained) or amplitude < least:
        return False
    ratio = CONSTANTS.oscillation_ratio
    alike = amplitude / ratio <= was <= amplitude * ratio
    return alike and (was_period is None or period is None or 0.5 <= was_period / period <= 2.0)


def unsettled(
    measured: dict[Quantity, Measured],
    y0: Level,
    noise_sd: float,
    size: float,
    entry_s: float | None,
    window_s: float,
    band_pct: float,
) -> None:
    """Spoil what the motion before the change would add to materially, if it went on.

    To the shape: more than 3 % of the change over the rise. To a settling time: more than half its
    band until it settles. Motion of the size of the noise is in the intervals and spoils nothing.
    ``size``: y_end - y0; ``entry_s``: coarse settling, None if it did not.
    """
    usual = CONSTANTS.carried_sd * noise_sd
    rise = measured[Quantity.RISE_TIME]
    rise_s = rise.value or rise.high or window_s
    if np.hypot(y0.rate * rise_s, y0.swing) > max(CONSTANTS.carried_share * abs(size), usual):
        spoil(measured, SHAPE, Reason.UNSETTLED_BEFORE)
    added = np.hypot(y0.rate * (entry_s or window_s), y0.swing)
    for quantity, band in zip(SETTLING, (band_pct, 2.0, 5.0), strict=True):
        if added > max(CONSTANTS.carried_band * band / 100.0 * abs(size), usual):
            spoil(measured, (quantity,), Reason.UNSETTLED_BEFORE)


def _swing(curve: Curve, lo: float, hi: float) -> tuple[float, float | None, bool, bool] | None:
    """Amplitude (rms x sqrt 2), period, regular, sustained of a stretch; None: too few samples."""
    inside = (curve.ft >= lo) & (curve.ft <= hi)
    t, v = curve.ft[inside], curve.fv[inside]
    if len(t) < 12:
        return None
    z = t - t.mean()
    slope = float(z @ (v - v.mean())) / float(z @ z)
    left = boxcar(v - v.mean() - slope * z, 3)
    amplitude = float(np.sqrt(2.0 * np.mean(left**2)))
    cross = t[1:][np.sign(left[1:]) != np.sign(left[:-1])]
    halves = np.array_split(left, 2)
    first, second = (float(np.std(h)) for h in halves)
    sustained = second > 0.6 * first
    if len(cross) < 3:
        return amplitude, None, False, sustained
    apart = differences(cross)
    period = 2.0 * float(apart.mean())
    sd = float(apart.std())
    count = len(cross) >= CONSTANTS.oscillation_crossings
    regular = count and float(apart.mean()) > 3.0 * CONSTANTS.oscillation_regularity * sd
    return amplitude, period, regular, sustained


def spoil(
    measured: dict[Quantity, Measured], quantities: tuple[Quantity, ...], why: Reason
) -> None:
    """Put the reason in the place of what it spoils.

    What is missing already keeps its own reason, unless that only follows from this one: an
    oscillation looks like noise, a silence like sparse samples.
    """
    for quantity in quantities:
        now = measured[quantity]
        longer = now.value is None and now.low is not None and now.high is None
        follows = why in CAUSES and now.why in FOLLOW
        if follows or (now.known and not (longer and why in SPARE_LONGER)):
            measured[quantity] = Measured.missing(why)

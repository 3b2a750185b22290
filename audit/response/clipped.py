"""A process variable at or beyond an end of its range: its transmitter's end, not a measurement.

In: the curve, the range, what was measured. Out: a reason, or what bound is still right, for each
quantity that rests on the clipped part. "Ahead" is the end of the range that the change goes
towards, "behind" the other: so that both directions are one case.
"""

from __future__ import annotations

from dataclasses import dataclass, replace

import numpy as np
from numpy.typing import NDArray

from audit.records import Measured, MeasureSettings, Quantity, Reason, SetpointChange
from audit.response.constants import CONSTANTS
from audit.response.curve import Curve
from audit.response.ends import Ends
from audit.response.screening import PEAKS, SETTLING, SHAPE, spoil

Flags = NDArray[np.bool_]
WHY = Reason.OUT_OF_RANGE


@dataclass(frozen=True, eq=False)
class Clipped:
    """Which points of ``curve.ft`` [m] are clipped ahead and behind, and from which level on.

    Levels in parts of the change; the end ahead lies ``margin`` beyond ``ahead_from``. ``before``,
    ``tail``: shares of the time before the change and of the last half of the window, ahead and
    behind.
    """

    ahead: Flags
    behind: Flags
    ahead_from: float
    behind_from: float
    margin: float
    before: tuple[float, float]
    tail: tuple[float, float]

    @property
    def starts_behind(self) -> bool:
        return self.before[1] > CONSTANTS.clipped_share

    @property
    def ends_ahead(self) -> bool:
        return self.tail[0] > CONSTANTS.clipped_share

    @property
    def ends_behind(self) -> bool:
        return self.tail[1] > CONSTANTS.clipped_share

    @property
    def sent_there(self) -> bool:
        """Whether the setpoint itself is at the end of the range ahead."""
        return abs(self.ahead_from + self.margin - 1.0) <= 2.0 * self.margin

    @property
    def sent_beyond(self) -> bool:
        return self.ahead_from < 1.0 and not self.sent_there


def look(curve: Curve, change: SetpointChange, settings: MeasureSettings) -> Clipped | None:
    """Where a curve is clipped; None where it is nowhere, or the range is not known."""
    low, high = settings.range_low, settings.range_high
    if low is None or high is None:
        return None
    size = change.size_eu
    far, near = (high, low) if size > 0 else (low, high)
    margin = CONSTANTS.range_margin * abs(high - low) / abs(size)
    ahead_from = (far - change.sp_from) / size - margin
    behind_from = (near - change.sp_from) / size + margin
    if float(curve.fv.max()) < ahead_from and float(curve.fv.min()) > behind_from:
        return None
    ahead, behind = curve.fv >= ahead_from, curve.fv <= behind_from
    before = (curve.ft >= -curve.before_s) & (curve.ft <= 0.0)
    tail = (curve.ft >= 0.5 * curve.window_s) & (curve.ft <= curve.window_s)
    return Clipped(
        ahead,
        behind,
        ahead_from,
        behind_from,
        margin,
        (_share(ahead, before), _share(behind, before)),
        (_share(ahead, tail), _share(behind, tail)),
    )


def _share(flags: Flags, where: Flags) -> float:
    return float(flags[where].mean()) if bool(where.any()) else 0.0


def for_noise(curve: Curve, clipped: Clipped | None) -> Curve:
    """The curve without the stretch that is clipped: an end of the range shows no noise."""
    if clipped is None:
        return curve
    starts = max(clipped.before) > CONSTANTS.clipped_share
    ends = max(clipped.tail) > CONSTANTS.clipped_share
    if starts and not ends:
        return replace(curve, before_s=0.0)
    return replace(curve, window_s=0.0) if ends and not starts else curve


def put(
    measured: dict[Quantity, Measured],
    clipped: Clipped,
    curve: Curve,
    ends: Ends,
    change: SetpointChange,
    band_pct: float,
) -> None:
    """Put reasons and bounds where the clipped part spoils.

    A level clipped behind before the change (a flow at rest) is a start like any other, but for an
    undershoot; one that does not answer stays on the far side of its setpoint, whatever it is.
    """
    if clipped.starts_behind:
        spoil(measured, (Quantity.UNDERSHOOT,), WHY)
    if clipped.ends_ahead or clipped.ends_behind:
        measured[Quantity.UNREST] = Measured.missing(WHY)
    if clipped.ends_ahead:
        _level_ahead(measured, clipped, ends, change)
    elif clipped.ends_behind:
        _error(measured, -np.sign(change.size_eu))
        _at_least(measured, Quantity.IAE)
    elif _runs(clipped.ahead, curve):
        _peak_ahead(measured, clipped, curve, ends, band_pct)
    if _runs(clipped.behind, curve) and not clipped.starts_behind:
        _at_least(measured, Quantity.UNDERSHOOT)
        _at_least(measured, Quantity.IAE)


def _level_ahead(
    measured: dict[Quantity, Measured], clipped: Clipped, ends: Ends, change: SetpointChange
) -> None:
    """The level it ends at is the end of the range: it may lie beyond.

    Sent to that end, as a flow to 0, it is taken to have got there; what it did beyond is unknown.
    """
    if clipped.sent_there:
        spoil(measured, PEAKS, WHY)
        for quantity in (*SETTLING, Quantity.IAE):
            _at_least(measured, quantity)
        return
    if ends.has_level or not ends.answers:
        spoil(measured, SHAPE, WHY)
        if not ends.answers:
            measured |= dict.fromkeys(SHAPE, Measured.missing(WHY))
    _error(measured, np.sign(change.size_eu))
    if clipped.sent_beyond:
        spoil(measured, (Quantity.IAE,), WHY)
    else:
        _at_least(measured, Quantity.IAE)


def _error(measured: dict[Quantity, Measured], side: float) -> None:
    """Setpoint less level, where the level may lie beyond the upper (side 1) or lower end."""
    found = measured[Quantity.STEADY_STATE_ERROR]
    if found.value is not None:
        low, high = (None, found.high) if side > 0 else (found.low, None)
        measured[Quantity.STEADY_STATE_ERROR] = Measured(low=low, high=high, how=found.how, why=WHY)


def _peak_ahead(
    measured: dict[Quantity, Measured],
    clipped: Clipped,
    curve: Curve,
    ends: Ends,
    band_pct: float,
) -> None:
    """The top of the response is cut off, the level it ends at is not."""
    runs = _runs(clipped.ahead, curve)
    decay, peak = measured[Quantity.DECAY_RATIO], measured[Quantity.PEAK_TIME]
    _at_least(measured, Quantity.OVERSHOOT)
    _at_least(measured, Quantity.IAE)
    spoil(measured, (Quantity.PEAK_TIME, Quantity.DECAY_RATIO, Quantity.DAMPED_PERIOD), WHY)
    if peak.value is not None:
        first, last = runs[0][0] - curve.step_s, runs[-1][1] + curve.step_s
        measured[Quantity.PEAK_TIME] = Measured(
            low=max(min(first, peak.low or 0.0), 0.0),
            high=max(last, peak.high or 0.0),
            how=peak.how,
            why=WHY,
        )
    if decay.high is not None and len(runs) == 1:
        measured[Quantity.DECAY_RATIO] = Measured(low=0.0, high=decay.high, how=decay.how, why=WHY)
    room = (clipped.ahead_from - ends.y0.value) / ends.size - 1.0 if ends.size else 0.0
    for quantity, band in zip(SETTLING, (band_pct, 2.0, 5.0), strict=True):
        if room < band / 100.0:
            _at_least(measured, quantity)


def _at_least(measured: dict[Quantity, Measured], quantity: Quantity) -> None:
    """What is measured is the least it can be."""
    found = measured[quantity]
    if found.value is not None:
        least = found.value if found.low is None else found.low
        measured[quantity] = Measured.longer_than(least, found.how or "direct", WHY)


def _runs(flags: Flags, curve: Curve) -> list[tuple[float, float]]:
    """Stretches after the change of enough clipped points in a row, s; one sample may be noise."""
    inside = flags & (curve.ft > 0) & (curve.ft <= curve.window_s)
    if not bool(inside.any()):
        return []
    flank = np.diff(np.concatenate([[0], inside.astype(np.int8), [0]]))
    first, stop = np.flatnonzero(flank == 1), np.flatnonzero(flank == -1)
    return [
        (float(curve.ft[a]), float(curve.ft[b - 1]))
        for a, b in zip(first, stop, strict=True)
        if b - a >= CONSTANTS.clipped_run
    ]

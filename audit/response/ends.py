"""Where the response starts and ends: y0, the final level or what stands in for it, settled or not.

In: a ``Curve``, its ``Noise``, the change and the settings. Out: ``Ends``.
"""

from __future__ import annotations

from dataclasses import dataclass, replace

import numpy as np

from audit.records import ChangeKind, MeasureSettings, SetpointChange
from audit.response.constants import CONSTANTS
from audit.response.curve import Curve
from audit.response.levels import Level, final, leads, least_uncertain, level
from audit.response.localfit import Array
from audit.response.noise import Noise
from audit.response.settling import Settled, coarse
from audit.response.shape import boxcar, first_look, half_width

AT_SETPOINT = "direct_r1"


SWING_RISES = 3.0
"""A stretch of so many rise times holds more than half a swing of a response that rings."""


@dataclass(frozen=True)
class Ends:
    """Levels in parts of the change (0 the old setpoint, 1 the new).

    ``y0``: level before. ``y_end``, ``u_end``: final level, None where there is none; ``how`` it
    was got. ``settled``: the coarse stay. ``answers``: False for the loop that does not answer;
    then ``end_level`` is where it stays.
    """

    y0: Level
    y_end: float | None
    u_end: float
    how: str
    settled: Settled
    answers: bool = True

    @property
    def size(self) -> float:
        """y_end - y0; 1 where there is no y_end."""
        return 1.0 if self.y_end is None else self.y_end - self.y0.value

    @property
    def is_settled(self) -> bool:
        return self.settled.entry_s is not None

    @property
    def has_level(self) -> bool:
        """Whether the response has a final level of its own, settled for its dwell or not."""
        return self.y_end is not None and self.how != AT_SETPOINT


def find(
    curve: Curve, noise: Noise, change: SetpointChange, settings: MeasureSettings
) -> Ends | None:
    """The ends of a response; None where there is no sample to take y0 from."""
    stretches = leads(curve, noise)
    y0 = least_uncertain(stretches)
    if y0 is None:
        return None
    end = curve.window_s
    upto = curve.t <= end
    tail = level(curve.t[upto], curve.v[upto], 0.5 * end, end, curve.hold, noise)
    away = tail.value - y0.value
    u_away = float(np.hypot(tail.chance, y0.chance))
    full = change.cut is None and change.kind is ChangeKind.STEP
    still = abs(away) < max(CONSTANTS.no_response_share, CONSTANTS.no_response_u * u_away)
    if still and full and abs(tail.drift) < CONSTANTS.no_response_share:
        return Ends(y0, tail.value, tail.u, "direct", Settled(0.0, end), answers=False)
    if abs(away) <= CONSTANTS.least_away:
        return _at_setpoint(y0, change, settings, end)
    origin = (change.moves[-1][0] - change.at_us) / 1e6 if change.moves else 0.0
    rise, stay = _stay(curve, noise, y0.value, tail.value, origin)
    swing_s = SWING_RISES * rise
    y0 = least_uncertain(stretches, swing_s) or y0
    from_s = stay.entry_s or origin
    found = final(curve, noise, from_s, stay.until_s, swing_s)
    if found is None or not (stay.entry_s is not None or _near(found, y0)):
        return _at_setpoint(y0, change, settings, end)
    return Ends(y0, found.value, found.u, "direct", stay)


def _near(found: Level, y0: Level) -> bool:
    """Not settled for its dwell when it ended, but close enough to tell where it was going."""
    return found.u < CONSTANTS.near_share * abs(found.value - y0.value)


def _stay(
    curve: Curve, noise: Noise, y0: float, y_end: float, origin: float
) -> tuple[float, Settled]:
    """Rise time, s, and coarse settling of the smoothed curve.

    Times counted from ``origin``, returned from t0. A response that never rose: no rise, 0.
    """
    size = y_end - y0
    x = (curve.fv - y0) / size
    seen = replace(noise, sd=noise.sd / abs(size), deadband=noise.deadband / abs(size))
    rise = first_look(curve, x, seen).rise_s
    half = half_width(curve, rise, seen) if rise else CONSTANTS.least_half_samples * curve.step_s
    width = int(2.0 * half / max(curve.step_s, 1e-9)) | 1
    smooth = boxcar(x, min(width, len(x) // 8 | 1))
    band = max(CONSTANTS.settle_band, CONSTANTS.settle_sd * _left(seen, width))
    inside = (curve.ft >= origin) & (curve.ft <= curve.window_s)
    found = coarse(curve.ft[inside] - origin, smooth[inside], band, curve.window_s - origin)
    entry = None if found.entry_s is None else found.entry_s + origin
    return rise or 0.0, Settled(entry, found.until_s + origin)


def _left(noise: Noise, width: int) -> float:
    """Standard deviation of a running mean of so many samples."""
    kept = min(1.0, noise.inflation / max(width, 1))
    return float(np.hypot(noise.sd * np.sqrt(kept), noise.coarse))


def _at_setpoint(y0: Level, change: SetpointChange, settings: MeasureSettings, end: float) -> Ends:
    """The final level of a response that was cut: the setpoint, its uncertainty error_u_eu."""
    u_eu = settings.error_u_eu
    if u_eu is None and settings.span_eu is not None:
        u_eu = CONSTANTS.default_error_share * settings.span_eu
    if u_eu is None:
        return Ends(y0, None, 0.0, AT_SETPOINT, Settled(None, end))
    return Ends(y0, 1.0, abs(u_eu / change.size_eu), AT_SETPOINT, Settled(None, end))


def seen_from(curve: Curve, noise: Noise, ends: Ends) -> tuple[Array, Noise]:
    """The curve as x = (y - y0) / (y_end - y0), and the noise in that unit."""
    size = abs(ends.size)
    x = (curve.fv - ends.y0.value) / ends.size
    return x, Noise(noise.sd / size, noise.rho, noise.quantum / size, noise.deadband / size)

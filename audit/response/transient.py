"""The quantities of a step's shape: rise, peak, overshoot, undershoot, decay, settling.

In: the curve seen as x, its noise, its ends. Out: ``Measured`` by quantity, nothing spoiled yet.
"""

from __future__ import annotations

from dataclasses import replace

import numpy as np

from audit.records import Measured, MeasureSettings, Quantity, Reason
from audit.response import settling
from audit.response.constants import CONSTANTS
from audit.response.ends import Ends
from audit.response.screening import PEAKS, SETTLING, SHAPE
from audit.response.shape import (
    Crossing,
    Path,
    crossings,
    first_look,
    half_width,
    samples_a_rise,
    smooth,
)
from audit.response.sparse import bounded, why_sparse
from audit.response.uncertainty import from_draws, interval
from audit.response.view import View


def look(view: View, ends: Ends, settings: MeasureSettings) -> dict[Quantity, Measured]:
    """All quantities of the shape, and none left out."""
    seen = first_look(view.curve, view.x, view.noise)
    if seen.t10 is None or seen.t90 is None:
        return _never_rose(view, seen.t10)
    count = samples_a_rise(view.curve, seen.t10, seen.t90)
    sparse = count < CONSTANTS.sparse_rise
    rise = max(seen.t90 - seen.t10, 0.25 * view.curve.step_s, 1e-9)
    half = half_width(view.curve, rise, view.noise)
    low, high = crossings(view.curve, view.x, view.noise, (seen.t10, seen.t90), half)
    rise = max(high.t - low.t, 0.25 * view.curve.step_s, 1e-9)
    path = smooth(view.curve, view.x, view.noise, _reach(view, ends, high.t, rise), half, rise)
    found = _peaks(view, path, low.t, count)
    found[Quantity.RISE_TIME] = _rise(view, low, high, count)
    found[Quantity.UNDERSHOOT] = _undershoot(view, path, low.t)
    entry = ends.settled.entry_s
    until = view.end_s if entry is None else min(entry, view.end_s)
    found |= _settlings(view, path, settings, until)
    if sparse:
        found |= bounded(view, found, count, why_sparse(view, rise))
    if view.noise.deadband > CONSTANTS.compressed_share:
        found |= dict.fromkeys(SHAPE, Measured.missing(Reason.COMPRESSED))
    return found


def no_response(window_s: float) -> dict[Quantity, Measured]:
    """The loop that does not answer: longer than the window, and no shape to speak of."""
    found = dict.fromkeys(SHAPE, Measured.missing(Reason.NO_RESPONSE))
    for quantity in (Quantity.RISE_TIME, Quantity.PEAK_TIME, *SETTLING):
        found[quantity] = Measured.longer_than(window_s, "direct", Reason.NO_RESPONSE)
    return found


def _never_rose(view: View, t10: float | None) -> dict[Quantity, Measured]:
    """Cut before 90 %: what is known is how long it took at least."""
    found = dict.fromkeys(SHAPE, Measured.missing(view.cut))
    for quantity in SETTLING:
        found[quantity] = Measured.longer_than(view.end_s, view.how, view.cut)
    if t10 is not None and view.end_s > t10:
        found[Quantity.RISE_TIME] = Measured.longer_than(view.end_s - t10, view.how, view.cut)
    return found


def _reach(view: View, ends: Ends, t90: float, rise: float) -> float:
    """How far the smoothed path is drawn, s: well past settling, or to the end."""
    if ends.settled.entry_s is None:
        return view.end_s
    return min(view.end_s, max(4.0 * ends.settled.entry_s, t90 + 6.0 * rise))


def _rise(view: View, low: Crossing, high: Crossing, count: float) -> Measured:
    """t90 - t10. Levels, noise and sampling enter; the stamp of t0 does not."""
    from_y0 = (0.1 / high.slope - 0.9 / low.slope) * view.u0
    from_end = (0.9 / high.slope - 0.1 / low.slope) * view.u1
    noise = np.hypot(low.sd / low.slope, high.sd / high.slope)
    step = view.curve.step_s
    sampling = step / np.sqrt(12.0) * min(1.0, (CONSTANTS.sparse_rise / max(count, 1e-9)) ** 2)
    carried = view.carried_u(high.t) / high.slope
    u = float(np.sqrt(from_y0**2 + from_end**2 + noise**2 + sampling**2 + carried**2))
    return interval(high.t - low.t, u, view.how, 0.0)


def _peaks(view: View, path: Path, t10: float, count: float) -> dict[Quantity, Measured]:
    """Overshoot, peak time, decay ratio, damped period. ``count``: samples a rise."""
    few = min(1.0, CONSTANTS.sparse_peak / max(count, 1e-9))
    tops = _tops(path, t10)
    last = float(path.turn_x[-1])
    highest = max((float(path.turn_x[i]) for i in tops), default=-np.inf)
    if not view.has_level and last >= highest:
        return _still_rising(view, path, last)
    u1 = view.u1
    if not tops or highest <= 1.0:
        return _no_peak(view, path, t10)
    top = max(tops, key=lambda i: float(path.turn_x[i]))
    excess = float(path.turn_x[top]) - 1.0
    levels = ((1.0 + excess) * u1, excess * view.u0, view.carried_u(float(path.turn_t[top])))
    parts = (path.turn_sd[top], *levels, CONSTANTS.sparse_peak_u * few**2)
    u = float(np.sqrt(sum(part**2 for part in parts)))
    if excess <= CONSTANTS.peak_u * u:
        return _no_peak(view, path, t10)
    found = {Quantity.OVERSHOOT: interval(100.0 * excess, 100.0 * u, view.how, 0.0)}
    between = CONSTANTS.sparse_when_u * few * view.curve.step_s
    when_u = float(np.sqrt(path.turn_t_sd[top] ** 2 + view.stamp_u**2 + between**2))
    found[Quantity.PEAK_TIME] = interval(float(path.turn_t[top]), when_u, view.how, 0.0)
    return found | _decay(view, path, tops, u)


def _tops(path: Path, t10: float) -> list[int]:
    """Turning points that are maxima after the response has begun."""
    x = path.turn_x
    return [
        i
        for i in range(1, len(x) - 1)
        if x[i] > x[i - 1] and x[i] > x[i + 1] and path.turn_t[i] > t10
    ]


def _still_rising(view: View, path: Path, last: float) -> dict[Quantity, Measured]:
    """The window ends on the way up: at least so much."""
    found = dict.fromkeys(PEAKS, Measured.missing(view.cut))
    least = 100.0 * (last - 1.0 - CONSTANTS.cover_z * float(np.hypot(path.sd, view.u1)))
    if least > 0:
        found[Quantity.OVERSHOOT] = Measured.longer_than(least, view.how, view.cut)
        found[Quantity.PEAK_TIME] = Measured.longer_than(view.end_s, view.how, view.cut)
    return found


def _no_peak(view: View, path: Path, t10: float) -> dict[Quantity, Measured]:
    """No maximum beyond noise: an overshoot of about 0 with its interval.

    A large deadband may hide a peak: then it is not said that there is none.
    """
    after = path.x[path.t > t10]
    most = float(after.max()) - 1.0 if len(after) else 0.0
    noise_sd = float(np.sqrt(max(path.sd**2 - view.noise.coarse**2, 0.0)))
    value = max(most - CONSTANTS.chance_peak_sd * noise_sd, 0.0)
    u = float(np.hypot(path.sd, view.u1))
    bound = interval(100.0 * value, 100.0 * u, view.how, 0.0)
    hidden = view.noise.deadband > CONSTANTS.compressed_peak
    found = dict.fromkeys(
        (Quantity.PEAK_TIME, Quantity.DECAY_RATIO, Quantity.DAMPED_PERIOD),
        Measured.missing(Reason.COMPRESSED if hidden else Reason.NO_PEAK),
    )
    found[Quantity.OVERSHOOT] = replace(bound, low=0.0)
    return found


def _decay(view: View, path: Path, tops: list[int], u: float) -> dict[Quantity, Measured]:
    """Second overshoot over first, and the time between them."""
    first = tops[0]
    one = float(path.turn_x[first]) - 1.0
    no_peak = Measured.missing(Reason.NO_PEAK)
    if one <= CONSTANTS.peak_u * u:
        return {Quantity.DECAY_RATIO: no_peak, Quantity.DAMPED_PERIOD: no_peak}
    if len(tops) > 1:
        second = tops[1]
        two = float(path.turn_x[second]) - 1.0
        sd_two = float(np.hypot(path.turn_sd[second], view.u1))
        if two > CONSTANTS.second_peak_u * sd_two:
            return _two_peaks(view, path, first, second)
    if not view.has_level:
        missing = Measured.missing(view.cut)
        return {Quantity.DECAY_RATIO: missing, Quantity.DAMPED_PERIOD: missing}
    later = path.x[path.t > 2.0 * float(path.turn_t[first])]
    two = max(float(later.max()) - 1.0, 0.0) if len(later) else 0.0
    most = two + CONSTANTS.cover_z * float(np.hypot(path.sd, view.u1))
    high = min(most / max(one - CONSTANTS.cover_z * u, 0.2 * one), 1.0)
    bound = Measured(low=0.0, high=float(high), how=view.how, why=Reason.NO_PEAK)
    return {Quantity.DECAY_RATIO: bound, Quantity.DAMPED_PERIOD: no_peak}


def _two_peaks(view: View, path: Path, first: int, second: int) -> dict[Quantity, Measured]:
    one, two = (float(path.turn_x[i]) - 1.0 for i in (first, second))
    sd_one, sd_two = (float(path.turn_sd[i]) for i in (first, second))
    ratio = two / one
    u = float(np.sqrt(sd_two**2 + (ratio * sd_one) ** 2 + ((1.0 - ratio) * view.u1) ** 2)) / one
    apart = float(path.turn_t[second] - path.turn_t[first])
    apart_u = float(np.hypot(path.turn_t_sd[first], path.turn_t_sd[second]))
    apart_u *= CONSTANTS.period_doubt
    return {
        Quantity.DECAY_RATIO: interval(ratio, u, view.how, 0.0),
        Quantity.DAMPED_PERIOD: interval(apart, apart_u, view.how, 0.0),
    }


def _undershoot(view: View, path: Path, t10: float) -> Measured:
    """Largest excursion the wrong way before the response crosses 10 %."""
    early = (path.turn_t < t10) & (path.turn_t > 0)
    u = float(np.hypot(path.sd, view.u0))
    lowest = float(path.turn_x[early].min()) if bool(early.any()) else 0.0
    return interval(100.0 * max(0.0, -lowest), 100.0 * u, view.how, 0.0, 100.0 * max(1.0, -lowest))


def _settlings(
    view: View, path: Path, settings: MeasureSettings, until_s: float
) -> dict[Quantity, Measured]:
    """Settling into the spec's band, 2 % and 5 %. ``until_s``: about when it settles."""
    u1 = float(np.hypot(view.u1, view.carried_u(until_s)))
    draws = settling.draw(path, view.u0, u1, view.stamp_u, view.seed)
    bands = dict(zip(SETTLING, (settings.band_pct, 2.0, 5.0), strict=True))
    once = {band: _settling(view, path, draws, band / 100.0) for band in set(bands.values())}
    return {q: once[band] for q, band in bands.items()}


def _settling(view: View, path: Path, draws: settling.Draws, band: float) -> Measured:
    if CONSTANTS.compressed_band * view.noise.deadband > band:
        return Measured.missing(Reason.COMPRESSED)
    noise_sd = float(np.sqrt(max(path.sd**2 - view.noise.coarse**2, 0.0)))
    if band < CONSTANTS.band_sd * noise_sd:
        return Measured.missing(Reason.NOISY)
    dwell = CONSTANTS.dwell_samples * view.curve.step_s
    values, known, swing = settling.settle(path, draws, band, view.end_s, dwell)
    return from_draws(values, known, swing, view.end_s, view.how, view.cut)

"""The direct way: one setpoint change measured from its samples, robust to noise.

In: the record around a change (the stored curve), the change, the settings. Out: a ``Response``
with every ``Quantity``. Depends on nothing but these: see ``measure``.
"""

from __future__ import annotations

import numpy as np

from audit.records import (
    SECOND_US,
    ChangeKind,
    Measured,
    MeasureSettings,
    Quantity,
    Reason,
    Record,
    Response,
    Role,
    SetpointChange,
)
from audit.response import clipped as clipped_of
from audit.response import ends as levels_of
from audit.response import noise as noise_of
from audit.response import output as output_of
from audit.response import reaction, screening, stuck, transient
from audit.response.archive import Kept
from audit.response.clipped import Clipped
from audit.response.constants import CONSTANTS, method_version
from audit.response.curve import Curve, build
from audit.response.ends import Ends
from audit.response.integral import absolute_error
from audit.response.noise import Noise
from audit.response.output import Output
from audit.response.uncertainty import interval, seed
from audit.response.view import View

LEAST_SAMPLES = 5


def measure(curve: Record, change: SetpointChange, settings: MeasureSettings) -> Response:
    """Measure one change by the direct way.

    ``curve``: samples of the loop that reach from at - before to the end of the window with their
    bounding ones; what lies outside is not looked at, so that the cutting of the record elsewhere
    cannot change a digit. Every Quantity is in the answer, with a ``Reason`` where it has no value.
    Reference levels as in IEEE Std 181, definitions in DEVELOPERS.md.
    """
    version = method_version(settings)
    record = curve.around(change.at_us - settings.before_us, change.at_us + settings.after_us)
    why = screening.whole(change, settings)
    if why is None and change.kind is ChangeKind.MOVING:
        why = Reason.NEEDS_MODEL
    if why is not None:
        return Response(_all_missing(why), version, settings.band_pct)
    made = build(record, change, settings)
    if int(((made.t > 0) & (made.t <= made.window_s)).sum()) < LEAST_SAMPLES and not made.hold:
        return Response(_all_missing(_silent(record, change, settings)), version, settings.band_pct)
    if made.archive.kept is Kept.FEW and made.archive.hidden > CONSTANTS.compressed_share:
        why = Reason.COMPRESSED if made.hold else Reason.TOO_SPARSE
        measured = _all_missing(why)
        measured[Quantity.ARCHIVE_DEADBAND] = _archive(made, change)
        return Response(measured, version, settings.band_pct)
    if len(made.t) < LEAST_SAMPLES:
        return Response(_all_missing(_silent(record, change, settings)), version, settings.band_pct)
    clipped = clipped_of.look(made, change, settings)
    free = clipped is None or max(clipped.tail) == 0.0
    if free and stuck.is_stuck(made, -change.sp_from / change.size_eu):
        measured = _all_missing(Reason.STUCK) | _output(record, made, change, settings)[1]
        return Response(measured, version, settings.band_pct)
    noise = noise_of.estimate(clipped_of.for_noise(made, clipped))
    ends = levels_of.find(made, noise, change, settings)
    if ends is None:
        return Response(_all_missing(Reason.GAP), version, settings.band_pct)
    measured = _quantities(record, made, noise, ends, clipped, change, settings)
    y_end = ends.y_end if ends.has_level else None
    return Response(
        measured,
        version,
        settings.band_pct,
        y0_eu=change.sp_from + ends.y0.value * change.size_eu,
        y_end_eu=None if y_end is None else change.sp_from + y_end * change.size_eu,
        noise_eu=noise.sd * abs(change.size_eu),
    )


def _all_missing(why: Reason) -> dict[Quantity, Measured]:
    return dict.fromkeys(Quantity, Measured.missing(why))


def _silent(record: Record, change: SetpointChange, settings: MeasureSettings) -> Reason:
    """Why there are next to no samples: a silence (bad or not), or sparse ones."""
    found = screening.silences(record, change, settings, _silence_us(settings))
    return found[0].reason if found else Reason.TOO_SPARSE


def _silence_us(settings: MeasureSettings) -> int:
    return settings.reading.silence_us.get(Role.PV, 900 * SECOND_US)


def _quantities(
    record: Record,
    curve: Curve,
    noise: Noise,
    ends: Ends,
    clipped: Clipped | None,
    change: SetpointChange,
    settings: MeasureSettings,
) -> dict[Quantity, Measured]:
    """Every quantity, measured and then screened."""
    measured = _all_missing(Reason.NEEDS_MODEL)
    if change.kind is ChangeKind.STEP:
        measured |= _shape(record, curve, noise, ends, change, settings)
    measured[Quantity.STEADY_STATE_ERROR] = _error(ends, change)
    measured[Quantity.IAE] = _iae(curve, noise, ends, change, settings)
    measured[Quantity.UNREST] = _unrest(curve, noise, change)
    measured[Quantity.ARCHIVE_DEADBAND] = _archive(curve, change)
    output, paid = _output(record, curve, change, settings)
    measured |= paid
    _screen(measured, record, curve, noise, ends, change, settings)
    if output is not None and ends.answers:
        until = min(ends.settled.entry_s or curve.window_s, curve.window_s)
        at_limit = output_of.at_limit_s(output, 0.0, until)
        if until > 0 and at_limit > CONSTANTS.saturated_share * until:
            screening.spoil(measured, screening.SHAPE, Reason.OUTPUT_SATURATED)
    if clipped is not None:
        clipped_of.put(measured, clipped, curve, ends, change, settings.band_pct)
    return measured


def _output(
    record: Record, curve: Curve, change: SetpointChange, settings: MeasureSettings
) -> tuple[Output | None, dict[Quantity, Measured]]:
    """The output around a change, and the quantities of it."""
    output = output_of.read(record, change, settings)
    measured = output_of.measure(output, curve.window_s)
    if change.kind is ChangeKind.STEP:
        measured[Quantity.OUTPUT_REACTION] = reaction.measure(
            output, record, change, settings, curve.step_s
        )
    return output, measured


def _shape(
    record: Record,
    curve: Curve,
    noise: Noise,
    ends: Ends,
    change: SetpointChange,
    settings: MeasureSettings,
) -> dict[Quantity, Measured]:
    """The quantities of the shape of a step."""
    if noise.sd * CONSTANTS.settle_sd > 1.0:
        return dict.fromkeys(screening.SHAPE, Measured.missing(Reason.TOO_SMALL))
    if not ends.answers:
        return transient.no_response(curve.window_s)
    if ends.y_end is None:
        return dict.fromkeys(screening.SHAPE, Measured.missing(change.cut or Reason.CUT_SHORT))
    if ends.size <= 0:
        return dict.fromkeys(screening.SHAPE, Measured.missing(Reason.DISTURBED))
    x, seen = levels_of.seen_from(curve, noise, ends)
    size = abs(ends.size)
    view = View(
        curve=curve,
        x=x,
        noise=seen,
        u0=ends.y0.u / size,
        u1=ends.u_end / size,
        stamp_u=_stamp_u(record, curve, change),
        end_s=ends.settled.until_s,
        rate=abs(ends.y0.rate) / size,
        has_level=ends.has_level,
        how=ends.how,
        cut=change.cut or Reason.CUT_SHORT,
        seed=seed(change.at_us),
    )
    return transient.look(view, ends, settings)


def _stamp_u(record: Record, curve: Curve, change: SetpointChange) -> float:
    """Standard uncertainty of t0, s: uniform over one interval of the setpoint's samples."""
    sp = record.of(Role.SP).only_good().t_us
    before = sp[sp < change.at_us]
    interval_s = (change.at_us - int(before[-1])) / SECOND_US if len(before) else curve.step_s
    return float(min(interval_s, curve.step_s) / np.sqrt(12.0))


def _error(ends: Ends, change: SetpointChange) -> Measured:
    """r1 - y_end, engineering units; never from the last sample, never where it was cut."""
    if ends.y_end is None or not ends.has_level:
        return Measured.missing(change.cut or Reason.CUT_SHORT)
    size = change.size_eu
    return interval((1.0 - ends.y_end) * size, ends.u_end * abs(size), ends.how)


def _unrest(curve: Curve, noise: Noise, change: SetpointChange) -> Measured:
    """Standard deviation about the level at rest, engineering units; its interval is log-normal."""
    sd, doubt = noise_of.unrest(curve, noise)
    value = sd * abs(change.size_eu)
    reach = float(np.exp(CONSTANTS.cover_z * doubt))
    return Measured(value, value / reach, value * reach, "direct")


def _archive(curve: Curve, change: SetpointChange) -> Measured:
    """The archive's deadband, engineering units: 0 where none is seen, of few samples a bound."""
    size, found = abs(change.size_eu), curve.archive
    low, high = found.low * size, found.high * size
    if found.kept is Kept.FEW:
        return Measured(low=0.0, high=high, how="direct", why=Reason.TOO_SPARSE)
    return Measured(found.deadband * size, low, high, "direct")


def _iae(
    curve: Curve, noise: Noise, ends: Ends, change: SetpointChange, settings: MeasureSettings
) -> Measured:
    """IAE over the loop's fixed horizon, the window after the change."""
    if change.window_end_us < change.at_us + settings.after_us:
        return Measured.missing(change.cut or Reason.CUT_SHORT)
    moves = tuple(
        ((at - change.at_us) / SECOND_US, (value - change.sp_from) / change.size_eu)
        for at, value in change.moves
    )
    level = ends.y_end if ends.has_level else None
    value, u = absolute_error(curve, noise, moves or ((0.0, 1.0),), curve.window_s, level)
    size = abs(change.size_eu)
    return interval(value * size, u * size, "direct", 0.0)


def _screen(
    measured: dict[Quantity, Measured],
    record: Record,
    curve: Curve,
    noise: Noise,
    ends: Ends,
    change: SetpointChange,
    settings: MeasureSettings,
) -> None:
    """Put reasons where gaps, an unsettled start, oscillation or a disturbance spoil."""
    entry = ends.settled.entry_s
    shape_until = min(2.0 * entry, curve.window_s) if entry else curve.window_s
    for silence in screening.silences(record, change, settings, _silence_us(settings)):
        if silence.overlap_s(0.0, curve.window_s) > 0:
            screening.spoil(measured, (Quantity.IAE,), silence.reason)
        if silence.overlap_s(0.0, shape_until) > 0:
            screening.spoil(measured, screening.SHAPE, silence.reason)
        if silence.overlap_s(-curve.before_s, 0.0) > 0.5 * curve.before_s:
            screening.spoil(measured, screening.SHAPE, silence.reason)
        tail = (entry or 0.0, curve.window_s)
        if silence.overlap_s(*tail) > 0.5 * (tail[1] - tail[0]):
            screening.spoil(measured, (Quantity.STEADY_STATE_ERROR,), silence.reason)
    rise = measured[Quantity.RISE_TIME].value
    if rise is not None and screening.in_transient(curve, noise, rise, entry or curve.window_s):
        screening.spoil(measured, screening.SHAPE, Reason.GAP)
    if screening.oscillating(curve, noise):
        screening.spoil(measured, screening.SHAPE, Reason.OSCILLATING)
    if ends.y_end is not None:
        found = (ends.y0, noise.sd, ends.size, entry, curve.window_s)
        screening.unsettled(measured, *found, settings.band_pct)
    if ends.settled.until_s < curve.window_s and ends.answers:
        screening.spoil(measured, (Quantity.IAE,), Reason.DISTURBED)

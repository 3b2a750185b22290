"""The table of degenerate cases: what each change gives, quantity by quantity, and why not."""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass, field, replace

import numpy as np
import pytest

from audit.records import (
    ChangeKind,
    Measured,
    MeasureSettings,
    Quantity,
    Reason,
    Role,
    Samples,
)
from reference import second_order, steps
from reference.steps import Array, Made

Q = Quantity
SHAPE = (Q.RISE_TIME, Q.PEAK_TIME, Q.SETTLING_TIME, Q.OVERSHOOT, Q.DECAY_RATIO)


@dataclass(frozen=True)
class About:
    """A value to be measured within a reach."""

    value: float
    reach: float


@dataclass(frozen=True)
class LongerThan:
    """Known only to take longer than something between least and most."""

    least: float
    most: float
    why: Reason


@dataclass(frozen=True)
class AtMost:
    """Bounded above only, between least and most."""

    least: float
    most: float
    why: Reason


@dataclass(frozen=True)
class Between:
    """Bounded below and above, the truth between."""

    truth: float
    why: Reason


Expected = About | LongerThan | AtMost | Between | Reason


@dataclass(frozen=True)
class Case:
    name: str
    made: Callable[[], Made]
    expected: dict[Quantity, Expected]
    how: str | None = None
    alike: dict[Quantity, float] = field(default_factory=dict)


def half(t: Array) -> Array:
    return second_order.response(t, 0.5)


def every(why: Reason, quantities: tuple[Quantity, ...] = tuple(Quantity)) -> dict[Q, Expected]:
    return dict.fromkeys(quantities, why)


T = steps.stamps(0.1, 60.0, past_s=0.2)
PLAIN = np.where(T > 0, half(np.maximum(T, 0.0)), 0.0)


def noise(sd: float, seed: int = 3) -> Array:
    return sd * np.random.default_rng(seed).standard_normal(len(T))


def plain(
    y: Array | None = None,
    kind: ChangeKind = ChangeKind.STEP,
    output: Samples | None = None,
    moves: tuple[tuple[float, float], ...] | None = None,
    complete: bool = True,
    set_aside: tuple[Reason, ...] = (),
) -> Made:
    return steps.make(
        T,
        PLAIN if y is None else y,
        60.0,
        kind=kind,
        output=output,
        moves=moves,
        complete=complete,
        set_aside=set_aside,
    )


def late(delay_s: float) -> Array:
    return half(np.maximum(T - delay_s, 0.0)) * (delay_s < T)


def without(lo: float, hi: float) -> Made:
    keep = ~((lo < T) & (hi > T))
    return steps.make(T[keep], PLAIN[keep], 60.0)


def bad(lo: float, hi: float) -> Made:
    made = steps.make(T, PLAIN, 60.0, good=~((lo < T) & (hi > T)))
    return short_silence(made)


def asked(made: Made, change: Callable[[MeasureSettings], MeasureSettings]) -> Made:
    return Made(made.record, made.change, change(made.settings))


def short_silence(made: Made) -> Made:
    silence = {Role.PV: 3_000_000, Role.OUTPUT: 10**12}
    reading = replace(made.settings.reading, silence_us=silence)
    return asked(made, lambda settings: replace(settings, reading=reading))


def cut(at_s: float, y: Array = PLAIN, why: Reason = Reason.CUT_SHORT) -> Made:
    return steps.make(T, y, 60.0, cut_s=at_s, cut=why)


def output(u: Array) -> Samples:
    return steps.samples(T, u)


def swinging(amplitude: float) -> Array:
    return amplitude * np.sin(2.0 * np.pi * T / 3.1)


def disturbed() -> Array:
    """Settled by 8 s, then pushed away at 40 s for a while."""
    push = np.where(T > 40.0, 0.3 * (T - 40.0) * np.exp(-(T - 40.0)), 0.0)
    return PLAIN + push


def single() -> Made:
    return steps.make(np.array([-15.0, 30.0]), np.array([0.0, 1.0]), 60.0)


def spiked() -> Array:
    y = PLAIN.copy()
    for at in (-5.0, 3.0, 30.0):
        y[int(np.argmin(np.abs(T - at)))] += 0.8
    return y


STAIR = ((0.0, 0.5), (5.0, 1.0))


def staircase(kind: ChangeKind) -> Made:
    y = 0.5 * PLAIN + 0.5 * late(5.0)
    return plain(y, kind=kind, moves=STAIR)


def stair_error() -> float:
    """Integral of |setpoint - response| of the staircase, on a grid of 1 ms, EU s."""
    t = np.arange(0.0, 60.0, 0.001)
    y = 0.5 * half(t) + 0.5 * half(np.maximum(t - 5.0, 0.0)) * (t > 5.0)
    sp = np.where(t < 5.0, 0.5, 1.0)
    return 5.0 * float(np.abs(sp - y).sum() * 0.001)


CASES = [
    Case("dead time", lambda: plain(late(3.0)), {
        Q.RISE_TIME: About(1.6376, 0.02), Q.PEAK_TIME: About(6.6276, 0.05),
        Q.SETTLING_TIME_5PCT: About(8.2891, 0.05), Q.OVERSHOOT: About(16.303, 0.2),
        Q.DEAD_TIME: Reason.NEEDS_MODEL, Q.DAMPING_RATIO: Reason.NEEDS_MODEL,
        Q.NATURAL_FREQUENCY: Reason.NEEDS_MODEL, Q.OUTPUT_TRAVEL: Reason.NO_OUTPUT,
    }),
    Case("gain other than one", lambda: plain(0.8 * PLAIN), {
        Q.RISE_TIME: About(1.6376, 0.02), Q.OVERSHOOT: About(16.303, 0.2),
        Q.STEADY_STATE_ERROR: About(1.0, 1e-3), Q.SETTLING_TIME: About(8.076, 0.05),
    }),
    Case("constant offset before and after", lambda: plain(PLAIN + 0.4), {
        Q.RISE_TIME: About(1.6376, 0.02), Q.OVERSHOOT: About(16.303, 0.2),
        Q.STEADY_STATE_ERROR: About(-2.0, 1e-3),
    }),
    Case("no peak", lambda: plain(1.0 - np.exp(-np.maximum(T, 0.0) / 4.0)), {
        Q.RISE_TIME: About(8.789, 0.05), Q.OVERSHOOT: About(0.0, 0.1),
        Q.PEAK_TIME: Reason.NO_PEAK, Q.DECAY_RATIO: Reason.NO_PEAK,
        Q.DAMPED_PERIOD: Reason.NO_PEAK, Q.SETTLING_TIME_5PCT: About(11.983, 0.1),
    }),
    Case("one peak in noise, no second", lambda: plain(
        np.where(T > 0, second_order.response(np.maximum(T, 0.0), 0.6), 0.0) + noise(0.01)), {
        Q.OVERSHOOT: About(9.478, 1.5), Q.DECAY_RATIO: AtMost(0.01, 0.35, Reason.NO_PEAK),
        Q.DAMPED_PERIOD: Reason.NO_PEAK,
    }),
    Case("never settles", lambda: plain(np.where(T > 0, 1.0 - np.cos(T), 0.0)), {
        Q.SETTLING_TIME: LongerThan(55.0, 60.0, Reason.CUT_SHORT),
        Q.SETTLING_TIME_5PCT: LongerThan(55.0, 60.0, Reason.CUT_SHORT),
        Q.STEADY_STATE_ERROR: Reason.CUT_SHORT, Q.DECAY_RATIO: About(1.0, 0.02),
        Q.OVERSHOOT: About(100.0, 1.0), Q.DAMPED_PERIOD: About(2.0 * np.pi, 0.05),
    }, how="direct_r1"),
    Case("inverse response", lambda: plain(
        PLAIN - 0.4 * T * np.exp(-np.maximum(T, 0.0)) * (T > 0)), {
        Q.UNDERSHOOT: About(14.0, 14.0), Q.STEADY_STATE_ERROR: About(0.0, 1e-3),
    }),
    Case("cut outside its band", lambda: cut(3.0), {
        Q.SETTLING_TIME: LongerThan(2.0, 3.0, Reason.CUT_SHORT),
        Q.RISE_TIME: About(1.6376, 0.05),
        Q.STEADY_STATE_ERROR: Reason.CUT_SHORT, Q.IAE: Reason.CUT_SHORT,
        Q.OVERSHOOT: Reason.CUT_SHORT,
    }, how="direct_r1"),
    Case("cut before 90 %", lambda: cut(1.2), {
        Q.SETTLING_TIME: LongerThan(1.2, 1.2, Reason.CUT_SHORT),
        Q.RISE_TIME: LongerThan(0.6, 0.9, Reason.CUT_SHORT), Q.OVERSHOOT: Reason.CUT_SHORT,
    }, how="direct_r1"),
    Case("cut by leaving automatic after it settled", lambda: cut(
        30.0, why=Reason.NOT_FOLLOWING), {
        Q.SETTLING_TIME: About(8.076, 0.05), Q.STEADY_STATE_ERROR: About(0.0, 2e-3),
        Q.IAE: Reason.NOT_FOLLOWING,
    }, how="direct"),
    Case("cut, range unknown", lambda: asked(cut(3.0), lambda s: replace(s, span_eu=None)), {
        **every(Reason.CUT_SHORT, (*SHAPE, Q.STEADY_STATE_ERROR, Q.IAE)),
    }),
    Case("flat: no answer", lambda: plain(np.zeros(len(T))), {
        Q.RISE_TIME: LongerThan(60.0, 60.0, Reason.NO_RESPONSE),
        Q.PEAK_TIME: LongerThan(60.0, 60.0, Reason.NO_RESPONSE),
        Q.SETTLING_TIME: LongerThan(60.0, 60.0, Reason.NO_RESPONSE),
        **every(Reason.NO_RESPONSE, (Q.OVERSHOOT, Q.UNDERSHOOT, Q.DECAY_RATIO)),
        Q.STEADY_STATE_ERROR: About(5.0, 1e-6),
    }),
    Case("flat and noisy: no answer", lambda: plain(noise(0.02)), {
        Q.SETTLING_TIME: LongerThan(60.0, 60.0, Reason.NO_RESPONSE),
        Q.OVERSHOOT: Reason.NO_RESPONSE, Q.STEADY_STATE_ERROR: About(5.0, 0.05),
    }),
    Case("answers by a tenth", lambda: plain(0.1 * PLAIN), {
        Q.RISE_TIME: LongerThan(60.0, 60.0, Reason.NO_RESPONSE),
        Q.OVERSHOOT: Reason.NO_RESPONSE, Q.STEADY_STATE_ERROR: About(4.5, 1e-3),
    }),
    Case("goes the wrong way", lambda: plain(-PLAIN), {
        **every(Reason.DISTURBED, SHAPE), Q.STEADY_STATE_ERROR: About(10.0, 1e-3),
    }),
    Case("drift instead of a response", lambda: plain(np.maximum(T, 0.0) / 120.0), {
        Q.SETTLING_TIME: LongerThan(60.0, 60.0, Reason.CUT_SHORT),
        Q.RISE_TIME: LongerThan(47.0, 49.0, Reason.CUT_SHORT),
        Q.STEADY_STATE_ERROR: Reason.CUT_SHORT,
    }, how="direct_r1"),
    Case("all noise", lambda: plain(noise(1.0)), {
        **every(Reason.TOO_SMALL, SHAPE),
    }),
    Case("band inside the noise", lambda: plain(PLAIN + noise(0.03)), {
        Q.SETTLING_TIME_2PCT: Reason.NOISY, Q.RISE_TIME: About(1.6376, 0.25),
    }),
    Case("two samples in all", single, every(Reason.TOO_SPARSE, SHAPE)),
    Case("one sample a rise", lambda: steps.step(half, 1.5, 60.0), {
        Q.RISE_TIME: AtMost(1.6376, 3.0, Reason.TOO_SPARSE),
        Q.OVERSHOOT: Reason.TOO_SPARSE, Q.PEAK_TIME: Reason.TOO_SPARSE,
        Q.DECAY_RATIO: Reason.TOO_SPARSE,
    }),
    Case("silence inside the transient", lambda: short_silence(without(1.0, 5.0)), {
        **every(Reason.GAP, SHAPE), Q.IAE: Reason.GAP, Q.STEADY_STATE_ERROR: About(0.0, 1e-3),
    }),
    Case("hole of more than half a rise in the transient", lambda: without(2.0, 3.5), {
        **every(Reason.GAP, SHAPE), Q.STEADY_STATE_ERROR: About(0.0, 1e-3),
    }),
    Case("bad samples inside the transient", lambda: bad(1.0, 5.0), {
        **every(Reason.BAD_QUALITY, SHAPE), Q.IAE: Reason.BAD_QUALITY,
    }),
    Case("silence after it settled", lambda: short_silence(without(30.0, 36.0)), {
        Q.SETTLING_TIME: About(8.076, 0.05), Q.OVERSHOOT: About(16.303, 0.2), Q.IAE: Reason.GAP,
    }),
    Case("drifting before", lambda: plain(PLAIN + np.where(T < 0, T / 40.0, 0.0)), {
        **every(Reason.UNSETTLED_BEFORE, SHAPE), Q.STEADY_STATE_ERROR: About(0.0, 1e-3),
    }),
    Case("drifting a little before", lambda: plain(PLAIN + np.where(T < 0, T / 1000.0, 0.0)), {
        Q.RISE_TIME: About(1.6376, 0.02), Q.OVERSHOOT: About(16.303, 0.5),
        Q.SETTLING_TIME: About(8.076, 0.1), Q.STEADY_STATE_ERROR: About(0.0, 1e-3),
    }),
    Case("drifting before, too much for settling only", lambda: plain(
        PLAIN + np.where(T < 0, T / 400.0, 0.0)), {
        Q.RISE_TIME: About(1.6376, 0.02), Q.OVERSHOOT: About(16.303, 0.5),
        Q.SETTLING_TIME_2PCT: Reason.UNSETTLED_BEFORE, Q.SETTLING_TIME_5PCT: About(5.289, 0.1),
    }),
    Case("moved long before, at rest since", lambda: plain(PLAIN + np.where(T < -8, 0.4, 0.0)), {
        Q.RISE_TIME: About(1.6376, 0.02), Q.OVERSHOOT: About(16.303, 0.2),
        Q.SETTLING_TIME: About(8.076, 0.05),
    }),
    Case("cut when nearly settled: its own level, no dwell", lambda: cut(12.0), {
        Q.RISE_TIME: About(1.6376, 0.03), Q.OVERSHOOT: About(16.303, 1.0),
        Q.STEADY_STATE_ERROR: About(0.0, 0.05), Q.IAE: Reason.CUT_SHORT,
        Q.SETTLING_TIME: LongerThan(5.0, 8.2, Reason.CUT_SHORT),
    }, how="direct"),
    Case("three samples a rise: a peak is still seen", lambda: steps.step(
        half, 1.6376 / 3.0, 60.0), {
        Q.RISE_TIME: Between(1.6376, Reason.TOO_SPARSE), Q.OVERSHOOT: About(16.303, 0.5),
        Q.PEAK_TIME: About(3.6276, 0.3), Q.UNDERSHOOT: Reason.TOO_SPARSE,
    }),
    Case("drifting before, and never settles", lambda: plain(
        np.where(T < 0, T / 40.0, 0.0) + np.maximum(T, 0.0) / 120.0), {
        Q.SETTLING_TIME: LongerThan(60.0, 60.0, Reason.CUT_SHORT),
        Q.OVERSHOOT: Reason.CUT_SHORT,
    }),
    Case("oscillating before and after", lambda: plain(PLAIN + swinging(0.2)), {
        **every(Reason.OSCILLATING, SHAPE),
    }),
    Case("pushed away after it settled", lambda: plain(disturbed()), {
        Q.SETTLING_TIME: About(8.076, 0.05), Q.OVERSHOOT: About(16.303, 0.2),
        Q.STEADY_STATE_ERROR: About(0.0, 2e-3), Q.IAE: Reason.DISTURBED,
    }),
    Case("output at its limit through the transient", lambda: plain(
        output=output(np.where((T > 0) & (T < 4.0), 100.0, 50.0))), {
        **every(Reason.OUTPUT_SATURATED, SHAPE), Q.OUTPUT_SATURATED: About(100.0 * 4.0 / 60.0, 0.3),
        Q.STEADY_STATE_ERROR: About(0.0, 1e-3),
    }),
    Case("output at its limit, no answer", lambda: plain(
        np.zeros(len(T)), output=output(np.where(T > 0, 100.0, 50.0))), {
        Q.SETTLING_TIME: LongerThan(60.0, 60.0, Reason.NO_RESPONSE),
        Q.OUTPUT_SATURATED: About(100.0, 0.3),
    }),
    Case("staircase", lambda: staircase(ChangeKind.STAIRCASE), {
        **every(Reason.NEEDS_MODEL, (*SHAPE, Q.UNDERSHOOT)),
        Q.STEADY_STATE_ERROR: About(0.0, 1e-3), Q.IAE: About(stair_error(), 0.02),
    }),
    Case("ramp", lambda: staircase(ChangeKind.RAMP), {
        **every(Reason.NEEDS_MODEL, SHAPE), Q.STEADY_STATE_ERROR: About(0.0, 1e-3),
    }),
    Case("moving", lambda: plain(kind=ChangeKind.MOVING), every(Reason.NEEDS_MODEL)),
    Case("spikes", lambda: plain(spiked()), {
        Q.RISE_TIME: About(1.6376, 0.03), Q.OVERSHOOT: About(16.303, 0.5),
        Q.SETTLING_TIME: About(8.076, 0.06), Q.PEAK_TIME: About(3.6276, 0.1),
    }),
    Case("set aside", lambda: plain(set_aside=(Reason.NOT_FOLLOWING, Reason.GAP)),
         every(Reason.NOT_FOLLOWING)),
    Case("record not there yet", lambda: plain(complete=False), every(Reason.WINDOW_INCOMPLETE)),
    Case("under the spec's minimum", lambda: asked(plain(), lambda s: replace(s, min_step_eu=5.5)),
         every(Reason.TOO_SMALL)),
    Case("at the spec's minimum", lambda: asked(plain(), lambda s: replace(s, min_step_eu=5.0)),
         {Q.RISE_TIME: About(1.6376, 0.02)}),
]  # fmt: skip


def check(found: Measured, expected: Expected, quantity: Quantity) -> None:
    told = f"{quantity}: {found}"
    if isinstance(expected, Reason):
        assert not found.known, told
        assert found.why is expected, told
    elif isinstance(expected, About):
        assert found.value is not None, told
        assert found.value == pytest.approx(expected.value, abs=expected.reach), told
        assert found.low is not None, told
        assert found.high is not None, told
        assert found.low <= found.value <= found.high, told
    elif isinstance(expected, LongerThan):
        assert (found.value, found.high, found.why) == (None, None, expected.why), told
        assert found.low is not None, told
        assert expected.least - 1e-9 <= found.low <= expected.most + 1e-9, told
    elif isinstance(expected, Between):
        assert (found.value, found.why) == (None, expected.why), told
        assert found.low is not None, told
        assert found.high is not None, told
        assert 0.0 < found.low <= expected.truth <= found.high, told
    else:
        assert (found.value, found.why) == (None, expected.why), told
        assert found.high is not None, told
        assert expected.least <= found.high <= expected.most, told


@pytest.mark.parametrize("case", CASES, ids=lambda case: case.name)
def test_degenerate_cases(case: Case) -> None:
    response = case.made().measure()
    assert set(response.measured) == set(Quantity)
    for quantity, expected in case.expected.items():
        check(response.measured[quantity], expected, quantity)
    if case.how is not None:
        shown = [response.measured[q] for q in case.expected if response.measured[q].known]
        assert {m.how for m in shown} == {case.how}


def test_settings_are_part_of_the_method_version() -> None:
    one = plain().measure().method_version
    other = asked(plain(), lambda s: replace(s, band_pct=3.0)).measure().method_version
    again = Made(plain().record, plain().change, MeasureSettings(**vars(plain().settings)))
    assert one != other
    assert one == again.measure().method_version

"""Range-values and stuck sensors: what they spoil, which bounds stay, and what they leave alone."""

from __future__ import annotations

from dataclasses import replace

import numpy as np
import pytest

from audit.records import (
    Loop,
    Measured,
    Outcome,
    Quantity,
    Reason,
    Record,
    Response,
    Role,
    Samples,
    Spec,
    Windows,
    instant,
)
from audit.response.screening import PEAKS, SHAPE
from audit.verdict import judge
from reference import second_order, steps

Q = Quantity
Array = steps.Array
T = steps.stamps(0.1, 60.0, past_s=0.2)
PLAIN = np.where(T > 0, second_order.response(np.maximum(T, 0.0), 0.5), 0.0)


def noise(sd: float, seed: int = 3) -> Array:
    return sd * np.random.default_rng(seed).standard_normal(len(T))


def recorded(
    y: Array,
    levels: tuple[float, float] = (50.0, 55.0),
    low: float | None = 0.0,
    high: float | None = 100.0,
    clip: bool = True,
    output: Samples | None = None,
) -> steps.Made:
    """A step with a range; what lies beyond it is recorded as its end, where it has one."""
    made = steps.make(T, y, 60.0, levels, output=output)
    pv = made.record.of(Role.PV)
    value = np.clip(pv.value, low, high) if clip and low is not None else pv.value
    record = Record({**made.record.signals, Role.PV: Samples(pv.t_us, value, pv.good)})
    settings = replace(made.settings, range_low=low, range_high=high)
    return steps.Made(record, made.change, settings)


def spoiled(response: Response) -> set[Quantity]:
    return {q for q, found in response.measured.items() if found.why is Reason.OUT_OF_RANGE}


def bound(found: Measured) -> tuple[float | None, float | None]:
    assert found.value is None
    return found.low, found.high


# the top of the response is cut off


@pytest.mark.parametrize("levels", [(50.0, 55.0), (55.0, 50.0)])
def test_a_peak_at_the_range_s_end_leaves_bounds_and_all_that_lies_below(
    levels: tuple[float, float],
) -> None:
    """z = 0.5 overshoots to 55.815 (closed form): clipped at 55.5 the truth is beyond what is seen,
    and the times of crossings below stay."""
    ends = (0.0, 55.5) if levels[1] > levels[0] else (49.5, 100.0)
    response = recorded(PLAIN + noise(0.004), levels, *ends).measure()
    found = response.measured
    assert spoiled(response) == {*PEAKS, Q.IAE}
    least, most = bound(found[Q.OVERSHOOT])
    assert most is None
    assert least is not None
    assert 9.0 < least < 10.0 < second_order.overshoot(0.5)
    first, last = bound(found[Q.PEAK_TIME])
    assert first is not None
    assert last is not None
    assert first < second_order.peak_time(0.5) < last
    assert found[Q.RISE_TIME].value == pytest.approx(second_order.rise_time(0.5), abs=0.03)
    assert found[Q.SETTLING_TIME_5PCT].value == pytest.approx(5.289, abs=0.1)
    most = found[Q.DECAY_RATIO].high
    assert most is not None
    assert most >= second_order.decay_ratio(0.5)


def test_a_peak_just_short_of_the_range_s_end_is_measured() -> None:
    response = recorded(PLAIN, high=55.95).measure()
    assert spoiled(response) == set()
    assert response.measured[Q.OVERSHOOT].value == pytest.approx(16.303, abs=0.2)


def test_without_a_range_nothing_is_out_of_it() -> None:
    one = recorded(PLAIN, high=55.5)
    unknown = replace(one.settings, range_high=None)
    response = steps.Made(one.record, one.change, unknown).measure()
    assert spoiled(response) == set()


def test_one_sample_of_noise_at_the_end_is_no_cut_peak() -> None:
    y = PLAIN.copy()
    y[int(np.argmin(np.abs(T - 3.6)))] = 1.2
    response = recorded(y, high=56.0).measure()
    assert spoiled(response) == set()


def test_where_the_end_lies_inside_the_band_settling_takes_at_least_so_long() -> None:
    """55.2 is 4 % of the change above the final level, inside the band of 5 % and outside 2 %: the
    response, which leaves both bands, is not seen to leave the wider one."""
    measured = recorded(PLAIN, high=55.2).measure().measured
    least, most = bound(measured[Q.SETTLING_TIME_5PCT])
    assert most is None
    assert least is not None
    assert least < second_order.settling_time(0.05, 0.5)
    exact = second_order.settling_time(0.02, 0.5)
    assert measured[Q.SETTLING_TIME_2PCT].value == pytest.approx(exact, abs=0.05)


# the level it ends at is the end of the range


def test_a_level_at_the_range_s_end_spoils_all_that_rests_on_it() -> None:
    response = recorded(PLAIN + 0.1 * (T > 0), high=55.3).measure()
    found = response.measured
    assert spoiled(response) == {*SHAPE, Q.STEADY_STATE_ERROR, Q.IAE, Q.UNREST}
    assert not any(found[q].known for q in (*SHAPE, Q.UNREST))
    low, most = bound(found[Q.STEADY_STATE_ERROR])
    assert low is None
    assert most == pytest.approx(-0.3, abs=0.01)


def test_an_error_that_can_only_be_larger_is_still_out_of_spec() -> None:
    """PV pegged 4 EU above its setpoint, limit 1 EU: beyond it whatever the truth is."""
    one = recorded(0.0 * T + 2.0, (90.0, 94.0), high=98.0)
    response = one.measure()
    windows = Windows(20_000_000, 60_000_000, 1_000_000)
    loop = Loop("FIC-1", "p", "s", windows, range_low=0.0, range_high=98.0)
    spec = Spec("FIC-1", instant(0), {Q.STEADY_STATE_ERROR: 1.0, Q.RISE_TIME: 5.0})
    verdicts, usable, _ = judge(response, one.change, spec, loop)
    assert usable
    assert verdicts[Q.STEADY_STATE_ERROR].outcome is Outcome.OUT_OF_SPEC
    assert verdicts[Q.RISE_TIME].outcome is Outcome.NOT_MEASURED


# a flow at rest


def test_a_flow_at_rest_before_a_step_up_is_measured_like_any_other() -> None:
    """0 to 5 against 20 to 25, the same noise once it flows: but for the undershoot the same."""
    rest = recorded(np.where(T > 0, PLAIN + noise(0.01), 0.0), (0.0, 5.0)).measure()
    other = recorded(PLAIN + noise(0.01), (20.0, 25.0)).measure()
    assert spoiled(rest) == {Q.UNDERSHOOT}
    for quantity in (Q.RISE_TIME, Q.OVERSHOOT, Q.SETTLING_TIME, Q.STEADY_STATE_ERROR, Q.UNREST):
        one, two = rest.measured[quantity], other.measured[quantity]
        assert one.value == pytest.approx(two.value, rel=0.01, abs=0.02), quantity
        assert one.low == pytest.approx(two.low, rel=0.1, abs=0.05), quantity


def test_a_flow_sent_to_nothing_has_got_there() -> None:
    """What it would have done below 0 is not seen: no overshoot, settling only at least so long."""
    response = recorded(PLAIN + noise(0.01), (5.0, 0.0)).measure()
    found = response.measured
    assert found[Q.RISE_TIME].value == pytest.approx(second_order.rise_time(0.5), abs=0.05)
    assert found[Q.STEADY_STATE_ERROR].value == pytest.approx(0.0, abs=0.02)
    assert found[Q.OVERSHOOT] == Measured.missing(Reason.OUT_OF_RANGE)
    assert found[Q.PEAK_TIME] == Measured.missing(Reason.OUT_OF_RANGE)
    least, most = bound(found[Q.SETTLING_TIME])
    assert most is None
    assert least is not None
    assert least < second_order.settling_time(0.02, 0.5)


def test_a_flow_that_stays_at_nothing_does_not_answer() -> None:
    """Whatever is below the range, the setpoint is above it."""
    response = recorded(0.0 * T, (0.0, 5.0)).measure()
    assert response.measured[Q.SETTLING_TIME] == Measured.longer_than(
        60.0, "direct", Reason.NO_RESPONSE
    )
    assert response.measured[Q.OVERSHOOT].why is Reason.NO_RESPONSE
    least, most = bound(response.measured[Q.STEADY_STATE_ERROR])
    assert (least, most) == (5.0, None)


# stuck


def stuck(
    from_s: float = -5.0, sd: float = 0.01, quantum: float = 0.0, held: float = 0.0123
) -> steps.Made:
    """Noise of ``sd`` on a scale of steps of ``quantum`` EU, then one value from some time on."""
    y = np.where(from_s > T, noise(sd), held)
    if quantum:
        y = np.round(5.0 * y / quantum) * quantum / 5.0
    output = 40.0 + np.where(T > 0, np.minimum(2.0 * T, 40.0), 0.0)
    return recorded(y, output=steps.samples(T, output))


def test_one_value_after_noise_is_a_stuck_sensor_and_no_evidence() -> None:
    one = stuck()
    response = one.measure()
    paid = {q for q in Quantity if q.value.startswith("output_")}
    assert {q for q, found in response.measured.items() if found.why is Reason.STUCK} == set(
        Quantity
    ) - paid
    assert response.measured[Q.OUTPUT_TRAVEL].value == pytest.approx(40.0, abs=0.5)
    windows = Windows(20_000_000, 60_000_000, 1_000_000)
    loop = Loop("FIC-1", "p", "s", windows)
    spec = Spec("FIC-1", instant(0), {Q.SETTLING_TIME: 5.0})
    verdicts, usable, why = judge(response, one.change, spec, loop)
    assert (usable, why) == (False, (Reason.STUCK,))
    assert verdicts[Q.SETTLING_TIME].outcome is Outcome.NOT_MEASURED


def test_a_loop_that_does_not_answer_shows_its_noise() -> None:
    response = recorded(noise(0.01)).measure()
    assert response.measured[Q.SETTLING_TIME].why is Reason.NO_RESPONSE


def test_one_sample_that_moves_is_enough_not_to_be_stuck() -> None:
    one = stuck()
    pv = one.record.of(Role.PV)
    value = pv.value.copy()
    value[-30] += 0.01
    record = Record({**one.record.signals, Role.PV: Samples(pv.t_us, value, pv.good)})
    response = steps.Made(record, one.change, one.settings).measure()
    assert response.measured[Q.SETTLING_TIME].why is Reason.NO_RESPONSE


@pytest.mark.parametrize(
    ("one", "why"),
    [
        (stuck(from_s=-19.0), "too few samples before to know the noise"),
        (stuck(sd=0.0), "no noise before"),
        (stuck(quantum=0.2, held=0.0), "scatter within one step of the scale"),
        (stuck(held=-10.0), "at 0 EU, where a cut-off holds it"),
        (stuck(held=10.0), "at the end of its range"),
    ],
    ids=lambda given: given if isinstance(given, str) else "",
)
def test_what_may_rest_by_nature_is_not_stuck(one: steps.Made, why: str) -> None:
    """Just short of it each: a loop that did not answer, or went away, as before."""
    response = one.measure()
    assert Reason.STUCK not in {found.why for found in response.measured.values()}, why


def test_a_scale_finer_than_the_noise_is_no_excuse() -> None:
    response = stuck(quantum=0.02).measure()
    assert response.measured[Q.SETTLING_TIME].why is Reason.STUCK


def test_reports_that_became_rare_are_not_a_stuck_sensor() -> None:
    """By exception: noise reported often before, then heartbeats, each 2 s, of a value at rest."""
    one = stuck()
    pv = one.record.of(Role.PV)
    keep = np.flatnonzero((T <= 0) | (np.arange(len(T)) % 20 == 0))
    record = Record(
        {**one.record.signals, Role.PV: Samples(pv.t_us[keep], pv.value[keep], pv.good[keep])}
    )
    response = steps.Made(record, one.change, one.settings).measure()
    assert response.measured[Q.SETTLING_TIME].why is not Reason.STUCK

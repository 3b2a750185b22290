"""What the recording does to a measurement: stamps, deadband, quantisation, cutting the record."""

from __future__ import annotations

from dataclasses import replace

import numpy as np
import pytest

from audit.records import (
    Between,
    ChangeKind,
    Measured,
    Quantity,
    Reading,
    Reason,
    Record,
    Role,
    Samples,
)
from audit.response import measure, order
from reference import archive, second_order, steps

SHAPE = (Quantity.RISE_TIME, Quantity.OVERSHOOT, Quantity.SETTLING_TIME_5PCT)


def exact(z: float) -> dict[Quantity, float]:
    return {
        Quantity.RISE_TIME: second_order.rise_time(z),
        Quantity.OVERSHOOT: second_order.overshoot(z),
        Quantity.SETTLING_TIME_5PCT: second_order.settling_time(0.05, z),
    }


def holds(found: Measured, truth: float) -> bool:
    assert found.low is not None
    assert found.high is not None
    return found.low <= truth <= found.high


def reported(deadband: float, seed: int, between: Between = Between.HOLD) -> steps.Made:
    """z = 0.5, w = 1, scanned each 0.1 s, noise 0.5 % of the step, reported by exception."""
    rng = np.random.default_rng(seed)
    t = steps.stamps(0.1, 60.0, before_s=80.0, past_s=10.0)
    y = np.where(t > 0, second_order.response(np.maximum(t, 0.0), 0.5), 0.0)
    y = y + 0.005 * rng.standard_normal(len(t))
    kept = archive.by_exception(t, y, deadband, 60.0)
    made = steps.make(t[kept], y[kept], 60.0)
    settings = replace(made.settings, reading=Reading(pv_between=between))
    return steps.Made(made.record, made.change, settings)


@pytest.mark.parametrize("between", list(Between))
@pytest.mark.parametrize("deadband", [0.01, 0.02])
def test_a_small_reporting_deadband_widens_and_still_holds(
    deadband: float, between: Between
) -> None:
    """Deadbands up to 2 % of the step are usable (own simulations; exact values, closed form)."""
    held = dict.fromkeys(SHAPE, 0)
    for seed in range(10):
        measured = reported(deadband, seed, between).measure().measured
        for quantity in SHAPE:
            held[quantity] += holds(measured[quantity], exact(0.5)[quantity])
    assert min(held.values()) >= 8, held


@pytest.mark.parametrize("deadband", [0.06, 0.1])
def test_a_large_reporting_deadband_is_refused(deadband: float) -> None:
    """Over 5 % of the step no shape; over band / 2.5 no settling time."""
    for seed in range(4):
        measured = reported(deadband, seed).measure().measured
        for quantity in SHAPE:
            assert measured[quantity] == Measured.missing(Reason.COMPRESSED), quantity
        error = measured[Quantity.STEADY_STATE_ERROR]
        assert error.value is not None
        assert error.high is not None
        assert error.high - error.value > 1.9 * 5.0 * deadband / np.sqrt(3.0)


@pytest.mark.parametrize("reach", [0.01, 0.02, 0.05, 0.1])
def test_a_swinging_door_archive_gives_bounds_or_reasons_and_nothing_false(reach: float) -> None:
    """z = 0.5, 0.5 % noise: what is told holds the closed form, what is not told has a reason."""
    rng = np.random.default_rng(6)
    t = steps.stamps(0.1, 60.0, before_s=80.0, past_s=10.0)
    y = np.where(t > 0, second_order.response(np.maximum(t, 0.0), 0.5), 0.0)
    y = y + 0.005 * rng.standard_normal(len(t))
    kept = archive.swinging_door(t, y, reach)
    measured = steps.make(t[kept], y[kept], 60.0).measure().measured
    allowed = {Reason.COMPRESSED, Reason.TOO_SPARSE, Reason.NOISY, Reason.CUT_SHORT, Reason.GAP}
    for quantity, truth in exact(0.5).items():
        found = measured[quantity]
        if found.known:
            assert found.low is None or found.low <= truth, (quantity, found)
            assert found.high is None or found.high >= truth, (quantity, found)
        else:
            assert found.why in allowed, (quantity, found)
    assert measured[Quantity.OVERSHOOT].value is None


def test_settling_is_refused_before_the_rest() -> None:
    measured = reported(0.03, 1).measure().measured
    assert measured[Quantity.SETTLING_TIME_5PCT] == Measured.missing(Reason.COMPRESSED)
    assert holds(measured[Quantity.RISE_TIME], exact(0.5)[Quantity.RISE_TIME])


def test_irregular_stamps_are_used_as_they_are() -> None:
    """Random stamps, 15 a rise on the average, no noise: as exact as regular ones nearly."""
    rng = np.random.default_rng(4)
    t = np.sort(rng.uniform(-20.0, 62.0, 750))
    y = np.where(t > 0, second_order.response(np.maximum(t, 0.0), 0.5), 0.0)
    measured = steps.make(t, y, 60.0).measure().measured
    for quantity, truth in exact(0.5).items():
        assert measured[quantity].value == pytest.approx(truth, rel=0.02), quantity


def test_quantisation_is_seen_and_covered() -> None:
    """Values in steps of 1 % of the change: its standard uncertainty is q / sqrt 12 (JCGM 100)."""
    t = steps.stamps(0.1, 60.0, past_s=0.2)
    y = np.where(t > 0, second_order.response(np.maximum(t, 0.0), 0.5), 0.0)
    measured = steps.make(t, np.round(y / 0.01) * 0.01, 60.0).measure().measured
    for quantity, truth in exact(0.5).items():
        assert holds(measured[quantity], truth), (quantity, measured[quantity])
    error = measured[Quantity.STEADY_STATE_ERROR]
    assert error.high is not None
    assert error.high >= 1.9 * 0.05 / np.sqrt(12.0)


def joined(first: Samples, second: Samples) -> Samples:
    t = np.concatenate([first.t_us, second.t_us])
    order = np.argsort(t, kind="stable")
    value = np.concatenate([first.value, second.value])[order]
    return Samples(t[order], value, np.concatenate([first.good, second.good])[order])


@pytest.mark.parametrize("cut_s", [None, 30.0])
def test_the_record_outside_the_interval_cannot_change_a_digit(cut_s: float | None) -> None:
    """Wild samples beyond the bounding ones, on either side, or a record cut there: the same."""
    rng = np.random.default_rng(2)
    t = steps.stamps(0.1, 60.0, before_s=20.1, past_s=0.1)
    y = np.where(t > 0, second_order.response(np.maximum(t, 0.0), 0.5), 0.0)
    y = y + 0.01 * rng.standard_normal(len(t))
    lean = steps.make(t, y, 60.0, cut_s=cut_s, output=steps.samples(t, 50.0 + y))
    rich = {Role.SP: lean.record.of(Role.SP)}
    for role in (Role.PV, Role.OUTPUT):
        early, late = np.arange(-400.0, -25.0, 0.7), np.arange(70.0, 400.0, 0.3)
        outside = np.concatenate([early, late])
        wild = steps.samples(outside, 500.0 * rng.standard_normal(len(outside)))
        rich[role] = joined(lean.record.of(role), wild)
    assert lean.measure() == measure(Record(rich), lean.change, lean.settings)


def test_the_same_change_measured_twice_is_equal_to_the_last_digit() -> None:
    made = reported(0.01, 5)
    assert made.measure() == made.measure()


def test_a_setpoint_scanned_seldom_widens_what_counts_from_t0() -> None:
    """t0 is known to one scan of the setpoint, at most to one interval of the samples (JCGM 100:
    uniform, h / sqrt 12): in peak time, and not in the rise time."""
    made = steps.step(lambda t: second_order.response(t, 0.5), 0.2, 60.0)
    measured = made.measure().measured
    for quantity, least in ((Quantity.PEAK_TIME, 0.2 / np.sqrt(12.0)), (Quantity.RISE_TIME, 0.0)):
        found = measured[quantity]
        assert found.high is not None
        assert found.low is not None
        assert found.high - found.low >= 2.0 * 1.9 * least
    rise = measured[Quantity.RISE_TIME]
    assert rise.high is not None
    assert rise.value is not None
    assert rise.high - rise.value < 0.2 / np.sqrt(12.0)


def test_a_held_process_variable_is_integrated_as_held() -> None:
    """A jump recorded late under "hold": the error stays what it was until the next sample."""
    t = np.concatenate([np.arange(-20.0, 1.0), [10.0], np.arange(11.0, 61.0)])
    y = np.where(t >= 10.0, 1.0, 0.0)
    made = steps.make(t, y, 60.0)
    held = replace(made.settings, reading=Reading(pv_between=Between.HOLD))
    found = steps.Made(made.record, made.change, held).measure().measured[Quantity.IAE]
    assert found.value == pytest.approx(5.0 * 10.0, rel=1e-9)
    line = made.measure().measured[Quantity.IAE]
    assert line.value == pytest.approx(5.0 * 5.0, rel=1e-9)


@pytest.mark.parametrize("first_s", [0.2, 0.4, 0.5])
def test_a_level_reported_long_ago_and_held_is_no_sparse_sampling(first_s: float) -> None:
    """The sample before the response is 20 s old, as under exception reporting: the samples of a
    rise count from the response's start on, and the level holds until just before it."""
    t = np.concatenate([[-80.0, -20.0], np.arange(first_s, 60.0, 0.3)])
    y = np.where(t > 0, second_order.response(np.maximum(t, 0.0), 0.5), 0.0)
    made = steps.make(t, y, 60.0)
    held = replace(made.settings, reading=Reading(pv_between=Between.HOLD))
    measured = steps.Made(made.record, made.change, held).measure().measured
    for quantity, truth in exact(0.5).items():
        assert measured[quantity].value == pytest.approx(truth, rel=0.02), quantity
        assert holds(measured[quantity], truth), quantity


@pytest.mark.parametrize("count", [1, 2, 3, 4, 5, 8, 31])
def test_order_statistics_are_numpys(count: int) -> None:
    x = np.random.default_rng(count).standard_normal(count)
    assert order.median(x) == np.median(x)
    assert order.lower_quartile(x) == np.quantile(x, 0.25, method="lower")
    for share in (0.05, 0.25, 0.9):
        assert order.quantile(x, share) == pytest.approx(np.quantile(x, share), rel=1e-14)


def rough(seed: int) -> steps.Made:
    """Some record or other: irregular, thinned, spiked, quantised, bad, flat, cut, of any kind."""
    rng = np.random.default_rng(seed)
    count = int(rng.integers(1, 400))
    t = np.unique(np.round(rng.uniform(-40.0, 80.0, count), 3))
    form = rng.choice(4)
    late = np.maximum(t - rng.uniform(0.0, 5.0), 0.0)
    y = [
        second_order.response(late, float(rng.uniform(0.02, 3.0)), float(rng.uniform(0.05, 5.0))),
        np.zeros(len(t)),
        rng.standard_normal(len(t)).cumsum() / 10.0,
        np.sin(t),
    ][form]
    y = y + rng.choice([0.0, 0.002, 0.05, 2.0]) * rng.standard_normal(len(t))
    if rng.random() < 0.3:
        y = np.round(y, 1)
    if rng.random() < 0.3:
        y[rng.integers(len(y))] += 1000.0
    cut_s = float(rng.uniform(0.01, 59.0)) if rng.random() < 0.4 else None
    kind = ChangeKind(rng.choice(list(ChangeKind)))
    output = steps.samples(t[::3], 100.0 * np.clip(y[::3], 0.0, 1.0))
    made = steps.make(
        t,
        y,
        60.0,
        cut_s=cut_s,
        kind=kind,
        good=rng.random(len(t)) > rng.choice([0.0, 0.3, 0.95]),
        output=output if rng.random() < 0.7 else None,
    )
    reading = Reading(pv_between=Between(rng.choice(list(Between))))
    return steps.Made(made.record, made.change, replace(made.settings, reading=reading))


@pytest.mark.parametrize("block", range(6))
def test_whatever_the_record_every_quantity_is_a_number_or_a_reason(block: int) -> None:
    """Never NaN, never an infinity, low <= value <= high, nothing raised, nothing warned."""
    for seed in range(40 * block, 40 * block + 40):
        response = rough(seed).measure()
        assert set(response.measured) == set(Quantity)
        for quantity, found in response.measured.items():
            numbers = [v for v in (found.low, found.value, found.high) if v is not None]
            assert all(np.isfinite(v) for v in numbers), (seed, quantity, found)
            assert numbers == sorted(numbers), (seed, quantity, found)
            assert all(type(v) is float for v in numbers), (seed, quantity, found)
            assert found.value is not None or found.why is not None, (seed, quantity)

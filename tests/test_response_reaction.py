"""When the output reacts to a step of the setpoint, and what is told where that cannot be seen."""

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
from reference import second_order, steps

Array = steps.Array
T = steps.stamps(0.1, 60.0, past_s=0.2)
Y = np.where(T > 0, second_order.response(np.maximum(T, 0.0), 0.5), 0.0)


def controller(at_s: float, kick: float, ti_s: float = 5.0, t: Array = T) -> Array:
    """What a PI controller does at a step of its setpoint: a kick, then on to its new level."""
    since = t - at_s
    risen = kick + 10.0 * (1.0 - np.exp(-np.maximum(since, 0.0) / ti_s))
    return np.asarray(40.0 + np.where(since >= -1e-9, risen, 0.0))


def noise(sd: float, seed: int = 1) -> Array:
    return sd * np.random.default_rng(seed).standard_normal(len(T))


def made(
    output: Samples | None, sp: Samples | None = None, kind: ChangeKind = ChangeKind.STEP
) -> steps.Made:
    one = steps.make(T, Y, 60.0, output=output, kind=kind)
    return one if sp is None else with_setpoint(one, sp)


def with_setpoint(one: steps.Made, sp: Samples) -> steps.Made:
    return steps.Made(Record({**one.record.signals, Role.SP: sp}), one.change, one.settings)


def reaction(one: steps.Made) -> Measured:
    return one.measure().measured[Quantity.OUTPUT_REACTION]


@pytest.mark.parametrize("at_s", [0.0, -4.0, -9.0, 4.0])
@pytest.mark.parametrize("sd", [0.0, 0.1])
def test_a_kick_is_found_where_it_is(at_s: float, sd: float) -> None:
    """The truth is put in by the test; the interval is one sample of the output before it, one of
    the setpoint after it."""
    found = reaction(made(steps.samples(T, controller(at_s, 5.0) + noise(sd))))
    assert found.value == pytest.approx(at_s, abs=1e-6)
    assert found.low == pytest.approx(at_s - 0.1, abs=1e-6)
    assert found.high == pytest.approx(at_s + 0.1, abs=1e-6)


def test_a_ramp_of_the_integral_alone_is_found_at_its_start() -> None:
    found = reaction(made(steps.samples(T, controller(-4.0, 0.0) + noise(0.001))))
    assert found.value == pytest.approx(-3.9, abs=1e-6)
    assert found.low is not None
    assert found.low <= -4.0


@pytest.mark.parametrize("seed", range(20))
def test_an_output_that_wanders_does_not_react_before_its_setpoint(seed: int) -> None:
    """A random walk under a kick that stands out: the reaction is the kick's, or it is not told."""
    rng = np.random.default_rng(seed)
    u = controller(0.0, 2.0) + np.cumsum(0.05 * rng.standard_normal(len(T)))
    found = reaction(made(steps.samples(T, u)))
    assert found.value is None or found.value == pytest.approx(0.0, abs=1e-6)


def test_a_kick_inside_the_noise_is_not_told() -> None:
    assert reaction(made(steps.samples(T, controller(0.0, 5.0) + noise(1.0)))) == Measured.missing(
        Reason.NOISY
    )


def test_the_sampling_of_the_setpoint_is_in_the_interval() -> None:
    """Sampled each 5 s, the setpoint may have moved up to 5 s before its stamp: then the output
    that moved 4 s before the stamp was not early."""
    t = np.arange(-20.0, 61.0, 5.0)
    sp = steps.samples(t, np.where(t >= 0, 55.0, 50.0))
    output = steps.samples(T, controller(-4.0, 5.0))
    found = reaction(made(output, sp))
    assert found.value == pytest.approx(-4.0)
    assert found.high == pytest.approx(1.0)


def test_a_setpoint_told_by_exception_is_stamped_when_it_moved() -> None:
    sp = steps.samples(np.array([-3000.0, 0.0]), np.array([50.0, 55.0]))
    found = reaction(made(steps.samples(T, controller(-4.0, 5.0)), sp))
    assert found.high == pytest.approx(-3.9)


def test_an_output_told_by_exception_needs_no_samples_before() -> None:
    t = np.array([-500.0, -4.0, 1.0, 5.0])
    found = reaction(made(steps.samples(t, np.array([40.0, 46.0, 47.0, 48.0]))))
    assert found.value == pytest.approx(-4.0)
    assert found.low == pytest.approx(-4.1)


def test_between_samples_that_are_few_a_line_tells_nothing() -> None:
    t = np.array([-500.0, -4.0, 1.0, 5.0])
    one = made(steps.samples(t, np.array([40.0, 46.0, 47.0, 48.0])))
    settings = replace(one.settings, reading=Reading(output_between=Between.LINEAR))
    found = reaction(steps.Made(one.record, one.change, settings))
    assert found == Measured.missing(Reason.TOO_SPARSE)


@pytest.mark.parametrize(
    ("t", "held"),
    [([-20.0, -15.0, -12.0, 0.0], [50.0, 53.0, 50.0, 55.0]), ([-300.0, -6.0, 0.0], [45, 50, 55])],
)
def test_a_setpoint_that_moved_just_before_hides_the_reaction(
    t: list[float], held: list[float]
) -> None:
    """Also where all that is told of it is the value it came to."""
    output = steps.samples(T, controller(0.0, 5.0) + controller(-6.0, 5.0))
    found = reaction(made(output, steps.samples(np.array(t), np.array(held))))
    assert found == Measured.missing(Reason.UNSETTLED_BEFORE)


def test_a_setpoint_that_moved_long_before_hides_nothing() -> None:
    sp = steps.samples(np.array([-90.0, -21.0, 0.0]), np.array([45.0, 50.0, 55.0]))
    assert reaction(made(steps.samples(T, controller(0.0, 5.0)), sp)).value == pytest.approx(0.0)


@pytest.mark.parametrize(
    ("level", "why"), [(100.0, Reason.OUTPUT_SATURATED), (40.0, Reason.TOO_SMALL)]
)
def test_an_output_that_does_not_move_has_no_reaction(level: float, why: Reason) -> None:
    output = steps.samples(T, np.full(len(T), level))
    assert reaction(made(output)) == Measured.missing(why)


def test_without_an_output_and_on_other_kinds_there_are_reasons() -> None:
    assert reaction(made(None)) == Measured.missing(Reason.NO_OUTPUT)
    output = steps.samples(T, controller(0.0, 5.0))
    ramp = reaction(made(output, kind=ChangeKind.RAMP))
    assert ramp == Measured.missing(Reason.NEEDS_MODEL)

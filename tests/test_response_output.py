"""The controller output's side of a change."""

from __future__ import annotations

import numpy as np
import pytest

from audit.records import Between, Measured, Quantity, Reading, Reason, Response
from audit.response.shape import turning
from reference import second_order, steps

T = steps.stamps(0.1, 60.0, past_s=0.2)
Y = np.where(T > 0, second_order.response(np.maximum(T, 0.0), 0.5), 0.0)


def measured(u: steps.Array) -> Response:
    return steps.make(T, Y, 60.0, output=steps.samples(T, u)).measure()


def value(response: Response, quantity: Quantity) -> float:
    found = response.measured[quantity].value
    assert found is not None, response.measured[quantity]
    return found


def test_travel_overshoot_and_reversals_of_a_known_course() -> None:
    """Up 10, down 6, up 1, held: travel 17, net 5, overshoot (10 - 5) / 5 = 100 %, two turns."""
    u = 40.0 + np.interp(T, [0.0, 2.0, 6.0, 10.0], [0.0, 10.0, 4.0, 5.0])
    response = measured(u)
    assert value(response, Quantity.OUTPUT_TRAVEL) == pytest.approx(17.0, abs=1e-6)
    assert value(response, Quantity.OUTPUT_OVERSHOOT) == pytest.approx(100.0, abs=1e-6)
    assert value(response, Quantity.OUTPUT_REVERSALS) == 2.0
    assert value(response, Quantity.OUTPUT_SATURATED) == 0.0


def test_noise_is_neither_travel_nor_reversals() -> None:
    """5 000 % of the travel is noise in raw differences; beyond noise it is what moved."""
    rng = np.random.default_rng(1)
    u = 40.0 + np.interp(T, [0.0, 2.0, 6.0, 10.0], [0.0, 10.0, 4.0, 5.0])
    noisy = u + 0.1 * rng.standard_normal(len(T))
    response = measured(noisy)
    raw = float(np.abs(np.diff(noisy)).sum())
    assert raw > 80.0
    assert value(response, Quantity.OUTPUT_TRAVEL) == pytest.approx(17.0, abs=2.0)
    assert value(response, Quantity.OUTPUT_REVERSALS) == pytest.approx(2.0, abs=1.0)
    assert value(response, Quantity.OUTPUT_OVERSHOOT) == pytest.approx(100.0, abs=8.0)


def test_the_share_at_a_limit_counts_both_limits() -> None:
    u = np.where((T > 0) & (T <= 6.0), 100.0, 50.0)
    u = np.where((T > 30.0) & (T <= 33.0), 0.0, u)
    response = measured(u)
    assert value(response, Quantity.OUTPUT_SATURATED) == pytest.approx(15.0, abs=0.4)


def test_an_output_that_ends_where_it_began_has_no_overshoot_in_percent() -> None:
    u = 40.0 + np.interp(T, [0.0, 2.0, 6.0], [0.0, 10.0, 0.0])
    response = measured(u)
    found = response.measured[Quantity.OUTPUT_OVERSHOOT]
    assert found == Measured.missing(Reason.TOO_SMALL)
    assert value(response, Quantity.OUTPUT_TRAVEL) == pytest.approx(20.0, abs=1e-6)


def test_a_held_output_reports_only_its_changes() -> None:
    """One sample long before, two moves after: travel 8 with "hold"."""
    t = np.array([-500.0, 1.0, 4.0])
    made = steps.make(T, Y, 60.0, output=steps.samples(t, np.array([40.0, 47.0, 46.0])))
    response = made.measure()
    assert made.settings.reading == Reading(output_between=Between.HOLD)
    assert value(response, Quantity.OUTPUT_TRAVEL) == pytest.approx(8.0, abs=1e-9)


def test_without_an_output_tag_there_are_reasons() -> None:
    response = steps.make(T, Y, 60.0).measure()
    for quantity in (Quantity.OUTPUT_TRAVEL, Quantity.OUTPUT_SATURATED):
        assert response.measured[quantity] == Measured.missing(Reason.NO_OUTPUT)


@pytest.mark.parametrize(
    ("course", "threshold", "left"),
    [
        ([0.0, 1.0, 2.0], 0.5, [0, 2]),
        ([0.0, 2.0, 1.0, 3.0], 0.5, [0, 1, 2, 3]),
        ([0.0, 2.0, 1.8, 3.0], 0.5, [0, 3]),
        ([0.0, -0.1, 3.0, 2.9, 3.0, 0.0], 0.5, [0, 2, 5]),
        ([1.0, 1.0, 1.0], 0.5, [0]),
        ([0.0, 3.0, 2.9], 0.5, [0, 2]),
    ],
)
def test_turning_points_after_small_swings_are_taken_out(
    course: list[float], threshold: float, left: list[int]
) -> None:
    """By hand; the last keeps its end, so that a small swing at the end is no turn."""
    assert turning(np.array(course), threshold).tolist() == left

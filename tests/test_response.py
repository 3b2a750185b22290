"""The direct way against closed forms, textbooks and python-control; noise-free records."""

from __future__ import annotations

import control
import numpy as np
import pytest

from audit.records import Measured, Quantity, Response
from reference import second_order, steps

IN_EU = (Quantity.IAE, Quantity.STEADY_STATE_ERROR, Quantity.UNREST)


def value(response: Response, quantity: Quantity) -> float:
    found = response.measured[quantity].value
    assert found is not None, (quantity, response.measured[quantity])
    return found


def sampled(z: float, w: float, rise_samples: float, dead_s: float = 0.0) -> Response:
    step_s = second_order.rise_time(z, w) / rise_samples
    last = max(3.0 * second_order.settling_time(0.02, z, w), 12.0 / w) + 2.0 * dead_s
    made = steps.step(
        lambda t: second_order.response(t - dead_s, z, w), step_s, last, before_s=20.0 * step_s
    )
    return made.measure()


# Table of exact values, w = 1 (closed forms, recomputed; the 10-90 % column agrees to its three
# decimals with the normalised rise times printed in Nise, Control Systems Engineering).
# z, Mp %, tp, tr 10-90, ts 2 %, ts 5 %, decay ratio
TABLE = [
    (0.1, 72.9248, 3.15742, 1.10420, 38.38328, 28.96785, 0.531802),
    (0.2, 52.6621, 3.20637, 1.20343, 19.60190, 13.74444, 0.277329),
    (0.3, 37.2326, 3.29328, 1.32134, 11.23008, 10.13709, 0.138627),
    (0.4, 25.3827, 3.42776, 1.46349, 8.40932, 7.60878, 0.064428),
    (0.5, 16.3034, 3.62760, 1.63757, 8.07635, 5.28909, 0.026580),
    (0.6, 9.4780, 3.92699, 1.85405, 5.94299, 5.22905, 0.008983),
    (0.7, 4.5988, 4.39911, 2.12620, 5.97879, 2.89982, 0.002115),
    (0.8, 1.5165, 5.23599, 2.46749, 3.75584, 3.38535, 0.000230),
    (1.0, 0.0, None, 3.35791, 5.83392, 4.74386, None),
    (1.5, 0.0, None, 5.85828, 10.65469, 8.25581, None),
    (2.0, 0.0, None, 8.22924, 14.87792, 11.45828, None),
    (5.0, 0.0, None, 21.75028, 38.82657, 29.75623, None),
]


@pytest.mark.parametrize("row", TABLE, ids=lambda row: f"z={row[0]}")
def test_the_generator_of_exact_values_agrees_with_the_printed_table(
    row: tuple[float, float, float | None, float, float, float, float | None],
) -> None:
    z, mp, tp, tr, ts2, ts5, ratio = row
    assert second_order.overshoot(z) == pytest.approx(mp, abs=5e-5)
    assert second_order.rise_time(z) == pytest.approx(tr, abs=6e-6)
    assert second_order.settling_time(0.02, z) == pytest.approx(ts2, abs=6e-6)
    assert second_order.settling_time(0.05, z) == pytest.approx(ts5, abs=6e-6)
    if tp is not None and ratio is not None:
        assert second_order.peak_time(z) == pytest.approx(tp, abs=6e-6)
        assert second_order.decay_ratio(z) == pytest.approx(ratio, abs=6e-7)


@pytest.mark.parametrize("rise_samples", [8, 12, 20, 60, 200])
@pytest.mark.parametrize("z", [0.2, 0.3, 0.5, 0.6, 0.7, 0.8, 1.0, 1.5, 2.0])
def test_noise_free_second_order_is_measured_to_half_a_sample(z: float, rise_samples: int) -> None:
    """Half a sample or 0.5 % in times, 0.2 points of overshoot, from 8 to 200 samples a rise."""
    response = sampled(z, 1.0, rise_samples)
    step_s = second_order.rise_time(z) / rise_samples
    times = [
        (Quantity.RISE_TIME, second_order.rise_time(z)),
        (Quantity.SETTLING_TIME_2PCT, second_order.settling_time(0.02, z)),
        (Quantity.SETTLING_TIME_5PCT, second_order.settling_time(0.05, z)),
    ]
    if z <= 0.8:
        times.append((Quantity.PEAK_TIME, second_order.peak_time(z)))
    if z <= 0.5:
        times.append((Quantity.DAMPED_PERIOD, second_order.damped_period(z)))
    for quantity, exact in times:
        reach = max(0.5 * step_s, 0.005 * exact)
        assert value(response, quantity) == pytest.approx(exact, abs=reach), quantity
    assert value(response, Quantity.OVERSHOOT) == pytest.approx(second_order.overshoot(z), abs=0.2)
    error = response.measured[Quantity.STEADY_STATE_ERROR]
    assert error.value == pytest.approx(0.0, abs=0.01)
    if z <= 0.5:
        ratio = value(response, Quantity.DECAY_RATIO)
        assert ratio == pytest.approx(second_order.decay_ratio(z), abs=0.01)


@pytest.mark.parametrize("z", [0.3, 0.5, 0.8, 1.0, 1.5])
def test_iae_of_a_noise_free_response_is_the_closed_form(z: float) -> None:
    """Closed forms of the error integrals; the trapezoid's error falls with the step squared."""
    response = sampled(z, 1.0, 60)
    exact = 5.0 * second_order.absolute_error(z)
    assert value(response, Quantity.IAE) == pytest.approx(exact, rel=2e-3)


def test_the_closed_forms_of_iae_are_the_published_ones() -> None:
    printed = {0.3: 2.36662, 0.5: 1.71314, 0.6: 1.61979, 0.8: 1.67263, 1.0: 2.0, 1.5: 3.0}
    for z, exact in printed.items():
        assert second_order.absolute_error(z) == pytest.approx(exact, abs=6e-6)


def test_a_dead_time_moves_times_from_t0_and_leaves_rise_and_overshoot() -> None:
    """Peak and settling move by the dead time, IAE grows by size x dead time."""
    plain, late = sampled(0.5, 1.0, 40), sampled(0.5, 1.0, 40, dead_s=3.0)
    step_s = second_order.rise_time(0.5) / 40
    for quantity in (Quantity.PEAK_TIME, Quantity.SETTLING_TIME_2PCT, Quantity.SETTLING_TIME_5PCT):
        moved = value(late, quantity) - value(plain, quantity)
        assert moved == pytest.approx(3.0, abs=0.5 * step_s)
    for quantity in (Quantity.RISE_TIME, Quantity.OVERSHOOT):
        assert value(late, quantity) == pytest.approx(value(plain, quantity), rel=0.005)
    grown = value(late, Quantity.IAE) - value(plain, Quantity.IAE)
    assert grown == pytest.approx(5.0 * 3.0, rel=5e-3)


# Worked examples. Systems w²/(s² + 2 z w s + w²); book answers as printed there, quoted from
# memory unless said otherwise; settling times by 4/(z w) in the books are approximations, so the
# exact values stand beside them and are what is tested.
BOOKS = [
    # source, z, w, tp, overshoot %, tr 10-90, ts 2 % exact
    ("Nise, example 4.5", 0.75, 10.0, 0.475, 2.838, 0.2288, 0.5743),
    (
        "Nise, example 4.6: poles -3 +- j7",
        3 / np.sqrt(58),
        np.sqrt(58),
        0.449,
        26.018,
        None,
        1.1042,
    ),
    ("Nise, skill assessment 4.5", 8 / 19, 19.0, 0.182, 23.3, 0.079, 0.4420),
    ("Nise, example 5.3", 0.5, 5.0, 0.726, 16.303, None, 1.6153),
    ("Ogata, example 5-1", 0.6, 5.0, 0.785, 9.478, None, 1.1886),
    ("Ogata, example 5-2 (page 177 of the 5th edition)", 0.45595, 3.5299, 1.0, 20.0, None, 2.3591),
    ("Dorf and Bishop, 2/(s²+2s+2)", 1 / np.sqrt(2), np.sqrt(2), np.pi, 4.3214, None, 4.2162),
    ("Astrom and Murray, z = 0.5, Mp 16 %, ts 8.0/w", 0.5, 1.0, 3.628, 16.303, None, 8.076),
    ("Astrom and Murray, z = 0.7071, Mp 4 %, ts 5.9/w", 0.70711, 1.0, 4.443, 4.321, None, 5.963),
]


@pytest.mark.parametrize("book", BOOKS, ids=lambda book: book[0])
def test_textbook_examples(
    book: tuple[str, float, float, float, float, float | None, float],
) -> None:
    _, z, w, tp, mp, tr, ts2 = book
    response = sampled(z, w, 40)
    step_s = second_order.rise_time(z, w) / 40
    printed = 6e-4 if tp < 1 else 6e-3
    assert value(response, Quantity.PEAK_TIME) == pytest.approx(tp, abs=0.5 * step_s + printed)
    assert value(response, Quantity.OVERSHOOT) == pytest.approx(mp, abs=0.2)
    assert value(response, Quantity.SETTLING_TIME_2PCT) == pytest.approx(ts2, abs=step_s)
    if tr is not None:
        assert value(response, Quantity.RISE_TIME) == pytest.approx(tr, abs=0.5 * step_s + 6e-4)


def test_quarter_decay_is_damping_0_215() -> None:
    """Ziegler and Nichols (1942): a decay ratio of 1/4 is an overshoot of 50 %, z = 0.21545."""
    response = sampled(0.21545, 1.0, 40)
    assert value(response, Quantity.DECAY_RATIO) == pytest.approx(0.25, abs=0.003)
    assert value(response, Quantity.OVERSHOOT) == pytest.approx(50.0, abs=0.2)


def test_a_first_order_response_rises_in_ln_9_time_constants() -> None:
    """ln 9 tau = 2.197 tau, settling 3.912 tau (2 %) and 2.996 tau (5 %); with a dead time."""
    made = steps.step(lambda t: 1.0 - np.exp(-np.maximum(t - 4.0, 0.0) / 10.0), 0.5, 150.0)
    response = made.measure()
    assert value(response, Quantity.RISE_TIME) == pytest.approx(21.9722, abs=0.15)
    assert value(response, Quantity.SETTLING_TIME_2PCT) == pytest.approx(43.1202, abs=0.25)
    assert value(response, Quantity.SETTLING_TIME_5PCT) == pytest.approx(33.9573, abs=0.25)
    assert value(response, Quantity.OVERSHOOT) == pytest.approx(0.0, abs=0.2)


def test_inverse_response_with_negative_gain() -> None:
    """(s - 1)/(s² + s + 1), steady gain -1: exact roots of its closed form."""
    root = np.sqrt(0.75)

    def form(t: np.ndarray[tuple[int], np.dtype[np.float64]]) -> steps.Array:
        decay = np.exp(-0.5 * t)
        upright = second_order.response(t, 0.5)
        return np.asarray(upright - decay * np.sin(root * t) / root)

    response = steps.step(form, 0.02, 60.0).measure()
    exact = {
        Quantity.RISE_TIME: 1.2661,
        Quantity.SETTLING_TIME_2PCT: 8.9930,
        Quantity.OVERSHOOT: 20.871,
        Quantity.UNDERSHOOT: 28.019,
        Quantity.PEAK_TIME: 4.2322,
    }
    for quantity, there in exact.items():
        assert value(response, quantity) == pytest.approx(there, abs=0.01), quantity


@pytest.mark.parametrize("z", [0.3, 0.6, 0.9, 1.4])
def test_python_control_agrees_on_a_dense_grid(z: float) -> None:
    """control.step_info on an explicit dense grid; its answers are good to a grid step."""
    grid = np.linspace(0.0, 60.0, 60001)
    system = control.tf([1.0], [1.0, 2.0 * z, 1.0])
    info = control.step_info(system, T=grid, SettlingTimeThreshold=0.02)
    response = sampled(z, 1.0, 100)
    reach = max(0.003, 0.5 * second_order.rise_time(z) / 100)
    assert value(response, Quantity.RISE_TIME) == pytest.approx(info["RiseTime"], abs=reach)
    settled = value(response, Quantity.SETTLING_TIME_2PCT)
    assert settled == pytest.approx(info["SettlingTime"], abs=reach)
    assert value(response, Quantity.OVERSHOOT) == pytest.approx(info["Overshoot"], abs=0.05)


LEVELS = [(0.0, 5.0), (50.0, 55.0), (55.0, 50.0), (1000.0, 950.0)]


def pairs(found: Measured) -> list[float | None]:
    return [found.value, found.low, found.high]


@pytest.mark.parametrize("levels", LEVELS[1:])
@pytest.mark.parametrize("sd", [0.0, 0.01])
def test_level_and_direction_do_not_matter(levels: tuple[float, float], sd: float) -> None:
    """0 to 5, 50 to 55 and 55 to 50 are the same response: the same numbers to 1e-9."""
    noise = steps.correlated(np.random.default_rng(5), 2000, sd, 0.3)

    def at(where: tuple[float, float]) -> Response:
        return steps.step(
            lambda t: second_order.response(t, 0.45), 0.1, 60.0, noise=noise, levels=where
        ).measure()

    first, other = at(LEVELS[0]), at(levels)
    size = abs(levels[1] - levels[0]) / 5.0
    sign = np.sign(levels[1] - levels[0])
    for quantity, found in first.measured.items():
        same = other.measured[quantity]
        assert (found.why, found.how) == (same.why, same.how), quantity
        scale = size if quantity in IN_EU else 1.0
        there = [v if v is None else v / scale for v in pairs(same)]
        if quantity is Quantity.STEADY_STATE_ERROR and sign < 0:
            flip = [same.value, same.high, same.low]
            there = [v if v is None else -v / scale for v in flip]
        for mine, its in zip(pairs(found), there, strict=True):
            if mine is None or its is None:
                assert mine is its, quantity
            else:
                assert its == pytest.approx(mine, rel=1e-9, abs=1e-8), quantity


def test_percent_is_of_the_change_and_not_of_the_final_value() -> None:
    """A step 50 -> 45: 2 % of the final value would be 18 % of the step (settled at 1.93/w)."""
    made = steps.step(lambda t: second_order.response(t, 0.5), 0.05, 60.0, levels=(50.0, 45.0))
    response = made.measure()
    assert value(response, Quantity.SETTLING_TIME_2PCT) == pytest.approx(8.076, abs=0.03)
    lowest = 45.0 - 0.01 * value(response, Quantity.OVERSHOOT) * 5.0
    assert lowest == pytest.approx(44.18483, abs=0.005)


def test_the_spec_band_is_measured_in_its_own_band() -> None:
    from dataclasses import replace

    made = steps.step(lambda t: second_order.response(t, 0.5), 0.05, 60.0)
    wide = steps.Made(made.record, made.change, replace(made.settings, band_pct=10.0)).measure()
    exact = second_order.settling_time(0.10, 0.5)
    assert value(wide, Quantity.SETTLING_TIME) == pytest.approx(exact, abs=0.03)
    assert wide.spec_band_pct == 10.0


def test_every_quantity_is_in_every_answer() -> None:
    response = sampled(0.5, 1.0, 20)
    assert set(response.measured) == set(Quantity)

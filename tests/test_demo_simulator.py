"""The simulator of the demonstration site against outside references.

Outside: python-control (discrete-time feedback) and scipy.signal for the closed loop; the published
SIMC figures (Skogestad, J. Process Control 13 (2003) 291-309) recomputed independently; the PI
identity; the stiction model of He, Wang, Pottmann and Qin (2007, from memory), written out again.
"""

from __future__ import annotations

from dataclasses import replace
from typing import TYPE_CHECKING

import control
import numpy as np
import pytest
from numpy.typing import NDArray
from scipy.signal import cont2discrete

if TYPE_CHECKING:  # in a checkout the type checker knows the package by its folder
    from demo_site.commissioning import answer, step_test
    from demo_site.design import Design, spoiled
    from demo_site.historian import ExceptionReporting, unmoved
    from demo_site.inputs import Cut, Inputs
    from demo_site.lanes import OUT, PV, SP, Lanes
    from demo_site.operators import DAY_S, TO_SP, Plan
else:
    from audit.demo_site.commissioning import answer, step_test
    from audit.demo_site.design import Design, spoiled
    from audit.demo_site.historian import ExceptionReporting, unmoved
    from audit.demo_site.inputs import Cut, Inputs
    from audit.demo_site.lanes import OUT, PV, SP, Lanes
    from audit.demo_site.operators import DAY_S, TO_SP, Plan

PLAIN = Design(
    kind="flow",
    scan_s=1,
    gain=2.0,
    lag_s=50.0,
    lag2_s=0.0,
    dead_s=10,
    integrating=False,
    pivot_pv=50.0,
    pivot_out=50.0,
    kc=0.6,
    ti_s=40.0,
    td_s=0.0,
    weight=1.0,
    noise=0.0,
    report=0.08,
    report_out=0.3,
    load=0.0,
    rate=1e6,
)
"""A loop without noise, load and rate limit: gain 2, lag 50 s, dead time 10 s, PI 0.6 / 40 s."""


def sampled(loop: Design) -> control.TransferFunction:
    """The design's process, sampled with a zero-order hold by scipy, dead time as z^-d."""
    bottom = np.polymul([loop.lag_s, 1.0], [1.0, 0.0] if loop.integrating else [loop.lag2_s, 1.0])
    continuous = (np.array([loop.gain]), np.trim_zeros(bottom, "f"))
    numerator, denominator, _ = cont2discrete(continuous, float(loop.scan_s), method="zoh")
    delay = [1.0] + [0.0] * (loop.dead_s // loop.scan_s)
    return control.tf(numerator.ravel(), np.polymul(denominator, delay), float(loop.scan_s))


@pytest.mark.parametrize(
    "loop",
    [
        PLAIN,
        replace(PLAIN, scan_s=5, lag_s=120.0, lag2_s=31.0, dead_s=25, gain=-1.2, kc=-1.1, ti_s=150),
        replace(PLAIN, gain=0.004, lag_s=0.0, dead_s=7, integrating=True, kc=3.0, ti_s=300.0),
        replace(PLAIN, gain=0.004, lag_s=9.0, dead_s=7, integrating=True, kc=3.0, ti_s=300.0),
    ],
    ids=["first order", "second order", "level", "level with a lag"],
)
def test_the_closed_loop_is_the_one_python_control_computes(loop: Design) -> None:
    scan = float(loop.scan_s)
    pi = control.tf([loop.kc * (1 + scan / loop.ti_s), -loop.kc], [1.0, -1.0], float(loop.scan_s))
    forward = pi * sampled(loop)
    seconds = np.arange(400) * scan
    reference = control.step_response(control.feedback(forward, 1), seconds).outputs
    seen = step_test([loop], 4.0, int(400 * scan))[:, 0]
    assert np.max(np.abs(seen - loop.pivot_pv - 4.0 * reference)) < 1e-8


def test_simc_tuning_gives_the_published_figures() -> None:
    """aim = dead time, ti = lag: overshoot 4.052 %, settling to 5 % in 3.362 dead times.

    check: recomputed independently for the continuous loop; here half a scan of the hold counts as
    dead time, which leaves an error of the order of (scan / dead time)^2.
    """
    dead_s = 200.5
    lag_s = 4 * dead_s
    loop = replace(
        PLAIN, gain=1.0, lag_s=lag_s, dead_s=200, kc=lag_s / (2 * dead_s), ti_s=lag_s, rate=1e6
    )
    pv = step_test([loop], 8.0, 6000)[:, 0]
    found = answer(pv, 8.0, 1)
    assert found.overshoot_pct == pytest.approx(4.052, abs=0.02)
    assert found.settling_time_s == pytest.approx(3.362 * dead_s, rel=2e-3)
    absolute_error = np.abs(1 - (pv - 50.0) / 8.0).sum()
    assert absolute_error == pytest.approx(2.1687 * dead_s, rel=3e-3)


def test_pi_identity() -> None:
    """kc / ti times the integral of the error is the travel of the output; times scaled by 10.

    check: gain 2, lag 5, dead time 1, kc 0.6, ti 4 gives an integral of ti / (kc gain) = 3.33333.
    """
    lanes = Lanes([PLAIN], [1])
    lanes.rest(np.array([50.0]))
    before = lanes.signals[OUT, 0]
    lanes.signals[SP] = 51.0
    total = 0.0
    for scan in range(3000):
        lanes.control()
        total += float(lanes.signals[SP, 0] - lanes.signals[PV, 0])
        lanes.advance(scan, lanes.valve())
    assert total == pytest.approx(33.3333, abs=1e-4)
    assert PLAIN.kc / PLAIN.ti_s * total == pytest.approx(lanes.signals[OUT, 0] - before, abs=1e-6)


def stems(outputs: NDArray[np.float64], stick: float, slide: float) -> list[float]:
    """The published model, one output after the other: static band fs, kinetic band fd."""
    stem, saved, before = float(outputs[0]), 0.0, float(outputs[0])
    found: list[float] = []
    for output in outputs.tolist():
        total = saved + output - before
        if abs(total) > stick:
            way = 1.0 if total > 0 else -1.0
            stem, saved = output - way * slide, way * slide
        else:
            saved = total
        before = output
        found.append(stem)
    return found


def test_the_sticking_valve_is_the_published_model() -> None:
    rng = np.random.default_rng(7)
    outputs = 50 + np.cumsum(rng.normal(0, 0.4, 500))
    lanes = Lanes([replace(PLAIN, stick=1.5, slide=0.5)], [1])
    lanes.rest_with(outputs[:1])
    seen: list[float] = []
    for output in outputs:
        lanes.signals[OUT] = output
        seen.append(float(lanes.valve()[0]))
    assert seen == pytest.approx(stems(outputs, 1.5, 0.5), abs=1e-9)
    assert 10 < np.count_nonzero(np.diff(seen)) < 300


def test_a_sticking_valve_makes_the_loop_cycle_for_ever() -> None:
    """Integral action against a stuck stem: a limit cycle (common practice, no source)."""
    healthy = replace(PLAIN, gain=1.0, kc=2.5, ti_s=40.0, dead_s=6)
    seen = step_test([healthy, spoiled(healthy, "stiction", 2.5)], 8.0, 4000)
    late = seen[2000:] - 58.0
    swings = np.count_nonzero(np.diff(np.sign(late[:, 1])))
    assert np.ptp(late[:, 0]) < 1e-6
    assert np.ptp(late[:, 1]) > 0.5
    assert swings >= 6


@pytest.mark.parametrize("capacity", [60.0, 100.0])
def test_a_valve_at_its_end_leaves_an_error(capacity: float) -> None:
    pv = step_test([replace(PLAIN, gain=1.0, capacity=capacity)], 20.0, 3000)[-1, 0]
    assert pv == pytest.approx(min(70.0, 50.0 + capacity - 50.0), abs=1e-3)


def test_pieces_of_a_day_join() -> None:
    """A day in one piece and in four, each with a start of its own: the same to 1e-6 percent."""
    moves = Plan(50.0)
    moves.events = [(s, TO_SP, v) for s, v in ((4000.0, 55.0), (21_500.0, 47.0), (60_000.0, 52.0))]
    ends: list[NDArray[np.float64]] = []
    for pieces in (1, 4):
        cut = Cut(1, 1, 5, DAY_S // pieces, 3600)
        minutes = np.arange((3600 + DAY_S) // 60 + 2)
        load = np.sin(minutes / 50.0)[None, :]
        inputs = Inputs(cut, [moves], [False], [0.0], load, np.random.default_rng(1))
        lanes = Lanes([replace(PLAIN, scan_s=5, gain=1.0)], [cut.lanes])
        inputs.start(lanes)
        seen = np.zeros((cut.scans, cut.lanes))
        for scan in range(cut.scans):
            inputs.feed(lanes, scan)
            lanes.control()
            seen[scan] = lanes.signals[PV]
            lanes.advance(scan, lanes.valve())
        ends.append(seen[cut.warm :].T.ravel())
    assert np.max(np.abs(ends[0] - ends[1])) < 1e-6
    assert np.ptp(ends[0]) > 8.0


def test_exception_reporting_keeps_its_deadband_and_its_heartbeat() -> None:
    rng = np.random.default_rng(3)
    scans, first, band = 4000, 10, 0.5
    walk = np.cumsum(rng.normal(0, 0.05, (scans, 3, 2)), axis=0)
    walk[1500:2600] = walk[1500]
    kept = ExceptionReporting(np.full((3, 2), band), 1, first)
    for scan in range(scans):
        kept.watch(scan, walk[scan])
    found = kept.reports()
    for signal, silence in ((0, 600), (1, 600), (2, 14_430)):
        for lane in range(2):
            mine = (found.signal == signal) & (found.lane == lane)
            at, values = found.scan[mine], found.value[mine]
            assert at[0] == first
            held = values[np.searchsorted(at, np.arange(first, scans), "right") - 1]
            assert np.max(np.abs(held - walk[first:, signal, lane])) <= band
            assert np.max(np.diff(np.append(at, scans - 1))) <= silence
            assert len(at) < scans / 10


def test_a_heartbeat_repeats_the_value_last_reported() -> None:
    reports = np.array([50.0, 50.4, 51.0, 50.6, 50.45, 50.9])
    assert unmoved(reports, 0.5).tolist() == [50.0, 50.0, 51.0, 51.0, 50.45, 50.45]

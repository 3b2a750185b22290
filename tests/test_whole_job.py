"""Published responses pushed through the whole job as exports: file in, stored numbers out."""

from __future__ import annotations

import math
import random
from collections.abc import Mapping
from pathlib import Path
from typing import Any

import control
import numpy as np
import pytest
import simple_pid
import tclab
from numpy.typing import NDArray

import sites
from sites import audit, content, steps_of

REGISTER = (
    "tag,process_unit,kind,pv,sp,output,eu,range_low,range_high,criticality\n"
    "FIC-1,U1,flow,PV,SP,,m3/h,0,100,3\n"
)
REGISTER_WITH_OUTPUT = REGISTER.replace("PV,SP,,", "PV,SP,OP,")
SPECS = (
    "tag,valid_from,rise_time_s,settling_time_s,settling_band_pct,overshoot_pct\n"
    "FIC-1,2026-01-01,1000,1000,2,50\n"
)
MOVE_S = 300.0


def only_step(
    folder: Path, plant: sites.Plant, after_s: float, register: str = REGISTER
) -> Mapping[str, Any]:
    """Audit one export with one setpoint change and return the stored step."""
    windows = f"before_s = 120\nafter_s = {after_s:g}\njoin_s = 10"
    sites.SiteFiles(register, SPECS, sites.WIDE, windows).lay(folder)
    sites.write_csv(folder / "exports" / "all.csv.gz", sites.wide_csv(plant))
    audit(folder)
    (step,) = steps_of(content(folder), "FIC-1")
    return step


def stepped(
    zeta: float, omega: float, levels: tuple[float, float], scan_s: float, after_s: float
) -> sites.Plant:
    t_s: NDArray[np.float64] = np.arange(0.0, MOVE_S + after_s + 60, scan_s)
    sp, pv = sites.follow(t_s, [(MOVE_S, levels[1])], levels[0], zeta, omega)
    return sites.Plant(t_s, {"PV": pv, "SP": sp})


# Published worked examples of the standard second-order system; the transfer functions are the
# books' (from memory), the figures their closed forms at full precision (exact 10-90 % rise, exact
# last crossing of the 2 % band), in units of 1/s of the book's model.
# (book, zeta, omega_n, peak time, overshoot %, settling time 2 %, rise time 10-90 %)
EXAMPLES = [
    ("Nise, Control Systems Engineering, Ex. 4.5", 0.75, 10.0, 0.4750, 2.8375, 0.5743, 0.2288),
    ("Nise, Ex. 4.6", 3 / math.sqrt(58), math.sqrt(58), 0.4488, 26.018, 1.1042, None),
    ("Nise, Skill Assessment 4.5", 8 / 19, 19.0, 0.1823, 23.262, 0.4420, 0.0788),
    ("Nise, Ex. 5.3", 0.5, 5.0, 0.7255, 16.3034, 1.6153, 1.63757 / 5),
    ("Ogata, Modern Control Engineering, Ex. 5-1", 0.6, 5.0, 0.7854, 9.478, 1.1886, 1.85405 / 5),
    ("Ogata, Ex. 5-2", 0.45595, 3.5299, 1.0, 20.0, 2.3591, None),
    ("Dorf and Bishop, K = p = 2", 1 / math.sqrt(2), math.sqrt(2), math.pi, 4.3214, 4.2162, None),
    ("Astrom and Murray, second-order table", 0.5, 1.0, None, 16.303, 8.076, 1.63757),
]


@pytest.mark.parametrize(
    ("source", "zeta", "omega", "peak", "overshoot", "settling", "rise"),
    EXAMPLES,
    ids=[example[0] for example in EXAMPLES],
)
def test_textbook_examples_through_the_whole_job(
    tmp_path: Path,
    source: str,
    zeta: float,
    omega: float,
    peak: float | None,
    overshoot: float,
    settling: float,
    rise: float | None,
) -> None:
    slow = omega / 0.1  # the same curve at omega_n = 0.1 rad/s, as a plant would have it
    scan_s = 0.5
    step = only_step(tmp_path, stepped(zeta, 0.1, (50.0, 55.0), scan_s, 600), 600)
    measured = step["measured"]
    for quantity, book in (
        ("peak_time_s", peak),
        ("settling_time_s", settling),
        ("settling_time_2pct_s", settling),
        ("rise_time_s", rise),
    ):
        if book is not None:
            expected = book * slow
            # half a sample or 0.5 %, and half a unit of the book's last digit
            tolerance = max(0.5 * scan_s, 0.005 * expected) + 0.5e-4 * slow
            assert measured[quantity]["value"] == pytest.approx(expected, abs=tolerance), quantity
    assert measured["overshoot_pct"]["value"] == pytest.approx(overshoot, abs=0.2), source
    assert step["usable"]


def test_size_level_and_direction_do_not_change_the_numbers(tmp_path: Path) -> None:
    """IEC 60050-351: a step response is one of deviations from the initial level."""
    results = [
        only_step(tmp_path / str(i), stepped(0.5, 0.1, levels, 0.5, 600), 600)["measured"]
        for i, levels in enumerate([(50.0, 55.0), (0.0, 5.0), (55.0, 50.0)])
    ]
    for quantity in ("rise_time_s", "peak_time_s", "settling_time_s", "overshoot_pct"):
        first, *others = [result[quantity] for result in results]
        assert first["value"] is not None
        for other in others:
            for part in ("value", "low", "high"):
                assert other[part] == pytest.approx(first[part], rel=1e-9, abs=1e-9), quantity


def test_step_info_of_a_third_order_loop_with_pi_control(tmp_path: Path) -> None:
    """Against control.step_info on a dense explicit grid (python-control)."""
    s = control.tf("s")
    loop = (2.0 + 0.15 / s) * 0.8 / ((12 * s + 1) * (5 * s + 1) * (2 * s + 1))
    closed = control.feedback(loop, 1)
    dense: NDArray[np.float64] = np.arange(0.0, 900.0, 0.02)
    _, y = control.step_response(closed, dense)
    info = control.step_info(y, T=dense, SettlingTimeThreshold=0.02)
    t_s: NDArray[np.float64] = np.arange(0.0, MOVE_S + 900, 0.5)
    rising = np.interp(np.maximum(t_s - MOVE_S, 0.0), dense, y)
    pv = 30.0 + 4.0 * np.where(t_s >= MOVE_S, rising, 0.0)
    sp = np.where(t_s >= MOVE_S, 34.0, 30.0)
    measured = only_step(tmp_path, sites.Plant(t_s, {"PV": pv, "SP": sp}), 800)["measured"]
    for quantity, name in (
        ("rise_time_s", "RiseTime"),
        ("settling_time_2pct_s", "SettlingTime"),
        ("peak_time_s", "PeakTime"),
    ):
        expected = info[name]
        tolerance = max(0.25, 0.005 * expected) + 0.02
        assert measured[quantity]["value"] == pytest.approx(expected, abs=tolerance), quantity
    assert measured["overshoot_pct"]["value"] == pytest.approx(info["Overshoot"], abs=0.2)


def simulated_lab(minutes: int = 70) -> sites.Plant:
    """The two-heater lab of the tclab package under simple-pid, once a second.

    Its thermometer has noise and is quantised to 0.32 degC, as the real board's is.
    """
    random.seed(5)
    lab = tclab.TCLabModel(synced=False)
    lab.tlast = 0.0
    pid = simple_pid.PID(6.0, 0.035, 0.0, setpoint=40.0, output_limits=(0, 100), sample_time=None)
    rows: list[tuple[float, float, float]] = []
    for second in range(minutes * 60):
        lab.update(float(second))
        if second == 40 * 60:
            pid.setpoint = 48.0
        temperature = lab.measurement(lab._T1)
        lab.Q1(pid(temperature, dt=1.0))
        rows.append((temperature, pid.setpoint, lab._Q1))
    table = np.array(rows)[20 * 60 :]
    return sites.Plant(
        np.arange(len(table), dtype=np.float64),
        {"PV": table[:, 0], "SP": table[:, 1], "OP": table[:, 2]},
    )


def test_a_simulated_lab_under_an_independent_controller(
    tmp_path: Path, capsys: pytest.CaptureFixture[str]
) -> None:
    plant = simulated_lab()
    step = only_step(tmp_path, plant, 1700, REGISTER_WITH_OUTPUT)
    capsys.readouterr()
    assert (step["sp_from"], step["sp_to"], step["kind"]) == (40.0, 48.0, "step")
    measured = step["measured"]
    pv = np.asarray(plant.columns["PV"])[1200:]
    smooth = np.convolve(pv, np.ones(31) / 31, "same")[:-40]
    x = (smooth - 40.0) / 8.0
    t10, t90 = (float(np.argmax(x >= level)) for level in (0.1, 0.9))
    rise = measured["rise_time_s"]
    # the quantum is 4 % of the change: the interval must hold the smoothed record's own figure
    assert rise["low"] - 5 <= t90 - t10 <= rise["high"] + 5
    assert measured["output_travel"]["value"] > 0
    overshoot = measured["overshoot_pct"]
    assert overshoot["low"] - 4 <= 100 * (x.max() - 1) <= overshoot["high"] + 4

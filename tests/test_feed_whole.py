"""The feed's sentences on the whole way: from export files to the head of the list."""

from __future__ import annotations

from datetime import UTC, datetime
from pathlib import Path

import numpy as np

import sites
from audit import reports
from audit.site import open_site

LOOPS = (
    "tag,process_unit,service,kind,pv,sp,output,mode,eu,range_low,range_high,auto_modes,"
    "criticality\n"
    "FIC-101,U1,feed,flow,F101.PV,F101.SP,F101.OP,,m3/h,0,100,,4\n"
    "FIC-102,U1,reflux,flow,F102.PV,F102.SP,F102.OP,,m3/h,0,100,,4\n"
)
SPECS = (
    "tag,valid_from,rise_time_s,settling_time_s,set_by,reason\n"
    "FIC-101,2026-01-01,20,60,N. Quay,commissioning\n"
    "FIC-102,2026-01-01,20,60,N. Quay,commissioning\n"
)
NOW = datetime(2026, 3, 2, 18, 0, tzinfo=UTC)


def plant(hours: float, scan_s: float, every_s: float, early_s: float = 0.0) -> sites.Plant:
    """Two loops under steps, each with a kick of its output; the second's output clock is early."""
    rng = np.random.default_rng(5)
    t_s = np.arange(0.0, hours * 3600.0, scan_s)
    columns: dict[str, np.ndarray] = {}
    for number, shift_s in ((101, 0.0), (102, early_s)):
        starts = np.arange(600.0 + number, t_s[-1] - 400.0, every_s)
        moves = [(float(at), 40.0 + 6.0 * (k % 2 == 0)) for k, at in enumerate(starts)]
        sp, pv = sites.follow(t_s, moves, 40.0, 0.7, 0.2, 2.0)
        seen_sp, seen_pv = sites.follow(t_s + shift_s, moves, 40.0, 0.7, 0.2, 2.0)
        columns[f"F{number}.SP"] = sp
        columns[f"F{number}.PV"] = pv + rng.normal(0.0, 0.05, len(t_s))
        columns[f"F{number}.OP"] = 50.0 + (seen_sp - seen_pv) + 0.5 * seen_pv
    return sites.Plant(t_s, columns)


def lay(folder: Path, record: sites.Plant, pieces: int) -> Path:
    site = sites.SiteFiles(LOOPS, SPECS, sites.WIDE).lay(folder)
    rows = len(record.t_s)
    cuts = [rows * k // pieces for k in range(pieces + 1)]
    for k in range(pieces):
        part = sites.wide_csv(record.rows(cuts[k], cuts[k + 1]))
        sites.write_csv(site / "exports" / f"{k}.csv", part)
    return site


def at_the_head_of_the_list(folder: Path) -> list[str]:
    site = open_site(folder, {})
    with sites.opened(folder) as store:
        return list(reports.ranking(store, site)["quiet"])


def test_a_stuck_sensor_is_told_by_the_audit_and_at_the_head_of_the_list(tmp_path: Path) -> None:
    record = plant(30.0, 30.0, 7200.0)
    pv = np.array(record.columns["F101.PV"])
    pv[record.t_s >= 3.0 * 3600.0] = 41.25
    record = sites.Plant(record.t_s, {**record.columns, "F101.PV": pv})
    folder = lay(tmp_path, record, pieces=4)
    report = sites.audit(folder, now=NOW)
    assert report.quiet == (
        "One and the same value to the last digit though samples keep coming, a stuck sensor? The "
        "process variable of 1 loop: FIC-101 (41.25 m3/h for 27 h, since 2026-03-01 09:00 UTC).",
    )
    assert at_the_head_of_the_list(folder) == list(report.quiet)


def test_a_process_variable_that_moved_once_since_is_not_stuck(tmp_path: Path) -> None:
    record = plant(30.0, 30.0, 7200.0)
    pv = np.array(record.columns["F101.PV"])
    pv[record.t_s >= 3.0 * 3600.0] = 41.25
    pv[len(pv) // 2] = 41.26
    record = sites.Plant(record.t_s, {**record.columns, "F101.PV": pv})
    assert sites.audit(lay(tmp_path, record, pieces=4), now=NOW).quiet == ()


def test_an_output_s_clock_that_runs_ahead_is_told_with_its_time(tmp_path: Path) -> None:
    """12 s put in by the test, at a scan of 2 s; the other loop's clocks agree."""
    folder = lay(tmp_path, plant(3.0, 2.0, 700.0, early_s=12.0), pieces=2)
    (told,) = sites.audit(folder, now=NOW).quiet
    assert "The clocks of setpoint and controller output differ in 1 loop" in told
    assert "FIC-102 by about 12 s (10 to 14), in 10 changes" in told
    assert "FIC-101" not in told
    assert at_the_head_of_the_list(folder) == [told]


def test_clocks_that_differ_by_less_than_a_scan_are_not_told(tmp_path: Path) -> None:
    folder = lay(tmp_path, plant(3.0, 2.0, 700.0, early_s=2.0), pieces=2)
    assert sites.audit(folder, now=NOW).quiet == ()

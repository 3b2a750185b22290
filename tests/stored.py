"""A small site whose store is filled by hand with known results, for the tests of what reads it.

Three loops: FIC-101 out of spec and changed, LIC-102 in spec, TIC-103 unseen. Two nights; the first
was revised. Everything is written through the store's own functions, so that its rules hold.
"""

from __future__ import annotations

from collections.abc import Iterator
from contextlib import contextmanager
from datetime import UTC, date, datetime, timedelta
from pathlib import Path

import numpy as np

from audit.errors import Fault
from audit.records import (
    DAY_US,
    SECOND_US,
    CellAccount,
    ChangeKind,
    DayRecord,
    ExportFile,
    ExportRead,
    Group,
    KeptDay,
    LimitStanding,
    ListReason,
    LoopResult,
    Measured,
    MeasuredStep,
    Outcome,
    Quantity,
    QuantityTrend,
    RawSamples,
    Reason,
    Record,
    Response,
    Role,
    Samples,
    SetpointChange,
    Standing,
    StandingWord,
    Step,
    Trend,
    Verdict,
    to_us,
)
from audit.site import Site, open_site
from audit.store import Store, open_store, queries, take_lease, writes

NIGHTS = (date(2026, 3, 13), date(2026, 3, 14))
NOW = datetime(2026, 3, 14, 2, 0, tzinfo=UTC)
FIRST_STEP = datetime(2026, 3, 13, 7, 0, tzinfo=UTC)
NEWEST = datetime(2026, 3, 14, 1, 0, tzinfo=UTC)

SITE = """[site]
name = "Gull Test Works"
timezone = "Europe/Oslo"
[store]
url = "sqlite:///site.db"
[register]
loops = "loops.csv"
specs = "specs.csv"
[[exports]]
name = "dcs"
files = "exports/*.csv"
"""
LOOPS = """tag,process_unit,service,kind,pv,sp,output,mode,eu,range_low,range_high,auto_modes,\
criticality
FIC-101,U1,Reactor feed,flow,F101.PV,F101.SP,F101.OP,F101.MODE,m3/h,0,100,AUTO;CAS,5
LIC-102,U1,Drum level,level,L102.PV,L102.SP,,,%,0,100,,2
TIC-103,U2,,temperature,T103.PV,T103.SP,,,,,,,3
"""
SPECS = """tag,valid_from,rise_time_s,settling_time_s,overshoot_pct,min_step_eu,set_by,reason
FIC-101,2026-01-01T00:00:00Z,12,60,20,1,N. Quay,commissioning
FIC-101,2026-02-01T00:00:00Z,12,50,20,1,N. Quay,tighter since the new valve
LIC-102,2026-01-01T00:00:00Z,,600,,,N. Quay,commissioning
"""


def lay(folder: Path) -> Path:
    """The site's own files, without exports."""
    (folder / "exports").mkdir(parents=True)
    (folder / "site.toml").write_text(SITE)
    (folder / "loops.csv").write_text(LOOPS)
    (folder / "specs.csv").write_text(SPECS)
    return folder


@contextmanager
def filled(folder: Path) -> Iterator[tuple[Site, Store]]:
    """The site laid into ``folder`` with its store upgraded and filled."""
    site = open_site(lay(folder), {})
    with open_store(site.config.store_url) as store:
        store.upgrade()
        fill(site, store)
        yield site, store


def fill(site: Site, store: Store) -> None:
    """Write the known results."""
    register = site.register
    hashes = {"settings": "a" * 64, "loops": register.loops_hash, "specs": register.specs_hash}
    with take_lease(store, "test") as lease:
        with store.write(lease) as s:
            writes.enter_site(s, site.config.name)
            run = writes.start_run(s, NOW, "nightly")
            writes.enter_register(s, register.loops, register.specs, hashes, NOW, False)
            taken = writes.begin_export(s, _file("day1.csv"), export_read(), NOW)
            writes.refuse_export(s, _file("day2.csv"), "the file is empty", NOW)
            spec = queries.specs(s)["FIC-101"][-1]
        with store.write(lease) as s:
            steps = tuple(measured_step(i, spec.version, spec.valid_from) for i in range(3))
            writes.save_loop(s, LoopResult("FIC-101", steps=steps, days=(kept_day(),)), NOW)
            writes.finish_exports(s, [taken], NOW)
        for night, worst in ((NIGHTS[0], 61.0), (NIGHTS[0], 62.0), (NIGHTS[1], 63.4)):
            with store.write(lease) as s:
                writes.save_night(s, night, site.config.cutoff(night), standings(night, worst), NOW)
        with store.write(lease) as s:
            writes.end_run(s, run, NOW + timedelta(seconds=9), "finished", {"files_new": 1}, None)


def _file(name: str) -> ExportFile:
    return ExportFile("dcs", f"exports/{name}", 1234, "1", 0)


def export_read() -> ExportRead:
    """One export that names all tags but TIC-103's, its cells summing up."""
    first, last = to_us(FIRST_STEP), to_us(NEWEST)
    t_us = np.array([first, last], np.int64)
    samples = Samples(t_us, np.array([50.0, 55.0]), np.ones(2, np.bool_))
    named = ("F101.MODE", "F101.OP", "F101.PV", "F101.SP", "L102.PV", "L102.SP")
    account = CellAccount(
        rows=2, read=14, taken=10, duplicate=1, blank=1, unregistered=1, refused={"not_a_number": 1}
    )
    fault = Fault("exports/day1.csv", "'x' is no number", "write numbers", 3, "F101.PV")
    columns = {tag: RawSamples(samples) for tag in named}
    return ExportRead("b" * 64, first, last, named, columns, account, (fault,))


def measured_step(index: int, spec_version: int, valid_from: datetime) -> MeasuredStep:
    """The index-th step of FIC-101, an hour apart: out of spec, cut short, not following."""
    at_us = to_us(FIRST_STEP) + index * 3600 * SECOND_US
    low = 50.0 + 5.0 * index
    change = SetpointChange(
        at_us=at_us,
        sp_from=low,
        sp_to=low + 5.0,
        kind=ChangeKind.STEP,
        moves=((at_us, low + 5.0),),
        window_end_us=at_us + 600 * SECOND_US,
        complete=True,
        cut=Reason.CUT_SHORT if index == 1 else None,
        set_aside=(Reason.NOT_FOLLOWING,) if index == 2 else (),
    )
    found = [measured_whole, measured_cut, measured_none][index]()
    verdicts = {
        quantity: Verdict(limit, outcome, valid_from, spec_version, found[quantity].why)
        for quantity, limit, outcome in (
            (Quantity.RISE_TIME, 12.0, Outcome.UNDECIDED),
            (Quantity.SETTLING_TIME, 50.0, Outcome.OUT_OF_SPEC),
            (Quantity.OVERSHOOT, 20.0, Outcome.IN_SPEC),
        )
    }
    response = Response(found, "test-1", 2.0, low, low + 5.0, 0.05)
    usable = index < 2
    set_aside = () if usable else (Reason.NOT_FOLLOWING,)
    step = Step(change, response, verdicts if usable else {}, usable, set_aside)
    t_us = np.array([at_us - SECOND_US, at_us + SECOND_US], np.int64)
    curve = Record({Role.PV: Samples(t_us, np.array([low, low + 1.0]), np.ones(2, np.bool_))})
    return MeasuredStep(step, curve, at_us - SECOND_US, at_us + 700 * SECOND_US)


def measured_whole() -> dict[Quantity, Measured]:
    """A step with values, and reasons where there are none."""
    missing = {quantity: Measured.missing(Reason.NEEDS_MODEL) for quantity in Quantity}
    return missing | {
        Quantity.RISE_TIME: Measured(12.34, 11.9, 12.8, "direct"),
        Quantity.SETTLING_TIME: Measured(63.4, 61.0, 66.0, "direct"),
        Quantity.OVERSHOOT: Measured(8.25, 7.9, 8.6, "direct"),
        Quantity.PEAK_TIME: Measured.missing(Reason.NO_PEAK),
    }


def measured_cut() -> dict[Quantity, Measured]:
    """A step that was cut before it settled."""
    return measured_whole() | {
        Quantity.SETTLING_TIME: Measured.longer_than(55.0, "direct_r1", Reason.CUT_SHORT)
    }


def measured_none() -> dict[Quantity, Measured]:
    """A change that was not measured."""
    return {quantity: Measured.missing(Reason.NOT_FOLLOWING) for quantity in Quantity}


def kept_day() -> KeptDay:
    """FIC-101's 13 March: three quarters in automatic, an eighth saturated, PV never bad."""
    day = DayRecord(date(2026, 3, 13), DAY_US, 3 * DAY_US // 4, DAY_US, DAY_US // 8, DAY_US, 0)
    return KeptDay(day, b"runs")


def standings(night: date, settling_s: float) -> list[Standing]:
    """The ranked list of a night."""
    quantity = Quantity.SETTLING_TIME
    since_us = to_us(datetime(2026, 3, 2, 12, tzinfo=UTC))
    trend = QuantityTrend(
        quantity,
        41.2,
        39.5,
        43.0,
        30,
        False,
        settling_s,
        60.0,
        67.0,
        True,
        True,
        since_us,
        since_us - DAY_US,
        since_us + DAY_US,
    )
    limits = (
        LimitStanding(Quantity.RISE_TIME, 12.0, Outcome.UNDECIDED, 12.3, 11.8, 12.9, 10),
        LimitStanding(quantity, 50.0, Outcome.OUT_OF_SPEC, settling_s, 60.0, None, 10, True),
    )
    out = Standing(
        tag="FIC-101",
        night=night,
        group=Group.OUT_AND_CHANGED,
        standing=StandingWord.OUT_OF_SPEC,
        degraded=True,
        since=date(2026, 3, 2),
        usable_steps=10,
        reasons=(
            ListReason("settling_time_out", f"settling time at least {settling_s} s, limit 50 s"),
            ListReason("settling_time_worse", "settling time up from 41 s"),
        ),
        limits=limits,
        trend=Trend({quantity: trend}),
        criticality=5,
        distance=(settling_s - 50.0) / 50.0,
        reference=50.0,
        reference_kind="limit",
        order_quantity=quantity,
        order_value=5 * (settling_s - 50.0) / 50.0,
    )
    return [
        out,
        _quiet("TIC-103", night, Group.UNSEEN, StandingWord.UNSEEN, 3),
        _quiet("LIC-102", night, Group.IN_SPEC, StandingWord.IN_SPEC, 2),
    ]


def _quiet(
    tag: str, night: date, group: Group, standing: StandingWord, criticality: int
) -> Standing:
    reason = ListReason(group.value, "nothing to be done")
    return Standing(
        tag, night, group, standing, False, None, 0, (reason,), (), Trend({}), criticality
    )

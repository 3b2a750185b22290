"""The whole job on small sites: from export files to the store's canonical content."""

from __future__ import annotations

from datetime import UTC, date, datetime, timedelta
from pathlib import Path

import numpy as np
import pytest

import sites
from audit import loopwork, nightly
from audit.records import Quantity, Standing, StandingWord
from audit.site import open_site
from audit.store import queries
from sites import NOW, audit, content, opened

LOOPS = (
    "tag,process_unit,service,kind,pv,sp,output,mode,eu,range_low,range_high,auto_modes,"
    "criticality\n"
    "FIC-101,U1,feed,flow,F101.PV,F101.SP,F101.OP,F101.MODE,m3/h,0,100,AUTO;CAS,4\n"
    "TIC-102,U1,bath,temperature,T102.PV,T102.SP,,,degC,0,200,,2\n"
)
SPECS = (
    "tag,valid_from,rise_time_s,settling_time_s,settling_band_pct,overshoot_pct,set_by,reason\n"
    "FIC-101,2026-01-01,20,60,5,20,N. Quay,commissioning\n"
    "TIC-102,2026-01-01,60,300,5,30,N. Quay,commissioning\n"
)


def plant(hours: float = 3.0, scan_s: float = 2.0, seed: int = 7) -> sites.Plant:
    """Two loops moved every quarter of an hour, with noise, a manual period and a staircase."""
    rng = np.random.default_rng(seed)
    t_s = np.arange(0, hours * 3600, scan_s)
    level = 40.0
    flow_moves: list[tuple[float, float]] = []
    for start in np.arange(600, hours * 3600 - 60, 900.0):
        level += float(rng.choice([-5.0, 5.0, 8.0])) if level < 70 else -12.0
        flow_moves.append((float(start + rng.integers(0, 200)), level))
    flow_moves.insert(4, (flow_moves[3][0] + 6, flow_moves[3][1] + 2.0))
    sp, pv = sites.follow(t_s, flow_moves, 40.0, 0.5, 0.35, 2.0)
    warm_moves = [(at + 311, 100 + value / 4) for at, value in flow_moves[::2]]
    warm_sp, warm_pv = sites.follow(t_s, warm_moves, 110.0, 0.7, 0.08, 6.0)
    manual = (t_s > 2 * 3600) & (t_s < 2 * 3600 + 1000)
    return sites.Plant(
        t_s,
        {
            "F101.PV": pv + rng.normal(0, 0.05, len(t_s)),
            "F101.SP": sp,
            "F101.OP": 50 + (pv - 50) * 0.8,
            "F101.MODE": ["MAN" if m else "AUTO" for m in manual],
            "T102.PV": warm_pv + rng.normal(0, 0.02, len(t_s)),
            "T102.SP": warm_sp,
        },
    )


def lay(folder: Path, exports: str = sites.WIDE) -> Path:
    return sites.SiteFiles(LOOPS, SPECS, exports).lay(folder)


@pytest.fixture(scope="module")
def record() -> sites.Plant:
    return plant()


@pytest.fixture(scope="module")
def reference(record: sites.Plant, tmp_path_factory: pytest.TempPathFactory) -> list[str]:
    """The content after one audit of one wide CSV."""
    folder = lay(tmp_path_factory.mktemp("reference"))
    sites.write_csv(folder / "exports" / "all.csv", sites.wide_csv(record))
    report = audit(folder)
    assert report.account.balance == 0
    assert report.steps_new > 15
    lines = content(folder)
    usable = [line for line in lines if '"usable":true' in line.replace(" ", "")]
    assert len(usable) > 10
    return lines


@pytest.mark.parametrize("ending", ["", ".gz", ".bz2", ".xz", ".zst"])
@pytest.mark.parametrize("layout", ["wide", "narrow"])
def test_any_layout_and_packing_gives_the_same_content(
    record: sites.Plant, reference: list[str], tmp_path: Path, layout: str, ending: str
) -> None:
    folder = lay(tmp_path, sites.WIDE if layout == "wide" else sites.NARROW)
    text = sites.wide_csv(record) if layout == "wide" else sites.narrow_csv(record)
    sites.write_csv(folder / "exports" / f"all.csv{ending}", text)
    audit(folder)
    assert content(folder) == reference


@pytest.mark.parametrize("layout", ["wide", "narrow"])
def test_parquet_gives_the_same_content(
    record: sites.Plant, reference: list[str], tmp_path: Path, layout: str
) -> None:
    folder = lay(tmp_path, sites.PARQUET_WIDE if layout == "wide" else sites.PARQUET_NARROW)
    sites.write_parquet(folder / "exports" / "all.parquet", record, layout)
    audit(folder)
    assert content(folder) == reference


def pieces(record: sites.Plant, seed: int, count: int = 20) -> list[tuple[str, str]]:
    """The record cut into files at random rows, with names in no order of time."""
    rng = np.random.default_rng(seed)
    rows = len(record.t_s)
    cuts = sorted({0, rows, *rng.choice(np.arange(1, rows), count - 1, replace=False).tolist()})
    names = rng.permutation(len(cuts) - 1)
    return [
        (f"part{name:02d}.csv", sites.wide_csv(record.rows(a, b)))
        for name, a, b in zip(names, cuts[:-1], cuts[1:], strict=True)
    ]


@pytest.mark.parametrize("seed", [1, 2])
def test_twenty_files_at_once_give_the_same_content(
    record: sites.Plant, reference: list[str], tmp_path: Path, seed: int
) -> None:
    folder = lay(tmp_path)
    for name, text in pieces(record, seed):
        sites.write_csv(folder / "exports" / name, text)
    audit(folder)
    assert content(folder) == reference


@pytest.mark.parametrize("seed", [3, 4, 5])
def test_files_that_come_in_any_order_over_many_audits_give_the_same_content(
    record: sites.Plant, reference: list[str], tmp_path: Path, seed: int
) -> None:
    folder = lay(tmp_path)
    parts = pieces(record, seed)
    order = np.random.default_rng(seed).permutation(len(parts))
    for count, index in enumerate(order):
        name, text = parts[int(index)]
        sites.write_csv(folder / "exports" / name, text)
        if count % 3 == 0:
            audit(folder)
    audit(folder)
    assert content(folder) == reference


def test_a_second_audit_changes_nothing(
    record: sites.Plant, reference: list[str], tmp_path: Path
) -> None:
    folder = lay(tmp_path)
    sites.write_csv(folder / "exports" / "all.csv", sites.wide_csv(record))
    audit(folder)
    again = audit(folder)
    assert (again.files_new, again.files_skipped) == (0, 1)
    assert (again.steps_new, again.steps_changed, again.steps_withdrawn) == (0, 0, 0)
    assert content(folder) == reference


def test_both_databases_hold_the_same_content(
    record: sites.Plant, reference: list[str], tmp_path: Path, store_url: str
) -> None:
    folder = lay(tmp_path)
    sites.write_csv(folder / "exports" / "all.csv", sites.wide_csv(record))
    audit(folder, store_url)
    assert content(folder, store_url) == reference


def test_two_cores_give_what_one_gives(
    record: sites.Plant, reference: list[str], tmp_path: Path
) -> None:
    folder = lay(tmp_path)
    sites.write_csv(folder / "exports" / "all.csv", sites.wide_csv(record))
    with opened(folder) as store:
        nightly.run(open_site(folder, {}), store, now=NOW, cores=2)
    assert content(folder) == reference


def test_an_audit_cut_off_in_the_middle_is_completed_by_the_next(
    record: sites.Plant,
    reference: list[str],
    tmp_path: Path,
    monkeypatch: pytest.MonkeyPatch,
) -> None:
    folder = lay(tmp_path)
    sites.write_csv(folder / "exports" / "all.csv", sites.wide_csv(record))
    whole = loopwork.audit_loop
    calls: list[str] = []

    def cut_off(work: loopwork.LoopWork) -> object:
        calls.append(work.loop.tag)
        if len(calls) == 2:
            raise KeyboardInterrupt
        return whole(work)

    with monkeypatch.context() as patch:
        patch.setattr(nightly, "audit_loop", cut_off)
        with pytest.raises(KeyboardInterrupt):
            audit(folder)
    assert content(folder) != reference
    audit(folder)
    assert content(folder) == reference


def test_new_content_of_a_path_replaces_the_old(
    record: sites.Plant, reference: list[str], tmp_path: Path
) -> None:
    folder = lay(tmp_path)
    wrong = plant(seed=8)
    sites.write_csv(folder / "exports" / "all.csv", sites.wide_csv(wrong))
    audit(folder)
    assert content(folder) != reference
    sites.write_csv(folder / "exports" / "all.csv", sites.wide_csv(record) + "\n")
    report = audit(folder)
    assert report.steps_withdrawn > 0
    assert content(folder) == reference


def test_a_replacement_that_was_cut_off_still_clears_what_only_the_old_content_covered(
    record: sites.Plant, tmp_path: Path, monkeypatch: pytest.MonkeyPatch
) -> None:
    def cut_off(work: loopwork.LoopWork) -> None:
        raise KeyboardInterrupt

    whole, part = sites.wide_csv(record), sites.wide_csv(record.rows(2000, 3500))
    contents = []
    for name in ("cut_off", "undisturbed"):
        folder = lay(tmp_path / name)
        sites.write_csv(folder / "exports" / "all.csv", whole)
        audit(folder)
        sites.write_csv(folder / "exports" / "all.csv", part)
        if name == "cut_off":
            with monkeypatch.context() as patch:
                patch.setattr(nightly, "audit_loop", cut_off)
                with pytest.raises(KeyboardInterrupt):
                    audit(folder)
        audit(folder)
        contents.append(content(folder))
    assert contents[0] == contents[1]


def test_nights_asked_for_are_published_each_as_of_its_day(tmp_path: Path) -> None:
    folder = lay(tmp_path)
    sites.write_csv(folder / "exports" / "all.csv", sites.wide_csv(plant(hours=3)))
    report = audit(folder, nights=(date(2026, 3, 1), date(2026, 3, 3)))
    assert report.nights == (date(2026, 3, 1), date(2026, 3, 2), date(2026, 3, 3))


def sparse_rows(first_setpoint: str = "") -> list[str]:
    """Two mornings twenty hours apart; the mode is recorded once, at the very start.

    ``first_setpoint``: on the second morning the setpoint is recorded only from this stamp on.
    """
    rows = ["timestamp,tag,value,quality", "2026-03-01T05:59:00Z,F101.MODE,AUTO,Good"]
    first = plant(hours=2, seed=3)
    for start in (first.start, first.start + timedelta(hours=20)):
        for tag in ("F101.PV", "F101.SP", "F101.OP"):
            part = sites.Plant(first.t_s, {tag: first.columns[tag]}, start)
            rows += sites.narrow_csv(part).splitlines()[1:]
    late = [row for row in rows[1:] if ".SP" in row and "2026-03-02" < row < first_setpoint]
    return [rows[0], *sorted(set(rows[1:]) - set(late))]


@pytest.mark.parametrize("first_setpoint", ["", "2026-03-02T02:41"])
def test_a_sample_from_before_a_long_silence_is_still_known(
    tmp_path: Path, first_setpoint: str
) -> None:
    head, *rows = sparse_rows(first_setpoint)
    half = next(i for i, row in enumerate(rows) if row > "2026-03-01T20")
    whole, parts = lay(tmp_path / "whole", sites.NARROW), lay(tmp_path / "parts", sites.NARROW)
    sites.write_csv(whole / "exports" / "all.csv", "\n".join([head, *rows]) + "\n")
    audit(whole)
    for name, some in (("b.csv", rows[half:]), ("a.csv", rows[:half])):
        sites.write_csv(parts / "exports" / name, "\n".join([head, *some]) + "\n")
        audit(parts)
    steps = sites.steps_of(content(whole), "FIC-101")
    assert sum(step["usable"] for step in steps) > 8
    assert content(parts) == content(whole)


def standing_of(folder: Path, tag: str, night: date | None = None, first: bool = False) -> Standing:
    with opened(folder) as store, store.read() as session:
        found = queries.standings(session, night, first=first)
    assert found is not None
    return next(standing for standing in found[1] if standing.tag == tag)


def test_a_changed_band_is_measured_again_from_the_kept_curves(
    record: sites.Plant, tmp_path: Path
) -> None:
    folder = lay(tmp_path)
    sites.write_csv(folder / "exports" / "all.csv", sites.wide_csv(record))
    audit(folder)
    before = standing_of(folder, "TIC-102")
    changed = SPECS.replace("TIC-102,2026-01-01,60,300,5", "TIC-102,2026-01-01,60,300,10")
    (folder / "specs.csv").write_text(changed)
    audit(folder)
    after = standing_of(folder, "TIC-102")

    def settling(standing: Standing) -> float:
        limits = {limit.quantity: limit for limit in standing.limits}
        median = limits[Quantity.SETTLING_TIME].median
        assert median is not None
        return median

    assert settling(after) < settling(before) - 1.0
    steps = sites.steps_of(content(folder), "TIC-102")
    assert {step["settling_band_pct"] for step in steps} == {5.0}


def test_late_data_revise_the_nights_they_touch_and_leave_what_was_published(
    tmp_path: Path,
) -> None:
    folder = lay(tmp_path)
    record = plant(hours=4, seed=9)
    parts = [record.rows(0, 1800), record.rows(1800, 3600), record.rows(3600, len(record.t_s))]
    for index in (0, 2):
        sites.write_csv(folder / "exports" / f"{index}.csv", sites.wide_csv(parts[index]))
    audit(folder)
    night = date(2026, 3, 2)
    published = standing_of(folder, "FIC-101", night)
    sites.write_csv(folder / "exports" / "1.csv", sites.wide_csv(parts[1]))
    audit(folder)
    revised = standing_of(folder, "FIC-101", night)
    assert revised.usable_steps > published.usable_steps
    assert standing_of(folder, "FIC-101", night, first=True) == published
    with opened(folder) as store, store.read() as session:
        (info,) = queries.nights(session)
        assert (info.night, info.revision) == (night, 2)


def test_a_quiet_feed_is_said(record: sites.Plant, tmp_path: Path) -> None:
    folder = lay(tmp_path)
    sites.write_csv(folder / "exports" / "all.csv", sites.wide_csv(record))
    assert audit(folder, now=datetime(2026, 3, 2, 2, 0, tzinfo=UTC)).quiet == ()
    (stopped,) = audit(folder, now=datetime(2026, 3, 4, 9, 0, tzinfo=UTC)).quiet
    assert stopped.startswith("The exports have stopped: the newest good sample is 3.0 days old")


def test_a_loop_whose_tags_no_export_names_is_in_the_list_and_said(
    record: sites.Plant, tmp_path: Path
) -> None:
    folder = sites.SiteFiles(
        LOOPS + "PIC-103,U2,header,pressure,P103.PV,P103.SP,,,bar,0,10,,5\n", SPECS, sites.WIDE
    ).lay(tmp_path)
    sites.write_csv(folder / "exports" / "all.csv", sites.wide_csv(record))
    report = audit(folder)
    assert "No export names the tags of 1 loop: PIC-103." in report.quiet
    assert standing_of(folder, "PIC-103").standing is StandingWord.UNSEEN


def test_a_source_that_cannot_be_listed_stops_nothing(record: sites.Plant, tmp_path: Path) -> None:
    exports = sites.WIDE + (
        '\n[[exports]]\nname = "far"\nfiles = "nosuchscheme://host/*.csv"\nlayout = "wide"'
    )
    folder = lay(tmp_path, exports)
    sites.write_csv(folder / "exports" / "all.csv", sites.wide_csv(record))
    report = audit(folder)
    assert report.files_new == 1
    assert [fault.file for fault in report.files_refused] == ["nosuchscheme://host/*.csv"]

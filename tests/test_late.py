"""Late data: tags that were not asked for before, files that give way again, slices of a record."""

from __future__ import annotations

import os
from datetime import timedelta
from pathlib import Path

import pytest
from test_nightly import LOOPS, SPECS, lay, plant

import sites
from audit import gather
from audit.records import to_us
from audit.store import queries
from sites import NOW, audit, content

HEAD, FLOW, WARM = LOOPS.splitlines(keepends=True)


@pytest.fixture(scope="module")
def record() -> sites.Plant:
    return plant()


@pytest.fixture(scope="module")
def reference(record: sites.Plant, tmp_path_factory: pytest.TempPathFactory) -> list[str]:
    folder = lay(tmp_path_factory.mktemp("reference"))
    sites.write_csv(folder / "exports" / "all.csv", sites.wide_csv(record))
    audit(folder)
    return content(folder)


def without_nights(lines: list[str]) -> list[str]:
    return [line for line in lines if not line.startswith('{"standing"') and '"night"' not in line]


@pytest.mark.parametrize("layout", ["wide", "narrow"])
def test_a_loop_added_later_gets_its_past(
    record: sites.Plant, reference: list[str], tmp_path: Path, layout: str
) -> None:
    """The exports taken before are read again for its tags alone, and only once."""
    exports = sites.WIDE if layout == "wide" else sites.NARROW
    folder = sites.SiteFiles(HEAD + FLOW, SPECS, exports).lay(tmp_path)
    (folder / "specs.csv").write_text("".join(SPECS.splitlines(keepends=True)[:2]))
    write = sites.wide_csv if layout == "wide" else sites.narrow_csv
    half = len(record.t_s) // 2
    sites.write_csv(folder / "exports" / "a.csv", write(record.rows(0, half)))
    sites.write_csv(folder / "exports" / "b.csv", write(record.rows(half, len(record.t_s))))
    first = audit(folder)
    assert first.steps_new > 5
    (folder / "loops.csv").write_text(LOOPS)
    (folder / "specs.csv").write_text(SPECS)
    later = audit(folder, now=NOW + timedelta(minutes=1))
    assert (later.files_new, later.files_skipped) == (2, 0)
    assert later.steps_new > 5
    assert (later.steps_changed, later.steps_withdrawn) == (0, 0)
    assert later.account.balance == 0
    assert content(folder) == reference
    again = audit(folder, now=NOW + timedelta(minutes=2))
    assert (again.files_new, again.files_skipped) == (0, 2)


def test_a_loop_with_another_tag_gets_the_past_of_that_tag(
    record: sites.Plant, reference: list[str], tmp_path: Path
) -> None:
    folder = lay(tmp_path)
    (folder / "loops.csv").write_text(LOOPS.replace("T102.PV", "T102.OTHER"))
    sites.write_csv(folder / "exports" / "all.csv", sites.wide_csv(record))
    audit(folder)
    assert content(folder) != reference
    (folder / "loops.csv").write_text(LOOPS)
    audit(folder, now=NOW + timedelta(minutes=1))
    assert without_nights(content(folder)) == without_nights(reference)


def corrected(record: sites.Plant) -> sites.Plant:
    """The middle of the record with another process variable."""
    rows = len(record.t_s)
    middle = record.rows(rows // 3, 2 * rows // 3)
    return sites.Plant(
        middle.t_s, {**middle.columns, "F101.PV": [40.0] * len(middle.t_s)}, middle.start
    )


def test_an_export_that_holds_again_is_read_again(
    record: sites.Plant, reference: list[str], tmp_path: Path
) -> None:
    """A correction that is taken back: what it had replaced was not kept, its export is there."""
    folder = lay(tmp_path)
    sites.write_csv(folder / "exports" / "all.csv", sites.wide_csv(record))
    late = folder / "exports" / "correction.csv"
    sites.write_csv(late, sites.wide_csv(corrected(record)))
    audit(folder)
    assert content(folder) != reference
    sites.write_csv(late, sites.wide_csv(record.rows(0, 2)))
    os.utime(late, (1, 1))
    report = audit(folder, now=NOW + timedelta(minutes=1))
    assert report.faults == ()
    assert without_nights(content(folder)) == without_nights(reference)


def test_an_export_that_holds_again_and_is_gone_is_named(
    record: sites.Plant, tmp_path: Path
) -> None:
    folder = lay(tmp_path)
    sites.write_csv(folder / "exports" / "all.csv", sites.wide_csv(record))
    late = folder / "exports" / "correction.csv"
    sites.write_csv(late, sites.wide_csv(corrected(record)))
    audit(folder)
    (folder / "exports" / "all.csv").unlink()
    sites.write_csv(late, sites.wide_csv(record.rows(0, 2)))
    os.utime(late, (1, 1))
    report = audit(folder, now=NOW + timedelta(minutes=1))
    (fault,) = report.faults
    assert fault.file == "exports/all.csv"
    assert "no longer there" in fault.problem


def test_other_exports_still_hold_where_a_replaced_one_reached_further(
    record: sites.Plant, reference: list[str], tmp_path: Path
) -> None:
    """New content of a path covers less; a higher-ranked export held part of what it leaves."""
    folder = lay(tmp_path)
    rows = len(record.t_s)
    sites.write_csv(folder / "exports" / "a.csv", sites.wide_csv(record))
    sites.write_csv(folder / "exports" / "b.csv", sites.wide_csv(record.rows(rows // 2, rows)))
    audit(folder)
    assert without_nights(content(folder)) == without_nights(reference)
    sites.write_csv(folder / "exports" / "a.csv", sites.wide_csv(record.rows(0, rows // 2)))
    os.utime(folder / "exports" / "a.csv", (1, 1))
    audit(folder, now=NOW + timedelta(minutes=1))
    assert without_nights(content(folder)) == without_nights(reference)


@pytest.mark.parametrize("most", [500, 3000])
def test_a_record_worked_through_in_parts_gives_the_same_content(
    record: sites.Plant,
    reference: list[str],
    tmp_path: Path,
    monkeypatch: pytest.MonkeyPatch,
    most: int,
) -> None:
    """A loop's record that is too long to be held at once."""
    monkeypatch.setattr(gather, "LOOP_SAMPLES", most)
    folder = lay(tmp_path)
    sites.write_csv(folder / "exports" / "all.csv", sites.wide_csv(record))
    report = audit(folder)
    assert report.steps_new > 15
    assert content(folder) == reference


def test_samples_of_the_future_are_named_and_say_nothing_of_the_feed(
    record: sites.Plant, tmp_path: Path
) -> None:
    folder = lay(tmp_path)
    text = sites.wide_csv(record)
    last = text.splitlines()[-1].split(",")
    ahead = ",".join(["2026-03-20T00:00:00Z", *last[1:]])
    sites.write_csv(folder / "exports" / "all.csv", f"{text}{ahead}\n")
    report = audit(folder)
    (fault,) = report.faults
    assert "6 samples are stamped in the future, up to 2026-03-20 00:00 UTC" in fault.problem
    with sites.opened(folder) as store, store.read() as session:
        states = queries.tag_states(session)
    assert {state.newest_us for state in states["FIC-101"].values()} == {
        to_us(record.start) + round(float(record.t_s[-1]) * 1e6)
    }


def test_exports_without_a_file_are_said(tmp_path: Path) -> None:
    folder = lay(tmp_path)
    report = audit(folder)
    assert "No file is found for [[exports]] 'dcs' (exports/*.csv*)" in report.quiet[0]


def test_an_export_that_is_gone_when_a_loop_is_added_is_named(
    record: sites.Plant, tmp_path: Path
) -> None:
    folder = sites.SiteFiles(HEAD + FLOW, SPECS, sites.WIDE).lay(tmp_path)
    (folder / "specs.csv").write_text("".join(SPECS.splitlines(keepends=True)[:2]))
    half = len(record.t_s) // 2
    sites.write_csv(folder / "exports" / "a.csv", sites.wide_csv(record.rows(0, half)))
    sites.write_csv(folder / "exports" / "b.csv", sites.wide_csv(record.rows(half, 2 * half)))
    audit(folder)
    (folder / "exports" / "a.csv").unlink()
    (folder / "loops.csv").write_text(LOOPS)
    (folder / "specs.csv").write_text(SPECS)
    report = audit(folder, now=NOW + timedelta(minutes=1))
    (fault,) = report.faults
    assert fault.file == "exports/a.csv"
    assert "no longer there" in fault.problem

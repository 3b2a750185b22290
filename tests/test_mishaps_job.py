"""The audit on exports as the world cuts them, and asked for what it should not do."""

from __future__ import annotations

import json
from datetime import date, timedelta
from pathlib import Path

import numpy as np
import pytest
from test_nightly import lay, plant

import sites
from audit import nightly
from audit.cli.print_run import exit_code
from audit.errors import AuditError
from audit.site import open_site
from sites import NOW, audit, content, opened


def steps(folder: Path) -> list[str]:
    return [line for line in content(folder) if "step" in json.loads(line)]


def test_a_file_for_each_tag_begun_together_and_ended_apart(tmp_path: Path) -> None:
    record = plant(hours=1)
    together, apart = lay(tmp_path / "a", sites.NARROW), lay(tmp_path / "b")
    rows = ["timestamp,tag,value,quality"]
    for at, tag in enumerate(record.columns):
        part = sites.Plant(record.t_s, {tag: record.columns[tag]}).rows(0, len(record.t_s) - at)
        sites.write_csv(apart / "exports" / f"{tag}.csv", sites.wide_csv(part))
        rows += sites.narrow_csv(part).splitlines()[1:]
    sites.write_csv(together / "exports" / "all.csv", "\n".join(rows) + "\n")
    assert audit(apart).files_new == len(record.columns)
    audit(together)
    assert len(steps(apart)) > 4
    assert steps(apart) == steps(together)


def test_a_file_that_grows_with_its_last_line_half_written(tmp_path: Path) -> None:
    record = plant(hours=2)
    text = sites.wide_csv(record)
    whole, growing = lay(tmp_path / "whole"), lay(tmp_path / "growing")
    sites.write_csv(whole / "exports" / "all.csv", text)
    audit(whole)
    for share in (0.3, 0.6):
        end = text.index("\n", int(len(text) * share)) + 30  # a stamp, and half of a number
        sites.write_csv(growing / "exports" / "all.csv", text[:end])
        report = audit(growing)
        assert sum(report.account.refused.values()) == len(record.columns)
        assert report.account.balance == 0
    sites.write_csv(growing / "exports" / "all.csv", text)
    audit(growing)
    assert content(growing) == content(whole)


def sparse_setpoints() -> list[str]:
    """Eight hours; the setpoint is recorded when it changes and hourly, as many historians do."""
    t_s = np.arange(0, 8 * 3600, 5.0)
    moves = [(4800.0, 45.0), (8400.0, 52.0), (19200.0, 47.0), (22800.0, 44.0)]
    sp, pv = sites.follow(t_s, moves, 40.0, 0.5, 0.1)
    head, *rows = sites.narrow_csv(sites.Plant(t_s, {"F101.PV": pv, "F101.SP": sp})).splitlines()
    kept = [head, f"{rows[0][:20]},F101.MODE,AUTO,Good"]
    held = ""
    for row in rows:
        stamp, tag, value, _ = row.split(",")
        if tag == "F101.PV" or value != held or stamp.endswith(":37:10Z"):
            kept.append(row)
            held = held if tag == "F101.PV" else value
    return kept


@pytest.mark.parametrize("hours", [(7.5, 9.8), (9.5, 10.7), (9.7, 13.8), (12.1, 14.0)])
def test_the_same_samples_again_over_a_part_of_what_was_taken(
    hours: tuple[float, float], tmp_path: Path
) -> None:
    """No setpoint change is found at the borders of a correction, and none is lost."""
    head, *body = sparse_setpoints()

    def rows(first: float, last: float) -> str:
        """Those of some hours of the day, 6 to 14."""
        low, high = (
            (sites.START + timedelta(hours=hour - 6)).strftime("%Y-%m-%dT%H:%M:%S")
            for hour in (first, last)
        )
        return "\n".join([head, *(row for row in body if low <= row[:19] < high)]) + "\n"

    once, twice = lay(tmp_path / "once", sites.NARROW), lay(tmp_path / "twice", sites.NARROW)
    for folder in (once, twice):
        for name, part in (("a", (6, 7)), ("b", (7, 13)), ("c", (13, 14))):
            sites.write_csv(folder / "exports" / f"{name}.csv", rows(*part))
        assert audit(folder).steps_new == 4
    sites.write_csv(twice / "exports" / "z.csv", rows(*hours))
    report = audit(twice)
    assert (report.steps_new, report.steps_changed, report.steps_withdrawn) == (0, 0, 0)
    assert steps(twice) == steps(once)


def test_a_night_that_has_not_begun_is_not_ranked(tmp_path: Path) -> None:
    folder = lay(tmp_path)
    with pytest.raises(AuditError, match=r"2026-03-05 has not begun.* is 2026-03-04"):
        audit(folder, nights=(date(2026, 3, 1), date(2026, 3, 5)))
    assert audit(folder, nights=(date(2026, 3, 4), date(2026, 3, 4))).nights == (date(2026, 3, 4),)


def test_the_exit_codes_of_audits_that_ran(tmp_path: Path) -> None:
    folder = lay(tmp_path)
    sites.write_csv(folder / "exports" / "a.csv", sites.wide_csv(plant(hours=1)))
    soon = sites.START + timedelta(hours=2)
    assert exit_code(audit(folder, now=soon)) == 0
    assert exit_code(audit(folder, now=soon)) == 4
    assert exit_code(audit(folder, now=NOW + timedelta(days=1))) == 5
    (folder / "exports" / "b.csv").write_text("")
    assert exit_code(audit(folder, now=NOW + timedelta(days=1))) == 3


def test_a_refused_file_stops_no_audit_on_several_cores(tmp_path: Path) -> None:
    folder = lay(tmp_path)
    sites.write_csv(folder / "exports" / "a.csv", sites.wide_csv(plant(hours=1)))
    (folder / "exports" / "b.csv").write_bytes("timestamp;F101.PV\n".encode("utf-16"))
    with opened(folder) as store:
        report = nightly.run(open_site(folder, {}), store, now=NOW, cores=2)
    assert [fault.file for fault in report.files_refused] == ["exports/b.csv"]
    assert report.steps_new > 4

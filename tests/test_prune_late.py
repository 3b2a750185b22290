"""Late data after a pruning, by the whole job: closed time stays, the rest is as ever."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass
from datetime import UTC, date, datetime, timedelta
from pathlib import Path
from typing import Any

import numpy as np
import pytest

import sites
from audit import retention
from audit.retention import Kind
from audit.site import open_site
from audit.store import queries

Step = Mapping[str, Any]

TAG = "FIC-101"
LOOPS = "tag,pv,sp,range_low,range_high\nFIC-101,F101.PV,F101.SP,0,100\n"
SPECS = (
    "tag,valid_from,rise_time_s,settling_time_s,overshoot_pct,set_by,reason\n"
    "FIC-101,2026-01-01,20,60,20,N. Quay,commissioning\n"
)
FIRST = datetime(2026, 3, 1, 6, tzinfo=UTC)
LATER = datetime(2026, 3, 6, 6, tzinfo=UTC)
HOURS = timedelta(hours=2)
NOW = datetime(2026, 3, 7, 6, tzinfo=UTC)
AFTER_PRUNING = date(2026, 3, 5)
"""Two days before the night of 7 March: one day of ``[standing] days`` and one more."""


def plant(start: datetime, seed: int, hours: float = 2.0, level: float = 40.0) -> sites.Plant:
    """A loop that is moved every quarter of an hour."""
    rng = np.random.default_rng(seed)
    t_s = np.arange(0, hours * 3600, 2.0)
    moves = []
    for at in np.arange(300, hours * 3600 - 60, 900.0):
        level += float(rng.choice([-6.0, 7.0])) if 25 < level < 75 else 2 * (50 - level)
        moves.append((float(at + rng.integers(0, 200)), level))
    sp, pv = sites.follow(t_s, moves, 40.0, 0.5, 0.35, 2.0)
    columns = {"F101.PV": pv + rng.normal(0, 0.05, len(t_s)), "F101.SP": sp}
    return sites.Plant(t_s, columns, start)


@dataclass(frozen=True)
class Twins:
    """Two sites that were given the same, one of which was pruned."""

    pruned: Path
    whole: Path

    def give(self, name: str, record: sites.Plant) -> None:
        for folder in (self.pruned, self.whole):
            sites.write_csv(folder / "exports" / name, sites.wide_csv(record))

    def audit(self) -> None:
        for folder in (self.pruned, self.whole):
            sites.audit(folder, now=NOW)

    def steps(self, since: datetime = FIRST) -> tuple[list[Step], list[Step]]:
        """The steps of both, from an instant on."""
        pruned, whole = (
            [
                step
                for step in sites.steps_of(sites.content(folder), TAG)
                if datetime.fromisoformat(step["at"]) >= since
            ]
            for folder in (self.pruned, self.whole)
        )
        return pruned, whole


@pytest.fixture(params=[Kind.SAMPLES, Kind.EDGES])
def twins(request: pytest.FixtureRequest, tmp_path: Path) -> Twins:
    """Audited twice, five days apart; then the samples or the edges of the first were pruned."""
    files = sites.SiteFiles(LOOPS, SPECS, sites.WIDE, extra="[standing]\ndays = 1")
    twins = Twins(files.lay(tmp_path / "pruned"), files.lay(tmp_path / "whole"))
    for name, record in (("a.csv", plant(FIRST, 1)), ("b.csv", plant(LATER, 2))):
        twins.give(name, record)
        twins.audit()
    site = open_site(twins.pruned, {})
    with sites.opened(twins.pruned) as store:
        done = retention.prune(site, store, [request.param], NOW.date(), now=NOW)
    assert [one.before for one in done.kinds] == [AFTER_PRUNING] * len(done.kinds)
    assert sum(one.counts.rows for one in done.kinds) >= 2
    pruned, whole = twins.steps()
    assert pruned == whole
    assert len(whole) == 8 + 9  # the setpoint had moved in between
    return twins


def test_the_next_export_goes_on_as_if_nothing_had_been_pruned(twins: Twins) -> None:
    twins.give("c.csv", plant(LATER + HOURS, 3))
    twins.audit()
    pruned, whole = twins.steps()
    assert pruned == whole
    assert len(whole) == 8 + 9 + 9


def test_a_correction_of_closed_time_changes_no_step_and_is_counted(twins: Twins) -> None:
    before, _ = twins.steps()
    twins.give("a.csv", plant(FIRST, 4))
    twins.audit()
    pruned, whole = twins.steps()
    assert pruned == before
    assert whole != before
    with sites.opened(twins.pruned) as store, store.read() as session:
        newest = {seen.path[-5:]: seen for seen in queries.exports(session)}["a.csv"]
    assert newest.account.taken > 0
    assert newest.account.balance == 0


def test_a_piece_of_closed_time_leads_to_no_step_that_is_none(twins: Twins) -> None:
    """What a part of the record seems to say where the setpoint's moves between are not known."""
    record = plant(FIRST, 1)
    rows = len(record.t_s)
    for name, piece in (
        ("z1.csv", record.rows(rows // 4, rows // 3)),
        ("z2.csv", record.rows(rows // 2, 2 * rows // 3)),
        ("z3.csv", plant(FIRST + timedelta(days=2), 5, hours=0.2)),  # after the closed time
    ):
        twins.give(name, piece)
        twins.audit()
        pruned, whole = twins.steps()
        assert pruned == whole
    assert len(whole) > 8 + 9


def test_a_correction_of_what_is_not_closed_is_taken_as_ever(twins: Twins) -> None:
    twins.give("b.csv", plant(LATER, 6))
    twins.audit()
    pruned, whole = twins.steps()
    assert pruned == whole


def test_late_data_and_the_next_export_in_one_audit(twins: Twins) -> None:
    before, _ = twins.steps()
    twins.give("z.csv", plant(FIRST + timedelta(minutes=20), 7, hours=0.5))
    twins.give("c.csv", plant(LATER + HOURS, 3))
    twins.audit()
    pruned, whole = twins.steps(LATER)
    assert pruned == whole
    assert twins.steps()[0][:8] == before[:8]

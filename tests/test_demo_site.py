"""The demonstration site: its operators and stories, its files, its truth."""

from __future__ import annotations

import csv
import gzip
import json
from datetime import UTC, datetime, timedelta
from itertools import pairwise
from pathlib import Path
from typing import TYPE_CHECKING, Any

import numpy as np
import pytest

from audit.register import read as read_register
from audit.site import open_site

if TYPE_CHECKING:  # in a checkout the type checker knows the package by its folder
    from demo_site import LAST_DAY, DemoSite, lay_down
    from demo_site.design import design
    from demo_site.operators import DAY_S, TO_SP, plan, window_s
    from demo_site.plant import LOOPS, pick
    from demo_site.simulate import INNER_SP
    from demo_site.stories import tell
else:
    from audit.demo_site import LAST_DAY, DemoSite, lay_down
    from audit.demo_site.design import design
    from audit.demo_site.operators import DAY_S, TO_SP, plan, window_s
    from audit.demo_site.plant import LOOPS, pick
    from audit.demo_site.simulate import INNER_SP
    from audit.demo_site.stories import tell

DAYS = 3
MOST_ROWS = 5_000_000


@pytest.fixture(scope="module")
def site(tmp_path_factory: pytest.TempPathFactory) -> DemoSite:
    return lay_down(tmp_path_factory.mktemp("demo") / "site", days=DAYS)


@pytest.fixture(scope="module")
def truth(site: DemoSite) -> dict[str, dict[str, Any]]:
    told = json.loads(site.truth_json.read_text())
    return {entry["tag"]: entry for entry in told["loops"]}


@pytest.fixture(scope="module")
def rows(site: DemoSite) -> list[dict[str, str]]:
    found: list[dict[str, str]] = []
    for path in site.exports:
        with gzip.open(path, "rt") as text:
            found += csv.DictReader(text)
    return found


# the operators and the stories


def test_one_to_four_moves_a_day_inside_their_band() -> None:
    for number, loop in enumerate(LOOPS):
        rng = np.random.default_rng(number)
        healthy = design(loop, rng)
        story = tell(loop, healthy, 90, rng)
        drawn = plan(loop, story, healthy.pivot_pv, 90, rng)
        if loop.primary:
            assert not drawn.events
            continue
        times, codes, values = drawn.columns()
        levels = values[codes == TO_SP]
        assert np.all(np.abs(levels - round(healthy.pivot_pv)) <= 13.5)
        starts = times[codes == TO_SP]
        begun = starts[np.diff(starts, prepend=-1e9) > 60]
        per_day = np.bincount((begun // DAY_S).astype(int), minlength=90)
        assert per_day.max() <= 4 + loop.tracking
        assert 60 <= drawn.moves <= 4 * 90
        if not story.cut_short:
            assert np.diff(begun).min() >= (300 if loop.tracking else window_s(loop)[1])


def test_faults_of_the_full_length_come_and_go_in_time() -> None:
    told = 0
    for number, loop in enumerate(LOOPS):
        for seed in range(5):
            rng = np.random.default_rng((seed, number))
            story = tell(loop, design(loop, rng), 90, rng)
            if story.fault is None:
                continue
            told += 1
            assert 25 <= story.fault.starts <= 60
            assert story.fault.full == story.fault.starts or (
                20 <= story.fault.full - story.fault.starts <= 40
            )
            assert story.fault.right is None or story.fault.full < story.fault.right <= 70
    assert told == 5 * 13


def test_a_smaller_plant_keeps_faults_and_whole_cascades() -> None:
    for count in (1, 4, 10, 25, 60):
        chosen = pick(count)
        tags = {loop.tag for loop in chosen}
        assert len(tags) == count
        assert all(loop.primary is None or loop.primary in tags for loop in chosen)
        assert any(loop.story not in ("healthy", "never_met") for loop in chosen)


def test_each_fault_shows_in_what_it_says(truth: dict[str, dict[str, Any]]) -> None:
    faulty = [entry for entry in truth.values() if entry["fault"]]
    assert len(faulty) == 13
    for entry in faulty:
        before, after = entry["commissioned"], entry["at_full_size"]
        ratios = [
            (after[name] or np.inf) / before[name] for name in ("rise_time_s", "settling_time_s")
        ]
        overshoot = after["overshoot_pct"] - before["overshoot_pct"]
        assert max(ratios) > 1.5 or overshoot > 15.0, entry["tag"]
        assert set(entry["exceeds"]) & {*entry["fault"]["shows_in"], "settling_time_s"}


def test_only_what_has_a_story_exceeds_its_spec(truth: dict[str, dict[str, Any]]) -> None:
    for entry in truth.values():
        assert bool(entry["exceeds"]) == (entry["never_met"] or entry["fault"] is not None)
        for name, limit in entry["limits"].items():
            value = entry["commissioned"][name]
            if entry["never_met"] or value is None:
                continue
            assert abs(value) * 1.15 < limit, (entry["tag"], name)
    assert sum(entry["never_met"] for entry in truth.values()) == 4


def test_every_rise_has_scans_enough_to_be_measured(truth: dict[str, dict[str, Any]]) -> None:
    """Eight or more, also of a fault at full size: a rise of fewer is only bounded."""
    scans = {"flow": 1, "pressure": 2, "level": 5, "temperature": 10, "composition": 10}
    for tag, entry in truth.items():
        scan_s = 2 if entry["moving_setpoint"] else scans[entry["kind"]]
        for told in (entry["commissioned"], entry["at_full_size"]):
            if told and told["rise_time_s"]:
                assert told["rise_time_s"] >= 8 * scan_s, tag


# the files


def test_the_site_reads_without_a_fault(site: DemoSite) -> None:
    opened = open_site(site.site_toml, {})
    assert opened.config.name == "Tern Point Works"
    register = read_register(
        site.loops_csv, site.specs_csv, opened.config.windows, opened.config.timezone
    )
    assert len(register.loops) == len(register.specs) == site.loops == 60
    assert sum(loop.averaging for loop in register.loops) == 2
    assert sum(loop.cascade_primary is not None for loop in register.loops) == 3
    assert len({loop.process_unit for loop in register.loops}) == 5


def test_rows_are_few_enough_and_in_order(site: DemoSite, rows: list[dict[str, str]]) -> None:
    assert len(rows) == site.rows
    assert site.rows / (60 * DAYS) * 60 * 90 < MOST_ROWS
    assert [path.name for path in site.exports] == [
        f"{LAST_DAY - timedelta(days=back)}.csv.gz" for back in reversed(range(DAYS))
    ]
    stamps = [row["timestamp"] for row in rows]
    assert stamps == sorted(stamps)
    assert datetime.fromisoformat(stamps[0]).tzinfo == UTC
    spoilt = sum(row["quality"] != "Good" for row in rows) / len(rows)
    assert 0 < spoilt < 0.03
    words = {row["value"] for row in rows if row["value"][:1].isalpha()}
    assert {"AUTO", "CAS", "MAN"} <= words <= {"AUTO", "CAS", "MAN", "Bad Input"}


def test_no_tag_is_silent_longer_than_the_site_allows(
    truth: dict[str, dict[str, Any]], rows: list[dict[str, str]]
) -> None:
    by_tag: dict[str, list[datetime]] = {}
    for row in rows:
        by_tag.setdefault(row["tag"], []).append(datetime.fromisoformat(row["timestamp"]))
    dead = {f"{tag}.PV" for tag, entry in truth.items() if entry["pv_tag_dead_since"]}
    assert len(dead) == 1
    end = datetime.combine(LAST_DAY, datetime.min.time(), UTC) + timedelta(days=1)
    for tag, stamps in by_tag.items():
        longest = max(b - a for a, b in pairwise([*stamps, end]))
        allowed = timedelta(seconds=900 if tag.endswith((".PV", ".OP")) else 90_000)
        assert (longest > allowed) == (tag in dead), tag


def test_an_inner_setpoint_moves_by_its_deadband_or_not_at_all(
    site: DemoSite, truth: dict[str, dict[str, Any]], rows: list[dict[str, str]]
) -> None:
    inner = {f"{tag}.SP": tag for tag, entry in truth.items() if entry["moving_setpoint"]}
    assert len(inner) == 3
    register = csv.DictReader(site.loops_csv.read_text().splitlines())
    joins = {row["tag"]: row["join_s"] for row in register}
    for sp, tag in inner.items():
        assert joins.pop(tag) == "300"
        span = next(loop.span for loop in LOOPS if loop.tag == tag)
        values = [
            float(row["value"]) for row in rows if row["tag"] == sp and row["value"][:1].isdigit()
        ]
        moves = np.abs(np.diff(values)) / span * 100
        assert np.count_nonzero(moves) > 50
        assert moves[moves > 0].min() > INNER_SP - 0.01
    assert set(joins.values()) == {""}


def test_parked_loops_end_in_manual(
    truth: dict[str, dict[str, Any]], rows: list[dict[str, str]]
) -> None:
    parked = [tag for tag, entry in truth.items() if entry["parked_in_manual_since"]]
    assert len(parked) == 2
    for tag in parked:
        since = truth[tag]["parked_in_manual_since"]
        modes = [row for row in rows if row["tag"] == f"{tag}.MODE" and row["timestamp"] > since]
        assert modes
        assert {row["value"] for row in modes} == {"MAN"}
        late = {row["value"] for row in rows if row["tag"] == f"{tag}.OP"} - {""}
        assert len(late) > 1


def content(site: DemoSite) -> dict[str, bytes]:
    files = [site.site_toml, site.loops_csv, site.specs_csv, site.truth_json, *site.exports]
    return {str(path.relative_to(site.folder)): path.read_bytes() for path in files}


def test_the_same_seed_gives_the_same_bytes(tmp_path: Path) -> None:
    heard: list[tuple[int, int]] = []
    first = lay_down(
        tmp_path / "a", loops=3, days=2, progress=lambda done, total: heard.append((done, total))
    )
    again = lay_down(tmp_path / "b", loops=3, days=2)
    other = lay_down(tmp_path / "c", loops=3, days=2, seed=1)
    assert content(first) == content(again)
    assert content(first)["truth.json"] != content(other)["truth.json"]
    assert first.exports[0].read_bytes() != other.exports[0].read_bytes()
    assert heard == sorted(heard)
    assert heard[-1] == (1000, 1000)


def test_what_cannot_be_laid_down_is_refused(tmp_path: Path) -> None:
    with pytest.raises(ValueError, match="1 to 60 loops"):
        lay_down(tmp_path, loops=61)
    with pytest.raises(ValueError, match="at least 2 days"):
        lay_down(tmp_path, days=1)
    (tmp_path / "site.toml").write_text("")
    with pytest.raises(FileExistsError):
        lay_down(tmp_path, loops=1, days=2)

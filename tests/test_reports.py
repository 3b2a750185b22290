"""The read side: the contract's JSON out of a store filled by hand, and numbers put into words."""

from __future__ import annotations

import json
from collections.abc import Iterator
from dataclasses import asdict
from datetime import UTC, date, datetime, timedelta
from pathlib import Path
from zoneinfo import ZoneInfo

import pytest
import stored

from audit import figures, reports
from audit.errors import AuditError, StoreUnready, UnknownLoop
from audit.records import (
    ChangeKind,
    Group,
    Outcome,
    Quantity,
    Reason,
    StandingWord,
)
from audit.reports import contract, words
from audit.reports.contract import Json
from audit.reports.place import order_sentence
from audit.site import Site, open_site
from audit.store import Store, open_store

RANKING_KEYS = {"night", "site", "loops"}
LOOP_KEYS = {
    *("rank", "tag", "process_unit", "service", "criticality", "group", "standing", "degraded"),
    *("since", "usable_steps", "reasons"),
}
STEP_KEYS = {
    *("at", "sp_from", "sp_to", "kind", "window_s", "usable", "set_aside", "measured", "verdicts"),
}
"""The keys of the contract; more may be there, none may be gone."""


@pytest.fixture(scope="module")
def filled(tmp_path_factory: pytest.TempPathFactory) -> Iterator[tuple[Site, Store]]:
    with stored.filled(tmp_path_factory.mktemp("reports") / "site") as both:
        yield both


@pytest.fixture(scope="module")
def history(filled: tuple[Site, Store]) -> Json:
    site, store = filled
    return reports.history(store, site, "FIC-101")


def test_the_ranking_holds_every_loop_in_order(filled: tuple[Site, Store]) -> None:
    site, store = filled
    found = reports.ranking(store, site)
    assert set(found) >= RANKING_KEYS
    assert found["night"] == "2026-03-14"
    assert found["site"] == "Gull Test Works"
    assert [(row["rank"], row["tag"]) for row in found["loops"]] == [
        (1, "FIC-101"),
        (2, "TIC-103"),
        (3, "LIC-102"),
    ]
    assert all(set(row) >= LOOP_KEYS for row in found["loops"])


def test_a_place_in_the_ranking_says_what_the_contract_says(filled: tuple[Site, Store]) -> None:
    site, store = filled
    worst = reports.ranking(store, site)["loops"][0]
    assert {key: worst[key] for key in LOOP_KEYS - {"reasons"}} == {
        "rank": 1,
        "tag": "FIC-101",
        "process_unit": "U1",
        "service": "Reactor feed",
        "criticality": 5,
        "group": "out_and_changed",
        "standing": "out_of_spec",
        "degraded": True,
        "since": "2026-03-02",
        "usable_steps": 10,
    }
    assert worst["reasons"][0] == {
        "code": "settling_time_out",
        "text": "settling time at least 63.4 s, limit 50 s",
    }


def test_the_parts_of_the_order_can_be_seen(filled: tuple[Site, Store]) -> None:
    site, store = filled
    worst = reports.ranking(store, site)["loops"][0]
    order = worst["order"]
    # (median - limit) / limit and criticality x distance, from the numbers of the fixture
    assert order["distance"] == pytest.approx((63.4 - 50) / 50)
    assert order["value"] == pytest.approx(5 * (63.4 - 50) / 50)
    assert (order["reference"], order["reference_kind"]) == (50.0, "limit")
    assert worst["limits"]["settling_time_s"]["median"] == 63.4


def test_a_quiet_feed_and_a_refused_export_are_said(filled: tuple[Site, Store]) -> None:
    site, store = filled
    found = reports.ranking(store, site)
    assert any("TIC-103" in sentence for sentence in found["quiet"])
    assert found["refused_exports"] == [{"path": "exports/day2.csv", "reason": "the file is empty"}]
    assert found["newest_stamp"] == "2026-03-14T01:00:00Z"


def test_a_revised_night_says_so_and_its_first_list_stays(filled: tuple[Site, Store]) -> None:
    site, store = filled
    newest = reports.ranking(store, site, date(2026, 3, 13))
    first = reports.ranking(store, site, date(2026, 3, 13), as_published=True)
    assert (newest["revision"], newest["revisions"]) == (2, 2)
    assert (first["revision"], first["revisions"]) == (1, 2)
    medians = [
        found["loops"][0]["limits"]["settling_time_s"]["median"] for found in (first, newest)
    ]
    assert medians == [61.0, 62.0]


def test_a_night_without_a_list_names_those_there_are(filled: tuple[Site, Store]) -> None:
    site, store = filled
    with pytest.raises(AuditError, match="2026-03-20") as raised:
        reports.ranking(store, site, date(2026, 3, 20))
    assert "2 nights are there, 2026-03-13 to 2026-03-14" in raised.value.remedy


def test_a_store_without_a_night_or_schema_says_what_to_do(tmp_path: Path) -> None:
    site = open_site(stored.lay(tmp_path / "site"), {})
    with open_store(site.config.store_url) as store:
        with pytest.raises(StoreUnready, match="store upgrade"):
            reports.ranking(store, site)
        store.upgrade()
        with pytest.raises(AuditError, match="loopassay nightly"):
            reports.ranking(store, site)


def test_a_step_says_what_the_contract_says(history: Json) -> None:
    step = history["steps"][0]
    assert set(step) >= STEP_KEYS
    assert (step["at"], step["sp_from"], step["sp_to"]) == ("2026-03-13T07:00:00Z", 50.0, 55.0)
    assert (step["kind"], step["window_s"], step["usable"]) == ("step", 600.0, True)
    assert step["measured"]["rise_time_s"] == {
        "value": 12.34,
        "low": 11.9,
        "high": 12.8,
        "how": "direct",
        "why": None,
    }
    assert step["verdicts"]["rise_time_s"] == {
        "limit": 12.0,
        "outcome": "undecided",
        "why": None,
        "spec_valid_from": "2026-02-01T00:00:00Z",
        "spec_version": 2,
    }


def test_every_quantity_is_in_every_step_with_a_value_a_bound_or_a_why(history: Json) -> None:
    for step in history["steps"]:
        assert list(step["measured"]) == [quantity.value for quantity in Quantity]
        for found in step["measured"].values():
            known = [found[key] for key in ("value", "low", "high", "why")]
            assert any(part is not None for part in known)


def test_longer_than_and_set_aside(history: Json) -> None:
    cut, refused = history["steps"][1:]
    settling = cut["measured"]["settling_time_s"]
    assert settling == {
        "value": None,
        "low": 55.0,
        "high": None,
        "how": "direct_r1",
        "why": "cut_short",
    }
    assert (refused["usable"], refused["set_aside"]) == (False, ["not_following"])


def test_the_history_holds_register_row_specs_standing_and_days(history: Json) -> None:
    assert history["loop"]["tag"] == "FIC-101"
    assert history["loop"]["after_s"] == 3600.0
    assert [spec["limits"]["settling_time_s"] for spec in history["specs"]] == [60.0, 50.0]
    assert history["interventions"] == []
    assert history["standing"]["rank"] == 1
    assert history["standing"]["trend"]["settling_time_s"]["baseline"] == 41.2
    assert history["days"] == [
        {
            "day": "2026-03-13",
            "automatic": 0.75,
            "output_saturated": 0.125,
            "pv_bad_or_missing": 0.0,
            "changes": 3,
            "usable_changes": 2,
        }
    ]


def test_since_and_until_are_local_days_both_inclusive(filled: tuple[Site, Store]) -> None:
    site, store = filled
    day = date(2026, 3, 13)

    def count(since: date | None, until: date | None) -> int:
        return len(reports.history(store, site, "FIC-101", since, until)["steps"])

    assert count(day, day) == 3
    assert count(day + timedelta(days=1), None) == 0
    assert count(None, day - timedelta(days=1)) == 0


def test_an_unknown_tag_is_answered_with_those_like_it(filled: tuple[Site, Store]) -> None:
    site, store = filled
    with pytest.raises(UnknownLoop, match="FIC-101"):
        reports.history(store, site, "FIC-110")


def test_the_status_accounts_for_every_cell(filled: tuple[Site, Store]) -> None:
    _, store = filled
    found = reports.status(store, (), stored.NOW)
    cells = found["cells"]
    parts = ("taken", "duplicate", "replaced", "blank", "bad_quality", "unregistered")
    assert cells["read"] == 14
    assert sum(cells[part] for part in parts) + sum(cells["refused"].values()) == 14
    assert cells["balance"] == 0
    assert found["exports"] == {"taken": 1, "refused": 1}
    assert found["steps"]["current"] == 3
    assert found["nights"] == {"count": 2, "first": "2026-03-13", "last": "2026-03-14"}


def test_all_reports_are_json_without_nan(filled: tuple[Site, Store]) -> None:
    site, store = filled
    for found in (
        reports.ranking(store, site),
        reports.history(store, site, "FIC-101"),
        reports.history(store, site, "LIC-102"),
        reports.status(store, (), stored.NOW),
    ):
        assert json.loads(json.dumps(found, allow_nan=False)) == found


# RFC 3339 section 5.8, examples: 1985-04-12T23:20:50.52Z and 1996-12-19T16:39:57-08:00, which it
# says is 1996-12-20T00:39:57Z.
@pytest.mark.parametrize(
    ("moment", "text"),
    [
        (datetime(1985, 4, 12, 23, 20, 50, 520_000, UTC), "1985-04-12T23:20:50.520000Z"),
        (
            datetime(1996, 12, 19, 16, 39, 57, tzinfo=ZoneInfo("America/Los_Angeles")),
            "1996-12-20T00:39:57Z",
        ),
        (0, "1970-01-01T00:00:00Z"),
        (None, None),
    ],
)
def test_stamps_are_rfc_3339_in_utc(moment: datetime | int | None, text: str | None) -> None:
    assert contract.stamp(moment) == text


# JCGM 100:2008, 7.2.2 and 7.2.6: m = 100.021 47 g with uc = 0.35 mg is given as 100.02147(35) g,
# two digits of the uncertainty at most and the value to the same place; here one, +-0.7 mg.
@pytest.mark.parametrize(
    ("value", "low", "high", "text"),
    [
        (100.02147, 100.02077, 100.02217, "100.0215 g (100.0208 to 100.0222)"),
        (12.3456, 11.9, 12.8, "12.3 g (11.9 to 12.8)"),
        (1234.6, 1100.0, 1400.0, "1235 g (1100 to 1400)"),
        (-0.001, -0.5, 0.5, "0.0 g (-0.5 to 0.5)"),
        (63.4, 60.0, None, "63.4 g (at least 60.0)"),
        (5.0, None, None, "5.00 g"),
        (0.0, 0.0, 0.0, "0 g"),
        (None, 600.0, None, "more than 600 g"),
        (None, None, 0.1234, "at most 0.123 g"),
        (None, 1.0, 2.0, "1.0 to 2.0 g"),
        (None, None, None, None),
    ],
)
def test_digits_fit_the_interval(
    value: float | None, low: float | None, high: float | None, text: str | None
) -> None:
    assert figures.interval(value, low, high, "g") == text


@pytest.mark.parametrize(
    ("value", "low", "high", "limit", "text"),
    [
        (50.0, 40.0, 60.04, 60.0, "50.00 s (40.00 to 60.04)"),
        (50.0, 40.0, 60.0, 60.0, "50 s (40 to 60)"),
        (0.0, -0.157, 0.157, 0.16, "0.000 s (-0.157 to 0.157)"),
        (-20.4, -31.0, -9.8, 10.0, "-20.4 s (-31.0 to -9.8)"),
        (None, 0.0, 0.2, 0.3, "at most 0.2 s"),
    ],
)
def test_no_number_is_rounded_onto_or_across_its_limit(
    value: float | None, low: float, high: float, limit: float, text: str
) -> None:
    assert figures.interval(value, low, high, "s", limit=limit) == text


def test_a_time_that_was_cut_is_longer_than() -> None:
    assert figures.interval(None, 55.0, None, "s") == "longer than 55 s"


@pytest.mark.parametrize(
    ("one", "other", "texts"),
    [
        (50.0, 55.0, ("50", "55")),
        (50.0, 50.25, ("50.00", "50.25")),
        (1e6, 1e6 + 0.5, ("1000000.0", "1000000.5")),
        (3.0, 3.0, ("3", "3")),
    ],
)
def test_two_levels_are_written_to_the_same_place(
    one: float, other: float, texts: tuple[str, str]
) -> None:
    assert figures.pair(one, other) == texts


@pytest.mark.parametrize(
    ("fraction", "text"),
    [(None, "-"), (0.0, "0 %"), (0.001, "<1 %"), (0.5, "50 %"), (0.9999, ">99 %"), (1.0, "100 %")],
)
def test_shares_are_never_rounded_to_nothing_or_all(fraction: float | None, text: str) -> None:
    assert figures.percent(fraction) == text


@pytest.mark.parametrize(
    ("change", "sentence"),
    [
        (
            {"value": 7.034, "distance": 1.7586, "quantity": "settling_time_s", "reference": 462.34}
            | {"reference_kind": "baseline"},
            "criticality 4 times distance 1.76 is 7.03; the distance is that of the settling time "
            "(5 %) from its baseline, 462 s.",
        ),
        (
            {"value": 1.2, "distance": 0.3, "quantity": "rise_time_s", "reference": 172.25}
            | {"reference_kind": "limit"},
            "criticality 4 times distance 0.3 is 1.2; the distance is that of the rise time from "
            "its limit, 172.25 s.",
        ),
        (
            {"value": 4.0, "distance": 1.0, "quantity": None, "reference": None},
            "criticality 4 times distance 1 is 4; a loop that does not answer counts as one whole "
            "change away.",
        ),
        ({"value": None}, "by criticality, 4."),
    ],
)
def test_each_part_of_the_order_is_said(change: Json, sentence: str) -> None:
    assert order_sentence(change, 4, "degC", 5.0) == f"Order in the group: {sentence}"


def test_what_needs_a_model_is_said_by_the_kind_of_change() -> None:
    code = Reason.NEEDS_MODEL.value
    said = {words.reason_of(code, kind) for kind in ChangeKind}
    assert "not measured on ramps" in said
    assert len(said) == len(ChangeKind)
    assert all("model" not in words.reason_of(code, kind) for kind in words.MANY_MOVES)


def test_every_code_has_its_words() -> None:
    assert set(words.QUANTITY) == set(Quantity)
    assert set(words.REASON) == set(Reason)
    assert set(words.STANDING) == set(StandingWord)
    assert set(words.OUTCOME) == set(Outcome)
    assert set(words.GROUP) == set(Group)
    assert set(words.KIND) == set(ChangeKind)


def test_the_unit_of_a_quantity_agrees_with_its_key() -> None:
    endings = {"_rad_s": "rad/s", "_eu_s": "EU·s", "_s": "s", "_pct": "%", "_eu": "EU"}
    for quantity in Quantity:
        unit = next((unit for end, unit in endings.items() if quantity.value.endswith(end)), None)
        if unit is not None:
            assert words.unit_of(quantity, "") == unit
    assert words.unit_of(Quantity.IAE, "m3/h") == "m3/h·s"


def test_the_register_row_in_json_leaves_nothing_out(filled: tuple[Site, Store]) -> None:
    site, _ = filled
    row = site.register.loops[0]
    assert set(contract.loop(row)) == (set(asdict(row)) - {"windows"}) | {
        "before_s",
        "after_s",
        "join_s",
    }

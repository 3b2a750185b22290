"""What a planner reads of a list: which reasons are shown short, and that the counts agree."""

from __future__ import annotations

import io
from typing import Any

from rich.console import Console

from audit.cli.print_ranking import print_ranking
from audit.reports.contract import Json

NO_ORDER = dict.fromkeys(("quantity", "distance", "reference", "reference_kind", "value"))


def row(rank: int, tag: str, group: str, standing: str, *reasons: str, **more: Any) -> Json:
    """A loop of the list; a reason is "code: text"."""
    parted = [reason.partition(": ") for reason in reasons]
    return {
        "rank": rank,
        "tag": tag,
        "process_unit": "U1",
        "service": f"Service of {tag}",
        "eu": "m3/h",
        "criticality": 3,
        "group": group,
        "standing": standing,
        "degraded": False,
        "since": None,
        "usable_steps": 12,
        "reasons": [{"code": code, "text": text} for code, _, text in parted],
        "order": NO_ORDER,
        **more,
    }


LOOPS = [
    row(
        1,
        "FIC-1",
        "out_and_changed",
        "out_of_spec",
        "settling_time_out: Too long.",
        "overshoot_out: Too far.",
        "rise_time_slower: Slower to rise.",
        "settling_time_slower: Slower to settle.",
        degraded=True,
        since="2026-03-02",
    ),
    row(2, "FIC-2", "never_met", "out_of_spec", "rise_time_out: Rises late."),
    row(3, "FIC-3", "undecided", "undecided", "a_undecided: Cannot tell.", "few_usable: Too few."),
    row(4, "FIC-4", "in_spec", "in_spec", "in_spec: All met.", "provisional_baseline: Young."),
    row(5, "FIC-5", "in_spec", "in_spec", "in_spec: All met.", "parked_manual: In manual."),
    row(6, "FIC-6", "in_spec", "in_spec", "in_spec: All met."),
]


def printed(loops: list[Json], everything: bool = False) -> str:
    found = {
        "site": "Gull Test Works",
        "night": "2026-03-14",
        "timezone": "Europe/Oslo",
        "cutoff": "2026-03-14T01:15:00Z",
        "newest_stamp": "2026-03-14T01:00:00Z",
        "computed_at": "2026-03-14T02:00:00Z",
        "revision": 1,
        "revisions": 1,
        "quiet": [],
        "refused_exports": [],
        "loops": loops,
        "cautions": [],
    }
    text = io.StringIO()
    print_ranking(Console(file=text, width=100, highlight=False), found, everything)
    return "\n".join(line.rstrip() for line in text.getvalue().splitlines())


def test_a_loop_in_spec_with_a_remark_has_its_own_lines() -> None:
    text = printed(LOOPS)
    assert "Service of FIC-5" in text
    assert "In manual." in text
    assert "All met." not in text
    assert "and 2 without a remark: FIC-4, FIC-6" in text
    assert "\n      FIC-4\n" in printed(LOOPS[3:4])


def test_a_loop_that_got_worse_says_so_of_the_quantity_that_put_it_there() -> None:
    text = printed(LOOPS)
    assert "Too long.\n      Slower to settle.\n" in text
    assert "Too far." not in text
    assert "Slower to rise." not in text
    assert "Cannot tell.\n      Too few.\n" in text


def test_all_shows_every_reason_once_and_the_order() -> None:
    text = printed(LOOPS, everything=True)
    for loop in LOOPS:
        for reason in loop["reasons"]:
            assert reason["text"] in text
    assert text.count("Slower to settle.") == 1
    assert text.count("Order in the group: by criticality, 3.") == len(LOOPS)


def test_the_head_counts_as_the_headings_do() -> None:
    text = printed(LOOPS)
    assert (
        "6 loops: 2 out of spec (1 of them got worse), 0 degrading, 1 undecided, 0 unseen, "
        "3 in spec (1 of them with a remark)."
    ) in " ".join(text.split())
    for heading in ("used to be (1)", "not the crew (1)", "cannot tell (1)", "In spec (3)"):
        assert heading in text

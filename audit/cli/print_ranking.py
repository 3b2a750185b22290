"""The ranked list as text: what the list rests on, the loops group by group, the cautions."""

from __future__ import annotations

from collections import Counter
from collections.abc import Sequence
from zoneinfo import ZoneInfo

from rich.console import Console
from rich.text import Text

from audit.cli.moments import local
from audit.cli.screen import STYLE, indented
from audit.records import Group, StandingWord
from audit.reports import words
from audit.reports.contract import Json
from audit.reports.place import order_sentence

GAP = "  "
FIXED = {"rank": 4, "criticality": 4, "standing": 11, "since": 10, "usable_steps": 5}
"""Widths of the columns whose content has one, characters."""

LEAST_ROOM = 16
"""Characters unit and service get together, however narrow the screen."""


def print_ranking(console: Console, found: Json, everything: bool = False) -> None:
    """Print a ranked list; with ``everything`` all reasons, and loops in spec one by one."""
    _print_head(console, found)
    loops = found["loops"]
    columns = _columns(loops, console.width)
    _print_line(console, Text(_line(columns, HEADINGS), style="bold"))
    for group in Group:
        members = [row for row in loops if row["group"] == group.value]
        if not members:
            continue
        console.print(Text(f"{words.GROUP[group]} ({len(members)})", style="bold underline"))
        shown = members
        if group is Group.IN_SPEC and not everything:
            shown = [row for row in members if _remarks(row)]
        for row in shown:
            _print_loop(console, row, columns, everything)
        _print_rest(console, [row["tag"] for row in members if row not in shown], bool(shown))
    _print_foot(console, found)


def _print_rest(console: Console, tags: Sequence[str], after_others: bool) -> None:
    """The loops in spec of which there is nothing to say, in one block."""
    if tags:
        lead = f"and {len(tags)} without a remark: " if after_others else ""
        console.print(indented(f"{lead}{', '.join(tags)}", 6))


HEADINGS: Json = {
    "rank": "RANK",
    "tag": "TAG",
    "process_unit": "UNIT",
    "service": "SERVICE",
    "criticality": "CRIT",
    "standing": "STANDING",
    "since": "SINCE",
    "usable_steps": "STEPS",
}


COLUMNS = (
    "CRIT: 5 is the most critical. SINCE: when it got worse, estimated. STEPS: usable setpoint "
    "changes in the period; the standing rests on the newest of them. 95 %: the interval the value "
    "lies in; range: what fewer than six changes span."
)


def _print_head(console: Console, found: Json) -> None:
    zone = ZoneInfo(found["timezone"])
    console.print(Text(f"{found['site']}: ranked loop list, night {found['night']}", style="bold"))
    facts = [
        f"Data before {local(found['cutoff'], zone)} ({zone}), newest sample "
        f"{local(found['newest_stamp'], zone)}, ranked {local(found['computed_at'], zone)}."
    ]
    if found["revisions"] > 1:
        facts.append(f"This is revision {found['revision']} of {found['revisions']}.")
    console.print(" ".join(facts))
    for sentence in found["quiet"]:
        console.print(Text(f"Feed: {sentence}", style="yellow"))
    refused = found["refused_exports"]
    if refused:
        files = "1 export file is" if len(refused) == 1 else f"{len(refused)} export files are"
        console.print(Text(f"Feed: {files} refused, see `loopassay store status`.", style="yellow"))
    console.print(_counts(found["loops"]))
    console.print()


def _counts(loops: Sequence[Json]) -> str:
    """How many loops are in which group, as the headings below count them."""
    counts = Counter(row["group"] for row in loops)
    remarked = sum(row["group"] == Group.IN_SPEC.value and bool(_remarks(row)) for row in loops)
    worse, never = counts[Group.OUT_AND_CHANGED.value], counts[Group.NEVER_MET.value]
    return (
        f"{len(loops)} loops: {worse + never} out of spec ({worse} of them got worse), "
        f"{counts[Group.DEGRADING.value]} degrading, {counts[Group.UNDECIDED.value]} undecided, "
        f"{counts[Group.UNSEEN.value]} unseen, {counts[Group.IN_SPEC.value]} in spec "
        f"({remarked} of them with a remark)."
    )


def _columns(loops: Sequence[Json], width: int) -> dict[str, int]:
    """The width of each column, so that a line fits the screen: unit and service share the rest."""

    def longest(key: str) -> int:
        return max([len(HEADINGS[key]), *(len(row[key]) for row in loops)])

    widths = {**FIXED, "tag": longest("tag")}
    room = max(width - sum(widths.values()) - len(GAP) * (len(HEADINGS) - 1), LEAST_ROOM)
    unit = min(longest("process_unit"), max(room // 3, room - longest("service")))
    return {**widths, "process_unit": unit, "service": min(room - unit, longest("service"))}


def _line(columns: dict[str, int], cells: Json) -> str:
    """One line of the list, cells cut or padded to their columns."""
    right = ("rank", "criticality", "usable_steps")
    parts = []
    for key in HEADINGS:
        text, width = str(cells[key]), columns[key]
        if len(text) > width:
            text = text[: width - 1] + "…"
        parts.append(text.rjust(width) if key in right else text.ljust(width))
    return GAP.join(parts).rstrip()


def _print_loop(console: Console, row: Json, columns: dict[str, int], everything: bool) -> None:
    standing = words.STANDING[StandingWord(row["standing"])]
    cells = row | {"standing": standing, "since": row["since"] or "-"}
    line = Text(_line(columns, cells))
    line.highlight_words([standing], STYLE[row["standing"]])
    _print_line(console, line)
    for reason in row["reasons"] if everything else _telling(row):
        console.print(indented(reason["text"], 6))
    if everything:
        console.print(indented(order_sentence(row["order"], row["criticality"], row["eu"]), 6))


def _remarks(row: Json) -> list[Json]:
    return [reason for reason in row["reasons"] if reason["code"] in words.REMARKS]


def _about(reason: Json) -> str:
    """What the code of a reason about a quantity begins with: the quantity."""
    code: str = reason["code"]
    return code.rpartition("_")[0]


def _telling(row: Json) -> list[Json]:
    """The reasons of the short list: what put the loop in its group, what of it got worse since
    when, and the remarks."""
    reasons = row["reasons"]
    chosen = [] if row["group"] == Group.IN_SPEC.value else reasons[:1]
    if row["degraded"]:
        worse = [reason for reason in reasons if reason["code"].endswith(("_slower", "_larger"))]
        same = [reason for reason in worse if _about(reason) == _about(reasons[0])]
        chosen = [*chosen, *(same or worse)[:1]]
    chosen = [*chosen, *_remarks(row)]
    return [reason for at, reason in enumerate(chosen) if reason not in chosen[:at]]


def _print_line(console: Console, line: Text) -> None:
    """A line of the list, never wrapped."""
    console.print(line, no_wrap=True, overflow="ignore", crop=False)


def _print_foot(console: Console, found: Json) -> None:
    console.print()
    console.print(words.ORDER)
    console.print(COLUMNS)
    for caution in found["cautions"]:
        console.print(Text(caution, style="italic"))

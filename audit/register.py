"""loops.csv and specs.csv -> loops and specs, with every fault of both at once.

In: the two paths, the site's windows and its time zone. Out: a ``Register`` of checked ``Loop``s
and ``Spec``s in the order of the files, or ``FilesWrong``.
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass
from datetime import UTC, datetime
from pathlib import Path
from zoneinfo import ZoneInfo

from audit.errors import Fault, FilesWrong
from audit.records import LIMITED, SECOND_US, Loop, LoopKind, Quantity, Role, Spec, Windows
from audit.sitefiles.localtime import moment
from audit.sitefiles.table import Cells, Columns, Table, read_table
from audit.sitefiles.text import LONGEST_WINDOW_S

LOOP_COLUMNS = Columns(
    required=("tag", "pv", "sp"),
    optional=(
        "process_unit",
        "service",
        "kind",
        "output",
        "mode",
        "eu",
        "range_low",
        "range_high",
        "output_low",
        "output_high",
        "auto_modes",
        "criticality",
        "cascade_primary",
        "averaging",
        "before_s",
        "after_s",
        "join_s",
        "notes",
    ),
    others=True,
)
SPEC_COLUMNS = Columns(
    required=("tag", "valid_from"),
    optional=(
        *(str(quantity) for quantity in LIMITED),
        "settling_band_pct",
        "min_step_eu",
        "set_by",
        "reason",
    ),
    others=False,
)
_NO_DATE = datetime.max.replace(tzinfo=UTC)


@dataclass(frozen=True)
class Register:
    """A site's loops and specs; the hashes (SHA-256) are of each file's cells."""

    loops: tuple[Loop, ...]
    specs: tuple[Spec, ...]
    loops_hash: str
    specs_hash: str


@dataclass(frozen=True)
class _Entry:
    """A loop with the row it came from."""

    loop: Loop
    cells: Cells


def read(loops_path: Path, specs_path: Path, windows: Windows, zone: ZoneInfo) -> Register:
    """The register of a site. ``windows``: the site's, where a row has none of its own;
    ``zone``: of dates and times without offset. Raises FilesWrong with every fault."""
    register, faults = examine(loops_path, specs_path, windows, zone)
    if faults:
        raise FilesWrong(faults)
    return register


def examine(
    loops_path: Path, specs_path: Path, windows: Windows, zone: ZoneInfo
) -> tuple[Register, tuple[Fault, ...]]:
    """As ``read``, but gives the faults back; with any, the register is not to be used."""
    loops, specs = read_table(loops_path, LOOP_COLUMNS), read_table(specs_path, SPEC_COLUMNS)
    loop_faults, spec_faults = list(loops.faults), list(specs.faults)
    entries = _entries(loops, windows, loop_faults)
    tags = {row.cells.get("tag", "") for row in loops.rows} if loops.complete else None
    _check_across(entries, tags, loop_faults)
    found = _specs(specs, tags, zone, spec_faults)
    register = Register(
        tuple(entry.loop for entry in entries), found, loops.content_hash, specs.content_hash
    )
    return register, (*_by_line(loop_faults), *_by_line(spec_faults))


def _by_line(faults: Sequence[Fault]) -> list[Fault]:
    return sorted(faults, key=lambda fault: fault.line or 0)


def _entries(table: Table, windows: Windows, faults: list[Fault]) -> list[_Entry]:
    rows = [Cells(table, row, faults) for row in table.rows if row.whole]
    if table.complete and not table.rows:
        faults.append(Fault(table.name, "holds no loop", "add a row for each loop", 1))
    entries = [_Entry(_loop(cells, table.others, windows), cells) for cells in rows]
    seen: dict[str, int] = {}
    for entry in entries:
        tag, cells = entry.loop.tag, entry.cells
        if tag and tag in seen:
            cells.wrong("tag", f"is already the tag of line {seen[tag]}", "give each loop one row")
        seen.setdefault(tag, cells.line)
    return entries


def _loop(cells: Cells, others: Sequence[str], windows: Windows) -> Loop:
    range_low, range_high = _range(cells)
    output_low, output_high = _output_limits(cells)
    loop = Loop(
        tag=cells.name("tag", needed=True),
        pv=cells.name("pv", needed=True),
        sp=cells.name("sp", needed=True),
        windows=_windows(cells, windows),
        process_unit=cells.text("process_unit"),
        service=cells.text("service"),
        kind=LoopKind(cells.word("kind", [str(kind) for kind in LoopKind], LoopKind.OTHER)),
        output=cells.name("output") or None,
        mode=cells.name("mode") or None,
        eu=cells.text("eu"),
        range_low=range_low,
        range_high=range_high,
        output_low=output_low,
        output_high=output_high,
        auto_modes=_auto_modes(cells),
        criticality=cells.whole("criticality", 3, 1, 5),
        cascade_primary=cells.name("cascade_primary") or None,
        averaging=cells.word("averaging", ("yes", "no"), "no") == "yes",
        notes=_notes(cells, others),
    )
    _check_tags(loop, cells)
    return loop


def _range(cells: Cells) -> tuple[float | None, float | None]:
    low, high = cells.number("range_low"), cells.number("range_high")
    if not cells.sound("range_low", "range_high"):
        return None, None
    if low is not None and high is not None:
        if not low < high:
            cells.wrong("range_low", f"{low:g} is not below range_high {high:g}", "swap or correct")
    elif low is not None or high is not None:
        blank = "range_low" if low is None else "range_high"
        cells.wrong(blank, "is blank beside the other range-value", "give both or neither")
    return low, high


def _output_limits(cells: Cells) -> tuple[float, float]:
    low, high = cells.number("output_low"), cells.number("output_high")
    low, high = 0.0 if low is None else low, 100.0 if high is None else high
    if cells.sound("output_low", "output_high") and not low < high:
        problem = f"{low:g} is not below output_high {high:g}"
        cells.wrong(
            "output_low", problem, "the limits at which the output saturates; default 0, 100"
        )
    return low, high


def _windows(cells: Cells, site: Windows) -> Windows:
    """The site's windows with the row's own put in."""

    def own(column: str, usual_us: int) -> int:
        seconds = cells.bounded(column, most=LONGEST_WINDOW_S)
        return usual_us if seconds is None else max(1, round(seconds * SECOND_US))

    return Windows(
        before_us=own("before_s", site.before_us),
        after_us=own("after_s", site.after_us),
        join_us=own("join_s", site.join_us),
    )


def _auto_modes(cells: Cells) -> tuple[str, ...]:
    modes = tuple(mode.strip() for mode in cells.text("auto_modes").split(";") if mode.strip())
    if cells.text("mode") and not modes:
        remedy = "name the modes in which the controller follows its setpoint, parted by ;"
        cells.wrong("auto_modes", "is blank although the loop has a mode tag", remedy)
    elif modes and not cells.text("mode"):
        cells.wrong("mode", "is blank although auto_modes is given", "name the mode's tag")
    return modes


def _notes(cells: Cells, others: Sequence[str]) -> str:
    kept = [f"{column}: {cells.text(column)}" for column in others if cells.text(column)]
    return "; ".join(filter(None, [cells.text("notes"), *kept]))


def _check_tags(loop: Loop, cells: Cells) -> None:
    """Within one loop no historian tag may stand for two things."""
    seen: dict[str, Role] = {}
    for role, tag in loop.tags().items():
        if tag in seen:
            problem = f"'{tag}' is also the loop's {seen[tag]}"
            cells.wrong(str(role), problem, "name the historian's tag of each")
        seen.setdefault(tag, role)


def _check_across(entries: Sequence[_Entry], tags: set[str] | None, faults: list[Fault]) -> None:
    """What only shows between rows: cascades, and tags that are a mode here and a value there."""
    modes = {entry.loop.mode: entry.loop.tag for entry in entries if entry.loop.mode}
    by_tag: dict[str, _Entry] = {}
    for entry in entries:
        loop, cells = entry.loop, entry.cells
        by_tag.setdefault(loop.tag, entry)
        for role, tag in loop.tags().items():
            if role is not Role.MODE and modes.get(tag, loop.tag) != loop.tag:
                problem = f"'{tag}' is the mode of loop {modes[tag]}"
                cells.wrong(str(role), problem, "a mode tag cannot be read as a number too")
        primary = loop.cascade_primary
        if primary == loop.tag:
            cells.wrong("cascade_primary", "is the loop itself", "name the outer loop, or none")
        elif primary and tags is not None and primary not in tags:
            problem = f"'{primary}' is not a loop of this register"
            cells.wrong("cascade_primary", problem, "add that loop, or leave it blank")
    for circle in _circles({tag: e.loop.cascade_primary for tag, e in by_tag.items()}):
        problem = f"goes round in a circle: {' -> '.join([*circle, circle[0]])}"
        remedy = "the outermost loop has no cascade_primary"
        by_tag[circle[0]].cells.wrong("cascade_primary", problem, remedy)


def _circles(primary_of: dict[str, str | None]) -> list[list[str]]:
    """The circles of two or more among cascades, each once, from its first loop in the file on."""
    circles: list[list[str]] = []
    done: set[str] = set()
    for start in primary_of:
        chain: list[str] = []
        at: str | None = start
        while at is not None and at in primary_of and at not in done and at not in chain:
            chain.append(at)
            at = primary_of[at]
        if at is not None and at in chain and primary_of[at] != at:
            circle = chain[chain.index(at) :]
            first = circle.index(min(circle, key=list(primary_of).index))
            circles.append(circle[first:] + circle[:first])
        done.update(chain)
    return circles


def _specs(
    table: Table, tags: set[str] | None, zone: ZoneInfo, faults: list[Fault]
) -> tuple[Spec, ...]:
    found: list[Spec] = []
    seen: dict[tuple[str, datetime], int] = {}
    for row in table.rows:
        cells = Cells(table, row, faults)
        if not row.whole:
            continue
        spec = _spec(cells, zone)
        found.append(spec)
        if tags is not None and spec.tag and spec.tag not in tags:
            cells.wrong(
                "tag", f"'{spec.tag}' is not in the loop register", "add it, or drop the row"
            )
        if spec.valid_from is _NO_DATE:
            continue
        key = (spec.tag, spec.valid_from)
        if key in seen:
            problem = f"line {seen[key]} has a spec of this loop from the same time on"
            cells.wrong("valid_from", problem, "keep one of the rows")
        seen.setdefault(key, cells.line)
    return tuple(found)


def _spec(cells: Cells, zone: ZoneInfo) -> Spec:
    limits = {
        quantity: cells.bounded(str(quantity), zero=quantity is Quantity.OVERSHOOT)
        for quantity in LIMITED
    }
    return Spec(
        tag=cells.name("tag", needed=True),
        valid_from=_valid_from(cells, zone),
        limits={quantity: limit for quantity, limit in limits.items() if limit is not None},
        settling_band_pct=cells.bounded("settling_band_pct", under=50.0) or 2.0,
        min_step_eu=cells.bounded("min_step_eu", zero=True),
        set_by=cells.text("set_by"),
        reason=cells.text("reason"),
    )


def _valid_from(cells: Cells, zone: ZoneInfo) -> datetime:
    text = cells.text("valid_from")
    try:
        return moment(text, zone)
    except ValueError as failure:
        problem = f"'{text}' {failure}" if text else "is blank"
        if cells.has("valid_from"):
            cells.wrong("valid_from", problem, "such as 2024-03-31 or 2024-03-31T06:00:00+01:00")
    return _NO_DATE

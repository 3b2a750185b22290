"""What the store holds, and where every cell of every export went, as text."""

from __future__ import annotations

from datetime import UTC, datetime

from rich.console import Console
from rich.text import Text

from audit import figures
from audit.cli.screen import table
from audit.reports.contract import Json

NEWEST_FILES = 20
SIZE = "store_bytes"
"""What a run counts for the growth; the size is shown by itself."""
CELLS = {
    "rows": "ROWS",
    "read": "READ",
    "taken": "TAKEN",
    "duplicate": "DUPL",
    "replaced": "REPL",
    "blank": "BLANK",
    "bad_quality": "BAD",
    "unregistered": "UNREG",
    "refused": "REFUSED",
}
"""The columns of the account; one that is 0 in every file is left out."""


def print_status(console: Console, found: Json, everything: bool = False) -> None:
    """Print the status of a store; with ``everything`` each export file, else the newest."""
    schema = found["schema"]
    console.print(f"Store: {found['url']}")
    if schema["current"] != schema["head"]:
        remedy = "Run `loopassay store upgrade`." if schema["known"] else "Use the newer program."
        console.print(
            f"Schema: {schema['current'] or 'none yet'}, this program needs {schema['head']}. "
            f"{remedy}"
        )
        return
    console.print(f"Schema: {schema['current']}, current. Site: {found['site'] or 'none yet'}.")
    for sentence in found["quiet"]:
        console.print(f"Feed: {sentence}")
    loops, specs, nights = found["loops"], found["specs"], found["nights"]
    console.print(
        f"Loops: {loops['current']}, and {loops['retired']} retired. Spec versions: "
        f"{specs['versions']} of {specs['loops']} loops. Setpoint changes: "
        f"{found['steps']['current']}, {found['steps']['usable']} of them usable."
    )
    console.print(
        f"Nights ranked: {nights['count']}"
        + (f", {nights['first']} to {nights['last']}." if nights["count"] else ".")
    )
    _print_newest(console, found["newest_steps"])
    _print_size(console, found)
    _print_runs(console, found["runs"])
    _print_files(console, found, everything)


def _print_newest(console: Console, newest: Json) -> None:
    if not newest["loops"]:
        return
    text = (
        f"Loops with a setpoint change: {newest['with_steps']} of {newest['loops']}, in the last "
        f"30 days {newest['last_30_days']}, in the last 7 days {newest['last_7_days']}."
    )
    if newest["longest_without"]:
        last = ", ".join(f"{one['tag']} {one['at'][:10]}" for one in newest["longest_without"])
        text += f" Longest without one, with the day of the last: {last}."
    console.print(text)


def _print_size(console: Console, found: Json) -> None:
    size, growth = found["size"], found["growth"]
    about = "about " if size["estimated"] else ""
    parts = ", ".join(
        f"{one['kind']} {figures.size(one['bytes'])}" for one in size["contents"] if one["bytes"]
    )
    free = f", and {figures.size(size['free_bytes'])} free in it" if size["free_bytes"] else ""
    console.print(f"Size: {figures.size(size['bytes'])}{free}. Of this {about}{parts}.")
    days = figures.plain(growth["days"])
    if growth["bytes_a_year"] is None:
        console.print(f"Growth a year: not enough history yet ({days} days of record, 7 needed).")
        return
    how = {
        "measured": f"measured over {days} days of runs",
        "estimated": f"estimated from the last {days} days of record",
    }[growth["how"]]
    sign = "-" if growth["bytes_a_year"] < 0 else ""
    grown = figures.size(abs(growth["bytes_a_year"]))
    console.print(
        f"Growth a year: {sign}{grown}, {how}. `loopassay store prune` takes out the old."
    )


def _print_runs(console: Console, runs: list[Json]) -> None:
    if not runs:
        return
    console.print()
    console.print(Text("Last runs, newest first (times in UTC)", style="bold"))
    rows = table("STARTED", "RUN", "STATE", "TOOK", "COUNTS")
    for run in runs[:5]:
        counts = ", ".join(
            f"{key} {count}" for key, count in run["counts"].items() if count and key != SIZE
        )
        rows.add_row(
            _utc(run["started_at"]),
            run["kind"],
            run["state"],
            _took(run["started_at"], run["ended_at"]),
            run["error"] or counts.replace("_", " "),
        )
    console.print(rows)


def _print_files(console: Console, found: Json, everything: bool) -> None:
    files = sorted(found["files"], key=lambda file: file["last"] or file["read_at"], reverse=True)
    if not files:
        return
    shown = files if everything else files[:NEWEST_FILES]
    console.print()
    states = ", ".join(f"{count} {state}" for state, count in found["exports"].items())
    console.print(Text(f"Export files: {states}; cells, newest first ({len(shown)})", style="bold"))
    used = [name for name in CELLS if _count(found["cells"], name)]
    headings = tuple(CELLS[name] for name in used)
    rows = table("FILE", "STATE", *headings, numbers=headings)
    for file in shown:
        rows.add_row(file["path"], file["state"], *_counts(file["cells"], used))
    total = Text(f"all {len(files)} files", style="bold")
    rows.add_row(total, "", *_counts(found["cells"], used))
    console.print(rows)
    for file in shown:
        if file["reason"]:
            console.print(f"{file['path']}: {file['reason']}")
    _print_sum(console, found, len(shown) < len(files))


def _print_sum(console: Console, found: Json, some: bool) -> None:
    cells = found["cells"]
    if cells["refused"]:
        parts = ", ".join(f"{why} {count}" for why, count in cells["refused"].items())
        console.print(f"Refused cells by reason: {parts}.")
    wrong = [file["path"] for file in found["files"] if file["cells"]["balance"] != 0]
    if wrong:
        console.print(Text(f"The sum does not hold for: {', '.join(wrong)}.", style="bold red"))
    else:
        console.print(
            "The sum holds for every file: read = taken + duplicate + replaced + blank + bad "
            "quality + unregistered + refused."
        )
    if some:
        console.print("--all shows every file.")


def _count(account: Json, name: str) -> int:
    if name == "refused":
        return sum(account["refused"].values())
    count: int = account[name]
    return count


def _counts(account: Json, names: list[str]) -> list[str]:
    return [str(_count(account, name)) for name in names]


def _utc(text: str) -> str:
    return datetime.fromisoformat(text).astimezone(UTC).strftime("%Y-%m-%d %H:%M")


def _took(started: str, ended: str | None) -> str:
    if ended is None:
        return "not ended"
    seconds = (datetime.fromisoformat(ended) - datetime.fromisoformat(started)).total_seconds()
    return f"{figures.plain(round(seconds, 1))} s"

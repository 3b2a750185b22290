"""What was pruned, or would be, as text and as JSON."""

from __future__ import annotations

from typing import TYPE_CHECKING

from rich.console import Console
from rich.text import Text

from audit import figures
from audit.cli.screen import table
from audit.reports.contract import Json

if TYPE_CHECKING:
    from audit.retention import Pruned, Pruning

WHAT = {
    "superseded": "measurements that were replaced or withdrawn, verdicts, unused samples",
    "steps": "setpoint changes with their measurements; baselines stay",
    "samples": "samples of setpoint changes; what was measured stays, and cannot be measured again",
    "edges": "slices of record at the borders of exports; they go with the samples of that time",
    "revisions": "revisions of nights' lists but the first and the newest",
    "lists": "lists of nights",
    "exports": "accounts of export contents that were replaced",
    "runs": "lines of the run log; the newest 20 stay",
}


def pruning_json(done: Pruning) -> Json:
    """The outcome as the contract's JSON: rows and bytes of each kind."""
    return {
        "dry_run": done.dry_run,
        "vacuumed": done.vacuumed,
        "kinds": [
            {
                "kind": one.kind.value,
                "before": None if one.before is None else one.before.isoformat(),
                "rows": one.counts.rows,
                "bytes": one.counts.size_bytes,
            }
            for one in done.kinds
        ],
    }


def print_pruning(console: Console, done: Pruning) -> None:
    """Print the outcome and what has to be known of it."""
    head = "Would be pruned; nothing was changed" if done.dry_run else "Pruned"
    console.print(Text(head, style="bold"))
    rows = table("KIND", "BEFORE", "ROWS", "SIZE", "WHAT", numbers=("ROWS", "SIZE"))
    for one in done.kinds:
        before = "-" if one.before is None else one.before.isoformat()
        size = figures.size(one.counts.size_bytes)
        rows.add_row(one.kind.value, before, str(one.counts.rows), size, WHAT[one.kind.value])
    console.print(rows)
    for line in _notes(done):
        console.print(line)


def _notes(done: Pruning) -> list[str]:
    notes = []
    if any(one.before is None for one in done.kinds):
        notes.append("No night has been ranked yet: what standings may rest on stays.")
    elif len({one.before for one in done.kinds}) > 1:
        notes.append("What the newest night rests on stays, whatever its age: see BEFORE.")
    if any(_closes(one) for one in done.kinds):
        would = "would be counted, but would" if done.dry_run else "are counted, but"
        notes.append(f"Late data for that time {would} change no setpoint change any more.")
    if done.vacuumed is False:
        notes.append("PostgreSQL makes the space free for new rows by itself (autovacuum).")
    elif done.vacuumed:
        notes.append("The file was written anew, without what was free in it.")
    elif not done.dry_run:
        notes.append(
            "The space is used for new rows. An SQLite file gets smaller by --vacuum alone; on "
            "PostgreSQL, autovacuum makes the space free."
        )
    return notes


def _closes(one: Pruned) -> bool:
    return one.kind.value in ("steps", "samples", "edges") and one.counts.rows > 0

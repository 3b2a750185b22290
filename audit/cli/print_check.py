"""What ``loopassay check`` found, as text and as JSON."""

from __future__ import annotations

from collections.abc import Iterable, Sequence

from rich.console import Console
from rich.text import Text

from audit.check import FIRST_ROWS, Findings
from audit.cli.screen import indented
from audit.errors import Fault
from audit.reports.contract import Json

MOST = 20
"""Lines shown of one kind of thing to look at."""


def findings_json(found: Findings) -> Json:
    """The findings as JSON."""
    return {
        "faults": [_fault(fault) for fault in found.faults],
        "unreadable_rows": [_fault(fault) for fault in found.rows],
        "missing_tags": [
            {"tag": missing.tag, "loop": missing.loop, "role": missing.role.value}
            for missing in found.missing
        ],
        "unused_columns": [{"exports": kind, "column": column} for kind, column in found.unused],
        "exports_without_files": list(found.empty),
        "loops": found.loops,
        "specs": found.specs,
        "export_files": found.files,
    }


def _fault(fault: Fault) -> Json:
    return {
        "file": fault.file,
        "line": fault.line,
        "column": fault.column,
        "tag": fault.tag,
        "problem": fault.problem,
        "remedy": fault.remedy,
    }


def print_findings(console: Console, found: Findings) -> None:
    """Print the findings: faults first, then what to look at."""
    faults = len(found.faults)
    if faults:
        console.print(Text("1 fault:" if faults == 1 else f"{faults} faults:", style="bold red"))
        _print_lines(console, map(str, found.faults))
    _print_some(console, "Rows of exports that cannot be read", [str(row) for row in found.rows])
    _print_some(
        console,
        f"Tags of the register that no export shows (first {FIRST_ROWS} rows of each file looked "
        "at, the newest narrow files whole)",
        [f"{tag.tag}: {tag.role.value} of {tag.loop}" for tag in found.missing],
    )
    _print_some(
        console,
        "Columns or tags of exports that no loop uses",
        [f"{column} ({kind})" for kind, column in found.unused],
    )
    _print_some(console, "Export kinds without a file", list(found.empty))
    files = f"{found.files} export files looked at"
    if faults:
        console.print(f"{files}; what is at fault has to be put right before an audit.")
    else:
        can = ": all can be read" if found.files else ""
        console.print(f"{found.loops} loops and {found.specs} spec rows read, {files}{can}.")


def _print_some(console: Console, heading: str, lines: Sequence[str]) -> None:
    if not lines:
        return
    console.print(Text(f"{heading}: {len(lines)}", style="bold yellow"))
    _print_lines(console, lines[:MOST])
    if len(lines) > MOST:
        console.print(f"  … and {len(lines) - MOST} more; --json lists all")


def _print_lines(console: Console, lines: Iterable[str]) -> None:
    for line in lines:
        console.print(indented(line, 2))

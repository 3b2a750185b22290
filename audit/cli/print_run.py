"""What one audit did, as text and as JSON, and the exit code it ends with."""

from __future__ import annotations

from rich.console import Console
from rich.text import Text

from audit.cli.screen import indented
from audit.reports import contract
from audit.reports.contract import Json
from audit.run_report import RunReport

MOST_REFUSED = 0.01
"""A larger share of the cells refused than this is told by the exit code."""

MOST_FAULTS = 10

MANY_WITHDRAWN = 5
WITHDRAWN = (
    "More setpoint changes were withdrawn than found. An export replaces its tags from its first "
    "to its last stamp, also where it has no samples of them: is there a file in this run with a "
    "late row, or one cut short?"
)
"""Said where more than so many changes, and more than were found, are gone."""

REFUSED, NOTHING_NEW, QUIET = 3, 4, 5
"""Exit codes of an audit that ran."""


def exit_code(report: RunReport) -> int:
    """0 all well; of several the order is 3 (refused), 5 (quiet feed), 4 (nothing new)."""
    if report.files_refused or report.refused_share > MOST_REFUSED:
        return REFUSED
    if report.quiet:
        return QUIET
    return NOTHING_NEW if report.files_new == 0 else 0


def report_json(report: RunReport) -> Json:
    """The report as JSON."""
    return {
        "nights": [night.isoformat() for night in report.nights],
        "files_new": report.files_new,
        "files_skipped": report.files_skipped,
        "files_refused": [str(fault) for fault in report.files_refused],
        "cells": contract.account(report.account),
        "refused_share": report.refused_share,
        "steps_new": report.steps_new,
        "steps_changed": report.steps_changed,
        "steps_withdrawn": report.steps_withdrawn,
        "quiet": list(report.quiet),
        "faults": [str(fault) for fault in report.faults],
        "exit_code": exit_code(report),
    }


def print_report(console: Console, report: RunReport) -> None:
    """Print what an audit did: the feed first, then what came of it."""
    for sentence in report.quiet:
        console.print(Text(f"Feed: {sentence}", style="yellow"))
    for fault in report.files_refused:
        console.print(Text(f"Refused: {fault}", style="red"))
    cells = report.account
    console.print(
        f"Export files: {report.files_new} new, {report.files_skipped} known, "
        f"{len(report.files_refused)} refused. Cells: {cells.read} read, {cells.taken} taken, "
        f"{sum(cells.refused.values())} refused."
    )
    for fault in report.faults[:MOST_FAULTS]:
        console.print(indented(str(fault), 2))
    if len(report.faults) > MOST_FAULTS:
        console.print(f"  … and {len(report.faults) - MOST_FAULTS} more; --json lists all")
    console.print(
        f"Setpoint changes: {report.steps_new} new, {report.steps_changed} measured again, "
        f"{report.steps_withdrawn} withdrawn."
    )
    if report.steps_withdrawn > max(MANY_WITHDRAWN, report.steps_new + report.steps_changed):
        console.print(Text(WITHDRAWN, style="yellow"))
    nights = [night.isoformat() for night in report.nights]
    if nights:
        span = nights[0] if len(nights) == 1 else f"{nights[0]} to {nights[-1]} ({len(nights)})"
        console.print(f"Ranked: night {span}. `loopassay rank` prints the list.")

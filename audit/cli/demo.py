"""``loopassay demo``: an invented site laid down and audited, its list printed, what to open next.

The demonstration has its own clock: it stands an hour after the cut-off of the record's last night,
so that the record is neither in the future nor long past.
"""

from __future__ import annotations

import argparse
import json
import os
import shlex
import shutil
import sys
from datetime import UTC, date, datetime, time, timedelta
from importlib import import_module
from pathlib import Path

from rich.console import Console

from audit import nightly, reports
from audit.cli import screen
from audit.cli.print_ranking import print_ranking
from audit.cli.print_run import REFUSED, exit_code
from audit.errors import AuditError
from audit.reports.contract import Json
from audit.run_report import Progress, RunReport
from audit.site import Site, open_site
from audit.store import open_store

NIGHTS = 8
TRUTH = "truth.json"
NAME = "loopassay"


class DemoRefused(AuditError):
    """The demonstration would overwrite something."""


def demo(words: argparse.Namespace) -> int:
    """Lay the site down (or take the one that is there), audit it, print the list.

    Exit code 0, or 3 where an export was refused; a quiet tag is part of the demonstration.
    """
    folder: Path = words.folder
    with screen.progress() as progress:
        if _looked_at(folder, words.loops, words.days):
            screen.messages().print(f"The demonstration site in {folder} is there already.")
        else:
            _lay_down(folder, words.loops, words.days, progress)
        site = open_site(folder, {})
        report, found = _audit(site, folder, words.workers, progress)
    if words.json:
        screen.print_json(found)
    else:
        console = screen.results()
        print_ranking(console, found)
        _print_next(console, folder, found)
    return REFUSED if exit_code(report) == REFUSED else 0


def _looked_at(folder: Path, loops: int, days: int) -> bool:
    """As ``_is_there``, for a folder that may be closed to this user, or damaged."""
    try:
        return _is_there(folder, loops, days)
    except (OSError, ValueError, KeyError, TypeError) as failure:
        raise DemoRefused(
            f"{folder} cannot be read as a demonstration of loopassay: {failure}",
            "name another folder, or remove it",
        ) from failure


def _is_there(folder: Path, loops: int, days: int) -> bool:
    """Whether the folder holds this very demonstration. Raises DemoRefused for anything else."""
    if not folder.exists() or (folder.is_dir() and not any(folder.iterdir())):
        return False
    remedy = "name another folder, or remove it"
    if not folder.is_dir() or not (folder / TRUTH).is_file():
        raise DemoRefused(f"{folder} is not empty and no demonstration of loopassay", remedy)
    truth = _truth(folder)
    first, last = (date.fromisoformat(truth[key]) for key in ("first_day", "last_day"))
    held = len(truth["loops"]), (last - first).days + 1
    if held != (loops, days):
        raise DemoRefused(
            f"{folder} holds a demonstration of {held[0]} loops and {held[1]} days", remedy
        )
    return True


def _truth(folder: Path) -> Json:
    found: Json = json.loads((folder / TRUTH).read_text(encoding="utf-8"))
    return found


def _lay_down(folder: Path, loops: int, days: int, progress: Progress) -> None:
    # By name: the package is mapped in at build, where a type checker does not follow.
    demo_site = import_module("audit.demo_site")
    try:
        demo_site.lay_down(
            folder,
            loops=loops,
            days=days,
            progress=lambda done, total: progress("simulating the plant", done, total),
        )
    except OSError as failure:
        raise DemoRefused(
            f"the demonstration site cannot be written to {folder}: {failure}",
            "name a folder that can be written",
        ) from failure


def _audit(
    site: Site, folder: Path, workers: int | None, progress: Progress
) -> tuple[RunReport, Json]:
    """Audit the record with a list for each of its last nights; the newest list."""
    last_day = date.fromisoformat(_truth(folder)["last_day"])
    end = datetime.combine(last_day + timedelta(days=1), time(), UTC)
    last = site.config.night_after(end - timedelta(microseconds=1))
    with open_store(site.config.store_url) as store:
        store.upgrade()
        report = nightly.run(
            site,
            store,
            now=site.config.cutoff(last) + timedelta(hours=1),
            nights=(last - timedelta(days=NIGHTS - 1), last),
            cores=workers,
            progress=progress,
        )
        return report, reports.ranking(store, site)


def called_as() -> str:
    """The command's own name where a shell would find it, else the path it was called by."""
    called = sys.argv[0]
    if Path(called).name != NAME or shutil.which(NAME):
        return NAME
    return os.path.relpath(called)


def _print_next(console: Console, folder: Path, found: Json) -> None:
    """What to open next, in commands that can be copied."""
    place, program = shlex.quote(str(folder)), shlex.quote(called_as())
    worst = found["loops"][0]["tag"]
    console.print()
    console.print("This plant is invented. What to open next:")
    for command, what in (
        (f"{program} history {worst} --config {place}", "why the first loop is the first"),
        (f"{program} rank --all --config {place}", "every loop with every reason"),
        (f"{program} store status --config {place}", "what became of every cell of the exports"),
        (f"{program} check --config {place}", "whether the site's files are right"),
        (str(folder / TRUTH), "what was really done to each loop, and when"),
        (str(folder / "site.toml"), "the settings; loops.csv and specs.csv lie beside it"),
    ):
        console.print(f"  {command}\n      {what}", soft_wrap=True)

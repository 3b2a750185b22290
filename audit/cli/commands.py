"""The commands: each takes the parsed words of the command line and returns an exit code."""

from __future__ import annotations

import argparse
import os
import sys
from collections.abc import Callable, Mapping
from datetime import UTC, date, datetime, timedelta

from audit import check, config, reports
from audit.cli import screen
from audit.cli.arguments import CommandWrong
from audit.cli.print_check import findings_json, print_findings
from audit.cli.print_history import print_history
from audit.cli.print_pruning import print_pruning, pruning_json
from audit.cli.print_ranking import print_ranking
from audit.cli.print_run import exit_code, print_report, report_json
from audit.cli.print_store import print_status
from audit.register import Register
from audit.reports.contract import Json
from audit.site import Site, open_site
from audit.store import open_store
from audit.store.dump import dump

OLD_LIST = timedelta(days=2)


def run(words: argparse.Namespace) -> int:
    """Carry out one command. Raises AuditError for what a person has to put right."""
    name = words.command if words.command != "store" else f"store {words.action}"
    return COMMANDS[name](words)


# What measures takes a second to import, and those who only read the list need not wait for it:
# the commands that audit import it themselves.


def _demo(words: argparse.Namespace) -> int:
    from audit.cli.demo import demo

    return demo(words)


def _nightly(words: argparse.Namespace) -> int:
    from audit import nightly

    nights = _nights(words.first, words.last)
    site = open_site(words.config, os.environ)
    with open_store(site.config.store_url) as store, screen.progress() as progress:
        report = nightly.run(
            site,
            store,
            now=datetime.now(UTC),
            nights=nights,
            accept_older=words.accept_older,
            cores=words.workers,
            progress=progress,
        )
    if words.json:
        screen.print_json(report_json(report))
    else:
        print_report(screen.results(), report)
    return exit_code(report)


def _nights(first: date | None, last: date | None) -> tuple[date, date] | None:
    if first is None and last is None:
        return None
    if first is None or last is None:
        raise CommandWrong("loopassay nightly: --from and --to go together", "give both nights")
    if last < first:
        raise CommandWrong(
            f"loopassay nightly: --from {first} is after --to {last}",
            "give the earlier night first",
        )
    return first, last


def _rank(words: argparse.Namespace) -> int:
    site = _reading(words)
    with open_store(site.config.store_url) as store:
        found = reports.ranking(store, site, words.night, words.as_published)
    if words.night is None:
        _warn_if_old(found)
    if words.json:
        screen.print_json(found)
    else:
        print_ranking(screen.results(), found, words.all)
    return 0


def _warn_if_old(found: Json) -> None:
    """An old list is not a quiet plant: said on standard error, beside the list."""
    age = datetime.now(UTC) - datetime.fromisoformat(found["cutoff"])
    if age > OLD_LIST:
        screen.messages().print(
            f"The newest list is {age.days} days old: no newer night has been audited, or no newer "
            "export has come."
        )


def _history(words: argparse.Namespace) -> int:
    if words.since and words.until and words.until < words.since:
        raise CommandWrong(
            f"loopassay history: --since {words.since} is after --until {words.until}",
            "give the earlier day first",
        )
    site = _reading(words)
    with open_store(site.config.store_url) as store:
        found = reports.history(store, site, words.tag, words.since, words.until)
    if words.json:
        screen.print_json(found)
    else:
        print_history(screen.results(), found, words.all)
    return 0


def _check(words: argparse.Namespace) -> int:
    with screen.progress() as progress:
        found = check.look(words.config, os.environ, progress)
    if words.json:
        screen.print_json(findings_json(found))
    else:
        print_findings(screen.results(), found)
    return 2 if found.faults else 0


def _store_upgrade(words: argparse.Namespace) -> int:
    with open_store(_reading(words).config.store_url) as store:
        before = store.schema().current
        store.upgrade()
        after = store.schema().current
    told = "already at" if before == after else "upgraded to"
    screen.results().print(f"The store is {told} schema {after}.")
    return 0


def _store_status(words: argparse.Namespace) -> int:
    config = _reading(words).config
    with open_store(config.store_url) as store:
        found = reports.status(store, config.exports, datetime.now(UTC))
    if words.json:
        screen.print_json(found)
    else:
        print_status(screen.results(), found, words.all)
    return 0


def _store_dump(words: argparse.Namespace) -> int:
    with open_store(_reading(words).config.store_url) as store:
        store.require_current()
        with store.read() as session:
            for line in dump(session):
                sys.stdout.write(line + "\n")
    return 0


def _store_prune(words: argparse.Namespace) -> int:
    from audit import retention

    if words.dry_run and words.vacuum:
        raise CommandWrong(
            "loopassay store prune: --dry-run and --vacuum do not go together", "give one of them"
        )
    site = _reading(words)
    now = datetime.now(UTC)
    today = now.astimezone(site.config.timezone).date()
    asked = words.older_than
    with open_store(site.config.store_url) as store, screen.progress() as progress:
        done = retention.prune(
            site,
            store,
            [retention.Kind(kind) for kind in words.kinds],
            asked if isinstance(asked, date) else asked.before(today),
            now=now,
            dry_run=words.dry_run,
            make_smaller=words.vacuum,
            progress=progress,
        )
    if words.json:
        screen.print_json(pruning_json(done))
    else:
        print_pruning(screen.results(), done)
    return 0


def _reading(words: argparse.Namespace) -> Site:
    """The site for commands that only read the store: a register that is just being edited, and
    may be wrong, does not keep anybody from reading the list."""
    return Site(config.load(words.config, os.environ), Register((), (), "", ""))


COMMANDS: Mapping[str, Callable[[argparse.Namespace], int]] = {
    "demo": _demo,
    "nightly": _nightly,
    "rank": _rank,
    "history": _history,
    "check": _check,
    "store upgrade": _store_upgrade,
    "store status": _store_status,
    "store dump": _store_dump,
    "store prune": _store_prune,
}

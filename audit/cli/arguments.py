"""The words of the command line -> an ``argparse`` namespace; nothing is done here.

A wrong command raises ``CommandWrong`` with one sentence instead of printing a page and leaving.
"""

from __future__ import annotations

import argparse
from collections.abc import Callable
from datetime import date
from pathlib import Path
from typing import TYPE_CHECKING, NoReturn

from audit import __version__
from audit.cli.ages import Age, age
from audit.errors import AuditError

DEMO_FOLDER = Path("loopassay-demo")
DEMO_LOOPS = 60
DEMO_DAYS = 90

PRUNED = ("superseded", "steps", "samples", "edges", "revisions", "lists", "exports", "runs")
"""What can be pruned, as the store calls it."""

YEARS = range(1970, 2200)
"""Years a date may be in: those of the stamps an export may hold."""

EXIT_CODES = (
    "Exit codes: 0 all well; 1 an unexpected failure; 2 the command or the site's files are wrong; "
    "3 the audit ran, but a file, or more than 1 % of the cells, was refused; 4 it ran, but there "
    "was nothing new to read; 5 it ran, but the feed is quiet."
)


class CommandWrong(AuditError):
    """The command line cannot be understood."""


class Parser(argparse.ArgumentParser):
    """An argument parser that says what is wrong in one sentence."""

    def error(self, message: str) -> NoReturn:
        raise CommandWrong(f"{self.prog}: {message}", f"`{self.prog} --help` shows what there is")


if TYPE_CHECKING:
    Commands = argparse._SubParsersAction[Parser]


def parser() -> Parser:
    """The whole command line of ``loopassay``."""
    top = Parser(
        prog="loopassay",
        description="Tells, every night, which control loops no longer do what they were "
        "commissioned to do. It reads historian exports and changes nothing in the plant.",
        epilog=EXIT_CODES,
        allow_abbrev=False,
    )
    top.add_argument("--version", action="version", version=f"loopassay {__version__}")
    commands = top.add_subparsers(dest="command", metavar="COMMAND", required=True)
    _add_demo(commands)
    for add in (_add_nightly, _add_rank, _add_history, _add_check, _add_store):
        add(commands)
    return top


def _command(
    commands: Commands, name: str, summary: str, config: bool = True, json: bool = True
) -> Parser:
    """A command with the options that commands share."""
    command = commands.add_parser(
        name, help=summary, description=summary, epilog=EXIT_CODES, allow_abbrev=False
    )
    if config:
        command.add_argument(
            "--config",
            type=Path,
            default=Path("site.toml"),
            metavar="PATH",
            help="the site's site.toml, or the folder it is in (default: site.toml here)",
        )
    if json:
        command.add_argument("--json", action="store_true", help="print JSON instead of a table")
    command.add_argument(
        "--debug", action="store_true", help="show the details of an unexpected failure"
    )
    return command


def _add_demo(commands: Commands) -> None:
    demo = _command(
        commands,
        "demo",
        "Lay down the demonstration site, audit it and print the ranked list.",
        config=False,
    )
    demo.add_argument(
        "folder",
        nargs="?",
        type=Path,
        default=DEMO_FOLDER,
        metavar="DIR",
        help=f"where to (default: ./{DEMO_FOLDER}); empty, or an earlier demonstration",
    )
    demo.add_argument(
        "--loops",
        type=_whole("loops", 1, DEMO_LOOPS),
        default=DEMO_LOOPS,
        metavar="N",
        help=f"how many loops, 1 to {DEMO_LOOPS} (default: {DEMO_LOOPS})",
    )
    demo.add_argument(
        "--days",
        type=_whole("days", 2, 1000),
        default=DEMO_DAYS,
        metavar="N",
        help=f"how many days of record, 2 or more (default: {DEMO_DAYS})",
    )
    _add_workers(demo)


def _add_nightly(commands: Commands) -> None:
    nightly = _command(
        commands, "nightly", "Audit once: read what is new, find, measure, judge and rank."
    )
    nightly.add_argument(
        "--from", dest="first", type=_day, metavar="DATE", help="first night to rank, with --to"
    )
    nightly.add_argument(
        "--to", dest="last", type=_day, metavar="DATE", help="last night to rank, inclusive"
    )
    nightly.add_argument(
        "--accept-older",
        action="store_true",
        help="take site files whose content the store has already seen replaced",
    )
    _add_workers(nightly)


def _add_workers(command: Parser) -> None:
    command.add_argument(
        "--workers",
        type=_whole("workers", 1, 1024),
        metavar="N",
        help="processes to measure in (default: one for each core)",
    )


def _add_rank(commands: Commands) -> None:
    rank = _command(commands, "rank", "Print the ranked loop list of a night.")
    rank.add_argument("--night", type=_day, metavar="DATE", help="which night (default: newest)")
    rank.add_argument(
        "--as-published",
        action="store_true",
        help="the night's first list, before late data revised it",
    )
    rank.add_argument(
        "--all", action="store_true", help="show every reason, and the loops in spec one by one"
    )


def _add_history(commands: Commands) -> None:
    history = _command(
        commands, "history", "Print one loop's specs, standing, steps and measurements."
    )
    history.add_argument("tag", metavar="TAG", help="the loop's tag, such as FIC-2101")
    history.add_argument("--since", type=_day, metavar="DATE", help="first local day shown")
    history.add_argument("--until", type=_day, metavar="DATE", help="last local day shown")
    history.add_argument(
        "--all", action="store_true", help="show every step, not only the newest ones"
    )


def _add_check(commands: Commands) -> None:
    _command(
        commands,
        "check",
        "Read the site's files and the first rows of its exports; say all that is wrong.",
    )


def _add_store(commands: Commands) -> None:
    summary = "Look after the store."
    store = commands.add_parser("store", help=summary, description=summary, allow_abbrev=False)
    actions = store.add_subparsers(dest="action", metavar="ACTION", required=True)
    _command(actions, "upgrade", "Bring the store to this program's schema.", json=False)
    status = _command(actions, "status", "Say what the store holds, and where every cell went.")
    status.add_argument("--all", action="store_true", help="show every export file")
    _command(actions, "dump", "Print the canonical content as JSON lines.", json=False)
    _add_prune(actions)


def _add_prune(actions: Commands) -> None:
    prune = _command(actions, "prune", "Take out of the store what is old, by age and kind.")
    prune.add_argument(
        "kinds", nargs="+", choices=PRUNED, metavar="KIND", help=f"what: {', '.join(PRUNED)}"
    )
    prune.add_argument(
        "--older-than",
        required=True,
        type=_age,
        metavar="AGE",
        help="how old it has to be: days, months or years such as 90d, 18m, 2y, or a date",
    )
    prune.add_argument(
        "--dry-run", action="store_true", help="only say what would go, and how large it is"
    )
    prune.add_argument(
        "--vacuum",
        action="store_true",
        help="make the file of an SQLite store smaller afterwards (needs twice its size free)",
    )


def _day(text: str) -> date:
    try:
        day = date.fromisoformat(text)
    except ValueError:
        raise argparse.ArgumentTypeError(
            f"'{text}' is not a date; write it as 2026-03-14"
        ) from None
    if day.year not in YEARS:
        raise argparse.ArgumentTypeError(
            f"'{text}' lies outside the years {YEARS[0]} to {YEARS[-1]}"
        )
    return day


def _age(text: str) -> Age | date:
    found = age(text)
    if found is not None:
        return found
    try:
        return _day(text)
    except argparse.ArgumentTypeError:
        raise argparse.ArgumentTypeError(
            f"'{text}' is no age; write 90d, 18m or 2y, or a date as 2026-03-14"
        ) from None


def _whole(what: str, least: int, most: int) -> Callable[[str], int]:
    def read(text: str) -> int:
        if not text.isdecimal() or not least <= int(text) <= most:
            raise argparse.ArgumentTypeError(
                f"'{text}' is not a number of {what}; give {least} to {most}"
            )
        return int(text)

    return read

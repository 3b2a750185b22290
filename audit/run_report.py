"""What one audit did, counted while it runs and told at its end."""

from __future__ import annotations

from collections import Counter
from collections.abc import Iterable, Mapping
from dataclasses import dataclass, field, fields
from datetime import date
from typing import Protocol

from audit.errors import Fault
from audit.records import CellAccount, ExportRead, ExportSource, instant
from audit.store.writes import LoopRows, SavedLoop


class Progress(Protocol):
    """Told how far a stage has come; ``total`` may grow."""

    def __call__(self, stage: str, done: int, total: int) -> None: ...


@dataclass(frozen=True)
class RunReport:
    """The outcome of one audit.

    ``account``: cells of all files read in this run, summed. ``files_refused``: one fault a file.
    ``refused_share``: cells refused, of the cells read. ``quiet``: what is missing from the feed.
    ``faults``: examples of refused cells.
    """

    nights: tuple[date, ...]
    files_new: int
    files_skipped: int
    files_refused: tuple[Fault, ...]
    account: CellAccount
    steps_new: int
    steps_changed: int
    steps_withdrawn: int
    quiet: tuple[str, ...]
    faults: tuple[Fault, ...]

    @property
    def refused_share(self) -> float:
        refused = sum(self.account.refused.values())
        return refused / self.account.read if self.account.read else 0.0


@dataclass
class Tally:
    """Counts gathered while an audit runs."""

    files_new: int = 0
    files_skipped: int = 0
    files_refused: list[Fault] = field(default_factory=list)
    account: CellAccount = field(default_factory=CellAccount)
    steps: Counter[str] = field(default_factory=Counter)
    faults: list[Fault] = field(default_factory=list)
    nights: list[date] = field(default_factory=list)
    empty_sources: list[ExportSource] = field(default_factory=list)
    quiet: tuple[str, ...] = ()
    earliest_changed_us: int | None = None

    def read(self, account: CellAccount, faults: Iterable[Fault]) -> None:
        """One file was read."""
        self.files_new += 1
        self.account = add(self.account, account)
        self.faults.extend(faults)

    def ahead(self, path: str, read: ExportRead, now_us: int) -> None:
        """Samples of a file that are stamped after the time of the audit."""
        found = [column.good_until(now_us)[1] for column in read.columns.values()]
        if sum(found):
            newest = (
                ""
                if read.last_us is None
                else f", up to {instant(read.last_us):%Y-%m-%d %H:%M} UTC"
            )
            problem = f"{sum(found)} samples are stamped in the future{newest}"
            remedy = "see to the clock of their source; the exports stay taken as they are"
            self.faults.append(Fault(path, problem, remedy))

    def missed(self, gone: Mapping[str, frozenset[str]]) -> None:
        """Exports that were to be read again for new tags, and are no longer there."""
        if gone:
            first = min(gone)
            others = f" (and {len(gone) - 1} more)" if len(gone) > 1 else ""
            problem = (
                f"it is no longer there{others}, so what it held of {len(gone[first])} tags that "
                "the register names since is not known"
            )
            self.faults.append(Fault(first, problem, "put it back if these days matter"))

    def no_files(self) -> tuple[str, ...]:
        """Sentences on kinds of export of which no file is found."""
        return tuple(
            f"No file is found for [[exports]] '{source.name}' ({source.files}): is its folder "
            "there, and filled?"
            for source in self.empty_sources
        )

    def not_kept(self, paths: Iterable[str]) -> None:
        """Exports hold again somewhere, and are no longer there to be read again."""
        self.faults.extend(
            Fault(
                path,
                "it holds again where a later export has gone, but it is no longer there: "
                "its samples of that time are not kept",
                "put the file back where it was if these days matter",
            )
            for path in paths
        )

    def saved(self, rows: LoopRows, saved: SavedLoop) -> None:
        """One loop was written."""
        self.steps["new"] += saved.new
        self.steps["changed"] += saved.changed
        self.steps["withdrawn"] += saved.withdrawn
        if saved.new + saved.changed + saved.withdrawn:
            known = [] if self.earliest_changed_us is None else [self.earliest_changed_us]
            self.earliest_changed_us = min([*rows.ends_us, *rows.withdrawn, *known])

    def counts(self) -> Mapping[str, int]:
        """For the run's record in the store."""
        return {
            "files_new": self.files_new,
            "files_skipped": self.files_skipped,
            "files_refused": len(self.files_refused),
            "cells_read": self.account.read,
            "steps_new": self.steps["new"],
            "steps_changed": self.steps["changed"],
            "steps_withdrawn": self.steps["withdrawn"],
            "nights": len(self.nights),
        }

    def report(self) -> RunReport:
        return RunReport(
            nights=tuple(self.nights),
            files_new=self.files_new,
            files_skipped=self.files_skipped,
            files_refused=tuple(self.files_refused),
            account=self.account,
            steps_new=self.steps["new"],
            steps_changed=self.steps["changed"],
            steps_withdrawn=self.steps["withdrawn"],
            quiet=self.quiet,
            faults=tuple(self.faults),
        )


def add(one: CellAccount, other: CellAccount) -> CellAccount:
    """The account of two files together."""
    sums = {
        item.name: getattr(one, item.name) + getattr(other, item.name)
        for item in fields(CellAccount)
        if item.name != "refused"
    }
    refused = Counter(one.refused) + Counter(other.refused)
    return CellAccount(**sums, refused=dict(sorted(refused.items())))

"""What the store says about its own rows, beside the records of ``audit.records``."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass
from datetime import date, datetime
from typing import NamedTuple

from audit.records import CellAccount, ChangeKind, Loop


@dataclass(frozen=True)
class Schema:
    """The schema's revision as it stands (None: no schema) and as this program needs it."""

    current: str | None
    head: str
    known: bool = True
    """Whether this program knows the current revision; one it does not know is newer."""


@dataclass(frozen=True)
class Lease:
    """The right to write, held by one run at a time. A higher ``fence`` shuts out all lower."""

    fence: int
    holder: str
    ttl_s: float


@dataclass(frozen=True)
class RegisterChanges:
    """How many loops and specs a reading of the site's files changed."""

    loops_new: int = 0
    loops_changed: int = 0
    loops_retired: int = 0
    loops_back: int = 0
    specs_new: int = 0
    specs_withdrawn: int = 0


@dataclass(frozen=True)
class SavedLoop:
    """How many steps one audit of a loop added, measured anew, or withdrew.

    ``closed``: found in time of which something was pruned, so that what is stored there stays.
    """

    new: int = 0
    changed: int = 0
    withdrawn: int = 0
    closed: int = 0


@dataclass(frozen=True)
class StoredLoop:
    """A loop as the register has it, or had it before it was retired."""

    id: int
    loop: Loop
    version: int
    entered_at: datetime
    retired_at: datetime | None = None


@dataclass(frozen=True)
class SeenExport:
    """The current content of one export path. ``state``: reading, taken or refused."""

    id: int
    source: str
    path: str
    size: int
    stamp: str
    revision: int
    content_hash: str | None
    state: str
    reason: str | None
    first_us: int | None
    last_us: int | None
    newest_good_us: int | None
    future_stamps: int
    account: CellAccount
    read_at: datetime
    asked_set_id: int | None = None


@dataclass(frozen=True)
class StoredStep:
    """A current step by its instant, and how far the samples it depends on reach (None: open)."""

    at_us: int
    depends_from_us: int | None
    depends_to_us: int | None
    window_end_us: int


class NewestStep(NamedTuple):
    """The newest current step of a loop: when, whether usable, what kind of change."""

    at_us: int
    usable: bool
    kind: ChangeKind


@dataclass(frozen=True)
class NightInfo:
    """One revision of one night's list; ``revisions``: how many there are."""

    night: date
    revision: int
    revisions: int
    cutoff: datetime
    computed_at: datetime


@dataclass(frozen=True)
class RunInfo:
    """One line of the run log. ``ended_at`` None: still running, or killed."""

    id: int
    kind: str
    started_at: datetime
    ended_at: datetime | None
    state: str
    counts: Mapping[str, int]
    error: str | None

"""What a site lets go of its store by age: counted first if asked, then taken out by portions.

In: the kinds asked for and the local day before which they may go. Out: what went, or would go, of
each. Nothing the newest night rests on goes: the steps of its period keep their samples, and of a
loop's steps its baseline stays. Each portion is a short transaction of its own, so that nobody who
reads has to wait and one who breaks it off loses nothing but the rest.
"""

from __future__ import annotations

import os
import socket
import time as clocks
from collections.abc import Callable, Iterator, Sequence
from contextlib import contextmanager
from dataclasses import dataclass, field
from datetime import UTC, date, datetime, time, timedelta
from functools import lru_cache

from audit.errors import AuditError, StoreUnready
from audit.records import PastStep, Quantity
from audit.run_report import Progress
from audit.site import Site
from audit.store import Lease, Store, queries, take_lease, writes
from audit.store.prune import Counts, Kind, Scope, cut_some, found, items
from audit.store.vacuum import vacuum
from audit.trend.baseline import FULL
from audit.trend.series import LOOKED_AT

__all__ = ["Counts", "Kind", "Pruned", "Pruning", "baseline_steps", "prune"]

STEPS_AT_LEAST_DAYS = 365
"""Measured steps are a loop's history: none younger than a year goes."""
PREFIX = 2 * FULL
"""So many usable steps from the first on stay, with all between them: what a baseline is made of,
and whether a quantity was known often enough for one, is told from them."""

RESTING = (Kind.STEPS, Kind.SAMPLES, Kind.EDGES)
"""Kinds of which a standing, or what late data would change of it, is made."""


@dataclass(frozen=True)
class Pruned:
    """What went of one kind: everything before the local day ``before``; None: nothing can, for no
    night has been ranked yet."""

    kind: Kind
    before: date | None
    counts: Counts


@dataclass(frozen=True)
class Pruning:
    """The outcome. ``vacuumed``: whether the free space went back to the disk; None: not asked."""

    kinds: tuple[Pruned, ...]
    dry_run: bool
    vacuumed: bool | None = None


@dataclass
class _Work:
    """What one pruning works with, and what it has taken out so far."""

    site: Site
    store: Store
    scopes: Sequence[Scope]
    now: datetime
    progress: Progress
    started: float = field(default_factory=clocks.monotonic)
    done: dict[Kind, Counts] = field(default_factory=dict)

    def clock(self) -> datetime:
        return self.now + timedelta(seconds=clocks.monotonic() - self.started)

    def counts(self) -> dict[str, int]:
        """For the run's line in the store."""
        rows = {kind.value: counts.rows for kind, counts in self.done.items()}
        return rows | {"bytes_freed": sum(counts.size_bytes for counts in self.done.values())}


def prune(
    site: Site,
    store: Store,
    kinds: Sequence[Kind],
    before: date,
    *,
    now: datetime,
    dry_run: bool = False,
    make_smaller: bool = False,
    progress: Progress | None = None,
) -> Pruning:
    """Takes out of the store what is older than ``before``, a day of the site's time zone.

    The age is that of the event for steps, samples, edges and lists, and of the replacement or the
    run for the others. ``dry_run`` only counts. ``make_smaller`` gives an SQLite file's free space
    back to the disk afterwards. Raises AuditError for a day to come or, for steps, one less than a
    year ago; StoreUnready where the store is not at this program's schema, belongs to another site
    or is held by another run.
    """
    _check_age(kinds, before, now.astimezone(site.config.timezone).date())
    store.require_current()
    with store.read() as session:
        held = queries.site_name(session)
    if held not in (None, site.config.name):
        raise StoreUnready(
            f"the store holds the site {held!r}, not {site.config.name!r}",
            "name the site whose store it is",
        )
    scopes = _scopes(site, store, kinds, before)
    work = _Work(site, store, scopes, now, progress or _silent)
    if dry_run:
        _look(work)
        return Pruning(_report(work, kinds), True)
    with take_lease(store, f"{socket.gethostname()} process {os.getpid()}, store prune") as lease:
        with _logged(work, lease):
            _take_out(work, lease)
        vacuumed = vacuum(store) if make_smaller else None
    return Pruning(_report(work, kinds), False, vacuumed)


def _silent(stage: str, done: int, total: int) -> None:
    """Progress nobody watches."""


def _check_age(kinds: Sequence[Kind], before: date, today: date) -> None:
    if before > today:
        raise AuditError(f"{before} is still to come", "give an age such as 2y, or a day gone by")
    if Kind.STEPS in kinds and before > today - timedelta(days=STEPS_AT_LEAST_DAYS):
        raise AuditError(
            "measured setpoint changes are the history a loop is compared with: none younger than "
            "a year is pruned",
            "give steps an age of their own, of a year or more",
        )


def _all_kinds(kinds: Sequence[Kind]) -> list[Kind]:
    """With the edges, which nothing uses in closed time, and without what another kind holds."""
    wanted = set(kinds)
    if wanted & {Kind.STEPS, Kind.SAMPLES}:
        wanted.add(Kind.EDGES)
    if Kind.LISTS in wanted:
        wanted.discard(Kind.REVISIONS)
    return [kind for kind in Kind if kind in wanted]


def _scopes(site: Site, store: Store, kinds: Sequence[Kind], before: date) -> list[Scope]:
    """Until when each kind goes; kinds of which nothing can go are left out."""
    zone = site.config.timezone
    with store.read() as session:
        nights = queries.nights(session)
    scopes = []
    for kind in _all_kinds(kinds):
        day = before
        if kind in RESTING:
            if not nights:
                continue
            period = timedelta(days=site.config.standing.days + 1)
            day = min(before, nights[-1].cutoff.astimezone(zone).date() - period)
        instant = datetime.combine(day, time(), zone).astimezone(UTC)
        scopes.append(Scope(kind, instant, day, _staying(store)))
    return scopes


def _staying(store: Store) -> Callable[[str], set[int]]:
    """What of a loop stays; remembered for the loop that is being worked on."""

    @lru_cache(maxsize=1)
    def of(tag: str) -> set[int]:
        with store.read() as session:
            return baseline_steps(queries.past_steps(session, tag))

    return of


def baseline_steps(steps: Sequence[PastStep]) -> set[int]:
    """Instants of the steps a loop's baselines rest on: the first PREFIX usable ones with all
    between them, and the first FULL in which a quantity is known, of the settling time in each band
    by itself. ``steps`` by time."""
    stays: set[int] = set()
    usable = 0
    known: dict[tuple[Quantity, float], int] = {}
    for step in steps:
        if usable < PREFIX:
            stays.add(step.at_us)
        if not step.usable:
            continue
        usable += 1
        for quantity in LOOKED_AT:
            measured = step.measured.get(quantity)
            if measured is None or not measured.known:
                continue
            key = (quantity, step.band_pct if quantity is Quantity.SETTLING_TIME else 0.0)
            known[key] = known.get(key, 0) + 1
            if known[key] <= FULL:
                stays.add(step.at_us)
    return stays


def _look(work: _Work) -> None:
    """Counts what would go."""
    for scope in work.scopes:
        with work.store.read() as session:
            some = items(session, scope)
            for done, item in enumerate(some, start=1):
                _add(work, scope.kind, found(session, scope, item))
                work.progress(f"counting {scope.kind.value}", done, len(some))


def _take_out(work: _Work, lease: Lease) -> None:
    """Takes out kind by kind, each portion in a transaction of its own."""
    for scope in work.scopes:
        with work.store.read() as session:
            left = items(session, scope)[::-1]
        total = len(left)
        while left:
            with work.store.write(lease) as session:
                counts = cut_some(session, scope, left)
            _add(work, scope.kind, counts)
            work.progress(f"pruning {scope.kind.value}", total - len(left), total)


def _add(work: _Work, kind: Kind, counts: Counts) -> None:
    work.done[kind] = work.done.get(kind, Counts()).plus(counts)


def _report(work: _Work, kinds: Sequence[Kind]) -> tuple[Pruned, ...]:
    days = {scope.kind: scope.day for scope in work.scopes}
    return tuple(
        Pruned(kind, days.get(kind), work.done.get(kind, Counts())) for kind in _all_kinds(kinds)
    )


@contextmanager
def _logged(work: _Work, lease: Lease) -> Iterator[None]:
    """A line of the run log with what was taken out."""
    with work.store.write(lease) as session:
        run_id = writes.start_run(session, work.now, "prune")

    def end(state: str, error: str | None) -> None:
        with work.store.write(lease) as session:
            writes.end_run(session, run_id, work.clock(), state, work.counts(), error)

    try:
        yield
    except BaseException as failure:
        end("failed", failure.message if isinstance(failure, AuditError) else repr(failure))
        raise
    end("finished", None)

"""The nightly audit: from historian exports to the ranked list, in the order of the data.

Start reading at ``run``. Each loop's results are written in one short transaction; a file counts as
taken once all its loops are written, so that an audit that was cut off is completed by the next
one. Running it again on the same files changes nothing.
"""

from __future__ import annotations

import os
import socket
import time
from collections.abc import Iterator, Mapping, Sequence
from contextlib import contextmanager
from dataclasses import dataclass, field, replace
from datetime import date, datetime, timedelta

from audit import feed, intake
from audit.errors import AuditError, ExportRefused, Fault
from audit.gather import LoopContext, loop_work, standing_works
from audit.loopwork import LoopWork, audit_loop
from audit.ranking import order
from audit.records import CellAccount, Coverage, Loop, Standing, instant, to_us
from audit.run_report import Progress, RunReport, Tally
from audit.site import Site
from audit.standings import standings
from audit.store import Lease, Store, queries, take_lease, writes
from audit.weaving.precedence import FreshExport, FreshTag, settle
from audit.workers import Workers, workers


@dataclass(frozen=True)
class _Run:
    """What one audit works with."""

    site: Site
    store: Store
    lease: Lease
    pool: Workers
    now: datetime
    progress: Progress
    started: float = field(default_factory=time.monotonic)
    tally: Tally = field(default_factory=Tally)

    def clock(self) -> datetime:
        """The time now, counted on from the ``now`` the audit was given."""
        return self.now + timedelta(seconds=time.monotonic() - self.started)


def run(
    site: Site,
    store: Store,
    *,
    now: datetime,
    nights: tuple[date, date] | None = None,
    accept_older: bool = False,
    cores: int | None = None,
    progress: Progress | None = None,
) -> RunReport:
    """One audit: new exports in, setpoint changes found, measured, judged, the loops ranked.

    ``nights``: first and last night (inclusive) to publish a list for; None: the first cut-off
    after the newest good stamp. ``accept_older``: take site files the store has seen replaced.
    Raises StoreUnready where the store is not at this program's schema, belongs to another site or
    is held by another audit; AuditError for a night that has not begun.
    """
    _check_begun(site, nights, now)
    store.require_current()
    with take_lease(store, _holder()) as lease, workers(cores) as pool:
        audit = _Run(site, store, lease, pool, now, progress or _silent)
        with _logged(audit):
            _enter_register(audit, accept_older)
            _take_exports(audit)
            published = _publish(audit, _nights(audit, nights))
            asked = now if nights is None else min(now, site.config.cutoff(published[-1]))
            audit.tally.quiet = _quiet(audit, asked, published[-1])
        return audit.tally.report()


def _check_begun(site: Site, nights: tuple[date, date] | None, now: datetime) -> None:
    """A list of a later night would stand as the newest, over every true one to come."""
    newest = site.config.night_after(now)
    if nights is not None and nights[1] > newest:
        raise AuditError(
            f"the night {nights[1]} has not begun", f"the newest that can be ranked is {newest}"
        )


def _holder() -> str:
    return f"{socket.gethostname()} process {os.getpid()}"


def _silent(stage: str, done: int, total: int) -> None:
    """Progress nobody watches."""


@contextmanager
def _logged(audit: _Run) -> Iterator[None]:
    """Keep the run's record: begun, ended or failed, with its counts."""
    with audit.store.write(audit.lease) as session:
        writes.enter_site(session, audit.site.config.name)
        run_id = writes.start_run(session, audit.now, "nightly")
    try:
        yield
    except BaseException as failure:
        with audit.store.write(audit.lease) as session:
            counts = audit.tally.counts()
            why = failure.message if isinstance(failure, AuditError) else repr(failure)
            writes.end_run(session, run_id, audit.clock(), "failed", counts, why)
        raise
    with audit.store.write(audit.lease) as session:
        writes.end_run(session, run_id, audit.clock(), "finished", audit.tally.counts(), None)


def _enter_register(audit: _Run, accept_older: bool) -> None:
    """The register and the specs into the store, each changed row as a new version."""
    register = audit.site.register
    hashes = {
        "settings": audit.site.config.settings_hash,
        "loops": register.loops_hash,
        "specs": register.specs_hash,
    }
    with audit.store.write(audit.lease) as session:
        writes.enter_register(
            session, register.loops, register.specs, hashes, audit.now, accept_older
        )


def _take_exports(audit: _Run) -> None:
    """Read what is new, a batch of files at a time, and work each batch through all loops."""
    with audit.store.read() as session:
        seen = {
            export.path: (export.size, export.stamp)
            for export in queries.exports(session)
            if export.state != "reading"
        }
    found = intake.find(audit.site.config.exports, seen)
    audit.tally.files_skipped += found.known
    audit.tally.files_refused.extend(_fault(refused) for refused in found.refused)
    loops = audit.site.register.loops
    done = 0
    for batch in intake.batches(found.new, _wanted(loops), audit.pool):
        done += len(batch)
        audit.progress("reading exports", done, len(found.new))
        _take_batch(audit, batch)


def _wanted(loops: Sequence[Loop]) -> dict[str, bool]:
    """The historian tags the register names, and whether each is a mode tag."""
    wanted: dict[str, bool] = {}
    for loop in loops:
        for tag in (loop.pv, loop.sp, loop.output):
            if tag:
                wanted.setdefault(tag, False)
    return wanted | {loop.mode: True for loop in loops if loop.mode}


def _take_batch(audit: _Run, batch: Sequence[intake.ReadResult]) -> None:
    fresh = [FreshExport(r.file, r.read) for r in batch if r.read is not None]
    tags, accounts = settle(fresh, _stored_coverage(audit, fresh))
    ids = _begin(audit, batch, fresh, accounts)
    for result in audit.pool.map(audit_loop, _loop_works(audit, tags)):
        with audit.store.write(audit.lease) as session:
            audit.tally.saved(result, writes.save_loop(session, result, audit.now))
    with audit.store.write(audit.lease) as session:
        writes.finish_exports(session, ids, audit.now)


def _stored_coverage(audit: _Run, fresh: Sequence[FreshExport]) -> list[Coverage]:
    """What the store knows to cover the time of the fresh files, and what their paths covered."""
    paths = [export.file.path for export in fresh]
    firsts = [export.read.first_us for export in fresh if export.read.first_us is not None]
    lasts = [export.read.last_us for export in fresh if export.read.last_us is not None]
    with audit.store.read() as session:
        stored = queries.coverage_of_paths(session, paths)
        if firsts and lasts:
            around = queries.coverage(session, from_us=min(firsts), to_us=max(lasts))
            stored += [cover for cover in around if cover.path not in set(paths)]
    return stored


def _begin(
    audit: _Run,
    batch: Sequence[intake.ReadResult],
    fresh: Sequence[FreshExport],
    accounts: Sequence[CellAccount],
) -> list[int]:
    """Enter the batch's files: those read as begun, the others as refused."""
    with audit.store.write(audit.lease) as session:
        for result in batch:
            if result.refused is not None:
                audit.tally.files_refused.append(_fault(result.refused))
                writes.refuse_export(session, result.file, result.refused.message, audit.now)
        ids = []
        for export, account in zip(fresh, accounts, strict=True):
            read = replace(export.read, account=account)
            audit.tally.read(account, read.faults)
            ids.append(writes.begin_export(session, export.file, read, audit.now))
    return ids


def _fault(refused: ExportRefused) -> Fault:
    return Fault(refused.path, refused.reason, refused.remedy, refused.line)


def _context(audit: _Run) -> LoopContext:
    with audit.store.read() as session:
        return LoopContext(audit.site.config, queries.specs(session), queries.tag_sources(session))


def _loop_works(audit: _Run, tags: Mapping[str, FreshTag]) -> Iterator[LoopWork]:
    context = _context(audit)
    loops = audit.site.register.loops
    for done, loop in enumerate(loops, start=1):
        work = loop_work(audit.store, context, loop, tags)
        audit.progress("measuring loops", done, len(loops))
        if work is not None:
            yield work


def _nights(audit: _Run, asked: tuple[date, date] | None) -> list[date]:
    """The nights to publish: those asked for or the newest, and published ones that changed."""
    config = audit.site.config
    with audit.store.read() as session:
        newest_us = queries.newest_stamp(session, to_us(audit.now))
        published = queries.nights(session)
    if asked is not None:
        first, last = asked
        wanted = {first + timedelta(days=i) for i in range((last - first).days + 1)}
    elif newest_us is not None:
        wanted = {config.night_after(instant(newest_us))}
    else:
        wanted = {config.night_after(audit.now - timedelta(days=1))}
    changed_us = audit.tally.earliest_changed_us
    if changed_us is not None:
        wanted |= {info.night for info in published if to_us(info.cutoff) > changed_us}
    return sorted(wanted)


def _publish(audit: _Run, nights: Sequence[date]) -> Sequence[date]:
    """Rank all loops for each night and keep the list, beside an earlier one of that night."""
    loops = audit.site.register.loops
    cutoffs = [(night, audit.site.config.cutoff(night)) for night in nights]
    lists: list[list[Standing]] = [[] for _ in nights]
    works = standing_works(audit.store, _context(audit), loops, cutoffs)
    for done, own in enumerate(audit.pool.map(standings, works), start=1):
        audit.progress("ranking loops", done, len(loops))
        for list_, standing in zip(lists, own, strict=True):
            list_.append(standing)
    for (night, cutoff), list_ in zip(cutoffs, lists, strict=True):
        with audit.store.write(audit.lease) as session:
            writes.save_night(session, night, cutoff, order(list_), audit.now)
        audit.tally.nights.append(night)
    return nights


def _quiet(audit: _Run, asked: datetime, night: date) -> tuple[str, ...]:
    """What is missing from the feed, asked at a time; the last days are those before the night."""
    loops = audit.site.register.loops
    with audit.store.read() as session:
        newest_us = queries.newest_stamp(session, to_us(asked))
        named = queries.tag_sources(session)
        days = queries.day_records_many(
            session, [loop.tag for loop in loops], night - timedelta(days=2), night
        )
    newest = None if newest_us is None else instant(newest_us)
    return feed.quiet(loops, named.keys(), newest, asked, days)

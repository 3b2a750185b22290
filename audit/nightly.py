"""The nightly audit: from historian exports to the ranked list, in the order of the data.

Start reading at ``run``. Each loop's results are written in one short transaction; a file counts as
taken once all its loops are written, so that an audit that was cut off is completed by the next
one. Running it again on the same files changes nothing.
"""

from __future__ import annotations

import os
import socket
import time
from collections.abc import Collection, Iterator, Mapping, Sequence
from contextlib import contextmanager, suppress
from dataclasses import dataclass, field, replace
from datetime import date, datetime, timedelta
from pathlib import Path

from audit import feed, intake
from audit.errors import AuditError, ExportRefused, Fault, StoreUnready
from audit.feed_facts import feed_facts
from audit.gather import LoopContext, loop_work, spans_at_once, standing_works
from audit.loopwork import LoopWork, audit_loop
from audit.ranking import order
from audit.records import CellAccount, Coverage, Loop, Standing, instant, to_us
from audit.run_report import Progress, RunReport, Tally
from audit.site import Site
from audit.standings import standings
from audit.store import Lease, Store, queries, take_lease, writes
from audit.weaving.precedence import FreshExport, FreshTag, Settled, settle
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
    scratch: Path
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
    is held by another audit; AuditError for a night that has not begun. ``cores`` None: as the site
    has it.
    """
    _check_begun(site, nights, now)
    store.require_current()
    rule = site.config.intake
    with (
        take_lease(store, _holder(), told=progress or _silent) as lease,
        workers(rule.cores if cores is None else cores) as pool,
        intake.scratch_folder(rule.scratch, site.config.store_url) as scratch,
    ):
        audit = _Run(site, store, lease, pool, now, progress or _silent, scratch)
        with _logged(audit):
            _enter_register(audit, accept_older)
            _take_exports(audit)
            published = _publish(audit, _nights(audit, nights))
            asked = now if nights is None else min(now, site.config.cutoff(published[-1]))
            audit.tally.quiet = (*audit.tally.no_files(), *_quiet(audit, asked, published[-1]))
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
        with suppress(StoreUnready), audit.store.write(audit.lease) as session:
            counts = audit.tally.counts()
            why = failure.message if isinstance(failure, AuditError) else repr(failure)
            writes.end_run(session, run_id, audit.clock(), "failed", counts, why)
        raise
    with audit.store.write(audit.lease) as session:
        counts = {**audit.tally.counts(), "store_bytes": queries.size_bytes(session)}
        writes.end_run(session, run_id, audit.clock(), "finished", counts, None)


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
    wanted = _wanted(audit.site.register.loops)
    found = intake.find(audit.site.config.exports, _seen(audit, wanted.keys()))
    audit.tally.files_skipped += len(found.known) - sum(new.only is not None for new in found.new)
    audit.tally.files_refused.extend(_fault(refused) for refused in found.refused)
    audit.tally.faults.extend(found.twice)
    audit.tally.missed(found.gone)
    audit.tally.empty_sources.extend(found.empty)
    done = 0
    for batch in intake.batches(found.new, wanted, audit.pool, audit.scratch):
        done += len(batch)
        audit.progress("reading exports", done, len(found.new))
        _take_batch(audit, batch, found.known, wanted)


def _seen(audit: _Run, wanted: Collection[str]) -> dict[str, intake.Seen]:
    """What the store knows of each path, with the tags it has yet to be asked for."""
    with audit.store.read() as session:
        exports = [seen for seen in queries.exports(session) if seen.state != "reading"]
        asked = queries.tag_sets(session, {seen.asked_set_id for seen in exports})
    missing = {number: frozenset(wanted) - tags for number, tags in asked.items()}
    nothing: frozenset[str] = frozenset()
    return {
        seen.path: intake.Seen(seen.size, seen.stamp, missing.get(seen.asked_set_id, nothing))
        for seen in exports
    }


def _wanted(loops: Sequence[Loop]) -> dict[str, bool]:
    """The historian tags the register names, and whether each is a mode tag."""
    wanted: dict[str, bool] = {}
    for loop in loops:
        for tag in (loop.pv, loop.sp, loop.output):
            if tag:
                wanted.setdefault(tag, False)
    return wanted | {loop.mode: True for loop in loops if loop.mode}


def _take_batch(
    audit: _Run,
    batch: Sequence[intake.ReadResult],
    known: Mapping[str, intake.NewFile],
    wanted: Mapping[str, bool],
) -> None:
    results, settled = _settled(audit, batch, known, wanted)
    ids = _begin(audit, results, settled.accounts, wanted)
    for span in spans_at_once(settled.tags, audit.site.register.loops):
        tags = {tag: fresh.within(*span) for tag, fresh in settled.tags.items()}
        for rows in audit.pool.map(work_loop, _loop_works(audit, tags)):
            with audit.store.write(audit.lease) as session:
                audit.tally.saved(rows, writes.save_rows(session, rows, audit.now))
    with audit.store.write(audit.lease) as session:
        writes.finish_exports(session, ids, audit.now)
    intake.clear(results)


def work_loop(work: LoopWork) -> writes.LoopRows:
    """One loop's audit, down to the values of its rows: all that another process can do of it."""
    return writes.rows_of(audit_loop(work))


def _settled(
    audit: _Run,
    batch: Sequence[intake.ReadResult],
    known: Mapping[str, intake.NewFile],
    wanted: Mapping[str, bool],
) -> tuple[list[intake.ReadResult], Settled]:
    """Which export holds where. Those that hold again, and whose samples were not kept, are read
    again if they are still there."""
    results, tried = list(batch), set[str]()
    while True:
        fresh = [FreshExport(r.new.file, r.read, r.new.only) for r in results if r.read is not None]
        settled = settle(fresh, _stored_coverage(audit, fresh))
        asked = {path: tags for path, tags in settled.exposed.items() if path not in tried}
        if not asked:
            return results, settled
        tried |= asked.keys()
        audit.tally.not_kept(path for path in asked if path not in known)
        results += intake.read_again(known, asked, wanted, audit.scratch)


def _stored_coverage(audit: _Run, fresh: Sequence[FreshExport]) -> list[Coverage]:
    """What the store knows to cover the time of the fresh files, and what their paths covered."""
    paths = {export.file.path for export in fresh}
    with audit.store.read() as session:
        own = queries.coverage_of_paths(session, paths)
        spans = [(cover.from_us, cover.to_us) for cover in own]
        spans += [span for export in fresh if (span := export.span()) is not None]
        if not spans:
            return own
        around = queries.coverage(
            session, from_us=min(start for start, _ in spans), to_us=max(end for _, end in spans)
        )
    return own + [cover for cover in around if cover.path not in paths]


def _begin(
    audit: _Run,
    results: Sequence[intake.ReadResult],
    accounts: Sequence[CellAccount],
    wanted: Collection[str],
) -> list[int]:
    """Enter the batch's files: those read as begun, the others as refused."""
    left = iter(accounts)
    with audit.store.write(audit.lease) as session:
        ids = []
        for result in results:
            file = result.new.file
            if result.refused is not None:
                audit.tally.files_refused.append(_fault(result.refused))
                writes.refuse_export(session, file, _reason(result.refused), audit.now)
            elif result.read is not None:
                read = replace(result.read, account=next(left))
                audit.tally.read(read.account, read.faults)
                audit.tally.ahead(file.path, read, to_us(audit.now))
                ids.append(writes.begin_export(session, file, read, audit.now, wanted))
    return ids


def _reason(refused: ExportRefused) -> str:
    line = "" if refused.line is None else f"line {refused.line}: "
    return f"{line}{refused.reason} — {refused.remedy}"


def _fault(refused: ExportRefused) -> Fault:
    return Fault(refused.path, refused.reason, refused.remedy, refused.line)


def _context(audit: _Run) -> LoopContext:
    with audit.store.read() as session:
        return LoopContext(
            audit.site.config,
            queries.specs(session),
            queries.tag_sources(session),
            queries.tag_states(session),
            queries.with_past(session),
            to_us(audit.now),
        )


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
    return feed.sentences(feed_facts(audit.store, loops, audit.site.config.exports, asked, night))

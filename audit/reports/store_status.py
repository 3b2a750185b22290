"""What the store holds, and what became of every cell read, as a plain dict."""

from __future__ import annotations

from collections import Counter
from collections.abc import Mapping, Sequence
from datetime import datetime
from functools import reduce

from audit import feed
from audit.feed_facts import feed_facts
from audit.records import CellAccount, ExportSource, Spec
from audit.reports import contract, store_size
from audit.reports.contract import Json
from audit.run_report import add
from audit.store import Store, queries
from audit.store.entries import NightInfo, RunInfo, SeenExport, StoredLoop

RUNS_SHOWN = 20
RUNS_LOOKED_AT = 200
"""Newest runs the growth is measured from: more than there are nights in 90 days."""


def status(store: Store, exports: Sequence[ExportSource], now: datetime) -> Json:
    """Schema, site, feed, size, counts, nights, last runs, the cells of every export file.

    ``exports``: the site's. Where the store has no schema of this program yet, only ``url`` and
    ``schema`` are there.
    """
    schema = store.schema()
    head = {
        "url": store.url,
        "schema": {"current": schema.current, "head": schema.head, "known": schema.known},
    }
    if schema.current != schema.head:
        return head
    with store.read() as session:
        seen_exports = queries.exports(session)
        cells = reduce(add, (seen.account for seen in seen_exports), CellAccount())
        at_work = queries.running(session)
        loops = queries.loops(session, include_retired=True)
        steps, newest = queries.step_counts(session), queries.newest_steps(session)
        nights, runs = queries.nights(session), queries.runs(session, RUNS_LOOKED_AT)
        size = queries.size(
            session,
            steps["measurements"],
            max((step.at_us for step in newest.values()), default=None),
        )
        found = {
            "site": queries.site_name(session),
            "size": store_size.size(size),
            "growth": store_size.growth(size, runs),
            "loops": _loops(loops),
            "specs": _specs(queries.specs(session)),
            "steps": steps,
            "newest_steps": store_size.newest_steps(
                newest,
                [row.loop.tag for row in loops if row.retired_at is None],
                nights[-1].cutoff if nights else None,
            ),
            "nights": _nights(nights),
            "exports": dict(Counter(seen.state for seen in seen_exports)),
            "runs": [_run(run, at_work) for run in runs[:RUNS_SHOWN]],
            "files": [_file(seen) for seen in seen_exports],
            "cells": contract.account(cells),
        }
    current = [row.loop for row in loops if row.retired_at is None]
    night = nights[-1].night if nights else now.date()
    quiet = feed.sentences(feed_facts(store, current, exports, now, night)) if current else ()
    return head | {"quiet": list(quiet)} | found


def _loops(stored: Sequence[StoredLoop]) -> Json:
    retired = sum(row.retired_at is not None for row in stored)
    return {"current": len(stored) - retired, "retired": retired}


def _specs(specs: Mapping[str, Sequence[Spec]]) -> Json:
    return {
        "loops": sum(bool(rows) for rows in specs.values()),
        "versions": sum(len(rows) for rows in specs.values()),
    }


def _nights(nights: Sequence[NightInfo]) -> Json:
    days = sorted({info.night for info in nights})
    return {
        "count": len(days),
        "first": days[0].isoformat() if days else None,
        "last": days[-1].isoformat() if days else None,
    }


def _run(run: RunInfo, at_work: int | None) -> Json:
    unended = "running" if run.id == at_work else "cut off"
    return {
        "kind": run.kind,
        "started_at": contract.stamp(run.started_at),
        "ended_at": contract.stamp(run.ended_at),
        "state": run.state if run.ended_at else unended,
        "counts": dict(run.counts),
        "error": run.error,
    }


def _file(seen: SeenExport) -> Json:
    return {
        "path": seen.path,
        "source": seen.source,
        "state": seen.state,
        "reason": seen.reason,
        "size": seen.size,
        "revision": seen.revision,
        "first": contract.stamp(seen.first_us),
        "last": contract.stamp(seen.last_us),
        "newest_good": contract.stamp(seen.newest_good_us),
        "future_stamps": seen.future_stamps,
        "read_at": contract.stamp(seen.read_at),
        "cells": contract.account(seen.account),
    }

"""What the store knows that one loop's audit, or its standing, needs: read, nothing decided."""

from __future__ import annotations

from collections.abc import Iterator, Mapping, Sequence
from dataclasses import dataclass
from datetime import date, datetime, timedelta
from itertools import pairwise

from audit.config import Config
from audit.loopwork import LoopWork, days_known
from audit.records import (
    ExportSource,
    KeptDay,
    Loop,
    PastStep,
    Reading,
    Record,
    Role,
    SetpointChange,
    Spec,
    TagState,
    to_us,
)
from audit.standings import DAYS_LOOKED_AT, StandingWork, band_changed
from audit.store import Store, queries
from audit.weaving.precedence import FreshTag
from audit.weaving.spans import Span, union
from audit.weaving.stretches import context, grouped

LOOP_SAMPLES = 4_000_000
"""Samples of a loop that are worked through at once: about 0.2 GB in a worker."""


def reading_of(
    loop: Loop, tag_sources: Mapping[str, str], sources: Sequence[ExportSource]
) -> Reading:
    """How the loop's signals are read between stamps: each by the export kind that brings it."""
    by_name = {source.name: source.reading for source in sources}

    def of(role: Role) -> Reading:
        tag = loop.tags().get(role, loop.pv)
        return by_name.get(tag_sources.get(tag, ""), sources[0].reading)

    return Reading(
        pv_between=of(Role.PV).pv_between,
        output_between=of(Role.OUTPUT).output_between,
        silence_us={role: of(role).silence_us[role] for role in Role},
    )


@dataclass(frozen=True)
class LoopContext:
    """What stays the same for all loops of one audit."""

    config: Config
    specs: Mapping[str, Sequence[Spec]]
    tag_sources: Mapping[str, str]
    tag_states: Mapping[str, Mapping[Role, TagState]]
    with_past: frozenset[str]
    now_us: int

    def reading(self, loop: Loop) -> Reading:
        return reading_of(loop, self.tag_sources, self.config.exports)


def loop_work(
    store: Store, context_: LoopContext, loop: Loop, fresh: Mapping[str, FreshTag]
) -> LoopWork | None:
    """The work that fresh samples mean for a loop; None where they do not concern it."""
    own = {role: fresh[tag] for role, tag in loop.tags().items() if tag in fresh}
    spans = union(span for tag in own.values() for span in tag.spans)
    if not spans:
        return None
    reading = context_.reading(loop)
    config = context_.config
    past = _Past((), (), (), None)
    if loop.tag in context_.with_past:
        past = _past(store, loop, spans, days_known(spans, reading, config.timezone))
    return LoopWork(
        loop=loop,
        specs=tuple(context_.specs.get(loop.tag, ())),
        reading=reading,
        error_u_eu=config.standing.error_u_eu,
        zone=config.timezone,
        kept=past.kept,
        fresh=own,
        touched=past.touched,
        days=past.days,
        states=context_.tag_states.get(loop.tag, {}),
        closed_us=past.closed_us,
        now_us=context_.now_us,
    )


@dataclass(frozen=True, eq=False)
class _Past:
    """What is kept of a loop around fresh spans: slices, steps that may change, days; and up to
    where its past is closed."""

    kept: tuple[Record, ...]
    touched: tuple[int, ...]
    days: tuple[KeptDay, ...]
    closed_us: int | None


def _past(store: Store, loop: Loop, spans: Sequence[Span], days: tuple[date, date]) -> _Past:
    near = grouped(spans, loop.windows)
    with store.read() as session:
        touched = sorted(
            {s.at_us for span in near for s in queries.touched(session, loop.tag, *span)}
        )
        kept = [
            record
            for a, b in _to_recall(spans, touched, loop)
            for record in queries.kept(session, loop.tag, a, b)
        ]
        kept += [
            record for span in near for record in queries.edges_next_to(session, loop.tag, *span)
        ]
        found = queries.kept_days(session, loop.tag, *days)
        closed = queries.closed_time(session, loop.tag)
    closed_us = None if closed is None else closed.until_us
    return _Past(tuple(kept), tuple(touched), tuple(found), closed_us)


def spans_at_once(tags: Mapping[str, FreshTag], loops: Sequence[Loop]) -> list[Span]:
    """The time of fresh samples in parts, in each of which no loop has many more than LOOP_SAMPLES.

    Parts are of one length.
    """
    sizes = {tag: sum(samples.count for samples, _ in fresh.parts) for tag, fresh in tags.items()}
    largest = max((sum(sizes.get(t, 0) for t in loop.tags().values()) for loop in loops), default=0)
    spans = [span for fresh in tags.values() for span in fresh.spans]
    if not spans:
        return []
    first, last = min(start for start, _ in spans), max(end for _, end in spans)
    parts = min(1 + largest // LOOP_SAMPLES, last - first + 1)
    borders = [first + (last - first + 1) * number // parts for number in range(parts + 1)]
    return [(start, end - 1) for start, end in pairwise(borders)]


def _to_recall(spans: Sequence[Span], touched: Sequence[int], loop: Loop) -> list[Span]:
    """The spans whose kept slices are needed: around what is new and around touched steps."""
    around = [(at_us, at_us) for at_us in touched]
    return context([*spans, *around], loop.windows)


def standing_works(
    store: Store,
    context_: LoopContext,
    loops: Sequence[Loop],
    nights: Sequence[tuple[date, datetime]],
    loops_at_once: int = 200,
) -> Iterator[StandingWork]:
    """Each loop's evidence for the standings of the nights, loaded for many loops at once."""
    first = nights[0][0] - timedelta(days=DAYS_LOOKED_AT)
    last, cutoff = nights[-1]
    for start in range(0, len(loops), loops_at_once):
        some = loops[start : start + loops_at_once]
        tags = [loop.tag for loop in some]
        with store.read() as session:
            steps = queries.past_steps_many(session, tags, to_us(cutoff))
            days = queries.day_records_many(session, tags, first, last)
        for loop in some:
            own = steps.get(loop.tag, [])
            yield StandingWork(
                loop=loop,
                specs=tuple(context_.specs.get(loop.tag, ())),
                steps=tuple(own),
                days=tuple(days.get(loop.tag, [])),
                nights=tuple(nights),
                rule=context_.config.standing,
                zone=context_.config.timezone,
                reading=context_.reading(loop),
                curves=_curves(store, context_, loop, own, [at for _, at in nights]),
            )


def _curves(
    store: Store,
    context_: LoopContext,
    loop: Loop,
    steps: Sequence[PastStep],
    cutoffs: Sequence[datetime],
) -> dict[int, tuple[SetpointChange, Record]]:
    """Kept curves of the steps measured in another settling band than a night's spec has."""
    specs = context_.specs.get(loop.tag, ())
    stale = {step.at_us for step in steps if band_changed(step, specs, cutoffs)}
    if not stale:
        return {}
    found: dict[int, tuple[SetpointChange, Record]] = {}
    with store.read() as session:
        for step in queries.history(session, loop.tag, min(stale), max(stale)):
            curve = queries.curve(session, loop.tag, step.change.at_us)
            if step.change.at_us in stale and curve is not None:
                found[step.change.at_us] = (step.change, curve)
    return found

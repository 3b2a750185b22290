"""One loop's new samples, from the record to what the store is to keep: find, measure, judge.

This is the middle of the way of the data for one loop. It knows no file, clock or database: all it
needs comes in a ``LoopWork`` and all it found goes out in a ``LoopResult``, so that it runs the
same in this process or another.
"""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from dataclasses import dataclass, field
from datetime import date
from zoneinfo import ZoneInfo

from audit import days, quality, response, setpoints, tag_states, verdict
from audit.records import (
    KeptDay,
    Loop,
    LoopResult,
    MeasuredStep,
    MeasureSettings,
    RawSamples,
    Reading,
    Record,
    Role,
    Samples,
    SetpointChange,
    Spec,
    Step,
    TagState,
    instant,
    spec_in_force,
)
from audit.weaving.precedence import FreshTag
from audit.weaving.spans import Span, inside, pick, union
from audit.weaving.stretches import curve, dependence, edges, seams, to_look_at, weave


@dataclass(frozen=True, eq=False)
class LoopWork:
    """All that one loop's audit needs.

    ``kept``: stored slices around the fresh spans. ``touched``: at_us of the stored steps whose
    result may change. ``days``: the stored day's records around the fresh spans.
    ``states``: what the loop's tags last said. ``closed_us``: up to where the loop's past is
    closed, for something was pruned there: no step is looked for in it, days are counted.
    ``now_us``: what is stamped later says nothing of what a tag last said.
    """

    loop: Loop
    specs: tuple[Spec, ...]
    reading: Reading
    error_u_eu: float | None
    zone: ZoneInfo
    kept: tuple[Record, ...]
    fresh: Mapping[Role, FreshTag]
    touched: tuple[int, ...]
    days: tuple[KeptDay, ...]
    states: Mapping[Role, TagState] = field(default_factory=dict)
    closed_us: int | None = None
    now_us: int | None = None

    def spans(self) -> list[Span]:
        """Every span some tag of the loop has fresh word of."""
        return union(span for tag in self.fresh.values() for span in tag.spans)

    def open_spans(self) -> dict[Role, list[Span]]:
        """The same by tag, after the closed time."""
        spans = {role: list(tag.spans) for role, tag in self.fresh.items()}
        if self.closed_us is None:
            return spans
        first_us = self.closed_us + 1
        return {
            role: [(max(start, first_us), end) for start, end in own if end >= first_us]
            for role, own in spans.items()
        }


def audit_loop(work: LoopWork) -> LoopResult:
    """Find, measure and judge the setpoint changes that the fresh samples concern."""
    fresh = {role: _as_samples(role, tag.load(), work.loop) for role, tag in work.fresh.items()}
    replaced = {role: tag.spans for role, tag in work.fresh.items()}
    open_ = work.open_spans()
    looked_at = fresh
    if work.closed_us is not None:
        looked_at = {r: pick(own, inside(own.t_us, open_[r])) for r, own in fresh.items()}
    record = weave(work.kept, looked_at, open_)
    steps = [measure_step(record, change, work) for change in _concerned(record, work)]
    found = {measured.step.change.at_us for measured in steps}
    borders = sorted({span for own in open_.values() for span in own})
    return LoopResult(
        tag=work.loop.tag,
        steps=tuple(steps),
        withdrawn=tuple(at_us for at_us in work.touched if at_us not in found),
        edges=tuple(edges(record, borders, work.loop.windows)),
        days=tuple(_days(work, fresh, replaced)),
        tag_states=tag_states.follow_all(_until(fresh, work.now_us), work.states),
    )


def _until(fresh: Mapping[Role, Samples], now_us: int | None) -> Mapping[Role, Samples]:
    if now_us is None:
        return fresh
    return {
        role: own.between(int(own.t_us[0]), now_us) if len(own) else own
        for role, own in fresh.items()
    }


def _as_samples(role: Role, raw: RawSamples, loop: Loop) -> Samples:
    return quality.in_automatic(raw, loop.auto_modes) if role is Role.MODE else raw.samples


def _concerned(record: Record, work: LoopWork) -> list[SetpointChange]:
    """The changes near the fresh spans, and those stored earlier that rest on them."""
    spans = union(span for own in work.open_spans().values() for span in own)
    spans = to_look_at(record, spans, work.loop.windows)
    touched = set(work.touched)
    false = set(seams(record, work.kept, work.open_spans().get(Role.SP, ())).tolist())
    return [
        change
        for change in setpoints.find(record, work.loop, work.reading)
        if change.at_us not in false
        and (change.at_us in touched or any(a <= change.at_us <= b for a, b in spans))
    ]


def measure_step(record: Record, change: SetpointChange, work: LoopWork) -> MeasuredStep:
    """Measure one change from its own slice of the record and judge it by the spec in force."""
    loop = work.loop
    slice_ = curve(record, change, loop.windows)
    spec = spec_in_force(work.specs, instant(change.at_us))
    measured = response.measure(
        slice_, change, settings_for(loop, spec, work.reading, work.error_u_eu)
    )
    verdicts, usable, set_aside = verdict.judge(measured, change, spec, loop)
    first, last = dependence(slice_, change.at_us, loop.tags(), loop.windows, work.reading)
    step = Step(change, measured, verdicts, usable, set_aside)
    return MeasuredStep(step, slice_, first, last)


def settings_for(
    loop: Loop, spec: Spec | None, reading: Reading, error_u_eu: float | None
) -> MeasureSettings:
    """What a measurement of this loop under this spec rests on beside the samples."""
    return MeasureSettings(
        band_pct=2.0 if spec is None else spec.settling_band_pct,
        min_step_eu=None if spec is None else spec.min_step_eu,
        span_eu=loop.span_eu,
        range_low=loop.range_low,
        range_high=loop.range_high,
        error_u_eu=error_u_eu,
        output_low=loop.output_low,
        output_high=loop.output_high,
        reading=reading,
        before_us=loop.windows.before_us,
        after_us=loop.windows.after_us,
    )


def days_known(spans: Sequence[Span], reading: Reading, zone: ZoneInfo) -> tuple[date, date]:
    """First and last local day whose kept runs are needed to count the days the spans concern."""
    known = days.needed(days.touched(spans, reading, zone), reading, zone)
    return known[0], known[-1]


def _days(
    work: LoopWork, fresh: Mapping[Role, Samples], replaced: Mapping[Role, Sequence[Span]]
) -> list[KeptDay]:
    """The day's records that the fresh samples concern, counted again."""
    kept = days.join_days(days.decode(day.runs) for day in work.days)
    new = days.runs_of(Record(fresh), work.loop, work.reading, replaced)
    return days.keep_days(
        days.merge(kept, new, replaced),
        work.loop,
        work.reading,
        work.zone,
        days.touched(work.spans(), work.reading, work.zone),
        [day.record.day for day in work.days],
    )

"""A loop's steps as of a night -> its standing that night; pure, one loop at a time."""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from dataclasses import dataclass, replace
from datetime import date, datetime, timedelta
from zoneinfo import ZoneInfo

from audit import ranking, response, trend
from audit.loopwork import settings_for
from audit.records import (
    LIMITED,
    DayRecord,
    Loop,
    PastStep,
    Quantity,
    Reading,
    Record,
    SetpointChange,
    Spec,
    Standing,
    StandingRule,
    spec_in_force,
    to_us,
)

DAYS_LOOKED_AT = 30
"""Day's records a standing may rest on, days before its night."""


@dataclass(frozen=True, eq=False)
class StandingWork:
    """One loop's evidence for the standings of some nights.

    ``nights``: (night, cut-off in UTC). ``steps``: all stored steps up to the last cut-off.
    ``curves``: change and kept slice of the steps whose settling time must be measured again
    because the band of the spec in force has changed since.
    """

    loop: Loop
    specs: tuple[Spec, ...]
    steps: tuple[PastStep, ...]
    days: tuple[DayRecord, ...]
    nights: tuple[tuple[date, datetime], ...]
    rule: StandingRule
    zone: ZoneInfo
    reading: Reading
    curves: Mapping[int, tuple[SetpointChange, Record]]


def standings(work: StandingWork) -> list[Standing]:
    """The loop's standing for each of the nights, in their order."""
    return [_standing(work, night, cutoff) for night, cutoff in work.nights]


def band_changed(step: PastStep, specs: Sequence[Spec], cutoffs: Sequence[datetime]) -> bool:
    """Whether some night's spec has another settling band than the step was measured in."""
    bands = {
        spec.settling_band_pct
        for cutoff in cutoffs
        if (spec := spec_in_force(specs, cutoff)) is not None
    }
    return any(band != step.band_pct for band in bands)


def _standing(work: StandingWork, night: date, cutoff: datetime) -> Standing:
    cutoff_us = to_us(cutoff)
    spec = spec_in_force(work.specs, cutoff)
    steps = [_in_band(step, spec, work) for step in work.steps if step.window_end_us < cutoff_us]
    limited = LIMITED if spec is None else tuple(spec.limits)
    first_day = night - timedelta(days=DAYS_LOOKED_AT)
    return ranking.stand(
        work.loop,
        night,
        cutoff_us,
        work.zone,
        steps,
        spec,
        trend.assess(steps, work.loop, limited),
        [day for day in work.days if first_day <= day.day < night],
        work.rule,
    )


def _in_band(step: PastStep, spec: Spec | None, work: StandingWork) -> PastStep:
    """The step with its settling time in the band of the spec in force at the night."""
    kept = work.curves.get(step.at_us)
    if spec is None or kept is None or spec.settling_band_pct == step.band_pct:
        return step
    change, curve = kept
    settings = settings_for(work.loop, spec, work.reading, work.rule.error_u_eu)
    again = response.measure(curve, change, settings).measured[Quantity.SETTLING_TIME]
    return replace(
        step,
        measured={**step.measured, Quantity.SETTLING_TIME: again},
        band_pct=spec.settling_band_pct,
    )

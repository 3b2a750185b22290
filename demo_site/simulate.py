"""Runs every loop of the demonstration over its record and returns what the historian kept.

In go ``Case`` (a loop with its design, story and plan), the days, a seed; out go ``Kept``: the
reports of one group of loops with what is needed to turn scans into instants. Loops of one scan
time are stepped together; an outer and its inner cascade loop are coupled scan by scan.
"""

from __future__ import annotations

from collections.abc import Callable, Sequence
from dataclasses import dataclass

import numpy as np

from .design import Design
from .historian import ExceptionReporting, Reports
from .inputs import Cut, Inputs, load_series
from .lanes import OUT, SP, Lanes, Vector
from .operators import DAY_S, Plan
from .plant import PlantLoop
from .stories import Story

Tick = Callable[[float], None]
_HOUR_S = 3600
_WARM_S = {1: 900, 2: 1800, 5: 4 * _HOUR_S, 10: 3 * _HOUR_S}
_CASCADE_WARM_S = 3 * _HOUR_S
_LIVE_H = (1, 3, 6, 12, 24)
"""Hours a lane may last; under three only the fastest loops, which do not limit-cycle."""
_MOST_LANES = 16_000
_QUIET_SP = 0.01
INNER_SP = 0.5
"""Deadband of an inner loop's setpoint, percent: its primary moves it all day long."""


@dataclass(frozen=True)
class Case:
    """One loop to be simulated; ``number`` is its place in the register."""

    number: int
    loop: PlantLoop
    design: Design
    story: Story
    plan: Plan


@dataclass(frozen=True, eq=False)
class Kept:
    """Reports of the lanes of ``cases`` (case by case, piece by piece) cut by ``cut``."""

    cases: tuple[Case, ...]
    cut: Cut
    reports: Reports


def choose_cut(loops: int, days: int, scan_s: int, warm_s: int) -> Cut:
    """The cut that costs least: fewer scans against more lanes (rough cost of vector steps)."""

    def cost(cut: Cut) -> float:
        return cut.scans * (60.0 + 0.05 * cut.lanes)

    allowed = _LIVE_H if scan_s == 1 else _LIVE_H[1:]
    cuts = [Cut(loops, days, scan_s, hours * _HOUR_S, warm_s) for hours in allowed]
    fitting = [cut for cut in cuts if cut.live_s >= warm_s and cut.lanes <= _MOST_LANES]
    return min(fitting or cuts[-1:], key=cost)


def _lanes(cases: Sequence[Case], cut: Cut) -> Lanes:
    """The lanes of ``cases``, each with its loop as it is on that day."""
    designs: list[Design] = []
    counts: list[int] = []
    for case in cases:
        for piece in range(cut.pieces):
            design = case.story.design_at(case.design, piece * cut.live_s // DAY_S)
            if piece and designs[-1] is design:
                counts[-1] += 1
            else:
                designs.append(design)
                counts.append(1)
    return Lanes(designs, counts)


def _inputs(cases: Sequence[Case], cut: Cut, rng: np.random.Generator) -> Inputs:
    return Inputs(
        cut,
        plans=[case.plan for case in cases],
        tracking=[case.loop.tracking for case in cases],
        noise=[case.design.noise for case in cases],
        load=load_series([case.design.load for case in cases], cut, rng),
        rng=rng,
    )


def _reporting(cases: Sequence[Case], cut: Cut) -> ExceptionReporting:
    def deadband(case: Case) -> tuple[float, float, float]:
        followed = case.design.report if case.loop.tracking else _QUIET_SP
        return (
            case.design.report,
            case.design.report_out if case.loop.has_output else np.inf,
            INNER_SP if case.loop.primary else followed,
        )

    bands: Vector = np.array([deadband(case) for case in cases], np.float64).T
    return ExceptionReporting(np.repeat(bands, cut.pieces, axis=1), cut.scan_s, cut.warm)


def _run_single(cases: Sequence[Case], cut: Cut, rng: np.random.Generator, tick: Tick) -> Kept:
    lanes, inputs, kept = _lanes(cases, cut), _inputs(cases, cut, rng), _reporting(cases, cut)
    inputs.start(lanes)
    for scan in range(cut.scans):
        inputs.feed(lanes, scan)
        lanes.control()
        kept.watch(scan, lanes.signals)
        lanes.advance(scan, lanes.valve())
        if scan % 200 == 0:
            tick(scan / cut.scans)
    return Kept(tuple(cases), cut, kept.reports())


def _run_cascades(
    outers: Sequence[Case], inners: Sequence[Case], days: int, rng: np.random.Generator, tick: Tick
) -> tuple[Kept, Kept]:
    """The i-th inner loop's setpoint is the i-th outer one's output; its flow drives the outer."""
    fine = choose_cut(len(inners), days, inners[0].design.scan_s, _CASCADE_WARM_S)
    coarse = Cut(fine.loops, days, outers[0].design.scan_s, fine.live_s, fine.warm_s)
    every = coarse.scan_s // fine.scan_s
    outer, outer_in, outer_kept = _lanes(outers, coarse), *_fed(outers, coarse, rng)
    inner, inner_in, inner_kept = _lanes(inners, fine), *_fed(inners, fine, rng)
    outer_in.start(outer)
    inner_in.first_sp[:] = outer.signals[OUT]
    inner_in.start(inner)
    for scan in range(fine.scans):
        slow, phase = divmod(scan, every)
        if phase == 0:
            outer_in.feed(outer, slow)
            outer.control()
            outer_kept.watch(slow, outer.signals)
            inner.signals[SP] = outer.signals[OUT]
            tick(scan / fine.scans)
        inner_in.feed(inner, scan)
        inner.control()
        inner_kept.watch(scan, inner.signals)
        inner.advance(scan, inner.valve())
        if phase == every - 1:
            outer.advance(slow, inner.process)
    return (
        Kept(tuple(outers), coarse, outer_kept.reports()),
        Kept(tuple(inners), fine, inner_kept.reports()),
    )


def _fed(
    cases: Sequence[Case], cut: Cut, rng: np.random.Generator
) -> tuple[Inputs, ExceptionReporting]:
    return _inputs(cases, cut, rng), _reporting(cases, cut)


def simulate(cases: Sequence[Case], days: int, seed: int, tick: Tick) -> list[Kept]:
    """All ``cases`` over ``days`` days; ``tick`` hears the share done, 0 to 1, now and then."""
    by_tag = {case.loop.tag: case for case in cases}
    inners = [case for case in cases if case.loop.primary]
    outers = [by_tag[case.loop.primary] for case in inners if case.loop.primary]
    paired = {case.number for case in (*inners, *outers)}
    groups: dict[int, list[Case]] = {}
    for case in cases:
        if case.number not in paired:
            groups.setdefault(case.design.scan_s, []).append(case)
    parts = len(groups) + (1 if inners else 0)
    found: list[Kept] = []
    for part, (scan_s, members) in enumerate(sorted(groups.items())):
        cut = choose_cut(len(members), days, scan_s, _WARM_S[scan_s])
        rng = np.random.default_rng((seed, 1, scan_s))
        found.append(_run_single(members, cut, rng, _part_of(tick, part, parts)))
    if inners:
        rng = np.random.default_rng((seed, 2))
        found += _run_cascades(outers, inners, days, rng, _part_of(tick, parts - 1, parts))
    return found


def _part_of(tick: Tick, part: int, parts: int) -> Tick:
    return lambda share: tick((part + share) / parts)

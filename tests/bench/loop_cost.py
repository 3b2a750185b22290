"""What one loop of a day at one second costs apart from its measuring, step by step of its way.

Run: python tests/bench/loop_cost.py. One loop is made up (86 400 samples of each of four tags, 12
setpoint moves), audited and saved into a fresh SQLite store, many times over; printed is the least
processor time of each part in ms, and as a ratio to sorting 345 600 random floats in the same run.
Loading the samples, measuring and committing are timed apart. The parts do not overlap; the rest is
what no part holds.
"""

from __future__ import annotations

import sys
import time
from collections import defaultdict
from collections.abc import Callable, Iterator
from contextlib import contextmanager
from datetime import UTC, datetime, timedelta
from pathlib import Path
from tempfile import TemporaryDirectory
from typing import Any
from zoneinfo import ZoneInfo

import numpy as np
from numpy.typing import NDArray
from scipy.signal import lfilter
from sqlalchemy import event

from audit import days, loopwork, quality, response, setpoints
from audit.loopwork import LoopWork, audit_loop
from audit.records import (
    SECOND_US,
    Loop,
    LoopKind,
    LoopResult,
    Quantity,
    RawSamples,
    Reading,
    Role,
    Samples,
    Spec,
    Windows,
    to_us,
)
from audit.store import Store, open_store, save, take_lease, writes
from audit.weaving.precedence import FreshTag

SAMPLES = 86_400
MOVES = 12
START = datetime(2026, 3, 2, tzinfo=UTC)
SPEC_FROM = datetime(2026, 1, 1, tzinfo=UTC)
WINDOWS = Windows(120 * SECOND_US, 3600 * SECOND_US, 60 * SECOND_US)
AUDIT_PARTS = (
    (FreshTag, "load", "load the samples (apart)"),
    (quality, "in_automatic", "mode"),
    (loopwork, "weave", "weave"),
    (setpoints, "find", "find the changes"),
    (response, "measure", "measure (apart)"),
    (loopwork, "curve", "cut the curves"),
    (loopwork, "dependence", "dependence"),
    (loopwork, "edges", "edges"),
    (days, "runs_of", "days: runs"),
    (days, "merge", "days: merge"),
    (days, "keep_days", "days: records"),
)
SAVE_PARTS = ((save, "pack", "pack"),)


def loop(tag: str) -> Loop:
    return Loop(
        tag=tag,
        pv=f"{tag}.PV",
        sp=f"{tag}.SP",
        output=f"{tag}.OP",
        mode=f"{tag}.MODE",
        windows=WINDOWS,
        kind=LoopKind.FLOW,
        eu="m3/h",
        range_low=0.0,
        range_high=100.0,
        auto_modes=("AUTO", "CAS"),
    )


def spec(tag: str) -> Spec:
    limits = {
        Quantity.RISE_TIME: 60.0,
        Quantity.SETTLING_TIME: 300.0,
        Quantity.OVERSHOOT: 10.0,
        Quantity.STEADY_STATE_ERROR: 0.5,
    }
    return Spec(tag, SPEC_FROM, limits, version=1)


def work(tag: str = "FIC-1", count: int = SAMPLES, moves: int = MOVES, seed: int = 3) -> LoopWork:
    """One loop's samples: a first-order response to each move, values with two decimals."""
    rng = np.random.default_rng(seed)
    t_us = to_us(START) + np.arange(count, dtype=np.int64) * SECOND_US
    held = 50.0 + np.concatenate(([0.0], np.where(np.arange(moves) % 2, -5.0, 5.0).cumsum()))
    sp = np.repeat(held, np.diff(np.linspace(-count // moves // 2, count, moves + 2).astype(int)))
    sp = sp[len(sp) - count :] if len(sp) >= count else np.pad(sp, (count - len(sp), 0), "edge")
    lag = np.exp(-1.0 / 20.0)
    pv, _ = lfilter([1.0 - lag], [1.0, -lag], sp, zi=[lag * sp[0]])
    output = np.round(30.0 + 0.4 * pv + (sp - pv) + rng.normal(0.0, 0.05, count), 2)
    pv = np.round(pv + rng.normal(0.0, 0.05, count), 2)
    span = (int(t_us[0]), int(t_us[-1]))
    good = np.ones(count, np.bool_)

    def tag_of(value: NDArray[np.float64], texts: tuple[str, ...] | None = None) -> FreshTag:
        return FreshTag((span,), ((RawSamples(Samples(t_us, value, good), texts), (span,)),))

    fresh = {
        Role.PV: tag_of(pv),
        Role.SP: tag_of(sp),
        Role.OUTPUT: tag_of(output),
        Role.MODE: tag_of(np.zeros(count), ("AUTO",)),
    }
    zone = ZoneInfo("Europe/Oslo")
    return LoopWork(loop(tag), (spec(tag),), Reading(), None, zone, (), fresh, (), ())


class Clock:
    """Seconds spent in each part; time of a part called by another counts for the inner alone."""

    def __init__(self) -> None:
        self.spent_s: dict[str, float] = defaultdict(float)
        self._inner_s = [0.0]

    @contextmanager
    def part(self, name: str) -> Iterator[None]:
        self._inner_s.append(0.0)
        begun = time.process_time()
        try:
            yield
        finally:
            whole = time.process_time() - begun
            self.spent_s[name] += whole - self._inner_s.pop()
            self._inner_s[-1] += whole

    def wrapped(self, function: Callable[..., Any], name: str) -> Callable[..., Any]:
        def timed(*arguments: Any, **named: Any) -> Any:
            with self.part(name):
                return function(*arguments, **named)

        return timed


@contextmanager
def watched(parts: tuple[tuple[Any, str, str], ...], clock: Clock) -> Iterator[None]:
    """The functions of the parts timed while the block runs."""
    before = [(room, function, getattr(room, function)) for room, function, _ in parts]
    for room, function, name in parts:
        setattr(room, function, clock.wrapped(getattr(room, function), name))
    try:
        yield
    finally:
        for room, function, was in before:
            setattr(room, function, was)


def audited(clock: Clock, one: LoopWork) -> LoopResult:
    with watched(AUDIT_PARTS, clock), clock.part("the rest of the audit"):
        return audit_loop(one)


def saved(clock: Clock, store: Store, result: LoopResult) -> None:
    """One loop saved in a transaction of its own; the driver's time apart."""
    engine = store._engine
    begun: list[float] = []

    def before(*_: Any) -> None:
        begun.append(time.process_time())

    def after(*_: Any) -> None:
        took = time.process_time() - begun.pop()
        clock.spent_s["statements in the driver"] += took
        clock._inner_s[-1] += took

    with take_lease(store, "benchmark") as lease, store.write(lease) as session:
        event.listen(engine, "before_cursor_execute", before)
        event.listen(engine, "after_cursor_execute", after)
        with watched(SAVE_PARTS, clock), clock.part("rows, and the rest of saving"):
            writes.save_loop(session, result, START + timedelta(days=1))
        event.remove(engine, "before_cursor_execute", before)
        event.remove(engine, "after_cursor_execute", after)
        committing = time.process_time()
        session.connection().commit()
        clock.spent_s["commit (apart)"] += time.process_time() - committing


def sort_s(runs: int = 5) -> float:
    """The fixed work: sorting 345 600 random floats, best of some runs, s."""
    values = np.random.default_rng(0).normal(size=4 * SAMPLES)
    took = []
    for _ in range(runs):
        begun = time.process_time()
        np.sort(values)
        took.append(time.process_time() - begun)
    return min(took)


def run(folder: Path, loops: int = 15) -> list[dict[str, float]]:
    """Seconds by part for each of some loops."""
    tags = [f"FIC-{n}" for n in range(loops)]
    found = []
    with open_store(f"sqlite:///{folder / 'store.db'}") as store:
        store.upgrade()
        with take_lease(store, "benchmark") as lease, store.write(lease) as session:
            writes.enter_site(session, "Benchmark")
            hashes = {"settings": "s", "loops": "l", "specs": "p"}
            known, specs = [loop(tag) for tag in tags], [spec(tag) for tag in tags]
            writes.enter_register(session, known, specs, hashes, START)
        for seed, tag in enumerate(tags):
            clock = Clock()
            saved(clock, store, audited(clock, work(tag, seed=seed)))
            found.append(dict(clock.spent_s))
    return found


def main() -> None:
    with TemporaryDirectory() as folder:
        found = run(Path(folder))
    unit_s = sort_s()
    best = {name: min(one.get(name, 0.0) for one in found) for name in found[0]}
    rows = [f"{name:<30}{1e3 * s:8.2f} ms {s / unit_s:7.2f}" for name, s in best.items()]
    apart = sum(s for name, s in best.items() if "apart" not in name)
    rows.append(f"{'in all, without those apart':<30}{1e3 * apart:8.2f} ms {apart / unit_s:7.2f}")
    rows.append(f"{'sorting 345 600 floats':<30}{1e3 * unit_s:8.2f} ms {1.0:7.2f}")
    sys.stdout.write("\n".join(rows) + "\n")


if __name__ == "__main__":
    main()

"""What thinned-out records tell: recognition, coverage, and width of the intervals, over a grid.

Run in the folder tests: ``python -m bench.archive [--cases 200] [--kind swinging]``. A cell is a
way of keeping, a deadband and a scan; its cases differ in damping, noise, dead time, longest
silence and in what the site declares. Printed by cell: how the records were recognised, how often
the deadband is within a factor of 1.5, and by quantity how often there is a value or bound, in how
many of these the 95 % interval holds the closed form, and the median of half its width over the
error.
"""

from __future__ import annotations

import argparse
import sys
from collections import Counter
from collections.abc import Iterator
from dataclasses import dataclass, field, replace

import numpy as np

from audit.records import Between, Measured, Quantity, Reading, Reason, Response
from audit.response import archive as recognition
from reference import archive, second_order, steps

KINDS = ("exception", "swinging")
DEADBANDS = (0.002, 0.005, 0.01, 0.02, 0.05, 0.1)
RISE_SCANS = (8, 20, 60)
NOISES = (0.0, 0.002, 0.005, 0.01)
SIZE_EU = 5.0
WINDOW_S = 40.0
BEFORE_S = 20.0


@dataclass(frozen=True, eq=False)
class Case:
    """A thinned-out record of a second-order response, w = 1, and what is true of it."""

    made: steps.Made
    truth: dict[Quantity, float]
    samples: int
    seen: recognition.Archive


@dataclass
class Told:
    """What was told of one quantity over the cases of a cell."""

    cases: int = 0
    told: int = 0
    held: int = 0
    widths: list[float] = field(default_factory=list)
    reasons: Counter[Reason] = field(default_factory=Counter)


@dataclass
class Cell:
    """One cell of the grid."""

    recognised: Counter[str] = field(default_factory=Counter)
    near: list[bool] = field(default_factory=list)
    samples: list[int] = field(default_factory=list)
    told: dict[Quantity, Told] = field(default_factory=dict)


def exact(z: float, dead_s: float) -> dict[Quantity, float]:
    """Closed forms; no overshoot under 0.1 % is asked for its time."""
    truth = {
        Quantity.RISE_TIME: second_order.rise_time(z),
        Quantity.OVERSHOOT: second_order.overshoot(z),
        Quantity.UNDERSHOOT: 0.0,
        Quantity.SETTLING_TIME_2PCT: dead_s + second_order.settling_time(0.02, z),
        Quantity.SETTLING_TIME_5PCT: dead_s + second_order.settling_time(0.05, z),
        Quantity.STEADY_STATE_ERROR: 0.0,
        Quantity.IAE: SIZE_EU * (dead_s + second_order.absolute_error(z)),
    }
    if z < 0.9:
        truth[Quantity.PEAK_TIME] = dead_s + second_order.peak_time(z)
        truth[Quantity.DECAY_RATIO] = second_order.decay_ratio(z)
        truth[Quantity.DAMPED_PERIOD] = second_order.damped_period(z)
    return truth


def keep(kind: str, t: steps.Array, y: steps.Array, deadband: float, longest_s: float) -> list[int]:
    """The kept samples' places."""
    if kind == "swinging":
        return archive.swinging_door(t, y, deadband, longest_s)
    if kind == "boxcar":
        return archive.by_exception(t, y, deadband, longest_s, previous=True)
    if kind == "every":
        return list(range(len(t)))
    return archive.by_exception(t, y, deadband, longest_s)


def case(rng: np.random.Generator, kind: str, deadband: float, rise_scans: int, nth: int) -> Case:
    """The nth case of a cell."""
    z = float(rng.uniform(0.3, 1.2))
    scan_s = second_order.rise_time(z) / rise_scans
    dead_s = float(rng.uniform(0.0, 2.0 * scan_s))
    t = steps.stamps(scan_s, WINDOW_S, before_s=2.0 * BEFORE_S, past_s=5.0)
    y = np.where(t > dead_s, second_order.response(np.maximum(t - dead_s, 0.0), z), 0.0)
    y = y + float(rng.choice(NOISES)) * rng.standard_normal(len(t))
    kept = keep(kind, t, y, deadband, float(rng.choice([8.0, 20.0, 60.0])))
    made = steps.make(
        t[kept], y[kept], WINDOW_S, before_s=BEFORE_S, seed_shift_us=nth * 3_600_000_000
    )
    reading = Reading(pv_between=Between(rng.choice(list(Between))))
    made = replace(made, settings=replace(made.settings, reading=reading))
    inside = (t[kept] > -BEFORE_S) & (t[kept] < WINDOW_S)
    first, last = int(np.flatnonzero(inside)[0]), int(np.flatnonzero(inside)[-1])
    near = slice(max(first - 1, 0), last + 2)
    seen = recognition.recognise(t[kept][near], y[kept][near], WINDOW_S)
    return Case(made, exact(z, dead_s), len(t[kept][near]), seen)


def holds(found: Measured, truth: float) -> bool:
    """Whether the interval, or the one bound there is, holds the truth."""
    return (found.low is None or found.low <= truth) and (found.high is None or truth <= found.high)


def count(cell: Cell, response: Response, truth: dict[Quantity, float]) -> None:
    """Count one response in."""
    for quantity, exact_value in truth.items():
        found = response.measured[quantity]
        told = cell.told.setdefault(quantity, Told())
        told.cases += 1
        if not found.known:
            assert found.why is not None
            told.reasons[found.why] += 1
            continue
        told.told += 1
        told.held += holds(found, exact_value)
        if found.value is not None and found.low is not None and found.high is not None:
            error = abs(found.value - exact_value)
            if error > 0:
                told.widths.append(0.5 * (found.high - found.low) / error)


def grid_cell(kind: str, deadband: float, rise_scans: int, cases: int, seed: int = 1) -> Cell:
    """So many cases of one cell."""
    rng = np.random.default_rng([seed, len(kind), round(1e4 * deadband), rise_scans])
    cell = Cell()
    for nth in range(cases):
        one = case(rng, kind, deadband, rise_scans, nth)
        cell.recognised[one.seen.kept] += 1
        cell.samples.append(one.samples)
        if one.seen.recognised:
            cell.near.append(abs(np.log(one.seen.deadband / deadband)) < np.log(1.5))
        count(cell, one.made.measure(), one.truth)
    return cell


def lines(name: str, cell: Cell) -> Iterator[str]:
    """One cell in words."""
    seen = ", ".join(f"{word} {n}" for word, n in cell.recognised.most_common())
    near = f"{100.0 * float(np.mean(cell.near)):.0f} %" if cell.near else "-"
    samples = f"{np.median(cell.samples):.0f} samples"
    yield f"{name}, {samples}: {seen}; deadband within 1.5 times: {near}"
    for quantity, told in cell.told.items():
        held = f"{100.0 * told.held / told.told:5.1f} %" if told.told else "    - "
        width = f"{float(np.median(told.widths)):5.1f}" if told.widths else "    -"
        why = ", ".join(f"{reason} {n}" for reason, n in told.reasons.most_common(3))
        share = 100.0 * told.told / told.cases
        yield f"  {quantity:24} told {share:5.1f} %  held {held}  width/error {width}  {why}"


def main() -> None:
    parser = argparse.ArgumentParser(description="recognition and coverage of thinned records")
    parser.add_argument("--cases", type=int, default=200, help="cases a cell")
    parser.add_argument("--kind", choices=(*KINDS, "boxcar", "every"), action="append")
    parser.add_argument("--deadband", type=float, action="append", help="parts of the change")
    asked = parser.parse_args()
    for kind in asked.kind or KINDS:
        for deadband in asked.deadband or DEADBANDS:
            for rise_scans in RISE_SCANS:
                cell = grid_cell(kind, deadband, rise_scans, asked.cases)
                name = f"{kind}, {100.0 * deadband:g} % of the change, {rise_scans} scans a rise"
                sys.stdout.write("\n".join(lines(name, cell)) + "\n")


if __name__ == "__main__":
    main()

"""The commissioning step tests: how a loop answers a setpoint step, noise and load away.

In go designs; out go ``Answer`` (what the specs are set from, and what the truth file says a fault
does). Measured on the simulator's own scans, apart from the audit and its code.
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np

from .design import Design, design
from .lanes import OUT, PV, SP, Lanes, Vector
from .operators import window_s
from .plant import PlantLoop

STEP = 8.0
BAND_PCT = 5.0


@dataclass(frozen=True)
class Answer:
    """Times from the step in seconds, percent of the change, error in percent of range.

    None where the response has no such number inside the test (never came so far, never stayed).
    """

    rise_time_s: float | None
    settling_time_s: float | None
    overshoot_pct: float
    peak_time_s: float | None
    decay_ratio: float | None
    steady_state_error: float


def step_test(designs: Sequence[Design], size: float, test_s: int) -> Vector:
    """Process variables [scans, n] after a setpoint step of ``size`` percent from rest at the
    pivot of each design; designs of one scan time.
    """
    lanes = Lanes(designs, [1] * len(designs))
    start = np.array([design.pivot_pv for design in designs])
    lanes.rest(start)
    lanes.signals[SP] = start + size
    scans = test_s // lanes.scan_s
    seen = np.zeros((scans, lanes.n))
    for scan in range(scans):
        lanes.control()
        seen[scan] = lanes.signals[PV]
        lanes.advance(scan, lanes.valve())
    return seen


def step_tests(designs: Sequence[Design], size: float, test_s: Sequence[int]) -> list[Vector]:
    """A step test of each design, ``test_s`` seconds long; those alike in time run together."""
    groups: dict[tuple[int, int], list[int]] = {}
    for number, (one, seconds) in enumerate(zip(designs, test_s, strict=True)):
        groups.setdefault((one.scan_s, seconds), []).append(number)
    found: dict[int, Vector] = {}
    for (_, seconds), members in groups.items():
        seen = step_test([designs[number] for number in members], size, seconds)
        found |= {number: seen[:, column] for column, number in enumerate(members)}
    return [found[number] for number in range(len(designs))]


def cascade_step_test(outers: Sequence[Design], inner: Design, size: float, test_s: int) -> Vector:
    """The process variables [scans, n] of outer loops, each with an inner loop of one design, after
    a step of their setpoints.
    """
    each = [1] * len(outers)
    slow, fast = Lanes(outers, each), Lanes([inner] * len(outers), each)
    every = slow.scan_s // fast.scan_s
    slow.rest(np.array([outer.pivot_pv for outer in outers]))
    fast.rest(slow.signals[OUT].copy())
    slow.signals[SP] += size
    seen = np.zeros((test_s // slow.scan_s, slow.n))
    for scan in range(len(seen)):
        slow.control()
        seen[scan] = slow.signals[PV]
        fast.signals[SP] = slow.signals[OUT]
        for part in range(every):
            fast.control()
            fast.advance(scan * every + part, fast.valve())
        slow.advance(scan, fast.process)
    return seen


def commission(
    loops: Sequence[PlantLoop], rngs: Sequence[np.random.Generator], tries: int = 8
) -> list[Design]:
    """For each loop, of a few drawn designs the first whose settling time is well conditioned.

    An overshoot that just touches the band makes the settling time jump between two values; nobody
    would accept that as a spec. The times to 4 % and to 6 % may differ by at most a third; if they
    do in all designs, the one where they differ least is taken. An outer cascade loop is tested
    with the inner loop it got.
    """
    drawn = [
        [design(loop, rng) for _ in range(tries)] for loop, rng in zip(loops, rngs, strict=True)
    ]
    test_s = [window_s(loop)[1] // 2 for loop in loops]
    every = [seconds for seconds in test_s for _ in range(tries)]
    seen = step_tests([one for own in drawn for one in own], STEP, every)
    chosen = [
        _best(own, seen[number * tries : (number + 1) * tries]) for number, own in enumerate(drawn)
    ]
    tags = [loop.tag for loop in loops]
    for loop, inner in zip(loops, chosen, strict=True):
        if loop.primary:
            outer = tags.index(loop.primary)
            together = cascade_step_test(drawn[outer], inner, STEP, test_s[outer])
            chosen[outer] = _best(drawn[outer], list(together.T))
    return chosen


def _best(drawn: Sequence[Design], seen: Sequence[Vector]) -> Design:
    """The first design with a settling time clear of the band's edge, else the clearest."""
    spreads = [_spread(pv, one.scan_s) for pv, one in zip(seen, drawn, strict=True)]
    clear = [number for number, spread in enumerate(spreads) if spread <= 1.33]
    return drawn[clear[0] if clear else int(np.argmin(spreads))]


def _spread(pv: Vector, scan_s: int) -> float:
    """Settling time to 4 % over that to 6 % of the setpoint step."""
    x = (pv - pv[0]) / STEP
    tight, loose = _settling(x, scan_s, 4.0), _settling(x, scan_s, 6.0)
    return tight / loose if tight and loose else float("inf")


def answer(pv: Vector, size: float, scan_s: int) -> Answer:
    """Measures one response: 10-90 % rise, settling to 5 % of the change, overshoot, peaks."""
    x = (pv - pv[0]) / size
    end = float(np.mean(x[-max(len(x) // 20, 1) :]))
    error = size * (1 - end)
    if abs(end) < 0.2:
        return Answer(None, None, 0.0, None, None, error)
    x = x / end
    top = int(np.argmax(x))
    over = float(x[top] - 1)
    peaked = over > 0.005
    return Answer(
        rise_time_s=_rise(x, scan_s),
        settling_time_s=_settling(x, scan_s, BAND_PCT),
        overshoot_pct=100 * max(over, 0.0),
        peak_time_s=float(top * scan_s) if peaked else None,
        decay_ratio=_decay(x, top) if peaked else None,
        steady_state_error=error,
    )


def _cross(x: Vector, level: float) -> float:
    """Scans to the first crossing of ``level``, interpolated; nan if there is none."""
    at = int(np.argmax(x >= level))
    if x[at] < level or at == 0:
        return float("nan")
    return at - float((x[at] - level) / (x[at] - x[at - 1]))


def _rise(x: Vector, scan_s: int) -> float | None:
    scans = _cross(x, 0.9) - _cross(x, 0.1)
    return scans * scan_s if np.isfinite(scans) else None


def _settling(x: Vector, scan_s: int, band_pct: float) -> float | None:
    """Last entry into the band, if half of the test still lies behind it."""
    outside = np.flatnonzero(np.abs(x - 1) > band_pct / 100)
    last = int(outside[-1]) if outside.size else 0
    if last >= len(x) // 2:
        return None
    ahead, behind = abs(x[last] - 1), abs(x[last + 1] - 1)
    within = (ahead - band_pct / 100) / (ahead - behind) if ahead > behind else 1.0
    return float((last + within) * scan_s)


def _decay(x: Vector, top: int) -> float | None:
    """Second peak over first, both above the end; None where no second one stands out."""
    after = x[top:]
    low = int(np.argmin(after))
    second = float(after[low:].max() - 1)
    return second / float(x[top] - 1) if second > 0.005 else None

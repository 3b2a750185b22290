"""How a loop's trend grows with its history: a ratio within one run, not a test.

Run: python tests/bench/trend_growth.py. Printed: the time for 2000 steps over that for 500, best of
five each. In proportion would be 4; much more says that something is done again for every step.
"""

from __future__ import annotations

import sys
import time

import numpy as np

from audit.records import LIMITED, ChangeKind, Loop, Measured, PastStep, Quantity, Windows
from audit.trend import assess

LOOP = Loop("FIC-1", "pv", "sp", Windows(0, 0, 0), range_low=0.0, range_high=100.0)
QUANTITIES = (*LIMITED, Quantity.UNREST)
QUARTER_DAY_US = 21_600_000_000


def history(count: int, seed: int = 17) -> list[PastStep]:
    """Steps of a loop that stays as it is, each quantity scattered by 10 %."""
    rng = np.random.default_rng(seed)
    steps = []
    for at, row in enumerate(rng.normal(0.0, 0.1, (count, len(QUANTITIES)))):
        values = {q: 10.0 * float(np.exp(z)) for q, z in zip(QUANTITIES, row, strict=True)}
        measured = {q: Measured(v, 0.98 * v, 1.02 * v, "direct") for q, v in values.items()}
        at_us = at * QUARTER_DAY_US
        kind, end_us = ChangeKind.STEP, at_us + 600_000_000
        steps.append(PastStep(at_us, end_us, 50.0, 55.0, kind, True, (), measured, 2.0))
    return steps


def best_s(steps: list[PastStep], runs: int = 5) -> float:
    """Shortest of some runs, s."""
    took = []
    for _ in range(runs):
        begun = time.perf_counter()
        assess(steps, LOOP, LIMITED)
        took.append(time.perf_counter() - begun)
    return min(took)


def main() -> None:
    short, long = best_s(history(500)), best_s(history(2000))
    sys.stdout.write(
        f"trend of one loop: 500 steps {1000 * short:.0f} ms, 2000 steps {1000 * long:.0f} ms, "
        f"ratio {long / short:.1f} (in proportion: 4.0)\n"
    )


if __name__ == "__main__":
    main()

"""The demonstration site: an invented plant, simulated loop by loop, and its recorded truth.

``lay_down`` takes an empty folder and writes a whole site into it: ``site.toml``, ``loops.csv``,
``specs.csv``, one narrow ``exports/YYYY-MM-DD.csv.gz`` for each UTC day, and ``truth.json``. The
same arguments give the same files, byte for byte (with the same versions of numpy, scipy, pyarrow
and zlib).

``truth.json``: ``site``, ``seed``, ``first_day`` and ``last_day`` (UTC dates), and ``loops``, one
entry for each row of the register, in its order:

- ``tag``, ``kind``; ``story``: healthy, fault, never_met, parked, dead_tag or cut_short
- ``fault``: null, or ``cause`` (stiction, gain_loss, dead_time, retune_tight, retune_slack,
  retune_reset, saturated), ``shape`` (jump or drift), ``size`` (its meaning by cause:
  ``design.full_size``), ``from`` and ``complete`` (when it began, when it had its full size),
  ``put_right`` (when it was mended, null if never) and ``remedy``, ``shows_in`` (the measured
  quantities it should show in)
- ``never_met``: its spec was tighter than the loop ever was; ``moves_cut_short``: the next move
  comes before the last has settled; ``moving_setpoint``: inner cascade loop; ``averaging``
- ``parked_in_manual_since``, ``pv_tag_dead_since``: instants, or null
- ``limits``: the limits of its spec, by the columns of specs.csv
- ``commissioned``, ``at_full_size``: its answer to a setpoint step without noise and load, as
  commissioned and with the fault at full size (null without a fault): ``rise_time_s``,
  ``settling_time_s`` (5 % of the change), ``overshoot_pct``, ``peak_time_s``, ``decay_ratio``,
  ``steady_state_error_eu``; null where there is no such number. An inner cascade loop is tested
  alone, an outer one with its inner loop
- ``exceeds``: limited quantities of the last such answer that are beyond their limits
- ``changes``: how many setpoint changes of each kind were begun; ``manual_hours``

Instants are UTC, ``YYYY-MM-DDTHH:MM:SSZ``.
"""

from __future__ import annotations

import json
from collections.abc import Callable, Sequence
from dataclasses import dataclass
from datetime import date, timedelta
from pathlib import Path

import numpy as np

from .commissioning import STEP, Answer, answer, cascade_step_test, commission, step_tests
from .design import spoiled
from .exporting import gather, historian_tag, write_days
from .files import SITE_TOML, limits, loops_csv, specs_csv
from .operators import plan, window_s
from .plant import LOOPS, SITE_NAME, pick
from .simulate import Case, simulate
from .stories import tell
from .truth import truth_of

__all__ = ["LAST_DAY", "LOOPS", "DemoSite", "lay_down"]

LAST_DAY = date(2026, 3, 31)
_SHORTEST_DAYS = 2
_PROGRESS_STEPS = 1000
_SIMULATING = 0.8


@dataclass(frozen=True)
class DemoSite:
    """What ``lay_down`` wrote: paths, and counts of loops, days, files, narrow rows and of the
    setpoint changes the operators began. ``first_day`` and ``last_day`` are UTC days.
    """

    folder: Path
    site_toml: Path
    loops_csv: Path
    specs_csv: Path
    truth_json: Path
    exports: tuple[Path, ...]
    loops: int
    days: int
    rows: int
    changes: int
    first_day: date
    last_day: date


def lay_down(
    folder: Path,
    *,
    loops: int = 60,
    days: int = 90,
    seed: int = 20260301,
    end: date | None = None,
    progress: Callable[[int, int], None] | None = None,
) -> DemoSite:
    """Write the demonstration site into ``folder`` (made if missing), its last UTC day ``end``.

    ``loops`` 1 to 60: fewer keep loops with faults among them; ``days`` from 2: when faults come
    scales with it. ``progress`` hears (done, total) now and then. Raises ValueError on a number
    outside those bounds, FileExistsError where ``folder`` has a site.toml or exports already.
    """
    if days < _SHORTEST_DAYS:
        raise ValueError(f"a demonstration has at least {_SHORTEST_DAYS} days, not {days}")
    last_day = end or LAST_DAY
    first = last_day - timedelta(days=days - 1)
    cases = _cases(loops, days, seed)
    exports = _empty_place(folder)

    def tell_share(share: float) -> None:
        if progress is not None:
            progress(round(share * _PROGRESS_STEPS), _PROGRESS_STEPS)

    kepts = simulate(cases, days, seed, lambda share: tell_share(share * _SIMULATING))
    rows = gather(kepts, days, np.random.default_rng((seed, 3)))
    names = [historian_tag(case.loop, signal) for case in cases for signal in range(4)]
    files = write_days(
        exports,
        rows,
        names,
        first,
        lambda share: tell_share(_SIMULATING + share * (1 - _SIMULATING)),
    )
    return DemoSite(
        folder=folder,
        **_write_files(folder, cases, first, days, seed),
        exports=tuple(files),
        loops=len(cases),
        days=days,
        rows=len(rows),
        changes=sum(case.plan.moves for case in cases),
        first_day=first,
        last_day=last_day,
    )


def _empty_place(folder: Path) -> Path:
    exports = folder / "exports"
    for taken in (folder / "site.toml", exports):
        if taken.exists():
            raise FileExistsError(f"{taken} exists already")
    exports.mkdir(parents=True)
    return exports


def _cases(count: int, days: int, seed: int) -> list[Case]:
    """Each loop from a random stream of its own, so that fewer loops leave the others alike."""
    loops = pick(count)
    rngs = [np.random.default_rng((seed, 0, LOOPS.index(loop))) for loop in loops]
    designs = commission(loops, rngs)
    cases: list[Case] = []
    for number, (loop, healthy, rng) in enumerate(zip(loops, designs, rngs, strict=True)):
        story = tell(loop, healthy, days, rng)
        moves = plan(loop, story, healthy.pivot_pv, days, rng)
        cases.append(Case(number, loop, healthy, story, moves))
    return cases


def _write_files(
    folder: Path, cases: Sequence[Case], first: date, days: int, seed: int
) -> dict[str, Path]:
    """site.toml, the register, the specs and the truth; their paths by field of ``DemoSite``."""
    tested = _tested(cases)
    specs = [
        limits(case, before, np.random.default_rng((seed, 4, LOOPS.index(case.loop))))
        for case, (before, _) in zip(cases, tested, strict=True)
    ]
    truth = {
        "site": SITE_NAME,
        "seed": seed,
        "first_day": first.isoformat(),
        "last_day": (first + timedelta(days=days - 1)).isoformat(),
        "loops": [
            truth_of(case, spec, before, after, first, days)
            for case, spec, (before, after) in zip(cases, specs, tested, strict=True)
        ],
    }
    texts = {
        "site.toml": SITE_TOML,
        "loops.csv": loops_csv(cases),
        "specs.csv": specs_csv(cases, specs, first),
        "truth.json": json.dumps(truth, indent=1) + "\n",
    }
    for name, text in texts.items():
        (folder / name).write_text(text, encoding="utf-8", newline="\n")
    return {name.replace(".", "_"): folder / name for name in texts}


def _tested(cases: Sequence[Case]) -> list[tuple[Answer, Answer | None]]:
    """The step tests of each loop: as commissioned, and with its fault at full size."""
    test_s = [window_s(case.loop)[1] * (2 if case.loop.averaging else 1) for case in cases]
    healthy = [case.design for case in cases]
    faults = [case.story.fault for case in cases]
    spoilt = [
        spoiled(design, fault.cause, fault.size) if fault else design
        for design, fault in zip(healthy, faults, strict=True)
    ]
    before, after = (step_tests(designs, STEP, test_s) for designs in (healthy, spoilt))
    inner_of = {case.loop.primary: case.design for case in cases if case.loop.primary}
    found: list[tuple[Answer, Answer | None]] = []
    for number, case in enumerate(cases):
        scan_s, inner = case.design.scan_s, inner_of.get(case.loop.tag)
        if inner is not None:
            before[number] = cascade_step_test([case.design], inner, STEP, test_s[number])[:, 0]
        full = answer(after[number], STEP, scan_s) if case.story.fault else None
        found.append((answer(before[number], STEP, scan_s), full))
    return found

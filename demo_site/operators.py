"""What the board operators do to a loop over the record: setpoint moves, manual, nothing.

In go a loop, its story and design, the number of days and a random generator; out goes a ``Plan``:
events in seconds from the start of the record, setpoints in percent of range.
"""

from __future__ import annotations

from dataclasses import dataclass, field

import numpy as np
from numpy.typing import NDArray

from .plant import PlantLoop
from .stories import Story

TO_SP, TO_MANUAL, TO_AUTO = 0, 1, 2
DAY_S = 86_400
JOIN_S = 60
CELL_S = 10_800
_FIRST_MOVE_S = 1_800
_BAND = 10.0
PARKED_AT_S = 9 * 3600

WINDOWS_S = {
    "flow": (300, 600),
    "pressure": (600, 1200),
    "level": (900, 3600),
    "temperature": (900, 7200),
    "composition": (900, 7200),
}
"""Seconds of record a loop of each kind needs before and after a move."""
AVERAGING_WINDOW_S = (900, 7200)


def window_s(loop: PlantLoop) -> tuple[int, int]:
    """(before, after) in seconds, as the register gives them."""
    return AVERAGING_WINDOW_S if loop.averaging else WINDOWS_S[loop.kind]


@dataclass
class Plan:
    """``events``: (second, TO_SP / TO_MANUAL / TO_AUTO, value). A manual event's value is the pv
    its output would hold at steady state. ``changes``: setpoint changes begun, by kind of move.
    """

    first_sp: float
    events: list[tuple[float, int, float]] = field(default_factory=list)
    changes: dict[str, int] = field(
        default_factory=lambda: {"step": 0, "staircase": 0, "ramp": 0, "manual": 0}
    )

    @property
    def moves(self) -> int:
        """Setpoint changes begun, of whatever kind."""
        return sum(count for kind, count in self.changes.items() if kind != "manual")

    def columns(self) -> tuple[NDArray[np.float64], NDArray[np.int64], NDArray[np.float64]]:
        """Times, codes and values of the events, in time order."""
        ordered = sorted(self.events)
        times = np.array([event[0] for event in ordered], np.float64)
        codes = np.array([event[1] for event in ordered], np.int64)
        return times, codes, np.array([event[2] for event in ordered], np.float64)


class _Operator:
    """Draws one loop's plan day by day; holds the setpoint reached so far."""

    def __init__(
        self,
        loop: PlantLoop,
        story: Story,
        centre: float,
        days: int,
        rng: np.random.Generator,
    ) -> None:
        self.loop, self.story, self.rng, self.days = loop, story, rng, days
        self.centre = round(centre)
        self.sp = self.centre + float(rng.integers(-3, 4))
        self.plan = Plan(self.sp)
        before, after = window_s(loop)
        self.slot_s = max(before + after + 5 * JOIN_S, 2400)
        self.fast = loop.kind in ("flow", "pressure")
        self.in_cells = story.fault is not None and story.fault.cause == "stiction"
        self.free_from_s = 0.0

    def whole(self) -> Plan:
        for day in range(self.days):
            self._day(day)
        if self.story.parked is not None:
            parked_s = float(self.story.parked * DAY_S + PARKED_AT_S)
            self.plan.events = [event for event in self.plan.events if event[0] < parked_s]
            self.plan.events.append((parked_s, TO_MANUAL, round(self.centre)))
        return self.plan

    def _day(self, day: int) -> None:
        moves = self._count()
        manual = self._goes_manual()
        if self.story.cut_short:
            self._burst(day, moves)
            return
        starts = self._slots(day, moves + manual)
        slot_of_manual = int(self.rng.integers(0, len(starts))) if manual else -1
        for slot, start in enumerate(starts):
            if not _FIRST_MOVE_S < start < self._last_s():
                continue
            if slot == slot_of_manual:
                self._manual(start)
            else:
                self._move(start)

    def _last_s(self) -> float:
        """No move begins later than this: the end, or the day the loop is parked."""
        end = self.days if self.story.parked is None else self.story.parked
        return end * DAY_S - 900.0

    def _count(self) -> int:
        if self.loop.averaging:
            return 1
        shares = (0.2, 0.4, 0.3, 0.1) if self.days >= 40 else (0.0, 0.1, 0.5, 0.4)
        return int(self.rng.choice((1, 2, 3, 4), p=shares))

    def _goes_manual(self) -> bool:
        """Now and then for half an hour; a level without control would run away."""
        quiet = self.loop.kind == "level" or self.loop.note == "outer" or self.in_cells
        return not quiet and bool(self.rng.random() < 0.05)

    def _slots(self, day: int, count: int) -> list[float]:
        """Starts on ``day``, far enough apart for each window to end before the next move."""
        if self.in_cells:
            before, after = window_s(self.loop)
            cells = np.sort(self.rng.choice(DAY_S // CELL_S, count, replace=False))
            within = self.rng.uniform(before, CELL_S - after - JOIN_S, count)
            return [float(s) for s in day * DAY_S + cells * CELL_S + within]
        first_s = max(day * DAY_S, self.free_from_s)
        free_s = (day + 1) * DAY_S - first_s - (count - 1) * self.slot_s
        drawn = np.sort(self.rng.uniform(0, free_s, count)) + np.arange(count) * self.slot_s
        self.free_from_s = float(first_s + drawn[-1] + self.slot_s)
        return [float(s) for s in first_s + drawn]

    def _next_sp(self) -> float:
        small = self.rng.random() < 0.08
        size = float(self.rng.uniform(2.0, 3.5) if small else self.rng.uniform(4.0, 10.0))
        up = bool(self.rng.random() < 0.5)
        if abs(self.sp + size - self.centre) > _BAND and abs(self.sp - size - self.centre) > _BAND:
            up = self.sp < self.centre
        elif abs(self.sp + (size if up else -size) - self.centre) > _BAND:
            up = not up
        return round(self.sp + (size if up else -size), 1)

    def _move(self, start: float) -> None:
        target = self._next_sp()
        chance = float(self.rng.random())
        kind = "step" if chance < 0.86 else "staircase" if chance < 0.95 else "ramp"
        count = {"step": 1, "staircase": int(self.rng.integers(2, 5)), "ramp": 11}[kind]
        low_s, high_s = (8.0, 15.0) if self.fast else (20.0, 45.0)
        every_s = float(self.rng.uniform(low_s, high_s))
        parts = np.ones(count) if kind == "ramp" else self.rng.uniform(0.6, 1.4, count)
        levels = self.sp + (target - self.sp) * np.cumsum(parts) / parts.sum()
        for number, level in enumerate(levels):
            self.plan.events.append((start + number * every_s, TO_SP, float(level)))
        self.sp = target
        self.plan.changes[kind] += 1

    def _manual(self, start: float) -> None:
        lasts = float(self.rng.uniform(900, min(2700, self.slot_s - 480)))
        away = float(self.rng.uniform(-2.0, 2.0))
        self.plan.events.append((start, TO_MANUAL, self.sp + away))
        self.plan.events.append((start + lasts, TO_AUTO, 0.0))
        self.plan.changes["manual"] += 1
        if self.loop.tracking:
            back = start + lasts + float(self.rng.uniform(120, 300))
            self.plan.events.append((back, TO_SP, self.sp))

    def _burst(self, day: int, moves: int) -> None:
        """Impatient: the next move comes long before the last one has settled."""
        start = day * DAY_S + float(self.rng.uniform(0, DAY_S - 7200))
        for _ in range(moves):
            if _FIRST_MOVE_S < start < self._last_s():
                self._move(start)
            start += float(self.rng.uniform(240, 420))


def plan(loop: PlantLoop, story: Story, centre: float, days: int, rng: np.random.Generator) -> Plan:
    """The operators' plan of ``loop`` for ``days`` days; setpoints stay near ``centre`` percent.

    One to four setpoint changes a day, 2 to 10 % of the range, most of them single steps. The
    setpoint of an inner cascade loop is not in it: that one is the output of its primary.
    """
    if loop.primary:
        return Plan(centre)
    return _Operator(loop, story, centre, days, rng).whole()

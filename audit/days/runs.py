"""A loop's samples -> runs: stretches of consecutive samples in one state without a silence."""

from __future__ import annotations

from collections.abc import Iterable, Mapping, Sequence
from dataclasses import dataclass
from enum import IntEnum

import numpy as np
from numpy.typing import NDArray

from audit.records import Loop, Reading, Record, Role, Samples

Span = tuple[int, int]
STRETCH = 64
"""So many stamps at once are looked at for a silence."""


class State(IntEnum):
    """What a run's samples have in common."""

    PLAIN = 0
    """A good value: an output not at its limit, a mode that is automatic."""
    MARKED = 1
    """Of the output: at its limit. Of the mode: not automatic."""
    BAD = 2
    """Not good."""


@dataclass(frozen=True, eq=False)
class Runs:
    """One signal's runs in time order, without overlap: first and last stamp [n] in us, state [n].

    Of a run that was cut (at local midnight, or where a correction begins or ends) the border takes
    the place of the stamp: the state held there.
    """

    first_us: NDArray[np.int64]
    last_us: NDArray[np.int64]
    state: NDArray[np.int8]

    def __len__(self) -> int:
        return len(self.first_us)

    def __eq__(self, other: object) -> bool:
        if not isinstance(other, Runs):
            return NotImplemented
        return (
            np.array_equal(self.first_us, other.first_us)
            and np.array_equal(self.last_us, other.last_us)
            and np.array_equal(self.state, other.state)
        )

    def __hash__(self) -> int:
        return hash((self.first_us.tobytes(), self.last_us.tobytes(), self.state.tobytes()))

    def within(self, from_us: int, to_us: int) -> Runs:
        """The parts of the runs within from_us <= t <= to_us."""
        start = int(np.searchsorted(self.last_us, from_us, "left"))
        stop = int(np.searchsorted(self.first_us, to_us, "right"))
        return Runs(
            np.maximum(self.first_us[start:stop], from_us),
            np.minimum(self.last_us[start:stop], to_us),
            self.state[start:stop],
        )


NO_RUNS = Runs(np.empty(0, np.int64), np.empty(0, np.int64), np.empty(0, np.int8))


LoopRuns = Mapping[Role, Runs]
"""A loop's runs by role; a role without samples is left out."""


def runs_of(
    record: Record,
    loop: Loop,
    reading: Reading,
    spans: Mapping[Role, Sequence[Span]] | None = None,
) -> LoopRuns:
    """The runs of a record.

    ``spans``: from and to (us) of the exports the samples came in, by role; no run crosses a border
    of one. Without them the record counts as one export.
    """
    found = {}
    for role in loop.tags():
        samples = record.of(role)
        if len(samples):
            borders = () if spans is None else spans.get(role, ())
            found[role] = _runs(samples, _states(role, samples, loop), reading, role, borders)
    return found


def _states(role: Role, samples: Samples, loop: Loop) -> NDArray[np.int8]:
    if role is Role.MODE:
        state = (samples.value < 0.5).view(np.int8)
    elif role is Role.OUTPUT:
        low, high = loop.output_limits
        state = ((samples.value <= low) | (samples.value >= high)).view(np.int8)
    else:
        state = np.zeros(len(samples), np.int8)
    if not samples.good.all():
        state[~samples.good] = State.BAD
    return state


def _runs(
    samples: Samples,
    state: NDArray[np.int8],
    reading: Reading,
    role: Role,
    spans: Sequence[Span],
) -> Runs:
    stamps = samples.t_us
    starts, ends = np.array([*spans], np.int64).reshape(-1, 2).T
    breaks = np.concatenate(
        (
            [0],
            np.flatnonzero(state[1:] != state[:-1]) + 1,
            _after_silence(stamps, reading.silence_us[role]),
            np.searchsorted(stamps, starts, "left"),
            np.searchsorted(stamps, ends, "right"),
            [len(stamps)],
        )
    )
    borders = np.unique(breaks)
    first, last = borders[:-1], borders[1:] - 1
    return Runs(stamps[first], stamps[last], state[first])


def _after_silence(stamps: NDArray[np.int64], silence_us: int) -> NDArray[np.int64]:
    """Which stamps [k] come after a silence; where no stretch of some is that long none does."""
    far = np.append(stamps[::STRETCH], stamps[-1])
    if (far[1:] - far[:-1] <= silence_us).all():
        return np.empty(0, np.int64)
    return np.flatnonzero(stamps[1:] - stamps[:-1] > silence_us) + 1


def merge(kept: LoopRuns, new: LoopRuns, replaced: Mapping[Role, Sequence[Span]]) -> LoopRuns:
    """Kept runs with the replaced spans cut away and the new runs put in.

    ``replaced``: from and to (us), by role, of what ``new`` brings; new runs lie inside them. The
    order in which exports that do not overlap are merged does not matter, nor does merging one
    twice. Where an export overlaps kept runs, these are cut at its ends: their samples next to it
    are not known one by one, and the state is taken to hold up to it and from it on.
    """
    merged = {}
    for role in Role:
        parts = _outside(kept[role], replaced.get(role, ())) if role in kept else []
        if role in new:
            parts.append(new[role])
        joined = join(parts)
        if len(joined):
            merged[role] = joined
    return merged


def _outside(runs: Runs, spans: Sequence[Span]) -> list[Runs]:
    """The parts of the runs before, between and after the spans."""
    if len(runs) == 0:
        return []
    parts = []
    from_us = int(runs.first_us[0])
    to_us = int(runs.last_us[-1])
    for start, end in [*sorted(spans), (to_us + 1, to_us + 1)]:
        if start > from_us:
            parts.append(runs.within(from_us, start - 1))
        from_us = max(from_us, end + 1)
    return parts


def join(parts: Iterable[Runs]) -> Runs:
    """All runs in order; two of one state with no instant between them are one."""
    parts = [part for part in parts if len(part)] or [NO_RUNS]
    order = np.argsort(np.concatenate([part.first_us for part in parts]), kind="stable")
    first = np.concatenate([part.first_us for part in parts])[order]
    last = np.concatenate([part.last_us for part in parts])[order]
    state = np.concatenate([part.state for part in parts])[order]
    apart = (first[1:] != last[:-1] + 1) | (state[1:] != state[:-1])
    ends = np.ones(min(len(first), 1), np.bool_)
    starts, stops = np.concatenate((ends, apart)), np.concatenate((apart, ends))
    return Runs(first[starts], last[stops], state[starts])

"""What one loop's audit hands to the store."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass, field

from audit.records.signals import Record
from audit.records.standing import DayRecord
from audit.records.steps import Step
from audit.records.words import Role


@dataclass(frozen=True, eq=False)
class MeasuredStep:
    """A step with what the store keeps beside it.

    ``curve``: the slice it was measured from. ``depends_from_us``/``depends_to_us``: stamps of the
    outermost bounding samples it rests on; None where the bounding sample is not known yet, so that
    any sample found there later makes it be measured again.
    """

    step: Step
    curve: Record
    depends_from_us: int | None
    depends_to_us: int | None


@dataclass(frozen=True, eq=False)
class Edge:
    """The slice kept at one border of a covered span. ``side``: "from" or "to"."""

    border_us: int
    side: str
    record: Record


@dataclass(frozen=True, eq=False)
class KeptDay:
    """A local day's record with the state runs it was counted from (encoded by days.py)."""

    record: DayRecord
    runs: bytes


@dataclass(frozen=True)
class TagState:
    """What one tag of a loop last said: its newest good sample, and since when its value holds.

    ``held_since_us``: stamp of the first of the last samples that all have this value. Of a mode
    the value is 1.0 in an automatic mode, else 0.0.
    """

    newest_us: int
    value: float
    held_since_us: int


@dataclass(frozen=True, eq=False)
class LoopResult:
    """What one audit of one loop's new samples leads to; written in one transaction.

    ``steps``: new or measured again (one that equals the stored one changes nothing).
    ``withdrawn``: at_us of stored steps not found any more. ``edges`` and ``days`` replace those
    of the same border and side, or day; ``dropped_edges``: (border_us, side). ``tag_states``: those
    of the tags with fresh samples newer than any before.
    """

    tag: str
    steps: tuple[MeasuredStep, ...] = ()
    withdrawn: tuple[int, ...] = ()
    edges: tuple[Edge, ...] = ()
    dropped_edges: tuple[tuple[int, str], ...] = ()
    days: tuple[KeptDay, ...] = ()
    tag_states: Mapping[Role, TagState] = field(default_factory=dict)

"""A loop over time: its days, its trend against its baseline, its standing on a night."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass
from datetime import date

from audit.records.words import Group, Outcome, Quantity, StandingWord


@dataclass(frozen=True)
class DayRecord:
    """A day of a loop: microseconds of the site's local day spent in each state, and counts.

    ``span_us`` is the time between the first and the last stamp known in the day (what the shares
    refer to); ``auto_us`` in an automatic mode; ``saturated_us`` output at its limit, of
    ``output_us`` with a known output; ``pv_bad_us`` process variable bad or missing.
    """

    day: date
    span_us: int
    auto_us: int
    mode_us: int
    saturated_us: int
    output_us: int
    pv_bad_us: int


@dataclass(frozen=True)
class QuantityTrend:
    """One quantity against the loop's own baseline.

    ``baseline`` and ``recent`` are levels (medians) with 95 % intervals in the quantity's unit;
    ``changed``: worse, beyond chance and large enough to matter; ``since``: estimated instant of
    the change and its 95 % range. ``recent_steps``: how many steps the recent level rests on.
    """

    quantity: Quantity
    baseline: float | None
    baseline_low: float | None
    baseline_high: float | None
    baseline_steps: int
    provisional: bool
    recent: float | None
    recent_low: float | None
    recent_high: float | None
    beyond_chance: bool
    large_enough: bool
    since_us: int | None = None
    since_low_us: int | None = None
    since_high_us: int | None = None
    note: str = ""
    recent_steps: int = 0

    @property
    def was(self) -> float | None:
        """The baseline, or where it is only bounded above that bound."""
        return self.baseline_high if self.baseline is None else self.baseline

    @property
    def now(self) -> float | None:
        """The recent level, or where it is only bounded below that bound."""
        return self.recent_low if self.recent is None else self.recent

    @property
    def changed(self) -> bool:
        return self.beyond_chance and self.large_enough


@dataclass(frozen=True)
class Trend:
    """A loop's history against its baseline, all quantities."""

    quantities: Mapping[Quantity, QuantityTrend]

    @property
    def degraded(self) -> bool:
        return any(q.changed for q in self.quantities.values())

    @property
    def since_us(self) -> int | None:
        """Earliest estimated date among the changed quantities."""
        found = [q.since_us for q in self.quantities.values() if q.changed and q.since_us]
        return min(found) if found else None


@dataclass(frozen=True)
class ListReason:
    """One reason of a standing: a code for programs, a sentence for people."""

    code: str
    text: str


@dataclass(frozen=True)
class LimitStanding:
    """One limited quantity over the last usable steps: median, its interval, outcome."""

    quantity: Quantity
    limit: float
    outcome: Outcome
    median: float | None
    low: float | None
    high: float | None
    steps: int
    longer_than: bool = False


@dataclass(frozen=True)
class Standing:
    """Where one loop stands on one night, and what orders it in the list.

    ``distance`` is (median - reference) / max(reference, floor) of ``order_quantity``;
    ``reference_kind`` "limit" or "baseline"; ``order_value`` criticality x distance, or None in the
    groups that are ordered by criticality alone.
    """

    tag: str
    night: date
    group: Group
    standing: StandingWord
    degraded: bool
    since: date | None
    usable_steps: int
    reasons: tuple[ListReason, ...]
    limits: tuple[LimitStanding, ...]
    trend: Trend | None
    criticality: int
    distance: float | None = None
    reference: float | None = None
    reference_kind: str | None = None
    order_quantity: Quantity | None = None
    order_value: float | None = None

"""Numbers of a standing in; what a planner reads of them, each with unit and interval, out."""

from __future__ import annotations

import math
from collections.abc import Iterable, Sequence
from datetime import UTC, date, datetime, timedelta, tzinfo

from audit.evidence import FEWEST_FOR_ORDER, SIGNED
from audit.records import LimitStanding, Loop, Quantity, QuantityTrend, Reason

EPOCH = datetime(1970, 1, 1, tzinfo=UTC)
LONGEST_IN_SECONDS = 600.0
TIMES = (
    Quantity.RISE_TIME,
    Quantity.PEAK_TIME,
    Quantity.SETTLING_TIME,
    Quantity.SETTLING_TIME_5PCT,
)
STEM = {
    Quantity.RISE_TIME: "rise_time",
    Quantity.PEAK_TIME: "peak_time",
    Quantity.SETTLING_TIME: "settling_time",
    Quantity.SETTLING_TIME_5PCT: "settling_time_5pct",
    Quantity.OVERSHOOT: "overshoot",
    Quantity.DECAY_RATIO: "decay_ratio",
    Quantity.STEADY_STATE_ERROR: "steady_state_error",
}
"""What the codes of reasons about a quantity begin with."""
SEEN_AS = {
    Reason.TOO_SMALL: "too small",
    Reason.NOT_FOLLOWING: "not in automatic",
    Reason.UNSETTLED_BEFORE: "not at rest before",
    Reason.CUT_SHORT: "cut short by the next move",
    Reason.OUTPUT_SATURATED: "output saturated",
    Reason.DISTURBED: "disturbed",
    Reason.OSCILLATING: "oscillating",
    Reason.GAP: "with a gap in the record",
    Reason.BAD_QUALITY: "with bad quality",
    Reason.TOO_SPARSE: "with too few samples",
    Reason.COMPRESSED: "compressed too much",
    Reason.WINDOW_INCOMPLETE: "not complete yet",
    Reason.NO_RESPONSE: "without a response",
    Reason.NO_PEAK: "without a peak",
    Reason.NO_RANGE: "without a known range",
    Reason.NO_OUTPUT: "without an output tag",
    Reason.NEEDS_MODEL: "not a plain step",
    Reason.NOISY: "too noisy",
    Reason.AVERAGING: "averaging",
}
REMEDY = {
    Reason.CUT_SHORT: "a setpoint left alone for longer would decide",
    Reason.UNSETTLED_BEFORE: "changes made from rest would decide",
    Reason.OUTPUT_SATURATED: "changes within the reach of the output would decide",
    Reason.DISTURBED: "changes made in a quiet period would decide",
    Reason.GAP: "a record without gaps would decide",
    Reason.BAD_QUALITY: "a measurement of good quality would decide",
    Reason.TOO_SPARSE: "a shorter recording interval would decide",
    Reason.COMPRESSED: "a smaller archive deadband or larger changes would decide",
    Reason.NO_RANGE: "the range in the loop register would decide",
    Reason.NO_RESPONSE: "a process variable that answers would decide",
    Reason.NEEDS_MODEL: "plain setpoint steps would decide",
    Reason.NOISY: "noise too large for it: larger changes would decide",
    Reason.TOO_SMALL: "larger changes would decide",
}


def local_date(at_us: int, zone: tzinfo) -> date:
    """The date of an instant at the site."""
    return (EPOCH + timedelta(microseconds=at_us)).astimezone(zone).date()


def name_of(quantity: Quantity, band_pct: float | None) -> str:
    """A quantity's name at the start of a sentence; the settling time with its band."""
    if quantity is Quantity.SETTLING_TIME_5PCT:
        return "Settling time (5 %)"
    name = STEM[quantity].replace("_", " ").replace("steady state", "steady-state").capitalize()
    if quantity is Quantity.SETTLING_TIME and band_pct is not None:
        return f"{name} ({band_pct:g} %)"
    return name


class Figures:
    """Writes the numbers of one quantity that belong together: one unit, one number of decimals.

    Decimals: the first digit of half the interval's width (no finer than that is known), more only
    where a bound would else seem to lie on the limit. Times beyond 600 s are in minutes.
    """

    def __init__(
        self,
        quantity: Quantity,
        loop: Loop,
        value: float | None,
        low: float | None,
        high: float | None,
        others: Iterable[float | None] = (),
    ) -> None:
        known = [abs(n) for n in (value, low, high, *others) if n is not None]
        minutes = quantity in TIMES and max(known, default=0.0) > LONGEST_IN_SECONDS
        self._divisor = 60.0 if minutes else 1.0
        self._unit = _unit(quantity, loop, minutes)
        self._interval = (value, low, high)
        self._places = self._decimals()

    def keep_apart(self, limit: float) -> None:
        """Raise the decimals until a bound that is not the limit does not read like it."""
        bounds = [b for b in self._interval[1:] if b is not None and b != limit]
        for _ in range(3):
            if all(self.bare(b) != self._exact(limit) for b in bounds):
                return
            self._places += 1

    def bare(self, number: float) -> str:
        text = f"{number / self._divisor:.{self._places}f}"
        return text.removeprefix("-") if float(text) == 0.0 else text

    def limit(self, number: float) -> str:
        """A number that was set, as it was set."""
        return f"{self._exact(number)}{self._unit}"

    def level(self, longer_than: bool, kind: str) -> str:
        """The value with its interval: ``84 s (95 %: 78 to 93 s)``."""
        value, low, high = self._interval
        if value is None:
            return self._bounded(low, high)
        least = "at least " if longer_than else ""
        text = f"{least}{self.bare(value)}{self._unit}"
        if low is None and high is None:
            return text
        return f"{text} ({kind}: {self._bounded(low, high)})"

    def _bounded(self, low: float | None, high: float | None) -> str:
        if low is not None and high is not None:
            return f"{self.bare(low)} to {self.bare(high)}{self._unit}"
        if high is not None:
            return f"at most {self.bare(high)}{self._unit}"
        return "not known" if low is None else f"at least {self.bare(low)}{self._unit}"

    def _exact(self, number: float) -> str:
        return f"{number / self._divisor:.6g}"

    def _decimals(self) -> int:
        value, low, high = self._interval
        if low is not None and high is not None and high > low:
            size = (high - low) / 2 / self._divisor
            return min(max(-math.floor(math.log10(size)), 0), 6)
        size = max((abs(n) for n in (value, low, high) if n is not None), default=0.0)
        size /= self._divisor
        return min(max(2 - math.floor(math.log10(size)), 0), 6) if size > 0 else 0


def limit_sentence(one: LimitStanding, loop: Loop, band_pct: float | None, chosen: int) -> str:
    """Median, interval, steps and limit of one limited quantity, without a full stop."""
    name = name_of(one.quantity, band_pct)
    figures = Figures(one.quantity, loop, one.median, one.low, one.high, (one.limit,))
    figures.keep_apart(one.limit)
    if not one.steps:
        return f"{name}: not measured, limit {figures.limit(one.limit)}"
    level = figures.level(one.longer_than, interval_kind(one.steps))
    over = f"{one.steps} of the " if one.steps < chosen else "the "
    return (
        f"{name}: median {level} over {over}{last_steps(chosen)}, limit {figures.limit(one.limit)}"
    )


def times_the_limit(one: LimitStanding) -> str:
    """How many times the limit the median is; empty where that has no meaning."""
    median = one.low if one.median is None else one.median
    if median is None or one.limit <= 0.0:
        return ""
    ratio = (abs(median) if one.quantity in SIGNED else median) / one.limit
    least = "at least " if one.longer_than or one.median is None else ""
    places = 0 if ratio >= 10 else 1 if ratio >= 1.1 else 2
    return f": {least}{ratio:.{places}f} times the limit"


def change_sentence(
    one: QuantityTrend, loop: Loop, zone: tzinfo, band_pct: float | None, limited: bool
) -> str:
    """What a quantity went from and to, since when, how sure; notes on the comparison."""
    both = (one.baseline, one.recent)
    was = Figures(one.quantity, loop, one.baseline, one.baseline_low, one.baseline_high, both)
    now = Figures(one.quantity, loop, one.recent, one.recent_low, one.recent_high, both)
    text = (
        f"{name_of(one.quantity, band_pct)} went from "
        f"{was.level(False, 'interval')} to {now.level(False, 'interval')}"
        f"{_since(one, zone)}: worse beyond chance"
    )
    notes = [note for note in (one.note, "" if limited else "no limit is set on it") if note]
    if one.provisional:
        notes.append(f"baseline provisional, {one.baseline_steps} steps")
    return f"{text} ({'; '.join(notes)})." if notes else f"{text}."


def interval_kind(count: int) -> str:
    """What the interval of a median of so many values is."""
    return "95 %" if count >= FEWEST_FOR_ORDER else "range of the steps' intervals"


def last_steps(count: int) -> str:
    return "last usable step" if count == 1 else f"last {count} usable steps"


def counted(counts: Sequence[tuple[Reason, int]]) -> str:
    """``9 not in automatic, 3 output saturated``."""
    return ", ".join(f"{count} {SEEN_AS[reason]}" for reason, count in counts)


def plural(count: int, noun: str) -> str:
    return f"{count} {noun}" if count == 1 else f"{count} {noun}s"


def share(part: float, whole: float) -> str:
    """A share in whole percent; one that is not nothing never reads 0 %."""
    percent = 100.0 * part / whole
    return "less than 1 %" if 0.0 < percent < 1.0 else f"{percent:.0f} %"


def _since(one: QuantityTrend, zone: tzinfo) -> str:
    if one.since_us is None:
        return ""
    text = f" since about {local_date(one.since_us, zone)}"
    if one.since_low_us is None or one.since_high_us is None:
        return text
    first, last = local_date(one.since_low_us, zone), local_date(one.since_high_us, zone)
    return text if first == last else f"{text} (between {first} and {last})"


def _unit(quantity: Quantity, loop: Loop, minutes: bool) -> str:
    if quantity in TIMES:
        return " min" if minutes else " s"
    if quantity is Quantity.OVERSHOOT:
        return " %"
    if quantity is Quantity.STEADY_STATE_ERROR:
        return f" {loop.eu or 'engineering units'}"
    return ""

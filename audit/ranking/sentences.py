"""Numbers of a standing in; what a planner reads of them, each with unit and interval, out."""

from __future__ import annotations

from collections.abc import Sequence
from datetime import tzinfo

from audit import figures
from audit.evidence import FEWEST_FOR_ORDER, SIGNED
from audit.records import TIMES, LimitStanding, Loop, Quantity, QuantityTrend, Reason, local_day

STEM = {
    Quantity.RISE_TIME: "rise_time",
    Quantity.PEAK_TIME: "peak_time",
    Quantity.SETTLING_TIME: "settling_time",
    Quantity.SETTLING_TIME_5PCT: "settling_time_5pct",
    Quantity.OVERSHOOT: "overshoot",
    Quantity.DECAY_RATIO: "decay_ratio",
    Quantity.STEADY_STATE_ERROR: "steady_state_error",
    Quantity.UNREST: "unrest",
}
"""What the codes of reasons about a quantity begin with."""
KEEPS_UP = "More noise, or an oscillation such as a sticking valve keeps up."
SEEN_AS = {
    Reason.TOO_SMALL: "too small",
    Reason.NOT_FOLLOWING: "not in automatic",
    Reason.UNSETTLED_BEFORE: "not at rest before",
    Reason.CUT_SHORT: "cut short",
    Reason.OUTPUT_SATURATED: "output saturated",
    Reason.DISTURBED: "disturbed",
    Reason.OSCILLATING: "oscillating",
    Reason.GAP: "with a gap in the record",
    Reason.BAD_QUALITY: "with bad quality",
    Reason.TOO_SPARSE: "with too few samples",
    Reason.COMPRESSED: "compressed too much",
    Reason.WINDOW_INCOMPLETE: "not complete yet",
    Reason.NO_RESPONSE: "without a response",
    Reason.STUCK: "with a stuck sensor",
    Reason.OUT_OF_RANGE: "out of range",
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
    Reason.STUCK: "a sensor that moves would decide",
    Reason.OUT_OF_RANGE: "changes that stay inside the range would decide",
    Reason.NEEDS_MODEL: "plain setpoint steps would decide",
    Reason.NOISY: "noise too large for it: larger changes would decide",
    Reason.TOO_SMALL: "larger changes would decide",
}


def name_of(quantity: Quantity, band_pct: float | None) -> str:
    """A quantity's name at the start of a sentence; the settling time with its band."""
    if quantity is Quantity.SETTLING_TIME_5PCT:
        return "Settling time (5 %)"
    name = STEM[quantity].replace("_", " ").replace("steady state", "steady-state").capitalize()
    if quantity is Quantity.SETTLING_TIME and band_pct is not None:
        return f"{name} ({band_pct:g} %)"
    return name


def limit_sentence(one: LimitStanding, loop: Loop, band_pct: float | None) -> str:
    """Median, interval and limit of one limited quantity, without a full stop."""
    name, unit = name_of(one.quantity, band_pct), unit_of(one.quantity, loop)
    limit = figures.with_unit(figures.plain(one.limit), unit)
    level = figures.interval(
        one.median,
        one.low,
        one.high,
        unit,
        kind=interval_kind(one.steps),
        limit=one.limit,
        at_least=one.longer_than,
    )
    return f"{name} {level or 'not measured'}, limit {limit}"


def rests_on(one: LimitStanding, chosen: int) -> str:
    """What a median is of, for the end of a sentence; empty without one."""
    if not one.steps:
        return ""
    what = "known from" if one.median is None or one.steps == 1 else "median of"
    over = f"{one.steps} of the " if one.steps < chosen else "the "
    return f"; {what} {over}{last_steps(chosen)}"


def times_the_limit(one: LimitStanding) -> str:
    """How many times the limit the median is; empty where that has no meaning."""
    median = one.low if one.median is None else one.median
    if median is None or one.limit <= 0.0:
        return ""
    least = "at least " if one.longer_than or one.median is None else ""
    ratio = (abs(median) if one.quantity in SIGNED else median) / one.limit
    return f": {least}{_times(ratio)} the limit"


def change_sentence(
    one: QuantityTrend, loop: Loop, zone: tzinfo, band_pct: float | None, limited: bool
) -> str:
    """What a quantity went from and to, by how much, since when; notes on the comparison."""
    unit = unit_of(one.quantity, loop)
    was = figures.interval(
        one.baseline,
        one.baseline_low,
        one.baseline_high,
        unit,
        kind=interval_kind(one.baseline_steps),
    )
    now = figures.interval(
        one.recent, one.recent_low, one.recent_high, unit, kind=interval_kind(one.recent_steps)
    )
    text = (
        f"{name_of(one.quantity, band_pct)} got worse{_since(one, zone)}: from {was} to {now}"
        f"{_by_how_much(one, unit)}, beyond chance"
    )
    unlimited = "" if limited or one.quantity is Quantity.UNREST else "no limit is set on it"
    notes = [note for note in (one.note, unlimited) if note]
    if one.provisional:
        notes.append(f"baseline provisional, {one.baseline_steps} changes")
    why = f" {KEEPS_UP}" if one.quantity is Quantity.UNREST else ""
    return f"{text} ({'; '.join(notes)}).{why}" if notes else f"{text}.{why}"


def _by_how_much(one: QuantityTrend, unit: str) -> str:
    """The size of a change: times as long, or so much more; empty where a level is not known."""
    was, now = one.was, one.now
    if was is None or now is None:
        return ""
    least = "at least " if one.recent is None or one.baseline is None else ""
    if one.quantity in TIMES:
        return f", {least}{_times(now / was)} as long" if was > 0.0 else ""
    if one.quantity is Quantity.UNREST:
        return f", {least}{_times(now / was)} as large" if was > 0.0 else ""
    more = "points" if one.quantity is Quantity.OVERSHOOT else unit
    return f", {least}{figures.with_unit(figures.lone(now - was), more)} more"


def _times(ratio: float) -> str:
    places = 0 if ratio >= 10 else 1 if ratio >= 1.1 else 2
    return f"{ratio:.{places}f} times"


def interval_kind(count: int) -> str:
    """What the interval of a median of so many values is: below six, all that they reach."""
    return "95 %" if count >= FEWEST_FOR_ORDER else "range"


def last_steps(count: int) -> str:
    return "last usable change" if count == 1 else f"last {count} usable changes"


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
    text = f" about {local_day(one.since_us, zone)}"
    if one.since_low_us is None or one.since_high_us is None:
        return text
    first, last = local_day(one.since_low_us, zone), local_day(one.since_high_us, zone)
    return text if first == last else f"{text} (between {first} and {last})"


def unit_of(quantity: Quantity, loop: Loop) -> str:
    """The unit of a quantity that can be limited."""
    if quantity in TIMES:
        return "s"
    if quantity is Quantity.OVERSHOOT:
        return "%"
    if quantity in (Quantity.STEADY_STATE_ERROR, Quantity.UNREST):
        return loop.eu or "engineering units"
    return ""

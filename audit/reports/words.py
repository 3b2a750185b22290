"""Codes in, words out: what each code of the contract is called in front of a person.

Names and sentences only; numbers are written by ``figures.py``. The codes are those of
``audit.records``; a test holds that every one of them has its words here and in README.md.
"""

from __future__ import annotations

from collections.abc import Mapping
from typing import NamedTuple

from audit.records import ChangeKind, Group, Outcome, Quantity, Reason, StandingWord


class Term(NamedTuple):
    """A quantity's name and unit; ``EU`` in the unit stands for the loop's engineering unit."""

    name: str
    unit: str


QUANTITY: Mapping[Quantity, Term] = {
    Quantity.RISE_TIME: Term("rise time", "s"),
    Quantity.PEAK_TIME: Term("peak time", "s"),
    Quantity.SETTLING_TIME: Term("settling time", "s"),
    Quantity.SETTLING_TIME_2PCT: Term("settling time (2 %)", "s"),
    Quantity.SETTLING_TIME_5PCT: Term("settling time (5 %)", "s"),
    Quantity.OVERSHOOT: Term("overshoot", "%"),
    Quantity.UNDERSHOOT: Term("undershoot", "%"),
    Quantity.STEADY_STATE_ERROR: Term("steady-state error", "EU"),
    Quantity.DEAD_TIME: Term("apparent dead time", "s"),
    Quantity.DECAY_RATIO: Term("decay ratio", ""),
    Quantity.DAMPING_RATIO: Term("damping ratio", ""),
    Quantity.NATURAL_FREQUENCY: Term("undamped natural frequency", "rad/s"),
    Quantity.DAMPED_PERIOD: Term("damped period", "s"),
    Quantity.IAE: Term("integral of absolute error", "EU·s"),
    Quantity.UNREST: Term("unrest", "EU"),
    Quantity.ARCHIVE_DEADBAND: Term("archive deadband", "EU"),
    Quantity.OUTPUT_TRAVEL: Term("controller output travel", "% of output"),
    Quantity.OUTPUT_OVERSHOOT: Term("controller output overshoot", "%"),
    Quantity.OUTPUT_REVERSALS: Term("controller output reversals", ""),
    Quantity.OUTPUT_SATURATED: Term("controller output saturated", "%"),
    Quantity.OUTPUT_REACTION: Term("controller output reaction", "s"),
}

STANDING: Mapping[StandingWord, str] = {
    StandingWord.OUT_OF_SPEC: "out of spec",
    StandingWord.IN_SPEC: "in spec",
    StandingWord.UNDECIDED: "undecided",
    StandingWord.UNSEEN: "unseen",
}

OUTCOME: Mapping[Outcome, str] = {
    Outcome.IN_SPEC: "in spec",
    Outcome.OUT_OF_SPEC: "out of spec",
    Outcome.UNDECIDED: "undecided",
    Outcome.NOT_MEASURED: "not measured",
    Outcome.NOT_APPLICABLE: "not applicable",
}

GROUP: Mapping[Group, str] = {
    Group.OUT_AND_CHANGED: "Out of spec, and worse than the loop itself used to be",
    Group.DEGRADING: "Degrading: worse than the loop used to be, not out of spec",
    Group.NEVER_MET: "Out of spec, but not changed: a question for the engineer, not the crew",
    Group.UNDECIDED: "Undecided: the data cannot tell",
    Group.UNSEEN: "Unseen: no usable setpoint change in the period",
    Group.IN_SPEC: "In spec",
}

KIND: Mapping[ChangeKind, str] = {
    ChangeKind.STEP: "step",
    ChangeKind.STAIRCASE: "staircase",
    ChangeKind.RAMP: "ramp",
    ChangeKind.MOVING: "moving",
}

REASON: Mapping[Reason, str] = {
    Reason.TOO_SMALL: "the change is inside the noise, or smaller than the spec's minimum",
    Reason.NOT_FOLLOWING: "not in an automatic mode, or the setpoint tracks the process variable",
    Reason.UNSETTLED_BEFORE: "the loop was not at rest before the change",
    Reason.CUT_SHORT: "the next move, or the end of the window, came before it settled",
    Reason.OUTPUT_SATURATED: "the controller output was at its limit",
    Reason.DISTURBED: "a disturbance that the change does not explain",
    Reason.OSCILLATING: "a sustained oscillation before and after",
    Reason.GAP: "a gap in the record",
    Reason.BAD_QUALITY: "bad quality in the record",
    Reason.TOO_SPARSE: "too few samples",
    Reason.COMPRESSED: "the historian's deadband is too large for the change",
    Reason.WINDOW_INCOMPLETE: "the record ends inside the window",
    Reason.NO_RESPONSE: "the process variable did not answer",
    Reason.STUCK: "the process variable kept one value to the last digit: a stuck sensor",
    Reason.OUT_OF_RANGE: "the process variable was at or beyond its range",
    Reason.NO_PEAK: "there is no peak beyond the noise",
    Reason.NO_RANGE: "the loop's range is not in the register",
    Reason.NO_OUTPUT: "the loop has no controller output tag",
    Reason.NEEDS_MODEL: "not measured yet: only a model of the response could give it",
    Reason.NOISY: "the noise is too large for it",
    Reason.AVERAGING: "an averaging level is meant to float",
}

MANY_MOVES: Mapping[ChangeKind, str] = {
    ChangeKind.STAIRCASE: "not measured on changes of several moves",
    ChangeKind.RAMP: "not measured on ramps",
    ChangeKind.MOVING: "not measured on a setpoint that never rests",
}
"""What ``needs_model`` means to a person, by the kind of change."""

REMARKS = frozenset(
    {
        *("parked_manual", "pv_bad_often", "output_saturated_often", "evidence_old"),
        *("no_response_seen", "oscillating_often", "few_usable", "not_in_register"),
    }
)
"""Codes of reasons that say something of a loop whatever its standing: never left out of a list."""

CAUTIONS = (
    "Loopassay advises and changes nothing in the plant. Changes to tuning, setpoints or equipment "
    "go through the site's own procedures, local codes and licensed people.",
    "It judges how a loop follows its setpoint: not how it rejects disturbances, and not safety "
    "functions.",
)

ORDER = (
    "Order: by the groups above; within the first three by criticality times distance from the "
    "limit (or, when degrading, from the loop's own past), in the others by criticality; ties by "
    "tag. --all shows each loop's."
)


def unit_of(quantity: Quantity, eu: str) -> str:
    """The unit of a quantity on a loop whose engineering unit is ``eu`` ("EU" where unknown)."""
    return QUANTITY[quantity].unit.replace("EU", eu or "EU")


def name_of(code: str, band_pct: float | None = None) -> str:
    """A quantity's name from its code, the settling time with the band it is judged in; a code
    this version does not know stays itself.
    """
    names = {quantity.value: term.name for quantity, term in QUANTITY.items()}
    if code == Quantity.SETTLING_TIME.value and band_pct is not None:
        return f"{names[code]} ({band_pct:g} %)"
    return names.get(code, code)


def reason_of(code: str, kind: ChangeKind = ChangeKind.STEP) -> str:
    """A reason's words from its code; a code this version does not know stays itself."""
    if code == Reason.NEEDS_MODEL.value and kind in MANY_MOVES:
        return MANY_MOVES[kind]
    return {reason.value: words for reason, words in REASON.items()}.get(code, code)

"""The words the rooms share: roles, kinds, quantities, reasons, outcomes, groups."""

from __future__ import annotations

from enum import StrEnum


class Role(StrEnum):
    """What a historian tag is to its loop."""

    PV = "pv"
    SP = "sp"
    OUTPUT = "output"
    MODE = "mode"


class LoopKind(StrEnum):
    """The controlled variable."""

    FLOW = "flow"
    PRESSURE = "pressure"
    LEVEL = "level"
    TEMPERATURE = "temperature"
    COMPOSITION = "composition"
    SPEED = "speed"
    OTHER = "other"


class Between(StrEnum):
    """How a signal runs between two samples."""

    LINEAR = "linear"
    HOLD = "hold"


class ChangeKind(StrEnum):
    """How the setpoint went from one held value to the next."""

    STEP = "step"
    STAIRCASE = "staircase"
    RAMP = "ramp"
    MOVING = "moving"


class Quantity(StrEnum):
    """What is measured of a response; definitions stand in DEVELOPERS.md's glossary."""

    RISE_TIME = "rise_time_s"
    PEAK_TIME = "peak_time_s"
    SETTLING_TIME = "settling_time_s"
    SETTLING_TIME_2PCT = "settling_time_2pct_s"
    SETTLING_TIME_5PCT = "settling_time_5pct_s"
    OVERSHOOT = "overshoot_pct"
    UNDERSHOOT = "undershoot_pct"
    STEADY_STATE_ERROR = "steady_state_error_eu"
    DEAD_TIME = "apparent_dead_time_s"
    DECAY_RATIO = "decay_ratio"
    DAMPING_RATIO = "damping_ratio"
    NATURAL_FREQUENCY = "natural_frequency_rad_s"
    DAMPED_PERIOD = "damped_period_s"
    IAE = "iae_eu_s"
    UNREST = "unrest_eu"
    ARCHIVE_DEADBAND = "archive_deadband_eu"
    OUTPUT_TRAVEL = "output_travel"
    OUTPUT_OVERSHOOT = "output_overshoot_pct"
    OUTPUT_REVERSALS = "output_reversals"
    OUTPUT_SATURATED = "output_saturated_pct"
    OUTPUT_REACTION = "output_reaction_s"


LIMITED = (
    Quantity.RISE_TIME,
    Quantity.SETTLING_TIME,
    Quantity.OVERSHOOT,
    Quantity.PEAK_TIME,
    Quantity.DECAY_RATIO,
    Quantity.STEADY_STATE_ERROR,
)
"""The quantities a spec can limit, in the order of the columns of specs.csv."""

TIMES = (
    Quantity.RISE_TIME,
    Quantity.SETTLING_TIME,
    Quantity.PEAK_TIME,
    Quantity.SETTLING_TIME_5PCT,
)
"""The times a loop is compared with its own past in."""


class Reason(StrEnum):
    """Why a change, or one quantity of it, was not measured, not counted or not judged."""

    TOO_SMALL = "too_small"
    NOT_FOLLOWING = "not_following"
    UNSETTLED_BEFORE = "unsettled_before"
    CUT_SHORT = "cut_short"
    OUTPUT_SATURATED = "output_saturated"
    DISTURBED = "disturbed"
    OSCILLATING = "oscillating"
    GAP = "gap"
    BAD_QUALITY = "bad_quality"
    TOO_SPARSE = "too_sparse"
    COMPRESSED = "compressed"
    WINDOW_INCOMPLETE = "window_incomplete"
    NO_RESPONSE = "no_response"
    STUCK = "stuck"
    OUT_OF_RANGE = "out_of_range"
    NO_PEAK = "no_peak"
    NO_RANGE = "no_range"
    NO_OUTPUT = "no_output"
    NEEDS_MODEL = "needs_model"
    NOISY = "noisy"
    AVERAGING = "averaging"


class Outcome(StrEnum):
    """The verdict on one limited quantity."""

    IN_SPEC = "in_spec"
    OUT_OF_SPEC = "out_of_spec"
    UNDECIDED = "undecided"
    NOT_MEASURED = "not_measured"
    NOT_APPLICABLE = "not_applicable"


class StandingWord(StrEnum):
    """Where a loop stands against its spec."""

    OUT_OF_SPEC = "out_of_spec"
    IN_SPEC = "in_spec"
    UNDECIDED = "undecided"
    UNSEEN = "unseen"


class Group(StrEnum):
    """The groups of the ranked list, in its order."""

    OUT_AND_CHANGED = "out_and_changed"
    DEGRADING = "degrading"
    NEVER_MET = "never_met"
    UNDECIDED = "undecided"
    UNSEEN = "unseen"
    IN_SPEC = "in_spec"

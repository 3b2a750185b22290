"""The vocabulary: what the rooms hand to one another. Values and their invariants, nothing else.

Units are in the names: ``_us`` integer microseconds (an instant ``*_at_us``/``t_us`` counts from
1970-01-01T00:00Z, without leap seconds), ``_s`` seconds, ``_eu`` engineering units of the loop,
``_pct`` percent of the change. Nothing here is ever NaN or infinite except ``Samples.value`` of a
sample that is not good: what was not measured is ``None`` with a ``Reason``.
"""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from dataclasses import dataclass, field
from datetime import UTC, date, datetime, timedelta
from enum import StrEnum

import numpy as np
from numpy.typing import NDArray

from audit.errors import Fault

SECOND_US = 1_000_000
DAY_US = 86_400 * SECOND_US
EPOCH = datetime(1970, 1, 1, tzinfo=UTC)


def instant(at_us: int) -> datetime:
    """Microseconds since 1970-01-01T00:00Z as an aware UTC time."""
    return EPOCH + timedelta(microseconds=at_us)


def to_us(at: datetime) -> int:
    """An aware time as microseconds since 1970-01-01T00:00Z, exactly."""
    return (at - EPOCH) // timedelta(microseconds=1)


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
    OUTPUT_TRAVEL = "output_travel"
    OUTPUT_OVERSHOOT = "output_overshoot_pct"
    OUTPUT_REVERSALS = "output_reversals"
    OUTPUT_SATURATED = "output_saturated_pct"


LIMITED = (
    Quantity.RISE_TIME,
    Quantity.SETTLING_TIME,
    Quantity.OVERSHOOT,
    Quantity.PEAK_TIME,
    Quantity.DECAY_RATIO,
    Quantity.STEADY_STATE_ERROR,
)
"""The quantities a spec can limit, in the order of the columns of specs.csv."""


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


@dataclass(frozen=True)
class Windows:
    """How far around a setpoint change the record is looked at."""

    before_us: int
    after_us: int
    join_us: int

    @property
    def reach_us(self) -> int:
        """How far from a border of the record a change can still depend on what lies across it."""
        return self.before_us + self.after_us + 2 * self.join_us


@dataclass(frozen=True)
class Reading:
    """How a site's samples are to be read between stamps, and which silence is a gap."""

    pv_between: Between = Between.LINEAR
    output_between: Between = Between.HOLD
    silence_us: Mapping[Role, int] = field(
        default_factory=lambda: {
            Role.PV: 900 * SECOND_US,
            Role.OUTPUT: 900 * SECOND_US,
            Role.SP: 90_000 * SECOND_US,
            Role.MODE: 90_000 * SECOND_US,
        }
    )


@dataclass(frozen=True)
class Loop:
    """One row of the loop register. ``windows`` is the site's, with the row's own put in."""

    tag: str
    pv: str
    sp: str
    windows: Windows
    process_unit: str = ""
    service: str = ""
    kind: LoopKind = LoopKind.OTHER
    output: str | None = None
    mode: str | None = None
    eu: str = ""
    range_low: float | None = None
    range_high: float | None = None
    output_low: float = 0.0
    output_high: float = 100.0
    auto_modes: tuple[str, ...] = ()
    criticality: int = 3
    cascade_primary: str | None = None
    averaging: bool = False
    notes: str = ""

    @property
    def span_eu(self) -> float | None:
        """Width of the range, engineering units; None where the range is unknown."""
        if self.range_low is None or self.range_high is None:
            return None
        return self.range_high - self.range_low

    def tags(self) -> dict[Role, str]:
        """The historian's tags of this loop by role, blank ones left out."""
        named = {
            Role.PV: self.pv,
            Role.SP: self.sp,
            Role.OUTPUT: self.output,
            Role.MODE: self.mode,
        }
        return {role: tag for role, tag in named.items() if tag}


@dataclass(frozen=True)
class Spec:
    """The limits of one loop from ``valid_from`` (UTC) on. Every limit is a maximum of the size."""

    tag: str
    valid_from: datetime
    limits: Mapping[Quantity, float]
    settling_band_pct: float = 2.0
    min_step_eu: float | None = None
    set_by: str = ""
    reason: str = ""
    version: int = 0
    entered_at: datetime | None = None


def spec_in_force(specs: Sequence[Spec], at: datetime) -> Spec | None:
    """Of one loop's specs the one that holds at an instant; of equal dates the newest version."""
    held = [spec for spec in specs if spec.valid_from <= at]
    return max(held, key=lambda spec: (spec.valid_from, spec.version)) if held else None


@dataclass(frozen=True, eq=False)
class Samples:
    """One signal: stamps [n] in microseconds, strictly rising; values [n]; which are good [n].

    A value that is not good is NaN. Of a mode the value is 1.0 in an automatic mode, else 0.0.
    """

    t_us: NDArray[np.int64]
    value: NDArray[np.float64]
    good: NDArray[np.bool_]

    def __len__(self) -> int:
        return len(self.t_us)

    @staticmethod
    def empty() -> Samples:
        return Samples(np.empty(0, np.int64), np.empty(0, np.float64), np.empty(0, np.bool_))

    def only_good(self) -> Samples:
        """The good samples alone."""
        if bool(self.good.all()):
            return self
        return Samples(self.t_us[self.good], self.value[self.good], self.good[self.good])

    def between(self, from_us: int, to_us: int) -> Samples:
        """Samples with from_us <= t <= to_us."""
        first = int(np.searchsorted(self.t_us, from_us, "left"))
        last = int(np.searchsorted(self.t_us, to_us, "right"))
        return Samples(self.t_us[first:last], self.value[first:last], self.good[first:last])

    def around(self, from_us: int, to_us: int) -> Samples:
        """As ``between``, with the last good sample before and the first good one after."""
        good_at = self.t_us[self.good]
        before = int(np.searchsorted(good_at, from_us, "left")) - 1
        after = int(np.searchsorted(good_at, to_us, "right"))
        start = int(good_at[before]) if before >= 0 else from_us
        end = int(good_at[after]) if after < len(good_at) else to_us
        return self.between(start, end)


@dataclass(frozen=True, eq=False)
class RawSamples:
    """One column as an export gives it. With ``texts`` set, ``value`` is an index into it."""

    samples: Samples
    texts: tuple[str, ...] | None = None


@dataclass(frozen=True, eq=False)
class Record:
    """The samples of one loop by role over some time."""

    signals: Mapping[Role, Samples]

    def of(self, role: Role) -> Samples:
        """The samples of a role; empty where the loop has no such tag or nothing came."""
        return self.signals.get(role, Samples.empty())

    def around(self, from_us: int, to_us: int) -> Record:
        """Each signal in from_us..to_us with its bounding good samples."""
        return Record({role: s.around(from_us, to_us) for role, s in self.signals.items()})


@dataclass(frozen=True)
class SetpointChange:
    """One setpoint change and the part of the record that belongs to it.

    ``moves``: (stamp, value after it) of each move, the first at ``at_us``. The window ends at
    ``window_end_us``, which is at_us + after or an earlier cut; ``cut`` names the cut
    (CUT_SHORT: a later move; NOT_FOLLOWING: left automatic). ``complete``: the record reaches the
    end of the window. ``set_aside``: what spoils the whole change.
    """

    at_us: int
    sp_from: float
    sp_to: float
    kind: ChangeKind
    moves: tuple[tuple[int, float], ...]
    window_end_us: int
    complete: bool
    cut: Reason | None = None
    set_aside: tuple[Reason, ...] = ()
    sp_noise_eu: float = 0.0

    @property
    def size_eu(self) -> float:
        """Signed size of the change."""
        return self.sp_to - self.sp_from

    @property
    def window_s(self) -> float:
        return (self.window_end_us - self.at_us) / SECOND_US


@dataclass(frozen=True)
class Measured:
    """One quantity of one response: value and 95 % interval, or the reason why there is none.

    ``value`` None with ``low`` set and ``high`` None is "longer than low". ``value`` None with
    ``high`` set is "at most high". ``how``: "direct", "model", "direct_r1" (the final level was
    taken to be the setpoint, its uncertainty error_u_eu).
    """

    value: float | None = None
    low: float | None = None
    high: float | None = None
    how: str | None = None
    why: Reason | None = None

    def __post_init__(self) -> None:
        if self.value is None and self.low is None and self.high is None and self.why is None:
            raise ValueError("a quantity without value and bound needs a reason")

    @property
    def known(self) -> bool:
        """A value or at least one bound."""
        return not (self.value is None and self.low is None and self.high is None)

    @staticmethod
    def missing(why: Reason) -> Measured:
        return Measured(why=why)

    @staticmethod
    def longer_than(low: float, how: str, why: Reason) -> Measured:
        return Measured(low=low, how=how, why=why)


@dataclass(frozen=True)
class Response:
    """All that was measured of one change. ``measured`` holds every Quantity.

    Levels: ``y0_eu``, ``y_end_eu`` (None where there is none), ``noise_eu`` standard deviation of
    the process variable's noise. ``method_version``: code and parameters it was measured with.
    ``spec_band_pct``: the band the settling time of the spec was measured in.
    """

    measured: Mapping[Quantity, Measured]
    method_version: str
    spec_band_pct: float
    y0_eu: float | None = None
    y_end_eu: float | None = None
    noise_eu: float | None = None


@dataclass(frozen=True)
class Verdict:
    """The judgement of one limited quantity of one step against the spec in force at the step."""

    limit: float
    outcome: Outcome
    spec_valid_from: datetime
    spec_version: int
    why: Reason | None = None


@dataclass(frozen=True)
class Step:
    """One setpoint change, measured and judged."""

    change: SetpointChange
    response: Response
    verdicts: Mapping[Quantity, Verdict]
    usable: bool
    set_aside: tuple[Reason, ...]


@dataclass(frozen=True)
class QuantityTrend:
    """One quantity against the loop's own baseline.

    ``baseline`` and ``recent`` are levels (medians) with 95 % intervals in the quantity's unit;
    ``changed``: worse, beyond chance and large enough to matter; ``since``: estimated instant of
    the change and its 95 % range.
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
class CellAccount:
    """What became of every cell of one export file.

    ``read`` is counted apart from the rest (rows x value columns in a wide file, rows in a narrow
    one); ``balance`` is read minus all the others and must be 0.
    """

    rows: int = 0
    read: int = 0
    taken: int = 0
    duplicate: int = 0
    replaced: int = 0
    blank: int = 0
    bad_quality: int = 0
    unregistered: int = 0
    refused: Mapping[str, int] = field(default_factory=dict)

    @property
    def balance(self) -> int:
        return self.read - (
            self.taken
            + self.duplicate
            + self.replaced
            + self.blank
            + self.bad_quality
            + self.unregistered
            + sum(self.refused.values())
        )


@dataclass(frozen=True)
class ExportSource:
    """One ``[[exports]]`` table of site.toml, checked; ``files`` is relative to ``folder``."""

    name: str
    files: str
    folder: str = "."
    format: str = "csv"
    layout: str = "wide"
    time: str = "timestamp"
    time_format: str = "iso8601"
    timezone: str = "UTC"
    tag: str = "tag"
    value: str = "value"
    quality: str | None = None
    quality_scheme: str = "words"
    good: tuple[str, ...] = ("Good",)
    uncertain_is_good: bool = False
    reading: Reading = field(default_factory=Reading)
    revision: str = ""
    delimiter: str = ","
    decimal: str = "."


@dataclass(frozen=True)
class StandingRule:
    """``[standing]``: a loop is judged on its last ``steps`` usable steps of ``days`` days."""

    steps: int = 10
    days: int = 30
    error_u_eu: float | None = None


@dataclass(frozen=True)
class MeasureSettings:
    """What a measurement rests on beside the samples; all of it enters ``method_version``'s hash.

    ``band_pct``: the spec's settling band, percent of the change. ``min_step_eu``: smaller changes
    are set aside. ``span_eu``: width of the loop's range. ``error_u_eu``: standard uncertainty of
    "ends at its setpoint" for a response that was cut; None: 0.5 % of the range, or without a
    range no number of that kind.
    """

    band_pct: float = 2.0
    min_step_eu: float | None = None
    span_eu: float | None = None
    error_u_eu: float | None = None
    output_low: float = 0.0
    output_high: float = 100.0
    reading: Reading = field(default_factory=Reading)
    before_us: int = 120 * SECOND_US
    after_us: int = 3600 * SECOND_US


@dataclass(frozen=True)
class PastStep:
    """What trend and standing need of one stored step. ``usable`` as judged at the step."""

    at_us: int
    window_end_us: int
    sp_from: float
    sp_to: float
    kind: ChangeKind
    usable: bool
    set_aside: tuple[Reason, ...]
    measured: Mapping[Quantity, Measured]
    band_pct: float


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


@dataclass(frozen=True, eq=False)
class LoopResult:
    """What one audit of one loop's new samples leads to; written in one transaction.

    ``steps``: new or measured again (one that equals the stored one changes nothing).
    ``withdrawn``: at_us of stored steps not found any more. ``edges`` and ``days`` replace those
    of the same border and side, or day; ``dropped_edges``: (border_us, side).
    """

    tag: str
    steps: tuple[MeasuredStep, ...] = ()
    withdrawn: tuple[int, ...] = ()
    edges: tuple[Edge, ...] = ()
    dropped_edges: tuple[tuple[int, str], ...] = ()
    days: tuple[KeptDay, ...] = ()


@dataclass(frozen=True)
class ExportFile:
    """One file or object an export source names. ``stamp``: modification time or ETag, as text."""

    source: str
    path: str
    size: int
    stamp: str
    revision: int


@dataclass(frozen=True, eq=False)
class ExportRead:
    """What one export file holds of the wanted tags, and what became of each of its cells."""

    content_hash: str
    first_us: int | None
    last_us: int | None
    named: tuple[str, ...]
    columns: Mapping[str, RawSamples]
    account: CellAccount
    faults: tuple[Fault, ...] = ()


@dataclass(frozen=True)
class Coverage:
    """A tag's time from the first to the last stamp of an export file that names it."""

    tag: str
    from_us: int
    to_us: int
    source: str
    path: str
    revision: int

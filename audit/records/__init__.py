"""The vocabulary: what the rooms hand to one another. Values and their invariants, nothing else.

Units are in the names: ``_us`` integer microseconds (an instant ``*_at_us``/``t_us`` counts from
1970-01-01T00:00Z, without leap seconds), ``_s`` seconds, ``_eu`` engineering units of the loop,
``_pct`` percent of the change. Nothing here is ever NaN or infinite except ``Samples.value`` of a
sample that is not good: what was not measured is ``None`` with a ``Reason``.
"""

from audit.records.instants import DAY_US, EPOCH, SECOND_US, instant, local_day, to_us
from audit.records.kept import Edge, KeptDay, LoopResult, MeasuredStep, TagState
from audit.records.plant import (
    ExportSource,
    FileLimits,
    IntakeRule,
    Loop,
    MeasureSettings,
    Reading,
    Spec,
    StandingRule,
    Windows,
    spec_in_force,
)
from audit.records.signals import (
    CellAccount,
    Coverage,
    ExportFile,
    ExportRead,
    RawSamples,
    Record,
    Samples,
)
from audit.records.standing import (
    DayRecord,
    LimitStanding,
    ListReason,
    QuantityTrend,
    Standing,
    Trend,
)
from audit.records.steps import Measured, PastStep, Response, SetpointChange, Step, Verdict
from audit.records.words import (
    LIMITED,
    TIMES,
    Between,
    ChangeKind,
    Group,
    LoopKind,
    Outcome,
    Quantity,
    Reason,
    Role,
    StandingWord,
)

__all__ = [
    "DAY_US",
    "EPOCH",
    "LIMITED",
    "SECOND_US",
    "TIMES",
    "Between",
    "CellAccount",
    "ChangeKind",
    "Coverage",
    "DayRecord",
    "Edge",
    "ExportFile",
    "ExportRead",
    "ExportSource",
    "FileLimits",
    "Group",
    "IntakeRule",
    "KeptDay",
    "LimitStanding",
    "ListReason",
    "Loop",
    "LoopKind",
    "LoopResult",
    "MeasureSettings",
    "Measured",
    "MeasuredStep",
    "Outcome",
    "PastStep",
    "Quantity",
    "QuantityTrend",
    "RawSamples",
    "Reading",
    "Reason",
    "Record",
    "Response",
    "Role",
    "Samples",
    "SetpointChange",
    "Spec",
    "Standing",
    "StandingRule",
    "StandingWord",
    "Step",
    "TagState",
    "Trend",
    "Verdict",
    "Windows",
    "instant",
    "local_day",
    "spec_in_force",
    "to_us",
]

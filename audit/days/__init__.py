"""A loop's samples come in, a record of each local day goes out: how long it was in which state.

Between the two stand runs: stretches of consecutive samples in one state without a silence. A day's
runs are kept (encoded) beside its record, so that what later exports bring can be put in without
reading the old ones again. Stamps are integer microseconds throughout, and a run never reaches
across the border of the export span it came in: neighbours are not melted together, because another
export may still bring samples between them. So the counts are the same to the microsecond however
the record was cut into files and in whichever order they came.
"""

from audit.days.calendar import (
    day_records,
    join_days,
    keep_days,
    needed,
    split_days,
    touched,
)
from audit.days.coding import decode, encode
from audit.days.runs import LoopRuns, Runs, State, merge, runs_of

__all__ = [
    "LoopRuns",
    "Runs",
    "State",
    "day_records",
    "decode",
    "encode",
    "join_days",
    "keep_days",
    "merge",
    "needed",
    "runs_of",
    "split_days",
    "touched",
]

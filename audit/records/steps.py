"""One setpoint change, what was measured of it, and how it was judged."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass
from datetime import datetime

from audit.records.instants import SECOND_US
from audit.records.words import ChangeKind, Outcome, Quantity, Reason


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

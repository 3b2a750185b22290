"""What a site says of itself: loops, specs, export sources, settings."""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from dataclasses import dataclass, field
from datetime import datetime

from audit.records.instants import SECOND_US
from audit.records.words import Between, LoopKind, Quantity, Role


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

    @property
    def output_limits(self) -> tuple[float, float]:
        """Output at or below the first, at or above the second counts as saturated.

        Within 0.1 % of the output's span of its end: a limit is seldom reached to the last digit.
        """
        margin = 0.001 * (self.output_high - self.output_low)
        return self.output_low + margin, self.output_high - margin

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


@dataclass(frozen=True)
class FileLimits:
    """What one export file may hold at most; beyond it the file, row or text is refused.

    ``largest_file_bytes``: as stored. ``largest_unpacked_bytes``: after decompression, and
    ``largest_ratio`` times the stored bytes, looked at from 64 MB on. ``longest_text``: characters
    of one cell kept as text. ``most_texts``: different texts of one mode tag. MB are decimal.
    """

    largest_file_bytes: int = 20_000_000_000
    largest_unpacked_bytes: int = 200_000_000_000
    largest_ratio: int = 1000
    most_columns: int = 100_000
    longest_row_bytes: int = 8_192_000
    longest_text: int = 200
    most_texts: int = 10_000


@dataclass(frozen=True)
class IntakeRule:
    """``[intake]``: how a run reads. ``cores`` None: all that this process may use.

    ``scratch``: absolute path of the folder for a run's scratch files; "" is the system's own.
    """

    cores: int | None = None
    scratch: str = ""
    limits: FileLimits = FileLimits()


@dataclass(frozen=True)
class ExportSource:
    """One ``[[exports]]`` table of site.toml, checked; ``files`` is relative to ``folder``.

    ``thousands``: the mark between groups of three digits, "" for none. ``true_words`` and
    ``false_words`` read as 1 and 0 where a number is asked for.
    """

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
    thousands: str = ""
    true_words: tuple[str, ...] = ("true",)
    false_words: tuple[str, ...] = ("false",)
    limits: FileLimits = FileLimits()


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
    are set aside. ``span_eu``: width of the loop's range, ``range_low``, ``range_high``: its ends;
    None where they are unknown. ``error_u_eu``: standard uncertainty of
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
    range_low: float | None = None
    range_high: float | None = None

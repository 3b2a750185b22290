"""The tables. What goes in and out of them stands in ``writes`` and ``queries``.

Keys are natural: a loop by its tag, a step by loop and instant, an export by path and content hash.
What was measured or published is never overwritten: it gets ``superseded_at`` and a successor.
``*_us`` are microseconds since 1970-01-01T00:00Z; the schema itself is made by migrations alone.
"""

from __future__ import annotations

from datetime import date, datetime

from sqlalchemy import (
    CheckConstraint,
    ForeignKey,
    ForeignKeyConstraint,
    Index,
    UniqueConstraint,
    text,
)
from sqlalchemy.orm import Mapped, mapped_column

from audit.store.base import Base, Json, Key, KeyMicros, KeyText, Micros, OfLoop, one_current


class SiteRow(Base):
    """The one site this store holds."""

    __tablename__ = "site"
    __table_args__ = (CheckConstraint("id = 1", name="one_row"),)
    id: Mapped[Key]
    name: Mapped[str]


class SiteFileRow(Base):
    """Contents of settings, register and specs files in the order they came into force."""

    __tablename__ = "site_file"
    __table_args__ = (CheckConstraint("kind IN ('settings', 'loops', 'specs')", name="kind"),)
    kind: Mapped[KeyText]
    number: Mapped[Key]
    content_hash: Mapped[str]
    seen_at: Mapped[datetime]


class LoopRow(Base):
    """A loop's tag; all else about it is in its versions."""

    __tablename__ = "loop"
    __table_args__ = (UniqueConstraint("tag"),)
    id: Mapped[Key]
    tag: Mapped[str]


class LoopVersionRow(Base):
    """One wording of a loop's row in the register. A retired loop's current one says since when."""

    __tablename__ = "loop_version"
    __table_args__ = (one_current("uq_loop_version_current", "loop_id"),)
    loop_id: Mapped[OfLoop]
    version: Mapped[Key]
    entered_at: Mapped[datetime]
    superseded_at: Mapped[datetime | None]
    retired_at: Mapped[datetime | None]
    process_unit: Mapped[str]
    service: Mapped[str]
    kind: Mapped[str]
    pv: Mapped[str]
    sp: Mapped[str]
    output: Mapped[str | None]
    mode: Mapped[str | None]
    eu: Mapped[str]
    range_low: Mapped[float | None]
    range_high: Mapped[float | None]
    output_low: Mapped[float]
    output_high: Mapped[float]
    auto_modes: Mapped[Json]
    criticality: Mapped[int]
    cascade_primary: Mapped[str | None]
    averaging: Mapped[bool]
    before_us: Mapped[Micros]
    after_us: Mapped[Micros]
    join_us: Mapped[Micros]
    notes: Mapped[str]


class SpecVersionRow(Base):
    """One wording of a loop's limits; withdrawn when its row has gone from the file, never lost."""

    __tablename__ = "spec_version"
    loop_id: Mapped[OfLoop]
    version: Mapped[Key]
    valid_from: Mapped[datetime]
    entered_at: Mapped[datetime]
    withdrawn_at: Mapped[datetime | None]
    limits: Mapped[Json]
    settling_band_pct: Mapped[float]
    min_step_eu: Mapped[float | None]
    set_by: Mapped[str]
    reason: Mapped[str]


class TagSetRow(Base):
    """The tags an export names. Most exports of a kind name the same, so they share one set."""

    __tablename__ = "tag_set"
    __table_args__ = (UniqueConstraint("digest"),)
    id: Mapped[Key]
    digest: Mapped[bytes]


class TagOfSetRow(Base):
    """One tag of a set."""

    __tablename__ = "tag_of_set"
    __table_args__ = (Index(None, "tag"),)
    tag_set_id: Mapped[int] = mapped_column(ForeignKey("tag_set.id"), primary_key=True)
    tag: Mapped[KeyText]


class ExportRow(Base):
    """One content of one export path, and what became of its cells.

    With a ``tag_set_id`` it covers those tags from its first to its last stamp; without one (no
    stamps, refused, or replaced by other content of its path) it covers nothing. ``asked_set_id``:
    the tags the register named when it was read.
    """

    __tablename__ = "export"
    __table_args__ = (
        UniqueConstraint("path", "content_hash"),
        CheckConstraint("state IN ('reading', 'taken', 'refused')", name="state"),
        CheckConstraint("first_us <= last_us", name="span"),
        one_current("uq_export_current", "path"),
    )
    id: Mapped[Key]
    source: Mapped[str]
    path: Mapped[str]
    content_hash: Mapped[str | None]
    size: Mapped[Micros]
    stamp: Mapped[str]
    revision: Mapped[Micros]
    state: Mapped[str]
    reason: Mapped[str | None]
    first_us: Mapped[Micros | None]
    last_us: Mapped[Micros | None]
    tag_set_id: Mapped[int | None] = mapped_column(ForeignKey("tag_set.id"))
    asked_set_id: Mapped[int | None] = mapped_column(ForeignKey("tag_set.id"))
    newest_good_us: Mapped[Micros | None]
    future_stamps: Mapped[Micros]
    file_rows: Mapped[Micros]
    cells_read: Mapped[Micros]
    cells_taken: Mapped[Micros]
    cells_duplicate: Mapped[Micros]
    cells_replaced: Mapped[Micros]
    cells_blank: Mapped[Micros]
    cells_bad_quality: Mapped[Micros]
    cells_unregistered: Mapped[Micros]
    cells_refused: Mapped[Json]
    read_at: Mapped[datetime]
    superseded_at: Mapped[datetime | None]


class CurveRow(Base):
    """The samples a step was measured from, encoded; several measurements can rest on one.

    ``data`` is empty where they were pruned.
    """

    __tablename__ = "curve"
    __table_args__ = (Index(None, "loop_id", "to_us"),)
    loop_id: Mapped[OfLoop]
    at_us: Mapped[KeyMicros]
    number: Mapped[Key]
    from_us: Mapped[Micros]
    to_us: Mapped[Micros]
    digest: Mapped[bytes]
    data: Mapped[bytes]


class MeasurementRow(Base):
    """The number-th measurement of the setpoint change at ``at_us``; one of them is current."""

    __tablename__ = "measurement"
    __table_args__ = (
        ForeignKeyConstraint(
            ["loop_id", "at_us", "curve_number"], ["curve.loop_id", "curve.at_us", "curve.number"]
        ),
        one_current("uq_measurement_current", "loop_id", "at_us"),
        Index(
            None,
            "loop_id",
            "depends_to_us",
            sqlite_where=text("superseded_at IS NULL"),
            postgresql_where=text("superseded_at IS NULL"),
        ),
        # All that is asked of the newest step of each loop: none of their rows has to be fetched.
        Index(
            None,
            "loop_id",
            "at_us",
            "superseded_at",
            "usable",
            "kind",
            sqlite_where=text("superseded_at IS NULL"),
            postgresql_where=text("superseded_at IS NULL"),
        ),
        Index(
            None,
            "superseded_at",
            sqlite_where=text("superseded_at IS NOT NULL"),
            postgresql_where=text("superseded_at IS NOT NULL"),
        ),
    )
    loop_id: Mapped[OfLoop]
    at_us: Mapped[KeyMicros]
    number: Mapped[Key]
    curve_number: Mapped[int]
    fingerprint: Mapped[bytes]
    measured_at: Mapped[datetime]
    superseded_at: Mapped[datetime | None]
    sp_from: Mapped[float]
    sp_to: Mapped[float]
    kind: Mapped[str]
    moves: Mapped[Json]
    window_end_us: Mapped[Micros]
    complete: Mapped[bool]
    cut: Mapped[str | None]
    change_set_aside: Mapped[Json]
    sp_noise_eu: Mapped[float]
    measured: Mapped[Json]
    method_version: Mapped[str]
    spec_band_pct: Mapped[float]
    y0_eu: Mapped[float | None]
    y_end_eu: Mapped[float | None]
    noise_eu: Mapped[float | None]
    usable: Mapped[bool]
    set_aside: Mapped[Json]
    depends_from_us: Mapped[Micros | None]
    depends_to_us: Mapped[Micros | None]


class VerdictRow(Base):
    """The judgement of one limited quantity in one measurement, with the spec version used."""

    __tablename__ = "verdict"
    __table_args__ = (
        ForeignKeyConstraint(
            ["loop_id", "at_us", "number"],
            ["measurement.loop_id", "measurement.at_us", "measurement.number"],
        ),
        ForeignKeyConstraint(
            ["loop_id", "spec_version"], ["spec_version.loop_id", "spec_version.version"]
        ),
    )
    loop_id: Mapped[Key]
    at_us: Mapped[KeyMicros]
    number: Mapped[Key]
    quantity: Mapped[KeyText]
    spec_version: Mapped[int]
    limit_value: Mapped[float]
    outcome: Mapped[str]
    why: Mapped[str | None]


class EdgeRow(Base):
    """The slice kept at one border of the covered time of a loop."""

    __tablename__ = "edge"
    __table_args__ = (CheckConstraint("side IN ('from', 'to')", name="side"),)
    loop_id: Mapped[OfLoop]
    border_us: Mapped[KeyMicros]
    side: Mapped[KeyText]
    from_us: Mapped[Micros]
    to_us: Mapped[Micros]
    data: Mapped[bytes]


class ClosedRow(Base):
    """Until when a loop's past is closed: something was pruned there, and late data change nothing.

    The newest instant of which samples, an edge or a step was pruned.
    """

    __tablename__ = "closed"
    loop_id: Mapped[OfLoop]
    until_us: Mapped[Micros]


class DayRow(Base):
    """One local day of a loop: time in each state, and the runs it was counted from."""

    __tablename__ = "day_record"
    loop_id: Mapped[OfLoop]
    day: Mapped[date] = mapped_column(primary_key=True)
    span_us: Mapped[Micros]
    auto_us: Mapped[Micros]
    mode_us: Mapped[Micros]
    saturated_us: Mapped[Micros]
    output_us: Mapped[Micros]
    pv_bad_us: Mapped[Micros]
    runs: Mapped[bytes]


class TagStateRow(Base):
    """What one tag of a loop last said: its newest good sample, and since when it holds."""

    __tablename__ = "tag_state"
    loop_id: Mapped[OfLoop]
    role: Mapped[KeyText]
    newest_us: Mapped[Micros]
    value: Mapped[float]
    held_since_us: Mapped[Micros]


class NightListRow(Base):
    """One revision of one night's ranked list; the first is the one that was published."""

    __tablename__ = "night_list"
    __table_args__ = (UniqueConstraint("night", "revision"),)
    id: Mapped[Key]
    night: Mapped[date]
    revision: Mapped[int]
    cutoff: Mapped[datetime]
    computed_at: Mapped[datetime]
    digest: Mapped[bytes]


class StandingRow(Base):
    """One loop's place in one night's list. ``detail``: reasons, limits and trend."""

    __tablename__ = "standing"
    __table_args__ = (
        UniqueConstraint("night_list_id", "loop_id"),
        Index(None, "loop_id"),
    )
    night_list_id: Mapped[int] = mapped_column(ForeignKey("night_list.id"), primary_key=True)
    rank: Mapped[Key]
    loop_id: Mapped[int] = mapped_column(ForeignKey("loop.id"))
    list_group: Mapped[str]
    standing: Mapped[str]
    degraded: Mapped[bool]
    since: Mapped[date | None]
    usable_steps: Mapped[int]
    criticality: Mapped[int]
    distance: Mapped[float | None]
    reference: Mapped[float | None]
    reference_kind: Mapped[str | None]
    order_quantity: Mapped[str | None]
    order_value: Mapped[float | None]
    detail: Mapped[Json]


class RunRow(Base):
    """One run of the audit, from start to end; one without an end was killed or is running."""

    __tablename__ = "run"
    id: Mapped[Key]
    kind: Mapped[str]
    started_at: Mapped[datetime]
    ended_at: Mapped[datetime | None]
    state: Mapped[str]
    counts: Mapped[Json]
    error: Mapped[str | None]


class LeaseRow(Base):
    """Who may write. ``fence`` rises with each holder; times are the database's own."""

    __tablename__ = "lease"
    __table_args__ = (CheckConstraint("id = 1", name="one_row"),)
    id: Mapped[Key]
    fence: Mapped[Micros]
    holder: Mapped[str | None]
    taken_us: Mapped[Micros]
    expires_us: Mapped[Micros]

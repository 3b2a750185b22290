"""All that is read from the store, each a function that takes a ``Session`` and returns records."""

from __future__ import annotations

from collections.abc import Collection
from datetime import date
from typing import Any

from sqlalchemy import RowMapping, func, select
from sqlalchemy.orm import Session

from audit.records import (
    CellAccount,
    Coverage,
    Group,
    Quantity,
    Spec,
    Standing,
    StandingWord,
)
from audit.store.bulk import portions
from audit.store.closed import closed_time
from audit.store.entries import NightInfo, RunInfo, SeenExport, StoredLoop
from audit.store.lease import running
from audit.store.past import (
    curve,
    day_records,
    day_records_many,
    edges,
    edges_next_to,
    history,
    kept,
    kept_days,
    newest_steps,
    past_steps,
    past_steps_many,
    step_counts,
    tag_states,
    touched,
    with_past,
)
from audit.store.payload import detail_of, loop_of
from audit.store.size import size, size_bytes
from audit.store.tables import (
    ExportRow,
    LoopRow,
    LoopVersionRow,
    NightListRow,
    RunRow,
    SiteRow,
    SpecVersionRow,
    StandingRow,
    TagOfSetRow,
)

__all__ = [
    "closed_time",
    "coverage",
    "coverage_of_paths",
    "curve",
    "day_records",
    "day_records_many",
    "edges",
    "edges_next_to",
    "exports",
    "history",
    "kept",
    "kept_days",
    "loop",
    "loops",
    "newest_stamp",
    "newest_steps",
    "nights",
    "past_steps",
    "past_steps_many",
    "running",
    "runs",
    "site_name",
    "size",
    "size_bytes",
    "specs",
    "standings",
    "step_counts",
    "tag_sets",
    "tag_sources",
    "tag_states",
    "touched",
    "with_past",
]


def site_name(s: Session) -> str | None:
    """The name of the site this store holds; None before the first audit."""
    return s.execute(select(SiteRow.name)).scalar()


def loops(s: Session, include_retired: bool = False) -> list[StoredLoop]:
    """The register as last entered, by tag."""
    return _loops(s, None, include_retired)


def loop(s: Session, tag: str) -> StoredLoop | None:
    """One loop, retired or not; None for a tag the register never held."""
    return next(iter(_loops(s, tag, include_retired=True)), None)


def _loops(s: Session, tag: str | None, include_retired: bool) -> list[StoredLoop]:
    query = (
        select(LoopRow.id, LoopRow.tag, *LoopVersionRow.__table__.columns)
        .join_from(LoopVersionRow, LoopRow)
        .where(LoopVersionRow.superseded_at.is_(None))
    )
    if tag is not None:
        query = query.where(LoopRow.tag == tag)
    if not include_retired:
        query = query.where(LoopVersionRow.retired_at.is_(None))
    found = [
        StoredLoop(
            row["id"],
            loop_of(row["tag"], row),
            row["version"],
            row["entered_at"],
            row["retired_at"],
        )
        for row in s.execute(query).mappings()
    ]
    return sorted(found, key=lambda stored: stored.loop.tag)


def specs(s: Session, include_withdrawn: bool = False) -> dict[str, list[Spec]]:
    """All versions of all loops' specs by tag, each loop's by (valid_from, version)."""
    query = select(LoopRow.tag, *SpecVersionRow.__table__.columns).join_from(
        SpecVersionRow, LoopRow
    )
    if not include_withdrawn:
        query = query.where(SpecVersionRow.withdrawn_at.is_(None))
    found: dict[str, list[Spec]] = {}
    query = query.order_by(SpecVersionRow.valid_from, SpecVersionRow.version)
    for row in s.execute(query).mappings():
        found.setdefault(row["tag"], []).append(_spec_of(row))
    return dict(sorted(found.items()))


def _spec_of(row: RowMapping) -> Spec:
    return Spec(
        tag=row["tag"],
        valid_from=row["valid_from"],
        limits={Quantity(name): limit for name, limit in row["limits"].items()},
        settling_band_pct=row["settling_band_pct"],
        min_step_eu=row["min_step_eu"],
        set_by=row["set_by"],
        reason=row["reason"],
        version=row["version"],
        entered_at=row["entered_at"],
    )


def exports(s: Session) -> list[SeenExport]:
    """The current content of each export path, by path."""
    query = select(*ExportRow.__table__.columns).where(ExportRow.superseded_at.is_(None))
    found = [_export_of(row) for row in s.execute(query).mappings()]
    return sorted(found, key=lambda seen: seen.path)


def _export_of(row: RowMapping) -> SeenExport:
    plain = (
        "id",
        "source",
        "path",
        "size",
        "stamp",
        "revision",
        "content_hash",
        "state",
        "reason",
        "first_us",
        "last_us",
        "newest_good_us",
        "future_stamps",
        "read_at",
        "asked_set_id",
    )
    return SeenExport(account=_account_of(row), **{name: row[name] for name in plain})


def _account_of(row: RowMapping) -> CellAccount:
    counted = ("read", "taken", "duplicate", "replaced", "blank", "bad_quality", "unregistered")
    cells: dict[str, Any] = {name: row[f"cells_{name}"] for name in counted}
    return CellAccount(rows=row["file_rows"], refused=row["cells_refused"], **cells)


def newest_stamp(s: Session, until_us: int) -> int | None:
    """The newest good stamp of all exports read, of those not after ``until_us``."""
    return s.execute(
        select(func.max(ExportRow.newest_good_us)).where(
            ExportRow.newest_good_us <= until_us, ExportRow.tag_set_id.is_not(None)
        )
    ).scalar()


def coverage(
    s: Session,
    tags: Collection[str] | None = None,
    from_us: int | None = None,
    to_us: int | None = None,
) -> list[Coverage]:
    """What time of each tag which export covers, by (tag, from, path); overlapping a span only."""
    query = _coverage_query()
    if from_us is not None:
        query = query.where(ExportRow.last_us >= from_us)
    if to_us is not None:
        query = query.where(ExportRow.first_us <= to_us)
    if tags is None:
        found = [Coverage(*row) for row in s.execute(query)]
    else:
        found = [
            Coverage(*row)
            for some in portions(sorted(tags))
            for row in s.execute(query.where(TagOfSetRow.tag.in_(some)))
        ]
    return sorted(found, key=lambda one: (one.tag, one.from_us, one.path))


def coverage_of_paths(s: Session, paths: Collection[str]) -> list[Coverage]:
    """What the contents last read at some paths cover, by (tag, from, path)."""
    found = [
        Coverage(*row)
        for some in portions(sorted(paths))
        for row in s.execute(_coverage_query().where(ExportRow.path.in_(some)))
    ]
    return sorted(found, key=lambda one: (one.tag, one.from_us, one.path))


def _coverage_query() -> Any:
    return select(
        TagOfSetRow.tag,
        ExportRow.first_us,
        ExportRow.last_us,
        ExportRow.source,
        ExportRow.path,
        ExportRow.revision,
    ).join_from(ExportRow, TagOfSetRow, ExportRow.tag_set_id == TagOfSetRow.tag_set_id)


def tag_sets(s: Session, ids: Collection[int | None]) -> dict[int | None, frozenset[str]]:
    """The tags of some sets by the set's id."""
    found: dict[int | None, set[str]] = {number: set() for number in ids if number is not None}
    query = select(TagOfSetRow.tag_set_id, TagOfSetRow.tag)
    for some in portions(list(found)):
        for number, tag in s.execute(query.where(TagOfSetRow.tag_set_id.in_(some))):
            found[number].add(tag)
    return {number: frozenset(tags) for number, tags in found.items()}


def tag_sources(s: Session) -> dict[str, str]:
    """Each tag that some export names, with the source of the export that reaches furthest."""
    reach = (
        select(ExportRow.tag_set_id, ExportRow.source, func.max(ExportRow.last_us).label("last_us"))
        .where(ExportRow.tag_set_id.is_not(None))
        .group_by(ExportRow.tag_set_id, ExportRow.source)
        .subquery()
    )
    query = select(TagOfSetRow.tag, reach.c.last_us, reach.c.source).join_from(
        reach, TagOfSetRow, reach.c.tag_set_id == TagOfSetRow.tag_set_id
    )
    found = sorted(tuple(row) for row in s.execute(query))
    return {tag: source for tag, _, source in found}


def nights(s: Session) -> list[NightInfo]:
    """The newest revision of each night, by night."""
    return [_night_of(row) for row in s.execute(_nights_query()).mappings()]


def _nights_query() -> Any:
    counted = (
        select(
            NightListRow.night,
            func.count().label("revisions"),
            func.max(NightListRow.revision).label("newest"),
        )
        .group_by(NightListRow.night)
        .subquery()
    )
    return (
        select(*NightListRow.__table__.columns, counted.c.revisions)
        .join_from(
            NightListRow,
            counted,
            (NightListRow.night == counted.c.night) & (NightListRow.revision == counted.c.newest),
        )
        .order_by(NightListRow.night)
    )


def _night_of(row: RowMapping) -> NightInfo:
    return NightInfo(
        row["night"], row["revision"], row["revisions"], row["cutoff"], row["computed_at"]
    )


def standings(
    s: Session, night: date | None = None, first: bool = False
) -> tuple[NightInfo, list[Standing]] | None:
    """A night's list in its order; None if there is none.

    ``night`` None: the newest night. ``first``: the list as first published, not its newest
    revision.
    """
    if night is None:
        night = s.execute(select(func.max(NightListRow.night))).scalar()
    query = select(*NightListRow.__table__.columns).where(NightListRow.night == night)
    revisions = list(s.execute(query.order_by(NightListRow.revision)).mappings())
    if night is None or not revisions:
        return None
    chosen = revisions[0 if first else -1]
    info = NightInfo(
        night, chosen["revision"], len(revisions), chosen["cutoff"], chosen["computed_at"]
    )
    rows = s.execute(
        select(LoopRow.tag, *StandingRow.__table__.columns)
        .join_from(StandingRow, LoopRow)
        .where(StandingRow.night_list_id == chosen["id"])
        .order_by(StandingRow.rank)
    ).mappings()
    return info, [_standing_of(night, row) for row in rows]


def _standing_of(night: date, row: RowMapping) -> Standing:
    reasons, limits, trend = detail_of(row["detail"])
    quantity = row["order_quantity"]
    return Standing(
        tag=row["tag"],
        night=night,
        group=Group(row["list_group"]),
        standing=StandingWord(row["standing"]),
        degraded=row["degraded"],
        since=row["since"],
        usable_steps=row["usable_steps"],
        reasons=reasons,
        limits=limits,
        trend=trend,
        criticality=row["criticality"],
        distance=row["distance"],
        reference=row["reference"],
        reference_kind=row["reference_kind"],
        order_quantity=None if quantity is None else Quantity(quantity),
        order_value=row["order_value"],
    )


def runs(s: Session, limit: int = 20) -> list[RunInfo]:
    """The newest lines of the run log, newest first."""
    query = select(*RunRow.__table__.columns).order_by(RunRow.id.desc()).limit(limit)
    return [RunInfo(**row) for row in s.execute(query).mappings()]

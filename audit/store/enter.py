"""The site's own files -> the store: its name, its register, its specs; each change a version."""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from datetime import datetime
from typing import Any

from sqlalchemy import insert, select, update
from sqlalchemy.orm import Session

from audit.errors import StoreUnready, UnknownLoop
from audit.records import Loop, Spec
from audit.store.bulk import add, portions
from audit.store.entries import RegisterChanges
from audit.store.payload import Columns, loop_values
from audit.store.tables import LoopRow, LoopVersionRow, SiteFileRow, SiteRow, SpecVersionRow

_FILES = {"settings": "the settings", "loops": "the loop register", "specs": "the specs"}


def enter_site(s: Session, name: str) -> None:
    """Enters the site's name once. Raises StoreUnready if the store holds another site."""
    held = s.execute(select(SiteRow.name)).scalar()
    if held is None:
        s.execute(insert(SiteRow).values(id=1, name=name))
    elif held != name:
        raise StoreUnready(
            f"the store holds the site {held!r}, not {name!r}",
            "one store holds one site: give this site a store of its own",
        )


def enter_register(
    s: Session,
    loops: Sequence[Loop],
    specs: Sequence[Spec],
    hashes: Mapping[str, str],
    now: datetime,
    accept_older: bool = False,
) -> RegisterChanges:
    """Enters what has changed in the register and the specs since they were last entered.

    ``hashes``: content hash of each file by "settings", "loops", "specs". Raises StoreUnready for
    a content that the store has seen replaced, unless ``accept_older``; UnknownLoop for a spec of
    a loop that was never registered.
    """
    _admit(s, hashes, now, accept_older)
    counts = _enter_loops(s, loops, now)
    specs_new, withdrawn = _enter_specs(s, specs, now)
    return RegisterChanges(**counts, specs_new=specs_new, specs_withdrawn=withdrawn)


def _admit(s: Session, hashes: Mapping[str, str], now: datetime, accept_older: bool) -> None:
    seen: dict[str, list[str]] = {kind: [] for kind in hashes}
    rows = s.execute(
        select(SiteFileRow.kind, SiteFileRow.content_hash).order_by(SiteFileRow.number)
    )
    for kind, content_hash in rows:
        seen.setdefault(kind, []).append(content_hash)
    changed = [kind for kind in hashes if seen[kind][-1:] != [hashes[kind]]]
    older = [_FILES[kind] for kind in changed if hashes[kind] in seen[kind]]
    if older and not accept_older:
        raise StoreUnready(
            f"{' and '.join(older)}: this content has been replaced by a newer one before",
            "use the newest files, or, if the older content is meant, run with --accept-older",
        )
    new = [
        {"kind": k, "number": len(seen[k]) + 1, "content_hash": hashes[k], "seen_at": now}
        for k in changed
    ]
    add(s, SiteFileRow, new)


def _enter_loops(s: Session, loops: Sequence[Loop], now: datetime) -> dict[str, int]:
    held = {row["tag"]: row for row in _current_versions(s)}
    ids = _enter_tags(s, [loop.tag for loop in loops])
    replaced: list[int] = []
    rows: list[dict[str, Any]] = []
    counts = dict.fromkeys(("loops_new", "loops_changed", "loops_back", "loops_retired"), 0)
    for loop in loops:
        values, old = loop_values(loop), held.get(loop.tag)
        if old is not None and old["retired_at"] is None and _same(values, old):
            continue
        if old is None:
            counts["loops_new"] += 1
        else:
            counts["loops_changed" if old["retired_at"] is None else "loops_back"] += 1
            replaced.append(ids[loop.tag])
        version = 1 if old is None else old["version"] + 1
        rows.append(values | {"loop_id": ids[loop.tag], "version": version, "entered_at": now})
    kept = {loop.tag for loop in loops}
    retired = [r["loop_id"] for t, r in held.items() if t not in kept and r["retired_at"] is None]
    counts["loops_retired"] = len(retired)
    _mark_current(s, retired, "retired_at", now)
    _mark_current(s, replaced, "superseded_at", now)
    add(s, LoopVersionRow, rows)
    return counts


def _current_versions(s: Session) -> list[Columns]:
    query = (
        select(LoopRow.tag, *LoopVersionRow.__table__.columns)
        .join_from(LoopVersionRow, LoopRow)
        .where(LoopVersionRow.superseded_at.is_(None))
    )
    return list(s.execute(query).mappings())


def _enter_tags(s: Session, tags: Sequence[str]) -> dict[str, int]:
    query = select(LoopRow.tag, LoopRow.id)
    known = {row.tag: row.id for row in s.execute(query)}
    new = [{"tag": tag} for tag in tags if tag not in known]
    if new:
        add(s, LoopRow, new)
        known = {row.tag: row.id for row in s.execute(query)}
    return known


def _mark_current(s: Session, loop_ids: list[int], column: str, now: datetime) -> None:
    """Sets a date on the current version of some loops."""
    for some in portions(loop_ids):
        s.execute(
            update(LoopVersionRow)
            .where(
                LoopVersionRow.loop_id.in_(some),
                LoopVersionRow.superseded_at.is_(None),
            )
            .values({column: now})
        )


def _enter_specs(s: Session, specs: Sequence[Spec], now: datetime) -> tuple[int, int]:
    ids = {row.tag: row.id for row in s.execute(select(LoopRow.tag, LoopRow.id))}
    stored = s.execute(
        select(*SpecVersionRow.__table__.columns).order_by(SpecVersionRow.version)
    ).mappings()
    last: dict[int, int] = {}
    open_rows: dict[tuple[int, datetime], Columns] = {}
    for row in stored:
        last[row["loop_id"]] = row["version"]
        if row["withdrawn_at"] is None:
            open_rows[row["loop_id"], row["valid_from"]] = row
    rows = []
    for spec in specs:
        if spec.tag not in ids:
            raise UnknownLoop(f"a spec names {spec.tag}, which is no loop of the register")
        values = _spec_values(ids[spec.tag], spec)
        old = open_rows.pop((values["loop_id"], spec.valid_from), None)
        if old is None or not _same(values, old):
            last[values["loop_id"]] = last.get(values["loop_id"], 0) + 1
            rows.append(values | {"version": last[values["loop_id"]], "entered_at": now})
    for loop_id, valid_from in open_rows:
        s.execute(
            update(SpecVersionRow)
            .where(
                SpecVersionRow.loop_id == loop_id,
                SpecVersionRow.valid_from == valid_from,
                SpecVersionRow.withdrawn_at.is_(None),
            )
            .values(withdrawn_at=now)
        )
    add(s, SpecVersionRow, rows)
    return len(rows), len(open_rows)


def _spec_values(loop_id: int, spec: Spec) -> dict[str, Any]:
    return {
        "loop_id": loop_id,
        "valid_from": spec.valid_from,
        "limits": {quantity.value: limit for quantity, limit in spec.limits.items()},
        "settling_band_pct": spec.settling_band_pct,
        "min_step_eu": spec.min_step_eu,
        "set_by": spec.set_by,
        "reason": spec.reason,
    }


def _same(values: Mapping[str, Any], stored: Columns) -> bool:
    return all(stored[name] == value for name, value in values.items())

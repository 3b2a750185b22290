"""Export files -> their rows: state, account of their cells, and the time they cover."""

from __future__ import annotations

import hashlib
from collections.abc import Collection, Iterable
from datetime import datetime
from typing import Any

from sqlalchemy import insert, select, update
from sqlalchemy.orm import Session

from audit.records import CellAccount, ExportFile, ExportRead, to_us
from audit.store.bulk import add, portions
from audit.store.tables import ExportRow, TagOfSetRow, TagSetRow


def begin_export(
    s: Session, file: ExportFile, read: ExportRead, now: datetime, asked: Collection[str] = ()
) -> int:
    """Enters a file that was read, as "reading", with the time it covers; returns its id.

    ``asked``: the tags it was asked for, whether it names them or not.

    The content replaces the older one of the same path. What the older one covered stays known
    until ``finish_exports``: an audit that is cut off in between must still find what to replace.
    A content that was at this path before is the same row again.
    """
    newest, future = _newest_good(read, to_us(now))
    values = _file_values(file, now) | {
        "content_hash": read.content_hash,
        "state": "reading",
        "reason": None,
        "first_us": read.first_us,
        "last_us": read.last_us,
        "tag_set_id": None if read.first_us is None else _tag_set(s, read.named),
        "asked_set_id": _tag_set(s, asked),
        "newest_good_us": newest,
        "future_stamps": future,
        "superseded_at": None,
        **_account_values(read.account),
    }
    _supersede(s, file.path, now)
    same = s.execute(
        select(ExportRow.id).where(
            ExportRow.path == file.path, ExportRow.content_hash == read.content_hash
        )
    ).scalar()
    if same is None:
        return s.execute(insert(ExportRow).values(values).returning(ExportRow.id)).scalar_one()
    s.execute(update(ExportRow).where(ExportRow.id == same).values(values))
    return same


def refuse_export(s: Session, file: ExportFile, reason: str, now: datetime) -> None:
    """Enters a file that cannot be read, with its reason.

    What an older content of the same path covered stays covered: it was taken, and nothing
    readable has replaced it.
    """
    values = _file_values(file, now) | {
        "content_hash": None,
        "state": "refused",
        "reason": reason,
        "first_us": None,
        "last_us": None,
        "tag_set_id": None,
        "asked_set_id": None,
        "newest_good_us": None,
        "future_stamps": 0,
        "superseded_at": None,
        **_account_values(CellAccount()),
    }
    current = s.execute(
        select(ExportRow.id).where(
            ExportRow.path == file.path,
            ExportRow.superseded_at.is_(None),
            ExportRow.state == "refused",
        )
    ).scalar()
    if current is not None:
        s.execute(update(ExportRow).where(ExportRow.id == current).values(values))
        return
    _supersede(s, file.path, now)
    s.execute(insert(ExportRow).values(values))


def finish_exports(s: Session, ids: Iterable[int], now: datetime) -> None:
    """Marks exports as taken: all their loops are saved. Older contents cover nothing any more."""
    for some in portions(list(ids)):
        paths = select(ExportRow.path).where(ExportRow.id.in_(some))
        s.execute(
            update(ExportRow)
            .where(ExportRow.path.in_(paths), ExportRow.superseded_at.is_not(None))
            .values(tag_set_id=None)
        )
        s.execute(
            update(ExportRow).where(ExportRow.id.in_(some)).values(state="taken", read_at=now)
        )


def _file_values(file: ExportFile, now: datetime) -> dict[str, Any]:
    return {
        "source": file.source,
        "path": file.path,
        "size": file.size,
        "stamp": file.stamp,
        "revision": file.revision,
        "read_at": now,
    }


def _account_values(account: CellAccount) -> dict[str, Any]:
    return {
        "file_rows": account.rows,
        "cells_read": account.read,
        "cells_taken": account.taken,
        "cells_duplicate": account.duplicate,
        "cells_replaced": account.replaced,
        "cells_blank": account.blank,
        "cells_bad_quality": account.bad_quality,
        "cells_unregistered": account.unregistered,
        "cells_refused": dict(account.refused),
    }


def _newest_good(read: ExportRead, now_us: int) -> tuple[int | None, int]:
    """The newest good stamp that is not in the future, and how many good ones are."""
    found = [column.good_until(now_us) for column in read.columns.values()]
    newest = [stamp for stamp, _ in found if stamp is not None]
    return max(newest, default=None), sum(future for _, future in found)


def _supersede(s: Session, path: str, now: datetime) -> None:
    s.execute(
        update(ExportRow)
        .where(ExportRow.path == path, ExportRow.superseded_at.is_(None))
        .values(superseded_at=now)
    )


def _tag_set(s: Session, named: Collection[str]) -> int | None:
    """The id of the set of these tags, entered if it is new; None for no tags."""
    tags = sorted(set(named))
    if not tags:
        return None
    digest = hashlib.blake2b("\0".join(tags).encode(), digest_size=16).digest()
    known = s.execute(select(TagSetRow.id).where(TagSetRow.digest == digest)).scalar()
    if known is not None:
        return known
    new = s.execute(insert(TagSetRow).values(digest=digest).returning(TagSetRow.id)).scalar_one()
    add(s, TagOfSetRow, [{"tag_set_id": new, "tag": tag} for tag in tags])
    return new

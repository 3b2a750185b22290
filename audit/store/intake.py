"""Export files -> their rows: state, account of their cells, and the time they cover."""

from __future__ import annotations

from collections.abc import Iterable
from datetime import datetime
from typing import Any

import numpy as np
from sqlalchemy import delete, insert, select, update
from sqlalchemy.orm import Session

from audit.records import CellAccount, ExportFile, ExportRead, to_us
from audit.store.bulk import add, portions
from audit.store.tables import CoverageRow, ExportRow


def begin_export(s: Session, file: ExportFile, read: ExportRead, now: datetime) -> int:
    """Enters a file that was read, as "reading", with the time it covers; returns its id.

    The content replaces the older one of the same path, and so does its coverage. A content that
    was at this path before is the same row again.
    """
    newest, future = _newest_good(read, to_us(now))
    values = _file_values(file, now) | {
        "content_hash": read.content_hash,
        "state": "reading",
        "reason": None,
        "first_us": read.first_us,
        "last_us": read.last_us,
        "newest_good_us": newest,
        "future_stamps": future,
        "superseded_at": None,
        **_account_values(read.account),
    }
    rows = s.execute(
        select(ExportRow.id, ExportRow.content_hash).where(ExportRow.path == file.path)
    ).all()
    s.execute(delete(CoverageRow).where(CoverageRow.export_id.in_([row.id for row in rows])))
    same = next((row.id for row in rows if row.content_hash == read.content_hash), None)
    _supersede(s, file.path, now)
    if same is None:
        export_id = s.execute(insert(ExportRow).values(values).returning(ExportRow.id)).scalar_one()
    else:
        s.execute(update(ExportRow).where(ExportRow.id == same).values(values))
        export_id = same
    _cover(s, export_id, read)
    return export_id


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
    """Marks exports as taken: all their loops are saved."""
    for some in portions(list(ids)):
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
    newest: list[int] = []
    future = 0
    for column in read.columns.values():
        good = column.samples.t_us[column.samples.good]
        past = int(np.searchsorted(good, now_us, "right"))
        future += len(good) - past
        if past:
            newest.append(int(good[past - 1]))
    return max(newest, default=None), future


def _supersede(s: Session, path: str, now: datetime) -> None:
    s.execute(
        update(ExportRow)
        .where(ExportRow.path == path, ExportRow.superseded_at.is_(None))
        .values(superseded_at=now)
    )


def _cover(s: Session, export_id: int, read: ExportRead) -> None:
    if read.first_us is None or read.last_us is None or not read.named:
        return
    span = {"export_id": export_id, "from_us": read.first_us, "to_us": read.last_us}
    add(s, CoverageRow, [span | {"tag": tag} for tag in sorted(set(read.named))])

"""Many rows in few statements."""

from __future__ import annotations

from collections.abc import Iterator, Sequence
from typing import Any, TypeVar

from sqlalchemy import insert
from sqlalchemy.orm import Session

from audit.store.tables import Base

T = TypeVar("T")

AT_ONCE = 500
"""Most values in one list of a statement; both databases allow far more, plans get no better."""


def add(s: Session, table: type[Base], rows: Sequence[dict[str, Any]]) -> None:
    """Inserts rows that all name the same columns, in one statement."""
    if rows:
        # Without render_nulls each change between a value and None would start a new statement.
        s.execute(insert(table), rows, execution_options={"render_nulls": True})


def portions(items: Sequence[T]) -> Iterator[Sequence[T]]:
    """Consecutive parts that are short enough for one statement."""
    for first in range(0, len(items), AT_ONCE):
        yield items[first : first + AT_ONCE]

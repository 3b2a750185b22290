"""Many rows in few statements."""

from __future__ import annotations

from collections.abc import Callable, Iterator, Sequence
from functools import lru_cache
from typing import Any, NamedTuple, TypeVar, cast

from sqlalchemy import Dialect, Table
from sqlalchemy.orm import Session
from sqlalchemy.types import JSON, LargeBinary

from audit.store.base import Base

T = TypeVar("T")

AT_ONCE = 500
"""Most values in one list of a statement; both databases allow far more, plans get no better."""


class JsonText(str):
    """The text of a JSON value, for a column of that type, made already."""

    __slots__ = ()


def add(s: Session, table: type[Base], rows: Sequence[dict[str, Any]]) -> None:
    """Inserts rows that all name the same columns, in one statement."""
    _send(s, table, rows, replacing=False)


def put(s: Session, table: type[Base], rows: Sequence[dict[str, Any]]) -> None:
    """As ``add``; a row takes the place of one with the same primary key."""
    _send(s, table, rows, replacing=True)


def _send(
    s: Session, table: type[Base], rows: Sequence[dict[str, Any]], *, replacing: bool
) -> None:
    if not rows:
        return
    connection = s.connection()
    columns = tuple(rows[0])
    made = _prepared(cast(Table, table.__table__), columns, connection.dialect, replacing)
    values = [[row[name] for name in columns] for row in rows]
    for place, bound in made.bound:
        for one in values:
            one[place] = bound(one[place])
    connection.exec_driver_sql(made.statement, [tuple(one) for one in values])


class _Prepared(NamedTuple):
    """A statement in the driver's words, and by place what makes a column's values the driver's."""

    statement: str
    bound: tuple[tuple[int, Callable[[Any], Any]], ...]


@lru_cache(maxsize=256)
def _prepared(
    table: Table, columns: tuple[str, ...], dialect: Dialect, replacing: bool
) -> _Prepared:
    """Made once for a table and a store: for a few rows, making it takes longer than they do."""
    quote = dialect.identifier_preparer.quote
    names = [quote(name) for name in columns]
    mark = "?" if dialect.paramstyle == "qmark" else "%s"
    statement = (
        f"INSERT INTO {quote(table.name)} ({', '.join(names)}) "
        f"VALUES ({', '.join([mark] * len(names))})"
    )
    if replacing:
        keys = [quote(column.name) for column in table.primary_key]
        rest = [f"{name} = excluded.{name}" for name in names if name not in keys]
        statement += f" ON CONFLICT ({', '.join(keys)}) DO UPDATE SET {', '.join(rest)}"
    bound = [(place, _bound(table, name, dialect)) for place, name in enumerate(columns)]
    return _Prepared(statement, tuple((place, how) for place, how in bound if how is not None))


def _bound(table: Table, name: str, dialect: Dialect) -> Callable[[Any], Any] | None:
    """What makes a value of a column the driver's; None where it is already."""
    kind = table.columns[name].type
    how = kind.dialect_impl(dialect).bind_processor(dialect)
    if how is None or isinstance(kind, LargeBinary):  # both drivers take bytes
        return None
    if isinstance(kind, JSON):
        made = how
        return lambda value: str(value) if isinstance(value, JsonText) else made(value)
    return how


def portions(items: Sequence[T]) -> Iterator[Sequence[T]]:
    """Consecutive parts that are short enough for one statement."""
    for first in range(0, len(items), AT_ONCE):
        yield items[first : first + AT_ONCE]

"""What every table is made from: column types, the naming convention, the index of current rows."""

from __future__ import annotations

from datetime import datetime
from typing import Annotated, Any

from sqlalchemy import (
    JSON,
    BigInteger,
    ForeignKey,
    Index,
    Integer,
    LargeBinary,
    MetaData,
    Text,
    text,
)
from sqlalchemy.orm import DeclarativeBase, mapped_column

from audit.store.columns import Real, UtcDateTime

Micros = Annotated[int, mapped_column(BigInteger)]
Json = Annotated[Any, mapped_column(JSON)]
Key = Annotated[int, mapped_column(Integer, primary_key=True)]
KeyMicros = Annotated[int, mapped_column(BigInteger, primary_key=True)]
KeyText = Annotated[str, mapped_column(Text, primary_key=True)]
OfLoop = Annotated[int, mapped_column(ForeignKey("loop.id"), primary_key=True)]


class Base(DeclarativeBase):
    """Every constraint gets its name from here, so that a migration can find it again."""

    metadata = MetaData(
        naming_convention={
            "ix": "ix_%(table_name)s_%(column_0_N_name)s",
            "uq": "uq_%(table_name)s_%(column_0_N_name)s",
            "ck": "ck_%(table_name)s_%(constraint_name)s",
            "fk": "fk_%(table_name)s_%(column_0_N_name)s_%(referred_table_name)s",
            "pk": "pk_%(table_name)s",
        }
    )
    type_annotation_map = {  # noqa: RUF012 (SQLAlchemy reads it as a plain class attribute)
        str: Text,
        int: Integer,
        float: Real,
        bytes: LargeBinary,
        datetime: UtcDateTime,
    }


def one_current(name: str, *columns: str) -> Index:
    """A unique index over the rows that have no successor."""
    current = text("superseded_at IS NULL")
    return Index(name, *columns, unique=True, sqlite_where=current, postgresql_where=current)

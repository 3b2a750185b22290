"""Which revision a store's schema is at, and bringing it up to date; the only user of Alembic."""

from __future__ import annotations

from importlib.resources import files

from alembic import command
from alembic.config import Config
from alembic.runtime.migration import MigrationContext
from alembic.script import ScriptDirectory
from alembic.util import CommandError
from sqlalchemy import Connection

from audit.errors import StoreUnready
from audit.store.entries import Schema

_LOCK = 0x6C6F6F70  # any number that nothing else in the database locks


def alembic_config(connection: Connection | None = None) -> Config:
    """Alembic's settings, made in code: the migrations come with the package."""
    config = Config()
    folder = str(files("audit.migrations"))
    config.set_main_option("script_location", folder.replace("%", "%%"))
    config.attributes["connection"] = connection
    return config


def head() -> str:
    """The revision this program needs."""
    return str(_script().get_current_head())


def read_schema(connection: Connection) -> Schema:
    """The schema a database is at. Changes nothing."""
    current = MigrationContext.configure(connection).get_current_revision()
    return Schema(current, head(), current is None or _knows(current))


def upgrade(connection: Connection) -> None:
    """Brings the schema to this program's revision, all or nothing, one upgrader at a time."""
    if connection.dialect.name == "postgresql":
        connection.exec_driver_sql(f"SELECT pg_advisory_xact_lock({_LOCK})")
    require(read_schema(connection), upgrading=True)
    command.upgrade(alembic_config(connection), "head")
    if connection.dialect.name == "sqlite":
        broken = connection.exec_driver_sql("PRAGMA foreign_key_check").all()
        if broken:
            raise StoreUnready(
                f"the upgrade would leave {len(broken)} rows without what they refer to",
                "nothing was changed; keep a copy of the store and report this",
            )


def require(schema: Schema, *, upgrading: bool = False) -> None:
    """Raises StoreUnready unless the schema is this program's, or can be brought there."""
    if not schema.known:
        raise StoreUnready(
            f"the store's schema ({schema.current}) is newer than this program ({schema.head})",
            "use the newer program that made it; a schema is never taken back",
        )
    if upgrading or schema.current == schema.head:
        return
    if schema.current is None:
        raise StoreUnready("the store has no schema yet", "run: loopassay store upgrade")
    raise StoreUnready(
        f"the store's schema ({schema.current}) is older than this program ({schema.head})",
        "keep a copy of the store, then run: loopassay store upgrade",
    )


def _script() -> ScriptDirectory:
    return ScriptDirectory.from_config(alembic_config())


def _knows(revision: str) -> bool:
    try:
        return _script().get_revision(revision) is not None
    except CommandError:
        return False

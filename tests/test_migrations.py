"""The schema's revisions: they make what the tables say, name everything, and go both ways."""

from __future__ import annotations

import runpy
from collections.abc import Iterator
from contextlib import contextmanager
from importlib.resources import files
from pathlib import Path
from threading import Thread

import pytest
import store_samples as some
from alembic import command
from alembic.autogenerate import compare_metadata
from alembic.runtime.migration import MigrationContext
from sqlalchemy import Connection, Table, inspect, text
from sqlalchemy.exc import DBAPIError

from audit.errors import StoreUnready
from audit.records import LoopResult, Role, TagState
from audit.store import Store, open_store, queries, writes
from audit.store.base import Base
from audit.store.closed import close
from audit.store.dump import dump
from audit.store.engine import Purpose
from audit.store.schema import alembic_config


@contextmanager
def reshaping(store: Store) -> Iterator[Connection]:
    with store._writing(Purpose.RESHAPE) as connection:
        yield connection


def names_in(connection: Connection, table: str) -> set[str | None]:
    """Names of all constraints and indexes of a table as the database has them."""
    looked = inspect(connection)
    found: set[str | None] = {looked.get_pk_constraint(table)["name"]}
    for kind in (looked.get_foreign_keys, looked.get_unique_constraints):
        found |= {one["name"] for one in kind(table)}
    found |= {one["name"] for one in looked.get_check_constraints(table)}
    return found | {one["name"] for one in looked.get_indexes(table)}


def names_of(table: Table, connection: Connection) -> set[str | None]:
    """Names of all constraints and indexes as the tables' conventions give them."""
    compiler = connection.dialect.identifier_preparer
    found = {compiler.format_constraint(one) for one in table.constraints}
    return found | {str(index.name) for index in table.indexes}


def test_the_revisions_make_exactly_the_tables(store: Store) -> None:
    with store.read() as session:
        context = MigrationContext.configure(
            session.connection(), opts={"compare_type": True, "compare_server_default": True}
        )
        assert compare_metadata(context, Base.metadata) == []


def test_every_constraint_has_the_name_its_convention_gives(store: Store) -> None:
    with store.read() as session:
        connection = session.connection()
        tables = set(inspect(connection).get_table_names())
        assert tables == set(Base.metadata.tables) | {"alembic_version"}
        for name, table in Base.metadata.tables.items():
            assert names_in(connection, name) == names_of(table, connection), name


def fill(store: Store) -> None:
    with some.writing(store) as session:
        some.enter(session, "FIC-101")
        writes.begin_export(session, some.file(), some.read(), some.NOW)
        steps = LoopResult(
            "FIC-101",
            (some.measured_step(),),
            edges=(some.edge(some.T0),),
            days=(some.day(1),),
            tag_states={Role.PV: TagState(some.T0, 50.0, some.T0)},
        )
        writes.save_loop(session, steps, some.NOW)
        writes.save_night(
            session, some.NOW.date(), some.NOW, [some.standing(night=some.NOW.date())], some.NOW
        )
        writes.start_run(session, some.NOW, "nightly")
        (stored,) = queries.loops(session)
        close(session, {stored.id: some.T0 - some.HOUR_US})


def content(store: Store) -> list[str]:
    with store.read() as session:
        return list(dump(session))


def test_up_down_and_up_again_with_rows_present(store: Store) -> None:
    head = store.schema().head
    fill(store)
    with store.read() as session:
        empty = [
            name
            for name in Base.metadata.tables
            if session.execute(text(f"SELECT count(*) FROM {name}")).scalar_one() == 0
        ]
    assert empty == []
    before = content(store)
    store.upgrade()
    assert content(store) == before
    with reshaping(store) as connection:
        command.downgrade(alembic_config(connection), "base")
    assert store.schema().current is None
    with store.read() as session:
        assert inspect(session.connection()).get_table_names() == ["alembic_version"]
    store.upgrade()
    assert store.schema().current == head
    fill(store)
    assert content(store) == before


def test_an_upgrade_that_fails_leaves_the_store_as_it_was(store_url: str) -> None:
    with open_store(store_url) as store:
        with reshaping(store) as connection:
            connection.execute(text("CREATE TABLE lease (id INTEGER)"))
        with pytest.raises((DBAPIError, StoreUnready), match="lease"):
            store.upgrade()
        assert store.schema().current is None
        with store.read() as session:
            assert "loop" not in inspect(session.connection()).get_table_names()


def test_two_upgrades_at_once_make_one_schema(store_url: str) -> None:
    stores = [open_store(store_url) for _ in range(3)]
    threads = [Thread(target=store.upgrade) for store in stores]
    for thread in threads:
        thread.start()
    for thread in threads:
        thread.join()
    for store in stores:
        store.require_current()
        store.close()
    with open_store(store_url) as store, store.read() as session:
        assert session.execute(text("SELECT count(*) FROM lease")).scalar_one() == 1


def test_a_new_revision_from_the_template_is_whole_and_empty(store: Store, tmp_path: Path) -> None:
    with reshaping(store) as connection:
        config = alembic_config(connection)
        shipped = files("audit.migrations") / "versions"
        config.set_main_option("path_separator", "newline")
        config.set_main_option("version_locations", f"{shipped}\n{tmp_path}")
        command.revision(
            config, "says nothing", autogenerate=True, rev_id="9999", version_path=str(tmp_path)
        )
    (written,) = tmp_path.glob("9999*.py")
    revision = runpy.run_path(str(written))
    assert revision["__doc__"].startswith("says nothing")
    assert (revision["revision"], revision["down_revision"]) == ("9999", store.schema().head)
    assert revision["upgrade"].__code__.co_names == ()
    assert revision["downgrade"].__code__.co_names == ()

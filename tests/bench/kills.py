"""Kills an audit at random instants and says whether the next one made everything good. No test.

Run: python tests/bench/kills.py [--count 50] [--seed 1] [--cores 1] [--database sqlite postgresql].
The instants are spread over the whole of an undisturbed audit, one at random in each of ``count``
equal parts. Printed, for each database: how many kills left the run open in the log, how many left
the lease behind, what was wrong afterwards (nothing, it should be), how long the next audit took
over the undisturbed one; and each kill after which something was wrong. Ends with 1 if any was.
"""

from __future__ import annotations

import argparse
import os
import sys
from collections.abc import Iterator
from contextlib import contextmanager
from pathlib import Path
from statistics import median
from tempfile import TemporaryDirectory

sys.path.insert(0, str(Path(__file__).resolve().parents[1]))

from conftest import STORE_KINDS, Postgres
from killing import Kill, Night, PostgresStores, SqliteStores, instants, kill_and_go_on, prepare
from private_postgres import private_server

ROW = "{:<12}{:>8}{:>12}{:>13}{:>8}{:>14}{:>10}"


@contextmanager
def night_on(kind: str, folder: Path) -> Iterator[Night]:
    """The night to be done, on one database."""
    if kind == "sqlite":
        yield prepare(folder / "site", SqliteStores(folder))
        return
    os.environ.setdefault("XDG_RUNTIME_DIR", str(folder))  # where the server puts its lock
    with private_server() as server:
        yield prepare(folder / "site", PostgresStores(Postgres(server.uri)))


def row(kind: str, kills: list[Kill], took_s: float) -> str:
    return ROW.format(
        kind,
        len(kills),
        sum(kill.left_open for kill in kills),
        sum(kill.lease_left for kill in kills),
        sum(bool(kill.wrong) for kill in kills),
        f"{took_s:.2f}",
        f"{median(kill.next_s for kill in kills) / took_s:.2f}",
    )


def main(words: argparse.Namespace) -> int:
    sys.stdout.write(
        ROW.format("database", "kills", "left open", "lease left", "wrong", "audit (s)", "next")
        + "\n"
    )
    wrong: list[str] = []
    for kind in words.database:
        with TemporaryDirectory(prefix="kills-") as folder, night_on(kind, Path(folder)) as night:
            kills = [
                kill_and_go_on(night, at_s, words.cores)
                for at_s in instants(words.count, night.took_s, words.seed)
            ]
            sys.stdout.write(row(kind, kills, night.took_s) + "\n")
            sys.stdout.flush()
        wrong += [
            f"{kind}, {kill.at_s:.3f} s: {'; '.join(kill.wrong)}" for kill in kills if kill.wrong
        ]
    for line in wrong:
        sys.stdout.write(line + "\n")
    return 1 if wrong else 0


if __name__ == "__main__":
    parser = argparse.ArgumentParser(description=__doc__)
    parser.add_argument("--count", type=int, default=50)
    parser.add_argument("--seed", type=int, default=1)
    parser.add_argument("--cores", type=int, default=1)
    parser.add_argument("--database", nargs="+", choices=STORE_KINDS, default=STORE_KINDS)
    sys.exit(main(parser.parse_args()))

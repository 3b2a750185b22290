"""A file read in small pieces is the file read at once: samples, coverage, account."""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from dataclasses import dataclass, replace
from datetime import datetime, timedelta
from pathlib import Path
from zoneinfo import ZoneInfo

import numpy as np
import pyarrow as pa
import pyarrow.parquet as pq
import pytest
from export_files import WholeRead, a_source, as_rows, read_whole
from hypothesis import given, settings
from hypothesis import strategies as st

from audit.exports import discover, intake, parquet_file
from audit.records import CellAccount, ExportSource

PARIS = ZoneInfo("Europe/Paris")
WANTED = {"A": False, "B": False, "M": True}

stamp = st.integers(0, 40).map(lambda s: f"2026-03-14T08:00:{s:02d}Z")
broken = st.sampled_from(["", "soon", "1999-13-01", "1971-01-01T00:00:00Z"])
number = st.one_of(
    st.integers(-50, 50).map(str),
    st.floats(-1e6, 1e6).map(repr),
    st.sampled_from(["", "Bad", "1e400", "NaN", "7 "]),
)
mode = st.sampled_from(["AUTO", "MAN", "1", "1.0", ""])
wide_row = st.tuples(st.one_of(stamp, stamp, stamp, broken), number, number, mode)
narrow_row = st.tuples(
    st.one_of(stamp, stamp, stamp, broken),
    st.sampled_from(["A", "B", "M", "other", ""]),
    st.one_of(number, mode),
    st.sampled_from(["Good", "Bad", "Uncertain"]),
)


@dataclass(frozen=True)
class Said:
    """What was told of a file."""

    rows: Mapping[str, Sequence[tuple[float, str]]]
    first_us: int | None
    last_us: int | None
    named: tuple[str, ...]
    account: CellAccount


def said(got: WholeRead) -> Said:
    """What is told of a file, in a form that can be compared; which examples of refused cells are
    shown depends on the pieces."""
    rows = {tag: [(t, str(v)) for t, v in as_rows(raw)] for tag, raw in got.columns.items()}
    return Said(rows, got.first_us, got.last_us, got.named, got.account)


def read_in_pieces(
    folder: Path, name: str, source: ExportSource, monkeypatch: pytest.MonkeyPatch, size: int
) -> Said:
    (file,) = discover(replace(source, files=name))
    monkeypatch.setattr(intake, "PIECE_BYTES", size)
    monkeypatch.setattr(parquet_file, "_CELLS_AT_ONCE", size)
    monkeypatch.setattr(parquet_file, "_LEAST_ROWS", 1)
    got = read_whole(file, source, WANTED)
    assert got.account.balance == 0
    return said(got)


def write(folder: Path, head: str, rows: Sequence[tuple[str, ...]]) -> None:
    lines = [",".join(row) for row in rows]
    (folder / "a.csv").write_text("\n".join([head, *lines]) + "\n")
    names = head.split(",")
    columns = {name: [row[at] or None for row in rows] for at, name in enumerate(names)}
    schema = pa.schema([(name, pa.string()) for name in names])
    pq.write_table(pa.table(columns, schema=schema), folder / "a.parquet")


def check(folder: Path, source: ExportSource, sizes: list[int]) -> None:
    for name, kind in (("a.csv", "csv"), ("a.parquet", "parquet")):
        own = replace(source, files=name, format=kind)
        with pytest.MonkeyPatch.context() as patch:
            whole, *cut = (read_in_pieces(folder, name, own, patch, s) for s in [1 << 20, *sizes])
        assert all(one == whole for one in cut)


@settings(max_examples=12, deadline=None)
@given(st.lists(wide_row, max_size=40), st.integers(1, 60))
def test_wide(
    tmp_path_factory: pytest.TempPathFactory, rows: list[tuple[str, ...]], n: int
) -> None:
    folder = tmp_path_factory.mktemp("wide")
    write(folder, "timestamp,A,B,M", rows)
    check(folder, a_source(folder), [n, 7 * n])


@settings(max_examples=12, deadline=None)
@given(st.lists(narrow_row, max_size=60), st.integers(1, 60))
def test_narrow(
    tmp_path_factory: pytest.TempPathFactory, rows: list[tuple[str, ...]], n: int
) -> None:
    folder = tmp_path_factory.mktemp("narrow")
    write(folder, "timestamp,tag,value,quality", rows)
    check(folder, a_source(folder, layout="narrow", quality="quality"), [n, 7 * n])


def autumn(seconds: list[int]) -> list[str]:
    """Wall times in Paris, so many seconds after 2024-10-27T00:00Z; the clock goes back at 3600."""
    start = datetime(2024, 10, 27, tzinfo=ZoneInfo("UTC"))
    return [
        (start + timedelta(seconds=s)).astimezone(PARIS).strftime("%Y-%m-%dT%H:%M:%S")
        for s in seconds
    ]


@settings(max_examples=8, deadline=None)
@given(st.permutations(range(6)), st.integers(1, 60), st.booleans())
def test_the_repeated_hour_is_told_by_the_order_of_the_whole_file(
    tmp_path_factory: pytest.TempPathFactory, order: list[int], n: int, shuffled: bool
) -> None:
    """Where the rows turn back once at the change, wherever the pieces are cut; else refused."""
    folder = tmp_path_factory.mktemp("autumn")
    seconds = [0, 1200, 3000, 4200, 6000, 9000]
    walls = autumn([seconds[at] for at in order] if shuffled else seconds)
    write(folder, "timestamp,A,B,M", [(wall, "1", "2", "AUTO") for wall in walls])
    check(folder, a_source(folder, timezone="Europe/Paris"), [n, 7 * n])
    rows = [(w, tag, "1", "Good") for w in walls for tag in ("A", "B")]
    write(folder, "timestamp,tag,value,quality", rows)
    narrow = a_source(folder, timezone="Europe/Paris", layout="narrow", quality="quality")
    check(folder, narrow, [n, 7 * n])


def test_the_repeated_hour_in_order_is_certain(
    tmp_path: Path, monkeypatch: pytest.MonkeyPatch
) -> None:
    walls = autumn([0, 1200, 3000, 4200, 6000, 9000])
    write(tmp_path, "timestamp,A,B,M", [(wall, "1", "2", "AUTO") for wall in walls])
    source = a_source(tmp_path, files="a.csv", timezone="Europe/Paris")
    got = read_in_pieces(tmp_path, "a.csv", source, monkeypatch, 30)
    stamps = np.array([t for t, _ in got.rows["A"]])
    assert np.diff(stamps).tolist() == [1200, 1800, 1200, 1800, 3000]


def test_a_clock_that_was_astray_is_told_by_the_whole_file(
    tmp_path: Path, monkeypatch: pytest.MonkeyPatch
) -> None:
    rows = [
        (f"2026-03-14T08:{m:02d}:{s:02d}Z", "1", "2", "AUTO") for m in range(2) for s in range(60)
    ]
    rows.insert(5, ("2001-01-01T00:00:00Z", "9", "9", "AUTO"))
    write(tmp_path, "timestamp,A,B,M", rows)
    check(tmp_path, a_source(tmp_path), [40, 333])
    source = a_source(tmp_path, files="a.csv")
    got = read_in_pieces(tmp_path, "a.csv", source, monkeypatch, 40)
    assert got.account.refused == {"stray_time": 3}

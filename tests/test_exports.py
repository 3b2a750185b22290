"""Export files in every layout and format give the same samples."""

import gzip
import io
from pathlib import Path

import numpy as np
import pandas as pd
import pytest
from export_files import (
    NARROW,
    PACKED,
    START_US,
    WIDE,
    a_source,
    as_rows,
    check_wide,
    narrow_of,
    parquet_of,
    read_bytes,
    zst_in_frames,
)

from audit.exports import discover, first_stamp, peek
from audit.records import FileLimits


@pytest.mark.parametrize("ending", PACKED)
def test_wide_narrow_and_parquet_give_the_same(tmp_path: Path, ending: str) -> None:
    pack = PACKED[ending]
    narrow = narrow_of(WIDE)
    check_wide(read_bytes(tmp_path, pack(WIDE.encode()), f"wide.csv{ending}"))
    check_wide(
        read_bytes(
            tmp_path,
            pack(narrow.encode()),
            f"narrow.csv{ending}",
            layout="narrow",
            quality="quality",
        )
    )
    check_wide(
        read_bytes(tmp_path, pack(parquet_of(WIDE)), f"wide.parquet{ending}", format="parquet")
    )
    got = read_bytes(
        tmp_path,
        pack(parquet_of(narrow)),
        f"narrow.parquet{ending}",
        format="parquet",
        layout="narrow",
        quality="quality",
    )
    check_wide(got)


def test_typed_parquet_as_text(tmp_path: Path) -> None:
    stamps = pd.to_datetime(["2026-03-14T08:00:00.00Z", "2026-03-14T08:00:01.25Z"])
    table = pd.DataFrame(
        {
            "timestamp": stamps,
            "FIC-1.PV": [1.5, None],
            "FIC-1.SP": pd.array([50, 51], "Int32"),
            "FIC-1.MODE": pd.Categorical(["AUTO", "MAN"]),
        }
    )
    sink = io.BytesIO()
    table.to_parquet(sink)
    got = read_bytes(tmp_path, sink.getvalue(), "a.parquet", format="parquet")
    assert {tag: as_rows(raw) for tag, raw in got.columns.items()} == {
        "FIC-1.MODE": [(0.0, "AUTO"), (1.25, "MAN")],
        "FIC-1.PV": [(0.0, 1.5)],
        "FIC-1.SP": [(0.0, 50.0), (1.25, 51.0)],
    }
    assert (got.account.taken, got.account.blank) == (5, 1)


def test_dots_in_parquet_names_are_no_paths(tmp_path: Path) -> None:
    text = "timestamp,FIC,FIC.PV\n2026-03-14T08:00:00Z,1,2\n"
    got = read_bytes(tmp_path, parquet_of(text), "a.parquet", {"FIC": False}, format="parquet")
    assert as_rows(got.columns["FIC"]) == [(0.0, 1.0)]
    assert (got.account.read, got.account.unregistered) == (2, 1)


def test_an_independent_parser_reads_the_same(tmp_path: Path) -> None:
    """pandas.read_csv and pandas.to_datetime on the same file."""
    random = np.random.default_rng(7)
    stamps = START_US + np.sort(random.choice(10**9, 400, replace=False))
    lines = [
        f"{pd.Timestamp(int(us), unit='us').isoformat()}Z,{random.normal(50, 9):.{at % 17}f},{at}"
        for at, us in enumerate(stamps)
    ]
    text = "\n".join(["timestamp,FIC-1.PV,FIC-1.SP", *lines])
    got = read_bytes(tmp_path, text)
    table = pd.read_csv(io.StringIO(text), dtype={"FIC-1.PV": str, "FIC-1.SP": str})
    times = pd.to_datetime(table["timestamp"], format="ISO8601").dt.as_unit("us").astype("int64")
    for tag in ("FIC-1.PV", "FIC-1.SP"):
        samples = got.columns[tag].samples
        assert samples.t_us.tolist() == times.tolist()
        assert samples.value.tolist() == [float(text) for text in table[tag]]


def test_only_wanted_columns_of_a_very_wide_file(tmp_path: Path) -> None:
    names = ",".join(f"T{at}" for at in range(5000))
    row = ",".join("1" for _ in range(5000))
    text = f"timestamp,{names}\n" + "".join(
        f"2026-03-14T08:00:{second:02}Z,{row}\n" for second in range(20)
    )
    got = read_bytes(tmp_path, text, wanted={"T4999": False, "T0": True})
    assert list(got.columns) == ["T0", "T4999"]
    assert (got.account.taken, got.account.unregistered) == (40, 20 * 4998)


def test_header_alone_is_a_file_without_rows(tmp_path: Path) -> None:
    got = read_bytes(tmp_path, "timestamp,FIC-1.PV")
    assert (got.first_us, got.last_us, dict(got.columns)) == (None, None, {})
    assert got.named == ("FIC-1.PV",)
    assert got.account.read == 0


def test_peek_and_first_stamp(tmp_path: Path) -> None:
    rows = "".join(f"2026-03-14T08:00:00Z,T{at},{at},Good\n" for at in range(50_000))
    for name, data, declared in (
        ("a.csv", (NARROW + rows).encode(), {}),
        ("a.csv.gz", gzip.compress((NARROW + rows).encode()), {}),
        ("a.csv.zst", zst_in_frames((NARROW + rows).encode()), {}),
        ("a.parquet", parquet_of(NARROW + rows), {"format": "parquet"}),
    ):
        (tmp_path / name).write_bytes(data)
        source = a_source(tmp_path, files=name, layout="narrow", **declared)
        (file,) = discover(source)
        seen = peek(file, source, rows=10)
        assert seen.tags == tuple(f"T{at}" for at in range(10))
        assert seen.first_us == START_US
        assert first_stamp(file, source) == START_US


def test_peek_sees_faults_and_wide_tags(tmp_path: Path) -> None:
    (tmp_path / "a.csv").write_text("timestamp,A,B,\nsoon,1,2,\n2026-03-14T08:00:00Z,1,2,\n")
    source = a_source(tmp_path, files="a.csv")
    (file,) = discover(source)
    seen = peek(file, source)
    assert seen.tags == ("A", "B")
    assert seen.first_us == START_US
    assert [fault.line for fault in seen.faults] == [2]


def test_first_stamp_of_what_cannot_be_read(tmp_path: Path) -> None:
    for name, data in (("a.csv", b""), ("b.csv", b"timestamp\n"), ("c.csv.gz", b"no gzip")):
        (tmp_path / name).write_bytes(data)
        source = a_source(tmp_path, files=name)
        (file,) = discover(source)
        assert first_stamp(file, source) is None


def test_texts_that_are_no_modes_cost_their_tag_alone(tmp_path: Path) -> None:
    limits = FileLimits(most_texts=2)
    rows = [f"2026-03-14T08:00:0{s}Z,1.5,50,M{s},1" for s in range(4)]
    head = WIDE.splitlines()[0]
    got = read_bytes(tmp_path, "\n".join([head, *rows]) + "\n", limits=limits)
    assert set(got.columns) == {"FIC-1.PV", "FIC-1.SP"}
    assert got.account.refused == {"no_mode": 4}
    long = read_bytes(tmp_path, WIDE, limits=FileLimits(longest_text=3))
    assert long.account.refused == {"no_mode": 4}

"""Exports as the world leaves them: closed folders, odd names and types, a wrong unit of time."""

from __future__ import annotations

import io
import os
from collections.abc import Mapping
from pathlib import Path
from typing import Any

import pyarrow as pa
import pyarrow.parquet as pq
import pytest
from export_files import START_US, WIDE, a_source, as_rows, read_bytes
from export_files import read_whole as read

from audit.errors import ExportRefused
from audit.exports import discover, peek
from audit.workers import workers


def parquet(columns: Mapping[str, Any]) -> bytes:
    sink = io.BytesIO()
    pq.write_table(pa.table(dict(columns)), sink)
    return sink.getvalue()


def test_a_folder_that_may_not_be_listed_is_not_an_empty_one(
    tmp_path: Path, monkeypatch: pytest.MonkeyPatch
) -> None:
    (tmp_path / "exports").mkdir()
    listed = os.scandir

    def closed(path: Any) -> Any:
        if str(path).endswith("exports"):
            raise PermissionError(13, "Permission denied")
        return listed(path)

    monkeypatch.setattr(os, "scandir", closed)
    with pytest.raises(ExportRefused, match="folder cannot be listed: Permission denied"):
        discover(a_source(tmp_path, files="exports/*.csv"))
    assert discover(a_source(tmp_path, files="nowhere/*.csv")) == []


def test_a_loop_of_links_and_an_odd_name_are_refused_alone(tmp_path: Path) -> None:
    (tmp_path / "a.csv").symlink_to(tmp_path / "a.csv")
    (tmp_path / "b.csv").symlink_to(tmp_path / "nowhere.csv")
    (tmp_path / "c.csv").mkdir()
    os.mkfifo(tmp_path / "d.csv")
    (tmp_path / os.fsdecode(b"e\xe4.csv")).write_text(WIDE)
    (tmp_path / "f.csv").write_text(WIDE)
    source = a_source(tmp_path, files="*.csv")
    said = {}
    for file in discover(source):
        try:
            said[file.path] = f"{len(read(file, source, {}).columns)} tags"
        except ExportRefused as refused:
            said[file.path] = refused.reason
    assert list(said) == ["a.csv", "b.csv", "d.csv", r"e\xe4.csv", "f.csv"]
    assert "links" in said["a.csv"]
    assert "leads nowhere" in said["b.csv"]
    assert "a pipe" in said["d.csv"]
    assert "not UTF-8" in said[r"e\xe4.csv"]
    assert said["f.csv"] == "0 tags"


def test_a_revision_of_thirty_digits_is_one_the_store_can_hold(tmp_path: Path) -> None:
    (tmp_path / f"a_r{'9' * 30}.csv").write_text(WIDE)
    (file,) = discover(a_source(tmp_path, files="*.csv", revision=r"_r(\d+)"))
    assert 0 < file.revision < 2**63


def _refuse(path: str) -> ExportRefused:
    return ExportRefused(path, "is empty", "export it again", 3)


def test_a_refusal_comes_whole_out_of_a_worker_process() -> None:
    with workers(2) as pool:
        (refused,) = pool.map(_refuse, ["a.csv"])
    assert (refused.path, refused.reason, refused.remedy, refused.line) == (
        "a.csv",
        "is empty",
        "export it again",
        3,
    )
    assert str(refused) == str(_refuse("a.csv"))


SECONDS = START_US // 1_000_000


@pytest.mark.parametrize(
    ("stamp", "declared"),
    [
        (SECONDS, "epoch_ms"),  # today's seconds as milliseconds: 21 January 1970
        (SECONDS * 1000, "epoch_us"),
        (SECONDS * 1_000_000, "epoch_ns"),
        (SECONDS * 1000, "epoch_s"),  # milliseconds as seconds: the year 58000
        (SECONDS * 1_000_000, "epoch_ms"),
    ],
)
def test_epoch_numbers_in_another_unit_are_refused(
    stamp: int, declared: str, tmp_path: Path
) -> None:
    text = f"timestamp,FIC-1.PV\n{stamp},1\n"
    got = read_bytes(tmp_path, text, time_format=declared)
    assert got.account.refused == {"bad_time": 1}
    assert "time_format" in got.faults[0].remedy
    typed = parquet({"timestamp": pa.array([float(stamp)]), "FIC-1.PV": pa.array([1.0])})
    got = read_bytes(tmp_path, typed, "a.parquet", format="parquet", time_format=declared)
    assert got.account.refused == {"bad_time": 1}


# Arrow's newer and older ways to hold a text (Apache Arrow columnar format: Utf8View, Binary)
@pytest.mark.parametrize(
    "kind", [pa.string_view(), pa.binary(), pa.large_binary(), pa.large_string()], ids=str
)
def test_texts_in_any_arrow_type(kind: Any, tmp_path: Path) -> None:
    def column(*texts: str) -> Any:
        return pa.array(texts).cast(kind)

    columns = {
        "timestamp": column("2026-03-14T08:00:00Z", "2026-03-14T08:00:01Z", "2026-03-14T08:00:01Z"),
        "tag": column("FIC-1.PV", "FIC-1.PV", "FIC-1.MODE"),
        "value": column("1.5", "-", "AUTO"),
    }
    got = read_bytes(tmp_path, parquet(columns), "a.parquet", format="parquet", layout="narrow")
    assert as_rows(got.columns["FIC-1.PV"]) == [(0.0, 1.5)]
    assert as_rows(got.columns["FIC-1.MODE"]) == [(1.0, "AUTO")]
    assert got.account.refused == {"not_a_number": 1}


def test_a_type_that_nothing_can_be_made_of_refuses_the_file(
    tmp_path: Path, monkeypatch: pytest.MonkeyPatch
) -> None:
    def unknown(*_: object) -> None:
        raise pa.ArrowNotImplementedError("no kernel matching input types")

    monkeypatch.setattr("audit.exports.layouts.parts", unknown)
    with pytest.raises(ExportRefused, match=r"type that cannot be read \(timestamp"):
        read_bytes(tmp_path, WIDE)
    (file,) = discover(a_source(tmp_path, files="a.csv"))
    with pytest.raises(ExportRefused, match="type that cannot be read"):
        peek(file, a_source(tmp_path))


@pytest.mark.parametrize("stray", ["1970-01-01T00:00:00Z", "2000-01-01", "2199-12-31T00:00:00Z"])
@pytest.mark.parametrize("layout", ["wide", "narrow"])
def test_a_clock_that_was_reset_does_not_stretch_a_file_over_years(
    stray: str, layout: str, tmp_path: Path
) -> None:
    head = "timestamp,FIC-1.PV,FIC-1.SP" if layout == "wide" else "timestamp,tag,value"
    row = "{},1,2" if layout == "wide" else "{},FIC-1.PV,1"
    stamps = [f"2026-03-14T08:00:{second:02}Z" for second in range(40)]
    rows = [row.format(stamp) for stamp in [*stamps[:20], stray, *stamps[20:]]]
    got = read_bytes(tmp_path, "\n".join([head, *rows]), layout=layout)
    assert (got.first_us, got.last_us) == (START_US, START_US + 39_000_000)
    assert got.account.refused == {"stray_time": 2 if layout == "wide" else 1}
    assert got.faults[0].line == 22
    assert "clock" in got.faults[0].remedy


def test_years_apart_in_earnest_are_kept(tmp_path: Path) -> None:
    for text in (
        "timestamp,FIC-1.PV\n2019-01-01,1\n2026-03-14,2\n",
        "timestamp,FIC-1.PV\n" + "".join(f"{year}-03-14,2\n" for year in range(1971, 2026, 2)),
    ):
        assert read_bytes(tmp_path, text).account.refused == {}

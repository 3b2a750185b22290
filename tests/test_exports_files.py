"""Finding, opening and refusing export files."""

import gzip
import os
from collections.abc import Callable, Iterator
from pathlib import Path
from typing import Any

import fsspec
import pytest
from export_files import NARROW, PACKED, WANTED, WIDE, check_wide, parquet_of
from export_files import read_whole as read
from fsspec.implementations.memory import MemoryFileSystem
from hypothesis import given, settings
from hypothesis import strategies as st

from audit.errors import ExportRefused
from audit.exports import discover, first_stamp, peek
from audit.exports.files import revision
from audit.records import ExportRead, ExportSource


def read_file(folder: Path, name: str, data: bytes, **declared: Any) -> ExportRead:
    (folder / name).write_bytes(data)
    source = ExportSource("dcs", name, folder=str(folder), **declared)
    (file,) = discover(source)
    return read(file, source, WANTED)


def refused(folder: Path, name: str, data: bytes, **declared: Any) -> ExportRefused:
    with pytest.raises(ExportRefused) as caught:
        read_file(folder, name, data, **declared)
    assert caught.value.path == name
    assert caught.value.remedy
    return caught.value


@pytest.fixture
def memory() -> Iterator[MemoryFileSystem]:
    fs = fsspec.filesystem("memory")
    yield fs
    fs.rm("/plant", recursive=True)


def test_discover_in_byte_order_with_slashes(tmp_path: Path) -> None:
    for name in ("b.csv", "B.csv", "a/ä.csv", "a/z.csv", ".hidden.csv", "c.txt"):
        path = tmp_path / "exports" / name
        path.parent.mkdir(parents=True, exist_ok=True)
        path.write_text("x")
    (tmp_path / "exports" / "folder.csv").mkdir()
    source = ExportSource("dcs", "exports/**/*.csv", folder=str(tmp_path))
    found = discover(source)
    assert [file.path for file in found] == [
        "exports/B.csv",
        "exports/a/z.csv",
        "exports/a/ä.csv",
        "exports/b.csv",
    ]
    assert {file.source for file in found} == {"dcs"}
    first = tmp_path / "exports" / "B.csv"
    assert (found[0].size, found[0].stamp) == (1, str(first.stat().st_mtime_ns))


def test_discover_outside_the_folder_and_by_absolute_path(tmp_path: Path) -> None:
    site = tmp_path / "site[1]"
    site.mkdir()
    (tmp_path / "drop").mkdir()
    (tmp_path / "drop" / "a.csv").write_text("x")
    (site / "a.csv").write_text("x")

    def found(files: str) -> list[str]:
        return [file.path for file in discover(ExportSource("dcs", files, folder=str(site)))]

    assert found("*.csv") == ["a.csv"]
    assert found("../drop/*.csv") == ["../drop/a.csv"]
    assert found(f"{tmp_path}/drop/*.csv") == [f"{tmp_path}/drop/a.csv"]
    assert found(f"{site}/a.csv".replace("[", "[[]")) == ["a.csv"]


def test_nothing_there_is_an_empty_list(tmp_path: Path) -> None:
    for files in ("*.csv", "missing/*.csv", "missing.csv", "memory://none/*.csv",
                  f"file://{tmp_path}/none/*.csv"):  # fmt: skip
        assert discover(ExportSource("dcs", files, folder=str(tmp_path))) == []


@pytest.mark.parametrize("files", ["nosuch://a/*.csv", "s3x://bucket/*.csv"])
def test_an_unknown_protocol_is_refused(files: str) -> None:
    with pytest.raises(ExportRefused, match="cannot be listed"):
        discover(ExportSource("dcs", files))


@pytest.mark.parametrize("ending", PACKED)
def test_memory_and_file_urls(tmp_path: Path, memory: MemoryFileSystem, ending: str) -> None:
    data = PACKED[ending](WIDE.encode())
    memory.pipe(f"/plant/a.csv{ending}", data)
    (tmp_path / f"a.csv{ending}").write_bytes(data)
    for files in (f"memory://plant/*.csv{ending}", f"file://{tmp_path}/*.csv{ending}"):
        source = ExportSource("dcs", files)
        (file,) = discover(source)
        assert file.path.endswith(f"/a.csv{ending}")
        assert "://" in file.path
        assert file.stamp
        check_wide(read(file, source, WANTED))
        assert set(WANTED) - {"absent"} < set(peek(file, source).tags)
        assert first_stamp(file, source) == peek(file, source).first_us


def test_parquet_by_url(memory: MemoryFileSystem) -> None:
    memory.pipe("/plant/a.parquet", parquet_of(WIDE))
    source = ExportSource("dcs", "memory://plant/*", format="parquet")
    (file,) = discover(source)
    check_wide(read(file, source, WANTED))
    assert peek(file, source).first_us == read(file, source, WANTED).first_us


@pytest.mark.parametrize(
    ("path", "pattern", "number"),
    [
        ("a_v12.csv", r"_v(\d+)", 12),
        ("a_v12.csv", r"\d+", 12),
        ("a_v007.csv", r"_v(\d+)", 7),
        ("a.csv", r"_v(\d+)", 0),
        ("a_vx.csv", r"_v(\w)", 0),
        ("a.csv", r"a(\d+)?", 0),
        ("a_12.csv", "", 0),
    ],
)
def test_revision(path: str, pattern: str, number: int) -> None:
    assert revision(path, pattern) == number


@pytest.mark.parametrize(
    ("name", "data", "says"),
    [
        ("a.csv", b"", "empty"),
        ("a.csv", b"\xef\xbb\xbf\n \n"[:4], "empty"),
        ("a.csv.gz", gzip.compress(b"", mtime=0), "empty"),
        ("a.csv", b"2026-03-14T08:00:00Z,1\n", "no column 'timestamp'"),
        ("a.csv", b"timestamp;A\n2026-03-14T08:00:00Z;1\n", "no column 'timestamp'"),
        ("a.csv", b"timestamp,A,B,A\n", "more than once: A"),
        ("a.csv", b"timestamp,A\n1,\0\n", "NUL byte at byte 15"),
        ("a.csv", "timestamp,A\n".encode("utf-16"), "byte 0xff, not UTF-8, at byte 1"),
        ("a.csv", b'timestamp,A\n1,2\n1,"2\n3,4\n', "not closed"),
        ("a.csv", b'timestamp,A,B\n1,2,"3\n4,5, 6" x"\n7,"8\n', "not closed"),
        ("a.csv.gz", WIDE.encode(), "decompressed"),
        ("a.csv.bz2", WIDE.encode(), "decompressed"),
        ("a.csv.xz", WIDE.encode(), "decompressed"),
        ("a.csv.zst", WIDE.encode(), "decompressed"),
        ("a.csv", gzip.compress(WIDE.encode(), mtime=0), "byte"),
        ("a.csv", parquet_of(WIDE), "byte"),
    ],
)
def test_csv_files_that_cannot_be_read(tmp_path: Path, name: str, data: bytes, says: str) -> None:
    assert says in refused(tmp_path, name, data).reason


def test_the_line_of_what_is_wrong(tmp_path: Path) -> None:
    latin = "timestamp,A\n1,2\n1,°C\n".encode("latin-1")
    error = refused(tmp_path, "a.csv", latin)
    assert (error.line, error.reason) == (3, "byte 0xb0, not UTF-8, at byte 19")
    assert refused(tmp_path, "b.csv", b'timestamp,A\n"1\n",2\n3,"4\n5,6\n').line == 4
    assert refused(tmp_path, "c.csv", b"\n\ntime,A\n").line == 3
    assert (
        "'bad directive"
        not in refused(tmp_path, "d.csv", b"timestamp\nx\n", time_format="%Q").reason
    )


@pytest.mark.parametrize("ending", [ending for ending in PACKED if ending])
def test_truncated_compression(tmp_path: Path, ending: str) -> None:
    whole = PACKED[ending](WIDE.encode())
    for cut in (1, 5, len(whole) // 2, len(whole) - 1):
        assert "decompressed" in refused(tmp_path, f"a.csv{ending}", whole[:cut]).reason


def test_truncated_and_foreign_parquet(tmp_path: Path) -> None:
    whole = parquet_of(WIDE)
    for data in (whole[:10], whole[: len(whole) // 2], whole[:-1], WIDE.encode(), b"PAR1PAR1"):
        assert "Parquet" in refused(tmp_path, "a.parquet", data, format="parquet").reason
    error = refused(tmp_path, "a.parquet", parquet_of("when,A\n1,2\n"), format="parquet")
    assert "no column 'timestamp'" in error.reason
    error = refused(tmp_path, "a.parquet", whole, format="parquet", layout="narrow")
    assert "'tag', 'value'" in error.reason


def test_narrow_columns_that_are_missing(tmp_path: Path) -> None:
    error = refused(tmp_path, "a.csv", b"timestamp,tag,value\n", layout="narrow", quality="status")
    assert "no column 'status'" in error.reason
    assert read_file(tmp_path, "b.csv", NARROW.encode(), layout="narrow").account.read == 0


def test_a_file_that_is_gone(tmp_path: Path) -> None:
    (tmp_path / "a.csv").write_text(WIDE)
    source = ExportSource("dcs", "a.csv", folder=str(tmp_path))
    (file,) = discover(source)
    (tmp_path / "a.csv").unlink()
    with pytest.raises(ExportRefused, match="gone"):
        read(file, source, WANTED)
    assert first_stamp(file, source) is None


def append(path: Path) -> None:
    with path.open("a") as file:
        file.write("2026-03-14T08:00:05Z,1,1,1,1\n")


def touch(path: Path) -> None:
    os.utime(path, ns=(1, 1))


@pytest.mark.parametrize("change", [append, touch])
def test_a_file_that_changes_while_it_is_read(
    tmp_path: Path, monkeypatch: pytest.MonkeyPatch, change: Callable[[Path], None]
) -> None:
    (tmp_path / "a.csv").write_text(WIDE)
    source = ExportSource("dcs", "a.csv", folder=str(tmp_path))
    (file,) = discover(source)
    as_it_is = os.read

    def with_a_writer(descriptor: int, most: int) -> bytes:
        data = as_it_is(descriptor, most)
        if WIDE.encode() in data:
            change(tmp_path / "a.csv")
        return data

    with monkeypatch.context() as patched:
        patched.setattr(os, "read", with_a_writer)
        with pytest.raises(ExportRefused, match="still being written") as caught:
            read(file, source, WANTED)
    assert caught.value.remedy == "left for the next run"
    assert read(file, source, WANTED).account.balance == 0


@settings(max_examples=60, deadline=None)
@given(st.data())
def test_damaged_files_are_read_or_refused(
    tmp_path_factory: pytest.TempPathFactory, data: st.DataObject
) -> None:
    """A few octets changed anywhere: a balanced account or a refusal, never another error."""
    folder = tmp_path_factory.mktemp("damaged")
    name, whole, declared = data.draw(
        st.sampled_from(
            [
                ("a.csv", WIDE.encode(), {}),
                ("a.csv", NARROW.encode() + b"2026-03-14T08:00:00Z,FIC-1.PV,1,Good\n" * 3,
                 {"layout": "narrow", "quality": "quality"}),
                ("a.csv.gz", gzip.compress(WIDE.encode(), mtime=0), {}),
                ("a.parquet", parquet_of(WIDE), {"format": "parquet"}),
            ]
        )
    )  # fmt: skip
    octets = bytearray(whole)
    for place, octet in data.draw(
        st.lists(st.tuples(st.integers(0, len(octets) - 1), st.integers(0, 255)), max_size=4)
    ):
        octets[place] = octet
    outcome: ExportRead | ExportRefused
    try:
        outcome = read_file(folder, name, bytes(octets), **declared)
    except ExportRefused as refusal:
        outcome = refusal
    assert outcome.remedy if isinstance(outcome, ExportRefused) else outcome.account.balance == 0

"""Export files that change while they are read, and files to look up things in."""

from __future__ import annotations

import gzip
import os
from collections.abc import Callable
from hashlib import sha256
from pathlib import Path

import pytest
from export_files import PACKED, a_source
from stored_files import MIB, content, found, put, some_text

from audit.errors import ExportRefused
from audit.exports.files import on_disk, opened, streamed


def grown(path: Path) -> None:
    with path.open("ab") as file:
        file.write(b"more")


def replaced(path: Path) -> None:
    """Another file under the same name, of the same size and stamp."""
    stamp = path.stat().st_mtime_ns
    other = path.with_name("other")
    other.write_bytes(b"x" * path.stat().st_size)
    os.utime(other, ns=(stamp, stamp))
    other.rename(path)


def shrunk(path: Path) -> None:
    os.truncate(path, path.stat().st_size // 2)


def touched(path: Path) -> None:
    os.utime(path, ns=(1, 1))


CHANGES = [grown, replaced, shrunk, touched]


@pytest.mark.parametrize("change", CHANGES)
@pytest.mark.parametrize("ending", PACKED)
def test_a_file_that_changes_between_two_pieces(
    tmp_path: Path, ending: str, change: Callable[[Path], None]
) -> None:
    name = f"a.csv{ending}"
    file, source = put(tmp_path, name, PACKED[ending](some_text(600_000)))
    with opened(file, source) as stream:
        stream.read(1000)
        change(tmp_path / name)
        with pytest.raises(ExportRefused, match="still being written") as caught:
            stream.finish()
    assert caught.value.remedy == "left for the next run"


@pytest.mark.parametrize("change", CHANGES)
def test_a_file_that_changes_while_things_are_looked_up_in_it(
    tmp_path: Path, change: Callable[[Path], None]
) -> None:
    file, source = put(tmp_path, "a.parquet", b"x" * 1000)
    with (
        pytest.raises(ExportRefused, match="still being written"),
        on_disk(file, source, tmp_path),
    ):
        change(tmp_path / "a.parquet")
    file, source = found(tmp_path, "a.parquet")

    def broken() -> None:
        with on_disk(file, source, tmp_path):
            change(tmp_path / "a.parquet")
            raise ExportRefused("a.parquet", "not readable as Parquet", "export it again")

    if change is not touched:
        with pytest.raises(ExportRefused, match="still being written"):
            broken()


def test_a_file_that_grows_faster_than_it_is_read(
    tmp_path: Path, monkeypatch: pytest.MonkeyPatch
) -> None:
    file, source = put(tmp_path, "a.csv", b"x" * 1000)
    calls = []

    def endless(_: int, most: int) -> bytes:
        calls.append(most)
        return b"x" * min(most, 600)

    monkeypatch.setattr(os, "read", endless)
    with pytest.raises(ExportRefused, match="still being written"):
        content(file, source, 600)
    assert len(calls) == 2


def test_a_compressed_file_caught_in_the_making_is_left_for_the_next_run(tmp_path: Path) -> None:
    whole = gzip.compress(some_text(MIB))
    file, source = put(tmp_path, "a.csv.gz", whole[: len(whole) // 2])
    with opened(file, source) as stream:
        stream.read(1000)
        (tmp_path / "a.csv.gz").write_bytes(whole[:-1])
        with pytest.raises(ExportRefused, match="still being written"):
            stream.finish()


@pytest.mark.parametrize("ending", PACKED)
def test_on_disk_is_the_file_itself_or_a_copy(tmp_path: Path, ending: str) -> None:
    site, scratch = tmp_path / "site", tmp_path / "scratch"
    site.mkdir()
    scratch.mkdir()
    text = some_text(MIB + 9)
    stored = PACKED[ending](text)
    name = f"a.parquet{ending}"
    file, source = put(site, name, stored, format="parquet")
    with on_disk(file, source, scratch) as (path, content_hash):
        assert path.read_bytes() == text
        assert content_hash == sha256(stored).hexdigest()
        assert path == (site / name if not ending else scratch / path.name)
    with streamed(file, source) as raw:
        raw.seek(-9, os.SEEK_END)
        assert raw.read() == text[-9:]
    assert list(scratch.iterdir()) == []
    assert [each.name for each in site.iterdir()] == [name]
    with streamed(file, a_source(site, files=name)) as raw:
        assert raw.read(MIB + 3) == text[: MIB + 3]


def test_a_scratch_folder_that_fails_is_not_the_fault_of_the_file(
    tmp_path: Path, monkeypatch: pytest.MonkeyPatch
) -> None:
    file, source = put(tmp_path, "a.parquet.gz", gzip.compress(b"PAR1"))
    with pytest.raises(FileNotFoundError), on_disk(file, source, tmp_path / "nowhere"):
        pass

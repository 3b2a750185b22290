"""Exports that lie elsewhere: on fsspec filesystems that fail in their own ways, or tell little."""

from __future__ import annotations

import zipfile
from collections.abc import Iterator
from hashlib import sha256
from io import BytesIO
from pathlib import Path
from typing import Any, ClassVar

import fsspec
import pytest
from export_files import PACKED, a_source
from fsspec.implementations.memory import MemoryFileSystem
from fsspec.registry import _registry as registered
from stored_files import MIB, content, found, refusal, some_text

from audit.errors import ExportRefused
from audit.exports import backends
from audit.exports.files import discover, on_disk, opened, same_file
from audit.records import ExportSource, FileLimits


class StoreError(Exception):
    """What the invented store raises; no OSError, as with several backends in use."""


class PlantCalls:
    """A store whose every call can be made to fail, and which strips the host off its paths."""

    protocol = "plantstore"
    cachable = False
    files: ClassVar[dict[str, bytes]] = {}
    fails: ClassVar[dict[str, Exception]] = {}
    tells: ClassVar[dict[str, Any]] = {}

    def __init__(self, host: str, **_: object) -> None:
        super().__init__()
        self._try("connect")

    @classmethod
    def _strip_protocol(cls, path: str) -> str:
        return "/" + path.partition("://")[2].partition("/")[2] if "://" in path else path

    @staticmethod
    def _get_kwargs_from_urls(path: str) -> dict[str, str]:
        host = path.partition("://")[2].partition("/")[0]
        return {"host": host} if host else {}

    def _try(self, call: str) -> None:
        if call in self.fails:
            raise self.fails[call]

    def _info(self, path: str) -> dict[str, Any]:
        told = {"name": path, "type": "file", "size": len(self.files[path]), "ETag": "1"}
        return {**told, **self.tells}

    def ls(self, path: str, detail: bool = True, **_: object) -> list[Any]:
        self._try("ls")
        inside = [each for each in self.files if each.startswith(path.rstrip("/") + "/")]
        return [self._info(each) if detail else each for each in inside]

    def info(self, path: str, **_: object) -> dict[str, Any]:
        self._try("info")
        if path in self.files:
            return self._info(path)
        if any(each.startswith(path.rstrip("/") + "/") for each in self.files):
            return {"name": path, "type": "directory", "size": 0}
        raise FileNotFoundError(2, "No such file", path)

    def open(self, path: str, mode: str = "rb", **_: object) -> Any:
        self._try("open")
        stream = Trickle(self.files[path])
        stream.store = self
        return stream


class Trickle(BytesIO):
    """Gives at most 1000 octets a read, as a slow line does."""

    store: PlantCalls

    def read(self, size: int | None = -1, /) -> bytes:
        self.store._try("read")
        return super().read(min(1000, size or 0))


@pytest.fixture
def store() -> Iterator[type[PlantCalls]]:
    kind = type("PlantStore", (PlantCalls, fsspec.AbstractFileSystem), {})
    fsspec.register_implementation("plantstore", kind)
    PlantCalls.files = {"/day/a.csv": some_text(5000)}
    PlantCalls.fails, PlantCalls.tells = {}, {}
    yield PlantCalls
    del registered["plantstore"]


URL = "plantstore://north/day/*.csv"


@pytest.mark.parametrize("ending", PACKED)
def test_content_that_trickles_in(tmp_path: Path, store: type[PlantCalls], ending: str) -> None:
    text = some_text(2 * MIB + 5)
    stored = PACKED[ending](text)
    store.files = {f"/day/a.csv{ending}": stored}
    file, source = found(tmp_path, f"plantstore://north/day/*{ending}")
    assert (file.path, file.stamp) == (f"plantstore://north/day/a.csv{ending}", "1")
    assert content(file, source) == (text, sha256(stored).hexdigest())
    with on_disk(file, source, tmp_path) as (path, content_hash):
        assert path.parent == tmp_path
        assert path.read_bytes() == text
    assert content_hash == sha256(stored).hexdigest()
    assert list(tmp_path.iterdir()) == []


FAILURES = [
    StoreError("credentials  have\nexpired"),
    zipfile.BadZipFile("no central directory"),  # of a package that the backend's module names
    ConnectionResetError(104, "Connection reset by peer"),
    TimeoutError("no answer"),
    ValueError("no such bucket"),
    RuntimeError("the loop is closed"),
]


@pytest.mark.parametrize("failure", FAILURES, ids=repr)
def test_whatever_the_store_raises_is_a_refusal(
    tmp_path: Path, store: type[PlantCalls], failure: Exception
) -> None:
    file, source = found(tmp_path, URL)
    for call in ("info", "open", "read", "connect"):
        store.fails = {call: failure}
        error = refusal(file, source)
        assert " ".join(str(failure.args[-1]).split()) in error.reason
    for call in ("connect", "ls"):
        store.fails = {call: failure}
        with pytest.raises(ExportRefused, match="cannot be listed") as caught:
            discover(source)
        assert caught.value.path == URL
    store.fails = {"info": failure}
    with pytest.raises(ExportRefused, match="cannot be listed"):
        discover(a_source(tmp_path, files="plantstore://north/day/a.csv"))


@pytest.mark.parametrize("fault", [KeyError("x"), AttributeError("x"), TypeError("x")], ids=repr)
def test_a_fault_of_a_program_is_not_taken_for_one_of_the_store(
    tmp_path: Path, store: type[PlantCalls], fault: Exception
) -> None:
    file, source = found(tmp_path, URL)
    store.fails = {"read": fault}
    with pytest.raises(type(fault)):
        content(file, source)


def test_only_errors_are_counted_as_failures() -> None:
    kinds = backends.failures("plantstore://north/x")
    assert {OSError, ValueError, TypeError} <= set(kinds)
    assert {Exception, KeyError, AttributeError, AssertionError} & set(kinds) == set()
    for url in ("nosuch://x", "s3://bucket/x", "memory://x"):
        kinds = backends.failures(url)
        assert OSError in kinds
        assert Exception not in kinds
    assert backends.failures(None) == (OSError,)


def test_one_file_by_its_url(tmp_path: Path, store: type[PlantCalls]) -> None:
    file, source = found(tmp_path, "plantstore://north/day/a.csv")
    assert file.path == "plantstore://north/day/a.csv"
    assert content(file, source)[0] == store.files["/day/a.csv"]
    for files in ("plantstore://north/nowhere/a.csv", "plantstore://north/nowhere/*.csv",
                  "memory://nowhere/a.csv", "memory://nowhere/*.csv"):  # fmt: skip
        assert discover(a_source(tmp_path, files=files)) == []


def test_a_url_without_its_host(tmp_path: Path, store: type[PlantCalls]) -> None:
    with pytest.raises(ExportRefused, match=r"cannot be listed: .*host"):
        discover(a_source(tmp_path, files="plantstore:///day/*.csv"))


def test_the_same_path_on_two_hosts_is_two_files(tmp_path: Path, store: type[PlantCalls]) -> None:
    files = [found(tmp_path, f"plantstore://{host}/day/*.csv") for host in ("me@north", "south")]
    assert [file.path for file, _ in files] == [
        "plantstore://north/day/a.csv",
        "plantstore://south/day/a.csv",
    ]
    assert len({same_file(file, source) for file, source in files}) == 2
    for file, source in files:
        assert content(file, source)[0] == store.files["/day/a.csv"]


def test_a_store_that_does_not_tell_the_size(tmp_path: Path, store: type[PlantCalls]) -> None:
    store.tells = {"size": None}
    file, source = found(tmp_path, URL)
    assert file.size == 0
    assert content(file, source)[0] == store.files["/day/a.csv"]
    file, source = found(tmp_path, URL, limits=FileLimits(largest_file_bytes=3000))
    assert "holds 0.005 MB, more than the 0.003 MB" in refusal(file, source).reason


def test_a_store_that_does_not_tell_the_time(tmp_path: Path, store: type[PlantCalls]) -> None:
    store.tells = {"ETag": None}
    file, source = found(tmp_path, URL)
    assert file.stamp == ""
    assert content(file, source)[0] == store.files["/day/a.csv"]


def test_a_name_that_cannot_be_shown(tmp_path: Path, store: type[PlantCalls]) -> None:
    store.files = {"/day/a\nb.csv": b"x", "/day/c.csv": b"y"}
    source = a_source(tmp_path, files=URL)
    odd, plain = discover(source)
    assert odd.path == r"plantstore://north/day/a\nb.csv"
    assert content(plain, source)[0] == b"y"


@pytest.mark.parametrize("tells", [{"ETag": "2"}, {"size": 5001}])
def test_an_object_that_is_written_anew_while_it_is_read(
    tmp_path: Path, store: type[PlantCalls], tells: dict[str, Any]
) -> None:
    file, source = found(tmp_path, URL)
    with opened(file, source) as stream:
        stream.read(10)
        store.tells = tells
        with pytest.raises(ExportRefused, match="still being written"):
            stream.finish()


def test_objects_in_memory_that_go_or_grow(tmp_path: Path) -> None:
    memory: MemoryFileSystem = fsspec.filesystem("memory")
    memory.pipe("/hostile/a.csv", some_text(3000))
    try:
        file, source = found(tmp_path, "memory://hostile/*.csv")
        with opened(file, source) as stream:
            stream.read(10)
            memory.pipe("/hostile/a.csv", some_text(3001))
            with pytest.raises(ExportRefused, match="still being written"):
                stream.finish()
        file, source = found(tmp_path, "memory://hostile/*.csv")
        assert content(file, source)[0] == some_text(3001)
    finally:
        memory.rm("/hostile", recursive=True)
    assert refusal(file, source).reason == "the file is gone"


def test_members_of_an_archive(tmp_path: Path) -> None:
    """fsspec's chained URLs: files inside of archives, each known by its archive as well."""
    for name in ("x", "y"):
        with zipfile.ZipFile(tmp_path / f"{name}.zip", "w") as archive:
            archive.writestr("day/a.csv", f"of {name}")
    sources = [
        ExportSource(name, f"zip://day/*.csv::file://{tmp_path}/{name}.zip") for name in ("x", "y")
    ]
    for source in sources:
        (file,) = discover(source)
        assert file.path == f"zip://day/a.csv::file://{tmp_path}/{source.name}.zip"
        assert content(file, source)[0].decode() == f"of {source.name}"
    (tmp_path / "x.zip").write_bytes(b"PK broken")
    with pytest.raises(ExportRefused, match="cannot be listed"):
        discover(a_source(tmp_path, files=sources[0].files + "?"))

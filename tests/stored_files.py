"""Files for tests of the bytes alone: put there, found, read as a stream, or refused."""

from __future__ import annotations

import random
from pathlib import Path
from typing import Any

import pytest
import zstandard
from export_files import PACKED, a_source

from audit.errors import ExportRefused
from audit.exports.files import discover, on_disk, opened
from audit.records import ExportFile, ExportSource

ENDINGS = [ending for ending in PACKED if ending]
MIB = 1 << 20


def some_text(size: int, seed: int = 1) -> bytes:
    """Text that packs to about half."""
    return random.Random(seed).randbytes(size // 2 + 1).hex().encode()[:size]


def put(folder: Path, name: str, data: bytes, **declared: Any) -> tuple[ExportFile, ExportSource]:
    (folder / name).write_bytes(data)
    return found(folder, name, **declared)


def found(folder: Path, files: str, **declared: Any) -> tuple[ExportFile, ExportSource]:
    source = a_source(folder, files=files, **declared)
    (file,) = discover(source)
    return file, source


def content(file: ExportFile, source: ExportSource, at_once: int = MIB) -> tuple[bytes, str]:
    with opened(file, source) as stream:
        parts = []
        while part := stream.read(at_once):
            parts.append(part)
        assert all(len(part) == at_once for part in parts[:-1])
        assert stream.read(at_once) == b""
        return b"".join(parts), stream.content_hash


def refusal(file: ExportFile, source: ExportSource) -> ExportRefused:
    """The file is refused as a stream and, in the same words, as a file to look up things in."""
    with pytest.raises(ExportRefused) as caught:
        content(file, source)
    with (
        pytest.raises(ExportRefused) as again,
        on_disk(file, source, Path(source.folder)) as (path, _),
    ):
        path.read_bytes()
    assert again.value.reason == caught.value.reason
    assert caught.value.path == file.path
    assert caught.value.remedy
    return caught.value


def frames_of(ending: str, *parts: bytes) -> bytes:
    pack = zstandard.ZstdCompressor().compress if ending == ".zst" else PACKED[ending]
    return b"".join(pack(part) for part in parts)


def told(folder: Path, files: str) -> dict[str, str]:
    """Path -> content, or why it is refused."""
    source = a_source(folder, files=files)
    said = {}
    for file in discover(source):
        try:
            said[file.path] = content(file, source)[0].decode()
        except ExportRefused as refused:
            assert file.stamp == ""  # so that it is said each time
            said[file.path] = refused.reason
    return said

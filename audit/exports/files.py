"""Where exports lie: an export source comes in, its files go out; then one file's bytes.

Local globs are relative to the site's folder; anything with ``://`` goes to fsspec as a URL.
Endings .gz .bz2 .xz .zst are opened. Every failure of one file is an ``ExportRefused``.
"""

from __future__ import annotations

import bz2
import glob
import gzip
import hashlib
import io
import lzma
import os
import re
import zlib
from collections.abc import Callable, Iterator, Mapping
from contextlib import contextmanager
from dataclasses import dataclass
from pathlib import PurePath
from typing import Any, BinaryIO, cast

import fsspec
import zstandard
from fsspec.implementations.local import LocalFileSystem

from audit.errors import ExportRefused
from audit.records import ExportFile, ExportSource

_BROKEN = (OSError, EOFError, ValueError, zlib.error, lzma.LZMAError, zstandard.ZstdError)
_MOST_REVISED = 10**18 - 1
_STAMPS = ("ETag", "etag", "mtime", "LastModified", "last_modified", "updated", "modified")


@dataclass(frozen=True)
class Stored:
    """One file's bytes: ``content_hash`` sha256 as stored, ``data`` after decompression."""

    content_hash: str
    data: bytes


def discover(source: ExportSource) -> list[ExportFile]:
    """The files an export source names, in the byte order of their paths.

    A missing folder or no match is an empty list. Paths are relative to the site's folder with
    ``/``; a URL, or a local pattern given as an absolute path to elsewhere, stays as it is. A file
    that cannot even be looked at is in the list, to be refused when it is read.
    Raises ExportRefused where a URL or a folder cannot be listed at all.
    """
    found = _listed_url(source) if "://" in source.files else _listed_folder(source)
    files = [
        ExportFile(source.name, path, size, stamp, revision(path, source.revision))
        for path, size, stamp in found
    ]
    return sorted(files, key=lambda file: os.fsencode(file.path))


def revision(path: str, pattern: str) -> int:
    """The integer the regular expression finds in the path (first group, else all); none: 0.

    Beyond 18 digits it counts as the largest, or smallest, of that length.
    """
    match = re.search(pattern, path) if pattern else None
    if match is None:
        return 0
    text = match.group(1) if match.re.groups else match.group()
    if not text or re.fullmatch(r"[+-]?\d+", text, re.ASCII) is None:
        return 0
    return max(-_MOST_REVISED, min(_MOST_REVISED, int(text[:4000])))


def fetch(file: ExportFile, source: ExportSource) -> Stored:
    """All bytes of a file. Refused: gone, unreadable, changed while it was read, truncated."""
    fs, path = _located(file, source)
    try:
        before = _state(fs, path)
        stored = cast(bytes, fs.cat_file(path))
        after = _state(fs, path)
    except FileNotFoundError as error:
        if "\\" in file.path and os.sep == "/":
            raise ExportRefused(file.path, "its name is not UTF-8", "rename the file") from error
        raise ExportRefused(
            file.path, "the file is gone", "nothing to do if it was moved on purpose"
        ) from error
    except OSError as error:
        raise ExportRefused(
            file.path,
            f"cannot be read: {error.strerror or error}",
            "check the path and its permissions",
        ) from error
    if before != after or len(stored) != after[0]:
        raise ExportRefused(file.path, "still being written", "left for the next run")
    if not stored:
        raise ExportRefused(file.path, "the file is empty", "export it again")
    digest = hashlib.sha256(stored).hexdigest()
    return Stored(digest, _unpacked(stored, file.path))


@contextmanager
def streamed(file: ExportFile, source: ExportSource) -> Iterator[BinaryIO]:
    """The decompressed content as a stream, for looking at its head; failures as ``fetch``."""
    fs, path = _located(file, source)
    opener = _STREAMS.get(_ending(file.path))
    try:
        with fs.open(path, "rb") as raw:
            yield raw if opener is None else opener(raw)
    except _BROKEN as error:
        why = getattr(error, "strerror", None) or error
        raise ExportRefused(
            file.path, f"cannot be read: {why}", "check the file, export it again"
        ) from error


def _listed_folder(source: ExportSource) -> Iterator[tuple[str, int, str]]:
    _check_folder(source)
    for found in glob.glob(source.files, root_dir=source.folder, recursive=True):
        path = os.path.join(source.folder, found)
        try:
            status = os.stat(path)
        except FileNotFoundError:  # moved away since it was listed: as if it had not been there
            continue
        except OSError:  # a loop of links, a folder that is closed: refused when it is read
            yield _relative(found, source.folder), 0, ""
            continue
        if os.path.isfile(path):
            yield _relative(found, source.folder), status.st_size, str(status.st_mtime_ns)


def _check_folder(source: ExportSource) -> None:
    """Refuse a folder that is there and cannot be listed: ``glob`` would call it empty."""
    fixed = PurePath(source.folder)
    for part in PurePath(source.files).parts[:-1]:
        if glob.has_magic(part):
            break
        fixed /= part
    try:
        with os.scandir(fixed):
            return
    except (FileNotFoundError, NotADirectoryError):
        return
    except OSError as error:
        raise ExportRefused(
            source.files,
            f"its folder cannot be listed: {error.strerror or error}",
            "see that the folder is there and that this user may read it",
        ) from error


def _relative(found: str, folder: str) -> str:
    path = PurePath(os.path.normpath(found))
    if path.is_absolute() and path.is_relative_to(os.path.abspath(folder)):
        path = path.relative_to(os.path.abspath(folder))
    return os.fsencode(path.as_posix()).decode("utf-8", "backslashreplace")


def _listed_url(source: ExportSource) -> Iterator[tuple[str, int, str]]:
    try:
        fs, pattern = fsspec.core.url_to_fs(source.files)
        found = sorted(fs.glob(pattern))
        for path in found:
            if not fs.isdir(path):
                size, stamp = _state(fs, path)
                yield str(fs.unstrip_protocol(path)), size, stamp
    except FileNotFoundError:
        return
    except (OSError, ImportError, ValueError) as error:
        raise ExportRefused(
            source.files,
            f"cannot be listed: {error}",
            "check the URL, and that the fsspec package for its protocol is installed",
        ) from error


def _located(file: ExportFile, source: ExportSource) -> tuple[Any, str]:
    if "://" not in file.path:
        return LocalFileSystem(), os.path.abspath(os.path.join(source.folder, file.path))
    fs, path = fsspec.core.url_to_fs(file.path)
    return fs, str(path)


def _state(fs: Any, path: str) -> tuple[int, str]:
    """Size and what tells that a file changed: modification time in ns, ETag, or the like."""
    if isinstance(fs, LocalFileSystem):
        status = os.stat(path)
        return status.st_size, str(status.st_mtime_ns)
    info: Mapping[str, Any] = fs.info(path)
    for key in _STAMPS:
        if info.get(key) is not None:
            return int(info["size"] or 0), str(info[key])
    try:
        return int(info["size"] or 0), str(fs.modified(path))
    except NotImplementedError:  # the store knows no times: the size alone has to tell
        return int(info["size"] or 0), ""


def _ending(path: str) -> str:
    return PurePath(path).suffix.lower()


def _unpacked(stored: bytes, path: str) -> bytes:
    unpack = _UNPACK.get(_ending(path))
    if unpack is None:
        return stored
    try:
        data = unpack(stored)
    except _BROKEN as error:
        raise ExportRefused(
            path,
            f"cannot be decompressed as its ending {_ending(path)} says: {error}",
            "the file is cut short or of another kind; export it again",
        ) from error
    if not data:
        raise ExportRefused(path, "the file is empty", "export it again")
    return data


def _unpack_zstd(stored: bytes) -> bytes:
    """All frames of a Zstandard file; a frame that does not end is an error."""
    parts: list[bytes] = []
    while stored:
        frame = zstandard.ZstdDecompressor().decompressobj()
        parts.append(frame.decompress(stored))
        if not frame.eof:
            raise EOFError("the last frame is cut short")
        stored = frame.unused_data
    return b"".join(parts)


def _stream_xz(raw: BinaryIO) -> BinaryIO:
    return cast(BinaryIO, lzma.LZMAFile(raw))


def _stream_zstd(raw: BinaryIO) -> BinaryIO:
    reader = zstandard.ZstdDecompressor().stream_reader(raw, read_across_frames=True)
    return cast(BinaryIO, io.BufferedReader(cast(io.RawIOBase, reader)))


_UNPACK: Mapping[str, Callable[[bytes], bytes]] = {
    ".gz": gzip.decompress,
    ".bz2": bz2.decompress,
    ".xz": lzma.decompress,
    ".zst": _unpack_zstd,
}
_STREAMS: Mapping[str, Callable[[BinaryIO], BinaryIO]] = {
    ".gz": lambda raw: cast(BinaryIO, gzip.GzipFile(fileobj=raw)),
    ".bz2": lambda raw: cast(BinaryIO, bz2.BZ2File(raw)),
    ".xz": _stream_xz,
    ".zst": _stream_zstd,
}

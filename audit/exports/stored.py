"""One export file as it is stored, here or elsewhere: its bytes in order, and whether it changed.

Only a plain file is ever opened: of a pipe, a device or a link that leads out of the export's
folder it is said what it is. Every failure of the file or of the store it is in is ExportRefused.
"""

from __future__ import annotations

import os
import stat
from collections.abc import Iterator
from contextlib import AbstractContextManager, contextmanager
from dataclasses import dataclass
from typing import Any, BinaryIO, Protocol, cast

from audit.errors import ExportRefused
from audit.exports.backends import failures, named
from audit.exports.globbing import leads_out
from audit.exports.places import State, base_of, filesystem, local_path, path_on, state
from audit.records import ExportFile, ExportSource

_KINDS = (
    (stat.S_ISFIFO, "a pipe"),
    (stat.S_ISSOCK, "a socket"),
    (stat.S_ISCHR, "a device"),
    (stat.S_ISBLK, "a device"),
    (stat.S_ISDIR, "a folder"),
)
_FLAGS = ("O_CLOEXEC", "O_NONBLOCK", "O_NOFOLLOW", "O_BINARY")


class Stored(Protocol):
    """An open file. ``size``: octets when it was opened; None where the store does not tell.

    ``place``: the file itself on this machine, None elsewhere. All raise ExportRefused.
    """

    @property
    def size(self) -> int | None: ...

    @property
    def place(self) -> str | None: ...

    def read(self, most: int) -> bytes:
        """The next octets, ``most`` of them unless the file ends before."""

    def changed(self) -> bool:
        """Whether size or stamp are others than when it was opened."""

    def seekable(self) -> BinaryIO:
        """The stored bytes to look up things in, unchecked; to be used inside ``said``."""

    def said(self) -> AbstractContextManager[None]:
        """Within it failures of the file or its store become refusals."""


@contextmanager
def stored(file: ExportFile, source: ExportSource) -> Iterator[Stored]:
    """An export file, opened. Raises ExportRefused: gone, out of bounds, no file, unreadable."""
    if "\\" in file.path and not file.stamp and "://" not in file.path and os.sep == "/":
        raise _oddly_named(file)
    path = local_path(file, source)
    if path is not None:
        with _opened_here(path, file, source) as here:
            yield here
        return
    with _said(file, source.files):
        fs, _ = filesystem(source)
    with _opened_there(fs, path_on(fs, file), file) as there:
        yield there


@dataclass
class _Here:
    """A file of this machine, by its descriptor."""

    file: ExportFile
    place: str
    descriptor: int
    before: os.stat_result

    @property
    def size(self) -> int | None:
        return self.before.st_size

    def read(self, most: int) -> bytes:
        with _said(self.file):
            piece = os.read(self.descriptor, most)
            if 0 < len(piece) < most:
                return b"".join([piece, *self._rest(most - len(piece))])
            return piece

    def _rest(self, missing: int) -> Iterator[bytes]:
        while missing and (piece := os.read(self.descriptor, missing)):
            missing -= len(piece)
            yield piece

    def changed(self) -> bool:
        with _said(self.file):
            return _mark(os.stat(self.place)) != _mark(self.before)

    def seekable(self) -> BinaryIO:
        return os.fdopen(self.descriptor, "rb", closefd=False)

    def said(self) -> AbstractContextManager[None]:
        return _said(self.file)


@contextmanager
def _opened_here(path: str, file: ExportFile, source: ExportSource) -> Iterator[_Here]:
    with _said(file):
        if leads_out(path, base_of(source)):
            raise ExportRefused(
                file.path,
                "a link that leads out of the export's folder",
                "put the file itself there, or name the folder it is in under files",
            )
        place = os.path.realpath(path)
        if os.path.islink(path) and not os.path.lexists(place):
            raise ExportRefused(
                file.path, "a link that leads nowhere", "remove it, or put back what it leads to"
            )
        _check_kind(os.stat(place), file, place)
        descriptor = os.open(place, os.O_RDONLY | sum(getattr(os, flag, 0) for flag in _FLAGS))
    try:
        with _said(file):
            before = os.fstat(descriptor)
            _check_kind(before, file, place)
        yield _Here(file, place, descriptor, before)
    finally:
        os.close(descriptor)


def _check_kind(status: os.stat_result, file: ExportFile, place: str) -> None:
    for is_kind, words in _KINDS:
        if is_kind(status.st_mode):
            if words == "a folder":
                _check_folder(file, place)
            raise ExportRefused(
                file.path, f"is {words}, not a file", "name only export files under files"
            )


def _check_folder(file: ExportFile, place: str) -> None:
    """Of a folder on the pattern's way: why it could not be gone into."""
    try:
        with os.scandir(place):
            return
    except OSError as error:
        raise ExportRefused(
            file.path,
            f"this folder cannot be listed: {named(error)}",
            "see that this user may read it",
        ) from error


def _mark(status: os.stat_result) -> tuple[int, ...]:
    return status.st_size, status.st_mtime_ns, status.st_dev, status.st_ino


@dataclass
class _There:
    """A file of an fsspec filesystem."""

    file: ExportFile
    fs: Any
    path: str
    raw: Any
    before: State
    place: str | None = None

    @property
    def size(self) -> int | None:
        return self.before[0]

    def read(self, most: int) -> bytes:
        with _said(self.file, self.fs):
            parts = list(self._parts(most))
        return parts[0] if len(parts) == 1 else b"".join(parts)

    def _parts(self, missing: int) -> Iterator[bytes]:
        while missing and (piece := self.raw.read(missing)):
            missing -= len(piece)
            yield piece

    def changed(self) -> bool:
        with _said(self.file, self.fs):
            self.fs.invalidate_cache(self.path)
            return state(self.fs, self.path) != self.before

    def seekable(self) -> BinaryIO:
        return cast(BinaryIO, self.raw)

    def said(self) -> AbstractContextManager[None]:
        return _said(self.file, self.fs)


@contextmanager
def _opened_there(fs: Any, path: str, file: ExportFile) -> Iterator[_There]:
    with _said(file, fs):
        fs.invalidate_cache(path)
        before = state(fs, path)
        raw = fs.open(path, "rb")
    try:
        yield _There(file, fs, path, raw, before)
    finally:
        with _said(file, fs):
            raw.close()


@contextmanager
def _said(file: ExportFile, place: Any = None) -> Iterator[None]:
    """Failures of the file or its store as a refusal. ``place``: as ``failures`` takes it."""
    try:
        yield
    except FileNotFoundError as error:
        if "\\" in file.path and os.sep == "/":
            raise _oddly_named(file) from error
        raise ExportRefused(
            file.path, "the file is gone", "nothing to do if it was moved on purpose"
        ) from error
    except failures(place) as error:
        raise ExportRefused(
            file.path, f"cannot be read: {named(error)}", "check the path and its permissions"
        ) from error


def _oddly_named(file: ExportFile) -> ExportRefused:
    return ExportRefused(
        file.path, "its name is not UTF-8 or holds control characters", "rename the file"
    )

"""One export file comes in; its content goes out as a stream, or as a file to look up things in.

Memory stays bounded whatever the size and whatever it unpacks to. A file counts as whole if its
size and modification stamp are the same before and after, its compression comes to an end, and,
of a CSV, its last row does: no file is left out for being young. A writer that pauses between two
whole rows of a plain file is not noticed; what it adds later makes the file new, to be read again.
"""

from __future__ import annotations

import io
import tempfile
from collections.abc import Iterator
from contextlib import closing, contextmanager
from pathlib import Path
from typing import IO, Any, BinaryIO

from audit.errors import ExportRefused
from audit.exports.digest import Digest
from audit.exports.packing import BROKEN, PIECE, Unpacker, ending
from audit.exports.places import discover, revision, same_file
from audit.exports.stored import Stored, stored
from audit.records import ExportFile, ExportSource

__all__ = [
    "Opened",
    "discover",
    "on_disk",
    "opened",
    "revision",
    "same_file",
    "streamed",
]

RATIO_FROM = 64_000_000
"""Octets of content from which the ratio to the stored ones is looked at."""
_COPIED = 1 << 23
_MB = 1_000_000


class Opened:
    """The decompressed content of one file, in order. Every method raises ExportRefused."""

    def __init__(self, held: Stored, file: ExportFile, source: ExportSource) -> None:
        self._held, self._path, self._limits = held, file.path, source.limits
        self._digest = Digest()
        self._taken = self._given = 0
        self._hash: str | None = None
        self._kind = ending(file.path)
        self._unpacker = Unpacker(self._kind, self._stored) if self._kind else None
        self._ahead = memoryview(b"")
        self._check_stored(held.size or 0)

    @property
    def content_hash(self) -> str:
        """SHA-256 of the stored bytes. ValueError before the content was read to its end."""
        if self._hash is None:
            raise ValueError("the content was not read to its end")
        return self._hash

    def read(self, most: int) -> bytes:
        """The next ``most`` octets (over 0), fewer only at the end; b"" behind it.

        Where it meets the end, it refuses a file that is not as it was when it was opened, or that
        holds nothing. The piece is never changed afterwards.
        """
        parts: list[bytes] = []
        missing = most
        while missing and self._hash is None:
            piece = self._piece(missing)
            if not piece:
                self._end()
                break
            parts.append(piece)
            missing -= len(piece)
        return parts[0] if len(parts) == 1 else b"".join(parts)

    def finish(self) -> str:
        """Reads what is left, with all checks. Gives the hash."""
        while self._hash is None:
            self.read(_COPIED)
        return self.content_hash

    def close(self) -> None:
        self._digest.close()

    def _piece(self, most: int) -> bytes:
        if self._unpacker is None:
            return self._counted(self._stored(most))
        if not self._ahead:
            piece = self._counted(self._unpacked(self._unpacker))
            if len(piece) <= most:
                return piece
            self._ahead = memoryview(piece)
        piece, self._ahead = bytes(self._ahead[:most]), self._ahead[most:]
        return piece

    def _unpacked(self, unpacker: Unpacker) -> bytes:
        try:
            return unpacker.read(PIECE)
        except BROKEN as error:
            self.check_unchanged()
            raise ExportRefused(
                self._path,
                f"cannot be decompressed as its ending {self._kind} says: {error}",
                "the file is cut short or of another kind; export it again",
            ) from error

    def _counted(self, piece: bytes) -> bytes:
        self._given += len(piece)
        self._check_unpacked()
        return piece

    def _stored(self, most: int) -> bytes:
        piece = self._held.read(most)
        self._taken += len(piece)
        if self._held.size is not None and self._taken > self._held.size:
            raise self._unfinished()
        self._check_stored(self._taken)
        self._digest.update(piece)
        return piece

    def _end(self) -> None:
        self.check_unchanged()
        if self._held.size not in (None, self._taken):
            raise self._unfinished()
        if not self._given:
            raise ExportRefused(self._path, "the file is empty", "export it again")
        self._hash = self._digest.hexdigest()

    def check_unchanged(self) -> None:
        """Refuses a file that is not as it was when it was opened."""
        if self._held.changed():
            raise self._unfinished()

    def _unfinished(self) -> ExportRefused:
        return ExportRefused(self._path, "still being written", "left for the next run")

    def _check_stored(self, size: int) -> None:
        if size > self._limits.largest_file_bytes:
            raise ExportRefused(
                self._path,
                f"holds {_mb(max(size, self._held.size or 0))}, more than the "
                f"{_mb(self._limits.largest_file_bytes)} allowed",
                "export shorter spans, or raise largest_file_mb under [intake] in site.toml",
            )

    def _check_unpacked(self) -> None:
        if self._given > self._limits.largest_unpacked_bytes:
            raise ExportRefused(
                self._path,
                f"unpacks to more than the {_mb(self._limits.largest_unpacked_bytes)} allowed",
                "export shorter spans, or raise largest_unpacked_mb under [intake] in site.toml",
            )
        stored_bytes = self._held.size or self._taken
        if self._given > max(RATIO_FROM, self._limits.largest_ratio * stored_bytes):
            raise ExportRefused(
                self._path,
                f"unpacks to more than {self._limits.largest_ratio} times its "
                f"{_mb(stored_bytes)}: an archive bomb, or nothing but repetition",
                "see what wrote it; if it is right raise largest_ratio under [intake] in site.toml",
            )


@contextmanager
def opened(file: ExportFile, source: ExportSource) -> Iterator[Opened]:
    """The decompressed content of a file as a stream. Raises ExportRefused, as ``Opened`` does.

    Refused: gone, unreadable, empty, not a plain file, a link out of the export's folder, still
    being written, cut short or damaged in its compression, beyond a limit of the source.
    """
    with stored(file, source) as held, closing(Opened(held, file, source)) as content:
        yield content


@contextmanager
def on_disk(file: ExportFile, source: ExportSource, scratch: Path) -> Iterator[tuple[Path, str]]:
    """The decompressed content as a file of this machine, and the SHA-256 of the stored bytes.

    The file itself where it is one, else a copy in the folder ``scratch``, removed at the end.
    Raises ExportRefused as ``opened``, also for a file that changes while it is in use; an OSError
    of ``scratch`` (disk full) comes as it is.
    """
    with stored(file, source) as held, closing(Opened(held, file, source)) as content:
        if held.place is None or ending(file.path):
            with tempfile.NamedTemporaryFile(dir=scratch, suffix=".unpacked") as copy:
                _copy(content, copy.file)
                yield Path(copy.name), content.content_hash
            return
        content_hash = content.finish()
        try:
            yield Path(held.place), content_hash
        except ExportRefused:
            content.check_unchanged()
            raise
        content.check_unchanged()


@contextmanager
def streamed(file: ExportFile, source: ExportSource) -> Iterator[BinaryIO]:
    """The decompressed content for looking at its head, not checked for changes at the end.

    A Parquet file can be sought in: its head is found from its end. Refusals as ``opened``.
    """
    with stored(file, source) as held, closing(Opened(held, file, source)) as content:
        if not ending(file.path):
            with held.said(), held.seekable() as raw:
                yield raw
        elif source.format == "parquet":
            with tempfile.TemporaryFile() as copy:
                _copy(content, copy)
                copy.seek(0)
                yield copy
        else:
            yield io.BufferedReader(_Raw(content), PIECE)


class _Raw(io.RawIOBase):
    """A content as the standard library has streams."""

    def __init__(self, content: Opened) -> None:
        self._content = content

    def readable(self) -> bool:
        return True

    def readinto(self, into: Any) -> int:
        piece = self._content.read(len(into))
        into[: len(piece)] = piece
        return len(piece)


def _copy(content: Opened, to: IO[bytes]) -> None:
    while piece := content.read(_COPIED):
        to.write(piece)
    to.flush()


def _mb(size: int) -> str:
    return f"{size / _MB:.3g} MB" if size < 100 * _MB else f"{size // _MB} MB"

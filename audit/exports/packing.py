"""Stored bytes come in as they are asked for, the decompressed content goes out in bounded pieces.

Endings .gz (RFC 1952), .bz2, .xz and .zst (RFC 8878), each with several members one after the
other. Never more is held than a piece, a read of the stored bytes and the window of the format,
whatever the file unpacks to. A member that does not end, or bytes behind the last that are none, is
an error; zeros there are padding in .gz and .xz.
"""

from __future__ import annotations

import bz2
import lzma
import zlib
from collections.abc import Callable, Mapping
from pathlib import PurePath
from typing import Protocol

import zstandard

BROKEN = (OSError, EOFError, ValueError, zlib.error, lzma.LZMAError, zstandard.ZstdError)
"""What ``Unpacker.read`` raises of content that is not what its ending says."""

PIECE = 1 << 20
_READ = 1 << 18
_FED = 256
"""Octets given to the Zstandard decoder at once: four of them can stand for 128 KiB."""
_XZ_MEMORY = 200_000_000
"""Octets the .xz decoder may take; the strongest preset of the usual tools needs 68 million."""


class _Member(Protocol):
    """One compressed stream, as the decompressors of bz2 and lzma have it."""

    @property
    def eof(self) -> bool: ...

    @property
    def needs_input(self) -> bool: ...

    @property
    def unused_data(self) -> bytes: ...

    def decompress(self, data: bytes, max_length: int) -> bytes: ...


class _Gzip:
    """A member of a .gz, header and checksum looked at by zlib."""

    def __init__(self) -> None:
        self._stream = zlib.decompressobj(wbits=16 + zlib.MAX_WBITS)
        self.needs_input = True

    @property
    def eof(self) -> bool:
        return self._stream.eof

    @property
    def unused_data(self) -> bytes:
        return self._stream.unused_data

    def decompress(self, data: bytes, max_length: int) -> bytes:
        piece = self._stream.decompress(self._stream.unconsumed_tail + data, max_length)
        self.needs_input = len(piece) < max_length and not self._stream.unconsumed_tail
        return piece


class _Zstd:
    """A frame of a .zst, fed a little at a time: its decoder knows no longest output."""

    def __init__(self) -> None:
        self._frame = zstandard.ZstdDecompressor().decompressobj()
        self._ahead, self._out = memoryview(b""), memoryview(b"")

    @property
    def eof(self) -> bool:
        return self._frame.eof and not self._out

    @property
    def needs_input(self) -> bool:
        return not self._ahead and not self._out

    @property
    def unused_data(self) -> bytes:
        return self._frame.unused_data + bytes(self._ahead)

    def decompress(self, data: bytes, max_length: int) -> bytes:
        self._ahead = memoryview(data) if data else self._ahead
        parts, held = [self._out], len(self._out)
        while held < max_length and self._ahead and not self._frame.eof:
            part = self._frame.decompress(self._ahead[:_FED])
            self._ahead = self._ahead[_FED:]
            parts.append(memoryview(part))
            held += len(part)
        out = memoryview(b"".join(parts)) if len(parts) > 1 else parts[0]
        self._out = out[max_length:]
        return bytes(out[:max_length])


def _xz() -> _Member:
    return lzma.LZMADecompressor(lzma.FORMAT_XZ, memlimit=_XZ_MEMORY)


_MEMBERS: Mapping[str, Callable[[], _Member]] = {
    ".gz": _Gzip,
    ".bz2": bz2.BZ2Decompressor,
    ".xz": _xz,
    ".zst": _Zstd,
}
_PADDED = (".gz", ".xz")


def ending(path: str) -> str:
    """The ending that says how a file is compressed, with its dot; "" for one that says nothing."""
    last = PurePath(path.partition("::")[0]).suffix.lower()
    return last if last in _MEMBERS else ""


class Unpacker:
    """The content of one compressed file, in order. ``stored`` gives at most n octets, b"" last."""

    def __init__(self, kind: str, stored: Callable[[int], bytes]) -> None:
        self._new, self._padded, self._stored = _MEMBERS[kind], kind in _PADDED, stored
        self._member: _Member | None = None
        self._ahead, self._ended = b"", False

    def read(self, most: int) -> bytes:
        """The next 1 to ``most`` octets; b"" behind the last. Raises one of ``BROKEN``."""
        while True:
            if self._member is None or self._member.eof:
                if not self._next_member():
                    return b""
                continue
            fresh = self._member.needs_input
            data = self._more() if fresh else b""
            piece = self._member.decompress(data, most)
            if piece:
                return piece
            if fresh and not data and not self._member.eof:
                raise EOFError("it ends in the middle of its compressed content")

    def _next_member(self) -> bool:
        """Whether there is one more; the octets behind the last are its beginning."""
        rest = self._member.unused_data if self._member is not None else b""
        while True:
            rest = rest or self._more()
            if not rest:
                return False
            if self._padded and self._member is not None:
                rest = rest.lstrip(b"\0")
            if rest:
                self._ahead, self._member = rest, self._new()
                return True

    def _more(self) -> bytes:
        data, self._ahead = self._ahead, b""
        if not data and not self._ended:
            data = self._stored(_READ)
            self._ended = not data
        return data

"""Samples too many for memory: columns go to a scratch file in pieces, and come back by tag.

In: the samples of some tags, a piece of an export file at a time. Out: for each tag a
``ScratchColumn`` that loads the samples of the spans it is asked for. A scratch file belongs to one
run; its layout is of no account to anyone else. All numbers are native 64-bit; a sample that is not
good has the value NaN.
"""

from __future__ import annotations

import os
from collections.abc import Callable, Iterator, Mapping, Sequence
from dataclasses import dataclass, field
from pathlib import Path
from typing import Any

import numpy as np
from numpy.typing import NDArray

from audit.errors import AuditError
from audit.records import RawSamples, Samples, Span

Whole = NDArray[np.int64]
Floats = NDArray[np.float64]
Settle = Callable[[Whole, Floats], tuple[Whole, Floats]]
"""Stamps and values in the order they came -> sorted, each stamp once."""

MERGED_AT_ONCE = 4_000_000
"""Samples of a tag that are put in order at once."""
_BUFFERS = 512
_FEW = 16
"""A value that changes less often than once in so many samples is kept by its changes."""
_PLACE = np.dtype(
    [
        ("count", "i8"),
        ("changes", "i8"),
        ("stamps_at", "i8"),
        ("values_at", "i8"),
        ("first_us", "i8"),
        ("last_us", "i8"),
    ]
)


@dataclass(frozen=True, eq=False)
class Part:
    """Samples of one tag in one piece: stamps [n] in us and values [n], in the order they came.

    ``bad``: how many are not good. Parts of a piece may share their stamps.
    """

    tag: str
    us: Whole
    value: Floats
    bad: int = 0


@dataclass(frozen=True, eq=False)
class ScratchFile:
    """Where the pieces of a finished scratch file keep their places [k]; picklable."""

    path: str
    places_at: tuple[int, ...]
    tags: tuple[int, ...]

    def places(self, code: int) -> NDArray[Any]:
        """The places of a tag in the pieces it has samples in."""
        raw = b""
        with open(self.path, "rb", buffering=0) as file:
            for at, tags in zip(self.places_at, self.tags, strict=True):
                if code < tags:
                    raw += os.pread(file.fileno(), _PLACE.itemsize, at + code * _PLACE.itemsize)
        found = np.frombuffer(raw, _PLACE)
        return found[found["count"] > 0]


@dataclass(frozen=True, eq=False)
class ScratchColumn:
    """One tag's samples in a scratch file: ``count`` of them, ``bad`` not good, strictly rising.

    ``newest_good_us``: stamp of its last good sample. With ``texts``, a value is an index into it.
    """

    file: ScratchFile
    code: int
    count: int
    bad: int
    first_us: int
    last_us: int
    newest_good_us: int | None
    texts: tuple[str, ...] | None = None

    def load(self, spans: Sequence[Span] | None = None) -> RawSamples:
        """The samples in the disjoint, ordered spans; None: all of them."""
        us, value = _load(self.file, self.code, spans)
        return RawSamples(Samples(us, value, ~np.isnan(value)), self.texts)

    def counted(self, spans: Sequence[Span]) -> tuple[int, int]:
        """How many samples lie in the spans: good ones, others."""
        if any(start <= self.first_us and self.last_us <= end for start, end in spans):
            return self.count - self.bad, self.bad
        good = self.load(spans).samples.good
        return int(np.count_nonzero(good)), int(np.count_nonzero(~good))

    def good_until(self, until_us: int) -> tuple[int | None, int]:
        """The newest good stamp not after ``until_us``, and how many good ones are after it."""
        if self.newest_good_us is None or self.newest_good_us <= until_us:
            return self.newest_good_us, 0
        return self.load().good_until(until_us)


class ScratchWriter:
    """Writes one scratch file. Raises AuditError where the disk is full; close it in any case."""

    def __init__(self, path: Path) -> None:
        self._path = str(path)
        self._handle = os.open(self._path, os.O_RDWR | os.O_CREAT | os.O_TRUNC, 0o600)
        self._end = 0
        self._codes: dict[str, int] = {}
        self._totals: list[_Total] = []
        self._places_at: list[int] = []
        self._tags: list[int] = []

    def close(self) -> None:
        os.close(self._handle)

    def append(self, parts: Sequence[Part]) -> None:
        """One piece: at most one part a tag."""
        parts = [part for part in parts if len(part.us)]
        if not parts:
            return
        codes = [self._code(part.tag) for part in parts]
        places = np.zeros(len(self._codes), _PLACE)
        buffers: list[NDArray[Any]] = []
        end = self._end
        known: dict[int, tuple[int, int, int, bool]] = {}
        for code, part in zip(codes, parts, strict=True):
            shared = known.get(id(part.us))
            if shared is None:
                shared = (end, *_outline(part.us))
                known[id(part.us)] = shared
                buffers.append(part.us)
                end += part.us.nbytes
            stamps_at, first, last, rising = shared
            changes, kept = _by_changes(part.value)
            places[code] = (len(part.us), changes, stamps_at, end, first, last)
            buffers += kept
            end += sum(buffer.nbytes for buffer in kept)
            self._totals[code].add(part, first, last, rising)
        self._put([*buffers, places])
        self._places_at.append(end)
        self._tags.append(len(places))

    def finish(
        self, settle: Settle, texts: Mapping[str, tuple[str, ...]]
    ) -> dict[str, ScratchColumn]:
        """The columns by tag. Tags whose samples did not come in order are put in order first."""
        for code, total in enumerate(self._totals):
            if not total.rising:
                self._merge(code, total, settle)
        file = ScratchFile(self._path, tuple(self._places_at), tuple(self._tags))
        return {
            tag: ScratchColumn(
                file,
                code,
                total.count,
                total.bad,
                total.first_us,
                total.last_us,
                total.newest_good_us,
                texts.get(tag),
            )
            for tag, code in self._codes.items()
            if (total := self._totals[code]).count
        }

    def _code(self, tag: str) -> int:
        code = self._codes.setdefault(tag, len(self._codes))
        if code == len(self._totals):
            self._totals.append(_Total())
        return code

    def _put(self, buffers: Sequence[NDArray[Any]]) -> None:
        """Write buffers behind one another at the end of the file."""
        views = [_octets(np.ascontiguousarray(buffer)) for buffer in buffers]
        try:
            for start in range(0, len(views), _BUFFERS):
                self._put_all(views[start : start + _BUFFERS])
        except OSError as error:
            raise AuditError(
                f"the scratch file {self._path} cannot be written: {error.strerror}",
                "make room there, or name another folder as scratch in [intake] of site.toml",
            ) from error

    def _put_all(self, views: list[memoryview]) -> None:
        while views:
            written = os.pwritev(self._handle, views, self._end)
            self._end += written
            while views and written >= len(views[0]):
                written -= len(views.pop(0))
            if views:
                views[0] = views[0][written:]

    def _merge(self, code: int, total: _Total, settle: Settle) -> None:
        """Put a tag's samples in order, some of its time after another, in place of the pieces."""
        file = ScratchFile(self._path, tuple(self._places_at), tuple(self._tags))
        tag = next(tag for tag, known in self._codes.items() if known == code)
        merged = _Total()
        old_pieces = len(self._places_at)
        for span in _slices(total):
            us, value = settle(*_load(file, code, [span]))
            part = Part(tag, us, value, int(np.count_nonzero(np.isnan(value))))
            if len(us):
                places = np.zeros(len(self._codes), _PLACE)
                first, last, rising = _outline(us)
                at = self._end
                places[code] = (len(us), -1, at, at + us.nbytes, first, last)
                self._put([us, value, places])
                self._places_at.append(at + us.nbytes + value.nbytes)
                self._tags.append(len(places))
                merged.add(part, first, last, rising)
        nothing = np.zeros(1, _PLACE).tobytes()
        for at, tags in zip(self._places_at[:old_pieces], self._tags[:old_pieces], strict=True):
            if code < tags:
                os.pwrite(self._handle, nothing, at + code * _PLACE.itemsize)
        self._totals[code] = merged


@dataclass
class _Total:
    """What came of one tag so far. ``rising``: all stamps strictly rising from first to last."""

    count: int = 0
    bad: int = 0
    first_us: int = 0
    last_us: int = 0
    newest_good_us: int | None = None
    rising: bool = field(default=True)

    def add(self, part: Part, first: int, last: int, rising: bool) -> None:
        if self.count == 0:
            self.first_us, self.last_us, self.rising = first, last, rising
        else:
            self.rising = self.rising and rising and first > self.last_us
            self.first_us, self.last_us = min(self.first_us, first), max(self.last_us, last)
        self.count += len(part.us)
        self.bad += part.bad
        newest = last if part.bad == 0 else _newest_good(part)
        if newest is not None:
            self.newest_good_us = max(newest, self.newest_good_us or newest)


def _by_changes(value: Floats) -> tuple[int, list[NDArray[Any]]]:
    """A value by its changes where they are few: their number, places and new values; else -1."""
    changes = np.flatnonzero(value[1:] != value[:-1])
    if len(changes) * _FEW >= len(value):
        return -1, [value]
    starts = np.concatenate(([0], changes + 1))
    return len(starts), [starts, value[starts]]


def _newest_good(part: Part) -> int | None:
    good = part.us[~np.isnan(part.value)]
    return int(good.max()) if len(good) else None


def _outline(us: Whole) -> tuple[int, int, bool]:
    """Earliest and latest stamp, and whether they rise strictly."""
    if bool((us[1:] > us[:-1]).all()):
        return int(us[0]), int(us[-1]), True
    return int(us.min()), int(us.max()), False


def _slices(total: _Total) -> Iterator[Span]:
    """The tag's time in parts of about MERGED_AT_ONCE samples, were they evenly spread."""
    parts = 1 + total.count // MERGED_AT_ONCE
    length = (total.last_us - total.first_us) // parts + 1
    for at in range(total.first_us, total.last_us + 1, length):
        yield at, min(at + length - 1, total.last_us)


def _load(file: ScratchFile, code: int, spans: Sequence[Span] | None) -> tuple[Whole, Floats]:
    """Stamps and values of a tag in the spans, in the order they were written."""
    found: list[tuple[Whole, Floats]] = []
    with open(file.path, "rb", buffering=0) as stored:
        for count, changes, stamps_at, values_at, first, last in file.places(code).tolist():
            near = None if spans is None else [s for s in spans if s[0] <= last and s[1] >= first]
            if near == []:
                continue
            us = np.empty(count, np.int64)
            _fill(stored.fileno(), us, stamps_at)
            value = _values(stored.fileno(), count, changes, values_at)
            if near is not None and not (near[0][0] <= first and last <= near[0][1]):
                inside = _inside(us, near)
                us, value = us[inside], value[inside]
            found.append((us, value))
    if len(found) == 1:
        return found[0]
    no_us, no_value = np.empty(0, np.int64), np.empty(0, np.float64)
    return (
        np.concatenate([no_us, *(us for us, _ in found)]),
        np.concatenate([no_value, *(value for _, value in found)]),
    )


def _values(handle: int, count: int, changes: int, at: int) -> Floats:
    if changes < 0:
        value = np.empty(count, np.float64)
        _fill(handle, value, at)
        return value
    starts, held = np.empty(changes, np.int64), np.empty(changes, np.float64)
    _fill(handle, starts, at)
    _fill(handle, held, at + starts.nbytes)
    return np.repeat(held, np.diff(starts, append=count))


def _inside(us: Whole, spans: Sequence[Span]) -> NDArray[np.bool_]:
    inside = np.zeros(len(us), np.bool_)
    for start, end in spans:
        inside |= (us >= start) & (us <= end)
    return inside


def _octets(array: NDArray[Any]) -> memoryview:
    return array.view(np.uint8).data


def _fill(handle: int, array: NDArray[Any], at: int) -> None:
    view = _octets(array)
    while view:
        read = os.preadv(handle, [view], at)
        if read == 0:
            raise AuditError("a scratch file is cut short", "run the audit again")
        view, at = view[read:], at + read

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
_INDEXED_AT_ONCE = 4096
_known: dict[tuple[str | int, ...], NDArray[np.int64]] = {}
"""The stamps last read: at most one set of them."""
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
    """A finished scratch file, and where its index lies: a place for each tag and piece."""

    path: str
    index_at: int
    pieces: int


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
        good = ~np.isnan(value) if self.bad else np.ones(len(value), np.bool_)
        return RawSamples(Samples(us, value, good), self.texts)

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
        unsettled = [code for code, total in enumerate(self._totals) if not total.rising]
        if unsettled:
            file = self._indexed()
            for code in unsettled:
                self._merge(code, file, settle)
        file = self._indexed()
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

    def _indexed(self) -> ScratchFile:
        """The file with the places of each tag together: they lie by piece so far."""
        at, pieces = self._end, len(self._places_at)
        for first in range(0, len(self._totals), _INDEXED_AT_ONCE):
            count = min(_INDEXED_AT_ONCE, len(self._totals) - first)
            index = np.zeros((count, pieces), _PLACE)
            for number, (start, tags) in enumerate(zip(self._places_at, self._tags, strict=True)):
                own = min(count, max(tags - first, 0))
                if own:
                    held = np.empty(own, _PLACE)
                    _fill(self._handle, held, start + first * _PLACE.itemsize)
                    index[:own, number] = held
            self._put([index])
        return ScratchFile(self._path, at, pieces)

    def _merge(self, code: int, file: ScratchFile, settle: Settle) -> None:
        """Put a tag's samples in order, some of its time after another, in place of the pieces."""
        tag = next(tag for tag, known in self._codes.items() if known == code)
        total, merged = self._totals[code], _Total()
        for at, tags in zip(self._places_at, self._tags, strict=True):
            if code < tags:
                nothing = np.zeros(1, _PLACE).tobytes()
                os.pwrite(self._handle, nothing, at + code * _PLACE.itemsize)
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
    first = value[: 4 * _FEW]
    if np.count_nonzero(first[1:] != first[:-1]) > _FEW:  # not worth a look at the rest
        return -1, [value]
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
    places = np.empty(file.pieces, _PLACE)
    with open(file.path, "rb", buffering=0) as stored:
        handle = stored.fileno()
        _fill(handle, places, file.index_at + code * places.nbytes)
        near = places[places["count"] > 0]
        if spans is not None:
            reached = np.zeros(len(near), np.bool_)
            for start, end in spans:
                reached |= (near["last_us"] >= start) & (near["first_us"] <= end)
            near = near[reached]
        large = int(near["count"].sum()) > MERGED_AT_ONCE
        groups = [near[at : at + 1] for at in range(len(near))] if large else [near]
        found = [_only(spans, *_read(handle, file.path, group)) for group in groups]
    if len(found) == 1:
        return found[0]
    no_us, no_value = np.empty(0, np.int64), np.empty(0, np.float64)
    return (
        np.concatenate([no_us, *(us for us, _ in found)]),
        np.concatenate([no_value, *(value for _, value in found)]),
    )


def _read(handle: int, path: str, places: NDArray[Any]) -> tuple[Whole, Floats]:
    """All of some places, one behind the other."""
    us = _stamps(handle, path, places["stamps_at"].tolist(), places["count"].tolist())
    value = np.empty(len(us), np.float64)
    done = 0
    for count, changes, _, values_at, *_ in places.tolist():
        _put_values(handle, value[done : done + count], changes, values_at)
        done += count
    return us, value


def _only(spans: Sequence[Span] | None, us: Whole, value: Floats) -> tuple[Whole, Floats]:
    """What lies in the spans."""
    if spans is None or len(us) == 0:
        return us, value
    first, last = int(us.min()), int(us.max())
    if any(start <= first and last <= end for start, end in spans):
        return us, value
    inside = np.zeros(len(us), np.bool_)
    for start, end in spans:
        inside |= (us >= start) & (us <= end)
    return us[inside], value[inside]


def _stamps(handle: int, path: str, places: list[int], counts: list[int]) -> Whole:
    """Stamps of some places, one behind the other; the last ones are kept, for tags share them."""
    key: tuple[str | int, ...] = (path, *places)
    if key not in _known:
        us = np.empty(sum(counts), np.int64)
        done = 0
        for at, count in zip(places, counts, strict=True):
            _fill(handle, us[done : done + count], at)
            done += count
        us.flags.writeable = False
        _known.clear()
        _known[key] = us
    return _known[key]


def _put_values(handle: int, value: Floats, changes: int, at: int) -> None:
    """Read the values of a place into their place."""
    if changes < 0:
        _fill(handle, value, at)
        return
    starts, held = np.empty(changes, np.int64), np.empty(changes, np.float64)
    _fill(handle, starts, at)
    _fill(handle, held, at + starts.nbytes)
    for start, stop, one in zip(starts, [*starts[1:], len(value)], held, strict=True):
        value[start:stop] = one


def _octets(array: NDArray[Any]) -> memoryview:
    return array.view(np.uint8).data


def _fill(handle: int, array: NDArray[Any], at: int) -> None:
    view = _octets(array)
    while view:
        read = os.preadv(handle, [view], at)
        if read == 0:
            raise AuditError("a scratch file is cut short", "run the audit again")
        view, at = view[read:], at + read

"""What an export gives: samples, records of a loop, and the account of a file's cells."""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from dataclasses import dataclass, field
from typing import Protocol

import numpy as np
from numpy.typing import NDArray

from audit.errors import Fault
from audit.records.instants import Span
from audit.records.words import Role


@dataclass(frozen=True, eq=False)
class Samples:
    """One signal: stamps [n] in microseconds, strictly rising; values [n]; which are good [n].

    A value that is not good is NaN. Of a mode the value is 1.0 in an automatic mode, else 0.0.
    """

    t_us: NDArray[np.int64]
    value: NDArray[np.float64]
    good: NDArray[np.bool_]

    def __len__(self) -> int:
        return len(self.t_us)

    @staticmethod
    def empty() -> Samples:
        return Samples(np.empty(0, np.int64), np.empty(0, np.float64), np.empty(0, np.bool_))

    def only_good(self) -> Samples:
        """The good samples alone."""
        if bool(self.good.all()):
            return self
        return Samples(self.t_us[self.good], self.value[self.good], self.good[self.good])

    def between(self, from_us: int, to_us: int) -> Samples:
        """Samples with from_us <= t <= to_us."""
        first = int(np.searchsorted(self.t_us, from_us, "left"))
        last = int(np.searchsorted(self.t_us, to_us, "right"))
        return Samples(self.t_us[first:last], self.value[first:last], self.good[first:last])

    def around(self, from_us: int, to_us: int) -> Samples:
        """As ``between``, with the last good sample before and the first good one after."""
        first = int(self.t_us.searchsorted(from_us, "left"))
        last = int(self.t_us.searchsorted(to_us, "right"))
        first = self._good_before(first)
        last = self._good_from(last)
        return Samples(self.t_us[first:last], self.value[first:last], self.good[first:last])

    def _good_before(self, index: int) -> int:
        """Index of the last good sample before an index; the index itself where there is none."""
        stop, width = index, 1
        while stop > 0:
            start = max(stop - width, 0)
            found = self.good[start:stop].nonzero()[0]
            if len(found):
                return start + int(found[-1])
            stop, width = start, 8 * width
        return index

    def _good_from(self, index: int) -> int:
        """Index after the first good sample from an index on; the index where there is none."""
        start, width = index, 1
        while start < len(self):
            found = self.good[start : start + width].nonzero()[0]
            if len(found):
                return start + int(found[0]) + 1
            start, width = start + width, 8 * width
        return index


@dataclass(frozen=True, eq=False)
class RawSamples:
    """One column as an export gives it. With ``texts`` set, ``value`` is an index into it."""

    samples: Samples
    texts: tuple[str, ...] | None = None

    @property
    def count(self) -> int:
        return len(self.samples)

    @property
    def first_us(self) -> int:
        return int(self.samples.t_us[0])

    def load(self, spans: Sequence[Span] | None = None) -> RawSamples:
        """The samples in the disjoint, ordered spans; None: all of them."""
        if spans is None:
            return self
        parts = [self.samples.between(start, end) for start, end in spans]
        if len(parts) == 1:
            return RawSamples(parts[0], self.texts)
        held = [
            np.concatenate([none, *(getattr(part, name) for part in parts)])
            for name, none in vars(Samples.empty()).items()
        ]
        return RawSamples(Samples(*held), self.texts)

    def counted(self, spans: Sequence[Span]) -> tuple[int, int]:
        """How many samples lie in the spans: good ones, others."""
        good = self.load(spans).samples.good
        return int(np.count_nonzero(good)), int(np.count_nonzero(~good))

    def good_until(self, until_us: int) -> tuple[int | None, int]:
        """The newest good stamp not after ``until_us``, and how many good ones are after it."""
        good_us = self.samples.t_us[self.samples.good]
        past = int(np.searchsorted(good_us, until_us, "right"))
        return (int(good_us[past - 1]) if past else None), len(good_us) - past


class TagSamples(Protocol):
    """The samples an export gives of one tag, in memory (``RawSamples``) or on scratch."""

    @property
    def count(self) -> int: ...

    @property
    def first_us(self) -> int: ...

    def load(self, spans: Sequence[Span] | None = None) -> RawSamples:
        """The samples in the disjoint, ordered spans; None: all of them."""

    def counted(self, spans: Sequence[Span]) -> tuple[int, int]:
        """How many samples lie in the spans: good ones, others."""

    def good_until(self, until_us: int) -> tuple[int | None, int]:
        """The newest good stamp not after ``until_us``, and how many good ones are after it."""


@dataclass(frozen=True, eq=False)
class Record:
    """The samples of one loop by role over some time."""

    signals: Mapping[Role, Samples]

    def of(self, role: Role) -> Samples:
        """The samples of a role; empty where the loop has no such tag or nothing came."""
        found = self.signals.get(role)
        return Samples.empty() if found is None else found

    def around(self, from_us: int, to_us: int) -> Record:
        """Each signal in from_us..to_us with its bounding good samples."""
        return Record({role: s.around(from_us, to_us) for role, s in self.signals.items()})


@dataclass(frozen=True)
class CellAccount:
    """What became of every cell of one export file.

    ``read`` is counted apart from the rest (rows x value columns in a wide file, rows in a narrow
    one); ``balance`` is read minus all the others and must be 0.
    """

    rows: int = 0
    read: int = 0
    taken: int = 0
    duplicate: int = 0
    replaced: int = 0
    blank: int = 0
    bad_quality: int = 0
    unregistered: int = 0
    refused: Mapping[str, int] = field(default_factory=dict)

    @property
    def balance(self) -> int:
        return self.read - (
            self.taken
            + self.duplicate
            + self.replaced
            + self.blank
            + self.bad_quality
            + self.unregistered
            + sum(self.refused.values())
        )


@dataclass(frozen=True)
class ExportFile:
    """One file or object an export source names. ``stamp``: modification time or ETag, as text."""

    source: str
    path: str
    size: int
    stamp: str
    revision: int


@dataclass(frozen=True, eq=False)
class ExportRead:
    """What one export file holds of the wanted tags, and what became of each of its cells."""

    content_hash: str
    first_us: int | None
    last_us: int | None
    named: tuple[str, ...]
    columns: Mapping[str, TagSamples]
    account: CellAccount
    faults: tuple[Fault, ...] = ()


@dataclass(frozen=True)
class Coverage:
    """A tag's time from the first to the last stamp of an export file that names it."""

    tag: str
    from_us: int
    to_us: int
    source: str
    path: str
    revision: int

"""What is known of a file from the rows read so far, and from an earlier reading of it.

Two things about a file are known at its end alone: which stamps are astray, and whether the order
of its rows tells a repeated hour apart. Where either matters, the file is read a second time.
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass, field

import numpy as np
from numpy.typing import NDArray

from audit.exports.clock import RowsSoFar
from audit.exports.eras import Eras
from audit.exports.sheet import Sheet
from audit.exports.tally import Tally
from audit.exports.zones import Order
from audit.records import FileLimits, Span


@dataclass(frozen=True, eq=False)
class Known:
    """What an earlier reading of the whole file has shown; None: nothing that matters."""

    main: Span | None = None
    order: Order | None = None


@dataclass(eq=False)
class SoFar:
    """The state of one reading of one file. ``tags``: every tag met, with its number."""

    tally: Tally
    limits: FileLimits
    known: Known = field(default_factory=Known)
    tags: dict[str, int] = field(default_factory=dict)
    first_us: int | None = None
    last_us: int | None = None
    no_modes: set[str] = field(default_factory=set)
    _words: dict[str, dict[str, int]] = field(default_factory=dict)
    _order: Order = field(default_factory=Order)
    _eras: Eras = field(default_factory=Eras)

    def rows(self, sheet: Sheet) -> RowsSoFar:
        """Where a piece of the file stands in it."""
        return RowsSoFar(sheet.first_row, self._order, self.known.order)

    def astray(self, us: NDArray[np.int64]) -> NDArray[np.bool_]:
        """Which of the next readable stamps [n] are astray, as far as is known."""
        self._eras.follow(us)
        if self.known.main is None:
            return np.zeros(len(us), np.bool_)
        return (us < self.known.main[0]) | (us > self.known.main[1])

    def cover(self, us: NDArray[np.int64]) -> None:
        """The next stamps [n] that the file covers time with."""
        if len(us):
            first, last = int(us.min()), int(us.max())
            self.first_us = first if self.first_us is None else min(first, self.first_us)
            self.last_us = last if self.last_us is None else max(last, self.last_us)

    def numbered(self, tags: Sequence[str]) -> NDArray[np.int64]:
        """The number of each of the tags, new ones counted on."""
        found = [self.tags.setdefault(tag, len(self.tags)) for tag in tags]
        return np.array(found, np.int64)

    def word_numbers(self, tag: str, texts: Sequence[str]) -> NDArray[np.float64] | None:
        """The number of each of a mode tag's texts, new ones counted on.

        None for a tag whose texts are too many, or too long, to be modes: none of it is taken.
        """
        known = self._words.setdefault(tag, {})
        found = np.array([known.setdefault(text, len(known)) for text in texts], np.float64)
        longest = max(map(len, texts), default=0)
        if len(known) > self.limits.most_texts or longest > self.limits.longest_text:
            self.no_modes.add(tag)
        return None if tag in self.no_modes else found

    def texts(self) -> dict[str, tuple[str, ...]]:
        """The texts of each mode tag by their number."""
        return {tag: tuple(known) for tag, known in self._words.items()}

    def to_know(self) -> Known | None:
        """At the end of a first reading: what a second one needs; None: it is not needed."""
        main = self._eras.main()
        if main is None and not self._order.repeated:
            return None
        return Known(main, self._order)

"""Stamps of an export come in; the time most of them lie in goes out."""

from __future__ import annotations

import numpy as np
from numpy.typing import NDArray

from audit.records import DAY_US, Span

_APART_US = 366 * DAY_US


class Eras:
    """The times a file's stamps lie in: stretches more than a year away from one another.

    A controller whose clock was set back to its epoch, or far ahead, writes stamps that are astray.
    A file covers all of its time, so that a single one would take the place of years of other
    exports. The rest is at least 19 in 20 of the file; where nothing is, no stamp is astray.
    """

    def __init__(self) -> None:
        self._eras: list[tuple[int, int, int]] = []

    def follow(self, us: NDArray[np.int64]) -> None:
        """The next stamps of the file."""
        if len(us) == 0:
            return
        first, last = int(us.min()), int(us.max())
        new = [(first, last, len(us))]
        if last - first > _APART_US:
            us = np.sort(us)
            parts = np.split(us, np.flatnonzero(np.diff(us) > _APART_US) + 1)
            new = [(int(part[0]), int(part[-1]), len(part)) for part in parts]
        joined: list[tuple[int, int, int]] = []
        for era in sorted([*self._eras, *new]):
            if joined and era[0] - joined[-1][1] <= _APART_US:
                start, end, count = joined.pop()
                joined.append((start, max(end, era[1]), count + era[2]))
            else:
                joined.append(era)
        self._eras = joined

    def main(self) -> Span | None:
        """From and to of the file's main time; None where no stamp is astray."""
        if len(self._eras) < 2:
            return None
        start, end, count = max(self._eras, key=lambda era: era[2])
        return (start, end) if count * 20 >= 19 * sum(era[2] for era in self._eras) else None

"""``90d``, ``18m``, ``2y`` or a date -> the day before which something counts as old."""

from __future__ import annotations

import re
from calendar import monthrange
from dataclasses import dataclass
from datetime import date, timedelta

_MONTHS = {"m": 1, "y": 12}
_AGE = re.compile(r"([1-9][0-9]{0,3})([dmy])")


@dataclass(frozen=True)
class Age:
    """So many days, months or years (``unit`` d, m or y) before a day."""

    count: int
    unit: str

    def before(self, today: date) -> date:
        """The day that lies so far back; of a month that is too short its last day."""
        if self.unit == "d":
            return today - timedelta(days=self.count)
        months = 12 * today.year + today.month - 1 - self.count * _MONTHS[self.unit]
        year, month = divmod(months, 12)
        last = monthrange(year, month + 1)[1]
        return date(year, month + 1, min(today.day, last))


def age(text: str) -> Age | None:
    """The age that is written so; None for what is none. No age reaches back beyond 1000 years."""
    found = _AGE.fullmatch(text)
    if found is None:
        return None
    made = Age(int(found[1]), found[2])
    return made if made.unit != "y" or made.count <= 1000 else None

"""Numbers in, text out: as many digits as the number's own interval carries, and its unit.

The value and both ends of its interval are written to the decimal place of the first significant
digit of half the interval's width: no finer than that is known (common practice; JCGM 100 7.2.6
allows at most two digits). Of a number without interval, or a lone bound, three digits are kept.
Where rounding would carry a number onto its limit or past it, more decimals are shown. Times are
in seconds everywhere, as limits are set: the same number reads alike in a sentence and a table.
"""

from __future__ import annotations

from math import floor, log10

MOST_DECIMALS = 9
MORE_DECIMALS = 3
"""At most so many more decimals keep a number on its side of the limit."""


def decimals(
    value: float,
    low: float | None = None,
    high: float | None = None,
    limit: float | None = None,
) -> int:
    """Decimal places fit for ``value`` known to lie between ``low`` and ``high``."""
    known = [bound for bound in (low, high) if bound is not None]
    spread = (max(known) - min(known)) / 2.0 if len(known) == 2 else 0.0
    places = _places(spread, 1) if spread > 0.0 else _places(abs(value), 3)
    limits = () if limit is None else (limit, -limit)
    for more in range(MORE_DECIMALS + 1):
        if all(_same_side(n, places + more, one) for n in (value, *known) for one in limits):
            return places + more
    return places


def _same_side(exact: float, places: int, limit: float) -> bool:
    """Whether a number keeps its side of a limit when it is rounded."""
    shown = round(exact, places)
    return (shown > limit, shown < limit) == (exact > limit, exact < limit)


def _places(size: float, digits: int) -> int:
    """Decimal places that show so many significant digits of ``size``."""
    if size <= 0.0:
        return 0
    return min(max(digits - 1 - floor(log10(size)), 0), MOST_DECIMALS)


def number(value: float, places: int) -> str:
    """``value`` with ``places`` decimals; a zero carries no sign."""
    text = f"{value:.{places}f}"
    return text.removeprefix("-") if float(text) == 0.0 else text


def plain(value: float) -> str:
    """A number that was set, not measured (a limit, a range): as it was written."""
    text = f"{value:.10g}"
    return text if "e" not in text else number(value, decimals(value))


def pair(one: float, other: float) -> tuple[str, str]:
    """Two levels written to the same decimal, fine enough to show what lies between them."""
    places = _places(abs(other - one) or abs(one), 4)
    texts = number(one, places), number(other, places)
    while places and all(text.endswith("0") for text in texts):
        places -= 1
        texts = number(one, places), number(other, places)
    return texts


def with_unit(text: str, unit: str) -> str:
    """A number's text and its unit, which may be empty."""
    return f"{text} {unit}" if unit else text


def interval(
    value: float | None,
    low: float | None,
    high: float | None,
    unit: str = "",
    *,
    kind: str = "",
    limit: float | None = None,
    at_least: bool = False,
) -> str | None:
    """A measured number with its 95 % interval, in words where only a bound is known.

    ``12.3 s (11.9 to 12.8)``, ``longer than 600 s``, ``at most 0.12``; None where nothing is known.
    ``kind`` is put before the interval; ``limit``: what its ends must not seem to lie on;
    ``at_least``: the value is a lower bound itself.
    """
    if value is not None:
        places = decimals(value, low, high, limit)
        least = "at least " if at_least else ""
        text = f"{least}{with_unit(number(value, places), unit)}"
        if (low is None and high is None) or _one_value(value, low, high):
            return text
        return f"{text} ({kind}{': ' if kind else ''}{_bounds(low, high, places)})"
    if low is not None and high is not None:
        if low == 0.0:
            short = plain(float(number(high, decimals(high, None, high, limit))))
            return f"at most {with_unit(short, unit)}"
        return with_unit(_bounds(low, high, decimals(low, low, high, limit)), unit)
    if low is not None:
        words = "longer than" if unit == "s" else "more than"
        return f"{words} {with_unit(lone(low), unit)}"
    if high is not None:
        return f"at most {with_unit(lone(high), unit)}"
    return None


def lone(number_: float) -> str:
    """A number without an interval: three significant digits, no zeros behind."""
    return plain(float(number(number_, _places(abs(number_), 3))))


def _one_value(value: float, low: float | None, high: float | None) -> bool:
    """Whether the interval is no wider than the digits a number is kept to."""
    if low is None or high is None:
        return False
    return high - low <= 1e-9 * max(abs(value), abs(low), abs(high))


def _bounds(low: float | None, high: float | None, places: int) -> str:
    if low is None or high is None:
        bound, words = (high, "at most") if low is None else (low, "at least")
        return f"{words} {number(bound or 0.0, places)}"
    return f"{number(low, places)} to {number(high, places)}"


def share(part: int, whole: int) -> float | None:
    """part / whole, or None where the whole is nothing."""
    return part / whole if whole > 0 else None


def percent(fraction: float | None) -> str:
    """A share as whole percent; a share that is not nothing is never shown as 0 %, nor one that is
    not all as 100 %."""
    if fraction is None:
        return "-"
    rounded = round(100.0 * fraction)
    if rounded == 0 and fraction > 0.0:
        return "<1 %"
    if rounded == 100 and fraction < 1.0:
        return ">99 %"
    return f"{rounded} %"


def size(count: int) -> str:
    """A number of bytes in kB, MB or GB (powers of ten)."""
    if count < 1_000_000:
        return f"{count / 1000.0:.1f} kB"
    if count < 1_000_000_000:
        return f"{count / 1_000_000.0:.1f} MB"
    return f"{count / 1_000_000_000.0:.1f} GB"

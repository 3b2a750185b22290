"""How an export writes its cells: what parts them, the marks in numbers, the words for on and off.

In: one ``[[exports]]`` table. Out: ``Marks``; faults are noted in the table, and the value is then
the default.
"""

from __future__ import annotations

import unicodedata
from collections.abc import Sequence
from dataclasses import dataclass

from audit.sitefiles.settings import Section, shown

_TRUE, _FALSE = ("true",), ("false",)


@dataclass(frozen=True)
class Marks:
    """``thousands`` "": numbers come without. The words stand for 1 and 0 in number columns."""

    delimiter: str
    decimal: str
    thousands: str
    true_words: tuple[str, ...]
    false_words: tuple[str, ...]


def read_marks(section: Section, kind: str) -> Marks:
    """The marks of an export of ``kind``, csv or parquet; each that is wrong is a fault."""
    decimal = section.word("decimal", (".", ","), ".")
    true_words, false_words = _words(section)
    return Marks(
        _delimiter(section, decimal if kind == "csv" else ""),
        decimal,
        _thousands(section, decimal),
        true_words,
        false_words,
    )


def _delimiter(section: Section, decimal: str) -> str:
    text = section.text("delimiter", ",", blank=True)
    if len(text) != 1 or text.isalnum() or text in '"\r\n\0+-':
        remedy = 'one character that no number holds: "," ";" or "\\t"'
        section.wrong("delimiter", f"{shown(text)} cannot part cells", remedy)
    elif text == decimal:
        remedy = 'name the delimiter the file has, such as delimiter = ";"'
        key = "delimiter" if "delimiter" in section else "decimal"
        section.wrong(key, f"{shown(text)} is both delimiter and decimal mark", remedy)
    else:
        return text
    return ","


def _thousands(section: Section, decimal: str) -> str:
    """May be the delimiter of a CSV: a cell that holds it is then quoted (RFC 4180)."""
    text = section.text("thousands", "", blank=True)
    if not text:
        return ""
    odd = len(text) != 1 or text.isalnum() or unicodedata.category(text)[0] == "C"
    if odd or text in '"+-':
        remedy = 'one character such as "," "." " " or "\'", or "" for none'
        section.wrong("thousands", f"{shown(text)} cannot part thousands", remedy)
    elif text == decimal:
        remedy = (
            f'the two differ: with decimal = "{decimal}" thousands may be "{",."[decimal == ","]}"'
        )
        section.wrong("thousands", f"{shown(text)} is both thousands and decimal mark", remedy)
    else:
        return text
    return ""


def _words(section: Section) -> tuple[tuple[str, ...], tuple[str, ...]]:
    table = section.section("booleans", ("true", "false"))
    true_words = _stripped(table.texts("true", _TRUE))
    false_words = _stripped(table.texts("false", _FALSE))
    sound = [_note_unfit(table, "true", true_words), _note_unfit(table, "false", false_words)]
    folded = {word.casefold() for word in true_words}
    for word in false_words:
        if word.casefold() in folded:
            table.wrong("false", f"{shown(word)} is also among the words for true", "keep one")
            sound.append(False)
    return (true_words, false_words) if all(sound) else (_TRUE, _FALSE)


def _stripped(words: Sequence[str]) -> tuple[str, ...]:
    return tuple(word.strip() for word in words)


def _note_unfit(table: Section, key: str, words: Sequence[str]) -> bool:
    """Blank cells are no values and numbers are read as numbers: neither can be such a word."""
    blank = [word for word in words if not word]
    numbers = [word for word in words if _is_number(word)]
    if blank:
        table.wrong(key, "an empty text is a cell without a value", "leave it out of the list")
    if numbers:
        table.wrong(key, f"{shown(numbers[0])} is read as a number", "leave it out of the list")
    return not blank and not numbers


def _is_number(word: str) -> bool:
    try:
        float(word)
    except ValueError:
        return False
    return True

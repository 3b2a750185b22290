"""Quality of a sample: a word or an OPC code comes in, good, uncertain or bad goes out.

The scheme is declared for a whole export and never guessed: 192 is good in OPC DA, and in OPC UA
it is good only because its severity bits happen to be zero.
"""

from __future__ import annotations

import re
from collections.abc import Collection
from enum import StrEnum

from audit.records import ExportSource

_CODE = re.compile(r"[+-]?\d+|0[xX][0-9a-fA-F]+", re.ASCII)


class Quality(StrEnum):
    """What a quality says of its sample."""

    GOOD = "good"
    UNCERTAIN = "uncertain"
    BAD = "bad"


def is_good(text: str, source: ExportSource) -> bool | None:
    """Whether a sample of this quality counts as good; None where the code cannot be read.

    Uncertain is bad unless the source declares it good (OPC UA Part 13, TreatUncertainAsBad:
    its default is true).
    """
    quality = _quality(text.strip(), source)
    if quality is Quality.UNCERTAIN:
        return source.uncertain_is_good
    return None if quality is None else quality is Quality.GOOD


def whole(text: str) -> str:
    """The text of a code that came as a number with decimals, such as 192.0, without them."""
    return re.sub(r"\.0*$", "", text)


def opc_da(code: int) -> Quality | None:
    """OPC Data Access 3.0, section 6.8: the low byte is QQSSSSLL, QQ 0 bad, 1 uncertain, 3 good.

    QQ 2 is reserved and counts as bad. The high byte is the vendor's and is not looked at. None
    for a number that is no 16-bit code. Substatus and limit bits do not change the outcome.
    """
    if not 0 <= code <= 0xFFFF:
        return None
    return {0: Quality.BAD, 1: Quality.UNCERTAIN, 2: Quality.BAD, 3: Quality.GOOD}[code >> 6 & 3]


def opc_ua(code: int) -> Quality | None:
    """OPC UA Part 4, StatusCode: bits 31 and 30 are the severity, 0 good, 1 uncertain, 2 bad.

    Severity 3 is reserved and counts as bad. A negative number is the same 32 bits read as a
    signed integer. None for a number outside 32 bits.
    """
    if not -0x8000_0000 <= code <= 0xFFFF_FFFF:
        return None
    severity = (code & 0xFFFF_FFFF) >> 30
    return {0: Quality.GOOD, 1: Quality.UNCERTAIN}.get(severity, Quality.BAD)


def word(text: str, good: Collection[str]) -> Quality:
    """Declared words, without regard to case; others that begin with "uncertain" are that."""
    plain = text.casefold()
    if plain in {known.strip().casefold() for known in good}:
        return Quality.GOOD
    return Quality.UNCERTAIN if plain.startswith("uncertain") else Quality.BAD


def _quality(text: str, source: ExportSource) -> Quality | None:
    if source.quality_scheme == "words":
        return word(text, source.good)
    if _CODE.fullmatch(text) is None or len(text) > 12:
        return None
    code = int(text, 16) if text[:2].lower() == "0x" else int(text)
    return opc_da(code) if source.quality_scheme == "opc_da" else opc_ua(code)

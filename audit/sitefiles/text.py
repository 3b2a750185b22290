"""One file of a site's folder -> its text, and what is wrong with it as a text; nearest words.

In: a path. Out: text with "\\n" line ends and without a byte order mark, so that line numbers and
content do not depend on the editor that saved it. No meaning is read here.
"""

from __future__ import annotations

import codecs
import difflib
import hashlib
import json
from collections.abc import Iterable
from dataclasses import dataclass
from pathlib import Path

from audit.errors import Fault

LONGEST_WINDOW_S = 31 * 86_400.0
"""Longest window around a setpoint change that the site or a loop's row may ask for."""

_SAVE_AS_UTF8 = "save the file as plain UTF-8 text"


@dataclass(frozen=True)
class SiteFile:
    """``text`` None: it could not be read as text at all. ``name`` is how faults call the file."""

    name: str
    text: str | None
    faults: tuple[Fault, ...]


def open_file(path: Path, absent: str = "create it, or name the right file") -> SiteFile:
    """The text of ``path``; bytes that are not UTF-8 and NUL bytes are faults, and left out.

    ``absent``: the remedy where there is no such file.
    """
    name = path.name
    try:
        raw = path.read_bytes()
    except FileNotFoundError:
        return _unread(name, f"there is no such file ({path})", absent)
    except IsADirectoryError:
        return _unread(name, f"{path} is a folder", "name a file")
    except OSError as failure:
        reason = failure.strerror or type(failure).__name__
        return _unread(name, f"cannot be read: {reason} ({path})", "make the file readable")
    raw = raw.replace(b"\r\n", b"\n").replace(b"\r", b"\n")
    if raw.startswith((codecs.BOM_UTF16_LE, codecs.BOM_UTF16_BE)) or raw.count(0) * 4 > len(raw):
        return _unread(name, "is UTF-16 or not a text file", _SAVE_AS_UTF8)
    raw = raw.removeprefix(codecs.BOM_UTF8)
    faults = [*_nul_faults(name, raw), *_encoding_faults(name, raw)]
    text = raw.replace(b"\0", b"").decode("utf-8", "replace")
    return SiteFile(name, text, tuple(faults))


def _unread(name: str, problem: str, remedy: str) -> SiteFile:
    return SiteFile(name, None, (Fault(name, problem, remedy),))


def _nul_faults(name: str, raw: bytes) -> Iterable[Fault]:
    if b"\0" not in raw:
        return
    lines = [number for number, line in enumerate(raw.split(b"\n"), 1) if b"\0" in line]
    yield Fault(name, f"holds NUL bytes{_and_more(lines)}", _SAVE_AS_UTF8, lines[0])


def _encoding_faults(name: str, raw: bytes) -> Iterable[Fault]:
    bad: list[int] = []
    first = 0
    for number, line in enumerate(raw.split(b"\n"), 1):
        try:
            line.decode("utf-8")
        except UnicodeDecodeError as failure:
            first = first if bad else failure.object[failure.start]
            bad.append(number)
    if bad:
        yield Fault(name, f"byte 0x{first:02X} is not UTF-8{_and_more(bad)}", _SAVE_AS_UTF8, bad[0])


def _and_more(lines: list[int]) -> str:
    more = len(lines) - 1
    if more == 0:
        return ""
    return f" (and on {more} more {'line' if more == 1 else 'lines'})"


def fingerprint(content: object) -> str:
    """SHA-256 (hex) of plain content: tables, lists, texts, numbers. Key order does not matter."""
    canonical = json.dumps(content, sort_keys=True, default=str)
    return hashlib.sha256(canonical.encode("ascii")).hexdigest()


def nearest(word: str, known: Iterable[str], likeness: float = 0.6) -> str | None:
    """The known word that ``word`` was most likely meant to be, or None.

    Case, blanks and hyphens do not count; ``likeness`` is difflib's ratio, 0 to 1.
    """
    folded = {fold(each): each for each in known}
    found = difflib.get_close_matches(fold(word), list(folded), 1, likeness)
    return folded[found[0]] if found else None


def fold(word: str) -> str:
    """A name without what people most often get wrong in it: case, blanks, hyphens."""
    return word.strip().casefold().replace("-", "_").replace(" ", "_")


def meant(word: str, known: Iterable[str], kind: str = "allowed") -> str:
    """Remedy for an unknown word: the nearest known one, and the whole list."""
    known = list(known)
    guess = nearest(word, known)
    listed = f"{kind}: {', '.join(known)}"
    return listed if guess is None else f"did you mean '{guess}'? {listed}"

"""The text of site.toml -> its tables, taken out key by key, with the line of each key.

In: a ``SiteFile``. Out: a ``Sheet``, whose ``Section``s hand out checked plain values and gather
faults instead of stopping at the first. What the settings mean is ``config``'s matter.
"""

from __future__ import annotations

import math
import re
import tomllib
from collections.abc import Collection, Mapping, Sequence

from audit.errors import Fault
from audit.sitefiles.text import SiteFile, meant, nearest

Path = tuple[str | int, ...]

_PART = r"""(?:"[^"]*"|'[^']*'|[A-Za-z0-9_-]+)"""
_NAME = rf"({_PART}(?:\s*\.\s*{_PART})*)"
_TABLE = re.compile(rf"\s*(\[\[?)\s*{_NAME}\s*\]\]?\s*(?:#.*)?")
_KEY = re.compile(rf"\s*{_NAME}\s*=")
_TOKEN = re.compile(r'"""|\'\'\'|"(?:\\.|[^"\\])*"|\'[^\']*\'|#.*|[\[\]{}]')
_AT = re.compile(r"\(at line (\d+), column (\d+)\)")


class Lines:
    """On which line of a TOML text each table and key stands."""

    def __init__(self, text: str) -> None:
        self._found: dict[Path, int] = {}
        self._lists: dict[Path, int] = {}
        self._table: Path = ()
        quote, depth = "", 0
        for number, line in enumerate(text.split("\n"), 1):
            rest = line
            if not quote and depth == 0:
                rest = self._note(line, number)
            quote, depth = _carry(rest, quote, depth)

    def of(self, *path: str | int) -> int | None:
        """Line of that key, else of the nearest table or key around it; None if there is none."""
        for length in range(len(path), 0, -1):
            if path[:length] in self._found:
                return self._found[path[:length]]
        return None

    def _note(self, line: str, number: int) -> str:
        """Takes down a table head or key; gives back the part of the line that is value."""
        if head := _TABLE.fullmatch(line):
            parts = _parts(head[2])
            if head[1] == "[[":
                path = (*self._inside(parts[:-1]), parts[-1])
                self._lists[path] = self._lists.get(path, 0) + 1
            self._table = self._inside(parts)
            self._found.setdefault(self._table, number)
            return ""
        if key := _KEY.match(line):
            self._found.setdefault((*self._table, *_parts(key[1])), number)
            return line[key.end() :]
        return line

    def _inside(self, parts: Sequence[str]) -> Path:
        """The path of a table name: each array of tables on it stands for its latest entry."""
        path: Path = ()
        for part in parts:
            path = (*path, part)
            if path in self._lists:
                path = (*path, self._lists[path] - 1)
        return path


def _parts(name: str) -> list[str]:
    return [part.strip("\"'") for part in re.findall(_PART, name)]


def _carry(line: str, quote: str, depth: int) -> tuple[str, int]:
    """What stays open at the end of a line: a long text's quotes, and how many brackets."""
    at = 0
    while at < len(line):
        if quote:
            end = line.find(quote, at)
            if end < 0:
                return quote, depth
            quote, at = "", end + 3
            continue
        token = _TOKEN.search(line, at)
        if token is None:
            break
        at = token.end()
        if token[0] in ('"""', "'''"):
            quote = token[0]
        elif token[0] in "[{":
            depth += 1
        elif token[0] in "]}":
            depth = max(0, depth - 1)
    return quote, depth


class Sheet:
    """A TOML file with its faults so far. Without readable TOML ``data`` is empty."""

    def __init__(self, file: SiteFile) -> None:
        self.name = file.name
        self.faults: list[Fault] = list(file.faults)
        self.data: Mapping[str, object] = {}
        self.readable = False
        text = file.text or ""
        self._lines = Lines(text)
        if file.text is None:
            return
        try:
            self.data = tomllib.loads(text)
            self.readable = True
        except (ValueError, RecursionError) as failure:
            self.faults.append(_syntax_fault(file.name, text, str(failure)))

    def wrong(self, path: Path, problem: str, remedy: str, column: str | None = None) -> None:
        """Notes a fault of the setting at ``path``, with its line."""
        named = ".".join(part for part in path if isinstance(part, str))
        line = self._lines.of(*path)
        self.faults.append(Fault(self.name, problem, remedy, line, column or named or None))

    def sound(self, table: str) -> bool:
        """Nothing was found wrong with this table so far."""
        return not any((fault.column or "").split(".")[0] == table for fault in self.faults)

    def section(self, path: Path, content: object, known: Collection[str]) -> Section:
        """One table. Unknown settings in it are faults, with the nearest known name."""
        if not isinstance(content, Mapping):
            self.wrong(path, f"{shown(content)} is not a table", f"write it as [{path[0]}]")
            content = {}
        return Section(self, path, content, known)


class Section:
    """One table of site.toml. Every getter notes a fault and gives a stand-in where it must."""

    def __init__(
        self, sheet: Sheet, path: Path, content: Mapping[str, object], known: Collection[str]
    ) -> None:
        self._sheet, self._path, self._content = sheet, path, content
        for key in content:
            if key not in known:
                self.wrong(key, f"unknown setting '{key}'", meant(key, known, "known here"))

    def __contains__(self, key: str) -> bool:
        return key in self._content

    def is_blank(self, key: str) -> bool:
        """Given, as an empty text."""
        value = self._content.get(key)
        return isinstance(value, str) and not value.strip()

    def wrong(self, key: str, problem: str, remedy: str) -> None:
        """Notes a fault of one setting of this table."""
        self._sheet.wrong((*self._path, key), problem, remedy)

    def section(self, key: str, known: Collection[str]) -> Section:
        """A table inside this one; empty where it is not given."""
        return self._sheet.section((*self._path, key), self._content.get(key, {}), known)

    def text(self, key: str, default: str | None = None, *, blank: bool = False) -> str:
        """A text; without a default it must be there. ``blank``: it may be empty."""
        if key not in self._content:
            if default is None:
                head = f"[[{self._path[0]}]]" if len(self._path) > 1 else f"[{self._path[0]}]"
                self.wrong(key, f"'{key}' is missing", f'add {key} = "..." below {head}')
            return default or ""
        value = self._content[key]
        if not isinstance(value, str):
            self.wrong(key, f"{shown(value)} is not a text", f'write it in quotes: {key} = "..."')
        elif not value.strip() and not blank:
            self.wrong(key, f"'{key}' is empty", "give it a value" + _or_leave_out(default))
        elif "\0" in value:
            self.wrong(key, f"{shown(value)} holds a NUL character", "leave it out")
        else:
            return value
        return default or ""

    def word(self, key: str, allowed: Sequence[str], default: str) -> str:
        """One of the allowed words."""
        value = self.text(key, default)
        if value in allowed:
            return value
        self.wrong(key, f"'{value}' is not a word for {key}", meant(value, allowed))
        return default

    def texts(self, key: str, default: tuple[str, ...]) -> tuple[str, ...]:
        """A list of texts with at least one entry."""
        value = self._content.get(key, list(default))
        if isinstance(value, list) and value and all(isinstance(each, str) for each in value):
            return tuple(value)
        self.wrong(key, f"{shown(value)} is not a list of texts", f'write {key} = ["...", "..."]')
        return default

    def number(self, key: str, default: float, most: float) -> float:
        """A finite number over 0, not over ``most``."""
        value = self._content.get(key, default)
        limits = f"a number over 0, at most {most:g}"
        if isinstance(value, bool) or not isinstance(value, int | float):
            self.wrong(key, _not_a_number(value), f"write {key} = {default:g}, without quotes")
        elif isinstance(value, float) and not math.isfinite(value):
            self.wrong(key, f"{value} is not a finite number", limits)
        elif not 0 < value <= most:
            self.wrong(key, f"{shown(value)} is out of range", limits)
        else:
            return float(value)
        return default

    def whole(self, key: str, default: int, most: int) -> int:
        """A whole number from 1 to ``most``."""
        value = self._content.get(key, default)
        if isinstance(value, bool) or not isinstance(value, int) or not 1 <= value <= most:
            problem = f"{shown(value)} is not a whole number from 1 to {most}"
            self.wrong(key, problem, f"write {key} = {default}")
            return default
        return value


def note_unknown(sheet: Sheet, known: Mapping[str, Collection[str]]) -> None:
    """Notes top-level names that are no table of ``known`` (table -> its settings)."""
    for name in sheet.data:
        if name in known:
            continue
        homes = [table for table, keys in known.items() if name in keys]
        guess = nearest(name, known)
        if homes:
            remedy = f"it belongs below [{homes[0]}]"
        elif guess is not None:
            remedy = f"did you mean [{guess}]?"
        else:
            remedy = f"known tables: {', '.join(known)}"
        sheet.wrong((name,), f"unknown setting '{name}'", remedy)


def shown(value: object) -> str:
    """A value as TOML would have it, cut to a length that fits in a message."""
    text = str(value).lower() if isinstance(value, bool) else repr(value)
    return text if len(text) <= 60 else text[:57] + "..."


def _not_a_number(value: object) -> str:
    if isinstance(value, str) and re.fullmatch(r"\s*[+-]?\d+,\d+\s*", value):
        return f"{shown(value)} is a text with a decimal comma, not a number"
    return f"{shown(value)} is not a number"


def _or_leave_out(default: str | None) -> str:
    return "" if default is None else f", or leave the line out for '{default}'"


def _syntax_fault(name: str, text: str, message: str) -> Fault:
    place = _AT.search(message)
    line = int(place[1]) if place else text.count("\n") + 1
    column = place[2] if place else None
    written = text.split("\n")[line - 1]
    remedy = "texts stand in double quotes, numbers without, lists in [ ]"
    if re.search(r"=\s*[+-]?\d+,\d", written):
        remedy = "a decimal comma? TOML numbers have a decimal point"
    return Fault(name, f"is not TOML: {_AT.sub('', message).strip()}", remedy, line, column)

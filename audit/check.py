"""A site's files and the first rows of its exports -> all that is wrong, and what to look at.

In: the path of a site and the environment. Out: ``Findings``. Nothing is stored and nothing is
audited. What is wrong with the site's own files, and an export that cannot be read, are faults.
A tag of the register that no export shows, a column that no loop uses, single rows that cannot be
read and an export kind without files are things to look at.
"""

from __future__ import annotations

from collections.abc import Callable, Collection, Mapping, Sequence
from dataclasses import dataclass
from pathlib import Path

from audit import config, exports
from audit.errors import ExportRefused, Fault, FilesWrong
from audit.records import ExportFile, ExportSource, Loop, Role
from audit.site import open_site

FIRST_ROWS = 1000
"""Rows looked at of every export file."""

NEWEST_FILES = 3
"""Files of a narrow export kind that are read whole for tags which their first rows do not show."""

Told = Callable[[str, int, int], None]
Listed = tuple[ExportSource, list[ExportFile]]


@dataclass(frozen=True)
class MissingTag:
    """A historian tag of the register that no export shows: of which loop, in which role."""

    tag: str
    loop: str
    role: Role


@dataclass(frozen=True)
class Findings:
    """What a look at a site's files found.

    ``faults``: to be put right. ``rows``: single rows of exports that cannot be read. ``missing``
    and ``unused``, (export kind, tag), are empty where the register could not be read. ``empty``:
    export kinds whose pattern matches no file. ``files``: export files looked at.
    """

    faults: tuple[Fault, ...]
    rows: tuple[Fault, ...] = ()
    missing: tuple[MissingTag, ...] = ()
    unused: tuple[tuple[str, str], ...] = ()
    empty: tuple[str, ...] = ()
    loops: int = 0
    specs: int = 0
    files: int = 0


@dataclass(frozen=True)
class _Look:
    """What the first rows of the exports show: tags by export kind, and what is wrong."""

    tags: dict[str, set[str]]
    faults: list[Fault]
    rows: list[Fault]


def look(path: Path, env: Mapping[str, str], told: Told) -> Findings:
    """Look at the site at ``path`` (its site.toml or folder); ``told`` hears of the progress."""
    try:
        site = open_site(path, env)
    except FilesWrong as wrong:
        settings = config.examine(path, env).config
        listed, seen = _exports(settings.exports if settings else (), told)
        files = sum(len(found) for _, found in listed)
        return Findings((*wrong.faults, *seen.faults), tuple(seen.rows), files=files)
    register = site.register
    listed, seen = _exports(site.config.exports, told)
    wanted = _wanted(register.loops)
    _read_newest(listed, wanted, seen)
    shown = set().union(*seen.tags.values())
    return Findings(
        faults=tuple(seen.faults),
        rows=tuple(seen.rows),
        missing=tuple(missing for tag, missing in wanted.items() if tag not in shown),
        unused=tuple(
            (kind, tag) for kind, tags in seen.tags.items() for tag in sorted(tags - set(wanted))
        ),
        empty=tuple(source.name for source, found in listed if not found),
        loops=len(register.loops),
        specs=len(register.specs),
        files=sum(len(found) for _, found in listed),
    )


def _wanted(loops: Sequence[Loop]) -> dict[str, MissingTag]:
    """Every tag the register names, with the first loop that names it."""
    wanted: dict[str, MissingTag] = {}
    for loop in loops:
        for role, tag in loop.tags().items():
            wanted.setdefault(tag, MissingTag(tag, loop.tag, role))
    return wanted


def _exports(sources: Sequence[ExportSource], told: Told) -> tuple[list[Listed], _Look]:
    """The files of all export kinds, and what their first rows show."""
    seen = _Look({}, [], [])
    listed = [(source, _discover(source, seen)) for source in sources]
    total = sum(len(found) for _, found in listed)
    done = 0
    for source, found in listed:
        tags = seen.tags.setdefault(source.name, set())
        for file in found:
            tags |= _first_rows(file, source, seen)
            done += 1
            told("looking at exports", done, total)
    return listed, seen


def _discover(source: ExportSource, seen: _Look) -> list[ExportFile]:
    try:
        return exports.discover(source)
    except ExportRefused as refused:
        seen.faults.append(_fault(refused))
        return []


def _first_rows(file: ExportFile, source: ExportSource, seen: _Look) -> set[str]:
    """The tags of a file's first rows; a file of which no row can be read is a fault."""
    try:
        peek = exports.peek(file, source, FIRST_ROWS)
    except ExportRefused as refused:
        seen.faults.append(_fault(refused))
        return set()
    (seen.faults if peek.first_us is None else seen.rows).extend(peek.faults)
    return set(peek.tags)


def _read_newest(listed: Sequence[Listed], wanted: Collection[str], seen: _Look) -> None:
    """Read the newest files of narrow kinds whole, while there are tags nothing has shown.

    In a narrow export a tag that seldom changes may stand far down; a wide one names all at once.
    """
    for source, found in listed:
        for file in list(reversed(found))[:NEWEST_FILES] if source.layout == "narrow" else ():
            left = set(wanted) - set().union(*seen.tags.values())
            if not left:
                return
            try:
                seen.tags[source.name] |= exports.named(file, source)
            except ExportRefused as refused:
                seen.faults.append(_fault(refused))


def _fault(refused: ExportRefused) -> Fault:
    return Fault(refused.path, refused.reason, refused.remedy, refused.line)

"""A local glob pattern comes in, the paths it matches go out, links followed only so far.

``*``, ``?`` and ``[...]`` within one name, ``**`` for any folders; names with a leading dot only
where the pattern has it (POSIX, section 2.14). Below the fixed beginning of a pattern, its base, a
link to a folder is followed within the base alone, and no folder is gone through twice with the
same rest of the pattern: loops of links end, however many there are.
"""

from __future__ import annotations

import fnmatch
import glob
import os
from collections import deque
from collections.abc import Iterator
from dataclasses import dataclass
from pathlib import PurePath


@dataclass(frozen=True)
class Match:
    """A path that matches. ``closed``: a folder that is not gone into, by a link or by its rights.

    Everything else may be a file, a folder, a link to nowhere, a pipe.
    """

    path: str
    closed: bool = False


@dataclass(frozen=True)
class Pattern:
    """``base``: the folder the search starts from, as written. ``parts``: the rest, by level."""

    base: str
    parts: tuple[str, ...]


def split(pattern: str) -> Pattern:
    """A pattern's fixed beginning, and the rest from the first part with a glob character on."""
    parts = PurePath(pattern).parts
    fixed = 0
    while fixed < len(parts) - 1 and not glob.has_magic(parts[fixed]):
        fixed += 1
    return Pattern(str(PurePath(*parts[:fixed])), parts[fixed:])


def leads_out(path: str, base: str) -> bool:
    """Whether a path lies outside of ``base`` once all links in both are followed."""
    return not PurePath(os.path.realpath(path)).is_relative_to(os.path.realpath(base))


@dataclass(frozen=True)
class _Step:
    """A path on the way, and the parts that what is in it has to match; () for a path that ends."""

    path: str
    rest: tuple[str, ...] = ()
    closed: bool = False


def matches(base: str, parts: tuple[str, ...]) -> Iterator[Match]:
    """Everything below ``base`` that matches, each once, in no order."""
    found: set[str] = set()
    ahead, by_link = deque([_Step(base, parts)]), deque[_Step]()
    gone_through: set[tuple[int, int, tuple[str, ...]]] = set()
    while ahead or by_link:  # real folders first: a file keeps its real path where it has one
        for step in _level((ahead or by_link).popleft(), gone_through):
            closed = step.closed
            if step.rest:
                if not os.path.isdir(step.path):
                    continue
                link = _is_link(step.path)
                closed = link and leads_out(step.path, base)
                if not closed:
                    (by_link if link else ahead).append(step)
                    continue
            if step.path not in found:
                found.add(step.path)
                yield Match(step.path, closed)


def _level(at: _Step, gone_through: set[tuple[int, int, tuple[str, ...]]]) -> Iterator[_Step]:
    """One level on from a folder; the folder itself, closed, where it cannot be listed."""
    try:
        status = os.stat(at.path)
        key = (status.st_dev, status.st_ino, at.rest)
        if key not in gone_through:
            gone_through.add(key)
            yield from _steps(at.path, at.rest)
    except (FileNotFoundError, NotADirectoryError):  # moved away since it was listed
        return
    except OSError:
        yield _Step(at.path, closed=True)


def _steps(folder: str, parts: tuple[str, ...]) -> list[_Step]:
    head, rest = parts[0], parts[1:]
    if head == "**":
        below = [_Step(path, parts) for path in _named(folder, "*")]
        return [_Step(folder, rest or ("*",)), *below]
    return [_Step(path, rest) for path in _named(folder, head)]


def _named(folder: str, pattern: str) -> list[str]:
    if not glob.has_magic(pattern):
        path = os.path.join(folder, pattern)
        return [path] if os.path.lexists(path) else []
    with os.scandir(folder) as entries:
        names = [entry.name for entry in entries]
    if not pattern.startswith("."):
        names = [name for name in names if not name.startswith(".")]
    return [os.path.join(folder, name) for name in sorted(fnmatch.filter(names, pattern))]


def _is_link(path: str) -> bool:
    """Links, and ``..``, which leads up wherever it stands."""
    return os.path.islink(path) or os.path.basename(path) == ".."

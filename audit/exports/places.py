"""Where exports lie: an export source comes in, the files it names go out, none of them opened.

Local globs are relative to the site's folder; anything with ``://`` goes to fsspec as a URL. A path
that matches and cannot be taken (a link out, a pipe, an odd name) is in the list all the same,
without a stamp, to be refused when it is read.
"""

from __future__ import annotations

import os
import re
import unicodedata
from collections.abc import Iterator, Mapping
from pathlib import PurePath
from typing import Any

import fsspec
from fsspec.implementations.local import LocalFileSystem

from audit.errors import ExportRefused
from audit.exports.backends import failures, named
from audit.exports.globbing import Pattern, leads_out, matches, split
from audit.records import ExportFile, ExportSource

_MOST_REVISED = 10**18 - 1
_STAMPS = (
    *("ETag", "etag", "mtime", "LastModified", "Last-Modified", "last_modified"),
    *("updated", "modified"),
)
_UNSEEN = frozenset(("Cc", "Cs", "Zl", "Zp"))
State = tuple[int | None, str]
"""Bytes (None: the store does not tell), and what tells that a file changed."""


def discover(source: ExportSource) -> list[ExportFile]:
    """The files an export source names, in the byte order of their paths.

    A missing folder or no match is an empty list. Paths are relative to the site's folder with
    ``/``; a URL, or a local pattern given as an absolute path to elsewhere, stays as it is. A path
    that cannot be taken as a file is in the list, to be refused when it is read; folders that
    match are not. Raises ExportRefused where a URL or a folder cannot be listed at all.
    """
    found = _listed_url(source) if "://" in source.files else _listed_folder(source)
    files = [
        ExportFile(source.name, path, size or 0, stamp, revision(path, source.revision))
        for path, (size, stamp) in found
    ]
    return sorted(files, key=lambda file: os.fsencode(file.path))


def revision(path: str, pattern: str) -> int:
    """The integer the regular expression finds in the path (first group, else all); none: 0.

    Beyond 18 digits it counts as the largest, or smallest, of that length.
    """
    match = re.search(pattern, path) if pattern else None
    if match is None:
        return 0
    text = match.group(1) if match.re.groups else match.group()
    if not text or re.fullmatch(r"[+-]?\d+", text, re.ASCII) is None:
        return 0
    return max(-_MOST_REVISED, min(_MOST_REVISED, int(text[:4000])))


def local_path(file: ExportFile, source: ExportSource) -> str | None:
    """Absolute path of a file of this machine, links not followed; None: it lies elsewhere."""
    if "://" not in file.path:
        return os.path.abspath(os.path.join(source.folder, file.path))
    path = LocalFileSystem._strip_protocol(file.path)
    return str(path) if _is_local_url(file.path) else None


def base_of(source: ExportSource) -> str:
    """The folder that a source's local files must lie in: the fixed beginning of its pattern."""
    return os.path.abspath(os.path.join(source.folder, _local_pattern(source).base))


def same_file(file: ExportFile, source: ExportSource) -> str:
    """What is equal for two finds of one file: its real path on this machine, else its URL."""
    path = local_path(file, source)
    return file.path if path is None else os.path.realpath(path)


def filesystem(source: ExportSource) -> tuple[Any, str]:
    """The fsspec filesystem of a URL source, and its pattern there; errors as they come."""
    fs, pattern = fsspec.core.url_to_fs(source.files)
    return fs, str(pattern)


def path_on(fs: Any, file: ExportFile) -> str:
    """A file's path as its filesystem has it."""
    return str(fs._strip_protocol(file.path.partition("::")[0]))


def state(fs: Any, path: str, info: Mapping[str, Any] | None = None) -> State:
    """Size and modification time, ETag or the like of a remote file; errors as they come.

    ``info``: what a listing said of it; asked for where that is too little.
    """
    info = info if info and info.get("size") is not None and _stamp(info) else fs.info(path)
    size, stamp = info.get("size"), _stamp(info)
    if not stamp:
        try:
            stamp = str(fs.modified(path))
        except (NotImplementedError, KeyError):  # the store knows no times: the size has to tell
            stamp = ""
    return (None if size is None else int(size)), stamp


def _stamp(info: Mapping[str, Any]) -> str:
    return next((str(info[key]) for key in _STAMPS if info.get(key) is not None), "")


def _listed_folder(source: ExportSource) -> Iterator[tuple[str, State]]:
    pattern = _local_pattern(source)
    base = base_of(source)
    _check_folder(base, source)
    for match in matches(base, pattern.parts):
        inside = PurePath(match.path).relative_to(base)
        if "://" in source.files:
            name = f"{source.files.partition('://')[0]}://{match.path}"
        else:
            name = _relative(str(PurePath(pattern.base) / inside), source.folder)
        shown = _shown(name)
        if match.closed or shown != name:
            yield shown, (0, "")
        elif not os.path.isdir(match.path):
            yield shown, _local_state(match.path, base)


def _local_state(path: str, base: str) -> State:
    """As it is on disk; without a stamp what is to be refused, so that it is said each time."""
    try:
        status = os.stat(path)
    except OSError:  # a link to nowhere or in a loop, a name that is too long
        return 0, ""
    if not os.path.isfile(path) or (os.path.islink(path) and leads_out(path, base)):
        return 0, ""
    return status.st_size, str(status.st_mtime_ns)


def _check_folder(base: str, source: ExportSource) -> None:
    """Refuse a folder that is there and cannot be listed: it is not an empty one."""
    try:
        with os.scandir(base):
            return
    except (FileNotFoundError, NotADirectoryError):
        return
    except OSError as error:
        raise ExportRefused(
            source.files,
            f"its folder cannot be listed: {error.strerror or error}",
            "see that the folder is there and that this user may read it",
        ) from error


def _local_pattern(source: ExportSource) -> Pattern:
    files = source.files
    return split(str(LocalFileSystem._strip_protocol(files)) if "://" in files else files)


def _relative(found: str, folder: str) -> str:
    path = PurePath(os.path.normpath(found))
    if path.is_absolute() and path.is_relative_to(os.path.abspath(folder)):
        path = path.relative_to(os.path.abspath(folder))
    return path.as_posix()


def _shown(path: str) -> str:
    r"""A path that can be printed and stored: what is no UTF-8 or controls a screen as \x.."""
    text = os.fsencode(path).decode("utf-8", "backslashreplace")
    if text.isprintable():
        return text
    return "".join(
        c.encode("unicode_escape").decode() if unicodedata.category(c) in _UNSEEN else c
        for c in text
    )


def _listed_url(source: ExportSource) -> Iterator[tuple[str, State]]:
    if _is_local_url(source.files):
        yield from _listed_folder(source)
        return
    try:
        fs, pattern = filesystem(source)
    except failures(source.files) as error:
        raise _unlisted(source, error) from error
    try:
        fs.invalidate_cache()
        for path, info in sorted(_globbed(fs, pattern).items()):
            if info.get("type") != "directory":
                name = _url_of(fs, path, source.files)
                shown = _shown(name)
                yield shown, (state(fs, path, info) if shown == name else (0, ""))
    except (FileNotFoundError, NotADirectoryError):
        return
    except failures(fs) as error:
        raise _unlisted(source, error) from error


def _globbed(fs: Any, pattern: str) -> Mapping[str, Mapping[str, Any]]:
    """Path -> what the store says of it. Errors as they come: ``glob`` alone passes over many."""
    head = re.match(r"[^*?\[]*", pattern)
    if head is None or head[0] == pattern:
        return {pattern: fs.info(pattern)}
    fs.ls(head[0].rpartition("/")[0], detail=False)
    found: Mapping[str, Mapping[str, Any]] = fs.glob(pattern, detail=True)
    return found


def _unlisted(source: ExportSource, error: BaseException) -> ExportRefused:
    """The refusal of a whole source."""
    return ExportRefused(
        source.files,
        f"cannot be listed: {named(error)}",
        "check the URL, and that the fsspec package for its protocol is installed",
    )


def _is_local_url(url: str) -> bool:
    return "::" not in url and url.partition("://")[0] in LocalFileSystem.protocol


def _url_of(fs: Any, path: str, files: str) -> str:
    """A URL that tells a file from those of the same name on other hosts and in other archives."""
    url = str(fs.unstrip_protocol(path))
    first, chained, rest = files.partition("::")
    if chained:
        return f"{url}::{rest}" if "://" in first else url
    scheme, _, place = files.partition("://")
    host = place.partition("/")[0].rpartition("@")[2]
    lost = host and host not in str(fs._strip_protocol(f"{scheme}://{host}/file"))
    return f"{scheme}://{host}/{str(path).lstrip('/')}" if lost else url

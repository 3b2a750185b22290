"""Export files that are new to the store, read in batches in the order of their first stamps.

What is read lies in a scratch folder of the run until its batch has been worked through.
"""

from __future__ import annotations

import fcntl
import hashlib
import os
import shutil
import tempfile
from collections.abc import Iterator, Mapping, Sequence
from contextlib import contextmanager
from dataclasses import dataclass, replace
from pathlib import Path

from audit import exports
from audit.errors import AuditError, ExportRefused, Fault
from audit.records import ExportFile, ExportRead, ExportSource
from audit.workers import Serial, Workers

BATCH_CELLS = 100_000_000
"""Samples of a batch: about 1 to 2 GB of scratch, more only where a single file holds more."""

_IN_USE = "in-use"


@dataclass(frozen=True)
class NewFile:
    """A file the store has not taken as it is now, and how to read it.

    ``only``: the tags it is read again for; None: all, it is new.
    """

    file: ExportFile
    source: ExportSource
    only: frozenset[str] | None = None


@dataclass(frozen=True, eq=False)
class ReadResult:
    """A new file with what was read of it, or with the reason why it was refused."""

    new: NewFile
    read: ExportRead | None
    refused: ExportRefused | None
    scratch: Path


@dataclass(frozen=True, eq=False)
class _Task:
    new: NewFile
    wanted: Mapping[str, bool]
    scratch: Path
    threads: int


@dataclass(frozen=True)
class Seen:
    """What the store knows of a path: its size and stamp when it was last looked at.

    ``missing``: tags the register names now that it was not asked for then.
    """

    size: int
    stamp: str
    missing: frozenset[str] = frozenset()


@dataclass(frozen=True, eq=False)
class Found:
    """New files, those known as they are, sources that cannot be listed, files found twice,
    sources without a file, and files to be read again that are gone, with the tags."""

    new: list[NewFile]
    known: dict[str, NewFile]
    refused: list[ExportRefused]
    twice: list[Fault]
    empty: list[ExportSource]
    gone: dict[str, frozenset[str]]


def find(sources: Sequence[ExportSource], seen: Mapping[str, Seen]) -> Found:
    """Files whose size or modification stamp differ from what the store has seen.

    A file without a stamp counts as new each time. A known one is read again for tags it was not
    asked for. Of two sources that find the same file the first has it.
    """
    found = Found([], {}, [], [], [], {})
    met: dict[str, str] = {}
    paths: set[str] = set()
    for source in sources:
        try:
            files = exports.discover(source)
        except ExportRefused as refused:
            found.refused.append(refused)
            continue
        if not files:
            found.empty.append(source)
        for file in files:
            paths.add(file.path)
            first = met.setdefault(exports.same_file(file, source), source.name)
            if first == source.name:
                _sort_in(NewFile(file, source), seen.get(file.path), found)
            else:
                found.twice.append(_found_twice(file, source, first))
    if not found.refused:  # else files that cannot be listed would seem to be gone
        found.gone.update(
            {p: one.missing for p, one in seen.items() if one.missing and p not in paths}
        )
    return found


def _found_twice(file: ExportFile, source: ExportSource, first: str) -> Fault:
    return Fault(
        file.path,
        f"also found by [[exports]] '{source.name}'; it is read as '{first}'",
        "let the patterns under files exclude each other",
    )


def _sort_in(new: NewFile, seen: Seen | None, found: Found) -> None:
    file = new.file
    if not file.stamp or seen is None or (seen.size, seen.stamp) != (file.size, file.stamp):
        found.new.append(new)
        return
    found.known[file.path] = new
    if seen.missing:
        found.new.append(replace(new, only=seen.missing))


def read_again(
    known: Mapping[str, NewFile],
    asked: Mapping[str, frozenset[str]],
    wanted: Mapping[str, bool],
    scratch: Path,
) -> list[ReadResult]:
    """Files that are there as they were taken, read once more for some tags each, by path."""
    again = [replace(known[path], only=tags) for path, tags in asked.items() if path in known]
    tasks = [
        _Task(new, wanted, scratch / f"again-{len(asked)}-{number}.samples", 1)
        for number, new in enumerate(again)
    ]
    return [_read(task) for task in tasks]


@contextmanager
def scratch_folder(named: str, store_url: str) -> Iterator[Path]:
    """An empty folder for one run, in the folder ``named`` ("": the system's temporary one).

    What runs on the same store have left there is cleared, unless they still live.
    """
    mark = hashlib.sha256(f"{os.getuid()} {store_url}".encode()).hexdigest()[:16]
    parent = Path(named or tempfile.gettempdir())
    try:
        parent.mkdir(parents=True, exist_ok=True)
        for left in parent.glob(f"loopassay-{mark}-*"):
            if not left.is_symlink() and not _in_use(left):
                shutil.rmtree(left, ignore_errors=True)
        folder = Path(tempfile.mkdtemp(prefix=f"loopassay-{mark}-", dir=parent))
    except OSError as error:
        raise AuditError(
            f"no scratch folder can be made in {parent}: {error.strerror}",
            "name a folder that can be written as scratch in [intake] of site.toml",
        ) from error
    try:
        with (folder / _IN_USE).open("w") as mine:
            fcntl.flock(mine, fcntl.LOCK_EX)
            yield folder
    finally:
        shutil.rmtree(folder, ignore_errors=True)


def _in_use(folder: Path) -> bool:
    """Whether the run whose scratch folder this is still lives: the lock ends with its process."""
    try:
        with (folder / _IN_USE).open() as other:
            fcntl.flock(other, fcntl.LOCK_EX | fcntl.LOCK_NB)
    except BlockingIOError:
        return True
    except FileNotFoundError:
        return False
    return False


def batches(
    files: Sequence[NewFile],
    wanted: Mapping[str, bool],
    pool: Workers,
    scratch: Path,
    most_cells: int = BATCH_CELLS,
) -> Iterator[list[ReadResult]]:
    """Read the files by first stamp; a batch ends once it holds ``most_cells`` samples.

    A batch's scratch files are removed when the next one is asked for.
    """
    batch: list[ReadResult] = []
    cells = 0
    few = len(files) <= pool.cores
    reader, threads = (Serial(), pool.cores) if few else (pool, 1)
    tasks = [
        _Task(new, wanted, scratch / f"{number}.samples", threads)
        for number, new in enumerate(_by_first_stamp(files, pool))
    ]
    for result in reader.map(_read, tasks):
        batch.append(result)
        cells += 0 if result.read is None else result.read.account.taken
        if cells >= most_cells:
            yield batch
            clear(batch)
            batch, cells = [], 0
    if batch:
        yield batch
        clear(batch)


def clear(batch: Sequence[ReadResult]) -> None:
    """Remove what a batch that is worked through has on scratch."""
    for result in batch:
        result.scratch.unlink(missing_ok=True)


def _by_first_stamp(files: Sequence[NewFile], pool: Workers) -> list[NewFile]:
    """Earliest first; a file whose first stamp cannot be told goes last, to be refused there."""
    stamps = list(pool.map(_first_stamp, files))
    order = sorted(
        range(len(files)),
        key=lambda i: (stamps[i] is None, stamps[i] or 0, files[i].file.path.encode()),
    )
    return [files[i] for i in order]


def _first_stamp(new: NewFile) -> int | None:
    return exports.first_stamp(new.file, new.source)


def _read(task: _Task) -> ReadResult:
    new = task.new
    try:
        read = exports.read(new.file, new.source, task.wanted, task.scratch, task.threads)
    except ExportRefused as refused:
        task.scratch.unlink(missing_ok=True)
        return ReadResult(new, None, refused, task.scratch)
    return ReadResult(new, read, None, task.scratch)

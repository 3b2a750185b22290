"""Export files that are new to the store, read in batches in the order of their first stamps."""

from __future__ import annotations

from collections.abc import Iterator, Mapping, Sequence
from dataclasses import dataclass

from audit import exports
from audit.errors import ExportRefused
from audit.records import ExportFile, ExportRead, ExportSource
from audit.workers import Workers

BATCH_CELLS = 20_000_000
"""Cells taken before a batch is worked through: about 0.4 GB of samples."""


@dataclass(frozen=True)
class NewFile:
    """A file the store has not taken as it is now, and how to read it."""

    file: ExportFile
    source: ExportSource


@dataclass(frozen=True, eq=False)
class ReadResult:
    """A new file with what was read of it, or with the reason why it was refused."""

    file: ExportFile
    read: ExportRead | None
    refused: ExportRefused | None


@dataclass(frozen=True, eq=False)
class _Task:
    new: NewFile
    wanted: Mapping[str, bool]


@dataclass(frozen=True, eq=False)
class Found:
    """New files, the number of files known, and the sources that cannot be listed."""

    new: list[NewFile]
    known: int
    refused: list[ExportRefused]


def find(sources: Sequence[ExportSource], seen: Mapping[str, tuple[int, str]]) -> Found:
    """Files whose size or modification stamp differ from what the store has seen.

    ``seen``: path -> (size, stamp). A file without a stamp counts as new each time.
    """
    found = Found([], 0, [])
    known = 0
    for source in sources:
        try:
            files = exports.discover(source)
        except ExportRefused as refused:
            found.refused.append(refused)
            continue
        new = [f for f in files if not f.stamp or seen.get(f.path) != (f.size, f.stamp)]
        found.new.extend(NewFile(file, source) for file in new)
        known += len(files) - len(new)
    return Found(found.new, known, found.refused)


def batches(
    files: Sequence[NewFile],
    wanted: Mapping[str, bool],
    pool: Workers,
    most_cells: int = BATCH_CELLS,
) -> Iterator[list[ReadResult]]:
    """Read the files by first stamp; a batch ends once it holds ``most_cells`` samples."""
    batch: list[ReadResult] = []
    cells = 0
    for result in pool.map(_read, [_Task(new, wanted) for new in _by_first_stamp(files, pool)]):
        batch.append(result)
        cells += 0 if result.read is None else result.read.account.taken
        if cells >= most_cells:
            yield batch
            batch, cells = [], 0
    if batch:
        yield batch


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
    try:
        read = exports.read(task.new.file, task.new.source, task.wanted)
    except ExportRefused as refused:
        return ReadResult(task.new.file, None, refused)
    return ReadResult(task.new.file, read, None)

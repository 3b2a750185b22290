"""A Sheet comes in, wide or narrow; samples of the wanted tags and the account go out."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass
from typing import Any

import numpy as np
import pyarrow as pa
import pyarrow.compute as pc
from numpy.typing import NDArray

from audit.errors import ExportRefused, Fault
from audit.exports import cells, clock, codes
from audit.exports.cells import Cell, Cells
from audit.exports.clock import Stamps, Told
from audit.exports.sheet import Sheet
from audit.exports.tally import Tally
from audit.records import CellAccount, ExportSource, RawSamples, Samples

_NO_TIME = {
    "bad_time": Told.BAD,
    "ambiguous_time": Told.REPEATED,
    "no_such_time": Told.MISSING,
}

Whole = NDArray[np.int64]
Flag = NDArray[np.bool_]


@dataclass(frozen=True, eq=False)
class Taken:
    """What one sheet gave. ``tags``: all tags it names, also unwanted ones."""

    tags: tuple[str, ...]
    first_us: int | None
    last_us: int | None
    columns: Mapping[str, RawSamples]
    account: CellAccount
    faults: tuple[Fault, ...]


def taken(sheet: Sheet, source: ExportSource, wanted: Mapping[str, bool]) -> Taken:
    """The samples of the wanted tags (True: a mode tag, its text is kept)."""
    return (_wide if source.layout == "wide" else _narrow)(sheet, source, wanted)


def _wide(sheet: Sheet, source: ExportSource, wanted: Mapping[str, bool]) -> Taken:
    tags = tuple(name for name in sheet.names if name != source.time)
    tally = Tally(sheet)
    tally.ragged(len(tags))
    stamps = _stamps(sheet, source, None)
    rows = _timed(stamps, sheet, source, tally, len(tags))
    used = sorted(tag for tag in tags if tag in wanted)
    tally.unregistered += len(rows) * (len(tags) - len(used))
    us, good = stamps.us[rows], np.ones(len(rows), np.bool_)
    columns = {}
    for tag in used:
        value = _of(sheet.columns[tag], rows)
        part = _Part(tag, tag, value, us, good, rows)
        columns[tag] = _column(part, _cells(value, wanted[tag], source), tally)
    read = (sheet.rows + sheet.ragged) * len(tags)
    return _result(tags, us, columns, tally, read)


def _narrow(sheet: Sheet, source: ExportSource, wanted: Mapping[str, bool]) -> Taken:
    tally = Tally(sheet)
    tally.ragged(1)
    tags, code = _tags(sheet.columns[source.tag])
    stamps = _stamps(sheet, source, code)
    timed = _timed(stamps, sheet, source, tally, 1)
    tally.refuse("no_tag", timed[code[timed] < 0], lambda row: "", source.tag)
    rows = timed[code[timed] >= 0]
    used = np.array([tag in wanted for tag in tags] or [False], np.bool_)[code[rows]]
    tally.unregistered += int(np.count_nonzero(~used))
    rows, good = _qualities(sheet, source, rows[used], tally, lambda row: tags[code[row]])
    order = np.argsort(code[rows], kind="stable")
    rows, good = rows[order], good[order]
    value = _of(sheet.columns[source.value], rows)
    whole = _Part("", source.value, value, stamps.us[rows], good, rows)
    columns = _by_tag(whole, tags, code[rows], source, wanted, tally)
    return _result(tags, stamps.us[timed], columns, tally, sheet.rows + sheet.ragged)


def _by_tag(
    whole: _Part,
    tags: tuple[str, ...],
    code: Whole,
    source: ExportSource,
    wanted: Mapping[str, bool],
    tally: Tally,
) -> dict[str, RawSamples]:
    """Cells sorted by their tag's code are cut into tags; numbers are read all at once."""
    is_mode = np.array([wanted.get(tag, False) for tag in tags] or [False], np.bool_)
    numbers = _cells(_without(whole.value, is_mode[code]), False, source)
    edges = np.searchsorted(code, np.arange(len(tags) + 1)).tolist()
    columns = {}
    for at, tag in sorted(enumerate(tags), key=lambda pair: pair[1]):
        start, stop = edges[at], edges[at + 1]
        if start < stop:
            part = whole.part(tag, start, stop)
            read = _cells(part.value, True, source) if is_mode[at] else numbers.part(start, stop)
            columns[tag] = _column(part, read, tally)
    return columns


@dataclass(frozen=True, eq=False)
class _Part:
    """The cells of one tag [n]: values, stamps, good by quality, rows of the sheet."""

    tag: str
    name: str
    value: Any
    us: Whole
    good: Flag
    rows: Whole

    def part(self, tag: str, start: int, stop: int) -> _Part:
        return _Part(
            tag,
            self.name,
            self.value.slice(start, stop - start),
            self.us[start:stop],
            self.good[start:stop],
            self.rows[start:stop],
        )


def _stamps(sheet: Sheet, source: ExportSource, groups: Whole | None) -> Stamps:
    try:
        return clock.stamps(sheet.columns[source.time], source, groups)
    except ValueError as error:
        raise ExportRefused(
            sheet.path,
            f"time column not readable: {error}",
            "declare time_format in site.toml as the file has it",
        ) from error


def _timed(
    stamps: Stamps, sheet: Sheet, source: ExportSource, tally: Tally, cells_each: int
) -> Whole:
    """Rows with a stamp; the others' cells are refused, whatever they hold."""
    column = sheet.columns[source.time]
    refused = {reason: np.flatnonzero(stamps.told == told) for reason, told in _NO_TIME.items()}
    fine = np.flatnonzero(stamps.told == Told.FINE)
    stray = clock.strays(stamps.us[fine])
    refused["stray_time"] = fine[stray]
    for reason, rows in refused.items():
        tally.refuse(
            reason, rows, lambda row: column[row].as_py(), source.time, cells_each=cells_each
        )
    return fine[~stray]


def _tags(column: Any) -> tuple[tuple[str, ...], Whole]:
    """Tag names as the file gives them, stripped, and each row's index into them (-1: none)."""
    coded = cells.as_texts(column).dictionary_encode()
    names = [text.strip() for text in coded.dictionary.to_pylist()]
    tags = tuple(dict.fromkeys(name for name in names if name))
    place = {tag: at for at, tag in enumerate(tags)}
    index = np.array([place.get(name, -1) for name in names] or [-1], np.int64)
    code = pc.fill_null(coded.indices, -1).to_numpy(zero_copy_only=False)
    return tags, np.where(code < 0, -1, index[code])


def _qualities(
    sheet: Sheet, source: ExportSource, rows: Whole, tally: Tally, tag_of: Any
) -> tuple[Whole, Flag]:
    """Rows whose quality can be read, and which of them are good."""
    if source.quality is None:
        return rows, np.ones(len(rows), np.bool_)
    column = cells.as_texts(sheet.columns[source.quality])
    if source.quality_scheme != "words":  # a code that came as 192.0 is the code 192
        column = pc.replace_substring_regex(column, r"\.0*$", "")
    coded = pc.fill_null(column, "").dictionary_encode()
    known = [codes.is_good(text, source) for text in coded.dictionary.to_pylist()]
    code = coded.indices.to_numpy(zero_copy_only=False)[rows]
    readable = np.array([good is not None for good in known] or [True], np.bool_)[code]
    tally.refuse(
        "no_such_quality", rows[~readable], lambda row: column[row].as_py(), source.quality, tag_of
    )
    good = np.array([good is True for good in known] or [True], np.bool_)[code]
    return rows[readable], good[readable]


def _of(column: Any, rows: Whole) -> Any:
    if len(rows) == len(column) and (len(rows) == 0 or bool((np.diff(rows) == 1).all())):
        return column
    return column.take(pa.array(rows))


def _cells(value: Any, is_mode: bool, source: ExportSource) -> Cells:
    return (cells.words if is_mode else cells.numbers)(value, source.decimal)


def _without(value: Any, left_out: Flag) -> Any:
    """Nothing in the left out cells, so that texts among numbers do not slow the others down."""
    if not left_out.any() or not pa.types.is_string(value.type):
        return value
    return pc.if_else(pa.array(left_out), pa.scalar(None, value.type), value)


def _column(part: _Part, read: Cells, tally: Tally) -> RawSamples:
    """Samples of one tag; a cell of bad quality is a sample without value, whatever it holds."""
    blank = part.good & (read.held == Cell.BLANK)
    refused = part.good & (read.held == Cell.NOT_A_NUMBER)
    tally.blank += int(np.count_nonzero(blank))
    at = np.flatnonzero(refused)
    if len(at):
        place = dict(zip(part.rows[at].tolist(), at.tolist(), strict=True))
        tally.refuse(
            "not_a_number",
            part.rows[at],
            lambda row: part.value[place[row]].as_py(),
            part.name,
            lambda row: part.tag,
        )
    kept = ~(blank | refused)
    samples = settled(
        part.us[kept], np.where(part.good, read.value, np.nan)[kept], part.good[kept], tally
    )
    return _lean(RawSamples(samples, read.texts))


def settled(us: Whole, value: NDArray[np.float64], good: Flag, tally: Tally) -> Samples:
    """Samples [n] in the order of the file, sorted; of several at one stamp the last row holds.

    The others count as ``duplicate`` where they say the same, else as ``replaced``.
    """
    if len(us) > 1 and not bool((us[1:] > us[:-1]).all()):
        order = np.argsort(us, kind="stable")
        us, value, good = us[order], value[order], good[order]
        last = np.append(us[1:] != us[:-1], True)
        holder = np.flatnonzero(last)[np.cumsum(last) - last]
        same = (value == value[holder]) | (~good & ~good[holder])
        tally.duplicate += int(np.count_nonzero(~last & same))
        tally.replaced += int(np.count_nonzero(~last & ~same))
        us, value, good = us[last], value[last], good[last]
    number_good = int(np.count_nonzero(good))
    tally.taken += number_good
    tally.bad_quality += len(us) - number_good
    return Samples(us, value, good)


def _lean(raw: RawSamples) -> RawSamples:
    """Without the texts that no kept sample uses."""
    if raw.texts is None:
        return raw
    good = raw.samples.good
    used = np.unique(raw.samples.value[good]).astype(np.int64)
    value = raw.samples.value.copy()
    value[good] = np.searchsorted(used, value[good])
    texts = tuple(raw.texts[at] for at in used.tolist())
    return RawSamples(Samples(raw.samples.t_us, value, good), texts)


def _result(
    tags: tuple[str, ...],
    us: Whole,
    columns: Mapping[str, RawSamples],
    tally: Tally,
    read: int,
) -> Taken:
    return Taken(
        tags,
        int(us.min()) if len(us) else None,
        int(us.max()) if len(us) else None,
        {tag: raw for tag, raw in columns.items() if len(raw.samples)},
        tally.account(read),
        tally.faults(),
    )

"""A piece of a file comes in, wide or narrow; the samples of the wanted tags in it go out."""

from __future__ import annotations

from collections.abc import Callable, Mapping
from dataclasses import dataclass

import numpy as np
import pyarrow.compute as pc
from numpy.typing import NDArray

from audit.errors import ExportRefused
from audit.exports import clock, codes
from audit.exports.cells import Cell, Cells
from audit.exports.clock import Stamps, Told
from audit.exports.sheet import Column, Sheet, coded_texts
from audit.exports.sofar import SoFar
from audit.records import ExportSource
from audit.scratch import Part

_NO_TIME = {
    "bad_time": Told.BAD,
    "ambiguous_time": Told.REPEATED,
    "no_such_time": Told.MISSING,
}

Whole = NDArray[np.int64]
Flag = NDArray[np.bool_]


def parts(
    sheet: Sheet, source: ExportSource, wanted: Mapping[str, bool], so_far: SoFar
) -> list[Part]:
    """The samples of the wanted tags (True: a mode tag, its text is kept), by tag."""
    return (_wide if source.layout == "wide" else _narrow)(sheet, source, wanted, so_far)


def _wide(
    sheet: Sheet, source: ExportSource, wanted: Mapping[str, bool], so_far: SoFar
) -> list[Part]:
    tags = [name for name in sheet.names if name != source.time]
    so_far.tally.piece(sheet, len(tags))
    so_far.numbered(tags)
    stamps = _stamps(sheet, source, None, so_far)
    rows = _timed(stamps, sheet, source, so_far, len(tags))
    used = sorted(tag for tag in tags if tag in wanted)
    so_far.tally.unregistered += len(rows) * (len(tags) - len(used))
    us = stamps.us[rows] if len(rows) < sheet.rows else stamps.us
    found = []
    for tag in used:
        column = sheet.columns[tag]
        column = column.take(rows) if len(rows) < sheet.rows else column
        read = column.words(source) if wanted[tag] else column.numbers(source)
        found.append(_part(_Cells(tag, tag, column, us, None, rows), read, sheet, so_far))
    return found


def _narrow(
    sheet: Sheet, source: ExportSource, wanted: Mapping[str, bool], so_far: SoFar
) -> list[Part]:
    so_far.tally.piece(sheet, 1)
    names, code = _tags(sheet.columns[source.tag])
    number = so_far.numbered(names)
    group = np.where(code < 0, -1, np.append(number, -1)[code])
    stamps = _stamps(sheet, source, group, so_far)
    timed = _timed(stamps, sheet, source, so_far, 1)
    so_far.tally.refuse(sheet, "no_tag", timed[code[timed] < 0], lambda row: "", source.tag)
    rows = timed[code[timed] >= 0]
    used = np.array([name in wanted for name in names] or [False], np.bool_)[code[rows]]
    so_far.tally.unregistered += int(np.count_nonzero(~used))
    rows, good = _qualities(sheet, source, rows[used], so_far, lambda row: names[code[row]])
    rows, good = _in_order(code, len(names), rows, good)
    column = sheet.columns[source.value].take(rows)
    every = _Cells("", source.value, column, stamps.us[rows], good, rows)
    return _by_tag(every, names, code[rows], source, wanted, sheet, so_far)


def _in_order(code: Whole, tags: int, rows: Whole, good: Flag) -> tuple[Whole, Flag]:
    """Rows, and which are good, sorted by their tag's code; those of a tag stay as they stand."""
    own = code[rows]
    small = own.astype(np.int16) if tags < 1 << 15 else own  # numpy sorts these by their digits
    order = np.argsort(small, kind="stable")
    return rows[order], good[order]


def _by_tag(
    every: _Cells,
    names: tuple[str, ...],
    code: Whole,
    source: ExportSource,
    wanted: Mapping[str, bool],
    sheet: Sheet,
    so_far: SoFar,
) -> list[Part]:
    """Cells sorted by their tag's code are cut into tags; numbers are read all at once."""
    is_mode = np.array([wanted.get(name, False) for name in names] or [False], np.bool_)
    plain = np.flatnonzero(~is_mode[code])
    some_modes = len(plain) < len(code)
    numbers = (every.column.take(plain) if some_modes else every.column).numbers(source)
    place = np.cumsum(~is_mode[code]) - 1
    edges = np.searchsorted(code, np.arange(len(names) + 1)).tolist()
    found = []
    for at, tag in sorted(enumerate(names), key=lambda pair: pair[1]):
        start, stop = edges[at], edges[at + 1]
        if start < stop:
            part = every.of(tag, start, stop)
            if is_mode[at]:
                read = part.column.words(source)
            else:
                read = numbers.part(int(place[start]), int(place[stop - 1]) + 1)
            found.append(_part(part, read, sheet, so_far))
    return found


@dataclass(frozen=True, eq=False)
class _Cells:
    """The cells of one tag [n]: values, stamps, good by quality (None: all), rows of the sheet."""

    tag: str
    name: str
    column: Column
    us: Whole
    good: Flag | None
    rows: Whole

    def of(self, tag: str, start: int, stop: int) -> _Cells:
        return _Cells(
            tag,
            self.name,
            self.column.take(np.arange(start, stop)),
            self.us[start:stop],
            None if self.good is None else self.good[start:stop],
            self.rows[start:stop],
        )


def _stamps(sheet: Sheet, source: ExportSource, groups: Whole | None, so_far: SoFar) -> Stamps:
    column = sheet.columns[source.time].arrow()
    try:
        return clock.stamps(column, source, groups, so_far.rows(sheet))
    except ValueError as error:
        raise ExportRefused(
            sheet.path,
            f"time column not readable: {error}",
            "declare time_format in site.toml as the file has it",
        ) from error


def _timed(
    stamps: Stamps, sheet: Sheet, source: ExportSource, so_far: SoFar, cells_each: int
) -> Whole:
    """Rows with a stamp; the others' cells are refused, whatever they hold."""
    column = sheet.columns[source.time]
    refused = {reason: np.flatnonzero(stamps.told == told) for reason, told in _NO_TIME.items()}
    fine = np.flatnonzero(stamps.told == Told.FINE)
    us = stamps.us[fine] if len(fine) < len(stamps.us) else stamps.us
    stray = so_far.astray(us)
    refused["stray_time"] = fine[stray]
    for reason, rows in refused.items():
        so_far.tally.refuse(sheet, reason, rows, column.shown, source.time, cells_each=cells_each)
    so_far.cover(us if not len(refused["stray_time"]) else us[~stray])
    return fine[~stray]


def _tags(column: Column) -> tuple[tuple[str, ...], Whole]:
    """Tag names as the file gives them, stripped, and each row's index into them (-1: none)."""
    coded = coded_texts(column.arrow())
    names = [(text or "").strip() for text in coded.dictionary.to_pylist()]
    tags = tuple(dict.fromkeys(name for name in names if name))
    place = {tag: at for at, tag in enumerate(tags)}
    index = np.array([place.get(name, -1) for name in names] or [-1], np.int64)
    code = pc.fill_null(coded.indices, -1).to_numpy(zero_copy_only=False)
    return tags, np.where(code < 0, -1, index[code])


def _qualities(
    sheet: Sheet,
    source: ExportSource,
    rows: Whole,
    so_far: SoFar,
    tag_of: Callable[[int], str],
) -> tuple[Whole, Flag]:
    """Rows whose quality can be read, and which of them are good."""
    if source.quality is None:
        return rows, np.ones(len(rows), np.bool_)
    column = sheet.columns[source.quality]
    coded = coded_texts(column.arrow())
    texts = [text or "" for text in coded.dictionary.to_pylist()]
    if source.quality_scheme != "words":  # a code that came as 192.0 is the code 192
        texts = [codes.whole(text) for text in texts]
    known = [codes.is_good(text, source) for text in [*texts, ""]]
    code = pc.fill_null(coded.indices, len(texts)).to_numpy(zero_copy_only=False)[rows]
    readable = np.array([good is not None for good in known], np.bool_)[code]
    so_far.tally.refuse(
        sheet, "no_such_quality", rows[~readable], column.shown, source.quality, tag_of
    )
    good = np.array([good is True for good in known], np.bool_)[code]
    return rows[readable], good[readable]


def _part(own: _Cells, read: Cells, sheet: Sheet, so_far: SoFar) -> Part:
    """Samples of one tag; a cell of bad quality is a sample without value, whatever it holds."""
    value = read.value
    if read.texts is not None and len(read.texts):
        numbers = so_far.word_numbers(own.tag, read.texts)
        if numbers is None:
            return _no_mode(own, sheet, so_far)
        value = numbers[value.astype(np.int64)]
    all_good = own.good is None or bool(own.good.all())
    if all_good and (read.all_values or not read.held.any()):
        return Part(own.tag, own.us, value)
    good = np.ones(len(value), np.bool_) if own.good is None else own.good
    blank = good & (read.held == Cell.BLANK)
    refused = good & (read.held == Cell.NOT_A_NUMBER)
    so_far.tally.blank += int(np.count_nonzero(blank))
    at = np.flatnonzero(refused)
    if len(at):
        place = dict(zip(own.rows[at].tolist(), at.tolist(), strict=True))
        so_far.tally.refuse(
            sheet,
            "not_a_number",
            own.rows[at],
            lambda row: own.column.shown(place[row]),
            own.name,
            lambda row: own.tag,
        )
    kept = ~(blank | refused)
    value = np.where(good, value, np.nan)[kept]
    return Part(own.tag, own.us[kept], value, int(np.count_nonzero(~good[kept])))


def _no_mode(own: _Cells, sheet: Sheet, so_far: SoFar) -> Part:
    """Nothing of a tag whose texts are no modes; its cells are refused."""
    place = dict(zip(own.rows[:1].tolist(), [0], strict=False))
    so_far.tally.refuse(
        sheet,
        "no_mode",
        own.rows,
        lambda row: own.column.shown(place.get(row, 0)),
        own.name,
        lambda row: own.tag,
    )
    return Part(own.tag, own.us[:0], np.empty(0))


def settled(
    us: Whole, value: NDArray[np.float64], so_far: SoFar
) -> tuple[Whole, NDArray[np.float64]]:
    """Samples [n] in the order of the file, sorted; of several at one stamp the last row holds.

    A value that is not good is NaN. The others count as ``duplicate`` where they say the same, else
    as ``replaced``.
    """
    order = np.argsort(us, kind="stable")
    us, value = us[order], value[order]
    last = np.append(us[1:] != us[:-1], True)
    holder = np.flatnonzero(last)[np.cumsum(last) - last]
    same = (value == value[holder]) | (np.isnan(value) & np.isnan(value[holder]))
    so_far.tally.duplicate += int(np.count_nonzero(~last & same))
    so_far.tally.replaced += int(np.count_nonzero(~last & ~same))
    return us[last], value[last]

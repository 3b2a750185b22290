"""CSV files read piece by piece: the same cells as the file read as a whole, to the last bit."""

import io
from collections.abc import Mapping, Sequence
from dataclasses import replace
from typing import Any

import numba
import numpy as np
import pytest
from hypothesis import example, given, settings
from hypothesis import strategies as st

from audit.errors import ExportRefused
from audit.exports import cells, csv_compiled, csv_file, csv_scan
from audit.exports.cells import Cell
from audit.exports.csv_columns import CodedColumn, ParsedColumn
from audit.exports.sheet import Sheet
from audit.records import ExportSource, FileLimits
from reference import whole_csv

WANTED = {"A": False, "B": False, "M": True, "absent": False}
WIDE = ExportSource("dcs", "*")
NARROW = replace(WIDE, layout="narrow", quality="quality")


def read(
    data: bytes | str,
    source: ExportSource = WIDE,
    wanted: Mapping[str, bool] = WANTED,
    threads: int = 1,
    piece_bytes: int = 32,
) -> list[Sheet]:
    content = data.encode() if isinstance(data, str) else data
    stream = io.BytesIO(content)
    return list(csv_file.pieces(stream, source, wanted, "a.csv", threads, piece_bytes))


def refused(data: bytes | str, source: ExportSource = WIDE, **how: Any) -> ExportRefused:
    with pytest.raises(ExportRefused) as caught:
        read(data, source, **how)
    return caught.value


def texts(sheet: Sheet, name: str) -> list[str | None]:
    column: list[str | None] = sheet.columns[name].arrow().to_pylist()
    return column


def words(found: cells.Cells) -> list[str | None]:
    assert found.texts is not None
    assert list(found.texts) == sorted(set(found.texts))
    return [
        found.texts[int(value)] if held == Cell.VALUE else None
        for value, held in zip(found.value.tolist(), found.held.tolist(), strict=True)
    ]


def whole_of(
    data: bytes, source: ExportSource, wanted: Mapping[str, bool]
) -> Sheet | ExportRefused:
    try:
        return whole_csv.sheet(data, source, wanted, "a.csv")
    except ExportRefused as error:
        return error


def check_same(
    data: bytes, source: ExportSource, wanted: Mapping[str, bool], threads: int, piece_bytes: int
) -> None:
    """The pieces hold what the whole file holds; or both refuse it."""
    whole = whole_of(data, source, wanted)
    if isinstance(whole, ExportRefused):
        found = refused(data, source, wanted=wanted, threads=threads, piece_bytes=piece_bytes)
        assert (found.reason, found.line) == (whole.reason, whole.line)
        return
    sheets = read(data, source, wanted, threads, piece_bytes)
    assert [sheet.names for sheet in sheets] == [whole.names] * len(sheets)
    first = np.cumsum([0, *(sheet.rows for sheet in sheets)]).tolist()
    assert [sheet.first_row for sheet in sheets] == first[:-1]
    assert first[-1] == whole.rows
    lines = [sheet.line_of(row) for sheet in sheets for row in range(sheet.rows)]
    assert lines == [whole.line_of(row) for row in range(whole.rows)]
    assert sum(sheet.ragged for sheet in sheets) == whole.ragged
    ragged = [row for sheet in sheets for row in sheet.ragged_rows]
    assert ragged[:5] == list(whole.ragged_rows)
    for name in whole.columns:
        check_column(name, sheets, whole, source)


def check_column(name: str, sheets: Sequence[Sheet], whole: Sheet, source: ExportSource) -> None:
    array = whole.columns[name].arrow()
    assert [text for sheet in sheets for text in texts(sheet, name)] == array.to_pylist()
    number, word = cells.read_numbers(array, source), cells.words(array, source.decimal)
    found = [sheet.columns[name].numbers(source) for sheet in sheets]
    value = np.concatenate([part.value for part in found])
    assert np.array_equal(value.view(np.int64), number.value.view(np.int64))
    assert np.array_equal(np.concatenate([part.held for part in found]), number.held)
    assert all(bool((part.held == 0).all()) for part in found if part.all_values)
    told = [text for sheet in sheets for text in words(sheet.columns[name].words(source))]
    assert told == words(word)
    for sheet in sheets:
        column, back = sheet.columns[name], np.arange(sheet.rows)[::-2].copy()
        part = column.take(back)
        assert part.arrow().to_pylist() == [column.shown(int(row)) for row in back]
        assert np.array_equal(part.numbers(source).value, column.numbers(source).value[back])
        assert words(part.words(source)) == [words(column.words(source))[row] for row in back]


CELLS = [
    *("", "0", "1", "-1", "+3", "50", "1.5", "-2.50", ".5", "4.", ".", "-", "+", "--1", "1e3"),
    *("1e", "1e+", "2E-3", "1e400", "1e-400", "-1e30", "1.1e30", "3.4e38", "NaN", "inf", "x"),
    *("9007199254740993", "12345678901234567890", "123456789012345678901234567890", "0.1"),
    *("0.30000000000000004", "5e-324", "-0", "-0.0", "007", "1,5", "1.000,5", "1,234.5", "12,34"),
    *(" ", " 1", "1 ", "\t2", "AUTO", "MAN", "auto", "TRUE", "false", "ein Wörtchen", "Ⅷ", "٣"),
    *('"1"', '"1.5"', '""', '" "', '"a,b"', '"a;b"', '"a""b"', '"x\ny"', '"x\r\ny"', '"x\ry"'),
    *('"7"x', '"a"b"c', '12" pipe', "'q'", '"1,5"', '"1,234"', '"AUTO"', '"1,234.5"', "1\u00a0000"),
]
CELL = st.sampled_from(CELLS)
NEWLINE = st.sampled_from(["\n", "\n", "\n", "\r\n", "\r\n", "\r", "\n\n", "\r\n\r\n", "\n\r"])
ROW = st.tuples(st.lists(CELL, min_size=4, max_size=4), NEWLINE)
RAGGED = st.tuples(st.lists(CELL, min_size=1, max_size=6), NEWLINE)
ROWS = st.lists(st.one_of(ROW, ROW, ROW, RAGGED), max_size=14)
SOURCES = st.sampled_from(
    [
        WIDE,
        replace(WIDE, thousands=","),
        replace(WIDE, delimiter=";", decimal=","),
        replace(WIDE, delimiter=";", decimal=",", thousands="."),
        replace(WIDE, delimiter=";", thousands="\u00a0", true_words=("Auto",), false_words=("x",)),
        replace(WIDE, delimiter="\t"),
    ]
)


def content(
    rows: Sequence[tuple[Sequence[str], str]], header: str, source: ExportSource, end: str
) -> bytes:
    mark = source.delimiter
    body = "".join(mark.join(row) + newline for row, newline in rows)
    return (header.replace(",", mark) + "\n" + body + end).encode()


@settings(max_examples=300, deadline=None)
@given(
    ROWS,
    SOURCES,
    st.sampled_from(
        [
            "time,A,B,M",
            '"time",other,A, M ',
            "\ufefftime,M,x,y",
            '\ufeff"time",A,B,x',
            '\n\ntime,"A",B,"n\n"',
        ]
    ),
    st.sampled_from(["", "", "1,2", '3,"4', "\r", "5,6,7,8"]),
    st.integers(1, 2),
    st.integers(1, 300),
)
def test_wide_pieces_hold_what_the_whole_file_holds(
    rows: list[tuple[list[str], str]],
    source: ExportSource,
    header: str,
    end: str,
    threads: int,
    piece_bytes: int,
) -> None:
    source = replace(source, time="time")
    check_same(content(rows, header, source, end), source, WANTED, threads, piece_bytes)


@settings(max_examples=200, deadline=None)
@given(ROWS, SOURCES, st.integers(1, 2), st.integers(1, 300))
def test_narrow_pieces_hold_what_the_whole_file_holds(
    rows: list[tuple[list[str], str]], source: ExportSource, threads: int, piece_bytes: int
) -> None:
    source = replace(source, layout="narrow", quality="quality")
    data = content(rows, "timestamp,tag,value,quality", source, "")
    check_same(data, source, WANTED, threads, piece_bytes)


@settings(max_examples=200, deadline=None)
@given(st.binary(max_size=80), st.integers(1, 2), st.integers(1, 60))
@example(b"\xff", 1, 10)
@example(b"1,2,3\n\0", 1, 3)
def test_any_bytes_behind_a_header(body: bytes, threads: int, piece_bytes: int) -> None:
    check_same(b"timestamp,A,M\n" + body, WIDE, WANTED, threads, piece_bytes)


def by_kernel(sheet: Sheet, name: str) -> bool:
    column = sheet.columns[name]
    return isinstance(column, ParsedColumn) and column.block is not None


def test_what_the_kernel_reads_and_what_it_leaves() -> None:
    head = "timestamp,A,M\r\n"
    plain = [
        "t,1,AUTO\n",
        't,"1","AUTO"\r\n\r\n',
        't,x,12" pipe\n',
        't,"a,b",M\n',
        "t,1\n",
        " , ,\n",
        "t,°C,Ü\n",
    ]
    for row in plain:
        (sheet,) = read(head + row)
        assert by_kernel(sheet, "A"), row
    for row in ["t,1,AUTO\rt,2,MAN\n", 't,1,"a""b"\n', 't,1,"a\nb"\n', 't,"1"2,M\n']:
        (sheet,) = read(head + row)
        assert not by_kernel(sheet, "A"), row


def test_a_text_with_the_delimiter_is_no_two_cells() -> None:
    rows = ['"a,b","p,q",1,x', '"a,b","p,q",1,x', "a,b,p,q", 'a,"p,q",1,x', "p,q,2,x"]
    (sheet,) = read("timestamp,M,A,other\n" + "\n".join(rows), piece_bytes=1000)
    assert by_kernel(sheet, "A")
    assert texts(sheet, "timestamp") == ["a,b", "a,b", "a", "a", "p"]
    assert texts(sheet, "M") == ["p,q", "p,q", "b", "p,q", "q"]
    assert sheet.columns["A"].numbers(WIDE).value.tolist() == [1.0, 1.0, 0.0, 1.0, 2.0]


NUMERALS = st.one_of(
    st.floats(allow_nan=False, min_value=-1e30, max_value=1e30).map(repr),
    st.decimals(-(10**12), 10**12, places=6).map(str),
    st.tuples(st.integers(0, 10**19 - 1), st.integers(-70, 11)).map(lambda it: f"{it[0]}e{it[1]}"),
    st.tuples(st.integers(0, 2**64), st.integers(0, 40)).map(
        lambda it: f"{it[0] / 2 ** it[1]:.25f}"[:20].rstrip(".")
    ),
    st.tuples(st.integers(2**53, 2**54 - 1), st.sampled_from([2, 4, 5, 10, 100])).map(
        lambda it: f"{it[0] * 2 + 1}.{'0' * (it[1] % 3)}"
    ),
)


@settings(max_examples=400, deadline=None)
@given(st.lists(NUMERALS, min_size=1, max_size=40))
@example(["9007199254740993", "9007199254740995.0", "18014398509481986", "9.5e22", "1.7e-7"])
@example(["8.41e21", "9.11e23", "6929495644600919.5", "1448997445238699e-4", "0e99", "-0e-99"])
def test_numbers_are_the_nearest_doubles(numerals: list[str]) -> None:
    # Python's float() is correctly rounded (IEEE 754; David Gay's algorithm)
    (sheet,) = read("timestamp,A\n" + "".join(f"t,{text}\n" for text in numerals),
                    piece_bytes=1 << 16)  # fmt: skip
    assert by_kernel(sheet, "A")
    found = sheet.columns["A"].numbers(WIDE)
    numbers = [float(text) for text in numerals]
    assert [repr(value) for value in found.value.tolist() if abs(value) > 0] == [
        repr(number) for number in numbers if 0 < abs(number) <= 1e30
    ]
    assert found.held.tolist() == [
        Cell.VALUE if abs(number) <= 1e30 else Cell.NOT_A_NUMBER for number in numbers
    ]


def test_many_different_texts() -> None:
    # more than the smallest and the next table of texts hold, and more than any does
    for count, by in ((3_000, True), (70_000, True), (530_000, False)):
        body = "".join(f"t,x{at}\n" for at in range(count))
        (sheet,) = read("timestamp,M\n" + body, piece_bytes=1 << 24)
        column = sheet.columns["M"]
        assert isinstance(column, CodedColumn)
        assert column.all_used is False
        assert column.shown(count - 1) == f"x{count - 1}"
        assert len(column.arrow().dictionary) == count
        stamps = sheet.columns["timestamp"]
        assert isinstance(stamps, CodedColumn)
        assert stamps.arrow().dictionary.to_pylist() == ["t"]
        assert stamps.all_used is by


def test_a_column_that_keeps_its_text() -> None:
    (sheet,) = read("timestamp,M,A\n" + "t,1.0,2\n" * 3 + "t,1.0,\n", piece_bytes=99)
    modes = sheet.columns["M"]
    assert isinstance(modes, CodedColumn)
    assert modes.constant
    read_modes = modes.words(WIDE)
    assert (read_modes.texts, read_modes.all_values) == (("1",), True)
    assert modes.arrow().dictionary.to_pylist() == ["1.0"]
    assert sheet.columns["A"].numbers(WIDE).all_values is False
    (ragged,) = read("timestamp,M,A\nt,1.0,2\nt,x\nt,1.0,\n", piece_bytes=99)
    assert ragged.columns["M"].arrow().dictionary.to_pylist() == ["1.0"]
    (blank,) = read("timestamp,M\n" + "t,\n" * 3, piece_bytes=99)
    assert words(blank.columns["M"].words(WIDE)) == [None] * 3


def test_the_block_of_all_values() -> None:
    (sheet,) = read("timestamp,A,M,B\n1,2,AUTO,3\n4,5,AUTO,6\n", piece_bytes=99)
    columns = [sheet.columns[name] for name in ("A", "B")]
    assert all(isinstance(column, ParsedColumn) for column in columns)
    blocks = [c.block for c in columns if isinstance(c, ParsedColumn) and c.block is not None]
    assert blocks[0] is blocks[1]
    assert blocks[0].tolist() == [[2.0, 5.0], [3.0, 6.0]]
    assert blocks[0].strides[1] == 8
    assert [c.row_in_block for c in columns if isinstance(c, ParsedColumn)] == [0, 1]
    assert all(column.numbers(WIDE).all_values for column in columns)


def test_a_file_without_rows_and_no_file_at_all() -> None:
    for data in ("timestamp,A", "timestamp,A\n", "\ufeff\n\ntimestamp,A\n\n\n", "timestamp,A\r"):
        (sheet,) = read(data, piece_bytes=3)
        assert (sheet.names, sheet.rows, sheet.ragged) == (("timestamp", "A"), 0, 0)
        assert len(sheet.columns["A"].numbers(WIDE).value) == 0
        assert texts(sheet, "timestamp") == []
    for data in ("", "\n", "\ufeff", "\r\n\r\n\n"):
        assert refused(data).reason == "the file is empty"


TOO_LONG = [
    "t,1," + "M" * 17,
    "t,1," + "M" * 17 + "\n",
    't,1,"' + "M" * 15 + '"',
    't,"1\n',
    't,1,"a""' + "M" * 15 + '"\n',
    "x" * 21 + "\r",
]


def test_limits() -> None:
    small = replace(WIDE, limits=FileLimits(longest_row_bytes=20, most_columns=3))
    fits = "timestamp,A,M\n" + "t," + "1" * 18 + "\n" + "t,1," + "M" * 16 + "\r\n"
    for piece_bytes in (5, 21, 500):
        sheets = read(fits, small, piece_bytes=piece_bytes)
        assert sum(sheet.rows for sheet in sheets) == 1
        for long in TOO_LONG:
            tail = "t,2,2\n" * 9 if long[-1] in "\r\n" else ""
            error = refused(fits + long + tail, small, piece_bytes=piece_bytes)
            assert error.reason == "a row is longer than 20 bytes"
            assert error.line == 4
            assert "longest_row_kb" in error.remedy
    assert "longer than 20 bytes" in refused("timestamp,A,M,other,B", small).reason
    assert refused("timestamp,A,M,b\n", small).reason == "4 columns, more than 3"


def test_what_is_no_text_is_said_before_anything_else() -> None:
    small = replace(WIDE, limits=FileLimits(longest_row_bytes=50))
    for piece_bytes in (3, 30, 300):
        error = refused(b"timestamp,A\n1,2\n\x00" + b"x" * 99, small, piece_bytes=piece_bytes)
        assert (error.reason, error.line) == ("a NUL byte at byte 17", 3)
        error = refused(b'timestamp,A\n1,"\xe9' + b"x" * 9, small, piece_bytes=piece_bytes)
        assert (error.reason, error.line) == ("byte 0xe9, not UTF-8, at byte 16", 2)
        error = refused("timestamp,A\n".encode("utf-16"), piece_bytes=piece_bytes)
        assert error.reason == "byte 0xff, not UTF-8, at byte 1"
        whole = "timestamp,A\n" + "é,1\n" * 40
        assert sum(sheet.rows for sheet in read(whole, piece_bytes=piece_bytes)) == 40


def test_a_delimiter_that_is_no_ascii() -> None:
    assert "declared as '§'" in refused("timestamp§A\n", replace(WIDE, delimiter="§")).reason


@pytest.mark.parametrize("threads", [1, 2, 3])
def test_what_stands_before_a_refusal_is_given(threads: int) -> None:
    data = b"timestamp,A\n" + b"t,1\n" * 100 + b'"t,2\n'
    found = csv_file.pieces(io.BytesIO(data), WIDE, WANTED, "a.csv", threads, 40)
    rows: list[int] = []
    with pytest.raises(ExportRefused, match="not closed") as caught:
        rows.extend(sheet.rows for sheet in found)
    assert caught.value.line == 102
    assert sum(rows) == 97


class Counted(io.BytesIO):
    """A stream that knows how much was taken from it."""

    taken = 0

    def read(self, size: int | None = -1, /) -> bytes:
        data = super().read(size)
        self.taken += len(data)
        return data


@pytest.mark.parametrize("threads", [1, 2, 4])
def test_only_so_much_is_read_ahead(threads: int) -> None:
    stream = Counted(b"timestamp,A\n" + b"t,1\n" * 100_000)
    found = csv_file.pieces(stream, WIDE, WANTED, "a.csv", threads, 4_000)
    for count, sheet in enumerate(found, 1):
        assert sheet.rows <= 1_001
        assert stream.taken <= (count + threads) * 4_000
    found = csv_file.pieces(Counted(stream.getvalue()), WIDE, WANTED, "a.csv", threads, 4_000)
    assert next(found).rows > 0
    found.close()
    assert list(found) == []


def test_memory_is_used_again_only_when_nothing_refers_to_it() -> None:
    data = b"timestamp,A,M\n" + b"".join(b"%d,%d,x%d\n" % (k, k, k) for k in range(3_000))
    sheets = read(data, piece_bytes=1_000)
    at = 0
    for sheet in sheets:
        rows = range(at, at + sheet.rows)
        assert sheet.columns["A"].numbers(WIDE).value.tolist() == list(rows)
        assert texts(sheet, "M") == [f"x{row}" for row in rows]
        assert sheet.columns["A"].shown(0) == str(at)
        at += sheet.rows
    assert at == 3_000
    stream = io.BytesIO(data)
    places = {
        sheet.columns["A"].numbers(WIDE).value.ctypes.data
        for sheet in csv_file.pieces(stream, WIDE, WANTED, "a.csv", 1, 1_000)
    }
    assert len(places) < len(sheets) / 2


def test_nothing_is_asked_for_but_the_time() -> None:
    (sheet,) = read("timestamp,A,M\nt,1,x\n\nu,2\nv,3,y\n", wanted={}, piece_bytes=99)
    assert list(sheet.columns) == ["timestamp"]
    assert texts(sheet, "timestamp") == ["t", "v"]
    assert [sheet.line_of(row) for row in range(2)] == [2, 5]
    assert (sheet.ragged, sheet.ragged_rows[0].line) == (1, 4)


def test_a_compiled_function_that_cannot_be_kept_is_compiled_all_the_same(
    monkeypatch: pytest.MonkeyPatch,
) -> None:
    njit = numba.njit

    def without_a_place(*how: Any, **options: Any) -> Any:
        if options.pop("cache", False):
            raise RuntimeError("cannot cache function: no locator available")
        return njit(*how, **options)

    monkeypatch.setattr(numba, "njit", without_a_place)
    data, ends = np.frombuffer(b"\nab,c\n", np.uint8).copy(), np.zeros(3, np.int32)
    at, length = np.array([1, 4], np.int32), np.array([2, 1], np.int32)
    gather, joined = csv_compiled.compiled(csv_scan.gather, data, at, at, at, data), data.copy()
    gather(data, at, length, ends, joined)
    assert joined[:3].tobytes() == b"abc"
    assert ends.tolist() == [0, 2, 3]

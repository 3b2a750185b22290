"""What becomes of each cell of an export: taken, bad, blank, refused; and counted once."""

import csv
import io
from pathlib import Path
from typing import Any

import numpy as np
import pyarrow as pa
import pyarrow.parquet as pq
import pytest
from export_files import NARROW, START_US, WANTED, as_rows, parquet_of, read_bytes
from hypothesis import given, settings
from hypothesis import strategies as st

from audit.exports import cells
from audit.exports.cells import Cell
from audit.records import ExportSource


def test_parquet_cells_of_odd_types(tmp_path: Path) -> None:
    table = pa.table(
        {
            "timestamp": pa.array([START_US, START_US + 1_000_000], pa.timestamp("us", tz="UTC")),
            "FIC-1.PV": pa.array([float("nan"), float("inf")]),
            "FIC-1.SP": pa.array([[1.0], None]),
            "FIC-1.MODE": pa.array([1.0, 0.0]),
        }
    )
    sink = io.BytesIO()
    pq.write_table(table, sink)
    got = read_bytes(tmp_path, sink.getvalue(), "a.parquet", format="parquet")
    assert got.account.refused == {"not_a_number": 3}
    assert got.account.blank == 1
    assert as_rows(got.columns["FIC-1.MODE"]) == [(0.0, "1"), (1.0, "0")]
    assert all(fault.line is None and "in row" in fault.problem for fault in got.faults)


def test_one_bad_cell_costs_one_cell(tmp_path: Path) -> None:
    odd = ["x", "1,5", "NaN", "inf", "-Infinity", "1_000", "0x10", "1e999", "٣", "1 000", "--1"]
    odd += ["1.7976931348623157e308", "-3.4028235e38"]  # fill values: the largest of IEEE 754
    good = ["1", " 2 ", "+3", "4.", ".5", "-6e-1", "0007", "1e-400", "-1e30"]
    lines = [
        f'2026-03-14T08:00:{second:02}Z,"{cell}",1'
        for second, cell in enumerate([*odd, *good, " ", ""])
    ]
    text = "\n".join(["timestamp,FIC-1.PV,FIC-1.SP", *lines])
    got = read_bytes(tmp_path, text)
    assert got.account.refused == {"not_a_number": len(odd)}
    assert got.account.blank == 2
    assert [cell for _, cell in as_rows(got.columns["FIC-1.PV"])] == [float(cell) for cell in good]
    assert len(got.columns["FIC-1.SP"].samples) == len(lines)
    assert [fault.line for fault in got.faults] == [2, 3, 4, 5, 6]
    first = got.faults[0]
    assert (first.file, first.column, first.tag) == ("a.csv", "FIC-1.PV", "FIC-1.PV")
    assert "'x'" in first.problem
    assert "decimal" in first.remedy


def test_decimal_comma(tmp_path: Path) -> None:
    text = (
        "timestamp;FIC-1.PV;FIC-1.MODE\n"
        "2026-03-14T08:00:00Z;1,5;1,0\n"
        "2026-03-14T08:00:01Z;1.5;1.0\n"
        "2026-03-14T08:00:02Z;1.000,5;AUTO\n"
        "2026-03-14T08:00:03,5Z;-2;2\n"
    )
    got = read_bytes(tmp_path, text, delimiter=";", decimal=",")
    assert as_rows(got.columns["FIC-1.PV"]) == [(0.0, 1.5), (3.5, -2.0)]
    modes = [cell for _, cell in as_rows(got.columns["FIC-1.MODE"])]
    assert modes == ["1", "1.0", "AUTO", "2"]
    assert got.account.refused == {"not_a_number": 2}


def test_text_is_parsed_to_the_nearest_double(tmp_path: Path) -> None:
    texts = ["0.1", "5e-324", "2.2250738585072011e-308", "9007199254740993", "123456789.123456789",
             "0.500000000000000166533453693773481063544750213623046875"]  # fmt: skip
    lines = [f"2026-03-14T08:00:0{place}Z,{text}" for place, text in enumerate(texts)]
    for spoiler in ("", "\n2026-03-14T08:01:00Z,x"):
        got = read_bytes(tmp_path, "\n".join(["timestamp,FIC-1.PV", *lines]) + spoiler)
        # Python's float() is correctly rounded (IEEE 754)
        assert got.columns["FIC-1.PV"].samples.value.tolist() == [float(text) for text in texts]


def test_quality_makes_the_sample_bad_whatever_its_value(tmp_path: Path) -> None:
    text = NARROW + (
        "2026-03-14T08:00:00Z,FIC-1.PV,1,192\n"
        "2026-03-14T08:00:01Z,FIC-1.PV,2,24\n"  # OPC DA 3.0 section 6.8: comm failure
        "2026-03-14T08:00:02Z,FIC-1.PV,,0\n"
        "2026-03-14T08:00:03Z,FIC-1.PV,No data,8\n"
        "2026-03-14T08:00:04Z,FIC-1.PV,5,64\n"  # uncertain
        "2026-03-14T08:00:05Z,FIC-1.PV,6,216.0\n"  # local override
        "2026-03-14T08:00:06Z,FIC-1.PV,7,Good\n"
        "2026-03-14T08:00:07Z,FIC-1.PV,,192\n"
        "2026-03-14T08:00:08Z,other,8,Good\n"
    )
    declared: dict[str, Any] = {
        "layout": "narrow",
        "quality": "quality",
        "quality_scheme": "opc_da",
    }
    got = read_bytes(tmp_path, text, **declared)
    rows = [(0.0, 1.0), (1.0, None), (2.0, None), (3.0, None), (4.0, None), (5.0, 6.0)]
    assert as_rows(got.columns["FIC-1.PV"]) == rows
    account = got.account
    assert (account.taken, account.bad_quality, account.blank) == (2, 4, 1)
    assert account.unregistered == 1
    assert account.refused == {"no_such_quality": 1}
    assert [(fault.line, fault.tag) for fault in got.faults] == [(8, "FIC-1.PV")]
    declared_good = read_bytes(tmp_path, text, uncertain_is_good=True, **declared)
    assert as_rows(declared_good.columns["FIC-1.PV"])[4] == (4.0, 5.0)


def test_opc_ua_and_words(tmp_path: Path) -> None:
    # OPC UA Part 4: 0x80310000 BadNoCommunication, 0x40900000 UncertainLastUsableValue
    text = NARROW + (
        "2026-03-14T08:00:00Z,FIC-1.PV,1,0\n"
        f"2026-03-14T08:00:01Z,FIC-1.PV,2,{0x80310000}\n"
        "2026-03-14T08:00:02Z,FIC-1.PV,3,0x40900000\n"
    )
    got = read_bytes(tmp_path, text, layout="narrow", quality="quality", quality_scheme="opc_ua")
    assert as_rows(got.columns["FIC-1.PV"]) == [(0.0, 1.0), (1.0, None), (2.0, None)]
    words = text.replace(",0\n", ",ok\n")
    got = read_bytes(tmp_path, words, layout="narrow", quality="quality", good=("OK",))
    assert as_rows(got.columns["FIC-1.PV"]) == [(0.0, 1.0), (1.0, None), (2.0, None)]


def test_no_quality_column_declared_means_good(tmp_path: Path) -> None:
    text = NARROW + "2026-03-14T08:00:00Z,FIC-1.PV,1,Bad\n"
    got = read_bytes(tmp_path, text, layout="narrow")
    assert as_rows(got.columns["FIC-1.PV"]) == [(0.0, 1.0)]


def test_samples_at_one_stamp(tmp_path: Path) -> None:
    text = NARROW + (
        "2026-03-14T08:00:02Z,FIC-1.PV,2,Good\n"
        "2026-03-14T08:00:01Z,FIC-1.PV,1,Good\n"
        "2026-03-14T09:00:01+01:00,FIC-1.PV,1.0,Good\n"
        "2026-03-14T08:00:02Z,FIC-1.PV,9,Bad\n"
        "2026-03-14T08:00:02.0000001Z,FIC-1.PV,3,Good\n"
        "2026-03-14T08:00:03Z,FIC-1.PV,4,Bad\n"
        "2026-03-14T08:00:03Z,FIC-1.PV,5,Bad\n"
        "2026-03-14T08:00:03Z,FIC-1.SP,x,Good\n"
    )
    got = read_bytes(tmp_path, text, layout="narrow", quality="quality")
    assert as_rows(got.columns["FIC-1.PV"]) == [(1.0, 1.0), (2.0, 3.0), (3.0, None)]
    account = got.account
    assert (account.taken, account.bad_quality) == (2, 1)
    assert (account.duplicate, account.replaced) == (2, 2)
    assert got.named == ("FIC-1.PV", "FIC-1.SP")
    assert "FIC-1.SP" not in got.columns


def test_rows_without_a_stamp_have_all_their_cells_refused(tmp_path: Path) -> None:
    text = (
        "timestamp,FIC-1.PV,other\n"
        "2026-03-14T08:00:00Z,1,1\n"
        "soon,2,2\n"
        ",3,3\n"
        "2026-02-29T00:00:00Z,,4\n"
        "2200-01-01T00:00:00Z,5,5\n"
    )
    got = read_bytes(tmp_path, text)
    assert got.account.refused == {"bad_time": 8}
    assert (got.account.read, got.account.taken, got.account.unregistered) == (10, 1, 1)
    assert [fault.line for fault in got.faults] == [3, 4, 5, 6]
    assert got.last_us == START_US


def test_clock_change_in_wide_and_narrow(tmp_path: Path) -> None:
    # IANA tz database: Europe/Paris 2024-10-27, 02:00 to 03:00 twice; 2024-03-31 02:30 never
    zone: dict[str, Any] = {"timezone": "Europe/Paris"}
    walls = ["2024-03-31T02:30", *(f"2024-10-27T{at}" for at in ("02:10", "02:50", "02:20"))]
    wide = "\n".join(["timestamp,FIC-1.PV", *(f"{wall},{at}" for at, wall in enumerate(walls))])
    got = read_bytes(tmp_path, wide, **zone)
    assert got.account.refused == {"no_such_time": 1}
    steps = np.diff(got.columns["FIC-1.PV"].samples.t_us) // 60_000_000
    assert steps.tolist() == [40, 30]
    narrow = NARROW + "".join(
        f"2024-10-27T{wall},{tag},1,Good\n"
        for wall, tag in (("02:10", "FIC-1.PV"), ("02:40", "FIC-1.SP"), ("02:30", "FIC-1.PV"),
                          ("02:10", "FIC-1.SP"), ("03:00", "FIC-1.PV"))
    )  # fmt: skip
    got = read_bytes(tmp_path, narrow, layout="narrow", **zone)
    assert got.account.refused == {"ambiguous_time": 2}
    assert len(got.columns["FIC-1.SP"].samples) == 2
    assert len(got.columns["FIC-1.PV"].samples) == 1
    assert [fault.line for fault in got.faults] == [2, 4]


def test_ragged_rows(tmp_path: Path) -> None:
    text = (
        "timestamp,FIC-1.PV,other\n"
        "2026-03-14T08:00:00Z,1,1\n"
        "\n"
        "2026-03-14T08:00:01Z,2\n"
        "2026-03-14T08:00:02Z,3,3,3\n"
        "2026-03-14T08:00:03Z,x,4\n"
        "2026-03-14T08:00:04Z,5,5\n"
        "2026-"
    )
    got = read_bytes(tmp_path, text)
    assert got.account.refused == {"ragged_row": 6, "not_a_number": 1}
    assert (got.account.rows, got.account.read) == (6, 12)
    assert [fault.line for fault in got.faults] == [4, 5, 6, 8]
    assert "2 instead of 3" in got.faults[0].problem


@pytest.mark.parametrize("newline", ["\n", "\r\n", "\r"])
@pytest.mark.parametrize("start", [b"", b"\xef\xbb\xbf", b"\n\n"])
def test_line_numbers_are_true(tmp_path: Path, newline: str, start: bytes) -> None:
    text = (
        'timestamp,"FIC-1.PV","a ""note"",\nof two lines"\n'  # lines 1, 2
        '2026-03-14T08:00:00Z,"1","x\n\ny"\n'  # 3, 4, 5
        '2026-03-14T08:00:01Z,bad,12" pipe\n'  # 6
        "\n"  # 7
        '2026-03-14T08:00:02Z,2,"z\n"\n'  # 8, 9
        '2026-03-14T08:00:03Z,"bad\ntoo",\n'  # 10, 11
        "short\n"  # 12
        "late,1,1\n"  # 13
    )
    data = start + text.replace("\n", newline).encode()
    got = read_bytes(tmp_path, data)
    shift = start.count(b"\n")
    assert [fault.line for fault in got.faults] == [shift + line for line in (6, 10, 12, 13)]
    assert as_rows(got.columns["FIC-1.PV"]) == [(0.0, 1.0), (2.0, 2.0)]
    assert got.account.rows == len(list(csv.reader(io.StringIO(text)))) - 2


def test_at_most_twenty_faults(tmp_path: Path) -> None:
    rows = ["soon,FIC-1.PV,1,192", "2024-10-27T02:30,FIC-1.PV,1,192",
            "2024-03-31T02:30,FIC-1.PV,1,192",
            "2024-01-01,,1,192", "2024-01-01,FIC-1.PV,1,?", "2024-01-01,FIC-1.PV,x,192",
            "short"]  # fmt: skip
    text = NARROW + "\n".join(rows * 50)
    got = read_bytes(
        tmp_path,
        text,
        layout="narrow",
        quality="quality",
        quality_scheme="opc_da",
        timezone="Europe/Paris",
    )
    assert len(got.faults) == 20
    assert set(got.account.refused.values()) == {50}
    assert len(got.account.refused) == 7


CELL = st.sampled_from(["", "1", "1.5", "x", " ", "NaN", "AUTO", '"a,b"', '"1\n"', "1e3"])
STAMP = st.sampled_from(
    ["2026-03-14T08:00:00Z", "2026-03-14T08:00:01", "2026-10-25T02:30", "bad", "", "2026-03-14"]
)
QUALITY = st.sampled_from(["Good", "Bad", "", "Uncertain"])
TAG = st.sampled_from([*WANTED, "other", "", " FIC-1.PV "])


@settings(max_examples=60, deadline=None)
@given(st.lists(st.tuples(STAMP, TAG, CELL, QUALITY, st.integers(0, 9)), max_size=25))
def test_every_cell_is_counted_once_narrow(
    tmp_path_factory: pytest.TempPathFactory, rows: list[tuple[str, str, str, str, int]]
) -> None:
    lines = [",".join(row[:4]) if row[4] else ",".join(row[:3]) for row in rows]
    text = NARROW + "\n".join(lines)
    got = read_bytes(
        tmp_path_factory.mktemp("narrow"),
        text,
        layout="narrow",
        quality="quality",
        timezone="Europe/Paris",
    )
    assert got.account.read == len(rows)
    kept = sum(len(raw.samples) for raw in got.columns.values())
    assert kept == got.account.taken + got.account.bad_quality


@settings(max_examples=60, deadline=None)
@given(st.lists(st.tuples(STAMP, CELL, CELL, CELL, st.integers(0, 9)), max_size=25))
def test_every_cell_is_counted_once_wide(
    tmp_path_factory: pytest.TempPathFactory, rows: list[tuple[str, str, str, str, int]]
) -> None:
    lines = [",".join(row[:4]) if row[4] else ",".join(row[:3]) for row in rows]
    text = "timestamp,FIC-1.PV,FIC-1.MODE,other\n" + "\n".join(lines)
    folder = tmp_path_factory.mktemp("wide")
    got = read_bytes(folder, text, timezone="Europe/Paris")
    assert got.account.read == 3 * len(rows)
    full = [line for line, row in zip(lines, rows, strict=True) if row[4]]
    parquet = parquet_of("timestamp,FIC-1.PV,FIC-1.MODE,other\n" + "\n".join(full))
    same = read_bytes(folder, parquet, "a.parquet", format="parquet", timezone="Europe/Paris")
    assert {tag: as_rows(raw) for tag, raw in same.columns.items()} == {
        tag: as_rows(raw) for tag, raw in got.columns.items()
    }


def test_thousands_where_they_belong(tmp_path: Path) -> None:
    marked = ["1,234.5", "-1,234,567", "999", "1,000e3", '"+12,345."', "1234,567", "12,34", ",123"]
    marked += ["1,2345", "1.5,000", "0,001.5"]
    lines = [f"2026-03-14T08:00:{second:02}Z;{cell}\n" for second, cell in enumerate(marked)]
    text = "timestamp;FIC-1.PV\n" + "".join(lines)
    got = read_bytes(tmp_path, text, delimiter=";", thousands=",")
    values = [1234.5, -1234567.0, 999.0, 1e6, 12345.0, 1.5]
    assert [cell for _, cell in as_rows(got.columns["FIC-1.PV"])] == values
    assert got.account.refused == {"not_a_number": 5}
    swapped = "".join(lines).translate(str.maketrans(",.", ".,"))
    text = "timestamp;FIC-1.PV\n" + swapped
    got = read_bytes(tmp_path, text, delimiter=";", thousands=".", decimal=",")
    assert [cell for _, cell in as_rows(got.columns["FIC-1.PV"])] == values


def test_a_thousands_mark_that_is_the_delimiter_too(tmp_path: Path) -> None:
    text = 'timestamp,FIC-1.PV\n2026-03-14T08:00:00Z,"1,234.5"\n2026-03-14T08:00:01Z,1\n'
    got = read_bytes(tmp_path, text, thousands=",")
    assert as_rows(got.columns["FIC-1.PV"]) == [(0.0, 1234.5), (1.0, 1.0)]
    assert read_bytes(tmp_path, text).account.refused == {"not_a_number": 1}


def test_words_for_true_and_false(tmp_path: Path) -> None:
    words = ["EIN", "aus", " Ein ", "true", "1", "einaus"]
    lines = [f"2026-03-14T08:00:{second:02}Z,{word},{word}\n" for second, word in enumerate(words)]
    text = "timestamp,FIC-1.PV,FIC-1.MODE\n" + "".join(lines)
    got = read_bytes(tmp_path, text, true_words=("ein",), false_words=("Aus",))
    assert [cell for _, cell in as_rows(got.columns["FIC-1.PV"])] == [1.0, 0.0, 1.0, 1.0]
    modes = [cell for _, cell in as_rows(got.columns["FIC-1.MODE"])]
    assert modes == [word.strip() for word in words]
    usual = read_bytes(tmp_path, text)
    assert [cell for _, cell in as_rows(usual.columns["FIC-1.PV"])] == [1.0, 1.0]


TEXTS = st.lists(
    st.one_of(
        st.none(), st.sampled_from(["1", "1.0", " 1", "x", "", " ", "TRUE", "1,000", "1e31"])
    ),
    max_size=20,
)


@given(TEXTS, TEXTS)
def test_coded_texts_read_as_plain_ones(texts: list[str | None], unused: list[str | None]) -> None:
    source = ExportSource("x", "*", thousands=",")
    plain = pa.array(texts, pa.string())
    # Arrow's dictionaries may hold nulls, texts twice, and texts that no cell has
    dictionary = pa.array([*unused, *texts], pa.string())
    code = pa.array(range(len(unused), len(unused) + len(texts)), pa.int32())
    coded: Any = pa.DictionaryArray.from_arrays(code, dictionary)
    number, same = cells.read_numbers(plain, source), cells.read_numbers(coded, source)
    assert (number.value.tolist(), number.held.tolist()) == (
        same.value.tolist(),
        same.held.tolist(),
    )
    word, told = cells.words(plain, "."), cells.words(coded, ".")
    assert word.texts == told.texts
    assert (word.value.tolist(), word.held.tolist()) == (told.value.tolist(), told.held.tolist())
    assert word.all_values == (Cell.BLANK not in word.held.tolist())

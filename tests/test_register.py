"""loops.csv and specs.csv: what is read, and every fault with its line, column and tag."""

from __future__ import annotations

import csv
import io
from datetime import UTC, datetime
from pathlib import Path
from zoneinfo import ZoneInfo

import pytest
from hypothesis import given
from hypothesis import strategies as st

from audit.errors import Fault, FilesWrong
from audit.records import SECOND_US, LoopKind, Quantity, Windows
from audit.register import LOOP_COLUMNS, Register, examine, read
from audit.sitefiles.table import read_table

OSLO = ZoneInfo("Europe/Oslo")
WINDOWS = Windows(120 * SECOND_US, 3600 * SECOND_US, 60 * SECOND_US)
LOOPS = "tag,pv,sp\nFIC-1,a.pv,a.sp\nTIC-2,b.pv,b.sp\n"
SPECS = "tag,valid_from\nFIC-1,2024-01-01\n"


def write(folder: Path, loops: str | bytes, specs: str | bytes) -> tuple[Path, Path]:
    paths = folder / "loops.csv", folder / "specs.csv"
    for path, text in zip(paths, (loops, specs), strict=True):
        path.write_bytes(text.encode() if isinstance(text, str) else text)
    return paths


def register_of(folder: Path, loops: str | bytes = LOOPS, specs: str | bytes = SPECS) -> Register:
    return read(*write(folder, loops, specs), WINDOWS, OSLO)


def faults_of(
    folder: Path, loops: str | bytes = LOOPS, specs: str | bytes = SPECS
) -> tuple[Fault, ...]:
    with pytest.raises(FilesWrong) as caught:
        register_of(folder, loops, specs)
    return caught.value.faults


def test_a_row_with_everything(tmp_path: Path) -> None:
    loops = (
        "tag,process_unit,service,kind,pv,sp,output,mode,eu,range_low,range_high,output_low,"
        "output_high,auto_modes,criticality,cascade_primary,averaging,before_s,after_s,join_s,"
        "notes,vendor,area\n"
        'FIC-1,U1,"feed, main",Flow,p,s,o,m,m3/h,-5,80.5,4,20, AUTO ; 2 ;,5,TIC-2,yes,0.5,1e3,9,'
        "spare valve,,north\n"
        "TIC-2,,,,p2,s2,,,,,,,,,,,,,,,,,\n"
    )
    first, second = register_of(tmp_path, loops).loops
    assert (first.tag, first.process_unit, first.service) == ("FIC-1", "U1", "feed, main")
    assert (first.kind, first.eu, first.criticality) == (LoopKind.FLOW, "m3/h", 5)
    assert (first.pv, first.sp, first.output, first.mode) == ("p", "s", "o", "m")
    assert (first.range_low, first.range_high, first.span_eu) == (-5.0, 80.5, 85.5)
    assert (first.output_low, first.output_high) == (4.0, 20.0)
    assert first.auto_modes == ("AUTO", "2")
    assert (first.cascade_primary, first.averaging) == ("TIC-2", True)
    assert first.windows == Windows(500_000, 1000 * SECOND_US, 9 * SECOND_US)
    assert first.notes == "spare valve; area: north"
    assert (second.kind, second.criticality, second.averaging) == (LoopKind.OTHER, 3, False)
    assert (second.output, second.mode, second.span_eu) == (None, None, None)
    assert (second.output_low, second.output_high, second.notes) == (0.0, 100.0, "")
    assert second.windows == WINDOWS


def test_a_spec_with_everything_and_one_with_nothing(tmp_path: Path) -> None:
    specs = (
        "tag,valid_from,rise_time_s,settling_time_s,settling_band_pct,overshoot_pct,peak_time_s,"
        "decay_ratio,steady_state_error_eu,min_step_eu,set_by,reason\n"
        "FIC-1,2024-01-01,12,45,5,0,30,0.25,0.4,0,A,commissioning\n"
        "FIC-1,2024-06-01T06:00:00Z,,,,,,,,,,\n"
    )
    full, empty = register_of(tmp_path, specs=specs).specs
    assert full.limits == {
        Quantity.RISE_TIME: 12.0,
        Quantity.SETTLING_TIME: 45.0,
        Quantity.OVERSHOOT: 0.0,
        Quantity.PEAK_TIME: 30.0,
        Quantity.DECAY_RATIO: 0.25,
        Quantity.STEADY_STATE_ERROR: 0.4,
    }
    assert (full.settling_band_pct, full.min_step_eu) == (5.0, 0.0)
    assert (full.set_by, full.reason) == ("A", "commissioning")
    assert (empty.limits, empty.settling_band_pct, empty.min_step_eu) == ({}, 2.0, None)


VALID_FROM = [
    ("2024-01-01", datetime(2023, 12, 31, 23, tzinfo=UTC)),
    ("2024-07-01", datetime(2024, 6, 30, 22, tzinfo=UTC)),
    ("2024-07-01T06:00", datetime(2024, 7, 1, 4, tzinfo=UTC)),
    ("2024-07-01 06:00:00", datetime(2024, 7, 1, 4, tzinfo=UTC)),
    ("2024-07-01T06:00:00.25Z", datetime(2024, 7, 1, 6, 0, 0, 250_000, tzinfo=UTC)),
    ("2024-07-01t06:00:00z", datetime(2024, 7, 1, 6, tzinfo=UTC)),
    ("2024-07-01T06:00:00-03:30", datetime(2024, 7, 1, 9, 30, tzinfo=UTC)),
    # IANA time zone data: the hour that comes twice, and the one that does not
    # exist; the offsets of Oslo are those of Paris there
    ("2024-10-27T02:30:00", datetime(2024, 10, 27, 0, 30, tzinfo=UTC)),
    ("2024-03-31T02:30:00", datetime(2024, 3, 31, 1, 30, tzinfo=UTC)),
    # RFC 3339 section 5.8, two of its examples (from memory)
    ("1996-12-19T16:39:57-08:00", datetime(1996, 12, 20, 0, 39, 57, tzinfo=UTC)),
    ("1985-04-12T23:20:50.52Z", datetime(1985, 4, 12, 23, 20, 50, 520_000, tzinfo=UTC)),
]


@pytest.mark.parametrize(("text", "expected"), VALID_FROM)
def test_valid_from(tmp_path: Path, text: str, expected: datetime) -> None:
    (spec,) = register_of(tmp_path, specs=f"tag,valid_from\nFIC-1,{text}\n").specs
    assert spec.valid_from == expected


def loop(column: str, cell: str, more: str = "", extra: str = "") -> str:
    """A register whose line 2 has one more cell (and perhaps others)."""
    return f"tag,pv,sp,{column}{more}\nFIC-1,a,b,{cell}{extra}\nTIC-2,c,d,{',' * more.count(',')}\n"


WRONG_LOOPS: list[tuple[str | bytes, int | None, str | None, str | None, str]] = [
    # text, line, column, tag, words of the message in their order
    ("", 1, None, None, "is empty|tag, pv, sp"),
    ("\n \n", 1, None, None, "is empty"),
    ("tag;pv;sp\nFIC-1;1,5;b\n", 1, None, None, "parted by ';'|comma"),
    ("tag,pv\nFIC-1,a\n", 1, "sp", None, "'sp' is missing"),
    ("tag,pv,sp\n", 1, None, None, "holds no loop"),
    ("tag,pv,sp,pv\nFIC-1,a,b,c\n", 1, "pv", None, "stands there 2 times"),
    (loop("vendor", "x", ",vendor", ",y"), 1, "vendor", None, "stands there 2 times"),
    (loop("Criticality", "5"), 1, "Criticality", None, "unknown|did you mean 'criticality'"),
    (loop("criticallity", "5"), 1, "criticallity", None, "did you mean 'criticality'"),
    (loop("range low", ""), 1, "range low", None, "did you mean 'range_low'"),
    (loop("", "x"), 2, None, None, "'x' stands under no column name"),
    ("tag,pv,sp\nFIC-1,a\n", 2, None, None, "the row has 2 cells, the header 3"),
    ("tag,pv,sp\nFIC-1,a,b,c\n", 2, None, None, "the row has 4 cells, the header 3|quotes"),
    ("tag,pv,sp\n,a,b\n", 2, "tag", None, "is blank"),
    ("tag,pv,sp\nFIC-1, ,b\n", 2, "pv", "FIC-1", "is blank"),
    ("tag,pv,sp\nFIC-1,a,\n", 2, "sp", "FIC-1", "is blank"),
    ('tag,pv,sp\nFIC-1,"a\nx",b\n', 2, "pv", "FIC-1", "line break"),
    ("tag,pv,sp\nFIC-1,a,b\nFIC-1,c,d\n", 3, "tag", "FIC-1", "already the tag of line 2"),
    ("tag,pv,sp\nFIC-1,a,a\n", 2, "sp", "FIC-1", "'a' is also the loop's pv"),
    (loop("output", "a"), 2, "output", "FIC-1", "also the loop's pv"),
    (loop("kind", "flwo"), 2, "kind", "FIC-1", "'flwo'|did you mean 'flow'|temperature"),
    (loop("averaging", "true"), 2, "averaging", "FIC-1", "'true'|allowed: yes, no"),
    (loop("criticality", "0"), 2, "criticality", "FIC-1", "from 1 to 5|1, 2, 3, 4, 5"),
    (loop("criticality", "6"), 2, "criticality", "FIC-1", "'6' is not a whole number"),
    (loop("criticality", "3.0"), 2, "criticality", "FIC-1", "'3.0' is not a whole number"),
    (loop("criticality", "high"), 2, "criticality", "FIC-1", "'high' is not a whole number"),
    (loop("range_low", "5"), 2, "range_high", "FIC-1", "is blank beside the other"),
    (loop("range_low", "5", ",range_high", ",5"), 2, "range_low", "FIC-1", "5 is not below"),
    (loop("range_low", "x", ",range_high", ",5"), 2, "range_low", "FIC-1", "'x' is not a number"),
    (
        loop("range_low", "-inf", ",range_high", ",5"),
        2,
        "range_low",
        "FIC-1",
        "not a finite number",
    ),
    (loop("range_low", "nan", ",range_high", ",5"), 2, "range_low", "FIC-1", "not a finite number"),
    (loop("range_low", "1e999", ",range_high", ","), 2, "range_low", "FIC-1", "not a finite"),
    (loop("output_low", "100"), 2, "output_low", "FIC-1", "100 is not below output_high 100"),
    (loop("output_high", "-1"), 2, "output_low", "FIC-1", "0 is not below output_high -1"),
    (loop("output_high", '"99,5"'), 2, "output_high", "FIC-1", "decimal comma|decimal point: 99.5"),
    (loop("output_high", '"1,000.5"'), 2, "output_high", "FIC-1", "not a number|thousands"),
    (loop("output_high", "100 %"), 2, "output_high", "FIC-1", "'100 %' is not a number|no unit"),
    (loop("output_high", "1_0"), 2, "output_high", "FIC-1", "'1_0' is not a number"),
    (loop("mode", "m"), 2, "auto_modes", "FIC-1", "is blank|parted by ;"),
    (loop("mode", "m", ",auto_modes", ", ; "), 2, "auto_modes", "FIC-1", "is blank"),
    (loop("auto_modes", "AUTO"), 2, "mode", "FIC-1", "is blank although auto_modes"),
    (loop("mode", "c", ",auto_modes", ",A"), 3, "pv", "TIC-2", "'c' is the mode of loop FIC-1"),
    (loop("cascade_primary", "X-9"), 2, "cascade_primary", "FIC-1", "'X-9' is not a loop"),
    (loop("cascade_primary", "FIC-1"), 2, "cascade_primary", "FIC-1", "is the loop itself"),
    (loop("before_s", "0"), 2, "before_s", "FIC-1", "0 is out of range|over 0"),
    (loop("after_s", "-1"), 2, "after_s", "FIC-1", "-1 is out of range"),
    (loop("join_s", "inf"), 2, "join_s", "FIC-1", "not a finite number"),
    (loop("after_s", "1e9"), 2, "after_s", "FIC-1", "out of range|at most"),
    (
        "tag,pv,sp,cascade_primary\nA,a,b,D\nB,c,d,C\nC,e,f,D\nD,g,h,B\n",
        3,
        "cascade_primary",
        "B",
        "in a circle: B -> C -> D -> B",
    ),
    (loop("notes", '"open'), 2, None, None, "cannot be read from this row on|quotes"),
    (loop("notes", '"shut" again'), 2, None, None, "cannot be read from this row on"),
    (loop("notes", "høy").encode("latin-1"), 2, None, None, "byte 0xF8 is not UTF-8|UTF-8"),
    (loop("notes", "a\0b"), 2, None, None, "NUL"),
    (LOOPS.encode("utf-16"), None, None, None, "UTF-16|save the file as plain UTF-8"),
    (loop("notes", '"a\n\nb"').replace("TIC-2,c,", "TIC-2,,"), 5, "pv", "TIC-2", "is blank"),
    ("\r\n" + loop("kind", "x").replace("\n", "\r\n"), 3, "kind", "FIC-1", "'x'"),
    ("\r" + loop("kind", "x").replace("\n", "\r"), 3, "kind", "FIC-1", "'x'"),
]


def expect(
    fault: Fault, file: str, line: int | None, column: str | None, tag: str | None, words: str
) -> None:
    assert (fault.file, fault.line, fault.column, fault.tag) == (file, line, column, tag)
    message, at = str(fault), -1
    for word in words.split("|"):
        at = message.find(word, at + 1)
        assert at >= 0, f"{word!r} is not, in order, in {message!r}"


@pytest.mark.parametrize(("text", "line", "column", "tag", "words"), WRONG_LOOPS)
def test_each_fault_of_the_loops(
    tmp_path: Path,
    text: str | bytes,
    line: int | None,
    column: str | None,
    tag: str | None,
    words: str,
) -> None:
    (fault,) = faults_of(tmp_path, text, "tag,valid_from\n")
    expect(fault, "loops.csv", line, column, tag, words)


def spec(column: str, cell: str) -> str:
    return f"tag,valid_from,{column}\nTIC-2,2024-01-01,\nFIC-1,2024-01-01,{cell}\n"


def since(cell: str) -> str:
    return f"tag,valid_from\nFIC-1,{cell}\n"


WRONG_SPECS: list[tuple[str, int | None, str | None, str | None, str]] = [
    ("", 1, None, None, "is empty|tag, valid_from"),
    ("tag,rise_time_s\nFIC-1,3\n", 1, "valid_from", None, "is missing"),
    (spec("rise_time", "3"), 1, "rise_time", None, "unknown|did you mean 'rise_time_s'"),
    (spec("colour", "3"), 1, "colour", None, "unknown|known columns: tag, valid_from"),
    (spec("rise_time_s", "3,4"), 3, None, None, "the row has 4 cells"),
    ("tag,valid_from\n,2024-01-01\n", 2, "tag", None, "is blank"),
    ("tag,valid_from\nFIC-9,2024-01-01\n", 2, "tag", "FIC-9", "not in the loop register"),
    (since(""), 2, "valid_from", "FIC-1", "is blank|2024-03-31"),
    (since("31.03.2024"), 2, "valid_from", "FIC-1", "'31.03.2024' is not a date"),
    (since("20240331"), 2, "valid_from", "FIC-1", "is not a date"),
    (since("2024-02-30"), 2, "valid_from", "FIC-1", "no day or time of the calendar"),
    (since("2024-01-01T25:00"), 2, "valid_from", "FIC-1", "no day or time of the calendar"),
    (since("2016-12-31T23:59:60Z"), 2, "valid_from", "FIC-1", "leap second"),
    (since("2024-01-01T00:00:00+24:60"), 2, "valid_from", "FIC-1", "no day or time"),
    (since("0024-01-01"), 2, "valid_from", "FIC-1", "outside the years 1970 to 2200"),
    (spec("reason", "x") + "FIC-1,2023-12-31T23:00:00Z,y\n", 4, "valid_from", "FIC-1", "line 3"),
    (spec("rise_time_s", "0"), 3, "rise_time_s", "FIC-1", "0 is out of range|over 0"),
    (spec("settling_time_s", "-4"), 3, "settling_time_s", "FIC-1", "-4 is out of range"),
    (spec("overshoot_pct", "-0.1"), 3, "overshoot_pct", "FIC-1", "a number 0 or more"),
    (spec("peak_time_s", "12 s"), 3, "peak_time_s", "FIC-1", "'12 s' is not a number"),
    (spec("decay_ratio", '"0,25"'), 3, "decay_ratio", "FIC-1", "decimal comma|0.25"),
    (spec("steady_state_error_eu", "NaN"), 3, "steady_state_error_eu", "FIC-1", "finite"),
    (spec("min_step_eu", "-1"), 3, "min_step_eu", "FIC-1", "0 or more"),
    (spec("settling_band_pct", "0"), 3, "settling_band_pct", "FIC-1", "over 0, under 50"),
    (spec("settling_band_pct", "50"), 3, "settling_band_pct", "FIC-1", "over 0, under 50"),
]


@pytest.mark.parametrize(("text", "line", "column", "tag", "words"), WRONG_SPECS)
def test_each_fault_of_the_specs(
    tmp_path: Path, text: str, line: int | None, column: str | None, tag: str | None, words: str
) -> None:
    (fault,) = faults_of(tmp_path, specs=text)
    expect(fault, "specs.csv", line, column, tag, words)


def test_faults_of_both_files_come_in_one_message(tmp_path: Path) -> None:
    loops = "tag,pv,sp,criticality\nFIC-1,a,a,9\nTIC-2,,d,x\n"
    specs = "tag,valid_from,overshoot_pct\nFIC-3,soon,-1\n"
    found = faults_of(tmp_path, loops, specs)
    assert sorted((fault.file, fault.line, fault.column) for fault in found) == [
        ("loops.csv", 2, "criticality"),
        ("loops.csv", 2, "sp"),
        ("loops.csv", 3, "criticality"),
        ("loops.csv", 3, "pv"),
        ("specs.csv", 2, "overshoot_pct"),
        ("specs.csv", 2, "tag"),
        ("specs.csv", 2, "valid_from"),
    ]


def test_a_missing_file_is_a_fault_and_draws_no_others_along(tmp_path: Path) -> None:
    loops, specs = write(tmp_path, LOOPS, SPECS)
    loops.unlink()
    _, (fault,) = examine(loops, specs, WINDOWS, OSLO)
    assert (fault.file, fault.problem.startswith("there is no such file")) == ("loops.csv", True)
    _, (fault,) = examine(tmp_path, specs, WINDOWS, OSLO)
    assert "is a folder" in fault.problem


def test_one_fault_does_not_draw_others_along(tmp_path: Path) -> None:
    """A ragged loop row still names its loop; a file broken half-way claims nothing is missing."""
    assert len(faults_of(tmp_path, "tag,pv,sp\nFIC-1,a\nTIC-2,c,d\n")) == 1
    broken = "tag,pv,sp,cascade_primary\nTIC-2,c,d,FIC-1\n" + '"FIC-1,a,b,\n'
    assert len(faults_of(tmp_path, broken)) == 1
    twice = loop("notes", "ø").replace(",c,d,", ",c,d,å").encode("latin-1")
    (fault,) = faults_of(tmp_path, twice)
    assert "and on 1 more line" in fault.problem


def test_what_is_allowed(tmp_path: Path) -> None:
    """One pv of two loops; a primary's output as the secondary's setpoint; blank rows and tails."""
    loops = (
        "tag,pv,sp,output,cascade_primary,,\n\n"
        "FIC-1,a,t.out,,TIC-2,,\n,,,,,,\nTIC-2,c,d,t.out,,,,,,\nTIC-3,c,e,,,,\n"
    )
    tags = [each.tag for each in register_of(tmp_path, loops).loops]
    assert tags == ["FIC-1", "TIC-2", "TIC-3"]
    assert register_of(tmp_path, specs="tag,valid_from\n").specs == ()


def test_hashes_follow_content_only(tmp_path: Path) -> None:
    def hashes(loops: str | bytes, specs: str | bytes = SPECS) -> tuple[str, str]:
        found = register_of(tmp_path, loops, specs)
        return found.loops_hash, found.specs_hash

    plain = hashes(LOOPS)
    assert hashes(LOOPS.replace("\n", "\r\n"), SPECS.replace("\n", "\r\n")) == plain
    assert hashes(LOOPS.replace("\n", "\r")) == plain
    assert hashes(b"\xef\xbb\xbf" + LOOPS.encode(), b"\xef\xbb\xbf" + SPECS.encode()) == plain
    assert hashes(LOOPS.rstrip("\n")) == plain
    assert hashes(LOOPS.replace("a.pv", '"a.pv"')) == plain
    other = hashes(LOOPS.replace("a.pv", "z.pv"))
    assert (other[0] != plain[0], other[1] == plain[1]) == (True, True)
    other = hashes(LOOPS, SPECS.replace("2024", "2025"))
    assert (other[0] == plain[0], other[1] != plain[1]) == (True, True)


cell = st.text(st.characters(codec="utf-8", exclude_characters="\0\r"), max_size=12)


@given(st.lists(st.tuples(cell, cell), max_size=8), st.sampled_from(["\n", "\r\n"]))
def test_any_cells_come_back_with_the_line_they_start_on(
    tmp_path_factory: pytest.TempPathFactory, pairs: list[tuple[str, str]], end: str
) -> None:
    """Against the standard library's own CSV writer (RFC 4180 quoting)."""
    out = io.StringIO(newline="")
    writer = csv.writer(out, lineterminator="\n", quoting=csv.QUOTE_ALL)
    writer.writerow(("tag", "pv", "sp", "x", "y"))
    expected = []
    for first, second in pairs:
        line = out.getvalue().count("\n") + 1
        writer.writerow(("T", "a", "b", first, second))
        expected.append((line, first.strip(), second.strip()))
    path = tmp_path_factory.getbasetemp() / "any.csv"
    path.write_bytes(out.getvalue().replace("\n", end).encode())
    table = read_table(path, LOOP_COLUMNS)
    assert table.faults == ()
    assert [(row.line, row.cells["x"], row.cells["y"]) for row in table.rows] == expected

"""Time stamps against RFC 3339, the IANA time zone database, datetime and pandas."""

from datetime import UTC, datetime, timedelta
from fractions import Fraction
from typing import Any
from zoneinfo import ZoneInfo

import numpy as np
import pandas as pd
import pyarrow as pa
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from audit.exports import zones
from audit.exports.clock import Told, stamps
from audit.records import ExportSource

EPOCH = datetime(1970, 1, 1, tzinfo=UTC)


def source(time_format: str = "iso8601", zone: str = "UTC", decimal: str = ".") -> ExportSource:
    return ExportSource("x", "*", time_format=time_format, timezone=zone, decimal=decimal)


def us_of(text: str) -> int:
    return (datetime.fromisoformat(text) - EPOCH) // timedelta(microseconds=1)


ODD_STAMPS = [
    *(None, "", " ", "x", "2026-03-14", "2026-03-14T08:00:00Z", "2026-10-25T02:30", "1700000000.5"),
    *("2026-03-29T02:30", "2026-10-25 03:30", "20260314T0800Z", "1", "1e9"),
]


def one(text: object, kind: ExportSource) -> int | None:
    read = stamps(pa.array([text]), kind)
    return int(read.us[0]) if read.told[0] == Told.FINE else None


# RFC 3339 section 5.8, examples (from memory), and forms of its ABNF
@pytest.mark.parametrize(
    ("text", "utc"),
    [
        ("1985-04-12T23:20:50.52Z", "1985-04-12T23:20:50.520+00:00"),
        ("1996-12-19T16:39:57-08:00", "1996-12-20T00:39:57+00:00"),
        ("1985-04-12t23:20:50.52z", "1985-04-12T23:20:50.520+00:00"),
        ("1996-12-19 16:39:57-08:00", "1996-12-20T00:39:57+00:00"),
        ("1996-12-19T16:39:57-00:00", "1996-12-19T16:39:57+00:00"),
        ("1996-12-19T16:39:57-0800", "1996-12-20T00:39:57+00:00"),
        ("1996-12-19T16:39:57 +05:30", "1996-12-19T11:09:57+00:00"),
        ("19961219T163957Z", "1996-12-19T16:39:57+00:00"),
        ("1996-12-19T16:39:57,25Z", "1996-12-19T16:39:57.25+00:00"),
        ("1996-12-19T16:39", "1996-12-19T16:39:00+00:00"),
        ("1996-12-19", "1996-12-19T00:00:00+00:00"),
        (" 1996-12-19T16:39:57.1 ", "1996-12-19T16:39:57.1+00:00"),
    ],
)
def test_iso_forms(text: str, utc: str) -> None:
    assert one(text, source()) == us_of(utc)


@pytest.mark.parametrize(
    "text",
    [
        "1990-12-31T23:59:60Z",  # RFC 3339's leap second: no place in UTC microseconds
        "1990-12-31T15:59:60-08:00",
        "2026-02-30T00:00:00Z",
        "2026-13-01T00:00:00Z",
        "2026-01-01T24:00:00Z",
        "2026-01-01T00:00:00+24:00",
        "2026-1-1",
        "01/02/2026 00:00",
        "1969-12-31T23:59:59Z",
        "2200-01-01T00:00:00Z",
        "9999-12-31T00:00:00",
        "1600-01-01",
        "1700000000",
        "２０２６-01-01",
        "now",
        "",
        None,
    ],
)
def test_what_is_no_stamp(text: str | None) -> None:
    assert one(text, source()) is None


def test_mixed_precision_offsets_and_bad_ones_cost_only_themselves() -> None:
    texts = [
        "2026-03-14T08:00:00Z",
        "2026-03-14 09:00:00.5+01:00",
        "rubbish",
        "2026-03-14T08:00:01.123456",
        "2026-02-30T08:00:00Z",
        "20260314T080002Z",
    ]
    read = stamps(pa.array(texts), source())
    assert read.told.tolist() == [Told.FINE, Told.FINE, Told.BAD, Told.FINE, Told.BAD, Told.FINE]
    start = us_of("2026-03-14T08:00:00+00:00")
    fine = read.us[read.told == Told.FINE] - start
    assert fine.tolist() == [0, 500_000, 1_123_456, 2_000_000]


# rounding to the microsecond, half to even (IEEE 754's roundTiesToEven on the decimal fraction)
@pytest.mark.parametrize(
    ("fraction", "us"),
    [
        ("1234564", 123456),
        ("1234565", 123456),
        ("1234575", 123458),
        ("12345650000000001", 123457),
        ("123456500", 123456),
        ("123456501", 123457),
        ("9999995", 1_000_000),
    ],
)
def test_rounding_is_the_same_in_every_format(fraction: str, us: int) -> None:
    second = us_of("2026-03-14T08:00:00+00:00")
    assert one(f"2026-03-14T08:00:00.{fraction}Z", source()) == second + us
    seconds = f"{second // 1_000_000}.{fraction}"
    assert one(seconds, source("epoch_s")) == second + us
    assert one(seconds.replace(".", ","), source("epoch_s", decimal=",")) == second + us
    for unit, shift in (("epoch_ms", 3), ("epoch_us", 6), ("epoch_ns", 9)):
        digits = fraction.ljust(9, "0")
        text = f"{second // 1_000_000}{digits[:shift]}.{digits[shift:] or '0'}"
        assert one(text, source(unit)) == second + us


@pytest.mark.parametrize(
    "text", ["nan", "1e30", "-1", "1e999999999", "9" * 60, "1_0", "x", "", None]
)
def test_what_is_no_epoch(text: str | None) -> None:
    read = stamps(pa.array([text, "1700000000"]), source("epoch_s"))
    assert read.told.tolist() == [Told.BAD, Told.FINE]
    assert read.us[1] == 1_700_000_000_000_000


@pytest.mark.parametrize(
    ("column", "time_format"),
    [
        (pa.array([1_700_000_000], pa.int64()), "epoch_s"),
        (pa.array([1_700_000_000_000], pa.int64()), "epoch_ms"),
        (pa.array([1_700_000_000_000_000], pa.int64()), "epoch_us"),
        (pa.array([1_700_000_000_000_000_499], pa.int64()), "epoch_ns"),
        (pa.array([1_700_000_000.0]), "epoch_s"),
        (pa.array([1.7e18]), "epoch_ns"),
        (pa.array([1_700_000_000], pa.timestamp("s")), "iso8601"),
        (pa.array([1_700_000_000_000], pa.timestamp("ms", tz="Asia/Tokyo")), "iso8601"),
        (pa.array([1_700_000_000_000_000_500], pa.timestamp("ns", tz="UTC")), "epoch_s"),
        (pa.array(["2023-11-14T22:13:20Z"]).dictionary_encode(), "iso8601"),
        (pa.array(["2023-11-14T22:13:20Z"], pa.large_string()), "iso8601"),
        (pa.array([20231114221320], pa.int64()), "%Y%m%d%H%M%S"),
    ],
)
def test_typed_columns(column: Any, time_format: str) -> None:
    read = stamps(column, source(time_format))
    assert read.told.tolist() == [Told.FINE]
    assert read.us.tolist() == [1_700_000_000_000_000]


@pytest.mark.parametrize(
    "column",
    [
        pa.array([None], pa.null()),
        pa.array([True]),
        pa.array([float("nan")]),
        pa.array([1e300]),
        pa.array([2**62], pa.int64()),
        pa.array([None], pa.timestamp("ns")),
        pa.array([2**62], pa.timestamp("s")),
    ],
)
def test_typed_columns_without_a_stamp(column: Any) -> None:
    assert stamps(column, source("epoch_s")).told.tolist() == [Told.BAD]


@pytest.mark.parametrize(
    "pattern", ["%d/%m/%Y %H:%M:%S.%f", "%Y%m%d%H%M%S%f", "%d-%b-%y %I:%M:%S %p", "%d.%m.%Y %H:%M"]
)
def test_patterns_as_datetime_strptime(pattern: str) -> None:
    at = datetime(2026, 11, 3, 17, 4, 5, 123456, tzinfo=UTC)
    text = at.strftime(pattern)
    expected = datetime.strptime(text, pattern).replace(tzinfo=UTC)
    assert one(text, source(pattern)) == (expected - EPOCH) // timedelta(microseconds=1)
    assert one(text + "?", source(pattern)) is None


def test_pattern_with_offsets_ignores_the_zone() -> None:
    kind = source("%d/%m/%Y %H:%M:%S%z", "Europe/Paris")
    assert one("03/11/2026 17:04:05+0200", kind) == us_of("2026-11-03T15:04:05+00:00")


@pytest.mark.parametrize(
    ("pattern", "says"),
    [("%d/%m/%Y %Z", "no strptime"), ("mixed", "no strptime"), ("%Q", "bad directive")],
)
def test_patterns_that_cannot_be_followed(pattern: str, says: str) -> None:
    with pytest.raises(ValueError, match=says):
        stamps(pa.array(["03/11/2026 CET"]), source(pattern))


# IANA tz database: Europe/Paris 2024, the autumn change at 01:00Z and the spring change at 01:00Z
def test_the_repeated_hour_is_told_by_the_order_of_the_rows() -> None:
    walls = ["01:30", "02:00", "02:30", "02:59:59.999999", "02:00", "02:30", "03:00"]
    read = stamps(pa.array([f"2024-10-27T{wall}" for wall in walls]), source(zone="Europe/Paris"))
    assert read.told.tolist() == [Told.FINE] * 7
    utc = ["23:30", "00:00", "00:30", "00:59:59.999999", "01:00", "01:30", "02:00"]
    days = ["2024-10-26"] + ["2024-10-27"] * 6
    expected = [us_of(f"{day}T{at}+00:00") for day, at in zip(days, utc, strict=True)]
    assert read.us.tolist() == expected
    paris = ZoneInfo("Europe/Paris")
    folds = [datetime(2024, 10, 27, 2, 30, tzinfo=paris, fold=fold) for fold in (0, 1)]
    assert [read.us[2], read.us[5]] == [
        (fold - EPOCH) // timedelta(microseconds=1) for fold in folds
    ]


@pytest.mark.parametrize(
    "walls",
    [
        ["01:30", "02:30", "03:30"],  # once through: either hour
        ["02:00", "02:30"],
        ["02:30", "02:30"],
        ["02:40", "02:10", "02:50", "02:20"],  # back twice
        ["02:40", "02:10", "03:30", "01:00"],  # not in the order of recording
        ["03:10", "02:50", "02:30", "01:30"],  # newest first
    ],
)
def test_the_repeated_hour_is_refused_where_the_order_does_not_tell(walls: list[str]) -> None:
    read = stamps(pa.array([f"2024-10-27T{wall}" for wall in walls]), source(zone="Europe/Paris"))
    told = [Told.REPEATED if wall.startswith("02") else Told.FINE for wall in walls]
    assert read.told.tolist() == told


def test_order_counts_by_group() -> None:
    walls = ["02:10", "02:50", "02:40", "02:10", "02:20", "03:00"]
    groups = np.array([0, 1, 0, 1, 0, 1], np.int64)
    column = pa.array([f"2024-10-27T{wall}" for wall in walls])
    read = stamps(column, source(zone="Europe/Paris"), groups)
    # group 0: 02:10 02:40 02:20, group 1: 02:50 02:10 03:00: each goes back once
    start = us_of("2024-10-27T00:00:00+00:00")
    minutes = [10, 50, 40, 70, 80, 120]
    assert read.us.tolist() == [start + minute * 60_000_000 for minute in minutes]
    alone = stamps(column, source(zone="Europe/Paris"))
    assert alone.told.tolist() == [Told.REPEATED] * 5 + [Told.FINE]


def test_stamps_with_an_offset_need_no_order() -> None:
    texts = ["2024-10-27T02:30+01:00", "2024-10-27T02:30+02:00", "2024-10-27T02:30"]
    read = stamps(pa.array(texts), source(zone="Europe/Paris"))
    assert read.told.tolist() == [Told.FINE, Told.FINE, Told.REPEATED]
    assert read.us[0] - read.us[1] == 3_600_000_000


def test_two_autumns_in_one_file() -> None:
    texts = [
        f"{day}T{wall}"
        for day in ("2023-10-29", "2024-10-27")
        for wall in ("02:00", "02:30", "02:00", "02:30", "03:00")
    ]
    read = stamps(pa.array(texts), source(zone="Europe/Paris"))
    assert set(read.told.tolist()) == {Told.FINE}
    assert np.diff(read.us[:5]).tolist() == [1_800_000_000] * 4
    assert np.diff(read.us[5:]).tolist() == [1_800_000_000] * 4


def test_times_the_clock_skips() -> None:
    # IANA: Europe/Paris 2024-03-31T02:30 does not exist
    walls = ["01:59:59.999999", "02:00", "02:30", "02:59:59", "03:00"]
    read = stamps(pa.array([f"2024-03-31T{wall}" for wall in walls]), source(zone="Europe/Paris"))
    assert read.told.tolist() == [Told.FINE, *[Told.MISSING] * 3, Told.FINE]
    assert read.us[4] - read.us[0] == 1


def test_native_wall_clock_stamps_go_through_the_zone() -> None:
    wall = us_of("2024-07-01T12:00:00+00:00")
    read = stamps(pa.array([wall], pa.timestamp("us")), source(zone="Europe/Paris"))
    assert read.us.tolist() == [wall - 2 * 3_600_000_000]


@pytest.mark.parametrize(
    "name",
    ["Europe/Oslo", "America/New_York", "Australia/Lord_Howe", "Asia/Kolkata", "Africa/Casablanca",
     "Asia/Tehran", "Pacific/Apia", "UTC"],
)  # fmt: skip
def test_zones_as_zoneinfo_has_them(name: str) -> None:
    """Every half hour of wall time over four years, against datetime's fold (PEP 495)."""
    zone = ZoneInfo(name)
    start = datetime(2009, 12, 1, tzinfo=UTC)
    times = [start + timedelta(minutes=30 * step) for step in range(0, 48 * 365 * 4, 5)]
    wall = np.array([(at - EPOCH) // timedelta(microseconds=1) for at in times], np.int64)
    found = zones.placed(wall, zone)
    for place, at in enumerate(times):
        first, second = (
            (at.replace(tzinfo=zone, fold=fold) - EPOCH) // timedelta(microseconds=1)
            for fold in (0, 1)
        )
        assert found.repeated[place] == (second > first)
        assert found.missing[place] == (second < first)
        if not found.missing[place]:
            assert (found.earlier[place], found.later[place]) == (first, second)


@settings(max_examples=30, deadline=None)
@given(
    st.lists(
        st.tuples(
            st.datetimes(
                datetime.fromisoformat("1970-01-02"), datetime.fromisoformat("2199-12-30")
            ),
            st.integers(-23 * 60, 23 * 60),
            st.sampled_from(["T", " ", "t"]),
            st.integers(0, 9),
        ),
        min_size=1,
        max_size=20,
    )
)
def test_iso_as_pandas_reads_it(parts: list[tuple[datetime, int, str, int]]) -> None:
    texts = []
    for at, offset, between, digits in parts:
        sign, size = "-" if offset < 0 else "+", abs(offset)
        fraction = f"{at.microsecond:06}123"[:digits]
        point = "." if digits else ""
        zone = f"{sign}{size // 60:02}:{size % 60:02}"
        texts.append(f"{at:%Y-%m-%d}{between}{at:%H:%M:%S}{point}{fraction}{zone}")
    read = stamps(pa.array(texts), source())
    for text, us in zip(texts, read.us.tolist(), strict=True):
        expected = pd.Timestamp(text.replace("t", "T"))
        exact = Fraction(expected.value if expected.unit == "ns" else expected.as_unit("ns").value)
        assert us == round(exact / 1000)
    assert set(read.told.tolist()) == {Told.FINE}


@given(st.lists(st.sampled_from(ODD_STAMPS), max_size=20))
def test_coded_stamps_read_as_plain_ones(texts: list[str | None]) -> None:
    plain = pa.array(texts, pa.string())
    for kind in (source(zone="Europe/Paris"), source("epoch_s"), source("%Y-%m-%d")):
        read, coded = stamps(plain, kind), stamps(plain.dictionary_encode(), kind)
        assert read.told.tolist() == coded.told.tolist()
        assert read.us.tolist() == coded.us.tolist()

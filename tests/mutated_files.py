"""Export files of every format, damaged in many ways; each has a number and is always the same."""

from __future__ import annotations

import io
import random
from collections.abc import Callable, Mapping, Sequence
from dataclasses import dataclass, replace
from typing import Any

import numpy as np
import pyarrow as pa
import pyarrow.parquet as pq
from export_files import PACKED

from audit.records import ExportSource

TAGS = {"F1.PV": False, "F1.SP": False, "F1.MODE": True, "absent": False}
"""Those asked for, and which of them are modes."""
LAYOUTS = ("wide", "narrow")
ENDINGS = (*PACKED, ".parquet")

# fmt: off
WORDS = (
    "", "-", "+", ".", "e5", "Bad", "I/O Timeout", "NaN", "-inf", "TRUE", "1,5", "1.234,5",
    "1e400", "-1e400", "1e-400", "1e999999999999", "9" * 400, "1e30", "1.1e30", "3.4e38", "0x1F",
    "9223372036854775808", "18446744073709551616", "1" * 39 + "." + "1" * 20, "\u0663", " 7\t",
    '"', '""', '"a""b"', '"a\nb"', '"a,b"', '"a;b"', 'x"y', "a" * 300, "é" * 150, "\0", "=1+1",
    "1969-12-31T23:59:59Z", "9999-12-31T23:59:59.999999999Z", "0000-00-00", "2200-01-01T00:00:00Z",
    "2024-10-27T02:30:00", "2024-03-31T02:30:00", "2024-10-27 02:30", "2026-03-14T08:00:60Z",
    "2026-03-14T08:00:00+99:99", "14.03.2026 08:00:00", "2026-03-14T08:00:00.1234567891234Z",
    "1773475200", "1773475200000", "1773475200.5", "-1", "1e18", "253402300800", "20260314T080000Z",
    "192", "0xC0", "-2147483648", "4294967296", "Uncertain", "good", "65536", "192.0", "\ufeff",
)
MARKS = (
    b'"', b"\n", b"\r", b"\r\n", b"\0", b",", b";", b"\t", b"\xef\xbb\xbf", b"\xff", b"\x1a",
    b"\xff\xfe", b"\xc3", b"\xed\xa0\x80", b"\xf4\x90\x80\x80", b'""', b'"\n"', b",,,,", b"\n\n\n",
)
# fmt: on
DECLARED: tuple[Mapping[str, Any], ...] = (
    {},
    {},
    {"timezone": "Europe/Paris"},
    {"timezone": "Europe/Paris", "thousands": ",", "true_words": ("Bad",), "false_words": ("-",)},
    {"delimiter": ";", "decimal": ",", "thousands": "."},
    {"delimiter": "|", "decimal": ","},
    {"delimiter": " ", "time_format": "epoch_us"},
    {"delimiter": "\t", "thousands": "'"},
    {"time_format": "epoch_s"},
    {"time_format": "epoch_ms"},
    {"time_format": "epoch_ns", "delimiter": ";", "decimal": ","},
    {"time_format": "%Y-%m-%dT%H:%M:%SZ"},
    {"time_format": "%Y-%m-%dT%H:%M:%S%z"},
    {"time_format": "%d.%m.%Y %H:%M"},
)
SCHEMES = ("words", "words", "opc_da", "opc_ua")


@dataclass(frozen=True)
class Damaged:
    """One file to be read: its bytes as stored, and how it is declared."""

    name: str
    stored: bytes
    source: ExportSource


def stamps(rng: random.Random, rows: int, declared: Mapping[str, Any]) -> list[str]:
    """As the declaration has them, in order, some of them in the hour that a clock repeats."""
    hour = rng.choice(["2026-03-14T08", "2024-10-27T02", "2024-03-31T01"])
    if str(declared.get("time_format", "")).startswith("epoch"):
        digits = {"epoch_s": "", "epoch_ms": "000", "epoch_us": "0" * 6, "epoch_ns": "0" * 9}
        return [f"{1_773_475_200 + s}{digits[declared['time_format']]}" for s in range(rows)]
    end = "" if "timezone" in declared and rng.random() < 0.7 else "Z"
    return [f"{hour}:{s // 60:02}:{s % 60:02}{end}" for s in range(0, 7 * rows, 7)]


def table(rng: random.Random, layout: str, declared: Mapping[str, Any]) -> list[list[str]]:
    """Header and rows of a file that nothing is wrong with."""
    rows = rng.randint(0, 24)
    mark = declared.get("decimal", ".")
    values = [f"{rng.gauss(50, 20):.{rng.randint(0, 17)}f}".replace(".", mark) for _ in range(rows)]
    modes = ["AUTO" if rng.random() < 0.8 else "MAN" for _ in range(rows)]
    times = stamps(rng, rows, declared)
    if layout == "wide":
        head = ["timestamp", "F1.PV", "F1.SP", "F1.MODE", "other"]
        return [head, *map(list, zip(times, values, values[::-1], modes, values, strict=True))]
    good = rng.choice(["Good", "192", "0"])
    return [
        ["timestamp", "tag", "value", "quality"],
        *(
            [time, tag, cell, good]
            for time, value, mode in zip(times, values, modes, strict=True)
            for tag, cell in (("F1.PV", value), ("F1.MODE", mode), ("other", value))
        ),
    ]


def with_odd_cells(rng: random.Random, rows: list[list[str]]) -> list[list[str]]:
    """Cells, names and rows replaced, doubled, lost or moved."""
    rows = [list(row) for row in rows]
    for _ in range(rng.choice([0, 1, 1, 3, 10])):
        at = rng.randint(min(1, len(rows) - 1), len(rows) - 1)
        row = rows[at]
        match rng.randrange(9):
            case 0 | 1 | 2 | 3 if row:
                row[rng.randrange(len(row))] = rng.choice(WORDS)
            case 4 if row:
                row.pop(rng.randrange(len(row)))
            case 5:
                row.insert(rng.randint(0, len(row)), rng.choice(WORDS))
            case 6:
                rows.insert(rng.randint(0, len(rows)), list(row))
            case 7:
                other = rng.randint(min(1, at), len(rows) - 1)
                rows[at], rows[other] = rows[other], rows[at]
            case _ if rows[0] and rng.random() < 0.5:
                rows[0][rng.randrange(len(rows[0]))] = rng.choice([*WORDS, *rows[0]])
    return rows


def csv_text(rng: random.Random, rows: Sequence[Sequence[str]], delimiter: str) -> bytes:
    newline = rng.choice(["\n", "\n", "\r\n", "\r"])
    quoted = rng.random() < 0.2
    lines = (
        delimiter.join(f'"{cell}"' if quoted and '"' not in cell else cell for cell in row)
        for row in rows
    )
    text = newline.join(lines) + rng.choice([newline, ""])
    code = "utf-8" if rng.random() < 0.95 else rng.choice(["utf-16", "latin-1", "utf-8-sig"])
    return text.encode(code, "replace")


def with_odd_octets(rng: random.Random, whole: bytes, first: int = 0) -> bytes:
    """Octets from ``first`` on flipped, put in, taken out, doubled, moved or cut off."""
    octets = bytearray(whole)
    for _ in range(rng.choice([0, 1, 1, 2, 5])):
        at = rng.randint(min(first, len(octets)), len(octets))
        to = min(len(octets), at + rng.randint(1, 60))
        match rng.randrange(9):
            case 0 | 1 if at < len(octets):
                octets[at] ^= 1 << rng.randrange(8)
            case 2 if at < len(octets):
                octets[at] = rng.choice([0, 255, 34, 10, rng.randrange(256)])
            case 3 | 4:
                octets[at:at] = rng.choice(MARKS) * rng.choice([1, 1, 2, 50])
            case 5:
                octets[at:at] = octets[at:to]
            case 6:
                del octets[at:to]
            case 7:
                block = octets[at:to]
                del octets[at:to]
                place = rng.randint(0, len(octets))
                octets[place:place] = block
            case _ if rng.random() < 0.4:
                del octets[at:]
    return bytes(octets)


def _odd_arrays(rng: random.Random, cells: Sequence[str]) -> Any:
    """A Parquet column of some type, made of the cells where it can be."""
    count = len(cells)
    wholes = [rng.choice([None, 0, -1, 2**31, 1_773_475_200]) for _ in range(count)]
    makers: Sequence[Callable[[], Any]] = (
        lambda: pa.array(list(cells)).dictionary_encode(),
        lambda: pa.array(list(cells), pa.large_string()),
        lambda: pa.array([rng.randbytes(3) for _ in cells], pa.binary()),
        lambda: pa.array([rng.randbytes(4) for _ in cells], pa.binary(4)),
        lambda: pa.array(wholes, pa.int64()),
        lambda: pa.array([rng.choice([None, 2**64 - 1]) for _ in cells], pa.uint64()),
        lambda: pa.array([rng.choice([float("nan"), 1e300, -0.0]) for _ in cells], pa.float64()),
        lambda: pa.array([np.float16(1.5)] * count, pa.float16()),
        lambda: pa.array([rng.choice([None, True]) for _ in cells], pa.bool_()),
        lambda: pa.nulls(count),
        lambda: pa.array([[1, None]] * count, pa.list_(pa.int32())),
        lambda: pa.array([{"a": 1}] * count, pa.struct([("a", pa.int8())])),
        lambda: pa.array([[("k", 1)]] * count, pa.map_(pa.string(), pa.int8())),
        lambda: pa.array(wholes, rng.choice([pa.timestamp("s", "UTC"), pa.timestamp("ns", "UTC")])),
        lambda: pa.array([rng.choice([2**63 - 1, -(2**63), 0]) for _ in cells], pa.timestamp("us")),
        lambda: pa.array([1_773_475_200_000_000 + 7 * i for i in range(count)], pa.timestamp("us")),
        lambda: pa.array([rng.choice([None, 20_000, -700_000]) for _ in cells], pa.date32()),
        lambda: pa.array(wholes, pa.int64()).cast(pa.duration("s")),
        lambda: pa.array([1] * count, pa.time64("us")),
        lambda: pa.array(wholes, pa.int64()).cast(pa.decimal128(38, 6)),
        lambda: pa.array(wholes, pa.int64()).cast(pa.decimal256(60, 20)),
    )
    return rng.choice(makers)()


def parquet_bytes(rng: random.Random, rows: Sequence[Sequence[str]]) -> bytes:
    """The rows as a Parquet file, some columns of odd types; rows that are ragged are cut."""
    head, *body = rows
    width = min(map(len, rows))
    columns = [[row[at] or None for row in body] for at in range(width)]
    odd = rng.choice([0.0, 0.0, 0.2])
    arrays = [
        _odd_arrays(rng, [cell or "" for cell in column])
        if rng.random() < odd
        else pa.array(column, pa.string())
        for column in columns
    ]
    sink = io.BytesIO()
    pq.write_table(
        pa.Table.from_arrays(arrays, names=[str(name) for name in head[:width]]),
        sink,
        compression=rng.choice(["none", "none", "snappy", "zstd", "gzip"]),
        use_dictionary=rng.random() < 0.5,
        row_group_size=rng.choice([1, 7, 1000]),
        data_page_version=rng.choice(["1.0", "2.0"]),
        store_schema=rng.random() < 0.7,
        use_deprecated_int96_timestamps=rng.random() < 0.1,
        write_page_checksum=rng.random() < 0.1,
    )
    return sink.getvalue()


def damaged(layout: str, ending: str, seed: int) -> Damaged:
    """The damaged file of a format with this number."""
    rng = random.Random(f"{layout} {ending} {seed}")
    declared = dict(rng.choice(DECLARED))
    narrow = {"layout": "narrow", "quality": "quality", "quality_scheme": rng.choice(SCHEMES)}
    source = ExportSource("dcs", f"a{ending}", **declared | (narrow if layout == "narrow" else {}))
    rows = with_odd_cells(rng, table(rng, layout, declared))
    if ending == ".parquet":
        whole = parquet_bytes(rng, rows)
        footer = len(whole) - 8 - int.from_bytes(whole[-8:-4], "little")
        if rng.random() < 0.4:
            return Damaged("a.parquet", whole, replace(source, format="parquet"))
        stored = with_odd_octets(rng, whole, rng.choice([0, 0, 0, footer, len(whole) - 8]))
        return Damaged("a.parquet", stored, replace(source, format="parquet"))
    text = with_odd_octets(rng, csv_text(rng, rows, source.delimiter))
    stored = PACKED[ending](text)
    if ending and rng.random() < 0.3:
        stored = with_odd_octets(rng, stored)
    return Damaged(f"a.csv{ending}", stored, source)

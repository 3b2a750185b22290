"""Export files for tests: one written, found and read, with the checks that hold for every file."""

import bz2
import csv
import gzip
import io
import lzma
from collections.abc import Callable, Mapping
from dataclasses import dataclass, fields, replace
from hashlib import sha256
from pathlib import Path
from tempfile import TemporaryDirectory
from typing import Any

import numpy as np
import pandas as pd
import zstandard

from audit.exports import discover, read
from audit.records import ExportFile, ExportRead, ExportSource, RawSamples

WANTED = {"FIC-1.PV": False, "FIC-1.SP": False, "FIC-1.MODE": True, "absent": False}
WIDE = """timestamp,FIC-1.PV,FIC-1.SP,FIC-1.MODE,other
2026-03-14T08:00:00Z,1.5,50,AUTO,1
2026-03-14T08:00:01Z,,50.0,1,2
2026-03-14T08:00:02.5Z,-2e-3,55,1.0,3
2026-03-14T08:00:04+00:00,0.1,,MAN,
"""
NARROW = "timestamp,tag,value,quality\n"
START_US = 1_773_475_200_000_000


def a_source(folder: Path, **declared: Any) -> ExportSource:
    return replace(ExportSource("dcs", "*", folder=str(folder)), **declared)


@dataclass(frozen=True, eq=False)
class WholeRead(ExportRead):
    """What an export holds, its samples in memory."""

    columns: Mapping[str, RawSamples]


def read_whole(file: ExportFile, source: ExportSource, wanted: Mapping[str, bool]) -> WholeRead:
    """One file through ``read``."""
    with TemporaryDirectory() as scratch:
        got = read(file, source, wanted, Path(scratch) / "samples")
        columns = {tag: samples.load() for tag, samples in got.columns.items()}
        told = {item.name: getattr(got, item.name) for item in fields(ExportRead)}
        return WholeRead(**told | {"columns": columns})


def read_bytes(
    folder: Path,
    content: bytes | str,
    name: str = "a.csv",
    wanted: Mapping[str, bool] = WANTED,
    **declared: Any,
) -> WholeRead:
    """One file through discover and read; its account must balance."""
    data = content.encode() if isinstance(content, str) else content
    (folder / name).write_bytes(data)
    source = a_source(folder, files=name, **declared)
    (file,) = discover(source)
    got = read_whole(file, source, wanted)
    assert got.account.balance == 0
    assert got.content_hash == sha256(data).hexdigest()
    for raw in got.columns.values():
        samples = raw.samples
        assert (np.diff(samples.t_us) > 0).all()
        assert np.array_equal(np.isnan(samples.value), ~samples.good)
    return got


def as_rows(raw: RawSamples) -> list[tuple[float, float | str | None]]:
    """(seconds after START_US, value or text, None where bad)."""
    rows: list[tuple[float, float | str | None]] = []
    samples = raw.samples
    for t_us, value, good in zip(samples.t_us, samples.value, samples.good, strict=True):
        cell = None if not good else raw.texts[int(value)] if raw.texts else float(value)
        rows.append(((int(t_us) - START_US) / 1e6, cell))
    return rows


def narrow_of(wide: str, quality: str = "Good") -> str:
    rows = list(csv.DictReader(io.StringIO(wide)))
    lines = [
        f"{row['timestamp']},{tag},{cell},{quality}"
        for row in rows
        for tag, cell in row.items()
        if tag != "timestamp"
    ]
    return "\n".join(["timestamp,tag,value,quality", *lines]) + "\n"


def parquet_of(text: str) -> bytes:
    """The texts of a CSV file as a Parquet file, blanks missing (by pandas)."""
    table = pd.read_csv(io.StringIO(text), dtype=str, keep_default_na=False)
    sink = io.BytesIO()
    table.where(table != "", None).to_parquet(sink)
    return sink.getvalue()


def zst_in_frames(data: bytes) -> bytes:
    """Two frames, one after the other, as appending tools leave them."""
    packed = zstandard.ZstdCompressor()
    return packed.compress(data[:40]) + packed.compress(data[40:])


PACKED: dict[str, Callable[[bytes], bytes]] = {
    "": bytes,
    ".gz": gzip.compress,
    ".bz2": bz2.compress,
    ".xz": lzma.compress,
    ".zst": zst_in_frames,
}


def check_wide(got: WholeRead) -> None:
    assert got.named == ("FIC-1.MODE", "FIC-1.PV", "FIC-1.SP")
    assert {tag: as_rows(raw) for tag, raw in got.columns.items()} == {
        "FIC-1.MODE": [(0.0, "AUTO"), (1.0, "1"), (2.5, "1"), (4.0, "MAN")],
        "FIC-1.PV": [(0.0, 1.5), (2.5, -0.002), (4.0, 0.1)],
        "FIC-1.SP": [(0.0, 50.0), (1.0, 50.0), (2.5, 55.0)],
    }
    assert (got.first_us, got.last_us) == (START_US, START_US + 4_000_000)
    assert got.account.read == 16
    assert (got.account.taken, got.account.blank) == (10, 2)
    assert got.account.unregistered == 4
    assert got.faults == ()

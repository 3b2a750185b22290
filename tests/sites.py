"""Small sites for tests: known responses written out as historian exports, and a folder to audit.

A ``Plant`` is a set of columns on common stamps; it can be written wide or narrow, as CSV (plain or
compressed) or Parquet, in one file or cut into many.
"""

from __future__ import annotations

import bz2
import gzip
import json
import lzma
from collections.abc import Callable, Iterator, Mapping, Sequence
from contextlib import contextmanager
from dataclasses import dataclass, field
from datetime import UTC, datetime, timedelta
from pathlib import Path
from typing import Any, cast

import numpy as np
import pyarrow as pa
import pyarrow.parquet as pq
import zstandard
from numpy.typing import NDArray

from audit import nightly
from audit.run_report import RunReport
from audit.site import open_site
from audit.store import Store, open_store
from audit.store.dump import dump

START = datetime(2026, 3, 1, 6, 0, tzinfo=UTC)
NOW = datetime(2026, 3, 3, 6, 0, tzinfo=UTC)


@dataclass(frozen=True, eq=False)
class Plant:
    """Columns by historian tag on common stamps, seconds after ``start``; numbers or mode words."""

    t_s: NDArray[np.float64]
    columns: Mapping[str, Sequence[float] | Sequence[str] | NDArray[np.float64]]
    start: datetime = START

    def stamps(self) -> list[str]:
        return [
            (self.start + timedelta(microseconds=round(t * 1e6))).isoformat().replace("+00:00", "Z")
            for t in self.t_s
        ]

    def rows(self, first: int, last: int) -> Plant:
        """Rows first..last-1."""
        return Plant(
            self.t_s[first:last],
            {tag: list(column)[first:last] for tag, column in self.columns.items()},
            self.start,
        )


def text(value: float | str) -> str:
    return value if isinstance(value, str) else repr(float(value))


def wide_csv(plant: Plant) -> str:
    tags = list(plant.columns)
    lines = [",".join(["timestamp", *tags])]
    for i, stamp in enumerate(plant.stamps()):
        lines.append(",".join([stamp, *(text(plant.columns[tag][i]) for tag in tags)]))
    return "\n".join(lines) + "\n"


def narrow_csv(plant: Plant) -> str:
    lines = ["timestamp,tag,value,quality"]
    for i, stamp in enumerate(plant.stamps()):
        lines += [f"{stamp},{tag},{text(column[i])},Good" for tag, column in plant.columns.items()]
    return "\n".join(lines) + "\n"


def _xz(data: bytes) -> bytes:
    return lzma.compress(data)


PACK: Mapping[str, Callable[[bytes], bytes]] = {
    "": bytes,
    ".gz": lambda data: gzip.compress(data, mtime=0),
    ".bz2": bz2.compress,
    ".xz": _xz,
    ".zst": lambda data: zstandard.ZstdCompressor().compress(data),
}


def write_csv(path: Path, content: str) -> None:
    """Write a CSV, packed as the file's ending says."""
    ending = path.suffix if path.suffix in PACK else ""
    path.write_bytes(PACK[ending](content.encode()))


def write_parquet(path: Path, plant: Plant, layout: str = "wide") -> None:
    t_us = [round(t * 1e6) for t in plant.t_s]
    start_us = (plant.start - datetime(1970, 1, 1, tzinfo=UTC)) // timedelta(microseconds=1)
    stamps = pa.array([start_us + t for t in t_us], pa.timestamp("us", tz="UTC"))
    if layout == "wide":
        columns = {tag: pa.array(list(column)) for tag, column in plant.columns.items()}
        table = pa.table({"timestamp": stamps, **columns})
    else:
        tags = list(plant.columns)
        count = len(plant.t_s)
        table = pa.table(
            {
                "timestamp": pa.concat_arrays([stamps] * len(tags)),
                "tag": [tag for tag in tags for _ in range(count)],
                "value": [text(v) for tag in tags for v in plant.columns[tag]],
                "quality": ["Good"] * (count * len(tags)),
            }
        )
    pq.write_table(table, path)


@dataclass(frozen=True)
class SiteFiles:
    """The text of a site's own files; ``lay`` writes them into a folder."""

    loops: str
    specs: str
    exports: str
    windows: str = "before_s = 60\nafter_s = 600\njoin_s = 10"
    extra: str = ""
    store: str = "sqlite:///site.db"
    name: str = "Quay Test Works"
    options: Mapping[str, str] = field(default_factory=dict)

    def lay(self, folder: Path) -> Path:
        folder.mkdir(parents=True, exist_ok=True)
        (folder / "exports").mkdir(exist_ok=True)
        (folder / "site.toml").write_text(
            f'[site]\nname = "{self.name}"\ntimezone = "Europe/Oslo"\n'
            f'[store]\nurl = "{self.store}"\n'
            '[register]\nloops = "loops.csv"\nspecs = "specs.csv"\n'
            f'[[exports]]\nname = "dcs"\n{self.exports}\n'
            f"[windows]\n{self.windows}\n{self.extra}\n"
        )
        (folder / "loops.csv").write_text(self.loops)
        (folder / "specs.csv").write_text(self.specs)
        return folder


WIDE = 'files = "exports/*.csv*"\nlayout = "wide"'
NARROW = 'files = "exports/*.csv*"\nlayout = "narrow"\nquality = "quality"'
PARQUET_WIDE = 'files = "exports/*.parquet"\nformat = "parquet"\nlayout = "wide"'
PARQUET_NARROW = (
    'files = "exports/*.parquet"\nformat = "parquet"\nlayout = "narrow"\nquality = "quality"'
)


def second_order(
    t_s: NDArray[np.float64], zeta: float, omega: float, dead_s: float = 0.0
) -> NDArray[np.float64]:
    """Unit step response of omega^2/(s^2 + 2 zeta omega s + omega^2) after a dead time, zeta < 1.

    Closed form of any control textbook (here: Ogata, Modern Control Engineering, from memory).
    """
    t = np.maximum(t_s - dead_s, 0.0)
    root = np.sqrt(1 - zeta**2)
    wave = np.cos(omega * root * t) + zeta / root * np.sin(omega * root * t)
    return cast("NDArray[np.float64]", 1.0 - np.exp(-zeta * omega * t) * wave)


def follow(
    t_s: NDArray[np.float64],
    moves: Sequence[tuple[float, float]],
    start: float,
    zeta: float,
    omega: float,
    dead_s: float = 0.0,
) -> tuple[NDArray[np.float64], NDArray[np.float64]]:
    """Setpoint and process variable of a second-order loop under moves (time in s, new value)."""
    sp = np.full(len(t_s), start)
    pv = np.full(len(t_s), start)
    held = start
    for at, value in moves:
        sp[t_s >= at] = value
        pv += (value - held) * np.where(
            t_s >= at, second_order(np.maximum(t_s - at, 0.0), zeta, omega, dead_s), 0.0
        )
        held = value
    return sp, pv


def audit(
    folder: Path, url: str | None = None, now: datetime = NOW, **options: object
) -> RunReport:
    """Run one nightly audit of a site's folder; the store is upgraded first."""
    site = open_site(folder, {} if url is None else {"LOOPASSAY_STORE_URL": url})
    with opened(folder, url) as store:
        return nightly.run(site, store, now=now, cores=1, **options)  # type: ignore[arg-type]


@contextmanager
def opened(folder: Path, url: str | None = None) -> Iterator[Store]:
    store = open_store(url or f"sqlite:///{folder / 'site.db'}")
    try:
        store.upgrade()
        yield store
    finally:
        store.close()


def content(folder: Path, url: str | None = None) -> list[str]:
    """The store's canonical content."""
    with opened(folder, url) as store, store.read() as session:
        return list(dump(session))


def steps_of(lines: Sequence[str], tag: str) -> list[Mapping[str, Any]]:
    """One loop's current steps out of the canonical content, by time."""
    found = [json.loads(line) for line in lines]
    return [line["step"] for line in found if "step" in line and line["step"]["tag"] == tag]

"""The reference site of the intake benchmarks: its exports as wide CSV, narrow CSV and Parquet.

Loops of first order with noise, four tags each (process variable, setpoint, controller output, mode
as text), one sample a second, about twelve setpoint moves a loop and day. Seeded.
"""

from __future__ import annotations

from collections.abc import Iterator
from datetime import UTC, datetime, timedelta
from pathlib import Path
from typing import Any

import numpy as np
import pyarrow as pa
import pyarrow.csv as pacsv
import pyarrow.parquet as pq
from numpy.typing import NDArray
from scipy.signal import lfilter

START = datetime(2026, 3, 2, tzinfo=UTC)
DAY_S = 86_400
ROLES = ("PV", "SP", "OP", "MD")

Floats = NDArray[np.float64]


def loop_columns(number: int, first_day: int, days: int) -> dict[str, Floats | list[str]]:
    """The four columns of one loop [days * 86 400]; the same values however the days are cut."""
    parts = [_day(number, first_day + day) for day in range(days)]
    columns: dict[str, Floats | list[str]] = {
        f"L{number:04d}.{role}": np.concatenate([part[at] for part in parts])
        for at, role in enumerate(ROLES[:3])
    }
    mode = np.full(days * DAY_S, "AUTO", dtype=object)
    if number % 7 == 0:
        mode[40_000:41_000] = "MAN"
    columns[f"L{number:04d}.MD"] = mode.tolist()
    return columns


def _day(number: int, day: int) -> tuple[Floats, Floats, Floats]:
    rng = np.random.default_rng([number, day])
    sp = np.full(DAY_S, 50.0)
    for at in np.sort(rng.choice(np.arange(3600, DAY_S - 4000), 12, replace=False)):
        sp[at:] = np.round(40 + 20 * rng.random(), 1)
    sp[DAY_S - 2000 :] = 50.0
    decay = np.exp(-1 / (20 + 60 * rng.random()))
    pv = 50 + np.asarray(lfilter([1 - decay], [1, -decay], sp - 50.0))
    noisy = np.round(pv + 0.05 * rng.standard_normal(DAY_S), 2)
    output = np.round(50 + 0.5 * (pv - 50) + 0.1 * rng.standard_normal(DAY_S), 2)
    return noisy, sp, output


def stamps(first_day: int, days: int) -> Iterator[str]:
    start = START + timedelta(days=first_day)
    for second in range(days * DAY_S):
        yield (start + timedelta(seconds=second)).strftime("%Y-%m-%dT%H:%M:%SZ")


def table(loops: int, first_day: int = 0, days: int = 1) -> pa.Table:
    columns: dict[str, Any] = {"timestamp": pa.array(list(stamps(first_day, days)), pa.string())}
    for number in range(loops):
        columns |= loop_columns(number, first_day, days)
    return pa.table(columns)


def write_wide_csv(
    path: Path, loops: int, first_day: int = 0, days: int = 1, every_s: int = 1
) -> None:
    """One row each ``every_s`` seconds."""
    options = pacsv.WriteOptions(quoting_style="none", batch_size=1 << 14)
    whole = table(loops, first_day, days)
    rows = np.arange(0, whole.num_rows, every_s)
    pacsv.write_csv(whole if every_s == 1 else whole.take(rows), path, options)


def write_narrow_csv(path: Path, loops: int) -> None:
    """One row a sample, in the order of time."""
    wide = table(loops)
    tags = wide.column_names[1:]
    texts = [wide.column(tag).cast(pa.string()).to_pylist() for tag in tags]
    with path.open("w", encoding="utf-8") as file:
        file.write("timestamp,tag,value\n")
        for stamp, *row in zip(wide.column(0).to_pylist(), *texts, strict=True):
            file.writelines(f"{stamp},{tag},{text}\n" for tag, text in zip(tags, row, strict=True))


def write_parquet(path: Path, loops: int) -> None:
    wide = table(loops)
    at = wide.column(0).cast(pa.timestamp("us", tz="UTC"))
    pq.write_table(wide.set_column(0, "timestamp", at), path, row_group_size=DAY_S // 6)


def lay_site(folder: Path, loops: int, exports: str) -> None:
    """site.toml, loops.csv, specs.csv and an empty folder for exports."""
    (folder / "exports").mkdir(parents=True, exist_ok=True)
    (folder / "site.toml").write_text(
        '[site]\nname = "Reference Works"\ntimezone = "UTC"\n'
        f'[store]\nurl = "sqlite:///site.db"\n[[exports]]\nname = "dcs"\n{exports}\n'
    )
    rows = [
        f"L{n:04d},U{n % 8},flow,L{n:04d}.PV,L{n:04d}.SP,L{n:04d}.OP,L{n:04d}.MD,m3/h,0,100,AUTO"
        for n in range(loops)
    ]
    head = "tag,process_unit,kind,pv,sp,output,mode,eu,range_low,range_high,auto_modes"
    (folder / "loops.csv").write_text("\n".join([head, *rows]) + "\n")
    specs = [f"L{n:04d},2026-01-01,120,400,10" for n in range(loops)]
    head = "tag,valid_from,rise_time_s,settling_time_s,overshoot_pct"
    (folder / "specs.csv").write_text("\n".join([head, *specs]) + "\n")

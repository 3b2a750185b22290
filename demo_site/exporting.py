"""From the historian's reports to the daily exports: one narrow ``csv.gz`` a UTC day.

In go the reports of all groups of loops and the plans; out go files with the columns
``timestamp,tag,value,quality``: UTC stamps with milliseconds, engineering units, text for modes,
and the small share of bad, uncertain, blank and text cells that real exports have.
"""

from __future__ import annotations

import gzip
import io
from collections.abc import Callable, Sequence
from dataclasses import dataclass
from datetime import date, timedelta
from pathlib import Path

import numpy as np
import pyarrow as pa
import pyarrow.compute as pc
from numpy.typing import NDArray
from pyarrow import csv as pa_csv

from .historian import unmoved
from .lanes import Vector
from .operators import DAY_S, TO_AUTO, TO_MANUAL
from .plant import NUMERIC_MODE, PlantLoop
from .simulate import INNER_SP, Case, Kept

DAY_MS = DAY_S * 1000
SUFFIXES = ("PV", "OP", "SP", "MODE")
_MODE = 3
_JITTER_MS = 40
DEAD_AT_S = 11 * 3600
_MODE_BEAT_MS = 8 * 3600 * 1000
TEXTS = ("", "", "Bad Input", "AUTO", "MAN", "CAS")
"""Texts of value cells by code; code 0 is a number, code 1 a blank."""
_BLANK, _BAD_INPUT, _AUTO, _MAN, _CAS = 1, 2, 3, 4, 5
QUALITIES = ("Good", "Uncertain", "Bad")
_GOOD, _UNCERTAIN, _BAD = 0, 1, 2


@dataclass(frozen=True, eq=False)
class Rows:
    """Narrow rows: stamp [n] in ms from the start, tag [n] = 4 x loop number + signal, value [n] in
    engineering units, text [n] and quality [n] as codes.
    """

    t_ms: NDArray[np.int64]
    tag: NDArray[np.int64]
    value: Vector
    text: NDArray[np.int8]
    quality: NDArray[np.int8]

    def __len__(self) -> int:
        return len(self.t_ms)

    def take(self, at: NDArray[np.intp] | NDArray[np.bool_]) -> Rows:
        return Rows(self.t_ms[at], self.tag[at], self.value[at], self.text[at], self.quality[at])


def historian_tag(loop: PlantLoop, signal: int) -> str:
    """The historian's name of one signal of a loop."""
    return f"{loop.tag}.{SUFFIXES[signal]}"


def decimals(case: Case) -> int:
    """Decimals that resolve a twentieth of the process variable's deadband."""
    return max(0, int(np.ceil(-np.log10(case.design.report / 100 * case.loop.span / 20))))


def rows_of(kept: Kept, rng: np.random.Generator) -> Rows:
    """The reports of one group in engineering units, with the clock of each loop's controller."""
    cases, cut, reports = kept.cases, kept.cut, kept.reports
    index, piece = np.divmod(reports.lane, cut.pieces)
    phase = rng.integers(0, cut.scan_s * 1000 - _JITTER_MS, len(cases))
    t_ms = (piece * cut.live_s + (reports.scan - cut.warm) * cut.scan_s) * 1000 + phase[index]
    t_ms += rng.integers(0, _JITTER_MS, len(t_ms))
    is_output = reports.signal == 1
    span = np.array([case.loop.span for case in cases])[index]
    low = np.array([case.loop.low for case in cases])[index]
    places = np.array([decimals(case) for case in cases])[index]
    power = 10.0 ** np.where(is_output, 2, places)
    value = np.where(is_output, reports.value, low + reports.value / 100 * span)
    for number in (number for number, case in enumerate(cases) if case.loop.primary):
        own = np.flatnonzero((index == number) & (reports.signal == 2))
        own = own[np.argsort(t_ms[own], kind="stable")]
        value[own] = unmoved(value[own], INNER_SP / 100 * cases[number].loop.span)
    rows = Rows(
        t_ms=t_ms,
        tag=np.array([case.number for case in cases])[index] * 4 + reports.signal,
        value=np.rint(value * power) / power + 0.0,
        text=np.zeros(len(t_ms), np.int8),
        quality=np.zeros(len(t_ms), np.int8),
    )
    return rows.take(~is_output | np.array([case.loop.has_output for case in cases])[index])


def mode_rows(case: Case, days: int, rng: np.random.Generator) -> Rows:
    """The mode tag of one loop: on change, at midnight and every 8 hours."""
    beats = np.arange(0, days * DAY_MS, _MODE_BEAT_MS)
    times, codes, _ = case.plan.columns()
    switches = codes != 0
    scan_ms = case.design.scan_s * 1000
    at = np.ceil(times[switches] * 1000 / scan_ms).astype(np.int64) * scan_ms
    t_ms = np.concatenate([beats, at])
    known = np.concatenate([[TO_AUTO], codes[switches]])
    current = known[np.searchsorted(at, t_ms, "right")]
    automatic = _CAS if case.loop.primary else _AUTO
    word = np.where(current == TO_MANUAL, _MAN, automatic).astype(np.int8)
    numeric = case.loop.tag in NUMERIC_MODE
    return Rows(
        t_ms=t_ms + rng.integers(0, _JITTER_MS, len(t_ms)),
        tag=np.full(len(t_ms), case.number * 4 + _MODE),
        value=(word != _MAN).astype(np.float64),
        text=np.zeros(len(t_ms), np.int8) if numeric else word,
        quality=np.zeros(len(t_ms), np.int8),
    )


def spoil(rows: Rows, cases: Sequence[Case], days: int, rng: np.random.Generator) -> Rows:
    """Adds bad spells of the transmitters and stray bad, uncertain, blank and text cells."""
    for case in cases:
        for _ in range(int(rng.poisson(days / 12))):
            start = int(rng.integers(0, days * DAY_MS))
            ends = start + int(rng.integers(120_000, 1_200_000))
            first, last = np.searchsorted(rows.t_ms, (start, ends))
            spell = first + np.flatnonzero(rows.tag[first:last] == case.number * 4)
            rows.quality[spell] = _BAD
            rows.text[spell] = int(rng.choice((0, _BLANK, _BAD_INPUT)))
    stray = rng.random(len(rows))
    numbers = rows.text == 0
    rows.quality[numbers & (stray < 0.0004)] = _UNCERTAIN
    rows.quality[numbers & (stray < 0.0002)] = _BAD
    rows.text[numbers & (stray < 0.00005)] = _BAD_INPUT
    rows.text[numbers & (stray < 0.00002)] = _BLANK
    return rows


def gather(kepts: Sequence[Kept], days: int, rng: np.random.Generator) -> Rows:
    """All rows of all loops, by time and then by tag; a dead historian tag says no more."""
    cases = sorted((case for kept in kepts for case in kept.cases), key=lambda case: case.number)
    parts = [rows_of(kept, rng) for kept in kepts]
    parts += [mode_rows(case, days, rng) for case in cases if case.loop.has_mode]
    rows = Rows(
        *(
            np.concatenate([getattr(part, name) for part in parts])
            for name in ("t_ms", "tag", "value", "text", "quality")
        )
    )
    alive = rows.t_ms < days * DAY_MS
    for case in cases:
        if case.story.tag_dead is not None:
            dead_ms = case.story.tag_dead * DAY_MS + DEAD_AT_S * 1000
            alive &= (rows.tag != case.number * 4) | (rows.t_ms < dead_ms)
    rows = rows.take(alive)
    rows = rows.take(np.lexsort((rows.tag, rows.t_ms)))
    return spoil(rows, cases, days, rng)


def write_days(
    folder: Path, rows: Rows, names: Sequence[str], first: date, told: Callable[[float], None]
) -> list[Path]:
    """One file a UTC day in ``folder``; byte for byte the same for the same rows."""
    days = int(rows.t_ms[-1]) // DAY_MS + 1
    edges = np.searchsorted(rows.t_ms, np.arange(days + 1) * DAY_MS)
    start = np.datetime64(first, "ms")
    files: list[Path] = []
    for day in range(days):
        part = rows.take(np.arange(edges[day], edges[day + 1]))
        path = folder / f"{first + timedelta(days=day):%Y-%m-%d}.csv.gz"
        path.write_bytes(_packed(_table(part, names, start)))
        files.append(path)
        told((day + 1) / days)
    return files


def _table(rows: Rows, names: Sequence[str], start: np.datetime64) -> pa.Table:
    instants = pa.array(start + rows.t_ms.astype("timedelta64[ms]"), pa.timestamp("ms"))
    spaced = pc.utf8_replace_slice(pc.cast(instants, pa.string()), 10, 11, "T")
    stamps = pc.utf8_replace_slice(spaced, 23, 23, "Z")
    numbers = pc.cast(pa.array(rows.value), pa.string())
    return pa.table(
        {
            "timestamp": stamps,
            "tag": pa.array(names).take(rows.tag),
            "value": pc.if_else(pa.array(rows.text == 0), numbers, pa.array(TEXTS).take(rows.text)),
            "quality": pa.array(QUALITIES).take(rows.quality),
        }
    )


def _packed(table: pa.Table) -> bytes:
    """The table as csv, gzipped without a time or a name in its header."""
    plain = pa.BufferOutputStream()
    options = pa_csv.WriteOptions(include_header=False, quoting_style="none")
    pa_csv.write_csv(table, plain, options)
    packed = io.BytesIO()
    with gzip.GzipFile("", "wb", compresslevel=3, fileobj=packed, mtime=0) as out:
        out.write((",".join(table.column_names) + "\n").encode())
        out.write(plain.getvalue())
    return packed.getvalue()

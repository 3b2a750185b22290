"""A small plant's record as rows of text that can be cut, shuffled, doubled and harmed.

And what the account of each file must be: reckoned cell by cell, by the contract's words alone.
"""

from __future__ import annotations

import csv
import io
from collections import Counter
from collections.abc import Iterable, Mapping, Sequence
from dataclasses import dataclass
from pathlib import Path

import numpy as np
import pyarrow as pa
import pyarrow.parquet as pq

import sites
from audit.records import CellAccount

LOOPS = (
    "tag,kind,pv,sp,mode,eu,range_low,range_high,auto_modes,criticality\n"
    "FIC-1,flow,F1.PV,F1.SP,F1.MODE,m3/h,0,100,AUTO,4\n"
    "TIC-2,temperature,T2.PV,T2.SP,,degC,0,200,,2\n"
)
SPECS = (
    "tag,valid_from,rise_time_s,settling_time_s,settling_band_pct,overshoot_pct\n"
    "FIC-1,2026-01-01,20,60,5,20\n"
    "TIC-2,2026-01-01,60,120,5,30\n"
)
BEFORE_S, AFTER_S, JOIN_S, SCAN_S = 60, 300, 10, 2
WINDOWS = f"before_s = {BEFORE_S}\nafter_s = {AFTER_S}\njoin_s = {JOIN_S}"
FLOW, WARM = ("F1.PV", "F1.SP", "F1.MODE"), ("T2.PV", "T2.SP")
REGISTERED = (*FLOW, *WARM)
TAGS = (*REGISTERED, "other")
EXPORTS = {
    "wide.csv": sites.WIDE,
    "narrow.csv": sites.NARROW,
    "wide.parquet": sites.PARQUET_WIDE,
    "narrow.parquet": sites.PARQUET_NARROW,
}
"""Kinds of export, each with its table of site.toml."""

Line = tuple[str, ...]

CELL_HARMS = ("word", "blank", "comma", "fill")
LINE_HARMS = ("stamp", "no_stamp", "short", "long", "quality")
_CELL = {"word": "I/O Timeout", "blank": "", "comma": "40,5", "fill": "3.4e38"}
_NO_STAMP = {"stamp": "2026-02-30T06:00:00Z", "no_stamp": ""}


def record() -> sites.Plant:
    """Two loops, moved about every quarter of an hour, with noise and a manual minute."""
    t_s = np.arange(0.0, 6000.0, SCAN_S)
    rng = np.random.default_rng(11)
    levels = [45.0, 52.0, 48.0, 57.0, 50.0, 55.0]
    moves = [(700.0 + 900 * number, level) for number, level in enumerate(levels)]
    sp, pv = sites.follow(t_s, moves, 40.0, 0.5, 0.35, 2.0)
    warm = [(at + 44, 90 + level / 2) for at, level in moves]
    warm_sp, warm_pv = sites.follow(t_s, warm, 110.0, 0.7, 0.1, 4.0)
    manual = (t_s > 1200) & (t_s < 1260)
    return sites.Plant(
        t_s,
        {
            "F1.PV": pv + rng.normal(0, 0.05, len(t_s)),
            "F1.SP": sp,
            "F1.MODE": ["MAN" if m else "AUTO" for m in manual],
            "T2.PV": warm_pv + rng.normal(0, 0.02, len(t_s)),
            "T2.SP": warm_sp,
            "other": np.round(rng.normal(5, 1, len(t_s)), 3),
        },
    )


@dataclass(frozen=True)
class Harm:
    """What befalls ``count`` rows of the plant from ``at`` on (modulo their number).

    ``kind``: of CELL_HARMS or LINE_HARMS. ``tag``: number of the column whose cells are harmed; of
    a narrow export its lines.
    """

    at: int
    count: int
    kind: str
    tag: int


class Table:
    """The plant's rows as lines of one kind of export."""

    def __init__(self, kind: str) -> None:
        plant = record()
        self.kind = kind
        self.narrow = kind.startswith("narrow")
        self.rows = len(plant.t_s)
        self.stamps = plant.stamps()
        cells = [[sites.text(v) for v in plant.columns[tag]] for tag in TAGS]
        self._lines = [self._of(*row) for row in zip(self.stamps, *cells, strict=True)]

    @property
    def head(self) -> Line:
        return ("timestamp", "tag", "value", "quality") if self.narrow else ("timestamp", *TAGS)

    def lines(self, row: int) -> list[Line]:
        """The lines of one row of the plant: one, or one for each tag."""
        return list(self._lines[row])

    def _of(self, stamp: str, *cells: str) -> list[Line]:
        if self.narrow:
            return [(stamp, tag, cell, "Good") for tag, cell in zip(TAGS, cells, strict=True)]
        return [(stamp, *cells)]

    def all_lines(self, rows: Iterable[int]) -> list[Line]:
        return [line for row in rows for line in self.lines(row)]

    def harmed(self, lines: Sequence[Line], harm: Harm, tags: Sequence[str] = TAGS) -> list[Line]:
        """The lines of one row of the plant with one harm done to one of ``tags``."""
        tag = tags[harm.tag % len(tags)]
        if not self.narrow:
            (line,) = lines
            return [self._harmed(line, harm.kind, 1 + TAGS.index(tag))]
        return [self._harmed(line, harm.kind, 2) if line[1] == tag else line for line in lines]

    def _harmed(self, line: Line, kind: str, at: int) -> Line:
        if kind in _CELL:
            return (*line[:at], _CELL[kind], *line[at + 1 :])
        if kind == "quality":  # only a narrow export says it; in a wide one it stands as a word
            return (*line[:-1], "Bad") if self.narrow else self._harmed(line, "word", at)
        if kind in _NO_STAMP or self.kind.endswith("parquet"):  # which has no ragged rows
            return (_NO_STAMP.get(kind, "soon"), *line[1:])
        return line[:-1] if kind == "short" else (*line, "0")

    def write(self, folder: Path, name: str, lines: Sequence[Line]) -> None:
        path = folder / "exports" / f"{name}.{self.kind.partition('.')[2]}"
        if path.suffix == ".parquet":
            columns = {
                title: pa.array([line[at] or None for line in lines], pa.string())
                for at, title in enumerate(self.head)
            }
            pq.write_table(pa.table(columns), path)
            return
        text = io.StringIO()
        csv.writer(text, lineterminator="\n").writerows([self.head, *lines])
        path.write_text(text.getvalue())


@dataclass(frozen=True)
class FileTold:
    """What one file says, by the contract: its cells by what became of them, the samples that hold.

    ``samples``: tag -> stamp -> value, None of bad quality. ``span``: from its first to its last
    stamp, as texts, which sort as the instants do.
    """

    counts: Counter[str]
    refused: Counter[str]
    samples: Mapping[str, Mapping[str, float | str | None]]
    named: frozenset[str]
    span: tuple[str, str] | None
    rows: int
    read: int

    def account(self, lost: Counter[str]) -> CellAccount:
        """With the samples that other files take the place of."""
        held = [value for found in self.samples.values() for value in found.values()]
        bad = sum(value is None for value in held)
        return CellAccount(
            rows=self.rows,
            read=self.read,
            taken=len(held) - bad - lost["good"],
            duplicate=self.counts["duplicate"],
            replaced=self.counts["replaced"] + lost.total(),
            blank=self.counts["blank"],
            bad_quality=bad - lost["bad"],
            unregistered=self.counts["unregistered"],
            refused=dict(self.refused),
        )

    def lost_to(self, rivals: Sequence[FileTold]) -> Counter[str]:
        """Samples within the span of a file that ranks higher and names their tag."""
        lost: Counter[str] = Counter()
        for tag, found in self.samples.items():
            spans = [rival.span for rival in rivals if tag in rival.named and rival.span]
            for stamp, value in found.items():
                if any(first <= stamp <= last for first, last in spans):
                    lost["bad" if value is None else "good"] += 1
        return lost


def told(table: Table, lines: Sequence[Line]) -> FileTold:
    """What a file of these lines says."""
    counts, refused = Counter[str](), Counter[str]()
    samples: dict[str, dict[str, float | str | None]] = {}
    every: list[tuple[str, str, float | str | None]] = []
    known = set(table.stamps)
    named = set[str]() if table.narrow else set(REGISTERED)
    stamps = []
    width = 1 if table.narrow else len(TAGS)
    for line in lines:
        if len(line) != len(table.head):
            refused["ragged_row"] += width
            continue
        cells = [(line[1], line[2], line[3])] if table.narrow else _wide_cells(line)
        named |= {tag for tag, _, _ in cells if tag in REGISTERED}
        if line[0] not in known:
            refused["bad_time"] += width
            continue
        stamps.append(line[0])
        for tag, cell, quality in cells:
            what, value = _cell(tag, cell, quality)
            if what == "sample":
                every.append((tag, line[0], value))
            elif what == "not_a_number":
                refused[what] += 1
            else:
                counts[what] += 1
    for tag, stamp, value in every:
        samples.setdefault(tag, {})[stamp] = value
    for tag, stamp, value in every:
        counts["duplicate" if samples[tag][stamp] == value else "replaced"] += 1
    counts["duplicate"] -= sum(map(len, samples.values()))
    span = (min(stamps), max(stamps)) if stamps else None
    read = len(lines) * width
    return FileTold(counts, refused, samples, frozenset(named), span, len(lines), read)


def _wide_cells(line: Line) -> list[tuple[str, str, str]]:
    return [(tag, cell, "Good") for tag, cell in zip(TAGS, line[1:], strict=True)]


def _cell(tag: str, cell: str, quality: str) -> tuple[str, float | str | None]:
    if tag not in REGISTERED:
        return "unregistered", None
    if quality != "Good":
        return "sample", None
    if cell == "":
        return "blank", None
    if tag.endswith("MODE"):
        return "sample", cell
    return ("not_a_number", None) if cell in _CELL.values() else ("sample", float(cell))

"""Files of every format, damaged by chance: each is read with an account that balances, or refused.

Nothing else may happen, whatever stands in the file: no other error, no warning, no endless loop.
"""

from __future__ import annotations

import io
import threading
from collections import Counter
from collections.abc import Callable, Mapping, Sequence
from dataclasses import dataclass, replace
from functools import partial
from pathlib import Path
from tempfile import TemporaryDirectory
from typing import Any

import numpy as np
import pyarrow as pa
import pyarrow.parquet as pq
import pytest
from export_files import as_rows, read_bytes
from mutated_files import ENDINGS, LAYOUTS, TAGS, Damaged, damaged

from audit import exports
from audit.errors import ExportRefused
from audit.exports import intake, parquet_file
from audit.records import ExportFile, ExportRead, ExportSource

EACH = 25
END_US = 7_258_118_400_000_000
"""2200-01-01T00:00:00Z, from where on no stamp is taken."""
HOW = ((1, 1 << 24), (1, 400), (2, 150))
"""Threads, and bytes of a piece."""
ENDLESS_S = 300.0


@pytest.mark.parametrize("layout", LAYOUTS)
@pytest.mark.parametrize("ending", ENDINGS)
def test_damaged_files_are_read_or_refused(layout: str, ending: str, tmp_path: Path) -> None:
    done: list[str] = []

    def work() -> None:
        for number in range(EACH):
            done.append(outcome_of(damaged(layout, ending, number), tmp_path))

    thread = threading.Thread(target=work, daemon=True)
    thread.start()
    thread.join(ENDLESS_S)
    assert not thread.is_alive(), f"number {len(done)} is read without an end"
    assert len(done) == EACH, f"number {len(done)}"
    assert min(Counter(done)[outcome] for outcome in ("read", "refused")) >= 3


def outcome_of(one: Damaged, folder: Path) -> str:
    """What became of a file in every way of reading it: "read" or "refused"."""
    (folder / one.name).write_bytes(one.stored)
    source = replace(one.source, files=one.name, folder=str(folder))
    (file,) = exports.discover(source)
    ways = [tried(partial(read, file, source, *how)) for how in HOW]
    named = tried(partial(exports.named, file, source))
    peeked = tried(partial(exports.peek, file, source))
    first_us = exports.first_stamp(file, source)
    assert first_us is None or 0 <= first_us < END_US
    whole = ways[0]
    if whole is None:
        assert ways == [None] * len(HOW)
        return "refused"
    assert all(way == whole for way in ways)
    assert named is not None
    assert peeked is not None
    assert {tag for tag in named if tag in TAGS} == set(whole.named)
    assert set(peeked.tags) <= named
    assert all(fault.problem and fault.remedy for fault in peeked.faults)
    return "read"


def tried(work: Callable[[], Any]) -> Any:
    """What it gives; None where the file is refused, with a reason and a remedy."""
    try:
        return work()
    except ExportRefused as refused:
        why = (refused.reason, refused.remedy)
    assert all(why)
    return None


@dataclass(frozen=True)
class Read:
    """What was read of a file, in a form that can be compared."""

    named: tuple[str, ...]
    span: tuple[int | None, int | None]
    account: object
    samples: Mapping[str, Sequence[tuple[int, float | str | None]]]
    content_hash: str


def read(file: ExportFile, source: ExportSource, threads: int, piece_bytes: int) -> Read:
    with (
        pytest.MonkeyPatch.context() as patch,
        TemporaryDirectory(dir=source.folder) as scratch,
    ):
        patch.setattr(intake, "PIECE_BYTES", piece_bytes)
        patch.setattr(parquet_file, "_CELLS_AT_ONCE", piece_bytes)
        patch.setattr(parquet_file, "_LEAST_ROWS", 1)
        got = exports.read(file, source, TAGS, Path(scratch) / "samples", threads)
        samples = {tag: checked(tag, got) for tag in got.columns}
    account = got.account
    assert account.balance == 0
    assert min(account.taken, account.duplicate, account.replaced, account.blank) >= 0
    assert min(account.bad_quality, account.unregistered, *account.refused.values(), 0) == 0
    every = [cell for column in samples.values() for _, cell in column]
    bad = sum(cell is None for cell in every)
    assert (account.taken, account.bad_quality) == (len(every) - bad, bad)
    assert set(samples) <= set(got.named)
    assert all(fault.problem and fault.remedy for fault in got.faults)
    return Read(got.named, (got.first_us, got.last_us), account, samples, got.content_hash)


def checked(tag: str, got: ExportRead) -> list[tuple[int, float | str | None]]:
    """The samples of one tag: in order, in range, and finite where they are good."""
    raw = got.columns[tag].load()
    t_us, value, good = raw.samples.t_us, raw.samples.value, raw.samples.good
    assert got.first_us is not None
    assert got.last_us is not None
    assert 0 <= got.first_us <= t_us[0]
    assert t_us[-1] <= got.last_us < END_US
    assert (np.diff(t_us) > 0).all()
    assert np.isnan(value[~good]).all()
    assert (np.abs(value[good]) <= 1e30).all()
    texts = raw.texts
    return [
        (int(t), None if not ok else float(v) if texts is None else texts[int(v)])
        for t, v, ok in zip(t_us, value, good, strict=True)
    ]


def a_parquet(columns: Mapping[str, Any]) -> bytes:
    """Stored as it is, so that its octets can be found."""
    sink = io.BytesIO()
    pq.write_table(pa.table(dict(columns)), sink, compression="none")
    return sink.getvalue()


STAMPS = ["2026-03-14T08:00:00Z", "2026-03-14T08:00:01Z"]


@pytest.mark.parametrize(
    "octets", [b"Failing", b"AUTO", b"FIC-1.MODE", b"FIC-1.PV", b"08:00:01Z", b"unused"]
)
def test_a_parquet_text_that_is_not_utf_8(octets: bytes, tmp_path: Path) -> None:
    """Parquet format, LogicalType STRING: UTF-8; nothing in the file holds a writer to it."""
    whole = a_parquet(
        {
            "timestamp": STAMPS,
            "FIC-1.PV": ["1.5", "Failing"],
            "FIC-1.MODE": ["AUTO", "AUTO"],
            "unused": ["a", "b"],
        }
    )
    assert octets in whole
    spoiled = whole.replace(octets, octets[:-2] + b"\xff" + octets[-1:])
    with pytest.raises(ExportRefused, match="not readable as Parquet"):
        read_bytes(tmp_path, spoiled, "a.parquet", format="parquet")


@pytest.mark.parametrize("kind", [pa.list_(pa.string()), pa.struct([("FIC-1.MODE", pa.string())])])
def test_a_parquet_mode_of_a_nested_type(kind: Any, tmp_path: Path) -> None:
    """It has no column of its own name in the file, only those inside it."""
    mode = pa.array([["AUTO"]] * 2 if pa.types.is_list(kind) else [{"FIC-1.MODE": "A"}] * 2, kind)
    whole = a_parquet({"timestamp": STAMPS, "FIC-1.PV": ["1.5", "2"], "FIC-1.MODE": mode})
    got = read_bytes(tmp_path, whole, "a.parquet", format="parquet")
    assert as_rows(got.columns["FIC-1.PV"]) == [(0.0, 1.5), (1.0, 2.0)]


@pytest.mark.parametrize(
    "times", [pa.array([10**8] * 2, pa.date32()), pa.array([2**62] * 2, pa.timestamp("us"))]
)
def test_parquet_dates_beyond_any_calendar_are_shown(times: Any, tmp_path: Path) -> None:
    whole = a_parquet({"timestamp": times, "FIC-1.PV": times})
    got = read_bytes(tmp_path, whole, "a.parquet", format="parquet")
    assert got.account.refused == {"bad_time": 2}
    assert "value out of range" in got.faults[0].problem

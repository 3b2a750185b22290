"""Columns on scratch: what goes in, in pieces and in any order, comes back by tag and time."""

from __future__ import annotations

import os
import pickle
import resource
from contextlib import closing
from pathlib import Path
from tempfile import TemporaryDirectory

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st
from numpy.typing import NDArray

from audit import scratch
from audit.errors import AuditError
from audit.scratch import Part, ScratchColumn, ScratchWriter

Whole = NDArray[np.int64]
Floats = NDArray[np.float64]

CELLS = st.lists(
    st.tuples(st.sampled_from("ab"), st.integers(0, 60), st.sampled_from([1.0, 2.5, np.nan])),
    max_size=60,
)


def last_of_each(us: Whole, value: Floats) -> tuple[Whole, Floats]:
    """Sorted; of several at one stamp the last."""
    held = dict(zip(us.tolist(), value.tolist(), strict=True))
    stamps = sorted(held)
    return np.array(stamps, np.int64), np.array([held[t] for t in stamps], np.float64)


def written(
    path: Path, pieces: list[list[tuple[str, int, float]]]
) -> tuple[dict[str, ScratchColumn], dict[str, dict[int, float]]]:
    """The columns, and what they are to hold."""
    expected: dict[str, dict[int, float]] = {}
    with closing(ScratchWriter(path)) as writer:
        for piece in pieces:
            parts = []
            for tag in sorted({tag for tag, _, _ in piece}):
                own = [(t, v) for name, t, v in piece if name == tag]
                us, value = np.array([t for t, _ in own]), np.array([v for _, v in own])
                parts.append(Part(tag, us, value, int(np.isnan(value).sum())))
                expected.setdefault(tag, {}).update(own)
            writer.append(parts)
        return writer.finish(last_of_each, {}), expected


@settings(max_examples=80, deadline=None)
@given(
    st.lists(CELLS, max_size=6),
    st.lists(st.tuples(st.integers(0, 60), st.integers(0, 20)), max_size=3),
    st.sampled_from([7, 4_000_000]),
)
def test_what_comes_back_is_what_went_in(
    pieces: list[list[tuple[str, int, float]]], around: list[tuple[int, int]], at_once: int
) -> None:
    with TemporaryDirectory() as folder, pytest.MonkeyPatch.context() as patch:
        patch.setattr(scratch, "MERGED_AT_ONCE", at_once)
        columns, expected = written(Path(folder) / "a", pieces)
        assert columns.keys() == expected.keys()
        spans = []
        start = 0
        for gap, length in around:
            spans.append((start + gap, start + gap + length))
            start += gap + length + 2
        for tag, held in expected.items():
            column: ScratchColumn = pickle.loads(pickle.dumps(columns[tag]))
            stamps = sorted(held)
            whole = column.load().samples
            assert whole.t_us.tolist() == stamps
            np.testing.assert_array_equal(whole.value, [held[t] for t in stamps])
            assert (column.count, column.first_us, column.last_us) == (
                len(stamps),
                stamps[0],
                stamps[-1],
            )
            inside = [t for t in stamps if any(a <= t <= b for a, b in spans)]
            assert column.load(spans).samples.t_us.tolist() == inside
            good = [t for t in inside if not np.isnan(held[t])]
            assert column.counted(spans) == (len(good), len(inside) - len(good))
            every_good = [t for t in stamps if not np.isnan(held[t])]
            past = [t for t in every_good if t <= 30]
            newest = past[-1] if past else None
            assert column.good_until(30) == (newest, len(every_good) - len(past))


def test_parts_that_share_their_stamps_share_them_on_scratch(tmp_path: Path) -> None:
    us = np.arange(1000, dtype=np.int64)
    with closing(ScratchWriter(tmp_path / "a")) as writer:
        writer.append([Part(f"T{k}", us, np.full(1000, float(k))) for k in range(50)])
        columns = writer.finish(last_of_each, {"T7": ("AUTO",)})
    assert os.path.getsize(tmp_path / "a") < 51 * 8000 + 50 * 64
    assert columns["T7"].load().texts == ("AUTO",)
    assert columns["T49"].load().samples.value.tolist() == [49.0] * 1000


def _written_beyond(path: Path) -> None:
    with closing(ScratchWriter(path)) as writer:
        for _ in range(100):
            writer.append([Part("a", np.arange(1000), np.zeros(1000))])


def test_a_full_disk_is_said_with_what_to_do(tmp_path: Path) -> None:
    """A limit on the size of files stands for the full disk: writing beyond it fails as there."""
    old = resource.getrlimit(resource.RLIMIT_FSIZE)
    resource.setrlimit(resource.RLIMIT_FSIZE, (100_000, old[1]))
    try:
        with pytest.raises(AuditError, match=r"cannot be written.*scratch in \[intake\]"):
            _written_beyond(tmp_path / "a")
    finally:
        resource.setrlimit(resource.RLIMIT_FSIZE, old)

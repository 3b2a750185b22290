"""setpoints: moves, kinds, windows, reasons; and that a change rests on its own interval alone."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import replace

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st
from numpy.typing import NDArray

from audit import setpoints
from audit.records import (
    SECOND_US,
    ChangeKind,
    Loop,
    Reading,
    Reason,
    Record,
    Role,
    Samples,
    SetpointChange,
    Windows,
)
from audit.setpoints.moves import JITTER_TURNS

WINDOWS = Windows(120 * SECOND_US, 600 * SECOND_US, 60 * SECOND_US)
LOOP = Loop(tag="TIC-1", pv="T1.PV", sp="T1.SP", windows=WINDOWS)
WITH_MODE = replace(LOOP, mode="T1.MODE", auto_modes=("AUTO",))
READING = Reading()
AUTO = ([0.0], [1.0])

Column = tuple[Sequence[float] | NDArray[np.float64], Sequence[float] | NDArray[np.float64]]


def samples(column: Column) -> Samples:
    t_us = np.round(np.asarray(column[0], np.float64) * SECOND_US).astype(np.int64)
    value = np.asarray(column[1], np.float64)
    return Samples(t_us, value, np.isfinite(value))


def record(sp: Column, pv: Column | None = None, mode: Column | None = None) -> Record:
    """Columns of (seconds, values) as a record; without a process variable one far from any sp."""
    columns = {Role.SP: sp, Role.PV: pv or ([-1e4, 1e5], [-100.0, -100.0])}
    if mode is not None:
        columns[Role.MODE] = mode
    return Record({role: samples(column) for role, column in columns.items()})


def find(rec: Record, loop: Loop = LOOP) -> list[SetpointChange]:
    return setpoints.find(rec, loop, READING)


def scanned(values: NDArray[np.float64], start_s: float = 0.0) -> Column:
    return start_s + np.arange(len(values), dtype=np.float64), values


def test_a_step_of_a_setpoint_stored_on_change() -> None:
    """A setpoint holds until its next sample (stepped interpolation, OPC UA Part 13)."""
    (change,) = find(record(([0.0, 1000.0], [50.0, 55.0])))
    at_us = 1000 * SECOND_US
    assert change == SetpointChange(
        at_us=at_us,
        sp_from=50.0,
        sp_to=55.0,
        kind=ChangeKind.STEP,
        moves=((at_us, 55.0),),
        window_end_us=at_us + WINDOWS.after_us,
        complete=True,
    )


@pytest.mark.parametrize(("low", "high"), [(50.0, 55.0), (0.0, 5.0), (55.0, 50.0), (-2.0, -7.0)])
def test_a_scanned_step_is_found_at_its_stamp_whatever_the_level(low: float, high: float) -> None:
    sp = scanned(np.where(np.arange(900) < 300, low, high))
    (change,) = find(record(sp))
    assert (change.at_us, change.sp_from, change.sp_to) == (300 * SECOND_US, low, high)
    assert change.kind is ChangeKind.STEP
    assert change.set_aside == ()


def test_moves_within_join_are_one_staircase_and_later_ones_another_change() -> None:
    sp = ([0.0, 300.0, 360.0, 400.0, 461.0], [10.0, 12.0, 14.0, 15.0, 20.0])
    first, second = find(record(sp))
    assert first.kind is ChangeKind.STAIRCASE
    assert [value for _, value in first.moves] == [12.0, 14.0, 15.0]
    assert (first.sp_from, first.sp_to) == (10.0, 15.0)
    assert first.window_end_us == 461 * SECOND_US
    assert first.cut is Reason.CUT_SHORT
    assert first.complete
    assert (second.sp_from, second.sp_to, second.cut) == (15.0, 20.0, None)


@pytest.mark.parametrize("moves", [7, 8, 40])
def test_eight_moves_on_a_straight_line_are_a_ramp(moves: int) -> None:
    values = 20.0 + 0.5 * np.clip(np.arange(900.0) - 299.0, 0.0, float(moves))
    (change,) = find(record(scanned(values)))
    assert change.kind is (ChangeKind.RAMP if moves >= 8 else ChangeKind.STAIRCASE)
    assert (change.sp_from, change.sp_to) == (20.0, 20.0 + 0.5 * moves)
    assert len(change.moves) == moves


def test_uneven_moves_are_no_ramp() -> None:
    values = np.cumsum([0.0, 1.0, 9.0, 1.0, 1.0, 1.0, 8.0, 1.0, 0.5, 9.0])
    (change,) = find(record((np.concatenate(([0.0], 300.0 + 20.0 * np.arange(9))), values)))
    assert change.kind is ChangeKind.STAIRCASE


def test_a_setpoint_that_keeps_moving_gets_a_record_a_block_not_a_move() -> None:
    t = np.arange(0.0, 6000.0)
    values = np.where(t < 700, 30.0, 30.0 + 8.0 * np.sin((t - 700) / 150.0))
    values = np.where(t > 4000, values[4000], values)
    changes = find(record((t, values)))
    assert {change.kind for change in changes} == {ChangeKind.MOVING}
    assert [change.at_us // SECOND_US for change in changes] == [701, 1200, 1800, 2400, 3000]
    for change in changes[1:]:
        assert change.window_end_us == change.at_us + WINDOWS.after_us
        assert change.sp_from == values[change.at_us // SECOND_US - 1]
        assert change.sp_to == values[change.at_us // SECOND_US + 599]
        assert len(change.moves) == 600
        assert change.set_aside == ()


def test_a_staircase_that_ends_in_time_is_not_moving() -> None:
    """The last move decides: at start + after - join it is still a staircase, later moving."""
    for last, kind in [(540.0, ChangeKind.RAMP), (541.0, ChangeKind.MOVING)]:
        stamps = np.concatenate(([0.0], 1000.0 + np.linspace(0.0, last, 12)))
        changes = find(record((stamps, np.arange(13.0))))
        assert [change.kind for change in changes] == [kind]


@pytest.mark.parametrize("quantum", [None, 0.05])
@pytest.mark.parametrize("seed", [1, 2, 3])
def test_noise_on_a_measured_setpoint_is_tolerated(seed: int, quantum: float | None) -> None:
    rng = np.random.default_rng(seed)
    t = np.arange(20_000)
    held = 40.0 + 2.0 * (t // 800 % 2) + np.where(t > 10_000, 3.0, 0.0)
    values = held + 0.05 * rng.standard_normal(len(t))
    if quantum is not None:
        values = np.round(values / quantum) * quantum
    changes = find(record(scanned(values)))
    truth = np.flatnonzero(np.diff(held)) + 1
    assert [change.at_us // SECOND_US for change in changes] == truth.tolist()
    for change, at in zip(changes, truth, strict=True):
        assert change.kind is ChangeKind.STEP
        assert 0.03 <= change.sp_noise_eu <= 0.08 + (quantum or 0.0)
        assert change.sp_from == pytest.approx(held[at - 1], abs=0.051)
        assert change.sp_to == pytest.approx(held[at], abs=0.051)


def test_noise_alone_and_spikes_in_it_are_no_moves() -> None:
    rng = np.random.default_rng(11)
    values = 40.0 + 0.05 * rng.standard_normal(40_000)
    values[rng.choice(len(values), 40, replace=False)] += 5.0
    assert find(record(scanned(values))) == []


def test_independent_noise_turns_back_far_more_often_than_the_rule_asks() -> None:
    """Turning point test: of n - 2 inner points 2/3 are turning points, variance (16 n - 29)/90
    (Kendall and Stuart, Advanced Theory of Statistics; from memory). The rule's part lies three
    standard deviations below even for the 11 samples it needs at least."""
    n = 11
    mean, sd = 2.0 * (n - 2) / 3.0, ((16.0 * n - 29.0) / 90.0) ** 0.5
    assert JITTER_TURNS * (n - 2) < mean - 3.0 * sd
    differences = np.diff(np.random.default_rng(5).standard_normal(20_000))
    turns = np.mean(differences[1:] * differences[:-1] < 0.0)
    assert turns == pytest.approx(2.0 / 3.0, abs=0.02)


def test_an_operator_s_many_moves_are_not_taken_for_noise() -> None:
    """Nine moves up and down in 160 s, stored on change: every one of them is a move."""
    stamps = [0.0, *np.arange(300.0, 480.0, 20.0)]
    values = [50.0, 52.0, 51.0, 53.0, 52.0, 54.0, 53.5, 55.0, 54.0, 56.0]
    (change,) = find(record((stamps, values)))
    assert [value for _, value in change.moves] == values[1:]
    assert change.sp_noise_eu == 0.0


def test_one_odd_sample_of_a_scan_is_no_move() -> None:
    values = np.full(900, 50.0)
    values[400] = 99.0
    assert find(record(scanned(values))) == []
    values[700:] = 52.0
    (change,) = find(record(scanned(values)))
    assert change.at_us == 700 * SECOND_US


def test_out_and_back_within_join_is_too_small() -> None:
    (change,) = find(record(([0.0, 500.0, 530.0], [50.0, 53.0, 50.0])))
    assert change.size_eu == 0.0
    assert Reason.TOO_SMALL in change.set_aside
    assert len(change.moves) == 2


def test_the_same_number_stored_in_two_precisions_is_no_move() -> None:
    single = float(np.float32(50.1))
    assert single != 50.1
    assert find(record(([0.0, 300.0, 600.0], [50.1, single, 50.1]))) == []
    assert len(find(record(([0.0, 300.0], [50.1, 50.1001])))) == 1


def test_bad_samples_are_no_moves() -> None:
    sp = ([0.0, 300.0, 301.0, 700.0], [50.0, np.nan, 50.0, 51.0])
    (change,) = find(record(sp))
    assert (change.at_us, change.sp_from) == (700 * SECOND_US, 50.0)


@pytest.mark.parametrize(
    ("mode", "expected", "cut", "window_s"),
    [
        (AUTO, (), None, 600.0),
        (([0.0], [0.0]), (Reason.NOT_FOLLOWING,), None, 600.0),
        (([0.0, 900.0], [1.0, 0.0]), (Reason.NOT_FOLLOWING,), None, 600.0),
        (([0.0, 939.0], [0.0, 1.0]), (), None, 600.0),
        (([0.0, 950.0], [0.0, 1.0]), (Reason.NOT_FOLLOWING,), None, 600.0),
        (([0.0, 1000.0], [0.0, 1.0]), (Reason.NOT_FOLLOWING,), None, 600.0),
        (([0.0, 1200.0, 1300.0], [1.0, 0.0, 1.0]), (), Reason.NOT_FOLLOWING, 200.0),
        (([1001.0], [1.0]), (Reason.NOT_FOLLOWING,), None, 600.0),
        (([0.0, 990.0, 1100.0], [1.0, np.nan, np.nan]), (), None, 600.0),
        (([], []), (Reason.NOT_FOLLOWING,), None, 600.0),
    ],
)
def test_the_mode_held_at_the_move_and_after_it(
    mode: Column, expected: tuple[Reason, ...], cut: Reason | None, window_s: float
) -> None:
    """A mode holds until its next sample, as a setpoint does (OPC UA Part 13, stepped)."""
    (change,) = find(record(([0.0, 1000.0], [50.0, 55.0]), mode=mode), WITH_MODE)
    assert (change.set_aside, change.cut, change.window_s) == (expected, cut, window_s)


def test_moves_in_and_out_of_automatic_are_never_one_change() -> None:
    sp = ([0.0, 1000.0, 1030.0, 1050.0], [50.0, 55.0, 20.0, 21.0])
    first, second = find(record(sp, mode=([0.0, 1020.0], [1.0, 0.0])), WITH_MODE)
    assert (first.kind, first.sp_to, first.cut) == (ChangeKind.STEP, 55.0, Reason.NOT_FOLLOWING)
    assert first.window_s == 20.0
    assert (second.kind, second.set_aside) == (ChangeKind.STAIRCASE, (Reason.NOT_FOLLOWING,))


def test_a_setpoint_that_copies_the_process_variable_in_manual_leaves_no_changes() -> None:
    """The setpoint tracks in manual, then jumps nowhere on the way back to automatic."""
    rng = np.random.default_rng(3)
    t = np.arange(4000.0)
    pv = 50.0 + np.cumsum(0.1 * rng.standard_normal(len(t)))
    sp = np.where((t >= 1000) & (t < 3000), pv, np.where(t < 1000, 50.0, pv[2999]))
    changes = find(record((t, sp), (t, pv), ([0.0, 1000.0, 3000.0], [1.0, 0.0, 1.0])), WITH_MODE)
    assert all(change.set_aside == (Reason.NOT_FOLLOWING,) for change in changes)
    assert len(changes) <= 1


def wandering(seed: int, n: int = 6000) -> tuple[NDArray[np.float64], NDArray[np.float64]]:
    rng = np.random.default_rng(seed)
    return np.arange(float(n)), 50.0 + np.cumsum(0.1 * rng.standard_normal(n))


def on_change(t: NDArray[np.float64], value: NDArray[np.float64], deadband: float) -> Column:
    kept = [0]
    for i in range(1, len(value)):
        if abs(value[i] - value[kept[-1]]) >= deadband:
            kept.append(i)
    return t[kept], value[kept]


@pytest.mark.parametrize("deadband", [0.0, 0.4])
@pytest.mark.parametrize("lag_s", [0.0, 1.0])
def test_without_a_mode_tag_tracking_is_noticed(deadband: float, lag_s: float) -> None:
    t, pv = wandering(8)
    stamps, value = (t, pv) if deadband == 0.0 else on_change(t, pv, deadband)
    sp = (np.asarray(stamps) + lag_s, value)
    changes = find(record(sp, (stamps, value)))
    noticed = sum(Reason.NOT_FOLLOWING in change.set_aside for change in changes)
    assert len(changes) > 3
    assert noticed >= 0.9 * len(changes)


@pytest.mark.parametrize("tau_s", [5.0, 200.0])
@pytest.mark.parametrize("spacing_s", [100, 250])
def test_without_a_mode_tag_a_followed_setpoint_is_not_taken_for_tracking(
    tau_s: float, spacing_s: int
) -> None:
    """Steps up and down, the process variable a first-order lag behind, fast or slow."""
    rng = np.random.default_rng(9)
    t = np.arange(6000)
    sp = 50.0 + np.round(rng.uniform(-5.0, 5.0, 100), 1)[t // spacing_s]
    pv = np.empty(len(t))
    pv[0] = sp[0]
    for i in range(1, len(t)):
        pv[i] = pv[i - 1] + (sp[i - 1] - pv[i - 1]) / tau_s
    pv += 0.1 * rng.standard_normal(len(t))
    changes = find(record(scanned(sp), scanned(pv)))
    assert len(changes) >= 20
    wrong = [change for change in changes if Reason.NOT_FOLLOWING in change.set_aside]
    assert len(wrong) <= 0.05 * len(changes)


def test_a_jump_to_the_process_variable_without_a_mode_tag_is_not_followed() -> None:
    sp = ([0.0, 1000.0, 1400.0], [50.0, 42.02, 45.0])
    pv = scanned(np.full(2001, 42.0))
    jump, step = find(record(sp, pv))
    assert jump.set_aside == (Reason.NOT_FOLLOWING,)
    assert step.set_aside == ()


def test_a_window_the_record_does_not_reach_is_incomplete() -> None:
    sp = ([0.0, 1000.0], [50.0, 55.0])
    for last, reasons in [(1599.0, (Reason.WINDOW_INCOMPLETE,)), (1600.0, ())]:
        (change,) = find(record(sp, ([0.0, last], [0.0, 0.0])))
        assert change.set_aside == reasons
        assert change.complete is (reasons == ())


def test_a_move_after_a_silence_of_the_setpoint_has_no_known_time() -> None:
    hour = 3600.0
    pv = ([0.0, 40.0 * hour], [0.0, 0.0])
    (known,) = find(record(([0.0, 25.0 * hour], [50.0, 55.0]), pv))
    assert known.set_aside == ()
    (unknown,) = find(record(([0.0, 25.0 * hour + 1.0], [50.0, 55.0]), pv))
    assert unknown.set_aside == (Reason.GAP,)


@pytest.mark.parametrize("values", [[], [50.0], [np.nan, np.nan]])
def test_records_without_two_good_setpoints_have_no_changes(values: list[float]) -> None:
    assert find(record((np.arange(float(len(values))), values))) == []


SMALL = Windows(20 * SECOND_US, 60 * SECOND_US, 8 * SECOND_US)


def random_setpoint(rng: np.random.Generator, pv: Column) -> Column:
    """Held, scanned, jittering, ramping, moving and tracking stretches, one after another."""
    stamps: list[float] = []
    values: list[float] = []
    start, level = 0.0, 50.0
    while start < 900.0:
        length = float(rng.uniform(10.0, 150.0))
        t = start + np.arange(0.0, length, float(rng.choice([0.5, 1.0, 3.0])))
        kind = rng.integers(6)
        held = np.full(len(t), level)
        jumps = level + np.round(rng.normal(0.0, 2.0, len(t)) * (rng.random(len(t)) < 0.05), 1)
        shapes = [
            held,
            np.maximum.accumulate(jumps),
            held + 0.2 * rng.standard_normal(len(t)) + np.where(t > start + 30.0, 4.0, 0.0),
            np.round(held + 0.1 * (t - start), 2),
            held + 3.0 * np.sin((t - start) / 7.0),
            np.interp(t, *pv),
        ]
        kept = slice(None) if kind > 0 else slice(0, 1)
        stamps += t[kept].tolist()
        values += shapes[kind][kept].tolist()
        start, level = start + length, float(np.round(shapes[kind][-1] + rng.normal(0.0, 2.0), 1))
    return stamps, values


def random_record(seed: int) -> Record:
    rng = np.random.default_rng(seed)
    t = np.unique(np.round(rng.uniform(0.0, 950.0, 500), 1))
    pv: Column = (t, 50.0 + np.cumsum(0.3 * rng.standard_normal(len(t))))
    switches = np.sort(rng.choice(950, int(rng.integers(1, 7)), replace=False)).astype(np.float64)
    mode: Column = (switches, np.where(rng.random(len(switches)) < 0.7, 1.0, 0.0))
    whole = record(random_setpoint(rng, pv), pv, mode)
    spoiled = {}
    for role, signal in whole.signals.items():
        good = rng.random(len(signal)) > 0.03
        spoiled[role] = Samples(signal.t_us, np.where(good, signal.value, np.nan), good)
    return Record(spoiled)


@settings(deadline=None, max_examples=60)
@given(st.integers(0, 2**32 - 1), st.booleans())
def test_a_change_rests_on_its_own_interval_and_the_bounding_samples_alone(
    seed: int, with_mode: bool
) -> None:
    loop = replace(WITH_MODE if with_mode else LOOP, windows=SMALL)
    whole = random_record(seed)
    changes = find(whole, loop)
    for change in changes:
        cut = whole.around(
            change.at_us - SMALL.before_us - SMALL.join_us,
            change.at_us + SMALL.after_us + SMALL.join_us,
        )
        again = {found.at_us: found for found in find(cut, loop)}
        assert again.get(change.at_us) == change


@settings(deadline=None, max_examples=40)
@given(st.integers(0, 2**32 - 1), st.integers(0, 950), st.booleans())
def test_the_slices_at_a_border_are_enough_to_find_every_change_across_it(
    seed: int, border_s: int, with_mode: bool
) -> None:
    """Neither more nor fewer: what is found near a border from the slice around it is the truth."""
    loop = replace(WITH_MODE if with_mode else LOOP, windows=SMALL)
    whole = random_record(seed)
    border_us = border_s * SECOND_US
    first = border_us - SMALL.after_us - SMALL.join_us
    last = border_us + SMALL.before_us + SMALL.join_us
    part = whole.around(border_us - SMALL.reach_us, border_us + SMALL.reach_us)

    def near(rec: Record) -> list[SetpointChange]:
        return [change for change in find(rec, loop) if first <= change.at_us <= last]

    assert near(part) == near(whole)


@pytest.mark.parametrize(("at_once", "narrow"), [(1, 8), (7, 0), (16_384, 0), (100, 64)])
def test_changes_gone_through_in_portions_are_those_of_the_whole(
    at_once: int, narrow: int, monkeypatch: pytest.MonkeyPatch
) -> None:
    """However many are looked at together, and however their levels are sorted."""
    loops = [replace(loop, windows=SMALL) for loop in (LOOP, WITH_MODE)]
    cases = [(random_record(seed), loop) for seed in range(25) for loop in loops]
    whole = [find(*case) for case in cases]
    monkeypatch.setattr("audit.setpoints.moves.AT_ONCE", at_once)
    monkeypatch.setattr("audit.setpoints.moves.NARROW", narrow)
    monkeypatch.setattr("audit.setpoints.moves.MANY_ROWS", 1)
    assert [find(*case) for case in cases] == whole


def test_random_records_hold_every_kind_and_reason() -> None:
    """The property tests above would prove nothing on records without changes."""
    loops = [replace(loop, windows=SMALL) for loop in (LOOP, WITH_MODE)]
    changes = [c for seed in range(30) for loop in loops for c in find(random_record(seed), loop)]
    assert {change.kind for change in changes} == set(ChangeKind)
    assert {Reason.TOO_SMALL, Reason.NOT_FOLLOWING, Reason.WINDOW_INCOMPLETE} <= {
        reason for change in changes for reason in change.set_aside
    }
    assert {change.cut for change in changes} == {None, Reason.CUT_SHORT, Reason.NOT_FOLLOWING}
    assert any(change.sp_noise_eu > 0.0 for change in changes)
    assert [c.at_us for c in find(random_record(1), loops[0])] == sorted(
        {c.at_us for c in find(random_record(1), loops[0])}
    )

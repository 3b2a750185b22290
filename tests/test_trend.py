"""The loop against its own past: published cumulative sums, false alarms, changes found."""

from __future__ import annotations

import math
from collections.abc import Sequence
from dataclasses import replace

import numpy as np
import pytest
import statsmodels.api as sm
from numpy.typing import NDArray

from audit.records import (
    DAY_US,
    LIMITED,
    ChangeKind,
    Loop,
    Measured,
    PastStep,
    Quantity,
    QuantityTrend,
    Reason,
    Windows,
)
from audit.trend import assess, cusum
from audit.trend.baseline import Baseline, baseline_of
from audit.trend.cusum import Watch, watch
from audit.trend.date import change_point
from audit.trend.series import AT_LEAST, AT_MOST, VALUE, Scale, Series, series_of, size_of

LOOP = Loop("FIC-1", "pv", "sp", Windows(0, 0, 0), range_low=0.0, range_high=100.0, eu="m3/h")
RISE, SETTLING = Quantity.RISE_TIME, Quantity.SETTLING_TIME
OVERSHOOT, DECAY = Quantity.OVERSHOOT, Quantity.DECAY_RATIO
ERROR = Quantity.STEADY_STATE_ERROR
QUARTER_DAY_US = DAY_US // 4

NIST = (
    "324.925 324.675 324.725 324.350 325.350 325.225 324.125 324.525 325.225 324.600 "
    "324.625 325.150 328.325 327.250 327.825 328.500 326.675 327.775 326.875 328.350"
)
MONTGOMERY = (
    "9.45 7.99 9.29 11.66 12.16 10.18 8.04 11.46 9.20 10.34 9.03 11.47 10.51 9.40 10.08 "
    "9.37 10.62 10.31 8.52 10.84 10.90 9.33 12.29 11.50 10.60 11.08 10.38 11.62 11.31 "
    "10.52"
)


def past(at: int, up: bool = True, level: float = 50.0, **measured: Measured | float) -> PastStep:
    """A usable step, the ``at``-th quarter of a day; a plain number is a value within 2 %."""
    by_name = {quantity.value: quantity for quantity in Quantity}
    known = {
        by_name[name]: given
        if isinstance(given, Measured)
        else Measured(given, given - 0.02 * abs(given), given + 0.02 * abs(given), "direct")
        for name, given in measured.items()
    }
    change = 5.0 if up else -5.0
    at_us = at * QUARTER_DAY_US
    end_us = at_us + 600_000_000
    return PastStep(
        at_us, end_us, level, level + change, ChangeKind.STEP, True, (), known, band_pct=2.0
    )


def times(values: Sequence[float], first: int = 0) -> list[PastStep]:
    return [
        past(first + at, up=at % 2 == 0, rise_time_s=float(value))
        for at, value in enumerate(values)
    ]


def scattered(rng: np.random.Generator, count: int, middle: float, sd: float) -> list[float]:
    return [float(v) for v in middle * np.exp(rng.normal(0.0, sd, count))]


def rise(steps: Sequence[PastStep], loop: Loop = LOOP) -> QuantityTrend:
    return assess(steps, loop, LIMITED).quantities[RISE]


def plain(x: NDArray[np.float64], u: float = 0.0) -> Series:
    """A series of bare numbers, every other step upwards."""
    count = len(x)
    steps = [past(at, up=at % 2 == 0) for at in range(count)]
    measured = [Measured(float(value)) for value in x]
    bound = np.full(count, VALUE, np.int8)
    return Series(steps, measured, x, np.full(count, u), bound, np.arange(count) % 2 == 0)


def known_baseline(series: Series, middle: float, scatter: float, k: float) -> Baseline:
    """A baseline that is given, not estimated, as the published examples have it."""
    level, reference = np.full(2, middle), np.full(2, k)
    return Baseline(tuple(range(30)), level, reference, False, scatter, 0.0)


def published(
    data: NDArray[np.float64],
    target: float,
    sd: float,
    k: float,
    h: float,
    monkeypatch: pytest.MonkeyPatch,
) -> tuple[list[float], Watch]:
    """The cumulative sum after each value, and the state at the end."""
    monkeypatch.setattr(cusum, "LIMIT", h)
    series = plain(data)
    state = Watch(
        series, Scale(False, sd, sd, 1e9), known_baseline(series, target, sd, k), from_index=0
    )
    sums = []
    for index in range(len(data)):
        cusum.go_on(state, index, index + 1)
        sums.append(state.worse)
    return sums, state


def test_nist_cusum_example(monkeypatch: pytest.MonkeyPatch) -> None:
    """NIST/SEMATECH e-Handbook 6.3.2.3: target 325, k 0.3175, h 4.1959 (data from memory).

    The handbook's values are not held to three standard deviations, hence the unit of 10.
    """
    data = np.array(NIST.split(), np.float64)
    sums, state = published(data, 325.0, 10.0, 0.03175, 0.41959, monkeypatch)
    expected = {13: 3.0075, 14: 4.94, 15: 7.4475, 16: 10.63, 20: 19.035}
    for run, value in expected.items():
        assert 10 * sums[run - 1] == pytest.approx(value, abs=1e-9)
    assert state.alarms[0] == 13
    assert state.onset == 12


def test_montgomery_cusum_example(monkeypatch: pytest.MonkeyPatch) -> None:
    """Montgomery's data (30 values as the IMSL manual's EWMA example prints them): mu 10, s 1,
    k 0.5, h 5: C+ of run 29 is 5.28, the first signal, 7 runs above zero: a shift after run 22.
    """
    data = np.array(MONTGOMERY.split(), np.float64)
    sums, state = published(data, 10.0, 1.0, 0.5, 5.0, monkeypatch)
    assert sums[28] == pytest.approx(5.28, abs=1e-9)
    assert state.alarms[0] == 28
    assert state.onset == 22


def run_lengths(shift: float, runs: int, rng: np.random.Generator) -> NDArray[np.float64]:
    """Steps until the first alarm, baseline known and k 0.5; at most 4000."""
    found = []
    for _ in range(runs):
        series = plain_scores(rng.normal(shift, 1.0, 4000))
        baseline = known_baseline(series, 0.0, 1.0, 0.5)
        state = Watch(series, Scale(False, 1, 1, 1e9), baseline, from_index=0)
        at = 0
        while at < len(series) and not state.alarms:
            at = cusum.go_on(state, at, at + 25)
        found.append(state.alarms[0] + 1 if state.alarms else at)
    return np.array(found, np.float64)


def test_average_run_length_of_the_sum(monkeypatch: pytest.MonkeyPatch) -> None:
    """Page's sum with k 0.5, h 4 and a known baseline: one-sided run length 335.4 in control
    (exact, integral equation), 8.38 after a shift of 1 (Montgomery's tables, from memory).

    300 and 1000 runs, seed 11; within four standard errors. Holding scores to 3 changes the
    first by little (a normal score is beyond 3 once in 740), allowed for with 5 %.
    """
    monkeypatch.setattr(cusum, "LIMIT", 4.0)
    rng = np.random.default_rng(11)
    shifted = run_lengths(1.0, 1000, rng)
    assert abs(shifted.mean() - 8.38) < 4 * shifted.std() / 1000**0.5
    control = run_lengths(0.0, 300, rng)
    assert abs(control.mean() - 335.4) < 4 * control.std() / 300**0.5 + 0.05 * 335.4


def plain_scores(x: NDArray[np.float64]) -> Series:
    """As ``plain`` without steps: for runs that only the sum sees."""
    count = len(x)
    bound = np.full(count, VALUE, np.int8)
    return Series((), (), x, np.zeros(count), bound, np.zeros(count, np.bool_))


def test_nile_change_is_dated_1899() -> None:
    """The Nile at Aswan (statsmodels): Pettitt's last year before the change is 1898, and change
    point programs agree on [28, 100] (check value, recomputed). The flow falls: taken negative.
    """
    nile = sm.datasets.nile.load_pandas().data
    flow = nile["volume"].to_numpy(float)
    years = nile["year"].to_numpy(int)
    before = flow[:20]
    middle = float(np.median(before))
    scatter = 1.482602 * float(np.median(np.abs(before - middle)))
    first, low, high = change_point((middle - flow) / scatter)
    assert years[first] == 1899
    assert years[low] <= 1899 <= years[high]
    assert years[high] - years[low] <= 8


def test_robust_scatter_of_a_normal_sample() -> None:
    """1.482602 MAD estimates a normal's standard deviation (check value, common practice).

    5000 values of standard deviation 2, seed 3. Standard error of the estimate is 1.17/sqrt(n)
    of it (efficiency 0.37), four of them allowed; the upper decile is scaled alike.
    """
    x = np.random.default_rng(3).normal(7.0, 2.0, 5000)
    got = baseline_of(plain(x[:4000]), range(4000), Scale(False, 2.0, 0.01, 1.0)).scatter
    assert got == pytest.approx(2.0, rel=4 * 1.17 / 4000**0.5)


@pytest.mark.parametrize(("sd", "heavy"), [(0.05, False), (0.15, False), (0.15, True)])
def test_false_alarms(sd: float, heavy: bool) -> None:
    """A loop that stays as it is: at most 0.1 false alarms a loop and year of 4 steps a day.

    Eight quantities share that, so one may raise 0.0125 a year; of 150 years, seed 5, that is 1.9
    on average, and more than 7 would come with a chance of 0.1 % (Poisson). A larger run of 1000
    years each gave 0 to 8. ``heavy``: Student's t with 5 degrees of freedom, of the same spread.
    """
    rng = np.random.default_rng(5)
    years = 150
    false = 0
    for _ in range(years):
        z = rng.standard_t(5, 1460) / (5 / 3) ** 0.5 if heavy else rng.standard_normal(1460)
        state = watch(plain_scores(z * sd), Scale(True, 0.10, 0.05, math.log(1.2)))
        assert state is not None
        false += bool(state.alarms)
    assert false <= 7


def test_a_slower_loop_is_found_and_dated() -> None:
    """12 s becomes 19 s after 60 steps: flagged within 10 steps, the date within two of it."""
    rng = np.random.default_rng(1)
    values = scattered(rng, 60, 12.0, 0.08) + scattered(rng, 40, 19.0, 0.08)
    steps = times(values)
    assert not rise(steps[:60]).changed
    found = rise(steps[:70])
    assert found.changed
    assert (found.beyond_chance, found.large_enough, found.provisional) == (True, True, False)
    assert found.since_us is not None
    assert found.since_low_us is not None
    assert found.since_high_us is not None
    assert abs(found.since_us / QUARTER_DAY_US - 60) <= 2
    assert found.since_low_us <= 60 * QUARTER_DAY_US <= found.since_high_us
    assert found.baseline == pytest.approx(12.0, rel=0.1)
    assert found.recent == pytest.approx(19.0, rel=0.1)
    later = rise(steps)
    assert (later.since_us, later.changed) == (rise(steps[:85]).since_us, True)


@pytest.mark.parametrize("seed", range(8))
def test_put_right_is_not_flagged_after_ten_steps(seed: int) -> None:
    rng = np.random.default_rng(seed)
    bad = scattered(rng, 40, 12.0, 0.1) + scattered(rng, 25, 22.0, 0.1)
    steps = times(bad + scattered(rng, 10, 12.0, 0.1))
    assert rise(steps[:65]).changed
    assert not rise(steps).changed


def test_the_second_change_has_its_own_date() -> None:
    rng = np.random.default_rng(4)
    values = (
        scattered(rng, 40, 12.0, 0.08)
        + scattered(rng, 20, 20.0, 0.08)
        + scattered(rng, 30, 12.0, 0.08)
        + scattered(rng, 20, 20.0, 0.08)
    )
    found = rise(times(values))
    assert found.changed
    assert found.since_us is not None
    assert abs(found.since_us / QUARTER_DAY_US - 90) <= 2


def test_one_wild_step_flags_nothing() -> None:
    rng = np.random.default_rng(2)
    values = scattered(rng, 40, 12.0, 0.08)
    assert not rise(times([*values, 900.0])).beyond_chance
    assert not rise(times([*values, 900.0, 900.0])).beyond_chance


def test_beyond_chance_is_not_yet_large_enough() -> None:
    """10 % slower at a scatter of 3 % is sure, and does not matter."""
    rng = np.random.default_rng(6)
    values = scattered(rng, 40, 12.0, 0.03) + scattered(rng, 60, 13.8, 0.03)
    found = rise(times(values))
    assert (found.beyond_chance, found.large_enough, found.changed) == (True, False, False)


def test_faster_is_no_flag() -> None:
    rng = np.random.default_rng(7)
    assert not rise(times(scattered(rng, 40, 12, 0.08) + scattered(rng, 40, 6, 0.08))).beyond_chance


def test_provisional_baseline_flags_only_what_is_gross() -> None:
    rng = np.random.default_rng(8)
    start = scattered(rng, 12, 12.0, 0.05)
    mild = rise(times(start + scattered(rng, 15, 15.5, 0.05)))
    gross = rise(times(start + scattered(rng, 15, 24.0, 0.05)))
    assert mild.provisional
    assert gross.provisional
    assert not mild.changed
    assert gross.changed


def test_too_few_steps_have_no_baseline() -> None:
    found = rise(times([12.0] * 9))
    assert (found.baseline, found.baseline_steps, found.provisional) == (None, 9, True)
    assert found.recent == pytest.approx(12.0)
    assert "there are 9" in found.note


def test_bounds_alone_make_no_baseline() -> None:
    """Ten changes that were cut: no baseline; with eleven that were not, there is one of 21."""
    cut = Measured.longer_than(600.0, "direct", Reason.CUT_SHORT)
    only = [past(at, rise_time_s=cut) for at in range(10)]
    found = rise(only)
    assert (found.baseline, found.was, found.recent, found.recent_low) == (None, None, None, 600.0)
    assert "at least" in found.note
    assert rise([*only, *times([700.0] * 10, 10)]).was is None
    both = rise([*only, *times([700.0] * 11, 10)])
    assert (both.baseline, both.baseline_steps) == (700.0, 21)


@pytest.mark.parametrize(("without", "is_there"), [(1, True), (2, False)])
def test_a_peak_that_was_seldom_seen_has_no_baseline(without: int, is_there: bool) -> None:
    """Between two peaks so many changes without one."""
    peak, none = Measured(30.0, 29.0, 31.0, "direct"), Measured.missing(Reason.NO_PEAK)
    steps = [past(at, peak_time_s=none if at % (without + 1) else peak) for at in range(60)]
    found = assess(steps, LOOP, LIMITED).quantities[Quantity.PEAK_TIME]
    assert (found.was is not None) is is_there
    assert is_there or "no peak" in found.note


def test_the_settling_time_in_five_percent_does_not_come_twice() -> None:
    two = [past(at, settling_time_s=50.0, settling_time_5pct_s=50.0) for at in range(12)]
    five = [replace(one, band_pct=5.0) for one in two]
    assert Quantity.SETTLING_TIME_5PCT in assess(two, LOOP, LIMITED).quantities
    assert list(assess(five, LOOP, LIMITED).quantities) == [SETTLING]


def test_longer_than_counts_as_at_least_that() -> None:
    rng = np.random.default_rng(9)
    steps = times(scattered(rng, 40, 12.0, 0.08))
    cut = Measured.longer_than(30.0, "direct", Reason.CUT_SHORT)
    found = rise([*steps, *(past(40 + at, rise_time_s=cut) for at in range(8))])
    assert found.changed
    assert (found.recent, found.recent_high) == (30.0, None)
    assert "at least" in found.note


def test_a_bound_below_the_baseline_says_nothing() -> None:
    """Cut after 3 s where 12 s is normal: neither better nor worse, and it hides no change."""
    rng = np.random.default_rng(10)
    values = scattered(rng, 40, 12.0, 0.08) + scattered(rng, 12, 19.0, 0.08)
    cut = Measured.longer_than(3.0, "direct", Reason.CUT_SHORT)
    steps = times(values[:40])
    for at, value in enumerate(values[40:]):
        steps.append(past(40 + 2 * at, rise_time_s=value))
        steps.append(past(41 + 2 * at, rise_time_s=cut))
    assert rise(steps).changed


def test_at_most_is_never_worse() -> None:
    """A decay ratio that is only bounded (no second peak) is no sign of more oscillation."""
    values = [past(at, decay_ratio=0.05) for at in range(30)]
    bounded = Measured(low=0.0, high=0.6, how="direct", why=Reason.NO_PEAK)
    steps = [*values, *(past(30 + at, decay_ratio=bounded) for at in range(20))]
    assert not assess(steps, LOOP, LIMITED).quantities[DECAY].beyond_chance
    worse = [*values, *(past(30 + at, decay_ratio=0.4) for at in range(20))]
    assert assess(worse, LOOP, LIMITED).quantities[DECAY].changed


def test_error_is_looked_at_by_its_size() -> None:
    """+0.3 to -0.3 is another sign, not a larger error; +0.3 to -2 is one."""
    rng = np.random.default_rng(12)

    def errors(middle: float, count: int, first: int) -> list[PastStep]:
        values = rng.normal(middle, 0.05, count)
        return [
            past(
                first + at, steady_state_error_eu=Measured(float(v), float(v) - 0.1, float(v) + 0.1)
            )
            for at, v in enumerate(values)
        ]

    start = errors(0.3, 40, 0)
    assert not assess([*start, *errors(-0.3, 30, 40)], LOOP, ()).quantities[ERROR].changed
    found = assess([*start, *errors(-2.0, 15, 40)], LOOP, ()).quantities[ERROR]
    assert found.changed
    assert found.recent == pytest.approx(2.0, abs=0.1)


@pytest.mark.parametrize(
    ("given", "low", "high"),
    [((-0.2, -0.5, 0.1), 0.0, 0.5), ((-0.4, -0.5, -0.3), 0.3, 0.5), ((0.4, 0.3, 0.5), 0.3, 0.5)],
)
def test_interval_of_a_size(given: tuple[float, float, float], low: float, high: float) -> None:
    size = size_of(Measured(*given))
    assert (size.value, size.low, size.high) == (abs(given[0]), low, high)


@pytest.mark.parametrize(
    ("given", "least"),
    [((None, None, -0.4), 0.4), ((None, 0.3, None), 0.3), ((None, None, 0.4), 0.0)],
)
def test_a_size_of_which_one_side_is_known_is_at_least_so_much(
    given: tuple[None, float | None, float | None], least: float
) -> None:
    size = size_of(Measured(*given))
    assert (size.value, size.low, size.high) == (None, least, None)


def test_directions_are_compared_apart() -> None:
    """Up 10 s, down 20 s: a run of downward steps is no change, 20 s upwards is one."""
    rng = np.random.default_rng(13)
    steps = []
    for at in range(40):
        middle = 10.0 if at % 2 == 0 else 20.0
        steps.append(past(at, at % 2 == 0, rise_time_s=scattered(rng, 1, middle, 0.05)[0]))
    down = [
        past(40 + at, False, rise_time_s=v) for at, v in enumerate(scattered(rng, 15, 20, 0.05))
    ]
    up = [past(40 + at, True, rise_time_s=v) for at, v in enumerate(scattered(rng, 15, 20, 0.05))]
    assert not rise([*steps, *down]).beyond_chance
    assert rise([*steps, *up]).changed


def test_what_could_not_be_compared_is_noted() -> None:
    start = [past(at, up=True, rise_time_s=12.0) for at in range(30)]
    other_way = [past(30 + at, up=False, rise_time_s=12.0) for at in range(10)]
    other_level = [past(30 + at, level=90.0, rise_time_s=12.0) for at in range(10)]
    larger = [replace(past(30 + at, rise_time_s=12.0), sp_to=65.0) for at in range(10)]
    assert "all went down" in rise([*start, *other_way]).note
    assert "operating levels" in rise([*start, *other_level]).note
    assert "sizes" in rise([*start, *larger]).note
    assert rise(start).note == ""


def test_uncertain_steps_weigh_less() -> None:
    """The same numbers, measured so badly that they prove nothing."""
    rng = np.random.default_rng(14)
    start = times(scattered(rng, 40, 12.0, 0.05))
    values = scattered(rng, 8, 16.0, 0.05)
    sure = [past(40 + at, rise_time_s=v) for at, v in enumerate(values)]
    unsure = [past(40 + at, rise_time_s=Measured(v, v / 4, v * 4)) for at, v in enumerate(values)]
    assert rise([*start, *sure]).beyond_chance
    assert not rise([*start, *unsure]).beyond_chance


def test_averaging_level_has_no_flag_on_times() -> None:
    rng = np.random.default_rng(15)
    steps = times(scattered(rng, 40, 12.0, 0.08) + scattered(rng, 20, 30.0, 0.08))
    assert assess(steps, replace(LOOP, averaging=True), LIMITED).quantities == {}


def test_unusable_steps_do_not_count_and_order_does_not_matter() -> None:
    rng = np.random.default_rng(16)
    steps = times(scattered(rng, 40, 12.0, 0.08) + scattered(rng, 20, 25.0, 0.08))
    assert assess(steps[::-1], LOOP, LIMITED) == assess(steps, LOOP, LIMITED)
    unusable = [replace(step, usable=False) for step in steps[40:]]
    assert not rise([*steps[:40], *unusable]).beyond_chance


def test_another_band_is_another_quantity() -> None:
    steps = [past(at, settling_time_s=60.0) for at in range(40)]
    narrow = [replace(past(40 + at, settling_time_s=90.0), band_pct=1.0) for at in range(20)]
    found = assess([*steps, *narrow], LOOP, LIMITED).quantities[SETTLING]
    assert (found.baseline_steps, found.beyond_chance) == (20, False)
    assert found.baseline == pytest.approx(90.0)


def test_limited_quantities_come_first() -> None:
    steps = [past(at, rise_time_s=12.0, overshoot_pct=3.0) for at in range(12)]
    assert next(iter(assess(steps, LOOP, (OVERSHOOT,)).quantities)) is OVERSHOOT


def test_series_marks_bounds() -> None:
    cut = Measured.longer_than(30.0, "direct", Reason.CUT_SHORT)
    most = Measured(low=0.0, high=20.0, why=Reason.NO_PEAK)
    given: tuple[Measured | float, ...] = (10.0, cut, most)
    series = series_of([past(at, rise_time_s=one) for at, one in enumerate(given)], RISE)
    assert series.bound.tolist() == [VALUE, AT_LEAST, AT_MOST]
    assert series.x == pytest.approx(np.log([10.0, 30.0, 20.0]))
    assert series.u[1:].tolist() == [0.0, 0.0]


@pytest.mark.parametrize(("times_larger", "flagged"), [(1.5, False), (2.5, False), (4.0, True)])
def test_unrest_is_flagged_from_three_times_on(times_larger: float, flagged: bool) -> None:
    """Three times: common practice, no source."""
    rng = np.random.default_rng(4)
    usual = 0.3 * np.exp(0.1 * rng.standard_normal(60))
    usual[40:] *= times_larger
    steps = [past(at, unrest_eu=float(one)) for at, one in enumerate(usual)]
    found = assess(steps, LOOP, ()).quantities[Quantity.UNREST]
    assert found.changed is flagged


def test_unrest_far_inside_the_range_is_calm() -> None:
    """Ten times as restless, and still under 0.1 % of the range of 100: nothing to anybody."""
    steps = [past(at, unrest_eu=0.005 if at < 40 else 0.05) for at in range(60)]
    assert not assess(steps, LOOP, ()).degraded

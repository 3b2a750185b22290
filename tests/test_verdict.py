"""The decision rule and the judgement of one change."""

from __future__ import annotations

from dataclasses import replace
from datetime import UTC, datetime
from statistics import NormalDist
from typing import Any

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st
from scipy import stats

from audit.evidence import median_of, order_rank
from audit.records import (
    LIMITED,
    ChangeKind,
    Loop,
    Measured,
    Outcome,
    Quantity,
    Reason,
    Response,
    SetpointChange,
    Spec,
    Windows,
)
from audit.verdict import decide, judge

LOOP = Loop("FIC-1", "pv", "sp", Windows(0, 0, 0), range_low=0.0, range_high=100.0)
CHANGE = SetpointChange(0, 50.0, 55.0, ChangeKind.STEP, ((0, 55.0),), 600_000_000, True)
RISE, PEAK, DECAY = Quantity.RISE_TIME, Quantity.PEAK_TIME, Quantity.DECAY_RATIO
SETTLING, OVERSHOOT = Quantity.SETTLING_TIME, Quantity.OVERSHOOT
ERROR = Quantity.STEADY_STATE_ERROR


def response(measured: dict[Quantity, Measured], rest: Reason = Reason.NOISY) -> Response:
    missing = {quantity: Measured.missing(rest) for quantity in Quantity}
    return Response({**missing, **measured}, "test", 2.0)


def spec(**limits: float) -> Spec:
    by_name = {quantity.value: quantity for quantity in LIMITED}
    chosen = {by_name[name]: limit for name, limit in limits.items()}
    return Spec("FIC-1", datetime(2026, 1, 1, tzinfo=UTC), chosen, version=3)


@pytest.mark.parametrize(
    ("measured", "limit", "signed", "outcome"),
    [
        (Measured(9.6, 9.0, 10.0), 10.0, False, Outcome.IN_SPEC),
        (Measured(9.6, 9.0, 10.1), 10.0, False, Outcome.UNDECIDED),
        (Measured(11.0, 10.0, 12.0), 10.0, False, Outcome.UNDECIDED),
        (Measured(11.0, 10.1, 12.0), 10.0, False, Outcome.OUT_OF_SPEC),
        # u = 0 is binary (JCGM 106 / ISO 14253-1 limiting case)
        (Measured(10.0, 10.0, 10.0), 10.0, False, Outcome.IN_SPEC),
        (Measured(10.01, 10.01, 10.01), 10.0, False, Outcome.OUT_OF_SPEC),
        # longer than: out or undecided, never in
        (Measured.longer_than(10.1, "direct", Reason.CUT_SHORT), 10.0, False, Outcome.OUT_OF_SPEC),
        (Measured.longer_than(1.0, "direct", Reason.CUT_SHORT), 10.0, False, Outcome.UNDECIDED),
        # at most: in or undecided, never out
        (Measured(high=0.2, why=Reason.NO_PEAK), 0.25, False, Outcome.IN_SPEC),
        (Measured(high=0.3, why=Reason.NO_PEAK), 0.25, False, Outcome.UNDECIDED),
        # a value of unknown uncertainty decides nothing
        (Measured(3.0), 10.0, False, Outcome.UNDECIDED),
        (Measured.missing(Reason.NOISY), 10.0, False, Outcome.NOT_MEASURED),
        # the signed error, both sides
        (Measured(-0.5, -0.9, -0.1), 1.0, True, Outcome.IN_SPEC),
        (Measured(-0.5, -1.1, 0.1), 1.0, True, Outcome.UNDECIDED),
        (Measured(-1.5, -2.0, -1.1), 1.0, True, Outcome.OUT_OF_SPEC),
        (Measured(1.5, 1.1, 2.0), 1.0, True, Outcome.OUT_OF_SPEC),
        (Measured(0.0, -2.0, 2.0), 1.0, True, Outcome.UNDECIDED),
    ],
)
def test_rule(measured: Measured, limit: float, signed: bool, outcome: Outcome) -> None:
    assert decide(measured, limit, signed) is outcome


UNCERTAIN = st.floats(0.0, 50.0)


@given(st.floats(-100, 100), UNCERTAIN, UNCERTAIN, st.floats(0.0, 100.0), st.booleans())
def test_growing_uncertainty_only_moves_to_undecided(
    value: float, small: float, more: float, limit: float, signed: bool
) -> None:
    """Monotone, as the three-way rule of ISO 14253-1 demands (wording from memory)."""
    narrow = decide(Measured(value, value - small, value + small), limit, signed)
    reach = small + more
    wide = decide(Measured(value, value - reach, value + reach), limit, signed)
    assert wide in (narrow, Outcome.UNDECIDED)


@given(st.floats(0.01, 100.0), st.floats(1e-6, 50.0), st.booleans())
def test_at_the_limit_is_undecided(limit: float, reach: float, signed: bool) -> None:
    """A value at the limit cannot be decided for any u > 0 (ISO 14253-1, uncertainty zone)."""
    measured = Measured(limit, limit - reach, limit + reach)
    assert decide(measured, limit, signed) is Outcome.UNDECIDED


@pytest.mark.parametrize(
    ("limit", "value", "u", "conformance"),
    [(10.0, 9.6, 0.25, 0.94520), (10.0, 9.5, 0.25, 0.97725), (10.0, 9.0, 0.25, 0.99997)],
)
def test_against_conformance_probability(
    limit: float, value: float, u: float, conformance: float
) -> None:
    """JCGM 106:2012: p_c = Phi((T_U - y)/u); in spec here means p_c >= 97.5 %."""
    probability = NormalDist().cdf((limit - value) / u)
    assert probability == pytest.approx(conformance, abs=5e-6)
    half = NormalDist().inv_cdf(0.975) * u
    outcome = decide(Measured(value, value - half, value + half), limit, signed=False)
    assert (outcome is Outcome.IN_SPEC) == (probability >= 0.975)


def test_guard_band_of_196_accepts_wrongly_at_most_25_in_1000() -> None:
    """JCGM 106:2012: a guard band of 1.96 u has a largest false acceptance of 2.5 %.

    A true value just out of spec, measured 4000 times with u = 1; seed 7. Five standard
    deviations of the binomial count are allowed.
    """
    values = np.random.default_rng(7).normal(10.0, 1.0, 4000)
    wrong = sum(
        decide(Measured(v, v - 1.959964, v + 1.959964), 10.0, signed=False) is Outcome.IN_SPEC
        for v in values
    )
    assert abs(wrong - 100) < 5 * (4000 * 0.025 * 0.975) ** 0.5


def test_only_limited_quantities_have_a_verdict() -> None:
    verdicts, usable, set_aside = judge(
        response({RISE: Measured(11.0, 10.5, 11.5), OVERSHOOT: Measured(3.0, 2.0, 4.0)}),
        CHANGE,
        spec(rise_time_s=10.0, settling_time_s=60.0),
        LOOP,
    )
    assert {quantity: verdict.outcome for quantity, verdict in verdicts.items()} == {
        RISE: Outcome.OUT_OF_SPEC,
        SETTLING: Outcome.NOT_MEASURED,
    }
    assert (verdicts[RISE].limit, verdicts[RISE].spec_version) == (10.0, 3)
    assert verdicts[SETTLING].why is Reason.NOISY
    assert (usable, set_aside) == (True, ())


def test_a_quantity_without_a_limit_does_not_make_a_change_usable() -> None:
    got = response({OVERSHOOT: Measured(3.0, 2.0, 4.0), SETTLING: Measured.missing(Reason.GAP)})
    verdicts, usable, set_aside = judge(
        got, CHANGE, spec(rise_time_s=10.0, settling_time_s=9.0), LOOP
    )
    assert {verdict.outcome for verdict in verdicts.values()} == {Outcome.NOT_MEASURED}
    assert (usable, set_aside) == (False, (Reason.NOISY, Reason.GAP))


@pytest.mark.parametrize("in_force", [None, spec()])
def test_without_limits_any_limitable_quantity_makes_it_usable(in_force: Spec | None) -> None:
    assert judge(response({OVERSHOOT: Measured(3.0, 2.0, 4.0)}), CHANGE, in_force, LOOP) == (
        {},
        True,
        (),
    )
    assert judge(response({Quantity.IAE: Measured(3.0, 2.0, 4.0)}), CHANGE, in_force, LOOP) == (
        {},
        False,
        (Reason.NOISY,),
    )


def test_a_bound_alone_is_usable() -> None:
    cut = Measured.longer_than(40.0, "direct", Reason.CUT_SHORT)
    verdicts, usable, _ = judge(response({SETTLING: cut}), CHANGE, spec(settling_time_s=60.0), LOOP)
    assert usable
    assert verdicts[SETTLING].outcome is Outcome.UNDECIDED
    assert verdicts[SETTLING].why is Reason.CUT_SHORT


@pytest.mark.parametrize("quantity", [PEAK, DECAY])
def test_no_peak_does_not_apply(quantity: Quantity) -> None:
    got = response({quantity: Measured.missing(Reason.NO_PEAK)})
    verdicts, usable, _ = judge(got, CHANGE, spec(**{quantity.value: 0.25}), LOOP)
    assert verdicts[quantity].outcome is Outcome.NOT_APPLICABLE
    assert usable


def test_no_response_is_usable_whatever_is_limited() -> None:
    got = response({OVERSHOOT: Measured.missing(Reason.NO_RESPONSE)})
    verdicts, usable, _ = judge(got, CHANGE, spec(overshoot_pct=10.0), LOOP)
    assert verdicts[OVERSHOOT].outcome is Outcome.NOT_MEASURED
    assert usable


def test_averaging_judges_the_error_alone() -> None:
    got = response({quantity: Measured(5.0, 4.0, 6.0) for quantity in LIMITED})
    limits = {quantity.value: 1.0 for quantity in LIMITED}
    verdicts, _, _ = judge(got, CHANGE, spec(**limits), replace(LOOP, averaging=True))
    assert verdicts[ERROR].outcome is Outcome.OUT_OF_SPEC
    others = {v.outcome for quantity, v in verdicts.items() if quantity is not ERROR}
    assert others == {Outcome.NOT_APPLICABLE}


def test_set_aside_as_a_whole() -> None:
    spoiled = replace(CHANGE, set_aside=(Reason.NOT_FOLLOWING, Reason.TOO_SMALL))
    got = response({RISE: Measured(5.0, 4.0, 6.0)})
    verdicts, usable, set_aside = judge(got, spoiled, spec(rise_time_s=10.0), LOOP)
    assert verdicts[RISE].outcome is Outcome.NOT_MEASURED
    assert verdicts[RISE].why is Reason.NOT_FOLLOWING
    assert (usable, set_aside) == (False, (Reason.NOT_FOLLOWING, Reason.TOO_SMALL))


def test_a_moving_setpoint_has_no_verdict() -> None:
    moving = replace(CHANGE, kind=ChangeKind.MOVING)
    got = response({RISE: Measured.missing(Reason.NEEDS_MODEL)}, Reason.NEEDS_MODEL)
    assert judge(got, moving, spec(rise_time_s=10.0), LOOP) == ({}, False, (Reason.NEEDS_MODEL,))


@pytest.mark.parametrize("count", range(6, 61))
def test_order_statistics_cover_95_percent(count: int) -> None:
    """Against scipy's binomial distribution: covers, and one rank further in would not."""
    rank = order_rank(count)
    assert 1 - 2 * stats.binom.cdf(rank - 1, count, 0.5) >= 0.95
    assert 1 - 2 * stats.binom.cdf(rank, count, 0.5) < 0.95


def test_order_ranks_of_the_tables() -> None:
    """Ranks of the sign test's interval, tables of nonparametric statistics (from memory)."""
    assert [order_rank(n) for n in (6, 8, 9, 10, 12, 15, 20)] == [1, 1, 2, 2, 3, 4, 6]


@given(st.lists(st.floats(-1e3, 1e3), min_size=6, max_size=60, unique=True))
def test_interval_of_a_median_against_scipy(values: list[float]) -> None:
    """scipy.stats.quantile_test inverts the same sign test."""
    level = median_of([Measured(value) for value in values], signed=True)
    assert level is not None
    interval: Any = stats.quantile_test(values, p=0.5).confidence_interval(0.95)
    assert (level.low, level.high) == (interval.low, interval.high)
    assert level.value == pytest.approx(np.median(values))


def exact(*values: float) -> list[Measured]:
    return [Measured(v, v - 0.5, v + 0.5) for v in values]


def test_median_of_many() -> None:
    level = median_of(exact(10, 1, 9, 2, 8, 3, 7, 4, 6, 5))
    assert level is not None
    assert (level.value, level.low, level.high, level.count) == (5.5, 2.0, 9.0, 10)


def test_median_of_few() -> None:
    level = median_of(exact(3, 1, 2))
    assert level is not None
    assert (level.value, level.low, level.high) == (2.0, 0.5, 3.5)


def test_longer_than_is_at_least_that() -> None:
    cut = [Measured.longer_than(v, "direct", Reason.CUT_SHORT) for v in (4.0, 20.0)]
    level = median_of([*exact(5, 6, 7, 8), *cut])
    assert level is not None
    assert (level.value, level.low, level.high, level.longer_than) == (6.5, 4.0, None, True)
    low_ones = median_of([*exact(5, 6, 7), cut[1]] * 2)
    assert low_ones is not None
    assert (low_ones.value, low_ones.high, low_ones.longer_than) == (6.5, None, False)


def test_at_most_leaves_the_median_bounded() -> None:
    level = median_of([Measured(high=0.2, why=Reason.NO_PEAK)] * 7)
    assert level is not None
    assert (level.value, level.low, level.high, level.longer_than) == (None, 0.0, 0.2, False)


def test_nothing_known_has_no_median() -> None:
    assert median_of([Measured.missing(Reason.GAP)]) is None

"""Archives that thin a record out: recognised, their deadband told, and covered or refused.

Seeded. The archives are built from their published definitions (``reference.archive``), the truth
is the closed form of the response; reaches for shares come from the binomial distribution.
"""

from __future__ import annotations

from collections import Counter
from dataclasses import replace

import numpy as np
import pytest
from bench.archive import Told, grid_cell
from scipy.stats import binom

from audit.records import Between, Measured, Quantity, Reading, Reason
from audit.response.archive import Kept, recognise
from reference import archive, second_order, steps

NEVER_COMPRESSED = (Quantity.STEADY_STATE_ERROR, Quantity.IAE, Quantity.UNREST)


def test_exception_reporting_keeps_what_a_hand_calculation_keeps() -> None:
    """OPC UA Part 4, DataChangeFilter: reported if |last reported - value| > deadband, by hand."""
    y = np.array([0.0, 0.4, 1.1, 1.0, 2.1, 2.2, 2.2, 2.2])
    t = np.arange(8.0)
    assert archive.by_exception(t, y, 1.0) == [0, 2, 5]
    assert archive.by_exception(t, y, 1.0, longest_s=2.0) == [0, 2, 4, 6]
    assert archive.by_exception(t, y, 1.0, previous=True) == [0, 1, 2, 4, 5]


def test_the_swinging_door_keeps_what_a_hand_calculation_keeps() -> None:
    """By hand, for t = 0..7 and a reach of 0.5: 0, 4, 6, 7."""
    y = np.array([0.0, 1.0, 2.0, 3.0, 3.0, 3.0, 3.0, 0.0])
    assert archive.swinging_door(np.arange(8.0), y, 0.5) == [0, 4, 6, 7]


def test_the_chords_of_a_swinging_door_on_a_parabola_are_as_long_as_the_closed_form() -> None:
    """y = b t² / 2: the doors stand parallel where b L / 2 - E / L = sqrt(2 b E), so that
    L = (1 + sqrt 2) sqrt(2 E / b); worked out from the rule of US patent 4669097."""
    t = np.arange(0.0, 60.0, 0.01)
    bend, reach = 0.02, 0.1
    kept = t[archive.swinging_door(t, 0.5 * bend * t**2, reach)]
    exact = (1.0 + np.sqrt(2.0)) * np.sqrt(2.0 * reach / bend)
    assert np.diff(kept[:-1]) == pytest.approx(exact, abs=0.05)


def noisy(rng: np.random.Generator, t: steps.Array) -> steps.Array:
    """A second-order response of some damping in some noise."""
    y = second_order.response(t, float(rng.uniform(0.3, 1.1)))
    return y + float(rng.choice([0.002, 0.005, 0.01])) * rng.standard_normal(len(t))


def complete(kind: str, rng: np.random.Generator, scan_s: float) -> steps.Array:
    """Stamps of a record of which nothing was left out for its value."""
    t = steps.stamps(scan_s, 40.0, before_s=20.0)
    if kind == "jittered":
        return np.asarray(t + scan_s * rng.uniform(-0.4, 0.4, len(t)))
    if kind == "lossy":
        return np.asarray(t[rng.random(len(t)) < rng.uniform(0.3, 0.9)])
    if kind == "random":
        return np.sort(rng.uniform(-20.0, 40.0, len(t)))
    return t


@pytest.mark.parametrize("scan_s", [0.05, 0.2, 2.0])
@pytest.mark.parametrize("kind", ["regular", "jittered", "lossy", "random"])
def test_a_record_of_which_nothing_was_left_out_is_not_called_compressed(
    kind: str, scan_s: float
) -> None:
    """A false alarm in no more of 60 than the 99.9 % point of a binomial of 1 in 100."""
    rng = np.random.default_rng([7, round(100 * scan_s)])
    false = 0
    for _ in range(60):
        t = complete(kind, rng, scan_s)
        false += recognise(t, noisy(rng, t), 40.0).recognised
    assert false <= binom.ppf(0.999, 60, 0.01)


@pytest.mark.parametrize("scan_s", [0.05, 0.1])
@pytest.mark.parametrize("deadband", [0.01, 0.02, 0.05, 0.1])
def test_exception_reporting_is_recognised_and_its_deadband_told(
    deadband: float, scan_s: float
) -> None:
    """In 4 of 5 records of at least 10 samples (0.1 % point of the binomial); the deadband within
    a factor of 1.5 in as many of those that are recognised."""
    rng = np.random.default_rng([8, round(1e4 * deadband), round(100 * scan_s)])
    seen, near, total = 0, 0, 0
    for _ in range(60):
        t = steps.stamps(scan_s, 40.0, before_s=20.0)
        y = noisy(rng, t)
        kept = archive.by_exception(t, y, deadband, float(rng.choice([10.0, 20.0, 60.0])))
        if len(kept) >= 10:
            total += 1
            found = recognise(t[kept], y[kept], 40.0)
            if found.kept is Kept.EXCEPTION:
                seen += 1
                near += deadband / 1.5 < found.deadband < 1.5 * deadband
    assert total >= 40
    assert seen >= binom.ppf(0.001, total, 0.8)
    assert near >= binom.ppf(0.001, seen, 0.8)


@pytest.mark.parametrize("scan_s", [0.05, 0.1])
@pytest.mark.parametrize("deadband", [0.01, 0.02])
def test_swinging_doors_are_recognised_as_thinning_out(deadband: float, scan_s: float) -> None:
    """In 4 of 5 records of at least 10 samples something was seen to be left out, mostly told as
    what it is; where it is, more often than not within a factor of 1.5."""
    rng = np.random.default_rng([9, round(1e4 * deadband), round(100 * scan_s)])
    kinds: Counter[Kept] = Counter()
    near = 0
    for _ in range(90):
        t = steps.stamps(scan_s, 40.0, before_s=20.0)
        y = noisy(rng, t)
        kept = archive.swinging_door(t, y, deadband, float(rng.choice([10.0, 20.0, 60.0])))
        if len(kept) >= 10:
            found = recognise(t[kept], y[kept], 40.0)
            kinds[found.kept] += 1
            told = found.kept is Kept.SWINGING
            near += told and deadband / 1.5 < found.deadband < 1.5 * deadband
    total = kinds.total()
    assert total >= 40
    assert total - kinds[Kept.EVERY] >= binom.ppf(0.001, total, 0.8)
    assert kinds[Kept.SWINGING] >= binom.ppf(0.001, total, 0.6)
    assert near >= binom.ppf(0.001, kinds[Kept.SWINGING], 0.6)


def test_recognition_looks_at_nothing_but_its_samples() -> None:
    rng = np.random.default_rng(3)
    t = steps.stamps(0.1, 40.0)
    y = noisy(rng, t)
    kept = archive.by_exception(t, y, 0.02, 20.0)
    assert recognise(t[kept], y[kept], 40.0) == recognise(t[kept].copy(), y[kept].copy(), 40.0)
    flipped = recognise(t[kept], -y[kept], 40.0)
    assert flipped == recognise(t[kept], y[kept], 40.0)


@pytest.mark.parametrize("kind", ["exception", "swinging"])
def test_what_is_told_of_thinned_records_holds_the_truth(kind: str) -> None:
    """Deadbands of 0.5 to 2 % of the change, 20 scans a rise, right and wrong declarations: per
    quantity the 0.1 % point of a binomial with a coverage of 93 %. The grid is that of
    ``tests/bench/archive.py``."""
    pooled: dict[Quantity, Told] = {}
    for deadband in (0.005, 0.01, 0.02):
        for quantity, told in grid_cell(kind, deadband, 20, 40, seed=5).told.items():
            into = pooled.setdefault(quantity, Told())
            into.told += told.told
            into.held += told.held
    for quantity, told in pooled.items():
        assert told.held >= binom.ppf(0.001, told.told, 0.93), (quantity, told.held, told.told)
    assert pooled[Quantity.RISE_TIME].told >= 90
    assert pooled[Quantity.STEADY_STATE_ERROR].told >= 90


def thinned(z: float, deadband: float, between: Between = Between.HOLD) -> dict[Quantity, Measured]:
    """A response of 50 to 55 EU scanned 40 times a rise and more, reported by exception."""
    rng = np.random.default_rng(11)
    t = steps.stamps(0.04, 40.0, before_s=60.0, past_s=10.0)
    y = np.where(t > 0, second_order.response(np.maximum(t, 0.0), z), 0.0)
    y = y + 0.001 * rng.standard_normal(len(t))
    kept = archive.by_exception(t, y, deadband, 15.0)
    made = steps.make(t[kept], y[kept], 40.0)
    settings = replace(made.settings, reading=Reading(pv_between=between))
    return dict(steps.Made(made.record, made.change, settings).measure().measured)


LIMITS = [
    # quantity, damping, deadband that it stands, deadband that is too much
    (Quantity.RISE_TIME, 0.5, 0.050, 0.058),
    (Quantity.OVERSHOOT, 0.5, 0.050, 0.058),
    (Quantity.UNDERSHOOT, 0.5, 0.050, 0.058),
    (Quantity.PEAK_TIME, 0.4, 0.050, 0.058),
    (Quantity.DECAY_RATIO, 0.3, 0.050, 0.058),
    (Quantity.SETTLING_TIME, 0.5, 0.0078, 0.0095),
    (Quantity.SETTLING_TIME_5PCT, 0.5, 0.0200, 0.0235),
    (Quantity.SETTLING_TIME_2PCT, 0.5, 0.0078, 0.0095),
]


@pytest.mark.parametrize(("quantity", "z", "stands", "too_much"), LIMITS)
def test_each_quantity_stands_a_deadband_and_is_refused_beyond_it(
    quantity: Quantity, z: float, stands: float, too_much: float
) -> None:
    """Over 5 % of the change no shape, over the band / 2.3 no settling, a little slack given."""
    assert thinned(z, stands)[quantity].known
    assert thinned(z, too_much)[quantity] == Measured.missing(Reason.COMPRESSED)


@pytest.mark.parametrize(
    "quantity", [Quantity.PEAK_TIME, Quantity.DECAY_RATIO, Quantity.DAMPED_PERIOD]
)
def test_a_peak_under_the_deadband_is_not_denied(quantity: Quantity) -> None:
    """An overshoot of 1.5 % (closed form, z = 0.8): a deadband of 2.5 % may say there is none
    worth the name, one of 3.5 % may not."""
    assert thinned(0.8, 0.025)[quantity] == Measured.missing(Reason.NO_PEAK)
    assert thinned(0.8, 0.035)[quantity] == Measured.missing(Reason.COMPRESSED)


@pytest.mark.parametrize("quantity", NEVER_COMPRESSED)
def test_a_larger_deadband_widens_what_is_not_refused(quantity: Quantity) -> None:
    widths = []
    for deadband in (0.002, 0.01, 0.05):
        found = thinned(0.5, deadband)[quantity]
        assert found.high is not None
        assert found.low is not None
        widths.append(found.high - found.low)
    assert widths == sorted(widths)
    assert widths[-1] > 2.0 * widths[0]


def test_a_wrong_declaration_is_seen_through() -> None:
    """What the samples show of how they were kept goes before what the site declared."""
    assert thinned(0.5, 0.01, Between.LINEAR) == thinned(0.5, 0.01, Between.HOLD)


def test_the_deadband_is_told_in_engineering_units() -> None:
    """1 % of a change of 5 EU; 0 where every sample was kept, a bound where there are too few."""
    found = thinned(0.5, 0.01)[Quantity.ARCHIVE_DEADBAND]
    assert found.value == pytest.approx(0.05, rel=0.1)
    assert found.low is not None
    assert found.high is not None
    assert found.low <= 0.05 <= found.high
    whole = steps.step(lambda t: second_order.response(t, 0.5), 0.2, 60.0).measure().measured
    assert whole[Quantity.ARCHIVE_DEADBAND] == Measured(0.0, 0.0, 0.0, "direct")
    few = steps.make(np.array([-9.0, 0.0, 1.0, 2.0, 3.0, 4.0, 20.0]), np.arange(7.0) / 6.0, 60.0)
    bound = few.measure().measured[Quantity.ARCHIVE_DEADBAND]
    assert (bound.value, bound.low, bound.why) == (None, 0.0, Reason.TOO_SPARSE)

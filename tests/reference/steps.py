"""Records of one step, made from a formula: what the response tests measure."""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from audit.records import (
    SECOND_US,
    ChangeKind,
    MeasureSettings,
    Reason,
    Record,
    Response,
    Role,
    Samples,
    SetpointChange,
)
from audit.response import measure

AT_US = 1_700_000_000 * SECOND_US
Array = NDArray[np.float64]


def samples(t_s: Array, value: Array, good: NDArray[np.bool_] | None = None) -> Samples:
    """Samples at seconds from t0."""
    t_us = AT_US + np.round(t_s * 1e6).astype(np.int64)
    flags = np.ones(len(t_us), np.bool_) if good is None else good
    return Samples(t_us, np.where(flags, value, np.nan), flags)


@dataclass(frozen=True, eq=False)
class Made:
    """A record, its change and the settings, ready to be measured."""

    record: Record
    change: SetpointChange
    settings: MeasureSettings

    def measure(self) -> Response:
        return measure(self.record, self.change, self.settings)


def stamps(step_s: float, window_s: float, before_s: float = 20.0, past_s: float = 0.0) -> Array:
    """Regular stamps from -before_s to past the window, s; one of them is t0."""
    first, last = round(before_s / step_s), round((window_s + past_s) / step_s)
    return np.asarray(np.arange(-first, last + 1) * step_s)


def make(
    t: Array,
    y: Array,
    window_s: float,
    levels: tuple[float, float] = (50.0, 55.0),
    before_s: float = 20.0,
    kind: ChangeKind = ChangeKind.STEP,
    cut_s: float | None = None,
    cut: Reason = Reason.CUT_SHORT,
    output: Samples | None = None,
    settings: MeasureSettings | None = None,
    good: NDArray[np.bool_] | None = None,
    moves: tuple[tuple[float, float], ...] | None = None,
    complete: bool = True,
    set_aside: tuple[Reason, ...] = (),
    seed_shift_us: int = 0,
) -> Made:
    """A step from levels[0] to levels[1]; ``y`` [n] at ``t`` [n] s in parts of the change."""
    r0, r1 = levels
    value = r0 + (r1 - r0) * y
    pv = samples(t, value, good)
    sp = samples(np.array([-before_s, 0.0]), np.array([r0, r1]))
    signals = {Role.PV: pv, Role.SP: sp}
    if output is not None:
        signals[Role.OUTPUT] = output
    end = window_s if cut_s is None else cut_s
    change = SetpointChange(
        at_us=AT_US,
        sp_from=r0,
        sp_to=r1,
        kind=kind,
        moves=_moves(moves, r0, r1),
        window_end_us=AT_US + round(end * 1e6),
        complete=complete,
        cut=None if cut_s is None else cut,
        set_aside=set_aside,
    )
    if settings is None:
        settings = MeasureSettings(span_eu=100.0)
    settings = MeasureSettings(
        **{
            **vars(settings),
            "before_us": round(before_s * 1e6),
            "after_us": round(window_s * 1e6),
        }
    )
    made = Made(Record(signals), change, settings)
    return _shifted(made, seed_shift_us)


def _moves(
    moves: tuple[tuple[float, float], ...] | None, r0: float, r1: float
) -> tuple[tuple[int, float], ...]:
    """Moves given as (s, share of the change) in microseconds and engineering units."""
    given = moves or ((0.0, 1.0),)
    return tuple((AT_US + round(t * 1e6), r0 + (r1 - r0) * share) for t, share in given)


def _shifted(made: Made, by_us: int) -> Made:
    """The same at another instant, so that the random draws are others."""
    if by_us == 0:
        return made
    record = Record(
        {r: Samples(s.t_us + by_us, s.value, s.good) for r, s in made.record.signals.items()}
    )
    old = made.change
    change = SetpointChange(
        **{
            **vars(old),
            "at_us": old.at_us + by_us,
            "window_end_us": old.window_end_us + by_us,
            "moves": tuple((t + by_us, v) for t, v in old.moves),
        }
    )
    return Made(record, change, made.settings)


def step(
    form: Callable[[Array], Array],
    step_s: float,
    window_s: float,
    before_s: float = 20.0,
    noise: Array | None = None,
    levels: tuple[float, float] = (50.0, 55.0),
) -> Made:
    """A step whose response is form(t) for t > 0, sampled regularly."""
    t = stamps(step_s, window_s, before_s, past_s=2.0 * step_s)
    y = np.where(t > 0, form(np.maximum(t, 0.0)), 0.0)
    if noise is not None:
        y = y + noise[: len(y)]
    return make(t, y, window_s, levels, before_s)


def correlated(rng: np.random.Generator, count: int, sd: float, rho: float) -> Array:
    """First-order correlated normal noise, by its stationary covariance's own recursion."""
    from scipy.signal import lfilter

    white = rng.standard_normal(count + 200)
    return sd * np.asarray(lfilter([np.sqrt(1.0 - rho**2)], [1.0, -rho], white))[200:]

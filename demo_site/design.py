"""The design of each loop: process, controller, valve, noise, as on the day it was commissioned.

In go a plant loop and a random generator; out goes a ``Design`` in percent of the loop's range and
of the controller output, so that the same numbers serve a flow in t/h and a temperature in degC.
Also here: what each kind of fault does to a design.
"""

from __future__ import annotations

from dataclasses import dataclass, replace

import numpy as np

from .plant import PlantLoop


@dataclass(frozen=True)
class Design:
    """One loop, all values in percent of range (pv, sp) or of output, times in seconds.

    Process: ``gain`` (pv % per output %, or per second where ``integrating``), lags ``lag_s`` and
    ``lag2_s`` in series, ``dead_s``; at ``pivot_out`` and without load it rests at ``pivot_pv``.
    Controller at ``scan_s``: ideal (non-interacting) PID, ``kc``, ``ti_s``, ``td_s`` acting on the
    filtered process variable, setpoint weight ``weight`` in its proportional part. Valve: ``rate``
    percent a second, upper limit of its flow ``capacity``, stiction ``stick`` (static) and
    ``slide`` (kinetic) as in ``lanes``. ``noise``: standard deviation of the measurement;
    ``report`` and ``report_out``: the historian's exception deadbands.
    ``load``: standard deviation of the load's slow drift, in pv percent (output percent where
    integrating).
    """

    kind: str
    scan_s: int
    gain: float
    lag_s: float
    lag2_s: float
    dead_s: int
    integrating: bool
    pivot_pv: float
    pivot_out: float
    kc: float
    ti_s: float
    td_s: float
    weight: float
    noise: float
    report: float
    report_out: float
    load: float
    rate: float
    capacity: float = 100.0
    stick: float = 0.0
    slide: float = 0.0


@dataclass(frozen=True)
class _Kind:
    """Bounds the random design of a kind is drawn between; ``aim`` as a multiple of dead time."""

    scan_s: int
    lag_s: tuple[float, float]
    lag2_share: tuple[float, float]
    dead_scans: tuple[int, int]
    aim: tuple[float, float]
    report: float
    load: float
    rate: float
    report_out: float


_KINDS = {
    "flow": _Kind(1, (8.0, 15.0), (0.2, 0.35), (4, 6), (1.6, 2.2), 0.05, 1.0, 25.0, 0.3),
    "pressure": _Kind(2, (25.0, 60.0), (0.1, 0.2), (3, 5), (1.4, 2.0), 0.06, 1.0, 15.0, 0.4),
    "temperature": _Kind(10, (200.0, 420.0), (0.1, 0.2), (3, 6), (1.4, 2.0), 0.05, 0.6, 4.0, 0.3),
    "composition": _Kind(10, (280.0, 480.0), (0.0, 0.1), (9, 14), (1.3, 1.7), 0.05, 0.4, 4.0, 0.25),
    "level": _Kind(5, (0.0, 0.0), (0.0, 0.0), (1, 2), (1.0, 1.0), 0.08, 2.0, 8.0, 0.5),
}
DERIVATIVE_FILTER = 4.0
"""Derivative time over the time constant of its filter."""
_LIVELY_SHARE = 0.35
_LIVELY_AIM = 0.72
_MOST_KC = 3.2
_INNER_SCAN_S = 2


def design(loop: PlantLoop, rng: np.random.Generator) -> Design:
    """The commissioned design of ``loop``; times are whole scans where the loop needs them so."""
    kind = _KINDS[loop.kind]
    scan_s = _INNER_SCAN_S if loop.primary else kind.scan_s
    dead_s = int(rng.integers(kind.dead_scans[0], kind.dead_scans[1] + 1)) * kind.scan_s
    dead_s = max(scan_s, dead_s // scan_s * scan_s)
    gain = float(rng.uniform(0.8, 1.3))
    drafted = Design(
        kind=loop.kind,
        scan_s=scan_s,
        gain=-gain if loop.reversed else gain,
        lag_s=float(rng.uniform(*kind.lag_s)),
        lag2_s=0.0,
        dead_s=dead_s,
        integrating=loop.kind == "level",
        pivot_pv=float(rng.uniform(45.0, 55.0)),
        pivot_out=float(rng.uniform(42.0, 56.0)),
        kc=0.0,
        ti_s=0.0,
        td_s=0.0,
        weight=1.0,
        noise=kind.report / 5.5,
        report=kind.report,
        report_out=kind.report_out,
        load=kind.load,
        rate=kind.rate,
    )
    if loop.kind == "level":
        return _tuned_level(drafted, loop, rng)
    return _tuned(replace(drafted, lag2_s=_second_lag(drafted, kind, rng)), loop, rng)


def _second_lag(drafted: Design, kind: _Kind, rng: np.random.Generator) -> float:
    share = float(rng.uniform(*kind.lag2_share))
    return share * drafted.lag_s if share > 0.03 else 0.0


def _tuned(drafted: Design, loop: PlantLoop, rng: np.random.Generator) -> Design:
    """PI, or PID for half of the loops with a second lag, by the SIMC rule.

    Skogestad, J. Process Control 13 (2003) 291-309: kc = lag/(gain (aim + dead)), ti = lag, the
    half rule for a lag that has no derivative of its own. Half a scan counts as dead time. Here
    ``ti`` is the lag itself also where the rule would shorten it against slow load disturbances,
    and ``kc`` is kept so low that a step of 10 % leaves the output inside its range. The rule's
    series form is turned into the ideal one; the setpoint weight puts its zero back on the lag.
    """
    kind = _KINDS[loop.kind]
    able = drafted.lag2_s > 0.0 and loop.kind == "temperature" and loop.note != "outer"
    derivative = able and rng.random() < 0.5
    spare = 0.0 if derivative else drafted.lag2_s / 2
    dead_s = drafted.dead_s + drafted.scan_s / 2 + spare
    ti_s = drafted.lag_s + spare
    lively = loop.kind != "flow" and loop.story == "healthy" and rng.random() < _LIVELY_SHARE
    aim_s = dead_s * (_LIVELY_AIM if lively else float(rng.uniform(*kind.aim)))
    aim_s = max(aim_s, ti_s / (_MOST_KC * abs(drafted.gain)) - dead_s)
    kc = ti_s / (drafted.gain * (aim_s + dead_s))
    if not derivative:
        return replace(drafted, kc=kc, ti_s=ti_s)
    factor = 1 + drafted.lag2_s / ti_s
    chatter = abs(kc) * factor * (1 + DERIVATIVE_FILTER) * drafted.noise
    return replace(
        drafted,
        kc=kc * factor,
        ti_s=ti_s * factor,
        td_s=drafted.lag2_s / factor,
        weight=1 / factor,
        report_out=max(drafted.report_out, round(5.5 * chatter, 1)),
    )


def _tuned_level(drafted: Design, loop: PlantLoop, rng: np.random.Generator) -> Design:
    """A level: integrating, PI by the SIMC rule for that case, proportional part on half the sp."""
    size = float(rng.uniform(0.0035, 0.005))
    gain = -size if loop.reversed else size
    dead_s = drafted.dead_s + drafted.scan_s / 2
    aim_s = 480.0 if loop.averaging else float(rng.uniform(60.0, 110.0))
    return replace(
        drafted,
        gain=gain,
        kc=1 / (gain * (aim_s + dead_s)),
        ti_s=4 * (aim_s + dead_s),
        weight=0.4,
    )


QUANTITIES = {
    "stiction": ("settling_time_s", "overshoot_pct", "unrest_eu"),
    "gain_loss": ("rise_time_s", "settling_time_s"),
    "dead_time": ("overshoot_pct", "settling_time_s", "decay_ratio"),
    "retune_tight": ("overshoot_pct", "settling_time_s", "decay_ratio"),
    "retune_slack": ("rise_time_s", "settling_time_s"),
    "retune_reset": ("overshoot_pct", "settling_time_s"),
    "saturated": ("steady_state_error_eu", "output_saturated_pct"),
}
"""What each cause should show in, in the names of the measured quantities."""

DRIFTING = ("gain_loss", "stiction")
"""Causes that grow over weeks; of the others each comes from one hour to the next."""


def spoiled(healthy: Design, cause: str, size: float) -> Design:
    """``healthy`` with a fault of ``size`` (0: as it was; its meaning is in ``sizes``)."""
    if cause == "stiction":
        return replace(healthy, stick=size, slide=0.35 * size)
    if cause == "gain_loss":
        return replace(healthy, gain=healthy.gain * (1 - size))
    if cause == "dead_time":
        scans = round(healthy.dead_s * (1 + size) / healthy.scan_s)
        return replace(healthy, dead_s=scans * healthy.scan_s)
    if cause == "retune_tight":
        return replace(healthy, kc=healthy.kc * (1 + size))
    if cause == "retune_slack":
        return replace(healthy, kc=healthy.kc / (1 + size))
    if cause == "retune_reset":
        return replace(healthy, ti_s=healthy.ti_s / (1 + size))
    if cause == "saturated":
        return replace(healthy, capacity=100.0 - size)
    raise ValueError(f"no such cause: {cause}")


def full_size(healthy: Design, cause: str, rng: np.random.Generator) -> float:
    """How large a fault grows. Stiction: static band, % of output. Gain loss: share of the gain.

    Dead time: added share. Retune tight, slack, reset: kc x (1 + size), kc / (1 + size),
    ti / (1 + size). Saturated: output percent above which nothing more flows, taken from 100.
    """
    if cause == "saturated":
        reach = 100.0 - healthy.pivot_out
        return float(reach - rng.uniform(0.0, 2.0))
    if cause == "retune_tight":
        dead_s = healthy.dead_s + healthy.scan_s / 2 + healthy.lag2_s / 2
        pace = abs(healthy.gain * healthy.kc) * dead_s / healthy.ti_s
        return float(rng.uniform(0.70, 0.80) / pace - 1)
    if cause == "dead_time":
        pace = abs(healthy.gain * healthy.kc) / healthy.ti_s
        other_s = healthy.scan_s / 2 + healthy.lag2_s / 2
        return float((rng.uniform(0.66, 0.76) / pace - other_s) / healthy.dead_s - 1)
    low, high = {
        "stiction": (3.5, 4.5),
        "gain_loss": (0.44, 0.54),
        "retune_slack": (0.8, 1.2),
        "retune_reset": (7.0, 8.0),
    }[cause]
    return float(rng.uniform(low, high))

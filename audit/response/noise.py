"""What the samples hold beside the signal: noise, its correlation, quantisation, a deadband.

In: a ``Curve``. Out: ``Noise``, in parts of the change.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from audit.response.archive import ALIKE
from audit.response.curve import Curve
from audit.response.localfit import Array, Fit
from audit.response.order import clamped, differences, median, quantile

ENOUGH = 80
"""Samples half of the time before the change has to hold to tell the noise: fewer samples of
correlated noise look calmer than they are."""


@dataclass(frozen=True)
class Noise:
    """``sd`` standard deviation and ``rho`` correlation from sample to sample of the noise.

    ``quantum``: step between possible values. ``deadband``: changes below it are not in the
    record. All but rho in parts of the change.
    """

    sd: float
    rho: float
    quantum: float
    deadband: float

    @property
    def inflation(self) -> float:
        """Variance of a long mean over that of independent samples (first-order correlation)."""
        return (1.0 + self.rho) / (1.0 - self.rho)

    @property
    def coarse(self) -> float:
        """Standard uncertainty of one value from deadband and quantisation (JCGM 100)."""
        grain = self.quantum / np.sqrt(12.0) if self.sd < 0.5 * self.quantum else 0.0
        return float(np.hypot(self.deadband / np.sqrt(3.0), grain))

    @property
    def total(self) -> float:
        """Standard uncertainty of one value, correlation allowed for as in a long mean."""
        return float(np.hypot(self.sd * np.sqrt(self.inflation), self.coarse))


def estimate(curve: Curve) -> Noise:
    """Noise from the quietest of: before the change, the last half, the last quarter.

    Also from the last half of the time before where it holds enough samples. The hops of a level
    that is reported by exception are the deadband's, not noise.
    """
    quantum = _quantum(curve.v)
    deadband = curve.archive.hidden
    end = curve.window_s
    stretches = [(-curve.before_s, 0.0), (0.5 * end, end), (0.75 * end, end)]
    found = [_residual(curve, lo, hi) for lo, hi in stretches]
    found = [r for r in found if len(r) >= 8]
    lead = _residual(curve, -0.5 * curve.before_s, 0.0)
    if len(lead) >= ENOUGH:
        found.append(lead)
    if not found:
        return Noise(_bend_sd(curve), 0.0, quantum, deadband)
    sds = [_scale(r) for r in found]
    least = min(sds)
    pooled = [r for r, sd in zip(found, sds, strict=True) if sd <= 1.5 * least + ALIKE]
    longest = max(pooled, key=len)
    sd = _scale(longest)
    rho = _correlation(longest, sd)
    own = float(np.sqrt(max(sd**2 - deadband**2 / 3.0, (0.2 * sd) ** 2)))
    return Noise(own, rho, quantum, deadband)


def unrest(curve: Curve, noise: Noise) -> tuple[float, float]:
    """Standard deviation of the process variable at rest, and its relative standard uncertainty.

    Noise and any oscillation that keeps up, with what the recording hides (deadband, quantum), in
    parts of the change; from about as many independent samples as the last half of the window has.
    """
    half = int(((curve.t >= 0.5 * curve.window_s) & (curve.t <= curve.window_s)).sum())
    independent = max(half / noise.inflation, 2.0)
    return float(np.hypot(noise.sd, noise.coarse)), 1.0 / float(np.sqrt(2.0 * independent))


def _residual(curve: Curve, lo: float, hi: float) -> Array:
    """Samples of a stretch less their straight line."""
    inside = (curve.t >= lo) & (curve.t <= hi)
    t, v = curve.t[inside], curve.v[inside]
    if len(t) < 8:
        return np.empty(0)
    z = t - t.mean()
    slope = float(z @ (v - v.mean())) / float(z @ z)
    left: Array = v - v.mean() - slope * z
    return left


def _scale(residual: Array) -> float:
    """Standard deviation, samples beyond 3.5 robust ones drawn in."""
    robust = 1.4826 * median(np.abs(residual))
    plain = float(np.sqrt(residual @ residual / (len(residual) - 2)))
    if robust <= ALIKE:
        return plain if plain > ALIKE else 0.0
    drawn = clamped(residual, -3.5 * robust, 3.5 * robust)
    return float(np.sqrt(drawn @ drawn / (len(drawn) - 2)))


def _correlation(residual: Array, sd: float) -> float:
    """Correlation from one sample to the next, 0 to 0.95, with most of its own doubt added."""
    if sd <= 0:
        return 0.0
    drawn = clamped(residual, -3.5 * sd, 3.5 * sd)
    square = float(drawn @ drawn)
    rho = float(drawn[:-1] @ drawn[1:]) / square
    rho += 1.0 / len(residual) + 0.7 / float(np.sqrt(len(residual)))
    return min(max(rho, 0.0), 0.95)


def _bend_sd(curve: Curve) -> float:
    """Noise from the smaller second differences, for a record without a quiet stretch.

    0 where the samples are too few to tell noise from the response.
    """
    v = curve.v[(curve.t >= -curve.before_s) & (curve.t <= curve.window_s)]
    if len(v) < 16:
        return 0.0
    bend = np.abs(v[2:] - 2.0 * v[1:-1] + v[:-2])
    return float(quantile(bend, 0.25)) / (0.3186 * float(np.sqrt(6.0)))


def _quantum(v: Array) -> float:
    """The step all values are multiples of; 0 where there is none to see."""
    if len(v) < 8:
        return 0.0
    apart = differences(np.sort(v))
    apart = apart[apart > ALIKE]
    if len(apart) < 4 or len(apart) > 0.5 * len(v):
        return 0.0
    least = float(apart.min())
    parts = apart / least
    return least if float(np.abs(parts - np.round(parts)).max()) < 0.05 else 0.0


def value_sd(fit: Fit, noise: Noise, curve: Curve) -> Array:
    """Standard uncertainty of each fitted value from noise, deadband and quantisation."""
    weights = fit.weights
    if len(curve.ft) != len(curve.t):
        weights = _real_weights(fit, curve)
    spread = np.sqrt(np.maximum(_spread(weights, noise.rho), 0.0))
    found: Array = np.hypot(noise.sd * spread, noise.coarse)
    return found


def _real_weights(fit: Fit, curve: Curve) -> Array:
    """The weights of a fit to filled points, handed on to the samples they are made of."""
    rows, width = fit.weights.shape
    place = np.minimum(fit.first[:, None] + np.arange(width), len(curve.ft) - 1)
    start = curve.a[place[:, :1]]
    real = np.zeros((rows, width + 2))
    row = np.broadcast_to(np.arange(rows)[:, None], place.shape)
    np.add.at(real, (row, curve.a[place] - start), fit.weights * (1.0 - curve.wb[place]))
    np.add.at(real, (row, curve.b[place] - start), fit.weights * curve.wb[place])
    return real


def _spread(weights: Array, rho: float) -> Array:
    """Variance of each row's weighted sum of unit noise with first-order correlation."""
    total: Array = np.einsum("ij,ij->i", weights, weights)
    power = rho
    for lag in range(1, min(weights.shape[1], 60)):
        if power < 1e-3:
            break
        total = total + 2.0 * power * np.einsum("ij,ij->i", weights[:, :-lag], weights[:, lag:])
        power *= rho
    return total

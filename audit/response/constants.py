"""The numbers the direct way rests on, in one place; their hash is part of the method's version.

In: nothing. Out: ``CONSTANTS`` and ``METHOD_VERSION``.
"""

from __future__ import annotations

import hashlib
from dataclasses import dataclass, fields
from functools import lru_cache

from audit.records import MeasureSettings


@dataclass(frozen=True)
class Constants:
    """Parameters of the direct way. ``sd``: standard deviation. ``rise``: the rise time."""

    cover_z: float = 1.959964
    """Normal quantile of a 95 % interval with equal tails."""
    draws: int = 500
    """Random draws for the settling time's interval."""
    spike_sd: float = 8.0
    spike_share: float = 0.05
    """A one-sample spike stands out by this many sd and this share of the change."""
    hampel_clip: float = 3.5
    """A level's outlying samples are drawn in to this many robust sd."""
    fill_ratio: float = 3.0
    """A silence longer than this many typical intervals is drawn as the signal runs between."""
    fill_points: int = 8
    eta_gain: float = 20.0
    eta_cap: float = 0.35
    """Half-width of the local fit in rise times: (eta_gain sd / sqrt(samples a rise))^(1/4.5)."""
    eta_peak: float = 1.4
    eta_peak_cap: float = 0.5
    """At an extremum the fit is wider by this factor, up to this cap …"""
    eta_when: float = 0.7
    """… and for its time, which a skew peak biases more, narrower again by this factor."""
    least_half_samples: float = 2.2
    turn_sd: float = 3.0
    """A turn of the smoothed curve counts beyond this many of its sd."""
    coarse_sd: float = 0.03
    """Share of the change the noise is brought down to for a first look."""
    look_rises: float = 2.0
    """… but with a mean no longer than half the rise."""
    grid_points: int = 400
    settle_band: float = 0.05
    settle_sd: float = 5.0
    band_sd: float = 4.0
    """A band under so many sd of the smoothed curve cannot be settled into directly."""
    crossing_sd: float = 1.2
    """sd of a crossing into the band, in sd of the smoothed curve: the first entry is taken."""
    hump_share: float = 0.025
    """Draws of one swing from this share on are a hump the settling time's interval must hold."""
    skew: float = 0.15
    """Bias of a peak's time by its skewness, s: at most about skew x half-width² / rise."""
    excess_doubt: float = 0.07
    excess_doubt_cap: float = 0.3
    """Relative standard uncertainty of the noise part of the IAE, times the noise's inflation
    (see ``Noise``) up to a cap: slow noise is harder to tell from the error."""
    """Settled at all: inside 5 % or 5 sd of the smoothed curve for the dwell."""
    dwell_samples: int = 10
    carried_share: float = 0.03
    """What moved before the change spoils the shape if it would add more than 3 % of the change
    over the rise …"""
    carried_band: float = 0.5
    """… and a settling time if it would add more than half its band over the settling; less than
    that goes into the intervals."""
    carried_sd: float = 1.5
    """Nor does it spoil under so many sd of the noise: that is in the intervals already."""
    near_share: float = 0.05
    """A final level is known without the dwell if its standard uncertainty is under 5 %."""
    least_away: float = 0.05
    """Levels closer than 5 % of the change: nothing to look for settling in."""
    no_response_share: float = 0.2
    no_response_u: float = 4.0
    sparse_rise: float = 4.0
    """Fewer samples a rise: the rise time is bounded only."""
    sparse_peak: float = 2.5
    """Fewer samples a rise: a peak may be missed as well. With so many its height is within 0.5 %
    of the change and its time within half an interval (second order; own simulations):"""
    sparse_peak_u: float = 0.003
    sparse_when_u: float = 0.4
    """standard uncertainties at that many, in parts of the change and of an interval."""
    compressed_share: float = 0.055
    """A deadband beyond this share of the change leaves nothing of the shape, …"""
    compressed_peak: float = 0.03
    """… beyond this it may hide a peak, …"""
    compressed_band: float = 2.3
    """… and beyond the band over this the settling; a little slack is in all three, for the
    deadband is seen a little too large."""
    regular_share: float = 0.95
    """With so many intervals alike (within 5 %) nothing was thinned out."""
    edge_chance: float = 1e-3
    """A trace of an archive counts if chance leaves it in fewer than so many records."""
    edge_chance_least: float = 0.03
    """… of which the trace alone must have this."""
    edge_strays: float = 0.03
    edge_sharp: float = 0.75
    edge_sharp_few: float = 0.55
    """Least reported change over the 20 % point of all: at least so much (fewer than 50: less)."""
    scan_share: float = 0.02
    """A scan is one if so many intervals are a single scan long."""
    thinned_least: float = 0.01
    thinned_share: float = 0.12
    thinned_spread: float = 8.0
    """Thinned out: so many of the scans kept, the 90 % point of the intervals beyond so many
    times their 10 % point."""
    few_kept: int = 80
    few_uneven: int = 16
    away_share: float = 0.1
    cluster_ratio: float = 3.0
    cluster_chance: float = 0.02
    """So few samples are judged by where they lie: so many times denser in the transient, which
    lasts while the value is this far from its last."""
    door_doubt: float = 1.5
    door_doubt_few: float = 2.5
    """A door's reach is known within this factor (own simulations)."""
    saturated_share: float = 0.1
    saturated_tolerance: float = 0.0005
    """Saturated: within 0.05 % of the output's range of its limit; material from 10 % of the
    time to settling."""
    default_error_share: float = 0.005
    """Standard uncertainty of "ends at its setpoint", of the range."""
    peak_u: float = 3.5
    """A peak is one beyond this many of its standard uncertainties …"""
    chance_peak_sd: float = 1.5
    """The highest of a smoothed level lies about so many sd above it by chance alone."""
    second_peak_u: float = 4.0
    """… and a second one beyond so many: it is the highest of several places."""
    period_doubt: float = 1.2
    """The time between peaks is so much less sure: the second one was taken for being high."""
    oscillation_from: float = 0.3
    """Looked for from this share of the window on."""
    oscillation_share: float = 0.02
    oscillation_sd: float = 0.5
    """An amplitude beyond so many sd of the noise, where the time before is as regular; …"""
    oscillation_sd_alone: float = 0.9
    """… and where it is not: noise alone looks regular in 2 % of short records (simulated)."""
    oscillation_crossings: int = 8
    oscillation_regularity: float = 1.0
    oscillation_ratio: float = 2.0
    range_margin: float = 0.001
    """Within this share of the range of an end of it the process variable is at its end …"""
    clipped_share: float = 0.1
    """… and a level of which more than this share of the samples is there is clipped, …"""
    clipped_run: int = 2
    """… an extremum of which so many points in a row are (common practice, no source)."""
    stuck_samples: int = 30
    stuck_noisy_samples: int = 20
    stuck_quanta: float = 1.0
    """Stuck: so many equal samples after so many that scatter by at least one step of the scale
    (sd), of which none comes more often than in 38 of 100 by chance (normal distribution)."""
    reaction_quiet: float = 0.5
    """The first half of the time before the change tells what the output does by itself; …"""
    reaction_samples: int = 8
    reaction_sd: float = 10.0
    reaction_most: float = 3.0
    reaction_most_few: float = 10.0
    """… from so many samples; a reaction's largest movement stands out by so many rms and by so
    much over the largest of these (where they are few, as of an output that tells its changes
    only, by more), …"""
    reaction_share: float = 0.5
    """… and begins with the first of at least half its size (common practice, no source)."""


CONSTANTS = Constants()


@lru_cache(maxsize=256)
def _digest(text: str) -> str:
    return hashlib.sha256(text.encode()).hexdigest()[:8]


METHOD_VERSION = f"direct-2-{_digest(repr(CONSTANTS))}"


def method_version(settings: MeasureSettings) -> str:
    """Code, its parameters and the settings a response was measured with."""
    plain = [getattr(settings, f.name) for f in fields(settings) if f.name != "reading"]
    reading = settings.reading
    read = (reading.pv_between, reading.output_between, sorted(reading.silence_us.items()))
    return f"{METHOD_VERSION}-{_digest(repr((plain, read)))}"

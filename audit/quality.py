"""Samples come in, flags go out: in automatic, output saturated, silences, bad quality.

Nothing is deleted here: a sample that is flagged stays where it was.
"""

from __future__ import annotations

import math
from collections.abc import Iterable

import numpy as np
from numpy.typing import NDArray

from audit.records import Loop, RawSamples, Samples


def in_automatic(raw: RawSamples, auto_modes: tuple[str, ...]) -> Samples:
    """The mode tag as 1.0 in an automatic mode and 0.0 in any other; shape as it came.

    Texts are compared without surrounding blanks and without regard to case; what reads as a number
    on both sides is compared as a number ("1" is "1.0"). A sample that is not good stays not good.
    """
    samples, good = raw.samples, raw.samples.good
    words, numbers = _words(auto_modes), _numbers(auto_modes)
    automatic = np.zeros(len(samples), np.bool_)
    if raw.texts is None:
        automatic[good] = np.isin(samples.value[good], sorted(numbers))
    elif raw.texts:
        wanted = [bool(_words([t]) & words or _numbers([t]) & numbers) for t in raw.texts]
        automatic[good] = np.array(wanted)[samples.value[good].astype(np.int64)]
    return Samples(samples.t_us, np.where(good, automatic.astype(np.float64), np.nan), good)


def saturated(output: Samples, loop: Loop) -> NDArray[np.bool_]:
    """Which good samples of the controller output are at or beyond a limit of it, shape [n].

    Within 0.1 % of the output's span counts as at the limit.
    """
    low, high = loop.output_limits
    at_limit = np.zeros(len(output), np.bool_)
    value = output.value[output.good]
    at_limit[output.good] = (value <= low) | (value >= high)
    return at_limit


def gaps(samples: Samples, silence_us: int) -> list[tuple[int, int]]:
    """Silences between consecutive good stamps longer than ``silence_us``: (from, to) in us."""
    stamps = samples.only_good().t_us
    ends = np.flatnonzero(np.diff(stamps) > silence_us)
    return [(int(stamps[k]), int(stamps[k + 1])) for k in ends]


def bad_spans(samples: Samples) -> list[tuple[int, int]]:
    """Runs of samples that are not good: from the first bad stamp to the next good one, in us.

    A run at the end of the record ends at its last bad stamp.
    """
    bad = np.concatenate(([False], ~samples.good, [False]))
    firsts = np.flatnonzero(bad[1:] & ~bad[:-1])
    stops = np.minimum(np.flatnonzero(~bad[1:] & bad[:-1]), len(samples) - 1)
    spans = np.column_stack((samples.t_us[firsts], samples.t_us[stops]))
    return [(int(start), int(end)) for start, end in spans]


def _words(modes: Iterable[str]) -> set[str]:
    return {mode.strip().casefold() for mode in modes}


def _numbers(modes: Iterable[str]) -> set[float]:
    found = set()
    for mode in modes:
        try:
            number = float(mode)
        except ValueError:
            continue
        if math.isfinite(number):
            found.add(number)
    return found

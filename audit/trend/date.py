"""Scores in which a change is known to be; the step it began with, and the range of it, out."""

from __future__ import annotations

import numpy as np
from numpy.typing import NDArray

from audit.evidence import COVERAGE


def change_point(scores: NDArray[np.float64]) -> tuple[int, int, int]:
    """Index of the first score after a single lasting rise from 0, with its 95 % range.

    Maximum likelihood for normal scores of standard deviation 1 and a rise of unknown size
    (Hinkley 1970): over the n scores from a candidate on, n x mean^2 / 2. The range is the
    smallest set of candidates that holds 95 % of the likelihood, all candidates being equally
    likely beforehand (common practice, no source); its ends are given.
    """
    counts = np.arange(len(scores), 0, -1)
    means = np.cumsum(scores[::-1])[::-1] / counts
    likelihood = counts * np.maximum(means, 0.0) ** 2 / 2
    weights = np.exp(likelihood - likelihood.max())
    order = np.argsort(-weights, kind="stable")
    held = np.searchsorted(np.cumsum(weights[order]), COVERAGE * weights.sum()) + 1
    chosen = order[:held]
    return int(order[0]), int(chosen.min()), int(chosen.max())

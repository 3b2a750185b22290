"""All that the shape of a step is measured from, in one value.

In: what curve, noise and ends gave. Out: ``View``.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from audit.records import Reason
from audit.response.curve import Curve
from audit.response.localfit import Array
from audit.response.noise import Noise


@dataclass(frozen=True, eq=False)
class View:
    """All that the shape is measured from.

    ``x`` of each point of ``curve.ft``; ``noise`` in the same unit; ``u0``, ``u1``: standard
    uncertainties of the levels in parts of y_end - y0; ``rate``: drift before the change, per s;
    ``stamp_u`` of t0, s; ``end_s``: what is looked at ends there; ``has_level``: y_end is its own;
    ``cut``: why nothing is known after the window.
    """

    curve: Curve
    x: Array
    noise: Noise
    u0: float
    u1: float
    rate: float
    stamp_u: float
    end_s: float
    has_level: bool
    how: str
    cut: Reason
    seed: int

    @property
    def level_u(self) -> float:
        return float(np.hypot(self.u1, self.u0))

    def carried_u(self, t: float) -> float:
        """Of x at t: a drift before the change that went on, or did not (uniform, JCGM 100)."""
        return self.rate * t / float(np.sqrt(3.0))

"""Measure one setpoint change: from the record around it to a value for every quantity.

``measure`` is the direct way, from the samples. The room, in the order of the data: ``curve``
(made ready, once ``archive`` saw how its samples were kept), ``noise``, ``levels`` and ``ends``
(y0, final level), ``shape`` over ``localfit`` (crossings, extrema),
``settling``, ``transient`` (the quantities of the shape, from a ``view``),
``sparse`` (too few samples a rise), ``integral``, ``output`` and its ``reaction``, ``screening``
(what is spoiled and why), ``stuck``, ``clipped`` (the range's ends), ``uncertainty``, ``direct``
(strings them together); ``order`` sorts short arrays.
"""

from audit.response.constants import METHOD_VERSION, method_version
from audit.response.direct import measure

__all__ = ["METHOD_VERSION", "measure", "method_version"]

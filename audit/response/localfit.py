"""Local quadratic regression on real, irregular stamps (Cleveland and Loader's local regression).

In: stamps [s], values, where to fit and how far to look to each side. Out: value, slope and
curvature there, and the weights each sample had in the value.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

Array = NDArray[np.float64]
LEAST_POINTS = 4


@dataclass(frozen=True, eq=False)
class Fit:
    """Fits at [m] places: value; slope per s; curvature (half the second derivative) per s².

    ``weights`` [m, k]: how much sample ``first[m] + k`` counts in the value.
    """

    value: Array
    slope: Array
    curvature: Array
    first: NDArray[np.int64]
    weights: Array

    def row(self, place: int) -> Fit:
        """The fit at one place alone."""
        one = slice(place, place + 1)
        value, slope, curvature = self.value[one], self.slope[one], self.curvature[one]
        return Fit(value, slope, curvature, self.first[one], self.weights[one])


def _windows(
    t: Array, at: Array, left: Array, right: Array
) -> tuple[NDArray[np.int64], NDArray[np.int64]]:
    """First and one-past-last sample of each window; at least four samples in each."""
    first = t.searchsorted(at - left, "left")
    last = t.searchsorted(at + right, "right")
    few = last - first < LEAST_POINTS
    here = t.searchsorted(at, "left")
    first = np.where(few, np.minimum(first, here - 2), first)
    last = np.where(few, np.maximum(last, here + 2), last)
    last = np.where(first < 0, np.maximum(last, LEAST_POINTS), last)
    first = np.where(last > len(t), np.minimum(first, len(t) - LEAST_POINTS), first)
    return np.minimum(np.maximum(first, 0), len(t)), np.minimum(np.maximum(last, 0), len(t))


def fit(t: Array, v: Array, at: Array, left: Array, right: Array) -> Fit:
    """Fit v(t) around each ``at`` with Epanechnikov weights over [at - left, at + right].

    Arrays of one length [m]; t rising [n], n at least 4. The half-widths grow where fewer than
    four samples lie within.
    """
    first, last = _windows(t, at, left, right)
    width = int((last - first).max())
    index = first[:, None] + np.arange(width)[None, :]
    inside = index < last[:, None]
    index = np.minimum(index, len(t) - 1)
    delta = t[index] - at[:, None]
    left = np.maximum(left, 1.05 * (at - t[first]))
    right = np.maximum(right, 1.05 * (t[last - 1] - at))
    half = np.where(delta < 0, left[:, None], right[:, None])
    weight = np.where(inside, 1.0 - (delta / np.maximum(half, 1e-12)) ** 2, 0.0)
    weight = np.maximum(weight, 0.0)
    scale = np.maximum(np.maximum(left, right), 1e-12)
    z = delta / scale[:, None]
    moments, sums = _moments(weight, z, v[index])
    value, slope, curvature, head = _solve(moments, sums)
    weights = weight * (head[0][:, None] + z * (head[1][:, None] + head[2][:, None] * z))
    return Fit(value, slope / scale, curvature / scale**2, first, weights)


def _moments(weight: Array, z: Array, v: Array) -> tuple[list[Array], list[Array]]:
    """Weighted sums of z^0..z^4 and of v z^0..v z^2, per row."""
    moments = [weight.sum(axis=1)]
    powers = [weight]
    for _ in range(4):
        powers.append(powers[-1] * z)
        moments.append(powers[-1].sum(axis=1))
    sums = [np.einsum("ij,ij->i", powers[k], v) for k in range(3)]
    return moments, sums


def _solve(s: list[Array], b: list[Array]) -> tuple[Array, Array, Array, tuple[Array, ...]]:
    """The normal equations of a parabola by cofactors; also the inverse's first row."""
    ridge = 1e-12 * np.maximum(s[0], 1e-12)
    s0, s1, s2, s3, s4 = s[0] + ridge, s[1], s[2] + ridge, s[3], s[4] + ridge
    c00, c01, c02 = s2 * s4 - s3 * s3, s2 * s3 - s1 * s4, s1 * s3 - s2 * s2
    c11, c12, c22 = s0 * s4 - s2 * s2, s1 * s2 - s0 * s3, s0 * s2 - s1 * s1
    det = s0 * c00 + s1 * c01 + s2 * c02
    det = np.where(np.abs(det) > 0, det, 1e-300)
    value = (c00 * b[0] + c01 * b[1] + c02 * b[2]) / det
    slope = (c01 * b[0] + c11 * b[1] + c12 * b[2]) / det
    curvature = (c02 * b[0] + c12 * b[1] + c22 * b[2]) / det
    return value, slope, curvature, (c00 / det, c01 / det, c02 / det)

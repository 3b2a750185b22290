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


def _windows(
    t: Array, at: Array, left: Array, right: Array
) -> tuple[NDArray[np.int64], NDArray[np.int64]]:
    """First and one-past-last sample of each window; at least four samples in each."""
    first = np.searchsorted(t, at - left, "left")
    last = np.searchsorted(t, at + right, "right")
    few = last - first < LEAST_POINTS
    here = np.searchsorted(t, at, "left")
    first = np.where(few, np.minimum(first, here - 2), first)
    last = np.where(few, np.maximum(last, here + 2), last)
    last = np.where(first < 0, np.maximum(last, LEAST_POINTS), last)
    first = np.where(last > len(t), np.minimum(first, len(t) - LEAST_POINTS), first)
    return np.clip(first, 0, len(t)), np.clip(last, 0, len(t))


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
    z2 = z * z
    s = [np.einsum("ij,ij->i", weight, p) for p in (np.ones_like(z), z, z2, z * z2, z2 * z2)]
    matrix = np.empty((len(at), 3, 3))
    for row in range(3):
        for column in range(3):
            matrix[:, row, column] = s[row + column]
    matrix[:, np.arange(3), np.arange(3)] += 1e-12 * np.maximum(s[0], 1e-12)[:, None]
    inverse = np.linalg.inv(matrix)
    values = v[index]
    moments = np.stack(
        [np.einsum("ij,ij->i", weight, values * p) for p in (np.ones_like(z), z, z2)], axis=1
    )
    found = np.einsum("ijk,ik->ij", inverse, moments)
    head = inverse[:, 0, :]
    weights = weight * (head[:, :1] + head[:, 1:2] * z + head[:, 2:] * z2)
    return Fit(found[:, 0], found[:, 1] / scale, found[:, 2] / scale**2, first, weights)

"""Decimal digits and a power of ten come in, the nearest double goes out. For numba to compile."""

from __future__ import annotations

import math
from typing import Any

import numpy as np
from numpy.typing import NDArray

_LOWEST_POWER, _HIGHEST_POWER = -64, 40
_EXACT = np.uint64(1 << 53)
_U0, _U1, _U3, _U9 = (np.uint64(number) for number in (0, 1, 3, 9))
_U32, _U63 = np.uint64(32), np.uint64(63)
_LOW_HALF, _ALL = np.uint64(2**32 - 1), np.uint64(2**64 - 1)
_TOP, _BELOW = np.uint64(1 << 63), np.uint64(0x1FF)


def _five_powers() -> NDArray[np.uint64]:
    """The 128 leading bits of 5^k [k - _LOWEST_POWER, high and low half]; see ``_nearest``."""
    rows = []
    for k in range(_LOWEST_POWER, _HIGHEST_POWER + 1):
        power = 5 ** abs(k)
        size = power.bit_length()
        wide = size + 127 if k >= -27 else 2 * size + 128
        bits = power if k >= 0 else (1 << wide) // power + 1
        shift = 128 - bits.bit_length()
        bits = bits << shift if shift > 0 else bits >> -shift
        rows.append((bits >> 64, bits & (2**64 - 1)))
    return np.array(rows, np.uint64)


_TEN = np.array([float(10**k) for k in range(23)])  # all of them exact
_FIVE = _five_powers()


def double(mantissa: Any, power: int) -> float:
    """mantissa * 10^power to the nearest double; NaN where that is not known here.

    ``mantissa`` uint64. Both factors exact, one rounding: W. D. Clinger, How to read floating point
    numbers accurately, 1990.
    """
    if mantissa <= _EXACT:
        if -22 <= power <= 0:
            return float(np.float64(mantissa) / _TEN[-power])
        if 0 < power <= 22:
            return float(np.float64(mantissa) * _TEN[power])
    if mantissa == _U0 or power < _LOWEST_POWER or power > _HIGHEST_POWER:
        return math.nan
    return _nearest(mantissa, power)


def _nearest(mantissa: Any, power: int) -> float:
    """By 128 bits of the power of five; NaN where these do not tell.

    D. Lemire, Number parsing at a gigabyte per second, Software: Practice and Experience 51, 2021.
    """
    shift = 0
    while mantissa < _TOP:
        mantissa = mantissa << _U1
        shift += 1
    k = power - _LOWEST_POWER
    high, low = _product(mantissa, _FIVE[k, 0])
    if high & _BELOW == _BELOW:
        more, _ = _product(mantissa, _FIVE[k, 1])
        low = low + more
        if low < more:
            high = high + _U1
    if low == _ALL and not -27 <= power <= 55:
        return math.nan
    upper = high >> _U63
    drop = upper + _U9
    bits = high >> drop
    if low <= _U1 and -4 <= power <= 23 and bits & _U3 == _U1 and bits << drop == high:
        bits = bits - _U1  # exactly half way: to the even one
    bits = (bits + (bits & _U1)) >> _U1
    exponent = ((217706 * power) >> 16) + 63 + int(np.int64(upper)) - shift - 52
    return math.ldexp(np.float64(bits), exponent)


def _product(a: Any, b: Any) -> tuple[Any, Any]:
    """The high and the low 64 bits of the product of two 64-bit numbers."""
    a1, a0, b1, b0 = a >> _U32, a & _LOW_HALF, b >> _U32, b & _LOW_HALF
    middle = a1 * b0 + ((a0 * b0) >> _U32)
    crossed = (middle & _LOW_HALF) + a0 * b1
    return a1 * b1 + (middle >> _U32) + (crossed >> _U32), a * b

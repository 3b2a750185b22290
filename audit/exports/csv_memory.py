"""Memory that is used again once nothing refers to it any more: fresh memory is slow to touch."""

from __future__ import annotations

from typing import Any

import numpy as np
from numpy.typing import NDArray

_SPARE = 1.1
_ALIGNED = 64


class Memory:
    """Lends buffers of bytes; keeps at most ``most`` of those that came back."""

    def __init__(self, most: int) -> None:
        self._most = most
        self._free: list[NDArray[np.uint8]] = []

    def lend(self, size: int) -> NDArray[np.uint8]:
        """``size`` bytes of any content, taken back when the last view of them is gone."""
        free, self._free = self._free, []
        fitting = [buffer for buffer in free if len(buffer) >= size]
        owner = min(fitting, key=len) if fitting else np.empty(int(size * _SPARE) + 1, np.uint8)
        self._free.extend(buffer for buffer in free if buffer is not owner)
        return np.asarray(_Loan(owner, self))[:size]

    def take_back(self, owner: NDArray[np.uint8]) -> None:
        """A buffer that nothing refers to any more."""
        if len(self._free) < self._most:
            self._free.append(owner)


class _Loan:
    """What all views of a lent buffer keep alive."""

    def __init__(self, owner: NDArray[np.uint8], memory: Memory) -> None:
        self._owner = owner
        self._memory = memory
        self.__array_interface__: Any = owner.__array_interface__

    def __del__(self) -> None:
        self._memory.take_back(self._owner)


def carve(buffer: NDArray[np.uint8], *wanted: tuple[Any, tuple[int, ...]]) -> list[NDArray[Any]]:
    """Arrays of the wanted types and shapes, one behind the other, out of a buffer."""
    arrays, at = [], 0
    for kind, shape in wanted:
        size = _size(kind, shape)
        arrays.append(buffer[at : at + size].view(kind).reshape(shape))
        at += -(-size // _ALIGNED) * _ALIGNED
    return arrays


def room_for(*wanted: tuple[Any, tuple[int, ...]]) -> int:
    """Bytes that ``carve`` needs for these."""
    return sum(-(-_size(kind, shape) // _ALIGNED) * _ALIGNED for kind, shape in wanted)


def _size(kind: Any, shape: tuple[int, ...]) -> int:
    return int(np.dtype(kind).itemsize * np.prod(shape, dtype=np.int64))

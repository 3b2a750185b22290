"""The CSV functions, compiled by numba once a process; kept on disk where there is a place."""

from __future__ import annotations

import functools
import hashlib
from collections.abc import Callable
from dataclasses import dataclass
from pathlib import Path
from typing import Any

import numpy as np

from audit.exports import csv_double, csv_kernel, csv_scan

_WITHIN: tuple[Callable[..., Any], ...] = (
    csv_double.double,
    csv_scan.ends,
    csv_scan.cell_end,
    *csv_kernel.WITHIN,
)
_BESIDE: tuple[Callable[..., Any], ...] = (
    csv_double._nearest,
    csv_double._product,
    csv_scan._closed,
    *csv_kernel.BESIDE,
)
_OPTIONS: dict[str, Any] = {"nogil": True, "error_model": "numpy", "_nrt": False}
"""No counting of references: none of the functions makes an array, their callers hold them all."""


@dataclass(frozen=True)
class Kernels:
    """Compiled, none holds the interpreter: see the functions of the same names."""

    read_rows: Callable[[csv_kernel.Work, int, int], None]
    find_rows: Callable[..., None]
    find_cells: Callable[..., None]
    gather: Callable[..., None]
    settle: Callable[..., int]


@functools.cache
def compile_kernels() -> Kernels:
    """All of them, compiled or as an earlier process left them; takes seconds the first time."""
    from numba.extending import register_jitable

    for within, parts in ((True, _WITHIN), (False, _BESIDE)):
        for part in parts:
            register_jitable(**_OPTIONS, forceinline=within)(part)
    octets, codes, wholes = (np.zeros(1, kind) for kind in (np.uint8, np.int32, np.int64))
    held, floats = np.zeros(1, np.int8), np.zeros(1)
    return Kernels(
        compiled(csv_kernel.read_rows, csv_kernel.no_work(), 0, 0),
        compiled(csv_scan.find_rows, octets, 0, 0, True, 0, 0, wholes, wholes),
        compiled(csv_scan.find_cells, octets, 0, 0, codes, wholes, 0, codes, codes),
        compiled(csv_scan.gather, octets, codes, codes, codes, octets),
        compiled(csv_scan.settle, floats, held, 0, floats, held),
    )


def compiled(function: Callable[..., Any], *like: Any) -> Callable[..., Any]:
    """``function`` for arguments of the types of ``like``; without a cache where none is possible.

    What is kept on disk goes by the function's own name and file alone: the name gets a hash of all
    the files a function may call into.
    """
    import numba

    function.__qualname__ = f"{function.__name__}_{_sources()}"
    signature = numba.void(*map(numba.typeof, like))
    if function is csv_scan.settle:
        signature = numba.int64(*map(numba.typeof, like))
    njit: Any = numba.njit  # its types leave out the option _nrt
    ready: Callable[..., Any]
    try:
        ready = njit(signature, **_OPTIONS, cache=True)(function)
    except (OSError, RuntimeError):  # no folder can be written, or the disk is full
        ready = njit(signature, **_OPTIONS)(function)
    return ready


@functools.cache
def _sources() -> str:
    files = (__file__, csv_double.__file__, csv_kernel.__file__, csv_scan.__file__)
    return hashlib.sha256(b"".join(Path(file).read_bytes() for file in files)).hexdigest()[:12]

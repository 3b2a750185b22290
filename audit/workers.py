"""The one seam for parallel work: a function mapped over items, results in the items' order.

``Serial`` runs in this process, ``Processes`` on the machine's cores; both give the same results.
Only picklable module-level functions and picklable items go through.
"""

from __future__ import annotations

import multiprocessing
import os
from collections import deque
from collections.abc import Callable, Iterable, Iterator
from concurrent.futures import Future, ProcessPoolExecutor
from contextlib import contextmanager
from multiprocessing import connection
from threading import Thread
from typing import Protocol, TypeVar

Item = TypeVar("Item")
Result = TypeVar("Result")


class Workers(Protocol):
    """Maps a function over items and yields the results in the order of the items."""

    @property
    def cores(self) -> int: ...

    def map(
        self, function: Callable[[Item], Result], items: Iterable[Item]
    ) -> Iterator[Result]: ...


class Serial:
    """One after another, in this process."""

    cores = 1

    def map(self, function: Callable[[Item], Result], items: Iterable[Item]) -> Iterator[Result]:
        return map(function, items)


class Processes:
    """On several cores. At most ``ahead`` items a core are taken before a result is asked for."""

    def __init__(self, pool: ProcessPoolExecutor, cores: int, ahead: int = 3) -> None:
        self._pool = pool
        self.cores = cores
        self._most = cores * ahead

    def map(self, function: Callable[[Item], Result], items: Iterable[Item]) -> Iterator[Result]:
        waiting: deque[Future[Result]] = deque()
        for item in items:
            waiting.append(self._pool.submit(function, item))
            if len(waiting) >= self._most:
                yield waiting.popleft().result()
        while waiting:
            yield waiting.popleft().result()


def cores_here() -> int:
    """Cores this process may use."""
    return len(os.sched_getaffinity(0)) if hasattr(os, "sched_getaffinity") else os.cpu_count() or 1


@contextmanager
def workers(count: int | None = None) -> Iterator[Workers]:
    """Workers on ``count`` cores (None: all this process may use); 1 means this process itself."""
    cores = cores_here() if count is None else count
    if cores <= 1:
        yield Serial()
        return
    # "spawn": the lease's heartbeat thread must not be forked into the workers.
    context = multiprocessing.get_context("spawn")
    with ProcessPoolExecutor(cores, context, _end_with_parent) as pool:
        yield Processes(pool, cores)


def _end_with_parent() -> None:
    """In a worker: end when the parent is killed. The queue it waits at would never say so."""
    parent = multiprocessing.parent_process()
    if parent is not None:
        Thread(target=_end_after, args=(parent.sentinel,), name="parent", daemon=True).start()


def _end_after(sentinel: int) -> None:
    connection.wait([sentinel])
    os._exit(1)

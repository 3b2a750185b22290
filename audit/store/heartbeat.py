"""Keeps a lease while its run works: a thread that puts off the lease's end, again and again.

In: how to renew. That the thread exists is also the sign by which others see that the run does.
"""

from __future__ import annotations

from collections.abc import Callable
from queue import SimpleQueue
from threading import Event, Thread

from audit.errors import StoreUnready
from audit.store.entries import Lease
from audit.store.holder import Pulse, here


class Heartbeat:
    """A context manager; ``keep`` gives it the lease. ``renew`` says whether it is still held."""

    pulse: Pulse | None

    def __init__(self, renew: Callable[[Lease], bool]) -> None:
        self._renew = renew
        self._pulses: SimpleQueue[Pulse | None] = SimpleQueue()
        self._leases: SimpleQueue[Lease | None] = SimpleQueue()
        self._ended = Event()
        self._thread = Thread(target=self._run, name="store-lease", daemon=True)

    def __enter__(self) -> Heartbeat:
        self._thread.start()
        self.pulse = self._pulses.get()
        return self

    def keep(self, lease: Lease) -> None:
        """Renew this lease every third of its time from now on."""
        self._leases.put(lease)

    def __exit__(self, *_: object) -> None:
        self._ended.set()
        self._leases.put(None)
        self._thread.join()

    def _run(self) -> None:
        self._pulses.put(here())
        lease = self._leases.get()
        if lease is not None:
            self._beat(lease)

    def _beat(self, lease: Lease) -> None:
        """Until told to stop, or until the lease is lost.

        Where the store is away, goes on trying, more often; each write proves the lease for itself.
        """
        pause_s = lease.ttl_s / 3
        while not self._ended.wait(pause_s):
            try:
                held = self._renew(lease)
            except StoreUnready:
                pause_s = lease.ttl_s / 18
                continue
            if not held:
                return
            pause_s = lease.ttl_s / 3

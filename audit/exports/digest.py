"""Pieces of a file go in, their SHA-256 comes out; large pieces beside the reader's own work."""

from __future__ import annotations

import hashlib
from queue import Queue
from threading import Thread

_LARGE = 1 << 20
_WAITING = 2


class Digest:
    """SHA-256 of all pieces in their order. From the first large one on a thread takes them.

    At most two pieces wait for it. ``close`` must be called when the pieces end early.
    """

    def __init__(self) -> None:
        self._hash = hashlib.sha256()
        self._waiting: Queue[bytes] = Queue(_WAITING)
        self._thread: Thread | None = None

    def update(self, piece: bytes) -> None:
        if self._thread is None and len(piece) < _LARGE:
            self._hash.update(piece)
        elif piece:
            if self._thread is None:
                self._thread = Thread(target=self._take, daemon=True)
                self._thread.start()
            self._waiting.put(piece)

    def hexdigest(self) -> str:
        """Of all that was given so far, 64 hexadecimal digits."""
        self.close()
        return self._hash.hexdigest()

    def close(self) -> None:
        """Waits until all pieces are taken, and ends the thread."""
        if self._thread is not None:
            self._waiting.put(b"")
            self._thread.join()
            self._thread = None

    def _take(self) -> None:
        while piece := self._waiting.get():
            self._hash.update(piece)

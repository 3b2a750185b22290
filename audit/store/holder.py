"""Who holds the lease: a name for people, and its thread, for others to see if it still exists.

In: what the lease row keeps of its holder, and this machine's table of processes and threads. Out:
whether the holder is alive, gone, or out of sight. The table is looked at on Linux alone; elsewhere
every holder is out of sight, and a dead one is replaced when its time has run out.
"""

from __future__ import annotations

import json
import os
import socket
from collections.abc import Callable
from contextlib import suppress
from dataclasses import asdict, dataclass
from enum import Enum
from pathlib import Path
from threading import get_native_id

Look = Callable[[int], tuple[bool, int | None]]
"""A thread's number -> whether there is such a thread, and when it began (None: hidden)."""

_STATE, _STARTED = 0, 19
_DEAD_STATES = "ZXx"


class Life(Enum):
    """What the table of processes says about a holder."""

    ALIVE = "alive"
    GONE = "gone"
    OUT_OF_SIGHT = "out of sight"


@dataclass(frozen=True)
class Pulse:
    """The thread that keeps a lease, never to be taken for one that gets its number later.

    It ends with the process, and with the run where the process goes on. ``table``: host, boot and
    namespace of numbers; only threads of one table see each other. ``started``: clock ticks from
    the boot to its start.
    """

    table: str
    thread: int
    started: int


@dataclass(frozen=True)
class Holder:
    """Who holds the lease: the name others are told, and its pulse, if it can be seen at all."""

    name: str
    pulse: Pulse | None = None

    def kept(self) -> str:
        """As it stands in the lease row."""
        return json.dumps(asdict(self), ensure_ascii=False)

    @classmethod
    def of(cls, kept: str) -> Holder:
        """The holder as the lease row has it; a bare name is one that cannot be recognised."""
        if not kept.startswith("{"):
            return cls(kept)
        found = json.loads(kept)
        pulse = found.get("pulse")
        return cls(found["name"], None if pulse is None else Pulse(**pulse))


def life(holder: Holder, own: Pulse | None, look: Look) -> Life:
    """Whether a holder still exists, as seen from the thread ``own`` through ``look``.

    A holder of another table is out of sight: the same number may be another thread there. So is
    one from before the machine was started anew, for a host of the same name may be another one.
    """
    pulse = holder.pulse
    if pulse is None or own is None or pulse.table != own.table:
        return Life.OUT_OF_SIGHT
    exists, started = look(pulse.thread)
    if not exists or (started is not None and started != pulse.started):
        return Life.GONE
    return Life.ALIVE


def here() -> Pulse | None:
    """The calling thread; None where there is no table to look at (proc(5), Linux)."""
    try:
        boot = Path("/proc/sys/kernel/random/boot_id").read_text("ascii").strip()
        namespace = os.readlink("/proc/self/ns/pid")
        thread, _, started = _stat("thread-self")
    except (OSError, ValueError, IndexError):
        return None
    if thread != get_native_id():
        return None  # the table is that of another namespace
    return Pulse(f"{socket.gethostname()}/{boot}/{namespace}", thread, started)


def look(thread: int) -> tuple[bool, int | None]:
    """Look a thread up (see ``Look``). Only where ``here`` finds a table.

    One of a killed process that its parent has not collected yet counts as none. Signal 0 finds
    those of other users too where the table hides them; it does nothing to them (kill(2)).
    """
    try:
        with suppress(PermissionError):
            os.kill(thread, 0)
        _, state, started = _stat(str(thread))
    except ProcessLookupError:
        return False, None
    except (OSError, ValueError, IndexError):
        return True, None
    return state not in _DEAD_STATES, started


def _stat(name: str) -> tuple[int, str, int]:
    """Number, state and start of a thread: fields 1, 3 and 22 of its stat file, proc(5)."""
    text = Path("/proc", name, "stat").read_text("utf-8", errors="replace")
    number, _, _ = text.partition(" ")
    fields = text[text.rindex(")") + 1 :].split()  # the name before it may hold anything
    return int(number), fields[_STATE], int(fields[_STARTED])

"""Who holds the lease: a name for people, and the process, for others to see if it still exists.

In: what the lease row keeps of its holder, and this machine's table of processes. Out: whether the
holder is alive, gone, or out of sight. The table is looked at on Linux alone; elsewhere every
holder is out of sight, and a dead one is replaced when its time has run out.
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

Look = Callable[[int], tuple[bool, int | None]]
"""Process number -> whether there is such a process, and when it began (None: not to be seen)."""

_STATE, _STARTED = 0, 19
_DEAD_STATES = "ZXx"


class Life(Enum):
    """What the table of processes says about a holder."""

    ALIVE = "alive"
    GONE = "gone"
    OUT_OF_SIGHT = "out of sight"


@dataclass(frozen=True)
class Process:
    """One process, never to be taken for another that gets its number later.

    ``table``: host, boot and process-number namespace; only processes of one table see each other.
    ``started``: clock ticks from the boot to its start.
    """

    table: str
    pid: int
    started: int


@dataclass(frozen=True)
class Holder:
    """Who holds the lease: the name others are told, and the process, if it can be recognised."""

    name: str
    process: Process | None = None

    def kept(self) -> str:
        """As it stands in the lease row."""
        return json.dumps(asdict(self), ensure_ascii=False)

    @classmethod
    def of(cls, kept: str) -> Holder:
        """The holder as the lease row has it; a bare name is one that cannot be recognised."""
        if not kept.startswith("{"):
            return cls(kept)
        found = json.loads(kept)
        process = found["process"]
        return cls(found["name"], None if process is None else Process(**process))


def life(holder: Holder, own: Process | None, look: Look) -> Life:
    """Whether a holder still exists, as seen from the process ``own`` through ``look``.

    A holder of another table is out of sight: the same number may be another process there. So is
    one from before the machine was started anew, for a host of the same name may be another one.
    """
    process = holder.process
    if process is None or own is None or process.table != own.table:
        return Life.OUT_OF_SIGHT
    exists, started = look(process.pid)
    if not exists or (started is not None and started != process.started):
        return Life.GONE
    return Life.ALIVE


def here() -> Process | None:
    """This process; None where there is no table to look at (proc(5), Linux)."""
    try:
        boot = Path("/proc/sys/kernel/random/boot_id").read_text("ascii").strip()
        namespace = os.readlink("/proc/self/ns/pid")
        pid, _, started = _stat("self")
    except OSError:
        return None
    if pid != os.getpid():
        return None  # the table is that of another namespace
    return Process(f"{socket.gethostname()}/{boot}/{namespace}", pid, started)


def look(pid: int) -> tuple[bool, int | None]:
    """Look a process up (see ``Look``). Only where ``here`` finds a table.

    A killed process that its parent has not collected yet counts as none. Signal 0 finds processes
    of other users too where the table hides them; it does nothing to them (kill(2)).
    """
    try:
        with suppress(PermissionError):
            os.kill(pid, 0)
        _, state, started = _stat(str(pid))
    except ProcessLookupError:
        return False, None
    except OSError:
        return True, None
    return state not in _DEAD_STATES, started


def _stat(name: str) -> tuple[int, str, int]:
    """Number, state and start of a process: fields 1, 3 and 22 of /proc/PID/stat, proc(5)."""
    text = Path("/proc", name, "stat").read_text("utf-8", errors="replace")
    number, _, _ = text.partition(" ")
    fields = text[text.rindex(")") + 1 :].split()  # the name before it may hold anything
    return int(number), fields[_STATE], int(fields[_STARTED])

"""A night's work that is stopped in the middle: what test_kill and the benchmark of kills share.

The site has had one audit. Since then new files have come, one that is cut in pieces by time, and
two corrections: new content at a known path, and a later file over the time of another. The audit
of these runs in a child process that can be killed or stopped at any instant. Children are forked
from a server that has imported the program once, so that each begins at once.
"""

from __future__ import annotations

import multiprocessing
import os
import resource
import shutil
import signal
from collections.abc import Callable
from dataclasses import dataclass
from multiprocessing.connection import Connection
from multiprocessing.context import ForkServerProcess
from pathlib import Path
from time import monotonic
from typing import Protocol

import numpy as np
from conftest import Postgres

import sites
from audit import nightly
from audit.errors import AuditError
from audit.site import open_site
from audit.store import lease, open_store, queries
from audit.store.holder import Life

TAGS = ("FIC-11", "TIC-12", "PIC-13")
HOURS = 3
SCAN_S = 5.0

_forks = multiprocessing.get_context("forkserver")
_forks.set_forkserver_preload(["audit.nightly", "audit.site", "audit.exports", "audit.store.dump"])


class Stores(Protocol):
    """Where stores are made on one kind of database."""

    def new(self) -> str:
        """The URL of a new, empty database."""

    def copy(self, url: str) -> str:
        """The URL of a new copy of a store that nobody has open."""

    def drop(self, url: str) -> None:
        """Remove a store."""


class SqliteStores:
    """Files in a folder."""

    def __init__(self, folder: Path) -> None:
        self._folder = folder
        self._count = 0

    def new(self) -> str:
        self._count += 1
        return f"sqlite:///{self._folder / f'store{self._count}.db'}"

    def copy(self, url: str) -> str:
        made = self.new()
        shutil.copyfile(self._path(url), self._path(made))
        return made

    def drop(self, url: str) -> None:
        for ending in ("", "-wal", "-shm"):
            Path(f"{self._path(url)}{ending}").unlink(missing_ok=True)

    def _path(self, url: str) -> Path:
        return Path(url.removeprefix("sqlite:///"))


class PostgresStores:
    """Databases of a server."""

    def __init__(self, server: Postgres) -> None:
        self._server = server
        self._names: dict[str, str] = {}

    def new(self) -> str:
        return self._named(self._server.create())

    def copy(self, url: str) -> str:
        return self._named(self._server.create(self._names[url]))

    def drop(self, url: str) -> None:
        self._server.drop(self._names.pop(url))

    def _named(self, name: str) -> str:
        url = self._server.url(name)
        self._names[url] = name
        return url


# --- the site -------------------------------------------------------------------------------


def plant(seed: int = 5) -> sites.Plant:
    """Three loops, each moved every twenty minutes or so, with noise."""
    rng = np.random.default_rng(seed)
    t_s = np.arange(0, HOURS * 3600, SCAN_S)
    columns = {}
    for at, tag in enumerate(TAGS):
        starts = np.arange(500 + 97 * at, HOURS * 3600 - 60, 1250.0)
        levels = 40.0 + np.cumsum(rng.choice([-4.0, 4.0, 6.0], len(starts)))
        moves = [(float(t), float(y)) for t, y in zip(starts, levels, strict=True)]
        sp, pv = sites.follow(t_s, moves, 40.0, 0.4 + 0.1 * at, 0.15, 5.0)
        columns[f"{tag}.PV"] = np.round(pv + rng.normal(0, 0.05, len(t_s)), 4)
        columns[f"{tag}.SP"] = sp
    return sites.Plant(t_s, columns)


def corrected(record: sites.Plant) -> sites.Plant:
    """The same with process variables a little off."""
    return sites.Plant(
        record.t_s,
        {
            tag: [round(float(value) * 1.002, 4) for value in column]
            if tag.endswith(".PV")
            else column
            for tag, column in record.columns.items()
        },
    )


def lay(folder: Path) -> Path:
    """The site before its first audit: one hour of exports."""
    loops = "tag,kind,pv,sp,range_low,range_high\n" + "".join(
        f"{tag},other,{tag}.PV,{tag}.SP,0,100\n" for tag in TAGS
    )
    specs = "tag,valid_from,rise_time_s,settling_time_s,overshoot_pct,set_by,reason\n" + "".join(
        f"{tag},2026-01-01,20,120,20,N. Quay,commissioning\n" for tag in TAGS
    )
    sites.SiteFiles(loops, specs, sites.WIDE).lay(folder)
    _write(folder, "a", _hours(plant(), 0, 1))
    return folder


def bring(folder: Path) -> None:
    """What has come since: two hours in three pieces, and the two corrections."""
    record = plant()
    for name, first, last in (("b", 1, 1.6), ("c", 1.6, 2.3), ("d", 2.3, 3)):
        _write(folder, name, _hours(record, first, last))
    _write(folder, "a", corrected(_hours(record, 0, 1)))
    _write(folder, "z", corrected(_hours(record, 2, 2.6)))


def _hours(record: sites.Plant, first: float, last: float) -> sites.Plant:
    return record.rows(round(first * 3600 / SCAN_S), round(last * 3600 / SCAN_S))


def _write(folder: Path, name: str, record: sites.Plant) -> None:
    sites.write_csv(folder / "exports" / f"{name}.csv", sites.wide_csv(record))


@dataclass(frozen=True)
class Night:
    """The site with its new files, a store that has not seen them, and what it ought to become.

    ``took_s``: how long an undisturbed audit takes in a child.
    """

    folder: Path
    stores: Stores
    before: str
    wanted: tuple[str, ...]
    took_s: float


def prepare(folder: Path, stores: Stores) -> Night:
    """Lay the site down, audit its first hour, bring the rest; see what undisturbed audits make."""
    url = stores.new()
    sites.audit(lay(folder), url)
    bring(folder)
    took_s = 0.0
    for _ in range(2):  # the first pays for what is done once: caches, compiled code
        copy = stores.copy(url)
        child = Child(folder, copy)
        begun = monotonic()
        assert child.outcome() == "finished"
        took_s = monotonic() - begun
        wanted = tuple(sites.content(folder, copy))
        stores.drop(copy)
    return Night(folder, stores, url, wanted, took_s)


# --- children -------------------------------------------------------------------------------


class Child:
    """An audit in a process of its own, begun when this returns.

    ``pause_at``: it stops itself (SIGSTOP) when so many loops have been measured. ``file_limit``:
    no file may grow beyond so many bytes.
    """

    def __init__(
        self,
        folder: Path,
        url: str,
        cores: int = 1,
        pause_at: int | None = None,
        file_limit: int | None = None,
    ) -> None:
        self._pipe, theirs = _forks.Pipe()
        given = (folder, url, cores, pause_at, file_limit, theirs)
        self._process: ForkServerProcess = _forks.Process(target=_audit, args=given)
        self._process.start()
        theirs.close()
        assert self._pipe.recv() == "begun"

    @property
    def pid(self) -> int:
        assert self._process.pid is not None
        return self._process.pid

    def wait_until_paused(self) -> None:
        assert self._pipe.recv() == "pausing"

    def go_on(self) -> None:
        os.kill(self.pid, signal.SIGCONT)

    def outcome(self) -> str:
        """How it ended: "finished", or what a person would be told."""
        said = str(self._pipe.recv())
        self._process.join()
        self._close()
        return said

    def kill_after(self, seconds: float) -> bool:
        """Kill it; False if it had ended by then."""
        self._process.join(seconds)
        self._process.kill()
        self._process.join()
        killed = self._process.exitcode == -signal.SIGKILL
        self._close()
        return killed

    def _close(self) -> None:
        self._process.close()
        self._pipe.close()


def _audit(
    folder: Path,
    url: str,
    cores: int,
    pause_at: int | None,
    file_limit: int | None,
    pipe: Connection,
) -> None:
    """In the child."""

    def progress(stage: str, done: int, total: int) -> None:
        if stage == "measuring loops" and done == pause_at:
            pipe.send("pausing")
            os.kill(os.getpid(), signal.SIGSTOP)

    site = open_site(folder, {"LOOPASSAY_STORE_URL": url})
    pipe.send("begun")
    if file_limit is not None:
        resource.setrlimit(resource.RLIMIT_FSIZE, (file_limit, file_limit))
    try:
        with open_store(url) as store:
            nightly.run(site, store, now=sites.NOW, cores=cores, progress=progress)
    except AuditError as error:
        pipe.send(f"{error.exit_code}: {error}")
    else:
        pipe.send("finished")


# --- what is left ---------------------------------------------------------------------------


@dataclass(frozen=True)
class Kill:
    """One kill and the run after it. ``left_open``: the log has the killed run without an end."""

    at_s: float
    left_open: bool
    lease_left: bool
    next_s: float
    wrong: tuple[str, ...]


def instants(count: int, took_s: float, seed: int) -> list[float]:
    """Random instants of a run, one in each of ``count`` equal parts of it, in seconds."""
    parts = np.arange(count) + np.random.default_rng(seed).random(count)
    return [float(part) * took_s / count for part in parts]


def kill_and_go_on(night: Night, at_s: float, cores: int = 1) -> Kill:
    """Kill an audit at an instant, let the next one run, and say all that is not as it should be.

    Where the audit had ended by the instant, an earlier one is taken, until one is hit.
    """
    url = night.stores.copy(night.before)
    while not Child(night.folder, url, cores).kill_after(at_s):
        night.stores.drop(url)
        url, at_s = night.stores.copy(night.before), at_s * 0.9
    found = [] if _no_run_shows_life(url) else ["the killed run counts as being at work"]
    lease_left = _looked_up(url, lambda held: held is not None)
    if _looked_up(url, lambda held: held is not None and held.life is not Life.GONE):
        found.append("the killed holder is not seen to be gone")
    begun = monotonic()
    sites.audit(night.folder, url)
    next_s = monotonic() - begun
    if tuple(sites.content(night.folder, url)) != night.wanted:
        found.append("the dump differs")
    if _looked_up(url, lambda held: held is not None):
        found.append("a lease is left")
    left_open, wrong_runs = _run_log(url)
    kill = Kill(at_s, left_open, lease_left, next_s, (*found, *wrong_runs, *_files(url)))
    night.stores.drop(url)
    return kill


def _looked_up(url: str, ask: Callable[[lease.Held | None], bool]) -> bool:
    with open_store(url) as store, store.read() as session:
        return ask(lease.held(session))


def _no_run_shows_life(url: str) -> bool:
    with open_store(url) as store, store.read() as session:
        return lease.running(session) is None


def _run_log(url: str) -> tuple[bool, list[str]]:
    """Whether a run is without an end, and what is wrong with the log: first run, killed, next."""
    with open_store(url) as store, store.read() as session:
        newest, *earlier = queries.runs(session)
    wrong = [] if newest.state == "finished" else [f"the next run is {newest.state}"]
    if len(earlier) not in (1, 2):
        wrong.append(f"{len(earlier)} earlier runs in the log")
    left = [run for run in earlier if run.ended_at is None]
    if len(left) > 1 or any(run.state != "running" for run in left):
        wrong.append("the log of earlier runs")
    return bool(left), wrong


def _files(url: str) -> list[str]:
    """Files that are not taken, or of which a cell is missing."""
    with open_store(url) as store, store.read() as session:
        found = queries.exports(session)
    wrong = [f"{seen.path} is {seen.state}" for seen in found if seen.state != "taken"]
    return wrong + [f"{seen.path} does not add up" for seen in found if seen.account.balance != 0]

"""How long the intake of a large export takes, as a ratio to reading the same file, and its memory.

    cd tests && python -m bench.intake [--folder FOLDER] [--loops 200] [--rounds 3] [--cores 2]

Reference: ``pyarrow.csv.read_csv`` with given column types and 8 MB blocks on two threads (of the
Parquet file ``pyarrow.parquet.read_table``), reading alone, in a process of its own that has read
the file once before. The job: an audit of a fresh SQLite store, in processes that have audited a
small site before; process start and imports are not counted, nor the ranking. The measuring of the
setpoint changes is left out of it (each gives what the first one measured) and timed apart, as the
difference to a whole audit. Medians over the rounds. Peak memory is that of the process that reads.
"""

from __future__ import annotations

import argparse
import json
import os
import shutil
import statistics
import subprocess
import sys
import tempfile
import time
from collections.abc import Callable
from contextlib import nullcontext
from dataclasses import dataclass, replace
from datetime import timedelta
from pathlib import Path
from typing import Any

import pyarrow as pa
import pyarrow.csv as pacsv
import pyarrow.parquet as pq

from audit import exports, nightly, response
from audit.loopwork import LoopWork
from audit.records import MeasureSettings, Record, Response, SetpointChange
from audit.site import open_site
from audit.store import open_store, writes
from audit.workers import workers
from bench import reference_site as reference

WIDE = 'files = "exports/*.csv"'
NARROW = 'files = "exports/*.csv"\nlayout = "narrow"'
PARQUET = 'files = "exports/*.parquet"\nformat = "parquet"'


@dataclass(frozen=True)
class Case:
    """One kind of export: its loops, how it is declared and written, and the ratio to reach."""

    name: str
    loops: int
    exports: str
    file: str
    write: Callable[[Path, int], None]
    most_ratio: float
    most_mb: float | None


def say(line: str) -> None:
    sys.stdout.write(line + "\n")
    sys.stdout.flush()


def cases(loops: int) -> list[Case]:
    few = max(loops // 10, 1)
    return [
        Case("wide CSV", loops, WIDE, "wide.csv", reference.write_wide_csv, 1.3, 600),
        Case("narrow CSV", few, NARROW, "narrow.csv", reference.write_narrow_csv, 2.2, None),
        Case("wide Parquet", loops, PARQUET, "wide.parquet", reference.write_parquet, 1.7, 350),
    ]


def read_reference(path: Path) -> int:
    """Read the file as the reference does; its rows."""
    if path.suffix == ".parquet":
        return int(pq.read_table(path).num_rows)
    with path.open(encoding="utf-8") as file:
        names = file.readline().strip().replace('"', "").split(",")
    texts = {"tag", "value"}
    kinds: dict[str, pa.DataType] = {
        n: pa.string() if n[-3:] == ".MD" or n in texts else pa.float64() for n in names
    }
    kinds["timestamp"] = pa.timestamp("us", tz="UTC")
    found = pacsv.read_csv(
        path,
        read_options=pacsv.ReadOptions(block_size=8 << 20, use_threads=True),
        convert_options=pacsv.ConvertOptions(column_types=kinds),
    )
    return int(found.num_rows)


def time_reference(path: Path) -> dict[str, float]:
    pa.set_cpu_count(2)
    read_reference(path)
    started = time.perf_counter()
    read_reference(path)
    return {"read_s": time.perf_counter() - started}


class Clock:
    """Seconds spent in a function, counted up."""

    def __init__(self) -> None:
        self.spent_s = 0.0

    def around(self, function: Callable[..., Any]) -> Callable[..., Any]:
        def timed(*args: Any, **named: Any) -> Any:
            started = time.perf_counter()
            try:
                return function(*args, **named)
            finally:
                self.spent_s += time.perf_counter() - started

        return timed


MEASURE = response.measure
MEASURED: list[Response] = []


def stand_in(curve: Record, change: SetpointChange, settings: MeasureSettings) -> Response:
    """In place of the measuring: what the first change of this process measured, again."""
    if not MEASURED:
        MEASURED.append(MEASURE(curve, change, settings))
    return MEASURED[0]


def unmeasured(work: LoopWork) -> writes.LoopRows:
    """One loop's way without the measuring."""
    setattr(response, "measure", stand_in)  # noqa: B010 (a seam of this process alone)
    return WORK_LOOP(work)


WORK_LOOP = nightly.work_loop


def warm(number: int) -> int:
    """Something for each worker to do first: it imports what a loop's audit needs."""
    time.sleep(0.05)
    return os.getpid()


def time_job(path: Path, case: Case, cores: int, measuring: bool) -> dict[str, float]:
    """One audit of a fresh site with this one export, after one of a small site."""
    clocks = {name: Clock() for name in ("reading", "saving", "publishing")}
    seams: list[tuple[Any, str, str]] = [
        (exports, "read", "reading"),
        (writes, "save_rows", "saving"),
        (nightly, "_publish", "publishing"),
    ]
    for module, name, clock in seams:
        setattr(module, name, clocks[clock].around(getattr(module, name)))
    if not measuring:
        setattr(nightly, "work_loop", unmeasured)  # noqa: B010 (a seam of this run alone)
    with workers(cores) as pool:
        ids = set(pool.map(warm, range(4 * cores)))
        setattr(nightly, "workers", lambda count: nullcontext(pool))  # noqa: B010
        small = path.with_name(f"small-{path.name}")
        if not small.exists():
            case.write(small, 2)
        for _ in range(2):
            audit(small, case, 2)
        for used in clocks.values():
            used.spent_s = 0.0
        whole_s, steps = audit(path, case, case.loops)
        others = [peak_mb_of(number) for number in ids if number != os.getpid()]
    return {
        "whole_s": whole_s,
        "steps": steps,
        "peak_mb": peak_mb_of(os.getpid()),
        "workers_mb": sum(others),
        **{f"{name}_s": clock.spent_s for name, clock in clocks.items()},
    }


def audit(export: Path, case: Case, loops: int) -> tuple[float, int]:
    """Seconds of one audit of a new site with this export, and the steps found."""
    with tempfile.TemporaryDirectory(dir=export.parent) as folder:
        site_folder = Path(folder)
        reference.lay_site(site_folder, loops, case.exports)
        (site_folder / "exports" / export.name).hardlink_to(export)
        with open_store(f"sqlite:///{site_folder / 'site.db'}") as store:
            store.upgrade()
            site = open_site(site_folder, {})
            started = time.perf_counter()
            report = nightly.run(site, store, now=reference.START + timedelta(days=2))
            assert not report.files_refused, report.files_refused
            return time.perf_counter() - started, report.steps_new


def peak_mb_of(process: int) -> float:
    """Most memory a process of this machine has held so far (Linux)."""
    for line in Path(f"/proc/{process}/status").read_text().splitlines():
        if line.startswith("VmHWM:"):
            return float(line.split()[1]) / 1024
    return 0.0


def in_own_process(action: str, path: Path, case: Case, cores: int) -> dict[str, float]:
    command = [sys.executable, "-m", "bench.intake", "--one", action, "--file", str(path)]
    command += ["--case", case.name, "--loops", str(case.loops), "--cores", str(cores)]
    done = subprocess.run(command, check=True, capture_output=True, text=True)
    found: dict[str, float] = json.loads(done.stdout)
    return found


def table(folder: Path, loops: int, rounds: int, cores: int, only: str | None) -> None:
    say("| export | size | read alone | intake, detection, storing | ratio | to reach | peak |")
    say("| --- | --- | --- | --- | --- | --- | --- |")
    notes = []
    for case in cases(loops):
        if only is not None and only not in case.name:
            continue
        path = folder / case.file
        if not path.exists():
            case.write(path, case.loops)
        read, job = [], []
        for _ in range(rounds):
            read.append(in_own_process("read", path, case, cores))
            job.append(in_own_process("job", path, case, cores))
        whole = in_own_process("whole", path, case, cores)
        read_s = statistics.median(one["read_s"] for one in read)
        mid = {key: statistics.median(one[key] for one in job) for key in job[0]}
        job_s = mid["whole_s"] - mid["publishing_s"]
        most = "" if case.most_mb is None else f" (at most {case.most_mb:.0f} MB)"
        say(
            f"| {case.name} | {path.stat().st_size / 1e6:.0f} MB | {read_s:.2f} s | {job_s:.2f} s "
            f"| {job_s / read_s:.2f} | {case.most_ratio} | {mid['peak_mb']:.0f} MB{most} |"
        )
        measuring_s = whole["whole_s"] - mid["whole_s"]
        notes.append(
            f"{case.name}: reading {mid['reading_s']:.2f} s, storing {mid['saving_s']:.2f} s; "
            f"measuring {mid['steps']:.0f} changes {measuring_s:.2f} s, ranking "
            f"{mid['publishing_s']:.2f} s, the whole job {whole['whole_s']:.2f} s; "
            f"the workers hold {mid['workers_mb']:.0f} MB"
        )
    say("\n" + "\n".join(notes))


def main() -> None:
    parser = argparse.ArgumentParser(description=__doc__)
    parser.add_argument("--folder", type=Path)
    parser.add_argument("--loops", type=int, default=200)
    parser.add_argument("--rounds", type=int, default=3)
    parser.add_argument("--cores", type=int, default=2)
    parser.add_argument("--only")
    parser.add_argument("--one", choices=["read", "job", "whole"], help=argparse.SUPPRESS)
    parser.add_argument("--file", type=Path, help=argparse.SUPPRESS)
    parser.add_argument("--case", help=argparse.SUPPRESS)
    asked = parser.parse_args()
    if asked.one is not None:
        (case,) = [replace(c, loops=asked.loops) for c in cases(200) if c.name == asked.case]
        if asked.one == "read":
            say(json.dumps(time_reference(asked.file)))
        else:
            say(json.dumps(time_job(asked.file, case, asked.cores, asked.one == "whole")))
        return
    folder = asked.folder or Path(tempfile.mkdtemp())
    folder.mkdir(parents=True, exist_ok=True)
    table(folder, asked.loops, asked.rounds, asked.cores, asked.only)
    if asked.folder is None:
        shutil.rmtree(folder)


if __name__ == "__main__":
    main()

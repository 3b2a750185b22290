"""How long the intake of a large export takes, as a ratio to reading the same file, and its memory.

    cd tests && python -m bench.intake [--folder FOLDER] [--loops 200] [--rounds 3]

Reference: ``pyarrow.csv.read_csv`` with given column types and 8 MB blocks on two threads (of the
Parquet file ``pyarrow.parquet.read_table``), reading alone, in a process of its own that has read
the file once before. The job: an audit of a fresh SQLite store, in a process that has audited a
small site before; reading uses two threads, all else one. Process start and imports are not
counted, and the measuring of the setpoint changes is timed apart. Medians over the rounds.
"""

from __future__ import annotations

import argparse
import json
import resource
import statistics
import subprocess
import sys
import tempfile
import time
from collections.abc import Callable, Iterator
from contextlib import contextmanager
from dataclasses import dataclass
from datetime import timedelta
from pathlib import Path
from typing import Any

import pyarrow as pa
import pyarrow.csv as pacsv
import pyarrow.parquet as pq

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


def time_job(path: Path, case: Case) -> dict[str, float]:
    """One audit of a fresh site with this one export, after one of a small site."""
    from audit import exports, nightly, response
    from audit.site import open_site
    from audit.store import open_store, writes
    from audit.workers import Serial

    class TwoThreads(Serial):
        cores = 2

    @contextmanager
    def in_this_process(count: int | None) -> Iterator[TwoThreads]:
        yield TwoThreads()

    clocks = {name: Clock() for name in ("reading", "measuring", "loops", "saving", "publishing")}
    seams: list[tuple[Any, str, str]] = [
        (exports, "read", "reading"),
        (response, "measure", "measuring"),
        (nightly, "work_loop", "loops"),
        (writes, "save_rows", "saving"),
        (nightly, "_publish", "publishing"),
    ]
    for module, name, clock in seams:
        setattr(module, name, clocks[clock].around(getattr(module, name)))
    setattr(nightly, "workers", in_this_process)  # noqa: B010 (a seam of this run alone)

    def audit(loops: int, export: Path) -> tuple[float, int]:
        with tempfile.TemporaryDirectory(dir=path.parent) as folder:
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

    small = path.with_name(f"small-{path.name}")
    if not small.exists():
        case.write(small, 2)
    audit(2, small)
    for used in clocks.values():
        used.spent_s = 0.0
    before_mb = resource.getrusage(resource.RUSAGE_SELF).ru_maxrss / 1024
    whole_s, steps = audit(case.loops, path)
    spent = {f"{name}_s": clock.spent_s for name, clock in clocks.items()}
    spent["loops_s"] -= spent["measuring_s"]
    return {
        "whole_s": whole_s,
        "steps": steps,
        "before_mb": before_mb,
        "peak_mb": resource.getrusage(resource.RUSAGE_SELF).ru_maxrss / 1024,
        **spent,
    }


def in_own_process(action: str, path: Path, case: Case) -> dict[str, float]:
    command = [sys.executable, "-m", "bench.intake", "--one", action, "--file", str(path)]
    command += ["--case", case.name, "--loops-here", str(case.loops)]
    done = subprocess.run(command, check=True, capture_output=True, text=True)
    found: dict[str, float] = json.loads(done.stdout)
    return found


def table(folder: Path, loops: int, rounds: int, only: str | None) -> None:
    say("| export | size | read alone | intake, detection, storing | ratio | to reach | peak |")
    say("| --- | --- | --- | --- | --- | --- | --- |")
    for case in cases(loops):
        if only is not None and only not in case.name:
            continue
        path = folder / case.file
        if not path.exists():
            case.write(path, case.loops)
        found = [
            in_own_process("read", path, case) | in_own_process("job", path, case)
            for _ in range(rounds)
        ]
        mid = {key: statistics.median(one[key] for one in found) for key in found[0]}
        ratios = [(one["whole_s"] - one["measuring_s"]) / one["read_s"] for one in found]
        least = "" if case.most_mb is None else f" (at most {case.most_mb:.0f} MB)"
        say(
            f"| {case.name} | {path.stat().st_size / 1e6:.0f} MB | {mid['read_s']:.2f} s "
            f"| {mid['whole_s'] - mid['measuring_s']:.2f} s | {statistics.median(ratios):.2f} "
            f"| {case.most_ratio} | {mid['peak_mb']:.0f} MB{least} |"
        )
        say(
            f"{case.name}: whole job {mid['whole_s']:.2f} s: "
            + ", ".join(
                f"{name[:-2]} {mid[name]:.2f} s"
                for name in ("reading_s", "loops_s", "measuring_s", "saving_s", "publishing_s")
            )
            + f"; {mid['steps']:.0f} changes; {mid['before_mb']:.0f} MB before"
        )


def main() -> None:
    parser = argparse.ArgumentParser(description=__doc__)
    parser.add_argument("--folder", type=Path)
    parser.add_argument("--loops", type=int, default=200)
    parser.add_argument("--rounds", type=int, default=3)
    parser.add_argument("--only")
    parser.add_argument("--one", choices=["read", "job"], help=argparse.SUPPRESS)
    parser.add_argument("--file", type=Path, help=argparse.SUPPRESS)
    parser.add_argument("--case", help=argparse.SUPPRESS)
    parser.add_argument("--loops-here", type=int, help=argparse.SUPPRESS)
    asked = parser.parse_args()
    if asked.one is not None:
        (case,) = [case for case in cases(asked.loops_here) if case.name == asked.case]
        case = Case(**{**case.__dict__, "loops": asked.loops_here})
        took = time_reference(asked.file) if asked.one == "read" else time_job(asked.file, case)
        say(json.dumps(took))
        return
    if asked.folder is not None:
        asked.folder.mkdir(parents=True, exist_ok=True)
        table(asked.folder, asked.loops, asked.rounds, asked.only)
        return
    with tempfile.TemporaryDirectory() as folder:
        table(Path(folder), asked.loops, asked.rounds, asked.only)


if __name__ == "__main__":
    main()

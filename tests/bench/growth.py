"""How the cost and the memory of an audit grow with the number of loops, and of days.

    cd tests && python -m bench.growth [--most-loops 800] [--most-days 30]

Wide CSV, one file a day, one sample a tag in ten seconds; each size in a process of its own that
has audited a small site before. The exponent is the slope of log(time) over log(size), by least
squares: 1 is linear. Peak memory is that of the process that reads, ranking included.
"""

from __future__ import annotations

import argparse
import json
import os
import shutil
import subprocess
import sys
import tempfile
import time
from datetime import timedelta
from pathlib import Path

import numpy as np

from audit import nightly
from audit.site import open_site
from audit.store import open_store
from bench import reference_site as reference
from bench.intake import WIDE, peak_mb_of, say

EVERY_S = 10
FEW_LOOPS = 50


def audited(folder: Path, loops: int, days: int) -> float:
    """Seconds of one audit of a new site."""
    reference.lay_site(folder, loops, WIDE)
    for day in range(days):
        path = folder / "exports" / f"{day:03d}.csv"
        reference.write_wide_csv(path, loops, day, 1, EVERY_S)
    with open_store(f"sqlite:///{folder / 'site.db'}") as store:
        store.upgrade()
        site = open_site(folder, {})
        started = time.perf_counter()
        report = nightly.run(site, store, now=reference.START + timedelta(days=days + 1), cores=1)
        took = time.perf_counter() - started
    assert report.steps_new > 0
    return took


def one(loops: int, days: int) -> None:
    folder = Path(tempfile.mkdtemp())
    try:
        audited(folder / "small", 2, 1)
        before = peak_mb_of(os.getpid())
        took = audited(folder / "large", loops, days)
        say(json.dumps({"took_s": took, "more_mb": peak_mb_of(os.getpid()) - before}))
    finally:
        shutil.rmtree(folder)


def in_own_process(loops: int, days: int) -> dict[str, float]:
    command = [sys.executable, "-m", "bench.growth", "--one", str(loops), str(days)]
    done = subprocess.run(command, check=True, capture_output=True, text=True)
    found: dict[str, float] = json.loads(done.stdout)
    return found


def row(name: str, sizes: list[int], found: list[dict[str, float]]) -> None:
    took = np.array([part["took_s"] for part in found])
    slope = np.polyfit(np.log(sizes), np.log(took), 1)[0]
    times = ", ".join(f"{size}: {t:.1f} s" for size, t in zip(sizes, took, strict=True))
    memory = ", ".join(f"{part['more_mb']:.0f} MB" for part in found)
    say(f"| {name} | {times} | {slope:.2f} | {memory} |")


def main() -> None:
    parser = argparse.ArgumentParser(description=__doc__)
    parser.add_argument("--most-loops", type=int, default=800)
    parser.add_argument("--most-days", type=int, default=30)
    parser.add_argument("--one", type=int, nargs=2, help=argparse.SUPPRESS)
    asked = parser.parse_args()
    if asked.one is not None:
        one(*asked.one)
        return
    loops = [n for n in (50, 100, 200, 400, 800) if n <= asked.most_loops]
    days = [n for n in (1, 3, 10, 30) if n <= asked.most_days]
    say("| growing with | time | exponent | memory beside that of a small site |")
    say("| --- | --- | --- | --- |")
    row("loops, 1 day", loops, [in_own_process(n, 1) for n in loops])
    row(f"days, {FEW_LOOPS} loops", days, [in_own_process(FEW_LOOPS, n) for n in days])


if __name__ == "__main__":
    main()

"""The site's own files: site.toml, loops.csv, specs.csv.

In go the cases and the commissioning answers; out go the files' texts.
"""

from __future__ import annotations

import csv
import io
import math
from collections.abc import Mapping, Sequence
from datetime import date

import numpy as np

from .commissioning import BAND_PCT, Answer
from .exporting import historian_tag
from .operators import JOIN_S, window_s
from .plant import NUMERIC_MODE, SITE_NAME, UNITS, ZONE_NAME
from .simulate import Case

DEFAULT_WINDOW_S = (600, 3600)
INNER_JOIN_S = 300
"""An inner loop's setpoint moves every minute or so while its primary brings its variable home."""
_MIN_STEP_SHARE = 0.03
_NEVER_SHARE = 0.6

SITE_TOML = f"""\
# {SITE_NAME}: a demonstration. The plant, its loops and its people are invented, its record is
# simulated; what was done to each loop stands in truth.json.

[site]
name = "{SITE_NAME}"
timezone = "{ZONE_NAME}"

[store]
url = "sqlite:///site.db"

[register]
loops = "loops.csv"
specs = "specs.csv"

[[exports]]
name = "historian"
files = "exports/*.csv.gz"
format = "csv"
layout = "narrow"
time = "timestamp"
time_format = "iso8601"
timezone = "UTC"
tag = "tag"
value = "value"
quality = "quality"
quality_scheme = "words"
good = ["Good"]
uncertain = "bad"
pv_between = "hold"
output_between = "hold"
silence_s = {{ pv = 900, output = 900, sp = 90000, mode = 90000 }}

[windows]
before_s = {DEFAULT_WINDOW_S[0]}
after_s = {DEFAULT_WINDOW_S[1]}
join_s = {JOIN_S}

[standing]
steps = 10
days = 30

[nightly]
at = "02:15"
"""

LOOP_COLUMNS = (
    *("tag", "process_unit", "service", "kind", "pv", "sp", "output", "mode", "eu"),
    *("range_low", "range_high", "output_low", "output_high", "auto_modes", "criticality"),
    *("cascade_primary", "averaging", "before_s", "after_s", "join_s", "notes"),
)
SPEC_COLUMNS = (
    *("tag", "valid_from", "rise_time_s", "settling_time_s", "settling_band_pct"),
    *("overshoot_pct", "peak_time_s", "decay_ratio", "steady_state_error_eu", "min_step_eu"),
    *("set_by", "reason"),
)


def _csv(columns: Sequence[str], rows: Sequence[Mapping[str, object]]) -> str:
    text = io.StringIO()
    writer = csv.DictWriter(text, columns, restval="", lineterminator="\n")
    writer.writeheader()
    writer.writerows(rows)
    return text.getvalue()


def loops_csv(cases: Sequence[Case]) -> str:
    """The loop register."""
    return _csv(LOOP_COLUMNS, [_loop_row(case) for case in cases])


def _loop_row(case: Case) -> dict[str, object]:
    loop = case.loop
    own = window_s(loop)
    before, after = ("" if s == d else s for s, d in zip(own, DEFAULT_WINDOW_S, strict=True))
    modes = "1" if loop.tag in NUMERIC_MODE else "CAS" if loop.primary else "AUTO"
    pv, output, sp, mode = (historian_tag(loop, signal) for signal in range(4))
    return {
        "tag": loop.tag,
        "process_unit": f"{loop.unit} {UNITS[loop.unit]}",
        "service": loop.service,
        "kind": loop.kind,
        "pv": pv,
        "sp": sp,
        "output": output if loop.has_output else "",
        "mode": mode if loop.has_mode else "",
        "eu": loop.eu,
        "range_low": f"{loop.low:g}",
        "range_high": f"{loop.high:g}",
        "output_low": 0,
        "output_high": 100,
        "auto_modes": modes if loop.has_mode else "",
        "criticality": loop.criticality,
        "cascade_primary": loop.primary or "",
        "averaging": "yes" if loop.averaging else "no",
        "before_s": before,
        "after_s": after,
        "join_s": INNER_JOIN_S if loop.primary else "",
        "notes": "outer loop of a cascade" if loop.note == "outer" else "",
    }


def limits(case: Case, commissioned: Answer, rng: np.random.Generator) -> dict[str, float]:
    """The limits of one loop's spec: commissioned behaviour and 15 to 40 % room.

    To times come two scans, to the overshoot six points. The decay ratio has a limit where the step
    test showed a second peak. A loop that never met its spec was given the times of the design
    basis, three fifths of what it could do on the day.
    """
    loop, scan_s = case.loop, case.design.scan_s
    if loop.averaging:
        return {"steady_state_error_eu": _tidy(0.04 * loop.span)}
    room = float(rng.uniform(1.22, 1.40))
    share = _NEVER_SHARE if case.story.never_met else room
    slack_s = 0.0 if case.story.never_met else 2.0 * scan_s
    found = {
        "rise_time_s": _tidy((commissioned.rise_time_s or 0.0) * share + slack_s),
        "settling_time_s": _tidy((commissioned.settling_time_s or 0.0) * share + slack_s),
        "overshoot_pct": float(math.ceil(commissioned.overshoot_pct * room + 6.0)),
    }
    if commissioned.overshoot_pct > 8.0 and commissioned.peak_time_s:
        found["peak_time_s"] = _tidy(commissioned.peak_time_s * room + slack_s)
        if commissioned.decay_ratio is not None:
            found["decay_ratio"] = 0.3
    if loop.kind in ("temperature", "level") or case.story.fault:
        found["steady_state_error_eu"] = _tidy(0.01 * loop.span)
    return found


def _tidy(value: float) -> float:
    """Two significant figures, three where the first is a one: what a person would write down."""
    digits = 1 - math.floor(math.log10(value))
    return round(value, digits + 1 if value * 10.0 ** (digits - 1) < 2 else digits)


def specs_csv(cases: Sequence[Case], specs: Sequence[Mapping[str, float]], first: date) -> str:
    """The stored specs, in force from the first day."""
    rows = [
        {
            "tag": case.loop.tag,
            "valid_from": first.isoformat(),
            "settling_band_pct": "" if case.loop.averaging else f"{BAND_PCT:g}",
            **{name: f"{limit:g}" for name, limit in spec.items()},
            "min_step_eu": f"{_tidy(_MIN_STEP_SHARE * case.loop.span):g}",
            "set_by": "design basis" if case.story.never_met else "commissioning",
            "reason": "taken from the design basis" if case.story.never_met else "step test",
        }
        for case, spec in zip(cases, specs, strict=True)
    ]
    return _csv(SPEC_COLUMNS, rows)

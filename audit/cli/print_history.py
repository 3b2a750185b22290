"""One loop's history as text: register row, specs, standing, trend, days, steps."""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from zoneinfo import ZoneInfo

from rich.console import Console
from rich.text import Text

from audit import figures
from audit.cli.moments import local, local_day
from audit.cli.screen import STYLE, hanging, indented, table
from audit.records import LIMITED, ChangeKind, Group, Outcome, Quantity, Reason, StandingWord
from audit.reports import words
from audit.reports.contract import Json
from audit.reports.place import order_sentence

NEWEST_STEPS = 20
NEWEST_DAYS = 14


def print_history(console: Console, found: Json, everything: bool = False) -> None:
    """Print one loop's history; with ``everything`` all its steps and days, else the newest."""
    zone = ZoneInfo(found["timezone"])
    loop = found["loop"]
    _print_loop(console, found, zone)
    _print_specs(console, found["specs"], loop["eu"], zone)
    _print_standing(console, found["standing"], loop["eu"])
    _print_trend(console, found["standing"], loop["eu"], zone)
    _print_days(console, found["days"] if everything else found["days"][-NEWEST_DAYS:])
    _print_steps(console, found["steps"], loop, zone, everything)
    console.print()
    for caution in words.CAUTIONS:
        console.print(Text(caution, style="italic"))


def _heading(console: Console, text: str) -> None:
    console.print()
    console.print(Text(text, style="bold"))


def _print_loop(console: Console, found: Json, zone: ZoneInfo) -> None:
    loop = found["loop"]
    name = ", ".join(part for part in (loop["service"], loop["process_unit"]) if part)
    console.print(Text(f"{loop['tag']}: {name}" if name else loop["tag"], style="bold"))
    facts = [
        f"{loop['kind']} loop, criticality {loop['criticality']} (5 is the most critical)",
        _range(loop),
    ]
    if loop["averaging"]:
        facts.append("an averaging level")
    if loop["cascade_primary"]:
        facts.append(f"inner loop of {loop['cascade_primary']}")
    console.print("; ".join(facts) + ".")
    if loop["retired_at"]:
        console.print(f"Retired from the register {local(loop['retired_at'], zone)}.")
    console.print(
        f"Tags: process variable {loop['pv']}, setpoint {loop['sp']}, controller output "
        f"{loop['output'] or 'none'}, mode {loop['mode'] or 'none (counts as always automatic)'}."
    )
    console.print(
        f"A setpoint change is looked at from {figures.plain(loop['before_s'])} s before it to "
        f"{figures.plain(loop['after_s'])} s after it. Times are in {zone}."
    )


def _range(loop: Json) -> str:
    if loop["range_low"] is None or loop["range_high"] is None:
        return f"range not in the register, {loop['eu'] or 'no engineering unit'}"
    low, high = figures.plain(loop["range_low"]), figures.plain(loop["range_high"])
    return f"range {low} to {figures.with_unit(high, loop['eu'])}"


def _print_specs(console: Console, specs: list[Json], eu: str, zone: ZoneInfo) -> None:
    _heading(console, "Specs, newest first")
    if not specs:
        console.print("None: without limits nothing is judged.")
    for spec in reversed(specs):
        limits = [
            f"{words.name_of(code, spec['settling_band_pct'])} "
            f"{figures.with_unit(figures.plain(limit), _unit(code, eu))}"
            for code, limit in spec["limits"].items()
        ]
        least = spec["min_step_eu"]
        if least is not None:
            least = figures.with_unit(figures.plain(least), eu)
            limits.append(f"changes under {least} are not audited")
        band = figures.plain(spec["settling_band_pct"])
        by = ", ".join(part for part in (spec["set_by"], spec["reason"]) if part)
        console.print(f"from {local(spec['valid_from'], zone)}, version {spec['version']}: {by}")
        text = f"limits: {'; '.join(limits)}" if limits else "no limits"
        console.print(indented(f"{text}; settled is within ± {band} % of the change", 2))


def _unit(code: str, eu: str) -> str:
    return words.unit_of(Quantity(code), eu)


def _print_standing(console: Console, standing: Json, eu: str) -> None:
    _heading(console, "Standing")
    if not standing:
        console.print("None yet: no night has been audited with this loop in the register.")
        return
    word = StandingWord(standing["standing"])
    since = f", since about {standing['since']}" if standing["since"] else ""
    worse = f"; worse than it used to be{since}" if standing["degraded"] else ""
    line = Text(
        f"Night {standing['night']}: rank {standing['rank']}, {words.STANDING[word]}{worse}. "
        f"Usable changes in the period: {standing['usable_steps']}."
    )
    line.highlight_words([words.STANDING[word]], STYLE[word.value])
    console.print(line)
    console.print(f"Group: {words.GROUP[Group(standing['group'])]}.")
    for reason in standing["reasons"]:
        console.print(hanging(reason["text"], "- ", 2))
    band, criticality = standing["settling_band_pct"], standing["criticality"]
    console.print(order_sentence(standing["order"], criticality, eu, band))
    if standing["limits"]:
        _print_limits(console, standing["limits"], eu, band)


def _print_limits(
    console: Console, limits: Mapping[str, Json], eu: str, band: float | None
) -> None:
    console.print()
    rows = table("QUANTITY", "LIMIT", "MEDIAN (INTERVAL)", "CHANGES", "OUTCOME")
    for code, limit in limits.items():
        outcome, unit = Outcome(limit["outcome"]), _unit(code, eu)
        median = figures.interval(
            limit["median"],
            limit["low"],
            limit["high"],
            unit,
            limit=limit["limit"],
            at_least=limit["longer_than"],
        )
        rows.add_row(
            words.name_of(code, band),
            figures.with_unit(figures.plain(limit["limit"]), unit),
            median or "-",
            str(limit["steps"]),
            Text(words.OUTCOME[outcome], style=STYLE[outcome.value]),
        )
    console.print(rows)


def _print_trend(console: Console, standing: Json, eu: str, zone: ZoneInfo) -> None:
    trend: Mapping[str, Json] = standing.get("trend", {})
    if not trend:
        return
    _heading(console, "Against the loop's own baseline (its first usable changes)")
    rows = table("QUANTITY", "BASELINE (INTERVAL)", "RECENT (INTERVAL)", "GOT WORSE")
    for code, found in trend.items():
        unit = _unit(code, eu)
        recent = found["recent"], found["recent_low"], found["recent_high"]
        rows.add_row(
            words.name_of(code, standing["settling_band_pct"]),
            _baseline(found, unit),
            figures.interval(*recent, unit) or "-",
            _changed(found, zone),
        )
    console.print(rows)
    for code, found in trend.items():
        if found["note"]:
            name = words.name_of(code, standing["settling_band_pct"])
            console.print(indented(f"{name}: {found['note']}.", 2))


def _baseline(found: Json, unit: str) -> str:
    level = found["baseline"], found["baseline_low"], found["baseline_high"]
    text = figures.interval(*level, unit)
    if text is None:
        return "no baseline"
    return f"{text}, provisional" if found["provisional"] else text


def _changed(found: Json, zone: ZoneInfo) -> Text:
    """The estimated date; its range stands in the reasons."""
    if not found["changed"]:
        return Text("no")
    return Text(f"about {local_day(found['since'], zone)}", style="bold red")


def _print_days(console: Console, days: list[Json]) -> None:
    if not days:
        return
    _heading(console, "Day by day, newest first")
    numbers = ("AUTOMATIC", "OUTPUT SATURATED", "PV BAD OR MISSING", "CHANGES", "USABLE")
    rows = table("DAY", *numbers, numbers=numbers)
    for day in reversed(days):
        shares = (day[key] for key in ("automatic", "output_saturated", "pv_bad_or_missing"))
        rows.add_row(
            day["day"],
            *map(figures.percent, shares),
            str(day["changes"]),
            str(day["usable_changes"]),
        )
    console.print(rows)


def _print_steps(
    console: Console, steps: list[Json], loop: Json, zone: ZoneInfo, everything: bool
) -> None:
    shown = list(reversed(steps))
    if not everything:
        shown = shown[:NEWEST_STEPS]
    _heading(console, f"Setpoint changes, newest first ({len(shown)} of {len(steps)})")
    for step in shown:
        _print_step(console, step, loop, zone)
    if len(shown) < len(steps):
        console.print("Older ones: --all, or --since and --until.")


def _print_step(console: Console, step: Json, loop: Json, zone: ZoneInfo) -> None:
    eu = loop["eu"]
    before, after = figures.pair(step["sp_from"], step["sp_to"])
    kind = words.KIND[ChangeKind(step["kind"])]
    use = "usable" if step["usable"] else "set aside"
    console.print(
        f"{local(step['at'], zone, seconds=True)}  {before} → {figures.with_unit(after, eu)}  "
        f"{kind}, window {figures.plain(round(step['window_s'], 1))} s, {use}"
    )
    if step["set_aside"]:
        why = "; ".join(_why(code, step, loop) for code in step["set_aside"])
        console.print(indented(f"Not counted: {why}.", 2))
    judged = [q.value for q in LIMITED if q.value in step["verdicts"]]
    if step["usable"] and judged:
        parts = [_judged(code, step, loop) for code in judged if _is_known(step, code)]
        parts += [Text(text) for text in _missing(judged, step, loop)]
        console.print(indented(Text("; ").join(parts), 2))


def _why(code: str, step: Json, loop: Json) -> str:
    """A reason's words for one change: of what was cut, what cut it."""
    if code == Reason.CUT_SHORT.value:
        whole = step["window_s"] >= loop["after_s"]
        return f"{'the window ended' if whole else 'the next move came'} before it settled"
    return words.reason_of(code, ChangeKind(step["kind"]))


def _is_known(step: Json, code: str) -> bool:
    measured = step["measured"][code]
    return any(measured[key] is not None for key in ("value", "low", "high"))


def _judged(code: str, step: Json, loop: Json) -> Text:
    """One limited quantity of one step: value, interval, outcome, and why it is only a bound."""
    measured, verdict = step["measured"][code], step["verdicts"][code]
    outcome = Outcome(verdict["outcome"])
    value = figures.interval(
        measured["value"],
        measured["low"],
        measured["high"],
        _unit(code, loop["eu"]),
        limit=verdict["limit"],
    )
    why = verdict["why"] or measured["why"]
    text = Text(f"{words.name_of(code, step['settling_band_pct'])} {value}: ")
    text.append(words.OUTCOME[outcome], STYLE[outcome.value])
    if why and outcome is not Outcome.IN_SPEC:
        text.append(f" ({_why(why, step, loop)})")
    return text


def _missing(judged: Sequence[str], step: Json, loop: Json) -> list[str]:
    """The quantities without a number, those with the same reason together."""
    by_why: dict[str, list[str]] = {}
    for code in judged:
        if not _is_known(step, code):
            why = step["verdicts"][code]["why"] or step["measured"][code]["why"]
            names = by_why.setdefault(_why(why, step, loop), [])
            names.append(words.name_of(code, step["settling_band_pct"]))
    return [f"{', '.join(names)}: {why}" for why, names in by_why.items()]

"""One loop's history as text: register row, specs, standing, trend, days, steps."""

from __future__ import annotations

from collections.abc import Mapping
from zoneinfo import ZoneInfo

from rich.console import Console
from rich.text import Text

from audit.cli.moments import local, local_day
from audit.cli.screen import STYLE, indented, table
from audit.records import LIMITED, ChangeKind, Group, Outcome, Quantity, StandingWord
from audit.reports import figures, words
from audit.reports.contract import Json

NEWEST_STEPS = 20
NEWEST_DAYS = 14


def print_history(console: Console, found: Json, everything: bool = False) -> None:
    """Print one loop's history; with ``everything`` all its steps and days, else the newest."""
    zone = ZoneInfo(found["timezone"])
    loop = found["loop"]
    _print_loop(console, found, zone)
    _print_specs(console, found["specs"], loop["eu"], zone)
    _print_standing(console, found["standing"], loop["eu"])
    _print_trend(console, found["standing"].get("trend", {}), loop["eu"], zone)
    _print_days(console, found["days"] if everything else found["days"][-NEWEST_DAYS:])
    _print_steps(console, found["steps"], loop["eu"], zone, everything)
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
            f"{words.name_of(code)} {figures.with_unit(figures.plain(limit), _unit(code, eu))}"
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
        f"Night {standing['night']}: rank {standing['rank']}, {words.STANDING[word]}{worse}, from "
        f"{standing['usable_steps']} usable changes."
    )
    line.highlight_words([words.STANDING[word]], STYLE[word.value])
    console.print(line)
    console.print(f"Group: {words.GROUP[Group(standing['group'])]}.")
    for reason in standing["reasons"]:
        console.print(indented(f"- {reason['text']}", 2))
    _print_order(console, standing["order"], eu)
    if standing["limits"]:
        _print_limits(console, standing["limits"], eu)


def _print_order(console: Console, order: Json, eu: str) -> None:
    if order["value"] is None or order["quantity"] is None:
        return
    reference = figures.with_unit(figures.plain(order["reference"]), _unit(order["quantity"], eu))
    console.print(
        f"Order in the group: {order['value']:.3g} = criticality times distance "
        f"{order['distance']:.3g} of the {words.name_of(order['quantity'])} from its "
        f"{order['reference_kind']}, {reference}."
    )


def _print_limits(console: Console, limits: Mapping[str, Json], eu: str) -> None:
    rows = table("QUANTITY", "LIMIT", "MEDIAN (95 % INTERVAL)", "STEPS", "OUTCOME")
    for code, limit in limits.items():
        outcome = Outcome(limit["outcome"])
        rows.add_row(
            words.name_of(code),
            figures.with_unit(figures.plain(limit["limit"]), _unit(code, eu)),
            _median(limit, _unit(code, eu)),
            str(limit["steps"]),
            Text(words.OUTCOME[outcome], style=STYLE[outcome.value]),
        )
    console.print(rows)


def _median(limit: Json, unit: str) -> str:
    text = figures.interval(limit["median"], limit["low"], limit["high"], unit) or "-"
    return f"at least {text}" if limit["longer_than"] and limit["median"] is not None else text


def _print_trend(console: Console, trend: Mapping[str, Json], eu: str, zone: ZoneInfo) -> None:
    known = {code: found for code, found in trend.items() if found["baseline"] is not None}
    if not known:
        return
    _heading(console, "Against the loop's own baseline")
    rows = table("QUANTITY", "BASELINE (95 % INTERVAL)", "RECENT (95 % INTERVAL)", "CHANGED")
    for code, found in known.items():
        unit = _unit(code, eu)
        baseline = found["baseline"], found["baseline_low"], found["baseline_high"]
        recent = found["recent"], found["recent_low"], found["recent_high"]
        rows.add_row(
            words.name_of(code),
            f"{figures.interval(*baseline, unit)}{', provisional' if found['provisional'] else ''}",
            figures.interval(*recent, unit) or "-",
            _changed(found, zone),
        )
    console.print(rows)


def _changed(found: Json, zone: ZoneInfo) -> Text:
    if not found["changed"]:
        return Text("no")
    span = ""
    if found["since_low"] and found["since_high"]:
        low, high = local_day(found["since_low"], zone), local_day(found["since_high"], zone)
        span = f" ({low} to {high})"
    return Text(f"worse since {local_day(found['since'], zone)}{span}", style="bold red")


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
    console: Console, steps: list[Json], eu: str, zone: ZoneInfo, everything: bool
) -> None:
    shown = list(reversed(steps))
    if not everything:
        shown = shown[:NEWEST_STEPS]
    _heading(console, f"Setpoint changes, newest first ({len(shown)} of {len(steps)})")
    for step in shown:
        _print_step(console, step, eu, zone)
    if len(shown) < len(steps):
        console.print("Older ones: --all, or --since and --until.")


def _print_step(console: Console, step: Json, eu: str, zone: ZoneInfo) -> None:
    before, after = figures.pair(step["sp_from"], step["sp_to"])
    kind = words.KIND[ChangeKind(step["kind"])]
    use = "usable" if step["usable"] else "set aside"
    console.print(
        f"{local(step['at'], zone, seconds=True)}  {before} → {figures.with_unit(after, eu)}  "
        f"{kind}, window {figures.plain(round(step['window_s'], 1))} s, {use}"
    )
    if step["set_aside"]:
        why = "; ".join(f"{code}: {words.reason_of(code)}" for code in step["set_aside"])
        console.print(indented(why, 2))
    judged = [q.value for q in LIMITED if q.value in step["verdicts"]]
    if step["usable"] and judged:
        parts = [_judged(code, step, eu) for code in judged]
        console.print(indented(Text("; ").join(parts), 2))


def _judged(code: str, step: Json, eu: str) -> Text:
    """One limited quantity of one step: value, interval, outcome, or why there is none."""
    measured, verdict = step["measured"][code], step["verdicts"][code]
    outcome = Outcome(verdict["outcome"])
    value = figures.interval(measured["value"], measured["low"], measured["high"], _unit(code, eu))
    why = verdict["why"] or measured["why"]
    text = Text(f"{words.name_of(code)} {value or '-'}: ")
    text.append(words.OUTCOME[outcome], STYLE[outcome.value])
    if why and outcome is not Outcome.IN_SPEC:
        text.append(f" [{why}]")
    return text

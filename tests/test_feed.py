"""feed: what is said of exports that stop, tags gone flat or silent, loops without data, clocks.

Limits of time and share are common practice, no source; each is tried on both sides.
"""

from __future__ import annotations

from collections.abc import Iterable, Mapping, Sequence
from dataclasses import replace
from datetime import UTC, date, datetime, timedelta

import pytest

from audit import feed
from audit.feed import Facts
from audit.records import (
    DAY_US,
    SECOND_US,
    Between,
    DayRecord,
    ExportSource,
    Loop,
    Measured,
    Reading,
    Reason,
    Role,
    TagState,
    Windows,
    to_us,
)

NIGHT = date(2026, 3, 14)
NOW = datetime(2026, 3, 14, 1, 15, tzinfo=UTC)
NOW_US = to_us(NOW)
HOUR_US = 3600 * SECOND_US
WINDOWS = Windows(120 * SECOND_US, 3600 * SECOND_US, 60 * SECOND_US)


def loop(number: int) -> Loop:
    tag = f"FIC-{number}"
    return Loop(
        tag,
        *(f"{tag}.PV", f"{tag}.SP", WINDOWS),
        output=f"{tag}.OP",
        mode=f"{tag}.MODE",
        auto_modes=("AUTO",),
        eu="m3/h",
    )


def full_day(day: date) -> DayRecord:
    return DayRecord(day, DAY_US, DAY_US, DAY_US, 0, DAY_US, 0)


def days(back: Iterable[int] = range(1, 16)) -> list[DayRecord]:
    return [full_day(NIGHT - timedelta(days=n)) for n in back]


def state(age_h: float = 0.0, held_h: float = 0.0, value: float = 50.25) -> TagState:
    """A tag whose newest sample is so old, and whose value held for so long up to it."""
    newest_us = NOW_US - round(age_h * HOUR_US)
    return TagState(newest_us, value, newest_us - round(held_h * HOUR_US))


AUTO, MANUAL = state(held_h=200.0, value=1.0), state(held_h=200.0, value=0.0)
LIVE = {Role.PV: state(), Role.SP: state(held_h=100.0), Role.OUTPUT: state(), Role.MODE: AUTO}


def facts(count: int = 4, **changed: Mapping[Role, TagState]) -> Facts:
    """A feed of some loops that is alive, but for the states given by tag (FIC_1)."""
    loops = [loop(number) for number in range(1, count + 1)]
    named = {tag: "dcs" for one in loops for tag in one.tags().values()}
    states: dict[str, Mapping[Role, TagState]] = {one.tag: LIVE for one in loops}
    states |= {tag.replace("_", "-"): {**LIVE, **own} for tag, own in changed.items()}
    return Facts(
        loops, named, NOW, NOW, NIGHT, {one.tag: days() for one in loops}, states, {}, (SOURCE,)
    )


SOURCE = ExportSource("dcs", "*.csv", reading=Reading(output_between=Between.LINEAR))
HELD = ExportSource("dcs", "*.csv", reading=Reading(pv_between=Between.HOLD))


def said(found: Facts) -> str:
    return " ".join(feed.sentences(found))


def test_a_feed_that_is_alive_says_nothing() -> None:
    assert feed.sentences(facts()) == ()


def test_without_any_sample_nothing_else_is_said() -> None:
    assert len(feed.sentences(replace(facts(), newest=None, named={}))) == 1


@pytest.mark.parametrize(("hours", "stopped"), [(36.0, False), (36.1, True)])
def test_exports_that_stopped(hours: float, stopped: bool) -> None:
    later = replace(facts(), asked=NOW + timedelta(hours=hours))
    assert (
        "The exports have stopped: the newest good sample is 36 h old" in said(later)
    ) is stopped


def test_loops_no_export_names_are_named_once() -> None:
    found = facts()
    named = {tag: source for tag, source in found.named.items() if tag != "FIC-2.SP"}
    found = replace(found, named=named, days={**found.days, "FIC-2": []})
    assert feed.sentences(found) == ("No export names the tags of 1 loop: FIC-2.",)


def test_no_more_than_ten_loops_are_named() -> None:
    found = said(replace(facts(13), named={}))
    assert "13 loops: FIC-1, FIC-10, FIC-11" in found
    assert found.count("FIC-") == 10
    assert "and 3 more." in found


# loops with data


def test_a_loop_without_data_for_two_days_is_named() -> None:
    found = facts()
    bad = [replace(day, pv_bad_us=DAY_US) for day in days([1, 2])]
    found = replace(found, days={**found.days, "FIC-3": [*bad, *days(range(3, 16))]})
    assert said(found) == "No good process variable for two days from 1 loop: FIC-3."


def lost(count: int, of: int, last: Iterable[int] = (1,)) -> Facts:
    """So many loops without data on the last days."""
    found = facts(of)
    missing = {f"FIC-{n}": days(set(range(1, 16)) - set(last)) for n in range(1, count + 1)}
    return replace(found, days={**found.days, **missing})


@pytest.mark.parametrize(
    ("count", "of", "falls"),
    [(3, 20, True), (2, 4, False), (3, 30, False), (4, 39, True), (3, 29, True)],
)
def test_a_share_of_loops_with_data_that_falls(count: int, of: int, falls: bool) -> None:
    """By more than 10 points, and at least 3 loops."""
    assert ("Fewer loops with data" in said(lost(count, of))) is falls


def test_the_fall_is_told_in_numbers() -> None:
    assert said(lost(3, 20)) == (
        "Fewer loops with data: 17 of 20 (85 %) had a good process variable on 2026-03-13, where "
        "20 (100 %) is the median of the 14 days before. Without: FIC-1, FIC-2, FIC-3."
    )


def test_loops_that_never_had_data_do_not_make_it_fall() -> None:
    assert "Fewer loops" not in said(lost(5, 20, last=range(1, 16)))


@pytest.mark.parametrize(("before", "falls"), [(2, False), (3, True)])
def test_a_site_s_first_days_have_nothing_to_fall_from(before: int, falls: bool) -> None:
    found = lost(5, 20)
    first = NIGHT - timedelta(days=before + 1)
    young = {tag: [day for day in own if day.day >= first] for tag, own in found.days.items()}
    assert ("Fewer loops" in said(replace(found, days=young))) is falls


# tags gone flat


@pytest.mark.parametrize(("hours", "stuck"), [(23.9, False), (24.0, True)])
def test_a_process_variable_that_does_not_move(hours: float, stuck: bool) -> None:
    found = said(facts(FIC_2={Role.PV: state(held_h=hours)}))
    assert ("The process variable of 1 loop: FIC-2 (50.25 m3/h for 24 h" in found) is stuck
    assert bool(found) is stuck


@pytest.mark.parametrize(("hours", "stuck"), [(71.9, False), (72.0, True)])
def test_by_exception_a_value_may_hold_for_longer(hours: float, stuck: bool) -> None:
    found = replace(facts(FIC_2={Role.PV: state(held_h=hours)}), exports=(HELD,))
    assert ("FIC-2 (50.25 m3/h for 72 h" in said(found)) is stuck


def test_setpoint_and_mode_hold_by_nature() -> None:
    held = {Role.SP: state(held_h=900.0), Role.MODE: state(held_h=900.0, value=1.0)}
    assert feed.sentences(facts(FIC_1=held)) == ()


def test_a_parked_loop_says_so_in_its_own_place() -> None:
    flat = {Role.PV: state(held_h=50.0), Role.OUTPUT: state(held_h=50.0)}
    assert feed.sentences(facts(FIC_1={**flat, Role.MODE: MANUAL})) == ()
    assert "FIC-1" in said(facts(FIC_1=flat))


def test_only_the_time_in_automatic_counts() -> None:
    just = {Role.PV: state(held_h=50.0), Role.MODE: state(held_h=23.0, value=1.0)}
    assert feed.sentences(facts(FIC_1=just)) == ()


@pytest.mark.parametrize(
    ("value", "told"), [(37.5, True), (0.0, False), (99.95, False), (104.0, False)]
)
def test_an_output_that_does_not_move_but_at_its_limit(value: float, told: bool) -> None:
    held = {Role.OUTPUT: state(held_h=30.0, value=value)}
    found = said(facts(FIC_4=held))
    assert ("The controller output of 1 loop in automatic" in found) is told
    assert bool(found) is told


def test_half_of_the_process_variables_flat_is_the_archive() -> None:
    flat = {Role.PV: state(held_h=30.0)}
    found = said(facts(6, FIC_1=flat, FIC_2=flat, FIC_3=flat))
    assert "The archive looks flat: the process variables of 3 of 6 loops" in found
    assert "stuck sensor" in said(facts(7, FIC_1=flat, FIC_2=flat, FIC_3=flat))
    assert "stuck sensor" in said(facts(2, FIC_1=flat, FIC_2=flat))


def test_an_earlier_list_is_told_what_was_so_then() -> None:
    """Flat since 60 h, asked about 30 h ago: for 30 h at that time; about 40 h ago: for 20 h."""
    found = facts(FIC_1={Role.PV: state(held_h=60.0)})
    then = NOW - timedelta(hours=30)
    assert "FIC-1 (50.25 m3/h for 30 h" in said(replace(found, asked=then, newest=then))
    then = NOW - timedelta(hours=40)
    assert feed.sentences(replace(found, asked=then, newest=then)) == ()


# tags gone silent


@pytest.mark.parametrize(
    ("role", "hours", "told"),
    [
        (Role.PV, 24.2, False),
        (Role.PV, 24.3, True),
        (Role.SP, 48.9, False),
        (Role.SP, 49.1, True),
        (Role.OUTPUT, 24.3, True),
        (Role.MODE, 49.1, True),
    ],
)
def test_a_tag_without_samples_for_a_day_beyond_its_declared_silence(
    role: Role, hours: float, told: bool
) -> None:
    """Declared by default: 900 s, and 90 000 s of setpoint and mode."""
    old = state(age_h=hours, held_h=5.0, value=1.0)
    assert ("FIC-1 (" in said(facts(FIC_1={role: old}))) is told


def test_what_went_silent_is_named_with_its_time() -> None:
    found = facts(FIC_2={Role.PV: state(age_h=30.0, held_h=99.0), Role.OUTPUT: state(age_h=26.0)})
    assert feed.sentences(found) == (
        "No good sample any more, though others keep coming, from tags of 1 loop (for how long, "
        "newest good sample): FIC-2 (process variable, 30 h, 2026-03-12 19:15 UTC; "
        "controller output, 26 h, 2026-03-12 23:15 UTC). Has the tag got another name, or has its "
        "transmitter failed?",
    )


def test_a_silent_process_variable_is_not_named_twice() -> None:
    found = facts(FIC_2={Role.PV: state(age_h=90.0)})
    found = replace(found, days={**found.days, "FIC-2": days(range(4, 16))})
    assert said(found).count("FIC-2") == 1


def test_exports_that_stopped_for_all_leave_no_tag_silent() -> None:
    later = replace(facts(), asked=NOW + timedelta(hours=90))
    assert len(feed.sentences(later)) == 1


# clocks


def reaction(at_s: float, sample_s: float = 1.0) -> Measured:
    return Measured(at_s, at_s - sample_s, at_s + sample_s, "direct")


def clocks(reactions: Sequence[Measured]) -> str:
    return said(replace(facts(), reactions={"FIC-1": reactions}))


def test_outputs_that_react_before_their_setpoints_are_told_with_the_time() -> None:
    found = clocks([reaction(-12.0)] * 4 + [reaction(-11.0)] * 2 + [reaction(0.0)] * 4)
    assert found == (
        "The clocks of setpoint and controller output differ in 1 loop, the output is stamped "
        "before the setpoint it answers: FIC-1 by about 12 s (11 to 13), in 6 changes. If it "
        "is the setpoint's that is wrong, the times counted from it are off by as much; have both "
        "sources' clocks checked."
    )


UNTOLD = Measured.missing(Reason.NOISY)


@pytest.mark.parametrize(
    ("reactions", "told"),
    [
        ([reaction(-12.0)] * 5 + [reaction(0.0)] * 5, True),
        ([reaction(-12.0)] * 4 + [reaction(0.0)] * 6, False),
        ([reaction(-1.0)] * 10, False),
        ([reaction(-1.1)] * 10, True),
        ([reaction(12.0)] * 10, False),
        ([reaction(-12.0)] * 5 + [reaction(0.0)] * 10, False),
        ([*[reaction(-12.0)] * 5, *[UNTOLD] * 5], True),
        ([reaction(float(-at)) for at in (4, 9, 15, 22, 30, 37, 44, 51)], False),
        ([reaction(float(-at)) for at in (10, 11, 12, 13, 14)], True),
        ([UNTOLD] * 10, False),
        ([], False),
    ],
    ids=[
        *("half of ten", "fewer than half", "one sample is no difference", "more than one sample"),
        *("late is no clock's", "only the last ten", "untold ones aside", "by different times"),
        *("a clock that wanders", "none told", "none"),
    ],
)
def test_clocks_differ_only_where_enough_changes_agree(
    reactions: Sequence[Measured], told: bool
) -> None:
    assert ("clocks" in clocks(reactions)) is told


def test_an_inner_loop_s_setpoint_moves_too_often_to_tell() -> None:
    found = replace(facts(), reactions={"FIC-1": [reaction(-12.0)] * 10})
    inner = replace(found.loops[0], cascade_primary="TIC-2")
    assert "clocks" in said(found)
    assert feed.sentences(replace(found, loops=[inner, *found.loops[1:]])) == ()

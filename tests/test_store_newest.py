"""The newest word on each loop: one quantity of its last steps, on both databases."""

from __future__ import annotations

from dataclasses import replace

import store_samples as some
from sqlalchemy import update
from store_samples import HOUR_US, NOW, T0, measured_step, result

from audit.records import ChangeKind, Measured, MeasuredStep, Quantity, Reason
from audit.store import Store, writes
from audit.store.newest import newest_measured
from audit.store.tables import MeasurementRow

REACTION = Quantity.OUTPUT_REACTION


def step(hour: int, found: Measured, kind: ChangeKind = ChangeKind.STEP) -> MeasuredStep:
    one = measured_step(T0 + hour * HOUR_US)
    response = replace(one.step.response, measured={**one.step.response.measured, REACTION: found})
    change = replace(one.step.change, kind=kind)
    return replace(one, step=replace(one.step, change=change, response=response))


def early(by_s: float) -> Measured:
    return Measured(-by_s, -by_s - 1.0, -by_s + 1.0, "direct")


def test_the_newest_plain_steps_of_each_loop_in_time_order(store: Store) -> None:
    untold = Measured.missing(Reason.NOISY)
    with some.writing(store) as session:
        some.enter(session, "FIC-101", "FIC-102", "FIC-103")
        steps = [step(hour, early(hour)) for hour in range(1, 8)]
        ramp = step(8, early(8), ChangeKind.RAMP)
        writes.save_loop(session, result(*steps, ramp, tag="FIC-101"), NOW)
        writes.save_loop(session, result(step(1, untold), tag="FIC-102"), NOW)
    until_us = T0 + 8 * HOUR_US  # the seventh ends there: its window is an hour
    with store.read() as session:
        found = newest_measured(session, ["FIC-101", "FIC-102", "FIC-103"], REACTION, until_us, 3)
    assert found == {
        "FIC-101": [early(4), early(5), early(6)],
        "FIC-102": [untold],
        "FIC-103": [],
    }


def test_steps_superseded_or_measured_before_it_was_known_are_left_out(store: Store) -> None:
    with some.writing(store) as session:
        some.enter(session, "FIC-101")
        writes.save_loop(session, result(step(1, early(1)), step(2, early(2))), NOW)
        writes.save_loop(session, result(step(2, early(9))), NOW)
        old = {"rise_time_s": "gap"}
        session.execute(
            update(MeasurementRow).where(MeasurementRow.at_us == T0 + HOUR_US).values(measured=old)
        )
    with store.read() as session:
        found = newest_measured(session, ["FIC-101"], REACTION, T0 + 9 * HOUR_US, 10)
    assert found == {"FIC-101": [early(9)]}

"""Steps, curves, edges and days in the store: written, replaced, withdrawn, read back equal."""

from __future__ import annotations

import base64
import pickle
from collections.abc import Iterator
from contextlib import contextmanager
from dataclasses import replace
from datetime import date

import pytest
import store_samples as some
from sqlalchemy import event, insert, text, update
from sqlalchemy.exc import IntegrityError
from store_samples import FIRST_BLOB, HOUR_US, NOW, T0, measured_step, result, same_record

from audit.errors import UnknownLoop
from audit.records import LoopResult, MeasuredStep, PastStep, Quantity
from audit.store import Store, queries, writes
from audit.store.entries import SavedLoop, StoredStep
from audit.store.tables import CurveRow, MeasurementRow

TAG = "FIC-101"


@pytest.fixture
def site(store: Store) -> Store:
    """A store with two loops in it."""
    with some.writing(store) as session:
        some.enter(session, TAG, "FIC-102")
    return store


def save(store: Store, loop_result: LoopResult) -> SavedLoop:
    with some.writing(store) as session:
        return writes.save_loop(session, loop_result, NOW)


@contextmanager
def counted(store: Store) -> Iterator[list[str]]:
    """The statements sent to the database inside the block; a bulk insert is one."""
    sent: list[str] = []

    def note(*arguments: object) -> None:
        sent.append(str(arguments[2]))

    event.listen(store._engine, "before_cursor_execute", note)
    try:
        yield sent
    finally:
        event.remove(store._engine, "before_cursor_execute", note)


def past_of(one: MeasuredStep) -> PastStep:
    change, response = one.step.change, one.step.response
    return PastStep(
        change.at_us,
        change.window_end_us,
        change.sp_from,
        change.sp_to,
        change.kind,
        one.step.usable,
        one.step.set_aside,
        response.measured,
        response.spec_band_pct,
    )


def test_a_step_comes_back_as_it_was_measured(site: Store) -> None:
    one = measured_step()
    assert save(site, result(one)) == SavedLoop(new=1)
    with site.read() as session:
        assert queries.history(session, TAG) == [one.step]
        assert queries.past_steps(session, TAG) == [past_of(one)]
        kept = queries.curve(session, TAG, T0)
        assert kept is not None
        assert same_record(kept, one.curve)
        assert queries.curve(session, TAG, T0 + 1) is None
        assert queries.curve(session, "FIC-102", T0) is None
        assert queries.history(session, "FIC-999") == []


def test_what_was_measured_is_the_same_mapping_before_and_after_it_is_read(site: Store) -> None:
    save(site, result(measured_step()))
    with site.read() as session:
        (past,) = queries.past_steps(session, TAG)
    sent = pickle.loads(pickle.dumps(past))
    assert sent == past == past_of(measured_step())
    assert sent.measured[Quantity.RISE_TIME] == some.measured()[Quantity.RISE_TIME]
    assert list(past.measured) == list(Quantity)
    assert "rise_time_s" in repr(past)
    assert isinstance(past.measured[Quantity.OUTPUT_REVERSALS].value, int)


def test_saving_the_same_again_changes_nothing(site: Store) -> None:
    save(site, result(measured_step()))
    assert save(site, result(measured_step())) == SavedLoop()
    assert rows(site, "measurement") == 1


def first_encoded(store: Store) -> MeasuredStep:
    """A step as the first version stored it: digest, fingerprint and curve are what it wrote."""
    kinds = (Quantity.RISE_TIME, Quantity.SETTLING_TIME, Quantity.DECAY_RATIO)
    one = measured_step()
    response = replace(one.step.response, measured={q: some.measured()[q] for q in kinds})
    one = replace(one, step=replace(one.step, response=response), curve=some.curve(T0, count=8))
    save(store, result(one))
    with some.writing(store) as session:
        session.execute(
            update(CurveRow).values(
                digest=bytes.fromhex("367b5606eee3987229a29f61c4b434f7"),
                data=base64.b85decode(FIRST_BLOB),
            )
        )
        fingerprint = bytes.fromhex("c64722ffedd0f618f889477104377991")
        session.execute(update(MeasurementRow).values(fingerprint=fingerprint))
    return one


def test_a_step_stored_in_the_first_encoding_is_known_again(site: Store) -> None:
    one = first_encoded(site)
    assert save(site, result(one)) == SavedLoop()
    assert (rows(site, "measurement"), rows(site, "curve")) == (1, 1)
    with site.read() as session:
        kept = queries.curve(session, TAG, T0)
    assert kept is not None
    assert same_record(kept, one.curve)


def test_a_step_of_the_first_encoding_that_differs_rests_on_the_same_curve(site: Store) -> None:
    one = first_encoded(site)
    other = replace(one, step=replace(one.step, usable=False))
    assert save(site, result(other)) == SavedLoop(changed=1)
    assert save(site, result(other)) == SavedLoop()
    assert (rows(site, "measurement"), rows(site, "curve")) == (2, 1)
    cut = replace(other, curve=some.curve(T0, count=7))
    assert save(site, result(cut)) == SavedLoop(changed=1)
    assert save(site, result(cut)) == SavedLoop()
    assert (rows(site, "measurement"), rows(site, "curve")) == (3, 2)


@pytest.mark.parametrize(
    ("other", "curves"),
    [
        (measured_step(value=12.0), 1),
        (measured_step(seed=2), 2),
        (measured_step(depends=(T0 - HOUR_US, None)), 1),
        (measured_step(spec_version=2), 1),
    ],
    ids=["value", "curve", "dependence", "verdict"],
)
def test_a_step_that_differs_supersedes_and_the_old_one_stays(
    site: Store, other: MeasuredStep, curves: int
) -> None:
    with some.writing(site) as session:
        writes.enter_register(
            session,
            [some.loop(), some.loop("FIC-102")],
            [some.spec(rise_s=13.0)],
            some.HASHES | {"specs": "p2"},
            NOW,
        )
    save(site, result(measured_step()))
    assert save(site, result(other)) == SavedLoop(changed=1)
    with site.read() as session:
        assert queries.history(session, TAG) == [other.step]
        assert queries.step_counts(session) == {"current": 1, "usable": 1, "measurements": 2}
    assert rows(site, "measurement") == 2
    assert rows(site, "verdict") == 4
    assert rows(site, "curve") == curves
    assert rows(site, "measurement WHERE superseded_at IS NOT NULL AND number = 1") == 1


def test_a_withdrawn_step_is_superseded_without_successor_and_can_return(site: Store) -> None:
    save(site, result(measured_step()))
    gone = LoopResult(TAG, withdrawn=(T0, T0 + 5))
    assert save(site, gone) == SavedLoop(withdrawn=1)
    assert save(site, gone) == SavedLoop()
    with site.read() as session:
        assert queries.history(session, TAG) == []
        assert queries.past_steps(session, TAG) == []
        assert queries.curve(session, TAG, T0) is None
        assert queries.kept(session, TAG, T0, T0) == []
    assert save(site, result(measured_step())) == SavedLoop(new=1)
    assert (rows(site, "measurement"), rows(site, "curve")) == (2, 1)


def test_two_current_measurements_of_a_step_are_refused_by_the_database(site: Store) -> None:
    save(site, result(measured_step()))
    with some.writing(site) as session:
        stored = session.execute(text("SELECT * FROM measurement")).mappings().one()
        second = dict(stored) | {"number": 2, "measured_at": NOW, "measured": {}}
        second |= {"moves": [], "change_set_aside": [], "set_aside": []}
        second |= {"complete": True, "usable": True}
        superseded = second | {"superseded_at": NOW}
        session.execute(insert(MeasurementRow), [superseded])
        with pytest.raises(IntegrityError):
            session.execute(insert(MeasurementRow), [second | {"number": 3}])
        session.rollback()


def test_a_verdict_rests_on_a_stored_spec_version(site: Store) -> None:
    with pytest.raises(IntegrityError):
        save(site, result(measured_step(spec_version=7)))
    assert rows(site, "measurement") == 0


def test_a_loop_nobody_registered_is_refused(site: Store) -> None:
    with pytest.raises(UnknownLoop, match="FIC-999"):
        save(site, result(measured_step(), tag="FIC-999"))


def test_past_steps_end_before_the_cut_off(site: Store) -> None:
    steps = [measured_step(T0 + n * HOUR_US) for n in range(3)]
    save(site, result(*reversed(steps)))
    save(site, result(steps[0], tag="FIC-102"))
    end = steps[1].step.change.window_end_us
    with site.read() as session:
        at = [one.at_us for one in queries.past_steps(session, TAG)]
        assert at == [T0, T0 + HOUR_US, T0 + 2 * HOUR_US]
        assert len(queries.past_steps(session, TAG, end)) == 1
        assert len(queries.past_steps(session, TAG, end + 1)) == 2
        many = queries.past_steps_many(session, [TAG, "FIC-102", "FIC-999"], end + 1, T0 + 1)
        assert many == {TAG: [past_of(steps[1])], "FIC-102": [], "FIC-999": []}
        assert queries.history(session, TAG, T0 + 1, T0 + HOUR_US) == [steps[1].step]


def test_touched_are_the_steps_that_rest_on_samples_of_a_span(site: Store) -> None:
    at = [T0 + n * 10 * HOUR_US for n in range(4)]
    save(
        site,
        result(
            measured_step(at[0]),
            measured_step(at[1], depends=(None, at[1] + 5)),
            measured_step(at[2], depends=(at[2] - 5, None)),
            measured_step(at[3]),
        ),
    )

    def touched(from_us: int, to_us: int) -> list[int]:
        with site.read() as session:
            return [at.index(one.at_us) for one in queries.touched(session, TAG, from_us, to_us)]

    assert touched(at[0] - HOUR_US, at[0] - HOUR_US) == [0, 1]
    assert touched(at[0] - HOUR_US - 1, at[0] - HOUR_US - 1) == [1]
    assert touched(at[1] + 6, at[2] - 6) == []
    assert touched(at[2] + 5 * HOUR_US, at[2] + 6 * HOUR_US) == [2]
    assert touched(at[3] + HOUR_US, at[3] + 9 * HOUR_US) == [2, 3]
    with site.read() as session:
        (first, _) = queries.touched(session, TAG, at[0], at[0])
    assert first == StoredStep(at[0], at[0] - HOUR_US, at[0] + HOUR_US, at[0] + HOUR_US)


def test_kept_are_the_slices_that_overlap_a_span(site: Store) -> None:
    early, late = measured_step(T0), measured_step(T0 + 10 * HOUR_US)
    edge = some.edge(T0 + 5 * HOUR_US)
    save(site, LoopResult(TAG, (early, late), edges=(edge,)))

    def kept(from_us: int, to_us: int) -> list[str]:
        names = {"early": early.curve, "late": late.curve, "edge": edge.record}
        with site.read() as session:
            found = queries.kept(session, TAG, from_us, to_us)
        return [name for one in found for name, was in names.items() if same_record(one, was)]

    # a curve's first sample is its setpoint's, an hour before the step
    assert kept(0, T0 + 20 * HOUR_US) == ["early", "edge", "late"]
    assert kept(0, T0 - HOUR_US) == ["early"]
    assert kept(0, T0 - HOUR_US - 1) == []
    assert kept(T0 + 4 * HOUR_US, T0 + 5 * HOUR_US) == ["edge"]
    assert kept(T0 + 9 * HOUR_US, T0 + 9 * HOUR_US) == ["late"]


def test_edges_are_replaced_and_dropped_by_border_and_side(site: Store) -> None:
    one, other = some.edge(T0, "to"), some.edge(T0, "from")
    save(site, LoopResult(TAG, edges=(one, other)))
    renewed = some.edge(T0, "to", seed=9)
    save(site, LoopResult(TAG, edges=(renewed,), dropped_edges=((T0, "from"), (5, "to"))))
    with site.read() as session:
        assert queries.edges(session, TAG) == [(T0, "to")]
        (record,) = queries.kept(session, TAG, T0 - HOUR_US, T0)
        assert same_record(record, renewed.record)
        assert queries.edges(session, "FIC-102") == []


def test_days_are_replaced_by_day(site: Store) -> None:
    save(site, LoopResult(TAG, days=(some.day(1), some.day(2), some.day(3))))
    save(site, LoopResult(TAG, days=(some.day(2, auto_s=1),)))
    save(site, LoopResult("FIC-102", days=(some.day(3),)))
    second, third = date(2026, 3, 2), date(2026, 3, 3)
    with site.read() as session:
        kept = queries.kept_days(session, TAG, second, third)
        assert [(one.record, one.runs) for one in kept] == [
            (some.day(2, auto_s=1).record, some.day(2).runs),
            (some.day(3).record, some.day(3).runs),
        ]
        assert len(queries.day_records(session, TAG, date.min, date.max)) == 3
        many = queries.day_records_many(session, [TAG, "FIC-102", "FIC-999"], third, third)
        assert many == {TAG: [some.day(3).record], "FIC-102": [some.day(3).record], "FIC-999": []}


def test_minus_zero_is_zero_on_both_databases(site: Store) -> None:
    one = measured_step()
    change = replace(one.step.change, sp_from=-0.0)
    save(site, result(replace(one, step=replace(one.step, change=change))))
    with site.read() as session:
        assert repr(queries.history(session, TAG)[0].change.sp_from) == "0.0"


def test_many_steps_are_saved_and_read_with_few_statements(site: Store) -> None:
    steps = [measured_step(T0 + n * HOUR_US) for n in range(250)]
    with some.writing(site) as session:
        with counted(site) as sent:
            saved = writes.save_loop(session, result(*steps), NOW)
        assert saved == SavedLoop(new=250)
        assert len(sent) <= 6
        with counted(site) as sent:
            assert writes.save_loop(session, result(*steps), NOW) == SavedLoop()
        assert len(sent) <= 2
        with counted(site) as sent:
            found = queries.past_steps_many(session, [TAG, "FIC-102"], None)
        assert [len(one) for one in found.values()] == [250, 0]
        assert len(sent) == 1


def rows(store: Store, what: str) -> int:
    """How many rows, by plain SQL."""
    with store.read() as session:
        return int(session.execute(text(f"SELECT count(*) FROM {what}")).scalar_one())

"""Site, register and specs in the store: what a changed file changes, and what stays."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import replace
from datetime import datetime, timedelta

import pytest
import store_samples as some

from audit.errors import StoreUnready, UnknownLoop
from audit.records import Loop, Quantity, Spec
from audit.store import Store, queries, writes
from audit.store.entries import RegisterChanges


def enter(
    store: Store,
    loops: Sequence[Loop],
    specs: Sequence[Spec] = (),
    version: int = 1,
    now: datetime = some.NOW,
    accept_older: bool = False,
) -> RegisterChanges:
    hashes = {kind: f"{kind} {version}" for kind in some.HASHES}
    with some.writing(store) as session:
        return writes.enter_register(session, loops, specs, hashes, now, accept_older)


def test_the_register_comes_back_as_it_was_entered(store: Store) -> None:
    plain = Loop("TIC-102", "T.PV", "T.SP", some.WINDOWS)
    inner = replace(some.loop("FIC-9"), cascade_primary="TIC-102", averaging=True)
    loops = [plain, some.loop(), inner]
    assert enter(store, loops) == RegisterChanges(loops_new=3)
    with store.read() as session:
        stored = queries.loops(session)
    assert [one.loop for one in stored] == sorted(loops, key=lambda one: one.tag)
    assert {(one.version, one.entered_at, one.retired_at) for one in stored} == {
        (1, some.NOW, None)
    }


def test_the_same_files_again_change_nothing(store: Store) -> None:
    enter(store, [some.loop()], [some.spec()])
    again = enter(store, [some.loop()], [some.spec()], now=some.LATER)
    assert again == RegisterChanges()
    with store.read() as session:
        assert queries.loops(session)[0].entered_at == some.NOW
        assert [one.version for one in queries.specs(session)["FIC-101"]] == [1]


def test_a_changed_row_is_a_new_version(store: Store) -> None:
    enter(store, [some.loop(), some.loop("FIC-102")])
    reranged = replace(some.loop(), range_high=200.0)
    changes = enter(store, [reranged, some.loop("FIC-102")], version=2, now=some.LATER)
    assert changes == RegisterChanges(loops_changed=1)
    with store.read() as session:
        first, second = queries.loops(session)
    assert (first.loop, first.version, first.entered_at) == (reranged, 2, some.LATER)
    assert second.version == 1


def test_a_retired_loop_keeps_its_past_and_can_come_back(store: Store) -> None:
    enter(store, [some.loop(), some.loop("FIC-102")], [some.spec()])
    with some.writing(store) as session:
        writes.save_loop(session, some.result(some.measured_step()), some.NOW)
    kept = [some.loop("FIC-102")]
    gone = enter(store, kept, version=2, now=some.LATER)
    assert gone == RegisterChanges(loops_retired=1, specs_withdrawn=1)
    assert enter(store, kept, version=2, now=some.LATER) == RegisterChanges()
    with store.read() as session:
        assert [one.loop.tag for one in queries.loops(session)] == ["FIC-102"]
        retired = queries.loop(session, "FIC-101")
        assert retired is not None
        assert retired.retired_at == some.LATER
        assert len(queries.loops(session, include_retired=True)) == 2
        assert queries.history(session, "FIC-101") == [some.step()]
    back = enter(store, [some.loop(), *kept], version=3)
    assert back == RegisterChanges(loops_back=1)
    with store.read() as session:
        returned = queries.loop(session, "FIC-101")
        assert returned is not None
        assert (returned.version, returned.retired_at) == (2, None)
        assert queries.loop(session, "FIC-999") is None


def test_specs_come_back_with_version_and_entry(store: Store) -> None:
    later = replace(some.spec(), valid_from=some.VALID_FROM + timedelta(days=60), min_step_eu=None)
    enter(store, [some.loop()], [later, some.spec()])
    with store.read() as session:
        found = queries.specs(session)
    assert found == {
        "FIC-101": [
            replace(some.spec(), version=2, entered_at=some.NOW),
            replace(later, version=1, entered_at=some.NOW),
        ]
    }
    assert Quantity.RISE_TIME in found["FIC-101"][0].limits


def test_a_changed_spec_is_a_new_version_beside_the_old(store: Store) -> None:
    enter(store, [some.loop()], [some.spec()])
    for version, rise_s in enumerate((13.0, 12.1), start=2):
        changes = enter(store, [some.loop()], [some.spec(rise_s=rise_s)], version)
        assert changes == RegisterChanges(specs_new=1)
    with store.read() as session:
        versions = queries.specs(session)["FIC-101"]
    assert [(one.version, one.limits[Quantity.RISE_TIME]) for one in versions] == [
        (1, 12.1),
        (2, 13.0),
        (3, 12.1),
    ]


def test_a_spec_gone_from_the_file_is_withdrawn_with_all_its_versions(store: Store) -> None:
    enter(store, [some.loop()], [some.spec()])
    enter(store, [some.loop()], [some.spec(rise_s=13.0)], version=2)
    assert enter(store, [some.loop()], [], version=3) == RegisterChanges(specs_withdrawn=1)
    with store.read() as session:
        assert queries.specs(session) == {}
        withdrawn = queries.specs(session, include_withdrawn=True)["FIC-101"]
    assert [one.version for one in withdrawn] == [1, 2]
    assert enter(store, [some.loop()], [some.spec()], version=4) == RegisterChanges(specs_new=1)


def test_a_spec_of_a_loop_nobody_knows_is_refused(store: Store) -> None:
    with pytest.raises(UnknownLoop, match="FIC-999"):
        enter(store, [some.loop()], [some.spec("FIC-999")])
    with store.read() as session:
        assert queries.loops(session) == []


def test_content_that_was_replaced_before_is_refused_unless_accepted(store: Store) -> None:
    enter(store, [some.loop()])
    enter(store, [some.loop()], version=2)
    with pytest.raises(StoreUnready, match=r"loop register.*--accept-older"):
        enter(store, [], version=1)
    with store.read() as session:
        assert len(queries.loops(session)) == 1
    assert enter(store, [], version=1, accept_older=True) == RegisterChanges(loops_retired=1)
    assert enter(store, [], version=1) == RegisterChanges()
    with pytest.raises(StoreUnready, match="settings"):
        enter(store, [], version=2)


def test_one_store_holds_one_site(store: Store) -> None:
    with some.writing(store) as session:
        assert queries.site_name(session) is None
        writes.enter_site(session, "Quay Test Works")
        writes.enter_site(session, "Quay Test Works")
        assert queries.site_name(session) == "Quay Test Works"
        with pytest.raises(StoreUnready, match=r"Quay Test Works.*Other Works"):
            writes.enter_site(session, "Other Works")


def test_an_instant_without_offset_is_not_stored(store: Store) -> None:
    with pytest.raises(ValueError, match="without an offset"):
        enter(store, [some.loop()], now=datetime(2026, 3, 1))  # noqa: DTZ001 (the point)

"""The curve's encoding: nothing is lost, and it is small."""

from __future__ import annotations

import base64

import numpy as np
import pytest
import store_samples as some
from hypothesis import given, settings
from hypothesis import strategies as st
from hypothesis.extra import numpy as npst
from numpy.typing import NDArray

from audit.records import SECOND_US, Record, Role, Samples
from audit.store import codec_first
from audit.store.codec import decode, encode, pack

STAMPS = st.integers(-(2**63), 2**63 - 1)
ANY_FLOAT = st.floats(width=64) | st.sampled_from([-0.0, 5e-324, 1e308, float(2**53) + 2, 0.1])
DECIMAL = st.integers(-(10**7), 10**7).map(lambda whole: whole / 1000)
HISTORIAN = st.floats(width=32, allow_nan=False, allow_infinity=False)


@st.composite
def signals(draw: st.DrawFn) -> Samples:
    """Stamps and values of every kind, few and some more, regular and not, held and not."""
    stamps = sorted(draw(st.sets(STAMPS | st.integers(0, 10**6), max_size=60)))
    if draw(st.booleans()):
        first, step = draw(st.integers(-(10**17), 10**17)), draw(st.integers(1, 10**10))
        stamps = [first + k * step for k in range(len(stamps))]
    count = len(stamps)
    values = draw(st.sampled_from([ANY_FLOAT, DECIMAL, HISTORIAN]))
    value: NDArray[np.float64] = draw(npst.arrays(np.float64, count, elements=values))
    value = np.resize(np.repeat(value, draw(st.sampled_from([1, 1, 20, 60]))), count)
    good: NDArray[np.bool_] = draw(npst.arrays(np.bool_, count))
    if draw(st.booleans()):
        good |= True
    if draw(st.booleans()):
        value = np.where(good, value, np.nan)
    return Samples(np.array(stamps, np.int64), value, good)


@given(st.dictionaries(st.sampled_from(list(Role)), signals(), max_size=4), st.booleans())
@settings(max_examples=300, deadline=None)
def test_every_bit_comes_back(content: dict[Role, Samples], together: bool) -> None:
    if together and content:  # as the columns of one wide export
        count = min(len(one) for one in content.values())
        t_us = next(iter(content.values())).t_us[:count]
        content = {
            role: Samples(t_us.copy(), one.value[:count], one.good[:count])
            for role, one in content.items()
        }
    record = Record(content)
    assert some.same_record(decode(encode(record)), record)
    assert pack(decode(encode(record))) == pack(record)


def test_what_was_stored_in_the_first_encoding_is_read_and_known_again() -> None:
    """Written by the version that had only that one."""
    first = base64.b85decode(some.FIRST_BLOB)
    record = some.curve(some.T0, count=8)
    assert some.same_record(decode(first), record)
    assert codec_first.digest(record).hex() == "367b5606eee3987229a29f61c4b434f7"
    with pytest.raises(ValueError, match="damaged"):
        decode(first[:-9])


def test_what_comes_back_can_be_worked_with() -> None:
    back = decode(encode(some.curve(some.T0)))
    back.of(Role.PV).value[0] = 1.0
    assert back.of(Role.PV).value[0] == 1.0


def test_a_typical_record_is_under_a_fifth_of_its_arrays() -> None:
    """400 samples of process variable and output; a sample is 17 bytes as arrays."""
    start = some.T0
    record = Record(
        {
            Role.PV: some.samples(start, 400),
            Role.OUTPUT: some.samples(start, 400, seed=2),
            Role.SP: some.samples(start, 5, seed=3),
            Role.MODE: some.samples(start, 2, seed=4),
        }
    )
    plain = 17 * sum(len(one) for one in record.signals.values())
    assert len(encode(record)) < plain / 5


def test_regular_stamps_cost_next_to_nothing() -> None:
    t_us = some.T0 + np.arange(3600, dtype=np.int64) * SECOND_US
    flat = Samples(t_us, np.full(3600, 49.95), np.ones(3600, np.bool_))
    assert len(encode(Record({Role.PV: flat}))) < 60


def test_columns_of_one_export_share_their_stamps() -> None:
    one, other = some.samples(some.T0, 400), some.samples(some.T0, 400, seed=2)
    shared = Samples(one.t_us.copy(), other.value, other.good)
    alone = len(encode(Record({Role.PV: one}))) + len(encode(Record({Role.PV: shared})))
    assert len(encode(Record({Role.PV: one, Role.OUTPUT: shared}))) < alone - 500


def test_a_blob_is_what_the_open_format_says_it_is() -> None:
    """RFC 8878, 3.1.1: a Zstandard frame begins with its magic number, 0xFD2FB528."""
    assert encode(some.curve(some.T0))[3:7] == (0xFD2FB528).to_bytes(4, "little")


def test_full_precision_values_cost_no_more_than_their_bits() -> None:
    value = np.random.default_rng(5).normal(50, 1, 400)
    t_us = some.T0 + np.arange(400, dtype=np.int64) * SECOND_US
    record = Record({Role.PV: Samples(t_us, value, np.ones(400, np.bool_))})
    assert len(encode(record)) < 8 * 400 + 100


def test_a_signal_without_a_value_for_each_stamp_is_refused() -> None:
    odd = Samples(np.arange(5), np.zeros(4), np.ones(5, np.bool_))
    with pytest.raises(ValueError, match="one value"):
        encode(Record({Role.PV: odd}))


def test_the_digest_is_of_the_content() -> None:
    one, again, other = some.curve(some.T0), some.curve(some.T0), some.curve(some.T0, seed=2)
    assert pack(one).digest == pack(again).digest != pack(other).digest
    assert len(pack(one).digest) == 16


@pytest.mark.parametrize(
    "blob",
    [
        b"",
        b"something else",
        encode(some.curve(some.T0))[:-20],
        encode(some.curve(some.T0))[:3] + b"\x00" * 40,
    ],
)
def test_what_is_no_curve_is_refused(blob: bytes) -> None:
    with pytest.raises(ValueError, match="curve"):
        decode(blob)

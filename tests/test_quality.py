"""quality: automatic or not, output at its limit, silences, spans of bad quality."""

from __future__ import annotations

import numpy as np
import pytest

from audit import quality
from audit.records import SECOND_US, Loop, RawSamples, Samples, Windows

WINDOWS = Windows(120 * SECOND_US, 3600 * SECOND_US, 60 * SECOND_US)
LOOP = Loop(tag="FIC-1", pv="F1.PV", sp="F1.SP", windows=WINDOWS)


def samples(value: list[float], good: list[bool] | None = None) -> Samples:
    flags = np.ones(len(value), np.bool_) if good is None else np.array(good)
    stamps = np.arange(len(value), dtype=np.int64) * SECOND_US
    return Samples(stamps, np.where(flags, value, np.nan), flags)


@pytest.mark.parametrize(
    ("text", "automatic"),
    [
        ("AUTO", True),
        (" auto ", True),
        ("Cas", True),
        ("MAN", False),
        ("", False),
        ("1", True),
        ("1.0", True),
        ("01", True),
        ("2", False),
        ("nan", False),
        ("AUTOMATIC", False),
    ],
)
def test_mode_texts_are_compared_stripped_caseless_and_as_numbers(
    text: str, automatic: bool
) -> None:
    raw = RawSamples(samples([0.0, 1.0]), ("MAN", text))
    mode = quality.in_automatic(raw, ("Auto", "CAS ", "1"))
    assert mode.value.tolist() == [0.0, float(automatic)]


def test_a_numeric_mode_is_compared_as_a_number() -> None:
    mode = quality.in_automatic(RawSamples(samples([0, 1, 2, 3])), ("1", "3.0", "AUTO"))
    assert mode.value.tolist() == [0.0, 1.0, 0.0, 1.0]


@pytest.mark.parametrize("texts", [None, ("AUTO", "MAN")])
def test_a_bad_mode_sample_stays_bad(texts: tuple[str, ...] | None) -> None:
    raw = RawSamples(samples([0.0, 1.0, 0.0], [True, False, True]), texts)
    mode = quality.in_automatic(raw, ("AUTO", "0"))
    assert mode.good.tolist() == [True, False, True]
    assert np.isnan(mode.value[1])
    assert mode.value[[0, 2]].tolist() == [1.0, 1.0]


def test_an_empty_mode_record_stays_empty() -> None:
    assert len(quality.in_automatic(RawSamples(Samples.empty(), ()), ("AUTO",))) == 0


def test_saturated_is_within_a_thousandth_of_the_span_of_either_limit() -> None:
    """OPC DA limit bits name a low and a high limit too (OPC DA 3.0, 6.8); the margin is common
    practice, no source."""
    output = samples([-1.0, 0.0, 0.1, 0.11, 50.0, 99.89, 99.9, 100.0, 104.0])
    flags = quality.saturated(output, LOOP)
    assert flags.tolist() == [True, True, True, False, False, False, True, True, True]


def test_saturated_uses_the_loop_s_own_limits_and_leaves_bad_samples_out() -> None:
    loop = Loop(tag="T", pv="p", sp="s", windows=WINDOWS, output_low=4.0, output_high=20.0)
    output = samples([4.0, 4.0, 19.99, 19.9, 0.0], [True, False, True, True, True])
    assert quality.saturated(output, loop).tolist() == [True, False, True, False, True]


def test_gaps_are_between_good_stamps_and_longer_than_the_silence() -> None:
    signal = samples([1.0] * 8, [True, False, False, True, True, True, False, True])
    second = SECOND_US
    assert quality.gaps(signal, 2 * second) == [(0, 3 * second)]
    assert quality.gaps(signal, 3 * second) == []
    assert quality.gaps(signal, 1 * second) == [(0, 3 * second), (5 * second, 7 * second)]
    assert quality.gaps(Samples.empty(), second) == []


def test_bad_spans_end_at_the_next_good_stamp() -> None:
    signal = samples([1.0] * 6, [False, True, False, False, True, False])
    spans = [(a // SECOND_US, b // SECOND_US) for a, b in quality.bad_spans(signal)]
    assert spans == [(0, 1), (2, 4), (5, 5)]
    assert quality.bad_spans(Samples.empty()) == []

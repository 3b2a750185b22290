"""A loop's record around what is new: put together from kept slices, and cut into slices to keep.

Pure. In: the slices the store kept and the fresh samples. Out: one record to look at, which
instants have to be looked at again, and the edge slices that a change across a later border needs.
"""

from __future__ import annotations

from collections.abc import Iterable, Mapping, Sequence
from itertools import pairwise

import numpy as np
from numpy.typing import NDArray

from audit.records import (
    Between,
    Edge,
    Reading,
    Record,
    Role,
    Samples,
    SetpointChange,
    Windows,
)
from audit.weaving.spans import Span, inside, pick, union


def weave(
    kept: Sequence[Record],
    fresh: Mapping[Role, Samples],
    replaced: Mapping[Role, Sequence[Span]],
) -> Record:
    """Kept slices and fresh samples as one record; kept samples in replaced spans are dropped."""
    signals: dict[Role, Samples] = {}
    for role in Role:
        parts = [record.signals[role] for record in kept if role in record.signals]
        if parts or role in fresh:
            known = _merge(parts)
            known = pick(known, ~inside(known.t_us, union(replaced.get(role, ()))))
            signals[role] = _merge([known, fresh.get(role, Samples.empty())])
    return Record(signals)


def _merge(parts: Sequence[Samples]) -> Samples:
    """All samples once, in order; the same stamp in several parts is the same sample."""
    parts = [part for part in parts if len(part)]
    if not parts:
        return Samples.empty()
    if len(parts) == 1:
        return parts[0]
    apart = sorted((piece for part in parts for piece in _pieces(part, parts)), key=_first_us)
    if all(one.t_us[-1] < other.t_us[0] for one, other in pairwise(apart)):
        return _joined(apart)
    joined = _joined(parts)
    t_us, first = np.unique(joined.t_us, return_index=True)
    return Samples(t_us, joined.value[first], joined.good[first])


def _joined(parts: Sequence[Samples]) -> Samples:
    return Samples(
        np.concatenate([part.t_us for part in parts]),
        np.concatenate([part.value for part in parts]),
        np.concatenate([part.good for part in parts]),
    )


def _first_us(part: Samples) -> int:
    return int(part.t_us[0])


def _pieces(part: Samples, parts: Sequence[Samples]) -> list[Samples]:
    """A part cut where another one begins, so that parts that enclose one another only touch."""
    cuts = np.unique(part.t_us.searchsorted([_first_us(other) for other in parts]))
    ends = [0, *cuts[(cuts > 0) & (cuts < len(part))].tolist(), len(part)]
    return [Samples(part.t_us[a:b], part.value[a:b], part.good[a:b]) for a, b in pairwise(ends)]


def seams(record: Record, kept: Iterable[Record], replaced: Iterable[Span]) -> NDArray[np.int64]:
    """Stamps of setpoint samples [k] whose predecessor in the record may not be the true one.

    Samples of one kept slice follow one another, and so do those at a replaced span. Between two
    slices with nothing new in between, samples may have been dropped: what differs there is no
    move, or is one whose own slice is kept.
    """
    stamps = record.of(Role.SP).only_good().t_us
    before, after = stamps[:-1], stamps[1:]
    follows = np.zeros(len(after), np.bool_)
    for slice_ in kept:
        own = slice_.of(Role.SP).only_good().t_us
        if len(own) > 1:
            place = np.minimum(np.searchsorted(own, before), len(own) - 2)
            follows |= (own[place] == before) & (own[place + 1] == after)
    for start, end in replaced:
        follows |= (before <= end) & (after >= start)
    return after[~follows]


def to_look_at(record: Record, spans: Iterable[Span], windows: Windows) -> list[Span]:
    """The instants at which a change may be found differently once the spans are known.

    These lie within a window of a span, and at the next setpoint sample after it, however far: it
    is a move if it differs from the last one in the span.
    """
    sp_us = record.of(Role.SP).only_good().t_us
    looked: list[Span] = []
    for start, end in spans:
        looked.append((start - windows.after_us - windows.join_us, end))
        after = int(np.searchsorted(sp_us, end, "right"))
        ends = [end] if after == len(sp_us) else [end, int(sp_us[after])]
        looked += [(at, at + windows.before_us + windows.join_us) for at in ends]
    return union(looked)


def context(spans: Iterable[Span], windows: Windows) -> list[Span]:
    """What has to be known of the record to look at those instants."""
    return union((start - windows.reach_us, end + windows.reach_us) for start, end in spans)


def grouped(spans: Iterable[Span], windows: Windows) -> list[Span]:
    """The spans, those nearer to one another than a change can reach taken as one."""
    reach_us = windows.reach_us
    widened = union((start - reach_us, end + reach_us) for start, end in spans)
    return [(start + reach_us, end - reach_us) for start, end in widened]


def curve(record: Record, change: SetpointChange, windows: Windows) -> Record:
    """The slice a change is found and measured in, with each tag's bounding good samples."""
    return record.around(
        change.at_us - windows.before_us - windows.join_us,
        change.at_us + windows.after_us + windows.join_us,
    )


def dependence(
    slice_: Record, at_us: int, roles: Iterable[Role], windows: Windows, reading: Reading
) -> tuple[int | None, int | None]:
    """From which to which stamp a change rests on the record; None: bounding sample unknown.

    Setpoint, mode and a held output run on until their next sample, so that their first sample
    after the window changes nothing and is not waited for.
    """
    start_us = at_us - windows.before_us - windows.join_us
    end_us = at_us + windows.after_us + windows.join_us
    waited = {Role.PV}
    if reading.output_between is Between.LINEAR:
        waited.add(Role.OUTPUT)
    starts: list[int | None] = []
    ends: list[int | None] = []
    for role in roles:
        good_us = _outer_good_us(slice_.of(role))
        starts.append(good_us[0] if good_us and good_us[0] < start_us else None)
        if role in waited:
            ends.append(good_us[1] if good_us and good_us[1] > end_us else None)
    before, after = _all_known(starts), _all_known(ends)
    return (
        None if before is None else min([*before, start_us]),
        None if after is None else max([*after, end_us]),
    )


def _outer_good_us(samples: Samples) -> Span | None:
    """Stamps of the first and the last good sample."""
    good = samples.good
    if len(good) and good[0] and good[-1]:
        return int(samples.t_us[0]), int(samples.t_us[-1])
    good_us = samples.t_us[good]
    return (int(good_us[0]), int(good_us[-1])) if len(good_us) else None


def _all_known(stamps: Sequence[int | None]) -> list[int] | None:
    known = [stamp for stamp in stamps if stamp is not None]
    return known if len(known) == len(stamps) else None


def edges(record: Record, spans: Iterable[Span], windows: Windows) -> list[Edge]:
    """The slices to keep at both borders of each newly covered span, each border once.

    Where the first setpoint sample of a span lies further in than a change can reach, its own slice
    is kept too: an earlier export may show it to be a move.
    """
    reach_us = windows.reach_us
    sp_us = record.of(Role.SP).only_good().t_us
    spans = list(spans)
    kept: dict[tuple[int, str], Record] = {}
    for start, end in spans:  # those of several tags may share a border
        kept[start, "from"] = record.around(start, start + reach_us)
        kept[end, "to"] = record.around(end - reach_us, end)
    for start, end in spans:
        first = int(np.searchsorted(sp_us, start))
        if first < len(sp_us) and start + windows.before_us < sp_us[first] <= end:
            at_us = int(sp_us[first])  # holds what a border at the same instant needs
            kept[at_us, "from"] = record.around(at_us - reach_us, at_us + reach_us)
    return [Edge(border_us, side, slice_) for (border_us, side), slice_ in kept.items()]

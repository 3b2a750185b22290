"""Which export holds where several cover the same tag and time.

In: the export files just read and the coverage the store knows. Out: for each tag the samples that
hold, the spans over which they replace what was known, and each file's account with the samples it
lost counted as replaced. The rule (contract): the higher ``revision`` wins, then the path in byte
order. A file covers a tag it names from the file's first to its last stamp.
"""

from __future__ import annotations

from collections.abc import Iterable, Mapping, Sequence
from dataclasses import dataclass, replace

import numpy as np

from audit.records import (
    CellAccount,
    Coverage,
    ExportFile,
    ExportRead,
    RawSamples,
    Samples,
    TagSamples,
)
from audit.weaving.spans import Span, subtract, union


@dataclass(frozen=True, eq=False)
class FreshTag:
    """What new export files say of one tag.

    ``spans``: where they hold, disjoint and in order; whatever was known of the tag there is
    replaced. ``parts``: an export's samples of the tag, and the spans in which they hold.
    """

    spans: tuple[Span, ...]
    parts: tuple[tuple[TagSamples, tuple[Span, ...]], ...] = ()

    def load(self) -> RawSamples:
        """The samples that hold, all within the spans."""
        return _concatenate([samples.load(spans) for samples, spans in self.parts])

    def within(self, start: int, end: int) -> FreshTag:
        """What holds from one instant to another, both inclusive."""
        parts = [(samples, _clipped(spans, start, end)) for samples, spans in self.parts]
        return FreshTag(_clipped(self.spans, start, end), tuple(p for p in parts if p[1]))


def _clipped(spans: Iterable[Span], start: int, end: int) -> tuple[Span, ...]:
    return tuple((max(a, start), min(b, end)) for a, b in spans if a <= end and b >= start)


@dataclass(frozen=True, eq=False)
class FreshExport:
    """One export file and what was read from it.

    ``only``: the tags it was read again for; what it says of others is known. None: it is new.
    """

    file: ExportFile
    read: ExportRead
    only: frozenset[str] | None = None

    def span(self) -> Span | None:
        """From its first to its last stamp; None for a file without."""
        first, last = self.read.first_us, self.read.last_us
        return None if first is None or last is None else (first, last)

    def is_new_for(self, tag: str) -> bool:
        return self.only is None or tag in self.only


@dataclass(frozen=True, eq=False)
class Settled:
    """What holds once every export's rank is weighed.

    ``tags``: by name. ``accounts``: the files', in their order. ``exposed``: paths of stored
    exports that hold again where earlier content of a fresh path has gone, with the tags concerned:
    their samples there were not kept.
    """

    tags: Mapping[str, FreshTag]
    accounts: Sequence[CellAccount]
    exposed: Mapping[str, frozenset[str]]


def settle(fresh: Sequence[FreshExport], stored: Sequence[Coverage]) -> Settled:
    """Decide between the fresh exports, and between them and the stored coverage.

    ``stored`` may hold earlier content of a fresh path: that content is gone, and the spans in
    which it held are replaced too (by nothing, where the new content does not reach).
    """
    by_path = {export.file.path: export for export in fresh}
    known: dict[str, list[Coverage]] = {}
    for cover in stored:
        known.setdefault(cover.tag, []).append(cover)
    naming = _by_tag(fresh)
    accounts = [export.read.account for export in fresh]
    tags: dict[str, FreshTag] = {}
    exposed: dict[str, set[str]] = {}
    for tag in dict.fromkeys([*naming, *known]):
        covers = known.get(tag, [])
        others = [cover for cover in covers if cover.path not in by_path]
        gone = [c for c in covers if c.path in by_path and by_path[c.path].is_new_for(tag)]
        spans, parts = _holding(tag, naming.get(tag, []), fresh, others, accounts)
        left = [span for cover in gone for span in _won(cover, others)]
        if spans or left:
            tags[tag] = FreshTag(tuple(union([*spans, *left])), tuple(parts))
        open_again = subtract(left, [_span(fresh[index]) for index in naming.get(tag, [])])
        for cover in others:
            if any(cover.from_us <= end and cover.to_us >= start for start, end in open_again):
                exposed.setdefault(cover.path, set()).add(tag)
    return Settled(tags, accounts, {path: frozenset(found) for path, found in exposed.items()})


def _holding(
    tag: str,
    exports: Sequence[int],
    fresh: Sequence[FreshExport],
    others: Sequence[Coverage],
    accounts: list[CellAccount],
) -> tuple[list[Span], list[tuple[TagSamples, tuple[Span, ...]]]]:
    """Where the fresh exports hold a tag, and with what; samples lost are counted as replaced."""
    parts: list[tuple[TagSamples, tuple[Span, ...]]] = []
    spans: list[Span] = []
    for index in exports:
        export = fresh[index]
        rivals = [*others, *(_coverage(tag, fresh[i]) for i in exports if i != index)]
        won = _won(_coverage(tag, export), rivals)
        samples = export.read.columns.get(tag)
        if samples is not None:
            lost = subtract([_span(export)], won)
            accounts[index] = _lose(accounts[index], *samples.counted(lost))
        if export.is_new_for(tag):
            spans += won
            if samples is not None:
                parts.append((samples, tuple(won)))
    return spans, parts


def _by_tag(fresh: Sequence[FreshExport]) -> dict[str, list[int]]:
    """Tag -> indices of the fresh exports that name it and have a stamp."""
    found: dict[str, list[int]] = {}
    for index, export in enumerate(fresh):
        if export.read.first_us is not None:
            for tag in export.read.named:
                found.setdefault(tag, []).append(index)
    return found


def _coverage(tag: str, export: FreshExport) -> Coverage:
    file = export.file
    return Coverage(tag, *_span(export), file.source, file.path, file.revision)


def _span(export: FreshExport) -> Span:
    span = export.span()
    assert span is not None
    return span


def _won(cover: Coverage, rivals: Iterable[Coverage]) -> list[Span]:
    """Where a coverage holds against its rivals."""
    rank = (cover.revision, cover.path.encode())
    higher = [
        (rival.from_us, rival.to_us)
        for rival in rivals
        if rival.from_us <= cover.to_us
        and rival.to_us >= cover.from_us
        and (rival.revision, rival.path.encode()) > rank
    ]
    return subtract([(cover.from_us, cover.to_us)], higher)


def _lose(account: CellAccount, good: int, bad: int) -> CellAccount:
    """Count lost samples as replaced: the good ones were taken, the others bad quality."""
    if good + bad == 0:
        return account
    return replace(
        account,
        taken=account.taken - good,
        bad_quality=account.bad_quality - bad,
        replaced=account.replaced + good + bad,
    )


def _concatenate(parts: Sequence[RawSamples]) -> RawSamples:
    """One column from parts whose stamps do not overlap; texts are gathered into one list."""
    ordered = sorted((p for p in parts if len(p.samples)), key=lambda p: int(p.samples.t_us[0]))
    if not ordered:
        return RawSamples(Samples.empty())
    if len(ordered) == 1:
        return ordered[0]
    if any(part.texts is not None for part in ordered):
        texts = tuple(sorted({text for part in ordered for text in part.texts or ()}))
        ordered = [_recode(part, texts) for part in ordered]
        return RawSamples(_join([part.samples for part in ordered]), texts)
    return RawSamples(_join([part.samples for part in ordered]))


def _join(parts: Sequence[Samples]) -> Samples:
    """Samples of several parts in order of their stamps."""
    t_us = np.concatenate([part.t_us for part in parts])
    value = np.concatenate([part.value for part in parts])
    good = np.concatenate([part.good for part in parts])
    if np.any(np.diff(t_us) <= 0):
        order = np.argsort(t_us, kind="stable")
        t_us, value, good = t_us[order], value[order], good[order]
    return Samples(t_us, value, good)


def _recode(part: RawSamples, texts: tuple[str, ...]) -> RawSamples:
    place = {text: float(i) for i, text in enumerate(texts)}
    codes = np.array([place[text] for text in part.texts or ()], np.float64)
    value = np.full(len(part.samples), np.nan)
    good = part.samples.good
    if len(codes):
        value[good] = codes[part.samples.value[good].astype(np.int64)]
    return RawSamples(Samples(part.samples.t_us, value, good), texts)

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
from numpy.typing import NDArray

from audit.records import CellAccount, Coverage, ExportFile, ExportRead, RawSamples, Samples
from audit.weaving.spans import Span, inside, pick, subtract, union


@dataclass(frozen=True, eq=False)
class FreshTag:
    """What new export files say of one tag.

    ``spans``: where they hold, disjoint and in order; whatever was known of the tag there is
    replaced by ``raw``, whose stamps all lie inside them.
    """

    spans: tuple[Span, ...]
    raw: RawSamples


@dataclass(frozen=True, eq=False)
class FreshExport:
    """One export file and what was read from it."""

    file: ExportFile
    read: ExportRead


def settle(
    fresh: Sequence[FreshExport], stored: Sequence[Coverage]
) -> tuple[dict[str, FreshTag], list[CellAccount]]:
    """Decide between the fresh exports, and between them and the stored coverage.

    ``stored`` may hold earlier content of a fresh path: that content is gone, and the spans in
    which it held are replaced too (by nothing, where the new content does not reach).
    Returns the tags by name and the files' accounts in the order of ``fresh``.
    """
    paths = {export.file.path for export in fresh}
    known: dict[str, list[Coverage]] = {}
    for cover in stored:
        known.setdefault(cover.tag, []).append(cover)
    accounts = [export.read.account for export in fresh]
    tags: dict[str, FreshTag] = {}
    for tag, exports in _by_tag(fresh).items():
        others = [cover for cover in known.get(tag, []) if cover.path not in paths]
        parts, spans = [], []
        for index in exports:
            export = fresh[index]
            rivals = others + [_coverage(tag, fresh[i]) for i in exports if i != index]
            won = _won(_coverage(tag, export), rivals)
            raw = export.read.columns.get(tag)
            spans += won
            if raw is not None:
                held = inside(raw.samples.t_us, won)
                accounts[index] = _lose(accounts[index], raw.samples, ~held)
                parts.append(RawSamples(pick(raw.samples, held), raw.texts))
        gone = [c for c in known.get(tag, []) if c.path in paths]
        spans += [span for cover in gone for span in _won(cover, others)]
        tags[tag] = FreshTag(tuple(union(spans)), _concatenate(parts))
    return _with_vanished(tags, known, paths), accounts


def _by_tag(fresh: Sequence[FreshExport]) -> dict[str, list[int]]:
    """Tag -> indices of the fresh exports that name it and have a stamp."""
    found: dict[str, list[int]] = {}
    for index, export in enumerate(fresh):
        if export.read.first_us is not None:
            for tag in export.read.named:
                found.setdefault(tag, []).append(index)
    return found


def _with_vanished(
    tags: dict[str, FreshTag], known: Mapping[str, Sequence[Coverage]], paths: set[str]
) -> dict[str, FreshTag]:
    """Add the tags that a path's earlier content named and its new content does not."""
    for tag, covers in known.items():
        if tag not in tags and any(cover.path in paths for cover in covers):
            others = [cover for cover in covers if cover.path not in paths]
            spans = [s for c in covers if c.path in paths for s in _won(c, others)]
            tags[tag] = FreshTag(tuple(union(spans)), RawSamples(Samples.empty()))
    return tags


def _coverage(tag: str, export: FreshExport) -> Coverage:
    first, last = export.read.first_us, export.read.last_us
    assert first is not None
    assert last is not None
    file = export.file
    return Coverage(tag, first, last, file.source, file.path, file.revision)


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


def _lose(account: CellAccount, samples: Samples, lost: NDArray[np.bool_]) -> CellAccount:
    """Count lost samples as replaced: the good ones were taken, the others bad quality."""
    good = int((samples.good & lost).sum())
    bad = int(lost.sum()) - good
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

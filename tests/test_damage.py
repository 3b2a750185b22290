"""Exports cut, shuffled, doubled and damaged, through the whole job.

Every cell is accounted for, and what is still there of the record gives the same results, whatever
stands around it.
"""

from __future__ import annotations

import json
import random
from collections import Counter
from collections.abc import Iterator, Mapping, Sequence
from contextlib import contextmanager
from dataclasses import dataclass
from datetime import datetime
from functools import cache
from itertools import pairwise
from pathlib import Path
from tempfile import TemporaryDirectory
from typing import Any

import damaged_plant as plant
import pytest
from damaged_plant import FileTold, Harm, Line, Table
from hypothesis import Phase, given, settings
from hypothesis import strategies as st

import sites
from audit import nightly
from audit.records import CellAccount
from audit.run_report import RunReport
from audit.site import open_site
from audit.store import Store, open_store, queries
from audit.store.dump import dump

KINDS = pytest.mark.parametrize("kind", plant.EXPORTS)
table = cache(Table)
ROWS = table("wide.csv").rows


def few(examples: int) -> settings:
    """The same examples each time, and no search for a smaller one: each is a whole audit."""
    return settings(max_examples=examples, deadline=None, derandomize=True, phases=[Phase.generate])


def harms(kinds: Sequence[str], most: int = 12) -> st.SearchStrategy[list[Harm]]:
    one = st.builds(
        Harm,
        at=st.integers(0, ROWS - 1),
        count=st.integers(1, 40),
        kind=st.sampled_from(kinds),
        tag=st.integers(0, 59),
    )
    return st.lists(one, min_size=1, max_size=most)


@dataclass(frozen=True)
class Works:
    """A site's folder and its store, which stays open over many audits."""

    folder: Path
    store: Store

    def audit(self) -> RunReport:
        return nightly.run(open_site(self.folder, {}), self.store, now=sites.NOW, cores=1)

    def content(self) -> list[str]:
        with self.store.read() as session:
            return list(dump(session))

    def accounts(self) -> dict[str, CellAccount]:
        """By the names of the files."""
        with self.store.read() as session:
            return {Path(one.path).stem: one.account for one in queries.exports(session)}


@cache
def empty_store() -> bytes:
    with TemporaryDirectory() as folder:
        path = Path(folder) / "site.db"
        with open_store(f"sqlite:///{path}") as store:
            store.upgrade()
        return path.read_bytes()


@contextmanager
def works(kind: str) -> Iterator[Works]:
    with TemporaryDirectory() as named:
        files = sites.SiteFiles(plant.LOOPS, plant.SPECS, plant.EXPORTS[kind], plant.WINDOWS)
        folder = files.lay(Path(named))
        (folder / "site.db").write_bytes(empty_store())
        with open_store(f"sqlite:///{folder / 'site.db'}") as store:
            yield Works(folder, store)


def content_of(kind: str, files: dict[str, list[Line]]) -> list[str]:
    """The store's content after one audit of the files."""
    with works(kind) as own:
        for name, lines in files.items():
            table(kind).write(own.folder, name, lines)
        assert own.audit().account.balance == 0
        return own.content()


@cache
def undamaged() -> tuple[str, ...]:
    """The content of the record as it is."""
    content = content_of("wide.csv", {"all": table("wide.csv").all_lines(range(ROWS))})
    assert sum('"usable": true' in line for line in content) == 12
    return tuple(content)


def steps(content: Sequence[str], tag: str = "") -> list[str]:
    """Lines of the steps of a loop, or of all."""
    return [line for line in content if line.startswith(f'{{"step": {{"tag": "{tag}')]


def free_rows() -> list[int]:
    """Rows outside of what any step rests on: the record from ``before`` and ``join`` in front of
    it to ``after`` and ``join`` behind it, and the sample next to that on either side."""
    at = [json.loads(line)["step"]["at"] for line in steps(undamaged())]
    at_s = [(datetime.fromisoformat(text) - sites.START).total_seconds() for text in at]
    reach = plant.JOIN_S + plant.SCAN_S
    return [
        row
        for row in range(ROWS)
        if not any(
            s - plant.BEFORE_S - reach <= row * plant.SCAN_S <= s + plant.AFTER_S + reach
            for s in at_s
        )
    ]


def rows_hit(harm: Harm, among: Sequence[int]) -> list[int]:
    first = harm.at % len(among)
    return list(among[first : first + harm.count])


def harmed_rows(
    of: Table, done: Sequence[Harm], among: Sequence[int], tags: Sequence[str] = plant.TAGS
) -> list[list[Line]]:
    """The lines of each row of the plant, with the harms done to rows ``among`` them."""
    rows = [of.lines(row) for row in range(ROWS)]
    for harm in done:
        for row in rows_hit(harm, among):
            whole = of.lines(row)
            rows[row] = of.harmed(rows[row] if _intact(rows[row], whole) else whole, harm, tags)
    return rows


def _intact(lines: Sequence[Line], whole: Sequence[Line]) -> bool:
    return [len(line) for line in lines] == [len(line) for line in whole]


def flat(rows: Sequence[Sequence[Line]]) -> list[Line]:
    return [line for lines in rows for line in lines]


@KINDS
@few(3)
@given(harms(plant.CELL_HARMS + plant.LINE_HARMS))
def test_damage_that_no_step_rests_on_moves_no_result(kind: str, done: list[Harm]) -> None:
    free = free_rows()
    assert len(free) > 1000
    lines = flat(harmed_rows(table(kind), done, free))
    assert lines != table(kind).all_lines(range(ROWS))
    assert steps(content_of(kind, {"all": lines})) == steps(undamaged())


@KINDS
@few(3)
@given(harms(plant.CELL_HARMS + plant.LINE_HARMS), st.booleans())
def test_damage_beside_good_copies_changes_nothing(
    kind: str, done: list[Harm], in_one_file: bool
) -> None:
    """Good rows in a file that ranks higher, or behind the damaged ones in the same file."""
    of, every = table(kind), range(ROWS)
    if in_one_file:
        rows = [of.lines(row) for row in every]
        for harm in done:
            for row in rows_hit(harm, every):
                rows[row] = [*of.harmed(of.lines(row), harm), *rows[row]]
        files = {"all": flat(rows)}
    else:
        files = {"all": flat(harmed_rows(of, done, every))}
        for number, harm in enumerate(done):
            files[f"copy{number}"] = of.all_lines(sorted(rows_hit(harm, every)))
    assert tuple(content_of(kind, files)) == undamaged()


IN_A_RESPONSE = Harm(at=360, count=60, kind="word", tag=0)
"""Of either loop the process variable from 720 s to 840 s, when it has just been moved."""


@KINDS
@few(3)
@given(st.data(), st.booleans())
def test_damage_to_one_loop_leaves_the_other_to_the_last_digit(
    kind: str, data: st.DataObject, warm: bool
) -> None:
    hurt, other = (plant.WARM, "FIC-1") if warm else (plant.FLOW, "TIC-2")
    of_lines = plant.LINE_HARMS if table(kind).narrow else ()  # a wide line is of both loops
    done = [*data.draw(harms((*plant.CELL_HARMS, *of_lines), 40)), IN_A_RESPONSE]
    content = content_of(kind, {"all": flat(harmed_rows(table(kind), done, range(ROWS), hurt))})
    assert steps(content) != steps(undamaged())
    assert about(content, other) == about(undamaged(), other)


def about(content: Sequence[str], tag: str) -> list[str]:
    """All that is said of a loop but its place in the list."""
    found = [json.loads(line) for line in content]
    told = [one for one in found if next(iter(one.values()))["tag"] == tag]
    for one in told:
        one.get("standing", {}).pop("rank", None)
    return [json.dumps(one) for one in told]


@dataclass(frozen=True)
class Part:
    """A file of the rows first..last-1, some harmed, some of its lines twice, perhaps shuffled.

    ``copies``: rows of which a harmed copy stands at the end. ``twice``: the file comes under two
    names. ``audited``: an audit follows it.
    """

    name: str
    first: int
    last: int
    harms: Sequence[Harm]
    copies: Sequence[Harm]
    shuffled: int | None
    twice: bool
    audited: bool

    def lines(self, of: Table) -> list[Line]:
        own = range(self.first, self.last)
        rows = harmed_rows(of, self.harms, own)
        lines = flat(rows[self.first : self.last])
        for harm in self.copies:
            for row in rows_hit(harm, own):
                lines += of.lines(row) if harm.tag % 2 else of.harmed(of.lines(row), harm)
        if self.shuffled is not None:
            random.Random(self.shuffled).shuffle(lines)
        return lines

    def files(self, of: Table) -> dict[str, list[Line]]:
        lines = self.lines(of)
        return {self.name: lines} | ({f"{self.name}2": lines} if self.twice else {})


@st.composite
def parts(draw: st.DrawFn) -> list[Part]:
    """The record in files that may overlap, in the order they come in."""
    cuts = sorted(draw(st.sets(st.integers(1, ROWS - 1), min_size=1, max_size=3)))
    spans = list(pairwise([0, *cuts, ROWS]))
    names = draw(st.permutations("abcd"[: len(spans)]))
    some = harms(plant.CELL_HARMS + plant.LINE_HARMS, 5)
    found = [
        Part(
            name,
            max(0, first - draw(st.integers(0, 200))),
            last,
            draw(st.one_of(st.just([]), some)),
            draw(st.one_of(st.just([]), some)),
            draw(st.one_of(st.none(), st.integers(0, 99))),
            draw(st.booleans()),
            draw(st.booleans()),
        )
        for name, (first, last) in zip(names, spans, strict=True)
    ]
    return draw(st.permutations(found))


@KINDS
@few(3)
@given(parts())
def test_every_cell_is_accounted_for_and_the_order_of_the_files_does_not_matter(
    kind: str, coming: list[Part]
) -> None:
    of = table(kind)
    files = {name: lines for part in coming for name, lines in part.files(of).items()}
    with works(kind) as own:
        known: dict[str, FileTold] = {}
        accounts: dict[str, CellAccount] = {}
        waiting: dict[str, FileTold] = {}
        for part in coming:
            for name, lines in part.files(of).items():
                of.write(own.folder, name, lines)
                waiting[name] = known[name] = plant.told(of, lines)
            if part.audited or part is coming[-1]:
                new = {name: account_of(name, known) for name in waiting}
                accounts |= new
                check_accounts(own.audit(), new)
                assert own.accounts() == accounts
                waiting = {}
        content = own.content()
    assert content == content_of(kind, files)


def account_of(name: str, known: Mapping[str, FileTold]) -> CellAccount:
    """Of a file that is read when the ``known`` ones are there: of these the later name wins."""
    rivals = [told for other, told in known.items() if other > name]
    return known[name].account(known[name].lost_to(rivals))


def check_accounts(report: RunReport, new: Mapping[str, CellAccount]) -> None:
    """The report has the sum of the accounts of the files that are new."""
    assert report.files_new == len(new)
    for name in ("rows", "read", "taken", "duplicate", "replaced", "blank", "bad_quality"):
        assert getattr(report.account, name) == sum(getattr(one, name) for one in new.values())
    refused = sum((Counter(one.refused) for one in new.values()), Counter[str]())
    assert report.account.refused == refused
    assert [one.balance for one in (report.account, *new.values())] == [0] * (1 + len(new))


@pytest.mark.parametrize(
    "coming",
    [
        # each file begins some rows before the end of the one before it; one audit each
        [("a", 0, 147), ("b", 147, 885), ("c", 844, 3000)],
        [("b", 147, 885), ("a", 0, 147), ("c", 844, 3000)],
        [("a", 0, 147), ("b", 86, 885), ("c", 844, 3000)],
        # the last audit takes two files far apart: a, c (FIC-1 and TIC-2 gain a step at 06:52:48)
        [("b", 402, 1776), ("c", 2963, 3000), ("a", 262, 436, "d", 1739, 2969), ("e", 0, 283)],
        # an edge that was kept before what lies in front of it was filled
        [("c", 0, 364), ("a", 2972, 3000), ("e", 2716, 3000), ("b", 256, 3000), ("d", 2225, 3000)],
    ],
)
def test_files_that_overlap_make_no_setpoint_change_of_their_own(coming: list[Any]) -> None:
    of = table("wide.csv")
    with works("wide.csv") as own:
        for files in coming:
            for name, first, last in zip(files[::3], files[1::3], files[2::3], strict=True):
                of.write(own.folder, name, of.all_lines(range(first, last)))
            own.audit()
        assert tuple(own.content()) == undamaged()

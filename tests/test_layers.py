"""Who may know whom: imports go downwards only, and what only one room may know stays there.

In: the source of every module. The table below is the rule; a room that is not in it, or that
imports a room its row does not name, fails here.
"""

from __future__ import annotations

import ast
import subprocess
import sys
from collections.abc import Iterator
from pathlib import Path

import pytest

ROOT = Path(__file__).resolve().parents[1]
VOCABULARY = {"errors", "records"}

MAY_KNOW: dict[str, set[str]] = {
    "errors": set(),
    "records": {"errors"},
    "evidence": {"records"},
    "figures": set(),
    # a site's own files
    "sitefiles": VOCABULARY,
    "config": {*VOCABULARY, "sitefiles"},
    "register": {*VOCABULARY, "sitefiles"},
    "site": {*VOCABULARY, "config", "register"},
    # the rooms on the way of the data: none knows another
    "scratch": VOCABULARY,
    "exports": {*VOCABULARY, "scratch"},
    "quality": VOCABULARY,
    "days": VOCABULARY,
    "setpoints": VOCABULARY,
    "response": VOCABULARY,
    "verdict": {*VOCABULARY, "evidence"},
    "trend": {*VOCABULARY, "evidence"},
    "ranking": {*VOCABULARY, "evidence", "figures"},
    "weaving": VOCABULARY,
    "workers": set(),
    "store": {*VOCABULARY, "migrations"},
    "migrations": {"store"},
    "demo_site": set(),
    "starter": set(),
    # one loop's way through the rooms, still without file, clock or database
    "loopwork": {
        *VOCABULARY,
        *("days", "quality", "response", "setpoints", "tag_states", "verdict", "weaving"),
    },
    "standings": {*VOCABULARY, "loopwork", "ranking", "response", "trend"},
    "feed": {*VOCABULARY, "figures"},
    "tag_states": VOCABULARY,
    # transactions and reads
    "intake": {*VOCABULARY, "exports", "workers"},
    "gather": {*VOCABULARY, "config", "loopwork", "standings", "store", "weaving"},
    "run_report": {*VOCABULARY, "store"},
    "nightly": {
        *VOCABULARY,
        *(
            "feed",
            "feed_facts",
            "gather",
            "intake",
            "loopwork",
            "ranking",
            "run_report",
            "site",
            "standings",
        ),
        *("store", "weaving", "workers"),
    },
    "feed_facts": {*VOCABULARY, "feed", "store"},
    "retention": {*VOCABULARY, "run_report", "site", "store", "trend"},
    "reports": {*VOCABULARY, "feed", "feed_facts", "figures", "run_report", "site", "store"},
    "check": {*VOCABULARY, "config", "exports", "site"},
    # the edge
    "cli": {
        *VOCABULARY,
        *("check", "config", "demo_site", "figures", "nightly", "register", "reports"),
        *("retention", "run_report", "site", "store"),
    },
    "__init__": set(),
    "__main__": {"cli"},
}

ONLY = {
    "sqlalchemy": {"store", "migrations"},
    "alembic": {"store", "migrations"},
    "psycopg": {"store"},
    "sqlite3": {"store"},
    "fsspec": {"exports"},
    "pyarrow": {"exports", "demo_site"},
    "numba": {"exports", "store"},
    "pandas": {"exports"},
    "argparse": {"cli"},
    "rich": {"cli"},
    "apscheduler": set(),
    "multiprocessing": {"workers"},
    "concurrent": {"workers", "exports"},
}

CLOCK = {
    ("datetime", "now"),
    ("datetime", "utcnow"),
    ("datetime", "today"),
    ("date", "today"),
    ("time", "time"),
    ("time", "time_ns"),
}
CLOCK_ROOMS = {"cli"}

LEGACY_RANDOM = {"seed", "rand", "randn", "normal", "uniform", "random", "choice", "shuffle"}


def sources() -> Iterator[tuple[str, Path]]:
    """Every module with the room it is in; the demo site, migrations and starter are packages."""
    yield from (
        (path.relative_to(ROOT / "audit").parts[0].removesuffix(".py"), path)
        for path in sorted((ROOT / "audit").rglob("*.py"))
    )
    for room, folder in (
        ("demo_site", "demo_site"),
        ("migrations", "migrations"),
        ("starter", "config"),
    ):
        yield from ((room, path) for path in sorted((ROOT / folder).rglob("*.py")))


def package_of(room: str, path: Path) -> list[str]:
    """The dotted package a module's relative imports start from."""
    top = {"demo_site": "demo_site", "migrations": "migrations", "starter": "config"}.get(room)
    if top is None:
        return ["audit", *path.relative_to(ROOT / "audit").parts[:-1]]
    return ["audit", room, *path.relative_to(ROOT / top).parts[:-1]]


def imported(room: str, path: Path) -> Iterator[tuple[str, int]]:
    """(dotted name, line) of everything a module imports, relative imports made absolute."""
    for node in ast.walk(ast.parse(path.read_text())):
        if isinstance(node, ast.Import):
            yield from ((alias.name, node.lineno) for alias in node.names)
        elif isinstance(node, ast.ImportFrom):
            base = package_of(room, path)[: -(node.level - 1) or None] if node.level else []
            module = [*base, *(node.module.split(".") if node.module else [])]
            yield from ((".".join([*module, alias.name]), node.lineno) for alias in node.names)


def rooms_imported(room: str, path: Path) -> Iterator[tuple[str, int]]:
    """Rooms of ours a module imports, its own left out."""
    for name, line in imported(room, path):
        parts = name.split(".")
        if parts[0] == "audit" and parts[1] not in (room, "__version__"):
            yield parts[1], line


MODULES = [pytest.param(room, path, id=str(path.relative_to(ROOT))) for room, path in sources()]


@pytest.mark.parametrize(("room", "path"), MODULES)
def test_a_module_knows_only_the_rooms_it_may(room: str, path: Path) -> None:
    assert room in MAY_KNOW, f"give the new room '{room}' its row in MAY_KNOW"
    wrong = [
        f"{path.name}:{line} imports audit.{other}"
        for other, line in rooms_imported(room, path)
        if other not in MAY_KNOW[room]
    ]
    assert wrong == []


@pytest.mark.parametrize(("room", "path"), MODULES)
def test_a_library_is_known_only_where_it_belongs(room: str, path: Path) -> None:
    wrong = [
        f"{path.name}:{line} imports {name}"
        for name, line in imported(room, path)
        if room not in ONLY.get(name.split(".")[0], {room})
    ]
    assert wrong == []


def called(path: Path) -> Iterator[tuple[ast.Call, tuple[str, ...]]]:
    """Every call of a dotted name: the call, and the last two parts of the name."""
    for node in ast.walk(ast.parse(path.read_text())):
        if isinstance(node, ast.Call) and isinstance(node.func, ast.Attribute):
            owner = node.func.value
            name = owner.attr if isinstance(owner, ast.Attribute) else getattr(owner, "id", "")
            yield node, (name, node.func.attr)


@pytest.mark.parametrize(("room", "path"), MODULES)
def test_no_room_reads_the_clock(room: str, path: Path) -> None:
    read = [f"{path.name}:{call.lineno}" for call, name in called(path) if name in CLOCK]
    assert room in CLOCK_ROOMS or read == []


@pytest.mark.parametrize(("room", "path"), MODULES)
def test_random_numbers_come_from_a_given_seed(room: str, path: Path) -> None:
    unseeded = [
        f"{path.name}:{call.lineno}"
        for call, (owner, function) in called(path)
        if (owner == "random" and function in LEGACY_RANDOM)
        or (function == "default_rng" and not call.args and not call.keywords)
    ]
    assert unseeded == []


def test_the_table_names_no_room_that_is_gone_and_no_circle() -> None:
    rooms = {room for room, _ in sources()}
    assert set(MAY_KNOW) <= rooms
    below: dict[str, set[str]] = {}

    def reach(room: str, way: tuple[str, ...]) -> set[str]:
        assert room not in way, f"circle: {' -> '.join((*way, room))}"
        if room not in below:
            known = MAY_KNOW[room] - ({"store"} if room == "migrations" else set())
            below[room] = known.union(*(reach(other, (*way, room)) for other in known))
        return below[room]

    for room in MAY_KNOW:
        reach(room, ())


def test_importing_the_package_loads_nothing_heavy() -> None:
    heavy = ("sqlalchemy", "scipy", "numpy", "pandas")
    code = f"import sys, audit, audit.cli; print([m for m in {heavy} if m in sys.modules])"
    done = subprocess.run([sys.executable, "-c", code], capture_output=True, text=True, check=True)
    assert done.stdout.strip() == "[]"

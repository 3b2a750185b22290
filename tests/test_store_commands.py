"""``store status`` and ``store prune`` as a person meets them."""

from __future__ import annotations

import json
import re
from pathlib import Path

import pytest
import stored

from audit import cli
from audit.store import open_store, queries


@pytest.fixture(scope="module")
def folder(tmp_path_factory: pytest.TempPathFactory) -> Path:
    """A site whose store is filled by hand; nobody writes to it."""
    place = tmp_path_factory.mktemp("commands") / "site"
    with stored.filled(place):
        pass
    return place


@pytest.fixture(autouse=True)
def _plain(monkeypatch: pytest.MonkeyPatch) -> None:
    for variable in ("LOOPASSAY_STORE_URL", "LOOPASSAY_DEBUG", "COLUMNS", "FORCE_COLOR"):
        monkeypatch.delenv(variable, raising=False)


def run(*words: object) -> int:
    return cli.main([str(word) for word in words])


def test_store_status_says_the_size_and_what_has_had_no_step(
    folder: Path, capsys: pytest.CaptureFixture[str]
) -> None:
    assert run("store", "status", "--config", folder) == 0
    printed = " ".join(capsys.readouterr().out.split())
    assert re.search(
        r"Size: [\d.]+ kB(, and .* free in it)?\. Of this about .*measurements [\d.]+ kB", printed
    )
    assert "Growth a year: not enough history yet (0.1 days of record, 7 needed)." in printed
    assert "a setpoint change: 1 of 3, in the last 30 days 1, in the last 7 days 1." in printed
    assert "FIC-101 2026-03-13" in printed


def test_a_dry_run_of_pruning_names_each_kind_and_changes_nothing(
    folder: Path, capsys: pytest.CaptureFixture[str]
) -> None:
    # the fixture's first night was revised once; the newest night, too, keeps all
    words = ("store", "prune", "revisions", "samples", "lists", "--older-than", "2026-03-15")
    assert run(*words, "--dry-run", "--json", "--config", folder) == 0
    found = json.loads(capsys.readouterr().out)
    assert (found["dry_run"], found["vacuumed"]) == (True, None)
    assert [(one["kind"], one["before"], one["rows"]) for one in found["kinds"]] == [
        ("samples", "2026-02-11", 0),
        ("edges", "2026-02-11", 0),
        ("lists", "2026-03-15", 2),
    ]
    assert run(*words, "--dry-run", "--config", folder) == 0
    printed = " ".join(capsys.readouterr().out.split())
    assert "Would be pruned; nothing was changed" in printed
    assert re.search(r"lists 2026-03-15 2 \d+\.\d kB lists of nights", printed)
    assert "What the newest night rests on stays" in printed
    with open_store(f"sqlite:///{folder / 'site.db'}") as store, store.read() as session:
        assert len(queries.nights(session)) == 2


def test_pruning_is_done_and_has_its_line(
    tmp_path: Path, capsys: pytest.CaptureFixture[str]
) -> None:
    with stored.filled(tmp_path / "site"):
        pass
    words = ("store", "prune", "lists", "--config", tmp_path / "site")
    assert run(*words, "--older-than", "2026-03-14") == 0
    printed = " ".join(capsys.readouterr().out.split())
    assert re.search(r"Pruned KIND .* lists 2026-03-14 2 ", printed)
    assert "An SQLite file gets smaller by --vacuum alone" in printed
    assert run(*words, "--older-than", "1d", "--vacuum") == 0
    assert "The file was written anew" in capsys.readouterr().out
    assert run("store", "status", "--config", tmp_path / "site") == 0
    assert "prune finished" in " ".join(capsys.readouterr().out.split())

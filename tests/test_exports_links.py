"""Export files that are pipes, links, oddly named: refused or read, never opened by mistake.

What a pattern finds is held against ``glob`` of the standard library.
"""

from __future__ import annotations

import glob
import os
import socket
from collections.abc import Iterator
from pathlib import Path
from typing import Any

import pytest
from export_files import a_source
from hypothesis import given, settings
from hypothesis import strategies as st
from stored_files import content, found, put, refusal, told

from audit.exports.files import discover, same_file
from audit.exports.globbing import matches, split


def test_pipes_sockets_and_devices_are_never_opened(
    tmp_path: Path, monkeypatch: pytest.MonkeyPatch
) -> None:
    os.mkfifo(tmp_path / "a.csv")
    assert refusal(*found(tmp_path, "a.csv")).reason == "is a pipe, not a file"
    with socket.socket(socket.AF_UNIX) as server:
        monkeypatch.chdir(tmp_path)  # a socket's path may have 107 octets
        server.bind("b.csv")
        assert refusal(*found(tmp_path, "b.csv")).reason == "is a socket, not a file"
    for device in ("/dev/zero", "file:///dev/zero"):
        assert refusal(*found(tmp_path, device)).reason == "is a device, not a file"


def test_a_file_that_became_something_else_since_it_was_listed(tmp_path: Path) -> None:
    for name, says, put_there in (
        ("a.csv", "is a pipe, not a file", os.mkfifo),
        ("b.csv", "is a folder, not a file", os.mkdir),
        ("c.csv", "a link that leads out of the", lambda path: os.symlink("/etc/hosts", path)),
        ("d.csv", "a link that leads nowhere", lambda path: os.symlink("gone.csv", path)),
        ("e.csv", "the file is gone", lambda path: None),
    ):
        file, source = put(tmp_path, name, b"timestamp,A\n")
        (tmp_path / name).unlink()
        put_there(tmp_path / name)
        assert says in refusal(file, source).reason


def test_a_file_that_may_not_be_read(tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    file, source = put(tmp_path, "a.csv", b"timestamp,A\n")

    def closed(*_: object) -> int:
        raise PermissionError(13, "Permission denied")

    monkeypatch.setattr(os, "open", closed)
    error = refusal(file, source)
    assert error.reason == "cannot be read: Permission denied"
    assert error.remedy == "check the path and its permissions"


OUT = "a link that leads out of the export's folder"


@pytest.fixture
def linked(tmp_path: Path) -> Path:
    """A site with export folders, and a place outside of them that links lead to."""
    for name in ("out/secret.csv", "site/exports/day1/a.csv", "site/exports/day2/a.csv"):
        (tmp_path / name).parent.mkdir(parents=True, exist_ok=True)
        (tmp_path / name).write_text(name)
    return tmp_path / "site"


@pytest.mark.parametrize("files", ["exports/*/*.csv", "exports/**/*.csv"])
def test_links_out_of_the_folder_are_refused_and_said(linked: Path, files: str) -> None:
    day = linked / "exports/day1"
    (day / "b.csv").symlink_to(linked.parent / "out/secret.csv")
    (day / "c.csv").symlink_to("../../../out/secret.csv")
    (day / "d.csv").symlink_to("../day2/a.csv")
    (day / "e.csv").symlink_to("nowhere.csv")
    (day / "f.csv").symlink_to("f.csv")
    (linked / "exports/outside").symlink_to(linked.parent / "out")
    (linked / "exports/root").symlink_to("/")
    found_there = told(linked, files)
    assert found_there == {
        "exports/day1/a.csv": "site/exports/day1/a.csv",
        "exports/day1/b.csv": OUT,
        "exports/day1/c.csv": OUT,
        "exports/day1/d.csv": "site/exports/day2/a.csv",
        "exports/day1/e.csv": "a link that leads nowhere",
        "exports/day1/f.csv": "cannot be read: Too many levels of symbolic links",
        "exports/day2/a.csv": "site/exports/day2/a.csv",
        "exports/outside": OUT,
        "exports/root": OUT,
    }


def test_a_folder_that_is_named_may_itself_be_a_link(linked: Path) -> None:
    (linked / "drop").symlink_to(linked.parent / "out")
    assert told(linked, "drop/*.csv") == {"drop/secret.csv": "out/secret.csv"}
    (linked / "one.csv").symlink_to(linked.parent / "out/secret.csv")
    assert told(linked, "one.csv") == {"one.csv": OUT}
    assert told(linked, "*/../../out/*.csv") == {"..": OUT, "drop": OUT}


def test_loops_of_links_end(linked: Path) -> None:
    """Eleven links up in each of two folders: more ways through than could ever be gone."""
    for day in ("day1", "day2"):
        for number in range(11):
            (linked / "exports" / day / f"loop{number}").symlink_to("..")
    both = {"exports/day1/a.csv", "exports/day2/a.csv"}
    assert set(told(linked, "exports/**/*.csv")) == both
    assert set(told(linked, "exports/**/**/**/*.csv")) == both
    assert both <= set(told(linked, "exports/*/*.csv"))
    assert len(told(linked, "exports/*/*/*/*/*/*.csv")) <= 2


@pytest.fixture
def deep(tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> Iterator[Path]:
    """A thousand folders in one another, with a file in the last; taken down one by one."""
    monkeypatch.chdir(tmp_path)
    for _ in range(1000):
        os.mkdir("d")
        os.chdir("d")
    Path("a.csv").write_text("deep")
    yield tmp_path
    Path("a.csv").unlink()
    for _ in range(1000):
        os.chdir("..")
        os.rmdir("d")


def test_a_thousand_folders_in_one_another(deep: Path) -> None:
    assert list(told(deep, "**/*.csv").values()) == ["deep"]


def test_a_folder_below_that_cannot_be_listed_is_said(
    linked: Path, monkeypatch: pytest.MonkeyPatch
) -> None:
    listed = os.scandir

    def closed(path: Any) -> Any:
        if str(path).endswith("day2"):
            raise PermissionError(13, "Permission denied")
        return listed(path)

    monkeypatch.setattr(os, "scandir", closed)
    for files in ("exports/**/*.csv", "exports/*/*.csv"):
        assert told(linked, files) == {
            "exports/day1/a.csv": "site/exports/day1/a.csv",
            "exports/day2": "this folder cannot be listed: Permission denied",
        }


def test_one_file_by_two_ways(linked: Path) -> None:
    (linked / "drop").symlink_to("exports/day1")
    ways = ("exports/*/a.csv", "drop/*.csv", f"{linked}/exports/day1/*",
            f"file://{linked}/exports/day1/*")  # fmt: skip
    real = {
        same_file(file, source)
        for source in (a_source(linked, files=files) for files in ways)
        for file in discover(source)
    }
    assert real == {f"{linked}/exports/day1/a.csv", f"{linked}/exports/day2/a.csv"}


NAMES = [
    "-rf.csv", "--help.csv", "a b.csv", " .csv", "a[1].csv", "*.csv", "?.csv", "a'b\"c;d|e&f.csv",
    "%2e%2e.csv", "ä\u00a0ö\u202fü.csv", "日本.csv", "a\\b.csv", "~.csv", "$HOME.csv",
    "a::b.csv", "x" * 251 + ".csv",
]  # fmt: skip


@pytest.mark.parametrize("name", NAMES, ids=range(len(NAMES)))
def test_odd_names_work(tmp_path: Path, name: str) -> None:
    (tmp_path / name).write_text("x")
    assert told(tmp_path, "*.csv") == {name: "x"}
    assert told(tmp_path, glob.escape(name)) == {name: "x"}


@pytest.mark.parametrize(
    ("name", "shown"),
    [
        (b"a\nb.csv", r"a\nb.csv"),
        (b"a\x1b[2Jb.csv", r"a\x1b[2Jb.csv"),
        (b"a\r.csv", r"a\r.csv"),
        ("a\u2028b.csv".encode(), r"a\u2028b.csv"),
        ("a\x9bb.csv".encode(), r"a\x9bb.csv"),
        (b"e\xe4.csv", r"e\xe4.csv"),
    ],
)
def test_names_that_cannot_be_shown_are_refused(tmp_path: Path, name: bytes, shown: str) -> None:
    (tmp_path / os.fsdecode(name)).write_text("x")
    says = "its name is not UTF-8 or holds control characters"
    assert told(tmp_path, "*.csv") == {shown: says}
    (tmp_path / shown).write_text("of that very name")
    source = a_source(tmp_path, files="*.csv")
    assert {file.path for file in discover(source)} == {shown}
    odd, plain = sorted(discover(source), key=lambda file: file.stamp)
    assert content(plain, source)[0] == b"of that very name"
    assert refusal(odd, source).reason == says


@given(st.data())
@settings(max_examples=60, deadline=None)
def test_patterns_find_what_the_standard_library_finds(
    tmp_path_factory: pytest.TempPathFactory, data: st.DataObject
) -> None:
    folder = tmp_path_factory.mktemp("tree")
    part = st.sampled_from(["a", "b", ".h", "a1", "[x]", "a.csv", "b.csv"])
    for path in data.draw(st.lists(st.lists(part, min_size=1, max_size=4), max_size=8)):
        place = folder.joinpath(*path)
        if not any(each.is_file() for each in (place, *place.parents)):
            place.parent.mkdir(parents=True, exist_ok=True)
            if not place.exists():
                place.write_text("")
    level = st.sampled_from(["*", "**", "a", "a*", "?", "[ab]", ".*", "*.csv", "[[]x]", "b.csv"])
    pattern = "/".join(data.draw(st.lists(level, min_size=1, max_size=4)))
    start = split(f"{folder}/{pattern}")
    ours = {each.path for each in matches(start.base, start.parts)}
    theirs = glob.glob(f"{folder}/{pattern}", recursive=True)
    assert {path for path in ours if os.path.isfile(path)} == {
        path for path in theirs if os.path.isfile(path)
    }

"""The three files of a site together, and the starter files that the package brings."""

from __future__ import annotations

import shutil
import tomllib
from importlib.resources import as_file, files
from pathlib import Path

import pytest

from audit import config
from audit.errors import FilesWrong
from audit.records import ExportSource, StandingRule
from audit.site import open_site

TOML = """\
[site]
name = "Gannet Works"
timezone = "Europe/Oslo"
[[exports]]
name = "dcs"
files = "exports/*.csv"
"""
LOOPS = "tag,pv,sp\nFIC-1,a,b\n"
SPECS = "tag,valid_from,overshoot_pct\nFIC-1,2024-01-01,10\n"


def lay(
    folder: Path, toml: str = TOML, loops: str | None = LOOPS, specs: str | None = SPECS
) -> Path:
    (folder / "site.toml").write_text(toml, "utf-8")
    for name, text in (("loops.csv", loops), ("specs.csv", specs)):
        if text is not None:
            (folder / name).write_text(text, "utf-8")
    return folder


@pytest.fixture
def starter(tmp_path: Path) -> Path:
    with as_file(files("audit.starter")) as folder:
        for name in ("site.toml", "loops.csv", "specs.csv"):
            shutil.copy(folder / name, tmp_path)
    return tmp_path


def test_a_site_opens_by_its_folder_and_by_its_file(tmp_path: Path) -> None:
    lay(tmp_path)
    by_folder, by_file = open_site(tmp_path, {}), open_site(tmp_path / "site.toml", {})
    assert by_folder == by_file
    assert by_folder.config.name == "Gannet Works"
    assert [loop.tag for loop in by_folder.register.loops] == ["FIC-1"]
    assert by_folder.register.loops[0].windows == by_folder.config.windows


def test_faults_of_all_three_files_come_in_one_message(tmp_path: Path) -> None:
    lay(
        tmp_path,
        TOML.replace("Oslo", "Olso") + 'layuot = "wide"\n',
        "tag,pv,sp,criticality\nFIC-1,a,a,9\nFIC-1,c,d,\n",
        "tag,valid_from,overshoot_pct\nFIC-2,yesterday,-1\n",
    )
    with pytest.raises(FilesWrong) as caught:
        open_site(tmp_path, {})
    found = [(fault.file, fault.line, fault.column) for fault in caught.value.faults]
    assert found == [
        ("site.toml", 3, "site.timezone"),
        ("site.toml", 7, "exports.layuot"),
        ("loops.csv", 2, "criticality"),
        ("loops.csv", 2, "sp"),
        ("loops.csv", 3, "tag"),
        ("specs.csv", 2, "overshoot_pct"),
        ("specs.csv", 2, "valid_from"),
        ("specs.csv", 2, "tag"),
    ]
    message = str(caught.value)
    assert message.startswith("8 faults")
    assert all(str(fault) in message for fault in caught.value.faults)


def test_a_broken_site_toml_does_not_hide_the_register(tmp_path: Path) -> None:
    lay(tmp_path, "[site\n", "tag,pv,sp\nFIC-1,a,\n")
    with pytest.raises(FilesWrong) as caught:
        open_site(tmp_path, {})
    assert [fault.file for fault in caught.value.faults] == ["site.toml", "loops.csv"]


def test_stand_in_names_are_not_missed_but_named_files_are(tmp_path: Path) -> None:
    lay(tmp_path, "[site\n", None, None)
    with pytest.raises(FilesWrong) as caught:
        open_site(tmp_path, {})
    assert [fault.file for fault in caught.value.faults] == ["site.toml"]
    lay(tmp_path, TOML + '[register]\nloops = "reg/ister.csv"\n[windos]\n', None, None)
    with pytest.raises(FilesWrong) as caught:
        open_site(tmp_path, {})
    assert [f.file for f in caught.value.faults] == ["site.toml", "ister.csv", "specs.csv"]


def test_no_site_at_all_is_one_clear_fault(tmp_path: Path) -> None:
    with pytest.raises(FilesWrong, match=r"site\.toml: there is no such file"):
        open_site(tmp_path, {})


def test_the_starter_files_are_a_valid_site(starter: Path) -> None:
    site = open_site(starter, {})
    assert len(site.register.loops) == 4
    assert len(site.register.specs) == 5
    inner = site.register.loops[0]
    assert inner.cascade_primary == "TIC-2104"
    assert inner.windows.after_us == 600_000_000
    assert site.register.loops[3].windows == site.config.windows


def test_the_starter_names_every_setting_and_its_default(starter: Path) -> None:
    text = (starter / "site.toml").read_text("utf-8")
    for table, content in tomllib.loads(text).items():
        keys = content[0] if table == "exports" else content
        assert set(keys) == set(config.KNOWN[table]), table
    bare = '[site]\nname = "x"\ntimezone = "UTC"\n[[exports]]\nname = "dcs"\nfiles = "x"\n'
    full = config.load(starter, {})
    (starter / "site.toml").write_text(bare, "utf-8")
    least = config.load(starter, {})
    for field in ("store_url", "loops_path", "specs_path", "windows", "standing", "nightly_at"):
        assert getattr(full, field) == getattr(least, field), field
    assert full.standing == StandingRule()
    assert full.exports == (
        ExportSource(name="dcs", files="exports/*.csv.gz", folder=str(starter)),
    )

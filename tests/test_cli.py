"""The command line: what it prints where, its exit codes, and how it says what is wrong."""

from __future__ import annotations

import json
import os
import sqlite3
import subprocess
import sys
from contextlib import closing
from dataclasses import replace
from datetime import UTC, date, datetime
from pathlib import Path
from typing import Any

import pytest
import stored
from rich.console import Console

from audit import cli, reports
from audit.cli import demo as demo_command
from audit.cli.print_run import exit_code, print_report
from audit.errors import Fault
from audit.records import CellAccount
from audit.run_report import RunReport
from audit.site import open_site
from audit.store import open_store, queries

ALL_WELL = RunReport(
    nights=(date(2026, 3, 14),),
    files_new=1,
    files_skipped=0,
    files_refused=(),
    account=CellAccount(rows=100, read=100, taken=100),
    steps_new=1,
    steps_changed=0,
    steps_withdrawn=0,
    quiet=(),
    faults=(),
)


@pytest.fixture(scope="module")
def folder(tmp_path_factory: pytest.TempPathFactory) -> Path:
    """A site whose store is filled by hand; nobody writes to it."""
    place = tmp_path_factory.mktemp("cli") / "site"
    with stored.filled(place):
        return place


@pytest.fixture(autouse=True)
def _plain(monkeypatch: pytest.MonkeyPatch) -> None:
    for variable in ("LOOPASSAY_STORE_URL", "LOOPASSAY_DEBUG", "COLUMNS", "FORCE_COLOR"):
        monkeypatch.delenv(variable, raising=False)


def run(*words: str | Path) -> int:
    return cli.main([str(word) for word in words])


def test_rank_prints_every_loop_and_the_cautions(
    folder: Path, capsys: pytest.CaptureFixture[str]
) -> None:
    assert run("rank", "--config", folder) == 0
    printed = capsys.readouterr()
    for text in ("FIC-101", "LIC-102", "TIC-103", "out of spec", "2026-03-02", "settling time at"):
        assert text in printed.out
    assert "changes nothing in the plant" in printed.out
    assert "5 is the most critical" in printed.out
    assert "The newest list is" in printed.err  # the fixture's nights are long past
    assert run("rank", "--night", "2026-03-14", "--config", folder) == 0
    assert capsys.readouterr().err == ""


def test_piped_text_is_80_wide_without_frames_or_trailing_blanks(
    folder: Path, capsys: pytest.CaptureFixture[str]
) -> None:
    for words in (("rank",), ("history", "FIC-101")):
        run(*words, "--config", folder)
        lines = capsys.readouterr().out.splitlines()
        assert max(map(len, lines)) <= 80
        assert [line for line in lines if line != line.rstrip()] == []
        assert not set("".join(lines)) & set("─│┌┐└┘━┃")


def test_rank_json_is_the_report(folder: Path, capsys: pytest.CaptureFixture[str]) -> None:
    assert run("rank", "--json", "--config", folder / "site.toml") == 0
    found = json.loads(capsys.readouterr().out)
    with open_store(f"sqlite:///{folder / 'site.db'}") as store:
        assert found == reports.ranking(store, open_site(folder, {}))


def test_rank_lists_loops_in_spec_shortly_unless_all_is_asked(
    folder: Path, capsys: pytest.CaptureFixture[str]
) -> None:
    run("rank", "--config", folder)
    short = capsys.readouterr().out
    run("rank", "--all", "--config", folder)
    full = capsys.readouterr().out
    assert "Drum level" not in short
    assert "Drum level" in full
    assert "settling time up from 41 s" not in short
    assert "settling time up from 41 s" in full


def test_rank_of_a_revised_night_says_so(folder: Path, capsys: pytest.CaptureFixture[str]) -> None:
    run("rank", "--night", "2026-03-13", "--config", folder)
    assert "revision 2 of 2" in capsys.readouterr().out
    run("rank", "--night", "2026-03-13", "--as-published", "--config", folder)
    assert "revision 1 of 2" in capsys.readouterr().out


def test_rank_works_while_the_register_is_being_edited(
    tmp_path: Path, capsys: pytest.CaptureFixture[str]
) -> None:
    with stored.filled(tmp_path / "site"):
        (tmp_path / "site" / "loops.csv").write_text("tag,pv\nFIC-")
    assert run("rank", "--config", tmp_path / "site") == 0
    assert "FIC-101" in capsys.readouterr().out


def test_history_shows_numbers_with_unit_interval_and_outcome(
    folder: Path, capsys: pytest.CaptureFixture[str]
) -> None:
    assert run("history", "FIC-101", "--config", folder) == 0
    printed = " ".join(capsys.readouterr().out.split())
    for text in (
        "rise time 12.3 s (11.9 to 12.8): undecided",
        "settling time (2 %) longer than 55 s: out of spec (the next move came before it",
        "Not counted: not in an automatic mode",
        "50 → 55 m3/h step, window 600 s, usable",
        "2026-03-13 08:00:00",  # 07:00 UTC is 08:00 in Oslo in March
        "range 0 to 100 m3/h",
        "tighter since the new valve",
        "75 %",
    ):
        assert text in printed


def test_history_json_is_the_report(folder: Path, capsys: pytest.CaptureFixture[str]) -> None:
    words = ("history", "FIC-101", "--since", "2026-03-13", "--until", "2026-03-13", "--json")
    assert run(*words, "--config", folder) == 0
    found = json.loads(capsys.readouterr().out)
    assert [step["sp_to"] for step in found["steps"]] == [55.0, 60.0, 65.0]


def test_store_status_shows_where_every_cell_went(
    folder: Path, capsys: pytest.CaptureFixture[str]
) -> None:
    assert run("store", "status", "--config", folder) == 0
    printed = " ".join(capsys.readouterr().out.split())
    # rows read taken duplicate blank unregistered refused, as the fixture wrote them
    assert "all 2 files 2 14 10 1 1 1 1" in printed
    assert "The sum holds for every file" in printed
    assert "exports/day2.csv: the file is empty" in printed


def test_store_status_json(folder: Path, capsys: pytest.CaptureFixture[str]) -> None:
    assert run("store", "status", "--json", "--config", folder) == 0
    assert json.loads(capsys.readouterr().out)["cells"]["balance"] == 0


def test_store_dump_is_json_lines(folder: Path, capsys: pytest.CaptureFixture[str]) -> None:
    assert run("store", "dump", "--config", folder) == 0
    lines = [json.loads(line) for line in capsys.readouterr().out.splitlines()]
    tags = {line["loop"]["tag"] for line in lines if "loop" in line}
    assert tags == {"FIC-101", "LIC-102", "TIC-103"}


def test_store_upgrade_then_status(tmp_path: Path, capsys: pytest.CaptureFixture[str]) -> None:
    place = stored.lay(tmp_path / "site")
    assert run("store", "status", "--config", place) == 0
    assert "store upgrade" in capsys.readouterr().out
    assert run("rank", "--config", place) == 2
    assert "store upgrade" in capsys.readouterr().err
    assert run("store", "upgrade", "--config", place) == 0
    assert "upgraded" in capsys.readouterr().out
    assert run("store", "upgrade", "--config", place) == 0
    assert "already" in capsys.readouterr().out


def test_the_status_of_a_newer_store_does_not_send_to_an_upgrade_that_refuses(
    tmp_path: Path, capsys: pytest.CaptureFixture[str]
) -> None:
    place = stored.lay(tmp_path / "site")
    assert run("store", "upgrade", "--config", place) == 0
    with closing(sqlite3.connect(place / "site.db")) as connection, connection:
        connection.execute("UPDATE alembic_version SET version_num = '9999'")
    assert run("store", "status", "--config", place) == 0
    assert "Use the newer program." in capsys.readouterr().out
    assert run("store", "upgrade", "--config", place) == 2


@pytest.mark.parametrize(("withdrawn", "said"), [(12, True), (5, False)])
def test_an_audit_that_withdraws_more_than_it_finds_says_so(
    withdrawn: int, said: bool, capsys: pytest.CaptureFixture[str]
) -> None:
    report = replace(ALL_WELL, steps_new=4, steps_withdrawn=withdrawn)
    print_report(Console(), report)
    assert ("More setpoint changes were withdrawn" in capsys.readouterr().out) == said


@pytest.mark.parametrize(
    ("change", "code"),
    [
        ({}, 0),
        ({"files_new": 0}, 4),
        ({"quiet": ("The exports have stopped.",)}, 5),
        ({"quiet": ("The exports have stopped.",), "files_new": 0}, 5),
        ({"files_refused": (Fault("a.csv", "is empty", "export it again"),)}, 3),
        ({"account": CellAccount(read=100, taken=98, refused={"not_a_number": 2})}, 3),
        ({"account": CellAccount(read=100, taken=99, refused={"not_a_number": 1})}, 0),
        (
            {
                "files_refused": (Fault("a.csv", "is empty", "export it again"),),
                "quiet": ("The exports have stopped.",),
                "files_new": 0,
            },
            3,
        ),
    ],
)
def test_exit_codes_of_an_audit_and_their_order(change: dict[str, Any], code: int) -> None:
    assert exit_code(replace(ALL_WELL, **change)) == code


@pytest.mark.parametrize(
    ("words", "message"),
    [
        (("frobnicate",), "invalid choice: 'frobnicate'"),
        (("rank", "--nigth", "2026-03-14"), "unrecognized arguments: --nigth"),
        (("rank", "--night", "14.3.2026"), "'14.3.2026' is not a date"),
        (("rank", "--as-pub"), "unrecognized arguments: --as-pub"),
        (("history",), "the following arguments are required: TAG"),
        (("nightly", "--from", "2026-03-14"), "--from and --to go together"),
        (("nightly", "--from", "2026-03-14", "--to", "2026-03-13"), "is after --to"),
        (("demo", "--loops", "0"), "'0' is not a number of loops"),
        (("store",), "the following arguments are required: ACTION"),
        (("store", "prune", "lists"), "arguments are required: --older-than"),
        (("store", "prune", "--older-than", "2y"), "arguments are required: KIND"),
        (("store", "prune", "days", "--older-than", "2y"), "invalid choice: 'days'"),
        (("store", "prune", "runs", "--older-than", "2w"), "'2w' is no age; write 90d, 18m or 2y"),
        (
            ("store", "prune", "runs", "--older-than", "2y", "--dry-run", "--vacuum"),
            "--dry-run and --vacuum do not go together",
        ),
        (("rank", "--config", "/nowhere/site.toml"), "there is no such file"),
    ],
)
def test_a_wrong_command_is_one_message_and_exit_2(
    words: tuple[str, ...], message: str, capsys: pytest.CaptureFixture[str]
) -> None:
    assert run(*words) == 2
    printed = capsys.readouterr()
    assert message in printed.err
    assert "Traceback" not in printed.err
    assert printed.out == ""


def test_an_unknown_tag_or_night_is_one_line(
    folder: Path, capsys: pytest.CaptureFixture[str]
) -> None:
    assert run("history", "FIC-110", "--config", folder) == 2
    assert "did you mean FIC-101" in capsys.readouterr().err
    assert run("rank", "--night", "2020-01-01", "--config", folder) == 2
    assert len(capsys.readouterr().err.splitlines()) == 1


def test_wrong_files_are_told_all_at_once_with_line_and_column(
    tmp_path: Path, capsys: pytest.CaptureFixture[str]
) -> None:
    place = stored.lay(tmp_path / "site")
    (place / "loops.csv").write_text("tag,pv,sp,criticality\nFIC-1,F1.PV,F1.SP,9\n")
    (place / "specs.csv").write_text("tag,valid_from,rise_time_s\nFIC-1,2026-01-01,soon\n")
    for command in ("nightly", "check"):
        assert run(command, "--config", place) == 2
        printed = "".join(capsys.readouterr())
        words = " ".join(printed.split())
        assert "loops.csv:2, column criticality" in words
        assert "specs.csv:2, column rise_time_s" in words
        assert "Traceback" not in printed


def test_an_unexpected_failure_is_one_line_and_exit_1(
    folder: Path, monkeypatch: pytest.MonkeyPatch, capsys: pytest.CaptureFixture[str]
) -> None:
    def fail(*_: object) -> None:
        raise ZeroDivisionError("a fault of our own")

    monkeypatch.setattr(reports, "ranking", fail)
    assert run("rank", "--config", folder) == 1
    told = capsys.readouterr().err
    assert "ZeroDivisionError: a fault of our own" in told
    assert len(told.splitlines()) == 1
    assert run("rank", "--debug", "--config", folder) == 1
    assert "Traceback" in capsys.readouterr().err
    monkeypatch.setenv("LOOPASSAY_DEBUG", "1")
    assert run("rank", "--config", folder) == 1
    assert "Traceback" in capsys.readouterr().err


def test_check_finds_missing_tags_unused_columns_and_broken_files(
    tmp_path: Path, capsys: pytest.CaptureFixture[str]
) -> None:
    place = stored.lay(tmp_path / "site")
    (place / "exports" / "a.csv").write_text(
        "timestamp,F101.PV,F101.SP,F101.OP,F101.MODE,L102.PV,L102.SP,T103.PV,SPARE.PV\n"
        "2026-03-13T00:00:00Z,50,50,40,AUTO,50,50,20,1\n"
    )
    assert run("check", "--config", place) == 0
    printed = " ".join(capsys.readouterr().out.split())
    assert "T103.SP: sp of TIC-103" in printed
    assert "SPARE.PV (dcs)" in printed
    (place / "exports" / "b.csv").write_text("")
    assert run("check", "--json", "--config", place) == 2
    found = json.loads(capsys.readouterr().out)
    assert [fault["file"] for fault in found["faults"]] == ["exports/b.csv"]
    assert found["missing_tags"] == [{"tag": "T103.SP", "loop": "TIC-103", "role": "sp"}]
    assert found["unused_columns"] == [{"exports": "dcs", "column": "SPARE.PV"}]


def test_check_looks_into_the_newest_narrow_files_for_tags_that_come_late(
    tmp_path: Path, capsys: pytest.CaptureFixture[str]
) -> None:
    place = stored.lay(tmp_path / "site")
    (place / "site.toml").write_text(stored.SITE + 'layout = "narrow"\n')
    early = [tag for tag in stored.export_read().named if tag != "L102.SP"]
    stamps = [f"2026-03-13T00:{i // 60:02}:{i % 60:02}Z" for i in range(400)]
    rows = [f"{stamp},{tag},1" for stamp in stamps for tag in early]
    rows.append("2026-03-13T02:00:00Z,L102.SP,1")
    (place / "exports" / "a.csv").write_text("\n".join(["timestamp,tag,value", *rows]) + "\n")
    assert run("check", "--json", "--config", place) == 0
    found = json.loads(capsys.readouterr().out)
    assert {missing["tag"] for missing in found["missing_tags"]} == {"T103.PV", "T103.SP"}


def test_check_says_which_export_kind_has_no_file(
    tmp_path: Path, capsys: pytest.CaptureFixture[str]
) -> None:
    assert run("check", "--json", "--config", stored.lay(tmp_path / "site")) == 0
    assert json.loads(capsys.readouterr().out)["exports_without_files"] == ["dcs"]


def test_nightly_then_nothing_new(tmp_path: Path, capsys: pytest.CaptureFixture[str]) -> None:
    place = stored.lay(tmp_path / "site")
    assert run("store", "upgrade", "--config", place) == 0
    stamp = datetime.now(UTC).replace(microsecond=0).isoformat()
    tags = (
        "F101.PV",
        "F101.SP",
        "F101.OP",
        "F101.MODE",
        "L102.PV",
        "L102.SP",
        "T103.PV",
        "T103.SP",
    )
    rows = [",".join(["timestamp", *tags])]
    rows += [f"{stamp},50,50,40,AUTO,50,50,20,20"]
    (place / "exports" / "a.csv").write_text("\n".join(rows) + "\n")
    capsys.readouterr()
    assert run("nightly", "--json", "--workers", "1", "--config", place) in (0, 5)
    first = json.loads(capsys.readouterr().out)
    assert (first["files_new"], first["cells"]["taken"]) == (1, 8)
    second = run("nightly", "--json", "--workers", "1", "--config", place)
    again = json.loads(capsys.readouterr().out)
    assert again["files_new"] == 0
    assert second == again["exit_code"]
    assert second in (4, 5)


def test_demo_refuses_a_folder_with_other_things_in_it(
    tmp_path: Path, capsys: pytest.CaptureFixture[str]
) -> None:
    (tmp_path / "letters.txt").write_text("mine")
    assert run("demo", tmp_path) == 2
    assert "is not empty and no demonstration" in capsys.readouterr().err
    assert [path.name for path in tmp_path.iterdir()] == ["letters.txt"]


def test_a_small_demo_ranks_its_loops_and_says_what_to_open_next(
    tmp_path: Path, capsys: pytest.CaptureFixture[str]
) -> None:
    place = tmp_path / "plant"
    words = ("demo", place, "--loops", "3", "--days", "6", "--workers", "1")
    assert run(*words) == 0
    printed = capsys.readouterr().out
    truth = json.loads((place / "truth.json").read_text())
    for loop in truth["loops"]:
        assert loop["tag"] in printed
    assert "loopassay history" in printed
    assert "truth.json" in printed
    assert run(*words, "--json") == 0
    again = json.loads(capsys.readouterr().out)
    assert {row["tag"] for row in again["loops"]} == {loop["tag"] for loop in truth["loops"]}
    assert run("demo", place, "--loops", "4", "--days", "6") == 2
    assert "3 loops and 6 days" in capsys.readouterr().err
    assert len({night.night for night in _nights(place)}) == demo_command.NIGHTS


def _nights(place: Path) -> list[Any]:
    with open_store(f"sqlite:///{place / 'site.db'}") as store, store.read() as session:
        return queries.nights(session)


def test_python_m_audit_and_the_version() -> None:
    command = [sys.executable, "-m", "audit", "--version"]
    done = subprocess.run(command, capture_output=True, text=True, check=True)
    assert done.stdout.startswith("loopassay ")


def test_a_reader_that_stops_reading_is_no_failure(folder: Path) -> None:
    command = [sys.executable, "-m", "audit", "store", "dump", "--config", str(folder)]
    with subprocess.Popen(command, stdout=subprocess.PIPE, stderr=subprocess.PIPE) as job:
        assert job.stdout is not None
        assert job.stderr is not None
        job.stdout.close()
        told = job.stderr.read()
        assert job.wait() == 0
    assert told == b""


def test_a_terminal_without_the_letters_fails_on_none(folder: Path) -> None:
    command = [sys.executable, "-m", "audit", "history", "FIC-101", "--config", str(folder)]
    env = {**os.environ, "PYTHONIOENCODING": "ascii"}
    done = subprocess.run(command, capture_output=True, env=env, check=False)
    assert (done.returncode, done.stderr) == (0, b"")
    assert b"50 ? 55" in done.stdout


@pytest.mark.parametrize(("on_path", "named"), [(True, "loopassay"), (False, "bin/loopassay")])
def test_what_to_open_next_can_be_copied_where_no_environment_is_active(
    tmp_path: Path, monkeypatch: pytest.MonkeyPatch, on_path: bool, named: str
) -> None:
    program = tmp_path / "bin" / "loopassay"
    program.parent.mkdir()
    program.write_text("")
    program.chmod(0o755)
    monkeypatch.chdir(tmp_path)
    monkeypatch.setattr(sys, "argv", [str(program), "demo"])
    monkeypatch.setenv("PATH", str(program.parent) if on_path else "")
    assert demo_command.called_as() == named

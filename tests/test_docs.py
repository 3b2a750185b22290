"""The documents say what there is: every command, option, setting, code and quantity.

And no more than there is: a command or option the README names exists.
"""

from __future__ import annotations

import argparse
import ast
import re
import tomllib
from collections.abc import Iterator, Mapping
from pathlib import Path

import pytest

from audit import __version__
from audit.cli.arguments import parser
from audit.config import KNOWN
from audit.exports.tally import REFUSED
from audit.records import ChangeKind, Group, LoopKind, Outcome, Quantity, Reason, StandingWord
from audit.register import LOOP_COLUMNS, SPEC_COLUMNS
from audit.reports import words

ROOT = Path(__file__).resolve().parents[1]
README = (ROOT / "README.md").read_text()
DEVELOPERS = (ROOT / "DEVELOPERS.md").read_text()
CI = (ROOT / ".ci" / "run").read_text()
STARTER = (ROOT / "config" / "site.toml").read_text()


def subcommands(
    top: argparse.ArgumentParser, name: str
) -> Iterator[tuple[str, argparse.ArgumentParser]]:
    """Every command with its full name."""
    groups = [a for a in top._actions if isinstance(a, argparse._SubParsersAction)]
    if not groups:
        yield name, top
    for group in groups:
        for word, command in group.choices.items():
            yield from subcommands(command, f"{name} {word}")


COMMANDS = dict(subcommands(parser(), "loopassay"))


def row_of(command: str) -> str:
    """The README's row of a command."""
    found = [line for line in README.splitlines() if line.startswith(f"| `{command}")]
    assert len(found) == 1, f"the table of commands has {len(found)} rows for {command}"
    return found[0]


def options(command: str) -> set[str]:
    return {
        option
        for action in COMMANDS[command]._actions
        for option in action.option_strings
        if option.startswith("--")
    }


@pytest.mark.parametrize("command", COMMANDS)
def test_every_command_and_option_is_in_the_readme_and_no_other(command: str) -> None:
    row = row_of(command)
    shared = {"--config", "--debug", "--help"}
    assert options(command) - shared == set(re.findall(r"--[a-z-]+", row)) - shared
    for option in shared:
        assert f"`{option}" in README


def test_the_readme_names_no_command_that_is_not_there() -> None:
    named = set(
        re.findall(r"loopassay ((?:store )?[a-z]+)\b", README.replace("loopassay-demo", ""))
    )
    assert named <= {command.removeprefix("loopassay ") for command in COMMANDS}


@pytest.mark.parametrize("code", range(6))
def test_every_exit_code_is_in_the_readme(code: int) -> None:
    assert re.search(rf"^\| {code} \| \w", README, re.MULTILINE)


SETTINGS = [(table, key) for table, keys in KNOWN.items() for key in keys]


@pytest.mark.parametrize(("table", "key"), SETTINGS)
def test_every_setting_is_in_the_readme_and_the_starter_file(table: str, key: str) -> None:
    head = f"[[{table}]]" if table == "exports" else f"[{table}]"
    rows = [line for line in README.splitlines() if line.startswith(f"| `{head} ")]
    assert any(re.search(rf"`(?:{re.escape(head)} )?{key}`", row.split(" | ")[0]) for row in rows)
    held = tomllib.loads(STARTER)[table]
    assert key in (held[0] if isinstance(held, list) else held)


def test_the_starter_file_holds_no_setting_that_is_not_known() -> None:
    for table, held in tomllib.loads(STARTER).items():
        for section in held if isinstance(held, list) else [held]:
            assert set(section) <= set(KNOWN[table])


@pytest.mark.parametrize(
    "column",
    sorted(
        {
            *LOOP_COLUMNS.required,
            *LOOP_COLUMNS.optional,
            *SPEC_COLUMNS.required,
            *SPEC_COLUMNS.optional,
        }
    ),
)
def test_every_column_is_in_the_readme(column: str) -> None:
    assert f"`{column}`" in README


@pytest.mark.parametrize(
    "code",
    [
        word.value
        for words_ in (Reason, StandingWord, Group, Outcome, ChangeKind, LoopKind)
        for word in words_
    ],
)
def test_every_code_of_the_vocabulary_is_in_the_readme(code: str) -> None:
    assert f"`{code}`" in README


@pytest.mark.parametrize("reason", Reason)
def test_every_reason_has_its_row_in_the_readme(reason: Reason) -> None:
    assert re.search(rf"^\| `{reason.value}` \| \w", README, re.MULTILINE)


@pytest.mark.parametrize("code", REFUSED)
def test_every_reason_a_cell_is_refused_for_has_its_row(code: str) -> None:
    assert re.search(rf"^\| `{code}` \| \w", README, re.MULTILINE)


def list_reasons() -> set[str]:
    """The codes of reasons in the list, as the ranking writes them: "…" stands for a quantity."""
    found: set[str] = set()
    for path in (ROOT / "audit" / "ranking").glob("*.py"):
        for node in ast.walk(ast.parse(path.read_text())):
            if isinstance(node, ast.Call) and getattr(node.func, "id", "") == "ListReason":
                found |= set(codes_of(node.args[0]))
    return found


def codes_of(code: ast.expr) -> Iterator[str]:
    """What a code can read like: plain text, or a name and what is put behind it."""
    if isinstance(code, ast.Constant):
        yield str(code.value)
    elif isinstance(code, ast.JoinedStr):
        ending = code.values[-1]
        yield f"…{ending.value!s}" if isinstance(ending, ast.Constant) else "…"


def test_every_reason_of_the_list_has_its_row_in_the_readme() -> None:
    codes = list_reasons() - {"…", "…_often"}
    assert len(codes) > 10
    made = {"…_slower", "…_larger", "oscillating_often", "cut_short_often"}
    rows = " ".join(line for line in README.splitlines() if line.startswith("| `"))
    assert {code for code in codes | made if f"`{code}`" not in rows} == set()


def glossary() -> Mapping[str, tuple[str, str]]:
    """Key -> (name, unit) of the glossary's table of quantities."""
    rows = re.findall(
        r"^\| `(\w+)` \| ([^|]+) \| ([^|]+) \| [^|]{10,} \|$", DEVELOPERS, re.MULTILINE
    )
    return {key: (name.strip(), unit.strip()) for key, name, unit in rows}


@pytest.mark.parametrize("quantity", Quantity)
def test_every_quantity_is_in_the_glossary_with_its_unit(quantity: Quantity) -> None:
    name, unit = glossary()[quantity.value]
    term = words.QUANTITY[quantity]
    assert name.startswith(term.name)
    assert unit.startswith(term.unit or "1")


def test_the_glossary_holds_no_quantity_that_is_gone() -> None:
    assert set(glossary()) == {q.value for q in Quantity}


def test_the_readme_and_continuous_integration_run_the_same_tests() -> None:
    commands = re.findall(r"```sh\n(.+)\n```", README)
    assert len(commands) == 2
    _, _, tests = commands[1].partition(" && ")
    assert tests in CI.splitlines()
    for part in ("ruff check .", "ruff format --check .", "mypy", "pytest"):
        assert part in tests


def test_both_commands_are_one_line_and_name_the_system_package() -> None:
    for command in re.findall(r"```sh\n(.+)\n```", README):
        assert "apt-get install -y python3-venv" in command


def test_the_job_stands_in_one_paragraph_at_the_top() -> None:
    head, paragraph, *_ = README.split("\n\n")
    assert head == "# Loopassay"
    assert "ranked list" in paragraph
    assert "changes nothing in the plant" in " ".join(paragraph.split())


def test_versions_agree_and_the_changelog_has_this_one() -> None:
    project = tomllib.loads((ROOT / "pyproject.toml").read_text())["project"]
    assert project["version"] == __version__
    assert f"\n### {__version__}\n" in DEVELOPERS
    assert "\n#### Changes that alter results\n" in DEVELOPERS


@pytest.mark.parametrize(
    "room",
    sorted(
        p.stem
        for p in (ROOT / "audit").iterdir()
        if p.suffix == ".py" or (p / "__init__.py").exists()
    ),
)
def test_every_room_is_on_the_map(room: str) -> None:
    assert room.startswith("__") or re.search(rf"`{room}/?`", DEVELOPERS)


def test_the_output_shown_is_of_the_demonstration_site() -> None:
    shown = re.findall(r"```text\n(.+?)\n```", README, re.DOTALL)
    assert len(shown) == 2
    assert "ranked loop list, night" in shown[0]
    assert "Setpoint changes, newest first" in shown[1]

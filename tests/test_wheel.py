"""The wheel alone, in a fresh environment elsewhere, does the whole job: nothing of the checkout is
needed to run it.
"""

from __future__ import annotations

import json
import os
import shutil
import subprocess
import sys
from collections.abc import Sequence
from pathlib import Path

import pytest

ROOT = Path(__file__).resolve().parents[1]
PARTS = ("audit", "config", "demo_site", "migrations", "pyproject.toml", "README.md")


def run(command: Sequence[str | Path], folder: Path) -> str:
    """Standard output of a command run in ``folder`` without the checkout on its path."""
    env = {key: value for key, value in os.environ.items() if not key.startswith("PYTHON")}
    done = subprocess.run(
        [str(word) for word in command],
        cwd=folder,
        env=env,
        stdin=subprocess.DEVNULL,
        capture_output=True,
        text=True,
        check=False,
    )
    assert done.returncode == 0, f"{command}: {done.returncode}\n{done.stdout}\n{done.stderr}"
    return done.stdout


def build_wheel(place: Path) -> Path:
    """The wheel, built from a copy so that the checkout stays as it is."""
    source = place / "source"
    source.mkdir()
    for part in PARTS:
        if (ROOT / part).is_dir():
            shutil.copytree(
                ROOT / part, source / part, ignore=shutil.ignore_patterns("__pycache__")
            )
        else:
            shutil.copy(ROOT / part, source / part)
    run([sys.executable, "-m", "build", "--wheel", "--outdir", place, source], place)
    (wheel,) = place.glob("*.whl")
    shutil.rmtree(source)
    return wheel


@pytest.mark.slow
def test_the_wheel_alone_runs_the_demonstration(tmp_path: Path) -> None:
    wheel = build_wheel(tmp_path)
    run([sys.executable, "-m", "venv", tmp_path / "venv"], tmp_path)
    scripts = tmp_path / "venv" / "bin"
    run([scripts / "python", "-m", "pip", "install", "-q", wheel], tmp_path)
    loopassay = scripts / "loopassay"

    where = run([scripts / "python", "-c", "import audit; print(audit.__file__)"], tmp_path)
    assert Path(where.strip()).is_relative_to(tmp_path / "venv")

    site = tmp_path / "plant"
    printed = run([loopassay, "demo", site, "--loops", "6", "--days", "20"], tmp_path)
    truth = json.loads((site / "truth.json").read_text())
    assert len(truth["loops"]) == 6
    for loop in truth["loops"]:
        assert loop["tag"] in printed
    found = json.loads(run([loopassay, "rank", "--json", "--config", site], tmp_path))
    assert [row["rank"] for row in found["loops"]] == [1, 2, 3, 4, 5, 6]
    status = json.loads(run([loopassay, "store", "status", "--json", "--config", site], tmp_path))
    assert status["exports"] == {"taken": 20}
    assert status["cells"]["balance"] == 0
    assert status["steps"]["usable"] > 0
    assert "all can be read" in run([loopassay, "check", "--config", site], tmp_path)

    starter = "from importlib.resources import files; print(files('audit.starter'))"
    folder = Path(run([scripts / "python", "-c", starter], tmp_path).strip())
    assert {"site.toml", "loops.csv", "specs.csv"} <= {path.name for path in folder.iterdir()}

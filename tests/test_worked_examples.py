"""Each worked example runs as a person would run it, and ends in the assertions that it makes itself."""

from __future__ import annotations

import os
import subprocess
import sys
from pathlib import Path

import pytest

REPOSITORY = Path(__file__).resolve().parents[1]
FOLDER = REPOSITORY / "worked_examples"
SCRIPTS = sorted(FOLDER.glob("*/*.py"))


def test_the_examples_are_numbered_without_a_gap() -> None:
    numbers = sorted(int(path.name[:2]) for path in FOLDER.iterdir() if path.is_dir() and path.name[:2].isdigit())
    assert numbers == list(range(1, len(numbers) + 1))
    assert {path.parent for path in SCRIPTS} == {path for path in FOLDER.iterdir() if path.is_dir() and any(path.glob("*"))}


@pytest.mark.parametrize("script", SCRIPTS, ids=lambda path: path.parent.name)
def test_the_example_says_what_it_plants_and_finds_it(script: Path, tmp_path: Path) -> None:
    text = script.read_text(encoding="utf-8")
    assert "planted" in text and "\nassert " in text
    environment = {**os.environ, "PYTHONPATH": os.pathsep.join([str(REPOSITORY), os.environ.get("PYTHONPATH", "")])}
    environment.pop("PYTHONOPTIMIZE", None)  # it would leave the assertions out
    done = subprocess.run(
        [sys.executable, "-W", "error::UserWarning", str(script)],
        cwd=tmp_path, env=environment, capture_output=True, text=True, encoding="utf-8", errors="replace",
    )  # fmt: skip
    assert done.returncode == 0, done.stderr
    assert not list(tmp_path.iterdir()), "an example keeps to itself"

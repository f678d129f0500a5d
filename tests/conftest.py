"""The small study that tests of whole runs share."""

from __future__ import annotations

import shutil
from collections.abc import Callable
from pathlib import Path

import pytest


@pytest.fixture(scope="session")
def whole_study(tmp_path_factory: pytest.TempPathFactory) -> Path:
    """A study in which nothing is wrong; not to be changed."""
    from tests.small_study import write_small_study

    folder = tmp_path_factory.mktemp("whole")
    write_small_study(folder)
    return folder


@pytest.fixture
def study(whole_study: Path, tmp_path: Path) -> Path:
    """A copy of it to spoil."""
    return Path(shutil.copytree(whole_study, tmp_path / "study"))


@pytest.fixture
def respelled(study: Path) -> Callable[[str, str], None]:
    """Replace one text of the plan by another."""

    def change(before: str, after: str) -> None:
        path = study / "plan.toml"
        text = path.read_text(encoding="utf-8")
        assert text.count(before) == 1, before
        path.write_text(text.replace(before, after), encoding="utf-8")

    return change

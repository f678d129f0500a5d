"""A small study on disk, and the command line run in this process."""

from __future__ import annotations

import shutil
from collections.abc import Callable
from pathlib import Path

import numpy as np
import pandas as pd
import pytest

import tfstats as tfs
from tfstats.command_line.entry import main

SUBJECTS = ("01", "02", "03", "04", "05", "06", "07")
CHANNELS = ("F3", "Fz", "F4")
FREQUENCIES = (4.0, 6.0, 8.0, 10.0)
TIMES = tuple(round(-0.5 + 0.1 * step, 10) for step in range(14))

PLAN = """\
[study]
name = "small study"
permutations = 64
[input]
files = "power/S{subject}.npz"
trial_table = "behaviour/S{subject}.tsv"
[participants]
file = "participants.tsv"
[conditions]
columns = ["memory"]
conditions = ["recalled", "missed"]
[channels]
electrodes = "electrodes.tsv"
adjacency = "distance"
farthest = 1.5
[baseline]
window = [-0.5, -0.2]
[[contrast]]
name = "recalled against missed"
design = "paired"
first = "recalled"
second = "missed"
[[contrast]]
name = "missed changes"
design = "against_zero"
condition = "missed"
[[band]]
name = "theta"
frequencies = [4, 8]
[[window]]
name = "late"
times = [0.3, 0.7]
[[band_test]]
name = "memory"
design = "paired"
first = "recalled"
second = "missed"
"""


def trial_power(subject: str, **changed: object) -> tfs.TrialPower:
    """Power of one subject: chi-square around a 1/f background, recalled trials a little stronger after 0 s."""
    draws = np.random.default_rng(int(subject))
    recalled = np.arange(12) % 2 == 0
    values = draws.chisquare(8, size=(12, len(CHANNELS), len(FREQUENCIES), len(TIMES))) / 8
    values /= np.array(FREQUENCIES)[:, None]
    values[recalled] *= np.where(np.array(TIMES) > 0, 2.0, 1.0)
    settings: dict[str, object] = {
        "frequencies": FREQUENCIES, "times": TIMES, "channels": CHANNELS, "subject": subject,
        "trials": pd.DataFrame({"number": np.arange(12)}), **changed,
    }  # fmt: skip
    return tfs.TrialPower(settings.pop("values", values), **settings)


def behaviour(rows: int = 12) -> pd.DataFrame:
    return pd.DataFrame({"memory": ["recalled", "missed"] * (rows // 2) + ["recalled"] * (rows % 2)})


@pytest.fixture(scope="session")
def whole_study(tmp_path_factory: pytest.TempPathFactory) -> Path:
    """A study in which nothing is wrong; not to be changed."""
    folder = tmp_path_factory.mktemp("whole")
    for name in ("power", "behaviour"):
        (folder / name).mkdir()
    for subject in SUBJECTS:
        tfs.write_power(folder / "power" / f"S{subject}.npz", trial_power(subject))
        behaviour().to_csv(folder / "behaviour" / f"S{subject}.tsv", sep="\t", index=False)
    ages = pd.DataFrame({"participant_id": SUBJECTS, "age": range(20, 20 + len(SUBJECTS))})
    ages.to_csv(folder / "participants.tsv", sep="\t", index=False)
    places = pd.DataFrame({"name": CHANNELS, "x": [-1.0, 0.0, 1.0], "y": [1.0] * 3, "z": [0.0] * 3})
    places.to_csv(folder / "electrodes.tsv", sep="\t", index=False)
    (folder / "plan.toml").write_text(PLAN, encoding="utf-8")
    return folder


@pytest.fixture
def study(whole_study: Path, tmp_path: Path) -> Path:
    """A copy of it to spoil."""
    return Path(shutil.copytree(whole_study, tmp_path / "study"))


@pytest.fixture
def tfstats_command(capsys: pytest.CaptureFixture[str]) -> Callable[..., tuple[int, str, str]]:
    """Run the command in this process: exit code, standard output, standard error."""

    def run(*arguments: object) -> tuple[int, str, str]:
        capsys.readouterr()
        with pytest.raises(SystemExit) as stop:
            main([str(argument) for argument in arguments])
        said = capsys.readouterr()
        return int(stop.value.code or 0), said.out, said.err

    return run


@pytest.fixture
def respelled(study: Path) -> Callable[[str, str], None]:
    """Replace one text of the plan by another."""

    def change(before: str, after: str) -> None:
        path = study / "plan.toml"
        text = path.read_text(encoding="utf-8")
        assert text.count(before) == 1, before
        path.write_text(text.replace(before, after), encoding="utf-8")

    return change

"""A small study on disk in which nothing is wrong: seven people, three channels, trial tables, a plan."""

from __future__ import annotations

from pathlib import Path

import numpy as np
import pandas as pd

import tfstats as tfs

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


def write_small_study(folder: Path) -> None:
    """Power, behaviour, participants, electrodes and plan.toml, into a folder that exists."""
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

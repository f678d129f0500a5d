"""Tiny studies on disk, and the command called as the shell calls it."""

import io
from contextlib import redirect_stderr, redirect_stdout
from types import SimpleNamespace

import numpy as np
import pandas as pd
import pytest

import tfstats as tfs
from tfstats.command_line import entry

PLAN = """[study]
name = "tiny"
permutations = 64
[input]
files = "power/S{subject}.npz"
[participants]
file = "participants.tsv"
[conditions]
columns = ["memory"]
conditions = ["recalled", "missed"]
[channels]
adjacency = "none"
[baseline]
window = [-0.4, -0.2]
[test]
times = [0.0, 0.4]
correction = { kind = "cluster_mass", forming_p = 0.05 }
[[contrast]]
name = "recalled against missed"
design = "paired"
first = "recalled"
second = "missed"
"""
TIMES = np.arange(-5, 6) / 10


class TinyStudy:
    """Subjects, 2 conditions x 4 trials, 2 channels x 3 frequencies x 11 times; every part can be spoilt."""

    def __init__(self, folder, subjects=6, plan=PLAN):
        self.folder = folder
        self.names = [f"{number:02d}" for number in range(1, subjects + 1)]
        (folder / "power").mkdir(parents=True)
        for name in self.names:
            self.write(name)
        self.participants("participant_id\tage\n" + "".join(f"{name}\t{20 + int(name)}\n" for name in self.names))
        self.plan = folder / "plan.toml"
        self.plan.write_text(plan, encoding="utf-8")

    def file(self, name):
        return self.folder / "power" / f"S{name}.npz"

    def power(self, name, *, channels=("Fz", "Pz"), frequencies=(4.0, 8.0, 12.0), times=TIMES, memory=None, values=None):
        memory = ["recalled", "missed"] * 4 if memory is None else memory
        rng = np.random.default_rng([11, int(name)])
        if values is None:
            values = rng.gamma(4.0, 0.25, size=(len(memory), len(channels), len(frequencies), len(times)))
        return tfs.TrialPower(
            values, frequencies=frequencies, times=times, channels=channels, trials=pd.DataFrame({"memory": memory}),
            subject=name,
        )  # fmt: skip

    def write(self, name, **parts):
        tfs.write_power(self.file(name), self.power(name, **parts))

    def spoil(self, name, change):
        """Replace the array of a file by what nobody would write on purpose."""
        with np.load(self.file(name)) as pack:
            arrays = dict(pack)
        arrays["power"] = change(arrays["power"])
        np.savez(self.file(name), **arrays)

    def participants(self, text):
        (self.folder / "participants.tsv").write_text(text, encoding="utf-8")

    def edit(self, *pairs, add=""):
        text = self.plan.read_text(encoding="utf-8")
        for old, new in pairs:
            assert old in text
            text = text.replace(old, new)
        self.plan.write_text(text + add, encoding="utf-8")

    def inside(self):
        """What lies in the study's folder, but for the averages kept between runs."""
        return sorted(entry.name for entry in self.folder.iterdir() if entry.suffix != ".cache")


def tfstats_command(*arguments):
    """Run the command in this process: .code, .out, .err."""
    out, err = io.StringIO(), io.StringIO()
    with redirect_stdout(out), redirect_stderr(err), pytest.raises(SystemExit) as leaving:
        entry.main([str(argument) for argument in arguments])
    return SimpleNamespace(code=leaving.value.code, out=out.getvalue(), err=err.getvalue())

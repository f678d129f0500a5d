"""The demo: a simulated study with a known answer, written to files with its plan."""

from __future__ import annotations

from pathlib import Path

from tfstats.foundations.errors import refusal
from tfstats.power_files import write_power
from tfstats.simulated_power import lamp_electrodes, lamp_participants, lamp_sequences, simulate_study

__all__ = ["DEMO_PLAN", "write_demo_study"]

DEMO_PLAN = """\
# The signal-lamp study (simulated): sequences of lamps that were later recalled or missed.
# Planted: theta (4 to 8 Hz) 1.2 dB higher in recalled than in missed, 0.3 to 0.9 s, at F3, Fz, F4;
#          alpha (8 to 13 Hz) 1.5 dB lower, 0.5 to 1.2 s, at P3, Pz, P4.

[study]
name = "signal lamps (simulated)"
alpha = 0.05
permutations = {permutations}
seed = 0

[input]
files = "power/S{{subject}}.h5"

[participants]
file = "participants.tsv"

[conditions]
columns = ["memory"]
conditions = ["recalled", "missed"]

[channels]
electrodes = "electrodes.tsv"
adjacency = "sphere"

[channels.groups]
frontal = ["F3", "Fz", "F4"]
posterior = ["P3", "Pz", "P4"]

[baseline]
window = [-0.5, -0.2]
unit = "decibel"
reference = "pooled"
order = "average_first"

[test]
times = [0.0, 1.5]
correction = {{ kind = "cluster_mass", forming_p = 0.01 }}

[[contrast]]
name = "recalled against missed"
design = "paired"
first = "recalled"
second = "missed"

[[contrast]]
name = "recalled against baseline"
design = "against_zero"
condition = "recalled"

[[band]]
name = "theta"
frequencies = [4, 8]

[[band]]
name = "alpha"
frequencies = [8, 13]

[[band]]
name = "theta - alpha"
frequencies = ["theta", "alpha"]

[[window]]
name = "theta window"
times = [0.3, 0.9]

[[window]]
name = "alpha window"
times = [0.5, 1.2]

[[band_test]]
name = "recalled against missed"
design = "paired"
first = "recalled"
second = "missed"

[[band_test]]
name = "recalled exceeds chance"
design = "against_zero"
condition = "recalled"
"""


def write_demo_study(folder: Path, *, subjects: int = 20, permutations: int = 10_000) -> Path:
    """Simulate the study, write power, tables and plan into a new folder, and return the plan's path."""
    above = next(place for place in (folder, *folder.resolve().parents) if place.exists())
    if not above.is_dir():
        raise refusal(str(folder), "a place for a folder", f"one at the file {above}", "choose a new folder")
    if (folder / "plan.toml").exists() or (folder / "power").exists():
        raise refusal(str(folder), "a folder without a plan or power", "one that has them", "choose a new folder")
    design = lamp_sequences(subjects=subjects)
    (folder / "power").mkdir(parents=True)
    for power in simulate_study(design):
        write_power(folder / "power" / f"S{power.subject}.h5", power)
    for name, table in (("participants.tsv", lamp_participants(design)), ("electrodes.tsv", lamp_electrodes())):
        table.to_csv(folder / name, sep="\t", index=False, encoding="utf-8", lineterminator="\n")
    plan = folder / "plan.toml"
    plan.write_text(DEMO_PLAN.format(permutations=permutations), encoding="utf-8", newline="\n")
    return plan

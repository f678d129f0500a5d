"""Recalled against missed: a paired contrast over channels, frequencies and times.

Question        Where on the plane of channels, frequencies and times does power differ between two conditions of the same
                people, with the error rate held over the whole plane, and how large is the difference?

Data            Made here, so that the answer is known: 20 people watch sequences of signal lamps and are asked for them
                later; each trial is `recalled` or `missed`.  8 channels, 3 to 40 Hz, -0.7 to 1.5 s, about 76 trials each,
                on a 1/f background that differs between people.

What is planted Theta, 4 to 8 Hz, rises from 0.3 to 0.9 s at F3, Fz and F4: recalled +1.6 dB, missed +0.4 dB, so the
                difference is +1.2 dB.
                Alpha, 8 to 13 Hz, falls from 0.5 to 1.2 s at P3, Pz and P4: recalled -2.0 dB, missed -0.5 dB, so the
                difference is -1.5 dB.
                Each fades out within 0.25 octaves and 0.1 s.  Elsewhere the two conditions do not differ.

What must come  A mask that covers most of what is planted and little else; and in the table of bands, which were named
                beforehand, 95 % intervals that hold the planted sizes.  The assertions at the end say so.

Run it          python worked_examples/01_paired_contrast/paired_contrast.py      (about 15 s)
"""

import numpy as np

import tfstats as tfs
from tfstats.simulated_power import LAMP_GROUPS, lamp_electrodes, lamp_sequences, planted_decibels, simulate_study

design = lamp_sequences()

# -- what a person would type.  With files of one's own: powers = tfs.PowerFiles("power/S{subject}.h5") -----------------
powers = simulate_study(design)
maps = tfs.condition_maps(powers, "memory", tfs.Baseline(window=(-0.5, -0.2)))
contrast = tfs.paired(maps.select(times=(0.0, 1.5)), "recalled", "missed")
neighbours = tfs.channel_adjacency(lamp_electrodes())
result = tfs.permutation_test(contrast, tfs.ClusterMass(forming_p=0.01), adjacency=neighbours)
print(result.summary())
tests = {"recalled against missed": lambda means: tfs.paired(means, "recalled", "missed")}
bands, windows = {"theta": (4, 8), "alpha": (8, 13)}, {"0.3 to 0.9 s": (0.3, 0.9), "0.5 to 1.2 s": (0.5, 1.2)}
table = tfs.band_table(maps, tests, bands, windows, channel_groups=LAMP_GROUPS)
print(table.to_string(index=False))
# -- so much for that; now whether it is true ---------------------------------------------------------------------------

difference = planted_decibels(design, "recalled") - planted_decibels(design, "missed")
difference = difference[..., np.isin(maps.times, result.times)]
strong, nothing = np.abs(difference) >= 0.6, difference == 0.0
covered = np.mean(result.mask[strong])
stray = np.sum(result.mask & nothing) / np.sum(result.mask)
print(f"\nThe mask covers {covered:.0%} of what was planted; {stray:.1%} of it lies where nothing was planted.")
assert covered > 0.8
assert stray < 0.1
assert np.all(np.sign(result.estimate[result.mask & strong]) == np.sign(difference[result.mask & strong]))

for band, window, group, planted in (
    ("theta", "0.3 to 0.9 s", "frontal", 1.2),
    ("alpha", "0.5 to 1.2 s", "posterior", -1.5),
):
    row = table[(table["band"] == band) & (table["window"] == window) & (table["channels"] == group)].iloc[0]
    held = row["low"] <= planted <= row["high"]
    print(f"{band}, {group}: planted {planted:+.1f} dB, found {row['estimate']:+.2f} [{row['low']:.2f}, {row['high']:.2f}] dB.")
    assert held and row["p_corrected"] <= 0.05

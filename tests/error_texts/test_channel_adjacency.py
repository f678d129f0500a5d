"""The exact text of each refusal of channel_adjacency."""

import numpy as np
import pandas as pd
import pytest

import tfstats as tfs

RING = [[0, 0, 1], [0, 0.6, 0.8], [0, -0.6, 0.8], [-0.6, 0, 0.8], [0.6, 0, 0.8]]


def electrodes(positions, names=None):
    positions = np.asarray(positions, dtype=float).reshape(-1, 3)
    names = names or [f"E{number}" for number in range(len(positions))]
    return pd.DataFrame({"name": names, "x": positions[:, 0], "y": positions[:, 1], "z": positions[:, 2]})


def pairs(*rows):
    return pd.DataFrame(list(rows), columns=["first", "second"])


EXACT = {
    "rule and farthest": (
        lambda: tfs.channel_adjacency({}, rule="Sphere", farthest=-1),
        'channel_adjacency, rule: expected one of "distance", "pairs", "sphere", got \'Sphere\'; choose one of them.',
        "channel_adjacency: expected a DataFrame of electrodes, got dict; read the table with pandas.",
        "channel_adjacency, farthest: expected a distance above 0, got -1; give it in the unit of the positions.",
    ),
    "no distance": (
        lambda: tfs.channel_adjacency(electrodes(RING), rule="distance"),
        "channel_adjacency, farthest: expected a distance for the rule distance, got none; give the largest distance of "
        "neighbours.",
    ),
    "a distance for pairs": (
        lambda: tfs.channel_adjacency(pairs(("A", "B")), rule="pairs", farthest=3),
        "channel_adjacency, farthest: expected no distance for the rule pairs, got 3; leave it out.",
    ),
    "columns": (
        lambda: tfs.channel_adjacency(electrodes(RING).rename(columns={"name": "names", "z": "up"})),
        'channel_adjacency: expected a column "name", got "names", "up", "x", "y"; did you mean "names"? rename the column.',
        'channel_adjacency: expected a column "z", got "names", "up", "x", "y"; rename the column.',
    ),
    "positions missing, names twice": (
        lambda: tfs.channel_adjacency(electrodes([*RING, [np.nan, 0, 1]], ["A", "A", "B", "C", "D", "REF"])),
        'channel_adjacency: expected each electrode once, got "A" more than once; keep one row of each.',
        'channel_adjacency: expected a position for every electrode, got none for "REF"; give positions, leave them out or '
        "use pairs.",
    ),
    "no electrodes": (
        lambda: tfs.channel_adjacency(electrodes([])),
        "channel_adjacency: expected at least one electrode, got none; give the electrodes.",
    ),
    "pairs columns": (
        lambda: tfs.channel_adjacency(electrodes(RING), rule="pairs"),
        'channel_adjacency: expected a column "first", got "name", "x", "y", "z"; rename the column.',
        'channel_adjacency: expected a column "second", got "name", "x", "y", "z"; rename the column.',
    ),
    "pairs cells": (
        lambda: tfs.channel_adjacency(pairs(("A", "A"), ("B", "")), rule="pairs"),
        'channel_adjacency: expected pairs of two channels, got "A" with itself; drop these rows.',
        "channel_adjacency: expected two names in each row, got an empty cell; fill in or drop the row.",
    ),
    "no pairs": (
        lambda: tfs.channel_adjacency(pairs(), rule="pairs"),
        "channel_adjacency: expected at least one pair, got none; give the pairs.",
    ),
    "millimetres": (
        lambda: tfs.channel_adjacency(electrodes(np.array(RING) * 90), rule="distance", farthest=0.05),
        "channel_adjacency, farthest: expected at least the smallest distance of two electrodes, 56.92, got 0.05; give it in "
        "the unit of the positions.",
    ),
    "few": (
        lambda: tfs.channel_adjacency(electrodes(RING[:4])),
        'channel_adjacency: expected at least 5 positions to fit a sphere, got 4; use rule "distance" with farthest, or "pairs".',
    ),
    "plane": (
        lambda: tfs.channel_adjacency(electrodes([[0, 0, 0], [1, 0, 0], [0, 1, 0], [1, 1, 0], [2, 1, 0]])),
        'channel_adjacency: expected positions on a sphere, got positions in a plane; use rule "distance" with farthest, or '
        '"pairs".',
    ),
    "inside": (
        lambda: tfs.channel_adjacency(electrodes([*RING, [0, 0, -1], [1, 0, 0], [-1, 0, 0], [0, 1, 0], [0.1, 0, 0]])),
        'channel_adjacency: expected positions within 20% of a sphere (radius 0.8971), got "E5", "E6", "E9" up to 63% off it; '
        'use rule "distance" with farthest, or "pairs".',
    ),
    "one place twice": (
        lambda: tfs.channel_adjacency(electrodes([*RING, [0, 0, 1], [0, 0, -1]])),
        'channel_adjacency: expected a position of its own for each electrode, got the same for "E0", "E5"; correct them.',
    ),
}


@pytest.mark.parametrize("case", EXACT)
def test_text(case):
    refuse, *texts = EXACT[case]
    with pytest.raises(tfs.InputError) as refused:
        refuse()
    assert list(refused.value.problems) == texts

"""The demo's scenario: a signal-lamp memory task.

People watch sequences of lamps light up and are later asked for them; trials are sorted by whether the sequence was
recalled or missed.  Nobody recorded this: the numbers are made, so that the right answer is known.
"""

from __future__ import annotations

import numpy as np
import pandas as pd

from tfstats.foundations.random_streams import generator
from tfstats.simulated_power.study_design import PlantedEffect, StudyDesign

__all__ = ["LAMP_GROUPS", "lamp_electrodes", "lamp_participants", "lamp_sequences"]

# Inclination from the vertex and azimuth from the right ear, in degrees; a made-up cap with names of the 10-20 system.
_POSITIONS = {
    "F3": (52.0, 130.0),
    "Fz": (40.0, 90.0),
    "F4": (52.0, 50.0),
    "C3": (40.0, 180.0),
    "C4": (40.0, 0.0),
    "P3": (52.0, 230.0),
    "Pz": (40.0, 270.0),
    "P4": (52.0, 310.0),
}
_RADIUS = 90.0  # mm

LAMP_GROUPS = {"frontal": ("F3", "Fz", "F4"), "posterior": ("P3", "Pz", "P4")}
"""Channel groups of the scenario: where theta rises, and where alpha falls."""


def lamp_sequences(*, subjects: int = 20, seed: int = 0, effects: bool = True) -> StudyDesign:
    """The signal-lamp study: what is planted where is in `.effects` of the design.

    Theta (4 to 8 Hz) rises from 0.3 to 0.9 s at the frontal channels, by 1.6 dB in recalled and 0.4 dB in missed
    sequences: a difference of 1.2 dB.  Alpha (8 to 13 Hz) falls from 0.5 to 1.2 s at the posterior channels, by 2.0 dB
    and 0.5 dB: a difference of -1.5 dB.  Elsewhere the two conditions do not differ, and nothing changes before 0.2 s.

    Parameters
    ----------
    subjects : int
    seed : int
    effects : bool
        False: the same study with nothing planted.

    Examples
    --------
    >>> from tfstats.simulated_power import lamp_sequences
    >>> len(lamp_sequences().subjects)
    20
    """
    theta = {"band": (4.0, 8.0), "window": (0.3, 0.9), "channels": LAMP_GROUPS["frontal"], "spread": 0.5}
    alpha = {"band": (8.0, 13.0), "window": (0.5, 1.2), "channels": LAMP_GROUPS["posterior"], "spread": 0.5}
    planted = (
        PlantedEffect("recalled", decibels=1.6, **theta),  # type: ignore[arg-type]
        PlantedEffect("missed", decibels=0.4, **theta),  # type: ignore[arg-type]
        PlantedEffect("recalled", decibels=-2.0, **alpha),  # type: ignore[arg-type]
        PlantedEffect("missed", decibels=-0.5, **alpha),  # type: ignore[arg-type]
    )
    return StudyDesign(
        subjects=tuple(f"{number:02d}" for number in range(1, subjects + 1)),
        channels=tuple(_POSITIONS),
        frequencies=tuple(np.geomspace(3.0, 40.0, 22).round(3).tolist()),
        times=tuple((np.arange(-28, 61) * 0.025).round(3).tolist()),
        trial_counts={"recalled": (36, 44), "missed": (32, 40)},
        effects=planted if effects else (),
        exponent=1.1,
        exponent_spread=0.15,
        level_spread=3.0,
        trial_spread=1.0,
        trial_autocorrelation=0.3,
        shared=0.3,
        blocks=4,
        seed=seed,
    )


def lamp_electrodes() -> pd.DataFrame:
    """Positions of the scenario's channels: name, x (right), y (front), z (up) in mm, on a sphere."""
    inclination, azimuth = np.deg2rad(np.array(list(_POSITIONS.values()))).T
    return pd.DataFrame(
        {
            "name": list(_POSITIONS),
            "x": (_RADIUS * np.sin(inclination) * np.cos(azimuth)).round(3),
            "y": (_RADIUS * np.sin(inclination) * np.sin(azimuth)).round(3),
            "z": (_RADIUS * np.cos(inclination)).round(3),
        }
    )


def lamp_participants(design: StudyDesign) -> pd.DataFrame:
    """A participants table for the scenario: participant_id and age in years, unrelated to power."""
    ages = [int(generator(design.seed, f"simulated age/{subject}").integers(20, 36)) for subject in design.subjects]
    return pd.DataFrame({"participant_id": list(design.subjects), "age": ages})

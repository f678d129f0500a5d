"""The units of relative power: what each one is, how it reads, and its value under no change."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import ArrayLike, NDArray

__all__ = ["UNITS", "RelativeUnit", "decibels", "symbol_of", "unchanged_value"]


@dataclass(frozen=True)
class RelativeUnit:
    """One unit of relative power."""

    name: str
    symbol: str
    unchanged: float | None
    """Value when activity equals baseline; None where the unit has no such value."""
    words: str


UNITS = {
    unit.name: unit
    for unit in (
        RelativeUnit("decibel", "dB", 0.0, "decibels, 10 log10 of activity over baseline power"),
        RelativeUnit("percent_change", "%", 0.0, "percent change from baseline power"),
        RelativeUnit("ratio", "ratio", 1.0, "the ratio of activity to baseline power"),
        RelativeUnit("z_score", "SD", 0.0, "baseline standard deviations"),
        RelativeUnit("none", "power", None, "power without a baseline"),
    )
}
"""Every unit that `Baseline` accepts, by name."""


def symbol_of(unit: str) -> str:
    """The short symbol behind a number; units from elsewhere are returned as they are."""
    return UNITS[unit].symbol if unit in UNITS else unit


def unchanged_value(unit: str) -> float:
    """The value that means no change from baseline (0 for a unit from elsewhere)."""
    known = UNITS.get(unit)
    return 0.0 if known is None or known.unchanged is None else known.unchanged


def decibels(ratio: ArrayLike) -> NDArray[np.floating]:
    """Power ratio in decibels: 10 (not 20) times the decimal logarithm (IEC 60027-3)."""
    return np.asarray(10.0 * np.log10(np.asarray(ratio)))

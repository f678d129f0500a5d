"""What one comparison is: the compared values, the statistic, the relabellings that the null allows, and the words."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass, field
from typing import Any, Final, Literal

import numpy as np
from numpy.typing import NDArray

from tfstats.foundations.units import symbol_of

__all__ = [
    "CIRCULAR_SHIFT",
    "Contrast",
    "ONE_SAMPLE_T",
    "POOLED_T",
    "Relabelling",
    "SHUFFLE",
    "SIGN_FLIPS",
    "Statistic",
    "WELCH_SCORE",
]

Statistic = Literal["one_sample_t", "pooled_t", "welch_score"]
"""What is computed at each point of a relabelled map."""

ONE_SAMPLE_T: Final = "one_sample_t"
POOLED_T: Final = "pooled_t"
WELCH_SCORE: Final = "welch_score"
SIGN_FLIPS: Final = "sign_flips"
SHUFFLE: Final = "shuffle"
CIRCULAR_SHIFT: Final = "circular_shift"


@dataclass(frozen=True)
class Relabelling:
    """Which relabellings the null hypothesis allows.

    `kind` is sign flips of each unit's value, a shuffle of the labels over units, or a shift of the label sequence
    in a circle; the last two stay within `blocks` (one code a unit, None: one block).
    """

    kind: str
    blocks: tuple[int, ...] | None = None
    block_names: tuple[str, ...] = ("all",)


@dataclass(frozen=True)
class Contrast:
    """One comparison, ready for `permutation_test`; made by `paired`, `against_zero` and the other designs.

    Attributes
    ----------
    design : str
        Name of the function that made it.
    values : array (units, channels, frequencies, times)
        The compared value of each unit (subject or trial), in `unit`; NaN where it is not there.
    unit_names : tuple of str
        Subjects, or row numbers of trials.  Random numbers are keyed by these names.
    unit_kind : "subject" or "trial"
    unit : str
        Unit of the compared values, "decibel" for instance.
    statistic : str
        "one_sample_t", "pooled_t" or "welch_score".
    labels : array (units,) of 0 and 1, or None
        1 for the first group of a two-group statistic.
    condition_means : mapping of label to (channels, frequencies, times)
        Mean over units of what went into the comparison, for pictures.
    null_hypothesis, alternatives
        In words; alternatives by "two-sided", "greater", "less".
    difference : str
        What a positive estimate means, such as "recalled - missed".
    history, cautions : tuple of str
        What was done to the numbers (for the methods paragraph), and what to mind.
    """

    design: str
    values: NDArray[np.floating]
    unit_names: tuple[str, ...]
    unit_kind: str
    channels: tuple[str, ...]
    frequencies: NDArray[np.float64]
    times: NDArray[np.float64]
    unit: str
    statistic: Statistic
    relabelling: Relabelling
    null_hypothesis: str
    alternatives: Mapping[str, str]
    difference: str
    labels: NDArray[np.uint8] | None = None
    label_names: tuple[str, ...] = ()
    condition_means: Mapping[str, NDArray[np.floating]] = field(default_factory=dict)
    condition_values: Mapping[str, NDArray[np.floating]] = field(default_factory=dict, repr=False)
    """Each condition's values (units, channels, frequencies, times), views of the maps; empty once loaded from a file."""
    per: str = ""
    """Suffix of the unit where the value is a slope: " per unit of level"."""
    history: tuple[str, ...] = ()
    cautions: tuple[str, ...] = ()
    trial_counts: Any = None
    """DataFrame (subjects x conditions) or None."""

    @property
    def estimate_unit(self) -> str:
        """The symbol behind an estimate: dB, %, ratio, SD ..."""
        return symbol_of(self.unit) + self.per

    @property
    def shape(self) -> tuple[int, int, int]:
        """(channels, frequencies, times)."""
        return len(self.channels), len(self.frequencies), len(self.times)

    def __repr__(self) -> str:
        channels, frequencies, times = self.shape
        return (
            f"<Contrast {self.design}: {self.difference}, {len(self.unit_names)} {self.unit_kind}s, "
            f"{channels} channels x {frequencies} frequencies x {times} times, {self.estimate_unit}>"
        )

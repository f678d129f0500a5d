"""What one comparison is: the compared values, the statistic, the relabellings that the null allows, and the words."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass, field
from typing import Any, Final, Literal

import numpy as np
from numpy.typing import NDArray

from tfstats.foundations.units import symbol_of

__all__ = [
    "ADJUSTED_WELCH_SCORE",
    "CIRCULAR_SHIFT",
    "Contrast",
    "F_OF_FLIPS",
    "F_OF_GROUPS",
    "F_OF_REGRESSION",
    "F_OF_SHUFFLED_CONDITIONS",
    "F_STATISTICS",
    "ONE_SAMPLE_STATISTICS",
    "ONE_SAMPLE_T",
    "POOLED_T",
    "REGRESSION_STATISTICS",
    "REGRESSION_T",
    "Relabelling",
    "SHUFFLE",
    "SHUFFLED_CONDITIONS",
    "SIGN_FLIPS",
    "Statistic",
    "TRIMMED_T",
    "WELCH_SCORE",
]

Statistic = Literal[
    "one_sample_t",
    "trimmed_t",
    "pooled_t",
    "welch_score",
    "regression_t",
    "adjusted_welch_score",
    "f_of_flips",
    "f_of_shuffled_conditions",
    "f_of_groups",
    "f_of_regression",
]
"""What is computed at each point of a relabelled map."""

ONE_SAMPLE_T: Final = "one_sample_t"
POOLED_T: Final = "pooled_t"
WELCH_SCORE: Final = "welch_score"
TRIMMED_T: Final = "trimmed_t"
REGRESSION_T: Final = "regression_t"
ADJUSTED_WELCH_SCORE: Final = "adjusted_welch_score"
F_OF_FLIPS: Final = "f_of_flips"
F_OF_SHUFFLED_CONDITIONS: Final = "f_of_shuffled_conditions"
F_OF_GROUPS: Final = "f_of_groups"
F_OF_REGRESSION: Final = "f_of_regression"

F_STATISTICS = (F_OF_FLIPS, F_OF_SHUFFLED_CONDITIONS, F_OF_GROUPS, F_OF_REGRESSION)
ONE_SAMPLE_STATISTICS = (ONE_SAMPLE_T, TRIMMED_T)
REGRESSION_STATISTICS = (REGRESSION_T, ADJUSTED_WELCH_SCORE, F_OF_REGRESSION)
SIGN_FLIPS: Final = "sign_flips"
SHUFFLE: Final = "shuffle"
CIRCULAR_SHIFT: Final = "circular_shift"
SHUFFLED_CONDITIONS: Final = "shuffled_conditions"


@dataclass(frozen=True)
class Relabelling:
    """Which relabellings the null hypothesis allows.

    `kind` is sign flips of each unit's value, a shuffle of labels (or predictor values) over units, a shift of their
    sequence in a circle, or a shuffle of the condition labels within each unit; the second and third stay within
    `blocks` (one code a unit, None: one block).
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
        The compared value of each unit (subject or trial), in `unit`; NaN where it is not there.  For F over
        conditions (units, conditions, channels, frequencies, times).
    unit_names : tuple of str
        Subjects, or row numbers of trials.  Random numbers are keyed by these names.
    unit_kind : "subject" or "trial"
    unit : str
        Unit of the compared values, "decibel" for instance.
    statistic : str
        What is computed at each point.
    labels : array (units,) of group codes, or None
        Two groups: 1 for the first; several: position in `label_names`.
    predictor : array (units,), or None
        What a slope is taken on.
    nuisance : array (units, covariates), or None
        Covariates that are taken out (Freedman & Lane 1983), without intercept and blocks.
    components : array (effects, conditions), or None
        Orthonormal contrasts of the conditions that an F tests.
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
    predictor: NDArray[np.float64] | None = None
    predictor_name: str = ""
    nuisance: NDArray[np.float64] | None = None
    nuisance_names: tuple[str, ...] = ()
    components: NDArray[np.float64] | None = None
    conditions: tuple[str, ...] = ()
    """Labels of the conditions axis of `values`, for F over conditions."""
    rank: bool = False
    """Whether values and predictor are replaced by their ranks before anything else (a rank slope)."""

    @property
    def estimate_unit(self) -> str:
        """The symbol behind an estimate: dB, %, ratio, SD ..."""
        return symbol_of(self.unit) + self.per

    @property
    def shape(self) -> tuple[int, int, int]:
        """(channels, frequencies, times)."""
        return len(self.channels), len(self.frequencies), len(self.times)

    @property
    def is_f(self) -> bool:
        """Whether the statistic is an F, which has no sign."""
        return self.statistic in F_STATISTICS

    def __repr__(self) -> str:
        channels, frequencies, times = self.shape
        return (
            f"<Contrast {self.design}: {self.difference}, {len(self.unit_names)} {self.unit_kind}s, "
            f"{channels} channels x {frequencies} frequencies x {times} times, {self.estimate_unit}>"
        )

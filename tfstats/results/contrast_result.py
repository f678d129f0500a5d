"""The result of one permutation test: maps, masks, clusters, the null distribution, and their words."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass, field
from functools import cached_property
from pathlib import Path
from typing import Any

import numpy as np
import pandas as pd
from numpy.typing import NDArray

from tfstats.contrasts.contrast import Contrast
from tfstats.corrections import Correction, FalseDiscoveryRate
from tfstats.corrections.p_values import p_of_counts, tie_tolerance
from tfstats.corrections.tail_approximation import TailFit
from tfstats.findings.cluster_tables import region_values
from tfstats.findings.effect_sizes import Effect, effect_of
from tfstats.foundations.thread_count import usable_threads
from tfstats.permutation.point_distributions import parametric_p
from tfstats.permutation.prepared_tests import prepared_test
from tfstats.permutation.schemes import planned_rows
from tfstats.permutation.sign_flip_engine import Tail
from tfstats.permutation.tested_points import as_tested

__all__ = ["ContrastResult", "TestRecord"]

Floats = NDArray[np.float64]

APPROXIMATED = "p_approximated"
"""Column of `clusters` where a tail was asked for: whether p came from the fitted tail, not from a count."""

MOST_REGIONS = 20  # clusters whose values by subject are written out even when they are not significant


@dataclass(frozen=True)
class TestRecord:
    """How the test was run: enough to run it again."""

    __test__ = False  # not a test class, whatever pytest makes of the name

    correction: Correction
    permutations: int
    """Relabellings asked for."""
    alternative: Tail
    alpha: float
    seed: int
    rows: int
    """Relabellings used, the observed labelling included."""
    distinct: int | float
    """Relabellings that differ."""
    enumerated: bool
    exact: bool
    smallest_p: float
    """The smallest p that this test could have given."""
    threshold: float | None
    """Forming threshold in units of the statistic; None without clusters."""
    joined_channels: int | None
    """Pairs of channels that were joined; None without adjacency."""
    version: str
    fewest_subjects: int | None = None
    """A point was tested with at least so many subjects; None: with all."""
    robust: str | None = None
    """"trimmed" or "rank", or None for ordinary means."""
    sequential: bool = False
    """Drawn until resolved, so that the number of rows came from the data."""
    unresolved: int = 0
    """Clusters (or points) on neither side of alpha when the relabellings ran out."""
    unresolved_p: tuple[float, float] | None = None
    """Smallest and largest p of these."""
    tail_asked: bool = False
    tail_fit: TailFit | None = None
    """The tail that small p-values come from; None where none was asked for or none fitted."""
    least_p: float = 0.0
    """The smallest p that the data's size allows, whatever the number of relabellings."""


@dataclass(frozen=True)
class ContrastResult:
    """What a permutation test found.  Maps are (channels, frequencies, times); NaN where untested.

    Attributes
    ----------
    statistic : map
        t (df in `df`), or for Welch the normal score of t.
    p_values : map
        Corrected; a cluster's members carry its p, 1 outside.
    point_p_values : map
        Not corrected; counted on first access by replaying the relabellings (about the cost of the test).
    estimate, effect_size : map
        Mean (difference) in `estimate_unit`, and its standardised size (`effect_name`).
    mask : bool map
        corrected p <= alpha.
    null : (relabellings,)
        One extremeness a relabelling; [0] is the observed labelling.
    clusters : DataFrame
        One row an observed cluster, largest mass first; see the README for its columns.
    cluster_labels : int map
        0 = none, else the number in `clusters`.
    subject_values : (units, channels, frequencies, times)
        The compared value of each subject or trial; F over conditions: (subjects, conditions, ...).

    Examples
    --------
    >>> import numpy as np, tfstats as tfs
    >>> values = np.random.default_rng(1).normal(size=(10, 1, 1, 3, 4)) + 1.5
    >>> maps = tfs.ConditionMaps(values, subjects=list("ABCDEFGHIJ"), conditions=["recalled"], channels=["Fz"],
    ...     frequencies=[4, 6, 8], times=[0.0, 0.1, 0.2, 0.3], unit="percent_change")
    >>> result = tfs.permutation_test(tfs.against_zero(maps, "recalled"), tfs.ClusterMass(0.05))
    >>> bool(result.mask.any()), result.exact
    (True, True)
    """

    contrast: Contrast
    record: TestRecord
    statistic: Floats
    p_values: Floats
    estimate: Floats
    effect_size: Floats
    mask: NDArray[np.bool_]
    null: Floats
    clusters: pd.DataFrame
    cluster_labels: NDArray[np.int32]
    statistic_name: str
    df: float | tuple[float, float] | Floats
    effect_name: str
    subjects_at_point: NDArray[np.int64]
    cautions: tuple[str, ...] = ()
    kept: Mapping[str, Any] = field(default_factory=dict, repr=False)
    """What was computed along the way and would cost to compute again: point p-values, values by region."""

    # -- what the test was -----------------------------------------------------------------------------------------
    @property
    def enumerated(self) -> bool:
        """Whether every distinct relabelling was visited."""
        return self.record.enumerated

    @property
    def exact(self) -> bool:
        """Enumerated, and the null hypothesis makes the relabellings exchangeable."""
        return self.record.exact

    @property
    def alpha(self) -> float:
        """The level of the mask."""
        return self.record.alpha

    @property
    def estimate_unit(self) -> str:
        """Unit of the estimate."""
        return self.contrast.estimate_unit

    @property
    def channels(self) -> tuple[str, ...]:
        """Channel names."""
        return self.contrast.channels

    @property
    def frequencies(self) -> Floats:
        """Hz."""
        return self.contrast.frequencies

    @property
    def times(self) -> Floats:
        """s."""
        return self.contrast.times

    @property
    def subject_values(self) -> NDArray[np.floating]:
        """The compared value of each subject (or trial) at each point."""
        return self.contrast.values

    @property
    def tested(self) -> NDArray[np.bool_]:
        """Points that were tested."""
        return np.isfinite(self.statistic)

    @property
    def significant(self) -> pd.DataFrame:
        """The clusters (or connected parts of the mask) with p <= alpha."""
        return self.clusters[self.clusters["p"] <= self.alpha]

    # -- counted when asked for ------------------------------------------------------------------------------------
    @cached_property
    def point_p_values(self) -> Floats:
        """Uncorrected permutation p of each point, NaN where untested."""
        if "point_p_values" in self.kept:
            return np.asarray(self.kept["point_p_values"])
        return counted_point_p(self.contrast, self.record)

    @cached_property
    def welch_t(self) -> Floats:
        """Welch's t by point (df in `df`); only for Welch scores."""
        if not self.statistic_name.startswith("Welch score"):
            raise AttributeError("welch_t belongs to tests by Welch score")
        return np.where(self.tested, self.point_effect.statistic, np.nan)

    @cached_property
    def point_effect(self) -> Effect:
        """Estimate, t and effect size of every point, without intervals of the size."""
        return effect_of(self.contrast, self.contrast.values, intervals=False)

    @cached_property
    def region_table(self) -> pd.DataFrame:
        """Values by subject: one row a subject (or trial), condition and cluster; the unweighted mean over its points."""
        if "region_table" in self.kept:
            return self.kept["region_table"]
        return _values_by_region(self)

    def effects(self) -> pd.DataFrame:
        """Effect of each cluster: estimate with interval, standardised size with interval, Hedges' g.

        The clusters were chosen on the same data, so their effects are inflated (Kriegeskorte et al. 2009, Nature
        Neuroscience 12:535); intervals are t-based and unadjusted.
        """
        columns = [
            "estimate",
            "estimate_low",
            "estimate_high",
            "effect_size",
            "effect_low",
            "effect_high",
            "effect_hedges",
        ]
        table = self.clusters[["cluster", "p", *columns]].copy()
        table.insert(2, "unit", self.estimate_unit)
        table["effect_name"] = self.effect_name
        return table

    # -- words -----------------------------------------------------------------------------------------------------
    def summary(self) -> str:
        """A few lines of text: what was compared, what was found, how it was tested, what to mind."""
        from tfstats.results.sentences import summary_text

        return summary_text(self)

    def sentence(self) -> str:
        """The finding in sentences fit for a results section."""
        from tfstats.results.sentences import finding_text

        return finding_text(self)

    def methods(self) -> str:
        """How it was done, in a paragraph fit for a methods section."""
        from tfstats.results.methods_text import methods_paragraph

        return methods_paragraph(self)

    # -- files -----------------------------------------------------------------------------------------------------
    def save(self, folder: str | Path) -> None:
        """Write result.npz (to load again), maps.npz, clusters.csv and subject_values.csv into a folder."""
        from tfstats.results.result_files import save_result

        save_result(self, Path(folder))

    @classmethod
    def load(cls, folder: str | Path) -> ContrastResult:
        """Read what `save` wrote; refuses a folder without it, and files from elsewhere."""
        from tfstats.results.result_files import load_result

        return load_result(Path(folder))

    def __repr__(self) -> str:
        found = len(self.significant)
        return (
            f"<ContrastResult {self.contrast.design}: {self.contrast.difference}, {found} of {len(self.clusters)} "
            f"clusters with p <= {self.alpha:g}, {self.record.rows} relabellings>"
        )


def counted_point_p(contrast: Contrast, record: TestRecord) -> Floats:
    """Uncorrected p of each point, counted over the test's own relabellings or taken from the parametric distribution."""
    contrast = as_tested(contrast, record.robust)
    prepared = prepared_test(contrast, record.fewest_subjects)
    rows = planned_rows(
        contrast,
        record.alternative,
        record.rows if record.sequential else record.permutations,
        record.seed,
        enumerate_all=not record.sequential,
    )
    if isinstance(record.correction, FalseDiscoveryRate) and record.correction.p_values == "parametric":
        return parametric_p(contrast, prepared.observed(rows), record.alternative, prepared.points.units)
    counts = prepared.counts(
        rows,
        tail=record.alternative,
        tolerance=tie_tolerance(prepared.points.values.dtype),
        threads=usable_threads(None),
    )
    return np.where(prepared.tested, p_of_counts(counts, rows.count), np.nan)


def label_codes(contrast: Contrast) -> dict[str, int]:
    """The code of each group: 1 and 0 for two, positions for several."""
    if contrast.is_f:
        return {name: code for code, name in enumerate(contrast.label_names)}
    return dict(zip(contrast.label_names, (1, 0)))


def _values_by_region(result: ContrastResult) -> pd.DataFrame:
    contrast = result.contrast
    shown = result.clusters[(result.clusters["p"] <= result.alpha) | (result.clusters["cluster"] <= MOST_REGIONS)]
    parts = []
    for cluster in shown["cluster"]:
        region = result.cluster_labels == cluster
        named: dict[str, NDArray[np.floating]] = {}
        columns: dict[str, tuple[tuple[str, ...], NDArray[np.floating]]]
        if contrast.components is not None:
            columns = {
                name: (contrast.unit_names, region_values(contrast.values[:, place], region))
                for place, name in enumerate(contrast.conditions)
            }
        elif contrast.labels is None:
            named.update({name: region_values(values, region) for name, values in contrast.condition_values.items()})
            named.setdefault(contrast.difference, region_values(contrast.values, region))
            columns = {name: (contrast.unit_names, values) for name, values in named.items()}
        else:
            by_unit = region_values(contrast.values, region)
            columns = {}
            for name, code in label_codes(contrast).items():
                chosen = np.flatnonzero(contrast.labels == code)
                columns[name] = (tuple(contrast.unit_names[unit] for unit in chosen), by_unit[chosen])
        for name, (units, values) in columns.items():
            parts.append(
                pd.DataFrame(
                    {
                        "subject": units,
                        "condition": name,
                        "region": f"cluster {cluster}",
                        "value": values,
                        "unit": contrast.estimate_unit,
                    }
                )
            )
    columns_in_order = ["subject", "condition", "region", "value", "unit"]
    return pd.concat(parts, ignore_index=True) if parts else pd.DataFrame(columns=columns_in_order)

"""The corrections over the plane that a user can ask for, as small frozen settings."""

from __future__ import annotations

from dataclasses import dataclass
from typing import ClassVar

from tfstats.foundations.checks import one_of, share
from tfstats.foundations.errors import refusal

__all__ = [
    "CORRECTIONS",
    "ClusterExtent",
    "ClusterMass",
    "Correction",
    "FalseDiscoveryRate",
    "MaxStatistic",
    "ThresholdFree",
]


@dataclass(frozen=True)
class Correction:
    """What all corrections share."""

    kind: ClassVar[str] = ""
    words: ClassVar[str] = ""
    clusterwise: ClassVar[bool] = False
    """Whether p belongs to clusters formed at a threshold (otherwise to single points)."""


@dataclass(frozen=True)
class ClusterMass(Correction):
    """Is a cluster's sum of |statistic| larger than the largest under the null?

    Points beyond the forming threshold that touch (along frequency, time or neighbouring channels) and have the
    same sign are a cluster (Maris & Oostenveld 2007, J. Neurosci. Methods 164:177).  The p-value is about the
    cluster as a whole and says nothing of where its edges lie.

    Parameters
    ----------
    forming_p : float
        Uncorrected p of the forming threshold, fixed before seeing the data.  Two-sided |t| > t(1 - p/2).

    Examples
    --------
    >>> import tfstats as tfs
    >>> tfs.ClusterMass(forming_p=0.05)
    ClusterMass(forming_p=0.05)
    """

    kind: ClassVar[str] = "cluster_mass"
    words: ClassVar[str] = "cluster mass"
    clusterwise: ClassVar[bool] = True
    forming_p: float = 0.01

    def __post_init__(self) -> None:
        object.__setattr__(self, "forming_p", share(self.forming_p, f"{type(self).__name__}, forming_p"))


@dataclass(frozen=True)
class ClusterExtent(Correction):
    """Does a cluster have more points than the largest under the null?

    As `ClusterMass`, but clusters are weighed by their number of points: sensitive to wide weak effects.

    Examples
    --------
    >>> import tfstats as tfs
    >>> tfs.ClusterExtent().forming_p
    0.01
    """

    kind: ClassVar[str] = "cluster_extent"
    words: ClassVar[str] = "cluster extent"
    clusterwise: ClassVar[bool] = True
    forming_p: float = 0.01

    def __post_init__(self) -> None:
        object.__setattr__(self, "forming_p", share(self.forming_p, f"{type(self).__name__}, forming_p"))


@dataclass(frozen=True)
class ThresholdFree(Correction):
    """Is a point, lifted by the support around it, larger than the largest under the null?

    Threshold-free cluster enhancement (Smith & Nichols 2009, NeuroImage 44:83): each point gets the integral over all
    heights h up to its own of extent(h)^E h^H, computed exactly; positive and negative points apart.  No forming
    threshold to choose.  A significant point borrows from its surroundings: its p is no pointwise localisation.

    Parameters
    ----------
    E, H : float
        Exponents of extent and height; H None: 2, for F 1.

    Examples
    --------
    >>> import tfstats as tfs
    >>> tfs.ThresholdFree().exponents(is_f=False)
    (0.5, 2.0)
    """

    kind: ClassVar[str] = "threshold_free"
    words: ClassVar[str] = "threshold-free enhancement"
    E: float = 0.5
    H: float | None = None

    def __post_init__(self) -> None:
        for name in ("E", "H"):
            value = getattr(self, name)
            if value is None and name == "H":
                continue
            if isinstance(value, bool) or not isinstance(value, (int, float)) or not 0 < value < 100:
                raise refusal(
                    f"ThresholdFree, {name}", "a number above 0", repr(value), "0.5 and 2 are the usual exponents"
                )

    def exponents(self, *, is_f: bool) -> tuple[float, float]:
        """(E, H) for this statistic."""
        return float(self.E), float(self.H if self.H is not None else 1.0 if is_f else 2.0)


@dataclass(frozen=True)
class MaxStatistic(Correction):
    """Is a single point's |statistic| larger than the largest anywhere under the null?

    Holds the family-wise error at every point (Westfall & Young 1993, Resampling-Based Multiple Testing), so each
    significant point can be named; least powerful for wide effects.

    Examples
    --------
    >>> import tfstats as tfs
    >>> tfs.MaxStatistic().kind
    'maximum'
    """

    kind: ClassVar[str] = "maximum"
    words: ClassVar[str] = "maximum statistic"


@dataclass(frozen=True)
class FalseDiscoveryRate(Correction):
    """Which points can be called active if up to a share alpha of them may be false on average?

    Controls the expected share of false discoveries among those made (Benjamini & Hochberg 1995, JRSS B 57:289;
    Benjamini & Yekutieli 2001, Ann. Stat. 29:1165 for any dependence).  Not a family-wise error rate.

    Parameters
    ----------
    method : "benjamini_hochberg" or "benjamini_yekutieli"
    p_values : "permutation" or "parametric"
        Where the point p-values come from.

    Examples
    --------
    >>> import tfstats as tfs
    >>> tfs.FalseDiscoveryRate(method="benjamini_yekutieli").p_values
    'permutation'
    """

    kind: ClassVar[str] = "false_discovery"
    words: ClassVar[str] = "false discovery rate"
    method: str = "benjamini_hochberg"
    p_values: str = "permutation"

    def __post_init__(self) -> None:
        one_of(self.method, ("benjamini_hochberg", "benjamini_yekutieli"), "FalseDiscoveryRate, method")
        one_of(self.p_values, ("permutation", "parametric"), "FalseDiscoveryRate, p_values")


CORRECTIONS: dict[str, type[Correction]] = {
    entry.kind: entry for entry in (ClusterMass, ClusterExtent, ThresholdFree, MaxStatistic, FalseDiscoveryRate)
}
"""Every correction by its name in the plan."""

"""Corrections over the channel, frequency and time plane, and the one rule for p-values."""

from tfstats.corrections.settings import (
    CORRECTIONS,
    ClusterExtent,
    ClusterMass,
    Correction,
    FalseDiscoveryRate,
    MaxStatistic,
    ThresholdFree,
)

__all__ = [
    "CORRECTIONS",
    "ClusterExtent",
    "ClusterMass",
    "Correction",
    "FalseDiscoveryRate",
    "MaxStatistic",
    "ThresholdFree",
]

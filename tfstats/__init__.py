"""Baseline-relative time-frequency power and permutation statistics over channels, frequencies and times.

The way the data goes, one call a stage:

    powers = tfs.PowerFiles("power/S{subject}.h5")            # files -> per-trial power, one subject at a time
    baseline = tfs.Baseline(window=(-0.5, -0.2))              # relative units: which baseline, which unit
    maps = tfs.condition_maps(powers, "memory", baseline)     # one map per subject and condition
    contrast = tfs.paired(maps, "recalled", "missed")         # what is compared, which relabellings H0 allows
    result = tfs.permutation_test(contrast, tfs.ClusterMass(forming_p=0.01))
    result.clusters, result.mask, result.effect_size          # tables, masks, effect sizes

or all of it from a plan file: `tfstats run plan.toml --out results`.
"""

from __future__ import annotations

import importlib
from typing import Any

__version__ = "0.1.0"

# Public name -> the module that defines it.  Loaded on first use, so that `import tfstats` stays fast.
_HOMES = {
    "InputError": "tfstats.foundations.errors",
    "channel_adjacency": "tfstats.foundations.adjacency",
    "TrialPower": "tfstats.power_files",
    "PowerFiles": "tfstats.power_files",
    "read_power": "tfstats.power_files",
    "write_power": "tfstats.power_files",
    "morlet_power": "tfstats.power_files",
    "Baseline": "tfstats.normalization",
    "RelativeTrials": "tfstats.normalization",
    "normalized_trials": "tfstats.normalization",
    "fit_power_law": "tfstats.normalization",
    "ConditionMaps": "tfstats.averaged_maps",
    "condition_maps": "tfstats.averaged_maps",
    "relative_maps": "tfstats.averaged_maps",
    "power_law_maps": "tfstats.averaged_maps",
    "broadband_adjusted": "tfstats.averaged_maps",
    "read_maps": "tfstats.averaged_maps",
    "write_maps": "tfstats.averaged_maps",
    "as_labelled": "tfstats.averaged_maps",
    "from_labelled": "tfstats.averaged_maps",
    "long_table": "tfstats.averaged_maps",
    "write_table": "tfstats.averaged_maps",
    "paired": "tfstats.contrasts",
    "against_zero": "tfstats.contrasts",
    "weighted": "tfstats.contrasts",
    "trend": "tfstats.contrasts",
    "interaction": "tfstats.contrasts",
    "repeated_measures": "tfstats.contrasts",
    "between_groups": "tfstats.contrasts",
    "several_groups": "tfstats.contrasts",
    "slope": "tfstats.contrasts",
    "trialwise": "tfstats.contrasts",
    "trialwise_slope": "tfstats.contrasts",
    "trialwise_change": "tfstats.contrasts",
    "trial_effect_maps": "tfstats.contrasts",
    "ClusterMass": "tfstats.corrections",
    "ClusterExtent": "tfstats.corrections",
    "MaxStatistic": "tfstats.corrections",
    "ThresholdFree": "tfstats.corrections",
    "FalseDiscoveryRate": "tfstats.corrections",
    "permutation_test": "tfstats.results",
    "ContrastResult": "tfstats.results",
    "family_of_tests": "tfstats.results",
    "band_table": "tfstats.findings",
    "review_baseline": "tfstats.baseline_review",
    "BaselineReview": "tfstats.baseline_review",
    "AnalysisPlan": "tfstats.plan_file",
    "run_analysis": "tfstats.analysis",
    "read_results": "tfstats.reporting",
}

__all__ = ["__version__", *sorted(_HOMES)]  # noqa: PLE0604


def __getattr__(name: str) -> Any:
    home = _HOMES.get(name)
    if home is None:
        raise AttributeError(f"module 'tfstats' has no attribute {name!r}")
    value = getattr(importlib.import_module(home), name)
    globals()[name] = value
    return value


def __dir__() -> list[str]:
    return sorted([*globals(), *_HOMES])

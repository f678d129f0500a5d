"""Per-trial power as it lies on disk or comes from raw trials; the only room that opens input data."""

from tfstats.power_files.trial_power import TrialPower

__all__ = ["TrialPower"]

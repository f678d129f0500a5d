"""Tables of what was found: clusters, effect sizes, bands."""

from tfstats.findings.band_tables import band_table

__all__ = ["band_table"]

"""How many threads a test may use: the one rule of the package."""

from tfstats.foundations.thread_count import usable_threads

__all__ = ["usable_threads"]

"""One test and its result: `permutation_test`, `ContrastResult`, and the sentences about them."""

from tfstats.results.contrast_result import ContrastResult, TestRecord
from tfstats.results.contrast_testing import permutation_test
from tfstats.results.families import family_of_tests
from tfstats.results.planned_tests import PlannedTest, planned_test

__all__ = ["ContrastResult", "PlannedTest", "TestRecord", "family_of_tests", "permutation_test", "planned_test"]

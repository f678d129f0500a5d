"""What a study hands over: the results folder, its figures and its report.  The only importer of matplotlib and jinja2."""

from tfstats.reporting.results_folder import read_results, write_results
from tfstats.reporting.study_results import StudyResults

__all__ = ["StudyResults", "read_results", "write_results"]

"""What the baseline does to the data: findings before any test is believed."""

from tfstats.baseline_review.invariance import window_dependence
from tfstats.baseline_review.review_result import BaselineReview, ReviewFinding
from tfstats.baseline_review.whole_review import PlannedContrast, review_baseline

__all__ = ["BaselineReview", "PlannedContrast", "ReviewFinding", "review_baseline", "window_dependence"]

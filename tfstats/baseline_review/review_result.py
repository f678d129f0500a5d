"""What a review of the baseline found: findings with a severity, the numbers behind them, and what to do."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass, field

import pandas as pd

__all__ = ["BaselineReview", "HEADLINE", "MIND", "NOTE", "ReviewFinding", "SEVERITIES"]

HEADLINE, MIND, NOTE = "headline", "mind", "note"
SEVERITIES = (HEADLINE, MIND, NOTE)
"""headline: the result may hang on it; mind: say it in the paper; note: good to know."""


@dataclass(frozen=True)
class ReviewFinding:
    """One thing that the baseline does to these data."""

    topic: str
    severity: str
    words: str
    """What was found, with its numbers."""
    remedy: str
    """What to do about it; empty where nothing needs to be done."""


@dataclass(frozen=True)
class BaselineReview:
    """Findings, the worst first, and the tables behind them.

    Attributes
    ----------
    findings : tuple of ReviewFinding
    tables : mapping of name to DataFrame
        window, conditions, trials, drift, edges, counts, contrasts: as far as the data allow.

    Examples
    --------
    >>> import tfstats as tfs
    >>> from tfstats.simulated_power import lamp_sequences, simulate_study
    >>> review = tfs.review_baseline(simulate_study(lamp_sequences(subjects=3)), "memory", tfs.Baseline((-0.5, -0.2)))
    >>> review.table().columns.tolist()
    ['severity', 'topic', 'words', 'remedy']
    """

    findings: tuple[ReviewFinding, ...]
    tables: Mapping[str, pd.DataFrame] = field(default_factory=dict)

    def table(self) -> pd.DataFrame:
        """The findings as a table: topic, severity, words, remedy."""
        return pd.DataFrame(
            [(one.severity, one.topic, one.words, one.remedy) for one in self.findings],
            columns=["severity", "topic", "words", "remedy"],
        )

    def text(self) -> str:
        """The findings as lines of text, one a finding."""
        lines = []
        for one in self.findings:
            remedy = f" {one.remedy}" if one.remedy else ""
            lines.append(f"{one.severity}: {one.topic}: {one.words}{remedy}")
        return "\n".join(lines)

    def __repr__(self) -> str:
        counts = ", ".join(f"{sum(one.severity == name for one in self.findings)} {name}" for name in SEVERITIES)
        return f"<BaselineReview {counts}>"


def by_severity(findings: list[ReviewFinding]) -> tuple[ReviewFinding, ...]:
    """The worst first, otherwise in the order in which they were found."""
    return tuple(sorted(findings, key=lambda one: SEVERITIES.index(one.severity)))

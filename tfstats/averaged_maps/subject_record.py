"""What a study takes from one subject, apart from the files: kept in a cache, it stands for reading them again."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass, fields
from typing import Any

import numpy as np
from numpy.typing import NDArray

from tfstats.averaged_maps.subject_average import SubjectAverage

__all__ = ["SubjectRecord"]

_AVERAGE = "average."


@dataclass(frozen=True)
class SubjectRecord:
    """One subject's condition averages and what is said of them.

    `frequencies` to `power_unit` are as in TrialPower, so that a record can stand in its place where axes are compared.
    """

    subject: str
    channels: tuple[str, ...]
    frequencies: NDArray[np.float64]
    times: NDArray[np.float64]
    notes: tuple[str, ...]
    wavelet_cycles: NDArray[np.float64] | None
    scaling: str | None
    power_unit: str | None
    labels_there: dict[str, int]
    without_label: int
    conditions: tuple[str, ...]
    average: SubjectAverage

    def words_and_arrays(self) -> tuple[dict[str, Any], dict[str, Any]]:
        """All parts: those that JSON holds exactly, and the arrays."""
        words: dict[str, Any] = {}
        arrays: dict[str, Any] = {}
        parts = {one.name: getattr(self, one.name) for one in fields(self) if one.name != "average"}
        parts |= {_AVERAGE + one.name: getattr(self.average, one.name) for one in fields(self.average)}
        for name, part in parts.items():
            if isinstance(part, np.ndarray):
                arrays[name] = part
            else:
                words[name] = part.item() if isinstance(part, np.generic) else part
        return words, arrays

    @classmethod
    def from_parts(cls, parts: Mapping[str, Any]) -> SubjectRecord:
        """The record again.  KeyError or TypeError where parts are missing."""
        own = {one.name: parts[one.name] for one in fields(cls) if one.name != "average"}
        for name in ("channels", "notes", "conditions"):
            own[name] = tuple(own[name])
        average = SubjectAverage(**{one.name: parts[_AVERAGE + one.name] for one in fields(SubjectAverage)})
        return cls(**own, average=average)

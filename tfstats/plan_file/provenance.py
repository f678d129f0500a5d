"""How a run came about: versions, seed, hashes, times."""

from __future__ import annotations

import importlib.metadata
import platform
from datetime import UTC, datetime
from pathlib import Path
from typing import Any

import tfstats
from tfstats.foundations.file_identity import content_hash
from tfstats.plan_file.plan import AnalysisPlan

__all__ = ["content_hash", "provenance_of"]

PACKAGES = ("numpy", "scipy", "numba", "pandas", "statsmodels")


def provenance_of(
    plan: AnalysisPlan, files: list[Path], left_out: dict[str, str], options: dict[str, Any]
) -> dict[str, Any]:
    """What provenance.json says."""
    tables = [
        plan.place(name)
        for name in (
            plan.participants.file if plan.participants else None,
            plan.channels.electrodes,
            plan.channels.pairs,
            plan.channels.regions,
        )
        if name
    ]
    return {
        "versions": {
            "tfstats": tfstats.__version__,
            "python": platform.python_version(),
            **{name: importlib.metadata.version(name) for name in PACKAGES},
        },
        "seed": plan.study.seed,
        "plan_hash": plan.hash,
        "plan_hashed_at": datetime.now(UTC).isoformat(timespec="seconds"),
        "input_hashes": {_relative(path, plan.folder): content_hash(path) for path in [*files, *tables]},
        "subjects_left_out": left_out,
        "options": options,
    }


def _relative(path: Path, folder: Path) -> str:
    try:
        return path.resolve().relative_to(folder.resolve()).as_posix()
    except ValueError:
        return path.name

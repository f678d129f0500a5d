"""How a run came about: versions, seed, hashes, times."""

from __future__ import annotations

import importlib.metadata
import os
import platform
from pathlib import Path
from typing import Any

import tfstats
from tfstats.foundations.file_identity import content_hash
from tfstats.plan_file.plan import AnalysisPlan
from tfstats.power_files import SubjectCache

__all__ = ["content_hash", "provenance_of"]

PACKAGES = ("numpy", "scipy", "numba", "pandas", "statsmodels")


def provenance_of(
    plan: AnalysisPlan,
    hashed_at: str,
    files: list[Path],
    left_out: dict[str, str],
    options: dict[str, Any],
    cache: SubjectCache | None = None,
) -> dict[str, Any]:
    """What provenance.json says; `files` are all that the results depend on."""
    return {
        "versions": {
            "tfstats": tfstats.__version__,
            "python": platform.python_version(),
            **{name: importlib.metadata.version(name) for name in PACKAGES},
        },
        "seed": plan.study.seed,
        "plan_hash": plan.hash,
        "plan_hashed_at": hashed_at,
        "input_hashes": {_relative(path, plan.folder): content_hash(path) for path in files},
        "subjects_left_out": left_out,
        "options": options,
        "subjects_from_cache": [] if cache is None else cache.found,
        "cache_notices": [] if cache is None else cache.notices,
    }


def _relative(path: Path, folder: Path) -> str:
    try:
        return Path(os.path.relpath(path.resolve(), folder.resolve())).as_posix()
    except ValueError:  # on another drive
        return path.resolve().as_posix()

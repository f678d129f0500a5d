"""A run's folder while it is not finished: what is already there, and whether it belongs to the same plan and data."""

from __future__ import annotations

import json
import shutil
from pathlib import Path
from typing import Any

from tfstats.averaged_maps import ConditionMaps
from tfstats.foundations.errors import InputError
from tfstats.foundations.safe_writing import file_names, finish_folder, unfinished_path, written_whole
from tfstats.results import ContrastResult

__all__ = ["UnfinishedRun", "file_identities"]

STATE = "run_state.json"
MAPS = "condition_maps.npz"


def file_identities(files: list[Path]) -> dict[str, list[int]]:
    """Size and time of change of each file, by path: what tells whether an interrupted run can be taken up."""
    return {str(path): [path.stat().st_size, path.stat().st_mtime_ns] for path in files}


class UnfinishedRun:
    """`FOLDER.unfinished`: kept when a run is interrupted, taken up when plan hash and input files agree."""

    def __init__(self, out: Path, *, replace: bool) -> None:
        self.out = out
        self.folder = unfinished_path(out)
        self.replace = replace
        self.names: dict[str, str] = {}
        self.resumed = False
        if out.exists() and not replace:
            raise InputError(f"{out}: expected a new folder, got one that exists; choose another or pass --replace.")
        if out.exists() and not out.is_dir():
            raise InputError(f"{out}: expected a folder to replace, got a file; choose another name.")

    def begin(self, plan_hash: str, identities: dict[str, Any], contrasts: list[str]) -> None:
        """Make the folder, or take up one that an interrupted run of the same plan and data left."""
        self.names = file_names(contrasts, "contrast names")
        state = {"plan_hash": plan_hash, "files": identities}
        self.resumed = self._state() == json.loads(json.dumps(state))
        if not self.resumed:
            shutil.rmtree(self.folder, ignore_errors=True)
            self.folder.mkdir(parents=True)
            with written_whole(self.folder / STATE) as path:
                path.write_text(json.dumps(state), encoding="utf-8")

    def _state(self) -> Any:
        try:
            return json.loads((self.folder / STATE).read_text(encoding="utf-8"))
        except (OSError, ValueError):
            return None

    def kept_maps(self) -> ConditionMaps | None:
        """The condition maps of the interrupted run."""
        path = self.folder / MAPS
        return ConditionMaps.load(path) if self.resumed and path.is_file() else None

    def keep_maps(self, maps: ConditionMaps | None) -> None:
        """Save the condition maps, so that an interrupted run need not read the power again."""
        if maps is not None and not (self.folder / MAPS).is_file():
            maps.save(self.folder / MAPS)

    def kept_result(self, name: str) -> ContrastResult | None:
        """The result of a contrast that the interrupted run had finished."""
        folder = self.folder / "contrasts" / self.names[name]
        if not self.resumed or not (folder / "result.npz").is_file():
            return None
        return ContrastResult.load(folder)

    def keep_result(self, name: str, result: ContrastResult) -> ContrastResult:
        """Save a finished contrast and hand it on."""
        result.save(self.folder / "contrasts" / self.names[name])
        return result

    def drop_if_empty(self) -> None:
        """After a refusal: remove the folder unless it holds finished work."""
        if not any(self.folder.glob("contrasts/*/result.npz")):
            shutil.rmtree(self.folder, ignore_errors=True)

    def finish(self) -> None:
        """Give the folder its final name."""
        for name in (STATE, MAPS):
            (self.folder / name).unlink(missing_ok=True)
        finish_folder(self.out, replace=self.replace)

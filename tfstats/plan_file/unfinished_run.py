"""A run's folder while it is not finished: what is already there, and whether it belongs to the same plan and data."""

from __future__ import annotations

import json
import shutil
from contextlib import suppress
from pathlib import Path
from typing import Any

import tfstats
from tfstats.averaged_maps import ConditionMaps
from tfstats.foundations.errors import InputError, listed
from tfstats.foundations.safe_writing import file_names, finish_folder, unfinished_path, written_whole
from tfstats.results import ContrastResult

__all__ = ["UnfinishedRun", "file_identities"]

STATE = "run_state.json"
MAPS = "condition_maps.npz"
RESULTS_MARK = "contents.json"
"""What every finished results folder holds."""


def file_identities(files: list[Path]) -> dict[str, list[int] | None]:
    """Size and time of change of each file, by path: what tells whether an interrupted run can be taken up."""
    found: dict[str, list[int] | None] = {}
    for path in files:
        there = path.stat() if path.exists() else None
        found[str(path.resolve())] = None if there is None else [there.st_size, there.st_mtime_ns]
    return found


class UnfinishedRun:
    """`FOLDER.unfinished`: kept when a run is interrupted, taken up when version, plan hash and input files agree.

    Nothing is written or removed before `begin`, so that a refused study leaves an earlier interrupted run as it was.
    """

    def __init__(self, out: Path, *, replace: bool) -> None:
        # Resolved, so that a link is written through and "." and ".." have a name.
        self.out = out.resolve()
        if not self.out.name:
            raise InputError(f"{out}: expected a new folder, got the root of a disk; choose a folder on it.")
        self.folder = unfinished_path(self.out)
        self.replace = replace
        self.names: dict[str, str] = {}
        self.state: dict[str, Any] = {}
        self.resumed = False
        above = next(place for place in self.out.parents if place.exists())
        if not above.is_dir():
            raise InputError(f"{out}: expected a place in a folder, got one in the file {above}; choose another place.")
        if self.out.exists() and not self.out.is_dir():
            raise InputError(f"{out}: expected a folder to replace, got a file; choose another name.")
        if self.out.exists() and not replace:
            raise InputError(f"{out}: expected a new folder, got one that exists; choose another or pass --replace.")
        # Replacing removes what is there, which may be somebody's data.
        if self.out.exists() and not (self.out / RESULTS_MARK).is_file() and any(self.out.iterdir()):
            inside = listed(entry.name for entry in self.out.iterdir())
            raise InputError(
                f"{out}: expected a results folder to replace, got a folder that holds {inside}; choose a new folder."
            )

    def take_up(self, plan_hash: str, hashed_at: str, identities: dict[str, Any], contrasts: list[str]) -> None:
        """Look whether an interrupted run of the same plan and data is there, and refuse a folder of something else."""
        self.names = file_names(contrasts, "contrast names")
        identity = {"version": tfstats.__version__, "plan_hash": plan_hash, "files": identities}
        self.state = {"identity": json.loads(json.dumps(identity)), "plan_hashed_at": hashed_at}
        found = self._found()
        if found.get("identity") == self.state["identity"]:
            self.resumed, self.state = True, found

    @property
    def plan_hashed_at(self) -> str:
        """When the run first read its plan, in UTC; an interruption does not make it later."""
        return str(self.state["plan_hashed_at"])

    def _found(self) -> dict[str, Any]:
        if not self.folder.exists():
            return {}
        if not self.folder.is_dir() or (not (self.folder / STATE).is_file() and any(self.folder.iterdir())):
            raise InputError(
                f"{self.folder}: expected nothing there or an interrupted run, got something else; "
                "move it away or choose another --out."
            )
        try:
            found = json.loads((self.folder / STATE).read_text(encoding="utf-8"))
        except (OSError, ValueError):
            return {}
        return found if isinstance(found, dict) else {}

    def kept_maps(self) -> ConditionMaps | None:
        """The condition maps of the interrupted run."""
        path = self.folder / MAPS
        if not self.resumed or not path.is_file():
            return None
        with suppress(InputError):  # damaged: read the power again
            return ConditionMaps.load(path)
        return None

    def begin(self, maps: ConditionMaps | None) -> None:
        """Make the folder, in place of one of another plan or other data, and save the maps for a later start."""
        if not self.resumed:
            if self.folder.exists():
                shutil.rmtree(self.folder)
            self.folder.mkdir(parents=True)
            with written_whole(self.folder / STATE) as path:
                path.write_text(json.dumps(self.state), encoding="utf-8")
        if maps is not None and not (self.folder / MAPS).is_file():
            maps.save(self.folder / MAPS)

    def kept_result(self, name: str) -> ContrastResult | None:
        """The result of a contrast that the interrupted run had finished."""
        folder = self.folder / "contrasts" / self.names[name]
        if not self.resumed or not (folder / "result.npz").is_file():
            return None
        with suppress(InputError):  # damaged: test again
            return ContrastResult.load(folder)
        return None

    def keep_result(self, name: str, result: ContrastResult) -> ContrastResult:
        """Save a finished contrast and hand it on."""
        result.save(self.folder / "contrasts" / self.names[name])
        return result

    def drop(self) -> None:
        """After a refusal there is no folder: the same plan and data would be refused again."""
        shutil.rmtree(self.folder, ignore_errors=True)

    def finish(self) -> None:
        """Give the folder its final name."""
        for name in (STATE, MAPS):
            (self.folder / name).unlink(missing_ok=True)
        finish_folder(self.out, replace=self.replace)

"""A folder that keeps what was computed from one subject's files, so that only new or changed files are read again."""

from __future__ import annotations

import hashlib
import json
import re
import zipfile
from collections.abc import Mapping, Sequence
from os import PathLike
from pathlib import Path
from typing import Any

import numpy as np

import tfstats
from tfstats.foundations.file_identity import file_identity
from tfstats.foundations.safe_writing import written_whole

__all__ = ["SubjectCache"]

KIND = "tfstats subject entry 1"
_ABOUT = "about"


class SubjectCache:
    """Entries of arrays and words, one a subject and settings, valid while the subject's files stay the same.

    Parameters
    ----------
    folder : path
        Made when the first entry is written.  It may be deleted at any time.

    Attributes
    ----------
    found : list of str
        Subjects whose entry was used.
    notices : list of str
        Entries that could not be read or written, in words.  Neither stops the work.

    Notes
    -----
    An entry counts only if settings, version and, of each file, path, size, time of change and content hash are those
    it was made from.  Each file is read once for its hash.  Entries are written whole or not at all, and hold nothing
    pickled.  A later entry of the same subject and settings takes the place of the earlier one.
    """

    def __init__(self, folder: str | PathLike[str]) -> None:
        self.folder = Path(folder)
        self.found: list[str] = []
        self.notices: list[str] = []

    def read(self, subject: str, files: Sequence[Path], settings: Mapping[str, Any]) -> dict[str, Any] | None:
        """Arrays and words of an entry; None where there is none, or none that still holds."""
        path = self._path(subject, settings)
        if not path.is_file():
            return None
        try:
            # The stream is ours, since numpy leaves it open where an archive is cut.
            with open(path, "rb") as stream, np.load(stream, allow_pickle=False) as stored:
                # Every member is read, so that a damaged one is found here and not later.
                parts: dict[str, Any] = {name: stored[name] for name in stored.files}
            about = json.loads(str(parts.pop(_ABOUT)))
            kind, key = about["kind"], about["key"]
            if not isinstance(about["words"], dict):
                raise ValueError("no words")
        except (OSError, ValueError, KeyError, EOFError, TypeError, NotImplementedError, zipfile.BadZipFile) as error:
            self.notices.append(
                f"subject {subject}: the cache entry {path.name} cannot be read ({type(error).__name__}); the subject's files "
                "were read instead."
            )
            return None
        try:
            holds = kind == KIND and key == _key(files, settings)
        except OSError:
            return None  # reading the power says what is wrong with the file
        if not holds:
            return None
        self.found.append(subject)
        return {**about["words"], **parts}

    def write(
        self,
        subject: str,
        files: Sequence[Path],
        settings: Mapping[str, Any],
        words: Mapping[str, Any],
        arrays: Mapping[str, Any],
    ) -> None:
        """Keep an entry; a folder that cannot be written costs a notice and nothing else."""
        path = self._path(subject, settings)
        try:
            about = json.dumps({"kind": KIND, "key": _key(files, settings), "words": dict(words)})
            with written_whole(path) as temporary:
                np.savez(temporary, allow_pickle=False, **{_ABOUT: np.array(about)}, **dict(arrays))
        except OSError as error:
            text = f"the cache {self.folder.name} cannot be written ({error.strerror or type(error).__name__}); nothing was kept."
            if text not in self.notices:
                self.notices.append(text)

    def _path(self, subject: str, settings: Mapping[str, Any]) -> Path:
        # The hash keeps subjects apart whose names differ only in characters that file names do without.
        text = json.dumps([subject, _plain(settings)], sort_keys=True)
        short = hashlib.sha256(text.encode("utf-8")).hexdigest()[:16]
        return self.folder / f"{re.sub(r'[^A-Za-z0-9-]', '_', subject)[:60]}_{short}.npz"


def _key(files: Sequence[Path], settings: Mapping[str, Any]) -> Any:
    key = {
        "version": tfstats.__version__,
        "settings": _plain(settings),
        "files": [file_identity(path) for path in files],
    }
    return json.loads(json.dumps(key, sort_keys=True))


def _plain(settings: Mapping[str, Any]) -> Any:
    return json.loads(json.dumps(settings, sort_keys=True, default=_as_list))


def _as_list(value: Any) -> Any:
    """What JSON does not know: arrays and sets as lists, anything else as its own words."""
    if isinstance(value, np.ndarray):
        return value.tolist()
    if isinstance(value, np.generic):
        return value.item()
    return sorted(map(str, value)) if isinstance(value, (set, frozenset)) else repr(value)

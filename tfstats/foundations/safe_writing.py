"""Files and folders that are either whole or absent under their final name."""

from __future__ import annotations

import os
import re
import shutil
from collections.abc import Iterator
from contextlib import contextmanager
from pathlib import Path

from tfstats.foundations.errors import InputError, listed

__all__ = ["UNFINISHED", "file_names", "finish_folder", "unfinished_path", "written_whole"]

UNFINISHED = ".unfinished"


def unfinished_path(final: Path) -> Path:
    """Where a folder is written before it gets its final name."""
    return final.with_name(final.name + UNFINISHED)


def finish_folder(final: Path, *, replace: bool) -> None:
    """Give the unfinished folder its final name; an existing one is kept until the new one stands beside it."""
    unfinished = unfinished_path(final)
    if not final.exists():
        os.replace(unfinished, final)
        return
    if not replace:
        raise InputError(f"{final}: expected a new folder, got one that exists; choose another or pass --replace.")
    old = final.with_name(final.name + ".replaced")
    shutil.rmtree(old, ignore_errors=True)
    os.replace(final, old)
    os.replace(unfinished, final)
    shutil.rmtree(old, ignore_errors=True)


@contextmanager
def written_whole(path: Path) -> Iterator[Path]:
    """A temporary path in the same folder that replaces `path` when the block ends without an error."""
    path.parent.mkdir(parents=True, exist_ok=True)
    # The suffix stays last, since numpy and h5py choose by it.
    temporary = path.with_name(f".{path.stem}.{os.getpid()}{path.suffix}")
    try:
        yield temporary
        os.replace(temporary, path)
    finally:
        temporary.unlink(missing_ok=True)


def file_names(names: Iterator[str] | list[str] | tuple[str, ...], where: str) -> dict[str, str]:
    """A file name for each contrast name: characters outside [A-Za-z0-9-] become "_"; collisions are refused."""
    made: dict[str, str] = {}
    for name in names:
        made[name] = re.sub(r"[^A-Za-z0-9-]", "_", name)
    # Compared without case, since two names that differ only by it are one folder on many disks.
    lowered = [short.lower() for short in made.values()]
    clashing = [name for name, short in made.items() if lowered.count(short.lower()) > 1]
    if clashing:
        raise InputError(
            f"{where}: expected names that stay distinct as folder names, got {listed(clashing)}; rename one of them."
        )
    return made

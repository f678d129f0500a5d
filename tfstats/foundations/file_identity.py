"""What tells whether a file is still the one that was read: size, time of change, and a hash of its content."""

from __future__ import annotations

import hashlib
from functools import lru_cache
from pathlib import Path

__all__ = ["content_hash", "file_identity"]

BLOCK = 2**20
REMEMBERED = 100_000
"""Files whose hash is kept in memory, so that a run reads no file for its hash twice."""


def content_hash(path: Path) -> str:
    """SHA-256 of a file, read in blocks; remembered while its size and time of change stay the same."""
    found = path.stat()
    return _hash_of(str(path.resolve()), found.st_size, found.st_mtime_ns)


@lru_cache(REMEMBERED)
def _hash_of(path: str, size: int, changed_ns: int) -> str:
    found = hashlib.sha256()
    with open(path, "rb") as stream:
        while block := stream.read(BLOCK):
            found.update(block)
    return found.hexdigest()


def file_identity(path: Path) -> list[str | int]:
    """Whole path, size in bytes, time of change in ns, content hash."""
    found = path.stat()
    return [str(path.resolve()), found.st_size, found.st_mtime_ns, content_hash(path)]

"""The one way in which tfstats compiles a function, and where the compiled code is kept.

Every kernel is decorated with `compiled`: kept on disk between processes, run without the interpreter lock, divided
by numpy's rules (x / 0 is infinite, no exception), never parallel inside, and never with a flag that lets the compiler
assume that NaN does not exist or that sums may be reordered.  Threads are ordinary Python threads over such kernels.

The cache folder is the first of these that can be written: `NUMBA_CACHE_DIR` if it is set, beside the package, the
user's cache folder, a private folder under the temporary one.  If none can, kernels are compiled anew in each
process and one notice
says so.  Inside it a folder named after the kernels' source text keeps versions apart: the cache of one function
does not notice when another function that it calls has changed.
"""

from __future__ import annotations

import hashlib
import os
import sys
import tempfile
import warnings
from collections.abc import Callable, Iterator
from functools import cache
from pathlib import Path
from typing import Any, TypeVar

import numba

__all__ = ["cache_folder", "compiled", "inlined"]

_Function = TypeVar("_Function", bound=Callable[..., Any])

_OPTIONS: dict[str, Any] = {"nogil": True, "error_model": "numpy", "boundscheck": False}


def _source_fingerprint(folder: Path) -> str:
    """A name for the state of all kernels: changes when any of their files does."""
    digest = hashlib.sha256()
    for path in sorted(folder.glob("*.py")):
        digest.update(path.name.encode("utf-8") + b"\0" + path.read_bytes() + b"\0")
    return digest.hexdigest()[:16]


def _user_folder() -> Path | None:
    """The user's own cache folder by the platform's custom, or None without a home."""
    if sys.platform == "win32":
        base = os.environ.get("LOCALAPPDATA")
        return Path(base) / "tfstats" / "kernels" if base else None
    base = os.environ.get("XDG_CACHE_HOME")
    if base:
        return Path(base) / "tfstats" / "kernels"
    try:
        home = Path.home()
    except (RuntimeError, OSError):
        return None
    if not home.is_dir():
        return None
    middle = Path("Library") / "Caches" if sys.platform == "darwin" else Path(".cache")
    return home / middle / "tfstats" / "kernels"


def _private_temporary_folder() -> Path:
    owner = str(os.getuid()) if hasattr(os, "getuid") else os.environ.get("USERNAME", "user")
    return Path(tempfile.gettempdir()) / f"tfstats-kernels-{owner}"


def _candidates(package_folder: Path) -> Iterator[tuple[Path, bool]]:
    """Folders to try, best first, and whether one must be private (others may write beside it)."""
    chosen = os.environ.get("NUMBA_CACHE_DIR")
    if chosen:
        yield Path(chosen), False
    yield package_folder / "__pycache__", False
    user = _user_folder()
    if user is not None:
        yield user, False
    yield _private_temporary_folder(), True


def _usable(folder: Path, private: bool) -> bool:
    """Whether files can be made in the folder; a private one must also belong to this user alone."""
    try:
        folder.mkdir(parents=True, exist_ok=True, mode=0o700 if private else 0o777)
        if private and hasattr(os, "getuid"):
            state = folder.lstat()
            if not folder.is_dir() or folder.is_symlink() or state.st_uid != os.getuid() or state.st_mode & 0o022:
                return False
        with tempfile.TemporaryFile(dir=folder):
            pass
    except OSError:
        return False
    return True


@cache
def cache_folder() -> Path | None:
    """The folder that keeps the compiled kernels, or None (with one notice) where nothing can be written."""
    package_folder = Path(__file__).resolve().parent
    name = f"kernels-{_source_fingerprint(package_folder)}"
    for base, private in _candidates(package_folder):
        if _usable(base, private) and _usable(base / name, False):
            return base / name
    warnings.warn(
        "tfstats found no folder in which to keep compiled code, so the first test of each process takes some seconds "
        "longer; set NUMBA_CACHE_DIR to a folder that can be written.",
        RuntimeWarning,
        stacklevel=2,
    )
    return None


def compiled(function: _Function) -> Any:
    """Compile a kernel by the policy of this module (see above); use as a decorator.

    Examples
    --------
    >>> from tfstats.kernels.compile_policy import compiled
    >>> @compiled
    ... def doubled(x):
    ...     return 2 * x
    >>> doubled(21)
    42
    """
    folder = cache_folder() if Path(function.__code__.co_filename).is_file() else None
    if folder is None:
        return numba.njit(**_OPTIONS)(function)
    # numba asks for the folder when the function is decorated; nobody else's functions are moved there.
    settings: Any = numba.config
    before = settings.CACHE_DIR
    settings.CACHE_DIR = str(folder)
    try:
        return numba.njit(cache=True, **_OPTIONS)(function)
    finally:
        settings.CACHE_DIR = before


def inlined(function: _Function) -> Any:
    """The same policy for a small piece that is always written out inside the kernel that uses it."""
    return numba.njit(inline="always", **_OPTIONS)(function)

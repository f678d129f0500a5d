"""Small checks of arguments that say what was expected."""

from __future__ import annotations

import math
from collections.abc import Iterable

from tfstats.foundations.errors import listed, refusal

__all__ = ["closest", "count", "one_of", "share"]


def one_of(value: object, options: Iterable[str], where: str, *, remedy: str = "choose one of them") -> str:
    """The value if it is among the options."""
    names = list(options)
    if isinstance(value, str) and value in names:
        return value
    raise refusal(where, f"one of {listed(names)}", repr(value), remedy)


def count(value: object, where: str, *, least: int = 1, remedy: str = "give a whole number") -> int:
    """A whole number of at least `least`."""
    if isinstance(value, bool) or not isinstance(value, (int, float)) and not hasattr(value, "__index__"):
        raise refusal(where, f"a whole number of at least {least}", repr(value), remedy)
    number = float(value)
    if not math.isfinite(number) or number != int(number) or number < least:
        raise refusal(where, f"a whole number of at least {least}", repr(value), remedy)
    return int(number)


def share(value: object, where: str, *, remedy: str = "write 0.05 for five percent") -> float:
    """A number strictly between 0 and 1."""
    try:
        number = float(value)  # type: ignore[arg-type]
    except (TypeError, ValueError):
        number = math.nan
    if isinstance(value, bool) or not 0.0 < number < 1.0:
        raise refusal(where, "a number between 0 and 1", repr(value), remedy)
    return number


def closest(name: str, options: Iterable[str]) -> str:
    """`did you mean "x"? ` if an option resembles the name, else nothing."""
    import difflib

    near = difflib.get_close_matches(name, list(options), n=1, cutoff=0.6)
    return f'did you mean "{near[0]}"? ' if near else ""

"""Blanks of a drafted plan: texts that begin with FILL IN, refused until something stands in their place."""

from __future__ import annotations

from collections.abc import Iterator
from typing import Any

from tfstats.foundations.errors import Problems
from tfstats.plan_file.line_numbers import KeyPath
from tfstats.plan_file.messages import place_text

__all__ = ["FILL_IN", "refuse_blanks"]

FILL_IN = "FILL IN"


def refuse_blanks(file: str, data: dict[str, Any], lines: dict[KeyPath, int]) -> None:
    """Refuse all blanks together; what else is wrong cannot be told before they are filled."""
    problems = Problems()
    for path, text in _blanks(data, ()):
        what = text.removeprefix(FILL_IN).lstrip(": ") or "a value"
        problems.add(place_text(file, path, data, lines), what, "a blank", f'write it in place of "{FILL_IN} ..."')
    problems.raise_if_any()


def _blanks(value: Any, path: KeyPath) -> Iterator[tuple[KeyPath, str]]:
    if isinstance(value, str) and value.startswith(FILL_IN):
        # A place inside a list has no line of its own.
        yield path, value
    elif isinstance(value, dict):
        for key, part in value.items():
            yield from _blanks(part, (*path, key))
    elif isinstance(value, list):
        for number, part in enumerate(value):
            yield from _blanks(part, (*path, number) if isinstance(part, dict) else path)

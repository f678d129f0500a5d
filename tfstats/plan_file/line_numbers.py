"""Where in a TOML file a key stands, so that a mistake can be found without searching."""

from __future__ import annotations

import re

__all__ = ["KeyPath", "line_of", "lines_of_keys"]

KeyPath = tuple[str | int, ...]

_HEADER = re.compile(r"^\s*(\[\[?)\s*(.+?)\s*\]\]?\s*(#.*)?$")
_KEY = re.compile(r"^\s*((?:\"[^\"]*\"|'[^']*'|[A-Za-z0-9_-]+)(?:\s*\.\s*(?:\"[^\"]*\"|'[^']*'|[A-Za-z0-9_-]+))*)\s*=")
_PART = re.compile(r"\"([^\"]*)\"|'([^']*)'|([A-Za-z0-9_-]+)")


def _parts(text: str) -> list[str]:
    return [first or second or third for first, second, third in _PART.findall(text)]


def lines_of_keys(text: str) -> dict[KeyPath, int]:
    """Line number of each table header and key; entries of an array of tables are numbered from 0."""
    found: dict[KeyPath, int] = {}
    table: KeyPath = ()
    counts: dict[str, int] = {}
    for number, line in enumerate(text.splitlines(), 1):
        header = _HEADER.match(line)
        if header:
            parts = _parts(header.group(2))
            if header.group(1) == "[[":
                name = ".".join(parts)
                counts[name] = counts.get(name, -1) + 1
                table = (*parts, counts[name])
            else:
                name = parts[0] if parts else ""
                table = (name, counts[name], *parts[1:]) if name in counts else tuple(parts)
            found.setdefault(table, number)
            continue
        key = _KEY.match(line)
        if key:
            found.setdefault((*table, *_parts(key.group(1))), number)
    return found


def line_of(path: KeyPath, lines: dict[KeyPath, int]) -> int | None:
    """Line of the key, or of the closest table that holds it."""
    for length in range(len(path), 0, -1):
        if path[:length] in lines:
            return lines[path[:length]]
    return None

"""Where in a TOML file a key stands, so that a mistake can be found without searching."""

from __future__ import annotations

import re

__all__ = ["KeyPath", "line_of", "lines_of_keys"]

KeyPath = tuple[str | int, ...]

_NAME = r"(?:\"[^\"]*\"|'[^']*'|[A-Za-z0-9_-]+)"
_HEADER = re.compile(rf"^\s*(\[\[?)\s*({_NAME}(?:\s*\.\s*{_NAME})*)\s*\]\]?\s*(#.*)?$")
_KEY = re.compile(rf"^\s*({_NAME}(?:\s*\.\s*{_NAME})*)\s*=")
_PART = re.compile(r"\"([^\"]*)\"|'([^']*)'|([A-Za-z0-9_-]+)")
# What decides whether a line continues a value: texts (whole, so that brackets in them do not count), comments, brackets.
_TOKEN = re.compile(r"\"\"\"|'''|\"(?:\\.|[^\"\\])*\"|'[^']*'|#.*|[\[\]{}]")


def _parts(text: str) -> list[str]:
    return [first or second or third for first, second, third in _PART.findall(text)]


class _Continued:
    """Whether the next line still belongs to the value of a line before it: an open bracket or a text of many lines."""

    def __init__(self) -> None:
        self.depth = 0
        self.closing = ""
        """What ends the text of many lines that is open."""

    def __bool__(self) -> bool:
        return self.depth > 0 or bool(self.closing)

    def take(self, line: str) -> None:
        """Follow one line that is a value or holds one."""
        place = 0
        while place < len(line):
            if self.closing:
                end = line.find(self.closing, place)
                if end < 0:
                    return
                place, self.closing = end + 3, ""
                continue
            token = _TOKEN.search(line, place)
            if token is None:
                return
            place = token.end()
            if token.group() in ('"""', "'''"):
                self.closing = token.group()
            elif token.group() in "[{":
                self.depth += 1
            elif token.group() in "]}":
                self.depth -= 1


def lines_of_keys(text: str) -> dict[KeyPath, int]:
    """Line number of each table header and key; entries of an array of tables are numbered from 0."""
    found: dict[KeyPath, int] = {}
    table: KeyPath = ()
    counts: dict[str, int] = {}
    continued = _Continued()
    for number, line in enumerate(text.split("\n"), 1):
        if continued:
            continued.take(line)
            continue
        header = _HEADER.match(line)
        if header:
            parts = _parts(header.group(2))
            if header.group(1) == "[[":
                name = ".".join(parts)
                counts[name] = counts.get(name, -1) + 1
                table = (*parts, counts[name])
            else:
                name = parts[0]
                table = (name, counts[name], *parts[1:]) if name in counts else tuple(parts)
            found.setdefault(table, number)
            continue
        key = _KEY.match(line)
        if key:
            found.setdefault((*table, *_parts(key.group(1))), number)
            continued.take(line[key.end() :])
    return found


def line_of(path: KeyPath, lines: dict[KeyPath, int]) -> int | None:
    """Line of the key, or of the closest table that holds it."""
    for length in range(len(path), 0, -1):
        # Of a table that stands in double brackets, the first.
        for place in (path[:length], (*path[:length], 0)):
            if place in lines:
                return lines[place]
    return None

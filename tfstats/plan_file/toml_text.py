"""A plan's tables as TOML text; the standard library reads TOML and does not write it."""

from __future__ import annotations

import json
import math
import re
from collections.abc import Mapping, Sequence
from typing import Any

__all__ = ["toml_key", "toml_text", "toml_value"]

_BARE = re.compile(r"[A-Za-z0-9_-]+")


def toml_key(name: str) -> str:
    """A key, in quotes where it has to be."""
    return name if _BARE.fullmatch(name) else _quoted(name)


def _quoted(text: str) -> str:
    # JSON's escapes are TOML's, but for DEL, which TOML does not take as it is.
    return json.dumps(text, ensure_ascii=False).replace("\x7f", "\\u007f")


def toml_value(value: Any) -> str:
    """One value on one line."""
    if isinstance(value, bool):
        return "true" if value else "false"
    if isinstance(value, float) and not math.isfinite(value):
        return "nan" if math.isnan(value) else "inf" if value > 0 else "-inf"
    if isinstance(value, (int, float)):
        return repr(value)
    if isinstance(value, Mapping):
        inside = ", ".join(f"{toml_key(str(name))} = {toml_value(part)}" for name, part in value.items())
        return f"{{ {inside} }}" if inside else "{}"
    if isinstance(value, Sequence) and not isinstance(value, str):
        return "[" + ", ".join(toml_value(part) for part in value) + "]"
    return _quoted(str(value))


def toml_text(tables: Mapping[str, Any]) -> str:
    """Tables and lists of tables, each under its header, in their order.

    Examples
    --------
    >>> from tfstats.plan_file.toml_text import toml_text
    >>> print(toml_text({"study": {"name": "lamps"}, "band": [{"name": "theta", "frequencies": [4, 8]}]}))
    [study]
    name = "lamps"
    <BLANKLINE>
    [[band]]
    name = "theta"
    frequencies = [4, 8]
    <BLANKLINE>
    """
    parts = []
    for name, table in tables.items():
        several = isinstance(table, list)
        for one in table if several else [table]:
            header = f"[[{toml_key(name)}]]" if several else f"[{toml_key(name)}]"
            parts.append("\n".join([header, *(f"{toml_key(key)} = {toml_value(value)}" for key, value in one.items())]))
    return "\n\n".join(parts) + "\n"

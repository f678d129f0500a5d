"""Text from labels as it may be shown: without characters that have no picture but act on what stands around them."""

from __future__ import annotations

import re

__all__ = ["printable"]

# Control characters, and the marks that turn the direction of all text after them until they are closed.
_ACTING = re.compile("[\x00-\x08\x0b\x0c\x0e-\x1f\x7f-\x9f\u202a-\u202e\u2066-\u2069\ud800-\udfff]")


def printable(text: str) -> str:
    """The text without control characters and direction overrides; letters of every script stay."""
    return _ACTING.sub("", text)

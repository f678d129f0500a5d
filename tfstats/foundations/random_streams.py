"""Random numbers that belong to (seed, unit's name, draw) and to nothing else.

Each subject (or trial) has a Philox stream (Salmon et al. 2011) of its own, keyed by the seed and a hash of the
subject's name; draw d uses its d-th raw word.  So leaving out a subject, adding a contrast or extending a run
changes no other number, and all contrasts of a study share their relabellings.
"""

from __future__ import annotations

import hashlib
from collections.abc import Sequence

import numpy as np
from numpy.typing import NDArray

__all__ = ["generator", "name_key", "raw_words", "sign_flips", "stable_orders"]

WORDS_A_COUNTER = 4  # Philox4x64 gives four 64-bit words for each value of its counter


def name_key(name: str) -> int:
    """First 8 bytes, little-endian, of the SHA-256 of the UTF-8 name."""
    return int.from_bytes(hashlib.sha256(name.encode("utf-8")).digest()[:8], "little")


def raw_words(seed: int, name: str, first: int, last: int) -> NDArray[np.uint64]:
    """Raw 64-bit words first, ..., last - 1 of the stream of (seed, name); cost grows with last - first only."""
    stream = np.random.Philox(key=np.array([seed, name_key(name)], dtype=np.uint64))
    first, last = int(first), int(last)
    stream.advance(first // WORDS_A_COUNTER)
    skipped = first % WORDS_A_COUNTER
    return np.asarray(stream.random_raw(last - first + skipped)[skipped:], dtype=np.uint64)


def sign_flips(seed: int, names: Sequence[str], first: int, last: int) -> NDArray[np.uint8]:
    """(draws, units) of 0 and 1; 1 flips the unit's sign: the lowest bit of the unit's word for the draw."""
    flips = np.empty((last - first, len(names)), dtype=np.uint8)
    for column, name in enumerate(names):
        flips[:, column] = raw_words(seed, name, first, last) & np.uint64(1)
    return flips


def stable_orders(seed: int, names: Sequence[str], first: int, last: int) -> NDArray[np.int64]:
    """(draws, units): for each draw the stable order of the units' words, a uniform shuffle."""
    words = np.empty((last - first, len(names)), dtype=np.uint64)
    for column, name in enumerate(names):
        words[:, column] = raw_words(seed, name, first, last)
    return np.argsort(words, axis=1, kind="stable").astype(np.int64)


def generator(seed: int, name: str) -> np.random.Generator:
    """A numpy Generator on the stream of (seed, name), for simulations; never with a name that relabellings use."""
    return np.random.Generator(np.random.Philox(key=np.array([seed, name_key(name)], dtype=np.uint64)))

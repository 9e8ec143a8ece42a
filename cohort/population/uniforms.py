"""Independent uniforms from a counter-based generator: any range of subjects, always the same numbers."""

from __future__ import annotations

import hashlib

import numpy as np
from numpy.typing import NDArray

BLOCK = 1024
"""Subjects that share one setting of the counter."""


def key(seed: int, *words: str) -> int:
    """A 128-bit key of seed and words (purpose, name, …)."""
    text = "\0".join((str(seed), *words)).encode()
    return int.from_bytes(hashlib.blake2b(text, digest_size=16).digest(), "little")


def uniforms(seed: int, purpose: str, name: str, start: int, stop: int, width: int = 1) -> NDArray[np.float64]:
    """Uniforms of subjects start..stop-1 in the open interval (0, 1): float64[n], or float64[n, width] if width > 1.

    Keyed by (seed, purpose, name); subject i's numbers depend on i alone.
    """
    parts = []
    philox_key = key(seed, purpose, name, str(width)) if width > 1 else key(seed, purpose, name)
    for block in range(start // BLOCK, (stop + BLOCK - 1) // BLOCK):
        raw = np.random.Philox(key=philox_key, counter=block << 128).random_raw(BLOCK * width)
        parts.append(((raw >> np.uint64(12)).astype(np.float64) + 0.5) * 2.0**-52)
    first = (start // BLOCK) * BLOCK
    flat = np.concatenate(parts) if parts else np.empty(0)
    rows = flat.reshape(-1, width)[start - first : stop - first]
    return rows[:, 0] if width == 1 else rows


def generator(seed: int, *words: str) -> np.random.Generator:
    """A generator of its own for (seed, words)."""
    return np.random.Generator(np.random.Philox(key=key(seed, *words)))

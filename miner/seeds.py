"""The only maker of random generators: one stream per named use, never per worker."""

from __future__ import annotations

import zlib

import numpy as np


def stream(seed: int, *use: str | int) -> np.random.Generator:
    """A generator that depends on the study's seed and on what it is used for, and nothing else."""
    key = tuple(zlib.crc32(str(part).encode()) for part in use)
    return np.random.Generator(np.random.PCG64(np.random.SeedSequence(seed, spawn_key=key)))

"""Random numbers that depend on the seed and the piece of work, never on order or threads."""

from __future__ import annotations

import zlib

import numpy as np

__all__ = ["generator"]


def generator(seed: int, stage: str, unit: str, draw: int = 0) -> np.random.Generator:
    """Make the generator of one piece of work.

    Parameters
    ----------
    seed : int
        The recipe's seed.
    stage, unit : str
        What the numbers are for; hashed with CRC-32, which is the same on every machine.
    draw : int
        Number of the draw.
    """
    key = (zlib.crc32(stage.encode()), zlib.crc32(unit.encode()), draw)
    return np.random.default_rng(np.random.SeedSequence(seed, spawn_key=key))

"""Random streams: one a purpose and block of traces, so that neither threads nor block order change a number."""

from __future__ import annotations

import zlib
from typing import Final

import numpy as np

from meseta.errors import CallError

__all__ = ["PURPOSES", "key_of", "stream", "traces_a_block"]

PURPOSES: Final = ("junction", "current noise", "conductance noise", "events", "record", "closing", "piezo")
"""What a stream is used for; the place in this tuple is part of the stream's key, so entries are only added."""

_BLOCK_SAMPLES: Final = 400_000
_BLOCK_TRACES: Final = 64


def traces_a_block(samples: int) -> int:
    """Return how many traces share a stream: fixed for a length of trace, whatever the number of traces."""
    return max(1, min(_BLOCK_TRACES, _BLOCK_SAMPLES // samples))


def key_of(seed: int, kind: str) -> int:
    """Return the key of a simulation's streams, so that two kinds with one seed share no noise.

    Raises
    ------
    CallError
        Where the seed is negative.
    """
    if seed < 0:
        raise CallError(f"the seed {seed} is negative", "seed", "give a whole number from 0")
    return (seed << 32) + zlib.crc32(kind.encode())


def stream(key: int, purpose: str, block: int) -> np.random.Generator:
    """Return the generator of one purpose and block of the simulation with this key."""
    sequence = np.random.SeedSequence([key, PURPOSES.index(purpose), block])
    return np.random.Generator(np.random.PCG64DXSM(sequence))

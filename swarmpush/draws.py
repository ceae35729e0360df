"""Random numbers by address: every pusher has its own stream for every purpose.

A draw is a pure function of (key, index), so it does not matter in which order, in which world or on which
worker it is asked for, and adding a pusher or switching an error off leaves all other draws unchanged. That is
what makes the paired comparisons of the audit possible.

The generator is SplitMix64 (Steele, Lea and Flood, "Fast splittable pseudorandom number generators", OOPSLA
2014, figure 14) addressed by counter; its 64-bit keys come from NumPy's SeedSequence. Normal variates are made
by the method of Box and Muller (Annals of Mathematical Statistics 29 (1958) 610).
"""

from __future__ import annotations

import math
from enum import IntEnum

import numpy as np
from numpy.typing import NDArray

from swarmpush.compiled import compiled


class Purpose(IntEnum):
    """What a stream is for. New purposes go to the end, so that old seeds keep their meaning."""

    START = 0
    TURN = 1
    DEPART = 2
    BEARING = 3
    HEADING = 4
    MISSED_BUMP = 5
    FALSE_BUMP = 6
    UNIT_SPEED = 7
    UNIT_MASS = 8
    RANGE = 9
    SIGHT = 10
    UNIT_STALL = 11
    UNIT_DRIFT = 12
    DROPOUT = 13


def stream_keys(seed: int, n_pushers: int) -> NDArray[np.uint64]:
    """One key per pusher and purpose.

    Arguments:
        seed: the run's seed, a non-negative integer.
        n_pushers: number of pushers.

    Returns:
        keys: (n_pushers, number of purposes) uint64.

    >>> bool((stream_keys(1, 3)[:2] == stream_keys(1, 2)).all())
    True
    """
    keys = [
        np.random.SeedSequence(seed, spawn_key=(i,)).generate_state(len(Purpose), np.uint64) for i in range(n_pushers)
    ]
    return np.array(keys, dtype=np.uint64).reshape(n_pushers, len(Purpose))


@compiled
def uniform(key: np.uint64, index: int) -> float:
    """The `index`-th number of the stream `key`, uniform on the open interval (0, 1)."""
    z = key + np.uint64(index + 1) * np.uint64(0x9E3779B97F4A7C15)
    z = (z ^ (z >> np.uint64(30))) * np.uint64(0xBF58476D1CE4E5B9)
    z = (z ^ (z >> np.uint64(27))) * np.uint64(0x94D049BB133111EB)
    z = z ^ (z >> np.uint64(31))
    return (float(z >> np.uint64(12)) + 0.5) / 4503599627370496.0  # 2**52 cells, their midpoints


@compiled
def normal(key: np.uint64, index: int) -> float:
    """The `index`-th standard normal number of the stream `key`."""
    radius = math.sqrt(-2.0 * math.log(uniform(key, 2 * index)))
    return radius * math.cos(2.0 * math.pi * uniform(key, 2 * index + 1))

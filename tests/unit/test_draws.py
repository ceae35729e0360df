"""Random numbers by address."""

from __future__ import annotations

import math
from itertools import pairwise

import numpy as np
import pytest

from swarmpush.draws import Purpose, normal, stream_keys, uniform

N = 20_000
FOUR_SIGMA = 4.0  # the draws are fixed by their seeds, so a sound generator passes for good; one in 16 000 would not

# the first outputs of SplitMix64 for the seed 1234567, as published at Rosetta Code, "Pseudo-random numbers/Splitmix64"
PUBLISHED = (
    6457827717110365317,
    3203168211198807973,
    9817491932198370423,
    4593380528125082431,
    16408922859458223821,
)


def test_is_splitmix64() -> None:
    """The upper 52 bits of a draw are those of the published SplitMix64 sequence."""
    cells = [int(uniform(np.uint64(1234567), k) * 2**52) for k in range(len(PUBLISHED))]
    assert cells == [number >> 12 for number in PUBLISHED]


def test_a_draw_depends_on_its_address_alone() -> None:
    """The same key and index give the same number, in whatever order they are asked for."""
    key = stream_keys(3, 1)[0, Purpose.TURN]
    forwards = [normal(key, k) for k in range(50)]
    backwards = [normal(key, k) for k in reversed(range(50))]
    assert forwards == backwards[::-1]


def test_more_pushers_leave_the_others_draws_unchanged() -> None:
    """The streams of the first pushers are the same in a larger crew."""
    assert (stream_keys(7, 40)[:6] == stream_keys(7, 6)).all()


def test_a_new_purpose_leaves_the_old_streams_unchanged() -> None:
    """NumPy's seed sequence is stable when more words are taken, so purposes can be added at the end."""
    sequence = np.random.SeedSequence(7, spawn_key=(0,))
    n = len(Purpose)
    assert (sequence.generate_state(n + 5, np.uint64)[:n] == stream_keys(7, 1)[0]).all()


def test_keys_are_all_different() -> None:
    """No two pushers, purposes or seeds share a stream."""
    keys = np.concatenate([stream_keys(seed, 50).ravel() for seed in range(20)])
    assert len(np.unique(keys)) == keys.size == 20 * 50 * len(Purpose)


def test_uniform_is_uniform() -> None:
    """Draws lie inside (0, 1) and their mean and variance are those of the uniform law."""
    u = np.array([uniform(stream_keys(1, 1)[0, Purpose.START], k) for k in range(N)])
    assert u.min() > 0.0
    assert u.max() < 1.0
    assert abs(u.mean() - 1 / 2) < FOUR_SIGMA * math.sqrt(1 / 12 / N)
    assert abs(u.var() - 1 / 12) < FOUR_SIGMA * math.sqrt(1 / 180 / N)  # fourth moment 1/80, less the square of 1/12


def test_normal_is_standard() -> None:
    """Mean, variance and the share within one standard deviation are those of the normal law."""
    z = np.array([normal(stream_keys(1, 1)[0, Purpose.TURN], k) for k in range(N)])
    within = math.erf(1 / math.sqrt(2))
    assert abs(z.mean()) < FOUR_SIGMA * math.sqrt(1 / N)
    assert abs(z.var() - 1) < FOUR_SIGMA * math.sqrt(2 / N)
    assert abs((abs(z) < 1).mean() - within) < FOUR_SIGMA * math.sqrt(within * (1 - within) / N)


@pytest.mark.parametrize("lag", [0, 1])
def test_streams_are_uncorrelated(lag: int) -> None:
    """Neighbouring pushers' draws are uncorrelated, at the same index and at the next one."""
    draws = np.array([[uniform(key, k) for k in range(N // 10)] for key in stream_keys(1, 6)[:, Purpose.HEADING]])
    n = draws.shape[1] - lag
    for one, other in pairwise(draws):
        assert abs(np.corrcoef(one[:n], other[lag:])[0, 1]) < FOUR_SIGMA / math.sqrt(n)

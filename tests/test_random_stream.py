"""The counter hash against SplitMix64's known outputs, a slow twin, and what a uniform stream must do."""

import itertools

import numpy as np
import pytest
from scipy import stats
from twins import splitmix64, splitmix64_uniform

from raytrace.random_stream import GOLDEN, mix64, stream_state, uniform

# SplitMix64 started with 1234567; a widely quoted test vector, from memory
REFERENCE = [
    6457827717110365317,
    3203168211198807973,
    9817491932198370423,
    4593380528125082431,
    16408922859458223821,
]
NUMBERS = 200_000
# chance that a right generator fails one statistical test here; seeds are fixed, so each test passes always or never
FALSE_ALARM = 1e-4


def draw(state, count):
    return np.array([uniform(state, np.uint64(k)) for k in range(count)])


def test_twin_gives_the_quoted_numbers():
    assert splitmix64(1234567, 5) == REFERENCE


def test_hash_gives_the_quoted_numbers():
    with np.errstate(over="ignore"):
        states = [np.uint64(1234567) + np.uint64(k + 1) * GOLDEN for k in range(5)]
    assert [int(mix64(z)) for z in states] == REFERENCE


def test_uniform_is_the_upper_53_bits():
    assert [uniform(np.uint64(1234567), np.uint64(k)) * 2**53 for k in range(5)] == [z >> 11 for z in REFERENCE]


def test_array_twin_is_the_same_stream():
    np.testing.assert_array_equal(splitmix64_uniform(1234567, 100), draw(np.uint64(1234567), 100))


def test_compiled_is_the_function_itself():
    state = stream_state(3, 1, 4)
    with np.errstate(over="ignore"):
        plain = [uniform.py_func(state, np.uint64(k)) for k in range(200)]
        hashed = [int(mix64.py_func(np.uint64(k))) for k in (0, 1, 2**63, 2**64 - 1)]
    assert plain == draw(state, 200).tolist()
    assert hashed == [int(mix64(np.uint64(k))) for k in (0, 1, 2**63, 2**64 - 1)]


def test_mix64_loses_nothing():
    # a bijection never maps two numbers to one
    z = np.array([int(mix64(np.uint64(k))) for k in range(20_000)], dtype=np.uint64)
    assert np.unique(z).size == z.size


@pytest.mark.parametrize("key", [(0, 0, 0), (1, 0, 0), (0, 31, 80), (2**64 - 1, 5, 7)])
def test_uniform(key):
    u = splitmix64_uniform(int(stream_state(*key)), NUMBERS)
    assert u.min() >= 0 and u.max() < 1
    counts = np.bincount((u * 1000).astype(int), minlength=1000)
    statistic = ((counts - NUMBERS / 1000) ** 2).sum() / (NUMBERS / 1000)
    # from both sides: numbers that are too even are not random either
    assert stats.chi2.ppf(FALSE_ALARM / 2, 999) < statistic < stats.chi2.isf(FALSE_ALARM / 2, 999)


def test_neighbours_in_a_stream_are_independent():
    u = splitmix64_uniform(int(stream_state(0)), NUMBERS)
    pairs = np.histogram2d(u[0::2], u[1::2], bins=32, range=[[0, 1], [0, 1]])[0]
    statistic = ((pairs - pairs.mean()) ** 2).sum() / pairs.mean()
    assert stats.chi2.ppf(FALSE_ALARM / 2, 1023) < statistic < stats.chi2.isf(FALSE_ALARM / 2, 1023)


def test_streams_are_uncorrelated():
    keys = list(itertools.product((0, 1, 2, 2**40), (0, 1, 31), (0, 1, 80)))
    u = np.array([splitmix64_uniform(int(stream_state(*key)), 20_000) for key in keys])
    r = np.corrcoef(u)[np.triu_indices(len(keys), 1)]
    # of uncorrelated streams r sqrt(N) is standard normal; Bonferroni over all pairs
    assert np.abs(r).max() * np.sqrt(u.shape[1]) < stats.norm.isf(FALSE_ALARM / 2 / r.size)


def test_streams_differ():
    small = [0, 1, 2, 3, 255]
    states = {int(stream_state(*key)) for key in itertools.product(small, small, small)}
    assert len(states) == len(small) ** 3


def test_seed_0_is_a_seed_like_any_other():
    assert stream_state(0) != stream_state(1)
    assert stream_state(0) == stream_state(0, 0, 0)
    assert 0.4 < draw(stream_state(0), 1000).mean() < 0.6


def test_one_ray_changes_no_other():
    # a number depends on its counter only, not on which were drawn before
    state = stream_state(9)
    assert draw(state, 50)[37] == uniform(state, np.uint64(37))


def test_negative_seed_is_refused():
    with pytest.raises(OverflowError):
        stream_state(-1)

"""The one random stream of the project: a hash of counters, so that a number depends only on where it is used.

SplitMix64 (Steele, Lea and Flood 2014, "Fast splittable pseudorandom number generators", OOPSLA,
doi:10.1145/2660193.2660195) read as a function of its counter: the k-th output of a stream with state s is
mix64(s + k * GOLDEN). The state of a stream is made from (seed, block, dimension) by the same hash, and the ray's
number is the counter.
"""

from __future__ import annotations

import numpy as np

from raytrace.jit import kernel

GOLDEN = np.uint64(0x9E3779B97F4A7C15)
_M1 = np.uint64(0xBF58476D1CE4E5B9)
_M2 = np.uint64(0x94D049BB133111EB)
_S30, _S27, _S31, _S11 = np.uint64(30), np.uint64(27), np.uint64(31), np.uint64(11)
_ULP = 2.0**-53


@kernel(inline=True)
def mix64(z):
    """The output function of SplitMix64 (Stafford's variant 13 of the MurmurHash3 finaliser)."""
    z = (z ^ (z >> _S30)) * _M1
    z = (z ^ (z >> _S27)) * _M2
    return z ^ (z >> _S31)


@kernel(inline=True)
def uniform(state, counter):
    """Number `counter` (an unsigned integer) of the stream `state`, uniform in [0, 1) with 53 bits."""
    return np.float64(np.int64(mix64(state + (counter + np.uint64(1)) * GOLDEN) >> _S11)) * _ULP


def stream_state(seed: int, block: int = 0, dimension: int = 0) -> np.uint64:
    """State of the stream of one block and dimension.

    Parameters
    ----------
    seed, block, dimension : int
        Non-negative; 0 is a seed like any other.
    """
    with np.errstate(over="ignore"):
        state = np.uint64(0)
        for word in (seed, block, dimension):
            state = mix64.py_func((state ^ np.uint64(word)) + GOLDEN)
    return state

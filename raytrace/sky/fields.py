"""A patchwork of fields: which field a point lies in, and how far its edge is. Invented scenery."""

from __future__ import annotations

import math

import numpy as np

from raytrace.jit import kernel
from raytrace.sky.noise import gradient_noise, lattice_hash

_LONG_M, _WIDE_M = 240.0, 150.0
_LOW16, _S16 = np.uint64(0xFFFF), np.uint64(16)


@kernel
def field_at(x, y, seed):
    """The field that holds (x, y) [m].

    Fields are the cells round jittered lattice points in the largest of two distances, which makes long, mostly
    four-sided fields; their edges are bent a little, so that none is ruled.

    Returns
    -------
    bits : uint64
        Hash of the field, for what grows on it.
    edge_m : float
        Distance to its edge, roughly [m].
    across : float
        Coordinate across the rows of the crop [m].
    """
    bend_x = 0.10 * gradient_noise(x / 330.0, y / 330.0, 1.5, seed)
    bend_y = 0.10 * gradient_noise(x / 330.0, y / 330.0, 7.5, seed)
    u = (0.86 * x + 0.51 * y) / _LONG_M + bend_x
    v = (-0.51 * x + 0.86 * y) / _WIDE_M + bend_y
    iu, iv = math.floor(u), math.floor(v)
    best, second, cell = 1e9, 1e9, np.uint64(0)
    for du in range(-1, 2):
        for dv in range(-1, 2):
            bits = lattice_hash(np.int64(iu) + du, np.int64(iv) + dv, 0, seed)
            px = iu + du + 0.2 + 0.6 * np.float64(np.int64(bits & _LOW16)) / 65536.0
            py = iv + dv + 0.2 + 0.6 * np.float64(np.int64((bits >> _S16) & _LOW16)) / 65536.0
            away = max(abs(u - px), abs(v - py))
            if away < best:
                second, best, cell = best, away, bits
            elif away < second:
                second = away
    return cell, 0.5 * (second - best) * _WIDE_M, v * _WIDE_M


@kernel
def field_edge_m(x, y, seed):
    """Distance from (x, y) to the edge of its field, roughly [m]."""
    return field_at(x, y, seed)[1]

"""Seeded, seamless texture: gradient noise on a lattice of hashed gradients, and sums of octaves of it.

Gradient noise after Perlin (1985), "An image synthesizer", Computer Graphics 19(3), with the fifth-degree fade of
Perlin (2002), "Improving noise". The hash is the project's random stream. Texture here is invented scenery, not
measurement.
"""

from __future__ import annotations

import math

import numpy as np

from raytrace.jit import kernel
from raytrace.random_stream import mix64

_KX, _KY, _KZ = np.uint64(0x8DA6B343D8163841), np.uint64(0xD8163841CB1AB31F), np.uint64(0xCB1AB31F8DA6B343)
_LOW = np.uint64(0x1FFFFF)
_S21, _S42 = np.uint64(21), np.uint64(42)


@kernel
def lattice_hash(ix, iy, iz, seed):
    """64 hashed bits of a lattice point."""
    return mix64(np.uint64(ix) * _KX + np.uint64(iy) * _KY + np.uint64(iz) * _KZ + seed)


@kernel
def _corner(ix, iy, iz, dx, dy, dz, seed):
    bits = lattice_hash(ix, iy, iz, seed)
    half = 1048576.0
    gx = np.float64(np.int64(bits & _LOW)) / half - 1.0
    gy = np.float64(np.int64((bits >> _S21) & _LOW)) / half - 1.0
    gz = np.float64(np.int64((bits >> _S42) & _LOW)) / half - 1.0
    return gx * dx + gy * dy + gz * dz


@kernel
def _fade(t):
    return t * t * t * (t * (t * 6.0 - 15.0) + 10.0)


@kernel
def gradient_noise(x, y, z, seed):
    """Noise of mean zero, mostly within -1 to 1, with features about one unit wide."""
    fx, fy, fz = math.floor(x), math.floor(y), math.floor(z)
    ix, iy, iz = np.int64(fx), np.int64(fy), np.int64(fz)
    x, y, z = x - fx, y - fy, z - fz
    u, v, w = _fade(x), _fade(y), _fade(z)
    a = _corner(ix, iy, iz, x, y, z, seed)
    b = _corner(ix + 1, iy, iz, x - 1, y, z, seed)
    low = a + u * (b - a)
    a = _corner(ix, iy + 1, iz, x, y - 1, z, seed)
    b = _corner(ix + 1, iy + 1, iz, x - 1, y - 1, z, seed)
    near = low + v * (a + u * (b - a) - low)
    a = _corner(ix, iy, iz + 1, x, y, z - 1, seed)
    b = _corner(ix + 1, iy, iz + 1, x - 1, y, z - 1, seed)
    low = a + u * (b - a)
    a = _corner(ix, iy + 1, iz + 1, x, y - 1, z - 1, seed)
    b = _corner(ix + 1, iy + 1, iz + 1, x - 1, y - 1, z - 1, seed)
    far = low + v * (a + u * (b - a) - low)
    return 1.6 * (near + w * (far - near))


@kernel
def octaves(x, y, z, seed, count, footprint):
    """Sum of octaves, each half as high and half as wide; those narrower than twice the footprint fade out.

    Parameters
    ----------
    x, y, z : float
        Position, in widths of the widest feature.
    seed : uint64
    count : int
        Octaves.
    footprint : float
        Width over which a pixel averages, in the same unit; keeps far texture from flickering.
    """
    total, height, freq = 0.0, 0.5, 1.0
    for k in range(count):
        keep = 1.0 - 2.0 * footprint * freq
        if keep <= 0.0:
            break
        total += height * min(1.0, 2.0 * keep) * gradient_noise(x * freq, y * freq, z * freq, seed + np.uint64(k))
        height *= 0.5
        freq *= 2.03
    return total


@kernel
def smoothstep(low, high, x):
    """0 below low, 1 above high, smooth between; a step at low where the two are equal."""
    if x <= low:
        return 0.0
    if x >= high:
        return 1.0
    t = (x - low) / (high - low)
    return t * t * (3.0 - 2.0 * t)

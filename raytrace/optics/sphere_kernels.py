"""Kernels of the sphere tracer: one block of rays through a sphere, and the merge of blocks.

Angles here are in units of histogram bins: pi is `bins`, a full turn is 2 * bins. A ray that has met the surface p + 1
times leaves at the deviation 2 (i - r) + (p - 1) (pi - 2 r) for p >= 1 and pi - 2 i for p = 0 (van de Hulst 1957,
section 12.21), folded into 0 to pi. Within one chunk the arithmetic that vectorises comes first and the scattered
additions come last; consecutive rays hit the same bins, so the orders are the inner loop, which keeps eight chains of
additions in flight instead of one.
"""

from __future__ import annotations

import math
from typing import NamedTuple

import numpy as np

from raytrace.jit import kernel
from raytrace.random_stream import uniform

CHUNK = 128


class SphereBlock(NamedTuple):
    """State of one block, as it enters the kernel."""

    index: float  # real part, relative to air
    absorption: float  # 4 k x: the exponent of absorption along a chord is this times cos r
    rays: int
    paths: int
    bins: int
    stream: np.uint64


@kernel(inline=True)
def arcsin(x, cosine):
    """Arcsine of 0 <= x <= 1 with its cosine known, to 2 ulp; rational approximation that the compiler can vectorise.

    Below 1/2 the minimax quotient of fdlibm's e_asin.c (Sun Microsystems 1993), above it through the half angle.
    """
    small = x < 0.5
    # (1 - x) / 2 = cos^2 / (2 (1 + x)) keeps its digits where x is close to 1
    z = x * x if small else cosine * cosine / (2.0 * (1.0 + x))
    s = x if small else math.sqrt(z)
    num = z * (
        1.66666666666666657415e-01
        + z
        * (
            -3.25565818622400915405e-01
            + z
            * (
                2.01212532134862925881e-01
                + z * (-4.00555345006794114027e-02 + z * (7.91534994289814532176e-04 + z * 3.47933107596021167570e-05))
            )
        )
    )
    den = 1.0 + z * (
        -2.40339491173441421878e00
        + z * (2.02094576023350569471e00 + z * (-6.88283971605453293030e-01 + z * 7.70381505559019352791e-02))
    )
    r = s + s * (num / den)
    return r if small else 0.5 * math.pi - 2.0 * r


@kernel(inline=True)
def fold_bin(x, bins):
    """Bin of a deviation of 0 <= x < 2 bins: beyond pi it counts back."""
    k = np.int64(x)
    k = k if k < bins else 2 * bins - 1 - k
    return max(k, 0)


@kernel
def trace_sphere_block(block, hist, balance):
    """Trace one block of rays and add their power to the histograms.

    Parameters
    ----------
    block : SphereBlock
    hist : (paths, bins, 2) float64
        Power by order, bin of the scattering angle and polarisation (perpendicular, parallel), one unit a ray and
        polarisation; zeroed here.
    balance : (2, 2) float64
        Left over after the last order and absorbed, by polarisation; overwritten.
    """
    n = block.index
    rays, paths, bins = block.rays, block.paths, block.bins
    hist[:] = 0.0
    balance[:] = 0.0
    scale = bins / math.pi
    turn = 2.0 * bins
    inverse_rays = 1.0 / rays
    inverse_n = 1.0 / n
    first = np.empty(CHUNK, np.int64)
    x = np.empty(CHUNK)
    step = np.empty(CHUNK)
    r_s = np.empty(CHUNK)
    r_p = np.empty(CHUNK)
    chord = np.empty(CHUNK)
    bin_of = np.empty((paths, CHUNK), np.int64)
    for start in range(0, rays, CHUNK):
        m = min(CHUNK, rays - start)
        for j in range(m):
            # b^2 is stratified: one ray in each of `rays` rings of equal area on the drop's disc
            b2 = min((start + j + uniform(block.stream, np.uint64(start + j))) * inverse_rays, 1.0)
            b = math.sqrt(b2)
            cos_i = math.sqrt(1.0 - b2)
            sin_r = b * inverse_n
            cos_r = math.sqrt(1.0 - sin_r * sin_r)
            i = arcsin(b, cos_i)
            r = arcsin(sin_r, cos_r)
            # Fresnel's amplitudes; the same inside and outside, since the angles are the same at each hit
            a_s = (cos_i - n * cos_r) / (cos_i + n * cos_r)
            a_p = (n * cos_i - cos_r) / (n * cos_i + cos_r)
            r_s[j] = a_s * a_s
            r_p[j] = a_p * a_p
            chord[j] = cos_r
            first[j] = min(np.int64((math.pi - 2.0 * i) * scale), bins - 1)
            # rounding can leave i - r a hair below zero for b = 0
            x[j] = max(2.0 * (i - r) * scale, 0.0)
            step[j] = (math.pi - 2.0 * r) * scale
        if block.absorption > 0.0:
            for j in range(m):
                chord[j] = math.exp(-block.absorption * chord[j])
        else:
            for j in range(m):
                chord[j] = 1.0
        for p in range(1, paths):
            for j in range(m):
                bin_of[p, j] = fold_bin(x[j], bins)
                y = x[j] + step[j]
                x[j] = y - turn if y >= turn else y
        for j in range(m):
            k = first[j]
            s, q, kept = r_s[j], r_p[j], chord[j]
            hist[0, k, 0] += s
            hist[0, k, 1] += q
            out_s, out_p = 1.0 - s, 1.0 - q
            # power that arrives at the next hit
            in_s, in_p = out_s * kept, out_p * kept
            on_s, on_p = s * kept, q * kept
            for p in range(1, paths):
                k = bin_of[p, j]
                hist[p, k, 0] += in_s * out_s
                hist[p, k, 1] += in_p * out_p
                in_s *= on_s
                in_p *= on_p
            if kept < 1.0:
                # geometric series of what the chords take; the powers run to the last traced segment
                inside_s, inside_p = out_s, out_p
                for _ in range(1, paths):
                    balance[1, 0] += inside_s * (1.0 - kept)
                    balance[1, 1] += inside_p * (1.0 - kept)
                    inside_s *= on_s
                    inside_p *= on_p
                balance[0, 0] += inside_s
                balance[0, 1] += inside_p
            else:
                balance[0, 0] += in_s
                balance[0, 1] += in_p


@kernel
def merge_blocks(rows, p, mean, error):
    """Mean and its standard error over blocks, for one order.

    Parameters
    ----------
    rows : (blocks, paths, bins, 2) float64
        Histograms of the blocks.
    p : int
        The order.
    mean, error : (2, bins) float64
        Overwritten. The blocks are added in their order, whatever thread made them.
    """
    blocks, bins = rows.shape[0], rows.shape[2]
    # in two passes: the variance of small differences would drown in a sum of squares
    for k in range(bins):
        for q in range(2):
            total = 0.0
            for b in range(blocks):
                total += rows[b, p, k, q]
            m = total / blocks
            square = 0.0
            for b in range(blocks):
                square += (rows[b, p, k, q] - m) ** 2
            mean[q, k] = m
            error[q, k] = math.sqrt(square / (blocks * (blocks - 1)))

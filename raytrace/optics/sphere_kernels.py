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

from raytrace.jit import aligned, kernel
from raytrace.random_stream import uniform

CHUNK = 128
_PIECE = 512


class SphereBlock(NamedTuple):
    """State of one block, as it enters the kernel."""

    index: float  # real part, relative to air
    absorption: float  # 4 k x: the exponent of absorption along a chord is this times cos r
    rays: int
    paths: int
    bins: int
    stream: np.uint64


def _arcsine_series(terms: int) -> tuple[float, ...]:
    """Coefficients a_k of arcsin(x) = x sum a_k x^(2k) for x up to sqrt(1/2), by Chebyshev interpolation."""
    chebyshev = np.polynomial.Chebyshev.interpolate(
        lambda z: np.arcsin(np.sqrt(z)) / np.sqrt(z), terms - 1, domain=[0.0, 0.5]
    )
    return tuple(chebyshev.convert(kind=np.polynomial.Polynomial, domain=[-1, 1], window=[-1, 1]).coef.tolist())


_A0, _A1, _A2, _A3, _A4, _A5, _A6, _A7, _A8, _A9, _A10, _A11, _A12, _A13 = _arcsine_series(14)


@kernel(inline=True)
def arcsin(x, cosine):
    """Arcsine of 0 <= x <= 1 with its cosine known, to 3e-13 of itself; a polynomial, which the compiler can vectorise.

    Beyond 45 degrees it is the complement of the cosine's arcsine: no root and no division, which would be most of the
    cost of a ray. A bin is more than 1e-4 wide, so that one ray in a thousand million is sorted wrongly.
    """
    small = x <= cosine
    s = x if small else cosine
    z = s * s
    # Horner's rule in two halves side by side, even and odd powers
    w = z * z
    even = _A0 + w * (_A2 + w * (_A4 + w * (_A6 + w * (_A8 + w * (_A10 + w * _A12)))))
    odd = _A1 + w * (_A3 + w * (_A5 + w * (_A7 + w * (_A9 + w * (_A11 + w * _A13)))))
    r = s * (even + z * odd)
    return r if small else 0.5 * math.pi - r


@kernel(inline=True)
def fold_bin(x, bins):
    """Bin of a deviation of 0 <= x < 2 bins: beyond pi it counts back."""
    k = np.int64(x)
    k = k if k < bins else 2 * bins - 1 - k
    return max(k, 0)


@kernel(contract=True)
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
    # unsigned, since a signed index would be tested for counting from the end at each use
    first = np.empty(CHUNK, np.uint64)
    x = aligned(CHUNK)
    step = aligned(CHUNK)
    r_s = aligned(CHUNK)
    r_p = aligned(CHUNK)
    chord = aligned(CHUNK)
    bin_of = np.empty((paths, CHUNK), np.uint64)
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
            slow_i, slow_r = n * cos_i, n * cos_r
            sum_s, sum_p = cos_i + slow_r, slow_i + cos_r
            both = 1.0 / (sum_s * sum_p)
            a_s = (cos_i - slow_r) * sum_p * both
            a_p = (slow_i - cos_r) * sum_s * both
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
def add_blocks(rows, begun, low, high, first, total, square):
    """Add the histograms of some blocks to the sums over blocks, for some of the values.

    Parameters
    ----------
    rows : (blocks, values) float64
        Histograms, in the order of their blocks, whatever thread made them.
    begun : bool
        Whether blocks came before these; if not, the first of these is kept in `first` and the sums begin.
    low, high : int
        The values to add.
    first, total, square : (values,) float64
        The first block, and sums of distances from it and of their squares: in a sum of plain squares the variance of
        small differences would drown.
    """
    # piece by piece, so that the sums are fetched once for all blocks
    for start in range(low, high, _PIECE):
        end = min(start + _PIECE, high)
        if not begun:
            for k in range(start, end):
                first[k] = rows[0, k]
                total[k] = 0.0
                square[k] = 0.0
        for b in range(rows.shape[0]):
            for k in range(start, end):
                # the first block adds its distance from itself, nothing
                away = rows[b, k] - first[k]
                total[k] += away
                square[k] += away * away


@kernel
def finish_blocks(blocks, first, total, square, per_sr, mean, error):
    """Mean over blocks and its standard error.

    Parameters
    ----------
    blocks : int
        Number of blocks added.
    first, total, square : (paths, bins, 2) float64
        From `add_blocks`.
    per_sr : (bins,) float64
        What turns a bin's power into power per steradian.
    mean, error : (paths, 2, bins) float64
        Written.
    """
    for p in range(first.shape[0]):
        for k in range(per_sr.size):
            for q in range(2):
                away = total[p, k, q]
                spread = max(square[p, k, q] - away * away / blocks, 0.0)
                mean[p, q, k] = (first[p, k, q] + away / blocks) * per_sr[k]
                error[p, q, k] = math.sqrt(spread / (blocks * (blocks - 1))) * per_sr[k]

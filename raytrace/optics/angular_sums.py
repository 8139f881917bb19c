"""Sums of partial waves over many angles: the costly part of wave optics, for all orders at once.

S1 = sum w_n (a_n pi_n + b_n tau_n) and S2 = sum w_n (a_n tau_n + b_n pi_n) fall apart into the sums of
w (a + b)/2 (pi + tau) and w (a - b)/2 (pi - tau): two real-by-complex products a term and angle in place of four (after
Wiscombe 1980). Eight degrees at a time stay in registers while a block of angles passes, so that a sum is fetched and
stored once in eight terms; the block is as long as lets all sums of eight orders stay in the processor's nearest cache.
"""

from __future__ import annotations

import numpy as np

from raytrace.jit import aligned, kernel

ANGLES = 96
"""Angles a block."""
_A = np.uint64(ANGLES)
_A1, _A2, _A3, _A4, _A5, _A6, _A7 = (np.uint64(k * ANGLES) for k in range(1, 8))
_U1, _U2, _U3, _U4, _U5, _U6, _U7, _U8, _U9, _U10, _U11, _U12, _U13, _U14, _U15 = (np.uint64(k) for k in range(1, 16))
# numbers a row (an order) takes in the coefficients of a group, and in the sums
_ROW_C, _HALF_C = np.uint64(32), np.uint64(16)
_ROW_S, _HALF_S = np.uint64(4 * ANGLES), np.uint64(2 * ANGLES)


@kernel(inline=True)
def degree(n, m, before, here):
    """pi and tau of degree n, from pi of degrees n - 1 and n.

    Returns
    -------
    plus, minus, here, next : float
        pi + tau, pi - tau, pi of degrees n and n + 1.
    """
    s = m * here
    t = s - before
    tau = n * t - before
    return here + tau, here - tau, here, s + (n + 1.0) / n * t


@kernel(contract=True)
def next_degrees(first, mu, before, here, plus, minus):
    """pi + tau and pi - tau of eight degrees from `first` on, for a block of angles.

    Parameters
    ----------
    first : float
    mu, before, here : (ANGLES,) float64
        Cosines, and pi of degrees first - 1 and first; the last two move on by eight degrees.
    plus, minus : (8 * ANGLES,) float64
        Written.
    """
    for j in range(_A):
        m, p, q = mu[j], before[j], here[j]
        plus[j], minus[j], p, q = degree(first, m, p, q)
        plus[_A1 + j], minus[_A1 + j], p, q = degree(first + 1.0, m, p, q)
        plus[_A2 + j], minus[_A2 + j], p, q = degree(first + 2.0, m, p, q)
        plus[_A3 + j], minus[_A3 + j], p, q = degree(first + 3.0, m, p, q)
        plus[_A4 + j], minus[_A4 + j], p, q = degree(first + 4.0, m, p, q)
        plus[_A5 + j], minus[_A5 + j], p, q = degree(first + 5.0, m, p, q)
        plus[_A6 + j], minus[_A6 + j], p, q = degree(first + 6.0, m, p, q)
        plus[_A7 + j], minus[_A7 + j], p, q = degree(first + 7.0, m, p, q)
        before[j], here[j] = p, q


@kernel(contract=True)
def add_eight(c, at, x, sums, real):
    """Add eight degrees to the real and the imaginary sums of a block of angles.

    Parameters
    ----------
    c : (…,) float64
        Coefficients; eight real parts from `at` on, then eight imaginary parts.
    at, real : uint64
        Unsigned, since a signed index would be tested for counting from the end at each use.
    x : (8 * ANGLES,) float64
    sums : (…,) float64
        Added to from `real` on: ANGLES real sums, then ANGLES imaginary ones.
    """
    imag = real + _A
    a0, a1, a2, a3 = c[at], c[at + _U1], c[at + _U2], c[at + _U3]
    a4, a5, a6, a7 = c[at + _U4], c[at + _U5], c[at + _U6], c[at + _U7]
    b0, b1, b2, b3 = c[at + _U8], c[at + _U9], c[at + _U10], c[at + _U11]
    b4, b5, b6, b7 = c[at + _U12], c[at + _U13], c[at + _U14], c[at + _U15]
    for j in range(_A):
        x0, x1, x2, x3 = x[j], x[_A1 + j], x[_A2 + j], x[_A3 + j]
        x4, x5, x6, x7 = x[_A4 + j], x[_A5 + j], x[_A6 + j], x[_A7 + j]
        sums[real + j] = sums[real + j] + a0 * x0 + a1 * x1 + a2 * x2 + a3 * x3 + a4 * x4 + a5 * x5 + a6 * x6 + a7 * x7
        sums[imag + j] = sums[imag + j] + b0 * x0 + b1 * x1 + b2 * x2 + b3 * x3 + b4 * x4 + b5 * x5 + b6 * x6 + b7 * x7


@kernel(contract=True)
def block_sums(mu, start, coefficients, rows, work, sums):
    """Sums of all rows for one block of angles.

    Parameters
    ----------
    mu : (n_angle,) float64
        Cosines of the scattering angles.
    start : int
        First angle of the block; beyond the last the last is taken again.
    coefficients : (groups, rows * 32) float64
        From `debye_coefficients` or `mie_coefficients`.
    rows : int
    work : (19, ANGLES) float64
        Room.
    sums : (rows * 4 * ANGLES,) float64
        Written: for each row the sums with pi + tau, real and imaginary, then those with pi - tau.
    """
    m, before, here = work[0], work[1], work[2]
    plus, minus = work[3:11].reshape(8 * ANGLES), work[11:19].reshape(8 * ANGLES)
    for j in range(ANGLES):
        m[j] = mu[min(start + j, mu.size - 1)]
        before[j] = 0.0
        here[j] = 1.0
    sums[:] = 0.0
    for g in range(coefficients.shape[0]):
        next_degrees(8.0 * g + 1.0, m, before, here, plus, minus)
        c = coefficients[g]
        for r in range(np.uint64(rows)):
            add_eight(c, r * _ROW_C, plus, sums, r * _ROW_S)
            add_eight(c, r * _ROW_C + _HALF_C, minus, sums, r * _ROW_S + _HALF_S)


@kernel
def amplitudes(mu, coefficients, out):
    """S1 and S2 of all rows at all angles.

    Parameters
    ----------
    mu : (n_angle,) float64
    coefficients : (groups, rows * 32) float64
    out : (rows, 2, n_angle) complex128
        Written.
    """
    rows = out.shape[0]
    work, sums = aligned(19 * ANGLES).reshape((19, ANGLES)), aligned(rows * 4 * ANGLES)
    for start in range(0, mu.size, ANGLES):
        block_sums(mu, start, coefficients, rows, work, sums)
        by_row = sums.reshape((rows, 4, ANGLES))
        for r in range(rows):
            for j in range(min(ANGLES, mu.size - start)):
                plus = complex(by_row[r, 0, j], by_row[r, 1, j])
                minus = complex(by_row[r, 2, j], by_row[r, 3, j])
                out[r, 0, start + j] = plus + minus
                out[r, 1, start + j] = plus - minus


@kernel
def add_intensities(mu, coefficients, total):
    """Add |S|^2 of each row and polarisation, at all angles.

    Parameters
    ----------
    mu : (n_angle,) float64
    coefficients : (groups, rows * 32) float64
        Scaled by the root of what |S|^2 is to be weighted with.
    total : (rows, 2, n_angle) float64
        Added to.
    """
    rows = total.shape[0]
    work, sums = aligned(19 * ANGLES).reshape((19, ANGLES)), aligned(rows * 4 * ANGLES)
    for start in range(0, mu.size, ANGLES):
        block_sums(mu, start, coefficients, rows, work, sums)
        by_row = sums.reshape((rows, 4, ANGLES))
        for r in range(rows):
            for j in range(min(ANGLES, mu.size - start)):
                re_1, im_1 = by_row[r, 0, j] + by_row[r, 2, j], by_row[r, 1, j] + by_row[r, 3, j]
                re_2, im_2 = by_row[r, 0, j] - by_row[r, 2, j], by_row[r, 1, j] - by_row[r, 3, j]
                total[r, 0, start + j] += re_1 * re_1 + im_1 * im_1
                total[r, 1, start + j] += re_2 * re_2 + im_2 * im_2

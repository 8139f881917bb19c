"""Coefficients of the partial waves that a sphere scatters: order by order (Debye 1908), and in one closed sum.

With psi and chi the Riccati-Bessel functions, xi1 = psi - i chi is the outgoing spherical wave of exp(-i omega t) and
xi2 = psi + i chi the incoming one (Hovenac & Lock 1992, J. Opt. Soc. Am. A 9, 781). Four functions enter, each by the
recurrence in which it does not drown in the other's rounding errors:

* xi1(x), x real: upward. Beyond n = x its size grows with n, and it is the growing solution.
* psi'/psi(y), y = n x complex: downward. Beyond n = |y| psi is the falling solution, and below |y|, where y has an
  imaginary part, it falls with n as well.
* xi1'/xi1(y): upward. Where y absorbs, xi1 is the small solution at first, exp(-Im y), and grows with n.
* xi2(y) = 2 psi - xi1 follows from both without a recurrence: for an absorbing drop its own would fail both ways.
  All sizes enter as the ratio u = xi1/psi, so that nothing overflows.
"""

from __future__ import annotations

import math

import numpy as np

from raytrace.jit import kernel

# beyond, a wave does not enter the drop at all; its ratio must not grow until it overflows
_ENDLESS = 1e150
GROUP = 8
"""Partial waves that the angular sums take at a time; coefficients are filled up with zeros to whole groups."""


def term_count(size_parameter: float) -> int:
    """Partial waves that matter, x + 4.05 x^(1/3) + 2 (Wiscombe 1980, Appl. Opt. 19, 1505; from memory)."""
    return int(size_parameter + 4.05 * size_parameter ** (1.0 / 3.0) + 2.0)


def group_count(size_parameter: float) -> int:
    """Groups that hold these partial waves."""
    return -(-term_count(size_parameter) // GROUP)


@kernel(inline=True)
def outgoing(n, x, before, here):
    """xi1 of degree n + 1 from those of n - 1 and n."""
    return (2.0 * n + 1.0) / x * here - before


@kernel
def inner_log_derivative(y, terms, out):
    """psi'/psi(y) for degrees 0 to `terms`, downward from where its start no longer matters.

    Parameters
    ----------
    y : complex128
    terms : int
    out : (terms + 1,) complex128
        Written.
    """
    first = int(max(terms, abs(y)) + 6.0 * abs(y) ** (1.0 / 3.0)) + 16
    value = 0.0 + 0.0j
    for n in range(first, 0, -1):
        value = n / y - 1.0 / (value + n / y)
        if n <= terms + 1:
            out[n - 1] = value


@kernel(inline=True)
def store(coefficients, n, row, a, b):
    """Put a_n and b_n where the angular sums look for them: half of (a + b) and (a - b), with (2n + 1)/(n (n + 1))."""
    group, k = (n - 1) // 8, (n - 1) % 8
    weight = 0.5 * (2.0 * n + 1.0) / (n * (n + 1.0))
    plus, minus = weight * (a + b), weight * (a - b)
    at = row * 32 + k
    coefficients[group, at] = plus.real
    coefficients[group, at + 8] = plus.imag
    coefficients[group, at + 16] = minus.real
    coefficients[group, at + 24] = minus.imag


@kernel(inline=True)
def surface(alpha, beta, index, out_1, in_1, in_2, turn, shrink, inverse_1, inverse_2):
    """What the surface does to one partial wave.

    Parameters
    ----------
    alpha, beta : complex
        (1, n) for TE, (n, 1) for TM.
    out_1, in_1, in_2 : complex
        Logarithmic derivatives of xi1(x), xi1(y), xi2(y).
    turn, shrink : complex
        xi2(x) / xi1(x) and xi1(y) / xi2(y).
    inverse_1, inverse_2 : complex
        1 / xi1(x)^2 and 1 / xi2(y)^2.

    Returns
    -------
    reflected, inside, through : complex
        R22, R11 and T21 T12.
    """
    q = 1.0 / (alpha * out_1 - beta * in_2)
    # the logarithmic derivative of xi2(x) is the conjugate of xi1's, x being real
    reflected = -turn * (alpha * out_1.conjugate() - beta * in_2) * q
    inside = -shrink * (alpha * out_1 - beta * in_1) * q
    through = -4.0 * index * inverse_1 * inverse_2 * q * q
    return reflected, inside, through


@kernel
def debye_coefficients(index, x, terms, row_of, inner, coefficients):
    """a_n and b_n of some or all Debye orders.

    Term p = 0 is (1 - R22)/2: what is diffracted, the 1, and what is reflected. Term p >= 1 is -T21 R11^(p-1) T12 / 2.

    Parameters
    ----------
    index : complex128
        Relative to the medium, n + ik, k >= 0 absorbs.
    x : float
        Size parameter.
    terms : int
    row_of : (paths,) int64
        Row of each order p in the coefficients; -1 leaves it out.
    inner : (terms + 1,) complex128
        From `inner_log_derivative` at y = index x.
    coefficients : (groups, rows * 4 * GROUP) float64
        Written, as the angular sums read them; zero on entry.
    """
    y = index * x
    # degree 0, and the degree before it
    before, here = complex(math.cos(x), math.sin(x)), complex(math.sin(x), -math.cos(x))
    in_1 = 0.0 + 1.0j
    # xi1(y)/psi(y) of degree 0 is -i exp(iy)/sin y = 2 / (1 - exp(-2iy)), written so that it cannot overflow
    wave = np.exp(2.0j * y)
    u = 2.0 * wave / (wave - 1.0)
    for n in range(1, terms + 1):
        step = n / y
        in_1 = 1.0 / (step - in_1) - step
        if abs(u) < _ENDLESS:
            u *= (inner[n] + step) / (in_1 + step)
        if abs(u) <= 1.0:
            down = 1.0 / (2.0 - u)
            shrink = u * down
            in_2 = (2.0 * inner[n] - u * in_1) * down
        else:
            v = 1.0 / u
            shrink = 1.0 / (2.0 * v - 1.0)
            in_2 = (2.0 * v * inner[n] - in_1) * shrink
        # the Wronskian xi1 xi2' - xi1' xi2 = -2i gives 1 / (xi1 xi2), and with the ratio 1 / xi2^2
        inverse_2 = 0.5j * (in_2 - in_1) * shrink
        before, here = here, outgoing(n - 1.0, x, before, here)
        out_1 = before / here - n / x
        turn, inverse_1 = here.conjugate() / here, 1.0 / (here * here)
        r_e, i_e, t_e = surface(1.0 + 0.0j, index, index, out_1, in_1, in_2, turn, shrink, inverse_1, inverse_2)
        r_m, i_m, t_m = surface(index, 1.0 + 0.0j, index, out_1, in_1, in_2, turn, shrink, inverse_1, inverse_2)
        if row_of[0] >= 0:
            store(coefficients, n, row_of[0], 0.5 * (1.0 - r_m), 0.5 * (1.0 - r_e))
        a, b = -0.5 * t_m, -0.5 * t_e
        for p in range(1, row_of.size):
            if row_of[p] >= 0:
                store(coefficients, n, row_of[p], a, b)
            a *= i_m
            b *= i_e


@kernel
def mie_coefficients(index, x, terms, inner, coefficients):
    """a_n and b_n of the whole sphere (Bohren & Huffman 1983, eqs. 4.88), laid out as by `debye_coefficients`.

    Parameters
    ----------
    index, x, terms, inner
        As for `debye_coefficients`.
    coefficients : (groups, 4 * GROUP) float64
        Written; zero on entry.
    """
    before, here = complex(math.cos(x), math.sin(x)), complex(math.sin(x), -math.cos(x))
    for n in range(1, terms + 1):
        before, here = here, outgoing(n - 1.0, x, before, here)
        inside = inner[n] / index + n / x
        a = (inside * here.real - before.real) / (inside * here - before)
        inside = inner[n] * index + n / x
        b = (inside * here.real - before.real) / (inside * here - before)
        store(coefficients, n, 0, a, b)

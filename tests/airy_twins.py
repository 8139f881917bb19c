"""Slow, obvious twins of the bows: Airy's own, the rays found by search, the Debye series summed as it stands.

Nothing here imports the kernels that they are compared with; `maxima` looks for peaks of whatever curve it is given.
"""

from __future__ import annotations

import math

import numpy as np
from scipy.optimize import brentq
from scipy.special import airy, spherical_jn, spherical_yn
from twins import fresnel_power, order_weight

from raytrace.drops.bow_angle import bow_angle, fresnel


def airy_width(n, order):
    """h of Airy's bow (van de Hulst 1957, chapter 13): D'' = 2 h cos^2 i."""
    p = order + 1
    return (p**2 - 1) ** 2 / p**2 * math.sqrt((p**2 - n**2) / (n**2 - 1) ** 3)


def classical_airy(n, x, order, inside_deg, q=0):
    """|S|^2 of Airy's bow at `inside_deg` to the bright side of the ray angle (van de Hulst 1957, chapter 13)."""
    bow, h = bow_angle(n, order), airy_width(n, order)
    i, theta = np.radians(bow.incidence_deg), np.radians(bow.scattering_deg)
    weight = order_weight(fresnel(np.cos(i), n)[q], 1.0, order + 1)
    argument = -(x ** (2 / 3)) * h ** (-1 / 3) * np.radians(inside_deg)
    return 2 * np.pi * x ** (7 / 3) * weight * np.sin(i) / np.sin(theta) * h ** (-2 / 3) * airy(argument)[0] ** 2


def towards_bright(n, order):
    """Sign of the scattering angle's change from the bow to its bright side: with D, but on odd half turns against."""
    return -1.0 if int(bow_angle(n, order).deviation_deg // 180) % 2 else 1.0


def rays_at(n, p, theta):
    """All rays of order p that leave at `theta` [rad]: incidence, deviation's derivative, side, turn; by search."""

    def deviation(i):
        return 2 * i - 2 * p * math.asin(math.sin(i) / n) + (p - 1) * math.pi

    grid = np.linspace(0.0, np.pi / 2, 20_001)
    on_grid = np.array([deviation(i) for i in grid])
    for turn in range(p + 1):
        for side in (1, -1):
            miss = on_grid - (side * theta + 2 * np.pi * turn)
            for j in np.flatnonzero(miss[1:] * miss[:-1] <= 0):
                target = side * theta + 2 * np.pi * turn
                i = brentq(lambda i, target=target: deviation(i) - target, grid[j], grid[j + 1], xtol=1e-15)
                cos_r = math.sqrt(1 - (math.sin(i) / n) ** 2)
                yield i, cos_r, 2 - 2 * p * math.cos(i) / (n * cos_r), side, turn


def ray_amplitudes(n, x, p, theta, k=0.0):
    """Sum over rays of sqrt(intensity) times phase (van de Hulst 1957, sections 12.21 and 12.22), time exp(-i w t).

    Focal lines take a quarter of a period each: one between two hits each, one more where the rays have crossed
    (D' > 0), one for each passage through the axis; each half turn of the axis changes the sign.
    """
    out = np.zeros(2, dtype=complex)
    for i, cos_r, slope, side, turn in rays_at(n, p, theta):
        cos_i = math.cos(i)
        r = (cos_i - n * cos_r) / (cos_i + n * cos_r), (n * cos_i - cos_r) / (n * cos_i + cos_r)
        spread = math.sqrt(math.sin(i) * cos_i / (math.sin(theta) * abs(slope)))
        phase = 2 * x * (p * n * cos_r - cos_i) - np.pi / 2 * (p - 1) - np.pi / 4 * (side + np.sign(slope))
        spread *= math.exp(-2 * p * k * x * cos_r)
        for q in range(2):
            out[q] -= (-1) ** turn * x * spread * (1 - r[q] ** 2) * (-r[q]) ** (p - 1) * np.exp(1j * phase)
    return out


def ray_intensity(n, p, theta):
    """Phase function of unpolarised light by ray optics, rays added by intensity [sr^-1]."""
    out = np.zeros(2)
    for i, cos_r, slope, _side, _turn in rays_at(n, p, theta):
        reflected = fresnel_power(math.cos(i), cos_r, n)
        spread = math.sin(2 * i) / (2 * math.sin(theta) * abs(slope))
        out += [order_weight(part, 1.0, p) * spread / (2 * np.pi) for part in reflected]
    return out


def debye_amplitudes(n, x, p, angle_deg):
    """S1 and S2 of one Debye term p >= 1 (Debye 1908; Hovenac and Lock 1992), partial waves summed as they stand."""
    orders = np.arange(1, int(x + 4.05 * x ** (1 / 3) + 2) + 1)

    def outgoing(z):
        value = spherical_jn(orders, z) + 1j * spherical_yn(orders, z)
        slope = spherical_jn(orders, z, derivative=True) + 1j * spherical_yn(orders, z, derivative=True)
        return z * value, value + z * slope

    (x1, dx1), (y1, dy1) = outgoing(x), outgoing(n * x)
    y2, dy2 = y1.conj(), dy1.conj()
    terms = []
    for alpha, beta in ((1.0, n), (n, 1.0)):
        q = alpha * dx1 * y2 - beta * x1 * dy2
        inside = -(alpha * dx1 * y1 - beta * x1 * dy1) / q
        terms.append(2 * n / q**2 * inside ** (p - 1))
    mu = np.cos(np.radians(angle_deg))
    before, now = np.zeros_like(mu), np.ones_like(mu)
    out = np.zeros((2, mu.size), dtype=complex)
    for m, electric, magnetic in zip(orders, terms[0], terms[1], strict=True):
        tau = m * mu * now - (m + 1) * before
        factor = (2 * m + 1) / (m * (m + 1))
        out[0] += factor * (magnetic * now + electric * tau)
        out[1] += factor * (magnetic * tau + electric * now)
        before, now = now, ((2 * m + 1) * mu * now - (m + 1) * before) / m
    return out


def maxima(amplitudes, n, x, order, count):
    """First maxima of the perpendicular light from the bow inwards: scattering angle [deg] and |S|^2.

    `amplitudes(n, x, angle_deg, order)` gives S, perpendicular first.
    """
    bow, unit = bow_angle(n, order), np.degrees(airy_width(n, order) ** (1 / 3) * x ** (-2 / 3))
    step = unit / 250
    angle = bow.scattering_deg + towards_bright(n, order) * np.arange(-unit, 6.3 * unit, step)
    y = np.abs(amplitudes(n, x, angle, order)[0]) ** 2
    top = np.flatnonzero((y[1:-1] > y[:-2]) & (y[1:-1] > y[2:]))[:count] + 1
    assert top.size == count
    bend = y[top - 1] - 2 * y[top] + y[top + 1]
    return angle[top] + (angle[1] - angle[0]) * 0.5 * (y[top - 1] - y[top + 1]) / bend, y[top]

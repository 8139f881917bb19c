"""Slow, obvious twins of averages over drop sizes by waves: even steps in the diameter, points of angle in each bin."""

from __future__ import annotations

import math

import numpy as np

from raytrace.optics import debye_series, lorenz_mie
from raytrace.optics.drop_rows import WHOLE_X

INDEX, WAVELENGTH_NM = 1.3343, 550.0
"""Water at 20 degC, to four decimals."""


def size_parameter(diameter_mm, wavelength_nm=WAVELENGTH_NM):
    return math.pi * diameter_mm * 1e6 / wavelength_nm


def even_sizes(spectrum, count):
    """(count,) diameters in even steps [mm], and their shares of the cross-section by trapezoids."""
    if spectrum.low_mm == spectrum.high_mm:
        return np.array([spectrum.low_mm]), np.ones(1)
    diameter = np.linspace(spectrum.low_mm, spectrum.high_mm, count)
    share = spectrum.density_per_mm(diameter)
    share[[0, -1]] *= 0.5
    return diameter, share / share.sum()


def _points(edges_deg, inside):
    """Angles in even steps in each bin, and what share of the bin's ring each stands for: (bins, inside)."""
    step = np.diff(edges_deg)[:, None]
    angle = edges_deg[:-1, None] + (np.arange(inside) + 0.5) / inside * step
    ring = np.sin(np.radians(angle))
    return angle, ring / ring.sum(axis=1, keepdims=True)


def _mean(light, sizes, edges_deg, inside, wavelength_nm):
    angle, ring = _points(edges_deg, inside)
    out = 0.0
    for diameter, share in zip(*sizes, strict=True):
        x = size_parameter(diameter, wavelength_nm)
        here = light(x, angle.ravel()) / (2 * math.pi * x**2)
        out = out + share * (here.reshape(*here.shape[:-1], *angle.shape) * ring).sum(axis=-1)
    return out


def orders_sr(index, sizes, edges_deg, paths, *, inside=4, wavelength_nm=WAVELENGTH_NM):
    """(paths, 2, bins) Debye orders of drops, whose (diameters, shares) are given [sr-1].

    In drops of a few wavelengths they are scaled so that they add up to the exact sum.
    """

    def light(x, angle):
        orders = np.abs(debye_series(index, x, angle, paths=paths)) ** 2
        # one size by itself changes at once, many over a passage
        u = np.clip((x / WHOLE_X - 0.8) / 0.4, 0.0, 1.0) if len(sizes[0]) > 9 else float(x >= WHOLE_X)
        large = u * u * (3 - 2 * u)
        if large == 1:
            return orders
        scaled = orders * np.abs(lorenz_mie(index, x, angle)) ** 2 / orders.sum(axis=0)
        return large * orders + (1 - large) * scaled

    return _mean(light, sizes, edges_deg, inside, wavelength_nm)


def whole_sr(index, sizes, edges_deg, *, inside=4, wavelength_nm=WAVELENGTH_NM):
    """(2, bins) all orders in one, with their interference [sr-1]."""
    return _mean(lambda x, t: np.abs(lorenz_mie(index, x, t)) ** 2, sizes, edges_deg, inside, wavelength_nm)


class Disc:
    """Folding with the sun's disc at one wavelength, rows of (n, bins)."""

    def __init__(self, edges_deg, diameter_deg=0.533, wavelength_nm=WAVELENGTH_NM):
        from raytrace.optics.fold import DiscFold

        self._fold = DiscFold(np.asarray(edges_deg), diameter_deg, np.array([wavelength_nm]))

    def __call__(self, rows):
        return self._fold.fold(np.ascontiguousarray(rows.T), 0).T


def farthest(found, wanted, inside=slice(None)):
    """(rows,) largest differences over angles, as shares of each row's largest value."""
    return np.abs(found - wanted)[..., inside].max(axis=-1) / wanted[..., inside].max(axis=-1)

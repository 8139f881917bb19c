"""CIE standard general sky, ISO 15469:2004: how luminance is spread over the sky, 15 types from overcast to clear."""

from __future__ import annotations

import math
from functools import lru_cache
from typing import NamedTuple

import numpy as np

from raytrace.data import read_table
from raytrace.jit import kernel


class SkyType(NamedTuple):
    """Parameters of one type: gradation a, b and indicatrix c, d, e."""

    a: float
    b: float
    c: float
    d: float
    e: float


@lru_cache
def sky_type(number: int) -> SkyType:
    """Parameters of type 1 to 15 (ISO 15469:2004, table 1).

    Raises
    ------
    ValueError
        If there is no such type.
    """
    table = read_table("cie_sky_types")
    if number not in range(1, 16):
        raise ValueError(f"sky type {number!r} given; 1 to 15 works")
    row = int(np.flatnonzero(table["type"] == number)[0])
    return SkyType(*(float(table[name][row]) for name in SkyType._fields))


@kernel
def gradation(kind, sin_elevation):
    """phi = 1 + a exp(b / cos Z); 1 at the horizon and below (ISO 15469, equation 2)."""
    if sin_elevation <= 1e-6:
        return 1.0
    return 1.0 + kind.a * math.exp(kind.b / sin_elevation)


@kernel
def indicatrix(kind, chi):
    """f = 1 + c [exp(d chi) - exp(d pi / 2)] + e cos^2 chi, chi the angle from the sun [rad] (equation 4)."""
    return 1.0 + kind.c * (math.exp(kind.d * chi) - math.exp(kind.d * math.pi / 2)) + kind.e * math.cos(chi) ** 2


@kernel
def relative_luminance(kind, sun, x, y, z):
    """Luminance over the zenith's in the direction (x, y, z); directions below the horizon read the horizon's.

    Parameters
    ----------
    kind : SkyType
    sun : tuple of float
        Unit vector to the sun, z up.
    x, y, z : float
        Unit vector.
    """
    up = max(z, 0.0)
    level = math.hypot(x, y)
    if z < 0.0 and level > 0.0:
        # the horizon below the direction
        x, y = x / level, y / level
    chi = math.acos(min(1.0, max(-1.0, x * sun[0] + y * sun[1] + up * sun[2])))
    zenith = gradation(kind, 1.0) * indicatrix(kind, math.acos(min(1.0, max(-1.0, sun[2]))))
    return indicatrix(kind, chi) * gradation(kind, up) / zenith


@kernel
def horizontal_integral(kind, sun, rings, sectors):
    """Integral of relative luminance times cos Z over the sky [sr]: horizontal illuminance over zenith luminance."""
    total = 0.0
    for i in range(rings):
        # equal steps of sin^2 of the elevation's complement make every cell weigh the same
        sin2 = (i + 0.5) / rings
        r, z = math.sqrt(sin2), math.sqrt(1.0 - sin2)
        for j in range(sectors):
            azimuth = 2.0 * math.pi * (j + 0.5) / sectors
            total += relative_luminance(kind, sun, r * math.sin(azimuth), r * math.cos(azimuth), z)
    return total * math.pi / (rings * sectors)

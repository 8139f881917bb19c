"""How many drops of which size fill the air, and what light meets them."""

from __future__ import annotations

import math
from typing import TYPE_CHECKING, NamedTuple

import numpy as np

from raytrace.drops.fall_speed import gunn_kinzer_1949
from raytrace.drops.spectrum import Gamma, Linear, Lognormal, Normal, OneSize, SizeSpectrum
from raytrace.scene.size_laws import SIZE_LAW_KEYS

if TYPE_CHECKING:
    from raytrace.scene.model import Rain

RAIN_RATE_MM_H = 5.0
SHAPE_MU = 2.0
LIQUID_WATER_G_M3 = 0.1
EFFECTIVE_RADIUS_UM = 6.0
EFFECTIVE_VARIANCE = 1.0 / 9.0
CLOUD_MM = 0.2
"""Median diameter below which drops are cloud's; drizzle begins here (glossaries of meteorology, from memory) [mm]."""
LEAST_SPREAD = 1e-6
"""A relative spread below changes nothing that can be seen, and is taken as exactly one size."""


class DropSizes(NamedTuple):
    """Drops in a volume of rain, cloud or fog.

    Attributes
    ----------
    extinction_per_km : float
        Geometric cross-section in a volume, counted once [1/km].
    effective_diameter_mm : float
        Mean diameter, weighted by cross-section: integral of D^3 N over integral of D^2 N [mm].
    median_diameter_mm : float
        Diameter that halves the water [mm].
    water_g_m3 : float
        Liquid water in the air [g/m3].
    rain_rate_mm_h : float
        Rain rate; of drops that hang in the air what they would bring at their fall speeds [mm/h].
    diameter_mm : ndarray, shape (m,)
        Diameters of m classes [mm].
    number_m3 : ndarray, shape (m,)
        Drops of each class in a volume [1/m3]. Sums over the classes stand for integrals over N(D): exact for the
        moments from the second to the sixth. Where a gamma law's shape is -1 or below it has endless tiny drops, whose
        number (not their cross-section) no class list can give.
    """

    extinction_per_km: float
    effective_diameter_mm: float
    median_diameter_mm: float
    water_g_m3: float
    rain_rate_mm_h: float
    diameter_mm: np.ndarray
    number_m3: np.ndarray


class Law(NamedTuple):
    """What a size law says of a curtain.

    Attributes
    ----------
    spectrum : SizeSpectrum
        Sizes.
    extinction_per_km : float or None
        Amount that the law itself sets, where it does [1/km].
    rain_rate_mm_h : float or None
        Rain rate that the law itself goes with, where it does [mm/h].
    """

    spectrum: SizeSpectrum
    extinction_per_km: float | None = None
    rain_rate_mm_h: float | None = None


def marshall_palmer_1948(rain: Rain) -> Law:
    """Exponential law N(D) = 8000 exp(-slope D) m-3 mm-1, slope = 4.1 R^-0.21 mm-1 (J. Meteor. 5, 165).

    Parameters
    ----------
    rain : Rain
        `rain_rate_mm_h` is read; 5 unless given.

    Returns
    -------
    Law
        Its rain rate is the R asked for: with a fall-speed law the drops make up to a fifth more or less.
    """
    rate = RAIN_RATE_MM_H if rain.rain_rate_mm_h is None else rain.rain_rate_mm_h
    slope = 4.1 * rate**-0.21
    return Law(Gamma(3.0, 1.0 / slope), 1e-3 * math.pi / 4.0 * 8000.0 * 2.0 / slope**3, rate)


def ulbrich_1983(rain: Rain) -> Law:
    """Gamma law N(D) = N0 D^mu exp(-slope D), slope = (3.67 + mu)/D0 (J. Climate Appl. Meteor. 22, 1764).

    Parameters
    ----------
    rain : Rain
        `median_diameter_mm` and `shape_mu` (2 unless given) are read.

    Returns
    -------
    Law

    Raises
    ------
    ValueError
        If the median diameter is missing, or mu is -3 or below (endless extinction).
    """
    median = _needed(rain, "median_diameter_mm", "0.002 to 6 mm")
    mu = SHAPE_MU if rain.shape_mu is None else rain.shape_mu
    if mu <= -3:
        raise ValueError(f"shape_mu {mu:g} gives endless extinction; above -3 would work")
    return Law(Gamma(mu + 3.0, median / (3.67 + mu)))


def lognormal(rain: Rain) -> Law:
    """Normal law in ln D, by the median volume diameter (T. Hatch, S. P. Choate, J. Franklin Inst. 207, 369 (1929)).

    Parameters
    ----------
    rain : Rain
        `median_diameter_mm` and `geometric_standard_deviation` are read.

    Returns
    -------
    Law

    Raises
    ------
    ValueError
        If one of them is missing.
    """
    median = _needed(rain, "median_diameter_mm", "0.002 to 6 mm")
    deviation = _needed(rain, "geometric_standard_deviation", "1.01 to 3")
    return Law(Lognormal(median, math.log(deviation)))


def deirmendjian_1969(rain: Rain) -> Law:
    """Modified gamma law n(r) in proportion to r^alpha exp(-b r), for clouds and fog; C1 unless sizes are given.

    Parameters
    ----------
    rain : Rain
        `effective_radius_um` (6 unless given) and `effective_variance` (1/9 unless given) are read.

    Returns
    -------
    Law

    Notes
    -----
    D. Deirmendjian, Electromagnetic Scattering on Spherical Polydispersions (1969), with gamma = 1, where cloud C1 has
    alpha = 6 and b = 1.5 per um. By effective radius and variance alpha = 1/v - 3 and b = 1/(r v): J. E. Hansen, L. D.
    Travis, Space Sci. Rev. 16, 527 (1974).
    """
    radius = EFFECTIVE_RADIUS_UM if rain.effective_radius_um is None else rain.effective_radius_um
    variance = EFFECTIVE_VARIANCE if rain.effective_variance is None else rain.effective_variance
    return Law(Gamma(1.0 / variance, 2e-3 * radius * variance))


def single(rain: Rain) -> Law:
    """Drops of one diameter, or a normal law in D about it, cut at a diameter of 0.

    Parameters
    ----------
    rain : Rain
        `diameter_mm` and `relative_spread` (0 unless given) are read.

    Returns
    -------
    Law

    Raises
    ------
    ValueError
        If the diameter is missing.
    """
    diameter, spread = _needed(rain, "diameter_mm", "0.002 to 8 mm"), rain.relative_spread or 0.0
    return Law(OneSize(diameter) if spread < LEAST_SPREAD else Normal(diameter, spread))


def table(rain: Rain) -> Law:
    """Measured sizes, linear between the rows of a file.

    Parameters
    ----------
    rain : Rain
        The rows of `size_table`, as `load_scene` has read them.

    Returns
    -------
    Law
        Its amount is the file's own.

    Raises
    ------
    ValueError
        If no rows were read, as in a scene that was not loaded from a file.
    """
    if rain._measured is None:
        raise ValueError("size_law 'table' has no rows; a scene that is read from its file would work")
    diameter, number = rain._measured
    # as shares of the largest, since numbers may be as small as floating point goes
    most = max(number)
    spectrum = Linear(diameter, tuple(value / most for value in number))
    return Law(spectrum, 1e-3 * math.pi / 4.0 * most * spectrum.second_moment())


SIZE_LAWS = {
    law.__name__: law for law in (marshall_palmer_1948, ulbrich_1983, lognormal, deirmendjian_1969, single, table)
}
"""Size laws by the name in the scene file: functions of the rain's table to Law."""


def size_spectrum(rain: Rain) -> SizeSpectrum:
    """How the cross-section of a curtain's drops is shared out among diameters.

    Parameters
    ----------
    rain : Rain
        `size_law` and its keys; how much water there is does not matter.

    Returns
    -------
    SizeSpectrum
        `low_mm`, `high_mm`, `breaks_mm` and `density_per_mm(diameter_mm)`.

    Raises
    ------
    ValueError
        If a key that the law needs is missing.
    """
    return SIZE_LAWS[rain.size_law](rain).spectrum


def drop_sizes(rain: Rain) -> DropSizes:
    """Drops of one curtain.

    Parameters
    ----------
    rain : Rain
        `size_law` and its keys set the shape. The amount is that of `extinction_per_km`, `liquid_water_g_m3` or
        `rain_rate_mm_h`; without one, the law's own, else 5 mm/h, or 0.1 g/m3 where the drops are cloud's
        (law `deirmendjian_1969`, or half of the water in drops below 0.2 mm).

    Returns
    -------
    DropSizes

    Raises
    ------
    ValueError
        If a key that the law needs is missing.
    """
    law = SIZE_LAWS[rain.size_law](rain)
    effective = law.spectrum.effective_mm()
    diameter, share = law.spectrum.classes()
    number = 4e3 / math.pi * share / diameter**2  # of 1 per km
    extinction, rate = _amount(rain, law, _rate_of(diameter, number))
    return DropSizes(
        extinction_per_km=extinction,
        effective_diameter_mm=effective,
        median_diameter_mm=law.spectrum.median_mm(),
        water_g_m3=extinction * effective / 1.5,
        rain_rate_mm_h=rate,
        diameter_mm=diameter,
        number_m3=number * extinction,
    )


def _amount(rain: Rain, law: Law, unit_rate_mm_h: float) -> tuple[float, float]:
    """Extinction [1/km] and rain rate [mm/h], where drops of 1 per km bring the unit rate."""
    extinction, water, rate = rain.extinction_per_km, rain.liquid_water_g_m3, rain.rain_rate_mm_h
    if law.rain_rate_mm_h is not None:
        # the rate is in the law already
        rate, unit_rate_mm_h = None, law.rain_rate_mm_h / law.extinction_per_km
    if extinction is None and water is None and rate is None:
        if law.extinction_per_km is not None:
            return law.extinction_per_km, law.rain_rate_mm_h or law.extinction_per_km * unit_rate_mm_h
        falls = "rain_rate_mm_h" in SIZE_LAW_KEYS[rain.size_law].amounts and law.spectrum.median_mm() >= CLOUD_MM
        rate, water = (RAIN_RATE_MM_H, None) if falls else (None, LIQUID_WATER_G_M3)
    if extinction is None and water is not None:
        # 3/4 of the water over its density and effective radius, exactly, for any sizes
        extinction = 1.5 * water / law.spectrum.effective_mm()
    if extinction is None:
        return rate / unit_rate_mm_h, rate
    return extinction, extinction * unit_rate_mm_h


def _needed(rain: Rain, key: str, works: str) -> float:
    if getattr(rain, key) is None:
        raise ValueError(f"size_law '{rain.size_law}' lacks {key}; {works} would work")
    return getattr(rain, key)


def _rate_of(diameter_mm: np.ndarray, number_m3: np.ndarray) -> float:
    """Rain rate of classes of drops [mm/h]: 3.6e-3 turns mm3 m-2 s-1 into mm/h."""
    return float(3.6e-3 * np.pi / 6 * np.sum(number_m3 * diameter_mm**3 * gunn_kinzer_1949(diameter_mm)))

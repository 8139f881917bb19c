"""How many drops of which size fill the air, and what light meets them."""

from __future__ import annotations

from typing import TYPE_CHECKING, NamedTuple

import numpy as np

from raytrace.drops.fall_speed import gunn_kinzer_1949

if TYPE_CHECKING:
    from raytrace.scene.model import Rain

RAIN_RATE_MM_H = 5.0
SHAPE_MU = 2.0
CLASSES = 64


class DropSizes(NamedTuple):
    """Drops in a volume of rain.

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
        Rain rate [mm/h]. Where the scene gives the extinction, the rate that goes with it.
    diameter_mm : ndarray, shape (m,)
        Diameters of m classes [mm].
    number_m3 : ndarray, shape (m,)
        Drops of each class in a volume [1/m3]. Sums over the classes stand for integrals over N(D): exact for the
        moments from the second up. Where the shape is -1 or below the law has endless tiny drops, whose number (not
        their cross-section) no class list can give.
    """

    extinction_per_km: float
    effective_diameter_mm: float
    median_diameter_mm: float
    water_g_m3: float
    rain_rate_mm_h: float
    diameter_mm: np.ndarray
    number_m3: np.ndarray


def marshall_palmer_1948(rain: Rain) -> DropSizes:
    """Exponential law N(D) = 8000 exp(-slope D) m-3 mm-1, slope = 4.1 R^-0.21 mm-1 (J. Meteor. 5, 165).

    Parameters
    ----------
    rain : Rain
        `rain_rate_mm_h` is read; 5 unless given.

    Returns
    -------
    DropSizes
        Its rain rate is the R asked for: with a fall-speed law the drops make up to a fifth more or less.
    """
    rate = _rate(rain)
    return _gamma(8000.0, 0.0, 4.1 * rate**-0.21, rate)


def ulbrich_1983(rain: Rain) -> DropSizes:
    """Gamma law N(D) = N0 D^mu exp(-slope D), slope = (3.67 + mu)/D0 (J. Climate Appl. Meteor. 22, 1764).

    Parameters
    ----------
    rain : Rain
        `median_diameter_mm`, `shape_mu` (2 unless given) and `rain_rate_mm_h` (5 unless given), which sets N0 through
        the fall speeds of Gunn & Kinzer 1949.

    Returns
    -------
    DropSizes
        Drops.

    Raises
    ------
    ValueError
        If the median diameter is missing, or mu is -3 or below (endless extinction).
    """
    if rain.median_diameter_mm is None:
        raise ValueError("size_law 'ulbrich_1983' lacks median_diameter_mm; 0.1 to 6 mm would work")
    mu = SHAPE_MU if rain.shape_mu is None else rain.shape_mu
    if mu <= -3:
        raise ValueError(f"shape_mu {mu:g} gives endless extinction; above -3 would work")
    rate = _rate(rain)
    trial = _gamma(1.0, mu, (3.67 + mu) / rain.median_diameter_mm, rate)
    return _scaled(trial, rate / _rate_of(trial.diameter_mm, trial.number_m3))._replace(rain_rate_mm_h=rate)


def single(rain: Rain) -> DropSizes:
    """Drops of one diameter, as many as their fall speed (Gunn & Kinzer 1949) needs for the rain rate.

    Parameters
    ----------
    rain : Rain
        `diameter_mm` and `rain_rate_mm_h` (5 unless given).

    Returns
    -------
    DropSizes
        One class.

    Raises
    ------
    ValueError
        If the diameter is missing.
    """
    if rain.diameter_mm is None:
        raise ValueError("size_law 'single' lacks diameter_mm; 0.02 to 8 mm would work")
    rate, d = _rate(rain), rain.diameter_mm
    diameter = np.array([d])
    number = rate / _rate_of(diameter, np.ones(1))
    return DropSizes(
        extinction_per_km=float(1e-3 * np.pi / 4 * d**2 * number),
        effective_diameter_mm=d,
        median_diameter_mm=d,
        water_g_m3=float(1e-3 * np.pi / 6 * d**3 * number),
        rain_rate_mm_h=rate,
        diameter_mm=diameter,
        number_m3=np.array([number]),
    )


SIZE_LAWS = {law.__name__: law for law in (marshall_palmer_1948, ulbrich_1983, single)}
"""Size laws by the name in the scene file: functions of the rain's table to DropSizes."""


def drop_sizes(rain: Rain) -> DropSizes:
    """Drops of one curtain of rain.

    Parameters
    ----------
    rain : Rain
        `size_law` and its keys; `extinction_per_km` where given sets the amount and leaves the shape.

    Returns
    -------
    DropSizes
        Drops.

    Raises
    ------
    ValueError
        If a key that the law needs is missing.
    """
    sizes = SIZE_LAWS[rain.size_law](rain)
    if rain.extinction_per_km is None:
        return sizes
    return _scaled(sizes, rain.extinction_per_km / sizes.extinction_per_km)


def _rate(rain: Rain) -> float:
    return RAIN_RATE_MM_H if rain.rain_rate_mm_h is None else rain.rain_rate_mm_h


def _rate_of(diameter_mm: np.ndarray, number_m3: np.ndarray) -> float:
    """Rain rate of classes of drops [mm/h]: 3.6e-3 turns mm3 m-2 s-1 into mm/h."""
    return float(3.6e-3 * np.pi / 6 * np.sum(number_m3 * diameter_mm**3 * gunn_kinzer_1949(diameter_mm)))


def _gamma(n0: float, mu: float, slope: float, rate: float) -> DropSizes:
    """Closed moments of N0 D^mu exp(-slope D), and Gauss-Laguerre classes that are exact for them."""
    from scipy.special import gamma, gammaincinv, roots_genlaguerre

    # Weighted by D^2, the second moment's integrand, so that mu down to -3 stays integrable.
    node, weight = roots_genlaguerre(CLASSES, mu + 2.0)
    diameter = node / slope
    return DropSizes(
        extinction_per_km=float(1e-3 * np.pi / 4 * n0 * gamma(mu + 3) / slope ** (mu + 3)),
        effective_diameter_mm=(mu + 3) / slope,
        median_diameter_mm=float(gammaincinv(mu + 4, 0.5)) / slope,
        water_g_m3=float(1e-3 * np.pi / 6 * n0 * gamma(mu + 4) / slope ** (mu + 4)),
        rain_rate_mm_h=rate,
        diameter_mm=diameter,
        number_m3=n0 * weight / slope ** (mu + 3) / diameter**2,
    )


def _scaled(sizes: DropSizes, factor: float) -> DropSizes:
    return sizes._replace(
        extinction_per_km=sizes.extinction_per_km * factor,
        water_g_m3=sizes.water_g_m3 * factor,
        rain_rate_mm_h=sizes.rain_rate_mm_h * factor,
        number_m3=sizes.number_m3 * factor,
    )

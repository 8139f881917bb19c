"""Refractive index of moist air, Ciddor 1996."""

from __future__ import annotations

from typing import TYPE_CHECKING

import numpy as np

if TYPE_CHECKING:
    from raytrace.scene.model import Air

KELVIN = 273.15
MOLAR_MASS_VAPOUR = 0.018015  # kg/mol
CO2_PPM = 450.0


def saturation_pressure_pa(temperature_c: float) -> float:
    """Saturation pressure of water vapour, over water from 0 degC up and over ice below.

    Parameters
    ----------
    temperature_c : float
        Temperature [degC].

    Returns
    -------
    float
        Pressure [Pa] (Ciddor 1996, appendix A; after R. S. Davis, Metrologia 29, 67 (1992)).
    """
    t = temperature_c + KELVIN
    if temperature_c < 0:
        return float(10.0 ** (-2663.5 / t + 12.537))
    return float(np.exp(1.2378847e-5 * t**2 - 1.9121316e-2 * t + 33.93711047 - 6.3431645e3 / t))


def ciddor_1996(
    vacuum_wavelength_nm: np.ndarray,
    temperature_c: float,
    pressure_pa: float,
    relative_humidity: float,
    co2_ppm: float = CO2_PPM,
) -> np.ndarray:
    """Phase refractive index of moist air, relative to vacuum.

    Parameters
    ----------
    vacuum_wavelength_nm : array_like, shape (n,)
        Wavelengths in vacuum, 300 to 1700 [nm].
    temperature_c : float
        Temperature [degC].
    pressure_pa : float
        Pressure [Pa].
    relative_humidity : float
        Relative humidity, 0 to 1.
    co2_ppm : float
        Carbon dioxide, share of volume [ppm].

    Returns
    -------
    ndarray, shape (n,)
        Index, good to a few in 1e-8 between 800 and 1200 hPa.

    Raises
    ------
    ValueError
        If a wavelength is outside 300 to 1700 nm.

    Notes
    -----
    P. E. Ciddor, Appl. Opt. 35, 1566 (1996), doi:10.1364/AO.35.001566, equations 1 to 5 and appendices A and B.
    """
    wavelength = np.asarray(vacuum_wavelength_nm, dtype=np.float64)
    if not ((wavelength >= 300.0) & (wavelength <= 1700.0)).all():
        raise ValueError(f"no index of air at {vacuum_wavelength_nm} nm; 300 to 1700 nm would work")
    s2 = (1e3 / wavelength) ** 2  # um^-2
    t = temperature_c + KELVIN
    enhancement = 1.00062 + 3.14e-8 * pressure_pa + 5.6e-7 * temperature_c**2
    vapour = enhancement * relative_humidity * saturation_pressure_pa(temperature_c) / pressure_pa

    standard_air = 1e-8 * (5792105.0 / (238.0185 - s2) + 167917.0 / (57.362 - s2))  # eq. 1
    standard_air = standard_air * (1.0 + 0.534e-6 * (co2_ppm - 450.0))  # eq. 2
    standard_vapour = 1.022e-8 * (295.235 + 2.6422 * s2 - 0.032380 * s2**2 + 0.004028 * s2**3)  # eq. 3

    air_mass = 1e-3 * (28.9635 + 12.011e-6 * (co2_ppm - 400.0))  # kg/mol
    # Equation 4 for each component, at the standards' own conditions and here; R cancels.
    air_standard = 101325.0 * air_mass / (_compressibility(288.15, 101325.0, 0.0) * 288.15)
    vapour_standard = 1333.0 * MOLAR_MASS_VAPOUR / (_compressibility(293.15, 1333.0, 1.0) * 293.15)
    here = pressure_pa / (_compressibility(t, pressure_pa, vapour) * t)
    air_here, vapour_here = here * air_mass * (1.0 - vapour), here * MOLAR_MASS_VAPOUR * vapour
    return 1.0 + air_here / air_standard * standard_air + vapour_here / vapour_standard * standard_vapour  # eq. 5


def air_index(air: Air, wavelength_nm: np.ndarray) -> np.ndarray:
    """Index of the scene's air, relative to vacuum, at wavelengths in that air.

    Parameters
    ----------
    air : Air
        Pressure, temperature and humidity are read.
    wavelength_nm : array_like, shape (n,)
        Wavelengths in air [nm].

    Returns
    -------
    ndarray, shape (n,)
        Index.
    """
    wavelength = np.asarray(wavelength_nm, dtype=np.float64)
    given = air.temperature_c, air.pressure_hpa * 100.0, air.relative_humidity_percent / 100.0
    index = ciddor_1996(wavelength, *given)
    # The formula wants vacuum wavelengths; one more turn leaves an error below 1e-12.
    for _ in range(2):
        index = ciddor_1996(wavelength * index, *given)
    return index


def _compressibility(t: float, pressure_pa: float, vapour: float) -> float:
    """Compressibility Z of moist air (Ciddor 1996, appendix A, equation 12), t in kelvin."""
    c = t - KELVIN
    first = (
        1.58123e-6 - 2.9331e-8 * c + 1.1043e-10 * c**2
        + (5.707e-6 - 2.051e-8 * c) * vapour
        + (1.9898e-4 - 2.376e-6 * c) * vapour**2
    )  # fmt: skip
    ratio = pressure_pa / t
    return 1.0 - ratio * first + ratio**2 * (1.83e-11 - 0.765e-8 * vapour**2)

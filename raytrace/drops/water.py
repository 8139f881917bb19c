"""Complex refractive index of the drops' water, relative to the air around them."""

from __future__ import annotations

from typing import TYPE_CHECKING

import numpy as np

from raytrace.data import read_table
from raytrace.drops.air_index import KELVIN, air_index, ciddor_1996

if TYPE_CHECKING:
    from raytrace.scene.model import Air, Rain


def water_density_kg_m3(temperature_c: float) -> float:
    """Density of air-free water at 1 atm.

    Parameters
    ----------
    temperature_c : float
        Temperature, 0 to 50 here; the formula reaches from 0 to 150 [degC].

    Returns
    -------
    float
        Density [kg/m3], good to 0.0015.

    Notes
    -----
    G. S. Kell, J. Chem. Eng. Data 20, 97 (1975), doi:10.1021/je60064a005, equation 16, on the temperature scale of
    1968 (1.00024 times today's), times what brings its maximum of 999.972 to today's 999.97495 (M. Tanaka et al.,
    Metrologia 38, 301 (2001)).
    """
    t = 1.00024 * temperature_c
    top = 999.83952 + t * (
        16.945176 + t * (-7.9870401e-3 + t * (-46.170461e-6 + t * (105.56302e-9 - 280.54253e-12 * t)))
    )
    return top / (1.0 + 16.879850e-3 * t) * (999.97495 / 999.972)


def iapws_1997(vacuum_wavelength_nm: np.ndarray, temperature_c: float, density_kg_m3: float) -> np.ndarray:
    """Index of ordinary water relative to vacuum.

    Parameters
    ----------
    vacuum_wavelength_nm : array_like, shape (n,)
        Wavelengths in vacuum, 200 to 1100 [nm].
    temperature_c : float
        Temperature, -12 to 500 [degC].
    density_kg_m3 : float
        Density, 0 to 1060 [kg/m3].

    Returns
    -------
    ndarray, shape (n,)
        Index.

    Raises
    ------
    ValueError
        If a wavelength is outside 200 to 1100 nm.

    Notes
    -----
    IAPWS R9-97, Release on the refractive index of ordinary water substance (1997), equation 1.
    """
    wavelength = np.asarray(vacuum_wavelength_nm, dtype=np.float64)
    if not ((wavelength >= 200.0) & (wavelength <= 1100.0)).all():
        raise ValueError(f"no index of water at {vacuum_wavelength_nm} nm; 200 to 1100 nm would work")
    c = {name: float(column[0]) for name, column in read_table("iapws_r9_97").items()}
    density, t, l2 = density_kg_m3 / 1000.0, (temperature_c + KELVIN) / 273.15, (wavelength / 589.0) ** 2
    refraction = density * (
        c["a0"] + c["a1"] * density + c["a2"] * t + c["a3"] * l2 * t + c["a4"] / l2
        + c["a5"] / (l2 - c["lambda_uv"] ** 2) + c["a6"] / (l2 - c["lambda_ir"] ** 2) + c["a7"] * density**2
    )  # fmt: skip
    return np.sqrt((1.0 + 2.0 * refraction) / (1.0 - refraction))


def quan_fry_1995(wavelength_nm: np.ndarray, temperature_c: float, salinity_permille: float) -> np.ndarray:
    """Index of seawater relative to air at 1 atm.

    Parameters
    ----------
    wavelength_nm : array_like, shape (n,)
        Wavelengths in air; fitted to 400 to 700, carried on smoothly outside [nm].
    temperature_c : float
        Temperature; fitted to 0 to 30, carried on smoothly above [degC].
    salinity_permille : float
        Salinity; fitted to 0 to 35, carried on above [permille].

    Returns
    -------
    ndarray, shape (n,)
        Index.

    Notes
    -----
    X. Quan, E. S. Fry, Appl. Opt. 34, 3477 (1995), doi:10.1364/AO.34.003477, equation 3. At no salinity it gives
    1.33300 for the sodium line at 20 degC, where fresh water has 1.33298 relative to air and 1.33335 relative to
    vacuum: the formula is relative to air.
    """
    w, t = np.asarray(wavelength_nm, dtype=np.float64), temperature_c
    return (
        1.31405
        + (1.779e-4 - 1.05e-6 * t + 1.6e-8 * t**2) * salinity_permille
        - 2.02e-6 * t**2
        + (15.868 + 0.01155 * salinity_permille - 0.00423 * t) / w
        - 4382.0 / w**2
        + 1.1455e6 / w**3
    )


def absorption_k(wavelength_nm: np.ndarray) -> np.ndarray:
    """Imaginary part of water's index, relative to vacuum.

    Parameters
    ----------
    wavelength_nm : array_like, shape (n,)
        Wavelengths, 375 to 800 [nm].

    Returns
    -------
    ndarray, shape (n,)
        k, straight in its logarithm between the table's rows. Temperature and salt are left out.

    Raises
    ------
    ValueError
        If a wavelength is outside the table.

    Notes
    -----
    G. M. Hale, M. R. Querry, Appl. Opt. 12, 555 (1973), doi:10.1364/AO.12.000555, at 25 degC.
    """
    table = read_table("hale_querry_1973")
    wavelength = np.asarray(wavelength_nm, dtype=np.float64)
    first, last = table["wavelength_nm"][[0, -1]]
    if not ((wavelength >= first) & (wavelength <= last)).all():
        raise ValueError(f"no absorption of water at {wavelength_nm} nm; {first:g} to {last:g} nm would work")
    return np.exp(np.interp(wavelength, table["wavelength_nm"], np.log(table["k"])))


def _fresh(rain: Rain, air: Air, wavelength_nm: np.ndarray) -> np.ndarray:
    around = air_index(air, wavelength_nm)
    density = water_density_kg_m3(rain.temperature_c)
    return iapws_1997(wavelength_nm * around, rain.temperature_c, density) / around


def _sea(rain: Rain, air: Air, wavelength_nm: np.ndarray) -> np.ndarray:
    # Measured against a laboratory's air, taken as 20 degC, 1 atm and dry; the drops are in the scene's.
    around, laboratory = air_index(air, wavelength_nm), ciddor_1996(wavelength_nm, 20.0, 101325.0, 0.0)
    return quan_fry_1995(wavelength_nm, rain.temperature_c, rain.salinity_permille) * laboratory / around


WATERS = {"fresh": _fresh, "sea": _sea}
"""Kinds of water by the name in the scene file: functions of (rain, air, wavelength_nm), index relative to air."""


def refractive_index(rain: Rain, air: Air, wavelength_nm: np.ndarray) -> np.ndarray:
    """Complex index of the drops, relative to the air around them.

    Parameters
    ----------
    rain : Rain
        Kind of water, temperature, salinity; or `refractive_index`, which fixes the real part.
    air : Air
        Pressure, temperature and humidity are read.
    wavelength_nm : array_like, shape (n,)
        Wavelengths in air, 375 to 800 [nm].

    Returns
    -------
    ndarray of complex128, shape (n,)
        n + ik; k is at least 0 and absorbs.

    Raises
    ------
    ValueError
        If a wavelength is outside 375 to 800 nm.
    """
    wavelength = np.atleast_1d(np.asarray(wavelength_nm, dtype=np.float64))
    k = absorption_k(wavelength) / air_index(air, wavelength)
    if rain.refractive_index is not None:
        return np.full(wavelength.shape, rain.refractive_index) + 1j * k
    return WATERS[rain.water](rain, air, wavelength) + 1j * k

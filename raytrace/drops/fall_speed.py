"""Terminal fall speed of drops, from cloud droplets to raindrops."""

from __future__ import annotations

import numpy as np

from raytrace.data import read_table

GRAVITY_M_S2 = 9.80665
WATER_KG_M3 = 998.2
AIR_KG_M3 = 1.204
AIR_VISCOSITY_PA_S = 1.81e-5
"""Of water and dry air at 20 degC and 1013 hPa, the table's conditions; from memory."""
SLIP_MM = 2.51 * 66e-6
"""Cunningham's slip: coefficient (Beard 1976, quoted) times the mean free path in such air (quoted)."""


def gunn_kinzer_1949(diameter_mm: np.ndarray) -> np.ndarray:
    """Terminal speed of drops in still air near sea level.

    Parameters
    ----------
    diameter_mm : array_like
        Equal-volume diameters from 0 [mm].

    Returns
    -------
    ndarray
        Speeds, same shape [m/s]: a monotone cubic through the table from 0.1 to 5.8 mm; below, Stokes' law; above, the
        last row's speed, since large drops flatten and fall no faster.

    Notes
    -----
    R. Gunn, G. D. Kinzer, J. Meteor. 6, 243 (1949). Below the table G. G. Stokes 1851 with E. Cunningham's slip (Proc.
    R. Soc. A 83, 357 (1910)), 8 % at 2 um, as K. V. Beard, J. Atmos. Sci. 33, 851 (1976) has it to 19 um. C. W. Oseen's
    correction (1910) grows with the Reynolds number, hence with the cube of the diameter; its coefficient is that with
    which the speed meets the table's first row.
    """
    from scipy.interpolate import PchipInterpolator

    table = read_table("gunn_kinzer_1949")
    diameter = np.asarray(diameter_mm, dtype=np.float64)
    known, speed = table["diameter_mm"], table["speed_m_s"]
    inside = PchipInterpolator(known, speed)(np.clip(diameter, known[0], known[-1]))
    oseen = _stokes(known[0]) / speed[0] - 1.0
    small = np.minimum(diameter, known[0])
    return np.where(diameter < known[0], _stokes(small) / (1.0 + oseen * (small / known[0]) ** 3), inside)


def _stokes(diameter_mm):
    """Stokes' speed with slip [m/s]: D (D + slip) in mm2, written so that a diameter of 0 stands still."""
    fall = 1e-6 * GRAVITY_M_S2 * (WATER_KG_M3 - AIR_KG_M3) / (18.0 * AIR_VISCOSITY_PA_S)
    return fall * diameter_mm * (diameter_mm + SLIP_MM)

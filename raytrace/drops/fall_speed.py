"""Terminal fall speed of raindrops."""

from __future__ import annotations

import numpy as np

from raytrace.data import read_table


def gunn_kinzer_1949(diameter_mm: np.ndarray) -> np.ndarray:
    """Terminal speed of drops in still air near sea level.

    Parameters
    ----------
    diameter_mm : array_like
        Equal-volume diameters above 0 [mm].

    Returns
    -------
    ndarray
        Speeds, same shape [m/s]: a monotone cubic through the table from 0.1 to 5.8 mm; below, in proportion to the
        square of the diameter (Stokes' law through the first row); above, the last row's speed, since large drops
        flatten and fall no faster.

    Notes
    -----
    R. Gunn, G. D. Kinzer, J. Meteor. 6, 243 (1949).
    """
    from scipy.interpolate import PchipInterpolator

    table = read_table("gunn_kinzer_1949")
    diameter = np.asarray(diameter_mm, dtype=np.float64)
    known, speed = table["diameter_mm"], table["speed_m_s"]
    inside = PchipInterpolator(known, speed)(np.clip(diameter, known[0], known[-1]))
    return np.where(diameter < known[0], speed[0] * (diameter / known[0]) ** 2, inside)

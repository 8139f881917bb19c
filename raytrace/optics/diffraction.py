"""Light that is diffracted round a drop, apart from what its surface reflects, and what rays make of the latter."""

from __future__ import annotations

import numpy as np

from raytrace.drops.bow_angle import fresnel
from raytrace.optics.angle_grids import smooth_step
from raytrace.optics.table import ring_solid_angle_sr

# Fraunhofer's rings are worked out to the second of these, and fade from the first: beyond, reflected light is brighter
# for all drops that rays serve
_FADE_FROM_DEG, _FADE_TO_DEG = 8.0, 12.0


def reflected_sr(index: float, angle_deg: np.ndarray) -> np.ndarray:
    """External reflection by ray optics: R(i) / (8 pi) for each polarisation, i = (180 deg - theta) / 2.

    From van de Hulst (1957), section 12.21: sin i cos i di / (sin theta d theta) = 1/4.

    Parameters
    ----------
    index : float
    angle_deg : (n,) array
        Scattering angle [deg].

    Returns
    -------
    (2, n) float64
        As `phase_sr` of order p = 0 [sr⁻¹].
    """
    # cos i = cos(90 deg - theta / 2)
    cos_i = np.sin(np.radians(angle_deg) / 2)
    return np.stack(fresnel(cos_i, index)) / (8.0 * np.pi)


def diffracted_sr(size_parameter: float, angle_edges_deg: np.ndarray) -> np.ndarray:
    """Fraunhofer diffraction by a disc, mean over bins; within a ring lies 1 - J0^2 - J1^2 of it (Rayleigh 1881).

    Parameters
    ----------
    size_parameter : float
    angle_edges_deg : (bins + 1,) array
        Rising [deg].

    Returns
    -------
    (bins,) float64
        Of each polarisation; both add up to the light that the cross-section intercepts. 0 beyond 12 deg [sr⁻¹].
    """
    edges = np.asarray(angle_edges_deg, dtype=np.float64)
    out = np.zeros(edges.size - 1)
    near = int(np.searchsorted(edges, _FADE_TO_DEG))
    near = min(max(near, 1), out.size)
    within = _within(size_parameter * np.sin(np.radians(np.minimum(edges[: near + 1], 90.0))))
    out[:near] = 0.5 * np.diff(within) / ring_solid_angle_sr(edges[: near + 1])
    middle = 0.5 * (edges[:near] + edges[1 : near + 1])
    out[:near] *= smooth_step(middle, _FADE_TO_DEG, _FADE_FROM_DEG)
    return out


def _within(z):
    from scipy.special import j0, j1

    return 1.0 - j0(z) ** 2 - j1(z) ** 2

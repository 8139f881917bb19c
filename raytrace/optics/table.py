"""The scattering table: what one drop does with sunlight, by Debye order, polarisation, wavelength and angle."""

from __future__ import annotations

import dataclasses

import numpy as np


@dataclasses.dataclass(frozen=True, eq=False)
class ScatteringTable:
    """Scattering by one drop, for unpolarised parallel light unless a disc has been folded in.

    Attributes
    ----------
    phase_sr : (paths, 2, n_wavelength, n_angle) float64
        Power per steradian that leaves in order p and polarisation (0 perpendicular to the scattering plane, 1
        parallel), over the power that the drop's cross-section intercepts; mean over each bin [sr⁻¹].
    standard_error_sr : same shape
        Standard error of `phase_sr` from independent blocks of rays [sr⁻¹].
    angle_edges_deg : (n_angle + 1,) float64
        Edges of the bins of the scattering angle, 0 forward, 180 back to the sun [deg].
    wavelength_nm : (n_wavelength,) float64 or None
        Wavelengths in air; None where the tracer was given an index alone [nm].
    index : (n_wavelength,) complex128
        Refractive index relative to air, n + ik.
    left_over, absorbed : (n_wavelength,) float64
        Shares of the intercepted light still inside after the last order, and absorbed.
    method : str
        What made the table.
    rays : int
        Incident rays a wavelength.
    seed : int
    disc_diameter_deg : float
        Diameter of the sun's disc that is folded in; 0 for parallel light [deg].
    """

    phase_sr: np.ndarray
    standard_error_sr: np.ndarray
    angle_edges_deg: np.ndarray
    wavelength_nm: np.ndarray | None
    index: np.ndarray
    left_over: np.ndarray
    absorbed: np.ndarray
    method: str
    rays: int
    seed: int
    disc_diameter_deg: float = 0.0

    @property
    def paths(self) -> int:
        """Number of Debye orders, p = 0 to paths - 1."""
        return self.phase_sr.shape[0]

    @property
    def angle_deg(self) -> np.ndarray:
        """(n_angle,) middles of the bins [deg]."""
        return 0.5 * (self.angle_edges_deg[1:] + self.angle_edges_deg[:-1])

    @property
    def solid_angle_sr(self) -> np.ndarray:
        """(n_angle,) solid angles of the bins, rings round the direction of the light [sr]."""
        return ring_solid_angle_sr(self.angle_edges_deg)

    def share(self) -> np.ndarray:
        """(paths, 2, n_wavelength) shares of the intercepted light that leave in each order and polarisation."""
        return self.phase_sr @ self.solid_angle_sr

    def with_sun_disc(self, diameter_deg: float = 0.533, *, threads: int | None = None) -> ScatteringTable:
        """The table seen with the sun's limb-darkened disc in place of parallel light.

        Parameters
        ----------
        diameter_deg : float
            Diameter of the disc; 0 gives the table itself [deg].

        Raises
        ------
        ValueError
            If a disc is folded in already, the wavelengths are unknown, or the diameter is not within 0 to 10.
        """
        from raytrace.optics.fold import fold_sun_disc

        return fold_sun_disc(self, diameter_deg, threads=threads)


def ring_solid_angle_sr(angle_edges_deg: np.ndarray) -> np.ndarray:
    """Solid angles of rings between polar angles [sr]; written as a product, which keeps its digits near the poles."""
    edges = np.radians(angle_edges_deg)
    middle, half = 0.5 * (edges[1:] + edges[:-1]), 0.5 * (edges[1:] - edges[:-1])
    return 4.0 * np.pi * np.sin(middle) * np.sin(half)

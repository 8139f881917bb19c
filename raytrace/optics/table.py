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
        Where waves made it, p = 0 holds what is diffracted beside what is reflected.
    standard_error_sr : same shape
        Standard error of `phase_sr` from independent blocks of rays; waves and Airy bows have none [sr⁻¹].
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
    aureole_sr : (2, n_wavelength, n_angle) float64 or None
        What of p = 0 is diffracted; extinction that counts the geometric cross-section once leaves it where it is. None
        where rays alone made the table [sr⁻¹].
    glory_sr : (2, n_wavelength, n_angle) float64 or None
        Near 180 degrees, where it was asked for, all orders in one with their interference, in their place [sr⁻¹].
    sizes : int
        How many sizes were averaged; 0 where rays made the table, for which all are alike but for absorption.
    size_error : float
        How far the last doubling of the sizes moved the orders, as a share of each one's largest value after the disc.
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
    aureole_sr: np.ndarray | None = None
    glory_sr: np.ndarray | None = None
    sizes: int = 0
    size_error: float = 0.0

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

    def light_sr(self, *, aureole: bool = False, polarised: bool = False) -> np.ndarray:
        """Rows of light that are drawn: the orders, without what is diffracted; the glory; and the aureole.

        Parameters
        ----------
        aureole : bool
            Whether the aureole, light near the sun that is diffracted, gets a row.
        polarised : bool
            Whether the polarisations are kept apart.

        Returns
        -------
        (rows, n_wavelength, n_angle) or (rows, 2, n_wavelength, n_angle) float64
            paths rows, one more where there is a glory, one more for the aureole [sr⁻¹].
        """

        def whole(values):
            return values if polarised else values.sum(axis=-3)

        extra = [] if self.glory_sr is None else [self.glory_sr]
        if aureole:
            extra.append(np.zeros_like(self.phase_sr[0]) if self.aureole_sr is None else self.aureole_sr)
        rows = whole(self.phase_sr)
        if extra or self.aureole_sr is not None:
            rows = np.concatenate([rows, *(whole(part)[None] for part in extra)])
        if self.aureole_sr is not None:
            rows[0] -= whole(self.aureole_sr)
        return rows

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

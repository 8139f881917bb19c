"""Figures' ground where waves count: a table of the drops' light in place of rays that are added, with the same shape.

Airy bows and waves have no Monte Carlo error. What rays serve, p = 0 and 1 of large drops, has, and stands in two
blocks one standard error to each side of the mean, of which the jackknife makes that error again.
"""

from __future__ import annotations

import numpy as np

from raytrace.colour import xyz_weights
from raytrace.comparison.estimate import BINS, MONO_NM
from raytrace.drops.sizes import size_spectrum
from raytrace.drops.water import refractive_index
from raytrace.optics.fold import DiscFold
from raytrace.optics.scattering import made_or_kept
from raytrace.optics.table import ring_solid_angle_sr

# Incident rays at each wavelength where rays serve an order
RAYS = 1_000_000


class WaveEstimate:
    """Light that leaves the drops of one curtain, by order and angle, after the sun's disc; nothing is to be added.

    Parameters
    ----------
    scene : Scene
    curtain : int
    wavelength_nm : (n_wavelength,) array
        550 nm among them [nm].
    irradiance : (n_wavelength,) array
        Sunlight that falls on the drops [W m-2 nm-1].
    method : str
        "airy", "waves" or "auto".
    paths, seed : int
    threads : int, optional
    progress : bool

    Attributes
    ----------
    mono, share, left_over, colour, rays, angle_deg, disc_radius_deg
        As of `Estimate`, with two blocks. Diffracted light is left out of order p = 0.
    """

    grows = False

    def __init__(
        self, scene, curtain, wavelength_nm, irradiance, method, paths, *, seed=0, threads=None, progress=False
    ):
        rain = scene.rain[curtain]
        self.wavelength_nm, self.paths = np.asarray(wavelength_nm, dtype=np.float64), paths
        self.disc_radius_deg = scene.sun.disc_diameter_deg / 2
        arguments = {
            "index": refractive_index(rain, scene.air, wavelength_nm),
            "wavelength_nm": self.wavelength_nm,
            "spectrum": size_spectrum(rain),
            "paths": paths,
            "rays": RAYS,
            "bins": BINS,
            "seed": seed,
            "glory": False,
        }
        table = made_or_kept(method, arguments, threads=threads, progress=progress)
        self.angle_deg = table.angle_deg
        self.sizes, self.rays = table.sizes, [table.rays, table.rays]
        at = int(np.flatnonzero(self.wavelength_nm == MONO_NM)[0])
        light = table.light_sr(polarised=True)
        solid = ring_solid_angle_sr(table.angle_edges_deg)
        share, error = light[:, :, at].sum(axis=1) @ solid, np.sqrt((table.standard_error_sr[:, :, at] ** 2) @ solid**2)
        error = np.sqrt((error**2).sum(axis=1))
        self.share = np.maximum(np.stack([share - error, share + error]), 0.0)
        self.left_over = np.full(2, table.left_over[at])
        weights = irradiance[:, None] * xyz_weights(self.wavelength_nm)
        mean = np.zeros((3, paths, 2, BINS))
        spread = np.zeros_like(mean)
        disc = None
        if scene.sun.disc_diameter_deg > 0:
            disc = DiscFold(table.angle_edges_deg, scene.sun.disc_diameter_deg, self.wavelength_nm, threads=threads)
        for w in range(self.wavelength_nm.size):
            value, error = self._folded(disc, light[:, :, w], table.standard_error_sr[:, :, w], w)
            mean += weights[w][:, None, None, None] * value
            spread += (weights[w][:, None, None, None] * error) ** 2
            if w == at:
                self.mono = np.stack([value - error, value + error])
        spread = np.sqrt(spread)
        self.colour = np.stack([mean - spread, mean + spread], axis=1)

    def _folded(self, disc, light, error, w):
        """(paths, 2, BINS) light and its standard error after the disc, at wavelength number `w`."""
        if disc is None:
            return light, error
        value = disc.fold_last(light, w)
        # rays serve the first orders only
        some = int(np.max(np.flatnonzero(error.any(axis=(1, 2))), initial=-1)) + 1
        out = np.zeros_like(light)
        if some:
            out[:some] = np.sqrt(disc.fold_last(error[:some] ** 2, w, squares=True))
        return value, out

"""How far rays and Airy bows are from the Debye series, by order and size: `python tests/switch_over.py` measures.

Error: the largest difference over all angles, after the sun's disc, over the largest value of the Debye order after the
disc. One size at a time, the index of water at 550 nm and 20 degC. Diffraction is left out of order p = 0.
"""

import numpy as np

from raytrace.optics.airy import airy_phase_prepared, prepare_airy
from raytrace.optics.debye import debye_series
from raytrace.optics.fold import DiscFold
from raytrace.optics.sphere import trace_sphere

INDEX, WAVELENGTH_NM, DISC_DEG, BINS = 1.3343, 550.0, 0.533, 9_000


class Errors:
    """Folds, rays and the rays' part of the Airy bows, made once for all sizes."""

    def __init__(self, paths=8, rays=0):
        self.paths = paths
        self.edges = np.linspace(0.0, 180.0, BINS + 1)
        self._disc = DiscFold(self.edges, DISC_DEG, np.array([WAVELENGTH_NM]))
        self._airy = prepare_airy(INDEX, self.edges, paths)
        self._rays = None
        if rays:
            traced = trace_sphere(INDEX, paths=paths, rays=rays, bins=BINS)
            self._rays = self._fold(traced.phase_sr[:, :, 0].sum(axis=1))

    def _fold(self, rows):
        return self._disc.fold(np.ascontiguousarray(rows.T), 0).T

    def exact(self, x):
        """(paths, BINS) Debye orders after the disc; so many samples a bin that fringes are not met in step."""
        count = 1 + int(x / 2500)
        total, weight = np.zeros((self.paths, BINS)), np.zeros(BINS)
        width = 180.0 / BINS
        for k in range(count):
            angle = self.edges[:-1] + (k + 0.5) / count * width
            s = debye_series(INDEX, x, angle, paths=self.paths)
            sine = np.sin(np.radians(angle))
            total += (np.abs(s) ** 2).sum(axis=1) / (2 * np.pi * x * x) * sine
            weight += sine
        total /= weight
        total[0] = np.minimum(total[0], self._airy.ray_phase_sr[0].sum(axis=0))
        return self._fold(total)

    def of(self, x):
        """(paths,) errors of Airy bows, and of rays where they were asked for."""
        exact = self.exact(x)
        peak = exact.max(axis=1)
        found = self._fold(airy_phase_prepared(self._airy, x).sum(axis=1))
        airy = np.abs(found - exact).max(axis=1) / peak
        rays = None if self._rays is None else np.abs(self._rays - exact).max(axis=1) / peak
        return airy, rays


def main():
    errors = Errors(rays=100_000_000)
    # near each size two more, since the error swings with the phase of the fringes
    sizes = np.array([f * x for x in np.geomspace(20, 60_000, 43) for f in (0.985, 1.0, 1.013)])
    found = [errors.of(float(x)) for x in sizes]
    for kind, name in enumerate(("airy", "rays")):
        values = np.array([f[kind] for f in found])
        for p in range(errors.paths):
            bad = np.flatnonzero(values[:, p] > 0.01)
            start = sizes[0] if bad.size == 0 else (np.inf if bad[-1] + 1 >= sizes.size else sizes[bad[-1] + 1])
            print(name, p, f"within 1 % from x = {start:.0f}", np.round(100 * values[::9, p], 2).tolist(), flush=True)


if __name__ == "__main__":
    main()

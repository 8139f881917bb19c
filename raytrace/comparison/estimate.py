"""Monte Carlo estimates of what leaves a drop, with rays added until the figures are known well enough.

The blocks of the tracer are kept apart all the way: each figure is worked out anew without one of them, and the scatter
of these values is its standard error (the jackknife, Quenouille 1956 and Tukey 1958), ratios and peaks included.
"""

from __future__ import annotations

import itertools

import numpy as np

from raytrace.colour import xyz_weights
from raytrace.cores import core_count
from raytrace.jit import run_all
from raytrace.optics.fold import DiscFold, add_channels
from raytrace.optics.sphere import BLOCKS, absorption_exponent, trace_sphere_blocks
from raytrace.optics.table import ring_solid_angle_sr
from raytrace.random_stream import stream_state

BINS = 4_500
MONO_NM = 550.0
_PIECES = 4
# Of a process that compares, without what its curtains' estimates take; measured, rounded up
_FIXED_BYTES = 350e6
# stream of the rounds, apart from those of the wavelengths
_ROUND_DIMENSION = 2_000_003


class Estimate:
    """Light that leaves one drop, by block, order and angle, after the sun's disc; rays can be added.

    Parameters
    ----------
    index : (n_wavelength,) complex array
        Relative to air.
    wavelength_nm : (n_wavelength,) array
        [nm]
    mono_index : complex
        Index at 550 nm.
    diameter_mm, disc_diameter_deg : float
        Of the drop and of the sun's disc [mm, deg].
    paths : int
        Debye orders, p = 0 to paths - 1.
    seed : int
    threads : int, optional

    Attributes
    ----------
    mono : (BLOCKS, paths, 2, BINS) float64
        Phase function at 550 nm [sr⁻¹].
    share : (BLOCKS, paths) float64
        Shares of the intercepted light at 550 nm.
    left_over : (BLOCKS,) float64
        Share left over after the last order.
    colour : (3, BLOCKS, paths, 2, BINS) float64
        Radiance per unit of sunlit rain as XYZ [cd/m2].
    """

    grows = True
    """Whether rays can be added."""

    def __init__(
        self, index, wavelength_nm, mono_index, diameter_mm, disc_diameter_deg, paths, *, seed=0, threads=None
    ):
        self.index, self.wavelength_nm, self.mono_index = np.asarray(index), np.asarray(wavelength_nm), mono_index
        self.diameter_mm, self.paths, self.seed = diameter_mm, paths, seed
        self.disc_radius_deg = disc_diameter_deg / 2
        self.edges_deg = np.linspace(0.0, 180.0, BINS + 1)
        self.angle_deg = 0.5 * (self.edges_deg[1:] + self.edges_deg[:-1])
        self._threads = core_count() if threads is None else threads
        self._weights = None
        self._folds = None
        if disc_diameter_deg > 0:
            every = np.append(self.wavelength_nm, MONO_NM)
            self._folds = DiscFold(self.edges_deg, disc_diameter_deg, every, threads=threads)
        self.rays = [0, 0]
        self._rounds = [0, 0]
        self.mono = np.zeros((BLOCKS, paths, 2, BINS))
        self.share = np.zeros((BLOCKS, paths))
        self.left_over = np.zeros(BLOCKS)
        self.colour = np.zeros((3, BLOCKS, paths, 2, BINS))

    def set_spectrum(self, irradiance) -> None:
        """Say what sunlight falls on the drop, before rays are added in colour: (n_wavelength,) [W m-2 nm-1]."""
        self._weights = np.asarray(irradiance)[:, None] * xyz_weights(self.wavelength_nm)

    def add_mono(self, rays: int) -> None:
        """Add rays at 550 nm, in pieces that run side by side; their number must not follow the threads."""
        found = [None] * _PIECES

        def one(piece):
            exponent = absorption_exponent(self.mono_index, MONO_NM, self.diameter_mm)
            seed = self._round_seed(0, piece)
            phase, left = trace_sphere_blocks(
                self.mono_index, paths=self.paths, rays=rays // _PIECES, bins=BINS, seed=seed, exponent=exponent
            )
            share = np.tensordot(ring_solid_angle_sr(self.edges_deg), phase.sum(axis=3), axes=1)
            found[piece] = self._fold(phase, self.wavelength_nm.size), share, left

        run_all(one, [(k,) for k in range(_PIECES)], threads=self._threads)
        mono, share, left = (np.mean(parts, axis=0) for parts in zip(*found, strict=True))
        mono = np.moveaxis(mono.reshape(BINS, BLOCKS, self.paths, 2), 0, -1)
        self.mono = self._merged(0, self.mono, mono, rays)
        self.share = self._merged(0, self.share, share, rays)
        self.left_over = self._merged(0, self.left_over, left, rays)
        self._count(0, rays)

    def add_colour(self, rays: int) -> None:
        """Add rays at every wavelength of the spectrum."""
        count = self.wavelength_nm.size
        total = np.zeros((3, BINS, BLOCKS * self.paths * 2))
        seed = self._round_seed(1, 0)
        shares = list(itertools.pairwise(int(v) for v in np.linspace(0, BINS, self._threads + 1)))
        for start in range(0, count, self._threads):
            some = range(start, min(start + self._threads, count))
            found = {}

            def one(w, found=found):
                exponent = absorption_exponent(self.index[w], self.wavelength_nm[w], self.diameter_mm)
                phase, _ = trace_sphere_blocks(
                    self.index[w], paths=self.paths, rays=rays, bins=BINS, seed=seed, dimension=w, exponent=exponent
                )
                found[w] = self._fold(phase, w)

            run_all(one, [(w,) for w in some], threads=self._threads)
            for w in some:
                adds = [(found[w], self._weights[w], low, high, total) for low, high in shares]
                run_all(add_channels, adds, threads=self._threads)
        total = np.moveaxis(total.reshape(3, BINS, BLOCKS, self.paths, 2), 1, -1)
        self.colour = self._merged(1, self.colour, total, rays)
        self._count(1, rays)

    def _fold(self, phase, w) -> np.ndarray:
        """(BINS, rows) of a traced (BINS, …), with the sun's disc."""
        rows = phase.reshape(BINS, -1)
        return rows if self._folds is None else self._folds.fold(rows, w)

    def _round_seed(self, kind, piece):
        return int(stream_state(self.seed, 4096 * self._rounds[kind] + piece, _ROUND_DIMENSION + kind))

    def _merged(self, kind, old, new, rays):
        return old + (new - old) * (rays / (self.rays[kind] + rays))

    def _count(self, kind, rays):
        self.rays[kind] += rays
        self._rounds[kind] += 1


def needed_bytes(paths: int, curtains: int) -> float:
    """Memory that estimates of that many curtains take at the peak, when rays in colour are merged [B]."""
    each = 8.0 * BLOCKS * paths * 2 * BINS
    # 550 nm and XYZ for each curtain; the new XYZ, their change and what is folded for one
    return _FIXED_BYTES + curtains * 4 * each + 8 * each


def jackknife(figure, *blocks):
    """A figure and its standard error from independent blocks.

    Parameters
    ----------
    figure : callable
        Of the means over blocks of each of `blocks`; gives an array of any shape.
    blocks : arrays of shape (BLOCKS, …)

    Returns
    -------
    value, standard_error : arrays of the figure's shape
    """
    totals = [b.sum(axis=0) for b in blocks]
    count = len(blocks[0])
    value = np.asarray(figure(*(t / count for t in totals)))
    without = np.array(
        [figure(*((t - b[i]) / (count - 1) for t, b in zip(totals, blocks, strict=True))) for i in range(count)]
    )
    spread = ((without - without.mean(axis=0)) ** 2).sum(axis=0)
    return value, np.sqrt(spread * (count - 1) / count)

"""Scattering tables of drops of many sizes, each drop by rays, Airy bows or waves."""

from __future__ import annotations

import dataclasses
import threading

import numpy as np

from raytrace.drops.bow_angle import fresnel
from raytrace.jit import run_all
from raytrace.optics.airy import prepare_airy
from raytrace.optics.angle_grids import MANY_SIZES, smooth_step
from raytrace.optics.drop_rows import (
    GLORY_FROM_DEG,
    GLORY_FULL_DEG,
    RowMaker,
    glory_share,
)
from raytrace.optics.fold import DiscFold
from raytrace.optics.methods import choose
from raytrace.optics.size_nodes import SizeNodes, refine
from raytrace.optics.sphere import absorption_exponent, checked_arguments, trace_sphere
from raytrace.optics.table import ScatteringTable

SIZE_TOLERANCE = 0.01
"""Doubling the sizes ends for an order when it moves it by no more than this share of its largest value after the sun's
disc, farther than `OFF_AXIS_DEG` from the sun and from the antisolar point. The finer average, nearer still, is taken.
"""
OFF_AXIS_DEG = 2.0
MOST_SIZES = 2048
GLORY_TOLERANCE = 0.05
"""The same for the sum of all orders near the antisolar point, for a single wavelength. It needs sizes of its own:
orders interfere in step with the size, faster than each order's own fringes. The many wavelengths of a picture, whose
fringes fall at other sizes, average that down about tenfold.
"""
_DISC_DEG = 0.533
# sizes a task of the search for the nodes
_CHUNK, _PIECES = 8, 4


def drop_table(
    index,
    wavelength_nm,
    spectrum,
    *,
    method: str = "auto",
    paths: int = 8,
    bins: int = 9_000,
    rays: int = 4_000_000,
    seed: int = 0,
    glory: bool = False,
    threads: int | None = None,
    on_done=None,
) -> ScatteringTable:
    """Scattering by the mean drop of a size spectrum.

    Parameters
    ----------
    index : (n_wavelength,) complex array
        Relative to air, n + ik.
    wavelength_nm : (n_wavelength,) array
        In air, rising [nm].
    spectrum : SizeSpectrum
    method : str
        One of `methods.METHODS`; see `methods.choose`. Rays that these leave orders to are traced by `trace_sphere`.
    paths, bins, rays, seed
        As for `trace_sphere`.
    glory : bool
        Let the exact sum of all orders, with their interference, stand for them near the antisolar point, in a row of
        its own.
    threads : int, optional
        All cores unless given; the result does not depend on it.
    on_done : callable, optional
        Called after each wavelength.

    Returns
    -------
    ScatteringTable
        Order p = 0 holds what is diffracted, which is told apart in `aureole_sr`.

    Raises
    ------
    ValueError
        If an argument is out of range; the message gives the range.
    """
    index, wavelength = _checked(index, wavelength_nm, spectrum, method, paths, rays, bins, seed, threads)
    edges = np.linspace(0.0, 180.0, bins + 1)
    # sizes are found at the first, the middle and the last wavelength
    probes = sorted({0, wavelength.size // 2, wavelength.size - 1})
    disc = DiscFold(edges, _DISC_DEG, wavelength[probes], threads=threads)
    nodes, moved = _nodes(index, wavelength, probes, disc, spectrum, edges, method, paths, threads)
    maker = RowMaker(edges, paths, method, nodes.diameter_mm.size, spectrum=spectrum)
    whole_nodes = None
    if glory:
        whole_nodes = _whole_nodes(index, wavelength, probes, disc, spectrum, maker, nodes, threads)
    phase, aureole = np.empty((paths, 2, wavelength.size, bins)), np.empty((2, wavelength.size, bins))
    whole, share = np.empty_like(aureole), np.empty((2, paths, wavelength.size))
    stop = threading.Event()

    def one_wavelength(w):
        rows = maker.rows(index[w], wavelength[w], nodes, whole=whole_nodes, stop=stop)
        phase[:, :, w], aureole[:, w], whole[:, w] = rows.phase_sr, rows.aureole_sr, rows.whole_sr
        share[0, :, w], share[1, :, w] = rows.rays_share, rows.rays_whole_share

    # the largest drops in waves cost most at short wavelengths, which come first
    run_all(one_wavelength, [(w,) for w in range(wavelength.size)], threads=threads, on_done=on_done, stop=stop)
    error, traced = np.zeros_like(phase), 0
    if share[0].any():
        diameter = spectrum.effective_mm()
        some = int(np.flatnonzero(share[0].any(axis=1))[-1]) + 1
        table = trace_sphere(
            index, paths=some, rays=rays, bins=bins, seed=seed, wavelength_nm=wavelength, diameter_mm=diameter,
            threads=threads,
        )  # fmt: skip
        traced = table.rays
        phase[:some] += share[0, :some, None, :, None] * table.phase_sr
        error[:some] = share[0, :some, None, :, None] * table.standard_error_sr
        whole += np.einsum("pw,pqwa->qwa", share[1, :some], table.phase_sr)
    left_over, absorbed = balance(index, wavelength, spectrum.effective_mm(), paths)
    table = ScatteringTable(
        phase_sr=phase,
        standard_error_sr=error,
        angle_edges_deg=edges,
        wavelength_nm=wavelength,
        index=index,
        left_over=left_over,
        absorbed=absorbed,
        method=method,
        rays=traced,
        seed=int(seed),
        aureole_sr=aureole,
        sizes=int(nodes.diameter_mm.size),
        size_error=float(moved.max()),
    )
    return _with_glory(table, whole) if glory else table


def _checked(index, wavelength_nm, spectrum, method, paths, rays, bins, seed, threads):
    """Index and wavelengths as arrays, once every argument is found to be in range."""
    choose(method, 1.0, 1, 1.0)
    if wavelength_nm is None:
        raise ValueError("wavelength_nm is missing; one wavelength for each index works")
    n, k, wavelength = checked_arguments(index, paths, rays, bins, seed, wavelength_nm, spectrum.effective_mm())
    if not (np.diff(wavelength) > 0).all():
        raise ValueError("wavelength_nm does not rise; rising values work")
    if threads is not None and threads < 1:
        raise ValueError(f"threads={threads!r} given; whole numbers from 1 work")
    return n + 1j * k, wavelength


def balance(index, wavelength_nm, diameter_mm: float, paths: int) -> tuple[np.ndarray, np.ndarray]:
    """Shares of the intercepted light left over after the last order, and absorbed until then, by ray optics.

    What `trace_sphere` counts, by Gauss's rule over the ring b^2 in place of random rays (Fresnel's formulas; van de
    Hulst 1957, section 12.21).

    Returns
    -------
    left_over, absorbed : (n_wavelength,) float64
    """
    node, weight = np.polynomial.legendre.leggauss(200)
    # b = sin(i): the share of light in a ring is d(b^2)
    i = 0.25 * np.pi * (node + 1.0)
    weight = 0.25 * np.pi * weight * np.sin(2.0 * i)
    left_over, absorbed = np.empty((2, len(index)))
    for w, n in enumerate(index):
        reflected = np.stack(fresnel(np.cos(i), n.real))
        cos_r = np.sqrt(1.0 - (np.sin(i) / n.real) ** 2)
        kept = np.exp(-absorption_exponent(n, wavelength_nm[w], diameter_mm) * cos_r)
        on = reflected * kept
        left = (1.0 - reflected) * on ** (paths - 1)
        taken = (1.0 - reflected) * (1.0 - kept) * (1.0 - on ** (paths - 1)) / (1.0 - on)
        left_over[w], absorbed[w] = (0.5 * np.sum(value * weight) for value in (left, taken))
    return left_over, absorbed


def _nodes(index, wavelength, probes, disc, spectrum, edges, method, paths, threads):
    """Sizes that are fine enough at the wavelengths of `probes`, for which `disc` is made."""
    middle = 0.5 * (edges[1:] + edges[:-1])
    off_axis = (middle > OFF_AXIS_DEG) & (middle < 180.0 - OFF_AXIS_DEG)
    # averages of few sizes are made on the grids of many, so that all rules see the same
    maker = RowMaker(edges, paths, method, MANY_SIZES, keep=True, scaled=False)
    # what rays bring is the same for all sizes; they serve at most p = 0 and 1, whose rays are known in closed form
    traced = [prepare_airy(index[w], edges, min(paths, 2)).ray_phase_sr.sum(axis=1) for w in probes]

    def average(nodes):
        pieces = range(0, nodes.diameter_mm.size, _CHUNK)
        out = np.zeros((len(probes), paths, edges.size - 1))
        # a few pieces at a time, so that memory does not grow with the number of sizes
        for start in range(0, len(pieces), _PIECES):
            some_pieces, found = pieces[start : start + _PIECES], {}

            def one(w, first, found=found):
                some = SizeNodes(*(part[first : first + _CHUNK] for part in nodes))
                rows = maker.rows(index[w], wavelength[w], some)
                found[w, first] = rows.phase_sr.sum(axis=1), rows.rays_share

            run_all(one, [(w, first) for w in probes for first in some_pieces], threads=threads)
            for k, w in enumerate(probes):
                for first in some_pieces:
                    light, share = found[w, first]
                    out[k] += light
                    out[k, : len(traced[k])] += share[: len(traced[k]), None] * traced[k]
        return out

    def seen(rows):
        """After the disc, without what is diffracted."""
        folded = []
        for k, light in enumerate(rows):
            light = np.concatenate([np.minimum(light[:1], traced[k][0]), light[1:]])
            folded.append(disc.fold_last(light, k))
        return np.stack(folded)

    def distance(coarse, fine):
        # foci on the axis are narrow and change with each size; sun and the observer's own shadow stand there
        coarse, fine = seen(coarse)[..., off_axis], seen(fine)[..., off_axis]
        peak = fine.max(axis=-1, keepdims=True)
        return np.max(np.abs(fine - coarse) / np.where(peak > 0, peak, 1.0), axis=(0, 2))

    # what is diffracted has rings of its own, finer than any order's fringes
    return refine(
        spectrum,
        average,
        distance,
        quantities=paths,
        tolerance=SIZE_TOLERANCE,
        most_steps=MOST_SIZES,
        finest=(0,),
    )


def _whole_nodes(index, wavelength, probes, disc, spectrum, maker, nodes, threads):
    """Sizes that are fine enough for the sum of all orders, at the wavelengths of `probes`."""
    seen = maker.angle_deg > GLORY_FULL_DEG
    # where most drops are too large for a glory, the others' is a small part of what is seen
    share = np.array([glory_share(nodes, wavelength[w]) for w in probes])

    def average(nodes):
        out = np.zeros((len(probes), maker.angle_deg.size))

        def one(k, w):
            out[k] = maker.whole(index[w], wavelength[w], nodes).sum(axis=0)

        run_all(one, list(enumerate(probes)), threads=threads)
        return out

    def distance(coarse, fine):
        coarse, fine = (
            np.stack([disc.fold_last(row, k)[seen] for k, row in enumerate(rows)]) for rows in (coarse, fine)
        )
        # rings are seen against what is beside them, so each angle counts by its own value too, by half as much
        scale = np.minimum(fine.max(axis=-1, keepdims=True), 2.0 * fine)
        return [np.max(share[:, None] * np.abs(fine - coarse) / np.where(scale > 0, scale, 1.0))]

    found, _ = refine(spectrum, average, distance, quantities=1, tolerance=GLORY_TOLERANCE, most_steps=MOST_SIZES)
    return found


def _with_glory(table: ScatteringTable, whole) -> ScatteringTable:
    """Near the antisolar point the exact sum in place of the orders, with a soft edge between them."""
    there = smooth_step(table.angle_deg, GLORY_FROM_DEG, GLORY_FULL_DEG)
    orders = table.phase_sr * (1.0 - there)
    return dataclasses.replace(
        table,
        phase_sr=orders,
        standard_error_sr=table.standard_error_sr * (1.0 - there),
        aureole_sr=table.aureole_sr * (1.0 - there),
        glory_sr=whole * there,
    )

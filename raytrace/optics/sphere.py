"""Monte Carlo ray tracing through a sphere: every ray feeds every Debye order."""

from __future__ import annotations

import itertools
import threading

import numpy as np

from raytrace import cast
from raytrace.cores import core_count
from raytrace.jit import run_all
from raytrace.optics.sphere_kernels import SphereBlock, add_blocks, finish_blocks, trace_sphere_block
from raytrace.optics.table import ScatteringTable, ring_solid_angle_sr
from raytrace.random_stream import stream_state

# Independent blocks behind each standard error. Fixed, so that the bytes do not depend on the number of threads. Strata
# are the finer the fewer blocks there are, and the error falls with the root of their number; 16 still give the error
# itself to 18 %.
BLOCKS = 16
METHOD = "rays"
_INDEX_RANGE = (1.0001, 4.0)
_LARGEST_K = 1e-3


def trace_sphere(
    index,
    *,
    paths: int = 8,
    rays: int = 4_000_000,
    bins: int = 9_000,
    seed: int = 0,
    wavelength_nm=None,
    diameter_mm: float | None = None,
    threads: int | None = None,
    on_done=None,
) -> ScatteringTable:
    """Trace rays of unpolarised parallel light through a sphere.

    Rays fall on the sphere's disc, one in each of many rings of equal area (jittered and stratified in b²). At every
    hit of the surface the ray deposits what leaves, weighted by Fresnel's formulas for each polarisation, in the
    histogram of its order, and what is reflected goes on: p = 0 external reflection, 1 straight through, 2 the primary
    bow, and so on. Directions after van de Hulst (1957), *Light Scattering by Small Particles*, section 12.21.

    Parameters
    ----------
    index : float or (n_wavelength,) array, real or complex
        Refractive index relative to air, n + ik with 1 < n <= 4 and 0 <= k <= 0.001 (k enters the absorption along
        the chords only, not Fresnel's formulas).
    paths : int
        Orders traced, p = 0 to paths - 1.
    rays : int
        Incident rays a wavelength, rounded up to whole blocks.
    bins : int
        Bins of the scattering angle over 0 to 180 degrees.
    seed : int
    wavelength_nm : (n_wavelength,) array, optional
        Wavelengths in air; needed for absorption and for the sun's disc [nm].
    diameter_mm : float, optional
        Diameter of the drop; needed where k > 0 [mm].
    threads : int, optional
        All cores unless given; the result does not depend on it.
    on_done : callable, optional
        Called after each wavelength.

    Returns
    -------
    ScatteringTable

    Raises
    ------
    ValueError
        If an argument is out of range; the message gives the range.
    """
    n, k, wavelength_nm = checked_arguments(index, paths, rays, bins, seed, wavelength_nm, diameter_mm)
    per_block = -(-rays // BLOCKS)
    edges = np.linspace(0.0, 180.0, bins + 1)
    # half the power of unpolarised light is in each polarisation
    per_sr = 0.5 / (per_block * ring_solid_angle_sr(edges))
    phase = np.empty((paths, 2, n.size, bins))
    error = np.empty_like(phase)
    totals = np.empty((n.size, 2))
    stop = threading.Event()
    # a thread to each wavelength where there are enough of them, else all threads to the blocks of one
    if threads is not None and threads < 1:
        raise ValueError(f"threads={threads!r} given; whole numbers from 1 work")
    cores = min(threads or core_count(), BLOCKS)
    within = 1 if n.size >= cores else cores

    def one_wavelength(w):
        exponent = absorption_exponent(1j * k[w], wavelength_nm[w], diameter_mm) if k[w] > 0 else 0.0
        blocks = _blocks(n[w], exponent, per_block, paths, bins, seed, w)
        # a single wavelength is written where it belongs; of several each is a slice with gaps
        out = [
            values.reshape(paths, 2, bins) if n.size == 1 else np.empty((paths, 2, bins)) for values in (phase, error)
        ]
        totals[w] = _trace_blocks(blocks, per_sr, *out, within, stop)
        if n.size > 1:
            phase[:, :, w], error[:, :, w] = out

    if within == 1:
        _compile(paths)
        run_all(one_wavelength, [(w,) for w in range(n.size)], threads=threads, on_done=on_done, stop=stop)
    else:
        for w in range(n.size):
            one_wavelength(w)
            if on_done:
                on_done()
    return ScatteringTable(
        phase_sr=phase,
        standard_error_sr=error,
        angle_edges_deg=edges,
        wavelength_nm=wavelength_nm,
        index=n + 1j * k,
        left_over=totals[:, 0],
        absorbed=totals[:, 1],
        method=METHOD,
        rays=per_block * BLOCKS,
        seed=int(seed),
    )


def trace_sphere_blocks(
    index: complex, *, paths: int, rays: int, bins: int, seed: int = 0, dimension: int = 0, exponent: float = 0.0
) -> tuple[np.ndarray, np.ndarray]:
    """Trace one wavelength on this thread and keep the blocks apart, for figures that need their scatter.

    Parameters
    ----------
    index : complex
        Refractive index relative to air.
    paths, rays, bins, seed : int
        As for `trace_sphere`.
    dimension : int
        Number of the wavelength, which picks the random stream.
    exponent : float
        4 k pi D / wavelength: absorption along a diameter would be 1 - exp(-exponent).

    Returns
    -------
    phase_sr : (bins, BLOCKS, paths, 2) float64
        Angles outermost, as the fold with the sun's disc takes them [sr⁻¹].
    left_over : (BLOCKS,) float64
        Share left over after the last order.
    """
    per_block = -(-rays // BLOCKS)
    per_sr = 0.5 / (per_block * ring_solid_angle_sr(np.linspace(0.0, 180.0, bins + 1)))
    rows, balance = np.empty((BLOCKS, paths, bins, 2)), np.empty((BLOCKS, 2, 2))
    blocks = _blocks(index.real, exponent, per_block, paths, bins, seed, dimension)
    run_all(trace_sphere_block, list(zip(blocks, rows, balance, strict=True)), threads=1)
    phase = np.empty((bins, BLOCKS, paths, 2))
    np.multiply(np.moveaxis(rows, 2, 0), per_sr[:, None, None, None], out=phase)
    return phase, balance[:, 0].sum(axis=1) / (2.0 * per_block)


def _blocks(n, exponent, per_block, paths, bins, seed, dimension):
    return [
        SphereBlock(float(n), float(exponent), per_block, int(paths), int(bins), stream_state(seed, b, dimension))
        for b in range(BLOCKS)
    ]


def absorption_exponent(index, wavelength_nm: float, diameter_mm: float) -> float:
    """4 k pi D / wavelength: the exponent of absorption along a diameter of the drop."""
    return float(4.0 * np.imag(index) * np.pi * diameter_mm * 1e6 / wavelength_nm)


def _trace_blocks(blocks, per_sr, mean, error, threads, stop):
    """Trace blocks, one a thread at a time so that histograms stay in the processor's cache, and add them in order.

    Parameters
    ----------
    mean, error : (paths, 2, bins) float64
        Written [sr⁻¹].

    Returns
    -------
    (2,) float64
        Shares left over and absorbed.
    """
    paths, bins = blocks[0].paths, blocks[0].bins
    rows = np.empty((threads, paths, bins, 2))
    balance = np.empty((len(blocks), 2, 2))
    sums = np.empty((3, paths, bins, 2))
    flat_rows, flat_sums = rows.reshape(threads, -1), sums.reshape(3, -1)
    shares = list(itertools.pairwise(int(v) for v in np.linspace(0, flat_sums.shape[1], threads + 1)))
    for start in range(0, len(blocks), threads):
        if stop.is_set():
            break
        some = blocks[start : start + threads]
        tasks = [(block, rows[b], balance[start + b]) for b, block in enumerate(some)]
        run_all(trace_sphere_block, tasks, threads=threads)
        adds = [(flat_rows[: len(some)], start > 0, low, high, *flat_sums) for low, high in shares]
        run_all(add_blocks, adds, threads=threads)
    finish_blocks(len(blocks), *sums, per_sr, mean, error)
    return balance.sum(axis=(0, 2)) / (2.0 * len(blocks) * blocks[0].rays)


def _compile(paths):
    """Compile the kernels once, before several threads come to them."""
    if not (trace_sphere_block.signatures and add_blocks.signatures and finish_blocks.signatures):
        tiny = [SphereBlock(1.333, 0.0, 1, int(paths), 2, stream_state(0, b)) for b in range(2)]
        _trace_blocks(tiny, np.ones(2), *np.empty((2, paths, 2, 2)), 1, threading.Event())


def checked_arguments(index, paths, rays, bins, seed, wavelength_nm, diameter_mm):
    """Real and imaginary part of the index and the wavelengths as arrays; ValueError as `trace_sphere` says."""
    index = np.atleast_1d(np.asarray(index, dtype=np.complex128))
    n, k = cast.f64(index.real, name="index", ndim=1), cast.f64(index.imag, name="index", ndim=1)
    if n.size == 0:
        raise ValueError("no index given; one or more work")
    if not ((n >= _INDEX_RANGE[0]) & (n <= _INDEX_RANGE[1])).all():
        raise ValueError(f"index {n.min():g} to {n.max():g} given; rays are traced for {_INDEX_RANGE[0]} to 4")
    if not ((k >= 0) & (k <= _LARGEST_K)).all():
        raise ValueError(f"imaginary part of the index from {k.min():g} to {k.max():g} given; 0 to {_LARGEST_K} works")
    for name, value, low, high in (
        ("paths", paths, 1, 64),
        ("rays", rays, BLOCKS, 10**12),
        ("bins", bins, 2, 10**6),
        ("seed", seed, 0, 2**64 - 1),
    ):
        if not (isinstance(value, (int, np.integer)) and low <= value <= high):
            raise ValueError(f"{name}={value!r} given; whole numbers from {low} to {high} work")
    if wavelength_nm is not None:
        wavelength_nm = cast.f64(np.atleast_1d(wavelength_nm), name="wavelength_nm", ndim=1)
        if wavelength_nm.shape != n.shape:
            raise ValueError(f"{wavelength_nm.size} wavelengths given for {n.size} indices; one each works")
        if not (wavelength_nm > 0).all():
            raise ValueError("wavelength_nm has values that are not above zero")
    if diameter_mm is not None and not (np.isfinite(diameter_mm) and diameter_mm > 0):
        raise ValueError(f"diameter_mm={diameter_mm!r} given; a number above zero works")
    if (k > 0).any() and (wavelength_nm is None or diameter_mm is None):
        raise ValueError("an absorbing index needs wavelength_nm and diameter_mm")
    return n, k, wavelength_nm

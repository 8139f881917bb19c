"""Bows by a uniform Airy approximation: ray optics with the diffraction that its own caustic asks for.

Airy's classical bow holds at the bow ray's angle only. Here the two rays that meet at an angle keep their own
amplitudes, Fresnel factors and paths, and are joined by Airy's function and its derivative (Chester, Friedman and
Ursell 1957; Berry 1966 and Nussenzveig 1969 for scattering). At the bow ray this is Airy's bow; away from it it becomes
the sum of the two rays, and on the dark side that of the complex ray that is left there. Light that the surface leads
on round the drop beyond the grazing ray, and the foci on the axis, are not in it.
"""

from __future__ import annotations

import math
from typing import NamedTuple

import numpy as np
from scipy.special import airy

from raytrace import cast
from raytrace.drops.bow_angle import bow_angle
from raytrace.optics import airy_kernels as kernels
from raytrace.optics.table import ring_solid_angle_sr

_INDEX_RANGE = (1.0001, 4.0)
_LARGEST_K = 1e-3
_SIZE_RANGE = (1.0, 1e6)
_MOST_PATHS = 64
# Widest step between two nodes' cells [deg]: fringes are shown down to 0.06 deg
_CELL_DEG = 0.02
# On the axis itself angles are moved this far from it, where a central ray's spread has its digits [rad]
_OFF_AXIS = 1e-7


class PreparedAiry(NamedTuple):
    """What depends on the index and the angles alone, so that a drop's size costs Airy functions only.

    Attributes
    ----------
    index : float
        Real part, relative to air.
    ray_phase_sr : (paths, 2, bins) float64
        Orders without a bow ray, in full; 0 for others [sr⁻¹].
    ray_chord : (paths, bins) float64
        Cosine of refraction of these, for absorption.
    starts : (2 paths + 1,) int64
        Where the bright and the dark side of each order begin in the next two.
    bin_of : (m,) int32
        Bin of each pair of rays.
    pairs : (m, 9) float64
        See `airy_kernels.FIELDS`.
    """

    index: float
    ray_phase_sr: np.ndarray
    ray_chord: np.ndarray
    starts: np.ndarray
    bin_of: np.ndarray
    pairs: np.ndarray


def airy_bow(index: complex, size_parameter: float, angle_deg: np.ndarray, order: int) -> np.ndarray:
    """Scattering amplitudes of one bow by the uniform Airy approximation.

    Parameters
    ----------
    index : complex
        Refractive index relative to air, n + ik with n below order + 1 and 0 <= k <= 0.001; k enters the absorption
        along the chords only.
    size_parameter : float
        x = 2 pi a / wavelength, 1 to 1e6.
    angle_deg : (n_angle,) array_like
        Scattering angles, 0 to 180 [deg].
    order : int
        Order k of the bow, 1 primary, 2 secondary; the Debye order is p = k + 1.

    Returns
    -------
    (2, n_angle) complex128
        Dimensionless amplitudes S of Bohren and Huffman (1983), section 4.4 (time dependence exp(-i omega t)),
        perpendicular (S1) and parallel (S2). |S|^2 / (pi x^2) is the power per steradian, over the power that the
        drop's cross-section intercepts, for light of that polarisation [sr⁻¹]. Where several deviations lead to one
        angle, their amplitudes are added.

    Raises
    ------
    ValueError
        If an argument is out of range, or an angle is exactly 0 or 180 and rays off the axis meet there, where ray
        optics has a focus; the message says what works.

    Notes
    -----
    C. Chester, B. Friedman and F. Ursell, *Proc. Camb. Phil. Soc.* 53 (1957) 599, eq. 5.1 ff.; H. C. van de Hulst,
    *Light Scattering by Small Particles* (1957), sections 12.21 and 12.22, for a ray's amplitude, path and focal lines.
    On the dark side sin(theta) is not let below 1/x: closer to the axis its light is not focused any more.

    Against the Debye series at n = 1.333, round the main maximum, both polarisations: the primary's power is low by 5 %
    at x = 100, 0.8 % at 300, 0.1 % at 1000; the secondary's by 30 to 35 %, 9 %, 1.4 %, and 0.2 % at 3000; the third
    order's by 7 % at 1000 and 0.1 % at 10 000. What is missed is the grazing ray's edge, sharp here and blurred by
    waves over some x^(-1/3): a bow is sound where its main maximum keeps away from the grazing ray. The nearer n is to
    1 and the higher the order, the larger must the drop be.
    """
    n, k = _index(index)
    x = _size(size_parameter)
    bow = bow_angle(n, order)
    p = int(order) + 1
    angle = cast.f64(np.atleast_1d(angle_deg), name="angle_deg", ndim=1)
    if angle.size and not ((angle >= 0) & (angle <= 180)).all():
        raise ValueError(f"angle_deg from {angle.min():g} to {angle.max():g} given; 0 to 180 works")
    _refuse_foci(n, p, float(np.radians(bow.deviation_deg)), angle)
    theta = np.clip(np.radians(angle), _OFF_AXIS, np.pi - _OFF_AXIS)
    rank = np.argsort(theta, kind="stable")
    where, pairs, bright = _pairs_of_order(n, p, theta[rank])
    where = rank[where]
    out = np.zeros((2, angle.size), dtype=np.complex128)
    # which side of the axis and which turn, from the deviation: D = +-theta + 2 pi m
    z = pairs.fields[:, kernels.Z]
    value, slope = airy(-(x ** (2 / 3)) * z)[:2]
    focal = -np.pi / 2 * (p - 1) - np.pi / 4 * pairs.side + np.pi * (pairs.turn + 1)
    sine = np.sin(theta[where])
    sine[bright:] = np.maximum(sine[bright:], min(1 / x, 1.0))
    common = x ** (7 / 6) * np.sqrt(np.pi / sine) * np.exp(1j * (x * pairs.fields[:, kernels.PATH] + focal))
    for q, (u, v) in enumerate(_absorbed(pairs.fields, 2 * p * k * x)):
        np.add.at(out[q], where, common * (u * value - 1j * x ** (-1 / 3) * v * slope))
    return out


def airy_phase(index: complex, size_parameter: float, angle_edges_deg: np.ndarray, paths: int = 8) -> np.ndarray:
    """Light of one drop by Debye order and scattering angle: ray optics, with uniform Airy bows.

    Parameters
    ----------
    index : complex
        Refractive index relative to air, n + ik with 1 < n <= 4 and 0 <= k <= 0.001.
    size_parameter : float
        x = 2 pi a / wavelength, 1 to 1e6.
    angle_edges_deg : (bins + 1,) array_like
        Edges of the bins of the scattering angle, rising within 0 to 180 [deg].
    paths : int
        Orders p = 0 to paths - 1.

    Returns
    -------
    (paths, 2, bins) float64
        As `ScatteringTable.phase_sr`: for unpolarised light, mean over each bin's solid angle [sr⁻¹].

    Raises
    ------
    ValueError
        If an argument is out of range; the message gives the range.

    Notes
    -----
    Light of one order that reaches one angle by several deviations is added by intensity, and so are the two rays of a
    bow where their fringes are finer than the sun's disc lets through: the interference is shown in full down to a
    period 360 / (x |b1 - b2|) of 0.12 deg and fades out to 0.06 deg, the bow's main maximum excepted.
    """
    _, k = _index(index)
    return airy_phase_prepared(prepare_airy(index, angle_edges_deg, paths), size_parameter, k)


def prepare_airy(index: complex, angle_edges_deg: np.ndarray, paths: int = 8) -> PreparedAiry:
    """Do for one index and set of bins all that does not depend on the drop's size.

    Parameters
    ----------
    index : complex
        As of `airy_phase`; of complex ones the real part.
    angle_edges_deg, paths
        As of `airy_phase`.

    Returns
    -------
    PreparedAiry
        About 16 MB for 9000 bins and 8 orders.

    Raises
    ------
    ValueError
        As `airy_phase`.
    """
    n, _ = _index(index)
    if not (isinstance(paths, (int, np.integer)) and 1 <= paths <= _MOST_PATHS):
        raise ValueError(f"paths={paths!r} given; whole numbers from 1 to {_MOST_PATHS} work")
    edges = cast.f64(angle_edges_deg, name="angle_edges_deg", ndim=1)
    if edges.size < 2 or not (np.diff(edges) > 0).all() or edges[0] < 0 or edges[-1] > 180:
        raise ValueError("angle_edges_deg must rise from 0 or more to 180 or less, two values at least")
    theta, bins, weight = _nodes(edges)
    phase, chord = np.zeros((paths, 2, edges.size - 1)), np.ones((paths, edges.size - 1))
    sections, bin_of, starts = [], [], [0]
    for p in range(paths):
        if p < 2 or n >= p:
            phase[p], chord[p] = _single_ray_order(n, p, theta, bins, weight, edges.size - 1)
            starts += [starts[-1]] * 2
            continue
        where, pairs, bright = _pairs_of_order(n, p, theta)
        pairs.fields[:, kernels.U_S : kernels.V_P + 1] *= np.sqrt(weight[where])[:, None]
        sections.append(pairs.fields)
        bin_of.append(bins[where])
        starts += [starts[-1] + bright, starts[-1] + where.size]
    return PreparedAiry(
        index=n,
        ray_phase_sr=phase,
        ray_chord=chord,
        starts=np.array(starts, dtype=np.int64),
        bin_of=np.concatenate([np.empty(0, np.int32), *bin_of]),
        pairs=np.concatenate([np.empty((0, kernels.FIELDS)), *sections]),
    )


def airy_phase_prepared(
    prepared: PreparedAiry, size_parameter: float, absorption_index: float = 0.0, *, out: np.ndarray | None = None
) -> np.ndarray:
    """What `airy_phase` gives, for one drop size after `prepare_airy`.

    Parameters
    ----------
    prepared : PreparedAiry
    size_parameter : float
        1 to 1e6.
    absorption_index : float
        Imaginary part k of the refractive index, 0 to 0.001.
    out : (paths, 2, bins) float64, optional
        Where to write.

    Returns
    -------
    (paths, 2, bins) float64
        [sr⁻¹]

    Raises
    ------
    ValueError
        If an argument is out of range.
    """
    x = _size(size_parameter)
    _, k = _index(complex(prepared.index, absorption_index))
    out = np.empty_like(prepared.ray_phase_sr) if out is None else out
    out[:] = prepared.ray_phase_sr
    if k > 0:
        p = np.arange(out.shape[0])[:, None]
        out *= np.exp(-4.0 * k * x * p * prepared.ray_chord)[:, None]
    size = kernels.AirySize(x, 2.0 * k * x)
    kernels.add_pairs(size, prepared.starts, prepared.bin_of, prepared.pairs, out)
    return out


class _Pairs(NamedTuple):
    """Pairs of rays, with what deviation D = side * theta + 2 pi turn they have."""

    fields: np.ndarray
    side: np.ndarray
    turn: np.ndarray


def _pairs_of_order(n, p, theta):
    """All pairs of rays of a bow's order that leave at the given angles.

    Parameters
    ----------
    theta : (m,) float64
        Rising within 0 to pi, ends excluded [rad].

    Returns
    -------
    where : (m',) int64
        Which angle; the bright side, away from the bow, then the dark side, likewise.
    pairs : _Pairs
    bright : int
        How many are bright.
    """
    least = kernels.ray(kernels.bow_incidence(n, p)[0], n, p)[0]
    lowest, top = max(least - np.pi, 0.0), max((p - 1) * np.pi, _graze(n, p))
    half_turns = range(int(lowest / np.pi), int(top / np.pi) + 1)
    # rising deviations: each other half turn runs backwards through the angles
    rising, falling = np.arange(theta.size), np.arange(theta.size)[::-1]
    where = np.concatenate([falling if h % 2 else rising for h in half_turns])
    side = np.repeat([-1.0 if h % 2 else 1.0 for h in half_turns], theta.size)
    turn = np.repeat([(h + 1) // 2 for h in half_turns], theta.size).astype(np.float64)
    deviation = side * theta[where] + 2 * np.pi * turn
    first, mid, last = np.searchsorted(deviation, [lowest, least, top])
    fields = np.zeros((last - first, kernels.FIELDS))
    bright = last - mid
    kernels.bright_pairs(n, p, deviation[mid:last], fields[:bright])
    found = kernels.dark_pairs(n, p, np.ascontiguousarray(deviation[first:mid][::-1]), fields[bright:])
    order = np.concatenate([np.arange(mid, last), np.arange(first, mid)[::-1][:found]])
    return where[order], _Pairs(fields[: bright + found], side[order], turn[order]), bright


def _single_ray_order(n, p, theta, bins, weight, count):
    """Means over bins of an order of which no two rays meet, and the mean cosine of refraction."""
    if p == 0:
        # D = 2 i - pi: sin i cos i / |dD/di| = sin(theta) / 4
        i = 0.5 * (np.pi - theta)
        cos_i, cos_r = np.cos(i), np.sqrt(1 - (np.sin(i) / n) ** 2)
        r_s, r_p = (cos_i - n * cos_r) / (cos_i + n * cos_r), (n * cos_i - cos_r) / (n * cos_i + cos_r)
        rays = np.stack([0.25 * np.sin(theta) * r_s**2, 0.25 * np.sin(theta) * r_p**2, cos_r], axis=1)
    else:
        # from (p - 1) pi, on the axis, to the grazing ray less than half a turn on
        side, base = (1.0, (p - 1) * np.pi) if p % 2 else (-1.0, p * np.pi)
        deviation = side * theta + base
        lit = deviation < _graze(n, p)
        theta, bins, weight = theta[lit], bins[lit], weight[lit]
        rays = np.empty((theta.size, 3))
        kernels.single_rays(n, p, deviation[lit], rays)
    phase = np.stack([np.bincount(bins, weight * rays[:, q] / (2 * np.pi), count) for q in range(2)])
    chord = np.bincount(bins, rays[:, 2], count) / np.maximum(np.bincount(bins, minlength=count), 1)
    return phase, chord


def _nodes(edges_deg):
    """Two Gauss nodes in each cell of at most 0.02 deg, with what share of a bin's solid angle belongs to each.

    Returns
    -------
    theta : (m,) float64
        Rising [rad].
    bins : (m,) int32
    weight : (m,) float64
        Times I sin(theta), summed over a bin: the mean of I over its solid angle.
    """
    cells = np.ceil(np.diff(edges_deg) / _CELL_DEG - 1e-6).astype(np.int64)
    bins = np.repeat(np.arange(cells.size, dtype=np.int32), cells)
    width = np.radians(np.diff(edges_deg) / cells)[bins]
    within = np.arange(bins.size) - np.repeat(np.cumsum(cells) - cells, cells)
    middle = np.radians(edges_deg[:-1])[bins] + (within + 0.5) * width
    theta = (middle[:, None] + width[:, None] * np.array([-0.5, 0.5]) / math.sqrt(3)).ravel()
    weight = np.pi * width / ring_solid_angle_sr(edges_deg)[bins]
    return theta, np.repeat(bins, 2), np.repeat(weight, 2)


def _absorbed(fields, kappa):
    """U and V of both polarisations with what the chords absorb: amplitudes times exp(-kappa cos r)."""
    z = fields[:, kernels.Z]
    straight = kappa * fields[:, kernels.CHORD_ODD]
    root = np.sqrt(np.maximum(np.abs(z), 1e-300))
    a = straight * root
    # on the bright side cosh and sinh, over exp(a), which the outer ray's shorter chord gives back
    even = np.where(z > 0, 0.5 * (1 + np.exp(-2 * a)), np.cos(a))
    odd = np.where(a > 1e-8, np.where(z > 0, -0.5 * np.expm1(-2 * a), np.sin(a)) / root, straight)
    kept = np.exp(-kappa * fields[:, kernels.CHORD] + np.where(z > 0, a, 0))
    for u, v in ((kernels.U_S, kernels.V_S), (kernels.U_P, kernels.V_P)):
        u, v = fields[:, u], fields[:, v]
        yield kept * (u * even - v * z * odd), kept * (v * even - u * odd)


def _graze(n, p):
    """Deviation of the grazing ray [rad]."""
    return p * np.pi - 2 * p * math.asin(1 / n)


def _refuse_foci(n, p, least, angle):
    """Exactly on the axis rays off it would have an infinite amplitude."""
    graze, axis = _graze(n, p), (p - 1) * np.pi
    for exact, odd in ((0.0, 0), (180.0, 1)):
        if not (angle == exact).any():
            continue
        for half_turns in range(odd, 2 * p, 2):
            deviation = half_turns * np.pi
            if least <= deviation < max(graze, axis) and not (half_turns == p - 1 and graze <= axis):
                raise ValueError(
                    f"angle_deg={exact:g} given; there rays of order p={p} that hit a drop of index {n:g} off its axis "
                    "have a focus, where ray optics fails; angles beside it work"
                )


def _index(index):
    n, k = float(np.real(index)), float(np.imag(index))
    if not _INDEX_RANGE[0] <= n <= _INDEX_RANGE[1]:
        raise ValueError(f"index {n:g} given; {_INDEX_RANGE[0]} to {_INDEX_RANGE[1]:g} works")
    if not 0 <= k <= _LARGEST_K:
        raise ValueError(f"imaginary part {k:g} of the index given; 0 to {_LARGEST_K} works")
    return n, k


def _size(size_parameter):
    x = float(size_parameter)
    if not _SIZE_RANGE[0] <= x <= _SIZE_RANGE[1]:
        raise ValueError(f"size_parameter={x:g} given; {_SIZE_RANGE[0]:g} to {_SIZE_RANGE[1]:g} works")
    return x

"""Slow, obvious twins of the optics: the same quantities by another way, for the tests to compare with.

Nothing here imports the project's kernels; formulas are written out again from the sources that they cite.
"""

from __future__ import annotations

import math

import numpy as np
from numpy.polynomial.polynomial import polyval

MASK = 2**64 - 1


def splitmix64(state: int, count: int) -> list[int]:
    """SplitMix64 in Python's unbounded whole numbers (Steele, Lea and Flood 2014, figure 16)."""
    out = []
    for _ in range(count):
        state = (state + 0x9E3779B97F4A7C15) & MASK
        z = state
        z = ((z ^ (z >> 30)) * 0xBF58476D1CE4E5B9) & MASK
        z = ((z ^ (z >> 27)) * 0x94D049BB133111EB) & MASK
        out.append(z ^ (z >> 31))
    return out


def splitmix64_uniform(state: int, count: int) -> np.ndarray:
    """The same in arrays, the upper 53 bits over 2^53."""
    z = np.uint64(state) + np.arange(1, count + 1, dtype=np.uint64) * np.uint64(0x9E3779B97F4A7C15)
    z = (z ^ (z >> np.uint64(30))) * np.uint64(0xBF58476D1CE4E5B9)
    z = (z ^ (z >> np.uint64(27))) * np.uint64(0x94D049BB133111EB)
    z = z ^ (z >> np.uint64(31))
    return (z >> np.uint64(11)).astype(np.float64) / 2.0**53


def fresnel_power(cos_i, cos_r, n):
    """Reflectance of a surface by polarisation (Born and Wolf, Principles of Optics, section 1.5)."""
    r_s = ((cos_i - n * cos_r) / (cos_i + n * cos_r)) ** 2
    r_p = ((n * cos_i - cos_r) / (n * cos_i + cos_r)) ** 2
    return r_s, r_p


def order_weight(reflectance, kept, p):
    """Share of a ray's power that leaves in order p, where `kept` is what one chord lets through."""
    if p == 0:
        return reflectance
    return (1 - reflectance) ** 2 * reflectance ** (p - 1) * kept**p


def numpy_trace(n: float, uniforms: np.ndarray, paths: int, bins: int, absorption: float = 0.0) -> np.ndarray:
    """Plain vectorised Monte Carlo of one block, from given random numbers.

    Returns
    -------
    (paths, 2, bins) array
        Power in each bin, one unit a ray and polarisation.
    """
    rays = uniforms.size
    b2 = np.minimum((np.arange(rays) + uniforms) / rays, 1.0)
    b = np.sqrt(b2)
    cos_i, cos_r = np.sqrt(1 - b2), np.sqrt(1 - b2 / n**2)
    i, r = np.arcsin(b), np.arcsin(b / n)
    reflectances = fresnel_power(cos_i, cos_r, n)
    kept = np.exp(-absorption * cos_r) if absorption else 1.0
    out = np.empty((paths, 2, bins))
    weights = list(reflectances)
    deviation = np.pi - 2 * i
    for p in range(paths):
        if p > 0:
            deviation = (2 * (i - r) + (p - 1) * (np.pi - 2 * r)) % (2 * np.pi)
            deviation = np.where(deviation > np.pi, 2 * np.pi - deviation, deviation)
        where = np.clip((deviation * (bins / np.pi)).astype(np.int64), 0, bins - 1)
        for q in range(2):
            if p == 1:
                weights[q] = (1 - reflectances[q]) ** 2 * kept
            elif p > 1:
                weights[q] = weights[q] * reflectances[q] * kept
            out[p, q] = np.bincount(where, weights[q], bins)
    return out


def quadrature_trace(n: float, paths: int, bins: int, absorption: float = 0.0, cells: int = 400_000) -> np.ndarray:
    """Exact power in each bin, by quadrature over the angle of incidence; no random numbers.

    The angle of incidence is cut in cells. In each, the deviation is taken as straight and its power is dealt to the
    one or two bins that the cell reaches, so the error is of second order in a cell's width.

    Returns
    -------
    (paths, 2, bins) array
        Share of the incident power of each polarisation.
    """
    i_edge = np.linspace(0.0, np.pi / 2, cells + 1)
    i = 0.5 * (i_edge[1:] + i_edge[:-1])
    r_edge, r = np.arcsin(np.sin(i_edge) / n), np.arcsin(np.sin(i) / n)
    # d(b^2), exact over the cell
    power = np.diff(np.sin(i_edge) ** 2)
    reflectances = fresnel_power(np.cos(i), np.cos(r), n)
    kept = np.exp(-absorption * np.cos(r))
    out = np.empty((paths, 2, bins))
    for p in range(paths):
        edge = np.pi - 2 * i_edge if p == 0 else 2 * (i_edge - r_edge) + (p - 1) * (np.pi - 2 * r_edge)
        edge = edge * (bins / np.pi)
        low, high = np.minimum(edge[1:], edge[:-1]), np.maximum(edge[1:], edge[:-1])
        turns = int(max(high.max(), bins) // (2 * bins)) + 1
        first = np.clip(np.floor(low + 1e-9).astype(np.int64), 0, None)
        second = np.floor(high - 1e-9).astype(np.int64)
        assert (second - first <= 1).all(), "a cell reaches more than two bins: more cells are needed"
        above = np.where(second > first, (high - second) / np.maximum(high - low, 1e-300), 0.0)
        for q in range(2):
            w = power * order_weight(reflectances[q], kept, p)
            unfolded = np.bincount(first, w * (1 - above), 2 * bins * turns)
            unfolded += np.bincount(np.maximum(second, 0), w * above, 2 * bins * turns)
            turn = unfolded.reshape(turns, 2 * bins).sum(axis=0)
            out[p, q] = turn[:bins] + turn[bins:][::-1]
    return out


def edge_cumulants(n: float, paths: int, bins: int, rays: int, cells: int = 400_000) -> np.ndarray:
    """Second to fourth cumulant of each bin of one block of stratified rays, absorption left out.

    A ring of the disc that lies wholly in a bin always gives the bin its one ray. A ring that is cut by an edge of the
    bin gives a ray of weight w to one side with the chance f and to the other with 1 - f: a Bernoulli variable, whose
    cumulants are w^2 f (1 - f), w^3 f (1 - f) (1 - 2 f) and w^4 f (1 - f) (1 - 6 f (1 - f)). Rings are independent, so
    the cumulants add. That the weight varies a little within a ring is left out.

    Returns
    -------
    (3, paths, 2, bins) array
        For power in units of one ray; nan where one ring is cut by several edges, whose shares are not independent.
    """
    i_edge = np.linspace(0.0, np.pi / 2, cells + 1)
    r_edge = np.arcsin(np.sin(i_edge) / n)
    ring = np.sin(i_edge) ** 2 * rays
    reflectances = fresnel_power(np.cos(i_edge), np.cos(r_edge), n)
    out = np.zeros((3, paths, 2, bins))
    for p in range(paths):
        x = np.pi - 2 * i_edge if p == 0 else 2 * (i_edge - r_edge) + (p - 1) * (np.pi - 2 * r_edge)
        x = x * (bins / np.pi)
        edge = np.floor(np.maximum(x[1:], x[:-1]))
        # where deviations fold, at whole multiples of pi, both sides are one bin
        cut = np.flatnonzero((edge > np.minimum(x[1:], x[:-1])) & (edge % bins != 0))
        edge = edge[cut]
        at = ring[cut] + (edge - x[cut]) / (x[cut + 1] - x[cut]) * (ring[cut + 1] - ring[cut])
        # the share of the cut ring that is on the upper side of the edge
        f = np.where(x[cut + 1] > x[cut], np.ceil(at) - at, at - np.floor(at))
        v = f * (1 - f)
        _, ring_of, cuts = np.unique(np.floor(at), return_inverse=True, return_counts=True)
        several = cuts[ring_of] > 1
        for q in range(2):
            w = order_weight(reflectances[q][cut], 1.0, p)
            for side, sign in ((edge, 1.0), (edge - 1, -1.0)):
                k = side.astype(np.int64) % (2 * bins)
                k = np.where(k < bins, k, 2 * bins - 1 - k)
                for c, cumulant in enumerate((w**2 * v, sign * w**3 * v * (1 - 2 * f), w**4 * v * (1 - 6 * v))):
                    np.add.at(out[c, p, q], k, np.where(several, np.nan, cumulant))
    return out


def share_of_order(n: float, p: int, absorption: float = 0.0) -> tuple[float, float]:
    """Share of the incident power of each polarisation that leaves in order p, by adaptive quadrature."""
    return tuple(_over_disc(n, lambda R, cos_r: order_weight(R, math.exp(-absorption * cos_r), p)))


def absorbed_share(n: float, paths: int, absorption: float) -> tuple[float, float]:
    """Share that the chords before the last traced exit absorb, by adaptive quadrature."""

    def taken(R, cos_r):
        kept = math.exp(-absorption * cos_r)
        return (1 - R) * (1 - kept) * sum((R * kept) ** j for j in range(paths - 1))

    return tuple(_over_disc(n, taken))


def _over_disc(n, function):
    from scipy.integrate import quad

    def integrand(i, q):
        cos_r = math.sqrt(1 - (math.sin(i) / n) ** 2)
        return math.sin(2 * i) * function(fresnel_power(math.cos(i), cos_r, n)[q], cos_r)

    return [quad(integrand, 0, math.pi / 2, args=(q,), epsabs=1e-12, epsrel=1e-10, limit=200)[0] for q in range(2)]


def disc_mean(function, theta_deg: float, diameter_deg: float, limb, rings: int = 400, spokes: int = 720) -> float:
    """Mean of `function(scattering angle in degrees)` over the sun's disc, by brute force in two dimensions.

    The viewer's direction lies at `theta_deg` from the way that light from the disc's centre travels. A point of the
    disc at the distance rho from its centre and the position angle phi is at the scattering angle alpha, with
    cos alpha = cos theta cos rho + sin theta sin rho cos phi (spherical law of cosines). `limb` are coefficients of
    powers of mu, where mu^2 = 1 - (sin rho / sin R)^2.
    """
    radius = math.radians(diameter_deg) / 2
    rho = (np.arange(rings) + 0.5)[:, None] * radius / rings
    phi = (np.arange(spokes) + 0.5)[None, :] * 2 * np.pi / spokes
    theta = math.radians(theta_deg)
    # by the chord's half, which keeps its digits at small angles: hav a = hav(t - r) + sin t sin r hav(pi - phi)
    hav = np.sin((theta - rho) / 2) ** 2 + math.sin(theta) * np.sin(rho) * np.sin((np.pi - phi) / 2) ** 2
    # towards phi = pi the angle is smallest here; phi runs all round, so where it starts is of no matter
    alpha = 2 * np.arcsin(np.sqrt(np.clip(hav, 0.0, 1.0)))
    mu = np.sqrt(np.clip(1 - (np.sin(rho) / math.sin(radius)) ** 2, 0.0, 1.0))
    weight = polyval(mu, np.asarray(limb)) * np.sin(rho) * np.ones_like(phi)
    return float((weight * function(np.degrees(alpha))).sum() / weight.sum())

"""The sun is a disc: the scattering table folded with its limb-darkened profile, on the sphere.

A ring of the disc at distance rho from its centre lights the drop from directions whose scattering angle toward a
fixed viewer runs from |theta - rho| to theta + rho. By the spherical law of cosines the share of the ring below the
angle alpha is arccos[(cos alpha - cos theta cos rho) / (sin theta sin rho)] / pi, which gives the weight of each bin in
closed form; only the sum over rings and over the width of the viewer's bin is numerical. Near 0 and 180 degrees this is
not a convolution in one dimension.
"""

from __future__ import annotations

import dataclasses
import itertools
import math

import numpy as np

from raytrace import cast
from raytrace.jit import kernel, run_all
from raytrace.light.disc import limb_darkening
from raytrace.optics.table import ScatteringTable

# Gauss-Legendre nodes in mu = cos(angle from the disc's normal) over the disc, and over the width of a viewer's bin
_RINGS = 24
_IN_BIN = 3


@kernel
def ring_weights(first, last, edges, rho, basis, theta_nodes, theta_weights, start, weights):
    """Weights of the table's bins in each folded bin, for each power of the limb's mu.

    Parameters
    ----------
    first, last : int
        Range of folded bins to work out.
    edges : (bins + 1,) float64
        Edges of the bins [rad].
    rho : (rings,) float64
        Distance of the rings from the disc's centre [rad].
    basis : (powers, rings) float64
        Quadrature weight of each ring times mu^power.
    theta_nodes, theta_weights : (nodes,) float64
        Gauss-Legendre nodes in -1 to 1 and their weights.
    start : (bins,) int64
        First table bin of each folded bin; written.
    weights : (powers, bins, width) float64
        Added to; zero on entry.
    """
    bins = edges.size - 1
    powers, _, width = weights.shape
    reach = rho[0]
    for m in range(rho.size):
        reach = max(reach, rho[m])
    per_bin = bins / math.pi
    for i in range(first, last):
        j0 = max(0, min(int((edges[i] - reach) * per_bin - 1e-6), bins - width))
        start[i] = j0
        middle, half = 0.5 * (edges[i] + edges[i + 1]), 0.5 * (edges[i + 1] - edges[i])
        norm = 0.0
        for t in range(theta_nodes.size):
            norm += theta_weights[t] * math.sin(middle + half * theta_nodes[t])
        for t in range(theta_nodes.size):
            theta = middle + half * theta_nodes[t]
            sin_t, cos_t = math.sin(theta), math.cos(theta)
            here = theta_weights[t] * sin_t / norm
            for m in range(rho.size):
                a = cos_t * math.cos(rho[m])
                c = 1.0 / (sin_t * math.sin(rho[m]))
                below = 0.0
                for j in range(width):
                    u = (math.cos(edges[j0 + j + 1]) - a) * c
                    upto = 1.0 if u <= -1.0 else (0.0 if u >= 1.0 else math.acos(u) / math.pi)
                    share = (upto - below) * here
                    below = upto
                    if share != 0.0:
                        for q in range(powers):
                            weights[q, i, j] += basis[q, m] * share


@kernel
def add_channels(values, weights, low, high, total):
    """total[c, i] += weights[c] values[i] for rows i from low to high; one pass over the values for all channels.

    Parameters
    ----------
    values : (rows, n) float64
    weights : (channels,) float64
    low, high : int
    total : (channels, rows, n) float64
    """
    for i in range(low, high):
        for c in range(weights.size):
            w = weights[c]
            for k in range(values.shape[1]):
                total[c, i, k] += w * values[i, k]


@kernel
def apply_weights(values, start, weights, out):
    """out[i, row] = sum over j of weights[i, j] values[start[i] + j, row].

    Rows lie innermost, so that the sum over j runs side by side for all of them, each in its own order.

    Parameters
    ----------
    values : (points, rows) float64
    start : (bins,) int64
    weights : (bins, width) float64
    out : (bins, rows) float64
        Written.
    """
    bins, rows = out.shape
    for i in range(bins):
        for r in range(rows):
            out[i, r] = 0.0
        for j in range(weights.shape[1]):
            w = weights[i, j]
            for r in range(rows):
                out[i, r] += w * values[start[i] + j, r]


def disc_weights(angle_edges_deg, diameter_deg: float, powers: int, *, threads: int | None = None):
    """Weights of the fold for a disc whose radiance is mu^power, power = 0 to powers - 1.

    Returns
    -------
    start : (bins,) int64
        First table bin that each folded bin draws from.
    weights : (powers, bins, width) float64
        For power q they add up to 2 / (q + 2), the disc's mean of mu^q.
    """
    edges = cast.f64(np.radians(angle_edges_deg), name="angle_edges_deg", ndim=1)
    bins = edges.size - 1
    radius = math.radians(diameter_deg) / 2
    node, gauss = np.polynomial.legendre.leggauss(_RINGS)
    mu, gauss = 0.5 * (node + 1), 0.5 * gauss
    # on the disc dOmega is proportional to 2 mu dmu, with mu^2 = 1 - (sin rho / sin R)^2
    rho = np.arcsin(math.sin(radius) * np.sqrt(1 - mu**2))
    basis = np.array([2 * gauss * mu ** (q + 1) for q in range(powers)])
    width = min(bins, math.ceil(2 * radius * bins / math.pi) + 3)
    theta_nodes, theta_weights = np.polynomial.legendre.leggauss(_IN_BIN)
    start = np.empty(bins, dtype=np.int64)
    weights = np.zeros((powers, bins, width))
    pieces = np.linspace(0, bins, min(bins, 16) + 1).astype(int)
    tasks = [
        (int(a), int(b), edges, rho, basis, theta_nodes, theta_weights, start, weights)
        for a, b in itertools.pairwise(pieces)
    ]
    run_all(ring_weights, tasks, threads=threads)
    return start, weights


class DiscFold:
    """The fold with the sun's limb-darkened disc, made ready for given bins and wavelengths.

    Parameters
    ----------
    angle_edges_deg : (bins + 1,) array
        Edges of equal bins of the scattering angle from 0 to 180 [deg].
    diameter_deg : float
        Above 0 [deg].
    wavelength_nm : (n_wavelength,) array
        [nm]
    """

    def __init__(self, angle_edges_deg, diameter_deg: float, wavelength_nm, *, threads: int | None = None):
        self._profile = limb_darkening(wavelength_nm)
        self._start, self._basis = disc_weights(angle_edges_deg, diameter_deg, self._profile.shape[1], threads=threads)

    def fold(self, rows, w: int, *, squares: bool = False) -> np.ndarray:
        """Fold rows of values at wavelength number `w`.

        Parameters
        ----------
        rows : (bins, n) array
        squares : bool
            The rows are variances, and the weights are squared.

        Returns
        -------
        (bins, n) float64
        """
        weights = np.tensordot(self._profile[w], self._basis, axes=1)
        weights /= weights.sum(axis=1, keepdims=True)
        rows = cast.f64(rows, name="rows", ndim=2)
        out = np.empty_like(rows)
        apply_weights(rows, self._start, weights**2 if squares else weights, out)
        return out

    def fold_last(self, values, w: int, *, squares: bool = False) -> np.ndarray:
        """Fold (…, bins) values at wavelength number `w`, as `fold` does; same shape."""
        rows = values.reshape(-1, values.shape[-1]).T
        return self.fold(rows, w, squares=squares).T.reshape(values.shape)


def fold_sun_disc(table: ScatteringTable, diameter_deg: float, *, threads: int | None = None) -> ScatteringTable:
    """Fold a table with the sun's disc; see `ScatteringTable.with_sun_disc`.

    The limb darkening is Neckel and Labs (1994), wavelength by wavelength. The standard error is propagated as if the
    bins were independent; stratified rays make neighbours lean against each other, so it is on the safe side.
    """
    if not (np.isfinite(diameter_deg) and 0 <= diameter_deg <= 10):
        raise ValueError(f"diameter_deg={diameter_deg!r} given; 0 to 10 works")
    if table.disc_diameter_deg:
        raise ValueError(
            f"a disc of {table.disc_diameter_deg} degrees is folded in already; start from the table without"
        )
    if diameter_deg == 0:
        return table
    if table.wavelength_nm is None:
        raise ValueError("the sun's limb darkening needs wavelengths; trace with wavelength_nm")
    disc = DiscFold(table.angle_edges_deg, diameter_deg, table.wavelength_nm, threads=threads)
    names = ["phase_sr", "standard_error_sr", "aureole_sr", "glory_sr"]
    folds = {n: (getattr(table, n), np.empty_like(getattr(table, n))) for n in names if getattr(table, n) is not None}

    def one_wavelength(w):
        for name, (values, out) in folds.items():
            squares = name == "standard_error_sr"
            here = values[..., w, :]
            out[..., w, :] = disc.fold_last(here**2 if squares else here, w, squares=squares)

    run_all(one_wavelength, [(w,) for w in range(table.wavelength_nm.size)], threads=threads)
    folded = {name: out for name, (_, out) in folds.items()}
    np.sqrt(folded["standard_error_sr"], out=folded["standard_error_sr"])
    return dataclasses.replace(table, **folded, disc_diameter_deg=float(diameter_deg))


def project_with_sun_disc(
    table: ScatteringTable,
    spectral_weights: np.ndarray,
    diameter_deg: float,
    *,
    aureole: bool = False,
    threads: int | None = None,
) -> np.ndarray:
    """Weighted sums over wavelength and polarisation of the table folded with the sun's disc.

    The same as `table.with_sun_disc(diameter_deg)` summed afterwards, but summed first: the limb darkening is a sum of
    powers of mu with a coefficient for each wavelength, so few rows are left to fold.

    Parameters
    ----------
    table : ScatteringTable
        For parallel light.
    spectral_weights : (n_wavelength, n_channel) array
    diameter_deg : float
        0 for a point [deg].
    aureole : bool
        Whether what is diffracted gets a row, the last one.

    Returns
    -------
    (rows, n_angle, n_channel) float64
        Rows as of `ScatteringTable.light_sr`.
    """
    both = table.light_sr(aureole=aureole)
    if diameter_deg == 0:
        return np.ascontiguousarray(np.einsum("pwa,wc->pac", both, spectral_weights, optimize=True))
    profile = limb_darkening(table.wavelength_nm)
    powers = profile.shape[1]
    start, basis = disc_weights(table.angle_edges_deg, diameter_deg, powers, threads=threads)
    mean = profile @ (2.0 / (np.arange(powers) + 2.0))
    out = np.zeros((table.angle_deg.size, len(both), spectral_weights.shape[1]))
    folded = np.empty((table.angle_deg.size, len(both) * spectral_weights.shape[1]))
    for power in range(powers):
        weights = spectral_weights * (profile[:, power] / mean)[:, None]
        rows = np.einsum("pwa,wc->apc", both, weights, optimize=True)
        apply_weights(np.ascontiguousarray(rows.reshape(folded.shape)), start, basis[power], folded)
        out += folded.reshape(out.shape)
    return np.ascontiguousarray(np.moveaxis(out, 1, 0))

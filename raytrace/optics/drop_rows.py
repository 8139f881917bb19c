"""What drops of many sizes do with light of one wavelength, order by order, each drop by the method that serves it."""

from __future__ import annotations

from typing import NamedTuple

import numpy as np

from raytrace.drops.bow_angle import size_parameter
from raytrace.optics.airy import airy_phase_prepared, prepare_airy
from raytrace.optics.angle_grids import BinMeans, cells, cosines, smooth_step
from raytrace.optics.angular_sums import add_intensities
from raytrace.optics.debye import order_coefficients, whole_coefficients
from raytrace.optics.diffraction import diffracted_sr, reflected_sr
from raytrace.optics.methods import AIRY, RAYS, WAVES, choose
from raytrace.optics.size_nodes import SizeNodes

GLORY_FROM_DEG, GLORY_FULL_DEG = 162.0, 166.0
"""Where the exact sum begins to stand for the orders, and from where it does so alone [deg]."""
_GLORY_X = 3000.0
"""Larger drops have glories smaller than 0.1 deg, which the sun's disc hides; their orders are added up."""
_SMALLEST_X, _LARGEST_X = 0.02, 1e6
WHOLE_X = 50.0
"""In smaller drops the orders' interference does not average out: what they add up to is scaled to the exact sum. Among
many sizes the one passes into the other over a fifth of this to each side, and the smaller have sizes of their own, as
their ripples ask for.
"""
_PASSAGE, _SMALL_SIZES, _NO_SHARE = 0.2, 128, 1e-4
_ROWS_AT_ONCE = 8
# Closer to the sun than this, order p = 0 gets a grid as fine as diffracted rings are, for drops up to the size whose
# rings the finest grid holds
_NEAR_DEG, _RINGS_X = 15.0, 12_000.0


class Rows(NamedTuple):
    """Light of one wavelength after drops, averaged by cross-section; without the orders that rays serve.

    Attributes
    ----------
    phase_sr : (paths, 2, bins) float64
        As in `ScatteringTable`; p = 0 holds what is diffracted, also by drops whose p = 0 rays serve [sr⁻¹].
    aureole_sr : (2, bins) float64
        What of p = 0 is diffracted [sr⁻¹].
    whole_sr : (2, bins) float64
        All orders with their interference, where the glory was asked for, from GLORY_FROM_DEG on [sr⁻¹].
    rays_share : (paths,) float64
        Share of the cross-section whose order p is left to rays.
    rays_whole_share : (paths,) float64
        The same, of drops that `whole_sr` lacks.
    """

    phase_sr: np.ndarray
    aureole_sr: np.ndarray
    whole_sr: np.ndarray
    rays_share: np.ndarray
    rays_whole_share: np.ndarray


class RowMaker:
    """Makes rows for given bins, orders and method; one for all wavelengths and threads.

    Parameters
    ----------
    angle_edges_deg : (bins + 1,) array
        From 0 to 180 [deg].
    paths : int
    method : str
        "airy", "waves" or "auto".
    sizes : int
        How many sizes are averaged in the end.
    keep : bool
        Keep what Airy bows need of an index, 20 MB each, for later calls.
    scaled : bool
        Whether the orders of small drops are scaled to the exact sum.
    spectrum : SizeSpectrum, optional
        Where the nodes stand for a spectrum: it gives the small drops sizes of their own.
    """

    def __init__(
        self,
        angle_edges_deg,
        paths: int,
        method: str,
        sizes: int,
        *,
        keep: bool = False,
        scaled: bool = True,
        spectrum=None,
    ):
        self.edges_deg = np.asarray(angle_edges_deg, dtype=np.float64)
        self.angle_deg = 0.5 * (self.edges_deg[1:] + self.edges_deg[:-1])
        self.paths, self.method, self.sizes = paths, method, sizes
        self._means = BinMeans(self.edges_deg)
        self._kept = {} if keep else None
        self._scaled = scaled and method != "airy"
        several = spectrum is not None and spectrum.low_mm < spectrum.high_mm
        self._spectrum = spectrum if self._scaled and several else None
        self._near = self.angle_deg < _NEAR_DEG

    def rows(self, index: complex, wavelength_nm: float, nodes: SizeNodes, *, whole=None, stop=None) -> Rows:
        """Rows of one wavelength.

        Parameters
        ----------
        index : complex
            Relative to air.
        wavelength_nm : float
            In air [nm].
        nodes : SizeNodes
        whole : SizeNodes, optional
            Sizes for the sum of all orders; without them there is none.
        stop : threading.Event, optional
            Set by whoever wants no result any more.

        Returns
        -------
        Rows
            Their weights are those of `nodes`, a column an order.
        """
        bins = self.angle_deg.size
        x = _within_reach(nodes.diameter_mm, wavelength_nm)
        chosen = choose(self.method, x, self.paths, index.real)
        weight = nodes.weight
        by_rays = weight * (chosen == RAYS)
        out = Rows(
            np.zeros((self.paths, 2, bins)),
            np.zeros((2, bins)),
            np.zeros((2, bins)),
            by_rays.sum(axis=0),
            by_rays[x > _GLORY_X].sum(axis=0),
        )
        waves = weight
        if self._spectrum is not None and self._add_small_sizes(out, index, wavelength_nm):
            waves = weight * _passage(x)[:, None]
        self._add_waves(out, index, x, waves, (chosen == WAVES) & (waves > 0), stop)
        self._add_airy(out, index, x, weight, (chosen == AIRY) & (weight > 0), stop)
        self._add_diffraction(out, index, x, weight[:, 0], chosen[:, 0] == WAVES)
        if whole is not None:
            share = glory_share(nodes, wavelength_nm)
            out.whole_sr[:] += share * self.whole(index, wavelength_nm, whole, stop=stop)
        return out

    def whole(self, index: complex, wavelength_nm: float, nodes: SizeNodes, *, stop=None) -> np.ndarray:
        """All orders with their interference from GLORY_FROM_DEG on: mean of the drops that are not too large for it.

        Parameters
        ----------
        index, wavelength_nm, stop
            As for `rows`.
        nodes : SizeNodes
            With one column of weights.

        Returns
        -------
        (2, bins) float64
            0 where all drops are too large [sr⁻¹].
        """
        x = _within_reach(nodes.diameter_mm, wavelength_nm)
        some = (x <= _GLORY_X) & (nodes.weight[:, 0] > 0)
        totals, out = {}, np.zeros((2, self.angle_deg.size))
        for i in np.flatnonzero(some):
            if stop is not None and stop.is_set():
                break
            count = cells(x[i], self.sizes, index=index.real)
            first = int(GLORY_FROM_DEG / 180.0 * count) - 8
            coefficients = whole_coefficients(index, x[i])
            _add_arc(totals, count, slice(first, None), coefficients, x[i], nodes.weight[i, 0])
        for _, total in sorted(totals.items()):
            out += self._means.of(total[0])
        return out / nodes.weight[some, 0].sum() if some.any() else out

    def _add_waves(self, out, index, x, weight, wanted, stop):
        """Debye's orders: drops with the same grid and the same orders are added up before they go to the bins."""
        groups = {}
        for i in np.flatnonzero(wanted.any(axis=1)):
            if x[i] < WHOLE_X and self._scaled and self._spectrum is None:
                out.phase_sr[:] += self._means.of(self._scaled_orders(index, x[i])) * weight[i][:, None, None]
                continue
            orders = tuple(np.flatnonzero(wanted[i]).tolist())
            count = cells(x[i], self.sizes, lowest=next((p for p in orders if p > 1), self.paths), index=index.real)
            groups.setdefault((count, orders, bool(x[i] > _GLORY_X)), []).append(i)
        for (count, orders, large), members in sorted(groups.items()):
            mu, orders = cosines(count), list(orders)
            row_of = np.full(self.paths, -1)
            row_of[orders] = np.arange(len(orders))
            # few orders leave room for several drops at once, which share the Legendre functions of the angles
            at_once = max(1, _ROWS_AT_ONCE // len(orders))
            total = np.zeros((at_once * len(orders), 2, count))
            for first in range(0, len(members), at_once):
                if stop is not None and stop.is_set():
                    return
                some = members[first : first + at_once]
                parts = [order_coefficients(index, x[i], row_of) for i in some]
                for i, part in zip(some, parts, strict=True):
                    by_order = part.reshape(len(part), len(orders), -1)
                    by_order *= (np.sqrt(weight[i, orders] / (2.0 * np.pi)) / x[i])[:, None]
                add_intensities(mu, _side_by_side(parts), total[: len(some) * len(orders)])
            total = total.reshape(at_once, len(orders), 2, count).sum(axis=0)
            added = self._means.of(total)
            if orders[0] == 0 and count < cells(x[members].max(), 1):
                added[0][:, self._near] = self._near_the_sun(index, x[members], weight[members, 0])
            out.phase_sr[orders] += added
            if large:
                out.whole_sr[:] += added.sum(axis=0)

    def _add_airy(self, out, index, x, weight, wanted, stop):
        if not wanted.any():
            return
        highest = int(np.flatnonzero(wanted.any(axis=0))[-1])
        prepared = self._prepared(index, highest + 1)
        light = np.empty_like(prepared.ray_phase_sr)
        for i in np.flatnonzero(wanted.any(axis=1)):
            if stop is not None and stop.is_set():
                return
            orders = np.flatnonzero(wanted[i])
            # higher orders than a drop wants are left out
            needed = prepared._replace(starts=prepared.starts[: 2 * (orders[-1] + 1) + 1])
            airy_phase_prepared(needed, max(x[i], 1.0), index.imag, out=light)
            part = weight[i, orders, None, None] * light[orders]
            out.phase_sr[orders] += part
            if x[i] > _GLORY_X:
                out.whole_sr[:] += part.sum(axis=0)

    def _prepared(self, index, paths):
        if self._kept is None:
            return prepare_airy(index, self.edges_deg, paths)
        if (index, paths) not in self._kept:
            self._kept[index, paths] = prepare_airy(index, self.edges_deg, paths)
        return self._kept[index, paths]

    def _add_small_sizes(self, out, index, wavelength_nm) -> bool:
        """Small drops of the spectrum, in even steps of the diameter; whether there are any to speak of."""
        last = WHOLE_X * (1.0 + _PASSAGE) / size_parameter(1.0, wavelength_nm)
        low, high = self._spectrum.low_mm, min(self._spectrum.high_mm, last)
        if high <= low:
            return False
        step = (high - low) / _SMALL_SIZES
        diameter = low + (np.arange(_SMALL_SIZES) + 0.5) * step
        x = _within_reach(diameter, wavelength_nm)
        share = self._spectrum.density_per_mm(diameter) * step * (1.0 - _passage(x))
        if share.sum() < _NO_SHARE:
            return False
        # all have the coarsest grid
        light = sum(w * self._scaled_orders(index, one) for one, w in zip(x, share, strict=True) if w > 0.0)
        out.phase_sr[:] += self._means.of(light)
        return True

    def _scaled_orders(self, index, x):
        """(paths, 2, cells) orders of one small drop, scaled at each angle so that they add up to the exact sum."""
        mu = cosines(cells(x, 1))
        orders, whole = np.zeros((self.paths, 2, mu.size)), np.zeros((1, 2, mu.size))
        add_intensities(mu, order_coefficients(index, x, np.arange(self.paths)), orders)
        add_intensities(mu, whole_coefficients(index, x), whole)
        total = orders.sum(axis=0)
        return orders * (whole[0] / np.where(total > 0.0, total, 1.0) / (2.0 * np.pi * x**2))

    def _near_the_sun(self, index, x, weight):
        """(2, near bins) order p = 0 of drops on grids that hold their rings; of the largest, rings and reflection."""
        out = np.zeros((2, int(self._near.sum())))
        if not out.size:
            return out
        totals, row_of = {}, np.zeros(1, dtype=np.int64)
        for one, w in zip(x, weight, strict=True):
            if one > _RINGS_X:
                out += w * diffracted_sr(one, self.edges_deg[: out.shape[1] + 1])
                out += w * reflected_sr(index.real, self.angle_deg[self._near])
                continue
            count = cells(one, 1)
            last = min(int(count * (self.edges_deg[out.shape[1]] / 180.0)) + 8, count)
            _add_arc(totals, count, slice(0, last), order_coefficients(index, one, row_of), one, w)
        for _, total in sorted(totals.items()):
            out += self._means.of(total[0])[:, self._near]
        return out

    def _add_diffraction(self, out, index, x, weight, waves):
        """Tell apart what of p = 0 is diffracted, and add it for drops whose p = 0 rays serve."""
        reflected = weight[waves].sum() * reflected_sr(index.real, self.angle_deg)
        out.aureole_sr[:] = np.maximum(out.phase_sr[0] - reflected, 0.0)
        for i in np.flatnonzero(~waves):
            rings = weight[i] * diffracted_sr(x[i], self.edges_deg)
            out.phase_sr[0] += rings
            out.aureole_sr[:] += rings


def glory_share(nodes: SizeNodes, wavelength_nm: float) -> float:
    """Share of the cross-section in drops small enough for a glory."""
    return float(nodes.weight[_within_reach(nodes.diameter_mm, wavelength_nm) <= _GLORY_X, 0].sum())


def _add_arc(totals, count, arc, coefficients, x, weight):
    """Add one drop's light to the total of its grid, at some of the angles; the coefficients are of one row."""
    mu = np.ascontiguousarray(cosines(count)[arc])
    part = np.zeros((1, 2, mu.size))
    coefficients *= np.sqrt(weight / (2.0 * np.pi)) / x
    add_intensities(mu, coefficients, part)
    totals.setdefault(count, np.zeros((1, 2, count)))[:, :, arc] += part


def _side_by_side(parts):
    """Coefficients of several drops as rows of one array, filled up with zeros to the groups of the largest."""
    if len(parts) == 1:
        return parts[0]
    out = np.zeros((max(len(part) for part in parts), sum(part.shape[1] for part in parts)))
    column = 0
    for part in parts:
        out[: len(part), column : column + part.shape[1]] = part
        column += part.shape[1]
    return out


def _passage(x):
    """0 for small drops, 1 for large ones, smooth between."""
    return smooth_step(x / WHOLE_X, 1.0 - _PASSAGE, 1.0 + _PASSAGE)


def _within_reach(diameter_mm, wavelength_nm):
    """Size parameters, kept within what the methods reach."""
    return np.clip(size_parameter(diameter_mm, wavelength_nm), _SMALLEST_X, _LARGEST_X)

"""Averages over drop sizes whose error is controlled: nodes are doubled until the average stays.

The variable of integration is v with dv in proportion to sqrt(w(D)/D) dD, w the density of the cross-section: between
nodes of equal weight, which are rare where drops are, and equal steps of ln D, which the fringes ask for, since their
phase grows in proportion to D. Trapezoids in v nest: the next rule keeps all nodes and adds those half way.
"""

from __future__ import annotations

from typing import NamedTuple

import numpy as np

_FINE = 8192
FIRST_STEPS = 8
"""Steps of the first rule."""


class SizeNodes(NamedTuple):
    """Diameters and weights whose sums stand for averages over a size spectrum by cross-section.

    Attributes
    ----------
    diameter_mm : (m,) float64
        Rising [mm].
    weight : (m, quantities) float64
        For each quantity that is averaged they add up to 1; zero where it can do without a diameter.
    """

    diameter_mm: np.ndarray
    weight: np.ndarray


class SizeAxis:
    """A size spectrum laid out along v, 0 at its low and 1 at its high limit.

    Parameters
    ----------
    spectrum : SizeSpectrum
        With a density: of more than one size.
    """

    def __init__(self, spectrum):
        fine = np.geomspace(spectrum.low_mm, spectrum.high_mm, _FINE)
        # a density may jump or bend at its breaks, and be zero in between
        inside = [d for d in spectrum.breaks_mm if spectrum.low_mm < d < spectrum.high_mm]
        self._diameter = np.unique(np.concatenate([fine, inside]))
        self._spectrum = spectrum
        slope = np.sqrt(np.maximum(spectrum.density_per_mm(self._diameter), 0.0) / self._diameter)
        steps = np.diff(self._diameter) * 0.5 * (slope[1:] + slope[:-1])
        place = np.concatenate([[0.0], np.cumsum(steps)])
        self._length = place[-1]
        self._place = place / self._length

    def at(self, v) -> tuple[np.ndarray, np.ndarray]:
        """Diameters at v, and the density there times dD/dv: (m,) each [mm, 1]."""
        diameter = np.interp(v, self._place, self._diameter)
        density = np.maximum(self._spectrum.density_per_mm(diameter), 0.0)
        # w dD/dv = w L / sqrt(w / D)
        return diameter, self._length * np.sqrt(density * diameter)

    def nodes(self, steps: int, quantities: int = 1) -> SizeNodes:
        """The trapezoidal rule with so many steps for all quantities, its weights scaled to a sum of 1."""
        diameter, weight = self.at(np.linspace(0.0, 1.0, steps + 1))
        weight[[0, -1]] *= 0.5
        return SizeNodes(diameter, np.repeat((weight / weight.sum())[:, None], quantities, axis=1))

    def between(self, steps: int, quantities: int = 1) -> SizeNodes:
        """The nodes half way between those of the rule with so many steps, their weights scaled to a sum of 1."""
        diameter, weight = self.at((np.arange(steps) + 0.5) / steps)
        return SizeNodes(diameter, np.repeat((weight / weight.sum())[:, None], quantities, axis=1))

    def nested(self, steps) -> SizeNodes:
        """Rules of (quantities,) numbers of steps, each a divisor of the largest, on the nodes of the largest."""
        most = max(steps)
        diameter, _ = self.at(np.linspace(0.0, 1.0, most + 1))
        weight = np.zeros((most + 1, len(steps)))
        for q, count in enumerate(steps):
            weight[:: most // count, q] = self.nodes(count).weight[:, 0]
        return SizeNodes(diameter, weight)

    def totals(self, steps: int) -> tuple[float, float]:
        """What the rule with so many steps, and its points half way between, make of the spectrum's whole, about 1."""
        ends, middle = self.at(np.linspace(0.0, 1.0, steps + 1))[1], self.at((np.arange(steps) + 0.5) / steps)[1]
        return float((ends.sum() - 0.5 * (ends[0] + ends[-1])) / steps), float(middle.sum() / steps)


def refine(
    spectrum, average, distance, *, quantities: int, tolerance: float, most_steps: int, finest: tuple[int, ...] = ()
) -> tuple[SizeNodes, np.ndarray]:
    """Nodes that are fine enough for what is averaged, each quantity for itself.

    Parameters
    ----------
    spectrum : SizeSpectrum
    average : callable
        Of SizeNodes; the weighted sums of what is averaged, an array.
    distance : callable
        Of two averages, the coarser and the finer: (quantities,) how far they are apart, on the scale of `tolerance`.
    quantities : int
    tolerance : float
        Doubling ends for a quantity when the last doubling moved it by no more; the finer rule is taken.
    most_steps : int
        Doubling ends at the latest here.
    finest : tuple of int
        Quantities that take the finest rule of all, whatever moves them.

    Returns
    -------
    nodes : SizeNodes
    moved : (quantities,) float64
        How far the last doubling moved each; 0 for drops of one size.
    """
    if spectrum.low_mm == spectrum.high_mm:
        return SizeNodes(np.array([spectrum.low_mm]), np.ones((1, quantities))), np.zeros(quantities)
    axis, steps = SizeAxis(spectrum), FIRST_STEPS
    coarse = average(axis.nodes(steps, quantities))
    settled, moved = np.zeros(quantities, dtype=int), np.zeros(quantities)
    while True:
        whole, share = axis.totals(steps)
        added = average(axis.between(steps, quantities))
        fine = (whole * coarse + share * added) / (whole + share)
        now = np.asarray(distance(coarse, fine))
        steps, coarse = 2 * steps, fine
        fresh = (settled == 0) & ((now <= tolerance) | (2 * steps > most_steps))
        settled[fresh], moved[fresh] = steps, now[fresh]
        if settled.all():
            settled[list(finest)] = settled.max()
            return axis.nested(settled.tolist()), moved

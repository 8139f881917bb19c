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
    weight : (m,) float64
        They add up to 1.
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

    def nodes(self, steps: int) -> SizeNodes:
        """The trapezoidal rule with so many steps, its weights scaled to a sum of 1."""
        diameter, weight = self.at(np.linspace(0.0, 1.0, steps + 1))
        weight[[0, -1]] *= 0.5
        return SizeNodes(diameter, weight / weight.sum())

    def between(self, steps: int) -> SizeNodes:
        """The nodes half way between those of the rule with so many steps, their weights scaled to a sum of 1."""
        diameter, weight = self.at((np.arange(steps) + 0.5) / steps)
        return SizeNodes(diameter, weight / weight.sum())

    def total(self, steps: int, *, between: bool = False) -> float:
        """Sum of the weights before scaling, over the number of steps: what the rule makes of the spectrum's whole."""
        v = (np.arange(steps) + 0.5) / steps if between else np.linspace(0.0, 1.0, steps + 1)
        weight = self.at(v)[1]
        if not between:
            weight[[0, -1]] *= 0.5
        return float(weight.sum() / steps)


def refine(spectrum, average, distance, *, tolerance: float, most_steps: int) -> tuple[SizeNodes, float]:
    """Nodes that are fine enough for what is averaged.

    Parameters
    ----------
    spectrum : SizeSpectrum
    average : callable
        Of SizeNodes; the weighted sum of what is averaged, an array.
    distance : callable
        Of two averages, the coarser and the finer: how far they are apart, on the scale of `tolerance`.
    tolerance : float
        Doubling ends when the last doubling moved the average by no more; the finer rule is taken.
    most_steps : int
        Doubling ends at the latest here.

    Returns
    -------
    nodes : SizeNodes
    moved : float
        How far the last doubling moved the average; 0 for drops of one size.
    """
    if spectrum.low_mm == spectrum.high_mm:
        return SizeNodes(np.array([spectrum.low_mm]), np.ones(1)), 0.0
    axis, steps = SizeAxis(spectrum), FIRST_STEPS
    coarse, whole = average(axis.nodes(steps)), axis.total(steps)
    while True:
        added, share = average(axis.between(steps)), axis.total(steps, between=True)
        fine = (whole * coarse + share * added) / (whole + share)
        moved = float(distance(coarse, fine))
        steps, coarse, whole = 2 * steps, fine, 0.5 * (whole + share)
        if moved <= tolerance or 2 * steps > most_steps:
            return axis.nodes(steps), moved

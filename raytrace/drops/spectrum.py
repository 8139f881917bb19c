"""Size spectra: what share of the drops' cross-section each diameter has, D^2 N(D) with an integral of 1.

One class for each form, all with the same methods; numbers of drops are `sizes.py`'s work.
"""

from __future__ import annotations

import math
from dataclasses import dataclass, field
from statistics import NormalDist

import numpy as np

TAIL_SHARE = 9e-6
"""Share of the cross-section beyond each limit of a spectrum; kept below 1e-5."""
CLASSES = 64
_GAUSS = NormalDist()


@dataclass(frozen=True)
class SizeSpectrum:
    """How the cross-section of drops is shared out among diameters.

    Attributes
    ----------
    low_mm, high_mm : float
        Limits outside which lies less than 1e-5 of the cross-section on each side; equal for exactly one size [mm].
    breaks_mm : tuple of float
        Diameters from low to high at which the density bends; empty for smooth laws [mm].
    """

    low_mm: float = field(init=False)
    high_mm: float = field(init=False)
    breaks_mm: tuple[float, ...] = field(init=False, default=())

    def density_per_mm(self, diameter_mm: np.ndarray) -> np.ndarray:
        """Share of the cross-section per diameter, D^2 N(D) over its integral from 0 to infinity.

        Parameters
        ----------
        diameter_mm : array_like
            Diameters above 0 [mm].

        Returns
        -------
        ndarray
            Same shape [1/mm].

        Raises
        ------
        ValueError
            If there is but one size.
        """
        raise NotImplementedError

    def classes(self) -> tuple[np.ndarray, np.ndarray]:
        """Diameters [mm] and shares of the cross-section, (m,) each, whose sums stand for integrals."""
        raise NotImplementedError

    def effective_mm(self) -> float:
        """Mean diameter, weighted by cross-section [mm]."""
        raise NotImplementedError

    def median_mm(self) -> float:
        """Diameter that halves the water [mm]."""
        raise NotImplementedError

    def _limits(self, low: float, high: float) -> None:
        # the dataclass is frozen for everybody else
        object.__setattr__(self, "low_mm", float(low))
        object.__setattr__(self, "high_mm", float(high))


@dataclass(frozen=True)
class OneSize(SizeSpectrum):
    """Drops of exactly one diameter.

    Attributes
    ----------
    diameter_mm : float
        The diameter [mm].
    """

    diameter_mm: float

    def __post_init__(self):
        self._limits(self.diameter_mm, self.diameter_mm)

    def density_per_mm(self, diameter_mm):
        """As `SizeSpectrum` says."""
        raise ValueError(f"drops of exactly one size, {self.diameter_mm:g} mm, have no density; a spread would work")

    def classes(self):
        """As `SizeSpectrum` says."""
        return np.array([self.diameter_mm]), np.ones(1)

    def effective_mm(self):
        """As `SizeSpectrum` says."""
        return self.diameter_mm

    def median_mm(self):
        """As `SizeSpectrum` says."""
        return self.diameter_mm


@dataclass(frozen=True)
class Gamma(SizeSpectrum):
    """N(D) in proportion to D^(shape - 3) exp(-D/scale): a gamma distribution of the cross-section.

    Attributes
    ----------
    shape : float
        Exponent of D in N(D), and 3.
    scale_mm : float
        Diameter at which the exponential has fallen to 1/e [mm].
    """

    shape: float
    scale_mm: float

    def __post_init__(self):
        from scipy.special import gammainccinv, gammaincinv

        low, high = gammaincinv(self.shape, TAIL_SHARE), gammainccinv(self.shape, TAIL_SHARE)
        self._limits(low * self.scale_mm, high * self.scale_mm)

    def density_per_mm(self, diameter_mm):
        """As `SizeSpectrum` says."""
        from scipy.special import gammaln, xlogy

        x = np.asarray(diameter_mm, dtype=np.float64) / self.scale_mm
        return np.exp(xlogy(self.shape - 1.0, x) - x - gammaln(self.shape)) / self.scale_mm

    def classes(self):
        """As `SizeSpectrum` says."""
        from scipy.special import roots_genlaguerre

        # exact for the moments from the second up: the second is the weight
        node, weight = roots_genlaguerre(CLASSES, self.shape - 1.0)
        return node * self.scale_mm, weight / weight.sum()

    def effective_mm(self):
        """As `SizeSpectrum` says."""
        return self.shape * self.scale_mm

    def median_mm(self):
        """As `SizeSpectrum` says."""
        from scipy.special import gammaincinv

        return float(gammaincinv(self.shape + 1.0, 0.5)) * self.scale_mm


@dataclass(frozen=True)
class Lognormal(SizeSpectrum):
    """N(D) normal in ln D, and so is every moment, about another median (Hatch & Choate 1929).

    Attributes
    ----------
    median_volume_mm : float
        Diameter that halves the water [mm].
    sigma : float
        Standard deviation of ln D.
    """

    median_volume_mm: float
    sigma: float

    def __post_init__(self):
        reach = self.sigma * -_GAUSS.inv_cdf(TAIL_SHARE)
        self._limits(self._median_area_mm() * math.exp(-reach), self._median_area_mm() * math.exp(reach))

    def density_per_mm(self, diameter_mm):
        """As `SizeSpectrum` says."""
        d = np.asarray(diameter_mm, dtype=np.float64)
        z = np.log(d / self._median_area_mm()) / self.sigma
        return np.exp(-0.5 * z**2) / (math.sqrt(2.0 * math.pi) * self.sigma * d)

    def classes(self):
        """As `SizeSpectrum` says."""
        # Gauss-Hermite in ln D, where the k-th moment is exp(k ln D): exact to rounding for the moments up to the sixth
        node, weight = np.polynomial.hermite_e.hermegauss(CLASSES)
        return self._median_area_mm() * np.exp(self.sigma * node), weight / weight.sum()

    def effective_mm(self):
        """As `SizeSpectrum` says."""
        return self.median_volume_mm * math.exp(-0.5 * self.sigma**2)

    def median_mm(self):
        """As `SizeSpectrum` says."""
        return self.median_volume_mm

    def _median_area_mm(self):
        # the medians of two moments that differ by one are exp(sigma^2) apart
        return self.median_volume_mm * math.exp(-(self.sigma**2))


@dataclass(frozen=True)
class Normal(SizeSpectrum):
    """N(D) normal in D, cut at a diameter of 0 and nowhere else.

    Attributes
    ----------
    mean_mm : float
        Mean of the uncut normal law [mm].
    spread : float
        Its standard deviation over its mean, above 0 to 0.3.
    """

    mean_mm: float
    spread: float

    def __post_init__(self):
        self._limits(self._quantile(2, TAIL_SHARE), self._quantile(2, 1.0 - TAIL_SHARE))

    def density_per_mm(self, diameter_mm):
        """As `SizeSpectrum` says."""
        d = np.asarray(diameter_mm, dtype=np.float64)
        width = self.mean_mm * self.spread
        z = (d - self.mean_mm) / width
        whole = self._below(2, math.inf) * math.sqrt(2.0 * math.pi) * width
        return np.where(d > 0.0, (d / self.mean_mm) ** 2 * np.exp(-0.5 * z**2) / whole, 0.0)

    def classes(self):
        """As `SizeSpectrum` says."""
        # Gauss-Legendre over all of the normal law that a floating-point number can tell from 0
        node, weight = np.polynomial.legendre.leggauss(CLASSES)
        low, high = max(-1.0 / self.spread, -9.0), 9.0
        z = 0.5 * (low + high) + 0.5 * (high - low) * node
        share = weight * (1.0 + self.spread * z) ** 2 * np.exp(-0.5 * z**2)
        return self.mean_mm * (1.0 + self.spread * z), share / share.sum()

    def effective_mm(self):
        """As `SizeSpectrum` says."""
        return self.mean_mm * self._below(3, math.inf) / self._below(2, math.inf)

    def median_mm(self):
        """As `SizeSpectrum` says."""
        return self._quantile(3, 0.5)

    def _below(self, power: int, z: float) -> float:
        """Integral of (D/mean)^power over the normal law from D = 0 to z standard deviations above the mean."""

        def integral(z):
            # by parts, from minus infinity
            whole = 0.5 * math.erfc(-z / math.sqrt(2.0))
            bell = 0.0 if math.isinf(z) else math.exp(-0.5 * z**2) / math.sqrt(2.0 * math.pi)
            first, second = -bell, whole - (0.0 if bell == 0.0 else z * bell)
            third = 0.0 if bell == 0.0 else -(z**2 + 2.0) * bell
            s = self.spread
            if power == 2:
                return whole + 2.0 * s * first + s**2 * second
            return whole + 3.0 * s * first + 3.0 * s**2 * second + s**3 * third

        return integral(z) - integral(-1.0 / self.spread)

    def _quantile(self, power: int, share: float) -> float:
        whole = self._below(power, math.inf)
        z = _bisect(lambda z: self._below(power, z) - share * whole, max(-1.0 / self.spread, -9.0), 9.0)
        return self.mean_mm * (1.0 + self.spread * z)


@dataclass(frozen=True)
class Linear(SizeSpectrum):
    """N(D) given at diameters, linear between them and 0 outside.

    Attributes
    ----------
    diameter_mm : tuple of n floats
        Diameters that rise, 2 or more [mm].
    number : tuple of n floats
        N(D) there in any unit, 0 or more, not all 0.
    """

    diameter_mm: tuple[float, ...]
    number: tuple[float, ...]

    def __post_init__(self):
        low, high = self._quantile(2, TAIL_SHARE), self._quantile(2, 1.0 - TAIL_SHARE)
        self._limits(low, high)
        object.__setattr__(self, "breaks_mm", tuple(d for d in self.diameter_mm if low <= d <= high))

    def density_per_mm(self, diameter_mm):
        """As `SizeSpectrum` says."""
        d = np.asarray(diameter_mm, dtype=np.float64)
        return d**2 * np.interp(d, self.diameter_mm, self.number, left=0.0, right=0.0) / self.second_moment()

    def second_moment(self) -> float:
        """Integral of D^2 N(D) in the unit of N, times mm3."""
        return float(self._parts(2).sum())

    def classes(self):
        """As `SizeSpectrum` says."""
        # four points a piece are exact to the seventh power, hence for the moments up to the sixth
        d, moment = self._points(2, np.array(self.diameter_mm[:-1]), np.array(self.diameter_mm[1:]))
        return d.ravel(), moment.ravel() / moment.sum()

    def effective_mm(self):
        """As `SizeSpectrum` says."""
        return float(self._parts(3).sum() / self._parts(2).sum())

    def median_mm(self):
        """As `SizeSpectrum` says."""
        return self._quantile(3, 0.5)

    def _points(self, power, low, high):
        """Diameters and integrands times weights of the pieces from low to high, (pieces, 4) each."""
        node, weight = np.polynomial.legendre.leggauss(4)
        half = 0.5 * (high - low)[:, None]
        d = 0.5 * (high + low)[:, None] + half * node
        return d, half * weight * d**power * np.interp(d, self.diameter_mm, self.number)

    def _parts(self, power):
        """(n - 1,) moments of the pieces."""
        return self._points(power, np.array(self.diameter_mm[:-1]), np.array(self.diameter_mm[1:]))[1].sum(axis=1)

    def _quantile(self, power, share):
        below = np.concatenate(([0.0], np.cumsum(self._parts(power))))
        wanted = share * below[-1]
        piece = min(int(np.searchsorted(below, wanted, side="right")) - 1, len(self.number) - 2)
        low = np.array([self.diameter_mm[piece]])

        def over(d):
            return below[piece] + self._points(power, low, np.array([d]))[1].sum() - wanted

        return _bisect(over, self.diameter_mm[piece], self.diameter_mm[piece + 1])


def _bisect(rising, low: float, high: float) -> float:
    """Where a rising function goes through 0, to the last bit but a few; no library need load for it."""
    for _ in range(60):
        middle = 0.5 * (low + high)
        if rising(middle) < 0.0:
            low = middle
        else:
            high = middle
    return 0.5 * (low + high)

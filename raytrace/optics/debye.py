"""Wave optics of a sphere, exact: the Debye series order by order, and the Lorenz-Mie sum of all orders.

Sign: time goes as exp(-i omega t), so that n + ik with k > 0 absorbs. Normalisation: |S|^2 / (pi x^2) [sr⁻¹] is the
power per steradian of light of one polarisation over what the sphere's cross-section intercepts of it, which is twice
the `phase_sr` of that polarisation in a table for unpolarised light. S1(0) = S2(0), and S1(180) = -S2(180).
"""

from __future__ import annotations

from typing import NamedTuple

import numpy as np

from raytrace import cast
from raytrace.optics.angular_sums import amplitudes
from raytrace.optics.methods import MOST_WAVES_X
from raytrace.optics.partial_waves import (
    GROUP,
    debye_coefficients,
    group_count,
    inner_log_derivative,
    mie_coefficients,
    term_count,
)

SIZE_PARAMETERS = (0.01, MOST_WAVES_X)
_INDEX, _LARGEST_K, _MOST_PATHS = (0.5, 5.0), 5.0, 64


class Efficiencies(NamedTuple):
    """Cross-sections over the geometric one, and the asymmetry of what is scattered.

    Attributes
    ----------
    extinction, scattering : float
        Cross-section over pi a^2.
    backscattering : float
        4 pi times the power per steradian at 180 degrees, over what the cross-section intercepts.
    asymmetry : float
        Mean cosine of the scattering angle.
    """

    extinction: float
    scattering: float
    backscattering: float
    asymmetry: float


def debye_series(index, size_parameter: float, angle_deg, *, paths: int = 8) -> np.ndarray:
    """Amplitudes that a sphere scatters, exact, by Debye order (Debye 1908; Hovenac & Lock 1992).

    Parameters
    ----------
    index : complex
        Refractive index relative to the medium, n + ik, n from 0.5 to 5, k from 0 to 5.
    size_parameter : float
        x = 2 pi radius / wavelength, 0.01 to 100,000.
    angle_deg : (n_angle,) array
        Scattering angles, 0 to 180 [deg].
    paths : int
        Orders p = 0 to paths - 1. p = 0 holds diffraction beside external reflection.

    Returns
    -------
    (paths, 2, n_angle) complex128
        S of each order; polarisation 0 perpendicular to the scattering plane (S1), 1 parallel (S2).
        |S|^2 / (pi x^2) is twice the `phase_sr` of a table's polarisation [sr⁻¹]. The orders interfere: the sphere's
        whole amplitude is their sum over all p.

    Raises
    ------
    ValueError
        If an argument is out of range; the message gives the range.
    """
    index, x, mu = _arguments(index, size_parameter, angle_deg)
    if not (isinstance(paths, (int, np.integer)) and 1 <= paths <= _MOST_PATHS):
        raise ValueError(f"paths={paths!r} given; whole numbers from 1 to {_MOST_PATHS} work")
    out = np.empty((int(paths), 2, mu.size), dtype=np.complex128)
    amplitudes(mu, order_coefficients(index, x, np.arange(int(paths))), out)
    return out


def lorenz_mie(index, size_parameter: float, angle_deg) -> np.ndarray:
    """Amplitudes that a sphere scatters, all orders in one closed sum (Bohren & Huffman 1983, eq. 4.74).

    Parameters
    ----------
    index, size_parameter, angle_deg
        As for `debye_series`.

    Returns
    -------
    (2, n_angle) complex128
        S1 and S2.

    Raises
    ------
    ValueError
        If an argument is out of range; the message gives the range.
    """
    index, x, mu = _arguments(index, size_parameter, angle_deg)
    out = np.empty((1, 2, mu.size), dtype=np.complex128)
    amplitudes(mu, whole_coefficients(index, x), out)
    return out[0]


def efficiencies(index, size_parameter: float) -> Efficiencies:
    """Efficiencies of a sphere by the Lorenz-Mie sums (Bohren & Huffman 1983, eqs. 4.61, 4.62 and p. 120).

    Parameters
    ----------
    index, size_parameter
        As for `debye_series`.

    Returns
    -------
    Efficiencies

    Raises
    ------
    ValueError
        If an argument is out of range; the message gives the range.
    """
    index, x, _ = _arguments(index, size_parameter, [180.0])
    a, b = partial_waves(whole_coefficients(index, x))[:, 0, : term_count(x)]
    n = np.arange(1, a.size + 1)
    scattering = 2 / x**2 * np.sum((2 * n + 1) * (np.abs(a) ** 2 + np.abs(b) ** 2))
    both = n * (n + 2) / (n + 1) * np.real(a * np.append(a[1:], 0).conj() + b * np.append(b[1:], 0).conj())
    cross = (2 * n + 1) / (n * (n + 1)) * np.real(a * b.conj())
    return Efficiencies(
        extinction=float(2 / x**2 * np.sum((2 * n + 1) * (a + b).real)),
        scattering=float(scattering),
        backscattering=float(np.abs(np.sum((2 * n + 1) * (-1.0) ** n * (a - b))) ** 2 / x**2),
        asymmetry=float(4 / x**2 * np.sum(both + cross) / scattering),
    )


def order_coefficients(index: complex, size_parameter: float, row_of: np.ndarray) -> np.ndarray:
    """(groups, rows * 4 * GROUP) coefficients of the Debye orders as the angular sums read them; trusts its caller.

    `row_of` (paths,) int64 is the row of each order p, or -1 where it is left out.
    """
    terms, inner, coefficients = _room(index, size_parameter, int(row_of.max()) + 1)
    debye_coefficients(index, size_parameter, terms, row_of, inner, coefficients)
    return coefficients


def whole_coefficients(index: complex, size_parameter: float) -> np.ndarray:
    """(groups, 4 * GROUP) coefficients of the closed sum as the angular sums read them; trusts its caller."""
    terms, inner, coefficients = _room(index, size_parameter, 1)
    mie_coefficients(index, size_parameter, terms, inner, coefficients)
    return coefficients


def _room(index, size_parameter, rows):
    """Number of terms, what is inside the sphere, and zeros for the coefficients of so many rows."""
    terms = term_count(size_parameter)
    inner = np.empty(terms + 1, dtype=np.complex128)
    inner_log_derivative(index * size_parameter, terms, inner)
    return terms, inner, np.zeros((group_count(size_parameter), rows * 4 * GROUP))


def partial_waves(coefficients: np.ndarray) -> np.ndarray:
    """Coefficients as the books have them.

    Parameters
    ----------
    coefficients : (groups, rows * 4 * GROUP) array
        From `order_coefficients` or `whole_coefficients`.

    Returns
    -------
    (2, rows, groups * GROUP) complex128
        a_n and b_n of each row, n from 1; zero beyond the terms that matter.
    """
    parts = coefficients.reshape(len(coefficients), -1, 4, GROUP)
    both = np.moveaxis(parts[:, :, ::2] + 1j * parts[:, :, 1::2], 0, 2)
    plus, minus = both.reshape(len(both), 2, -1).swapaxes(0, 1)
    n = np.arange(1, plus.shape[-1] + 1)
    weight = (2 * n + 1) / (n * (n + 1))
    return np.array([(plus + minus) / weight, (plus - minus) / weight])


def _arguments(index, size_parameter, angle_deg):
    index, x = complex(index), float(size_parameter)
    low, high = _INDEX
    if not (low <= index.real <= high and 0.0 <= index.imag <= _LARGEST_K):
        raise ValueError(
            f"index {index:g} given; n + ik with n from {low:g} to {high:g} and k from 0 to {_LARGEST_K:g} works"
        )
    low, high = SIZE_PARAMETERS
    if not low <= x <= high:
        raise ValueError(f"size_parameter={x!r} given; {low:g} to {high:g} works")
    angle = cast.f64(np.atleast_1d(angle_deg), name="angle_deg", ndim=1)
    if angle.size == 0 or not ((angle >= 0) & (angle <= 180)).all():
        raise ValueError("angle_deg has no values, or some outside 0 to 180")
    return index, x, np.cos(np.radians(angle))

"""Kernels of the uniform Airy bow: the two rays that meet at one deviation, and what a drop of one size makes of them.

A ray of Debye order p that hits at the angle of incidence i is deviated by D(i) = 2 i - 2 p r + (p - 1) pi, which is
least at the bow ray. A deviation D0 beyond the least one is reached by two rays, i1 below the bow ray's incidence and
i2 above it; a smaller one is reached by two complex rays, each the other's conjugate. In what follows the impact
parameter b = sin i is the variable and psi(b), with psi' = D0 - D(b), the phase over the size parameter. The
substitution psi = A + z t - t^3 / 3 of Chester, Friedman and Ursell (1957) puts the rays at t = -sqrt(z) and
t = +sqrt(z), with (4/3) z^(3/2) = psi2 - psi1, and everything below is smooth in z through z = 0, the bow ray's own
deviation, where z changes its sign.
"""

from __future__ import annotations

import math
from typing import NamedTuple

import numpy as np
from scipy.special import airy

from raytrace.jit import kernel

FIELDS = 9
"""Columns of a pair of rays: z, U (perpendicular, parallel), V (both), mean and half difference of cos r (over
sqrt(z)), distance of the impact parameters, mean of the optical paths over the size parameter."""
Z, U_S, U_P, V_S, V_P, CHORD, CHORD_ODD, SPAN, PATH = range(FIELDS)

NEAREST = 1e-7
"""Deviations closer to the bow ray's are moved to this distance [rad]: 6e-6 deg, which no drop can tell."""

# Airy functions: Taylor series round the nodes of a table from -_ROOM to _DARKEST, asymptotic series beyond
_STEPS = 16
_ROOM = 9.0
_DARKEST = 30.0
_SERIES_TO = 8.0
_FIRST_ZERO = 2.338
_AI = np.ascontiguousarray(np.array(airy(np.arange(-_ROOM * _STEPS, _DARKEST * _STEPS + 1) / _STEPS)[:2]).T)

_GAUSS_X, _GAUSS_W = np.polynomial.legendre.leggauss(6)

# Interference is shown in full up to the first of these in x |b1 - b2| = 360 deg / period, and not beyond the second
FADE_FROM, FADE_TO = 360.0 / 0.12, 360.0 / 0.06


class AirySize(NamedTuple):
    """One drop, as it enters the kernel."""

    size_parameter: float
    exponent: float  # 2 k x: absorption of the amplitude along a chord is this times cos r


@kernel(inline=True)
def ray(i, n, p):
    """Deviation of a ray, its derivative, sine and cosine of incidence, cosine of refraction; i real or complex."""
    sin_i, cos_i = np.sin(i), np.cos(i)
    sin_r = sin_i / n
    cos_r = np.sqrt(1.0 - sin_r * sin_r)
    deviation = 2.0 * i - 2.0 * p * np.arcsin(sin_r) + (p - 1) * math.pi
    return deviation, 2.0 - 2.0 * p * cos_i / (n * cos_r), sin_i, cos_i, cos_r


@kernel(inline=True)
def fresnel_product(cos_i, cos_r, n, p):
    """Fresnel's amplitudes of a ray of order p >= 1, perpendicular and parallel: (1 - r^2) (-r)^(p - 1)."""
    r_s = (cos_i - n * cos_r) / (cos_i + n * cos_r)
    r_p = (n * cos_i - cos_r) / (n * cos_i + cos_r)
    out_s, out_p = 1.0 - r_s * r_s, 1.0 - r_p * r_p
    for _ in range(p - 1):
        out_s = -out_s * r_s
        out_p = -out_p * r_p
    return out_s, out_p


@kernel(inline=True)
def optical_path(cos_i, cos_r, n, p):
    """Path within the drop less what the same light would run without it, over the radius (van de Hulst, 12.22)."""
    return 2.0 * (p * n * cos_r - cos_i)


@kernel
def bow_incidence(n, p):
    """Incidence of the bow ray and the second derivative of the deviation there [rad]."""
    cos_i = math.sqrt((n * n - 1.0) / (p * p - 1.0))
    i = math.acos(cos_i)
    cos_r = p * cos_i / n
    sin_i = math.sin(i)
    return i, 2.0 * p * sin_i * (n * n - 1.0) / (n * cos_r) ** 3


@kernel
def ray_at(n, p, deviation, guess, top, i_bow):
    """Incidence in 0 to `top` of the ray with the given deviation; Newton's steps, for D is convex.

    After a step s what is left to do is s^2 / (2 |i - i_bow|), so a step of 1e-7 of the distance is the last one.
    """
    i = guess
    for _ in range(60):
        d, slope, _sin, _cos, _cos_r = ray(i, n, p)
        if slope == 0.0:
            break
        step = (d - deviation) / slope
        new = min(max(i - step, 0.0), top)
        last = abs(new - i) <= 1e-7 * abs(new - i_bow)
        i = new
        if last:
            break
    return i


@kernel
def complex_ray_at(n, p, deviation, guess, i_bow):
    """Complex incidence of a ray with a deviation that no real ray reaches; nan where Newton's steps do not settle."""
    i = guess
    for _ in range(40):
        d, slope, _sin, _cos, _cos_r = ray(i, n, p)
        step = (d - deviation) / slope
        i = i - step
        if abs(step) <= 1e-7 * abs(i - i_bow):
            return i
    return complex(math.nan, math.nan)


@kernel
def path_difference(n, p, deviation, first, second):
    """psi2 - psi1, the integral of D0 - D over the impact parameter from one ray to the other, by Gauss's rule.

    The difference of the two optical paths is the same but has lost its digits where the rays are close.
    """
    middle, half = 0.5 * (second + first), 0.5 * (second - first)
    total = 0.0 * half
    for k in range(_GAUSS_X.size):
        d, _slope, _sin, cos_i, _cos_r = ray(middle + half * _GAUSS_X[k], n, p)
        total += _GAUSS_W[k] * (deviation - d) * cos_i
    return total * half


@kernel
def bright_pairs(n, p, deviation, out):
    """The two rays at each deviation on the bright side of the bow.

    Beyond the deviation of the grazing ray the outer one has no amplitude, and its path goes on along the surface
    (slope 1, as at the edge), so that nothing has a step; so for the inner one beyond the axial ray.

    Parameters
    ----------
    n : float
    p : int
    deviation : (m,) float64
        Rising from the bow ray's deviation [rad].
    out : (m, FIELDS) float64
        Written; amplitudes without 1/sqrt(sin theta), which belongs to the scattering angle.
    """
    i_bow, curvature = bow_incidence(n, p)
    d_bow = ray(i_bow, n, p)[0]
    d_axis = (p - 1) * math.pi
    d_graze = ray(0.5 * math.pi, n, p)[0]
    cos_graze = math.sqrt(1.0 - 1.0 / (n * n))
    before = NEAREST
    off_1 = -math.sqrt(2.0 * before / curvature)
    off_2 = -off_1
    for j in range(deviation.size):
        d0 = max(deviation[j], d_bow + NEAREST)
        stretch = math.sqrt((d0 - d_bow) / before)
        before = d0 - d_bow
        a1_s = a1_p = a2_s = a2_p = 0.0
        slope_1 = slope_2 = 1.0
        i_1, i_2 = 0.0, 0.5 * math.pi
        b_1, cos_1, chord_1, b_2, cos_2, chord_2 = 0.0, 1.0, 1.0, 1.0, 0.0, cos_graze
        if d0 < d_axis:
            i_1 = ray_at(n, p, d0, max(i_bow + off_1 * stretch, 0.0), i_bow, i_bow)
            off_1 = i_1 - i_bow
            _d, slope_1, b_1, cos_1, chord_1 = ray(i_1, n, p)
            a1_s, a1_p = fresnel_product(cos_1, chord_1, n, p)
        if d0 < d_graze:
            i_2 = ray_at(n, p, d0, min(i_bow + off_2 * stretch, 0.5 * math.pi), 0.5 * math.pi, i_bow)
            off_2 = i_2 - i_bow
            _d, slope_2, b_2, cos_2, chord_2 = ray(i_2, n, p)
            a2_s, a2_p = fresnel_product(cos_2, chord_2, n, p)
        path_1, path_2 = optical_path(cos_1, chord_1, n, p), optical_path(cos_2, chord_2, n, p)
        if d0 >= d_graze:
            path_2 += d0 - d_graze
        difference = path_2 - path_1
        if i_2 - i_1 < 0.05 and d0 < d_axis and d0 < d_graze:
            difference = path_difference(n, p, d0, i_1, i_2)
        root = (0.75 * difference) ** (1.0 / 3.0)
        scale_1 = math.sqrt(max(b_1 * cos_1 * root / -slope_1, 0.0)) if d0 < d_axis else 0.0
        scale_2 = math.sqrt(max(b_2 * cos_2 * root / slope_2, 0.0)) if d0 < d_graze else 0.0
        # back from where it was moved to: z is straight there, and the path has the slope b
        moved = deviation[j] - d0
        out[j, Z] = root * root * (1.0 + moved / (d0 - d_bow))
        out[j, U_S] = a1_s * scale_1 + a2_s * scale_2
        out[j, U_P] = a1_p * scale_1 + a2_p * scale_2
        out[j, V_S] = (a1_s * scale_1 - a2_s * scale_2) / root
        out[j, V_P] = (a1_p * scale_1 - a2_p * scale_2) / root
        out[j, CHORD] = 0.5 * (chord_1 + chord_2)
        out[j, CHORD_ODD] = 0.5 * (chord_1 - chord_2) / root
        out[j, SPAN] = b_2 - b_1
        out[j, PATH] = 0.5 * (path_1 + path_2 + moved * (b_1 + b_2))


@kernel
def dark_pairs(n, p, deviation, out):
    """The two complex rays at each deviation on the dark side of the bow.

    Parameters
    ----------
    n : float
    p : int
    deviation : (m,) float64
        Falling from the bow ray's deviation, by pi at most [rad].
    out : (m, FIELDS) float64
        As of `bright_pairs`.

    Returns
    -------
    int
        How many were found; farther from the bow complex rays end.
    """
    i_bow, curvature = bow_incidence(n, p)
    d_bow = ray(i_bow, n, p)[0]
    before = NEAREST
    off = complex(0.0, math.sqrt(2.0 * before / curvature))
    for j in range(deviation.size):
        away = max(d_bow - deviation[j], NEAREST)
        # small steps near the bow, where off grows as the root; not above 0.05 rad elsewhere
        steps = 1 + int((away - before) / 0.05)
        start = before
        i = i_bow + off
        for k in range(steps):
            here = start + (away - start) * (k + 1) / steps
            i = complex_ray_at(n, p, d_bow - here, i_bow + off * math.sqrt(here / before), i_bow)
            before = here
            off = i - i_bow
        d0 = d_bow - away
        _d, slope, b, cos_i, chord = ray(i, n, p)
        path = optical_path(cos_i, chord, n, p)
        difference = 2.0 * path.imag
        if abs(i.imag) < 0.02:
            difference = path_difference(n, p, d0, i.conjugate(), i).imag
        if not (difference < 0.0 and i.imag > 0.0):
            return j
        root = (-0.75 * difference) ** (1.0 / 3.0)
        a_s, a_p = fresnel_product(cos_i, chord, n, p)
        scale = np.sqrt(b * cos_i * complex(0.0, root) / slope)
        # the last 30 of 180 deg are faded out, where only drops of a few wavelengths have any light left
        u = min((math.pi - away) / (math.pi / 6.0), 1.0)
        scale *= u * u * (3.0 - 2.0 * u)
        a_s, a_p = a_s * scale, a_p * scale
        moved = deviation[j] - d0
        out[j, Z] = -root * root * (1.0 - moved / away)
        out[j, U_S], out[j, U_P] = 2.0 * a_s.real, 2.0 * a_p.real
        out[j, V_S], out[j, V_P] = -2.0 * a_s.imag / root, -2.0 * a_p.imag / root
        out[j, CHORD] = chord.real
        out[j, CHORD_ODD] = -chord.imag / root
        out[j, SPAN] = 0.0
        out[j, PATH] = path.real + moved * b.real
    return deviation.size


@kernel
def single_rays(n, p, deviation, out):
    """The one ray at each deviation of an order p >= 1 without a bow ray (n >= p).

    Parameters
    ----------
    n : float
    p : int
    deviation : (m,) float64
        Between the axial ray's and the grazing ray's [rad].
    out : (m, 3) float64
        Squared amplitudes without 1/sin theta, perpendicular and parallel, and the cosine of refraction; written.
    """
    for j in range(deviation.size):
        i = ray_at(n, p, deviation[j], 0.5 * math.pi, 0.5 * math.pi, -1.0)
        _d, slope, sin_i, cos_i, cos_r = ray(i, n, p)
        a_s, a_p = fresnel_product(cos_i, cos_r, n, p)
        spread = sin_i * cos_i / slope
        out[j, 0], out[j, 1], out[j, 2] = a_s * a_s * spread, a_p * a_p * spread, cos_r


@kernel(inline=True)
def airy_taylor(v):
    """Ai and its derivative for -_SERIES_TO <= v <= _DARKEST, to 1e-11; the equation Ai'' = v Ai gives the terms."""
    k = int((v + _ROOM) * _STEPS + 0.5)
    at = k / _STEPS - _ROOM
    h = v - at
    c0, c1 = _AI[k, 0], _AI[k, 1]
    c2 = at * c0 / 2.0
    c3 = (at * c1 + c0) / 6.0
    c4 = (at * c2 + c1) / 12.0
    c5 = (at * c3 + c2) / 20.0
    c6 = (at * c4 + c3) / 30.0
    c7 = (at * c5 + c4) / 42.0
    c8 = (at * c6 + c5) / 56.0
    value = c0 + h * (c1 + h * (c2 + h * (c3 + h * (c4 + h * (c5 + h * (c6 + h * (c7 + h * c8)))))))
    slope = c1 + h * (2 * c2 + h * (3 * c3 + h * (4 * c4 + h * (5 * c5 + h * (6 * c6 + h * (7 * c7 + h * 8 * c8))))))
    return value, slope


@kernel(inline=True)
def airy_far(zeta, root):
    """Squares of Ai(-zeta) and Ai'(-zeta) for zeta >= _SERIES_TO, to 1e-8 of their means (DLMF 9.7.9, 9.7.10)."""
    w = 2.0 / 3.0 * zeta * root
    y = 1.0 / w
    y2 = y * y
    p = 1.0 + y2 * (-0.03713348765432099 + y2 * 0.05764919041266972)
    q = y * (0.06944444444444445 + y2 * (-0.037993059127800640 + y2 * 0.11609906402551541))
    dp = 1.0 + y2 * (0.04388503086419753 + y2 * -0.06266216349203231)
    dq = y * (-0.09722222222222222 + y2 * (0.04246283078989483 + y2 * -0.12410589602727459))
    c, s = math.cos(w - 0.25 * math.pi), math.sin(w - 0.25 * math.pi)
    value, slope = c * p + s * q, s * dp - c * dq
    return value * value / (math.pi * root), slope * slope * root / math.pi


@kernel(inline=True)
def airy_mean(zeta, root):
    """Means of the squares over a fringe, half of the squared moduli, for zeta > 2 (DLMF 9.8.20, 9.8.21)."""
    c = 1.0 / (zeta * zeta * zeta)
    value = (1.0 + c * (-0.15625 + c * 0.56396484375)) / (2.0 * math.pi * root)
    return value, (1.0 + c * (0.21875 - c * 0.66650390625)) * root / (2.0 * math.pi)


@kernel(inline=True)
def fringe_visibility(turns):
    """1 where fringes are wide enough for a sun's disc to show them, 0 where they are not, smooth between."""
    u = min(max((FADE_TO - turns) / (FADE_TO - FADE_FROM), 0.0), 1.0)
    return u * u * (3.0 - 2.0 * u)


@kernel
def add_pairs(size, starts, bin_of, pairs, out):
    """Add the light of all bows of a drop to the bins.

    Parameters
    ----------
    size : AirySize
    starts : (2 paths + 1,) int64
        Where the bright and the dark side of each order begin in the next two.
    bin_of : (m,) int32
    pairs : (m, FIELDS) float64
        Amplitudes times the root of what share of its bin a pair stands for.
    out : (paths, 2, bins) float64
        Added to.
    """
    x = size.size_parameter
    stretch = x ** (2.0 / 3.0)
    before = 0.5 * x ** (1.0 / 3.0)
    for section in range(starts.size - 1):
        p = section // 2
        kappa = size.exponent * p
        for j in range(starts[section], starts[section + 1]):
            z = pairs[j, Z]
            zeta = stretch * z
            if zeta < -_DARKEST:
                # sorted by distance from the bow: all others are darker
                break
            u_s, u_p, v_s, v_p = pairs[j, U_S], pairs[j, U_P], pairs[j, V_S], pairs[j, V_P]
            shown = 1.0
            ai2 = slope2 = 0.0
            if zeta > _FIRST_ZERO:
                # the bow itself is never faded, whatever the drop
                shown = 1.0 - (1.0 - fringe_visibility(x * pairs[j, SPAN])) * min((zeta - _FIRST_ZERO) / 1.75, 1.0)
            if shown > 0.0:
                if zeta <= _SERIES_TO:
                    value, slope = airy_taylor(-zeta)
                    ai2, slope2 = value * value, slope * slope
                else:
                    ai2, slope2 = airy_far(zeta, math.sqrt(zeta))
            if shown < 1.0:
                mean2, mean_slope2 = airy_mean(zeta, math.sqrt(zeta))
                ai2 = mean2 + shown * (ai2 - mean2)
                slope2 = mean_slope2 + shown * (slope2 - mean_slope2)
            faint = before
            if kappa > 0.0:
                odd = kappa * pairs[j, CHORD_ODD]
                root = math.sqrt(abs(z))
                a = odd * root
                even = 1.0 + math.copysign(0.5 * a * a, z)
                depth = -2.0 * kappa * pairs[j, CHORD]
                if a > 1e-4:
                    if z > 0.0:
                        # cosh and sinh over exp(a), which the outer ray's shorter chord gives back
                        e = math.exp(-2.0 * a)
                        even, odd = 0.5 * (1.0 + e), 0.5 * (1.0 - e) / root
                        depth += 2.0 * a
                    else:
                        even, odd = math.cos(a), math.sin(a) / root
                u_s, v_s = u_s * even - v_s * z * odd, v_s * even - u_s * odd
                u_p, v_p = u_p * even - v_p * z * odd, v_p * even - u_p * odd
                faint *= math.exp(depth)
            slope2 /= stretch
            k = bin_of[j]
            out[p, 0, k] += faint * (u_s * u_s * ai2 + v_s * v_s * slope2)
            out[p, 1, k] += faint * (u_p * u_p * ai2 + v_p * v_p * slope2)

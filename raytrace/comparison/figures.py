"""From what leaves a drop to the figures of each bow."""

from __future__ import annotations

import numpy as np

from raytrace.comparison.estimate import Estimate, jackknife
from raytrace.drops.bow_angle import bow_angle, bow_ray_weight, main_maximum_deg

RED_NM, VIOLET_NM = 700.0, 400.0
NAMES = {1: "primary", 2: "secondary", 3: "tertiary", 4: "quaternary"}
# A size law's larger and smaller drops have their maxima within this many times the shift of the mean one's
_SHIFTS = 1.7
# How far beyond the colours' edges the peak is looked for, and over which width a parabola finds its top [deg]
_BEYOND_DEG, _TOP_DEG = 1.5, 0.12
# Within this distance of the sun or the antisolar point light gathers on the axis; what of it lies between a bow and
# the axis is left out of the search, over a mean of some bins so that noise has no say
_AXIS_DEG, _SMOOTH_BINS = 6.0, 5
# A peak stands out where it is this much above the lowest place between it and the axis
_STANDS_OUT = 1.05
# Figures by ray counts: those at 550 nm, and those of the whole spectrum
MONO_FIGURES = (
    "light_share",
    "peak_radiance_sr_550nm",
    "peak_ratio_550nm",
    "polarisation",
    "over_own_glow_550nm",
    "over_own_glow_550nm_filtered",
)
COLOUR_FIGURES = ("peak_ratio_luminance",)


def order_name(order: int) -> str:
    """Name of a bow by its order."""
    return NAMES.get(order, f"{order}th")


def edges(
    index_red: float, index_violet: float, index_mono: float, order: int, *, size_parameter: float | None = None
) -> dict | None:
    """Where the colours of a bow stand by ray optics, without the sun's disc.

    Parameters
    ----------
    index_red, index_violet, index_mono : float
        At 700, 400 and 550 nm.
    order : int
    size_parameter : float, optional
        Of drops whose waves count: their peak is looked for farther on the bright side too.

    Returns
    -------
    dict or None
        `centre` ("antisolar" or "sun", by the place at 550 nm), `ray_deg` the scattering angle of the bow ray at
        550 nm, `window` of scattering angles to look for the peak in [deg], and `red_edge_deg`, `violet_edge_deg`,
        `colour_width_deg`: radii from that centre; None where the drop makes no bow of this order.
    """
    if max(index_red, index_violet, index_mono) >= order + 1:
        return None
    angle = [float(bow_angle(n, order).scattering_deg) for n in (index_red, index_violet, index_mono)]
    turned = [float(bow_angle(n, order).deviation_deg) for n in (index_red, index_violet)]
    centre = "antisolar" if angle[2] > 90 else "sun"
    red, violet = (180 - a if centre == "antisolar" else a for a in angle[:2])
    low, high = min(angle) - _BEYOND_DEG, max(angle) + _BEYOND_DEG
    if size_parameter is not None:
        # light is on the side of larger deviations, which run backwards through the angles in every other half turn
        shift = _SHIFTS * main_maximum_deg(index_mono, order, size_parameter)
        backwards = bow_angle(index_mono, order).deviation_deg // 180 % 2 == 1
        low, high = (low - shift, high) if backwards else (low, high + shift)
    # colours on both sides of the axis: what lies between runs up to it
    if abs(turned[0] // 180 - turned[1] // 180) > 0:
        low, high = (low, 180.0) if centre == "antisolar" else (0.0, high)
    return {
        "centre": centre,
        "ray_deg": angle[2],
        "window": (max(low, 0.0), min(high, 180.0)),
        "red_edge_deg": red,
        "violet_edge_deg": violet,
        # of the deviations, which do not fold back at the antisolar point or the sun
        "colour_width_deg": abs(turned[1] - turned[0]),
    }


def off_axis(curve, angle_deg, place, disc_radius_deg) -> tuple[float, float] | None:
    """The part of a bow's window in which its own peak is the highest, without the light that gathers on the axis.

    Rays that meet the axis away from the drop's middle are focused there, and a bow beside it stands on the flank of
    that focus. The flank is left out up to the lowest place between the axis and the bow ray.

    Parameters
    ----------
    curve : (n,) array
        Light of the bow's order.
    angle_deg : (n,) array
        Scattering angles [deg].
    place : dict
        From `edges`.
    disc_radius_deg : float
        Of the sun's disc [deg].

    Returns
    -------
    (float, float) or None
        Window of scattering angles [deg]; None where the peak cannot be told from the axis, or there is no light.
    """
    ray, (low, high) = place["ray_deg"], place["window"]
    if min(ray, 180.0 - ray) <= disc_radius_deg:
        return None
    kernel = np.full(_SMOOTH_BINS, 1.0 / _SMOOTH_BINS)
    smooth = np.convolve(np.pad(curve, _SMOOTH_BINS // 2, mode="edge"), kernel, "valid")
    floor = 0.0
    for near in (0.0, 180.0):
        end = low if near == 0.0 else high
        if abs(end - near) < _AXIS_DEG:
            span = (end, ray) if near == 0.0 else (ray, end)
            between = np.flatnonzero((angle_deg >= span[0]) & (angle_deg <= span[1]))
            if not between.size:
                return None
            least = between[np.argmin(smooth[between])]
            floor = max(floor, float(smooth[least]))
            low, high = (float(angle_deg[least]), high) if near == 0.0 else (low, float(angle_deg[least]))
    inside = (angle_deg >= low) & (angle_deg <= high)
    if not inside.any() or curve[inside].max() <= 0.0 or smooth[inside].max() < _STANDS_OUT * floor:
        return None
    return low, high


def top_of(curve, angle_deg, window) -> float:
    """Where a curve has its top within a window of angles: the vertex of a parabola through points round it [deg]."""
    inside = np.flatnonzero((angle_deg >= window[0]) & (angle_deg <= window[1]))
    best = inside[np.argmax(curve[inside])]
    near = np.flatnonzero(np.abs(angle_deg - angle_deg[best]) <= _TOP_DEG)
    a, b, _ = np.polyfit(angle_deg[near] - angle_deg[best], curve[near] / curve[best], 2)
    shift = -b / (2 * a) if a < 0 else 0.0
    return float(angle_deg[best] + np.clip(shift, -_TOP_DEG, _TOP_DEG))


def bow_figures(estimate: Estimate, order: int, place: dict, primary: dict | None) -> dict:
    """Monte Carlo figures of one bow with their standard errors.

    Parameters
    ----------
    estimate : Estimate
    order : int
    place : dict
        From `edges`.
    primary : dict or None
        `mono_bin` and `luminance_bin` of the primary, for the ratios; None where there is no primary.

    Returns
    -------
    dict
        `value` and `error`: figure by name; `mono_bin`, `luminance_bin`: bins of the peaks;
        `luminance_relative_error` of the luminance peak; `filter`: how the best filter stands. Where the peak cannot
        be told from the light on the axis, all that stands on it is None.
    """
    if primary is not None and primary["mono_bin"] is None:
        primary = None
    p, angle = order + 1, estimate.angle_deg
    mono_mean, colour_mean = estimate.mono.mean(axis=0), estimate.colour[1].mean(axis=0)
    bins, windows = {}, []
    for name, mean in (("mono_bin", mono_mean), ("luminance_bin", colour_mean)):
        curve = mean[p].sum(axis=0)
        windows.append(off_axis(curve, angle, place, estimate.disc_radius_deg))
        if windows[-1] is None:
            return _without_peak(estimate.share[:, p])
        bins[name] = int(np.argmin(np.abs(angle - top_of(curve, angle, windows[-1]))))
    here, there = bins["mono_bin"], bins["luminance_bin"]
    first = primary or bins
    reference = 2 if primary else p

    def mono(at, at_first, share):
        s, q = at[p]
        glow = at.sum(axis=0) - at[p]
        # a linear filter at any angle gives a mean of the two ratios weighted by what it lets through
        filtered = max(s / glow[0], q / glow[1])
        peak = s + q
        return [share, peak, peak / at_first, (s - q) / peak, peak / glow.sum(), filtered]

    columns = estimate.mono[:, :, :, here], estimate.mono[:, reference, :, first["mono_bin"]].sum(axis=1)
    value, error = jackknife(mono, *columns, estimate.share[:, p])
    luminance = estimate.colour[1].sum(axis=2)
    columns = luminance[:, p, there], luminance[:, reference, first["luminance_bin"]]
    ratio, ratio_error = jackknife(lambda a, b: a / b, *columns)
    alone, alone_error = jackknife(lambda a: a, columns[0])
    low, high = np.searchsorted(angle, [windows[1][0] - 1.0, windows[1][1] + 1.0])
    some = slice(max(low, 0), high)
    peak, peak_error = jackknife(lambda curve: top_of(curve, angle[some], windows[1]), luminance[:, p, some])
    values = dict(zip(MONO_FIGURES, value.tolist(), strict=True)) | {"peak_ratio_luminance": float(ratio)}
    errors = dict(zip(MONO_FIGURES, error.tolist(), strict=True)) | {"peak_ratio_luminance": float(ratio_error)}
    values["peak_deg"] = 180 - float(peak) if place["centre"] == "antisolar" else float(peak)
    errors["peak_deg"] = float(peak_error)
    for name in ("peak_ratio_550nm", "peak_ratio_luminance"):
        if order == 1:
            values[name], errors[name] = 1.0, 0.0
        elif primary is None:
            # there is nothing to compare with
            values[name] = errors[name] = None
    s, q = mono_mean[p, :, here]
    glow = mono_mean[:, :, here].sum(axis=0) - mono_mean[p, :, here]
    return {
        "value": values,
        "error": errors,
        "luminance_relative_error": float(alone_error / alone),
        "filter": "along the arc" if s / glow[0] >= q / glow[1] else "across the arc",
        **bins,
    }


def _without_peak(shares) -> dict:
    """Figures of a bow whose peak cannot be told from the light on the axis."""
    share, error = jackknife(lambda a: a, shares)
    none = dict.fromkeys((*MONO_FIGURES, *COLOUR_FIGURES, "peak_deg"))
    return {
        "value": none | {"light_share": float(share)},
        "error": none | {"light_share": float(error)},
        "luminance_relative_error": 0.0,
        "filter": None,
        "mono_bin": None,
        "luminance_bin": None,
    }


def ray_weight(index: float, order: int) -> float:
    """Fresnel weight of the bow ray for unpolarised light, (1 - R)² R^k, mean of both polarisations."""
    s, q = bow_ray_weight(index, order)
    return 0.5 * (float(s) + float(q))


def relative_error(value: float, error: float) -> float:
    """Standard error over the figure; infinite where the figure is zero and its error is not."""
    return error / abs(value) if value else (np.inf if error else 0.0)

"""From what leaves a drop to the figures of each bow."""

from __future__ import annotations

import numpy as np

from raytrace.comparison.estimate import Estimate, jackknife
from raytrace.drops.bow_angle import bow_angle, bow_ray_weight

RED_NM, VIOLET_NM = 700.0, 400.0
NAMES = {1: "primary", 2: "secondary", 3: "tertiary", 4: "quaternary"}
# How far beyond the colours' edges the peak is looked for, and over which width a parabola finds its top [deg]
_BEYOND_DEG, _TOP_DEG = 1.5, 0.12
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


def edges(index_red: float, index_violet: float, index_mono: float, order: int) -> dict | None:
    """Where the colours of a bow stand by ray optics, without the sun's disc.

    Returns
    -------
    dict or None
        `centre` ("antisolar" or "sun", by the place at 550 nm), `window` of scattering angles to look for the peak in
        [deg], and `red_edge_deg`, `violet_edge_deg`, `colour_width_deg`: radii from that centre; None where the drop
        makes no bow of this order.
    """
    if max(index_red, index_violet, index_mono) >= order + 1:
        return None
    angle = [float(bow_angle(n, order).scattering_deg) for n in (index_red, index_violet, index_mono)]
    turned = [float(bow_angle(n, order).deviation_deg) for n in (index_red, index_violet)]
    centre = "antisolar" if angle[2] > 90 else "sun"
    red, violet = (180 - a if centre == "antisolar" else a for a in angle[:2])
    low, high = min(angle) - _BEYOND_DEG, max(angle) + _BEYOND_DEG
    return {
        "centre": centre,
        "window": (max(low, 0.1), min(high, 179.9)),
        "red_edge_deg": red,
        "violet_edge_deg": violet,
        # of the deviations, which do not fold back at the antisolar point or the sun
        "colour_width_deg": abs(turned[1] - turned[0]),
    }


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
        `luminance_relative_error` of the luminance peak; `filter`: how the best filter stands.
    """
    p, angle = order + 1, estimate.angle_deg
    mono_mean, colour_mean = estimate.mono.mean(axis=0), estimate.colour[1].mean(axis=0)
    bins = {}
    for name, mean in (("mono_bin", mono_mean), ("luminance_bin", colour_mean)):
        bins[name] = int(np.argmin(np.abs(angle - top_of(mean[p].sum(axis=0), angle, place["window"]))))
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
    low, high = np.searchsorted(angle, [place["window"][0] - 1.0, place["window"][1] + 1.0])
    some = slice(max(low, 0), high)
    peak, peak_error = jackknife(lambda curve: top_of(curve, angle[some], place["window"]), luminance[:, p, some])
    values = dict(zip(MONO_FIGURES, value.tolist(), strict=True)) | {"peak_ratio_luminance": float(ratio)}
    errors = dict(zip(MONO_FIGURES, error.tolist(), strict=True)) | {"peak_ratio_luminance": float(ratio_error)}
    values["peak_deg"] = 180 - float(peak) if place["centre"] == "antisolar" else float(peak)
    errors["peak_deg"] = float(peak_error)
    if primary is None and order == 1:
        for name in ("peak_ratio_550nm", "peak_ratio_luminance"):
            values[name], errors[name] = 1.0, 0.0
    s, q = mono_mean[p, :, here]
    glow = mono_mean[:, :, here].sum(axis=0) - mono_mean[p, :, here]
    return {
        "value": values,
        "error": errors,
        "luminance_relative_error": float(alone_error / alone) if alone > 0 else 0.0,
        "filter": "along the arc" if s / glow[0] >= q / glow[1] else "across the arc",
        **bins,
    }


def ray_weight(index: float, order: int) -> float:
    """Fresnel weight of the bow ray for unpolarised light, (1 - R)² R^k, mean of both polarisations."""
    s, q = bow_ray_weight(index, order)
    return 0.5 * (float(s) + float(q))

"""The plot of a comparison: polarisation, radial luminance of each order and of all, and the colours of the sky."""

from __future__ import annotations

import io
import textwrap
from pathlib import Path

import numpy as np

from raytrace.camera import develop
from raytrace.comparison.text import heading
from raytrace.errors import InputError
from raytrace.files import write_atomic

# Lines must be told apart in grey: by dashes, the later orders by marks on a thin line; each has its number at its peak
_DASHES = ("-", (0, (6, 2)), (0, (3, 1.5)), (0, (1, 1)), (0, (6, 2, 1, 2)), (0, (8, 2, 1, 2, 1, 2)), (0, (12, 3)))
_MARKS = ("o", "s", "^", "D", "v")
_GREYS = ("0.0", "0.25", "0.4", "0.2", "0.45", "0.35", "0.5")
# Numbers of bows: least distance beside each other, and above each other as a factor of luminance
_APART_DEG, _APART = 3.4, 2.4
_BADGE = {"boxstyle": "circle,pad=0.18", "fc": "white", "ec": "0.3", "lw": 0.7}
# Luminance of the first bow's peak in the strip of colours, as a share of white
_STRIP_LEVEL = 0.35
_STRIP_ROWS, _STRIP_COLUMNS = 60, 1800

_METHOD_NOTES = {
    "rays": "Ray optics with the sun's disc, no waves.",
    "airy": "Airy bows with the sun's disc; grey: ray optics.",
    "waves": "Exact waves with the sun's disc, without what is diffracted; grey: ray optics.",
    "auto": "Rays, Airy bows or exact waves, by size and order, with the sun's disc; grey: ray optics.",
}


def write_plot(report, path) -> None:
    """Draw a report and write it as PNG, whole or not at all.

    Parameters
    ----------
    report : Report
    path : path-like
        A name that ends in .png.

    Raises
    ------
    InputError
        If it does not.
    """
    path = Path(path)
    if path.suffix.lower() != ".png":
        raise InputError(f"{path}: a plot is written as PNG; what works: a name that ends in .png")
    write_atomic(path, plot_png(report))


def plot_png(report) -> bytes:
    """The plot of a report as the bytes of a PNG file."""
    figure = draw(report)
    out = io.BytesIO()
    figure.savefig(out, format="png", metadata={"Software": report.as_dict()["made_by"]})
    return out.getvalue()


def draw(report):
    """The plot of a report as a matplotlib figure of three axes: polarisation, luminance, colours."""
    from matplotlib.figure import Figure

    figure = Figure(figsize=(12.4, 8.2), dpi=115, layout="constrained")
    top, main, strip = figure.subplots(3, 1, sharex=True, height_ratios=(1.7, 5.0, 0.8))
    _draw_polarisation(top, report)
    _draw_luminance(main, report)
    strip.imshow(_strip(report), extent=(0.0, 180.0, 0.0, 1.0), aspect="auto", interpolation="nearest")
    strip.set_yticks([])
    strip.set_ylabel("colours", rotation=90)
    strip.set_xlabel(
        "distance from the antisolar point [deg]     (0: opposite the sun, 180: the sun; scattering angle = 180 - this)"
    )
    strip.set_xlim(0.0, 180.0)
    strip.set_xticks(range(0, 181, 10))
    # beside the axes, where it hides nothing
    figure.legend(*main.get_legend_handles_labels(), loc="outside right upper", fontsize=8, handlelength=4.0)
    figure.supxlabel(_note(report), fontsize=7.5, x=0.01, ha="left")
    return figure


def place_numbers(points) -> list[float]:
    """Heights for the numbers of peaks, moved up until none lies on another.

    Parameters
    ----------
    points : sequence of (float, float)
        Distance from the antisolar point [deg] and luminance of each peak.

    Returns
    -------
    list of float
        Luminance at which each number stands.
    """
    placed = []
    for x, y in points:
        height = y * 1.9
        while any(abs(x - a) < _APART_DEG and 1 / _APART < height / b < _APART for a, b in placed):
            height *= 1.2
        placed.append((x, height))
    return [height for _, height in placed]


def spread(places) -> list[float]:
    """Places along a row, pushed apart where they would touch, in the order given [deg]."""
    order = np.argsort(places, kind="stable")
    out = np.array(places, dtype=np.float64)
    for _ in range(200):
        gaps = np.diff(out[order])
        close = np.flatnonzero(gaps < _APART_DEG - 1e-9)
        if not close.size:
            break
        for k in close:
            push = 0.5 * (_APART_DEG - (out[order[k + 1]] - out[order[k]]))
            if push > 0:
                out[order[k]] -= push
                out[order[k + 1]] += push
        out = np.clip(out, 1.5, 178.5)
    return out.tolist()


def _bows(report):
    """Rows whose peak is known, with its distance from the antisolar point [deg]."""
    for row in report.rows:
        if row.peak_deg is not None:
            yield row, row.peak_deg if row.centre == "antisolar" else 180.0 - row.peak_deg


def _draw_polarisation(axes, report) -> None:
    luminance = report.curves["xyz"][..., 1].sum(axis=0)
    degree = (luminance[0] - luminance[1]) / np.maximum(luminance.sum(axis=0), 1e-300)
    axes.axhline(0.0, color="0.6", lw=0.6)
    axes.plot(180.0 - report.curves["angle_deg"], degree, color="0.0", lw=1.2)
    bows = list(_bows(report))
    for (row, at), beside in zip(bows, spread([at for _, at in bows]), strict=True):
        axes.annotate(
            str(row.order),
            (at, row.polarisation),
            xytext=(beside, 1.36),
            ha="center",
            va="center",
            fontsize=7,
            bbox=_BADGE,
            arrowprops={"arrowstyle": "-", "color": "0.55", "lw": 0.6, "shrinkB": 2},
        )
        axes.plot([at], [row.polarisation], "o", ms=4, mfc="white", mec="0.0", mew=0.9, clip_on=False, zorder=5)
    axes.set_ylim(-1.05, 1.62)
    axes.set_yticks([-1.0, -0.5, 0.0, 0.5, 1.0])
    axes.set_ylabel("degree of\npolarisation\n(+ along the arcs)")
    axes.set_title("\n".join(textwrap.wrap("Bows by order: " + heading(report.input), 120)), fontsize=11, loc="left")
    axes.grid(alpha=0.25, lw=0.5)


def _draw_luminance(axes, report) -> None:
    curves = report.curves
    radius = 180.0 - curves["angle_deg"]
    luminance = curves["xyz"][..., 1].sum(axis=1) * _per_illuminance(curves)
    total = luminance.sum(axis=0)
    axes.plot(radius, total, color="0.0", lw=2.4, label="all orders")
    if curves["rays_xyz"] is not None:
        # the same drops by ray optics, each order behind its own line
        rays = curves["rays_xyz"][..., 1].sum(axis=1) * _per_illuminance(curves)
        style = {"color": "0.72", "lw": 0.9, "zorder": 1.5}
        axes.plot(radius, rays.sum(axis=0), label="by rays alone", **style)
        for row in report.rows:
            if row.centre is not None:
                curve = rays[row.order + 1]
                axes.plot(radius, np.where(curve > 0, curve, np.nan), **style)
    for p, name, dash in ((0, "external reflection", (0, (1, 1))), (1, "straight through", (0, (6, 2)))):
        axes.plot(radius, luminance[p], color="0.65", lw=1.6, ls=dash, label=name)
    for row in report.rows:
        if row.centre is None:
            continue
        curve = luminance[row.order + 1]
        axes.plot(
            radius,
            np.where(curve > 0, curve, np.nan),
            label=row.name if row.order > 4 else f"{row.name} ({row.order})",
            **_style(row.order),
        )
    bows = list(_bows(report))
    peaks = [(at, float(np.interp(180.0 - at, curves["angle_deg"], luminance[row.order + 1]))) for row, at in bows]
    heights = place_numbers(peaks)
    for (row, at), height in zip(bows, heights, strict=True):
        axes.text(max(at, 1.5), height, row.order, ha="center", va="center", fontsize=7, bbox=_BADGE, zorder=6)
    axes.set_yscale("log")
    most = max([float(total[(radius > 1) & (radius < 150)].max()), *heights])
    axes.set_ylim(min([most * 3e-7, *(0.3 * peak for _, peak in peaks)]), most * 20)
    axes.set_ylabel("luminance per illuminance by the sun\n[cd m$^{-2}$ lx$^{-1}$ = sr$^{-1}$], whole extinction")
    axes.grid(alpha=0.25, lw=0.5)


def _style(order: int) -> dict:
    """How the line of a bow looks; no two alike."""
    k = order - 1
    if k < len(_DASHES):
        return {"color": _GREYS[k], "ls": _DASHES[k], "lw": 1.1}
    mark = _MARKS[k - len(_DASHES)]
    return {
        "color": "0.3",
        "ls": "-",
        "lw": 0.7,
        "marker": mark,
        "ms": 3.2,
        "mfc": "white",
        "mew": 0.7,
        "markevery": 45,
    }


def _per_illuminance(curves) -> float:
    """One over the illuminance by the sun [1/lx]: all light leaves somewhere, so the sphere's luminance says it."""
    ring = np.abs(np.diff(np.cos(np.radians(np.linspace(0.0, 180.0, curves["angle_deg"].size + 1))))) * 2 * np.pi
    return 1.0 / float(curves["xyz"][..., 1].sum(axis=(0, 1)) @ ring)


def _strip(report) -> np.ndarray:
    """Colours of the rain's light before black against distance, as a camera would develop them."""
    curves = report.curves
    xyz = curves["xyz"].sum(axis=(0, 1))
    at = 180.0 - (np.arange(_STRIP_COLUMNS) + 0.5) * 180.0 / _STRIP_COLUMNS
    line = np.stack([np.interp(at, curves["angle_deg"], xyz[:, c]) for c in range(3)], axis=-1)
    at_peak = next((at for _, at in _bows(report)), 42.0)
    white = float(np.interp(180.0 - at_peak, curves["angle_deg"], xyz[:, 1])) / _STRIP_LEVEL
    pixels = np.ascontiguousarray(line / white, dtype=np.float32)
    rgb, counts = np.empty(pixels.shape, dtype=np.uint8), np.zeros(2, dtype=np.int64)
    matrix = develop.xyz_to_display("d65", None)
    develop.develop_pixels(pixels, matrix, develop.code_table(), develop.dither_stream(0), 0, False, rgb, counts)
    return np.broadcast_to(rgb, (_STRIP_ROWS, *rgb.shape))


def _note(report) -> str:
    from raytrace.comparison.report import CAUTION

    text = (
        f"{_METHOD_NOTES[report.input['method']]} Numbers: orders at their peaks; circles: polarisation of each bow's "
        "own light there, at 550 nm. Colours: "
        f"rain before black, exposed so that the first bow's peak is at {_STRIP_LEVEL:g} of white, sRGB. "
    )
    if any(row.centre == "sun" for row in report.rows):
        text += CAUTION
    return "\n".join(textwrap.wrap(text, 200))

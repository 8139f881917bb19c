"""The plot of a comparison: polarisation, radial luminance of each order and of all, and the colours of the sky."""

from __future__ import annotations

import io
import textwrap
from pathlib import Path

import numpy as np

from raytrace.camera import develop
from raytrace.errors import InputError
from raytrace.files import write_atomic

# Lines must be told apart in grey: by dashes and width, and each has its name at its peak
_DASHES = ("-", (0, (6, 2)), (0, (3, 1.5)), (0, (1, 1)), (0, (6, 2, 1, 2)), (0, (3, 1, 1, 1)), (0, (8, 3)))
_GREYS = ("0.0", "0.25", "0.4", "0.2", "0.5", "0.35", "0.55")
# Luminance of the primary's peak in the strip of colours, as a share of white
_STRIP_LEVEL = 0.35
_STRIP_ROWS, _STRIP_COLUMNS = 60, 1800


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
    from matplotlib.figure import Figure

    curves = report.curves
    radius = 180.0 - curves["angle_deg"]
    luminance = curves["xyz"][..., 1]
    per_lux = _per_illuminance(curves)
    figure = Figure(figsize=(11.0, 8.2), dpi=130, layout="constrained")
    top, main, strip = figure.subplots(3, 1, sharex=True, height_ratios=(1.5, 5.0, 0.9))
    total = luminance.sum(axis=0)
    degree = (total[0] - total[1]) / np.maximum(total.sum(axis=0), 1e-300)
    top.plot(radius, degree, color="0.0", lw=1.2)
    top.axhline(0.0, color="0.6", lw=0.6)
    top.set_ylabel("degree of\npolarisation\n(+ along the arcs)")
    top.set_ylim(-1.0, 1.0)
    top.set_title(_title(report), fontsize=11, loc="left")
    main.plot(radius, total.sum(axis=0) * per_lux, color="0.0", lw=2.2, label="all orders")
    for p, name in ((0, "external reflection"), (1, "straight through")):
        main.plot(radius, luminance[p].sum(axis=0) * per_lux, color="0.6", lw=1.0, ls=_DASHES[3 - 2 * p], label=name)
    for k, row in enumerate(report.rows):
        if row.centre is None:
            continue
        curve = luminance[row.order + 1].sum(axis=0) * per_lux
        style = {"color": _GREYS[k % len(_GREYS)], "ls": _DASHES[k % len(_DASHES)], "lw": 1.1}
        main.plot(radius, np.where(curve > 0, curve, np.nan), label=f"{row.name}", **style)
        at = row.peak_deg if row.centre == "antisolar" else 180.0 - row.peak_deg
        peak = float(np.interp(180.0 - at, curves["angle_deg"], curve))
        main.annotate(
            row.name, (at, peak), xytext=(0, 5), textcoords="offset points", ha="center", va="bottom", fontsize=8
        )
        top.plot([at], [row.polarisation], "o", ms=3.5, mfc="white", mec="0.0", mew=0.9)
        top.annotate(str(row.order), (at, row.polarisation), xytext=(4, 2), textcoords="offset points", fontsize=7)
    main.set_yscale("log")
    most = float((total.sum(axis=0) * per_lux)[(radius > 1) & (radius < 150)].max())
    main.set_ylim(most * 3e-7, most * 30)
    main.set_ylabel("luminance per illuminance by the sun\n[cd m$^{-2}$ lx$^{-1}$ = sr$^{-1}$], whole extinction")
    main.legend(loc="lower right", fontsize=8, ncols=3, framealpha=0.95)
    main.grid(alpha=0.25, lw=0.5)
    top.grid(alpha=0.25, lw=0.5)
    strip.imshow(_strip(curves, report), extent=(0.0, 180.0, 0.0, 1.0), aspect="auto", interpolation="nearest")
    strip.set_yticks([])
    strip.set_ylabel("colours", rotation=90)
    strip.set_xlabel(
        "distance from the antisolar point [deg]     (0: opposite the sun, 180: the sun; scattering angle = 180 - this)"
    )
    strip.set_xlim(0.0, 180.0)
    strip.set_xticks(range(0, 181, 10))
    figure.supxlabel(_note(report), fontsize=7.5, x=0.01, ha="left")
    out = io.BytesIO()
    figure.savefig(out, format="png", metadata={"Software": report.as_dict()["made_by"]})
    return out.getvalue()


def _per_illuminance(curves) -> float:
    """One over the illuminance by the sun [1/lx]: all light leaves somewhere, so the sphere's luminance says it."""
    ring = np.abs(np.diff(np.cos(np.radians(np.linspace(0.0, 180.0, curves["angle_deg"].size + 1))))) * 2 * np.pi
    return 1.0 / float(curves["xyz"][..., 1].sum(axis=(0, 1)) @ ring)


def _strip(curves, report) -> np.ndarray:
    """Colours of the rain's light before black against distance, as a camera would develop them."""
    xyz = curves["xyz"].sum(axis=(0, 1))
    at = 180.0 - (np.arange(_STRIP_COLUMNS) + 0.5) * 180.0 / _STRIP_COLUMNS
    line = np.stack([np.interp(at, curves["angle_deg"], xyz[:, c]) for c in range(3)], axis=-1)
    first = next((row for row in report.rows if row.centre is not None), None)
    at_peak = 42.0 if first is None else (first.peak_deg if first.centre == "antisolar" else 180.0 - first.peak_deg)
    white = float(np.interp(180.0 - at_peak, curves["angle_deg"], xyz[:, 1])) / _STRIP_LEVEL
    pixels = np.ascontiguousarray(line / white, dtype=np.float32)
    rgb, counts = np.empty(pixels.shape, dtype=np.uint8), np.zeros(2, dtype=np.int64)
    matrix = develop.xyz_to_display("d65", None)
    develop.develop_pixels(pixels, matrix, develop.code_table(), develop.dither_stream(0), 0, False, rgb, counts)
    return np.broadcast_to(rgb, (_STRIP_ROWS, *rgb.shape))


def _title(report) -> str:
    return "Bows by order: " + next(iter(report._heading()))


def _note(report) -> str:
    from raytrace.comparison.report import CAUTION

    text = (
        "Ray optics with the sun's disc, no waves. Circles: polarisation of each bow's own light at its peak. Colours: "
        f"rain before black, exposed so that the first bow's peak is at {_STRIP_LEVEL:g} of white, sRGB. "
    )
    if any(row.centre == "sun" for row in report.rows):
        text += CAUTION
    return "\n".join(textwrap.wrap(text, 190))

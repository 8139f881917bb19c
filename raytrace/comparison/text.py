"""A comparison as text for the terminal: aligned tables and the words below them, 120 columns wide."""

from __future__ import annotations

import math
import textwrap

from raytrace.comparison.report import CAUTION
from raytrace.scene.problems import quoted

WIDTH = 118
# Columns of the table: heading in two lines, figure, format
COLUMNS = (
    ("red", "deg", "red_edge_deg", ".2f"),
    ("violet", "deg", "violet_edge_deg", ".2f"),
    ("peak", "deg", "peak_deg", ".2f"),
    ("width", "deg", "colour_width_deg", ".2f"),
    ("share of", "light", "light_share", ".3e"),
    ("bow ray", "weight", "bow_ray_weight", ".5f"),
    ("bow ray", "ratio", "bow_ray_ratio", ".4f"),
    ("peak", "ratio 550", "peak_ratio_550nm", ".4f"),
    ("peak", "ratio lum", "peak_ratio_luminance", ".4f"),
    ("polari-", "sation", "polarisation", ".4f"),
    ("over own", "glow", "over_own_glow_550nm", ".3g"),
    ("same,", "filtered", "over_own_glow_550nm_filtered", ".3g"),
)
# Of the scene's table: heading in two lines, figure; then filters
_SCENE_COLUMNS = (
    ("peak", "cd/m2", "peak_luminance_cd_m2"),
    ("behind", "cd/m2", "behind_luminance_cd_m2"),
    ("contrast", "median", "contrast_median"),
    ("contrast", "best", "contrast_best"),
)
# What each filter leaves at the other place stands in the files alone: the table would be too wide
_FILTER_COLUMNS = (("filter", "for top", "filter_top"), ("filter", "for feet", "filter_feet"))


def heading(given: dict) -> str:
    """What was compared, on one line."""
    if "drop" in given:
        drop = given["drop"]
        what = f"one drop of {drop['diameter_mm']:g} mm, water of {drop['temperature_c']:g} degC"
        if drop["refractive_index"] is not None:
            what = f"one drop of {drop['diameter_mm']:g} mm, index {drop['refractive_index']:g}"
        sun = drop["sun_elevation_deg"]
        light = "sunlight above the air" if sun is None else f"sunlight of a sun {sun:g} deg up"
        return f"{what}, black sky, {light}"
    scene = given["scene"]
    drops = "the first of its curtains" if scene["curtains"] > 1 else "its rain"
    return f"{quoted(scene['name'], 60)}: sun {scene['sun']['elevation_deg']:.2f} deg up; drops of {drops}"


def report_text(report) -> str:
    """The whole report: tables, each row followed by its standard errors, and what there is to say about them."""
    cells = [["bow", "", "round", *(c[0] for c in COLUMNS)], ["", "", "", *(c[1] for c in COLUMNS)]]
    for row in report.rows:
        if row.centre is None:
            cells.append([str(row.order), row.name, "none", *("-" for _ in COLUMNS)])
            continue
        round_ = {"antisolar": "antisun", "sun": "sun"}[row.centre]
        cells.append([str(row.order), row.name, round_, *(number(getattr(row, c[2]), c[3]) for c in COLUMNS)])
        cells.append(["", "", "+-", *(_error(row.standard_error.get(c[2])) for c in COLUMNS)])
    lines = [heading(report.input), "", *_aligned(cells, left=3), "", *_notes(report)]
    if any(row.scene is not None for row in report.rows):
        lines += ["", *_scene_table(report.rows), *_scene_notes(report)]
    if any(row.centre == "sun" for row in report.rows):
        lines += ["", *_wrapped("Caution: " + CAUTION)]
    return "\n".join(lines)


def number(value, form=".3g") -> str:
    """A figure in its format, a dash for none."""
    return "-" if value is None else f"{value:{form}}"


def _notes(report):
    rows = report.rows
    yield from _wrapped(
        f"{_made(report)} Lines with +- are standard errors. Edges are those of ray optics at 700 and 400 nm, peaks "
        "are after the sun's disc. Three ratios are often mixed up: the share of light is that of the whole order, the "
        "bow ray's weight is Fresnel's for one ray, the peak ratio is of radiance where each bow is brightest."
    )
    stands = {}
    for row in rows:
        if row.filter is not None:
            stands.setdefault(row.filter, []).append(row.name)
    if stands:
        yield from _wrapped(
            "The best linear filter stands " + "; ".join(f"{k}: {', '.join(v)}" for k, v in stands.items())
        )
    for row in rows:
        if row.centre is not None and row.peak_deg is None:
            axis = "antisolar point" if row.centre == "antisolar" else "sun"
            yield from _wrapped(
                f"{row.name}: its peak cannot be told from the light that gathers at the {axis}; "
                "no figure of it is given"
            )
        if row.missed:
            yield from _wrapped(f"{row.name}: {', '.join(row.missed)} {_missed(report)}")
        if row.top_elevation_deg is not None:
            where = f"top {row.top_elevation_deg:.1f} deg up"
            if row.top_elevation_deg <= 0:
                where = f"wholly below the horizon by {-row.top_elevation_deg:.1f} deg"
            yield f"{row.name}: {where}"


def _made(report) -> str:
    """By what the figures are."""
    method = report.input["method"]
    if method == "rays":
        mono, colour = (f"{rays / 1e6:.3g} M" for rays in report.rays)
        return f"{mono} rays at 550 nm and {colour} at each other wavelength."
    how = {
        "airy": "Rays, joined to Airy bows, for each size of drops.",
        "waves": "Exact waves for each size of drops; what is diffracted round them is left out.",
        "auto": "Rays, Airy bows or exact waves for each size of drops and each order, whichever is good to 1 %.",
    }[method]
    return how + (
        " Orders are added without their interference, so there is no glory. Errors are those of what rays serve; "
        "elsewhere there is none to tell."
    )


def _missed(report) -> str:
    limit = " and ".join(f"{rays / 1e6:g} M" for rays in report.most_rays)
    return f"did not reach {100 * report.tolerance:.4g} % within the limit of {limit} rays"


def _scene_table(rows):
    columns = [*_SCENE_COLUMNS, *_FILTER_COLUMNS]
    cells = [["bow", "", *(c[0] for c in columns), "arc lit", ""], ["", "", *(c[1] for c in columns), "deg", "verdict"]]
    for row in rows:
        scene = row.scene
        if scene is None:
            continue
        values = [scene[key] for *_, key in _SCENE_COLUMNS]
        errors = [scene["standard_error"][key] for *_, key in _SCENE_COLUMNS]
        for *_, name in _FILTER_COLUMNS:
            values.append(scene[name] and scene[name]["contrast"])
            errors.append(scene[name] and scene[name]["standard_error"]["contrast"])
        words = scene["verdict"].split(":")
        # the contrast stands in the row, the thresholds below
        words = scene["verdict"] if words[0].startswith("not ") and scene["contrast_best"] is None else words[0]
        arc = number(scene["visible_arc_deg"], ".0f")
        cells.append([str(row.order), row.name, *map(number, values), arc, words])
        if any(error is not None for error in errors):
            cells.append(["", "+-", *map(_error, errors), "", ""])
    yield "In the scene: contrast (L_bow - L_behind) / L_behind along the arc"
    yield from _aligned(cells, left=2, last_left=True)


def _scene_notes(report):
    from raytrace.comparison.in_scene import F_NUMBER, ISO

    for row in report.rows:
        if row.scene is None:
            continue
        parts = []
        for part in row.scene["visible"]:
            first, last = part["ends"]
            run = f"from {part['from_deg']:g} ({first}) to {part['to_deg']:g} deg ({last})"
            parts.append("the whole circle" if first == "closes" else run)
        if row.scene["exposure_s"] is not None:
            parts.append(f"exposure {_shutter(row.scene['exposure_s'])} s")
        if parts:
            yield from _wrapped(f"{row.name}: {', '.join(parts)}")
        if row.scene["tolerance_missed"]:
            yield from _wrapped(
                f"{row.name}, in the scene: {', '.join(row.scene['tolerance_missed'])} {_missed(report)}"
            )
    yield from _wrapped(
        "Arc lit: how much of the circle is in the frame, before the ground, and at least 1 % as bright as at its "
        "best; whether it can be told from what lies behind is the contrast's to say. Position angles count from the "
        f"arc's top. Exposures put the brightest part at half of white at f/{F_NUMBER:g} and ISO {ISO:g}. Thresholds "
        "of contrast: 0.02 usual for the eye in the laboratory, 0.05 for visibility ranges; colour, cloud texture and "
        "practice shift both. Filters: ideal, turned along the arc at its top or at its lowest lit part; the sky is "
        "taken as unpolarised. Standard errors are those of the sunlight from the drops of all curtains; sky, ground "
        "and the skylight that drops scatter are taken as exact."
    )


def _shutter(seconds: float) -> str:
    return f"1/{1 / seconds:.0f}" if seconds < 0.3 else f"{seconds:.2g}"


def _error(value) -> str:
    return "" if value is None or value == 0 or not math.isfinite(value) else f"{value:.1g}"


def _wrapped(text: str) -> list[str]:
    return textwrap.wrap(text, WIDTH)


def _aligned(cells, *, left: int, last_left: bool = False) -> list[str]:
    """Rows of cells as lines; the first `left` columns to the left, numbers to the right, words at the end."""
    widths = [max(len(row[k]) for row in cells) for k in range(len(cells[0]))]
    out = []
    for row in cells:
        parts = []
        for k, (text, width) in enumerate(zip(row, widths, strict=True)):
            to_left = k < left or (last_left and k == len(row) - 1)
            parts.append(text.ljust(width) if to_left else text.rjust(width))
        out.append(" ".join(parts).rstrip())
    return out

"""The result of a comparison: rows as objects, and as a table, CSV, JSON and HTML."""

from __future__ import annotations

import csv
import dataclasses
import html
import io
import json

FIGURES = (
    "red_edge_deg",
    "violet_edge_deg",
    "colour_width_deg",
    "peak_deg",
    "light_share",
    "bow_ray_weight",
    "bow_ray_ratio",
    "peak_radiance_sr_550nm",
    "peak_ratio_550nm",
    "peak_ratio_luminance",
    "polarisation",
    "over_own_glow_550nm",
    "over_own_glow_550nm_filtered",
)
CAUTION = (
    "Bows round the sun stand where you must not look: never look at the sun through a lens, finder, binoculars or "
    "telescope without a filter made for it on the front (ISO 12312-2 covers filters for direct viewing; sunglasses "
    "are none). Local rules and your site's safety instructions come first."
)
# Columns of the CSV for what a bow is in a scene; empty where there is none
_SCENE_FIGURES = ("peak_luminance_cd_m2", "behind_luminance_cd_m2", "contrast_median", "contrast_best")
_FILTERS, _FILTER_FIGURES = ("filter_top", "filter_feet"), ("contrast", "contrast_at_the_other")
_HIDDEN_BY = ("horizon", "ground", "no rain", "edge of the frame")


@dataclasses.dataclass
class Row:
    """One bow. Radii are from `centre`; `peak_*` are after the sun's disc; None where the drop makes no such bow, and
    for all that stands on the peak where it cannot be told from the light that gathers at the sun or opposite it.

    Attributes
    ----------
    order : int
    name : str
    centre : str or None
        "antisolar" or "sun".
    red_edge_deg, violet_edge_deg, colour_width_deg : float
        Radii of the ray edges at 700 and 400 nm from the centre, and the angle between them [deg].
    peak_deg : float
        Radius of the luminance peak [deg].
    light_share : float
        Share of the light that the drop intercepts at 550 nm which leaves in this order.
    bow_ray_weight, bow_ray_ratio : float
        Fresnel weight of the bow ray at 550 nm, and over the primary's.
    peak_radiance_sr_550nm : float
        Peak of the phase function at 550 nm [sr⁻¹].
    peak_ratio_550nm, peak_ratio_luminance : float
        Peak over the primary's peak, at 550 nm and in luminance under the sunlight asked for.
    polarisation : float
        Degree of linear polarisation of the order's own light at the peak at 550 nm, positive along the arc.
    over_own_glow_550nm, over_own_glow_550nm_filtered : float
        Peak over the light of all other orders of the same drops there, without and with the best linear filter.
    filter : str or None
        How the best filter stands: "along the arc" or "across the arc".
    standard_error : dict of str to float
        Of the Monte Carlo figures; the others are exact.
    missed : list of str
        Figures whose standard error did not reach the tolerance.
    top_elevation_deg : float or None
        Elevation of the arc's top where the sun's is known [deg].
    scene : dict or None
        What the bow is in the scene; see the README.
    """

    order: int
    name: str
    centre: str | None
    red_edge_deg: float | None = None
    violet_edge_deg: float | None = None
    colour_width_deg: float | None = None
    peak_deg: float | None = None
    light_share: float | None = None
    bow_ray_weight: float | None = None
    bow_ray_ratio: float | None = None
    peak_radiance_sr_550nm: float | None = None
    peak_ratio_550nm: float | None = None
    peak_ratio_luminance: float | None = None
    polarisation: float | None = None
    over_own_glow_550nm: float | None = None
    over_own_glow_550nm_filtered: float | None = None
    filter: str | None = None
    standard_error: dict = dataclasses.field(default_factory=dict)
    missed: list = dataclasses.field(default_factory=list)
    top_elevation_deg: float | None = None
    scene: dict | None = None

    def place_above_horizon(self, sun_elevation_deg: float) -> None:
        """Work out how high the arc's top stands for a sun of that elevation [deg]."""
        if self.peak_deg is not None:
            centre = -sun_elevation_deg if self.centre == "antisolar" else sun_elevation_deg
            # a circle that reaches over the zenith comes down again on the other side
            top = centre + self.peak_deg
            self.top_elevation_deg = min(top, 180.0 - top)

    def as_dict(self) -> dict:
        """The row as JSON has it."""
        out = {"order": self.order, "name": self.name, "centre": self.centre}
        out |= {name: getattr(self, name) for name in FIGURES}
        out["best_filter"] = self.filter
        error = {name: self.standard_error.get(name, 0.0) for name in FIGURES}
        out["standard_error"] = error if self.centre is not None else dict.fromkeys(FIGURES)
        out["tolerance_missed"] = list(self.missed)
        if self.top_elevation_deg is not None:
            out["top_elevation_deg"] = self.top_elevation_deg
        if self.scene is not None:
            out["scene"] = self.scene
        return out


@dataclasses.dataclass
class Report:
    """A comparison: `rows`, one a bow, and how they were made.

    Attributes
    ----------
    rows : list of Row
    input : dict
        What was compared.
    rays : (int, int)
        Rays traced at 550 nm, and at each wavelength of the spectrum.
    left_over : float
        Share of the light at 550 nm still inside after the last traced order.
    tolerance : float
    most_rays : (int, int)
    curves : dict
        `angle_deg`, `mono_sr` (paths, 2, angles) and `xyz` (paths, 2, angles, 3), for the plot.
    """

    rows: list
    input: dict
    rays: tuple
    left_over: float
    tolerance: float
    most_rays: tuple
    curves: dict

    def as_dict(self) -> dict:
        """The report as JSON has it; `schema.json` in this package describes it."""
        import raytrace

        return {
            "schema": 1,
            "made_by": f"raytrace {raytrace.__version__}",
            "input": self.input,
            "rays_550nm": self.rays[0],
            "rays_per_wavelength": self.rays[1],
            "left_over_550nm": self.left_over,
            "orders": [row.as_dict() for row in self.rows],
        }

    def to_json(self) -> str:
        """The report as JSON text.

        Raises
        ------
        ValueError
            If a figure is not a finite number.
        """
        return json.dumps(self.as_dict(), indent=1, ensure_ascii=False, allow_nan=False) + "\n"

    def to_csv(self) -> str:
        """The report as CSV text: a line a bow, the same columns whatever was compared, empty where there is nothing.

        Each Monte Carlo figure is followed by its standard error. Lists stand in one cell, parted by semicolons.
        """
        out = io.StringIO()
        writer = csv.writer(out, lineterminator="\n")
        lines = [_csv_cells(row.as_dict()) for row in self.rows]
        writer.writerow([name for name, _ in lines[0]])
        writer.writerows([["" if value is None else value for _, value in line] for line in lines])
        return out.getvalue()

    def to_text(self) -> str:
        """The report as aligned tables, each row followed by its standard errors."""
        from raytrace.comparison.text import report_text

        return report_text(self)

    def png(self) -> bytes:
        """The plot of the report as the bytes of a PNG file."""
        from raytrace.comparison.plot import plot_png

        return plot_png(self)

    def plot(self, path) -> None:
        """Write the plot of the report as PNG, whole or not at all.

        Raises
        ------
        InputError
            If the name does not end in .png.
        """
        from raytrace.comparison.plot import write_plot

        write_plot(self, path)

    def _repr_html_(self) -> str:
        """A small table for a notebook."""
        from raytrace.comparison.text import COLUMNS, number

        head = "".join(f"<th>{html.escape(f'{a} {b}')}</th>" for a, b, *_ in COLUMNS)
        body = []
        for row in self.rows:
            cells = []
            for *_, name, form in COLUMNS:
                text, error = number(getattr(row, name), form), row.standard_error.get(name)
                cells.append(f"<td>{text}{f' &plusmn; {error:.1g}' if error else ''}</td>")
            body.append(
                f"<tr><td>{row.order}</td><td>{html.escape(row.name)}</td><td>{row.centre}</td>{''.join(cells)}</tr>"
            )
        top = f"<tr><th>order</th><th>bow</th><th>round</th>{head}</tr>"
        return f"<table>{top}{''.join(body)}</table>"


def _csv_cells(row: dict):
    """Columns of one row of the JSON, name and value, in their order."""
    cells = [(name, row[name]) for name in ("order", "name", "centre")]
    cells += _with_error(FIGURES, row, row["standard_error"])
    cells += [("best_filter", row["best_filter"]), ("tolerance_missed", ";".join(row["tolerance_missed"]))]
    cells.append(("top_elevation_deg", row.get("top_elevation_deg")))
    scene = row.get("scene") or {}
    runs = [f"{r['from_deg']:g} ({r['ends'][0]}) to {r['to_deg']:g} ({r['ends'][1]})" for r in scene.get("visible", [])]
    cells += [("visible", ";".join(runs)), ("visible_arc_deg", scene.get("visible_arc_deg"))]
    hidden = scene.get("hidden_by", {})
    cells += [(f"hidden_by_{name.replace(' ', '_')}_deg", hidden.get(name)) for name in _HIDDEN_BY]
    cells += _with_error(_SCENE_FIGURES, scene, scene.get("standard_error", {}))
    cells.append(("exposure_s", scene.get("exposure_s")))
    for name in _FILTERS:
        filter_ = scene.get(name) or {}
        cells.append((f"{name}_position_deg", filter_.get("position_deg")))
        cells += _with_error(_FILTER_FIGURES, filter_, filter_.get("standard_error", {}), f"{name}_")
    missed = ";".join(scene.get("tolerance_missed", []))
    return [*cells, ("scene_tolerance_missed", missed), ("verdict", scene.get("verdict"))]


def _with_error(names, values: dict, errors: dict, prefix: str = ""):
    for name in names:
        yield f"{prefix}{name}", values.get(name)
        yield f"{prefix}{name}_standard_error", errors.get(name)

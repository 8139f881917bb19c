"""The result of a comparison: rows as objects, and as a table, CSV, JSON and HTML."""

from __future__ import annotations

import csv
import dataclasses
import html
import io
import json
import math

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
# Columns of the table: heading in two lines, figure, format
_COLUMNS = (
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


@dataclasses.dataclass
class Row:
    """One bow. Radii are from `centre`; `peak_*` are after the sun's disc; None where the drop makes no such bow.

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
    filter : str
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
        if self.centre is not None:
            centre = -sun_elevation_deg if self.centre == "antisolar" else sun_elevation_deg
            # a circle that reaches over the zenith comes down again on the other side
            top = centre + self.peak_deg
            self.top_elevation_deg = min(top, 180.0 - top)

    def as_dict(self) -> dict:
        """The row as JSON has it."""
        out = {"order": self.order, "name": self.name, "centre": self.centre}
        out |= {name: _plain(getattr(self, name)) for name in FIGURES}
        out["best_filter"] = self.filter
        error = {name: _plain(self.standard_error.get(name, 0.0)) for name in FIGURES}
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
        """The report as JSON text."""
        return json.dumps(self.as_dict(), indent=1, ensure_ascii=False, allow_nan=False) + "\n"

    def to_csv(self) -> str:
        """The report as CSV text: a line a bow, each Monte Carlo figure followed by its standard error."""
        out = io.StringIO()
        writer = csv.writer(out, lineterminator="\n")
        scene_keys = [] if self.rows[0].scene is None else [k for k, v in self.rows[0].scene.items() if _is_flat(v)]
        head = ["order", "name", "centre"]
        for name in FIGURES:
            head += [name, f"{name}_standard_error"]
        writer.writerow([*head, "best_filter", "top_elevation_deg", *scene_keys])
        for row in self.rows:
            data = row.as_dict()
            line = [row.order, row.name, row.centre]
            for name in FIGURES:
                line += [data[name], data["standard_error"][name]]
            line += [row.filter, row.top_elevation_deg, *((row.scene or {}).get(key) for key in scene_keys)]
            writer.writerow(["" if value is None else value for value in line])
        return out.getvalue()

    def to_text(self) -> str:
        """The report as an aligned table, each row followed by its standard errors."""
        lines = [*self._heading(), ""]
        cells = [["bow", "", "round", *(c[0] for c in _COLUMNS)], ["", "", "", *(c[1] for c in _COLUMNS)]]
        for row in self.rows:
            if row.centre is None:
                cells.append([str(row.order), row.name, "none", *("-" for _ in _COLUMNS)])
                continue
            round_ = {"antisolar": "antisun", "sun": "sun"}[row.centre]
            cells.append([str(row.order), row.name, round_, *(_format(getattr(row, c[2]), c[3]) for c in _COLUMNS)])
            errors = (row.standard_error.get(c[2]) for c in _COLUMNS)
            cells.append(["", "", "+-", *("" if e is None or e == 0 else f"{e:.1g}" for e in errors)])
        lines += _aligned(cells, left=3)
        lines += ["", *self._notes()]
        return "\n".join(lines)

    def _heading(self):
        if "drop" in self.input:
            drop = self.input["drop"]
            what = f"one drop of {drop['diameter_mm']:g} mm, water of {drop['temperature_c']:g} degC"
            if drop["refractive_index"] is not None:
                what = f"one drop of {drop['diameter_mm']:g} mm, index {drop['refractive_index']:g}"
            sun = drop["sun_elevation_deg"]
            light = "sunlight above the air" if sun is None else f"sunlight of a sun {sun:g} deg up"
            yield f"{what}, black sky, {light}"
        else:
            scene = self.input["scene"]
            yield f"{scene['name']}: sun {scene['sun']['elevation_deg']:.2f} deg up; drops of its first table [rain]"

    def _notes(self):
        import textwrap

        text = (
            f"{self.rays[0] / 1e6:.3g} M rays at 550 nm and {self.rays[1] / 1e6:.3g} M at each other wavelength. "
            "Lines with +- are standard errors. Edges are those of ray optics at 700 and 400 nm, peaks are after the "
            "sun's disc. Three ratios are often mixed up: the share of light is that of the whole order, the bow ray's "
            "weight is Fresnel's for one ray, the peak ratio is of radiance where each bow is brightest."
        )
        yield from textwrap.wrap(text, 118)
        for row in self.rows:
            if row.missed:
                limit = " and ".join(f"{n / 1e6:g} M" for n in self.most_rays)
                yield (
                    f"{row.name}: {', '.join(row.missed)} did not reach {self.tolerance:.2%} "
                    f"within the limit of {limit} rays"
                )
            if row.top_elevation_deg is not None:
                where = f"top {row.top_elevation_deg:.1f} deg up"
                if row.top_elevation_deg <= 0:
                    where = f"wholly below the horizon by {-row.top_elevation_deg:.1f} deg"
                yield f"{row.name}: {where}"
        if self.rows and self.rows[0].scene is not None:
            from raytrace.comparison.in_scene import scene_lines

            yield ""
            yield from scene_lines(self.rows)
        if any(row.centre == "sun" for row in self.rows):
            yield ""
            yield from textwrap.wrap("Caution: " + CAUTION, 118)

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
        head = "".join(f"<th>{html.escape(f'{a} {b}')}</th>" for a, b, *_ in _COLUMNS)
        body = []
        for row in self.rows:
            cells = []
            for *_, name, form in _COLUMNS:
                text, error = _format(getattr(row, name), form), row.standard_error.get(name)
                cells.append(f"<td>{text}{f' &plusmn; {error:.1g}' if error else ''}</td>")
            body.append(
                f"<tr><td>{row.order}</td><td>{html.escape(row.name)}</td><td>{row.centre}</td>{''.join(cells)}</tr>"
            )
        top = f"<tr><th>order</th><th>bow</th><th>round</th>{head}</tr>"
        return f"<table>{top}{''.join(body)}</table>"


def _plain(value):
    return None if value is None or (isinstance(value, float) and not math.isfinite(value)) else value


def _is_flat(value) -> bool:
    return value is None or isinstance(value, (int, float, str))


def _format(value, form) -> str:
    return "-" if value is None or not math.isfinite(value) else f"{value:{form}}"


def _aligned(cells, *, left: int) -> list[str]:
    """Rows of cells as lines; the first `left` columns to the left, numbers to the right."""
    widths = [max(len(row[k]) for row in cells) for k in range(len(cells[0]))]
    out = []
    for row in cells:
        parts = [
            text.ljust(w) if k < left else text.rjust(w) for k, (text, w) in enumerate(zip(row, widths, strict=True))
        ]
        out.append(" ".join(parts).rstrip())
    return out

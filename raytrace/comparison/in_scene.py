"""Bows in a scene: how bright along the arc and against what lies behind, where the arc ends, what a filter gains."""

from __future__ import annotations

import math
import textwrap

import numpy as np

from raytrace.camera.develop import SATURATION_CD_M2
from raytrace.camera.lens import direction_pixels, make_lens
from raytrace.light.sun import antisolar
from raytrace.sky.radiance import layered_radiance, prepare_view
from raytrace.sky.shade import FIRST_ORDER

# Contrast that the eye needs in the laboratory, and the one that visibility ranges are defined by; CIE contrast
# (L_t - L_b) / L_b. Quoted: usual laboratory threshold and visibility-range threshold of meteorology.
EYE_CONTRAST, VISIBILITY_CONTRAST = 0.02, 0.05
# Position angles round the arc, 0 at the top, clockwise seen from the observer [deg]
POSITIONS_DEG = np.arange(-180.0, 180.0, 1.0)
# Rain counts as there where it gives this share of the light that it gives at best
_LIT_SHARE = 0.01
# What the suggested exposure puts the brightest part of the arc at, and the lens and speed that it is told for
_LEVEL, _F_NUMBER, _ISO = 0.5, 8.0, 100.0
SECTIONS = ("horizon", "ground", "no rain", "edge of the frame")


def look(scene, light, estimates, rows, found, *, threads=None) -> None:
    """Fill in what each bow is in a scene.

    Parameters
    ----------
    scene : Scene
    light : Illumination
    estimates : sequence of Estimate
        One a curtain.
    rows : list of Row
        Their `scene` is written.
    found : dict of int to dict
        Figures by order, from `bow_figures`.
    """
    lens = make_lens(scene.camera, antisolar(light.sun)[0])
    view = _view(scene, light, estimates, lens, threads)
    for row in rows:
        if row.centre is not None:
            row.place_above_horizon(light.sun.elevation_deg)
            theta = estimates[0].angle_deg[found[row.order]["luminance_bin"]]
            row.scene = _bow(view, lens, row.order + 1, math.radians(theta), row.centre, threads)
            _add_errors(row.scene, found[row.order]["luminance_relative_error"])


def _add_errors(scene: dict, relative: float) -> None:
    """Standard errors of what is proportional to the bow's luminance; that of what lies behind is far smaller."""
    names = ("peak_luminance_cd_m2", "contrast_median", "contrast_best")
    scene["standard_error"] = {name: None if scene[name] is None else scene[name] * relative for name in names}


def _view(scene, light, estimates, lens, threads):
    """The sky with, in place of each order's XYZ, its luminance polarised along the arc, whole, and across it."""
    tables, phases = [], []
    for estimate in estimates:
        luminance = estimate.colour[1].mean(axis=0)
        channels = np.stack([luminance[:, 0], luminance.sum(axis=1), luminance[:, 1]], axis=-1)
        tables.append(np.ascontiguousarray(channels))
        phases.append(estimate.mono.mean(axis=0).sum(axis=(0, 1)))
    plate_xyz = None
    if scene.sky.model == "plate":
        from raytrace.frame.rendering import read_plate

        plate_xyz = read_plate(scene, lens).mean(axis=(0, 1), dtype=np.float64)
    return prepare_view(scene, light, tables, phases, lens.pixel_rad, plate_xyz, threads=threads)


def _bow(view, lens, p, theta, centre, threads) -> dict:
    """What one bow is in the scene."""
    sun = np.array(view.sky.sun)
    middle = -sun if centre == "antisolar" else sun
    radius = math.pi - theta if centre == "antisolar" else theta
    arc, tangents = _arc(middle, radius)
    plate = None
    if view.has_plate:
        luminance = view.sky.uniform
        plate = np.full((len(arc), 3), luminance, dtype=np.float32)
    light = layered_radiance(view, arc, np.ones(len(arc), dtype=bool), lens.pixel_rad, plate, threads=threads)
    own = light[:, FIRST_ORDER + p]
    behind = light[..., 1].sum(axis=1) - own[:, 1]
    with np.errstate(divide="ignore", invalid="ignore"):
        contrast = own[:, 1] / behind
    framed = direction_pixels(lens, arc)[2]
    lit = own[:, 1] > _LIT_SHARE * max(own[:, 1].max(), 1e-12)
    # what the sky layers leave dark is ground
    grounded = view.cover.kind > 0 and light[:, 3:5, 1].sum(axis=1) > light[:, [0, 2], 1].sum(axis=1)
    why = _sections(arc, framed, lit, np.broadcast_to(grounded, framed.shape))
    seen = why == ""
    out = {
        "visible": _intervals(why),
        "visible_arc_deg": float(seen.sum() * (POSITIONS_DEG[1] - POSITIONS_DEG[0])),
        "hidden_by": {name: int((why == name).sum()) for name in SECTIONS},
    }
    names = ("peak_luminance_cd_m2", "behind_luminance_cd_m2", "contrast_median", "contrast_best")
    if not seen.any():
        out |= dict.fromkeys((*names, "exposure_s", "filter_top", "filter_feet"))
        # an arc that is wholly below the horizon is said to be, also where the frame would not show it either
        below = arc[:, 2].max() <= 0.0
        out["verdict"] = f"not seen: {'below the horizon' if below else _main_reason(why)}"
        return out
    best = int(np.argmax(np.where(seen, np.nan_to_num(contrast, posinf=1e30), -1.0)))
    total = own[:, 1] + behind
    brightest = float(total[seen].max())
    white = SATURATION_CD_M2 * _F_NUMBER**2 / _ISO
    figures = (
        float(own[seen, 1].max()),
        float(behind[best]),
        _finite(np.median(contrast[seen])),
        _finite(contrast[best]),
    )
    out |= dict(zip(names, figures, strict=True))
    out["exposure_s"] = white * _LEVEL / brightest if brightest > 0 else None
    top, feet = _top_and_feet(seen)
    for name, at in (("filter_top", top), ("filter_feet", feet)):
        axis = tangents[at]
        out[name] = {
            "position_deg": float(POSITIONS_DEG[at]),
            "contrast": _finite(_filtered(light, p, arc, tangents, axis, at=at)),
            "contrast_at_the_other": _finite(
                _filtered(light, p, arc, tangents, axis, at=feet if name == "filter_top" else top)
            ),
        }
    out["verdict"] = verdict(out["contrast_best"])
    return out


def verdict(contrast) -> str:
    """A contrast against the eye's threshold (0.02) and that of visibility ranges (0.05), in plain words."""
    if contrast is None:
        return "stands before black: seen if bright enough"
    if contrast >= VISIBILITY_CONTRAST:
        return f"can be seen: {contrast:.2g} is above {VISIBILITY_CONTRAST:g}"
    if contrast >= EYE_CONTRAST:
        return f"at the limit: {contrast:.2g} is between {EYE_CONTRAST:g} and {VISIBILITY_CONTRAST:g}"
    return f"not by eye: {contrast:.2g} is below {EYE_CONTRAST:g}"


def _arc(middle, radius):
    """Directions round a centre at POSITIONS_DEG, and the unit vectors along the arc there."""
    right = np.array([middle[1], -middle[0], 0.0])
    norm = np.linalg.norm(right)
    # a centre in the zenith or nadir has no upper side: north serves
    right = right / norm if norm > 1e-9 else np.array([1.0, 0.0, 0.0])
    up = np.cross(right, middle)
    turn = np.radians(POSITIONS_DEG)[:, None]
    out = np.cos(turn) * up + np.sin(turn) * right
    along = -np.sin(turn) * up + np.cos(turn) * right
    return np.ascontiguousarray(math.cos(radius) * middle + math.sin(radius) * out), along


def _sections(arc, framed, lit, grounded):
    """For each position why the bow is not seen there; empty where it is."""
    why = np.full(len(arc), "", dtype=object)
    why[~lit] = "no rain"
    hidden = ~lit & grounded
    why[hidden] = np.where(arc[hidden, 2] <= 0.0, "horizon", "ground")
    why[~framed] = "edge of the frame"
    return why


def _intervals(why) -> list[dict]:
    """Runs of positions at which the bow is seen, each with what ends it on both sides."""
    seen = why == ""
    if seen.all():
        return [{"from_deg": -180.0, "to_deg": 180.0, "ends": ["closes", "closes"]}]
    count, out = len(why), []
    for start in np.flatnonzero(seen & ~np.roll(seen, 1)):
        length = int(np.argmin(np.roll(seen, -start)))
        first = float(POSITIONS_DEG[start])
        ends = [str(why[start - 1]), str(why[(start + length) % count])]
        out.append(
            {
                "from_deg": first,
                "to_deg": first + (length - 1) * float(POSITIONS_DEG[1] - POSITIONS_DEG[0]),
                "ends": ends,
            }
        )
    return out


def _main_reason(why) -> str:
    names, counts = np.unique(why.astype(str), return_counts=True)
    return {
        "horizon": "below the horizon",
        "ground": "behind the ground",
        "no rain": "no sunlit rain there",
        "edge of the frame": "outside the frame",
    }[str(names[np.argmax(counts)])]


def _top_and_feet(seen):
    """Number of the highest seen position, and of the one furthest from it."""
    away = np.abs(POSITIONS_DEG)
    return int(np.argmin(np.where(seen, away, 999.0))), int(np.argmax(np.where(seen, away, -1.0)))


def _filtered(light, p, arc, tangents, axis, *, at) -> float:
    """Contrast at one position behind an ideal linear filter along `axis`.

    The light of every order is polarised along the arc or across it (one sun, so all scattering planes of a direction
    are one); sky, cloud, ground and skylit rain are taken as unpolarised.
    """
    across_view = axis - (axis @ arc[at]) * arc[at]
    across_view /= np.linalg.norm(across_view)
    along = float(across_view @ tangents[at]) ** 2
    orders = light[at, FIRST_ORDER:, 0] * along + light[at, FIRST_ORDER:, 2] * (1.0 - along)
    rest = 0.5 * light[at, :FIRST_ORDER, 1].sum()
    behind = rest + orders.sum() - orders[p]
    return float(orders[p] / behind) if behind > 0 else math.inf


def _finite(value):
    return float(value) if math.isfinite(value) else None


def scene_lines(rows) -> list[str]:
    """The scene's part of the report as lines of text."""
    head = ["bow", "", "peak cd/m2", "behind", "median", "best", "filter top", "filter feet", "seen deg", "verdict"]
    cells = [head]
    notes = []
    for row in rows:
        scene = row.scene
        if scene is None:
            continue

        def number(value, form=".3g"):
            return "-" if value is None else f"{value:{form}}"

        filters = [scene[name] and scene[name]["contrast"] for name in ("filter_top", "filter_feet")]
        cells.append(
            [
                str(row.order),
                row.name,
                number(scene["peak_luminance_cd_m2"]),
                number(scene["behind_luminance_cd_m2"]),
                number(scene["contrast_median"]),
                number(scene["contrast_best"]),
                *(number(value) for value in filters),
                f"{scene['visible_arc_deg']:.0f}",
                scene["verdict"],
            ]
        )
        for part in scene["visible"]:
            first, last = part["ends"]
            if first == "closes":
                notes.append(f"{row.name}: the whole circle")
            else:
                notes.append(f"{row.name}: from {part['from_deg']:g} ({first}) to {part['to_deg']:g} deg ({last})")
        if scene["exposure_s"] is not None and row.order <= 2:
            seconds = scene["exposure_s"]
            shutter = f"1/{1 / seconds:.0f}" if seconds < 0.3 else f"{seconds:.2g}"
            notes.append(
                f"{row.name}: f/{_F_NUMBER:g}, {shutter} s at ISO {_ISO:g} puts its brightest part at half of white"
            )
    widths = [max(len(line[k]) for line in cells) for k in range(len(head))]
    out = ["In the scene: contrast (L_bow - L_behind) / L_behind along the arc that is seen"]
    for line in cells:
        parts = [
            t.ljust(w) if k in (0, 1, 9) else t.rjust(w) for k, (t, w) in enumerate(zip(line, widths, strict=True))
        ]
        out.append(" ".join(parts).rstrip())
    text = (
        "Position angles count from the arc's top. Thresholds of contrast: 0.02 usual for the eye in the laboratory, "
        "0.05 for visibility ranges; colour, cloud texture and practice shift both. Filters: ideal, turned along the "
        "arc at its top or at its lowest seen part; the sky is taken as unpolarised."
    )
    return [*out, *notes, *textwrap.wrap(text, 118)]

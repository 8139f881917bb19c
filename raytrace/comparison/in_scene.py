"""Bows in a scene: how bright along the arc and against what lies behind, where the arc ends, what a filter gains."""

from __future__ import annotations

import math

import numpy as np

from raytrace.camera.develop import SATURATION_CD_M2
from raytrace.camera.lens import direction_pixels, make_lens
from raytrace.comparison.estimate import jackknife
from raytrace.comparison.figures import relative_error
from raytrace.drops.sizes import drop_sizes
from raytrace.light.sun import antisolar
from raytrace.sky.radiance import layered_radiance, prepare_view
from raytrace.sky.shade import FIRST_ORDER

# Contrast that the eye needs in the laboratory, and the one that visibility ranges are defined by; CIE contrast
# (L_t - L_b) / L_b. Quoted: usual laboratory threshold and visibility-range threshold of meteorology.
EYE_CONTRAST, VISIBILITY_CONTRAST = 0.02, 0.05
# Position angles round the arc, 0 at the top, clockwise seen from the observer [deg]
POSITIONS_DEG = np.arange(-180.0, 180.0, 1.0)
_STEP_DEG = float(POSITIONS_DEG[1] - POSITIONS_DEG[0])
# The bow counts as there where it is at least this share as bright as at its best
LIT_SHARE = 0.01
# What the suggested exposure puts the brightest part of the arc at, and the lens and speed that it is told for
LEVEL, F_NUMBER, ISO = 0.5, 8.0, 100.0
SECTIONS = ("horizon", "ground", "no rain", "edge of the frame")
# Figures with a standard error, and those of a filter, by the key of the filter
LIGHT_FIGURES = ("peak_luminance_cd_m2", "behind_luminance_cd_m2", "contrast_median", "contrast_best")
FILTERS, FILTER_FIGURES = ("filter_top", "filter_feet"), ("contrast", "contrast_at_the_other")
# The widest plate that is read for its mean [px]
_PLATE_PX = 512


class Sight:
    """The scene as it is seen along arcs, made once; what the drops send is put in as it becomes known.

    Parameters
    ----------
    scene : Scene
    light : Illumination
    threads : int, optional
    """

    def __init__(self, scene, light, threads=None):
        self._scene, self._light, self._threads = scene, light, threads
        self._lens = make_lens(scene.camera, antisolar(light.sun)[0])
        self._rains = any(drop_sizes(rain).extinction_per_km > 0.0 for rain in scene.rain)
        self._view = None
        self._arcs = {}

    def bow(self, estimates, order: int, centre: str, peak_bin: int | None) -> dict:
        """What one bow is in the scene.

        Parameters
        ----------
        estimates : sequence of Estimate
            One a curtain.
        order : int
        centre : str
            "antisolar" or "sun".
        peak_bin : int or None
            Bin of the scattering angle of the luminance peak; None where there is none.

        Returns
        -------
        dict
            As the README has it, but for `tolerance_missed`.

        Raises
        ------
        ArithmeticError
            If any of the light is no number.
        """
        if peak_bin is None:
            return _unseen("not told: its peak cannot be told from the light on the axis", [], None)
        if (order, peak_bin) not in self._arcs:
            theta = math.radians(estimates[0].angle_deg[peak_bin])
            self._arcs[order, peak_bin] = self._arc(estimates, theta, centre)
        arc, tangents, rest, lit, grounded = self._arcs[order, peak_bin]
        p = order + 1
        # (blocks, curtains, paths, polarisation): what the drops send per unit of sunlit rain
        drops = np.stack([estimate.colour[1, :, :, :, peak_bin] for estimate in estimates], axis=1)
        _all_finite(rest, lit, drops)
        own, _ = _along(drops.mean(axis=0), lit, rest, p)
        why = _sections(arc, direction_pixels(self._lens, arc)[2], own, grounded, self._rains)
        seen = why == ""
        if not seen.any():
            # an arc that is wholly below the horizon is said to be, also where the frame would not show it either
            below = arc[:, 2].max() <= 0.0
            return _unseen(f"not seen: {'below the horizon' if below else _main_reason(why)}", [], why)
        return _seen(drops, lit, rest, p, arc, tangents, why)

    def _arc(self, estimates, theta, centre):
        """Directions of an arc and its tangents; luminance but for sunlit drops, sunlit rain by curtain, ground."""
        if self._view is None:
            self._view = self._prepare(estimates)
        view = self._view
        sun = np.array(view.sky.sun)
        arc, tangents = _circle(*((-sun, math.pi - theta) if centre == "antisolar" else (sun, theta)))
        plate = np.full((len(arc), 3), view.sky.uniform, dtype=np.float32) if view.has_plate else None
        inside = np.ones(len(arc), dtype=bool)
        light = layered_radiance(view, arc, inside, self._lens.pixel_rad, plate, threads=self._threads)
        luminance = light[:, :FIRST_ORDER, 1]
        # what the sky layers leave dark is ground
        grounded = (view.cover.kind > 0) & (luminance[:, 3:5].sum(axis=1) > luminance[:, [0, 2]].sum(axis=1))
        curtains = view.orders.shape[0]
        lit = light[:, FIRST_ORDER:].reshape(len(arc), -1)[:, :curtains]
        return arc, tangents, luminance.sum(axis=1), np.ascontiguousarray(lit), grounded

    def _prepare(self, estimates):
        """The sky with, in place of each order's XYZ, a mark for each curtain: three curtains to an order."""
        curtains = len(estimates)
        marks = np.zeros((curtains, -(-curtains // 3), 2, 3))
        for c in range(curtains):
            marks[c, c // 3, :, c % 3] = 1.0
        phases = [estimate.mono.mean(axis=0).sum(axis=(0, 1)) for estimate in estimates]
        plate_xyz = None
        if self._scene.sky.model == "plate":
            from raytrace.frame.rendering import read_plate

            # only its mean is used: the frame's pixels are not
            camera = self._scene.camera
            width, height = (max(8, min(px, _PLATE_PX)) for px in (camera.width_px, camera.height_px))
            small = camera.model_copy(update={"width_px": width, "height_px": height})
            lens = make_lens(small, antisolar(self._light.sun)[0])
            plate_xyz = read_plate(self._scene, lens).mean(axis=(0, 1), dtype=np.float64)
        return prepare_view(
            self._scene, self._light, list(marks), phases, self._lens.pixel_rad, plate_xyz, threads=self._threads
        )


def relative_errors(scene: dict) -> dict[str, float]:
    """Relative standard error of each figure that has one, by its key; those of a filter as `filter_top.contrast`."""
    out = {}
    for name in LIGHT_FIGURES:
        if scene[name] is not None:
            out[name] = relative_error(scene[name], scene["standard_error"][name])
    for name in FILTERS:
        for key in FILTER_FIGURES:
            if scene[name] is not None and scene[name][key] is not None:
                out[f"{name}.{key}"] = relative_error(scene[name][key], scene[name]["standard_error"][key])
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


def _unseen(words, visible, why) -> dict:
    out = {"visible": visible, "visible_arc_deg": None if why is None else 0.0, "hidden_by": _hidden_by(why)}
    out |= dict.fromkeys((*LIGHT_FIGURES, "exposure_s", *FILTERS))
    return out | {"standard_error": dict.fromkeys(LIGHT_FIGURES), "verdict": words}


def _seen(drops, lit, rest, p, arc, tangents, why) -> dict:
    """Figures of a bow that is seen somewhere, with standard errors by the blocks of rays."""
    seen = why == ""
    own, behind = _along(drops.mean(axis=0), lit, rest, p)
    with np.errstate(divide="ignore", invalid="ignore"):
        contrast = np.where(own > 0, own / behind, 0.0)
    best = int(np.argmax(np.where(seen, contrast, -1.0)))
    brightest = int(np.argmax(np.where(seen, own, -1.0)))
    top, feet = _top_and_feet(seen)
    pairs = [(tangents[at], place) for at, other in ((top, feet), (feet, top)) for place in (at, other)]

    def figures(at):
        own, behind = _along(at, lit, rest, p)
        with np.errstate(divide="ignore"):
            contrast = own[seen] / behind[seen]
            filtered = [_filtered(at, lit, rest, p, arc, tangents, axis, at=place) for axis, place in pairs]
            return np.array([own[brightest], behind[best], np.median(contrast), own[best] / behind[best], *filtered])

    with np.errstate(invalid="ignore"):
        values, errors = jackknife(figures, drops)
    # before black a contrast is infinite, which is told as none; anything else must be a number
    if np.isnan(values).any() or np.isnan(errors[np.isfinite(values)]).any():
        raise ArithmeticError("a bow's figure in the scene is not a number")
    plain = [(float(v), float(e)) if math.isfinite(v) else (None, None) for v, e in zip(values, errors, strict=True)]
    out = {"visible": _intervals(why), "visible_arc_deg": float(seen.sum() * _STEP_DEG), "hidden_by": _hidden_by(why)}
    out |= {name: value for name, (value, _) in zip(LIGHT_FIGURES, plain, strict=False)}
    out["standard_error"] = {name: error for name, (_, error) in zip(LIGHT_FIGURES, plain, strict=False)}
    total = float((own + behind)[seen].max())
    out["exposure_s"] = SATURATION_CD_M2 * F_NUMBER**2 / ISO * LEVEL / total if total > 0 else None
    for name, at, first in ((FILTERS[0], top, 4), (FILTERS[1], feet, 6)):
        some = plain[first : first + 2]
        out[name] = {"position_deg": float(POSITIONS_DEG[at])}
        out[name] |= {key: value for key, (value, _) in zip(FILTER_FIGURES, some, strict=True)}
        out[name]["standard_error"] = {key: error for key, (_, error) in zip(FILTER_FIGURES, some, strict=True)}
    out["verdict"] = verdict(out["contrast_best"])
    return out


def _along(drops, lit, rest, p):
    """Luminance of the bow alone and of everything else, at each position.

    Parameters
    ----------
    drops : (curtains, paths, 2) array
        What the drops of each curtain send per unit of sunlit rain.
    lit : (positions, curtains) array
        Sunlit rain.
    rest : (positions,) array
        Luminance of all but the sunlight that the drops send.
    """
    orders = lit @ drops.sum(axis=2)
    own = orders[:, p]
    return own, rest + orders.sum(axis=1) - own


def _filtered(drops, lit, rest, p, arc, tangents, axis, *, at) -> float:
    """Contrast at one position behind an ideal linear filter along `axis`.

    The light of every order is polarised along the arc or across it (one sun, so all scattering planes of a direction
    are one); sky, cloud, ground and skylit rain are taken as unpolarised.
    """
    across_view = axis - (axis @ arc[at]) * arc[at]
    across_view /= np.linalg.norm(across_view)
    along = float(across_view @ tangents[at]) ** 2
    polarised = np.tensordot(lit[at], drops, axes=1)
    orders = polarised[:, 0] * along + polarised[:, 1] * (1.0 - along)
    behind = 0.5 * rest[at] + orders.sum() - orders[p]
    return float(orders[p] / behind) if behind > 0 else math.inf


def _circle(middle, radius):
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


def _sections(arc, framed, own, grounded, rains):
    """For each position why the bow is not seen there; empty where it is."""
    lit = own > LIT_SHARE * max(own.max(), 1e-12)
    why = np.full(len(arc), "", dtype=object)
    why[~lit] = "no rain"
    if rains:
        hidden = ~lit & grounded
        why[hidden] = np.where(arc[hidden, 2] <= 0.0, "horizon", "ground")
    why[~framed] = "edge of the frame"
    return why


def _hidden_by(why) -> dict:
    return {name: 0 if why is None else int((why == name).sum() * _STEP_DEG) for name in SECTIONS}


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
        out.append({"from_deg": first, "to_deg": first + (length - 1) * _STEP_DEG, "ends": ends})
    return out


def _main_reason(why) -> str:
    """The commonest reason among positions in the frame; the frame itself only where it holds none."""
    framed = why[why != "edge of the frame"]
    names, counts = np.unique((framed if framed.size else why).astype(str), return_counts=True)
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


def _all_finite(*arrays) -> None:
    if not all(np.isfinite(array).all() for array in arrays):
        raise ArithmeticError("light in the scene is not a number")

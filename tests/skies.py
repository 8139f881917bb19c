"""Small scenes and views for the tests of sky, camera and frame."""

import math

import numpy as np

from raytrace.camera.lens import row_directions
from raytrace.light.sun import direction
from raytrace.scene.model import Air, Camera, Ground, Optics, Rain, Scene, Sky, Sun

# Light enough for a test: 21 wavelengths, 0.1 deg bins, stratified rays
FAST_OPTICS = {"method": "rays", "rays": 20_000, "bins": 1_800, "wavelength_step_nm": 20.0}
# Edges of no width
HARD = {"edge_m": 0.0, "edge_top_m": 0.0, "edge_deg": 0.0}

SUN = (25.0, 250.0)
UNIFORM = {"model": "uniform", "luminance_cd_m2": 3000.0}
THICK = {"extinction_per_km": 1.5, "near_m": 200.0, "far_m": 2500.0, "bottom_m": -500.0}
# Layers that the sun's light on drops has no part in
NOT_ORDERS = ["sky", "sun", "cloud", "ground", "veil", "skylit_rain"]


def make_scene(sun=(20.0, 250.0), *, rain=None, sky=None, ground=None, camera=None, optics=None, air=None, disc=0.533):
    """A scene with the sun at (elevation, azimuth) [deg]; every table is a dict of keys, rain also a list of them."""
    rain = rain if isinstance(rain, list) else [rain or {}]
    return Scene(
        sun=Sun(elevation_deg=float(sun[0]), azimuth_deg=float(sun[1]), disc_diameter_deg=disc),
        air=Air(**(air or {})),
        rain=tuple(Rain(**keys) for keys in rain),
        optics=Optics(**{**FAST_OPTICS, **(optics or {})}),
        sky=Sky(**(sky or {})),
        ground=Ground(**(ground or {"cover": "none"})),
        camera=Camera(**{"width_px": 48, "height_px": 32, **(camera or {})}),
    )


def around(centre, radius_deg, turn_deg):
    """Directions on a circle round a point of the sky: (n, 3) for (azimuth, elevation), its radius and n turns [deg].

    Turn 0 is the circle's top, 90 its right-hand side seen from inside.
    """
    centre = direction(*centre)
    right = np.cross(centre, [0.0, 0.0, 1.0])
    right /= np.linalg.norm(right)
    up = np.cross(right, centre)
    radius, turn = np.radians(radius_deg), np.radians(np.atleast_1d(turn_deg))[:, None]
    return math.cos(radius) * centre + math.sin(radius) * (np.cos(turn) * up + np.sin(turn) * right)


def angle_deg(a, b):
    """Angle between unit vectors (..., 3), good for small ones too [deg]."""
    return np.degrees(2 * np.arcsin(np.clip(np.linalg.norm(np.asarray(a) - b, axis=-1) / 2, 0, 1)))


def summed(frame, names):
    return sum(frame.layers[name].astype(np.float64) for name in names)


def rays(frame):
    """Directions of all pixels (height, width, 3) and whether the lens images them (height, width)."""
    directions, inside = row_directions(frame.lens, 0, frame.lens.height_px)
    return directions.reshape(*frame.luminance.shape, 3), inside.reshape(frame.luminance.shape)

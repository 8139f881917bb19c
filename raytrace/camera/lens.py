"""Lenses: from the picture's pixels to directions in the world and back.

World frame: x east, y north, z up. Camera frame: x right, y down, z along the axis. Pixel coordinates count from the
picture's top left corner, so the centre of the first pixel is (0.5, 0.5).
"""

from __future__ import annotations

import math
from typing import NamedTuple

import numpy as np

from raytrace.light.sun import direction


class Lens(NamedTuple):
    """A lens with its picture and pointing.

    Attributes
    ----------
    projection : str
        A key of `PROJECTIONS`.
    width_px, height_px : int
    scale : float
        Focal length [px]; for the panorama, pixels per radian.
    rotation : (3, 3) float64
        Rows are the camera's x, y and z axes in the world frame: camera = rotation @ world.
    half_field_rad : float
        Half the field of view of a fisheye, beyond which the picture is black [rad].
    """

    projection: str
    width_px: int
    height_px: int
    scale: float
    rotation: np.ndarray
    half_field_rad: float

    @property
    def pixel_rad(self) -> float:
        """Angular width of a pixel at the picture's centre [rad]."""
        return 1.0 / self.scale


def _perspective_rays(lens, u, v):
    return np.stack([u, v, np.ones_like(u)], axis=-1), np.ones(u.shape, dtype=bool)


def _perspective_pixels(lens, ray):
    ahead = ray[..., 2] > 1e-9
    z = np.where(ahead, ray[..., 2], 1.0)
    return ray[..., 0] / z, ray[..., 1] / z, ahead


def _fisheye_rays(lens, u, v):
    # equidistant: the distance from the centre is the angle from the axis
    angle = np.hypot(u, v)
    inside = angle <= lens.half_field_rad
    bounded = np.minimum(angle, math.pi)
    sinc = np.sinc(bounded / math.pi)
    return np.stack([u * sinc, v * sinc, np.cos(bounded)], axis=-1), inside


def _fisheye_pixels(lens, ray):
    across = np.hypot(ray[..., 0], ray[..., 1])
    # atan2 keeps rays beyond 90 degrees from the axis on their own side
    angle = np.arctan2(across, ray[..., 2])
    factor = angle / np.where(across > 0, across, 1.0)
    return ray[..., 0] * factor, ray[..., 1] * factor, angle <= lens.half_field_rad


def _panorama_rays(lens, u, v):
    inside = (np.abs(u) <= math.pi + 1e-12) & (np.abs(v) <= math.pi / 2 + 1e-12)
    level = np.cos(v)
    return np.stack([level * np.sin(u), np.sin(v), level * np.cos(u)], axis=-1), inside


def _panorama_pixels(lens, ray):
    down = np.arctan2(ray[..., 1], np.hypot(ray[..., 0], ray[..., 2]))
    return np.arctan2(ray[..., 0], ray[..., 2]), down, np.ones(ray.shape[:-1], dtype=bool)


PROJECTIONS = {
    "perspective": (_perspective_rays, _perspective_pixels),
    "fisheye": (_fisheye_rays, _fisheye_pixels),
    "panorama": (_panorama_rays, _panorama_pixels),
}
"""Of each projection: plane coordinates (in focal lengths) to camera rays, and back."""


def make_lens(camera, antisolar_azimuth_deg: float) -> Lens:
    """The lens of a scene's camera.

    Parameters
    ----------
    camera : Camera
    antisolar_azimuth_deg : float
        Where the camera looks when the scene does not say [deg].
    """
    width, height = camera.width_px, camera.height_px
    azimuth = antisolar_azimuth_deg if camera.azimuth_deg is None else camera.azimuth_deg
    field = camera.field_of_view_deg
    half_field = math.pi
    if camera.projection == "perspective":
        scale = 0.5 * width / math.tan(math.radians(90.0 if field is None else field) / 2)
    elif camera.projection == "fisheye":
        half_field = math.radians(180.0 if field is None else field) / 2
        scale = 0.5 * min(width, height) / half_field
    else:
        scale = width / (2 * math.pi)
    return Lens(
        camera.projection, width, height, scale, _rotation(azimuth, camera.elevation_deg, camera.roll_deg), half_field
    )


def _rotation(azimuth_deg, elevation_deg, roll_deg):
    axis = direction(azimuth_deg, elevation_deg)
    # from the azimuth and not from the axis, so that a camera which looks straight up still has a right-hand side
    right = direction(azimuth_deg + 90.0, 0.0)
    down = np.cross(axis, right)
    roll = math.radians(roll_deg)
    # clockwise seen from behind the camera: its right-hand side goes down
    x = math.cos(roll) * right + math.sin(roll) * down
    y = -math.sin(roll) * right + math.cos(roll) * down
    return np.stack([x, y, axis])


def pixel_directions(lens: Lens, x_px, y_px):
    """Directions seen at pixel coordinates.

    Parameters
    ----------
    lens : Lens
    x_px, y_px : array, any shape
        Pixel coordinates; the centre of the first pixel is (0.5, 0.5) [px].

    Returns
    -------
    directions : (..., 3) float64
        Unit vectors in the world frame.
    inside : (...) bool
        Whether the lens forms an image there.
    """
    u = (np.asarray(x_px, dtype=np.float64) - 0.5 * lens.width_px) / lens.scale
    v = (np.asarray(y_px, dtype=np.float64) - 0.5 * lens.height_px) / lens.scale
    ray, inside = PROJECTIONS[lens.projection][0](lens, u, v)
    ray = ray / np.linalg.norm(ray, axis=-1, keepdims=True)
    return ray @ lens.rotation, inside


def direction_pixels(lens: Lens, directions):
    """Pixel coordinates at which directions are seen.

    Parameters
    ----------
    lens : Lens
    directions : (..., 3) array
        Vectors in the world frame.

    Returns
    -------
    x_px, y_px : (...) float64
        Pixel coordinates, also outside the picture [px].
    seen : (...) bool
        Whether the lens can image the direction and it falls on the picture.
    """
    ray = np.asarray(directions, dtype=np.float64) @ lens.rotation.T
    u, v, can = PROJECTIONS[lens.projection][1](lens, ray)
    x, y = u * lens.scale + 0.5 * lens.width_px, v * lens.scale + 0.5 * lens.height_px
    return x, y, can & (x >= 0) & (x <= lens.width_px) & (y >= 0) & (y <= lens.height_px)


def row_directions(lens: Lens, first_row: int, last_row: int):
    """Directions of all pixels of rows first to last (not included), row by row: (n, 3) and (n,) bool."""
    x, y = np.meshgrid(np.arange(lens.width_px) + 0.5, np.arange(first_row, last_row) + 0.5)
    directions, inside = pixel_directions(lens, x.ravel(), y.ravel())
    return np.ascontiguousarray(directions), inside


def azimuth_span(lens: Lens) -> tuple[float, float]:
    """Azimuths that the picture holds: the first one, clockwise, and the width of the span [rad]."""
    x, y = np.meshgrid(np.linspace(0, lens.width_px, 65), np.linspace(0, lens.height_px, 65))
    directions, inside = pixel_directions(lens, x.ravel(), y.ravel())
    directions = directions[inside]
    # with the zenith or the nadir in or near the picture every azimuth is; the samples lie up to a few degrees apart
    if len(directions) < 2 or np.abs(directions[:, 2]).max() > math.cos(math.radians(12.0)):
        return 0.0, 2 * math.pi
    azimuth = np.sort(np.arctan2(directions[:, 0], directions[:, 1]))
    gaps = np.diff(azimuth, append=azimuth[0] + 2 * math.pi)
    widest = int(gaps.argmax())
    margin = math.radians(8.0)
    width = 2 * math.pi - gaps[widest] + 2 * margin
    if width >= 2 * math.pi:
        return 0.0, 2 * math.pi
    return float(azimuth[(widest + 1) % len(azimuth)]) - margin, float(width)

"""Where the sun stands, and directions in the world's frame: x east, y north, z up [unit vectors]."""

from __future__ import annotations

from typing import TYPE_CHECKING, NamedTuple

import numpy as np

if TYPE_CHECKING:
    from raytrace.scene.model import Scene


class SunPlace(NamedTuple):
    """Where the sun's centre stands, refraction included.

    Attributes
    ----------
    elevation_deg : float
        Apparent elevation above the horizon [deg].
    azimuth_deg : float
        Azimuth, clockwise from north, 0 to 360 [deg].
    distance_au : float
        Distance from the earth [au].
    """

    elevation_deg: float
    azimuth_deg: float
    distance_au: float


DELTA_T_S = 67.0
"""Terrestrial time minus UT1 [s]; seconds more or less move the sun by less than 0.0001 deg."""


def sun_place(scene: Scene) -> SunPlace:
    """Place of the sun: the angles of `[sun]` as they stand, or from place and time.

    Parameters
    ----------
    scene : Scene
        Its tables `[sun]` and `[air]` (pressure and temperature bend the rays) are read.

    Returns
    -------
    SunPlace
        With angles given, the distance is 1 au, since no date is known.

    Raises
    ------
    ValueError
        If the scene gives neither both angles nor latitude, longitude and a time with its offset from UTC.

    Notes
    -----
    I. Reda, A. Andreas, Solar position algorithm, NREL/TP-560-34302 (2008), as pvlib has it. Angles are good to
    0.0003 deg; refraction is that of mean air and less certain than that below 5 deg of elevation.
    """
    sun, air = scene.sun, scene.air
    if sun.elevation_deg is not None and sun.azimuth_deg is not None:
        return SunPlace(sun.elevation_deg, sun.azimuth_deg % 360.0, 1.0)
    if sun.latitude_deg is None or sun.longitude_deg is None or sun.time is None or sun.time.tzinfo is None:
        raise ValueError(
            "[sun] does not say where the sun stands; elevation_deg with azimuth_deg, or latitude_deg, longitude_deg "
            "and time with an offset from UTC, would work"
        )
    import pandas as pd
    from pvlib import solarposition

    time = pd.DatetimeIndex([pd.Timestamp(sun.time).tz_convert("UTC")])
    place = solarposition.spa_python(
        time,
        sun.latitude_deg,
        sun.longitude_deg,
        altitude=sun.height_m,
        pressure=air.pressure_hpa * 100.0,
        temperature=air.temperature_c,
        delta_t=DELTA_T_S,
    )
    distance = solarposition.nrel_earthsun_distance(time, delta_t=DELTA_T_S)
    return SunPlace(
        float(place["apparent_elevation"].iloc[0]), float(place["azimuth"].iloc[0]) % 360.0, float(distance.iloc[0])
    )


def antisolar(sun: SunPlace) -> tuple[float, float]:
    """Antisolar point, the centre of the bows.

    Parameters
    ----------
    sun : SunPlace
        Where the sun stands.

    Returns
    -------
    azimuth_deg, elevation_deg : float
        Azimuth from 0 to 360, elevation (below the horizon while the sun is above) [deg].
    """
    return (sun.azimuth_deg + 180.0) % 360.0, -sun.elevation_deg


def direction(azimuth_deg: np.ndarray, elevation_deg: np.ndarray) -> np.ndarray:
    """Unit vector towards a point of the sky.

    Parameters
    ----------
    azimuth_deg : array_like
        Azimuth, clockwise from north [deg].
    elevation_deg : array_like
        Elevation above the horizon [deg]; the two broadcast to shape (...).

    Returns
    -------
    ndarray, shape (..., 3)
        x east, y north, z up.
    """
    azimuth, elevation = np.broadcast_arrays(np.radians(azimuth_deg), np.radians(elevation_deg))
    level = np.cos(elevation)
    return np.stack([level * np.sin(azimuth), level * np.cos(azimuth), np.sin(elevation)], axis=-1)

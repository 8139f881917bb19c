"""The scene: everything a scene file may say, with units, ranges and defaults.

Every number is finite and has a closed or open range here, so that nothing further down the line has to guess.
The checks that need more than one key are in `rules.py`; reading files and wording problems is `load.py`'s work.
"""

from __future__ import annotations

import datetime as dt
from pathlib import Path
from typing import Literal

from pydantic import BaseModel, ConfigDict, Field, PrivateAttr

from raytrace.scene.size_laws import SIZE_LAW_KEYS

WIDEST_PX = 32_768
"""Widest and highest picture [px]."""


class Table(BaseModel):
    """A table of the scene file: no unknown keys, no infinities, frozen once read."""

    model_config = ConfigDict(extra="forbid", frozen=True, allow_inf_nan=False, strict=True)


class Sun(Table):
    """Where the sun stands: by angles, or by place and time (not both)."""

    elevation_deg: float | None = Field(None, ge=-90, le=90, description="apparent elevation of the sun's centre [deg]")
    azimuth_deg: float | None = Field(None, ge=-360, le=360, description="azimuth, clockwise from north [deg]")
    latitude_deg: float | None = Field(
        None, ge=-90, le=90, description="latitude of the observer, north positive [deg]"
    )
    longitude_deg: float | None = Field(None, ge=-180, le=180, description="longitude, east positive [deg]")
    height_m: float = Field(0.0, ge=-430, le=9000, description="height of the place above sea level [m]")
    time: dt.datetime | None = Field(None, description="TOML date-time with offset from UTC")
    disc_diameter_deg: float = Field(0.533, ge=0, le=2, description="diameter of the sun's disc; 0 is a point [deg]")


class Air(Table):
    """What the air takes from the sunlight and adds to the view."""

    pressure_hpa: float = Field(1013.25, ge=300, le=1100, description="pressure at the observer [hPa]")
    temperature_c: float = Field(15.0, ge=-40, le=50, description="temperature of the air [degC]")
    relative_humidity_percent: float = Field(70.0, ge=0, le=100, description="relative humidity, for air's index [%]")
    aerosol_optical_depth_500nm: float = Field(0.08, ge=0, le=2, description="aerosol optical depth at 500 nm")
    angstrom_exponent: float = Field(1.14, ge=0, le=3, description="Angstrom exponent of the aerosol")
    precipitable_water_cm: float = Field(2.0, ge=0, le=10, description="water vapour in the column [cm]")
    ozone_cm: float = Field(0.3, ge=0, le=0.6, description="ozone in the column [atm-cm]")
    visibility_km: float = Field(60.0, ge=0.5, le=400, description="meteorological visibility near the ground [km]")


class Rain(Table):
    """One curtain of drops: its water, its sizes and the sector of air that it fills."""

    water: Literal["fresh", "sea"] = Field("fresh", description="kind of water")
    temperature_c: float = Field(10.0, ge=0, le=50, description="temperature of the drops [degC]")
    salinity_permille: float = Field(35.0, ge=0, le=43, description="salinity, where water is 'sea' [permille]")
    refractive_index: float | None = Field(
        None, ge=1.1, le=1.9, description="fixed index relative to air, in place of water's"
    )
    size_law: Literal[*SIZE_LAW_KEYS] = Field("marshall_palmer_1948", description="size distribution of the drops")
    rain_rate_mm_h: float | None = Field(
        None, gt=0, le=300, description="rain rate; 5 where no amount is given and drops are not cloud's [mm/h]"
    )
    liquid_water_g_m3: float | None = Field(
        None, ge=0, le=50, description="liquid water, an amount; 0.1 in cloud where none is given [g/m3]"
    )
    extinction_per_km: float | None = Field(None, ge=0, le=1000, description="geometric extinction, an amount [1/km]")
    diameter_mm: float | None = Field(None, ge=0.002, le=8, description="drop diameter, for size_law 'single' [mm]")
    relative_spread: float | None = Field(
        None, ge=0, le=0.3, description="standard deviation over diameter, for size_law 'single'; 0 unless given"
    )
    median_diameter_mm: float | None = Field(
        None, ge=0.002, le=6, description="median volume diameter, for size_law 'ulbrich_1983' and 'lognormal' [mm]"
    )
    shape_mu: float | None = Field(
        None, ge=-2, le=20, description="shape parameter, for size_law 'ulbrich_1983'; 2 unless given"
    )
    geometric_standard_deviation: float | None = Field(
        None, ge=1.01, le=3, description="geometric standard deviation, for size_law 'lognormal'"
    )
    effective_radius_um: float | None = Field(
        None, ge=1, le=100, description="effective radius, for size_law 'deirmendjian_1969'; 6 unless given [um]"
    )
    effective_variance: float | None = Field(
        None, ge=0.01, le=0.3, description="effective variance, for size_law 'deirmendjian_1969'; 1/9 unless given"
    )
    size_table: str | None = Field(None, description="measured sizes for size_law 'table', path from the scene file")
    near_m: float = Field(400.0, ge=0, le=50_000, description="where it begins, level distance; 0 is at the camera [m]")
    far_m: float = Field(2500.0, gt=0, le=100_000, description="where it ends, level distance [m]")
    bottom_m: float = Field(
        0.0, ge=-2000, le=10_000, description="its underside, above the camera's foot; 0 or less reaches the ground [m]"
    )
    top_m: float = Field(2000.0, ge=-2000, le=15_000, description="its top, above the camera's foot [m]")
    azimuth_from_deg: float | None = Field(
        None, ge=-360, le=720, description="left limit; 85 degrees left of the antisolar point unless given [deg]"
    )
    azimuth_to_deg: float | None = Field(
        None, ge=-360, le=720, description="right limit; 85 degrees right of the antisolar point unless given [deg]"
    )
    edge_m: float = Field(
        150.0, ge=0, le=20_000, description="soft edge at near and far; at most half the depth unless given [m]"
    )
    edge_top_m: float = Field(
        300.0, ge=0, le=10_000, description="soft edge at bottom and top; at most half the height unless given [m]"
    )
    edge_deg: float = Field(12.0, ge=0, le=90, description="width of the soft edge at the azimuth limits [deg]")

    _measured: tuple[tuple[float, ...], tuple[float, ...]] | None = PrivateAttr(None)
    """Rows of `size_table` as the scene was read: diameters [mm], and drops per volume and diameter [1/(m3 mm)]."""


class Optics(Table):
    """How light in drops is worked out, and how finely."""

    method: Literal["auto", "rays", "airy", "waves"] = Field(
        "auto", description="rays; Airy bows; exact waves; or for each size and order the cheapest that is good to 1 %"
    )
    aureole: bool = Field(False, description="draw the light that drops diffract close to the sun")
    glory: bool = Field(False, description="draw the glory: orders interfere near the antisolar point")
    paths: int = Field(8, ge=3, le=16, description="Debye orders traced, p = 0 to paths - 1; 3 reaches the primary")
    rays: int = Field(4_000_000, ge=1_000, le=10_000_000_000, description="incident rays a wavelength")
    bins: int = Field(9_000, ge=180, le=90_000, description="bins of scattering angle from 0 to 180 degrees")
    wavelength_step_nm: float = Field(5.0, ge=1, le=20, description="step of the wavelengths, 380 to 780 nm [nm]")
    seed: int = Field(0, ge=0, le=2**63 - 1, description="seed of every random number that the rays use")


class Cloud(Table):
    """A bank of dark cloud before the sky and behind the rain."""

    azimuth_deg: float | None = Field(None, ge=-360, le=720, description="its middle; antisolar unless given [deg]")
    width_deg: float = Field(200.0, gt=0, le=360, description="its width [deg]")
    base_deg: float = Field(-2.0, ge=-90, le=90, description="elevation of its underside [deg]")
    top_deg: float = Field(60.0, ge=-90, le=90, description="elevation of its top [deg]")
    edge_deg: float = Field(18.0, ge=0.1, le=90, description="width of its soft edges [deg]")
    cover: float = Field(0.92, ge=0, le=1, description="how much of the sky it hides where it is thick")
    albedo: float = Field(0.3, ge=0, le=1, description="its luminance as a share of a white card's in diffuse light")
    sunlit: float = Field(0.02, ge=0, le=1, description="share of direct sunlight that reaches it")
    texture: float = Field(0.35, ge=0, le=1, description="contrast of its texture")
    seed: int = Field(1, ge=0, le=2**63 - 1, description="seed of its texture")


class Sky(Table):
    """What stands behind the rain above the horizon."""

    model: Literal["cie", "uniform", "black", "plate"] = Field("cie", description="kind of background")
    cie_type: int = Field(12, ge=1, le=15, description="CIE standard general sky type (ISO 15469)")
    illuminance_lx: float | None = Field(
        None,
        gt=0,
        le=200_000,
        description="diffuse illuminance on level ground, in place of the clear-sky model's [lx]",
    )
    luminance_cd_m2: float | None = Field(
        None, ge=0, le=1e9, description="luminance of model 'uniform'; 2000 unless given [cd/m2]"
    )
    colour_temperature_k: float | None = Field(
        None, ge=4000, le=25_000, description="one colour temperature for the whole sky, in place of the model's [K]"
    )
    plate: str | None = Field(None, description="picture for model 'plate', path from the scene file, same framing")
    plate_white_cd_m2: float = Field(
        8000.0, gt=0, le=1e9, description="linear luminance that the plate's white stands for [cd/m2]"
    )
    cloud: Cloud | None = Field(None, description="bank of dark cloud")


class Ground(Table):
    """The land or sea below the horizon."""

    cover: Literal["fields", "meadow", "forest", "sea", "plain", "none"] = Field("fields", description="what covers it")
    relief_m: float = Field(120.0, ge=0, le=3000, description="height of the hills above the plain [m]")
    hills_from_m: float = Field(2500.0, ge=10, le=40_000, description="level distance where the hills rise [m]")
    reaches_m: float = Field(20_000.0, ge=100, le=100_000, description="level distance to which the land is drawn [m]")
    albedo: float | None = Field(None, ge=0, le=1, description="luminous reflectance, in place of the cover's own")
    seed: int = Field(3, ge=0, le=2**63 - 1, description="seed of ridge line and texture")


class Camera(Table):
    """Where the camera looks, through which lens, and how it exposes."""

    projection: Literal["perspective", "fisheye", "panorama"] = Field("perspective", description="lens model")
    azimuth_deg: float | None = Field(None, ge=-360, le=720, description="where it looks; antisolar unless given [deg]")
    elevation_deg: float = Field(15.0, ge=-90, le=90, description="elevation of its axis [deg]")
    roll_deg: float = Field(0.0, ge=-180, le=180, description="turn about its axis, clockwise seen from behind [deg]")
    field_of_view_deg: float | None = Field(
        None, gt=0, le=360, description="perspective: across the width (90); fisheye: across the circle (180) [deg]"
    )
    width_px: int = Field(1280, ge=8, le=WIDEST_PX, description="width of the picture [px]")
    height_px: int = Field(720, ge=8, le=WIDEST_PX, description="height of the picture [px]")
    height_m: float = Field(1.7, ge=0.1, le=12_000, description="height of the camera above its foot [m]")
    exposure_percentile: float = Field(
        99.5, ge=1, le=100, description="automatic exposure: this percentile of luminance ..."
    )
    exposure_level: float = Field(0.6, gt=0, le=1, description="... is put at this share of white (linear)")
    f_number: float | None = Field(None, ge=0.5, le=128, description="manual exposure: f-number")
    shutter_s: float | None = Field(None, ge=1e-6, le=3600, description="manual exposure: exposure time [s]")
    iso: float | None = Field(None, ge=1, le=1e6, description="manual exposure: ISO speed")
    white_balance: Literal["d65", "sun"] = Field("d65", description="what the picture shows as white")


class Scene(Table):
    """A whole scene file."""

    sun: Sun
    air: Air = Air()
    rain: tuple[Rain, ...] = Field(min_length=1, max_length=8, description="one table [rain], or several [[rain]]")
    optics: Optics = Optics()
    sky: Sky = Sky()
    ground: Ground = Ground()
    camera: Camera

    _folder: Path | None = PrivateAttr(None)

    def plate_path(self) -> Path | None:
        """Absolute path of the plate, which is given from the folder of the scene file; None without one."""
        if self.sky.plate is None or self._folder is None:
            return None
        return (self._folder / self.sky.plate).resolve()

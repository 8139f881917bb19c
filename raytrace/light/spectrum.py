"""Spectrum of the sunlight and skylight that reach the drops."""

from __future__ import annotations

import contextlib
from functools import lru_cache
from typing import TYPE_CHECKING, NamedTuple

import numpy as np

from raytrace.colour import bin_edges, bin_means, xyz_weights
from raytrace.light.sun import SunPlace, sun_place

if TYPE_CHECKING:
    from raytrace.scene.model import Air, Scene


GROUND_ALBEDO = 0.2
"""Reflectance of the land round about in the skylight model (its usual value)."""

DAY_OF_YEAR = 80
"""Any day would do: SPECTRL2's own factor for the earth's distance cancels in the transmittances."""


class Illumination(NamedTuple):
    """Light that reaches the drops and the ground.

    Attributes
    ----------
    wavelength_nm : ndarray, shape (n,)
        Wavelengths, centres of the bins that `raytrace.colour.bin_edges` gives [nm].
    direct_normal : ndarray, shape (n,)
        Irradiance by the sun on a surface facing it [W m-2 nm-1].
    diffuse_horizontal : ndarray, shape (n,)
        Irradiance by the clear sky on level ground [W m-2 nm-1].
    direct_normal_lx, diffuse_horizontal_lx : float
        Their illuminances, from these wavelengths [lx].
    extraterrestrial : ndarray, shape (n,)
        Irradiance by the sun above the air, at its distance of that day [W m-2 nm-1].
    sun : SunPlace
        Where the sun stands.
    airmass : float
        Relative air mass towards the sun (Kasten & Young 1989), without the pressure's share.
    """

    wavelength_nm: np.ndarray
    direct_normal: np.ndarray
    diffuse_horizontal: np.ndarray
    direct_normal_lx: float
    diffuse_horizontal_lx: float
    extraterrestrial: np.ndarray
    sun: SunPlace
    airmass: float


def illumination(scene: Scene, wavelength_nm: np.ndarray) -> Illumination:
    """Spectra of direct sunlight and of clear skylight at the ground.

    Parameters
    ----------
    scene : Scene
        Its tables `[sun]` and `[air]` are read.
    wavelength_nm : array_like, shape (n,)
        Wavelengths, strictly increasing, their bins within 360 to 830 [nm].

    Returns
    -------
    Illumination
        Finite and non-negative.

    Raises
    ------
    ValueError
        If the sun is below the horizon, or a wavelength's bin leaves 360 to 830 nm.

    Notes
    -----
    Extraterrestrial spectrum: ASTM G173-03, averaged over each bin, over the square of the distance. Transmittances:
    R. Bird, C. Riordan, SPECTRL2, SERI/TR-215-2436 (1984), doi:10.2172/5986936, as pvlib has it, their optical depths
    joined by monotone cubics in wavelength. Air mass: F. Kasten, A. T. Young, Appl. Opt. 28, 4735 (1989).

    SPECTRL2 takes the air to be flat, so that skylight would vanish with the cosine of the zenith angle. For the
    skylight alone that cosine is put at 1 over the air mass (ours), which is the same to 1.5 % from 15 deg of elevation
    up, and leaves 1.1 klx with the sun on the horizon, where handbooks have 0.7 (from memory).
    """
    sun = sun_place(scene)
    if not 0.0 <= sun.elevation_deg <= 90.0:
        raise ValueError(
            f"the sun stands at {sun.elevation_deg:g} deg, where the drops get no sunlight; 0 to 90 deg would work"
        )
    wavelength = np.atleast_1d(np.array(wavelength_nm, dtype=np.float64))
    luminous = xyz_weights(wavelength)[:, 1]
    above_air = extraterrestrial(wavelength) / sun.distance_au**2
    direct, diffuse, airmass = _transmittances(scene.air, sun.elevation_deg)
    direct_normal = above_air * direct(wavelength)
    diffuse_horizontal = above_air * diffuse(wavelength)
    return Illumination(
        wavelength_nm=wavelength,
        direct_normal=direct_normal,
        diffuse_horizontal=diffuse_horizontal,
        direct_normal_lx=float(luminous @ direct_normal),
        diffuse_horizontal_lx=float(luminous @ diffuse_horizontal),
        extraterrestrial=above_air,
        sun=sun,
        airmass=airmass,
    )


def before_loading_beside() -> None:
    """To be called before the spectrum's libraries are loaded in a thread beside others.

    pvlib loads requests, which silences a warning of its own while it loads. Filters of warnings belong to all threads
    and the compiler sets them too, so it is loaded by the thread that calls this.
    """
    with contextlib.suppress(ImportError):
        import requests  # noqa: F401


def extraterrestrial(wavelength_nm: np.ndarray) -> np.ndarray:
    """Irradiance by the sun above the air at 1 au, ASTM G173-03, mean of each wavelength's bin.

    Parameters
    ----------
    wavelength_nm : array_like, shape (n,)
        Wavelengths, strictly increasing, their bins within 280 to 4000 [nm].

    Returns
    -------
    ndarray, shape (n,)
        [W m-2 nm-1]
    """
    return _extraterrestrial(tuple(np.atleast_1d(wavelength_nm).tolist()))


@lru_cache(maxsize=8)
def _extraterrestrial(wavelength_nm: tuple[float, ...]) -> np.ndarray:
    """ASTM G173-03 at 1 au, mean of each bin [W m-2 nm-1]."""
    from pvlib.spectrum import get_reference_spectra

    table = get_reference_spectra(standard="ASTM G173-03")["extraterrestrial"]
    return bin_means(table.index.to_numpy(), table.to_numpy(), bin_edges(wavelength_nm))


def _transmittances(air: Air, elevation_deg: float):
    """Direct and diffuse transmittance as functions of wavelength [nm], and the relative air mass."""
    from pvlib.atmosphere import get_relative_airmass
    from scipy.interpolate import PchipInterpolator

    zenith = 90.0 - elevation_deg
    airmass = float(get_relative_airmass(zenith, model="kastenyoung1989"))
    beam = _spectrl2(air, zenith, airmass)
    # A sky that is lit as deep as the air mass says, not as a flat layer would be: see the notes of `illumination`.
    sky = _spectrl2(air, float(np.degrees(np.arccos(min(1.0, 1.0 / airmass)))), airmass)
    known = (beam["wavelength"] >= 340.0) & (beam["wavelength"] <= 870.0)
    curves = []
    for power, extra in ((beam["dni"], beam["dni_extra"]), (sky["dhi"], sky["dni_extra"])):
        # Optical depth, not transmittance, is smooth over the many decades between red and violet at sunset.
        depth = -np.log(np.maximum(power[known, 0] / extra[known, 0], 1e-300))
        curves.append(PchipInterpolator(beam["wavelength"][known], depth))
    direct, diffuse = curves
    return (lambda w: np.exp(-direct(w))), (lambda w: np.exp(-diffuse(w))), airmass


def _spectrl2(air: Air, zenith_deg: float, airmass: float) -> dict[str, np.ndarray]:
    from pvlib.spectrum import spectrl2

    return spectrl2(
        apparent_zenith=np.array([zenith_deg]),
        aoi=np.array([zenith_deg]),
        surface_tilt=0,
        ground_albedo=GROUND_ALBEDO,
        surface_pressure=air.pressure_hpa * 100.0,
        relative_airmass=airmass,
        precipitable_water=air.precipitable_water_cm,
        ozone=air.ozone_cm,
        aerosol_turbidity_500nm=air.aerosol_optical_depth_500nm,
        dayofyear=np.array([DAY_OF_YEAR]),
        alpha=air.angstrom_exponent,
    )

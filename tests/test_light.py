"""Sun's place, spectrum and disc."""

import datetime as dt
import itertools
import warnings

import numpy as np
import pytest

from raytrace.light.disc import intensity, limb_darkening, mean_over_centre
from raytrace.light.spectrum import illumination
from raytrace.light.sun import SunPlace, antisolar, direction, sun_place
from raytrace.scene.model import Air, Camera, Rain, Scene, Sun

WAVELENGTH = np.arange(380.0, 781.0, 5.0)
CLEAN = {"aerosol_optical_depth_500nm": 0.0, "ozone_cm": 0.0, "precipitable_water_cm": 0.0}


def scene(elevation_deg=30.0, *, sun=None, **air):
    sun = sun or Sun(elevation_deg=float(elevation_deg), azimuth_deg=250.0)
    return Scene(sun=sun, air=Air(**air), rain=(Rain(),), camera=Camera())


def dated(time, latitude=47.0, longitude=8.0, **air):
    return scene(sun=Sun(latitude_deg=latitude, longitude_deg=longitude, time=time), **air)


# Sun's place


def test_spa_worked_example():
    # NREL/TP-560-34302 appendix A.5, quoted: 17 October 2003 12:30:30 UTC-7, zenith 50.11162, azimuth 194.34024.
    time = dt.datetime(2003, 10, 17, 12, 30, 30, tzinfo=dt.timezone(dt.timedelta(hours=-7)))
    sun = Sun(latitude_deg=39.742476, longitude_deg=-105.1786, height_m=1830.14, time=time)
    place = sun_place(scene(sun=sun, pressure_hpa=820.0, temperature_c=11.0))
    assert 90 - place.elevation_deg == pytest.approx(50.11162, abs=1e-5)
    assert place.azimuth_deg == pytest.approx(194.34024, abs=1e-5)


def test_time_zones_name_the_same_instant():
    utc = dt.datetime(2026, 6, 1, 16, 30, tzinfo=dt.UTC)
    zones = [dt.timezone(dt.timedelta(minutes=m)) for m in (-570, -60, 120, 345, 840)]
    assert {sun_place(dated(utc.astimezone(zone))) for zone in zones} == {sun_place(dated(utc))}


def test_angles_are_taken_as_they_stand():
    place = sun_place(scene(sun=Sun(elevation_deg=12.5, azimuth_deg=-90.0)))
    assert place == SunPlace(12.5, 270.0, 1.0)


@pytest.mark.parametrize(
    ("day", "distance_au", "disc_deg"),
    # Distances: almanac values, from memory. Disc: 0.524 to 0.542 deg over the year, recomputed from 0.5329 at 1 au.
    [((2026, 1, 3), 0.98330, 0.542), ((2026, 7, 6), 1.01664, 0.524)],
)
def test_distance_at_perihelion_and_aphelion(day, distance_au, disc_deg):
    place = sun_place(dated(dt.datetime(*day, 17, tzinfo=dt.UTC)))
    assert place.distance_au == pytest.approx(distance_au, abs=2e-5)
    assert 0.5329 / place.distance_au == pytest.approx(disc_deg, abs=5e-4)


def test_refraction_lifts_a_setting_sun():
    # Common practice, no source: refraction at the horizon is a little over half a degree, and less in thin warm air.
    time = dt.datetime(2026, 3, 20, 17, 37, tzinfo=dt.UTC)
    import pandas as pd
    from pvlib.solarposition import spa_python

    true = float(spa_python(pd.DatetimeIndex([time]), 47.0, 8.0)["elevation"].iloc[0])
    assert -0.5 < true < 0.0
    low = sun_place(dated(time)).elevation_deg - true
    assert 0.40 < low < 0.65
    assert sun_place(dated(time, pressure_hpa=600.0, temperature_c=40.0)).elevation_deg - true < 0.6 * low


@pytest.mark.parametrize(
    "sun",
    [
        Sun(),
        Sun(elevation_deg=10.0),
        Sun(latitude_deg=1.0, longitude_deg=2.0),
        Sun(latitude_deg=1.0, longitude_deg=2.0, time=dt.datetime(2026, 1, 1)),
    ],
)
def test_sun_without_a_place_says_what_would_work(sun):
    with pytest.raises(ValueError, match="would work") as error:
        sun_place(scene(sun=sun))
    assert "\n" not in str(error.value)


def test_world_frame():
    # x east, y north, z up; azimuth clockwise from north.
    np.testing.assert_allclose(direction(0, 0), [0, 1, 0], atol=1e-15)
    np.testing.assert_allclose(direction(90, 0), [1, 0, 0], atol=1e-15)
    np.testing.assert_allclose(direction(123, 90), [0, 0, 1], atol=1e-15)
    many = direction(np.linspace(0, 360, 7)[:, None], np.linspace(-90, 90, 5))
    assert many.shape == (7, 5, 3)
    np.testing.assert_allclose(np.linalg.norm(many, axis=-1), 1, atol=1e-15)


@pytest.mark.parametrize("azimuth", [0.0, 90.0, 180.0, 359.0])
def test_antisolar_point_is_opposite(azimuth):
    place = SunPlace(17.0, azimuth, 1.0)
    point = antisolar(place)
    assert 0 <= point[0] < 360
    np.testing.assert_allclose(direction(*point), -direction(azimuth, 17.0), atol=1e-15)


# Spectrum


@pytest.mark.parametrize(
    ("zenith_deg", "airmass"),
    # Kasten & Young 1989, quoted and recomputed.
    [(0, 0.99971), (60, 1.99429), (80, 5.58604), (85, 10.30579), (90, 37.91961)],
)
def test_air_mass(zenith_deg, airmass):
    assert illumination(scene(90 - zenith_deg), WAVELENGTH).airmass == pytest.approx(airmass, abs=5e-6)


def _rayleigh_depth(wavelength_nm):
    light = illumination(scene(30, **CLEAN), np.array([float(wavelength_nm)]))
    return float(-np.log(light.direct_normal / light.extraterrestrial)[0] / light.airmass)


@pytest.mark.parametrize(
    ("wavelength_nm", "depth"),
    # Bodhaine et al. 1999 through colour-science, recomputed. What is tested is SPECTRL2's formula; published ones
    # agree within 1.5 %. At 700 nm SPECTRL2 has oxygen as well: see the next test.
    [(400, 0.35957), (500, 0.14310), (550, 0.09689), (600, 0.06797)],
)
def test_rayleigh_optical_depth(wavelength_nm, depth):
    assert _rayleigh_depth(wavelength_nm) == pytest.approx(depth, rel=0.015)


def test_rayleigh_optical_depth_against_colour_science():
    # Bodhaine et al. 1999; 710 nm is free of other gases in SPECTRL2's table.
    with warnings.catch_warnings():
        warnings.simplefilter("ignore")
        from colour.phenomena import rayleigh_optical_depth
    for wavelength in (380.0, 440.0, 540.0, 610.0, 710.0):
        expected = float(np.squeeze(rayleigh_optical_depth(wavelength * 1e-7)))
        assert _rayleigh_depth(wavelength) == pytest.approx(expected, rel=0.015)


def test_transmittance_is_that_of_spectrl2():
    # pvlib's SPECTRL2 at wavelengths of its own table.
    from pvlib.atmosphere import get_relative_airmass
    from pvlib.spectrum import spectrl2

    airmass = get_relative_airmass(50.0, model="kastenyoung1989")
    given = dict(aoi=50.0, surface_tilt=0, ground_albedo=0.2, surface_pressure=101325.0, relative_airmass=airmass)
    given |= dict(precipitable_water=2.0, ozone=0.3, aerosol_turbidity_500nm=0.08, dayofyear=200)
    known = spectrl2(apparent_zenith=50.0, **given)
    for wavelength in (400.0, 500.0, 550.0, 610.0, 710.0):
        (row,) = np.flatnonzero(known["wavelength"] == wavelength)
        light = illumination(scene(40), np.array([wavelength]))
        for ours, theirs, rel in ((light.direct_normal, "dni", 1e-9), (light.diffuse_horizontal, "dhi", 2e-3)):
            expected = np.ravel(known[theirs])[row] / np.ravel(known["dni_extra"])[row]
            assert ours[0] / light.extraterrestrial[0] == pytest.approx(expected, rel=rel)


def test_extraterrestrial_keeps_the_energy_of_astm_g173():
    # ASTM G173-03 through pvlib: trapezium rule over the same band.
    from pvlib.spectrum import get_reference_spectra

    table = get_reference_spectra(standard="ASTM G173-03")["extraterrestrial"]
    band = table[(table.index >= 378) & (table.index <= 782)]
    expected = np.trapezoid(band.to_numpy(), band.index.to_numpy())
    for step in (1.0, 2.0, 4.0):
        wavelength = np.arange(378 + step / 2, 782, step)
        found = illumination(scene(), wavelength).extraterrestrial.sum() * step
        assert found == pytest.approx(expected, rel=1e-3)


def test_bins_of_1_and_5_nm_agree():
    coarse = illumination(scene(20), np.arange(380.0, 781.0, 5.0))
    fine = illumination(scene(20), np.arange(378.0, 783.0, 1.0))
    grouped = fine.extraterrestrial.reshape(-1, 5).mean(axis=1)
    np.testing.assert_allclose(coarse.extraterrestrial, grouped, rtol=1e-12)
    assert coarse.direct_normal.sum() * 5 == pytest.approx(fine.direct_normal.sum(), rel=2e-3)
    assert coarse.direct_normal_lx == pytest.approx(fine.direct_normal_lx, rel=2e-3)
    assert coarse.diffuse_horizontal_lx == pytest.approx(fine.diffuse_horizontal_lx, rel=2e-3)


def test_a_lower_sun_is_redder_and_dimmer():
    blue, red = np.searchsorted(WAVELENGTH, [450, 650])
    lights = [illumination(scene(e), WAVELENGTH) for e in (0, 0.5, 1, 2, 4, 8, 15, 30, 60, 90)]
    assert (np.diff([light.direct_normal[blue] / light.direct_normal[red] for light in lights]) > 0).all()
    assert (np.diff([light.direct_normal_lx for light in lights]) > 0).all()
    assert (np.diff([light.diffuse_horizontal_lx for light in lights]) > 0).all()


def test_every_air_gives_finite_light():
    corners = itertools.product((0, 0.01, 45, 90), (300, 1100), (0, 2), (0, 3), (0, 10), (0, 0.6))
    for elevation, pressure, aerosol, exponent, water, ozone in corners:
        light = illumination(
            scene(
                elevation,
                pressure_hpa=float(pressure),
                aerosol_optical_depth_500nm=float(aerosol),
                angstrom_exponent=float(exponent),
                precipitable_water_cm=float(water),
                ozone_cm=float(ozone),
            ),
            WAVELENGTH,
        )
        for power in (light.direct_normal, light.diffuse_horizontal):
            assert np.isfinite(power).all()
            assert (power >= 0).all()
        assert (light.direct_normal <= light.extraterrestrial).all()
        # Sun and sky cannot send down more than comes in, but for the few percent that land and air toss about.
        level = light.direct_normal / light.airmass + light.diffuse_horizontal
        assert (level <= 1.06 * light.extraterrestrial / light.airmass).all()


def test_solar_illuminance_constant():
    # 133.3 klx at 1 au (Darula, Kittler & Gueymard 2005, from memory).
    light = illumination(scene(), np.arange(380.0, 781.0, 1.0))
    from raytrace.colour import xyz_weights

    assert light.extraterrestrial @ xyz_weights(light.wavelength_nm)[:, 1] == pytest.approx(133.3e3, rel=0.01)


def test_level_illuminance_at_both_ends():
    # Electro-optics handbook values for clear skies, from memory: 124 klx with the sun overhead, 0.73 klx at sunset.
    # The skylight model is one of mean air; at sunset it is good to a factor, hence the width.
    high, low = illumination(scene(90), WAVELENGTH), illumination(scene(0), WAVELENGTH)
    assert high.direct_normal_lx + high.diffuse_horizontal_lx == pytest.approx(124e3, rel=0.1)
    assert 0.73e3 / 2 < low.diffuse_horizontal_lx < 0.73e3 * 2


def test_distance_dims_by_its_square():
    january = illumination(dated(dt.datetime(2026, 1, 3, 11, 30, tzinfo=dt.UTC)), WAVELENGTH)
    fixed = illumination(scene(january.sun.elevation_deg), WAVELENGTH)
    ratio = 1 / january.sun.distance_au**2
    np.testing.assert_allclose(january.direct_normal, fixed.direct_normal * ratio, rtol=1e-9)
    assert january.direct_normal_lx == pytest.approx(fixed.direct_normal_lx * ratio, rel=1e-9)


def test_illumination_is_a_pure_function():
    first = illumination(scene(10), WAVELENGTH)
    first.extraterrestrial[:] = 0
    assert (illumination(scene(10), WAVELENGTH).extraterrestrial > 0).all()


def test_sun_below_the_horizon_says_the_range():
    with pytest.raises(ValueError, match="0 to 90 deg would work"):
        illumination(scene(-0.1), WAVELENGTH)


@pytest.mark.parametrize("wavelength", [[350.0], [380.0, 840.0]])
def test_wavelengths_out_of_range_say_the_range(wavelength):
    with pytest.raises(ValueError, match="360 to 830 nm would work"):
        illumination(scene(), wavelength)


# Disc


def test_limb_darkening_rows():
    # Neckel & Labs 1994, quoted: a row, its disc mean over centre, and every printed mean of five rows.
    np.testing.assert_allclose(
        limb_darkening(np.array([559.950]))[0], [0.26892, 1.34319, -1.58427, 1.91271, -1.31350, 0.37295], rtol=1e-14
    )
    means = mean_over_centre(np.array([401.970, 492.905, 559.950, 640.970, 700.875]))
    np.testing.assert_allclose(means, [0.7303, 0.7823, 0.8061, 0.8290, 0.8434], atol=5.1e-5)


def test_limb_darkening_means_as_printed():
    # Neckel & Labs 1994, quoted: each row's printed mean, to its four digits, and coefficients that sum to 1.
    from raytrace.data import read_table

    table = read_table("neckel_labs_1994")
    assert len(table["wavelength_nm"]) == 20
    np.testing.assert_allclose(mean_over_centre(table["wavelength_nm"]), table["mean_over_centre"], atol=5.1e-5)
    np.testing.assert_allclose(intensity(1.0, table["wavelength_nm"]), 1.0, atol=2.1e-5)


def test_limb_darkening_between_and_beyond_rows():
    ends = limb_darkening(np.array([300.0, 374.086, 811.760, 900.0]))
    np.testing.assert_array_equal(ends[0], ends[1])
    np.testing.assert_array_equal(ends[2], ends[3])
    middle = limb_darkening(np.array([559.950, (559.950 + 579.880) / 2, 579.880]))
    np.testing.assert_allclose(middle[1], (middle[0] + middle[2]) / 2, rtol=1e-14)


def test_disc_mean_closed_form_against_quadrature():
    # Gauss-Legendre over the disc's radius q: mean = integral of I(sqrt(1 - q^2)) 2 q dq = integral of I(mu) 2 mu dmu.
    node, weight = np.polynomial.legendre.leggauss(12)
    mu = (node + 1) / 2
    found = (intensity(mu, WAVELENGTH) * mu * weight).sum(axis=1)
    np.testing.assert_allclose(found, mean_over_centre(WAVELENGTH), rtol=1e-13)


def test_disc_darkens_to_the_limb_and_more_in_the_blue():
    mu = np.linspace(0.05, 1, 40)
    curves = intensity(mu, np.array([400.0, 550.0, 700.0]))
    assert curves.shape == (3, 40)
    assert (np.diff(curves, axis=1) > 0).all()
    assert (np.diff(curves[:, :-1], axis=0) > 0).all()

"""Air's and water's index, sizes and fall speeds."""

import itertools
import warnings

import numpy as np
import pytest

from raytrace.drops.air_index import air_index, ciddor_1996, saturation_pressure_pa
from raytrace.drops.bow_angle import bow_angle
from raytrace.drops.fall_speed import gunn_kinzer_1949
from raytrace.drops.sizes import SIZE_LAWS, drop_sizes
from raytrace.drops.water import (
    WATERS,
    absorption_k,
    iapws_1997,
    quan_fry_1995,
    refractive_index,
    water_density_kg_m3,
)
from raytrace.scene.model import Air, Rain
from raytrace.scene.size_laws import SIZE_LAW_KEYS

LINES = np.array([400.0, 450.0, 500.0, 550.0, 589.3, 600.0, 650.0, 700.0])

# Air and water


def test_air_index_quoted():
    # Values of a public calculator after Ciddor 1996, quoted from its documentation; its vapour pressure is a newer
    # one, which changes the ninth decimal.
    for t, humidity, expected in ((20, 0.2, 1.0002716285340578), (20, 0.8, 1.0002711183472626)):
        assert ciddor_1996(633.0, t, 101325.0, humidity) == pytest.approx(expected, abs=1e-9)
    assert ciddor_1996(633.0, 60, 101325.0, 0.8) == pytest.approx(1.0002340241754055, abs=1e-9)


@pytest.mark.parametrize(
    ("temperature_c", "pressure_kpa", "refractivity"),
    # Ciddor 1996, table of dry air with 450 ppm at 633 nm, 1e8 (n - 1); from memory.
    [(20, 80, 21458.0), (20, 100, 26824.4), (20, 120, 32191.6), (10, 100, 27774.7), (30, 100, 25937.2)],
)
def test_air_index_of_ciddors_table(temperature_c, pressure_kpa, refractivity):
    found = 1e8 * (ciddor_1996(633.0, temperature_c, pressure_kpa * 1e3, 0.0) - 1)
    assert found == pytest.approx(refractivity, abs=0.0501)


def test_air_index_against_peck_and_reeder():
    # Peck & Reeder 1972 through colour-science: standard dry air, 15 degC, 1013.25 hPa, 330 ppm.
    with warnings.catch_warnings():
        warnings.simplefilter("ignore")
        from colour.phenomena.rayleigh import air_refraction_index_Peck1972
    wavelength = np.arange(380.0, 781.0, 50.0)
    found = ciddor_1996(wavelength, 15.0, 101325.0, 0.0, co2_ppm=330.0)
    np.testing.assert_allclose(found, air_refraction_index_Peck1972(wavelength / 1e3), atol=2e-8)


def test_saturation_pressure():
    # Handbook, from memory: over water 0, 20 and 50 degC, over ice -10 degC.
    for t, pascal in ((0, 611.2), (20, 2338.8), (50, 12350.0), (-10, 259.9)):
        assert saturation_pressure_pa(t) == pytest.approx(pascal, rel=2e-3)


def test_air_index_takes_wavelengths_in_air():
    air = Air(temperature_c=20.0, relative_humidity_percent=40.0)
    wavelength = np.array([400.0, 700.0])
    found = air_index(air, wavelength)
    np.testing.assert_allclose(found, ciddor_1996(wavelength * found, 20.0, 101325.0, 0.4), rtol=1e-13)


def test_water_density():
    # 25 degC: IAPWS R9-97's check point, published. The others: CIPM (Tanaka et al. 2001), from memory.
    for t, density in (
        (0, 999.8428),
        (4, 999.9750),
        (10, 999.7027),
        (20, 998.2067),
        (25, 997.047435),
        (30, 995.6488),
        (40, 992.2152),
    ):
        assert water_density_kg_m3(t) == pytest.approx(density, abs=0.0015)
    # 50 degC: handbook, 988.04, from memory: half its last digit and the accuracy that the formula claims.
    assert water_density_kg_m3(50) == pytest.approx(988.04, abs=0.005 + 0.0015)


def test_iapws_r9_97_check_values():
    # IAPWS R9-97, quoted.
    assert iapws_1997(226.5, 25.0, 997.047435) == pytest.approx(1.39277824, abs=5.1e-9)
    assert iapws_1997(589.3, 500.0, 30.4758534) == pytest.approx(1.00949307, abs=5.1e-9)


@pytest.mark.parametrize(
    ("wavelength_nm", "index", "primary", "secondary"),
    # Relative to air, 20 degC; recomputed elsewhere with wavelengths in vacuum and standard air of 15 degC.
    [
        (400, 1.343180, 40.620, 53.524),
        (450, 1.339232, None, None),
        (500, 1.336422, None, None),
        (550, 1.334312, 41.888, 51.234),
        (589.3, 1.332980, None, None),
        (600, 1.332655, None, None),
        (650, 1.331300, None, None),
        (700, 1.330152, 42.494, 50.142),
    ],
)
def test_fresh_water_relative_to_air(wavelength_nm, index, primary, secondary):
    # Link by link: the index on the same footing, then the bows, then what the scene gets. There the wavelengths are in
    # air, 0.11 nm shorter at 400 nm, and the scene's own air is warmer and damp: within 1.2e-5.
    same = iapws_1997(wavelength_nm, 20.0, water_density_kg_m3(20.0)) / ciddor_1996(wavelength_nm, 15.0, 101325.0, 0.0)
    assert same == pytest.approx(index, abs=1.1e-6)
    if primary is not None:
        assert bow_angle(same, 1).radius_deg == pytest.approx(primary, abs=0.00101)
        assert bow_angle(same, 2).radius_deg == pytest.approx(secondary, abs=0.00101)
    given = refractive_index(Rain(temperature_c=20.0), Air(), np.array([float(wavelength_nm)]))
    assert given.real[0] == pytest.approx(index, abs=1.2e-5)


def test_handbook_index_of_water():
    # n_D at 20 degC, handbook, from memory: 1.33299, relative to air.
    found = refractive_index(Rain(temperature_c=20.0), Air(temperature_c=20.0), np.array([589.3]))
    assert found.real[0] == pytest.approx(1.33299, abs=1.5e-5)


def test_leaving_out_the_air_would_move_a_bow():
    # Recomputed elsewhere: 0.05 deg, to the digit given.
    vacuum = iapws_1997(550.0, 20.0, water_density_kg_m3(20.0))
    moved = bow_angle(vacuum / ciddor_1996(550.0, 20.0, 101325.0, 0.0), 1).radius_deg - bow_angle(vacuum, 1).radius_deg
    assert moved == pytest.approx(0.05, abs=0.01)


def test_seawater_values():
    # Quan & Fry 1995 at 35 permille and 20 degC, recomputed elsewhere.
    assert quan_fry_1995(500.0, 20.0, 35.0) == pytest.approx(1.34297, abs=5.1e-6)
    assert quan_fry_1995(589.3, 20.0, 35.0) == pytest.approx(1.33941, abs=5.1e-6)


def test_seawater_without_salt_is_fresh_water_relative_to_air():
    # Settles what the formula is relative to: 4e-5 from fresh water in air, 2.5e-4 from fresh water in vacuum.
    fresh = refractive_index(Rain(temperature_c=20.0), Air(temperature_c=20.0), LINES).real
    sweet = Rain(water="sea", salinity_permille=0.0, temperature_c=20.0)
    np.testing.assert_allclose(refractive_index(sweet, Air(temperature_c=20.0), LINES).real, fresh, atol=4e-5)
    assert (np.abs(quan_fry_1995(LINES, 20.0, 0.0) - iapws_1997(LINES, 20.0, 998.2)) > 2.2e-4).all()


def test_spray_bow_is_smaller():
    # Recomputed elsewhere: by 0.91 to 0.94 deg in the primary over the visible.
    air = Air(temperature_c=20.0)
    fresh = refractive_index(Rain(temperature_c=20.0), air, LINES)
    sea = refractive_index(Rain(water="sea", temperature_c=20.0), air, LINES)
    smaller = bow_angle(fresh, 1).radius_deg - bow_angle(sea, 1).radius_deg
    assert smaller.min() > 0.905
    assert smaller.max() < 0.945


def test_absorption():
    # Hale & Querry 1973 at 25 degC, quoted; between rows the logarithm runs straight.
    np.testing.assert_allclose(absorption_k([400, 500, 600, 700]), [1.86e-9, 1.00e-9, 1.09e-8, 3.35e-8], rtol=1e-12)
    assert absorption_k(612.5) == pytest.approx(np.sqrt(1.09e-8 * 1.39e-8), rel=1e-12)


@pytest.mark.parametrize("water", WATERS)
def test_index_is_complex_absorbing_and_falls_with_wavelength(water):
    wavelength = np.arange(380.0, 781.0, 5.0)
    for temperature in (0.0, 25.0, 50.0):
        for air in (Air(), Air(pressure_hpa=300.0, temperature_c=-40.0), Air(pressure_hpa=1100.0, temperature_c=50.0)):
            index = refractive_index(Rain(water=water, temperature_c=temperature), air, wavelength)
            assert index.dtype == np.complex128
            assert index.shape == wavelength.shape
            assert (index.imag > 0).all()
            assert (np.diff(index.real) < 0).all()
            assert ((index.real > 1.32) & (index.real < 1.37)).all()


def test_fixed_index_keeps_the_absorption():
    wavelength = np.array([400.0, 700.0])
    for water in WATERS:
        fixed = refractive_index(Rain(water=water, refractive_index=1.5), Air(), wavelength)
        assert (fixed.real == 1.5).all()
        np.testing.assert_array_equal(fixed.imag, refractive_index(Rain(water=water), Air(), wavelength).imag)
        np.testing.assert_allclose(fixed.imag, absorption_k(wavelength), rtol=3e-4)


def test_out_of_range_says_the_range():
    with pytest.raises(ValueError, match="375 to 800 nm would work"):
        refractive_index(Rain(), Air(), np.array([374.0, 500.0]))
    with pytest.raises(ValueError, match="375 to 800 nm would work"):
        refractive_index(Rain(), Air(), np.array([500.0, 801.0]))
    with pytest.raises(ValueError, match="200 to 1100 nm would work"):
        iapws_1997(1200.0, 20.0, 998.0)
    with pytest.raises(ValueError, match="300 to 1700 nm would work"):
        ciddor_1996(200.0, 20.0, 101325.0, 0.0)


# Fall speeds


def test_fall_speed_rows():
    # Gunn & Kinzer 1949, quoted.
    rows = {0.1: 0.27, 0.3: 1.17, 0.5: 2.06, 0.8: 3.27, 1.0: 4.03, 1.4: 5.17, 2.0: 6.49, 2.6: 7.57}
    rows |= {3.0: 8.06, 4.0: 8.83, 5.0: 9.09, 5.8: 9.17}
    np.testing.assert_allclose(gunn_kinzer_1949(list(rows)), list(rows.values()), rtol=1e-14)


def test_fall_speed_against_atlas_1973():
    # Atlas, Srivastava & Sekhon 1973, quoted: 9.65 - 10.3 exp(-0.6 D), a fit to the same measurements.
    diameter = np.linspace(0.5, 5.8, 200)
    np.testing.assert_allclose(gunn_kinzer_1949(diameter), 9.65 - 10.3 * np.exp(-0.6 * diameter), rtol=0.03)


def test_fall_speed_outside_the_table():
    diameter = np.geomspace(0.001, 20, 4000)
    speed = gunn_kinzer_1949(diameter)
    assert (speed > 0).all()
    assert (np.diff(speed) >= 0).all()
    assert gunn_kinzer_1949(9.0) == 9.17


def test_fall_speed_of_small_drops_is_stokes():
    # Stokes 1851, viscosity of air 1.81e-5 Pa s from memory: within what slip (below) and inertia (above) can change.
    for um, rel in ((2, 0.09), (10, 0.02), (20, 0.01), (50, 0.025)):
        stokes = 998.2 * 9.81 * (um * 1e-6) ** 2 / (18 * 1.81e-5)
        assert gunn_kinzer_1949(um * 1e-3) == pytest.approx(stokes, rel=rel)
    # Textbooks of cloud physics, from memory: 1.19e8 r^2 m/s, r in metres, to a radius of some 30 um.
    assert gunn_kinzer_1949(0.02) == pytest.approx(1.19e8 * 1e-10, rel=0.03)
    assert gunn_kinzer_1949(0.0) == 0.0


def beard_1976(diameter_m):
    """Beard 1976, regimes 1 and 2 (to 1.07 mm), constants quoted by three public codes; air of 20 degC, 1013 hPa."""
    air, difference, viscosity, g = 1.204, 998.2 - 1.204, 1.818e-5, 9.80665
    slip = 1 + 2.51 * 6.62e-8 / diameter_m
    if diameter_m < 19e-6:
        return difference * g * slip * diameter_m**2 / (18 * viscosity)
    x = np.log(4 * air * difference * g * diameter_m**3 / (3 * viscosity**2))
    b = [-0.318657e1, 0.992696, -0.153193e-2, -0.987059e-3, -0.578878e-3, 0.855176e-4, -0.327815e-5]
    return viscosity * slip * np.exp(np.polynomial.Polynomial(b)(x)) / (air * diameter_m)


def test_fall_speed_of_small_drops_against_beard():
    diameter = np.geomspace(0.002, 0.1, 40)
    twin = np.array([beard_1976(d * 1e-3) for d in diameter])
    # The table's first row, 0.27 m/s, is 8 % above that law, and the speed has to meet it.
    np.testing.assert_allclose(gunn_kinzer_1949(diameter), twin, rtol=0.085)
    cloud = diameter < 0.05
    np.testing.assert_allclose(gunn_kinzer_1949(diameter[cloud]), twin[cloud], rtol=0.027)


def test_fall_speed_has_no_step_where_the_table_begins():
    below, above = gunn_kinzer_1949([0.1 * (1 - 1e-9), 0.1 * (1 + 1e-9)])
    assert above - below == pytest.approx(0.0, abs=2e-9)
    assert above > below


# Sizes


@pytest.mark.parametrize(
    ("rate", "extinction_q2", "water"),
    # Marshall & Palmer 1948, closures recomputed elsewhere, with extinction for Q = 2. Ours counts the cross-section
    # once: half of that.
    [(5.0, 1.0052, 0.3437), (10.0, 1.5556, 0.6153), (25.0, 2.7707, 1.3285)],
)
def test_marshall_palmer_closures(rate, extinction_q2, water):
    sizes = drop_sizes(Rain(rain_rate_mm_h=rate))
    assert sizes.extinction_per_km == pytest.approx(extinction_q2 / 2, abs=2.6e-5)
    assert sizes.water_g_m3 == pytest.approx(water, abs=5.1e-5)
    slope = 4.1 * rate**-0.21
    assert sizes.median_diameter_mm * slope == pytest.approx(3.672, abs=5.1e-4)
    assert sizes.effective_diameter_mm * slope == pytest.approx(3, rel=1e-12)
    assert sizes.rain_rate_mm_h == rate


def test_marshall_palmer_reflectivity():
    # Recomputed elsewhere: the sixth moment is 3151 mm6 m-3 at 5 mm/h (an independent law, Z = 200 R^1.6, has 2627).
    sizes = drop_sizes(Rain(rain_rate_mm_h=5.0))
    assert (sizes.number_m3 * sizes.diameter_mm**6).sum() == pytest.approx(3151, abs=0.6)


@pytest.mark.parametrize("rate", [5.0, 25.0])
def test_extinction_against_itu(rate):
    # ITU-R P.1814-1 (2025), quoted: 1.2924 R^0.6436 dB/km for an exponential law, Q = 2; laws differ by 30 %.
    ours_db = 2 * 10 / np.log(10) * drop_sizes(Rain(rain_rate_mm_h=rate)).extinction_per_km
    assert ours_db == pytest.approx(1.2924 * rate**0.6436, rel=0.3)


GAMMAS = [
    Rain(size_law="ulbrich_1983", median_diameter_mm=d, shape_mu=m) for d in (0.3, 1.5) for m in (-2.0, 0.0, 20.0)
]
RAINS = [Rain(), Rain(rain_rate_mm_h=120.0), *GAMMAS, Rain(size_law="single", diameter_mm=0.7)]


@pytest.mark.parametrize("rain", RAINS)
def test_classes_stand_for_the_integrals(rain):
    sizes = drop_sizes(rain)
    d, n = sizes.diameter_mm, sizes.number_m3
    assert d.shape == n.shape
    assert (d > 0).all()
    assert (n >= 0).all()
    area, volume = (np.pi / 4 * n * d**2).sum(), (np.pi / 6 * n * d**3).sum()
    assert sizes.extinction_per_km == pytest.approx(1e-3 * area, rel=1e-9)
    assert sizes.water_g_m3 == pytest.approx(1e-3 * volume, rel=1e-9)
    assert sizes.effective_diameter_mm == pytest.approx((n * d**3).sum() / (n * d**2).sum(), rel=1e-9)
    # Exact for any sizes: extinction = 1.5 water / effective diameter.
    assert sizes.extinction_per_km == pytest.approx(1.5 * sizes.water_g_m3 / sizes.effective_diameter_mm, rel=1e-9)


@pytest.mark.parametrize("rain", GAMMAS)
def test_gamma_law_against_quadrature(rain):
    # Ulbrich 1983: N0 D^mu exp(-slope D), slope = (3.67 + mu)/D0; N0 from the rain rate. scipy's adaptive quadrature.
    from scipy.integrate import quad

    mu, slope = rain.shape_mu, (3.67 + rain.shape_mu) / rain.median_diameter_mm

    def integral(power, speed=lambda d: 1.0):
        corners = np.linspace(0, 60 / slope, 61)
        parts = itertools.pairwise(corners)
        return sum(quad(lambda d: d ** (mu + power) * np.exp(-slope * d) * speed(d), a, b)[0] for a, b in parts)

    n0 = 5.0 / (3.6e-3 * np.pi / 6 * integral(3, lambda d: float(gunn_kinzer_1949(d))))
    sizes = drop_sizes(rain)
    # The joints of the speed table keep 64 classes from more than three digits.
    assert sizes.extinction_per_km == pytest.approx(1e-3 * np.pi / 4 * n0 * integral(2), rel=2e-3)
    assert sizes.water_g_m3 == pytest.approx(1e-3 * np.pi / 6 * n0 * integral(3), rel=2e-3)
    assert sizes.effective_diameter_mm == pytest.approx(integral(3) / integral(2), rel=1e-6)
    # The law's own rule for D0 is good to half a percent down to mu = -2.
    assert sizes.median_diameter_mm == pytest.approx(rain.median_diameter_mm, rel=6e-3)
    assert sizes.rain_rate_mm_h == 5.0


def test_single_diameter():
    # By hand: 1 mm drops fall at 4.03 m/s; 5 mm/h is 5/3600 kg m-2 s-1, so 0.34464 g/m3; 1.5 times that over 1 mm.
    sizes = drop_sizes(Rain(size_law="single", diameter_mm=1.0))
    assert sizes.water_g_m3 == pytest.approx(5 / 3.6 / 4.03, rel=1e-12)
    assert sizes.extinction_per_km == pytest.approx(1.5 * 5 / 3.6 / 4.03, rel=1e-12)
    assert sizes.median_diameter_mm == sizes.effective_diameter_mm == 1.0


def test_laws_are_those_of_the_scene_model():
    choices = Rain.model_json_schema()["properties"]
    assert choices["size_law"]["enum"] == list(SIZE_LAW_KEYS)
    assert set(SIZE_LAW_KEYS) == set(SIZE_LAWS)
    assert set(choices["water"]["enum"]) == set(WATERS)


def test_defaults_of_the_laws():
    assert drop_sizes(Rain()).rain_rate_mm_h == 5.0
    default = drop_sizes(Rain(size_law="ulbrich_1983", median_diameter_mm=1.0))
    two = drop_sizes(Rain(size_law="ulbrich_1983", median_diameter_mm=1.0, shape_mu=2.0, rain_rate_mm_h=5.0))
    assert default[:5] == two[:5]


@pytest.mark.parametrize(
    ("law", "key"), [("single", "diameter_mm; 0.002 to 8 mm"), ("ulbrich_1983", "median_diameter_mm; 0.002 to 6 mm")]
)
def test_missing_key_says_what_would_work(law, key):
    with pytest.raises(ValueError, match=key):
        drop_sizes(Rain(size_law=law))


def test_endless_extinction_is_refused():
    rain = Rain.model_construct(size_law="ulbrich_1983", median_diameter_mm=1.0, shape_mu=-3.0, rain_rate_mm_h=None)
    with pytest.raises(ValueError, match="above -3 would work"):
        drop_sizes(rain)

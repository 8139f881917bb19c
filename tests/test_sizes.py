"""Size laws from fog to downpour: closures, spectra against quadrature, amounts."""

import itertools
import math
import pickle
import re
import subprocess
import sys

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st
from scene_files import toml, write
from scipy.integrate import quad

from raytrace.drops.fall_speed import gunn_kinzer_1949
from raytrace.drops.sizes import SIZE_LAWS, drop_sizes, size_spectrum
from raytrace.report import scene_report
from raytrace.scene.load import load_scene
from raytrace.scene.model import Rain
from raytrace.scene.size_laws import SIZE_LAW_KEYS

ROWS = ((0.0, 0.4, 0.5, 1.1, 3.0), (900.0, 1500.0, 0.0, 200.0, 4.0))


def rain_of(law, **keys) -> Rain:
    rain = Rain(size_law=law, **keys)
    if law == "table":
        # as load_scene does
        rain._measured = ROWS
    return rain


def gamma_twin(mu, slope):
    return lambda d: d**mu * math.exp(-slope * d)


def lognormal_twin(rain):
    # number median by Hatch & Choate 1929: ln D_n = ln D_v - 3 ln^2 s
    sigma = math.log(rain.geometric_standard_deviation)
    middle = rain.median_diameter_mm * math.exp(-3 * sigma**2)
    return lambda d: math.exp(-0.5 * (math.log(d / middle) / sigma) ** 2) / d


def cloud_twin(radius_um, variance):
    # Hansen & Travis 1974: n(r) = r^((1 - 3v)/v) exp(-r/(r_eff v))
    return lambda d: (500 * d) ** ((1 - 3 * variance) / variance) * math.exp(-500 * d / (radius_um * variance))


def normal_twin(mean, spread):
    return lambda d: math.exp(-0.5 * ((d / mean - 1) / spread) ** 2)


CASES = {
    # a curtain, its law N(D) in any unit, diameters between which a quadrature is sure to see all of it
    "rain": (rain_of("marshall_palmer_1948"), gamma_twin(0.0, 4.1 * 5.0**-0.21), (1e-9, 1, 3, 6, 20)),
    "gamma": (
        rain_of("ulbrich_1983", median_diameter_mm=1.2, shape_mu=-1.5),
        gamma_twin(-1.5, 2.17 / 1.2),
        (1e-9, 1, 4, 30),
    ),
    "narrow gamma": (
        rain_of("ulbrich_1983", median_diameter_mm=1.2, shape_mu=20.0),
        gamma_twin(20.0, 23.67 / 1.2),
        (1e-9, 1, 2, 6),
    ),
    "C1": (rain_of("deirmendjian_1969"), cloud_twin(6.0, 1 / 9), (1e-9, 0.01, 0.02, 0.1)),
    "fog": (
        rain_of("deirmendjian_1969", effective_radius_um=3.0, effective_variance=0.3),
        cloud_twin(3.0, 0.3),
        (1e-9, 0.003, 0.01, 0.03, 0.1),
    ),
    "narrow cloud": (
        rain_of("deirmendjian_1969", effective_radius_um=20.0, effective_variance=0.01),
        cloud_twin(20.0, 0.01),
        (1e-9, 0.03, 0.04, 0.05, 0.1),
    ),
    "spread": (rain_of("single", diameter_mm=0.8, relative_spread=0.1), normal_twin(0.8, 0.1), (1e-9, 0.6, 0.9, 1.6)),
    "wide spread": (
        rain_of("single", diameter_mm=0.8, relative_spread=0.3),
        normal_twin(0.8, 0.3),
        (1e-9, 0.6, 1, 2, 3.5),
    ),
    "table": (rain_of("table"), lambda d: float(np.interp(d, *ROWS)), ROWS[0]),
}
for name, deviation in (("lognormal", 1.4), ("narrow lognormal", 1.01), ("wide lognormal", 3.0)):
    case = rain_of("lognormal", median_diameter_mm=0.5, geometric_standard_deviation=deviation)
    CASES[name] = (case, lognormal_twin(case), 0.5 * deviation ** np.arange(-12.0, 13.0, 2.0))


def integral(function, corners) -> float:
    return sum(quad(function, a, b, epsabs=0, epsrel=1e-11, limit=200)[0] for a, b in itertools.pairwise(corners))


# --- spectra and classes


@pytest.mark.parametrize("case", CASES)
def test_density_is_that_of_the_law_and_integrates_to_1(case):
    rain, law, corners = CASES[case]
    spectrum = size_spectrum(rain)
    # the peak of the law's second moment keeps the twin from underflow
    whole = integral(lambda d: d**2 * law(d), corners)
    d = np.linspace(spectrum.low_mm, spectrum.high_mm, 101)
    np.testing.assert_allclose(
        spectrum.density_per_mm(d), [x**2 * law(x) / whole for x in d], rtol=1e-8, atol=1e-12 / spectrum.high_mm
    )
    assert integral(lambda x: float(spectrum.density_per_mm(x)), corners) == pytest.approx(1.0, rel=1e-9)
    assert spectrum.density_per_mm(d.reshape(1, 101)).shape == (1, 101)


@pytest.mark.parametrize("case", CASES)
def test_limits_leave_out_less_than_a_hundred_thousandth(case):
    rain, _, corners = CASES[case]
    spectrum = size_spectrum(rain)
    assert 0 < spectrum.low_mm < spectrum.high_mm

    def between(a, b):
        return integral(lambda x: float(spectrum.density_per_mm(x)), [a, *[c for c in corners if a < c < b], b])

    for tail in (between(corners[0], spectrum.low_mm), between(spectrum.high_mm, corners[-1])):
        # and not much less, so that they are of use
        assert 0.5e-5 < tail < 1e-5


@pytest.mark.parametrize("case", CASES)
def test_classes_have_the_moments_of_the_law(case):
    rain, law, corners = CASES[case]
    sizes = drop_sizes(rain)
    d, n = sizes.diameter_mm, sizes.number_m3
    assert d.shape == n.shape and (d > 0).all() and (n >= 0).all()
    moment = [integral(lambda x, k=k: x**k * law(x), corners) for k in range(2, 7)]
    for k, expected in enumerate(moment, 2):
        # relative to the second, which the amount sets
        assert (n * d**k).sum() / (n * d**2).sum() == pytest.approx(expected / moment[0], rel=1e-8), k
    assert sizes.effective_diameter_mm == pytest.approx(moment[1] / moment[0], rel=1e-8)
    assert sizes.extinction_per_km == pytest.approx(1e-3 * math.pi / 4 * (n * d**2).sum(), rel=1e-12)
    assert sizes.water_g_m3 == pytest.approx(1e-3 * math.pi / 6 * (n * d**3).sum(), rel=1e-12)
    # half of the water is below the median
    half = integral(
        lambda x: x**3 * law(x), [*[c for c in corners if c < sizes.median_diameter_mm], sizes.median_diameter_mm]
    )
    assert half == pytest.approx(0.5 * moment[1], rel=1e-6)


@pytest.mark.parametrize("case", CASES)
def test_spectra_travel_between_processes(case):
    spectrum = size_spectrum(CASES[case][0])
    again = pickle.loads(pickle.dumps(spectrum))
    assert again == spectrum
    middle = 0.5 * (spectrum.low_mm + spectrum.high_mm)
    assert again.density_per_mm(middle) == spectrum.density_per_mm(middle)


def test_breaks_are_those_of_the_table_within_the_limits():
    spectrum = size_spectrum(rain_of("table"))
    assert spectrum.breaks_mm == (0.4, 0.5, 1.1)
    assert 0 < spectrum.low_mm < 0.1 and 2.9 < spectrum.high_mm < 3
    np.testing.assert_array_equal(spectrum.density_per_mm([3.1, 50.0]), 0.0)
    assert all(size_spectrum(case[0]).breaks_mm == () for name, case in CASES.items() if name != "table")


def test_table_by_hand():
    # N = 1000 (1 - D) from 0 to 1 mm: second moment 1000/12, third 1000/20, fourth 1000/30
    rain = rain_of("table")
    rain._measured = ((0.0, 1.0), (1000.0, 0.0))
    sizes, spectrum = drop_sizes(rain), size_spectrum(rain)
    assert sizes.extinction_per_km == pytest.approx(1e-3 * math.pi / 4 * 1000 / 12, rel=1e-12)
    assert sizes.water_g_m3 == pytest.approx(1e-3 * math.pi / 6 * 1000 / 20, rel=1e-12)
    assert sizes.effective_diameter_mm == pytest.approx(0.6, rel=1e-12)
    assert (sizes.number_m3 * sizes.diameter_mm**4).sum() == pytest.approx(1000 / 30, rel=1e-12)
    assert sizes.number_m3.sum() == pytest.approx(500.0, rel=1e-12)
    np.testing.assert_allclose(spectrum.density_per_mm([0.25, 0.5]), [12 * 0.0625 * 0.75, 12 * 0.25 * 0.5], rtol=1e-12)


# --- exactly one size


def test_one_size_has_equal_limits_and_no_density():
    for spread in (None, 0.0, 1e-7, 5e-324):
        spectrum = size_spectrum(rain_of("single", diameter_mm=0.7, relative_spread=spread))
        assert spectrum.low_mm == spectrum.high_mm == 0.7
        assert spectrum.breaks_mm == ()
        with pytest.raises(ValueError, match=r"one size, 0\.7 mm, have no density"):
            spectrum.density_per_mm(0.7)


def test_small_spreads_tend_to_one_size():
    exact = drop_sizes(rain_of("single", diameter_mm=0.7))
    for spread in (0.1, 0.01, 1e-3, 1e-5):
        rain = rain_of("single", diameter_mm=0.7, relative_spread=spread)
        sizes, spectrum = drop_sizes(rain), size_spectrum(rain)
        # moments of a normal law: D^3 (1 + 3 s^2) over D^2 (1 + s^2)
        wider = (1 + 3 * spread**2) / (1 + spread**2)
        assert sizes.effective_diameter_mm == pytest.approx(0.7 * wider, rel=1e-9)
        # what changes does so with the square of the spread
        for name in ("extinction_per_km", "water_g_m3", "median_diameter_mm"):
            assert getattr(sizes, name) == pytest.approx(getattr(exact, name), rel=6 * spread**2)
        # 4.3 standard deviations to either side hold all but 1e-5, and the weight D^2 moves them up a little
        assert 8 * spread < (spectrum.high_mm - spectrum.low_mm) / 0.7 < 9 * spread


def test_one_size_needs_no_heavy_library():
    program = (
        "import sys\nfrom types import SimpleNamespace\nfrom raytrace.drops.sizes import size_spectrum\n"
        "for spread in (None, 0.2):\n"
        "    rain = SimpleNamespace(size_law='single', diameter_mm=1.0, relative_spread=spread)\n"
        "    print(size_spectrum(rain).high_mm)\nassert 'scipy' not in sys.modules and 'numba' not in sys.modules"
    )
    done = subprocess.run([sys.executable, "-c", program], capture_output=True, text=True)
    assert done.returncode == 0, done.stderr
    assert done.stdout.startswith("1.0\n")


# --- closures


def test_cloud_c1():
    # Deirmendjian 1969, quoted: n(r) ~ r^6 exp(-1.5 r), r in um; effective radius 6.0 um, effective variance 1/9.
    sizes = drop_sizes(rain_of("deirmendjian_1969"))
    r, n = 500 * sizes.diameter_mm, sizes.number_m3
    area = (n * r**2).sum()
    effective = (n * r**3).sum() / area
    assert effective == pytest.approx(6.0, rel=1e-12)
    assert (n * r**2 * (r - effective) ** 2).sum() / (area * effective**2) == pytest.approx(1 / 9, rel=1e-10)
    # Its mode is 4 um (alpha/b), so the density of the cross-section has its mode at (6 + 2)/1.5 um.
    density = size_spectrum(rain_of("deirmendjian_1969")).density_per_mm
    d = 2e-3 * np.linspace(1, 20, 19_001)
    assert 500 * d[density(d).argmax()] == pytest.approx(8 / 1.5, abs=1e-3)


def test_cloud_c1_of_100_drops_a_cubic_centimetre():
    # Deirmendjian 1969, from memory: n(r) = 2.373 r^6 exp(-1.5 r) per cm3 and um has 100 drops per cm3, 0.0626 g/m3 of
    # water, and an extinction of some 16 to 17 per km in the visible. By hand, 2.373 * 6!/1.5^7 = 100.0.
    sizes = drop_sizes(rain_of("deirmendjian_1969", liquid_water_g_m3=0.06255))
    assert sizes.number_m3.sum() == pytest.approx(1e8, rel=1e-3)
    assert 2.373 * math.factorial(6) / 1.5**7 == pytest.approx(100.0, abs=0.01)
    # twice the geometric extinction, and up to a tenth more while drops are small
    assert 16.0 / 1.1 < 2 * sizes.extinction_per_km < 17.0


@pytest.mark.parametrize("case", CASES)
def test_extinction_by_water_and_effective_radius(case):
    # water = 4/3 pi rho sum(n r^3), extinction = pi sum(n r^2): extinction = 3 water/(4 rho r_eff), so that in 1/km,
    # g/m3 and um it is 750 water/r_eff; counted once, with a density of 1 g/cm3.
    law = CASES[case][0].size_law
    sizes = drop_sizes(CASES[case][0].model_copy(update={"liquid_water_g_m3": 0.1}))
    assert sizes.water_g_m3 == pytest.approx(0.1, rel=1e-14)
    assert sizes.extinction_per_km == pytest.approx(750 * 0.1 / (500 * sizes.effective_diameter_mm), rel=1e-12), law
    assert (sizes.number_m3 * sizes.diameter_mm**3).sum() * 1e-3 * math.pi / 6 == pytest.approx(0.1, rel=1e-12)


def test_c1_fog_by_hand():
    # 0.75 * 0.1 g/m3 / (1e6 g/m3 * 6e-6 m) = 0.0125 per m
    assert drop_sizes(rain_of("deirmendjian_1969")).extinction_per_km == pytest.approx(12.5, rel=1e-12)


@pytest.mark.parametrize("deviation", [1.01, 1.5, 3.0])
def test_hatch_choate(deviation):
    # Hatch & Choate 1929: medians and means of a lognormal law from each other; L = ln^2 of the deviation. Mean of the
    # k-th moment M_k = D_n^k exp(k^2 L/2) with the number median D_n = D_v exp(-3 L).
    sizes = drop_sizes(rain_of("lognormal", median_diameter_mm=0.02, geometric_standard_deviation=deviation))
    spread = math.log(deviation) ** 2
    number_median = 0.02 * math.exp(-3 * spread)
    d, n = sizes.diameter_mm, sizes.number_m3 / sizes.number_m3.sum()
    for k in range(7):
        assert (n * d**k).sum() == pytest.approx(number_median**k * math.exp(0.5 * k**2 * spread), rel=1e-9), k
    assert sizes.effective_diameter_mm == pytest.approx(number_median * math.exp(2.5 * spread), rel=1e-12)
    assert sizes.median_diameter_mm == 0.02
    effective_variance = (n * d**4).sum() * (n * d**2).sum() / (n * d**3).sum() ** 2 - 1
    # Hansen & Travis 1974, for the lognormal law: v = exp(L) - 1
    assert effective_variance == pytest.approx(math.expm1(spread), rel=1e-7)


# --- amounts

SHAPES = {
    "marshall_palmer_1948": {},
    "ulbrich_1983": {"median_diameter_mm": 1.2},
    "lognormal": {"median_diameter_mm": 1.2, "geometric_standard_deviation": 1.4},
    "deirmendjian_1969": {},
    "single": {"diameter_mm": 0.9},
    "table": {},
}


@pytest.mark.parametrize("law", SIZE_LAWS)
def test_a_given_amount_leaves_the_shape(law):
    plain = drop_sizes(rain_of(law, **SHAPES[law]))
    for key, name in (("extinction_per_km", "extinction_per_km"), ("liquid_water_g_m3", "water_g_m3")):
        for amount in (0.0, 0.5, 4.0):
            found = drop_sizes(rain_of(law, **SHAPES[law], **{key: amount}))
            factor = amount / getattr(plain, name)
            assert getattr(found, name) == pytest.approx(amount, rel=1e-14)
            assert found[1:3] == plain[1:3]
            for other in ("extinction_per_km", "water_g_m3", "rain_rate_mm_h"):
                assert getattr(found, other) == pytest.approx(factor * getattr(plain, other), rel=1e-13)
            np.testing.assert_allclose(found.number_m3, plain.number_m3 * factor, rtol=1e-13)


@pytest.mark.parametrize("law", [law for law in SIZE_LAWS if "rain_rate_mm_h" in SIZE_LAW_KEYS[law].amounts])
def test_a_given_rain_rate_sets_the_amount(law):
    sizes = drop_sizes(rain_of(law, **SHAPES[law], rain_rate_mm_h=20.0))
    assert sizes.rain_rate_mm_h == 20.0
    falls = (sizes.number_m3 * sizes.diameter_mm**3 * gunn_kinzer_1949(sizes.diameter_mm)).sum()
    # 1 mm/h is 1 kg/(m2 h); Marshall and Palmer's drops make up to a fifth more or less
    rel = 0.2 if law == "marshall_palmer_1948" else 1e-12
    assert 3600 * 1e-9 * 1e3 * math.pi / 6 * falls == pytest.approx(20.0, rel=rel)


def test_the_rate_shapes_marshall_palmer_beside_another_amount():
    shower, plain = (
        rain_of("marshall_palmer_1948", rain_rate_mm_h=25.0, **more) for more in ({"extinction_per_km": 2}, {})
    )
    given, own = drop_sizes(shower), drop_sizes(plain)
    assert given.effective_diameter_mm == own.effective_diameter_mm == pytest.approx(3 * 25**0.21 / 4.1, rel=1e-12)
    assert given.extinction_per_km == 2.0
    assert given.rain_rate_mm_h == pytest.approx(25.0 * 2.0 / own.extinction_per_km, rel=1e-12)


@pytest.mark.parametrize("law", ["ulbrich_1983", "lognormal", "single"])
def test_without_an_amount_rain_has_a_rate_and_cloud_has_water(law):
    size = "diameter_mm" if law == "single" else "median_diameter_mm"
    large, small = (drop_sizes(rain_of(law, **(SHAPES[law] | {size: d}))) for d in (0.25, 0.15))
    assert large.rain_rate_mm_h == 5.0
    assert small.water_g_m3 == pytest.approx(0.1, rel=1e-14)
    assert drop_sizes(rain_of(law, **(SHAPES[law] | {size: 0.15}), rain_rate_mm_h=0.2)).rain_rate_mm_h == 0.2


def test_cloud_of_large_drops_still_does_not_rain():
    for radius in (1.0, 100.0):
        assert drop_sizes(rain_of("deirmendjian_1969", effective_radius_um=radius)).water_g_m3 == pytest.approx(0.1)


def test_a_table_has_its_own_amount():
    sizes = drop_sizes(rain_of("table"))
    second = integral(lambda d: d**2 * float(np.interp(d, *ROWS)), ROWS[0])
    assert sizes.extinction_per_km == pytest.approx(1e-3 * math.pi / 4 * second, rel=1e-10)
    assert sizes.rain_rate_mm_h > 0


@pytest.mark.parametrize("law", [law for law, keys in SIZE_LAW_KEYS.items() if keys.needs])
def test_what_a_law_needs_is_said(law):
    for function in (drop_sizes, size_spectrum):
        with pytest.raises(ValueError, match=r"lacks \w+; .* would work|no rows; .* would work"):
            function(Rain(size_law=law))


# --- what `check` prints


@pytest.mark.parametrize(
    ("rain", "told"),
    [
        # Marshall & Palmer 1948 at 5 mm/h: water pi 8000/slope^4 is 0.3437 g/m3, recomputed elsewhere; 3/slope
        ("", ["marshall_palmer_1948, mean diameter by cross-section 1.03 mm", "0.344 g/m3", "5 mm/h", "0.5026 per km"]),
        (
            'size_law = "deirmendjian_1969"',
            ["deirmendjian_1969, effective radius 6 um", "0.1 g/m3", None, "12.5 per km"],
        ),
        (
            'size_law = "single"\ndiameter_mm = 0.02\nliquid_water_g_m3 = 0.2',
            # 750 * 0.2/10 per km; Stokes' 2/9 r^2 g rho/eta is 1.21 cm/s, times 0.2e-3 * 3600
            ["single, effective radius 10 um", "0.2 g/m3", "0.00871 mm/h", "15 per km"],
        ),
    ],
)
def test_what_is_told_of_the_drops(tmp_path, rain, told):
    lines = scene_report(load_scene(write(tmp_path, toml(rain=rain))), name="a.toml").splitlines()
    values = dict(re.split(r"  +", line, maxsplit=1) for line in lines)
    assert values["rain drops"] == told[0]
    assert values["rain liquid water"] == told[1]
    assert values.get("rain rate") == told[2]
    assert values["rain extinction"].startswith(f"{told[3]}, optical depth ")


# --- any law within its ranges


def within(key):
    rules = Rain.model_fields[key].metadata
    low = next(getattr(r, n) for r in rules for n in ("ge", "gt") if getattr(r, n, None) is not None)
    high = next(r.le for r in rules if getattr(r, "le", None) is not None)
    shut = any(getattr(r, "gt", None) is not None for r in rules)
    return st.one_of(st.floats(low, high, exclude_min=shut), st.just(high), st.just(1e-6 if shut else low))


def rows_of(points):
    points = sorted(dict(points).items())
    return tuple(zip(*points, strict=True))


NUMBERS = st.one_of(st.just(0.0), st.floats(0, 1e15), st.floats(0, 1e5))
TABLES = (
    st.lists(
        st.tuples(st.one_of(st.just(0.0), st.floats(1e-4, 30)), NUMBERS),
        min_size=2,
        max_size=9,
        unique_by=lambda p: p[0],
    )
    .map(rows_of)
    .filter(lambda rows: max(rows[1]) > 0)
)


@settings(derandomize=True, database=None, deadline=None, max_examples=300)
@given(data=st.data())
def test_any_curtain_within_the_ranges(data):
    law = data.draw(st.sampled_from(list(SIZE_LAW_KEYS)))
    keys = SIZE_LAW_KEYS[law]
    chosen = [key for key in keys.needs if key != "size_table"]
    chosen += data.draw(st.lists(st.sampled_from(keys.takes), unique=True)) if keys.takes else []
    chosen += data.draw(st.lists(st.sampled_from(keys.amounts), max_size=1))
    rain = Rain(size_law=law, **{key: data.draw(within(key)) for key in chosen})
    if law == "table":
        rain._measured = data.draw(TABLES)
    sizes, spectrum = drop_sizes(rain), size_spectrum(rain)
    assert all(math.isfinite(value) and value >= 0 for value in sizes[:5]), sizes
    assert sizes.effective_diameter_mm > 0 and sizes.median_diameter_mm > 0
    assert np.isfinite(sizes.number_m3).all() and (sizes.number_m3 >= 0).all() and (sizes.diameter_mm > 0).all()
    area = 1e-3 * math.pi / 4 * (sizes.number_m3 * sizes.diameter_mm**2).sum()
    assert area == pytest.approx(sizes.extinction_per_km, rel=1e-9, abs=1e-290)
    water = 1e-3 * math.pi / 6 * (sizes.number_m3 * sizes.diameter_mm**3).sum()
    assert water == pytest.approx(sizes.water_g_m3, rel=1e-9, abs=1e-290)
    assert 0 < spectrum.low_mm <= spectrum.high_mm < math.inf
    if spectrum.low_mm < spectrum.high_mm:
        d = np.geomspace(spectrum.low_mm, spectrum.high_mm, 50)
        density = spectrum.density_per_mm(d)
        assert np.isfinite(density).all() and (density >= 0).all() and density.max() > 0
        assert spectrum.low_mm < spectrum.median_mm() < spectrum.high_mm * 1.5

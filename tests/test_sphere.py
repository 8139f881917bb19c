"""Physics of the sphere tracer: energy, absorption, where bows stand, polarisation, and what it refuses."""

import math

import numpy as np
import pytest
from twins import absorbed_share, fresnel_power, share_of_order

from raytrace.drops.bow_angle import bow_angle
from raytrace.optics import trace_sphere
from raytrace.optics.sphere import BLOCKS
from raytrace.optics.sphere_kernels import arcsin, fold_bin
from raytrace.optics.table import ring_solid_angle_sr

RAYS = BLOCKS * 20_000
# Share of the intercepted light by Debye order for n = 1.333, check: recomputed (quadrature, printed digits)
SHARES_1333 = [0.06641, 0.88370, 0.04060, 0.006119, 0.001723, 0.000670, 0.000314, 0.000167]
# Share left over after order p, recomputed; two or three printed digits
LEFT_1333 = {1: 4.99e-2, 2: 9.30e-3, 3: 3.18e-3, 4: 1.46e-3, 5: 7.9e-4, 7: 3.1e-4, 10: 1.1e-4}
INDICES = [1.0001, 1.2, 1.333, math.sqrt(2), 1.5, 2.0, 4.0]


def digits(value):
    """Half a unit of the last printed digit."""
    return 0.5 * 10.0 ** -len(f"{value:f}".rstrip("0").split(".")[1])


def test_shares_of_orders():
    share = trace_sphere(1.333, rays=RAYS, bins=360).share().sum(axis=1)[:, 0]
    for p, printed in enumerate(SHARES_1333):
        assert share[p] == pytest.approx(printed, abs=digits(printed)), p


@pytest.mark.parametrize("p", LEFT_1333)
def test_left_over(p):
    table = trace_sphere(1.333, paths=p + 1, rays=RAYS, bins=90)
    printed = LEFT_1333[p]
    unit = 10.0 ** (math.floor(math.log10(printed)) - (1 if p >= 5 else 2))
    assert table.left_over[0] == pytest.approx(printed, abs=0.5 * unit)


@pytest.mark.parametrize("n", INDICES[1:])
def test_shares_by_polarisation_against_quadrature(n):
    share = trace_sphere(n, rays=RAYS, bins=90).share()[:, :, 0]
    exact = np.array([share_of_order(n, p) for p in range(8)])
    # unpolarised: half the power in each; stratified sampling of a smooth weight errs by far less than the histogram
    np.testing.assert_allclose(2 * share, exact, rtol=1e-4, atol=1e-7)


@pytest.mark.parametrize("k", [0.0, 1e-8, 1e-5, 1e-3])
@pytest.mark.parametrize("n", INDICES)
def test_energy_is_conserved(n, k):
    table = trace_sphere(n + 1j * k, rays=BLOCKS * 500, bins=90, paths=5, wavelength_nm=550.0, diameter_mm=1.0)
    total = table.share().sum() + table.left_over[0] + table.absorbed[0]
    assert total == pytest.approx(1, abs=1e-12)
    assert (table.absorbed[0] > 0) == (k > 0)
    assert (table.phase_sr >= 0).all()


def test_one_order_is_reflection_alone():
    table = trace_sphere(1.333, paths=1, rays=RAYS, bins=90)
    assert table.phase_sr.shape == (1, 2, 1, 90)
    assert table.share().sum() + table.left_over[0] == pytest.approx(1, abs=1e-12)


def test_weak_absorption_is_the_chord_of_all_light():
    """A weakly absorbing sphere takes alpha D (2/3) n^2 [1 - (1 - 1/n^2)^(3/2)] of the light that meets it.

    Each ray's power that enters, 1 - R, makes the chord D cos r, R of it a second one, and so on: the sum of
    (1 - R) R^j is 1, so the mean path is that of cos r over the disc whatever R is (the geometric-optics limit of
    Q_abs in Bohren and Huffman 1983, section 7.1; derived here).
    """
    for n in (1.2, 1.333, 2.0):
        k, wavelength_nm, diameter_mm = 1e-11, 500.0, 1.0
        alpha_d = 4 * np.pi * k / (wavelength_nm * 1e-6) * diameter_mm
        closed = alpha_d * (2 / 3) * n**2 * (1 - (1 - 1 / n**2) ** 1.5)
        arguments = {"paths": 64, "rays": RAYS, "bins": 30}
        table = trace_sphere(n + 1j * k, wavelength_nm=wavelength_nm, diameter_mm=diameter_mm, **arguments)
        # what is left inside after 63 chords would be absorbed too; that share is below 1e-4
        assert table.absorbed[0] == pytest.approx(closed, rel=2e-4)
        assert table.absorbed[0] < closed


@pytest.mark.parametrize("absorption", [1e-3, 0.5, 8.0])
def test_absorption_against_quadrature(absorption):
    n, wavelength_nm, diameter_mm = 1.333, 600.0, 2.0
    k = absorption * wavelength_nm / (4 * np.pi * diameter_mm * 1e6)
    table = trace_sphere(n + 1j * k, paths=4, rays=RAYS, bins=90, wavelength_nm=wavelength_nm, diameter_mm=diameter_mm)
    assert table.absorbed[0] == pytest.approx(np.mean(absorbed_share(n, 4, absorption)), rel=1e-5)
    exact = np.array([share_of_order(n, p, absorption) for p in range(4)])
    np.testing.assert_allclose(2 * table.share()[:, :, 0], exact, rtol=1e-4, atol=1e-7)


def test_opaque_drop_only_reflects():
    table = trace_sphere(1.333 + 1e-3j, rays=BLOCKS * 500, bins=90, wavelength_nm=400.0, diameter_mm=8.0)
    assert table.share()[1:].sum() < 1e-12
    assert table.absorbed[0] + table.share()[0].sum() == pytest.approx(1, abs=1e-12)


def test_complex_index_without_absorption_is_the_real_one():
    real = trace_sphere(1.333, rays=BLOCKS * 500, bins=90)
    complex_ = trace_sphere(1.333 + 0j, rays=BLOCKS * 500, bins=90, wavelength_nm=550.0, diameter_mm=3.0)
    np.testing.assert_array_equal(real.phase_sr, complex_.phase_sr)
    assert complex_.absorbed[0] == 0.0
    # a vanishing absorption goes through the absorbing branch of the kernel and changes next to nothing
    faint = trace_sphere(1.333 + 1e-15j, rays=BLOCKS * 500, bins=90, wavelength_nm=550.0, diameter_mm=1.0)
    np.testing.assert_allclose(faint.phase_sr, real.phase_sr, rtol=1e-6)


def test_absorption_weakens_longer_ways_more():
    real = trace_sphere(1.333, rays=BLOCKS * 500, bins=90)
    absorbing = trace_sphere(1.333 + 1e-5j, rays=BLOCKS * 500, bins=90, wavelength_nm=550.0, diameter_mm=1.0)
    kept = (absorbing.share() / real.share()).mean(axis=1)[:, 0]
    assert kept[0] == 1.0 and (np.diff(kept) < 0).all()


def test_same_seed_same_bytes_on_any_number_of_threads():
    def trace(**more):
        return trace_sphere([1.331, 1.343], rays=BLOCKS * 700, bins=180, **more)

    tables = [trace(seed=3, threads=t) for t in (1, 2, 5, None)]
    for name in ("phase_sr", "standard_error_sr", "left_over", "absorbed"):
        assert len({getattr(table, name).tobytes() for table in tables}) == 1, name


def test_seeds_differ_and_0_is_one():
    tables = [trace_sphere(1.333, rays=BLOCKS * 700, bins=180, seed=seed) for seed in (0, 1, 2**64 - 1)]
    assert len({table.phase_sr.tobytes() for table in tables}) == 3
    default = trace_sphere(1.333, rays=BLOCKS * 700, bins=180)
    assert default.phase_sr.tobytes() == tables[0].phase_sr.tobytes()
    assert [table.seed for table in tables] == [0, 1, 2**64 - 1]


def test_wavelengths_have_random_numbers_of_their_own():
    table = trace_sphere([1.333, 1.333], rays=BLOCKS * 700, bins=180)
    assert not np.array_equal(table.phase_sr[:, :, 0], table.phase_sr[:, :, 1])


def test_what_the_table_says_of_itself():
    calls = []
    table = trace_sphere(
        [1.34, 1.33], paths=3, rays=1001, bins=10, wavelength_nm=[400.0, 700.0], on_done=lambda: calls.append(1)
    )
    assert table.phase_sr.shape == table.standard_error_sr.shape == (3, 2, 2, 10)
    assert table.paths == 3 and table.method == "rays" and len(calls) == 2
    # rays are rounded up to whole blocks
    assert table.rays == math.ceil(1001 / BLOCKS) * BLOCKS
    np.testing.assert_array_equal(table.wavelength_nm, [400.0, 700.0])
    np.testing.assert_array_equal(table.index, [1.34, 1.33])
    np.testing.assert_array_equal(table.angle_deg, np.arange(9, 180, 18))
    assert table.solid_angle_sr.sum() == pytest.approx(4 * np.pi, rel=1e-14)


def test_solid_angles_keep_their_digits_near_the_poles():
    edges = np.array([0.0, 1e-6, 2e-6])
    # a flat ring: pi (b^2 - a^2)
    flat = np.pi * np.diff(np.radians(edges) ** 2)
    np.testing.assert_allclose(ring_solid_angle_sr(edges), flat, rtol=1e-12)
    np.testing.assert_allclose(ring_solid_angle_sr(180 - edges[::-1]), flat[::-1], rtol=2e-7)


@pytest.mark.parametrize("n", [1.331, 1.343])
@pytest.mark.parametrize("k", range(1, 7))
def test_brightest_bin_is_the_bow(n, k):
    """The brightest bin of order p = k + 1 holds the geometric rainbow angle or lies next to the bin that does.

    The first and last two degrees are left out: there light from all round the axis meets and outshines the third bow.
    """
    table = trace_sphere(n, rays=1_000_000, bins=9_000)
    phase = table.phase_sr[k + 1, :, 0].sum(axis=0)
    phase[(table.angle_deg < 2) | (table.angle_deg > 178)] = 0
    brightest = int(phase.argmax())
    low, high = table.angle_edges_deg[brightest : brightest + 2]
    width = high - low
    assert low - width <= bow_angle(n, k).scattering_deg <= high + width


# D = 2 (i - r) + k (180 - 2 r) folded, red (n = 1.331) and violet (1.343): table of a general-physics text, published
@pytest.mark.parametrize(
    ("k", "red", "violet"),
    [
        (1, 137.63, 139.35),
        (2, 129.63, 126.52),
        (3, 42.47, 38.11),
        (4, 42.76, 48.34),
        (5, 127.08, 133.86),
    ],
)
def test_red_and_violet_of_a_textbook(k, red, violet):
    table = trace_sphere([1.331, 1.343], paths=k + 2, rays=1_000_000, bins=9_000)
    phase = table.phase_sr[k + 1].sum(axis=0)
    phase[:, (table.angle_deg < 2) | (table.angle_deg > 178)] = 0
    # bins are 0.02 degrees wide, and the text gives two decimals
    np.testing.assert_allclose(table.angle_deg[phase.argmax(axis=1)], [red, violet], atol=0.035)


def test_no_light_of_the_primary_or_secondary_in_the_dark_band():
    table = trace_sphere(1.333, rays=RAYS, bins=3_600)
    band = (table.angle_edges_deg[1:] < bow_angle(1.333, 1).scattering_deg) & (
        table.angle_edges_deg[:-1] > bow_angle(1.333, 2).scattering_deg
    )
    assert band.sum() > 130
    assert (table.phase_sr[2:4][..., band] == 0).all()
    # it is not empty: external reflection and the 5th and 6th order reach in (Wang and van de Hulst 1991, published)
    assert (table.phase_sr[0, 0, 0, band] > 0).all()
    assert (table.phase_sr[6:8, 0, 0][:, band] > 0).any(axis=1).all()


# (s - p)/(s + p) of the bow ray for n = 1.333: recomputed
@pytest.mark.parametrize(("k", "bow_ray"), [(1, 0.9241), (2, 0.8071)])
def test_polarisation_tends_to_the_bow_rays(k, bow_ray):
    off = []
    for bins in (1_800, 9_000):
        s, p = trace_sphere(1.333, paths=k + 2, rays=4_000_000, bins=bins).phase_sr[k + 1, :, 0]
        j = int(s.argmax())
        off.append(abs((s[j] - p[j]) / (s[j] + p[j]) - bow_ray))
    # Within a bin of 0.1 (0.02) degrees rays from 1.5 (0.7) degrees of incidence about the bow ray mix; that changes
    # the weights of both polarisations in second order, a few thousandths (a few ten-thousandths)
    assert off[0] < 0.006
    assert off[1] < 0.001


def test_primary_is_fully_polarised_at_root_two():
    # the bow ray is at Brewster's angle there: recomputed, exact
    s, p = trace_sphere(math.sqrt(2), paths=3, rays=1_000_000, bins=9_000).phase_sr[2, :, 0]
    assert p[s.argmax()] / s.max() < 1e-3


def test_straight_light_through_a_thin_drop():
    # near n = 1 all goes straight on but what grazes: reflection is a matter of the outermost thousand of the disc's
    # rings, hence the tolerance is the weight of two rays
    table = trace_sphere(1.0001, rays=RAYS, bins=180)
    exact = np.array([share_of_order(1.0001, p) for p in range(8)])
    np.testing.assert_allclose(2 * table.share()[:, :, 0], exact, rtol=0, atol=2 * BLOCKS / RAYS)
    assert table.share()[1].sum() > 0.9999
    # a ray that grazes is bent most, by 2 (90 - arcsin(1/n)) degrees or 1.62 here: two bins, and the first has the bulk
    assert 2 * (90 - np.degrees(np.arcsin(1 / 1.0001))) == pytest.approx(1.62, abs=0.005)
    within = (table.phase_sr[1, :, 0] * table.solid_angle_sr).sum(axis=0)
    assert within[0] > 0.9998 and within[1] > 0 and (within[2:] == 0).all()


def test_head_on_reflection_of_a_dense_sphere():
    # the back bin of order 0: ((n - 1)/(n + 1))^2 over 4 pi, since a sphere reflects parallel light evenly
    for n in (2.0, 4.0):
        table = trace_sphere(n, paths=1, rays=BLOCKS * 40_000, bins=180)
        value = table.phase_sr[0, :, 0, -10:].sum(axis=0)
        i = np.radians((180 - table.angle_deg[-10:]) / 2)
        expected = sum(fresnel_power(np.cos(i), np.sqrt(1 - (np.sin(i) / n) ** 2), n)) / 2 / (4 * np.pi)
        np.testing.assert_allclose(value, expected, rtol=0.05)
        assert expected[-1] == pytest.approx(((n - 1) / (n + 1)) ** 2 / (4 * np.pi), rel=1e-3)


def test_arcsine_is_the_libraries_to_what_it_promises():
    x = np.concatenate(
        [
            np.linspace(0, 1, 20_001),
            math.sqrt(0.5) + np.arange(-200, 200) * 2.0**-53,
            0.5 + np.arange(-200, 200) * 2.0**-54,
            1 - np.arange(200) * 2.0**-53,
            np.logspace(-300, 0, 400),
            [0.0, 0.5, np.nextafter(0.5, 0), np.nextafter(0.5, 1), 1.0],
        ]
    )
    x = np.minimum(x, 1.0)
    got = np.array([arcsin(v, math.sqrt((1 - v) * (1 + v))) for v in x])
    want = np.array([math.asin(v) for v in x])
    # half a thousand-millionth of a bin of 0.02 degrees
    assert (np.abs(got - want) <= 3e-13 * want).all()
    assert arcsin(0.0, 1.0) == 0.0
    assert arcsin(1.0, 0.0) == math.pi / 2


def test_deviations_fold_at_0_and_180():
    bins = 90
    just = 1e-9
    for x, k in (
        (0.0, 0),
        (1 - just, 0),
        (1.0, 1),
        (bins - just, bins - 1),
        (float(bins), bins - 1),
        (bins + 1 - just, bins - 1),
        (bins + 1.0, bins - 2),
        (2 * bins - just, 0),
        (np.nextafter(2 * bins, 0), 0),
    ):
        assert fold_bin(x, bins) == fold_bin.py_func(x, bins) == k, x


@pytest.mark.parametrize(
    ("arguments", "told"),
    [
        ({"index": 1.0}, r"index 1 to 1 given; rays are traced for 1\.0001 to 4"),
        ({"index": 0.9}, "1.0001 to 4"),
        ({"index": 4.01}, "1.0001 to 4"),
        ({"index": [1.33, 5.0]}, "index 1.33 to 5 given"),
        ({"index": math.nan}, "not finite"),
        ({"index": math.inf}, "not finite"),
        ({"index": [[1.33]]}, "index has 2 dimensions, 1 are needed"),
        ({"index": []}, "no index given; one or more work"),
        ({"index": 1.33 - 1e-9j}, "0 to 0.001 works"),
        ({"index": 1.33 + 0.01j}, "0 to 0.001 works"),
        ({"index": 1.33 + 1e-8j}, "needs wavelength_nm and diameter_mm"),
        ({"index": 1.33 + 1e-8j, "wavelength_nm": 500.0}, "needs wavelength_nm and diameter_mm"),
        ({"paths": 0}, "paths=0 given; whole numbers from 1 to 64 work"),
        ({"paths": 65}, "from 1 to 64"),
        ({"paths": 2.5}, "paths=2.5 given; whole numbers"),
        ({"rays": BLOCKS - 1}, f"whole numbers from {BLOCKS} to 1000000000000 work"),
        ({"rays": 1e6}, "rays=1000000.0 given; whole numbers"),
        ({"rays": 10**13}, "to 1000000000000 work"),
        ({"bins": 1}, "from 2 to 1000000 work"),
        ({"bins": 10**7}, "from 2 to 1000000 work"),
        ({"seed": -1}, "seed=-1 given; whole numbers from 0"),
        ({"seed": 2**64}, "whole numbers from 0 to 18446744073709551615 work"),
        ({"seed": None}, "seed=None given"),
        ({"wavelength_nm": [400.0, 500.0]}, "2 wavelengths given for 1 indices; one each works"),
        ({"wavelength_nm": 0.0}, "not above zero"),
        ({"wavelength_nm": math.nan}, "not finite"),
        ({"diameter_mm": 0.0}, "diameter_mm=0.0 given; a number above zero works"),
        ({"diameter_mm": math.inf}, "diameter_mm=inf given; a number above zero works"),
        ({"threads": 0}, "threads=0 given; whole numbers from 1"),
    ],
)
def test_bad_arguments(arguments, told):
    with pytest.raises(ValueError, match=told) as caught:
        trace_sphere(**{"index": 1.333, "rays": BLOCKS, "bins": 10, **arguments})
    assert "\n" not in str(caught.value)

"""Tables over sizes against slow twins, energy, and rays, which everything must meet in large drops."""

import math

import numpy as np
import pytest
from test_debye import intensity, order_efficiencies
from twins import absorbed_share, share_of_order
from wave_twins import (
    INDEX,
    WAVELENGTH_NM,
    Disc,
    even_sizes,
    farthest,
    orders_sr,
    size_parameter,
    whole_sr,
)

from raytrace.drops.spectrum import Gamma, Linear, Lognormal, Normal, OneSize
from raytrace.optics import trace_sphere
from raytrace.optics.debye import efficiencies
from raytrace.optics.diffraction import reflected_sr
from raytrace.optics.drop_rows import GLORY_FROM_DEG, GLORY_FULL_DEG, RowMaker
from raytrace.optics.drop_table import GLORY_TOLERANCE, SIZE_TOLERANCE, balance, drop_table
from raytrace.optics.size_nodes import SizeNodes

# effective radius 10 um and effective variance 0.1
FOG = Gamma(10.0, 0.002)
DRIZZLE = Normal(0.45, 0.15)
EDGES = np.linspace(0.0, 180.0, 1801)
ANGLE = 0.5 * (EDGES[1:] + EDGES[:-1])
OFF_AXIS = (ANGLE > 2) & (ANGLE < 178)


def table_of(spectrum, method, **more):
    arguments = {"bins": 1800, "paths": 6, "rays": 200_000} | more
    return drop_table([INDEX], [WAVELENGTH_NM], spectrum, method=method, **arguments)


def orders_of(table):
    """(paths, angles) of unpolarised light, with what is diffracted."""
    return table.phase_sr[:, :, 0].sum(axis=1)


@pytest.fixture(scope="module")
def disc():
    return Disc(EDGES)


@pytest.fixture(scope="module")
def fog():
    return table_of(FOG, "waves")


# --- sums over sizes


def test_three_sizes_against_a_plain_sum():
    """|S|^2 of `debye_series`, summed one by one over eight points in each bin, both polarisations."""
    diameter, share = np.array([0.004, 0.02, 0.2]), np.array([0.2, 0.3, 0.5])
    nodes = SizeNodes(diameter, np.repeat(share[:, None], 4, axis=1))
    found = RowMaker(EDGES, 4, "waves", 1).rows(INDEX, WAVELENGTH_NM, nodes).phase_sr
    wanted = orders_sr(INDEX, (diameter, share), EDGES, 4, inside=8)
    # p = 0 in the sun's own bin, where the grid's first point stands for the focus
    assert (farthest(found[0], wanted[0]) < 0.01).all()
    # six points a fringe, and a cubic between them
    assert (farthest(found, wanted)[1:] < 3e-3).all()


@pytest.mark.parametrize(
    "spectrum",
    [
        FOG,
        Lognormal(0.03, 0.4),
        Normal(0.05, 0.3),
        Normal(0.2, 0.05),
        Linear((0.004, 0.01, 0.02, 0.03, 0.05), (1.0, 3.0, 0.0, 0.0, 0.5)),
    ],
    ids=lambda spectrum: type(spectrum).__name__,
)
def test_an_average_against_even_steps_of_the_diameter(spectrum, disc):
    """600 sizes in even steps: nodes that are refined until 1 % must be right to 1 %, after the sun's disc.

    As everywhere, p = 0 is judged without what is diffracted.
    """
    table = table_of(spectrum, "waves")
    assert table.size_error <= SIZE_TOLERANCE
    assert 8 < table.sizes < 300
    both = orders_of(table), orders_sr(INDEX, even_sizes(spectrum, 600), EDGES, 6, inside=1).sum(axis=1)
    for rows in both:
        rows[0] = np.minimum(rows[0], reflected_sr(INDEX, ANGLE).sum(axis=0))
    found, wanted = (disc(rows) for rows in both)
    assert (farthest(found, wanted, OFF_AXIS) < SIZE_TOLERANCE).all()


def test_one_size_has_one_node():
    table = table_of(OneSize(0.05), "waves")
    assert (table.sizes, table.size_error, table.rays) == (1, 0.0, 0)
    assert not table.standard_error_sr.any()
    wanted = orders_sr(INDEX, even_sizes(OneSize(0.05), 1), EDGES, 6, inside=6)
    assert (farthest(table.phase_sr[:, :, 0], wanted, OFF_AXIS)[1:] < 3e-3).all()


def test_each_wavelength_has_its_own_waves():
    """Bytes of a wavelength among others are those of it alone, where the nodes are the same."""
    index, nm = np.array([1.339, 1.3343, 1.331]), np.array([450.0, 550.0, 650.0])
    table = drop_table(index, nm, OneSize(0.02), method="waves", bins=900, paths=4)
    for w in range(3):
        alone = drop_table(index[w : w + 1], nm[w : w + 1], OneSize(0.02), method="waves", bins=900, paths=4)
        assert (alone.phase_sr[:, :, 0] == table.phase_sr[:, :, w]).all()
        assert (alone.aureole_sr[:, 0] == table.aureole_sr[:, w]).all()


def test_sizes_that_are_too_few_are_told(monkeypatch):
    monkeypatch.setattr("raytrace.optics.drop_table.MOST_SIZES", 16)
    table = table_of(Normal(0.05, 0.3), "waves")
    assert table.sizes == 17
    assert table.size_error > SIZE_TOLERANCE


@pytest.mark.parametrize("glory", [False, True])
@pytest.mark.parametrize("method", ["airy", "waves", "auto"])
@pytest.mark.parametrize(
    ("spectrum", "index", "paths"),
    [
        (OneSize(1e-5), 1.333, 4),
        (OneSize(0.002), 1.5 + 1e-3j, 1),
        (OneSize(0.1), 1.05, 3),
        (OneSize(2.0), 1.333 + 1e-4j, 3),
        (Gamma(1.2, 0.02), 1.36, 5),
        (Gamma(3.0, 0.3), 1.34 + 1e-8j, 4),
        (Linear((0.001, 0.002, 0.05, 0.06), (1.0, 0.0, 0.0, 1.0)), 1.6, 12),
    ],
    ids=str,
)
def test_any_table_is_sound(spectrum, index, paths, method, glory):
    """Light is finite and nowhere negative; what is told apart is no more than the whole."""
    table = drop_table([index], [550.0], spectrum, method=method, paths=paths, bins=180, rays=1000, glory=glory)
    rows = table.light_sr(aureole=True, polarised=True)
    assert rows.shape == (paths + glory + 1, 2, 1, 180)
    assert np.isfinite(rows).all() and (rows >= 0).all()
    assert np.isfinite(table.standard_error_sr).all()
    assert (table.aureole_sr <= table.phase_sr[0]).all()
    assert 0 <= table.left_over[0] <= 1 and 0 <= table.absorbed[0] <= 1


# --- energy


def test_energy_of_fog(fog):
    """The integral over all angles is the mean scattering efficiency of each Debye order, from partial waves alone."""
    # so large that drops of a few wavelengths, whose orders are scaled, have no share in it
    coarse = Gamma(10.0, 2 * 0.02 * 0.1)
    wanted = sum(
        share * order_efficiencies(INDEX, size_parameter(d), 6)
        for d, share in zip(*even_sizes(coarse, 500), strict=True)
    )
    np.testing.assert_allclose(table_of(coarse, "waves").share()[:, :, 0].sum(axis=1), wanted, rtol=2e-3)
    # Bohren and Huffman 1983, eq. 4.61
    whole = sum(
        share * efficiencies(INDEX, size_parameter(d)).scattering
        for d, share in zip(*even_sizes(FOG, 500), strict=True)
    )
    assert fog.share().sum() == pytest.approx(whole, rel=3e-3)


@pytest.mark.parametrize("method", ["waves", "auto"])
@pytest.mark.parametrize("spectrum", [FOG, DRIZZLE], ids=["fog", "drizzle"])
def test_what_is_diffracted_is_told_apart(spectrum, method):
    """Order p = 0 without the aureole is what rays reflect: by ranges of angle, to 1 %."""
    table = table_of(spectrum, method)
    rows, ring = table.light_sr(aureole=True)[:, 0], table.solid_angle_sr
    reflected = reflected_sr(INDEX, ANGLE).sum(axis=0)
    assert rows.shape == (7, 1800)
    assert (rows >= 0).all()
    for low, high in ((2, 10), (10, 20), (20, 60), (60, 120), (120, 180)):
        there = (low <= ANGLE) & (high > ANGLE)
        assert rows[0, there] @ ring[there] == pytest.approx(reflected[there] @ ring[there], rel=0.01)
    # Babinet: what is diffracted is about what is intercepted, near the sun
    assert rows[-1] @ ring == pytest.approx(1.0, abs=0.04)
    assert rows[-1, ANGLE < 15] @ ring[ANGLE < 15] > 0.95
    np.testing.assert_allclose(rows[0] + rows[-1], table.phase_sr[0].sum(axis=0)[0], rtol=1e-9)


@pytest.mark.parametrize(("k", "diameter"), [(0.0, 1.0), (1e-6, 1.0), (2e-5, 2.0)])
def test_balance_of_light(k, diameter):
    """What is left over and absorbed: adaptive quadrature, and traced rays within the scatter of eight runs."""
    index = INDEX + 1j * k
    left, absorbed = (part[0] for part in balance([index], [WAVELENGTH_NM], diameter, 5))
    exponent = 4 * math.pi * k * diameter * 1e6 / WAVELENGTH_NM
    assert absorbed == pytest.approx(np.mean(absorbed_share(INDEX, 5, exponent)), rel=1e-6, abs=1e-12)
    out = sum(np.mean(share_of_order(INDEX, p, exponent)) for p in range(5))
    assert left + absorbed + out == pytest.approx(1.0, abs=2e-6)
    runs = [
        trace_sphere(
            index, paths=5, rays=4_000, bins=10, seed=seed, wavelength_nm=[WAVELENGTH_NM], diameter_mm=diameter
        )
        for seed in range(8)
    ]
    for found, name in ((left, "left_over"), (absorbed, "absorbed")):
        traced = np.array([getattr(run, name)[0] for run in runs])
        assert abs(traced.mean() - found) <= 4 * traced.std(ddof=1) / math.sqrt(8) + 1e-12
    table = drop_table([index], [WAVELENGTH_NM], OneSize(diameter), method="airy", bins=180, paths=5, rays=1000)
    assert (table.left_over[0], table.absorbed[0]) == (left, absorbed)


# --- waves tend to rays


def test_shares_of_the_orders_tend_to_those_of_rays():
    """By x = 40,000 within 1 % to p = 4; what is missing shrinks by more than x^(-2/3), the width of the edge region.

    Measured at 40,000: p = 2 +0.07 %, 3 +0.35 %, 4 +0.98 %, 5 +2.0 %, 6 +3.6 %, 7 +5.6 %: rays that graze feed high
    orders, and waves let more of them in.
    """
    rays = np.array([np.mean(share_of_order(INDEX, p)) for p in range(8)])
    small, large = (order_efficiencies(INDEX, x, 8) / rays - 1 for x in (10_000.0, 40_000.0))
    # of p = 0 what is diffracted, 1, comes on top
    small[0], large[0] = (order_efficiencies(INDEX, x, 1)[0] - 1 - rays[0] for x in (10_000.0, 40_000.0))
    assert (np.abs(large[:5]) < 0.01).all()
    assert (np.abs(large[5:]) < [0.021, 0.037, 0.057]).all()
    assert (np.abs(small[2:]) > 4 ** (2 / 3) * np.abs(large[2:])).all()


@pytest.fixture(scope="module")
def large_drops():
    """Orders of one size after the sun's disc, by waves at x = 10,000 and 40,000, and by rays; middles of bins."""
    bins, paths = 4500, 5
    edges = np.linspace(0.0, 180.0, bins + 1)
    disc, found = Disc(edges), {}
    for x in (10_000.0, 40_000.0):
        size = OneSize(x * WAVELENGTH_NM * 1e-6 / math.pi)
        table = table_of(size, "waves", bins=bins, paths=paths)
        found[x] = disc(table.light_sr()[:, 0])
    rays = trace_sphere(INDEX, paths=paths, rays=1_000_000, bins=bins)
    return found, disc(rays.phase_sr[:, :, 0].sum(axis=1)), 0.5 * (edges[1:] + edges[:-1])


def test_waves_tend_to_rays_after_the_disc(large_drops):
    """p = 0 and 1 to 1 % of their peaks; bows by more than x^(-2/3), the offset of Airy's main maximum.

    Largest differences measured, of each peak: p = 2 14 % at x = 10,000 and 3.7 % at 40,000, p = 3 34 and 9.9 %,
    p = 4 46 and 14 %.
    """
    found, rays, angle = large_drops
    # rays that graze are few: nearer the sun they are uneven
    inside = (angle > 10) & (angle < 178)
    small, large = (farthest(found[x], rays, inside) for x in (10_000.0, 40_000.0))
    assert (large[:2] < 0.01).all()
    assert (large[2:] < [0.04, 0.11, 0.15]).all()
    assert (small[2:] > 4 ** (2 / 3) * large[2:]).all()


def test_peaks_of_bows_tend_to_those_of_rays(large_drops):
    found, rays, angle = large_drops
    for p, place, height in ((2, 0.05, 0.01), (3, 0.09, 0.02), (4, 0.09, 0.05)):
        inside = (angle > 10) & (angle < 170)
        at, of_rays = (angle[inside][np.argmax(row[p, inside])] for row in (found[40_000.0], rays))
        assert at == pytest.approx(of_rays, abs=place)
        assert found[40_000.0][p, inside].max() == pytest.approx(rays[p, inside].max(), rel=height)


def test_main_maximum_nears_the_ray_as_airy_has_it():
    """Without the disc: the primary's main maximum is 1.0188 h^(1/3) x^(-2/3) from the ray's angle (Airy 1838).

    n = 1.333: D = 137.922 deg and h = 4.8992 (recomputed). From x = 10,000 to 40,000 it shrinks by 4^(2/3).
    """
    offsets = []
    for x in (10_000.0, 40_000.0):
        wanted = math.degrees(1.018793 * 4.8992 ** (1 / 3) * x ** (-2 / 3))
        angle = 137.922 + np.linspace(0.5, 1.5, 801) * wanted
        offsets.append(angle[np.argmax(intensity(1.333, x, angle, 2))] - 137.922)
        assert offsets[-1] == pytest.approx(wanted, rel=0.03)
    assert offsets[0] / offsets[1] == pytest.approx(4 ** (2 / 3), rel=0.02)


# --- methods


@pytest.mark.parametrize(("method", "most"), [("auto", 6), ("airy", 3)])
def test_a_cheaper_method_is_good_to_1_percent(method, most, disc):
    """Drizzle of 0.45 mm, x about 2600, after the sun's disc; Airy bows beyond p = 2 are for larger drops."""
    waves, cheap = table_of(DRIZZLE, "waves"), table_of(DRIZZLE, method, rays=1_000_000)
    found, wanted = disc(cheap.light_sr()[:, 0]), disc(waves.light_sr()[:, 0])
    inside = (ANGLE > 10) & (ANGLE < 178)
    assert (farthest(found, wanted, inside)[:most] < 0.01).all()
    # not since they are the same
    assert (found[:3] != wanted[:3]).any(axis=1).all()


def test_method_rays_is_the_tracer_and_rings():
    table = table_of(OneSize(1.0), "rays", rays=16_000)
    alone = trace_sphere(INDEX, paths=6, rays=16_000, bins=1800)
    np.testing.assert_array_equal(table.phase_sr[1:], alone.phase_sr[1:])
    np.testing.assert_allclose(
        table.phase_sr[0] - table.aureole_sr, alone.phase_sr[0], atol=1e-12 * table.phase_sr.max()
    )
    assert table.rays == alone.rays


@pytest.mark.parametrize("method", ["auto", "airy", "waves"])
def test_same_bytes_for_any_number_of_threads(method):
    index, nm = np.array([1.339, 1.331]) + 1e-8j, np.array([450.0, 650.0])
    one, two = (
        drop_table(
            index, nm, Normal(0.16, 0.1), method=method, bins=600, paths=3, rays=2000, glory=True, threads=threads
        )
        for threads in (1, 2)
    )
    for name in ("phase_sr", "standard_error_sr", "aureole_sr", "glory_sr", "left_over", "absorbed"):
        assert getattr(one, name).tobytes() == getattr(two, name).tobytes(), name
    assert (one.sizes, one.size_error) == (two.sizes, two.size_error)


# --- the glory


@pytest.mark.parametrize(
    ("spectrum", "most"), [(OneSize(0.012), 0.01), (Normal(0.012, 0.05), 0.05)], ids=["one size", "narrow"]
)
def test_the_glory_is_the_whole_sum(spectrum, most):
    """Lorenz-Mie's closed sum, averaged over 3000 even steps of the diameter."""
    table = table_of(spectrum, "waves", glory=True)
    there = ANGLE > GLORY_FULL_DEG
    assert not table.phase_sr[..., there].any() and not table.aureole_sr[..., there].any()
    from_bin = int(GLORY_FULL_DEG * 10)
    wanted = whole_sr(INDEX, even_sizes(spectrum, 3000), EDGES[from_bin:], inside=4)
    assert (farthest(table.glory_sr[:, 0, from_bin:], wanted) < most).all()
    # interference of all orders is what makes it: brighter than the orders' sum at 180 degrees, with rings
    plain = table_of(spectrum, "waves")
    assert table.glory_sr[..., -5:].sum() > 1.2 * plain.phase_sr[..., -5:].sum()


def test_the_glory_of_fog_is_averaged_over_sizes_of_its_own(disc):
    """Orders interfere faster with the size than each alone: with the orders' 65 sizes this is off by 30 %.

    At three wavelengths, after the disc, against 4000 even steps of the diameter; tolerance: what the search for the
    sizes allows a single wavelength, and 1 % for the twin's own.
    """
    nm = np.array([450.0, 550.0, 650.0])
    table = drop_table(np.full(3, INDEX), nm, FOG, method="waves", bins=1800, glory=True)
    from_bin = int(GLORY_FULL_DEG * 10)
    for w in range(3):
        wanted = np.zeros((1, 1800))
        parts = whole_sr(INDEX, even_sizes(FOG, 4000), EDGES[from_bin - 20 :], inside=1, wavelength_nm=nm[w])
        wanted[0, from_bin - 20 :] = parts.sum(axis=0)
        found, wanted = disc(table.glory_sr[:, w].sum(axis=0)[None]), disc(wanted)
        assert farthest(found, wanted, ANGLE > GLORY_FULL_DEG + 0.5)[0] < GLORY_TOLERANCE + 0.01


def test_the_glory_of_a_few_small_drops_among_rain():
    """Large drops' orders are added up as they are; all drops count once."""
    rain = Gamma(3.0, 0.3)
    whole, plain = (table_of(rain, "auto", glory=glory) for glory in (True, False))
    ring = whole.solid_angle_sr[ANGLE > GLORY_FULL_DEG]
    found = whole.light_sr()[:, 0].sum(axis=0)[ANGLE > GLORY_FULL_DEG] @ ring
    # over all angles interference takes here what it gives there; a quarter of the drops is small enough for it
    assert found == pytest.approx(plain.light_sr()[:, 0].sum(axis=0)[ANGLE > GLORY_FULL_DEG] @ ring, rel=0.03)


def test_the_glory_has_a_soft_edge(fog):
    """Away from 180 degrees nothing changes; between, there is no step."""
    table = table_of(FOG, "waves", glory=True)
    outside = ANGLE < GLORY_FROM_DEG
    np.testing.assert_array_equal(table.phase_sr[..., outside], fog.phase_sr[..., outside])
    np.testing.assert_array_equal(table.aureole_sr[..., outside], fog.aureole_sr[..., outside])
    assert not table.glory_sr[..., outside].any()
    assert fog.glory_sr is None
    whole = table.light_sr(aureole=True)[:, 0].sum(axis=0)
    steps = np.abs(np.diff(np.log(whole)))
    # per 0.1 degree; just outside the edge the orders themselves change by as much
    edge = (ANGLE[1:] > GLORY_FROM_DEG - 0.5) & (ANGLE[1:] < GLORY_FULL_DEG + 0.5)
    assert steps[edge].max() < 0.03
    middle = (ANGLE > 163) & (ANGLE < 165)
    assert whole[middle].mean() == pytest.approx(fog.light_sr(aureole=True)[:, 0].sum(axis=0)[middle].mean(), rel=0.1)


# --- bad arguments


@pytest.mark.parametrize(
    ("change", "says"),
    [
        ({"method": "mie"}, "method 'mie' given; rays, airy, waves, auto work"),
        ({"paths": 0}, "paths=0 given; whole numbers from 1 to 64"),
        ({"paths": 2.5}, "whole numbers from 1 to 64"),
        ({"bins": 1}, "whole numbers from 2 to 1000000"),
        ({"rays": 3}, "whole numbers from 16"),
        ({"seed": -1}, "whole numbers from 0"),
        ({"threads": 0}, "threads=0 given; whole numbers from 1"),
        ({"index": [1.0]}, "1.0001 to 4"),
        ({"index": [math.nan]}, "not finite"),
        ({"index": [1.33 + 0.1j]}, "0 to 0.001 works"),
        ({"index": [1.33, 1.34]}, "1 wavelengths given for 2 indices"),
        ({"index": [], "wavelength_nm": []}, "no index given"),
        ({"wavelength_nm": None}, "one wavelength for each index works"),
        ({"wavelength_nm": [-550.0]}, "not above zero"),
        ({"index": [1.33, 1.34], "wavelength_nm": [650.0, 450.0]}, "rising values work"),
    ],
)
def test_bad_arguments(change, says):
    good = {"index": [1.333], "wavelength_nm": [550.0], "spectrum": OneSize(0.01), "method": "waves", "bins": 180}
    with pytest.raises(ValueError, match=says):
        drop_table(**(good | change))

"""The Debye series and the Lorenz-Mie sum against published cases, an independent library, and a slow twin."""

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st

from raytrace.optics import debye_series, lorenz_mie
from raytrace.optics.debye import efficiencies, order_coefficients, partial_waves, whole_coefficients
from raytrace.optics.partial_waves import term_count


def order_efficiencies(index, x, paths):
    """Scattering efficiency of each order alone."""
    a, b = partial_waves(order_coefficients(complex(index), x, np.arange(paths)))
    n = np.arange(1, a.shape[-1] + 1)
    return 2 / x**2 * np.sum((2 * n + 1) * (np.abs(a) ** 2 + np.abs(b) ** 2), axis=-1)


def intensity(index, x, angle, p, q=0):
    return np.abs(debye_series(index, x, angle, paths=p + 1)[p, q]) ** 2


def maxima(angle, curve, count, bright_side):
    """The first maxima from the bow towards its bright side, by parabolas [deg]."""
    at = np.flatnonzero((curve[1:-1] > curve[:-2]) & (curve[1:-1] >= curve[2:])) + 1
    down, here, up = curve[at - 1], curve[at], curve[at + 1]
    place = angle[at] + (angle[1] - angle[0]) * 0.5 * (down - up) / (down - 2 * here + up)
    return place[::bright_side][:count]


# --- the whole sphere


@pytest.mark.parametrize(
    ("index", "x", "extinction", "scattering", "asymmetry"),
    [
        # Wiscombe 1979, NCAR/TN-140; quoted, written there with the other sign of the imaginary part
        (1.33 + 1e-5j, 1.0, 0.093952, 0.093923, 0.184517),
        (1.33 + 1e-5j, 100.0, 2.101321, 2.096594, 0.868959),
        (1.33 + 1e-5j, 10_000.0, 2.004089, 1.723857, 0.907840),
        (0.75, 10.0, 2.232265, 2.232265, 0.896473),
    ],
)
def test_efficiencies_of_wiscombe_1979(index, x, extinction, scattering, asymmetry):
    found = efficiencies(index, x)
    assert found.extinction == pytest.approx(extinction, abs=6e-7)
    assert found.scattering == pytest.approx(scattering, abs=6e-7)
    assert found.asymmetry == pytest.approx(asymmetry, abs=6e-7)


def test_efficiencies_of_wiscombe_1979_in_four_decimals():
    assert efficiencies(1.5, 10.0).extinction == pytest.approx(2.8820, abs=5e-5)


def test_efficiencies_of_bohren_huffman_1983():
    """Appendix A, quoted."""
    found = efficiencies(1.55, 5.21282)
    assert found.extinction == pytest.approx(3.10543, abs=6e-6)
    assert found.backscattering == pytest.approx(2.92534, abs=6e-6)
    assert found.asymmetry == pytest.approx(0.63314, abs=6e-6)


def test_optical_theorem():
    """Extinction from the forward amplitude: 4/x^2 Re S(0) (van de Hulst 1957, section 4.21)."""
    for index, x in ((1.333, 300.0), (1.4 + 0.02j, 40.0)):
        forward = lorenz_mie(index, x, [0.0])[:, 0]
        assert forward[0] == pytest.approx(forward[1], rel=1e-12)
        assert 4 / x**2 * forward[0].real == pytest.approx(efficiencies(index, x).extinction, rel=1e-12)


def test_an_independent_library_at_random(monkeypatch):
    """miepython, both amplitudes, 200 pairs of index and size."""
    monkeypatch.setenv("MIEPYTHON_USE_JIT", "0")
    import miepython

    generator = np.random.default_rng(20240)
    angle = np.concatenate([[0.0, 180.0], generator.uniform(0, 180, 17)])
    for _ in range(200):
        n, k = generator.uniform(1.05, 2.0), 10 ** generator.uniform(-8, -1) * generator.integers(0, 2)
        x = 10 ** generator.uniform(-1, 2.5)
        s_1, s_2 = miepython.S1_S2(n - 1j * k, x, np.cos(np.radians(angle)), norm="wiscombe")
        found = lorenz_mie(n + 1j * k, x, angle)
        most = np.abs(found).max()
        np.testing.assert_allclose(found[0] / most, np.conj(s_1) / most, atol=2e-9)
        np.testing.assert_allclose(found[1] / most, np.conj(s_2) / most, atol=2e-9)


# --- order by order


def test_scattering_efficiency_of_single_orders():
    """Recomputed to the digits given, x = 1000, n = 1.333."""
    expected = [1.07899, 0.88656, 0.041962, 0.006897, 0.002215, 0.001004]
    found = order_efficiencies(1.333, 1000.0, 6)
    np.testing.assert_array_less(np.abs(found - expected), [6e-6, 6e-6, 6e-7, 6e-7, 6e-7, 6e-7])
    assert efficiencies(1.333, 1000.0).scattering == pytest.approx(2.022811, abs=5e-7)


@pytest.mark.parametrize(
    ("p", "x", "expected"),
    [
        (2, 100.0, (142.39, 151.70, 158.41)),
        (2, 1000.0, (138.900, 141.050, 142.544)),
        (2, 10_000.0, (138.135, 138.601, 138.929)),
        (3, 1000.0, (127.493, 123.609, 120.949)),
        (3, 10_000.0, (128.733, 127.898, 127.312)),
    ],
)
def test_maxima_of_bows(p, x, expected):
    """Recomputed, polarisation across the plane of scattering, n = 1.333; tolerance: the last digit given, doubled."""
    low, high = sorted((137.0 if p == 2 else 129.6, expected[-1] + (1.0 if p == 2 else -1.0)))
    angle = np.linspace(low, high, 4001)
    found = maxima(angle, intensity(1.333, x, angle, p), 3, 1 if p == 2 else -1)
    np.testing.assert_allclose(found, expected, rtol=0, atol=0.011 if x == 100 else 0.003)


@pytest.mark.parametrize(
    ("p", "x", "expected"),
    [
        (2, 100.0, 0.891), (2, 1000.0, 0.9175), (2, 10_000.0, 0.9226), (3, 1000.0, 0.740), (3, 10_000.0, 0.791),
    ],
)  # fmt: skip
def test_polarisation_falls_for_small_drops(p, x, expected):
    """Können and de Boer 1979; values recomputed at the main maximum of the perpendicular light, n = 1.333."""
    angle = np.linspace(137.2, 143.0, 2001) if p == 2 else np.linspace(126.0, 129.6, 2001)
    s, q = intensity(1.333, x, angle, p), intensity(1.333, x, angle, p, 1)
    best = np.argmax(s)
    assert (s[best] - q[best]) / (s[best] + q[best]) == pytest.approx(expected, abs=0.001)


def twin(index, x, terms, paths):
    """Orders' coefficients from Hankel functions of half-integer order, term by term as the formulas stand."""
    from scipy.special import hankel1, hankel2

    def outgoing(n, z):
        return np.sqrt(np.pi * z / 2) * hankel1(n + 0.5, z)

    def incoming(n, z):
        return np.sqrt(np.pi * z / 2) * hankel2(n + 0.5, z)

    def slope(f, n, z):
        return f(n - 1, z) - n / z * f(n, z)

    y = index * x
    out = np.empty((2, paths, terms), dtype=complex)
    for n in range(1, terms + 1):
        for kind, (alpha, beta) in enumerate(((index, 1.0), (1.0, index))):
            o_x, i_x, o_y, i_y = outgoing(n, x), incoming(n, x), outgoing(n, y), incoming(n, y)
            do_x, di_x, do_y, di_y = (
                slope(f, n, z) for f, z in ((outgoing, x), (incoming, x), (outgoing, y), (incoming, y))
            )
            q = alpha * do_x * i_y - beta * o_x * di_y
            outside = -(alpha * di_x * i_y - beta * i_x * di_y) / q
            inside = -(alpha * do_x * o_y - beta * o_x * do_y) / q
            through = -4 * index / q**2
            out[kind, 0, n - 1] = (1 - outside) / 2
            for p in range(1, paths):
                out[kind, p, n - 1] = -through * inside ** (p - 1) / 2
    return out


@pytest.mark.parametrize(
    ("index", "x"), [(1.333, 20.0), (1.333, 150.0), (1.5 + 0.01j, 60.0), (1.2 + 0.3j, 25.0), (0.8, 30.0), (1.333, 1.0)]
)
def test_coefficients_against_hankel_functions(index, x):
    terms = term_count(x)
    found = partial_waves(order_coefficients(complex(index), x, np.arange(5)))[:, :, :terms]
    np.testing.assert_allclose(found, twin(index, x, terms, 5), atol=3e-10)


def geometric_end(a):
    """What the orders from the last on add up to: each is the one before it times R11."""
    last, before = a[:, -1], a[:, -2]
    with np.errstate(divide="ignore", invalid="ignore"):
        ratio = np.where(np.abs(before) > 1e-200, last / before, 0.0)
        return np.nan_to_num(last * ratio / (1 - ratio))


@pytest.mark.parametrize(
    ("index", "x"),
    [
        (1.333, 1.0), (1.333, 10.0), (1.333, 1000.0), (1.333, 50_000.0), (1.333 + 1e-3j, 1000.0),
        (1.333 + 0.1j, 1000.0), (1.05 + 1j, 500.0), (1.6, 300.0),
    ],
)  # fmt: skip
def test_the_orders_add_up_to_the_whole_sphere(index, x):
    """½ [1 − R22 − T21 T12 / (1 − R11)] is the Mie coefficient (Debye 1908)."""
    orders = partial_waves(order_coefficients(complex(index), x, np.arange(24)))
    whole = partial_waves(whole_coefficients(complex(index), x))[:, 0]
    np.testing.assert_allclose(orders.sum(axis=1) + geometric_end(orders), whole, atol=1e-10)


def test_energy_over_the_sphere():
    """The integral of |S|^2 / (pi x^2), half for each polarisation, is each order's scattering efficiency."""
    x, index = 80.0, 1.333
    mu, weight = np.polynomial.legendre.leggauss(300)
    s = debye_series(index, x, np.degrees(np.arccos(mu)), paths=5)
    found = 2 * np.pi * (0.5 * (np.abs(s) ** 2).sum(axis=1) / (np.pi * x**2)) @ weight
    np.testing.assert_allclose(found, order_efficiencies(index, x, 5), rtol=1e-9)


@given(st.floats(1.05, 2.5), st.sampled_from([0.0, 1e-9, 1e-4, 0.05, 2.0]), st.floats(0.01, 400.0))
def test_any_sphere_is_finite_and_symmetric_on_the_axis(n, k, x):
    s = debye_series(n + 1j * k, x, [0.0, 90.0, 180.0], paths=6)
    assert np.isfinite(s).all()
    scale = np.abs(s).max(axis=(1, 2)) + 1e-30
    assert (np.abs(s[:, 0, 0] - s[:, 1, 0]) <= 1e-10 * scale).all()
    assert (np.abs(s[:, 0, 2] + s[:, 1, 2]) <= 1e-9 * scale).all()


def test_a_sphere_of_the_index_around_it_scatters_nothing():
    s = debye_series(1.0, 50.0, np.linspace(0, 180, 19), paths=5)
    most = np.abs(s[0]).max()
    # diffraction and the shadow-filling straight light cancel
    assert np.abs(s.sum(axis=0)).max() < 1e-11 * most
    assert np.abs(s[2:]).max() < 1e-11 * most
    assert np.abs(lorenz_mie(1.0, 50.0, [0.0, 40.0])).max() < 1e-11 * most


def test_small_spheres_tend_to_rayleighs_law():
    """S1 = -i x^3 (m^2 - 1) / (m^2 + 2), S2 = S1 cos theta (van de Hulst 1957, section 6.11), here exp(-i omega t)."""
    x, m, angle = 0.01, 1.333, np.array([0.0, 60.0, 180.0])
    expected = x**3 * (m**2 - 1) / (m**2 + 2)
    s_1, s_2 = lorenz_mie(m, x, angle)
    np.testing.assert_allclose(np.abs(s_1), expected, rtol=2e-4)
    np.testing.assert_allclose(s_2 / s_1, np.cos(np.radians(angle)), atol=2e-4)


def test_strong_absorption_leaves_the_outside_alone():
    s = debye_series(1.33 + 1.0j, 50_000.0, [5.0, 90.0, 180.0], paths=4)
    assert np.isfinite(s).all()
    assert np.abs(s[1:]).max() < 1e-100
    # at 180 degrees what is left is Fresnel's reflection: |S| = x |r| / 2
    r = (1.33 + 1.0j - 1) / (1.33 + 1.0j + 1)
    assert np.abs(s[0, 0, 2]) == pytest.approx(50_000.0 * abs(r) / 2, rel=1e-3)


@pytest.mark.parametrize(
    ("change", "says"),
    [
        ({"index": 0.2}, "n from 0.5 to 5"),
        ({"index": 1.3 - 0.1j}, "k from 0 to 5"),
        ({"index": float("nan")}, "index nan"),
        ({"size_parameter": 0.0}, "0.01 to 100000"),
        ({"size_parameter": float("inf")}, "0.01 to 100000"),
        ({"size_parameter": 2e5}, "0.01 to 100000"),
        ({"angle_deg": [181.0]}, "outside 0 to 180"),
        ({"angle_deg": [np.nan]}, "not finite"),
        ({"angle_deg": []}, "no values"),
        ({"paths": 0}, "whole numbers from 1 to 64"),
        ({"paths": 2.5}, "whole numbers from 1 to 64"),
    ],
)
def test_bad_arguments(change, says):
    good = {"index": 1.333, "size_parameter": 100.0, "angle_deg": [0.0]}
    with pytest.raises(ValueError, match=says):
        debye_series(**(good | change))
    if "paths" not in change:
        with pytest.raises(ValueError, match=says):
            lorenz_mie(**(good | change))

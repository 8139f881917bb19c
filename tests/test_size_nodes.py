"""Averages over drop sizes against adaptive integration: the error is what it is said to be, for every size law."""

import itertools
import math

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st
from scipy.integrate import quad

from raytrace.drops.spectrum import Gamma, Linear, Lognormal, Normal, OneSize
from raytrace.optics.size_nodes import FIRST_STEPS, SizeAxis, refine

SPECTRA = {
    "rain": Gamma(3.0, 0.35),
    "fog": Gamma(10.0, 0.002),
    "endless small drops": Gamma(1.2, 0.1),
    "lognormal": Lognormal(0.3, math.log(1.5)),
    "narrow lognormal": Lognormal(0.02, math.log(1.05)),
    "normal": Normal(0.5, 0.1),
    "wide normal": Normal(0.5, 0.3),
    "table": Linear((0.1, 0.2, 0.5, 1.0), (0.0, 3.0, 1.0, 0.0)),
    "table with a gap": Linear((0.1, 0.2, 0.3, 0.6, 0.7), (1.0, 0.0, 0.0, 2.0, 0.0)),
    "table with jumps": Linear((0.1, 0.2, 0.2001, 0.6, 0.7), (1.0, 1.0, 0.0, 0.0, 2.0)),
}
TOLERANCE = 0.01


def exact(spectrum, function):
    """Average by cross-section between the limits, by the adaptive rule of QUADPACK; pieces so short that none waves
    much."""
    edges = np.unique([*np.geomspace(spectrum.low_mm, spectrum.high_mm, 17), *spectrum.breaks_mm])
    edges = edges[(edges >= spectrum.low_mm) & (edges <= spectrum.high_mm)]

    def over(f):
        return sum(quad(f, a, b, limit=200)[0] for a, b in itertools.pairwise(edges))

    whole = over(lambda d: float(spectrum.density_per_mm(d)))
    return over(lambda d: float(spectrum.density_per_mm(d)) * function(d)) / whole


def mean(nodes, functions):
    """(quantities, functions) averages."""
    return nodes.weight.T @ np.stack([f(nodes.diameter_mm) for f in functions], axis=-1)


@pytest.fixture(params=SPECTRA, ids=str)
def spectrum(request):
    return SPECTRA[request.param]


def test_known_averages(spectrum):
    """The mean diameter, its square and its logarithm, against numerical integration."""
    nodes = SizeAxis(spectrum).nodes(512)
    for f in (lambda d: d, np.square, np.log):
        wanted = exact(spectrum, f)
        # where a law bends, jumps, or is cut at its limits, trapezoids are good to a power of their width only
        smooth = spectrum.breaks_mm == () and spectrum is not SPECTRA["endless small drops"]
        assert mean(nodes, [f])[0, 0] == pytest.approx(wanted, rel=1e-4 if smooth else 2e-3)


def test_closed_forms():
    """Mean diameter by cross-section: closed forms of the laws themselves; the limits leave out 1e-5 on each side."""
    for name in ("rain", "fog", "lognormal", "normal", "table"):
        nodes = SizeAxis(SPECTRA[name]).nodes(512)
        assert nodes.weight[:, 0] @ nodes.diameter_mm == pytest.approx(SPECTRA[name].effective_mm(), rel=3e-4)


def fringes(spectrum, most):
    """Waves in D as interference makes them: cosines of all periods down to the range over `most`."""
    span = spectrum.high_mm - spectrum.low_mm
    return [lambda d, k=k: np.cos(2 * math.pi * k * d / span + k) for k in np.linspace(0.0, most, 4 * most + 1)]


@pytest.mark.parametrize("most", [3, 12])
def test_the_error_is_below_the_tolerance_where_refine_says_so(spectrum, most):
    functions = fringes(spectrum, most)
    nodes, moved = refine(
        spectrum,
        lambda nodes: mean(nodes, functions),
        lambda coarse, fine: np.abs(fine - coarse).max(axis=1),
        quantities=1,
        tolerance=TOLERANCE,
        most_steps=4096,
    )
    assert moved[0] <= TOLERANCE
    found = mean(nodes, functions)[0]
    errors = [found[i] - exact(spectrum, functions[i]) for i in range(0, len(functions), 4)]
    assert np.abs(errors).max() < TOLERANCE
    # not merely by brute force: a node is one drop to work out
    assert nodes.diameter_mm.size <= 64 * most + 1


def test_each_quantity_has_its_own_rule():
    spectrum = SPECTRA["rain"]
    slow, fast = fringes(spectrum, 2), fringes(spectrum, 30)

    def average(nodes):
        return np.concatenate([mean(nodes, slow)[0], mean(nodes, fast)[1]])

    def distance(coarse, fine):
        change = np.abs(fine - coarse)
        return [change[: len(slow)].max(), change[len(slow) :].max()]

    nodes, moved = refine(spectrum, average, distance, quantities=2, tolerance=1e-3, most_steps=4096)
    assert (moved <= 1e-3).all()
    used = np.count_nonzero(nodes.weight, axis=0)
    assert used[0] * 4 < used[1] == nodes.diameter_mm.size
    np.testing.assert_allclose(nodes.weight.sum(axis=0), 1.0, rtol=1e-12)
    # each is the rule that it would have alone
    for q, functions in enumerate((slow, fast)):
        alone, _ = refine(
            spectrum,
            lambda nodes, functions=functions: mean(nodes, functions),
            lambda coarse, fine: np.abs(fine - coarse).max(axis=1),
            quantities=1,
            tolerance=1e-3,
            most_steps=4096,
        )
        kept = nodes.weight[:, q] > 0
        np.testing.assert_allclose(nodes.diameter_mm[kept], alone.diameter_mm, rtol=1e-12)
        np.testing.assert_allclose(nodes.weight[kept, q], alone.weight[:, 0], rtol=1e-12)


def test_the_average_that_is_judged_is_that_of_the_nodes(spectrum):
    """Doubling adds to what is there; in the end it is the average over the nodes that are handed back."""
    functions, seen = fringes(spectrum, 3), []

    def distance(coarse, fine):
        seen.append((coarse, fine))
        return np.abs(fine - coarse).max(axis=1)

    nodes, moved = refine(
        spectrum,
        lambda nodes: mean(nodes, functions),
        distance,
        quantities=1,
        tolerance=TOLERANCE,
        most_steps=4096,
    )
    assert len(seen) == math.log2((nodes.diameter_mm.size - 1) / FIRST_STEPS)
    np.testing.assert_allclose(seen[-1][1], mean(nodes, functions), atol=1e-12)
    coarse = SizeAxis(spectrum).nodes((nodes.diameter_mm.size - 1) // 2)
    np.testing.assert_allclose(seen[-1][0], mean(coarse, functions), atol=1e-12)
    assert moved[0] == np.abs(seen[-1][1] - seen[-1][0]).max()


def test_a_limit_that_is_reached_is_told():
    """Nodes end at the limit, and what is handed back then is that the last step moved the average by too much."""
    spectrum, functions = SPECTRA["rain"], fringes(SPECTRA["rain"], 200)
    nodes, moved = refine(
        spectrum,
        lambda nodes: mean(nodes, functions),
        lambda coarse, fine: np.abs(fine - coarse).max(axis=1),
        quantities=1,
        tolerance=TOLERANCE,
        most_steps=32,
    )
    assert nodes.diameter_mm.size == 33
    assert moved[0] > 10 * TOLERANCE


def test_one_size():
    def never(*_):
        raise AssertionError("one size needs no average")

    nodes, moved = refine(OneSize(0.5), never, never, quantities=3, tolerance=0.01, most_steps=64)
    assert nodes.diameter_mm.tolist() == [0.5]
    assert nodes.weight.tolist() == [[1.0, 1.0, 1.0]]
    assert moved.tolist() == [0.0, 0.0, 0.0]


@pytest.mark.parametrize("steps", [8, 64])
def test_rules_nest(spectrum, steps):
    axis = SizeAxis(spectrum)
    coarse, middle, fine = axis.nodes(steps), axis.between(steps), axis.nodes(2 * steps)
    np.testing.assert_allclose(fine.diameter_mm[::2], coarse.diameter_mm, rtol=1e-12)
    np.testing.assert_allclose(fine.diameter_mm[1::2], middle.diameter_mm, rtol=1e-12)
    assert (np.diff(fine.diameter_mm) > 0).all()
    whole, share = axis.totals(steps)
    both = np.empty(fine.diameter_mm.size)
    both[::2], both[1::2] = whole * coarse.weight[:, 0], share * middle.weight[:, 0]
    np.testing.assert_allclose(both / (whole + share), fine.weight[:, 0], atol=1e-14)


def test_nodes_reach_from_limit_to_limit(spectrum):
    nodes = SizeAxis(spectrum).nodes(16)
    assert nodes.diameter_mm[[0, -1]] == pytest.approx([spectrum.low_mm, spectrum.high_mm], rel=1e-12)
    assert (nodes.weight >= 0).all()


@given(st.floats(0.6, 60.0), st.floats(1e-3, 2.0))
def test_any_gamma_law(shape, scale):
    """The mean diameter, shape times scale, and 1/D where it has an average: 1 / (scale (shape - 1))."""
    spectrum = Gamma(shape, scale)
    nodes = SizeAxis(spectrum).nodes(256)
    assert nodes.weight[:, 0] @ nodes.diameter_mm == pytest.approx(shape * scale, rel=2e-3)
    if shape > 2:
        assert nodes.weight[:, 0] @ (1 / nodes.diameter_mm) == pytest.approx(1 / (scale * (shape - 1)), rel=5e-3)

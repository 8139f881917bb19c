"""Benchmarks of wave optics: the Debye series against a compiled Mie sum, tables of fog, drizzle and rain, and costs.

Run with `python -m pytest tests/benchmarks/test_waves.py --benchmark-enable --benchmark-only -s`. Draws `wave_cost.png`
beside this file anew where the environment says RAYTRACE_DRAW=1.
"""

import os
import time
from pathlib import Path

import numpy as np
import pytest
from skies import make_scene

from raytrace.drops.spectrum import Gamma, Lognormal, OneSize
from raytrace.drops.water import refractive_index
from raytrace.optics import debye_series, scattering_table
from raytrace.optics.drop_table import drop_table
from raytrace.optics.partial_waves import term_count
from raytrace.scene.model import Air, Rain

ROUNDS = 15
X, ANGLES, PATHS = 1000.0, 1801, 8
# fog of r_eff 10 um and v_eff 0.1 (Hansen & Travis 1974), drizzle of 0.1 to 0.5 mm, rain of 5 mm/h (Marshall & Palmer)
FOG = Gamma(10.0, 2 * 0.010 * 0.1)
DRIZZLE = Lognormal(0.3, 0.35)
RAIN = Gamma(3.0, 1 / (4.1 * 5.0**-0.21))


def timed(function):
    start = time.perf_counter()
    function()
    return time.perf_counter() - start


def test_debye_against_compiled_mie(benchmark, capsys, monkeypatch):
    """Eight orders at once against the bare Mie sum of miepython, compiled, in turns."""
    monkeypatch.setenv("MIEPYTHON_USE_JIT", "1")
    import miepython

    assert miepython.USE_JIT
    angle = np.linspace(0.0, 180.0, ANGLES)
    mu = np.cos(np.radians(angle))

    def ours():
        return debye_series(1.333, X, angle, paths=PATHS)

    def theirs():
        return miepython.S1_S2(1.333, X, mu, norm="wiscombe")

    whole = ours().sum(axis=0)[0]
    # the same work: eight orders make all but a thousandth of the sphere's light
    assert np.abs(whole[200:1500] - np.conj(theirs()[0][200:1500])).max() < 0.02 * np.abs(whole).max()
    pairs = np.array([(timed(ours), timed(theirs)) for _ in range(ROUNDS)])
    work = term_count(X) * ANGLES / 1e6
    ratio = np.median(pairs[:, 1] / pairs[:, 0])
    benchmark.extra_info.update(ratio=round(float(ratio), 2))
    with capsys.disabled():
        print(
            f"\nDebye, {PATHS} orders: {work / np.median(pairs[:, 0]):.0f} million term-angles/s, miepython "
            f"{work / np.median(pairs[:, 1]):.0f}; ratio {ratio:.1f} (goal 10)"
        )
    benchmark.pedantic(ours, rounds=3)


@pytest.mark.parametrize(
    ("what", "spectrum", "method", "bins"),
    [
        ("fog, 10 s", FOG, "waves", 1800),
        ("drizzle, 60 s", DRIZZLE, "waves", 9000),
        ("rain, 20 s", RAIN, "auto", 9000),
    ],
)
def test_tables(benchmark, capsys, what, spectrum, method, bins):
    """81 wavelengths on all cores."""
    wavelength = np.arange(380.0, 781.0, 5.0)
    index = refractive_index(Rain(), Air(), wavelength)
    # compiled before the clock runs
    drop_table(index[:1], wavelength[:1], OneSize(0.7), method="auto", bins=180, rays=1000)
    tables = []

    def make():
        tables.append(drop_table(index, wavelength, spectrum, method=method, bins=bins))

    benchmark.pedantic(make, rounds=2)
    with capsys.disabled():
        print(f"\n{what} goal: {benchmark.stats.stats.min:.2f} s at best, {tables[0].sizes} sizes")


def test_table_from_the_cache(benchmark, capsys, empty_cache):
    scene = make_scene(
        rain={"size_law": "deirmendjian_1969", "effective_radius_um": 10.0, "effective_variance": 0.1},
        optics={"method": "waves", "bins": 9000, "wavelength_step_nm": 5.0},
    )
    scattering_table(scene)
    benchmark.pedantic(lambda: scattering_table(scene), rounds=5)
    with capsys.disabled():
        print(f"\nfog from the cache: {benchmark.stats.stats.min:.3f} s at best (goal 0.2)")


def test_cost(benchmark, capsys):
    """Cost of one drop at one wavelength against size and against orders, on its own grid of 9,000 angles."""
    angle = (np.arange(9000) + 0.5) * 0.02
    sizes = [100, 300, 1000, 3000, 10_000, 30_000]
    orders = [1, 2, 4, 8, 12, 16]

    def best(x, paths):
        debye_series(1.333, x, angle[:96], paths=paths)
        return min(timed(lambda: debye_series(1.333, x, angle, paths=paths)) for _ in range(3 if x > 5000 else 7))

    by_size = [best(float(x), PATHS) for x in sizes]
    by_order = [best(1000.0, p) for p in orders]
    with capsys.disabled():
        print("\nseconds by size", dict(zip(sizes, np.round(by_size, 4).tolist(), strict=True)))
        print("seconds by orders at x = 1000", dict(zip(orders, np.round(by_order, 4).tolist(), strict=True)))
    if os.environ.get("RAYTRACE_DRAW") == "1":
        draw_cost(sizes, by_size, orders, by_order)
    benchmark.pedantic(lambda: debye_series(1.333, 1000.0, angle, paths=PATHS), rounds=3)


def draw_cost(sizes, by_size, orders, by_order):
    from matplotlib.figure import Figure

    figure = Figure(figsize=(9.0, 3.6), dpi=110, layout="constrained")
    left, right = figure.subplots(1, 2)
    left.loglog(sizes, by_size, "o-", color="0.0", lw=1.2)
    left.loglog(sizes, by_size[2] * np.array(sizes) / sizes[2], ":", color="0.5", lw=1.2, label="in proportion to x")
    left.set_xlabel("size parameter x")
    left.set_ylabel("seconds for one drop and wavelength")
    left.set_title(f"{PATHS} orders, 9,000 angles, one thread", fontsize=10)
    left.legend(fontsize=8)
    right.plot(orders, np.array(by_order) * 1e3, "o-", color="0.0", lw=1.2)
    right.set_ylim(bottom=0)
    right.set_xlabel("orders p = 0 to paths - 1, at once")
    right.set_ylabel("milliseconds")
    right.set_title("x = 1000, 9,000 angles, one thread", fontsize=10)
    for axes in (left, right):
        axes.grid(alpha=0.3, lw=0.5)
    figure.savefig(Path(__file__).with_name("wave_cost.png"), metadata={"Software": None})

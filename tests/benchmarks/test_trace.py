"""Rays a second of the sphere tracer on one thread, beside a plain vectorised NumPy twin; figures are in README.md."""

import statistics
import time

import numpy as np
import pytest
from twins import numpy_trace, splitmix64_uniform

from raytrace.optics import trace_sphere
from raytrace.optics.sphere_kernels import SphereBlock, trace_sphere_block
from raytrace.random_stream import stream_state

INDEX, PATHS, BINS, RAYS = 1.333, 8, 18_000, 4_000_000
ROUNDS = 7


def million_rays_a_second(function):
    start = time.perf_counter()
    function()
    return RAYS / (time.perf_counter() - start) / 1e6


def say(capsys, line):
    with capsys.disabled():
        print("\n" + line)


def test_trace_sphere_against_numpy(benchmark, capsys):
    """8 orders, 2 polarisations, 18,000 bins; the two are timed in turns, so that both meet the same machine."""

    def ours():
        trace_sphere(INDEX, paths=PATHS, bins=BINS, rays=RAYS, threads=1)

    def theirs():
        # its random numbers come from NumPy's own generator, which is faster than a hash written in NumPy
        numpy_trace(INDEX, np.random.default_rng(0).random(RAYS), PATHS, BINS)

    ours()  # compiles, or loads what is compiled
    rates = [(million_rays_a_second(ours), million_rays_a_second(theirs)) for _ in range(ROUNDS)]
    fast, plain = (statistics.median(column) for column in zip(*rates, strict=True))
    ratio = statistics.median(a / b for a, b in rates)
    benchmark.extra_info.update(
        million_rays_per_s=round(fast, 1), numpy_million_rays_per_s=round(plain, 2), ratio=round(ratio, 1)
    )
    say(capsys, f"trace_sphere {fast:.1f} M rays/s, NumPy {plain:.2f} M rays/s, ratio {ratio:.1f} (goals: 20 and 15)")
    benchmark.pedantic(ours, rounds=3)


def test_kernel_alone(benchmark, capsys):
    """One block of all rays, without the merge of blocks."""
    hist, balance = np.empty((PATHS, BINS, 2)), np.empty((2, 2))
    block = SphereBlock(INDEX, 0.0, RAYS, PATHS, BINS, stream_state(0))

    def kernel():
        trace_sphere_block(block, hist, balance)

    kernel()
    rate = statistics.median(million_rays_a_second(kernel) for _ in range(ROUNDS))
    benchmark.extra_info.update(million_rays_per_s=round(rate, 1))
    say(capsys, f"kernel alone {rate:.1f} M rays/s")
    benchmark.pedantic(kernel, rounds=3)


def test_absorbing_drop(benchmark, capsys):
    def absorbing():
        trace_sphere(INDEX + 1e-8j, paths=PATHS, bins=BINS, rays=RAYS, threads=1, wavelength_nm=600.0, diameter_mm=1.0)

    absorbing()
    rate = statistics.median(million_rays_a_second(absorbing) for _ in range(ROUNDS))
    benchmark.extra_info.update(million_rays_per_s=round(rate, 1))
    say(capsys, f"trace_sphere with absorption {rate:.1f} M rays/s")
    benchmark.pedantic(absorbing, rounds=3)


@pytest.mark.parametrize("rays", [300_001])
def test_twin_does_the_same_work(rays):
    """What is compared is one thing: the twin fed with the kernel's random numbers gives the kernel's histogram."""
    hist, balance = np.empty((PATHS, BINS, 2)), np.empty((2, 2))
    stream = stream_state(0)
    trace_sphere_block(SphereBlock(INDEX, 0.0, rays, PATHS, BINS, stream), hist, balance)
    twin = numpy_trace(INDEX, splitmix64_uniform(int(stream), rays), PATHS, BINS)
    # one ray in a bin's edge may fall to either side
    assert np.abs(hist.transpose(0, 2, 1) - twin).max() < 1.0 + 1e-9
    assert (np.abs(hist.transpose(0, 2, 1) - twin) > 1e-9).sum() <= 4

"""What a whole render or comparison costs: seconds and peak memory of a fresh process, printed and never asserted.

Run with `python -m pytest tests/benchmarks/test_render.py --benchmark-enable --benchmark-only -s`.
"""

import os
import subprocess
import sys
from pathlib import Path

import pytest

ROOT = Path(__file__).resolve().parents[2]
SCENE = ROOT / "scenes" / "double_bow.toml"


def run(home, out, *options):
    """Render the first scene in a process of its own; returns its peak resident memory [bytes]."""
    peak = command(home, "render", str(SCENE), "-o", str(out), *options)
    assert out.read_bytes()[:4] == b"\x89PNG"
    return peak


def command(home, *arguments):
    """Run one command in a process of its own; returns its peak resident memory [bytes]."""
    environment = {**os.environ, "XDG_CACHE_HOME": str(home), "PYTHONPATH": str(ROOT)}
    process = subprocess.Popen(
        [sys.executable, "-m", "raytrace", *arguments], env=environment, stdout=subprocess.DEVNULL
    )
    _, status, usage = os.wait4(process.pid, 0)
    process.returncode = os.waitstatus_to_exitcode(status)
    assert process.returncode == 0
    # kilobytes on Linux, bytes on macOS
    return usage.ru_maxrss * (1 if sys.platform == "darwin" else 1024)


def report(capsys, benchmark, what, peak):
    with capsys.disabled():
        print(f"\n{what}: {benchmark.stats.stats.min:.2f} s at best, {peak / 1e9:.2f} GB at most")


@pytest.fixture(scope="module")
def home(tmp_path_factory):
    return tmp_path_factory.mktemp("cache")


@pytest.mark.skipif(not hasattr(os, "wait4"), reason="peak memory is read with wait4")
class TestWholeProcess:
    def test_very_first(self, benchmark, home, tmp_path, capsys):
        # machine code is compiled and tables are traced
        peak = benchmark.pedantic(run, (home, tmp_path / "a.png"), rounds=1)
        report(capsys, benchmark, "1280x720, the very first time", peak)

    def test_warm(self, benchmark, home, tmp_path, capsys):
        run(home, tmp_path / "a.png")
        peaks = []
        benchmark.pedantic(lambda: peaks.append(run(home, tmp_path / "a.png")), rounds=3)
        report(capsys, benchmark, "1280x720, warm caches", max(peaks))

    def test_large(self, benchmark, home, tmp_path, capsys):
        peak = benchmark.pedantic(run, (home, tmp_path / "a.png", "--size", "7680x4320"), rounds=1)
        report(capsys, benchmark, "7680x4320", peak)

    def test_compare(self, benchmark, home, capsys):
        # seven orders at 1 %, one drop
        command(home, "compare")
        peaks = []
        benchmark.pedantic(lambda: peaks.append(command(home, "compare")), rounds=5)
        report(capsys, benchmark, "compare, warm", max(peaks))

    def test_compare_scene(self, benchmark, home, capsys):
        command(home, "compare", str(SCENE))
        peaks = []
        benchmark.pedantic(lambda: peaks.append(command(home, "compare", str(SCENE))), rounds=3)
        report(capsys, benchmark, "compare with a scene, warm", max(peaks))

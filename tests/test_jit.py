"""The door to numba: where machine code is kept, and how tasks run."""

import os
import subprocess
import sys
import threading
import time
from pathlib import Path

import numpy as np
import pytest

from raytrace import cast, jit

ROOT = Path(__file__).parents[1]


def add_squares(values, out, at):
    total = 0.0
    for v in values:
        total += v * v
    out[at] = total


def test_kernel_equals_its_python_function():
    compiled = jit.kernel(add_squares)
    values, out = np.linspace(0, 1, 100), np.zeros(2)
    compiled(values, out, 0)
    compiled.py_func(values, out, 1)
    assert out[0] == out[1] > 0


def test_decorator_takes_options():
    assert jit.kernel(inline=True)(add_squares).py_func is add_squares


def test_kernels_compute_where_no_folder_can_be_written(monkeypatch, tmp_path):
    in_the_way = tmp_path / "file"
    in_the_way.write_text("not a folder")
    monkeypatch.setattr(jit, "cache_root", lambda: in_the_way / "raytrace")
    monkeypatch.setattr(jit, "kernel_cache_folder", jit.kernel_cache_folder.__wrapped__)
    assert jit.kernel_cache_folder() is None
    out = np.zeros(1)
    jit.kernel(add_squares)(np.ones(5), out, 0)
    assert out[0] == 5


def test_full_disk_keeps_no_machine_code(monkeypatch, tmp_path):
    class Full:
        def __enter__(self):
            return self

        def __exit__(self, *_):
            return False

        def write(self, data):
            raise OSError(28, "No space left on device")

    monkeypatch.setattr(jit, "cache_root", lambda: tmp_path)
    monkeypatch.setattr(jit.tempfile, "TemporaryFile", lambda **_: Full())
    assert jit.kernel_cache_folder.__wrapped__() is None


def test_another_process_computes_without_a_cache(tmp_path):
    # from the import on, with nothing to write to
    in_the_way = tmp_path / "file"
    in_the_way.write_text("not a folder")
    code = (
        "import numpy as np; from raytrace.optics.fold import apply_weights; from raytrace import jit;"
        "out = np.zeros((2, 1)); start = np.zeros(2, np.int64);"
        "apply_weights(np.ones((2, 1)), start, np.full((2, 2), 0.5), out);"
        "print(out.sum(), jit.kernel_cache_folder())"
    )
    env = {**os.environ, "XDG_CACHE_HOME": str(in_the_way), "PYTHONPATH": str(ROOT)}
    done = subprocess.run([sys.executable, "-W", "error", "-c", code], env=env, capture_output=True, text=True)
    assert (done.stdout.split(), done.stderr) == (["2.0", "None"], "")


def test_folder_is_named_by_the_sources(monkeypatch, tmp_path):
    monkeypatch.setattr(jit, "cache_root", lambda: tmp_path)
    fresh = jit.kernel_cache_folder.__wrapped__
    before = fresh()
    assert before.is_dir() and before == fresh()
    monkeypatch.setattr(jit, "_sources_hash", lambda: "edited")
    assert fresh() != before


def test_old_machine_code_is_dropped(monkeypatch, tmp_path):
    monkeypatch.setattr(jit, "cache_root", lambda: tmp_path)
    for age in range(6):
        folder = tmp_path / "kernels" / f"old{age}"
        folder.mkdir(parents=True)
        os.utime(folder, (1e9 - age, 1e9 - age))
    current = jit.kernel_cache_folder.__wrapped__()
    left = sorted(p.name for p in (tmp_path / "kernels").iterdir())
    assert left == sorted([current.name, "old0", "old1", "old2"])


def test_other_users_of_numba_are_left_alone():
    import numba

    before = numba.config.CACHE_DIR
    jit.kernel(add_squares)
    assert numba.config.CACHE_DIR == before


def test_results_do_not_depend_on_threads():
    compiled = jit.kernel(add_squares)
    values = np.random.default_rng(0).random((40, 1000))
    results = []
    for threads in (1, 2, 7, 100, None):
        out, done = np.zeros(40), []
        jit.run_all(
            compiled,
            [(row, out, k) for k, row in enumerate(values)],
            threads=threads,
            on_done=lambda done=done: done.append(threading.get_ident()),
        )
        # progress is told once a task, from the caller's thread
        assert done == [threading.get_ident()] * 40
        results.append(out.tobytes())
    assert len(set(results)) == 1


@pytest.mark.parametrize("threads", [0, -1])
def test_no_threads_are_refused(threads):
    with pytest.raises(ValueError, match=f"threads={threads} given; whole numbers from 1 work"):
        jit.run_all(add_squares, [()], threads=threads)


def test_no_tasks():
    jit.run_all(add_squares, [])


@pytest.mark.parametrize("threads", [1, 2])
def test_exception_reaches_the_caller_and_the_rest_is_dropped(threads):
    started = []

    def task(k):
        started.append(k)
        if k == 0:
            raise ArithmeticError("task 0")
        time.sleep(0.005)

    with pytest.raises(ArithmeticError, match="task 0"):
        jit.run_all(task, [(k,) for k in range(400)], threads=threads)
    assert len(started) < 200
    alive = [t for t in threading.enumerate() if t.name.startswith("ThreadPoolExecutor")]
    assert not alive


def test_cast_makes_arrays_fit_for_kernels():
    given = np.arange(6, dtype=np.float32).reshape(2, 3).T
    out = cast.f64(given, ndim=2)
    assert out.dtype == np.float64 and out.flags.c_contiguous and out.flags.writeable
    np.testing.assert_array_equal(out, given)
    frozen = np.ones(3)
    frozen.flags.writeable = False
    assert cast.f64(frozen).flags.writeable
    with pytest.raises(ValueError, match="depth has 2 dimensions, 1 are needed"):
        cast.f64(given, name="depth", ndim=1)
    for bad in (np.nan, np.inf):
        with pytest.raises(ValueError, match="depth has values that are not finite"):
            cast.f64([1.0, bad], name="depth")

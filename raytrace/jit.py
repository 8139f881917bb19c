"""One door to numba: every kernel of the project is compiled through `kernel` and run through `run_all`.

Why a door of our own: numba's compile cache looks only at the file of the function itself, so an edit in a kernel that
is called from another file would go unnoticed, and it fails where no folder can be written. Here the machine code lies
in a folder named by a hash of all sources of the package and numba's version, and where no folder can be written, the
kernels are compiled anew in each process.

Kernels release the interpreter lock and are run by a thread pool of the standard library: no OpenMP, so forked and
nested processes are safe, one kernel is one compilation, and the work is cut in fixed pieces whose order of summation
does not depend on the number of threads.
"""

from __future__ import annotations

import functools
import hashlib
import shutil
import sys
import tempfile
import threading
from concurrent.futures import FIRST_COMPLETED, ThreadPoolExecutor, wait
from pathlib import Path

import numba
import numpy as np
import platformdirs

from raytrace.cores import core_count

# Floating point stays strict: fast mathematics would let the compiler reorder sums (bytes that change with the machine)
# and make isnan lie. error_model "numpy" only drops the test for division by zero, which would stop vectorisation.
_OPTIONS = {"nogil": True, "error_model": "numpy", "fastmath": False}


def _sources_hash() -> str:
    root = Path(__file__).parent
    digest = hashlib.sha256(f"{numba.__version__} {sys.version}".encode())
    for path in sorted(root.rglob("*.py")):
        digest.update(path.relative_to(root).as_posix().encode())
        digest.update(path.read_bytes())
    return digest.hexdigest()[:20]


def cache_root() -> Path:
    """Folder of everything the program keeps between runs (kernels and tables)."""
    return Path(platformdirs.user_cache_dir("raytrace", appauthor=False))


@functools.cache
def kernel_cache_folder() -> Path | None:
    """Folder of the compiled kernels, made if need be; None where none can be written."""
    folder = cache_root() / "kernels" / _sources_hash()
    try:
        fresh = not folder.is_dir()
        folder.mkdir(parents=True, exist_ok=True)
        # more than all kernels together take: on a full disk numba would fail in the midst of a computation
        with tempfile.TemporaryFile(dir=folder) as probe:
            probe.write(bytes(2**20))
        if fresh:
            _drop_old(folder)
    except OSError:
        return None
    return folder


def _drop_old(current: Path, keep: int = 3) -> None:
    """Machine code of earlier versions of the sources is of no more use: leave the newest few, drop the rest."""
    others = [p for p in current.parent.iterdir() if p.is_dir() and p != current]
    for old in sorted(others, key=lambda p: p.stat().st_mtime, reverse=True)[keep:]:
        shutil.rmtree(old, ignore_errors=True)


def kernel(function=None, *, inline: bool = False, contract: bool = False):
    """Compile a kernel on its first call; keep the machine code where a folder can be written.

    Parameters
    ----------
    inline : bool
        For leaf functions: let the compiler put the body into its callers.
    contract : bool
        Allow a product and a sum to be rounded once instead of twice, a tenth faster in long polynomials. Sums keep
        their order and isnan its meaning, but last digits then differ between processors that have the instruction and
        those that lack it.
    """
    if function is None:
        return functools.partial(kernel, inline=inline, contract=contract)
    options = {**_OPTIONS, "fastmath": {"contract"} if contract else False}
    if inline:
        return numba.njit(**options, inline="always")(function)
    folder = kernel_cache_folder()
    if folder is None:
        return numba.njit(**options)(function)
    # numba reads the folder at decoration, so it is set for this moment only and other users of numba are left alone
    before = numba.config.CACHE_DIR
    numba.config.CACHE_DIR = str(folder)
    try:
        return numba.njit(**options, cache=True)(function)
    finally:
        numba.config.CACHE_DIR = before


@kernel
def aligned(count):
    """(count,) float64 that begins on a cache line; vectors of eight numbers that lie across two lines are slow."""
    room = np.empty(count + 8)
    first = (64 - room.ctypes.data % 64) % 64 // 8
    return room[first : first + count]


def _first_call(function, task) -> None:
    """Call a kernel that may have to be compiled, with pairs of like operations put into vector instructions.

    numba leaves that pass out by default; the tracer's two polarisations are such pairs, and gain a seventh. The
    setting is numba's own and global, so it is set for this moment only.
    """
    before = numba.config.SLP_VECTORIZE
    numba.config.SLP_VECTORIZE = 1
    try:
        function(*task)
    finally:
        numba.config.SLP_VECTORIZE = before


def run_all(function, tasks, *, threads: int | None = None, on_done=None, stop: threading.Event | None = None) -> None:
    """Call `function(*task)` for every task on a pool of threads and wait for all.

    Parameters
    ----------
    function : callable
        A kernel, or a function that spends its time in kernels; its result is dropped.
    tasks : list of tuple
        Arguments. The cut into tasks is the caller's and must not depend on the number of threads.
    threads : int, optional
        Threads; all cores unless given.
    on_done : callable, optional
        Called without arguments after each task, from this thread.
    stop : threading.Event, optional
        Set when a task has failed or the user interrupts, for long tasks that look at it.

    Raises
    ------
    ValueError
        If `threads` is below 1.
    """
    if threads is not None and threads < 1:
        raise ValueError(f"threads={threads!r} given; whole numbers from 1 work")
    tasks = list(tasks)
    threads = max(1, min(threads or core_count(), len(tasks)))
    if not getattr(function, "signatures", True) and tasks:
        # a kernel that has not run yet: the first task runs alone, so that it is compiled once and not by every thread
        _first_call(function, tasks.pop(0))
        if on_done:
            on_done()
    if threads == 1:
        for task in tasks:
            function(*task)
            if on_done:
                on_done()
        return
    with ThreadPoolExecutor(threads) as pool:
        pending = {pool.submit(function, *task) for task in tasks}
        try:
            while pending:
                done, pending = wait(pending, return_when=FIRST_COMPLETED)
                for future in done:
                    future.result()
                    if on_done:
                        on_done()
        except BaseException:
            if stop is not None:
                stop.set()
            pool.shutdown(wait=True, cancel_futures=True)
            raise

"""The tests keep their own cache: the user's folder is neither read nor written, also not by child processes."""

from __future__ import annotations

import contextlib
import os
from pathlib import Path

import pytest

_HOME = pytest.StashKey[Path]()


def pytest_configure(config):
    # before any test module, and with it raytrace.jit, is imported
    import tempfile

    home = Path(tempfile.mkdtemp(prefix="raytrace-tests-"))
    config.stash[_HOME] = home
    os.environ["XDG_CACHE_HOME"] = str(home)
    (home / "raytrace").mkdir()
    # the kernels' machine code lies in folders named by a hash of all sources, so it may outlive one run of the tests;
    # where links cannot be made it is compiled once a run
    if getattr(config, "cache", None) is not None:
        with contextlib.suppress(OSError):
            (home / "raytrace" / "kernels").symlink_to(config.cache.mkdir("kernels"), target_is_directory=True)


def pytest_unconfigure(config):
    import shutil

    # rmtree does not follow the link to the kernels
    if home := config.stash.get(_HOME, None):
        shutil.rmtree(home, ignore_errors=True)


@pytest.fixture(scope="session")
def cache_home(pytestconfig) -> Path:
    """Folder that stands for the user's cache in this run; what tests trace is kept here until the run ends."""
    return pytestconfig.stash[_HOME]


@pytest.fixture
def empty_cache(monkeypatch, tmp_path) -> Path:
    """A cache of this test alone, empty; kernels already loaded stay loaded."""
    monkeypatch.setenv("XDG_CACHE_HOME", str(tmp_path / "cache"))
    return tmp_path / "cache" / "raytrace"

"""Standard output that cannot take what is printed: one line, status 1, and nothing more when the interpreter ends."""

import os
import subprocess
import sys
from pathlib import Path

import pytest
from scene_files import toml, write

ROOT = Path(__file__).resolve().parent.parent


@pytest.mark.skipif(not os.path.exists("/dev/full"), reason="wants a device that is always full")
@pytest.mark.parametrize("buffered", [True, False])
def test_full_device(tmp_path, buffered):
    scene = write(tmp_path, toml())
    environment = {**os.environ, "PYTHONPATH": str(ROOT), "PYTHONUNBUFFERED": "" if buffered else "1"}
    with open("/dev/full", "w") as full:
        done = subprocess.run(
            [sys.executable, "-m", "raytrace", "check", str(scene)],
            env=environment,
            stdout=full,
            stderr=subprocess.PIPE,
            text=True,
        )
    assert done.stderr == "raytrace: OSError: [Errno 28] No space left on device\n"
    assert done.returncode == 1


@pytest.mark.skipif(os.name != "posix", reason="pipes of POSIX")
@pytest.mark.parametrize("buffered", [True, False])
def test_pipe_that_nobody_reads(tmp_path, buffered):
    scene = write(tmp_path, toml())
    environment = {**os.environ, "PYTHONPATH": str(ROOT), "PYTHONUNBUFFERED": "" if buffered else "1"}
    reader, writer = os.pipe()
    os.close(reader)
    done = subprocess.run(
        [sys.executable, "-m", "raytrace", "check", str(scene)],
        env=environment,
        stdout=writer,
        stderr=subprocess.PIPE,
        text=True,
    )
    os.close(writer)
    assert (done.returncode, done.stderr) == (1, "")


@pytest.mark.skipif(os.name != "posix", reason="closes a descriptor as shells do")
def test_closed_output(tmp_path):
    scene = write(tmp_path, toml())
    done = subprocess.run(
        ["sh", "-c", '"$@" >&-', "sh", sys.executable, "-m", "raytrace", "check", str(scene)],
        env={**os.environ, "PYTHONPATH": str(ROOT)},
        stderr=subprocess.PIPE,
        text=True,
    )
    assert (done.returncode, done.stderr) == (0, "")

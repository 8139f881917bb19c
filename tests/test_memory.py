"""Free memory is read from the machine and from every control group above the process.

File names and meanings: Linux kernel documentation, proc(5), cgroup v1 "Memory Resource Controller", "Control Group
v2" (from memory).
"""

import math

import pytest

from raytrace import memory
from raytrace.memory import free_bytes

GB = 10**9


def _machine(tmp_path, cgroup="", available_kb=8_000_000):
    proc = tmp_path / "proc"
    (proc / "self").mkdir(parents=True)
    (proc / "meminfo").write_text(f"MemTotal: 16000000 kB\nMemAvailable:   {available_kb} kB\nHugePages_Total: 0\n")
    (proc / "self" / "cgroup").write_text(cgroup)
    return proc, tmp_path / "groups"


def _group(folder, version, most, used, reclaimable=None):
    folder.mkdir(parents=True, exist_ok=True)
    limit, current, inactive = memory._VERSION_1 if version == 1 else memory._VERSION_2
    (folder / limit).write_text(f"{most}\n")
    (folder / current).write_text(f"{used}\n")
    if reclaimable is not None:
        (folder / "memory.stat").write_text(f"anon 5\n{inactive} {reclaimable}\n")


def test_machine_alone(tmp_path):
    assert free_bytes(*_machine(tmp_path)) == 8_000_000 * 1024


def test_limit_of_the_root_group_of_a_container(tmp_path):
    proc, groups = _machine(tmp_path, "0::/some/path/that/is/not/mounted\n")
    _group(groups, 2, 3 * GB, 1 * GB)
    assert free_bytes(proc, groups) == 2 * GB


@pytest.mark.parametrize("version", [1, 2])
@pytest.mark.parametrize("where", ["", "upper", "upper/lower"])
def test_the_tightest_group_on_the_way_up_counts(tmp_path, version, where):
    line = "7:cpu,cpuacct:/other\n4:memory:/upper/lower\n" if version == 1 else "0::/upper/lower\n"
    proc, groups = _machine(tmp_path, line)
    root = groups / "memory" if version == 1 else groups
    no_limit = 9223372036854771712 if version == 1 else "max"
    for folder in ("", "upper", "upper/lower"):
        _group(root / folder, version, 3 * GB if folder == where else no_limit, 1 * GB)
    # a group beside the way up binds others only
    _group(root / "upper" / "beside", version, GB // 10, 0)
    assert free_bytes(proc, groups) == 2 * GB


@pytest.mark.parametrize("version", [1, 2])
def test_file_cache_that_the_kernel_gives_back_is_free(tmp_path, version):
    proc, groups = _machine(tmp_path)
    _group(groups / "memory" if version == 1 else groups, version, 3 * GB, 3 * GB, reclaimable=2 * GB)
    assert free_bytes(proc, groups) == 2 * GB


def test_group_over_its_limit_leaves_nothing(tmp_path):
    proc, groups = _machine(tmp_path)
    _group(groups, 2, 1 * GB, 2 * GB)
    assert free_bytes(proc, groups) == 0


@pytest.mark.parametrize("text", ["", "no colon\n", "::\n", "0::/../../etc\n", "4:memory\n"])
def test_odd_lines_are_passed_over(tmp_path, text):
    assert free_bytes(*_machine(tmp_path, text)) == 8_000_000 * 1024


def test_elsewhere_than_on_linux(tmp_path, monkeypatch):
    monkeypatch.setattr("os.sysconf", {"SC_PHYS_PAGES": 1000, "SC_PAGE_SIZE": 4096}.__getitem__, raising=False)
    assert free_bytes(tmp_path, tmp_path) == 4_096_000
    monkeypatch.delattr("os.sysconf")
    assert free_bytes(tmp_path, tmp_path) == math.inf


def test_this_machine():
    assert free_bytes() > 0

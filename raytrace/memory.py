"""Memory that this process may still take, of the machine and of the control groups that it runs in."""

from __future__ import annotations

import math
import os
from pathlib import Path

# names of the limit, of what is used, and of the part of it that the kernel gives back when asked, by cgroup version
_VERSION_1 = ("memory.limit_in_bytes", "memory.usage_in_bytes", "total_inactive_file")
_VERSION_2 = ("memory.max", "memory.current", "inactive_file")


def free_bytes(proc: Path = Path("/proc"), groups: Path = Path("/sys/fs/cgroup")) -> float:
    """Memory that this process may still take: the machine's, or its control groups' where that is less [B].

    Parameters
    ----------
    proc, groups : path
        Where Linux shows its processes and its control groups.

    Returns
    -------
    float
        Infinite where the system does not tell.
    """
    free = min([_of_machine(proc), *(_of_group(folder, names) for folder, names in _groups(proc, groups))])
    return max(free, 0.0)


def _of_machine(proc: Path) -> float:
    try:
        return _numbers(proc / "meminfo")["MemAvailable:"] * 1024.0
    except (OSError, ValueError, KeyError):
        pass
    try:
        # not Linux: all there is, since what others use is not told
        return float(os.sysconf("SC_PHYS_PAGES") * os.sysconf("SC_PAGE_SIZE"))
    except (OSError, ValueError, AttributeError):
        return math.inf


def _groups(proc: Path, groups: Path):
    """Folders of this process's memory groups and of those above them: a limit binds all below it."""
    try:
        lines = (proc / "self" / "cgroup").read_text().splitlines()
    except (OSError, ValueError):
        lines = []
    # a container may see its own group as the root, whatever path it is told
    for line in [*lines, "0::/", "0:memory:/"]:
        _, controllers, path = [*line.split(":", 2), "", ""][:3]
        if not controllers:
            root, names = groups, _VERSION_2
        elif "memory" in controllers.split(","):
            root, names = groups / "memory", _VERSION_1
        else:
            continue
        parts = [part for part in path.split("/") if part not in ("", "..")]
        for depth in range(len(parts) + 1):
            yield root.joinpath(*parts[:depth]), names


def _of_group(folder: Path, names: tuple[str, str, str]) -> float:
    limit, used, reclaimable = names
    try:
        most, taken = float((folder / limit).read_text()), float((folder / used).read_text())
    except (OSError, ValueError):
        # no such group, or no limit ("max")
        return math.inf
    try:
        taken -= _numbers(folder / "memory.stat").get(reclaimable, 0)
    except (OSError, ValueError):
        pass
    return most - taken


def _numbers(path: Path) -> dict[str, int]:
    """Lines of a name and a whole number."""
    rows = (line.split() for line in path.read_text().splitlines())
    return {row[0]: int(row[1]) for row in rows if len(row) >= 2}

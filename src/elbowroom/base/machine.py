"""What the machine, and whoever limits us on it, lets this process have: cores and memory."""

from __future__ import annotations

import math
import os
from collections.abc import Iterator
from pathlib import Path

_MEMORY_FILES = {
    1: ("memory.limit_in_bytes", "memory.usage_in_bytes", "total_inactive_file"),
    2: ("memory.max", "memory.current", "inactive_file"),
}
"""Names of limit and usage, and of the cache among the statistics, by the version of control groups."""


def available_cores(root: str | Path = "/") -> int:
    """Return the number of cores this process may use.

    Those it is bound to, or what the quota of its control groups is worth, rounded up.

    Parameters
    ----------
    root : str or Path, optional
        Where ``proc`` and ``sys`` are found; for tests.
    """
    cores = len(os.sched_getaffinity(0)) if hasattr(os, "sched_getaffinity") else (os.cpu_count() or 1)
    for folder, version in _control_groups(Path(root), "cpu"):
        try:
            if version == 2:
                quota, period = (folder / "cpu.max").read_text().split()
            else:
                quota, period = ((folder / f"cpu.cfs_{name}_us").read_text() for name in ("quota", "period"))
            if int(quota) > 0 and int(period) > 0:
                cores = min(cores, math.ceil(int(quota) / int(period)))
        except (OSError, ValueError):  # "max" is no number and no limit
            continue
    return max(cores, 1)


def available_memory_bytes(root: str | Path = "/") -> int:
    """Return the memory this process can still take [byte].

    The least of what the machine has free, what control groups (both versions) leave and what the limit on the process's
    address space leaves.

    Parameters
    ----------
    root : str or Path, optional
        Where ``proc`` and ``sys`` are found; for tests.
    """
    import psutil

    bounds = [int(psutil.virtual_memory().available), *_control_group_bounds(Path(root))]
    try:
        import resource
    except ImportError:  # no such limit on this system
        return max(min(bounds), 0)
    soft, _ = resource.getrlimit(resource.RLIMIT_AS)
    if soft != resource.RLIM_INFINITY:
        bounds.append(soft - int(psutil.Process().memory_info().vms))
    return max(min(bounds), 0)


def limit_of_memory_bytes(root: str | Path = "/") -> int:
    """Return the memory that this process and its children may take if nothing else runs [byte].

    What the machine has, or the least limit of its control groups.

    Parameters
    ----------
    root : str or Path, optional
        Where ``proc`` and ``sys`` are found; for tests.
    """
    import psutil

    limits = [int(psutil.virtual_memory().total)]
    for folder, version in _control_groups(Path(root), "memory"):
        try:
            limits.append(int((folder / _MEMORY_FILES[version][0]).read_text()))
        except (OSError, ValueError):  # "max" is no number and no limit
            continue
    return min(limits)


def _control_groups(root: Path, controller: str) -> Iterator[tuple[Path, int]]:
    """Yield the folders of this process's control groups with a controller, and of those above, each with its version, 1 or 2."""
    try:
        lines = (root / "proc/self/cgroup").read_text().splitlines()
    except OSError:
        return
    for line in lines:
        parts = line.split(":", 2)
        if len(parts) != 3:
            continue
        number, controllers, group = parts
        if number == "0" and not controllers:
            mount, version = root / "sys/fs/cgroup", 2
        elif controller in controllers.split(","):
            mount, version = root / "sys/fs/cgroup" / controller, 1
        else:
            continue
        # Every group above sets a limit too; inside a container the path may name folders only seen outside.
        path = [part for part in group.split("/") if part and part != ".."]
        for depth in range(len(path), -1, -1):
            yield mount.joinpath(*path[:depth]), version


def _control_group_bounds(root: Path) -> list[int]:
    found = (_group_bound(folder, *_MEMORY_FILES[version]) for folder, version in _control_groups(root, "memory"))
    return [bound for bound in found if bound is not None]


def _group_bound(folder: Path, limit_name: str, usage_name: str, cache_name: str) -> int | None:
    try:
        limit = int((folder / limit_name).read_text())
        usage = int((folder / usage_name).read_text())
    except (OSError, ValueError):  # "max" is no number and no limit
        return None
    cache = 0
    try:
        for line in (folder / "memory.stat").read_text().splitlines():
            if line.startswith(cache_name + " "):
                cache = int(line.split()[1])
    except (OSError, ValueError):
        pass
    # file pages not lately used are given back before anything is refused
    return limit - max(usage - cache, 0)

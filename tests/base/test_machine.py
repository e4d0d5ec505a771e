"""Limits of the machine: cores and memory, in control groups too."""

import os
import subprocess
import sys
from pathlib import Path

import pytest

from elbowroom.base.machine import available_cores, available_memory_bytes, limit_of_memory_bytes


def tree(root, files):
    for name, text in files.items():
        (root / name).parent.mkdir(parents=True, exist_ok=True)
        (root / name).write_text(text)
    return root


V1, V2 = "sys/fs/cgroup/memory", "sys/fs/cgroup"


@pytest.mark.parametrize(
    ("files", "expected"),
    [
        # version 2: own group, with cache that can be given back
        ({"proc/self/cgroup": "0::/a/b\n", f"{V2}/a/b/memory.max": "90000\n", f"{V2}/a/b/memory.current": "50000\n",
          f"{V2}/a/b/memory.stat": "anon 1\ninactive_file 20000\n"}, 60000),
        # the group above is tighter
        ({"proc/self/cgroup": "0::/a/b\n", f"{V2}/a/b/memory.max": "max\n", f"{V2}/a/b/memory.current": "5\n",
          f"{V2}/a/memory.max": "70000\n", f"{V2}/a/memory.current": "30000\n"}, 40000),
        # a container that only sees its own root
        ({"proc/self/cgroup": "0::/outside/name\n", f"{V2}/memory.max": "1000\n", f"{V2}/memory.current": "100\n"}, 900),
        # version 1
        ({"proc/self/cgroup": "5:cpu,cpuacct:/x\n4:memory:/job\n0::/\n", f"{V1}/job/memory.limit_in_bytes": "8000\n",
          f"{V1}/job/memory.usage_in_bytes": "3000\n", f"{V1}/job/memory.stat": "total_inactive_file 500\n"}, 5500),
        # full
        ({"proc/self/cgroup": "0::/\n", f"{V2}/memory.max": "1000\n", f"{V2}/memory.current": "1200\n"}, 0),
    ],
)  # fmt: skip
def test_available__respects_control_groups(tmp_path, files, expected):
    assert available_memory_bytes(tree(tmp_path, files)) == expected


@pytest.mark.parametrize(
    "files",
    [
        {},
        {"proc/self/cgroup": "nonsense\n0::/\n"},
        {"proc/self/cgroup": "0::/\n", f"{V2}/memory.max": "max\n", f"{V2}/memory.current": "7\n"},
        # version 1's way of saying that there is no limit
        {"proc/self/cgroup": "4:memory:/\n", f"{V1}/memory.limit_in_bytes": "9223372036854771712\n",
         f"{V1}/memory.usage_in_bytes": "7\n"},
    ],
)  # fmt: skip
def test_available__without_a_limit_is_the_machines(tmp_path, files):
    import psutil

    found = available_memory_bytes(tree(tmp_path, files))
    assert 0.5 * psutil.virtual_memory().available < found <= psutil.virtual_memory().total


def test_available__respects_the_limit_of_the_address_space():
    code = """
import resource, psutil
from elbowroom.base.machine import available_memory_bytes
limit = psutil.Process().memory_info().vms + 200_000_000
resource.setrlimit(resource.RLIMIT_AS, (limit, resource.RLIM_INFINITY))
print(available_memory_bytes())
"""
    source = str(Path(__file__).parents[2] / "src")
    run = subprocess.run(
        [sys.executable, "-c", code], capture_output=True, text=True, check=True, env={**os.environ, "PYTHONPATH": source}
    )
    assert 100_000_000 < int(run.stdout) <= 200_000_000


@pytest.mark.parametrize(
    ("files", "limit"),
    [
        ({"proc/self/cgroup": "0::/a/b\n", f"{V2}/a/b/memory.max": "max\n", f"{V2}/a/memory.max": "7000000\n"}, 7_000_000),
        ({"proc/self/cgroup": "4:memory:/job\n", f"{V1}/job/memory.limit_in_bytes": "8000\n"}, 8000),
    ],
)
def test_limit_of_memory__is_that_of_control_groups_whatever_is_used(tmp_path, files, limit):
    assert limit_of_memory_bytes(tree(tmp_path, files)) == limit


def test_limit_of_memory__without_groups_is_the_machines(tmp_path):
    import psutil

    assert limit_of_memory_bytes(tmp_path) == psutil.virtual_memory().total


@pytest.mark.parametrize(
    ("files", "expected"),
    [
        ({}, 8),
        ({"proc/self/cgroup": "0::/a/b\n", f"{V2}/a/b/cpu.max": "max 100000\n", f"{V2}/a/cpu.max": "250000 100000\n"}, 3),
        ({"proc/self/cgroup": "0::/\n", f"{V2}/cpu.max": "1000 100000\n"}, 1),
        ({"proc/self/cgroup": "0::/\n", f"{V2}/cpu.max": "1600000 100000\n"}, 8),
        ({"proc/self/cgroup": "3:cpu,cpuacct:/x\n", "sys/fs/cgroup/cpu/x/cpu.cfs_quota_us": "200000\n",
          "sys/fs/cgroup/cpu/x/cpu.cfs_period_us": "100000\n"}, 2),
        ({"proc/self/cgroup": "3:cpu,cpuacct:/x\n", "sys/fs/cgroup/cpu/x/cpu.cfs_quota_us": "-1\n",
          "sys/fs/cgroup/cpu/x/cpu.cfs_period_us": "100000\n"}, 8),
    ],
)  # fmt: skip
def test_cores__respect_quotas(tmp_path, monkeypatch, files, expected):
    monkeypatch.setattr(os, "sched_getaffinity", lambda pid: set(range(8)), raising=False)
    assert available_cores(tree(tmp_path, files)) == expected

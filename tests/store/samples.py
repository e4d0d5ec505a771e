"""A schema, records and a folder-sized disk for the tests of the store."""

from __future__ import annotations

import contextlib
import resource
import subprocess
from collections.abc import Callable, Iterator
from pathlib import Path

import numpy as np

from elbowroom.base.arrays import ArraySpec
from elbowroom.store import Record, Schema, content_key
from elbowroom.store.records import same_bits

SPECS = (
    ArraySpec("impedance", ("port", "port"), "c", "ohm", "Port impedance matrix"),
    ArraySpec("position_m", ("antenna", "axis"), "f", "m", "Where the antennas stand"),
    ArraySpec("port_name", ("port",), "U", "1", "Names of the ports", required=False),
    ArraySpec("weight", (), "fi", "1", "One number", required=False),
)
SCHEMA = Schema("sample-record", 3, SPECS, "time factor exp(+j omega t)")
SCHEMA_NEXT = Schema("sample-record", 4, SPECS)


def key_of(unit: int) -> str:
    return content_key({"unit": unit})


def record_of(unit: int, n_ports: int = 3) -> Record:
    """Return a record that anyone can build again from its number; complex (n_ports, n_ports) inside."""
    rng = np.random.default_rng(unit)
    parts = rng.standard_normal((2, n_ports, n_ports))
    return Record(
        {"impedance": parts[0] + 1j * parts[1], "position_m": rng.standard_normal((2, 3))},
        {"unit": unit, "job": f"unit = {unit}\n"},
    )


def assert_same(found: Record | None, expected: Record) -> None:
    assert found is not None
    assert sorted(found.arrays) == sorted(expected.arrays)
    for name, array in expected.arrays.items():
        assert same_bits(found.arrays[name], array), name
    assert found.attributes == expected.attributes


def temporaries(folder: Path) -> list[Path]:
    return sorted(folder.glob(".writing-*"))


def try_mount(folder: Path, size: str = "1m") -> bool:
    """Mount a small disk on a new folder if this process may; say whether it did."""
    folder.mkdir()
    command = ["mount", "-t", "tmpfs", "-o", f"size={size}", "tmpfs", str(folder)]
    with contextlib.suppress(FileNotFoundError):
        return subprocess.run(command, capture_output=True, check=False).returncode == 0
    return False


def unmount(folder: Path) -> None:
    subprocess.run(["umount", "-l", str(folder)], capture_output=True, check=False)


@contextlib.contextmanager
def limited_disk(folder: Path, *, mount: bool) -> Iterator[Callable[[int | None], None]]:
    """Yield a function that leaves a number of bytes to write to the folder, or lifts the limit with None.

    By a disk of 1 MiB where that is asked for and allowed, else by the system's limit on the size of a file.
    """
    if mount and try_mount(folder):
        filler = folder / "filler"

        def leave(n_bytes: int | None) -> None:
            filler.unlink(missing_ok=True)
            if n_bytes is None:
                return
            with open(filler, "wb", buffering=0) as file, contextlib.suppress(OSError):
                while file.write(bytes(4096)):
                    pass
            with open(filler, "r+b") as file:
                file.truncate(max(filler.stat().st_size - n_bytes, 0))

        try:
            yield leave
        finally:
            unmount(folder)
        return
    folder.mkdir(exist_ok=True)
    soft, hard = resource.getrlimit(resource.RLIMIT_FSIZE)
    try:
        yield lambda n: resource.setrlimit(resource.RLIMIT_FSIZE, (soft if n is None else n, hard))
    finally:
        resource.setrlimit(resource.RLIMIT_FSIZE, (soft, hard))

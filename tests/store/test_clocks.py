"""A machine whose clock was set back shares a store with one whose clock is right: real processes, with a shifted clock."""

from __future__ import annotations

import os
import shutil
import signal
import subprocess
import sys
import time
from pathlib import Path

import pytest

from elbowroom.store import Hdf5Store
from store.samples import SCHEMA, assert_same, key_of, record_of, temporaries

# Stands before the C library's functions in one process only; the machine's clock stays as it is.
SHIFT = r"""
#define _GNU_SOURCE
#include <dlfcn.h>
#include <stdlib.h>
#include <sys/time.h>
#include <time.h>
static long shift(void) { const char *s = getenv("CLOCK_SHIFT_SECONDS"); return s ? atol(s) : 0; }
int clock_gettime(clockid_t id, struct timespec *t) {
    static int (*real)(clockid_t, struct timespec *);
    if (!real) real = dlsym(RTLD_NEXT, "clock_gettime");
    int code = real(id, t);
    if (!code && (id == CLOCK_REALTIME || id == CLOCK_REALTIME_COARSE)) t->tv_sec += shift();
    return code;
}
int gettimeofday(struct timeval *t, void *zone) {
    struct timespec now;
    (void)zone;
    clock_gettime(CLOCK_REALTIME, &now);
    t->tv_sec = now.tv_sec; t->tv_usec = now.tv_nsec / 1000;
    return 0;
}
time_t time(time_t *t) { struct timespec now; clock_gettime(CLOCK_REALTIME, &now); if (t) *t = now.tv_sec; return now.tv_sec; }
"""

RUN = """
import sys, time
from elbowroom.store import Hdf5Store
from store.samples import SCHEMA, key_of, record_of
store = Hdf5Store(sys.argv[1], SCHEMA, claim_silence_seconds=0.6)
print("now", time.time(), flush=True)
assert store.get(key_of(0)) is not None      # stored by the other
assert store.claim(key_of(1)) is None        # the other works on it
store.put(key_of(2), record_of(2))
with store.claim(key_of(3)) as claim:
    print("claimed", flush=True)
    sys.stdin.readline()
    assert claim.held
    print("held", flush=True)
    sys.stdin.readline()
"""


@pytest.fixture(scope="module")
def library(tmp_path_factory) -> Path:
    compiler = shutil.which("cc") or shutil.which("gcc")
    if compiler is None or not sys.platform.startswith("linux"):
        pytest.skip("no compiler for the library that shifts the clock of one process")
    folder = tmp_path_factory.mktemp("clock")
    (folder / "shift.c").write_text(SHIFT)
    command = [compiler, "-shared", "-fPIC", "-o", str(folder / "shift.so"), str(folder / "shift.c"), "-ldl"]
    made = subprocess.run(command, capture_output=True, check=False)
    if made.returncode:
        pytest.skip("the compiler cannot make the library that shifts the clock of one process")
    return folder / "shift.so"


@pytest.mark.parametrize("shift_seconds", [-86400 * 400, 86400 * 400], ids=["set back", "set forward"])
def test_clock__of_one_machine_is_wrong(library, tmp_path, reports, shift_seconds):
    store = Hdf5Store(tmp_path / "kept", SCHEMA, report=reports.append, claim_silence_seconds=0.6)
    store.put(key_of(0), record_of(0))
    source = Path(__file__).parents[2] / "src"
    environment = {
        **os.environ, "LD_PRELOAD": str(library), "CLOCK_SHIFT_SECONDS": str(shift_seconds), "OMP_NUM_THREADS": "1",
        "PYTHONPATH": os.pathsep.join([str(source), str(Path(__file__).parents[1])]),
    }  # fmt: skip
    with store.claim(key_of(1)) as mine:
        other = subprocess.Popen(
            [sys.executable, "-c", RUN, str(tmp_path / "kept")], stdin=subprocess.PIPE, stdout=subprocess.PIPE, text=True,
            env=environment, bufsize=1,
        )  # fmt: skip
        try:
            now = float(other.stdout.readline().split()[1])
            assert abs(now - time.time() - shift_seconds) < 60.0  # else its clock was not shifted at all
            assert other.stdout.readline() == "claimed\n"
            end = time.monotonic() + 1.5  # longer than a silence
            while time.monotonic() < end:
                assert store.claim(key_of(3)) is None
                time.sleep(0.05)
            assert mine.held
            other.stdin.write("\n")
            assert other.stdout.readline() == "held\n"
            os.kill(other.pid, signal.SIGKILL)
            other.wait()
            assert store.claimed(key_of(3)) is None
            assert_same(store.get(key_of(2)), record_of(2))
        finally:
            other.kill()
            other.wait()
            other.stdin.close()
            other.stdout.close()
    assert reports == []


@pytest.mark.parametrize("shift_seconds", [-4e8, 4e8], ids=["past", "future"])
def test_clock__of_the_disk_was_moved__leftovers_go_and_units_stay(tmp_path, shift_seconds):
    """Times on the disk are those that a clock leaves which was wrong when the files were written."""
    store = Hdf5Store(tmp_path / "kept", SCHEMA)
    store.put(key_of(0), record_of(0))
    foreign = store.folder / ".writing-0123456789abcdef-0123456789ab-77-5-00"
    foreign.write_bytes(b"left by a process of another machine")
    for path in (foreign, store.path_of(key_of(0))):
        os.utime(path, (time.time() + shift_seconds, time.time() + shift_seconds))
    fresh = store.folder / ".writing-fedcba9876543210-0123456789ab-78-5-00"
    fresh.write_bytes(b"being written by a process of another machine")
    assert store.remove_stale() == [foreign]
    assert temporaries(store.folder) == [fresh]
    assert_same(store.get(key_of(0)), record_of(0))
    assert store.keys() == [key_of(0)]

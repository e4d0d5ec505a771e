"""Processes that write to a store and are killed or race; run as a script, commands on standard input.

kill <seconds> <first unit>   fork a process that stores unit after unit, kill it that long after its first
race <times>                  fork two processes that store records of their own under one key, wait for both
claims <processes> <times>    fork processes that claim one unit again and again; 0 if never two had it together
hold <key> [<silence>]        fork a process that claims a unit and waits; "lost" when it sees that it has it no more
reap                          wait for the process that held
"""

from __future__ import annotations

import os
import signal
import sys
import time
from pathlib import Path

sys.path.insert(0, str(Path(__file__).parents[1]))

from elbowroom.store import Hdf5Store
from elbowroom.store.unitfile import library_versions
from store.samples import SCHEMA, key_of, record_of

KILL_PORTS = 150
RACE_PORTS = 60
N_UNITS = 6


def forked(action) -> int:
    child = os.fork()
    if child:
        return child
    try:
        action()
        os._exit(0)
    except BaseException as error:
        print(f"worker: {error!r}", file=sys.stderr, flush=True)
        os._exit(1)


def write_on(folder: str, unit: int, started: int) -> None:
    store = Hdf5Store(folder, SCHEMA)
    while True:
        store.put(key_of(unit % N_UNITS), record_of(unit % N_UNITS, KILL_PORTS))
        os.write(started, b"s")
        unit += 1


def write_same(folder: str, writer: int, times: int) -> None:
    store = Hdf5Store(folder, SCHEMA)
    for _ in range(times):
        store.put(key_of(0), record_of(writer, RACE_PORTS))


def claim_often(folder: str, times: int) -> None:
    store = Hdf5Store(folder, SCHEMA)
    inside = Path(folder) / "inside"
    held = 0
    while held < times:
        claim = store.claim(key_of(0))
        if claim is None:
            continue
        with claim:
            held += 1
            os.close(os.open(inside, os.O_CREAT | os.O_EXCL))  # fails if another is inside
            time.sleep(0.0005)
            os.unlink(inside)


def hold(folder: str, key: str, silence: float) -> None:
    with Hdf5Store(folder, SCHEMA, claim_silence_seconds=silence).claim(key) as claim:
        print("holder", os.getpid(), flush=True)
        while claim.held:
            time.sleep(0.02)
        print("lost", flush=True)


def main(folder: str) -> None:
    library_versions()  # slow once, then known to every process that is forked
    print("ready", flush=True)
    for line in sys.stdin:
        command, *arguments = line.split()
        if command == "kill":
            reader, writer = os.pipe()
            child = forked(lambda unit=int(arguments[1]), pipe=writer: write_on(folder, unit, pipe))
            os.close(writer)
            os.read(reader, 1)
            time.sleep(float(arguments[0]))
            os.kill(child, signal.SIGKILL)
            print("status", os.waitpid(child, 0)[1], flush=True)
            os.close(reader)
        elif command == "claims":
            n, times = map(int, arguments)
            children = [forked(lambda n_times=times: claim_often(folder, n_times)) for _ in range(n)]
            print("status", max(os.waitpid(child, 0)[1] for child in children), flush=True)
        elif command == "hold":
            silence = float(arguments[1]) if len(arguments) > 1 else 40.0
            holder = forked(lambda key=arguments[0], after=silence: hold(folder, key, after))
        elif command == "reap":
            print("status", os.waitpid(holder, 0)[1], flush=True)
        else:
            times = int(arguments[0])
            children = [forked(lambda writer=n, n_times=times: write_same(folder, writer, n_times)) for n in (1, 2)]
            print("status", max(os.waitpid(child, 0)[1] for child in children), flush=True)


if __name__ == "__main__":
    main(sys.argv[1])

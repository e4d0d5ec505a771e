"""Processes that write to a store and are killed or race; run as a script, commands on standard input.

kill <seconds> <first unit>   fork a process that stores unit after unit, kill it that long after its first
race <times>                  fork two processes that store records of their own under one key, wait for both
claims <processes> <times>    fork processes that claim one unit again and again; 0 if never two had it together
hold <key> [<silence>]        fork a process that claims a unit and waits; "lost" when it sees that it has it no more
lines <deed>                  fork a process that does a deed and count the lines of the store's code it runs
strike <deed> <line>          fork a process that does a deed and kills itself before that line
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
from elbowroom.store.packs import unpack, write_pack
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


def replace_unit(folder: str) -> None:
    Hdf5Store(folder, SCHEMA).put(key_of(0), record_of(1))


def claim_and_release(folder: str) -> None:
    with Hdf5Store(folder, SCHEMA).claim(key_of(0)):
        pass


def set_aside(folder: str) -> None:
    Hdf5Store(folder, SCHEMA, report=lambda _: None).get(key_of(2))


def add_pack(folder: str) -> None:
    unpack(Path(folder) / "carried.pack", Path(folder), report=lambda _: None)


def make_pack(folder: str) -> None:
    write_pack(Path(folder) / "new.pack", [Hdf5Store(folder, SCHEMA).path_of(key_of(0))], replace=True)


DEEDS = {deed.__name__: deed for deed in (replace_unit, claim_and_release, set_aside, add_pack, make_pack)}


def traced(deed, folder: str, strike_at: int) -> int:
    """Do a deed; before the line of that number, end as by a kill -9; return the number of lines run."""
    count = 0

    def each_line(frame, event, _):
        nonlocal count
        if event == "line":
            if count == strike_at:
                os.kill(os.getpid(), signal.SIGKILL)
            count += 1
        return each_line

    def each_call(frame, event, _):
        return each_line if "/elbowroom/store/" in frame.f_code.co_filename else None

    sys.settrace(each_call)
    deed(folder)
    sys.settrace(None)
    return count


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
        elif command == "lines":
            reader, writer = os.pipe()
            child = forked(lambda name=arguments[0], w=writer: os.write(w, b"%d" % traced(DEEDS[name], folder, -1)))
            os.waitpid(child, 0)
            print("lines", os.read(reader, 20).decode(), flush=True)
            os.close(reader)
            os.close(writer)
        elif command == "strike":
            child = forked(lambda name=arguments[0], n=int(arguments[1]): traced(DEEDS[name], folder, n))
            print("status", os.waitpid(child, 0)[1], flush=True)
        elif command == "reap":
            print("status", os.waitpid(holder, 0)[1], flush=True)
        else:
            times = int(arguments[0])
            children = [forked(lambda writer=n, n_times=times: write_same(folder, writer, n_times)) for n in (1, 2)]
            print("status", max(os.waitpid(child, 0)[1] for child in children), flush=True)


if __name__ == "__main__":
    main(sys.argv[1])

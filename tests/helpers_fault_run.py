"""A run of 2,000 blocks in which every twentieth meets a fault; the tests run it as a process.

    python helpers_fault_run.py RECORD CALLS

A driver process is forked again and again; each begins or resumes the run on a pool of two forked workers. Faults come
at calls of the density planned beforehand (CALLS: how many the undisturbed run makes): a worker is killed, the density
raises, the driver gets Ctrl-C, or the driver is killed. Prints, as JSON, how often each was met and what the drivers
came to.
"""

import json
import mmap
import multiprocessing
import os
import random
import signal
import struct
import sys
from collections import Counter
from concurrent.futures import ProcessPoolExecutor
from pathlib import Path

from run_models import START, Boom, curved

import fellwalk as fw
from fellwalk.driver import Driver
from fellwalk.errors import WorkerError
from fellwalk.pools import _begin_worker

BLOCK, FAULTS = 3, 100
OPTIONS = {"settle": 60, "keep": 540, "chains": 10, "seed": 20, "path": fw.Jittered(6)}  # 200 blocks a chain
KINDS = ["worker killed", "exception", "Ctrl-C", "driver killed"]
WEIGHTS = [4, 3, 2, 1]

# Shared by all processes forked from here: faults met, process id of the driver, and the calls made, a place for each
# worker (what two of them add to one number at once would be lost).
MET, DRIVER, CALLS, PLACES = 0, 1, 2, 256
shared = mmap.mmap(-1, 8 * (CALLS + PLACES))
plan: list[tuple[int, str]] = []


def get(place):
    return struct.unpack_from("q", shared, 8 * place)[0]


def put(place, value):
    struct.pack_into("q", shared, 8 * place, value)


def harmed(x):
    """`curved`, with the faults of the plan."""
    mine = CALLS + os.getpid() % PLACES
    put(mine, get(mine) + 1)
    met = get(MET)
    calls = sum(struct.unpack_from(f"{PLACES}q", shared, 8 * CALLS))
    if met < len(plan) and calls >= plan[met][0] and os.getpid() != get(DRIVER):
        put(MET, met + 1)
        if plan[met][1] == "worker killed":
            os.kill(os.getpid(), signal.SIGKILL)
        if plan[met][1] == "exception":
            raise Boom("planned")
        os.kill(get(DRIVER), signal.SIGINT if plan[met][1] == "Ctrl-C" else signal.SIGKILL)
    return curved(x)


def drive(record):
    """One driver process: what it came to, as its exit status."""
    put(DRIVER, os.getpid())
    Driver._most = lambda self, chain: BLOCK
    density = fw.Density(harmed, 3, start=START)
    # nobody else ends the idle workers of a killed driver
    with ProcessPoolExecutor(2, multiprocessing.get_context("fork"), _begin_worker, (os.getpid(),)) as executor:
        try:
            if Path(record).exists():
                result = fw.resume(record, density, executor=executor)
            else:
                result = fw.run(density, **OPTIONS, executor=executor, record=record)
            return 0 if result.finished else 3
        except WorkerError:
            return 1
        except Boom:
            return 2


def main(record, calls):
    rng = random.Random(2385)
    plan.extend((int(calls * (i + rng.random()) / (FAULTS + 1)), rng.choices(KINDS, WEIGHTS)[0]) for i in range(FAULTS))
    ends = Counter()
    while not ends[0]:
        pid = os.fork()
        if pid == 0:
            os._exit(drive(record))
        ends[os.waitstatus_to_exitcode(os.waitpid(pid, 0)[1])] += 1
        assert sum(ends.values()) < 5 * FAULTS
    print(json.dumps({"met": Counter(kind for _, kind in plan[: get(MET)]), "ends": ends}))


if __name__ == "__main__":
    import helpers_fault_run  # functions of __main__ would be pickled with everything that they refer to

    helpers_fault_run.main(sys.argv[1], int(sys.argv[2]))

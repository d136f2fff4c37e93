"""Two chains of a compiled density on two threads, beside one chain alone.

    python benchmarks/threads.py

Three ratios in each dimension, medians of interleaved repeats. "Wall": time until both chains are done over the time of
one alone; it says something only while nobody else wants the processors, so the load stands beside it. "Not queueing":
the same without the time that the slower thread was ready to run and stood in the kernel's queue (/proc/thread-self/
schedstat), which others cause: what is left is work, and waiting for locks. "Processor": the slower chain's processor
time over that of one alone: shared caches, without waiting of any kind. "Gave up": how often a thread of the two let go
of its processor of its own accord, as one that waits for a lock does.
"""

import resource
import sys
import threading
import time

import numpy as np
from common import busy, fw, machine, table, targets

REPEATS = 11


def chain_of(d: int, seed: int) -> fw.Chain:
    """A settled chain."""
    return fw.Chain(fw.Density(targets.standard_normal(d).density, d), np.zeros(d), path=fw.Jittered(16), seed=seed,
                    step_size=0.1)


def queued() -> float:
    """Seconds that this thread has stood in the queue for a processor; 0 where the system does not tell."""
    try:
        with open("/proc/thread-self/schedstat", encoding="ascii") as file:
            return int(file.read().split()[1]) * 1e-9
    except OSError:
        return 0.0


def timed(chains: list[fw.Chain], draws: int) -> tuple[float, float, float, int]:
    """(seconds on the wall, without the queue, processor seconds of the slowest, times given up) of `draws` transitions
    of each chain, a thread each."""
    elapsed, spent, gave_up = ([0.0] * len(chains) for _ in range(3))
    gate = threading.Barrier(len(chains) + 1)

    def work(i: int) -> None:
        chains[i].block(draws, draws=False)
        gate.wait()
        switches = resource.getrusage(resource.RUSAGE_THREAD).ru_nvcsw
        begun, waited, worked = time.perf_counter(), queued(), time.thread_time()
        chains[i].block(draws, draws=False)
        spent[i] = time.thread_time() - worked
        elapsed[i] = time.perf_counter() - begun - (queued() - waited)
        gave_up[i] = resource.getrusage(resource.RUSAGE_THREAD).ru_nvcsw - switches

    threads = [threading.Thread(target=work, args=(i,)) for i in range(len(chains))]
    for thread in threads:
        thread.start()
    gate.wait()
    begun = time.perf_counter()
    for thread in threads:
        thread.join()
    return time.perf_counter() - begun, max(elapsed), max(spent), max(gave_up)


def main() -> None:
    print(f"{machine()}\n{busy()} before; medians of {REPEATS} interleaved repeats.\n")
    locked = getattr(sys, "_is_gil_enabled", lambda: True)()
    print(f"The interpreter {'has' if locked else 'does not have'} a lock of its own.\n")
    rows = []
    for d, draws in ((10, 100_000), (100_000, 30)):
        one, two = [chain_of(d, 1)], [chain_of(d, 2), chain_of(d, 3)]
        found = np.array([[timed(one, draws), timed(two, draws)] for _ in range(REPEATS)])
        wall, quiet, processor = np.median(found[:, 1, :3] / found[:, 0, :3], axis=0)
        rows.append([f"{d}", f"{1e3 * np.median(found[:, 0, 0]):.0f} ms", f"{wall:.2f}", f"{quiet:.2f}",
                     f"{processor:.2f}", f"{np.median(found[:, 1, 3]):.0f}", "1.15", "yes" if wall <= 1.15 else "NO",
                     "yes" if quiet <= 1.15 else "NO"])
    print(table(["d", "one alone", "wall", "not queueing", "processor", "gave up", "bound", "wall kept",
                 "not queueing kept"], rows))
    print(f"\n{busy()} after.")


if __name__ == "__main__":
    main()

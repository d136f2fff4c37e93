"""Two chains of a compiled density on two threads, beside one chain alone.

    python benchmarks/threads.py

Two ratios of each dimension. "Wall": time until both chains are done over the time of one alone; it says something on a
machine with two processors to spare only, so the load stands beside it. "Processor": the slower chain's own processor
time over that of one alone, which waiting for a turn leaves out: what locks, the interpreter and shared caches cost.
"""

import sys
import threading
import time

import numpy as np
from common import busy, fw, machine, table, targets


def chain_of(d: int, seed: int) -> fw.Chain:
    """A settled chain."""
    return fw.Chain(fw.Density(targets.standard_normal(d).density, d), np.zeros(d), path=fw.Jittered(16), seed=seed,
                    step_size=0.1)


def timed(chains: list[fw.Chain], draws: int) -> tuple[float, float]:
    """(seconds on the wall, processor seconds of the slowest) of `draws` transitions of each chain, a thread each."""
    spent = [0.0] * len(chains)
    gate = threading.Barrier(len(chains) + 1)

    def work(i: int) -> None:
        chains[i].block(draws, draws=False)
        gate.wait()
        begun = time.thread_time()
        chains[i].block(draws, draws=False)
        spent[i] = time.thread_time() - begun

    threads = [threading.Thread(target=work, args=(i,)) for i in range(len(chains))]
    for thread in threads:
        thread.start()
    gate.wait()
    begun = time.perf_counter()
    for thread in threads:
        thread.join()
    return time.perf_counter() - begun, max(spent)


def main() -> None:
    print(f"{machine()}\n{busy()} before; least of 9 repeats, interleaved.\n")
    locked = getattr(sys, "_is_gil_enabled", lambda: True)()
    print(f"The interpreter {'has' if locked else 'does not have'} a lock of its own.\n")
    rows = []
    for d, draws in ((10, 40_000), (100_000, 15)):
        one, two = [chain_of(d, 1)], [chain_of(d, 2), chain_of(d, 3)]
        found = np.array([[*timed(one, draws), *timed(two, draws)] for _ in range(9)]).min(axis=0)
        wall, processor = found[2] / found[0], found[3] / found[1]
        rows.append([f"{d}", f"{wall:.2f}", f"{processor:.2f}", "1.15", "yes" if wall <= 1.15 else "NO",
                     "yes" if processor <= 1.15 else "NO"])
    print(table(["d", "wall", "processor", "bound", "wall kept", "processor kept"], rows))
    print(f"\n{busy()} after.")


if __name__ == "__main__":
    main()

"""What the driver of a run spends on a block: many short chains over worker processes, with a record.

    python benchmarks/driver_time.py [CHAINS] [DRAWS]

Prints, per block: the driver's processor time (all its threads, so pickling and the pool's own threads too), and the
time its loop was not waiting for workers, which has the waiting for the disk in it. A driver that needs t per block can
feed (seconds of a block) / t workers.
"""

import resource
import sys
import tempfile
import time
from pathlib import Path

import numpy as np

import fellwalk as fw
from fellwalk import run as run_function
from fellwalk.driver import Driver

DIMENSION = 10


def normal(x):
    """A standard normal that takes about 0.1 ms."""
    total = 0.0
    for _ in range(1_500):
        total += 0.0
    return -0.5 * float(x @ x) + total, -x


def measure(chains: int, keep: int) -> dict[str, float]:
    """One run; what its driver spent."""
    seen: dict[str, float] = {}
    go = Driver.go

    def timed(self):
        self.waited = 0.0
        before, cpu, thread = time.perf_counter(), time.process_time(), time.thread_time()
        result = go(self)
        wall = time.perf_counter() - before
        seen.update(
            blocks=self.blocks,
            wall=wall,
            busy=wall - self.waited,
            cpu=time.process_time() - cpu,
            loop=time.thread_time() - thread,
            work=sum(part.seconds for part in self.parts),
        )
        return result

    Driver.go = timed
    try:
        with tempfile.TemporaryDirectory() as folder:
            run_function(
                fw.Density(normal, DIMENSION, start=np.zeros(DIMENSION)),
                chains=chains,
                settle=150,
                keep=keep,
                seed=1,
                executor="processes",
                record=Path(folder) / "a.fell",
                path=fw.Jittered(8),
            )
    finally:
        Driver.go = go
    return seen


def main() -> None:
    """Print the table."""
    chains, keep = (
        int(given) if given else usual for given, usual in zip([*sys.argv[1:], "", ""], (256, 100), strict=False)
    )
    print(f"{chains} chains of {keep} draws, {DIMENSION} parameters")
    t = measure(chains, keep)
    per = 1e3 / t["blocks"]
    print(
        f"{t['blocks']:.0f} blocks of {t['work'] / t['blocks']:.3f} s in {t['wall']:.1f} s; of the driver, ms a block:"
    )
    print(
        f"  processor, all its threads  {t['cpu'] * per:6.2f}\n  processor, its loop alone   {t['loop'] * per:6.2f}\n"
        f"  loop with waits for disk    {t['busy'] * per:6.2f}  ({100 * t['busy'] / t['wall']:.1f}% of the time)"
    )
    print(f"most memory of the driver: {resource.getrusage(resource.RUSAGE_SELF).ru_maxrss / 1e3:.0f} MB")


if __name__ == "__main__":
    main()

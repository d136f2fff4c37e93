"""What do chains in lockstep gain over separate chains, for a density in JAX?

A chain of springs that stiffen (invented; the one-dimensional lattice with quartic terms of the textbooks): each
coordinate is bound to the next one and to 0, the log density is a polynomial, so a call costs more than its arithmetic.
256 chains in lockstep against four separate chains over the same function, one after the other in this process, on the
same jittered paths and on no-U-turn paths. All have settled before. (Two processes would at best halve the time of the
separate chains; starting them and compiling again in each takes longer than these runs.)

    python benchmarks/lockstep.py [--quick]
"""

import sys
import time

import jax
import jax.numpy as jnp
import numpy as np
from common import busy, machine, table

import fellwalk as fw
from fellwalk.autocorrelation import effective_size

jax.config.update("jax_enable_x64", True)

QUICK = "--quick" in sys.argv
CHAINS = 256
STEPS = {10: 5, 100: 8}  # of jittered paths, at most


def springs(x):
    stretch, square = x[1:] - x[:-1], x * x
    return -0.5 * jnp.sum(stretch * stretch) - jnp.sum(square * (0.25 + 0.25 * square))


def worth(draws: np.ndarray) -> float:
    """Least effective draws of all coordinates and their squares; draws (chains, n, d)."""
    found = [effective_size(np.ascontiguousarray(a.transpose(2, 0, 1))).min() for a in (draws, draws**2)]
    return float(min(found))


class Way:
    """One way to draw: settled once, then timed again and again."""

    def __init__(self, density: fw.Density, chains: int, keep: int, path, executor: str | None) -> None:
        self.density, self.chains, self.keep, self.path, self.executor = density, chains, keep, path, executor
        rng = np.random.default_rng(1)
        self.starts = 0.5 * rng.standard_normal((chains, density.dimension))
        begun = time.perf_counter()
        self.settled = self.run(1, 4, settled=None)
        self.settling = time.perf_counter() - begun

    def run(self, seed: int, keep: int, **named) -> fw.Result:
        return fw.run(self.density, self.starts, chains=self.chains, keep=keep, seed=seed, path=self.path, audit=False,
                      executor=self.executor, gradients=False, progress="off", **named)

    def timed(self, seed: int) -> tuple[float, float]:
        """Effective draws in a second on the wall, and in a second of this process's time (all its threads)."""
        wall, work = time.perf_counter(), time.process_time()
        result = self.run(seed, self.keep, settled=self.settled)
        wall, work = time.perf_counter() - wall, time.process_time() - work
        drawn = worth(result.draws)
        return drawn / wall, drawn / work


def main() -> None:
    repeats, length = (2, 200) if QUICK else (7, 1000)
    before, rows = busy(), []
    for d in (10, 100):
        one, many, mapped = fw.from_jax(springs, d), *(fw.from_jax(springs, d, batch=batch) for batch in ("loop", True))
        jittered = fw.Jittered(STEPS[d])
        ways = {
            f'{CHAINS} in lockstep, batch="loop"': Way(many, CHAINS, length if d < 40 else length // 4, jittered, None),
            f"{CHAINS} in lockstep, batch=True": Way(mapped, CHAINS, length if d < 40 else length // 4, jittered, None),
            "4 separate, jittered": Way(one, 4, length, jittered, "here"),
            "4 separate, no-u-turn": Way(one, 4, length, fw.NoUTurn(), "here"),
        }
        found = {name: [] for name in ways}
        for seed in range(repeats):
            for name, way in ways.items():
                found[name].append(way.timed(seed + 10))
        first = np.array(found[next(iter(ways))])
        for name, way in ways.items():
            times = np.array(found[name])
            wall, work = np.median(times, axis=0)
            ratios = np.median(first / times, axis=0)
            rows.append([name, str(d), f"{wall:.3g}", f"{ratios[0]:.3g}", f"{work:.3g}", f"{ratios[1]:.3g}",
                         f"{way.settling:.2g} s"])
    print(machine())
    print(f"Medians of {repeats} interleaved repeats; {before} before, {busy()} after.\n")
    head = ["chains", "d", "a second", "lockstep / this", "a processor second", "lockstep / this", "settling"]
    print(table(head, rows))


if __name__ == "__main__":
    main()

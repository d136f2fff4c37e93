"""Memory of a chain: what it says of itself, and what the process really takes.

    python benchmarks/memory.py

A chain states its workspace as vectors x 8 d bytes and a constant; the table has both, and the growth of the process
when eight such chains are made and have drawn, each line in a process of its own. Pages that nothing has touched cost
nothing, so the process takes at most what is stated, and a vector and 64 kB a chain for Python's side.
"""

import subprocess
import sys
from functools import cache

import numpy as np
from common import fw, machine, table, targets

CHAINS = 8
KINDS = {
    "leapfrog, jittered, nothing learned": (fw.Leapfrog(), fw.Jittered(8), {"rank": 0, "adapt_scale": False}),
    "leapfrog, jittered, scale": (fw.Leapfrog(), fw.Jittered(8), {"rank": 0}),
    "leapfrog, no-u-turn, all learned": (fw.Leapfrog(), fw.NoUTurn(), {}),
    "surrogate, no-u-turn, all learned": (fw.Lagrangian(), fw.NoUTurn(), {}),
    "product, no-u-turn, all learned": (fw.Lagrangian(curvature="product"), fw.NoUTurn(), {}),
}


def resident() -> int:
    """Bytes of this process in memory."""
    with open("/proc/self/statm", encoding="ascii") as file:
        return int(file.read().split()[1]) * 4096


@cache
def density_of(d: int) -> fw.Density:
    """One for all chains: its list of names is longer than a vector."""
    target = targets.standard_normal(d)
    return fw.Density(target.density, d, hessian_product=target.hessian_product)


def make(kind: str, d: int) -> fw.Chain:
    """A chain that has drawn."""
    motion, path, more = KINDS[kind]
    density = density_of(d)
    chain = fw.Chain(density, np.zeros(d) + 0.1, motion=motion, path=path, seed=1, step_size=0.1, **more)
    chain.block(5, draws=False)
    return chain


def main() -> None:
    if len(sys.argv) == 3:
        kind, d = sys.argv[1], int(sys.argv[2])
        make(kind, d)
        before = resident()
        chains = [make(kind, d) for _ in range(CHAINS)]
        print((resident() - before) / CHAINS, len(chains))
        return
    print(f"{machine()}\n")
    rows = []
    for kind in KINDS:
        for d in (10, 100_000):
            found = make(kind, d).summary
            stated, vectors = found["workspace_bytes"], found["workspace_vectors"]
            constant = stated - 8 * d * vectors
            said = subprocess.run([sys.executable, __file__, kind, str(d)], capture_output=True, text=True, check=True)
            taken = float(said.stdout.split()[0])
            kept = constant >= 0 and taken <= stated + 64_000 + 8 * d
            rows.append([kind, f"{d}", f"{vectors}", f"{constant}", f"{stated:,}", f"{taken:,.0f}",
                         "yes" if kept else "NO"])
    print(table(["chain", "d", "vectors", "constant", "stated, bytes", "taken, bytes", "kept"], rows))


if __name__ == "__main__":
    main()

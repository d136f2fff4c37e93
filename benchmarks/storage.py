"""What keeping costs: a run in 1e5 dimensions with a gradient of 100 microseconds that watches ten coordinates, with a
record, beside the same transitions with nothing kept at all.

    python benchmarks/storage.py

Processor time of the whole process, all threads: chain, running means and variances, pickling, checksums, SQLite. The
gradient waits in processor time, so that a busy machine makes it no shorter. Per draw, from a long run less a short
one: what a run costs once (names, plan, first states, about a quarter of a second here) is no part of it.
"""

import ctypes
import subprocess
import tempfile
import time
from pathlib import Path

import numpy as np
from common import HERE, _build, busy, fw, machine, short_time, table
from scipy import LowLevelCallable

D, SHORT, LONG, REPEATS = 100_000, 40, 200, 5


def slow_normal(nanoseconds: float) -> LowLevelCallable:
    """slow_normal.c, built now."""
    library = Path(tempfile.mkdtemp(prefix="fellwalk-benchmarks-")) / "slow.so"
    subprocess.run([*_build.compiler(), "-O3", "-shared", "-fPIC", "-o", str(library), str(HERE / "slow_normal.c")],
                   check=True)
    function = ctypes.CDLL(str(library)).slow_normal
    signature = (ctypes.c_size_t, *[ctypes.POINTER(ctypes.c_double)] * 3, ctypes.c_void_p)
    function.argtypes, function.restype = signature, ctypes.c_int
    wait = np.array([nanoseconds])
    held = LowLevelCallable(function, wait.ctypes.data_as(ctypes.c_void_p),
                            signature="int (size_t, double *, double *, double *, void *)")
    slow_normal.held = (wait, function)
    return held


def main() -> None:
    print(f"{machine()}\n{busy()} before; {D:,} dimensions, medians of {REPEATS} interleaved repeats.\n")
    density = fw.Density(slow_normal(1e5), D, start=np.zeros(D))
    settled = fw.run(density, chains=1, keep=1, settle=60, seed=1, progress="off", executor="here", rank=0, watch=0,
                     audit=False)
    kinds = {"ten coordinates": list(range(0, D, D // 10)), "a function": lambda x: float(x[:10].sum()), "all": "all"}
    times: dict[tuple[str, int], list[float]] = {}
    steps = {}

    def nothing(keep: int) -> np.ndarray:
        seed = np.random.SeedSequence(5, spawn_key=(0,))  # the first chain of a run with this seed
        chain = fw.Chain(density, np.zeros(D), seed=seed, rank=0, settled=settled.settled.chains[0])
        return chain.block(keep, draws=False).facts

    def kept(keep: int, name: str, path: Path) -> np.ndarray:
        return fw.run(density, chains=1, keep=keep, seed=5, progress="off", executor="here", rank=0, watch=kinds[name],
                      settled=settled, audit=False, gradients=False, record=path).facts[0]

    with tempfile.TemporaryDirectory() as folder:
        for repeat in range(REPEATS):
            for keep in (SHORT, LONG):
                for name in ("nothing", *kinds):
                    begun = time.process_time()
                    path = Path(folder) / f"{name} {keep} {repeat}"
                    facts = nothing(keep) if name == "nothing" else kept(keep, name, path)
                    times.setdefault((name, keep), []).append(time.process_time() - begun)
                    steps[name, keep] = int(facts["steps"].sum())
    assert len({steps[name, LONG] for name in ("nothing", *kinds)}) == 1, "all have drawn the same"
    a_draw = {name: (np.array(times[name, LONG]) - times[name, SHORT]) / (LONG - SHORT) for name in ("nothing", *kinds)}
    rows = []
    for name in kinds:
        more = a_draw[name] - a_draw["nothing"]
        share, bound = np.median(more / a_draw[name]), "5%" if name == "ten coordinates" else ""
        rows.append([name, f"{steps[name, LONG] / LONG:.0f}", short_time(np.median(a_draw["nothing"])),
                     short_time(np.median(more)),
                     f"{100 * share:.1f}%", bound, "" if not bound else "yes" if share <= 0.05 else "NO"])
    print(table(["kept", "steps a draw", "a draw, nothing kept", "more for keeping", "share", "bound", "kept?"], rows))
    print(f"\n{busy()} after.")


if __name__ == "__main__":
    main()

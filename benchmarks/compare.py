"""Two checkouts side by side: the time of a step, everything included, and the ratio.

    python benchmarks/compare.py OLD [NEW] [--rounds N]

OLD, NEW: folders of built checkouts, or git revisions, which are checked out and built in a temporary folder. NEW: this
folder when left out. Each round runs one after the other in processes of their own, so that what slows the machine for
a while slows both; of the rounds the least time counts. Only what both have is timed: chains on a standard normal in C.
"""

import argparse
import json
import os
import subprocess
import sys
import tempfile
from contextlib import ExitStack
from pathlib import Path

HERE = Path(__file__).resolve().parent
ROOT = HERE.parent
CASES = [
    (motion, path, d)
    for d in (10, 1_000, 100_000)
    for motion, path in (("leapfrog", "jittered"), ("leapfrog", "no-u-turn"), ("surrogate", "jittered"),
                         ("surrogate", "no-u-turn"), ("product", "no-u-turn"))
]


def timed(root: str) -> None:
    """In a process of its own: print one JSON list of seconds a step for CASES, of the checkout at `root`."""
    sys.path[:0] = [f"{root}/python", f"{root}/tests"]
    import time

    import numpy as np
    import targets

    import fellwalk as fw

    assert Path(fw.__file__).is_relative_to(root), f"{fw.__file__} is not in {root}"
    motions = {"leapfrog": fw.Leapfrog(), "surrogate": fw.Lagrangian(bend=0.5),
               "product": fw.Lagrangian(bend=0.5, curvature="product")}
    paths = {"jittered": fw.Jittered(16), "no-u-turn": fw.NoUTurn()}
    found = []
    for motion, path, d in CASES:
        target = targets.standard_normal(d)
        density = fw.Density(target.density, d, hessian_product=target.hessian_product)
        chain = fw.Chain(density, np.zeros(d), motion=motions[motion], path=paths[path], seed=3,
                         step_size=1.2 * d**-0.25, scale=np.ones(d), adapt_scale=False, rank=0, beta=0.5 / d)
        draws, best = max(3, 1_000_000 // max(d, 100)), np.inf
        chain.advance(draws)
        for _ in range(5):
            begun = time.thread_time()
            steps = chain.advance(draws).facts["steps"].sum()
            best = min(best, (time.thread_time() - begun) / steps)
        found.append(best)
    print(json.dumps(found))


def checkout(given: str, stack: ExitStack) -> Path:
    """The folder of a built checkout."""
    if Path(given).is_dir():
        return Path(given).resolve()
    folder = Path(stack.enter_context(tempfile.TemporaryDirectory(prefix="fellwalk-compare-")))
    packed = subprocess.run(["git", "-C", str(ROOT), "archive", given], check=False, capture_output=True)
    if packed.returncode:
        raise SystemExit(f"{given} is neither a folder nor a revision: {packed.stderr.decode().strip()}")
    subprocess.run(["tar", "-x", "-C", str(folder)], input=packed.stdout, check=True)
    print(f"building {given} ...", file=sys.stderr)
    subprocess.run([sys.executable, "setup.py", "-q", "build_ext", "--inplace"], cwd=folder, check=True,
                   capture_output=True)
    return folder


def measure(root: Path) -> list[float]:
    """Seconds a step of every case."""
    code = f"import sys; sys.path.insert(0, {str(HERE)!r}); import compare; compare.timed({str(root)!r})"
    environment = {**os.environ, "PYTHONPATH": f"{root}/python"}
    done = subprocess.run([sys.executable, "-c", code], capture_output=True, text=True, check=False, env=environment)
    if done.returncode:
        raise SystemExit(f"{root}: {done.stderr[-2000:]}")
    return json.loads(done.stdout.splitlines()[-1])


def main() -> None:
    parser = argparse.ArgumentParser(description=__doc__.splitlines()[0])
    parser.add_argument("old", metavar="OLD")
    parser.add_argument("new", metavar="NEW", nargs="?", default=str(ROOT))
    parser.add_argument("--rounds", type=int, default=5)
    options = parser.parse_args()
    with ExitStack() as stack:
        trees = [checkout(given, stack) for given in (options.old, options.new)]
        best = [[float("inf")] * len(CASES) for _ in trees]
        for _ in range(options.rounds):
            for row, tree in zip(best, trees, strict=True):
                row[:] = map(min, row, measure(tree))
    from common import busy, machine, short_time, table

    rows = [[motion, path, f"{d:g}", short_time(old), short_time(new), f"{new / old:.2f}"]
            for (motion, path, d), old, new in zip(CASES, *best, strict=True)]
    print(f"{machine()}\nProcessor time a step, calls included, least of {options.rounds} rounds; {busy()} after.\n")
    print(table(["motion", "path", "d", options.old, options.new, "new / old"], rows))


if __name__ == "__main__":
    main()

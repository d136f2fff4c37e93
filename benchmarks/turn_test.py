"""Which momentum should the no-U-turn test of the Lagrangian motion use: p = G0 v of the base metric, or p = G v?

The same chains as in effective_draws.py, under both tests, for the surrogate and the exact curvature; the bend is what
settling makes of 1. Ratios are base to metric: above 1 the base test, which is the default, does better.
"""

import argparse
import time

import numpy as np
from common import busy, fw, machine, table
from effective_draws import TARGETS, one_run


def main() -> None:
    """Measure and print the table."""
    options = argparse.ArgumentParser(description=__doc__)
    options.add_argument("--quick", action="store_true", help="one seed and a tenth of the budget: a rough answer")
    options.add_argument("--seeds", type=int, default=7)
    options.add_argument("--budget", type=int, default=15_000, help="gradients and products of a run, after settling")
    given = options.parse_args()
    seeds, budget = (1, given.budget // 10) if given.quick else (given.seeds, given.budget)
    begun, before = time.process_time(), busy()
    lines, ratios = [], {"surrogate": [], "product": []}
    for name, build in TARGETS.items():
        target, cells = build(), [name]
        for curvature, all_ratios in ratios.items():
            motion, pair = fw.Lagrangian(bend=1.0, curvature=curvature), []
            for turn in ("base", "metric"):
                path = fw.NoUTurn(turn=turn)
                pair.append(float(np.median([one_run(target, motion, path, s, budget) for s in range(seeds)])))
            all_ratios.append(pair[0] / pair[1])
            cells += [f"{pair[0]:.3g}", f"{pair[1]:.3g}", f"{all_ratios[-1]:.2f}"]
        lines.append(cells)
    means = [f"{np.exp(np.mean(np.log(values))):.2f}" for values in ratios.values()]
    lines.append(["geometric mean", "", "", means[0], "", "", means[1]])
    print(f"{machine()}\nMedians of {seeds} seeds, {budget} gradients and products each; "
          f"{time.process_time() - begun:.0f} s of processor time; {before} before, {busy()} after.\n")
    head = ["effective draws in 1000", "surrogate, base", "metric", "ratio", "product, base", "metric", "ratio"]
    print(table(head, lines))


if __name__ == "__main__":
    main()

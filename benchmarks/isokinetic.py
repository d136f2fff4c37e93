"""What is the isokinetic motion worth, and the length of jittered paths that settling finds?

Each run settles by the open plan from an exact draw and then keeps draws until a budget of gradients is spent. Its
number is the least effective size of all coordinates, of their centres and of their squares, in 1000 gradients; medians
over seeds, with the interval of the medians of resampled seeds (95%), against leapfrog on no-U-turn paths.
"""

import argparse
import time

import numpy as np
from common import busy, fw, machine, table, targets
from effective_draws import least_effective

TARGETS = {
    "normal, d = 500, variances over 1e2": lambda: targets.independent_normal(
        np.zeros(500), np.sqrt(np.logspace(-1.0, 1.0, 500))),
    "Student-t, d = 50": lambda: targets.student(50, 5.0),
    "Rosenbrock pairs, d = 50": lambda: targets.rosenbrock(pairs=25),
}
WAYS = {
    "leapfrog, no-U-turn": (fw.Leapfrog(), fw.NoUTurn()),
    'leapfrog, Jittered("auto")': (fw.Leapfrog(), fw.Jittered("auto")),
    "isokinetic, no-U-turn": (fw.Isokinetic(), fw.NoUTurn()),
    'isokinetic, Jittered("auto")': (fw.Isokinetic(), fw.Jittered("auto")),
}


def one_run(target: targets.Target, motion: object, path: object, seed: int, budget: int) -> tuple[float, int]:
    """(least effective draws in 1000 gradients after settling, gradients of settling)."""
    start = target.exact_draws(1, np.random.default_rng([seed, 1]))[0]
    chain = fw.Chain(fw.Density(target.density, target.dimension), start, motion=motion, path=path, seed=seed)
    chain.settle("auto")
    settling, draws, spent = chain.counts["gradients"], [], 0
    while spent < budget:
        block = chain.block(50)
        draws.append(block.draws)
        spent += int(block.facts["gradients"].sum())
    found = least_effective(np.concatenate(draws))
    return (1000.0 * found / spent if np.isfinite(found) else 0.0), settling


def interval(values: np.ndarray, base: np.ndarray) -> str:
    """Ratio of medians with its 95% interval, seeds resampled."""
    rng = np.random.default_rng(1)
    ratios = [np.median(rng.choice(values, len(values))) / np.median(rng.choice(base, len(base))) for _ in range(2000)]
    low, high = np.quantile(ratios, [0.025, 0.975])
    return f"{np.median(values) / np.median(base):.2f} ({low:.2f} to {high:.2f})"


def main() -> None:
    """Measure and print the table."""
    options = argparse.ArgumentParser(description=__doc__)
    options.add_argument("--quick", action="store_true", help="three seeds and a quarter of the budget: a rough answer")
    options.add_argument("--seeds", type=int, default=12)
    options.add_argument("--budget", type=int, default=40_000, help="gradients of a run, after settling")
    given = options.parse_args()
    seeds, budget = (3, given.budget // 4) if given.quick else (given.seeds, given.budget)
    begun, before, rows = time.process_time(), busy(), []
    for name, build in TARGETS.items():
        target, base = build(), None
        for way, (motion, path) in WAYS.items():
            runs = [one_run(target, motion, path, seed, budget) for seed in range(seeds)]
            values = np.array([value for value, _ in runs])
            base = values if base is None else base
            ratio = "1" if base is values else interval(values, base)
            rows.append([f"{name}: {way}", f"{np.median(values):.3g}", f"{values.min():.3g} to {values.max():.3g}",
                         ratio, f"{np.median([settling for _, settling in runs]):.0f}"])
    print(f"{machine()}\nMedians of {seeds} seeds, {budget} gradients each; {time.process_time() - begun:.0f} s of "
          f"processor time; {before} before, {busy()} after.\n")
    print(table(["target and way", "in 1000", "least to most", "ratio (95%)", "gradients settling"], rows))


if __name__ == "__main__":
    main()

"""How many effective draws do 1000 gradients give, under every motion and path, on targets of every shape?

Each run settles by the open plan from an exact draw (the logistic posteriors: from the origin) and then keeps draws
until a budget of gradients is spent, a Hessian product counted as a gradient, trials of halved steps included. The
number of a run is the least effective size of all coordinates, of their centres and of their squares, for 1000
gradients; that of a row is the median over seeds, and a row is measured against leapfrog on no-U-turn paths in the same
run of this program.
"""

import argparse
import time
from collections.abc import Callable

import numpy as np
from common import busy, fw, machine, table, targets

from fellwalk.autocorrelation import effective_size

TARGETS: dict[str, Callable[[], targets.Target]] = {
    "funnel, d = 2": lambda: targets.funnel(2),
    "funnel, d = 11": lambda: targets.funnel(11),
    "Rosenbrock, d = 2": lambda: targets.rosenbrock(),
    "Rosenbrock, d = 20": lambda: targets.rosenbrock(pairs=10),
    "narrow ring": lambda: targets.ring(2, 2.0, 0.1),
    "winding ridge": lambda: targets.winding_ridge(),
    "Student-t, d = 20": lambda: targets.student(20, 5.0),
    "Pima": lambda: targets.logistic("pima"),
    "Australian": lambda: targets.logistic("australian"),
    "Ripley": lambda: targets.logistic("ripley"),
    "eight schools": lambda: targets.eight_schools(False),
}


def motions(halvings: int) -> dict[str, fw.Leapfrog | fw.Lagrangian]:
    """Every motion by name, with this number of halvings."""
    def bent(bend: float, curvature: str) -> fw.Lagrangian:
        return fw.Lagrangian(bend=bend, curvature=curvature, halvings=halvings)

    return {
        "leapfrog": fw.Leapfrog(halvings=halvings),
        "surrogate, bend 0.1": bent(0.1, "surrogate"),
        "surrogate, bend 0.3": bent(0.3, "surrogate"),
        "surrogate, bend 1": bent(1.0, "surrogate"),
        "product, bend 1": bent(1.0, "product"),
        "difference, bend 1": bent(1.0, "difference"),
    }


def ways() -> dict[tuple[str, str, int], tuple]:
    """(motion, path, halvings) of every row; the first is what the others are measured against."""
    found = {}
    for halvings in (0, 6):
        for path in (fw.NoUTurn(), fw.Jittered(16)):
            for name, motion in motions(halvings).items():
                found[name, path.name, halvings] = (motion, path)
    return found


def least_effective(draws: np.ndarray) -> float:
    """The least effective size of draws (n, d) over all coordinates, their centres and their squares."""
    z = (draws - draws.mean(axis=0)).T[:, None]
    return float(min(effective_size(z).min(), effective_size(z**2).min()))


def one_run(target: targets.Target, motion: object, path: object, seed: int, budget: int) -> float:
    """Least effective draws in 1000 gradients of one chain that spends `budget` gradients and products after settling;
    0 when it hardly moved."""
    if target.exact_draws is None:
        start = np.zeros(target.dimension)
    else:
        start = target.exact_draws(1, np.random.default_rng([seed, 1]))[0]
    density = fw.Density(target.density, target.dimension, hessian_product=target.hessian_product)
    chain = fw.Chain(density, start, motion=motion, path=path, seed=seed)
    chain.settle("auto")
    draws, spent = [], 0
    while spent < budget:
        block = chain.block(50)
        if block.error is not None:
            raise block.error
        draws.append(block.draws)
        spent += int(block.facts["gradients"].sum()) + int(block.facts["products"].sum())
    found = least_effective(np.concatenate(draws))
    return 1000.0 * found / spent if np.isfinite(found) else 0.0


def row(numbers: dict[str, float], base: dict[str, float]) -> list[str]:
    """Cells of a row: number (ratio to the baseline) for each target, then the geometric mean of the ratios."""
    cells, ratios = [], []
    for name, value in numbers.items():
        ratios.append(max(value, 1e-3) / base[name])
        cells.append(f"{value:.2g} ({value / base[name]:.2g})" if value < 10 else f"{value:.0f} ({ratios[-1]:.2g})")
    return [*cells, f"{np.exp(np.mean(np.log(ratios))):.2f}"]


def main() -> None:
    """Measure and print the tables."""
    options = argparse.ArgumentParser(description=__doc__)
    options.add_argument("--quick", action="store_true", help="one seed and a tenth of the budget: a rough answer")
    options.add_argument("--seeds", type=int, default=5)
    options.add_argument("--budget", type=int, default=15_000, help="gradients and products of a run, after settling")
    given = options.parse_args()
    seeds, budget = (1, given.budget // 10) if given.quick else (given.seeds, given.budget)
    begun, before = time.process_time(), busy()
    found: dict[tuple[str, str, int], dict[str, float]] = {way: {} for way in ways()}
    for name, build in TARGETS.items():
        target = build()
        for way, (motion, path) in ways().items():
            found[way][name] = float(np.median([one_run(target, motion, path, s, budget) for s in range(seeds)]))
    base = next(iter(found.values()))
    print(f"{machine()}\nMedians of {seeds} seeds, {budget} gradients and products each; "
          f"{time.process_time() - begun:.0f} s of processor time; {before} before, {busy()} after.\n")
    names = list(TARGETS)
    for part in (names[:6], names[6:]):
        for halvings in (0, 6):
            lines = [[f"{motion}, {path}", *row(found[motion, path, halvings], base)]
                     for motion, path, m in found if m == halvings]
            wanted = [0, *(1 + names.index(name) for name in part)] + [len(names) + 1] * (part[-1] == names[-1])
            head = ["halvings = " + str(halvings), *names, "mean ratio"]
            print(table([head[i] for i in wanted], [[line[i] for i in wanted] for line in lines]) + "\n")


if __name__ == "__main__":
    main()

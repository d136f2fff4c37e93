"""What sharpening by gradients is worth, and whether its errors are honest.

    python benchmarks/sharpened.py coverage [RUNS] [TARGET ...]     400 runs each: about 20 minutes of one core
    python benchmarks/sharpened.py worth [TARGET ...]               effective draws per 1000 gradients: two minutes
    python benchmarks/sharpened.py cost                             share of the demo: half a minute

Coverage: share of runs whose interval of 1.96 errors to each side holds the known value, for sharpened and for plain
estimates, lowest and highest over the values of a target, and the largest ratio of mean squared errors. Worth: the
square of the sd over the squared error (for the sd as the estimate: that many draws of a normal), settling included.
Cost: processor time of sharpening and of the check, as a share of the demo's run. Targets and settings: `CASES` in
tests/sharpened_runs.py. What was measured stands in README.md.
"""

import sys
from time import process_time

import numpy as np
from common import busy, machine
from sharpened_runs import CASES, KINDS, Study, draw, study

from fellwalk import Leapfrog, Result, run
from fellwalk.demo import hives
from fellwalk.demo.show import density
from fellwalk.estimates import estimate_all
from fellwalk.judge import LEVELS, measure, prepare

SEEDS = 5


def coverage_lines(name: str, s: Study) -> list[str]:
    """Rows of the table, one a kind of estimate."""
    runs = len(s.sharp)
    lines = []
    for k, kind in enumerate(KINDS):
        there = np.isfinite(s.true[:, k])
        if not there.any():
            continue
        sharp, raw = (s.covered(which)[there, k] / runs for which in (True, False))
        ratio = (s.squared(True).mean(axis=0) / s.squared(False).mean(axis=0))[there, k]
        won = np.mean(s.by[:, there, k] != "none")
        lines.append(f"| {name} | {kind} | {there.sum()} | {100 * sharp.min():.1f} to {100 * sharp.max():.1f} "
                     f"| {100 * raw.min():.1f} to {100 * raw.max():.1f} | {ratio.max():.2g} "
                     f"| {1 / np.median(ratio):.3g} | {100 * won:.0f}% |")
    return lines


def outside(name: str, s: Study) -> list[str]:
    """Values whose coverage lies outside 92 to 98% or whose squared error is above 1.05 times the plain one."""
    runs, said = len(s.sharp), []
    sharp, raw = s.covered(True) / runs, s.covered(False) / runs
    ratio = s.squared(True).mean(axis=0) / s.squared(False).mean(axis=0)
    for i, k in zip(*np.nonzero(np.isfinite(s.true)), strict=True):
        if not (0.92 <= sharp[i, k] <= 0.98 and 0.92 <= raw[i, k] <= 0.98 and ratio[i, k] <= 1.05):
            said.append(f"- {name}, {KINDS[k]} of {s.names[i]}: sharpened {100 * sharp[i, k]:.1f}%, plain "
                        f"{100 * raw[i, k]:.1f}%, squared error {ratio[i, k]:.2g} times the plain one; called in doubt "
                        f"in {100 * s.in_doubt[:, i, k].mean():.0f}% of the runs")
    return said


def coverage(runs: int, names: list[str]) -> None:
    print(f"{machine()}; {busy()}\n")
    print("| target | of | values | sharpened covers, % | plain covers, % | worst MSE ratio | median gain | sharpened "
          "|")
    print("|---|---|---|---|---|---|---|---|")
    said: list[str] = []
    for name in names:
        s = study(name, runs)
        print("\n".join(coverage_lines(name, s)), flush=True)
        said += [*outside(name, s), f"- {name}: identities called broken in {s.broken} of {runs} runs"]
        if (s.true_error > 0).any():
            said.append(f"- {name}: the mean of all runs is at most {np.nanmax(np.abs(s.offset())):.1f} errors of both "
                        "from the published values")
    print("\n".join(["", *said]))


def worth(names: list[str]) -> None:
    print(f"{machine()}; {busy()}\n")
    print(f"Effective draws per 1000 gradients, of the value with the least, median of {SEEDS} seeds:\n")
    print("| target | mean, plain | mean, sharpened | sd, plain | sd, sharpened |")
    print("|---|---|---|---|---|")
    for name in names:
        found = np.array([one_worth(draw(name, seed)) for seed in range(SEEDS)])
        print(f"| {name} | {' | '.join(f'{w:.3g}' for w in np.median(found, axis=0))} |", flush=True)


def one_worth(result: Result) -> list[float]:
    """Effective draws per 1000 gradients: for means, plain and sharpened, then for sds."""
    e, per = result.estimate(), 1000 / result.spent["gradients"]
    return [per * float(np.min((which.spread / getattr(which, error)) ** 2)) / share
            for error, share in (("error", 1), ("spread_error", 2)) for which in (e.raw, e)]


def cost() -> None:
    """The demo: its run, its table from the draws alone, and what gradients add to that, the least of some repeats."""
    print(f"{machine()}; {busy()}\n")
    model, names = density(), list(hives.names)
    started = process_time()
    result = run(model, motion=Leapfrog(halvings=8), acceptance=0.9, keep=14_000, seed=23, executor="here",
                 progress="off")
    ran = process_time() - started
    x, pair = hives.natural(result.draws), (result.free_draws, result.gradients)
    measured, sharpened = [], []
    for _ in range(10):
        started = process_time()
        numbers = measure(x)
        measured.append(process_time() - started)
        numbers["event"] = np.zeros(len(names), dtype=bool)
        started = process_time()
        checked, sharpener, _ = prepare(pair, result.facts["failure"])
        e = estimate_all(x, names, numbers, list(LEVELS.values()), sharpener, checked)
        sharpened.append(process_time() - started)
    words = [*e.by, *e.spread_by, *(word for q in e.quantiles.values() for word in q.by)]
    count = len(words) - words.count("none")
    print(f"run {ran:.2f} s, table {min(measured):.3f} s, sharpening {min(sharpened):.3f} s (median "
          f"{np.median(sharpened):.3f} s): {100 * min(sharpened) / ran:.1f}% of the run, {count} numbers sharpened, "
          f"{checked.checked} identities checked")


if __name__ == "__main__":
    what, *rest = sys.argv[1:] or ["worth"]
    number = int(rest.pop(0)) if rest and rest[0].isdigit() else 400
    chosen = rest or list(CASES)
    {"coverage": lambda: coverage(number, chosen), "cost": cost}.get(what, lambda: worth(chosen))()

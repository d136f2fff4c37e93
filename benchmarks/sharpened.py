"""What sharpening by gradients is worth, and whether its errors are honest.

    python benchmarks/sharpened.py coverage [RUNS] [TARGET ...]     400 runs each: about 20 minutes of one core
    python benchmarks/sharpened.py worth [TARGET ...]               effective draws per 1000 gradients: a minute

Coverage: share of runs whose interval of 1.96 errors to each side holds the known value, for sharpened and for plain
estimates, lowest and highest over the values of a target, and the largest ratio of mean squared errors. Worth: the
square of the sd over the squared error (for the sd as the estimate: that many draws of a normal), settling included.
Targets and settings: `CASES` in tests/sharpened_runs.py. What was measured stands in sharpened.md.
"""

import sys

import numpy as np
from common import busy, machine
from sharpened_runs import CASES, KINDS, Study, draw, study


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
    print("Effective draws per 1000 gradients, of the value with the least:\n")
    print("| target | mean, plain | mean, sharpened | sd, plain | sd, sharpened |")
    print("|---|---|---|---|---|")
    for name in names:
        result = draw(name, 1)
        cells = []
        e = result.estimate()
        per = 1000 / result.spent["gradients"]
        for values, errors in (("spread", "error"), ("spread", "spread_error")):
            for which in (e.raw, e):
                w = (getattr(which, values) / getattr(which, errors)) ** 2 / (1 if errors == "error" else 2)
                cells.append(f"{per * w.min():.3g}")
        print(f"| {name} | {' | '.join(cells)} |", flush=True)


if __name__ == "__main__":
    what, *rest = sys.argv[1:] or ["worth"]
    number = int(rest.pop(0)) if rest and rest[0].isdigit() else 400
    chosen = rest or list(CASES)
    coverage(number, chosen) if what == "coverage" else worth(chosen)

"""What do learned directions buy, how soon are they found, and what does looking for them cost?

Longley's regression on its raw predictors; a normal with all correlations 0.99; 500 coordinates with six spikes; 1000
independent coordinates, where there is nothing to find; and the price of settling in 1e5 dimensions, beside gradients
of a millisecond. "Spread" is the square root of the condition number of the covariance that the motion sees.
"""

import argparse
import time

import numpy as np
from common import busy, fw, machine, table, targets
from test_learned_directions import (
    ENDS_WITH_200,
    EQUI,
    LONGLEY_SETTLE,
    chain_on,
    equicorrelated_root,
    independent,
    longley,
    spread,
    worth,
)


def longley_table(seeds: int) -> None:
    """From five starts: when the spread is below 4 for good, what plans take, and what draws are worth."""
    rows = []
    for number in range(5):
        start, good, fixed, opened, wide, draws, spent = longley().start(number), [], [], [], [], [], 0
        for seed in range(seeds):
            chain, windows, below = chain_on(longley().target, start, seed=seed, settle="auto"), 0, None
            while not chain.settled:
                chain.block(1, draws=False)
                if chain.summary["windows"] > windows:
                    windows = chain.summary["windows"]
                    if spread(chain, longley().root, longley().sd) >= 4.0:
                        below = None
                    elif below is None:
                        below = chain.counts["gradients"]
            good.append(np.inf if below is None else below)
            opened.append(chain.counts["gradients"])
            chain = chain_on(longley().target, start, seed=seed)
            chain.settle(LONGLEY_SETTLE)
            fixed.append(chain.counts["gradients"])
            wide.append(spread(chain, longley().root, longley().sd))
            block = chain.advance(1000)
            draws.append(block.draws)
            spent += int(block.facts["gradients"].sum())
        late = sum(g > 5000 or w >= 4 for g, w in zip(fixed, wide, strict=True))
        rows.append(["origin" if number == 0 else f"dispersed {number}", f"{np.median(good):.0f} ({max(good):.0f})",
                     f"{np.median(fixed):.0f} ({max(fixed):.0f})", f"{np.median(wide):.2f} ({max(wide):.2f})",
                     f"{late} of {seeds}", f"{np.median(opened):.0f} ({max(opened):.0f})",
                     f"{1000 * worth(np.array(draws)) / spent:.1f}"])
    head = ["start", "spread < 4 for good after", f"plan of {LONGLEY_SETTLE} took", "its spread", "missed",
            "open plan took", "worth"]
    print(f"### Longley, {seeds} seeds each: gradients, median (largest)\n\n{table(head, rows)}\n")


def equicorrelated_table(seeds: int) -> None:
    """Effective draws in 1000 gradients by rank."""
    target, rows = targets.equicorrelated_normal(*EQUI), []
    plain = None
    for rank in (0, 1, 4, "auto"):
        draws, spent, wide = [], 0, []
        for seed in range(seeds):
            start = target.exact_draws(1, np.random.default_rng(seed))[0]
            chain = chain_on(target, start, rank=rank, seed=seed)
            chain.settle(500)
            block = chain.advance(4000 if rank == 0 else 1000)
            draws.append(block.draws)
            spent += int(block.facts["gradients"].sum())
            wide.append(spread(chain, equicorrelated_root(*EQUI), np.ones(EQUI[0])))
        value = 1000 * worth(np.array(draws)) / spent
        plain = plain or value
        rows.append([str(rank), f"{np.median(wide):.2f}", f"{value:.3g}", f"{value / plain:.0f}"])
    print(f"### Equicorrelated normal, d = {EQUI[0]}, rho = {EQUI[1]}, {seeds} seeds\n")
    print(table(["rank", "spread", "effective draws in 1000 gradients", "ratio"], rows) + "\n")


def spikes_table(seeds: int) -> None:
    """Spread of the base metric by gradients spent."""
    d, variances = 500, np.array([1e4, 3e3, 1e3, 1e-3, 3e-4, 1e-4])
    rng = np.random.default_rng(20250)  # as random_spikes makes them
    directions = np.linalg.qr(rng.standard_normal((d, 6)))[0].T
    scales = 10.0 ** rng.permutation(np.linspace(-3.0, 3.0, d))
    root = np.eye(d) + directions.T @ ((np.sqrt(variances) - 1.0)[:, None] * directions)
    target, rows, marks = targets.random_spikes(), [], (2_000, 5_000, 10_000, 15_000)
    starts = {"origin": np.zeros(d), "a sd out": scales * np.random.default_rng(5).standard_normal(d)}
    for name, start in starts.items():
        found = np.empty((seeds, len(marks)))
        for seed in range(seeds):
            chain = chain_on(target, start, seed=seed, settle=3000)
            for i, mark in enumerate(marks):
                while chain.counts["gradients"] < mark:
                    chain.block(1, draws=False)
                found[seed, i] = spread(chain, root, scales)
        cells = [f"{np.median(f):.3g} ({f.max():.3g})" for f in found.T]
        rows.append([name, *cells, f"{np.sum(found[:, 2] >= 10)} of {seeds}"])
    print(f"### Six spikes, d = 500, scales over six decades: spread, median of {seeds} seeds (largest)\n")
    print(table(["start", *(f"after {mark:,}" for mark in marks), "not below 10 after 10,000"], rows) + "\n")


def nothing_table(runs: int) -> None:
    """How often windows of 200 draws invent directions."""
    rows = []
    for d in (10, 100, 1000):
        target, kept = independent(d), 0
        for seed in range(runs):
            start = target.exact_draws(1, np.random.default_rng([d, seed]))[0]
            chain = chain_on(target, start, path=fw.Jittered(8), seed=seed)
            chain.settle(ENDS_WITH_200)
            kept += chain.summary["directions"] > 0
        rows.append([str(d), f"{kept} of {runs}"])
    print("### Independent coordinates, last window of 200 draws\n\n" + table(["d", "kept a direction"], rows) + "\n")


def cost_table(settle: int, keep: int) -> None:
    """Processor time of settling beyond what its gradients' steps cost afterwards, in d = 1e5."""
    d, rows = 100_000, []
    for name, target in (("independent", targets.standard_normal(d)), ("six spikes", targets.random_spikes(d))):
        for rank in (0, "auto"):
            start = target.exact_draws(1, np.random.default_rng(1))[0]
            chain = chain_on(target, start, rank=rank, seed=1, path=fw.Jittered(8))
            begun = time.thread_time()
            settling = chain.settle(settle)
            middle = time.thread_time()
            block = chain.advance(keep)
            ended = time.thread_time()
            calls = int(settling.facts["gradients"].sum()), int(block.facts["gradients"].sum())
            step = (ended - middle) / calls[1]
            own = middle - begun - calls[0] * step
            whole = 1e-3 * sum(calls) + ended - begun
            rows.append([f"{name}, rank {rank}", str(chain.summary["directions"]), f"{calls[0]}", f"{calls[1]}",
                         f"{1e3 * step:.2f} ms", f"{own:.2f} s", f"{100 * own / whole:.1f}%",
                         f"{100 * own / (1e-3 * calls[0] + middle - begun):.1f}%"])
    print(f"### d = 100,000: {settle} settling transitions, {keep} kept, jittered paths of 1 to 8 steps\n")
    print(table(["target", "directions", "gradients settling", "keeping", "one step", "settling's own",
                 "of a run with gradients of 1 ms", "of its settling"], rows))


def main() -> None:
    """Measure and print the tables."""
    options = argparse.ArgumentParser(description=__doc__)
    options.add_argument("--quick", action="store_true", help="few seeds: a rough answer")
    quick = options.parse_args().quick
    begun, before = time.process_time(), busy()
    longley_table(4 if quick else 20)
    equicorrelated_table(2 if quick else 8)
    spikes_table(2 if quick else 12)
    nothing_table(10 if quick else 60)
    cost_table(200, 100 if quick else 300)
    print(f"\n{machine()}\n{time.process_time() - begun:.0f} s of processor time; {before} before, {busy()} after.")


if __name__ == "__main__":
    main()

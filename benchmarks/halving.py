"""Local halving on Neal's funnel (Neal 2003, Ann. Stat. 31): what do steps that give way change, at equal gradients?

    python benchmarks/halving.py [--runs 40] [--dimensions 2 11] [--gradients 100000] [--seed 0]

Run number i of a row has the seed `--seed` + i and starts at standard normal numbers drawn with that seed, the same for
both rows. It may use so many gradients, counted from its start: settling, trials of halving and the reverse rule too.

distance: Wasserstein-1 distance between the draws of the axis v and its exact law N(0, 3^2); mean over runs +- its
standard error. A run whose settling leaves no draw counts with the distance of its last settling draw.
tail: share of runs whose tail v < -4 passes `tail_passes`; reached: median of the lowest v.
"""

import argparse
import os
import sys
from concurrent.futures import ProcessPoolExecutor
from functools import cache
from itertools import repeat
from pathlib import Path

for _name in ("OMP_NUM_THREADS", "OPENBLAS_NUM_THREADS", "MKL_NUM_THREADS"):
    os.environ.setdefault(_name, "1")

import numpy as np  # noqa: E402
from scipy.signal import lfilter  # noqa: E402
from scipy.stats import norm  # noqa: E402

sys.path.insert(0, str(Path(__file__).resolve().parent.parent / "tests"))

import targets  # noqa: E402

import fellwalk as fw  # noqa: E402

LAW = norm(0.0, 3.0)
LEVELS = np.arange(-4.0, -7.6, -0.5)
FALSE_ALARM = 0.01  # of tail_passes, halved between the two sides
MOTIONS = {"plain": fw.Leapfrog(), "halved": fw.Leapfrog(halvings=6)}


def distance(v: np.ndarray) -> float:
    """Wasserstein-1 distance between the draws and the exact law, by quantiles."""
    return float(np.abs(np.sort(v) - LAW.ppf((np.arange(len(v)) + 0.5) / len(v))).mean())


def tail_statistics(v: np.ndarray) -> np.ndarray:
    """Kolmogorov-Smirnov distances of the tail, one for each side, weighted as Anderson & Darling (1952) do:
    the largest (F - F_n) / sqrt(F) and (F_n - F) / sqrt(F) over LEVELS; v of shape (..., n), result (..., 2)."""
    exact = LAW.cdf(LEVELS)
    gaps = np.stack([(exact[j] - (v < level).mean(axis=-1)) / np.sqrt(exact[j]) for j, level in enumerate(LEVELS)], -1)
    return np.stack([gaps.max(axis=-1), -gaps.min(axis=-1)], -1)


@cache
def limits(relaxations: float) -> np.ndarray:
    """Upper quantiles of `tail_statistics` for an exact chain of this length: a stationary Gaussian first-order
    autoregression with the law of v, 20 draws to a relaxation time, 4000 copies, fixed seed."""
    n, r = max(2, round(20 * relaxations)), np.exp(-1 / 20)
    rng = np.random.default_rng(20)
    found = []
    for _ in range(40):
        noise = 3.0 * rng.standard_normal((100, n))
        noise[:, 1:] *= np.sqrt(1 - r * r)
        found.append(tail_statistics(lfilter([1.0], [1.0, -r], noise, axis=1)))
    return np.quantile(np.concatenate(found), 1 - FALSE_ALARM / 2, axis=0)


def relaxations(v: np.ndarray, lag: int = 10) -> float:
    """Length of a run in relaxation times of v, from how far it moves in `lag` draws and the exact variance."""
    moved = np.clip(((v[lag:] - v[:-lag]) ** 2).mean() / (2.0 * LAW.var()), 1e-9, 0.999)
    return len(v) * -np.log1p(-moved) / lag


def tail_passes(v: np.ndarray) -> bool:
    """Does the lower tail look like that of an exact chain which moves about as fast as this one?

    It fails an exact first-order autoregression in FALSE_ALARM of the runs. Movement, not the share of draws in the
    tail, sets the limit: a run that never meets the tail would otherwise excuse itself by having learned nothing of it.
    """
    if len(v) < 100:
        return False
    length = float(np.exp(np.round(np.log(relaxations(v)) * 10) / 10))  # few different lengths to simulate
    return bool((tail_statistics(v) <= limits(length)).all())


def run(d: int, motion: fw.Leapfrog, seed: int, gradients: int) -> np.ndarray:
    """The draws of v that a chain keeps before its gradients are used up; its last settling draw if there are none."""
    target = targets.funnel(d)
    start = np.random.default_rng(seed).standard_normal(d)
    chain = fw.Chain(fw.Density(target.density, d), start, seed=seed, motion=motion, settle="auto")
    last, kept = start[:1], []
    while chain.counts["gradients"] < gradients:
        keeping = chain.settled
        v = chain.block(20).draws[:, 0]
        if keeping:
            kept.append(v)
        else:
            last = v[-1:]
    return np.concatenate(kept) if kept else last


def measured(d: int, name: str, seed: int, gradients: int) -> tuple[float, bool, float, int]:
    """Distance, tail check, lowest v and number of draws of one run."""
    v = run(d, MOTIONS[name], seed, gradients)
    return distance(v), tail_passes(v), float(v.min()), len(v)


def main() -> None:
    read = argparse.ArgumentParser(description=__doc__.splitlines()[0])
    read.add_argument("--runs", type=int, default=40)
    read.add_argument("--dimensions", type=int, nargs="+", default=[2, 11])
    read.add_argument("--gradients", type=int, default=100_000)
    read.add_argument("--seed", type=int, default=0)
    given = read.parse_args()
    seeds = range(given.seed, given.seed + given.runs)
    print(f"{given.runs} runs of {given.gradients} gradients, seeds {seeds[0]} to {seeds[-1]}, no-U-turn path\n")
    print("| d | motion | distance | ratio | tail | reached | draws |")
    print("|---:|---|---:|---:|---:|---:|---:|")
    with ProcessPoolExecutor() as pool:
        for d in given.dimensions:
            plain = None
            for name in MOTIONS:
                rows = pool.map(measured, repeat(d), repeat(name), seeds, repeat(given.gradients))
                away, passed, lowest, draws = (np.array(column) for column in zip(*rows, strict=True))
                plain = plain or away.mean()
                error = away.std(ddof=1) / np.sqrt(len(away))
                print(f"| {d} | {name} | {away.mean():.3f} +- {error:.3f} | {away.mean() / plain:.2f} | "
                      f"{passed.mean():.0%} | {np.median(lowest):.1f} | {np.median(draws):.0f} |", flush=True)


if __name__ == "__main__":
    main()

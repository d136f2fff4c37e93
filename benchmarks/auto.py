"""What is motion="auto" worth in a run of 4 x 2000 draws, its trial included, and what does the trial cost?

Each target is run three times with each seed, in this process: with leapfrog on no-U-turn paths of rank 0 (Fisher scale
alone), with motion="auto", and with the winner of that trial known beforehand. Effective draws are the least of all
parameters, of centre and both 5% tails, over the four chains. Seconds are processor time; those of kept draws leave out
settling and trial. Ratios are geometric means over seeds, with 95% intervals of the resampled seeds.
"""

import argparse
import time
from collections.abc import Callable
from typing import Any

import numpy as np
from common import busy, fw, machine, table, targets
from simulated_posteriors import cox, garch, mixture

from fellwalk import autocorrelation as ac
from fellwalk import driver
from fellwalk.settings import Settings


def of_target(build: Callable[[], targets.Target]) -> Callable[[], fw.Density]:
    """A maker of densities that start at an exact draw, or at the origin."""
    def make() -> fw.Density:
        target = build()
        start = np.zeros(target.dimension)
        if target.exact_draws is not None:
            start = target.exact_draws(1, np.random.default_rng(1))[0]
        return fw.Density(target.density, target.dimension, hessian_product=target.hessian_product, start=start)
    return make


TARGETS: dict[str, tuple[Callable[[], fw.Density], int]] = {
    "funnel, d = 2": (of_target(lambda: targets.funnel(2)), 2000),
    "funnel, d = 11": (of_target(lambda: targets.funnel(11)), 2000),
    "Rosenbrock, d = 2": (of_target(targets.rosenbrock), 2000),
    "Rosenbrock, d = 20": (of_target(lambda: targets.rosenbrock(pairs=10)), 2000),
    "narrow ring": (of_target(lambda: targets.ring(2, 2.0, 0.1)), 2000),
    "winding ridge": (of_target(targets.winding_ridge), 2000),
    "eight schools": (of_target(lambda: targets.eight_schools(False)), 2000),
    "GARCH(1,1)": (garch, 2000),
    "mixture of two": (mixture, 2000),
    "Pima": (of_target(lambda: targets.logistic("pima")), 2000),
    "Australian": (of_target(lambda: targets.logistic("australian")), 2000),
    "Ripley": (of_target(lambda: targets.logistic("ripley")), 2000),
    "Cox field 32 x 32": (cox, 2000),
}


class Clock:
    """Processor time spent in the latest driver of a run."""

    def __init__(self) -> None:
        self.seconds, go = 0.0, driver.Driver.go

        def timed(this: driver.Driver) -> fw.Result:
            begun = time.process_time()
            try:
                return go(this)
            finally:
                self.seconds = time.process_time() - begun

        driver.Driver.go = timed


def least_effective(draws: np.ndarray) -> float:
    """The least effective size over parameters, of centre and tails; draws (chains, n, d). 1 when something stands."""
    x = np.moveaxis(draws, -1, 0)
    low, high = np.quantile(x, [0.05, 0.95], axis=(1, 2))
    sizes = [ac.effective_size(ac.split(ac.rank_normalise(x)))]
    sizes += [ac.effective_size(ac.split(side.astype(float)))
              for side in (x <= low[:, None, None], x >= high[:, None, None])]
    return float(np.nan_to_num(np.array(sizes), nan=1.0).min())


def measured(clock: Clock, density: fw.Density, keep: int, seed: int, **how: object) -> dict[str, Any]:
    """Effective draws, seconds of all and of kept draws, gradients of all, and the result."""
    begun = time.process_time()
    result = fw.run(density, keep=keep, chains=4, seed=seed, executor="here", progress="off", gradients=False,
                    audit=False, **how)
    seconds = time.process_time() - begun
    kept = float(result.facts["gradients"].sum() + result.facts["products"].sum())
    spent = result.spent["gradients"] + result.spent["products"]
    return {"effective": least_effective(result.free_draws), "seconds": seconds, "spent": spent,
            "keeping": kept * of_kept_gradients(clock, density, keep, seed, result), "result": result}


def of_kept_gradients(clock: Clock, density: fw.Density, keep: int, seed: int, result: fw.Result) -> float:
    """Seconds of one gradient of kept draws: of a run that goes on from another's settled parts and last draws."""
    motion, path = _moved(result)
    again = fw.run(density, result.free_draws[:, -1], motion=motion, path=path, settled=result, keep=keep, seed=seed,
                   executor="here", progress="off", gradients=False, audit=False)
    return clock.seconds / float(again.facts["gradients"].sum() + again.facts["products"].sum())


def interval(ratios: np.ndarray) -> str:
    """Geometric mean and its 95% interval by resampling."""
    logs, rng = np.log(ratios), np.random.default_rng(1)
    means = [rng.choice(logs, len(logs)).mean() for _ in range(2000)]
    low, high = np.exp(np.quantile(means, [0.025, 0.975]))
    return f"{np.exp(logs.mean()):.2f} ({low:.2f} to {high:.2f})"


def row(clock: Clock, name: str, density: fw.Density, keep: int, seeds: int) -> list[str]:
    """All seeds of one target."""
    whole, kept, cost, winners = [], [], [], []
    for seed in range(seeds):
        base = measured(clock, density, keep, seed, motion=fw.Leapfrog(), path=fw.NoUTurn(), rank=0)
        auto = measured(clock, density, keep, seed, motion="auto")
        won = auto["result"].trial["entries"][0]["name"]
        motion, path = _moved(auto["result"])
        rank = 0 if "rank 0" in won else 1 if "rank 1" in won else "auto"
        known = measured(clock, density, keep, seed, motion=motion, path=path, rank=rank)
        whole.append(auto["effective"] / auto["seconds"] / (base["effective"] / base["seconds"]))
        kept.append(auto["effective"] / auto["keeping"] / (base["effective"] / base["keeping"]))
        cost.append(auto["spent"] / known["spent"])
        winners.append(won)
    names = sorted(set(winners), key=winners.count, reverse=True)
    said = ", ".join(f"{winners.count(one)} {one}" for one in names)
    return [name, interval(np.array(whole)), interval(np.array(kept)), interval(np.array(cost)), said]


def _moved(result: fw.Result) -> tuple[object, object]:
    """Motion and path of a run, as plain settings."""
    settings = Settings.from_json(result.settings)
    return settings.motion, settings.path


def main() -> None:
    """Measure and print the table."""
    options = argparse.ArgumentParser(description=__doc__)
    options.add_argument("--quick", action="store_true", help="two seeds: a rough answer")
    options.add_argument("--seeds", type=int, default=10)
    options.add_argument("--only", help="a part of the names of targets")
    given = options.parse_args()
    seeds = 2 if given.quick else given.seeds
    clock, begun, before, rows = Clock(), time.process_time(), busy(), []
    for name, (make, keep) in TARGETS.items():
        if given.only and given.only not in name:
            continue
        rows.append(row(clock, name, make(), keep, seeds))
        print(rows[-1], flush=True)
    seconds = time.process_time() - begun
    print(f"{machine()}\n{seeds} seeds; {seconds:.0f} s of processor time; {before} before, {busy()} after.\n")
    head = ["target", "effective a second, all", "on kept draws", "cost over the winner known", "winners"]
    print(table(head, rows))


if __name__ == "__main__":
    main()

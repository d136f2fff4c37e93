"""What the sampling tests share: ways to move, runs of compiled targets, and comparisons whose power is asserted.

Comparisons are made in natural units: means in standard deviations, standard deviations relative, quantiles as
probabilities. Their errors come from `stat_checks`, never from the package's own judge. `assert_agrees` bounds both
sides: nothing may differ by more than the limit of the family, and the limit must be so near that a bias of the stated
size would be noticed.
"""

from collections.abc import Mapping
from functools import cache

import numpy as np
import stat_checks
import targets

import fellwalk as fw

# The rate at which one test, all its comparisons together, fails for nothing. Some fifty tests: 5e-4 for all files.
FALSE_ALARM = 1e-5
CHAINS = 4

PRODUCT = {"curvature": "product"}
WAYS = {
    "leapfrog, no-u-turn": (fw.Leapfrog(), fw.NoUTurn()),
    "leapfrog, jittered": (fw.Leapfrog(), fw.Jittered(6)),
    "surrogate, no-u-turn": (fw.Lagrangian(), fw.NoUTurn()),
    "surrogate semi-explicit, jittered": (fw.Lagrangian(scheme="semi-explicit"), fw.Jittered(6)),
    "product, no-u-turn": (fw.Lagrangian(**PRODUCT), fw.NoUTurn()),
    "product, no-u-turn by metric": (fw.Lagrangian(**PRODUCT), fw.NoUTurn(turn="metric")),
    "product, jittered": (fw.Lagrangian(**PRODUCT), fw.Jittered(12)),
    "product semi-explicit, no-u-turn": (fw.Lagrangian(**PRODUCT, scheme="semi-explicit"), fw.NoUTurn()),
    "difference, no-u-turn": (fw.Lagrangian(curvature="difference"), fw.NoUTurn()),
}

TARGETS = {
    "mcmc01": lambda: targets.normal_sample("mcmc01"),
    "mcmc06": lambda: targets.normal_sample("mcmc06"),
    "Norris": lambda: targets.regression("Norris", True),
    "Pontius": lambda: targets.regression("Pontius", True),
    "rosenbrock": lambda: targets.rosenbrock(0.5, 5.0, 1.0),
    "student": lambda: targets.student(2, 5.0, 0.5),
    "ring": lambda: targets.ring(2, 3.0, 0.5),
    "schools": lambda: targets.eight_schools(False),
}
# Far from the bulk, or at least not drawn from the answer: settling has to find its way.
STARTS = {
    "mcmc01": [0.0, 0.0],
    "mcmc06": [0.0, 0.0],
    "Norris": [0.0, 0.0, 3.0],
    "Pontius": [0.0, 0.0, 0.0, 0.0],
    "rosenbrock": [-1.0, 3.0],
    "student": [6.0, -2.0],
    "ring": [1.0, 0.0],
    "schools": [0.0, 1.0, *[0.0] * 8],
}


@cache
def target(name: str) -> targets.Target:
    """The compiled target with this name."""
    return TARGETS[name]()


def density(name: str) -> fw.Density:
    """A fresh density over the compiled callbacks of a target."""
    t = target(name)
    return fw.Density(t.density, t.dimension, hessian_product=t.hessian_product)


def draw(name: str, way: str, keep: int, seed: int, acceptance: float = 0.8) -> fw.Result:
    """`CHAINS` chains of `keep` draws of a target in two threads or more, from the starting point of STARTS."""
    motion, path = WAYS[way]
    return fw.run(
        density(name),
        STARTS[name],
        motion=motion,
        path=path,
        keep=keep,
        chains=CHAINS,
        seed=seed,
        acceptance=acceptance,
        executor="threads",
        gradients=False,
        progress="off",
    )


def compare(
    x: np.ndarray, name: str, mean: float | None, sd: float | None, quantiles: Mapping[float, float]
) -> list[stat_checks.Comparison]:
    """Values (chains, draws) of one quantity against its mean and sd (None: not compared) and quantiles."""
    found = []
    if mean is not None:
        y = (x - mean) / sd
        found.append(stat_checks.compare_mean(y, 0.0, what=f"{name} mean, in sds"))
        found.append(stat_checks.compare_sd(y, 0.0, 1.0, f"{name} sd, relative"))
    for probability, quantile in quantiles.items():
        found.append(stat_checks.compare_quantile(x, quantile, probability, f"{name} share below q{probability:g}"))
    return found


def noticed(family: list[stat_checks.Comparison]) -> float:
    """The smallest bias that every comparison of the family would notice with probability 0.977 (two errors)."""
    limit = stat_checks.z_limit(len(family), FALSE_ALARM)
    return max(c.error for c in family) * (limit + 2.0)


def assert_agrees(family: list[stat_checks.Comparison], smallest: float) -> None:
    """Nothing beyond the limit at FALSE_ALARM, and a bias of `smallest` in any comparison would be noticed."""
    stat_checks.assert_all(family, FALSE_ALARM)
    power = noticed(family)
    assert power <= smallest, f"too few effective draws: notices {power:.3g}, not {smallest:.3g}"

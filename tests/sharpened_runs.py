"""Repeated runs of targets with known answers: what sharpened estimates and plain ones miss by, and by what they say.

For the tests and for `benchmarks/sharpened.py`. Targets are run long enough to mix, with settings named in CASES: where
draws do not mix, plain intervals do not cover either. Rosenbrock takes short steps, else chains stand in its long thin
end; the funnel halves its steps where it is narrow; heavy tails (Student t, eight schools, mcmc01) take more draws.
"""

from collections.abc import Callable
from dataclasses import dataclass, field
from typing import Any

import numpy as np
import targets

import fellwalk as fw

LEVELS = (0.05, 0.5, 0.95)
KINDS = ("mean", "sd", *(f"q{level:g}" for level in LEVELS))
Z = 1.96


@dataclass(frozen=True)
class Case:
    """A target, where to start, how many draws of each of four chains to keep, and settings of the run."""

    make: Callable[[], targets.Target]
    start: list[float]
    keep: int
    settings: dict[str, Any] = field(default_factory=dict)


CASES = {
    "Norris": Case(lambda: targets.regression("Norris", True), [0.0, 0.0, 3.0], 2000),
    "mcmc01": Case(lambda: targets.normal_sample("mcmc01"), [0.0, 0.0], 4000, {"acceptance": 0.9}),
    "eight schools": Case(lambda: targets.eight_schools(False), [0.0, 1.0, *[0.0] * 8], 4000, {"acceptance": 0.95}),
    "Pima": Case(lambda: targets.logistic("pima"), [0.0] * 8, 1000),
    "Australian": Case(lambda: targets.logistic("australian"), [0.0] * 15, 1000),
    "Student t5": Case(lambda: targets.student(2, 5.0, 0.5), [1.0, 0.0], 4000, {"acceptance": 0.9}),
    "ring": Case(lambda: targets.ring(2, 3.0, 0.5), [3.0, 0.0], 2000),
    "Rosenbrock": Case(lambda: targets.rosenbrock(0.5, 5.0, 1.0), [1.0, 1.0], 4000, {"acceptance": 0.99}),
    "funnel": Case(
        lambda: targets.funnel(2), [0.0, 0.0], 10_000, {"motion": fw.Leapfrog(halvings=6), "acceptance": 0.9}
    ),
}
# No plain average can be trusted with these: the second moment of a lognormal of log-sd 3 hangs on draws beyond reach.
LEFT_OUT = {("funnel", "x1")}


@dataclass
class Study:
    """Arrays (runs, values, kinds), kinds as in KINDS; `true` is (values, kinds), NaN where nothing is known, and
    `true_error` the error of that knowledge. by: names of the candidates, "none" for plain. in_doubt: was the error of
    the plain estimate said to be without reliance, for means and sds."""

    names: list[str]
    true: np.ndarray
    true_error: np.ndarray
    sharp: np.ndarray
    sharp_error: np.ndarray
    raw: np.ndarray
    raw_error: np.ndarray
    by: np.ndarray
    in_doubt: np.ndarray
    broken: int
    gradients: float

    def reference(self) -> np.ndarray:
        """What estimates are compared with: the known values, or, where these are Monte Carlo results not much better
        than one run, the mean of all sharpened runs."""
        return np.where(self.true_error > 0, self.sharp.mean(axis=0), self.true)

    def covered(self, sharp: bool) -> np.ndarray:
        """How many of the runs have the reference within 1.96 errors, (values, kinds)."""
        value, error = (self.sharp, self.sharp_error) if sharp else (self.raw, self.raw_error)
        # The reference from all runs contains a share of each: its distance to one of them has variance 1 - 1/runs.
        shrink = np.where(self.true_error > 0, np.sqrt(1 - 1 / len(value)), 1.0) if sharp else 1.0
        return (np.abs(value - self.reference()) <= Z * error * shrink).sum(axis=0)

    def offset(self) -> np.ndarray:
        """Distance of the mean of all sharpened runs from known values in errors of both, (values, kinds)."""
        own = self.sharp.std(axis=0, ddof=1) / np.sqrt(len(self.sharp))
        return (self.sharp.mean(axis=0) - self.true) / np.hypot(own, self.true_error)

    def squared(self, sharp: bool) -> np.ndarray:
        """Squared errors, (runs, values, kinds)."""
        return ((self.sharp if sharp else self.raw) - self.reference()) ** 2


def quantities(name: str, target: targets.Target) -> tuple[list[str], Callable[[np.ndarray], np.ndarray]]:
    """Names of the known marginals, and the function that gives their values (..., k) of draws (..., dimension)."""
    chosen = {key: m for key, m in target.marginals.items() if (name, key) not in LEFT_OUT}

    def values(x: np.ndarray) -> np.ndarray:
        return np.stack([m.values(x) for m in chosen.values()], axis=-1)

    return list(chosen), values


def known(target: targets.Target, names: list[str]) -> tuple[np.ndarray, np.ndarray]:
    """What is known of the marginals and its errors, (values, kinds)."""
    true, error = np.full((len(names), len(KINDS)), np.nan), np.zeros((len(names), len(KINDS)))
    for i, key in enumerate(names):
        m = target.marginals[key]
        if m.mean is not None:
            true[i, 0], error[i, 0] = m.mean, m.mean_error
            # The variance of a fifth degree t's square is infinite: no error of the form's sd can be estimated.
            if m.sd is not None and key != "form":
                true[i, 1], error[i, 1] = m.sd, m.sd_error
        for j, level in enumerate(LEVELS, start=2):
            true[i, j], error[i, j] = m.quantiles.get(level, np.nan), m.quantile_error
    return true, error


def draw(name: str, seed: int, keep: int | None = None) -> fw.Result:
    """One run of a case."""
    case = CASES[name]
    target = case.make()
    density = fw.Density(target.density, target.dimension)
    return fw.run(density, case.start, keep=keep or case.keep, chains=4, seed=seed, executor="here", progress="off",
                  **case.settings)


def table(e: Any) -> tuple[np.ndarray, np.ndarray, np.ndarray]:
    """Estimates, errors and names of candidates of a `fellwalk.estimates.Estimates`, each (values, kinds)."""
    at = [e.quantiles[level] for level in LEVELS]
    return (np.column_stack([e.estimate, e.spread, *(q.value for q in at)]),
            np.column_stack([e.error, e.spread_error, *(q.error for q in at)]),
            np.column_stack([e.by, e.spread_by, *(q.by for q in at)]))


def study(name: str, runs: int, seed: int = 0) -> Study:
    """Runs with seeds seed .. seed + runs - 1."""
    target = CASES[name].make()
    names, values = quantities(name, target)
    found, broken, gradients = [], 0, 0.0
    for run in range(seed, seed + runs):
        result = draw(name, run)
        e = result.estimate(values, names, whole=True, quantiles=LEVELS)
        broken += bool(e.checked.alarms)
        gradients += result.spent["gradients"] / runs
        raw = e.raw or e
        doubt = np.zeros((len(names), len(KINDS)), dtype=bool)
        doubt[:, 0], doubt[:, 1] = raw.in_doubt, raw.spread_in_doubt
        found.append((*table(e), *table(raw)[:2], doubt))
    sharp, sharp_error, by, raw, raw_error, doubt = (np.array(part) for part in zip(*found, strict=True))
    return Study(names, *known(target, names), sharp, sharp_error, raw, raw_error, by, doubt, broken, gradients)

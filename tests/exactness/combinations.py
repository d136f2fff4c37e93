"""Every combination the core offers, read from its descriptors and its header, and one run of each from exact draws."""

import ctypes
import re
from collections.abc import Iterable
from dataclasses import dataclass
from functools import cache
from itertools import product

import numpy as np
from scipy import stats
from scipy.special import ndtri

from . import build
from .known import known

STARTS, TRANSITIONS = 20_000, 10
HALVINGS = (0, 3)
RANKS = (0, 1, 2)
# Rate at which all p values of all combinations together raise a false alarm (Bonferroni).
FALSE_ALARM = 1e-3


def _sources() -> str:
    return "\n".join(path.read_text() for path in sorted((build.CSRC / "src").glob("*.c")))


def _descriptors(kind: str) -> dict[str, str]:
    """Name -> text of the core's descriptors of type `kind`; AssertionError when its own list has another length."""
    text = _sources()
    found = re.findall(rf"^const {kind} \w+ = \{{(.*?)^\}};", text, re.S | re.M)
    listed = re.search(rf"static const {kind} \*const \w+\[\] = \{{(.*?)\}}", text).group(1).count("&")
    assert len(found) == listed, f"The core lists {listed} of {kind}, {len(found)} descriptors were found."
    return {re.search(r'\.name = "([^"]+)"', body).group(1): body for body in found}


def _enumerated(kind: str) -> list[int]:
    """The values of an enum of the public header."""
    header = (build.CSRC / "include" / "fellwalk.h").read_text()
    body = re.search(rf"typedef enum {kind} \{{(.*?)\}}", header, re.S).group(1)
    return [int(value) for value in re.findall(r"= (\d+)", body)]


@dataclass(frozen=True)
class Combination:
    """Names and enum values of what is combined, and the target it is tried on."""

    motion: str
    scheme: int
    curvature: int
    path: str
    turn: int
    halvings: int
    rank: int
    target: str

    def __str__(self) -> str:
        motion = f"{self.motion}-scheme{self.scheme}-curvature{self.curvature}"
        return f"{motion}-{self.path}-turn{self.turn}-halvings{self.halvings}-rank{self.rank}-{self.target}"


@cache
def motions() -> list[tuple[str, int, int]]:
    """(motion, scheme, curvature); a motion that uses no products has no choice of the last two."""
    found = []
    for name, body in _descriptors("fw_motion").items():
        curved = ".uses_products = 1" in body
        choices = list(product(_enumerated("fw_scheme"), _enumerated("fw_curvature"))) if curved else [(0, 0)]
        found += [(name, *choice) for choice in choices]
    return found


@cache
def paths() -> list[tuple[str, int]]:
    """(path, turn); only the jittered path has no turn test."""
    names = _descriptors("fw_path")
    return [(name, turn) for name in names for turn in ([0] if name == "jittered" else _enumerated("fw_turn"))]


@cache
def combinations() -> list[Combination]:
    """All of them. Targets take turns so that every motion with every path and turn test meets each target."""
    names = list(known())
    kinds = list(product(motions(), paths(), HALVINGS))
    return [
        Combination(*motion, *path, halvings, rank, names[(i + rank) % len(names)])
        for i, (motion, path, halvings) in enumerate(kinds)
        for rank in RANKS
    ]


# Steps that are too long on purpose: acceptance well below 1 is what makes an error of the weights visible.
STEPS, DOUBLINGS, BOUND = 7, 4, 0.6
STEP = {"student": 0.8, "ring": 0.45, "rosenbrock": 0.2, "edge": 0.2}
BETA = {"student": 0.7, "ring": 0.4, "rosenbrock": 0.3, "edge": 0.7}


def plan(c: Combination, step: float, beta: float, scale: np.ndarray, directions: np.ndarray, lam: np.ndarray):
    """(Plan, what it points to): `directions` (>= rank, d) and `lam` (>= rank,) are cut to the combination's rank."""
    arrays = [np.ascontiguousarray(a, dtype=float) for a in (scale, directions[: c.rank], lam[: c.rank])]
    pointers = [build.pointer(a) for a in arrays]
    numbers = (c.scheme, c.curvature, c.turn, STEPS, DOUBLINGS, c.halvings, c.rank, beta, step, BOUND)
    return build.Plan(c.motion.encode(), c.path.encode(), *numbers, *pointers), arrays


@dataclass(frozen=True)
class Result:
    """What one run said: p values by summary, and facts averaged over transitions."""

    p: dict[str, float]
    acceptance: float
    steps: float
    gradients: float
    failures: float
    moved: float

    @property
    def least(self) -> float:
        """The smallest p value, NaN counted as 0."""
        return min(0.0 if np.isnan(p) else p for p in self.p.values())


def p_values(c: Combination, ends: np.ndarray) -> dict[str, float]:
    """Three tests a summary: Kolmogorov-Smirnov, and mean and mean square of the normal scores (exact law N(0, 1))."""
    found = {}
    for summary in known()[c.target].summaries:
        u = summary.cdf(summary.of(ends))
        scores = ndtri(np.clip(u, 1e-300, 1.0 - 1e-16))
        n = len(scores)
        found[f"{summary.name} KS"] = float(stats.kstest(u, "uniform").pvalue)
        found[f"{summary.name} mean"] = float(2.0 * stats.norm.sf(abs(scores.mean()) * np.sqrt(n)))
        found[f"{summary.name} square"] = float(2.0 * stats.norm.sf(abs((scores**2).mean() - 1.0) * np.sqrt(0.5 * n)))
    return found


@cache
def starts(name: str) -> np.ndarray:
    """Exact draws of a target (STARTS, d)."""
    return known()[name].target.exact_draws(STARTS, np.random.default_rng([1, *name.encode()]))


@cache
def result(c: Combination, mutation: build.Mutation | None = None) -> Result:
    """Ten transitions from each of 20,000 exact draws, the ends against the exact law."""
    it = known()[c.target]
    how, kept = plan(c, STEP[c.target], BETA[c.target], it.scale, it.directions, it.lam)
    ends, totals = np.ascontiguousarray(starts(c.target).copy()), build.Totals()
    functions = build.address(it.c_name), build.address(f"{it.c_name}_product"), build.pointer(it.target.context)
    # A stream of its own for each combination, the same for every mutation.
    number = int.from_bytes(str(c).encode()) % 2**61
    where = number, ends.ctypes.data, ctypes.byref(totals)
    run = build.harness(mutation).run_from_starts
    run(ctypes.byref(how), it.target.dimension, *functions, STARTS, TRANSITIONS, *where)
    del kept
    assert totals.status == 0, f"{c}: the core refused with status {totals.status}"
    assert not totals.settings_moved, f"{c}: step size, beta or base metric are not what was set"
    count = STARTS * TRANSITIONS
    return Result(
        p_values(c, ends),
        totals.acceptance / count,
        totals.steps / count,
        totals.gradients / totals.steps,
        totals.failures / count,
        totals.moved / STARTS,
    )


def limit() -> float:
    """The p value below which one test is a failure: FALSE_ALARM over the tests of all combinations."""
    return FALSE_ALARM / sum(3 * len(known()[c.target].summaries) for c in combinations())


def table(these: Iterable[Combination]) -> str:
    """One line a combination."""
    head = f"{'combination':<92} accept  steps grad/step failed moved  least p"
    lines = [head]
    for c in these:
        r = result(c)
        facts = f"{r.acceptance:6.3f} {r.steps:6.2f} {r.gradients:9.2f} {r.failures:6.3f} {r.moved:5.3f}"
        lines.append(f"{c!s:<92} {facts}  {r.least:.2g}")
    return "\n".join(lines)

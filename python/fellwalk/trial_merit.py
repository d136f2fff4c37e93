"""What the draws of candidates are worth, each measured against the draws of all: the numbers of a trial.

Arrays of draws are (chains, draws, dimension). Nothing here decides anything.
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray
from scipy import special

from fellwalk.autocorrelation import effective_size, potential_scale_reduction, split

__all__ = ["FEWEST", "Worth", "measure", "pool"]

Array = NDArray[np.float64]

FEWEST = 8  # draws a chain, below which nothing is said
_TAIL = 0.05  # share of the target in a tail; more while there are few draws,
_IN_TAIL = 10  # so that a tail holds about so many of each candidate
# The variance of the logarithm of the worth, times the worth. Over 60 pairs of chains each of first-order
# autoregressions worth 12 to 200 draws in 2, 8 and 50 independent coordinates the standard deviation was 0.5 to 1.3,
# 0.3 to 0.8 and 0.1 to 0.3 of what this says; coordinates that depend on each other are like fewer.
_NOISE = 5.0
_POOLED = 1000  # draws of each candidate in the pool


@dataclass(frozen=True)
class Worth:
    """Least effective draws over all coordinates, of centre and tails, and how sure that is.

    effective: draws, the geometric mean of the least eighth of all (at least of one), as the least of many would mostly
    be the unluckiest; error: standard deviation of its logarithm; tail: the share of the pool that counts as a tail;
    worst: the coordinate of the least; what: "centre", "lower tail" or "upper tail"; apart: largest split R-hat, in
    coordinate `apart_in`; shy: the most standard errors by which a tail was visited less than by the others, in
    coordinate `shy_in` (0: not less).
    """

    effective: float
    error: float
    worst: int
    what: str
    apart: float
    apart_in: int
    tail: float
    shy: float = 0.0
    shy_in: int = 0


def pool(candidates: Sequence[Array]) -> Array:
    """The same number of draws of every candidate, sorted in each coordinate: (dimension, draws)."""
    flat = [draws.reshape(-1, draws.shape[-1]) for draws in candidates]
    count = min(_POOLED, *(len(rows) for rows in flat)) if len(flat) > 1 else min(_POOLED, len(flat[0]))
    picked = [rows[np.linspace(0, len(rows) - 1, count).round().astype(int)] for rows in flat]
    return np.sort(np.concatenate(picked).T, axis=-1)


def _scores(draws: Array, pooled: Array) -> Array:
    """(dimension, chains, draws): normal scores of the ranks in the pool."""
    chains, n, d = draws.shape
    found = np.empty((d, chains, n))
    for i in range(d):
        x = draws[..., i]
        below = np.searchsorted(pooled[i], x, "left")
        upto = np.searchsorted(pooled[i], x, "right")
        found[i] = special.ndtri((0.5 * (below + upto) + 0.5) / (pooled.shape[-1] + 1.0))
    return found


def _in_tails(draws: Array, pooled: Array, tail: float) -> Array:
    """(2, dimension, chains, draws): whether draws lie in either tail of the pool, as 0 and 1."""
    last = pooled.shape[-1] - 1
    low, high = pooled[:, round(tail * last)], pooled[:, round((1.0 - tail) * last)]
    moved = np.moveaxis(draws, -1, 0)
    return np.stack([moved <= low[:, None, None], moved >= high[:, None, None]]).astype(float)


def effective(x: Array, variance: Array) -> Array:
    """Effective size of chains, where the variance of all candidates' draws is known besides their own.

    x: (..., chains, n); variance: (...). The time between independent draws is at least what the first lag says,
    measured against that variance, of correlations that fall by the same factor from lag to lag: so chains that creep
    inside a part of the target, or are too short to show their long correlations, do not pass for good.
    """
    chains, n = x.shape[-2:]
    known = np.where(variance > 0.0, variance, 1.0)
    own = np.nan_to_num(effective_size(x), nan=np.inf)
    # half a difference more than was seen, as none seen does not mean that there is none
    jumps = (np.diff(x, axis=-1) ** 2).mean(axis=(-2, -1)) + 0.5 / (chains * (n - 1))
    share = np.clip(0.5 * jumps / known, 1e-9, 1.0)
    least: Array = np.minimum(own, chains * n * share / (2.0 - share))
    return least


def tail_for(candidates: Sequence[Array]) -> float:
    """The share that counts as a tail, for these draws."""
    fewest = min(draws.shape[0] * draws.shape[1] for draws in candidates)
    return float(np.clip(_IN_TAIL / fewest, _TAIL, 0.25))


def measure(draws: Array, pooled: Array, others: Array, tail: float) -> Worth:
    """The worth of one candidate's draws, at least FEWEST a chain, by the ranks of the pool, and how often they lie in
    the tails of the others' pool. The error of that is by what the centre is worth: a tail that was never visited says
    nothing of how often it should have been."""
    chains, n, _ = draws.shape
    series = np.concatenate([_scores(draws, pooled)[None], _in_tails(draws, pooled, tail)])
    of_tail = tail * (1.0 - tail)
    variance = np.stack([np.full(series.shape[1], v) for v in (1.0, of_tail, of_tail)])
    sizes = effective(series, variance)
    which, worst = np.unravel_index(int(np.argmin(sizes)), sizes.shape)
    least = np.argsort(sizes, axis=None)[: (sizes.size + 7) // 8]
    size = float(np.exp(np.log(sizes.ravel()[least]).mean()))
    error = float(np.sqrt(_NOISE / size))
    apart = np.nan_to_num(potential_scale_reduction(split(series[0])), nan=1.0, posinf=1e6)
    shares = _in_tails(draws, others, tail).mean(axis=(-2, -1))
    errors = np.sqrt(of_tail / np.minimum(sizes[0], chains * n) + of_tail / others.shape[-1])
    shy = (tail - shares) / errors
    side, shy_in = np.unravel_index(int(np.argmax(shy)), shy.shape)
    names = ("centre", "lower tail", "upper tail")
    return Worth(size, error, int(worst), names[int(which)], float(apart.max()), int(apart.argmax()), tail,
                 max(0.0, float(shy[side, shy_in])), int(shy_in))

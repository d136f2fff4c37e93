"""How heavy tails are, from draws alone: which averages have a variance, and which have an error that can be known."""

from __future__ import annotations

from collections.abc import Sequence

import numpy as np
from numpy.typing import NDArray

Array = NDArray[np.float64]

# A term is used only where the tail index of its draws, as the extreme value index, is below this: 1/2 is where the
# variance ends to be finite. Share of 400 runs of 4000 independent draws above 0.4 at the largest 5%: Cauchy all,
# Student t with 2 degrees of freedom 84%, with 3 12%, with 4 and 5 none; square of the last 66%; lognormal of log-sd
# 1.5 96%, of 1 3%; cube of a normal 1%, normal, its square, product of two, and exponential none.
HEAVY = 0.4
TAIL_SHARE, TAIL_LEAST, TAIL_MOST = 0.05, 20, 500
FEWEST = 40  # draws: of fewer nothing is said

# The error of an average is in doubt where the tail index of what is averaged is above this by more than its own error:
# from 1/4 on there is no fourth moment, and a variance is then known badly and found too small by most samples.
# Errors grow with the index, by three quarters at most; this, and how often they cover then, was measured with
# 400 runs of each target in benchmarks/README.md. In doubt of 400 sets of 16,000 independent draws, mean and sd: normal
# none and none, exponential none and 97% (squares of an exponential look like a power law this far out), Student t with
# 5 degrees of freedom 4% and all.
DOUBTFUL, WIDER, WIDEST = 0.2, 2.5, 0.25


def count_in_tail(draws: int) -> int:
    """How many of so many draws are looked at."""
    return min(int(np.clip(TAIL_SHARE * draws, TAIL_LEAST, TAIL_MOST)), draws - 1)


def excess(values: Array, powers: Sequence[float] = (1.0,)) -> Array:
    """By how much the tail index of powers of |values| (..., N) is above doubt, (powers, ...); positive is in doubt."""
    draws = values.shape[-1]
    if draws < FEWEST:
        return np.full((len(powers), *values.shape[:-1]), -np.inf)
    return tail_indices(values, powers) - (DOUBTFUL + count_in_tail(draws) ** -0.5)


def widening(above: Array) -> Array:
    """By what the error of an average grows where the tail index of what is averaged is above doubt by so much."""
    return 1 + WIDER * np.clip(above, 0.0, WIDEST)


def tail_index(values: Array) -> Array:
    """Extreme value index of |values| along the last axis: 1 / (tail exponent) where tails are powers, else about 0.

    values: (..., N), N >= 40. Returns (...); -inf for a constant or an event. Moment estimator of Dekkers, Einmahl & de
    Haan (1989), Annals of Statistics 17 (from memory), over the largest 5% of the draws, at most 500.
    """
    return tail_indices(values, (1.0,))[0]


def tail_indices(values: Array, powers: Sequence[float]) -> Array:
    """`tail_index` of several powers of |values|, (powers, ...), for the price of one."""
    size = np.abs(values)
    count = size.shape[-1]
    k = count_in_tail(count)
    top = np.partition(size, count - k - 1, axis=-1)[..., count - k - 1 :]
    least = top[..., :1]
    with np.errstate(all="ignore"):
        logs = np.log(top[..., 1:] / least)
        first, second = logs.mean(axis=-1), (logs**2).mean(axis=-1)
        curved = 1 - 0.5 / (1 - first**2 / second)
    # Half of the largest draws are equal: bounded, an event for instance.
    bounded = 2 * (top == top.max(axis=-1, keepdims=True)).sum(axis=-1) > k
    indices = [power * first + curved for power in powers]
    # A threshold of zero: all weight is on few draws, which is as heavy as can be.
    return np.array([np.where(bounded, -np.inf, np.where(np.isfinite(i), i, np.inf)) for i in indices])

"""Terms with mean zero, made from draws and the gradients at them: Stein's identity in coordinates.

For a density that vanishes fast enough far out, with gradient g of its logarithm, and a polynomial P of the draws:
E[ lap P + grad P . g ] = 0 (Assaraf & Caffarel 1999, Physical Review Letters 83; Mira, Solgi & Imparato 2013,
Statistics and Computing 23; both from memory). Degree 1 gives the coordinates of g, degree 2 the products x_i g_j + x_j
g_i, plus 2 where i = j. This file makes such terms and finds those whose variance the draws do not vouch for.
"""

from __future__ import annotations

from collections.abc import Sequence
from itertools import combinations_with_replacement
from math import comb

import numpy as np
from numpy.typing import NDArray

Array = NDArray[np.float64]

# Terms are taken in coordinates that have been made uncorrelated when the correlation matrix is worse conditioned than
# this: a term of degree 2 squares the condition number. Below it coordinates stay themselves, so that one with heavy
# tails does not spoil the terms of the others.
CORRELATED = 100.0

# A term is used only where the tail index of its draws, as the extreme value index, is below this: 1/2 is where the
# variance ends to be finite. Share of 400 runs of 4000 independent draws above 0.4 at the largest 5%: Cauchy all,
# Student t with 2 degrees of freedom 84%, with 3 12%, with 4 and 5 none; square of the last 66%; lognormal of log-sd
# 1.5 96%, of 1 3%; cube of a normal 1%, normal, its square, product of two, and exponential none.
HEAVY = 0.4
TAIL_SHARE, TAIL_LEAST, TAIL_MOST = 0.05, 20, 500


def tail_index(values: Array) -> Array:
    """Extreme value index of |values| along the last axis: 1 / (tail exponent) where tails are powers, else about 0.

    values: (..., N), N >= 40. Returns (...); -inf for a constant or an event. Moment estimator of Dekkers, Einmahl & de
    Haan (1989), Annals of Statistics 17 (from memory), over the largest 5% of the draws, at most 500.
    """
    size = np.abs(values)
    count = size.shape[-1]
    k = min(int(np.clip(TAIL_SHARE * count, TAIL_LEAST, TAIL_MOST)), count - 1)
    top = np.partition(size, count - k - 1, axis=-1)[..., count - k - 1 :]
    least = top[..., :1]
    with np.errstate(all="ignore"):
        logs = np.log(top[..., 1:] / least)
        first, second = logs.mean(axis=-1), (logs**2).mean(axis=-1)
        index = first + 1 - 0.5 / (1 - first**2 / second)
    # Half of the largest draws are equal: bounded, an event for instance.
    bounded = 2 * (top == top.max(axis=-1, keepdims=True)).sum(axis=-1) > k
    # A threshold of zero: all weight is on few draws, which is as heavy as can be.
    return np.where(bounded, -np.inf, np.where(np.isfinite(index), index, np.inf))


class Frame:
    """Draws and gradients in coordinates of mean 0 and sd 1, uncorrelated where that is needed.

    x, g: (N, dimension) draws and gradients. y, gy: (coordinates, N), the gradient with respect to y in gy. kept: which
    of the dimension's coordinates vary and so are there; centre, scale: (coordinates,). mixed: are they combinations?
    """

    def __init__(self, x: Array, g: Array, *, mix: bool) -> None:
        centre = x[0] + np.mean(x - x[0], axis=0)
        scale = np.std(x - centre, axis=0)
        self.kept = np.flatnonzero((scale > 0) & np.isfinite(scale) & np.isfinite(g).all(axis=0))
        self.centre, self.scale = centre[self.kept], scale[self.kept]
        self.y = np.ascontiguousarray(((x[:, self.kept] - self.centre) / self.scale).T)
        self.gy = np.ascontiguousarray((g[:, self.kept] * self.scale).T)
        self.mixed = False
        if mix and len(self.kept) > 1:
            self._uncorrelate()

    def _uncorrelate(self) -> None:
        values, vectors = np.linalg.eigh(self.y @ self.y.T / self.y.shape[1])
        if not values[0] > 1e-12 * values[-1] or values[-1] <= CORRELATED * values[0]:
            return
        root = np.sqrt(values)
        self.y = (vectors / root).T @ self.y
        self.gy = (vectors * root).T @ self.gy
        self.mixed = True

    def __len__(self) -> int:
        return len(self.kept)

    def terms(self, degree: int, linear: Sequence[int], paired: Sequence[int]) -> tuple[Array, list[int]]:
        """Terms up to a degree (p, N), and where those of degree 1, 2, ... end.

        linear: coordinates with terms of degree 1; paired: those with terms of higher degree, over all their pairs (and
        triples).
        """
        kinds = [len(linear), *(comb(len(paired) + k - 1, k) for k in range(2, degree + 1))]
        ends = np.cumsum(kinds).tolist()
        rows = np.empty((ends[-1], self.y.shape[1]))
        rows[: ends[0]] = self.gy[linear]
        spare = np.empty(self.y.shape[1])
        for k in range(2, degree + 1):
            part = rows[ends[k - 2] : ends[k - 1]]
            for row, chosen in zip(part, combinations_with_replacement(paired, k), strict=True):
                self._pair(*chosen, row, spare) if k == 2 else self._of(chosen, row)
        return rows, ends

    def _pair(self, i: int, j: int, row: Array, spare: Array) -> None:
        np.multiply(self.y[i], self.gy[j], out=row)
        if i == j:
            row += 1
        else:
            row += np.multiply(self.y[j], self.gy[i], out=spare)

    def _of(self, chosen: tuple[int, ...], row: Array) -> None:
        """The term of any monomial, the product of the chosen coordinates."""
        row[:] = 0
        for i in set(chosen):
            a = chosen.count(i)
            rest = np.prod([self.y[j] for j in chosen if j != i], axis=0)
            row += rest * a * self.y[i] ** (a - 1) * self.gy[i]
            if a > 1:
                row += rest * (a * (a - 1)) * self.y[i] ** (a - 2)

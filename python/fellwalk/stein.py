"""Terms with mean zero, made from draws and the gradients at them: Stein's identity in coordinates.

For a density that vanishes fast enough far out, with gradient g of its logarithm, and a polynomial P of the draws:
E[ lap P + grad P . g ] = 0 (Assaraf & Caffarel 1999, Physical Review Letters 83; Mira, Solgi & Imparato 2013,
Statistics and Computing 23; both from memory). Degree 1 gives the coordinates of g, degree 2 the products x_i g_j + x_j
g_i, plus 2 where i = j.
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


class Frame:
    """Draws and gradients in coordinates of mean 0 and sd 1.

    x, g: (N, dimension) draws and gradients. y, gy: (coordinates, N), the gradient with respect to y in gy. kept: which
    of the dimension's coordinates vary and so are there. mixed: are the coordinates combinations of these?
    """

    def __init__(self, x: Array, g: Array) -> None:
        y, gy = np.ascontiguousarray(x.T), np.ascontiguousarray(g.T)
        y = y - y[:, :1]
        y -= y.mean(axis=1, keepdims=True)
        scale = np.sqrt(np.einsum("in,in->i", y, y) / len(x))
        # Squares of small or large numbers leave the range of doubles; the slower way does not need them.
        odd = ~((scale > 1e-140) & (scale < 1e140))
        largest = np.abs(y[odd]).max(axis=1, initial=0, keepdims=True)
        scale[odd] = largest[:, 0] * (y[odd] / np.where(largest > 0, largest, 1)).std(axis=1)
        varying = (scale > 0) & np.isfinite(scale) & np.isfinite(gy).all(axis=1)
        self.kept = np.flatnonzero(varying)
        if not varying.all():
            y, gy, scale = y[varying], gy[varying], scale[varying]
        y /= scale[:, None]
        self.y, self.gy, self.mixed = y, gy * scale[:, None], False

    def unmix(self) -> None:
        """Make the coordinates uncorrelated, where that is needed."""
        if len(self.kept) < 2:
            return
        values, vectors = np.linalg.eigh(self.y @ self.y.T / self.y.shape[1])
        if not values[0] > 1e-12 * values[-1] or values[-1] <= CORRELATED * values[0]:
            return
        root = np.sqrt(values)
        self.y = (vectors / root).T @ self.y
        self.gy = (vectors * root).T @ self.gy
        self.mixed = True

    def __len__(self) -> int:
        return len(self.kept)


def count_terms(degree: int, linear: int, paired: int) -> list[int]:
    """Where the terms of degree 1, 2, ... end among those of `terms_at`."""
    return np.cumsum([linear, *(comb(paired + k - 1, k) for k in range(2, degree + 1))]).tolist()


def terms_at(y: Array, gy: Array, degree: int, linear: Sequence[int], paired: Sequence[int]) -> Array:
    """Terms up to a degree (p, N) at points y with gradients gy, both (coordinates, N).

    linear: coordinates with terms of degree 1; paired: those with terms of higher degree, over all their pairs (and
    triples).
    """
    ends = count_terms(degree, len(linear), len(paired))
    rows = np.empty((ends[-1], y.shape[1]))
    rows[: ends[0]] = gy[linear]
    chosen, slopes = y[paired], gy[paired]
    at = ends[0]
    for i in range(len(paired) if degree > 1 else 0):
        part = rows[at : at + len(paired) - i]
        np.multiply(chosen[i], slopes[i:], out=part)
        part += slopes[i] * chosen[i:]
        # y^2 / 2 stands for a square.
        part[0] *= 0.5
        part[0] += 1
        at += len(part)
    for k in range(3, degree + 1):
        for row, monomial in zip(rows[ends[k - 2] :], combinations_with_replacement(range(len(paired)), k),
                                 strict=False):
            _term_of(chosen, slopes, monomial, row)
    return rows


def _term_of(y: Array, gy: Array, monomial: tuple[int, ...], row: Array) -> None:
    """The term of any monomial, the product of the coordinates named."""
    row[:] = 0
    for i in set(monomial):
        a = monomial.count(i)
        rest = np.prod([y[j] for j in monomial if j != i], axis=0)
        row += rest * a * y[i] ** (a - 1) * gy[i]
        if a > 1:
            row += rest * (a * (a - 1)) * y[i] ** (a - 2)

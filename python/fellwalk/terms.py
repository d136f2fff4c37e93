"""Terms of mean zero arranged for fitting: folds of draws, their sums, and coefficients by ridge regression."""

from __future__ import annotations

from collections.abc import Sequence
from itertools import pairwise

import numpy as np
from numpy.typing import NDArray
from scipy import linalg

from fellwalk.stein import HEAVY, tail_index

Array = NDArray[np.float64]

FOLDS = 8
BATCHES = 200
# Penalties, as a share of the number of draws, on terms of variance one. The first only keeps the factorisation alive
# where terms repeat each other.
PENALTIES = (1e-12, 1e-2, 1.0)
# Coefficients are fitted on every k-th draw, k as large as leaves so many draws for each term, and so many in all: what
# that adds to the variance, about one part in so many, is less than the time it saves.
DRAWS_FITTED, LEAST_FITTED = 20, 4000
TAILS_SEEN = 5000  # draws on which tails and variances of terms are looked at


class Layout:
    """How a row of chains * n draws is cut: chains into segments, these into folds (for fitting) and batches (for
    errors).

    folds: slices of the row, about FOLDS; segments lie in one chain, and a fold is one segment, or where there are many
    chains several of them. batches in one segment are equally long, about BATCHES in all.
    """

    def __init__(self, chains: int, n: int) -> None:
        self.chains, self.n = chains, n
        pieces = 1 if chains >= FOLDS else max(2, -(-FOLDS // chains))
        self.segment = n // pieces
        self.pieces = pieces
        starts = np.arange(chains)[:, None] * n + np.arange(pieces) * self.segment + (n - pieces * self.segment)
        starts[:, 0] = np.arange(chains) * n  # the first piece of a chain takes what is left over
        edges = [*starts.reshape(-1).tolist(), chains * n]
        groups = np.array_split(np.arange(chains * pieces), min(FOLDS, chains)) if pieces == 1 else None
        if groups is not None:
            edges = [*(edges[group[0]] for group in groups), chains * n]
        self.folds = [slice(a, b) for a, b in pairwise(edges)]
        self.length = max(1, chains * pieces * self.segment // BATCHES)
        each = self.segment // self.length
        self.count = chains * pieces * each
        sizes = [len(group) * each for group in groups] if groups is not None else [each] * len(self.folds)
        ends = np.cumsum([0, *sizes]).tolist()
        self.batches = [slice(a, b) for a, b in pairwise(ends)]

    def means(self, rows: Array) -> Array:
        """Batch means (rows, batches) of rows (rows, chains * n); batches of fold k are those at `batches[k]`."""
        count = len(rows)
        shaped = rows.reshape(count, self.chains, self.n)[:, :, self.n - self.pieces * self.segment :]
        shaped = shaped.reshape(count, self.chains * self.pieces, self.segment)
        each = self.segment // self.length
        kept = shaped[:, :, self.segment - each * self.length :].reshape(count, self.count, self.length)
        return kept.mean(axis=2)


class Terms:
    """Terms in the rows of one array (p, N), with sums over each fold of those that are used, at variance one.

    ends: where the terms of degree 1, 2, ... end in the rows. sizes: how many of each degree and below are used. heavy:
    use also terms with heavy tails; dropped: are there any, used or not.
    """

    def __init__(self, rows: Array, ends: Sequence[int], layout: Layout, *, heavy: bool = False) -> None:
        self.rows, self.ends, self.layout, self.heavy = rows, list(ends), layout, heavy
        size = rows.shape[1]
        thinned = rows[:, :: max(1, size // TAILS_SEEN)]
        spread = thinned.std(axis=1)
        sound = np.isfinite(spread) & (spread > 1e-10 * np.abs(thinned).max(axis=1, initial=0))
        light = tail_index(thinned) < HEAVY
        self.dropped = bool((sound & ~light).any())
        self.used = np.flatnonzero(sound & (light | heavy))
        self.scale = 1 / spread[self.used]
        self.sizes = [int(np.searchsorted(self.used, end)) for end in ends]
        self.batches = layout.means(rows)[self.used] * self.scale[:, None]
        step = max(1, size // max(DRAWS_FITTED * len(self.used), LEAST_FITTED))
        self.thin = [slice(f.start, f.stop, step) for f in layout.folds]
        self.parts = [rows[self.used, f] * self.scale[:, None] for f in self.thin]
        self.counts = np.array([part.shape[1] for part in self.parts])
        self.sums = np.array([part.sum(axis=1) for part in self.parts])
        self.grams = np.array([part @ part.T for part in self.parts])

    def applied(self, coefficients: Array, fold: slice) -> Array:
        """The terms of a fold times coefficients (p, q) of the first p used ones, (q, draws of the fold)."""
        used = self.used[: len(coefficients)]
        last = int(used[-1]) + 1
        whole = np.zeros((coefficients.shape[1], last))
        whole[:, used] = (coefficients * self.scale[: len(used), None]).T
        return whole @ self.rows[:last, fold]

    def fit(self, values: Array, level: int, serves: Sequence[int]) -> Array:
        """Coefficients (folds served, p, q) for values (q, N) with terms up to a degree: each from all folds but its
        own, and with the one penalty that leaves the least variance on the folds held out."""
        p = self.sizes[level - 1]
        parts = [np.ascontiguousarray(values[:, f]) for f in self.thin]
        products = np.array([mine[:p] @ part.T for mine, part in zip(self.parts, parts, strict=True)])
        totals = np.array([part.sum(axis=1) for part in parts])
        grams, sums = self.grams[:, :p, :p], self.sums[:, :p]
        whole = grams.sum(axis=0), sums.sum(axis=0), products.sum(axis=0), totals.sum(axis=0)
        found = np.empty((len(PENALTIES), len(serves), p, len(values)))
        # Less a part that is the same for all penalties.
        left = np.zeros((len(PENALTIES), len(values)))
        for at, k in enumerate(serves):
            count, own = self.counts.sum() - self.counts[k], self.counts[k]
            s, t = whole[1] - sums[k], whole[3] - totals[k]
            gram = whole[0] - grams[k] - np.outer(s, s) / count
            product = whole[2] - products[k] - np.outer(s, t) / count
            own_gram = grams[k] - np.outer(sums[k], sums[k]) / own
            own_product = products[k] - np.outer(sums[k], totals[k]) / own
            for which, penalty in enumerate(PENALTIES):
                b = found[which, at] = _solve(gram, penalty * count, product)
                left[which] += np.einsum("pq,pq->q", b, own_gram @ b - 2 * own_product)
        each = np.arange(len(values))
        return np.moveaxis(found[np.argmin(left, axis=0), :, :, each], 0, -1)


def _solve(gram: Array, penalty: float, product: Array) -> Array:
    ridged = gram.copy()
    ridged.flat[:: len(gram) + 1] += penalty
    try:
        factor = linalg.cho_factor(ridged, overwrite_a=True, check_finite=False)
        return linalg.cho_solve(factor, product, check_finite=False)
    except linalg.LinAlgError:
        return np.zeros_like(product)  # leaves the value as it is

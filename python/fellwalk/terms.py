"""Terms of mean zero arranged for fitting: blocks and folds of draws, and coefficients by ridge regression."""

from __future__ import annotations

from collections.abc import Sequence
from itertools import pairwise

import numpy as np
from numpy.typing import NDArray
from scipy.linalg import lapack

from fellwalk.stein import count_terms, terms_at
from fellwalk.tails import HEAVY, tail_index

Array = NDArray[np.float64]

FOLDS = 8
BATCHES = 200
# Terms and values are averaged over blocks of successive draws, at least so many blocks where there are draws enough,
# and so many in each chain. The mean and its error are those of the draws; a fit to blocks is a fit to what counts for
# the mean, correlations included, and costs less by the length of a block.
BLOCKS, BLOCKS_A_CHAIN = 3000, 100
AT_ONCE = 768  # blocks, so that their terms stay in the cache
# Penalties, as a share of the number of blocks, on terms of variance one. The first only keeps the factorisation alive
# where terms repeat each other.
PENALTIES = (1e-12, 1e-2, 1.0)


class Layout:
    """How chains of n draws are cut: chains into segments, these into blocks, a number of blocks into batches.

    length: draws in a block. count: blocks in all, chain after chain in time. folds: slices of the blocks, about FOLDS,
    for fitting: a segment, or where there are many chains several chains. batches: for each fold its slice of the batch
    means, about BATCHES in all, for errors. The first draws of a chain that fill no block (fewer than one block for
    each segment) are left out.
    """

    def __init__(self, chains: int, n: int) -> None:
        self.chains, self.n = chains, n
        self.pieces = min(1 if chains >= FOLDS else max(2, -(-FOLDS // chains)), n)
        self.length = max(1, min(chains * n // BLOCKS, n // BLOCKS_A_CHAIN))
        self.segment = n // (self.pieces * self.length)  # blocks
        self.count = chains * self.pieces * self.segment
        self.skipped = n - self.pieces * self.segment * self.length
        segments = np.arange(chains * self.pieces)
        groups = np.array_split(segments, min(FOLDS, chains) if self.pieces == 1 else len(segments))
        self.batch = max(1, self.count // BATCHES)
        self.each = self.segment // self.batch
        edges = [0, *(int(group[-1]) + 1 for group in groups)]
        self.folds = [slice(a * self.segment, b * self.segment) for a, b in pairwise(edges)]
        self.batches = [slice(a * self.each, b * self.each) for a, b in pairwise(edges)]

    def _shaped(self, rows: Array) -> Array:
        kept = rows.reshape(len(rows), self.chains, self.n)[:, :, self.skipped :]
        return kept.reshape(len(rows), self.chains, -1, self.length)

    def columns(self, rows: Array) -> Array:
        """(rows, length, count) of rows (rows, chains * n): [:, l] holds the draw number l of each block."""
        moved = np.moveaxis(self._shaped(rows), 3, 1)
        return np.ascontiguousarray(moved).reshape(len(rows), self.length, self.count)

    def first(self, rows: Array, which: NDArray[np.int64]) -> Array:
        """The first draw of each block for some of the rows, (which, count)."""
        return self._shaped(rows)[..., 0][which].reshape(len(which), self.count)

    def blocks(self, rows: Array) -> Array:
        """Block means (rows, count) of rows (rows, chains * n)."""
        return (self._shaped(rows) @ np.full(self.length, 1 / self.length)).reshape(len(rows), self.count)

    def means(self, blocks: Array) -> Array:
        """Batch means (rows, batches) of block means (rows, count); batches of fold k are those at `batches[k]`."""
        count = len(blocks)
        shaped = blocks.reshape(count, -1, self.segment)[:, :, self.segment - self.each * self.batch :]
        return shaped.reshape(count, -1, self.batch).mean(axis=2)


class Terms:
    """Block means (p, count) of terms, at variance one, with their sums over each fold.

    y, gy: (coordinates, length, count) of `Layout.columns`; degree, linear and paired as for `fellwalk.stein.terms_at`.
    light: which of the terms have a variance to speak of; dropped: are there any that have none.
    """

    def __init__(
        self, y: Array, gy: Array, degree: int, linear: Sequence[int], paired: Sequence[int], layout: Layout
    ) -> None:
        self.layout = layout
        ends = count_terms(degree, len(linear), len(paired))
        self.sample, blocks = np.empty((2, ends[-1], layout.count))
        for start in range(0, layout.count, AT_ONCE):
            part = slice(start, start + AT_ONCE)
            self.sample[:, part] = terms_at(y[:, 0, part], gy[:, 0, part], degree, linear, paired)
            total = self.sample[:, part].copy()
            for k in range(1, layout.length):
                total += terms_at(y[:, k, part], gy[:, k, part], degree, linear, paired)
            np.divide(total, layout.length, out=blocks[:, part])
        spread = np.sqrt(np.maximum(np.einsum("pn,pn->p", blocks, blocks) / layout.count - blocks.mean(axis=1) ** 2, 0))
        sound = np.isfinite(spread) & (spread > 1e-7 * np.abs(blocks).max(axis=1, initial=0))
        self.sizes = [int(sound[:end].sum()) for end in ends]
        if not sound.all():
            blocks, spread, self.sample = blocks[sound], spread[sound], self.sample[sound]
        self.scale = 1 / spread
        blocks *= self.scale[:, None]
        self.blocks = blocks
        self.light = tail_index(self.sample) < HEAVY
        self.dropped = bool((~self.light).any())
        self.batches = layout.means(blocks)
        self.counts = np.array([f.stop - f.start for f in layout.folds])
        self.sums = np.array([blocks[:, f].sum(axis=1) for f in layout.folds])
        self.grams = np.array([blocks[:, f] @ blocks[:, f].T for f in layout.folds])

    def chosen(self, level: int, heavy: bool) -> NDArray[np.int64]:
        """The terms up to a degree, with those that have heavy tails or without."""
        size = self.sizes[level - 1]
        return np.arange(size) if heavy else np.flatnonzero(self.light[:size])

    def products(self, values: Array) -> tuple[Array, Array]:
        """Sums over each fold of terms times block means of values (q, count), (folds, p, q), and of values."""
        folds = self.layout.folds
        return (np.array([self.blocks[:, f] @ values[:, f].T for f in folds]),
                np.array([values[:, f].sum(axis=1) for f in folds]))

    def fit(self, sums: tuple[Array, Array], chosen: NDArray[np.int64], serves: Sequence[int]) -> Array:
        """Coefficients (folds served, p, q) for values, of which `products` are given, with the chosen terms; p is one
        more than the last of these. Each from all folds but its own; with the one penalty that leaves the least
        variance on held-out folds, every other one of them."""
        top, q = int(chosen[-1]) + 1, sums[0].shape[2]
        at = slice(0, top) if len(chosen) == top else chosen
        grams = self.grams[:, at, at] if isinstance(at, slice) else self.grams[:, at[:, None], at]
        parts = _Parts(grams, self.sums[:, at], sums[0][:, at], sums[1], self.counts)
        found = {k: np.empty((len(PENALTIES), len(chosen), q)) for k in serves[::2]}
        # Less a part that is the same for all penalties.
        left = np.zeros((len(PENALTIES), q))
        for k, b in found.items():
            count, gram, product = parts.without(k)
            own_gram, own_product = parts.own(k)
            for which, penalty in enumerate(PENALTIES):
                b[which] = _solve(gram, penalty * count, product)
                left[which] += np.einsum("pq,pq->q", b[which], own_gram @ b[which] - 2 * own_product)
        best = np.argmin(left, axis=0)
        coefficients = np.zeros((len(serves), top, q))
        for b, k in zip(coefficients, serves, strict=True):
            if k in found:
                b[at] = found[k][best, :, np.arange(q)].T
                continue
            solved = np.empty((len(chosen), q))
            count, gram, product = parts.without(k)
            for one in np.unique(best):
                mine = np.flatnonzero(best == one)
                solved[:, mine] = _solve(gram, PENALTIES[one] * count, product[:, mine])
            b[at] = solved
        return coefficients


class _Parts:
    """Centred sums over a fold, and over all folds but one."""

    def __init__(self, grams: Array, sums: Array, products: Array, totals: Array, counts: NDArray[np.int64]) -> None:
        self.each = (counts, grams, sums, products, totals)
        self.whole = tuple(part.sum(axis=0) for part in self.each)

    def own(self, k: int) -> tuple[Array, Array]:
        count, gram, sums, product, total = (part[k] for part in self.each)
        return gram - np.outer(sums, sums) / count, product - np.outer(sums, total) / count

    def without(self, k: int) -> tuple[int, Array, Array]:
        count, gram, sums, product, total = (all_of - part[k] for all_of, part in
                                             zip(self.whole, self.each, strict=True))
        return count, gram - np.outer(sums, sums) / count, product - np.outer(sums, total) / count


def _solve(gram: Array, penalty: float, product: Array) -> Array:
    ridged = gram.copy()
    ridged[np.diag_indices(len(gram))] += penalty
    # The transpose of a symmetric matrix, in the order that LAPACK works in.
    _, solved, trouble = lapack.dposv(ridged.T, product, overwrite_a=True)
    return solved if trouble == 0 else np.zeros_like(product)  # leaves the value as it is

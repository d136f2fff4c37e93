"""Sharper means from gradients already paid for: terms of known mean zero are fitted and taken off.

A value f of the draws is replaced by f - b . h, where the terms h (`fellwalk.stein`) have mean zero, so the mean stays
and the variance may fall a thousandfold. The coefficients b come by ridge regression from other blocks of draws than
those they are applied to, so that the series that is left has an honest error; its autocorrelation is judged by the
rules that raw draws are judged by. Of nothing, linear, quadratic and cubic the least held-out error wins. (Principle of
zero variance: Assaraf & Caffarel 1999; Mira, Solgi & Imparato 2013; with penalties South, Oates, Mira & Drovandi; all
from memory.)
"""

from __future__ import annotations

from collections.abc import Iterator, Sequence
from dataclasses import dataclass
from functools import cached_property
from itertools import pairwise

import numpy as np
from numpy.typing import NDArray
from scipy import linalg, special

from fellwalk import autocorrelation as ac
from fellwalk.stein import HEAVY, Frame, tail_index

Array = NDArray[np.float64]

CANDIDATES = ("none", "linear", "quadratic", "cubic")

# All pairs of coordinates up to this dimension (230 terms with the linear ones), all triples up to the second (34).
ALL_PAIRS, ALL_TRIPLES = 20, 4
# Beyond, so many coordinates get linear terms and so many of these pairs: 228 terms.
MOST_LINEAR, MOST_PAIRED = 150, 12
# A candidate needs so many draws for each of its terms; with fewer the fit is noise and its cost is not worth paying.
DRAWS_PER_TERM = 8
FOLDS = 8
BATCHES = 100
FALSE_ALARM = 0.01
TAIL_GROWTH = 3.0
# Penalties, as a share of the number of draws, on terms of variance one. The first only keeps the factorisation alive
# where terms repeat each other.
PENALTIES = (1e-12, 1e-3, 1e-2, 1e-1, 1.0)
# A richer candidate must have an error smaller than that of a poorer one by this factor: the least of several estimated
# errors is too small by chance, and an error of 400 effective draws is itself known to a few percent.
WORTHWHILE = 0.9
FEWEST = 40  # draws of all chains: with fewer nothing is fitted


@dataclass(frozen=True, eq=False)
class Sharpened:
    """Means of several values of the draws, arrays (values,).

    mean, error: of the candidate that won; by: its number in CANDIDATES, 0 for the plain mean. raw, raw_error: the
    plain mean and its error. correction, correction_error: what was taken off on average, and the error of that; its
    expectation is zero if the draws come from the density.
    """

    mean: Array
    error: Array
    by: NDArray[np.int64]
    raw: Array
    raw_error: Array
    correction: Array
    correction_error: Array


class _Design:
    """Terms (p, N), standardised, with their sums over each fold; the first of them are the poorer candidates' own.

    heavy: take also the terms with heavy tails; dropped: was there any, taken or not.
    """

    def __init__(self, blocks: Sequence[Array], folds: Sequence[slice], *, heavy: bool = False) -> None:
        rows: list[Array] = []
        self.sizes: list[int] = []
        self.blocks, self.heavy, self.dropped = blocks, heavy, False
        for block in blocks:
            spread = block.std(axis=1)
            sound = np.isfinite(spread) & (spread > 1e-10 * np.abs(block).max(axis=1, initial=0))
            light = tail_index(block) < HEAVY
            self.dropped |= bool((sound & ~light).any())
            sound &= light | heavy
            rows.append(block[sound] / spread[sound, None])
            self.sizes.append(sum(len(r) for r in rows))
        self.terms = np.concatenate(rows)
        self.folds = folds
        self.counts = np.array([f.stop - f.start for f in folds])
        self.sums = np.array([self.terms[:, f].sum(axis=1) for f in folds])
        self.grams = np.array([self.terms[:, f] @ self.terms[:, f].T for f in folds])

    def fit(self, values: Array, p: int, serves: Sequence[int]) -> tuple[Array, Array]:
        """Coefficients (folds served, p, q) of the first p terms, each from all folds but its own, with the penalty
        that leaves the least variance on held-out folds; and that variance (q,)."""
        terms = self.terms[:p]
        products = np.array([terms[:, f] @ values[:, f].T for f in self.folds])
        totals = np.array([values[:, f].sum(axis=1) for f in self.folds])
        squares = np.array([(values[:, f] ** 2).sum(axis=1) for f in self.folds])
        grams, sums = self.grams[:, :p, :p], self.sums[:, :p]
        whole = grams.sum(axis=0), sums.sum(axis=0), products.sum(axis=0), totals.sum(axis=0)
        found = np.empty((len(PENALTIES), len(serves), p, len(values)))
        left = np.zeros((len(PENALTIES), len(values)))
        for at, k in enumerate(serves):
            count = self.counts.sum() - self.counts[k]
            s, t = whole[1] - sums[k], whole[3] - totals[k]
            gram = whole[0] - grams[k] - np.outer(s, s) / count
            product = whole[2] - products[k] - np.outer(s, t) / count
            own_gram = grams[k] - np.outer(sums[k], sums[k]) / self.counts[k]
            own_product = products[k] - np.outer(sums[k], totals[k]) / self.counts[k]
            own_square = squares[k] - totals[k] ** 2 / self.counts[k]
            for which, penalty in enumerate(PENALTIES):
                b = _solve(gram, penalty * count, product)
                found[which, at] = b
                left[which] += own_square - 2 * (b * own_product).sum(axis=0) + (b * (own_gram @ b)).sum(axis=0)
        best = np.argmin(left, axis=0)
        each = np.arange(len(values))
        return np.moveaxis(found[best, :, :, each], 0, -1), left[best, each]


def _solve(gram: Array, penalty: float, product: Array) -> Array:
    ridged = gram.copy()
    ridged.flat[:: len(gram) + 1] += penalty
    try:
        factor = linalg.cho_factor(ridged, overwrite_a=True, check_finite=False)
        return linalg.cho_solve(factor, product, check_finite=False)
    except linalg.LinAlgError:
        return np.zeros_like(product)  # leaves the value as it is


class Sharpener:
    """Fits terms made from draws and gradients, both (chains, n, dimension), in the coordinates of the gradients.

    choice: "auto" tries all candidates and takes the best; the name of one takes that, better or not, wherever there
    are draws enough to fit it.
    """

    def __init__(self, x: Array, g: Array, choice: str = "auto") -> None:
        self.chains, self.n, self.dimension = x.shape
        self.forced = choice != "auto"
        self.candidates = (choice,) if self.forced else CANDIDATES
        self._x, self._g = x.reshape(-1, self.dimension), g.reshape(-1, self.dimension)
        self.folds = _folds(self.chains, self.n)

    @cached_property
    def frame(self) -> Frame:
        with np.errstate(all="ignore"):
            return Frame(self._x, self._g, mix=self.dimension <= ALL_PAIRS)

    @cached_property
    def _all_terms(self) -> _Design:
        frame, blocks = self.frame, [self.frame.linear()]
        if {"quadratic", "cubic"} & set(self.candidates):
            blocks.append(frame.pairs())
        if "cubic" in self.candidates and len(frame) <= ALL_TRIPLES:
            blocks.append(frame.triples())
        return _Design(blocks, self.folds)

    def _designs(self, values: Array) -> list[tuple[_Design, list[int]]]:
        """Terms with the folds that they may be applied to. Which coordinates matter is found out in other folds."""
        every = list(range(len(self.folds)))
        if len(self.frame) <= ALL_PAIRS:
            return [(self._all_terms, every)]
        made = []
        for parity in (0, 1):
            seen = [f for k, f in enumerate(self.folds) if k % 2 != parity]
            linear, paired = self._choose(values, seen)
            blocks = [self.frame.linear(linear)]
            if {"quadratic", "cubic"} & set(self.candidates):
                blocks.append(self.frame.pairs(paired))
            made.append((_Design(blocks, self.folds), every[parity::2]))
        return made

    def _choose(self, values: Array, seen: list[slice]) -> tuple[NDArray[np.int64], NDArray[np.int64]]:
        """Coordinates for linear terms and for pairs: those whose own terms explain most of the values in given folds.
        """
        frame = self.frame
        f = _standard(np.concatenate([values[:, s] for s in seen], axis=1))
        slopes = _standard(np.concatenate([frame.gy[:, s] for s in seen], axis=1))
        squares = _standard(np.concatenate([frame.y[:, s] * frame.gy[:, s] for s in seen], axis=1))
        count = f.shape[1]
        straight = (((slopes @ f.T) / count) ** 2).max(axis=1)
        curved = (((squares @ f.T) / count) ** 2).sum(axis=1)
        order = np.argsort(-straight, kind="stable")[:MOST_LINEAR]
        return np.sort(order), np.sort(np.argsort(-curved, kind="stable")[:MOST_PAIRED])

    def _tries(self, f: Array) -> Iterator[tuple[list[tuple[_Design, list[int]]], int]]:
        """Terms and candidates, the poorer first; terms with heavy tails last, and only where there are any."""
        levels = [k for k, name in enumerate(CANDIDATES) if k and name in self.candidates]
        designs = self._designs(f)
        yield from ((designs, level) for level in levels)
        if any(design.dropped for design, _ in designs):
            again = [(_Design(design.blocks, self.folds, heavy=True), serves) for design, serves in designs]
            yield from ((again, level) for level in levels)

    def sharpen(self, values: Array) -> Sharpened:
        """The means of values (q, chains, n) of the draws."""
        q = len(values)
        flat = values.reshape(q, -1)
        centre = flat[:, 0] + np.mean(flat - flat[:, :1], axis=1)
        spread = np.std(flat - centre[:, None], axis=1)
        unit = np.where(spread > 0, spread, 1.0)
        f = (flat - centre[:, None]) / unit[:, None]
        raw_error, _ = self._error(f)
        mean, error, by = np.zeros(q), raw_error.copy(), np.zeros(q, dtype=np.int64)
        taken, doubt = np.zeros_like(f), _tailed(f)
        if f.shape[1] >= FEWEST and len(self.frame) and self.candidates:
            for designs, level in self._tries(f):
                rest = self._left(f, designs, level)
                if rest is None:
                    continue
                series, fitting = rest
                left, _ = self._error(series)
                left = np.sqrt(left**2 + fitting) * _skewed(series.reshape(q, self.chains, self.n)) * doubt
                wins = ((left < WORTHWHILE * error) | (self.forced & (by == 0))) & (spread > 0)
                if designs[0][0].heavy and wins.any():
                    # One by one such terms may have no variance; what is taken off in the end must show one.
                    wins[wins] = tail_index(f[wins] - series[wins]) < HEAVY
                mean[wins], error[wins], by[wins] = series[wins].mean(axis=1), left[wins], level
                taken[wins] = f[wins] - series[wins]
        correction_error, worth = self._error(taken)
        doubtful = self._contradicts(taken, correction_error, worth)
        mean[doubtful], error[doubtful], by[doubtful] = 0.0, raw_error[doubtful], 0
        floor = np.finfo(float).eps * (np.abs(centre) + spread)
        return Sharpened(centre + unit * mean, np.maximum(unit * error, floor), by, centre, unit * raw_error,
                         unit * taken.mean(axis=1), unit * correction_error)

    def _contradicts(self, taken: Array, error: Array, worth: Array) -> NDArray[np.bool_]:
        """Where what was taken off has a mean that is not zero within its error: then the draws do not belong to these
        gradients, and a small error would only hide it. False alarms: 1% for all values together."""
        with np.errstate(all="ignore"):
            chance = 2 * special.stdtr(np.clip(worth / 4, 1, 60), -np.abs(taken.mean(axis=1)) / error)
        return chance < FALSE_ALARM / len(taken)

    def _left(self, f: Array, designs: list[tuple[_Design, list[int]]], level: int) -> tuple[Array, Array] | None:
        """What is left of the values after one candidate, and the variance that fitting adds to its mean; or None."""
        if any(level > len(design.sizes) or not self._affordable(design, level) for design, _ in designs):
            return None
        series = f.copy()
        moved = []
        for design, serves in designs:
            p = design.sizes[level - 1]
            coefficients, _ = design.fit(f, p, serves)
            average = design.sums[:, :p].sum(axis=0) / f.shape[1]
            for b, k in zip(coefficients, serves, strict=True):
                series[:, design.folds[k]] -= b.T @ design.terms[:p, design.folds[k]]
                moved.append(b.T @ average)
        # How far the mean of all draws would move with coefficients from other folds: the jackknife's variance.
        moved = np.array(moved)
        return series, (len(moved) - 1) / len(moved) * ((moved - moved.mean(axis=0)) ** 2).sum(axis=0)

    def _affordable(self, design: _Design, level: int) -> bool:
        p = design.sizes[level - 1]
        poorer = design.sizes[level - 2] if level > 1 else 0
        return p > poorer and DRAWS_PER_TERM * p <= design.counts.sum()

    def _error(self, series: Array) -> tuple[Array, Array]:
        """Monte Carlo standard errors of the means of series (q, chains * n), and their effective sizes."""
        shaped = series.reshape(len(series), self.chains, self.n)
        spread = series.std(axis=1, ddof=1)
        with np.errstate(all="ignore"):
            worth = ac.effective_size(ac.split(shaped))
        worth = np.where(np.isfinite(worth), worth, 1.0)
        return spread / np.sqrt(worth), worth


def _skewed(series: Array) -> Array:
    """By what the errors of means of series (q, chains, n) must grow for 1.96 errors to each side to cover 95%.

    What is left after a good fit is mostly flat with rare, one-sided excursions, which last for several draws: without
    them the mean is off and its error too small at once. The two-sided Edgeworth expansion of Student's statistic (Hall
    1992, The Bootstrap and Edgeworth Expansion, from memory) at z = 1.96, for the means of about BATCHES batches.
    """
    q, chains, n = series.shape
    length = max(1, chains * n // BATCHES)
    count = n // length
    means = series[:, :, n - count * length :].reshape(q, chains * count, length).mean(axis=2)
    away = means - means.mean(axis=1, keepdims=True)
    square = away * away
    variance = square.mean(axis=1)
    with np.errstate(all="ignore"):
        skewness = np.nan_to_num((square * away).mean(axis=1) / variance**1.5)
        excess = np.nan_to_num((square * square).mean(axis=1) / variance**2) - 3
    z = 1.96
    lack = (z**4 + 2 * z**2 - 3) / 18 * skewness**2 - (z**2 - 3) / 12 * excess
    return 1 + np.maximum(lack, 0) / (chains * count)


def _tailed(values: Array) -> Array:
    """By what errors of sharpened means of values (q, N) must grow where the fourth moment of the values is in doubt.

    Without that moment a variance is known badly, and the candidate whose draws happened to meet no extreme looks best.
    Nothing up to the tail index 1/4, where the moment ends; three quarters as much again from 1/2 on.
    """
    if values.shape[1] < FEWEST:
        return np.ones(len(values))
    return 1 + TAIL_GROWTH * np.clip(tail_index(values) - 0.25, 0.0, 0.25)


def _standard(rows: Array) -> Array:
    away = rows - rows.mean(axis=1, keepdims=True)
    spread = away.std(axis=1, keepdims=True)
    return away / np.where(spread > 0, spread, 1.0)


def _folds(chains: int, n: int) -> list[slice]:
    """About FOLDS blocks of successive draws in the row of all chains, none over two chains unless there are many."""
    if chains >= FOLDS:
        edges = [round(k * chains / FOLDS) * n for k in range(FOLDS + 1)]
    else:
        pieces = max(2, -(-FOLDS // chains))
        edges = sorted({c * n + round(k * n / pieces) for c in range(chains) for k in range(pieces + 1)})
    return [slice(a, b) for a, b in pairwise(edges) if b > a]

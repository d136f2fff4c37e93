"""Sharper means from gradients already paid for: terms of known mean zero are fitted and taken off.

A value f of the draws is replaced by f - b . h, where the terms h (`fellwalk.stein`) have mean zero, so the mean stays
and the variance may fall a thousandfold. The coefficients b come by ridge regression from other folds of draws than
those they are applied to, so that the series that is left has an honest error; its autocorrelation is judged by the
rules that raw draws are judged by. Of nothing, linear, quadratic and cubic the least held-out error wins. (Principle of
zero variance: Assaraf & Caffarel 1999; Mira, Solgi & Imparato 2013; with penalties South, Oates, Mira & Drovandi; all
from memory.)
"""

from __future__ import annotations

from collections.abc import Iterator
from dataclasses import dataclass
from functools import cached_property

import numpy as np
from numpy.typing import NDArray
from scipy import special

from fellwalk import autocorrelation as ac
from fellwalk import lags
from fellwalk.stein import HEAVY, Frame, tail_index
from fellwalk.terms import Layout, Terms

Array = NDArray[np.float64]

CANDIDATES = ("none", "linear", "quadratic", "cubic")

# All pairs of coordinates up to this dimension (230 terms with the linear ones), all triples up to the second (34).
ALL_PAIRS, ALL_TRIPLES = 20, 4
# Beyond, so many coordinates get linear terms and so many of these pairs: 228 terms.
MOST_LINEAR, MOST_PAIRED = 150, 12
# A candidate needs so many draws for each of its terms; with fewer the fit is noise and its cost is not worth paying.
DRAWS_PER_TERM = 8
# A richer candidate must have an error smaller than that of a poorer one by this factor: the least of several estimated
# errors is too small by chance, and an error of 400 effective draws is itself known to a few percent.
WORTHWHILE = 0.9
FEWEST = 40  # draws of all chains: with fewer nothing is fitted
FALSE_ALARM = 0.01
TAIL_GROWTH = 3.0


@dataclass(frozen=True, eq=False)
class Sharpened:
    """Means of several values of the draws, arrays (values,).

    by: number in CANDIDATES of what won, 0 where the plain mean stays. mean, error: sharpened; the error is NaN where
    the plain mean stays. raw: the plain mean. correction, correction_error: what was taken off on average, and the
    error of that; its expectation is zero if the draws come from the density.
    """

    mean: Array
    error: Array
    by: NDArray[np.int64]
    raw: Array
    correction: Array
    correction_error: Array


@dataclass(frozen=True, eq=False)
class _Try:
    """One candidate fitted to all values: its terms with the folds they serve, coefficients for each, what is left of
    the batch means (values, batches), and the variance that fitting adds to the mean."""

    level: int
    served: list[tuple[Terms, list[int], Array]]
    left: Array
    fitting: Array


class Sharpener:
    """Fits terms made from draws and gradients, both (chains, n, dimension), in the coordinates of the gradients.

    choice: "auto" tries all candidates and takes the best; the name of one takes that, better or not, wherever there
    are draws enough to fit it.
    """

    def __init__(self, x: Array, g: Array, choice: str = "auto") -> None:
        self.chains, self.n, self.dimension = x.shape
        self.forced = choice != "auto"
        self.levels = [CANDIDATES.index(choice)] if self.forced else [1, 2, 3]
        self._x, self._g = x.reshape(-1, self.dimension), g.reshape(-1, self.dimension)
        self.layout = Layout(self.chains, self.n)

    @cached_property
    def frame(self) -> Frame:
        """Draws and gradients in coordinates fit for terms."""
        with np.errstate(all="ignore"):
            return Frame(self._x, self._g, mix=self.dimension <= ALL_PAIRS)

    @cached_property
    def _all_terms(self) -> Terms:
        every = range(len(self.frame))
        degree = min(max(self.levels), 3 if len(every) <= ALL_TRIPLES else 2)
        return Terms(*self.frame.terms(degree, every, every), self.layout)

    def _terms(self, values: Array) -> list[tuple[Terms, list[int]]]:
        """Terms with the folds that they may be applied to. Which coordinates matter is found out in other folds."""
        every = list(range(len(self.layout.folds)))
        if len(self.frame) <= ALL_PAIRS:
            return [(self._all_terms, every)]
        made = []
        for parity in (0, 1):
            linear, paired = self._choose(values, every[1 - parity :: 2])
            rows, ends = self.frame.terms(min(max(self.levels), 2), linear, paired)
            made.append((Terms(rows, ends, self.layout), every[parity::2]))
        return made

    def _choose(self, values: Array, seen: list[int]) -> tuple[NDArray[np.int64], NDArray[np.int64]]:
        """Coordinates for linear terms and for pairs: those whose own terms explain most of values in some folds."""
        frame, folds = self.frame, [self.layout.folds[k] for k in seen]
        f = _standard(np.concatenate([values[:, s] for s in folds], axis=1))
        slopes = _standard(np.concatenate([frame.gy[:, s] for s in folds], axis=1))
        squares = _standard(np.concatenate([frame.y[:, s] * frame.gy[:, s] for s in folds], axis=1))
        count = f.shape[1]
        straight = (((slopes @ f.T) / count) ** 2).max(axis=1)
        curved = (((squares @ f.T) / count) ** 2).sum(axis=1)
        order = np.argsort(-straight, kind="stable")[:MOST_LINEAR]
        return np.sort(order), np.sort(np.argsort(-curved, kind="stable")[:MOST_PAIRED])

    def sharpen(self, values: Array) -> Sharpened:
        """The means of values (q, chains, n) of the draws."""
        flat = values.reshape(len(values), -1)
        centre = flat[:, 0] + np.mean(flat - flat[:, :1], axis=1)
        f = flat - centre[:, None]
        spread = np.sqrt(np.einsum("qn,qn->q", f, f) / f.shape[1])
        f /= np.where(spread > 0, spread, 1.0)[:, None]
        count = len(f)
        mean, error, by = np.zeros(count), np.full(count, np.nan), np.zeros(count, dtype=np.int64)
        taken, taken_error = np.zeros(count), np.zeros(count)
        if f.shape[1] >= FEWEST and len(self.frame) and len(self.layout.folds) > 1:
            plain, doubt = self._rate(self.layout.means(f)), _tailed(f)
            for chosen, which in self._compete(f, plain, doubt):
                parts = self._finish(f[which], chosen, which, doubt[which])
                good = (spread[which] > 0) & (self.forced | (parts[1] < WORTHWHILE * plain[which])) & ~parts[4]
                at = which[good]
                mean[at], error[at], taken[at], taken_error[at] = (part[good] for part in parts[:4])
                by[at] = chosen.level
        floor = np.finfo(float).eps * (np.abs(centre) + spread)
        return Sharpened(centre + spread * mean, np.maximum(spread * error, floor), by, centre, spread * taken,
                         spread * taken_error)

    def _compete(self, f: Array, plain: Array, doubt: Array) -> Iterator[tuple[_Try, NDArray[np.int64]]]:
        """The candidates that are best for some values, by the errors of held-out batches, with these values."""
        least, best = plain.copy(), np.full(len(f), -1)
        tries: list[_Try] = []
        for terms, level in self._candidates(f):
            tried = self._fit(f, terms, level)
            if tried is None:
                continue
            rated = np.sqrt(self._rate(tried.left) ** 2 + tried.fitting) * _skewed(tried.left) * doubt
            wins = (rated < WORTHWHILE * least) | (self.forced & (best < 0))
            if terms[0][0].heavy and wins.any():
                # One by one such terms may have no variance; what is taken off in the end must show one.
                wins[wins] = tail_index(f[wins] - self._series(f[wins], tried, np.flatnonzero(wins))) < HEAVY
            least[wins], best[wins] = rated[wins], len(tries)
            tries.append(tried)
        for k, tried in enumerate(tries):
            if (best == k).any():
                yield tried, np.flatnonzero(best == k)

    def _candidates(self, f: Array) -> Iterator[tuple[list[tuple[Terms, list[int]]], int]]:
        """Terms and degrees, the poorer first; terms with heavy tails last, and only where there are any."""
        terms = self._terms(f)
        yield from ((terms, level) for level in self.levels)
        if any(some.dropped for some, _ in terms):
            again = [(Terms(some.rows, some.ends, self.layout, heavy=True), serves) for some, serves in terms]
            yield from ((again, level) for level in self.levels)

    def _fit(self, f: Array, terms: list[tuple[Terms, list[int]]], level: int) -> _Try | None:
        """Coefficients up to a degree, or None where there are no such terms or too few draws for them."""
        if any(level > len(some.sizes) or not self._affordable(some, level) for some, _ in terms):
            return None
        batches, left = self.layout.means(f), np.empty((len(f), self.layout.count))
        served, moved = [], []
        for some, serves in terms:
            p = some.sizes[level - 1]
            coefficients = some.fit(f, level, serves)
            average = some.batches[:p].mean(axis=1)
            for b, k in zip(coefficients, serves, strict=True):
                part = self.layout.batches[k]
                left[:, part] = batches[:, part] - b.T @ some.batches[:p, part]
                moved.append(b.T @ average)
            served.append((some, serves, coefficients))
        # How far the mean of all draws would move with coefficients from other folds: the jackknife's variance.
        moves = np.array(moved)
        fitting = (len(moves) - 1) / len(moves) * ((moves - moves.mean(axis=0)) ** 2).sum(axis=0)
        return _Try(level, served, left, fitting)

    def _affordable(self, terms: Terms, level: int) -> bool:
        p = terms.sizes[level - 1]
        poorer = terms.sizes[level - 2] if level > 1 else 0
        return p > poorer and DRAWS_PER_TERM * p <= self.chains * self.n

    def _series(self, f: Array, tried: _Try, which: NDArray[np.int64]) -> Array:
        """What is left of the values f (q, N), which stand at `which` among all, draw by draw."""
        series = np.empty_like(f)
        for some, serves, coefficients in tried.served:
            for b, k in zip(coefficients, serves, strict=True):
                fold = self.layout.folds[k]
                np.subtract(f[:, fold], some.applied(b[:, which], fold), out=series[:, fold])
        return series

    def _finish(self, f: Array, tried: _Try, which: NDArray[np.int64], doubt: Array) -> tuple[Array, ...]:
        """Mean and error of what is left, mean and error of what was taken off, and if that contradicts the draws."""
        series = self._series(f, tried, which)
        mean = series.mean(axis=1)
        error = np.sqrt(self._error(series) ** 2 + tried.fitting[which]) * _skewed(tried.left[which]) * doubt
        off, off_error = -mean, self._rate(self.layout.means(f) - tried.left[which])
        # If the mean of what was taken off is not zero within its error, then the draws do not belong to these
        # gradients, and a small error would only hide it.
        with np.errstate(all="ignore"):
            chance = 2 * special.stdtr(self.layout.count / 4, -np.abs(off) / off_error)
        return mean, error, off, off_error, chance < FALSE_ALARM / max(len(tried.left), 1)

    def _rate(self, batches: Array) -> Array:
        """Errors of means by batch means (q, batches): quick, for comparisons."""
        return batches.std(axis=1, ddof=1) / np.sqrt(batches.shape[1])

    def _error(self, series: Array) -> Array:
        """Monte Carlo standard errors of the means of series (q, chains * n), as `fellwalk.judge` has them."""
        with np.errstate(all="ignore"):
            worth = lags.effective_size(ac.split(series.reshape(len(series), self.chains, self.n)))
        return series.std(axis=1, ddof=1) / np.sqrt(np.where(np.isfinite(worth), worth, 1.0))


def _skewed(batches: Array) -> Array:
    """By what errors of means of series must grow for 1.96 errors to each side to cover 95%, from batch means (q, m).

    What is left after a good fit is mostly flat with rare, one-sided excursions, which last for several draws: without
    them the mean is off and its error too small at once. The two-sided Edgeworth expansion of Student's statistic (Hall
    1992, The Bootstrap and Edgeworth Expansion, from memory) at z = 1.96.
    """
    away = batches - batches.mean(axis=1, keepdims=True)
    square = away * away
    variance = square.mean(axis=1)
    with np.errstate(all="ignore"):
        skewness = np.nan_to_num((square * away).mean(axis=1) / variance**1.5)
        excess = np.nan_to_num((square * square).mean(axis=1) / variance**2) - 3
    z = 1.96
    lack = (z**4 + 2 * z**2 - 3) / 18 * skewness**2 - (z**2 - 3) / 12 * excess
    return 1 + np.maximum(lack, 0) / batches.shape[1]


def _tailed(values: Array) -> Array:
    """By what errors of sharpened means of values (q, N) must grow where the fourth moment of the values is in doubt.

    Without that moment a variance is known badly, and the candidate whose draws happened to meet no extreme looks best.
    Nothing up to the tail index 1/4, where the moment ends; three quarters as much again from 1/2 on.
    """
    return 1 + TAIL_GROWTH * np.clip(tail_index(values) - 0.25, 0.0, 0.25)


def _standard(rows: Array) -> Array:
    away = rows - rows.mean(axis=1, keepdims=True)
    spread = away.std(axis=1, keepdims=True)
    return away / np.where(spread > 0, spread, 1.0)

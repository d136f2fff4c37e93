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
from fellwalk.stein import Frame
from fellwalk.tails import HEAVY, excess, tail_index, widening
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
# No error is said to be smaller, as a share of the spread: what is left of an exact estimate is rounding, and differs
# with the place of arrays in memory.
EXACT = 1e-12
MUCH_LEFT, TAILED = 0.5, -0.15  # of the plain error; tail index less what is in doubt
FALSE_ALARM = 0.01


@dataclass(frozen=True, eq=False)
class Sharpened:
    """Means of several values of the draws, arrays (values,).

    by: number in CANDIDATES of what won, 0 where the plain mean stays. mean, error: sharpened; the error is NaN where
    the plain mean stays. raw, raw_error: the plain mean, its error by batch means.
    """

    mean: Array
    error: Array
    by: NDArray[np.int64]
    raw: Array
    raw_error: Array


@dataclass(frozen=True, eq=False)
class _Served:
    """Terms, the folds that they may be applied to, and their products with the values."""

    terms: Terms
    serves: list[int]
    products: tuple[Array, Array]


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
    are draws enough to fit it. frame: that of these draws and gradients, where it is at hand; it is changed.
    """

    def __init__(self, x: Array, g: Array, choice: str = "auto", frame: Frame | None = None) -> None:
        self.chains, self.n, self.dimension = x.shape
        self.forced = choice != "auto"
        self.levels = [CANDIDATES.index(choice)] if self.forced else [1, 2, 3]
        self.layout = Layout(self.chains, self.n)
        with np.errstate(all="ignore"):
            frame = frame or Frame(x.reshape(-1, self.dimension), g.reshape(-1, self.dimension))
            if self.dimension <= ALL_PAIRS:
                frame.unmix()
        self.coordinates = len(frame)
        self._y, self._gy = self.layout.columns(frame.y), self.layout.columns(frame.gy)

    @cached_property
    def _all_terms(self) -> Terms:
        every = range(self.coordinates)
        degree = min(max(self.levels), 3 if len(every) <= ALL_TRIPLES else 2)
        return Terms(self._y, self._gy, degree, every, every, self.layout)

    def _terms(self, values: Array) -> list[tuple[Terms, list[int]]]:
        """Terms with the folds that they may be applied to. Which coordinates matter is found out in other folds."""
        every = list(range(len(self.layout.folds)))
        if self.coordinates <= ALL_PAIRS:
            return [(self._all_terms, every)]
        made = []
        for parity in (0, 1):
            linear, paired = self._choose(values, every[1 - parity :: 2])
            terms = Terms(self._y, self._gy, min(max(self.levels), 2), linear, paired, self.layout)
            made.append((terms, every[parity::2]))
        return made

    @cached_property
    def _own(self) -> tuple[tuple[Array, Array, Array], ...]:
        """Each coordinate's terms of degree 1 and 2 at one draw of each block (coordinates, blocks), with sums and sums
        of squares over each fold (folds, coordinates)."""
        folds = self.layout.folds
        terms = self._gy[:, 0], self._y[:, 0] * self._gy[:, 0]
        return tuple((h, np.array([h[:, f].sum(axis=1) for f in folds]),
                      np.array([np.einsum("in,in->i", h[:, f], h[:, f]) for f in folds])) for h in terms)

    def _choose(self, values: Array, seen: list[int]) -> tuple[NDArray[np.int64], NDArray[np.int64]]:
        """Coordinates for linear terms and for pairs: those whose own terms explain most of values (q, blocks) in some
        folds, by one draw of each block."""
        folds = [self.layout.folds[k] for k in seen]
        count = sum(f.stop - f.start for f in folds)
        f = [values[:, fold] for fold in folds]
        mean = np.sum([part.sum(axis=1) for part in f], axis=0) / count
        f = [part - mean[:, None] for part in f]
        square = np.sum([np.einsum("qn,qn->q", part, part) for part in f], axis=0)
        explained = []
        for h, total, squares in self._own:
            spread = np.maximum(squares[seen].sum(axis=0) - total[seen].sum(axis=0) ** 2 / count, 0)
            product = np.sum([h[:, fold] @ part.T for fold, part in zip(folds, f, strict=True)], axis=0)
            scale = np.outer(spread, square)
            explained.append(product**2 / np.where(scale > 0, scale, np.inf))
        straight, curved = explained[0].max(axis=1), explained[1].sum(axis=1)
        order = np.argsort(-straight, kind="stable")[:MOST_LINEAR]
        return np.sort(order), np.sort(np.argsort(-curved, kind="stable")[:MOST_PAIRED])

    def sharpen(self, values: Array, above: Array | None = None) -> Sharpened:
        """The means of values (q, chains, n) of the draws; above: by how much their tail indices are above doubt, where
        this is at hand (`fellwalk.tails.excess`)."""
        flat = values.reshape(len(values), -1)
        above = excess(flat)[0] if above is None else above
        centre, f = flat.mean(axis=1), self.layout.blocks(flat)
        f -= centre[:, None]
        spread = np.sqrt(np.einsum("qn,qn->q", f, f) / f.shape[1])
        spread[spread < 1e-13 * np.abs(centre)] = 0
        f /= np.where(spread > 0, spread, 1.0)[:, None]
        count = len(f)
        mean, error, by = np.zeros(count), np.full(count, np.nan), np.zeros(count, dtype=np.int64)
        doubt = widening(above)
        plain = self._rate(self.layout.means(f)) * doubt
        if flat.shape[1] >= FEWEST and self.coordinates and len(self.layout.folds) > 1:
            for chosen, which in self._compete(f, plain, doubt, (flat, centre, spread)):
                parts = self._finish(f[which], chosen, which, plain[which], above[which])
                good = (spread[which] > 0) & (self.forced | (parts[1] < WORTHWHILE * plain[which])) & ~parts[2]
                at = which[good]
                mean[at], error[at] = parts[0][good], parts[1][good]
                by[at] = chosen.level
        floor = np.finfo(float).eps * np.abs(centre) + EXACT * spread
        return Sharpened(centre + spread * mean, np.maximum(spread * error, floor), by, centre, spread * plain)

    def _compete(
        self, f: Array, plain: Array, doubt: Array, draws: tuple[Array, Array, Array]
    ) -> Iterator[tuple[_Try, NDArray[np.int64]]]:
        """The candidates that are best for some values, by the errors of held-out batches, with these values."""
        least, best = plain.copy(), np.full(len(f), -1)
        tries: list[_Try] = []
        batches = self.layout.means(f)
        for terms, level, heavy in self._candidates(f):
            tried = self._fit(batches, terms, level, heavy)
            if tried is None:
                continue
            rated = np.sqrt(self._rate(tried.left) ** 2 + tried.fitting) * _skewed(tried.left) * doubt
            wins = (rated < WORTHWHILE * least) | (self.forced & (best < 0))
            if heavy and wins.any():
                # One by one such terms may have no variance; what is taken off in the end must show one.
                which = np.flatnonzero(wins)
                wins[wins] = tail_index(self._left_at_draws(tried, which, *draws)) < HEAVY
            least[wins], best[wins] = rated[wins], len(tries)
            tries.append(tried)
        for k, tried in enumerate(tries):
            if (best == k).any():
                yield tried, np.flatnonzero(best == k)

    def _candidates(self, f: Array) -> Iterator[tuple[list[_Served], int, bool]]:
        """Terms and degrees, the poorer first; terms with heavy tails last, and only where there are any."""
        terms = [_Served(some, serves, some.products(f)) for some, serves in self._terms(f)]
        for heavy in (False, True) if any(some.terms.dropped for some in terms) else (False,):
            yield from ((terms, level, heavy) for level in self.levels)

    def _fit(self, batches: Array, terms: list[_Served], level: int, heavy: bool) -> _Try | None:
        """Coefficients up to a degree, or None where there are no such terms or too few draws for them."""
        if any(level > len(some.terms.sizes) or not self._affordable(some.terms, level, heavy) for some in terms):
            return None
        left = np.empty_like(batches)
        served, moved = [], []
        for some in terms:
            coefficients = some.terms.fit(some.products, some.terms.chosen(level, heavy), some.serves)
            mine = some.terms.batches[: coefficients.shape[1]]
            average = mine.mean(axis=1)
            for b, k in zip(coefficients, some.serves, strict=True):
                part = self.layout.batches[k]
                left[:, part] = batches[:, part] - b.T @ mine[:, part]
                moved.append(b.T @ average)
            served.append((some.terms, some.serves, coefficients))
        # How far the mean of all draws would move with coefficients from other folds: the jackknife's variance.
        moves = np.array(moved)
        fitting = (len(moves) - 1) / len(moves) * ((moves - moves.mean(axis=0)) ** 2).sum(axis=0)
        return _Try(level, served, left, fitting)

    def _affordable(self, terms: Terms, level: int, heavy: bool) -> bool:
        p = len(terms.chosen(level, heavy))
        poorer = len(terms.chosen(level - 1, heavy)) if level > 1 else 0
        if heavy and p == len(terms.chosen(level, False)):
            return False
        return p > poorer and DRAWS_PER_TERM * p <= self.layout.count

    def _series(self, f: Array, tried: _Try, which: NDArray[np.int64]) -> Array:
        """What is left of the values f (q, blocks), which stand at `which` among all, block by block."""
        series = np.empty_like(f)
        for some, serves, coefficients in tried.served:
            for b, k in zip(coefficients, serves, strict=True):
                fold = self.layout.folds[k]
                series[:, fold] = f[:, fold] - b[:, which].T @ some.blocks[: len(b), fold]
        return series

    def _left_at_draws(
        self, tried: _Try, which: NDArray[np.int64], flat: Array, centre: Array, spread: Array
    ) -> Array:
        """What is left of some values at the first draw of each block; flat, centre, spread: of all values."""
        f = self.layout.first(flat, which) - centre[which, None]
        f /= np.where(spread > 0, spread, 1.0)[which, None]
        for some, serves, coefficients in tried.served:
            for b, k in zip(coefficients, serves, strict=True):
                fold, top = self.layout.folds[k], len(b)
                f[:, fold] -= (b[:, which] * some.scale[:top, None]).T @ some.sample[:top, fold]
        return f

    def _finish(
        self, f: Array, tried: _Try, which: NDArray[np.int64], plain: Array, above: Array
    ) -> tuple[Array, ...]:
        """Mean and error of what is left, and whether what was taken off contradicts the draws."""
        series = self._series(f, tried, which)
        mean = series.mean(axis=1)
        error = np.sqrt(self._error(series) ** 2 + tried.fitting[which]) * _skewed(tried.left[which])
        # Where little is taken off values with tails, what is left has these too, and may show them more clearly.
        much = (error > MUCH_LEFT * plain) & (above > TAILED)
        error *= widening(np.where(much, np.maximum(above, excess(series)[0]), above))
        taken = self.layout.means(f) - tried.left[which]
        off, off_error = f.mean(axis=1) - mean, self._rate(taken)
        # If the mean of what was taken off is not zero within its error, then the draws do not belong to these
        # gradients, and a small error would only hide it.
        with np.errstate(all="ignore"):
            chance = 2 * special.stdtr(taken.shape[1] / 4, -np.abs(off) / off_error)
        return mean, error, chance < FALSE_ALARM / max(len(tried.left), 1)

    def _rate(self, batches: Array) -> Array:
        """Errors of means by batch means (q, batches): quick, for comparisons."""
        return batches.std(axis=1, ddof=1) / np.sqrt(batches.shape[1])

    def _error(self, series: Array) -> Array:
        """Monte Carlo standard errors of the means of series (q, blocks), as `fellwalk.judge` has them."""
        with np.errstate(all="ignore"):
            worth = lags.effective_size(ac.split(series.reshape(len(series), self.chains, -1)))
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
        peaked = np.nan_to_num((square * square).mean(axis=1) / variance**2) - 3
    z = 1.96
    lack = (z**4 + 2 * z**2 - 3) / 18 * skewness**2 - (z**2 - 3) / 12 * peaked
    return 1 + np.maximum(lack, 0) / batches.shape[1]

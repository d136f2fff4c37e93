"""Statistical comparisons for the tests, written apart from the package's own judge so that they can check it.

Every ``compare_*`` returns a :class:`Comparison`; collect those of one test and hand them to :func:`assert_all` with
the rate at which the whole family may raise a false alarm (Bonferroni). Seeds are fixed, so a passing test keeps
passing; the rate says how surprising a failure is, and how often a new seed would fail for nothing.

Errors of dependent draws are the larger of Geyer's (1992) initial monotone sequence estimate and batch means, and z is
taken from Student's t with the degrees of freedom of the batches. Both need chains much longer than their
autocorrelation time (say 50 times); shorter chains make the stated rates wrong.
"""

from collections.abc import Callable, Iterable
from typing import Any, NamedTuple

import numpy as np
from scipy import stats

Array = np.ndarray


class Comparison(NamedTuple):
    """One number against what it should be; `z` is the difference in errors, on the normal scale."""

    what: str
    observed: float
    expected: float
    error: float
    z: float

    def __str__(self) -> str:
        return (
            f"{self.what}: {self.observed:.8g}, expected {self.expected:.8g}, error {self.error:.2g}, z {self.z:+.2f}"
        )


def z_limit(comparisons: int, false_alarm: float) -> float:
    """The two-sided normal limit which `comparisons` comparisons together pass by chance with rate <= false_alarm."""
    return float(stats.norm.isf(0.5 * false_alarm / comparisons))


def assert_all(comparisons: Iterable[Comparison], false_alarm: float) -> None:
    """AssertionError naming the comparisons beyond the limit for the family; `false_alarm` is the family's rate."""
    family = list(comparisons)
    assert family, "There is nothing to compare."
    limit = z_limit(len(family), false_alarm)
    # Written so that a NaN fails.
    bad = [c for c in family if not abs(c.z) <= limit]
    if bad:
        head = f"{len(bad)} of {len(family)} comparisons are beyond {limit:.2f} errors (false alarms {false_alarm:g}):"
        raise AssertionError("\n  ".join([head, *map(str, bad)]))


def _chains(draws: Array) -> Array:
    draws = np.atleast_2d(np.asarray(draws, dtype=float))
    if draws.ndim != 2:
        raise ValueError(f"Draws of one quantity have the shape (chains, draws), not {draws.shape}.")
    return draws


def autocovariance(draws: Array) -> Array:
    """Biased autocovariances (divisor = draws) about the mean of all chains, averaged over chains, shape (draws,)."""
    draws = _chains(draws)
    n = draws.shape[1]
    spectrum = np.fft.rfft(draws - draws.mean(), 2 * n, axis=1)
    return np.fft.irfft((np.abs(spectrum) ** 2).mean(axis=0))[:n] / n


def geyer_error(draws: Array) -> float:
    """Standard error of the mean of draws (chains, n) by the initial monotone sequence (Geyer 1992, Stat. Sci. 7).

    Covariances are taken about the common mean, so chains that disagree raise the error.
    """
    draws = _chains(draws)
    gamma = autocovariance(draws)
    even = gamma.size - gamma.size % 2
    pairs = gamma[0:even:2] + gamma[1:even:2]
    negative = np.flatnonzero(pairs <= 0.0)
    pairs = np.minimum.accumulate(pairs[: negative[0]] if negative.size else pairs)
    variance = max(2.0 * pairs.sum() - gamma[0], 0.0)
    return float(np.sqrt(variance / draws.size))


def batch_means_error(draws: Array, batch: int | None = None) -> tuple[float, int]:
    """(standard error of the mean of draws (chains, n), degrees of freedom) by batch means.

    Batches of length `batch` (default: the root of n, rounded down), not overlapping, about the common mean; an
    incomplete batch at the start of each chain is left out of the error.
    """
    draws = _chains(draws)
    n = draws.shape[1]
    batch = batch or max(1, int(np.sqrt(n)))
    count = n // batch
    means = draws[:, n - count * batch :].reshape(len(draws) * count, batch).mean(axis=1)
    if means.size < 2:
        raise ValueError(f"Chains of {n} draws give only {means.size} batch of {batch}.")
    return float(np.sqrt(means.var(ddof=1) * batch / draws.size)), means.size - 1


def effective_draws(draws: Array) -> float:
    """Variance of draws (chains, n) over the square of their :func:`geyer_error`."""
    draws = _chains(draws)
    return float(draws.var() / geyer_error(draws) ** 2)


def compare_mean(
    draws: Array, expected: float, error: float | None = None, what: str = "mean", expected_error: float = 0.0
) -> Comparison:
    """The mean of draws (chains, n) against `expected`, which itself may have a standard error.

    `error` is the known standard error of the mean; None estimates it as the module says.
    """
    draws = _chains(draws)
    freedom = np.inf
    if error is None:
        batched, freedom = batch_means_error(draws)
        error = max(batched, geyer_error(draws))
    error = float(np.hypot(error, expected_error))
    observed = float(draws.mean())
    if error == 0.0:
        return Comparison(what, observed, expected, 0.0, 0.0 if observed == expected else np.inf)
    t = (observed - expected) / error
    z = t if np.isinf(freedom) else float(np.sign(t) * stats.norm.isf(stats.t.sf(abs(t), freedom)))
    return Comparison(what, observed, expected, error, z)


def compare_independent_mean(values: Array, expected: float, what: str = "mean") -> Comparison:
    """The mean of independent values (n,) against `expected`, with the plain standard error."""
    values = np.asarray(values, dtype=float).ravel()
    return compare_mean(values, expected, float(values.std(ddof=1) / np.sqrt(values.size)), what)


def compare_sd(draws: Array, mean: float, sd: float, what: str = "sd", sd_error: float = 0.0) -> Comparison:
    """The spread of draws (chains, n) about a known mean against a known sd, in units of the sd.

    Compares the mean of ((x - mean)^2 / sd^2 - 1) / 2 with 0, so it needs finite fourth moments.
    """
    linear = 0.5 * (((_chains(draws) - mean) / sd) ** 2 - 1.0)
    return compare_mean(linear, 0.0, what=what, expected_error=sd_error / sd)


def compare_quantile(
    draws: Array, quantile: float, probability: float, what: str = "quantile", probability_error: float = 0.0
) -> Comparison:
    """The share of draws (chains, n) at or below a known quantile against its probability."""
    below = (_chains(draws) <= quantile).astype(float)
    return compare_mean(below, probability, what=what, expected_error=probability_error)


def compare_marginal(draws: Array, marginal: Any, name: str, sd: bool = True) -> list[Comparison]:
    """Mean, sd (unless `sd` is False) and quantiles of draws (chains, n, dimension) against a known marginal.

    `marginal` has `values`, `mean`, `sd`, `quantiles` and `*_error`, like those of the test targets. The error of a
    known quantile becomes one of its probability through the normal density of the same sd.
    """
    x = marginal.values(draws)
    found = []
    if marginal.mean is not None:
        found.append(compare_mean(x, marginal.mean, what=f"{name} mean", expected_error=marginal.mean_error))
        if sd and marginal.sd is not None:
            found.append(compare_sd(x, marginal.mean, marginal.sd, f"{name} sd", marginal.sd_error))
    for probability, quantile in marginal.quantiles.items():
        slack = 0.0
        if marginal.quantile_error:
            slack = marginal.quantile_error / marginal.sd * float(stats.norm.pdf(stats.norm.ppf(probability)))
        found.append(compare_quantile(x, quantile, probability, f"{name} quantile {probability:g}", slack))
    return found


def kolmogorov_p(values: Array, cdf: Callable[[Array], Array]) -> float:
    """p value of the Kolmogorov-Smirnov test of INDEPENDENT values against a continuous cdf (exact for small n)."""
    return float(stats.kstest(np.asarray(values, dtype=float).ravel(), cdf).pvalue)


def assert_laws(values: dict[str, tuple[Array, Callable[[Array], Array]]], false_alarm: float) -> None:
    """AssertionError naming the sets of independent values whose Kolmogorov-Smirnov p is below false_alarm / sets."""
    assert values, "There is nothing to compare."
    found = {name: kolmogorov_p(x, cdf) for name, (x, cdf) in values.items()}
    limit = false_alarm / len(found)
    bad = [f"{name}: p = {p:.2g}" for name, p in found.items() if not p >= limit]
    assert not bad, f"Kolmogorov-Smirnov, limit {limit:.2g} for each of {len(found)}: " + "; ".join(bad)


def uniform_rank_p(ranks: Array, levels: int, bins: int) -> float:
    """Chi-square p value that independent ranks 0..levels-1 are uniform (simulation-based calibration).

    `bins` must divide `levels`; Talts, Betancourt, Simpson, Vehtari & Gelman (2018), arXiv 1804.06788.
    """
    if levels % bins:
        raise ValueError(f"{bins} bins do not divide {levels} levels.")
    ranks = np.asarray(ranks)
    if ranks.min() < 0 or ranks.max() >= levels:
        raise ValueError(f"Ranks run from 0 to {levels - 1}; these reach {ranks.min()} and {ranks.max()}.")
    return float(stats.chisquare(np.bincount(ranks // (levels // bins), minlength=bins)).pvalue)


def wasserstein(values: Array, ppf: Callable[[Array], Array], points: int = 4096) -> float:
    """Wasserstein-1 distance of the values' empirical law to the law with quantile function `ppf`.

    The integral of |empirical quantile - quantile| over (0, 1) by the midpoint rule; what lies beyond the outermost
    midpoints, 1/(2 points) on each side, is left to them.
    """
    u = (np.arange(points) + 0.5) / points
    ordered = np.sort(np.asarray(values, dtype=float).ravel())
    return float(np.abs(ordered[(u * ordered.size).astype(int)] - ppf(u)).mean())

"""Normal targets: independent, dense, equicorrelated, with spikes, and one that fails on request."""

import numpy as np
from scipy import stats

from .target import Array, Marginal, Target, constructor, context_of, some_coordinates

LOG_TWO_PI = float(np.log(2.0 * np.pi))


def _normal(of, mean: float, sd: float, source: str = "textbook") -> Marginal:
    law = stats.norm(mean, sd)
    quantiles = {p: float(law.ppf(p)) for p in (0.05, 0.25, 0.5, 0.75, 0.95)}
    return Marginal(of, law, float(mean), float(sd), quantiles, source)


def normal_marginals(means: Array, sds: Array) -> dict[str, Marginal]:
    """Marginals "x1", "x2", ... of a normal with these means and sds, for some coordinates."""
    return {f"x{i + 1}": _normal(i, means[i], sds[i]) for i in some_coordinates(len(means))}


@constructor
def standard_normal(d: int) -> Target:
    """N(0, I) in d dimensions, normalised; its callback ignores the context."""
    return Target(
        f"standard normal, d = {d}",
        d,
        "standard_normal",
        None,
        lambda n, rng: rng.standard_normal((n, d)),
        normal_marginals(np.zeros(d), np.ones(d)),
    )


@constructor
def independent_normal(means: Array, sds: Array) -> Target:
    """Independent normals, means and sds of shape (d,), normalised. Context: log constant, means, 1 / sd^2."""
    means, sds = np.array(means, dtype=float), np.array(sds, dtype=float)
    constant = -0.5 * len(sds) * LOG_TWO_PI - np.log(sds).sum()
    return Target(
        f"independent normal, d = {len(sds)}",
        len(sds),
        "independent_normal",
        context_of(constant, means, sds**-2.0),
        lambda n, rng: means + sds * rng.standard_normal((n, len(sds))),
        normal_marginals(means, sds),
    )


def log_spaced_normal(d: int, smallest: float = 1.0, largest: float = 1e6) -> Target:
    """Independent normals with mean 0 and variances spaced evenly in the logarithm from `smallest` to `largest`.

    The defaults with d = 2 and 100 are the two normals of Sohl-Dickstein, Mudigonda & DeWeese (2014), Table 1.
    """
    return independent_normal(np.zeros(d), np.sqrt(np.geomspace(smallest, largest, d)))


@constructor
def dense_normal(precision: Array, mean: Array | None = None) -> Target:
    """A normal with the given symmetric positive definite precision matrix (d, d), normalised.

    Context: log constant, mean, precision row by row. O(d^2) a call.
    """
    precision = np.array(precision, dtype=float)
    d = len(precision)
    if not np.array_equal(precision, precision.T):
        raise ValueError("The precision matrix must be symmetric, bit for bit.")
    centre = np.zeros(d) if mean is None else np.array(mean, dtype=float)
    factor = np.linalg.cholesky(precision)
    constant = -0.5 * d * LOG_TWO_PI + np.log(np.diag(factor)).sum()
    root = np.linalg.inv(factor)  # covariance = root^T root
    return Target(
        f"dense normal, d = {d}",
        d,
        "dense_normal",
        context_of(constant, centre, precision),
        lambda n, rng: centre + rng.standard_normal((n, d)) @ root,
        normal_marginals(centre, np.sqrt((root**2).sum(axis=0))),
    )


@constructor
def equicorrelated_normal(d: int, rho: float, sd: float = 1.0) -> Target:
    """N(0, sd^2 ((1 - rho) I + rho 1 1^T)), normalised, O(d) a call. Context: log constant, w, c of the inverse."""
    w, c = equicorrelated_inverse(d, rho, sd)
    constant = -0.5 * (d * LOG_TWO_PI + equicorrelated_log_determinant(d, rho, sd))
    marginals = normal_marginals(np.zeros(d), np.full(d, sd))
    marginals["mean"] = _normal(lambda draws: draws.mean(axis=-1), 0.0, sd * np.sqrt((1.0 + (d - 1) * rho) / d))
    return Target(
        f"equicorrelated normal, d = {d}, rho = {rho:g}",
        d,
        "equicorrelated_normal",
        context_of(constant, w, c),
        lambda n, rng: equicorrelated_draws(n, d, rho, sd, rng),
        marginals,
    )


def equicorrelated_inverse(d: int, rho: float, sd: float) -> tuple[float, float]:
    """(w, c) with inverse w (I - c 1 1^T) (Sherman & Morrison 1950)."""
    if not -1.0 / max(d - 1, 1) < rho < 1.0:
        raise ValueError(f"rho = {rho} gives no positive definite matrix in {d} dimensions.")
    return 1.0 / (sd**2 * (1.0 - rho)), rho / (1.0 + (d - 1) * rho)


def equicorrelated_log_determinant(d: int, rho: float, sd: float) -> float:
    return float(2.0 * d * np.log(sd) + (d - 1) * np.log1p(-rho) + np.log1p((d - 1) * rho))


def equicorrelated_draws(n: int, d: int, rho: float, sd: float, rng: np.random.Generator) -> Array:
    z = rng.standard_normal((n, d))
    centre = z.mean(axis=1, keepdims=True)
    return sd * (np.sqrt(1.0 - rho) * (z - centre) + np.sqrt(1.0 + (d - 1) * rho) * centre)


@constructor
def spiked_normal(variances: Array, directions: Array, scales: Array) -> Target:
    """x = scales * y, y ~ N(0, I + sum_i (variances_i - 1) e_i e_i^T), normalised, O(d k) a call.

    `directions` (k, d) has orthonormal rows e_i, `variances` (k,), `scales` (d,). Context: log constant, k,
    1 / variance - 1, 1 / scale, directions.
    """
    variances, directions, scales = (np.array(a, dtype=float) for a in (variances, directions, scales))
    k, d = directions.shape
    if k > 64:
        raise ValueError(f"At most 64 spikes, not {k}.")
    if not np.allclose(directions @ directions.T, np.eye(k), rtol=0.0, atol=1e-12):
        raise ValueError("The rows of `directions` must be orthonormal.")
    constant = -0.5 * (d * LOG_TWO_PI + np.log(variances).sum()) - np.log(scales).sum()
    stretch = np.sqrt(variances) - 1.0

    def draws(n: int, rng: np.random.Generator) -> Array:
        z = rng.standard_normal((n, d))
        return scales * (z + ((z @ directions.T) * stretch) @ directions)

    sds = scales * np.sqrt(1.0 + (variances - 1.0) @ directions**2)
    marginals = normal_marginals(np.zeros(d), sds)
    for i in range(k):
        along = directions[i] / scales
        marginals[f"spike{i + 1}"] = _normal(lambda draws, along=along: draws @ along, 0.0, np.sqrt(variances[i]))
    return Target(
        f"normal with {k} spikes, d = {d}",
        d,
        "spiked_normal",
        context_of(constant, k, 1.0 / variances - 1.0, 1.0 / scales, directions),
        draws,
        marginals,
    )


@constructor
def random_spikes(
    d: int = 500,
    variances: tuple[float, ...] = (1e4, 3e3, 1e3, 1e-3, 3e-4, 1e-4),
    decades: float = 6.0,
    seed: int = 20250,
) -> Target:
    """A spiked normal with random directions and random scales, log-uniform over the given number of decades."""
    rng = np.random.default_rng(seed)
    directions = np.linalg.qr(rng.standard_normal((d, len(variances))))[0].T
    scales = 10.0 ** rng.permutation(np.linspace(-0.5 * decades, 0.5 * decades, d))
    return spiked_normal(variances, directions, scales)


@constructor
def failing_normal(d: int, at: int, code: int = 0, value: float = float("nan")) -> Target:
    """A standard normal whose call number `at` (from 1; density and product count together) misbehaves.

    That call returns `code` when it is not 0, else it writes `value` as the log density or as the first entry of the
    product. `context[0]` holds the number of calls so far and may be set back to 0. One chain at a time.
    """
    return Target(f"normal failing at call {at}", d, "failing_normal", context_of(0.0, at, code, value))

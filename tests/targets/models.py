"""Targets that are posteriors of models with data: normal sample, linear and logistic regression, eight schools.

The reference numbers and data live in tests/checks, with their sources.
"""

from collections.abc import Callable
from decimal import Decimal

import numpy as np
from scipy import stats

from . import laws
from .target import Array, Marginal, Target, constructor, context_of

try:  # tests/ itself on the path, or its parent
    import checks
except ModuleNotFoundError:
    from .. import checks

PROBABILITIES = np.array([0.025, 0.05, 0.25, 0.5, 0.75, 0.95, 0.975])


def _known(of, law, mean: float, sd: float, source: str) -> Marginal:
    quantiles = {float(p): float(q) for p, q in zip(PROBABILITIES, law.ppf(PROBABILITIES), strict=True)}
    return Marginal(of, law, float(mean), float(sd), quantiles, source)


def _deviation_marginals(at: int, s: float, nu: float, source: str) -> dict[str, Marginal]:
    log_law, law = laws.Deviation(s, nu, logarithm=True), laws.Deviation(s, nu)
    return {
        "log sigma": _known(at, log_law, log_law.mean, log_law.sd, source),
        "sigma": _known(lambda x: np.exp(x[..., at]), law, law.mean, law.sd, source),
    }


@constructor
def normal_sample(name: str) -> Target:
    """NIST StRD "mcmc01" (offset 1e8) or "mcmc06" (offset 1e13): x = (delta, log sigma) with mu = offset + delta.

    Prior p(mu, sigma) ~ 1 / sigma; the log density is -n log sigma - (n (delta - centre)^2 + (n - 1) s^2) / (2
    sigma^2), unnormalised, the Jacobian of the logarithm included. Marginal "mu" is delta: add the offset to compare
    with the certified values. Context: n, centre, (n - 1) s^2.
    """
    offset = {"mcmc01": 10**8, "mcmc06": 10**13}[name]
    source = checks.source(f"nist_{name}")
    # In double precision the data themselves would have lost their last digits (a spacing of 0.002 at 1e13).
    data = np.array([float(Decimal(text) - offset) for text in checks.values(f"nist_{name}")["data"]])
    n = len(data)
    centre = float(data.mean())
    squares = float(((data - centre) ** 2).sum())
    nu = n - 1
    s = np.sqrt(squares / nu)
    error = s / np.sqrt(n)

    def draws(count: int, rng: np.random.Generator) -> Array:
        sigma = np.sqrt(squares / rng.chisquare(nu, count))
        return np.column_stack([centre + sigma / np.sqrt(n) * rng.standard_normal(count), np.log(sigma)])

    marginals = {"mu": _known(0, stats.t(nu, centre, error), centre, error * np.sqrt(nu / (nu - 2.0)), source)}
    marginals |= _deviation_marginals(1, s, nu, source)
    return Target(f"NIST {name}", 2, "normal_sample", context_of(n, centre, squares), draws, marginals, source)


def regression_data(name: str) -> tuple[Array, Array]:
    """(response (n,), predictors (n, columns)) of the NIST sets "Norris", "Pontius" (x and x^2) and "Longley"."""
    table = checks.nist_data(name)
    if name == "Pontius":
        return table[:, 0], np.column_stack([table[:, 1], table[:, 1] ** 2])
    return table[:, 0], table[:, 1:]


@constructor
def regression(name: str, centred: bool) -> Target:
    """Linear regression of a NIST set with an intercept; x = (b0, b1, ..., log sigma), prior p(b, sigma) ~ 1 / sigma.

    `centred` takes the means off the predictors: b1, b2, ... keep their meaning, b0 becomes the response at the mean
    predictors, and the marginal "B0" is the certified intercept as a function of x. Log density unnormalised: -n log
    sigma - |y - X b|^2 / (2 sigma^2). Context: n, response, columns of X.
    """
    response, predictors = regression_data(name)
    n, source = len(response), checks.source("nist_lls")
    means = predictors.mean(axis=0)
    away = predictors - means
    lengths = np.sqrt((away**2).sum(axis=0))
    # Orthogonal steps on centred, scaled columns: the raw matrix of Longley has a condition number of 5e9.
    q, r = np.linalg.qr(away / lengths)
    middle = response.mean()
    slopes = np.linalg.solve(r, q.T @ (response - middle)) / lengths
    residual = response - middle - away @ slopes
    nu = n - 1 - len(slopes)
    squares = float(residual @ residual)
    s = np.sqrt(squares / nu)
    spread = np.linalg.inv(r) / lengths[:, None]  # slopes have covariance sigma^2 spread spread^T

    def draws(count: int, rng: np.random.Generator) -> Array:
        sigma = np.sqrt(squares / rng.chisquare(nu, count))[:, None]
        b = slopes + sigma * rng.standard_normal((count, len(slopes))) @ spread.T
        b0 = middle + sigma * rng.standard_normal((count, 1)) / np.sqrt(n)
        return np.hstack([b0 if centred else b0 - (b @ means)[:, None], b, np.log(sigma)])

    def intercept(x: Array) -> Array:
        return x[..., 0] - x[..., 1:-1] @ means

    error0 = s * np.sqrt(1.0 / n + ((means @ spread) ** 2).sum())
    estimates = [middle - slopes @ means, *slopes]
    errors = [error0, *(s * np.sqrt((spread**2).sum(axis=1)))]
    marginals = {}
    for i, (estimate, error) in enumerate(zip(estimates, errors, strict=True)):
        of: int | Callable[[Array], Array] = intercept if centred and i == 0 else i
        law = stats.t(nu, estimate, error)
        marginals[f"B{i}"] = _known(of, law, estimate, error * np.sqrt(nu / (nu - 2.0)), source)
    marginals |= _deviation_marginals(len(slopes) + 1, s, nu, source)
    design = np.vstack([np.ones(n), (away if centred else predictors).T])
    label = f"{name} regression, {'centred' if centred else 'raw'} predictors"
    context = context_of(n, response, design)
    return Target(label, len(slopes) + 2, "regression", context, draws, marginals, source)


def logistic_data(name: str) -> tuple[Array, Array, str]:
    """(design (n, d) with the intercept first and columns standardised with ddof = 1, response (n,), entry id)."""
    if name == "pima":
        features, response = checks.pima()
        key = "logit_pima_532x7"
    elif name == "australian":
        features, response = checks.australian()
        key = "logit_australian_690x14"
    elif name in ("ripley", "ripley_linear"):
        plane, response = checks.ripley()
        features = plane if name == "ripley_linear" else np.hstack([plane, plane**2, plane**3])
        key = "logit_ripley_synth" if name == "ripley_linear" else "logit_ripley_250_poly3"
    else:
        raise ValueError(f"There is no logistic target {name!r}: pima, australian, ripley or ripley_linear.")
    features = (features - features.mean(axis=0)) / features.std(axis=0, ddof=1)
    return np.column_stack([np.ones(len(response)), features]), response, key


@constructor
def logistic(name: str) -> Target:
    """Logistic regression with the prior N(0, 100 I).

    Names and dimensions: "pima" 8, "australian" 15, "ripley" (cubic features) 7, "ripley_linear" 3. Log density
    unnormalised: sum [y eta - log(1 + exp(eta))] - |b|^2 / 200. Marginals "b0", "b1", ... carry means, sds
    and quantiles without a law; all but those of "ripley_linear" (quadrature) are Monte Carlo results, whose errors
    stand in `mean_error` and its companions. Context: n, prior precision, response, columns of the design.
    """
    design, response, key = logistic_data(name)
    numbers = checks.values(key)
    numbers = numbers.get("result", numbers)
    marginals = {}
    for i in range(design.shape[1]):
        known = numbers[f"b{i}"]
        quantiles = {float(k[1:]): float(v) for k, v in known.items() if k.startswith("q0.")}
        # A replicate's scatter alone, or what the same code missed by where it could be checked, whichever is larger.
        errors = [0.0, 0.0, 0.0]
        if name != "ripley_linear":
            bounds = (("mean_se", 2e-5), ("sd_se", 2e-5), ("q_se_max", 2.5e-4))
            errors = [max(float(known[which]), least) for which, least in bounds]
        marginals[f"b{i}"] = Marginal(
            i, None, float(known["mean"]), float(known["sd"]), quantiles, checks.source(key), *errors
        )
    context = context_of(len(response), 0.01, response, design.T)
    return Target(f"logistic {name}", design.shape[1], "logistic", context, None, marginals, checks.source(key))


SCHOOLS = np.array([28.0, 8.0, -3.0, 7.0, -1.0, 1.0, 18.0, 12.0])
SCHOOL_ERRORS = np.array([15.0, 10.0, 16.0, 11.0, 9.0, 11.0, 10.0, 18.0])


def _school_parts(log_tau: Array) -> tuple[Array, Array, Array]:
    """(log posterior of log tau, mean and variance of mu given tau), each of the shape of log_tau."""
    tau2 = np.exp(2.0 * log_tau)
    total = SCHOOL_ERRORS**2 + tau2[..., None]
    weight = (1.0 / total).sum(axis=-1)
    mean = (SCHOOLS / total).sum(axis=-1) / weight
    fit = ((SCHOOLS - mean[..., None]) ** 2 / total).sum(axis=-1)
    return log_tau - 0.5 * (np.log(total).sum(axis=-1) + np.log(weight) + fit), mean, 1.0 / weight


def _school_given(log_tau: Array, mu: Array, mu_variance: Array) -> tuple[Array, Array]:
    """(means, sds) of theta given tau, and mu known up to mu_variance; shapes (..., 8)."""
    share = SCHOOL_ERRORS**2 / (SCHOOL_ERRORS**2 + np.exp(2.0 * log_tau)[..., None])
    means = (1.0 - share) * SCHOOLS + share * mu[..., None]
    return means, np.sqrt((1.0 - share) * SCHOOL_ERRORS**2 + share**2 * mu_variance[..., None])


@constructor
def eight_schools(centred: bool = True) -> Target:
    """Rubin's eight schools, flat prior on (mu, tau): x = (mu, log tau, theta_1..8), or z_1..8 with theta = mu + tau z.

    Log density unnormalised, the Jacobian of the logarithm (and of z) included. Marginals "mu", "log tau", "tau",
    "theta1".."theta8" for both forms. Exact draws: log tau by inversion of its tabulated posterior, then normals.
    Context: 8, effects, 1 / error^2.
    """
    key = "eight_schools_A"
    numbers, source = checks.values(key), checks.source(key)
    log_tau_law = laws.TabulatedLaw(lambda x: _school_parts(x)[0], -36.0, 14.0, panels=50)

    def draws(n: int, rng: np.random.Generator) -> Array:
        log_tau = log_tau_law.ppf(rng.random(n))
        _, mean, variance = _school_parts(log_tau)
        mu = mean + np.sqrt(variance) * rng.standard_normal(n)
        means, sds = _school_given(log_tau, mu, np.zeros(n))
        theta = means + sds * rng.standard_normal((n, 8))
        tail = theta if centred else (theta - mu[:, None]) / np.exp(log_tau)[:, None]
        return np.column_stack([mu, log_tau, tail])

    points, weights = log_tau_law.pieces()
    _, mean, variance = _school_parts(points)
    means, sds = _school_given(points, mean, variance)

    def theta(j: int) -> int | Callable[[Array], Array]:
        return 2 + j if centred else lambda x: x[..., 0] + np.exp(x[..., 1]) * x[..., 2 + j]

    def published(name: str, of, law) -> Marginal:
        quantiles = {float(p): float(numbers[f"{name}_q{p:g}"]) for p in PROBABILITIES}
        return Marginal(of, law, float(numbers[f"{name}_mean"]), float(numbers[f"{name}_sd"]), quantiles, source)

    marginals = {
        "mu": published("mu", 0, laws.NormalMixture(weights, mean, np.sqrt(variance))),
        "log tau": _known(1, log_tau_law, float(numbers["logtau_mean"]), float(numbers["logtau_sd"]), source),
        "tau": published("tau", lambda x: np.exp(x[..., 1]), laws.ExponentialOf(log_tau_law)),
    }
    for j in range(8):
        law = laws.NormalMixture(weights, means[:, j], sds[:, j])
        marginals[f"theta{j + 1}"] = published(f"theta{j + 1}", theta(j), law)
    context = context_of(8, SCHOOLS, SCHOOL_ERRORS**-2.0)
    c_name = "schools_centred" if centred else "schools_noncentred"
    return Target(f"eight schools, {'' if centred else 'non-'}centred", 10, c_name, context, draws, marginals, source)
